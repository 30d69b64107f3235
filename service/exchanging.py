"""Exchanges that speak the open standard: their requests to the bidder, their notices to feedback.

Apart from both stories, which know nothing of imps, deals and macros.
"""

from __future__ import annotations

import logging
import secrets
import time
from collections.abc import Mapping
from typing import Any

from service.bidding import Answer, Bidder
from service.decision.opportunity import Opportunity
from service.errors import Refusal, StoreAway
from service.feedback import Feedback, Receipt, Report
from service.openrtb import codes, macros
from service.openrtb.mapping import Source
from service.openrtb.offers import lots
from service.openrtb.opportunities import features_of, opportunity
from service.openrtb.requests import Asked, NoBid, read
from service.openrtb.responses import Made, response

logger = logging.getLogger(__name__)

LOTS_MAX = 8  # Of one imp: each may wait for the hand, and all share the one deadline.
TOLD_MAX = 1000


class Exchanging:
    """Speaks with exchanges, for one worker."""

    def __init__(self, bidder: Bidder, feedback: Feedback) -> None:
        self._bidder, self._feedback = bidder, feedback
        self._told = set[tuple[str, str]]()

    async def answer(
        self, name: str, source: Source, body: object, arrived: float
    ) -> tuple[Asked, str, list[Made]] | NoBid:
        """
        The bids of a request and our name for them, or why there are none.

        Args:
            name: Of the source.
            arrived: time.monotonic() when the request came in.

        Raises:
            BadRequest: It is none.
        """
        asked = read(body, source)
        if isinstance(asked, NoBid):
            return asked
        made: list[Made] = []
        for imp in asked.imps:
            # Late bids are worth nothing, and to judge the rest would hold up other requests.
            if asked.deadline_ms is not None and _gone_ms(arrived) > asked.deadline_ms:
                break
            # A response has one currency, so the first bid decides for all that follow.
            currencies = (made[0].currency,) if made else asked.currencies
            try:
                bid = await self._bid((name, source), asked, imp, currencies, arrived)
            except StoreAway:
                # What was priced before may still leave; its money is in hand.
                break
            if bid is not None:
                made.append(bid)
        if not made:
            return NoBid(asked.id, "no_bid")
        return asked, secrets.token_hex(8), made

    async def hear(self, kind: str, ticket: str, parameters: Mapping[str, str]) -> Receipt | None:
        """
        Book a notice; None where it is a rendering for audit, which tells nothing.

        Raises:
            StoreAway: Perhaps recorded; the repeat answers `duplicate`.
            Overloaded: Not recorded.
        """
        notice = macros.hear(kind, parameters)
        if isinstance(notice, macros.Unheard):
            if notice.reason == macros.AUDIT:
                return None
            logger.info("a %s notice was not booked: %s", kind, notice.reason)
            return Receipt(None, "refused", notice.reason)
        report = Report(
            notice.kind,
            ticket,
            clearing=notice.clearing,
            to_win=notice.to_win,
            why=notice.why,
            currency=notice.currency,
            delivered=notice.delivered,
            at_the_bid=notice.at_the_bid,
        )
        with self._feedback.admitted():
            (receipt,) = await self._feedback.report([report])
        return receipt

    async def _bid(
        self,
        named: tuple[str, Source],
        asked: Asked,
        imp: dict[str, Any],
        currencies: tuple[str, ...],
        arrived: float,
    ) -> Made | None:
        """The first bid for an imp, deals before the open auction."""
        name, source = named
        ways = lots(imp, asked, source)[:LOTS_MAX]
        features = features_of(source, asked, imp) if ways else {}
        for terms, lines in ways:
            wish = opportunity(name, asked, terms, lines, features, currencies)
            answer = await self._asked(wish, arrived)
            if answer is not None and answer.bid is not None and answer.ticket and answer.ref:
                price = (answer.bid, answer.currency)
                return Made(imp, terms, lines[answer.line_item], *price, answer.ticket, answer.ref)
        return None

    async def _asked(self, wish: Opportunity, arrived: float) -> Answer | None:
        try:
            return await self._bidder.bid(wish, arrived)
        except Refusal as refusal:
            # The mapping names what the service does not have, or what cannot bid here; said
            # once, since the next request will say the same.
            fault = (wish.source, refusal.code)
            if fault not in self._told and len(self._told) < TOLD_MAX:
                self._told.add(fault)
                logger.warning("the mapping of %s cannot be kept to: %s", *fault)
            return None


def _gone_ms(arrived: float) -> float:
    return (time.monotonic() - arrived) * 1000


def written(
    source: Source, found: tuple[Asked, str, list[Made]] | NoBid, version: str
) -> dict[str, Any] | None:
    """The answer as the standard writes it; None for no content."""
    if not isinstance(found, NoBid):
        return response(source, *found)
    code = found.code
    if code is None and source.other_reason is not None:
        code = source.other_reason
    newer = version.startswith("2.5") and codes.NO_BID_MAX_25 < (code or 0) < codes.PRIVATE
    if source.no_bid == "empty" or code is None or newer:
        return None
    return {"id": found.id, "seatbid": [], "nbr": code}
