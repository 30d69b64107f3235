"""The route that a machine reads the metrics from."""

from __future__ import annotations

from starlette.requests import Request
from starlette.responses import Response

from service.api.access import require_health_key
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.edge import edge
from service.api.stories import metrics
from service.errors import NotFound

router = direct_router()


@router.get("/metrics", **described("Metrics in the text form of Prometheus."))
async def get_metrics(request: Request) -> Response:
    """The numbers of every process of this host's crew, added up."""
    require_health_key(request)
    port = edge(request).metrics_port
    # With a listener of its own it is not there for whoever reaches the other one.
    if port and request.scope["server"][1] != port:
        raise NotFound("not_found", "Not Found.")
    text, media_type = metrics(request)
    return Response(text, media_type=media_type)
