"""The routes by which machines see whether the service lives and whether prices can leave."""

from __future__ import annotations

from starlette.requests import Request
from starlette.responses import Response

from service.api import answers
from service.api.access import require_health_key
from service.api.direct import direct_router
from service.api.documentation import described
from service.api.stories import started, stories
from service.errors import StoreAway

router = direct_router()


@router.get("/health/live", **described("Is the process alive?"))
async def get_live(request: Request) -> Response:
    """The process answers."""
    require_health_key(request)
    return answers.json_answer({"status": "live"})


@router.get("/health/ready", **described("Can prices leave?"))
async def get_ready(request: Request) -> Response:
    """200 with ok or degraded once prices can leave, 503 while starting."""
    require_health_key(request)
    if not started(request):
        return answers.json_answer({"status": "starting"}, 503, {"Retry-After": "1"})
    try:
        health = await stories(request).operator.health()
    # Prices still leave from what is in hand, so no balancer should take this worker out.
    except StoreAway:
        health = {"status": "degraded"}
    return answers.json_answer(answers.plain(health))
