"""Stories that only note what a route asks of them, apart from the tests of the routes."""

from __future__ import annotations

from contextlib import AbstractContextManager, nullcontext
from dataclasses import dataclass, field
from typing import Any

from service.api.forms.configs import read_new
from service.bidding import Answer
from service.decision.opportunity import Opportunity
from service.errors import NotFound, Refusal, Stale, StoreAway, no_such_line_item
from service.feedback import Receipt, Report
from service.operating import Key, View

FORM = {
    "id": "a",
    "name": "A",
    "currency": "EUR",
    "budget": "5.00",
    "bid_cap_cpm": 8,
    "value": {"ceiling": "1.00"},
}
ORDER = {"reason": "A test."}


@dataclass
class Bids:
    """A bidder that knows the line item `a` and bids one CPM."""

    asked: list[Opportunity] = field(default_factory=list)

    async def bid(self, opportunity: Opportunity, arrived: float) -> Answer:
        """One CPM for `a`."""
        self.asked.append(opportunity)
        if opportunity.line_item != "a":
            raise no_such_line_item()
        return Answer(opportunity.request_id, "a", 1_000_000, None, "t", "r", "flat", "value", 1)

    async def bid_batch(
        self, rows: list[Opportunity | Refusal], arrived: float
    ) -> list[Answer | Refusal]:
        """A refusal in the place of what is unknown, or was refused before."""
        answers: list[Answer | Refusal] = []
        for row in rows:
            try:
                answers.append(row if isinstance(row, Refusal) else await self.bid(row, arrived))
            except Refusal as refusal:
                answers.append(refusal)
        return answers


@dataclass
class Outcomes:
    """A feedback story that records everything, unless its database is away."""

    away: bool = False

    def admitted(self) -> AbstractContextManager[None]:
        """There is always room."""
        return nullcontext()

    async def report(
        self, reports: list[Report], only: frozenset[str] | None = None
    ) -> list[Receipt]:
        """One receipt each."""
        if self.away:
            raise StoreAway("away")
        return [Receipt(report.ticket, "recorded") for report in reports]


@dataclass
class Refused:
    """Who was not let in, as routes tell it."""

    told: list[tuple[str, str, str]] = field(default_factory=list)

    def refused(self, key_id: str, route: str, code: str) -> None:
        """Write it down."""
        self.told.append((key_id, route, code))


@dataclass
class Orders:
    """An operator with one line item, at version 3, that writes down what it is told."""

    calls: list[tuple[Any, ...]] = field(default_factory=list)
    away: bool = False
    admitting: Refused = field(default_factory=Refused)

    async def key_for(self, bearer: str) -> Key | None:
        """A key whose only scope is its own text; the key `nothing` is unknown."""
        return None if bearer == "nothing" else Key("k1", "Ann Example", frozenset({bearer}))

    async def create(
        self,
        config: dict[str, Any],
        confirm: str | None,
        actor: str,
        idempotency: str | None = None,
        reason: str | None = None,
    ) -> View:
        """The view of what was asked for."""
        self.calls.append(("create", config["id"], confirm, actor, idempotency))
        return self._view(1)

    async def get(self, line_item: str) -> View:
        """The one line item."""
        if line_item != "a":
            raise no_such_line_item()
        return self._view(3)

    async def list(
        self, after: str | None, limit: int, only: frozenset[str] | None = None
    ) -> list[View]:
        """The one line item, as often as the page is long."""
        self.calls.append(("list", after, limit))
        return [self._view(3)] if after is None else []

    async def patch(self, *told: object) -> View:
        """Only version 3 may be changed."""
        self.calls.append(("patch", *told))
        if told[2] != 3:
            raise Stale("stale", "Somebody else changed it.")
        return self._view(4)

    async def state(self, line_item: str) -> dict[str, Any]:
        """A little state."""
        return {"line_item": line_item, "spent_nanos": 10**9}

    async def curve(self, line_item: str) -> dict[str, Any]:
        """A curve of no source."""
        return {"line_item": line_item, "sources": []}

    async def freeze(self, *told: object, idempotency: str | None = None) -> dict[str, Any]:
        """Frozen by a moment."""
        self.calls.append(("freeze", *told, idempotency))
        return {"in_force": False, "by_ms": 0}

    async def thaw(self, *told: object, idempotency: str | None = None) -> dict[str, Any]:
        """Thawed."""
        self.calls.append(("thaw", *told, idempotency))
        return {"in_force": True, "by": None}

    async def reset(self, *told: object, preview: bool = False) -> dict[str, Any]:
        """Reset."""
        self.calls.append(("reset", *told))
        return {"line_item": told[0]}

    async def health(self) -> dict[str, Any]:
        """Fine, unless the database is away."""
        if self.away:
            raise StoreAway("away")
        return {"status": "ok"}

    def _view(self, version: int) -> View:
        config, _ = read_new(FORM, 0)
        return View("a", version, config, 0, 0, [], "words", ["value.typical"])


@dataclass
class Plays:
    """Rehearsals of which there is the one of number 7, playing."""

    calls: list[tuple[Any, ...]] = field(default_factory=list)

    async def ask(
        self, wish: dict[str, Any], actor: str, idempotency: str | None = None
    ) -> dict[str, Any]:
        """The rehearsal, queued."""
        self.calls.append(("ask", wish["name"], len(wish["policies"]), actor, idempotency))
        return {"id": "7", "state": "queued", "created_ms": 0}

    async def one(self, number: int) -> dict[str, Any]:
        """The rehearsal, half played."""
        if number != 7:
            raise NotFound("no_such_rehearsal", "There is no rehearsal with this id.")
        spend = {"mean_nanos": 10**9, "error_nanos": None}
        result = {"policies": [{"spend": spend}]}
        return {
            **{"id": "7", "line_item": "garden", "state": "done", "progress": 0.5},
            "result": result,
        }

    async def page(
        self, before: int | None, limit: int, only: frozenset[str] | None = None
    ) -> list[dict[str, Any]]:
        """As many as asked for, all of them the same."""
        self.calls.append(("page", before, limit, only))
        return [{"id": "7"}] * limit if before is None else []

    async def cancel(self, number: int, reason: str, actor: str) -> dict[str, Any]:
        """Cancelled."""
        self.calls.append(("cancel", number, reason, actor))
        return {"id": str(number), "state": "cancelled"}


@dataclass
class Stories:
    """The small stories."""

    bidder: Bids = field(default_factory=Bids)
    feedback: Outcomes = field(default_factory=Outcomes)
    operator: Orders = field(default_factory=Orders)
    rehearsals: Plays = field(default_factory=Plays)
