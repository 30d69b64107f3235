"""What the routes need of the running service, apart so that api never imports the app."""

from __future__ import annotations

from typing import Protocol, cast

from starlette.requests import Request

from service.bidding import Bidder
from service.errors import StoreAway
from service.exchanging import Exchanging
from service.feedback import Feedback
from service.operating import Operator
from service.rehearsing import Rehearsals


class Caller(Protocol):
    """Whoever holds the key that a request came with."""

    @property
    def id(self) -> str: ...

    @property
    def name(self) -> str: ...

    @property
    def line_items(self) -> frozenset[str] | None: ...

    def allows(self, scope: str) -> bool: ...


class Stories(Protocol):
    """The stories of one running service, as app.py hangs them on `app.state.stories`."""

    @property
    def bidder(self) -> Bidder: ...

    @property
    def feedback(self) -> Feedback: ...

    @property
    def operator(self) -> Operator: ...

    @property
    def exchange(self) -> Exchanging: ...

    @property
    def rehearsals(self) -> Rehearsals: ...


def started(request: Request) -> bool:
    """Whether the service has its stories yet."""
    return getattr(request.app.state, "stories", None) is not None


def metrics(request: Request) -> tuple[bytes, str]:
    """The metrics as text, and their media type, of the app that this request came to."""
    told: tuple[bytes, str] = request.app.state.metrics()
    return told


def stories(request: Request) -> Stories:
    """
    The stories of the app that this request came to.

    Raises:
        StoreAway: The service is still starting.
    """
    # The socket may listen before the database has answered; asking again will then help.
    found = getattr(request.app.state, "stories", None)
    if found is None:
        raise StoreAway("the service is still starting")
    return cast(Stories, found)
