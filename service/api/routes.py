"""Everything that HTTP can reach, hung on the app in one place."""

from __future__ import annotations

from collections.abc import Callable

from service.api import (
    bids,
    corrections,
    documentation,
    health,
    hindsights,
    keys,
    line_items,
    metrics,
    openrtb,
    orders,
    outcomes,
    rates,
    records,
    rehearsals,
    tripwires,
    winding,
)
from service.api.envelope import Envelope
from service.api.express import Service, hang
from service.api.problems import install_handlers

ROUTERS = (
    bids.router,
    outcomes.router,
    line_items.router,
    orders.router,
    winding.router,
    corrections.router,
    keys.router,
    records.router,
    tripwires.router,
    hindsights.router,
    rates.router,
    openrtb.router,
    rehearsals.router,
    health.router,
    metrics.router,
    documentation.router,
)


def install(app: Service, answered: Callable[[int], None] = lambda _status: None) -> None:
    """Add every route and every error handler; a path with a slash too many is not found."""
    # A redirect would drop the body of a POST at many a client, and lose an outcome with it.
    app.router.redirect_slashes = False
    for router in ROUTERS:
        # Hung on the app itself: an included router is searched twice for every request.
        app.router.routes.extend(router.routes)
    install_handlers(app)
    app.add_middleware(Envelope, answered=answered)
    hang(app, answered)
