"""The first story: an opportunity comes in, a price or a pass with its reason goes out.

Before the price a request may wait for an unknown line item or a missing slice; after
that there is no await and no database between the snapshot and the answer.
"""

from __future__ import annotations

import asyncio
import secrets
import time
from collections.abc import Iterable
from typing import NamedTuple

import numpy

from service import spans
from service.answer import Answer, Clocks, decision
from service.backlog import Backlog
from service.catalog import Catalog, Item
from service.choosing import Draw, drawn, odds_below, odds_of
from service.currencies import inside
from service.decision.methods import METHODS
from service.decision.opportunity import Opportunity
from service.decision.rule import FIXED, SECOND, Sale, sale_of
from service.errors import Malformed, Refusal, StoreAway
from service.guard.control import CONTROL, MAIN
from service.guard.gate import shut
from service.guard.hand import SliceInHand
from service.guard.scale import Scale
from service.guard.ticket import Ticket, TicketKeys
from service.learner import hashing
from service.learner.hashing import Hashed
from service.leasing import Leasing
from service.metrics.tally import Tally
from service.pricing import Priced, Put, gross, priced

__all__ = ["Answer", "Bidder", "Clocks"]


class _Offer(NamedTuple):
    """
    A bid that may leave.

    Args:
        priced: Its price, what set it and what the impression is worth.
        scale: By which its price became one in another currency.
    """

    item: Item
    priced: Priced
    held: SliceInHand | None
    hashed: Hashed
    draw: Draw
    scale: Scale


class Bidder:
    """Answers opportunities for one worker."""

    def __init__(
        self,
        catalog: Catalog,
        leasing: Leasing,
        keys: TicketKeys,
        incarnation: bytes,
        clocks: Clocks,
        backlog: Backlog,
        feature_key: bytes,
        tally: Tally | None = None,
    ) -> None:
        self._tally = tally or Tally()
        self._catalog, self._leasing = catalog, leasing
        self._keys, self._incarnation = keys, incarnation
        self._clocks, self._waiting = clocks, 0
        self._generator = numpy.random.default_rng()
        self._backlog = backlog
        self._feature_key = feature_key

    def waiting(self) -> int:
        """Bids that wait for a slice or a first look at a line item."""
        return self._waiting

    async def bid(self, opportunity: Opportunity, arrived: float) -> Answer:
        """
        Answer one opportunity.

        Args:
            arrived: time.monotonic() when the request came in.

        Raises:
            NotFound: No such line item.
            Malformed: A fixed-price sale without its price, or one the method cannot bid in.
            StoreAway: An unknown line item could not be looked up.
        """
        until = arrived + self._allowed_s(opportunity)
        late = self._clocks.lag_s() > until - arrived
        with spans.span("bid") as span:
            answer = self._at_once(opportunity, until, late=late)
            if answer is None:
                answer = await self._in_time(opportunity, until, late=late)
            if span is not None:
                spans.note(span, method=answer.method, set_by=answer.set_by, reason=answer.reason)
        self._tally.took(time.monotonic() - arrived)
        return answer

    async def _in_time(self, opportunity: Opportunity, until: float, *, late: bool) -> Answer:
        """The answer to one that may have to wait."""
        if opportunity.line_items:
            return await self._bid_best(opportunity, until, late=late)
        found = await self._prepared(opportunity, until, late=late)
        if isinstance(found, Item):
            found = self._answered(self._weighed(found, opportunity, until, late=late), opportunity)
        return self._logged(found, opportunity)

    async def _bid_best(self, opportunity: Opportunity, until: float, *, late: bool) -> Answer:
        """
        Let line items compete for one opportunity: one of them bids and has a hold, or none does.

        Against the same rivals the one that values it most has most to gain, whatever they bid
        and whatever the auction; so nothing of what is known of rivals needs comparing.
        """
        asked = [opportunity._replace(line_item=name) for name in opportunity.line_items]
        found = [await self._prepared(one, until, late=late) for one in asked]
        currencies = {item.terms.currency for item in found if isinstance(item, Item)}
        if len(currencies) > 1:
            raise Malformed("bad_field", "They must have one currency.", {"field": "line_items"})
        # From here there is no await: what is weighed is still so when the best one commits.
        weighed = [
            self._weighed(self._catalog.get(item.id) or item, one, until, late=late)
            if isinstance(item, Item)
            else item
            for item, one in zip(found, asked, strict=True)
        ]
        offers = [offer for offer in weighed if isinstance(offer, _Offer)]
        best = max(offers, key=lambda offer: offer.priced.worth, default=None)
        answers = [
            _pass(one, "outbid_inside")
            if isinstance(offer, _Offer) and offer is not best
            else self._answered(offer, one)
            for offer, one in zip(weighed, asked, strict=True)
        ]
        for answer, one in zip(answers, asked, strict=True):
            self._logged(answer, one)
        return next((answer for answer in answers if answer.bid is not None), answers[0])

    def _at_once(self, opportunity: Opportunity, until: float, *, late: bool) -> Answer | None:
        """The answer where nothing needs waiting for: most bids find money for any price."""
        item = self._catalog.get(opportunity.line_item)
        if item is None or opportunity.test or opportunity.line_items or late:
            return None
        if time.monotonic() > until:
            return None
        held, wall_ms = self._leasing.hand.usable(item.id, self._leasing.clock()), _wall_ms()
        if held is None or held.free < item.limits.cap or shut(item.limits, wall_ms) is not None:
            return None
        _check_sale(item, opportunity)
        self._leasing.refresh(held)
        offer = self._offered(item, opportunity, held, wall_ms)
        return self._logged(self._answered(offer, opportunity), opportunity)

    async def _prepared(
        self, opportunity: Opportunity, until: float, *, late: bool
    ) -> Item | Answer:
        """The line item with money in hand for it, as far as time allows; else why not."""
        item = self._catalog.get(opportunity.line_item)
        if item is None:
            item = await self._look_up(opportunity.line_item, until)
        if item is None:
            reason = "overloaded" if time.monotonic() < until else "past_deadline"
            return _pass(opportunity, reason)
        _check_sale(item, opportunity)
        if not opportunity.test and not late and shut(item.limits, _wall_ms()) is None:
            await self._have_money(item, until)
        # A freeze may have come while we waited.
        return self._catalog.get(item.id) or item

    def _answered(self, weighed: _Offer | Answer, opportunity: Opportunity) -> Answer:
        return self._commit(weighed, opportunity) if isinstance(weighed, _Offer) else weighed

    async def bid_batch(
        self, rows: Iterable[Opportunity | Refusal], arrived: float
    ) -> list[Answer | Refusal]:
        """
        Answer many opportunities in order; an unknown line item spoils only its own row.

        Args:
            rows: What was refused before stays in its place.
        """
        answers: list[Answer | Refusal] = []
        for row in rows:
            try:
                answers.append(row if isinstance(row, Refusal) else await self.bid(row, arrived))
            except Refusal as refusal:
                answers.append(refusal)
            except StoreAway:
                answers.append(Refusal("store_away", "The line item could not be looked up."))
        return answers

    async def _look_up(self, line_item: str, until: float) -> Item | None:
        """The line item, or None when too many wait already or it takes too long."""
        if self._waiting >= self._clocks.waiting_max:
            return None
        self._waiting += 1
        try:
            async with asyncio.timeout(until - time.monotonic()):
                return await self._catalog.look_up(line_item)
        except TimeoutError:
            return None
        finally:
            self._waiting -= 1

    async def _have_money(self, item: Item, until: float) -> None:
        held = self._leasing.hand.usable(item.id, self._leasing.clock())
        # Enough for any price this line item may name: nobody waits, the refill comes behind.
        if held is not None and held.free >= item.limits.cap:
            self._leasing.refresh(held)
        elif self._leasing.denied(item.id) is not None:
            return
        elif self._waiting >= self._clocks.waiting_max:
            self._leasing.wish(item.id)
        else:
            self._waiting += 1
            try:
                await self._leasing.obtain(item.id, until - time.monotonic())
            finally:
                self._waiting -= 1

    def _weighed(
        self, item: Item, opportunity: Opportunity, until: float, *, late: bool
    ) -> _Offer | Answer:
        """What this line item would bid, or the pass that it answers."""
        wall_ms = _wall_ms()
        held = self._leasing.hand.usable(item.id, self._leasing.clock())
        reason = shut(item.limits, wall_ms) or self._out_of_money(item, held)
        if reason is None and time.monotonic() > until:
            reason = "past_deadline"
        if reason is None and (late or self._crowded_out(opportunity, held)):
            reason = "overloaded"
        if reason is not None:
            return _pass(opportunity, reason)
        return self._offered(item, opportunity, held, wall_ms)

    def _offered(
        self, item: Item, opportunity: Opportunity, held: SliceInHand | None, wall_ms: int
    ) -> _Offer | Answer:
        """What a line item that may bid names, or the pass that it answers."""
        if item.ready is None:
            return _pass(opportunity, "learner_halted")
        put = inside(opportunity, item.terms.currency, self._catalog.rates, wall_ms)
        if put is None:
            return _pass(opportunity, "no_rate")
        own, scale = put
        seen = self._seen(item, own)
        plain, draw = drawn(item, seen, self._leasing.hand, self._feature_key)
        rule, set_by = (item.ready, None) if plain is None else (plain.ready, CONTROL)
        free = item.limits.cap if opportunity.test else held.free if held else 0
        sold = Put(seen, opportunity, scale)
        found = priced(rule, item.limits, sold, free, self._generator, set_by)
        if not isinstance(found, Priced):
            if found.cut:
                draw = draw._replace(odds=odds_below(rule, found.sale.floor))
            return self._refused(item, opportunity, found.reason)._replace(draw=draw)
        # Of a price that the money cut nobody knows which one was drawn.
        if rule.law is not None and found.cleared.price == found.proposed:
            draw = draw._replace(odds=odds_of(rule, found.cleared.price))
        return _Offer(item, found, held, seen.hashed, draw, scale)

    def _refused(self, item: Item, opportunity: Opportunity, reason: str) -> Answer:
        if reason == "under_floor" and not opportunity.test:
            passes = self._leasing.hand.under_floor
            passes[item.id] = passes.get(item.id, 0) + 1
        return _pass(opportunity, reason)

    def _crowded_out(self, opportunity: Opportunity, held: SliceInHand | None) -> bool:
        """Whether this one needs a slice and too many wait for theirs already."""
        needs = not opportunity.test and (held is None or held.free == 0)
        return needs and self._waiting >= self._clocks.waiting_max

    def _out_of_money(self, item: Item, held: SliceInHand | None) -> str | None:
        """Spent money is named before anything about the price; held money is named last."""
        # What is left in the hand may still be spent, whatever the budget says.
        reason = self._leasing.denied(item.id)
        if held is not None and held.free > 0:
            return None
        return reason if reason in ("frozen", "budget_spent", "day_spent") else None

    def _commit(self, offer: _Offer, opportunity: Opportunity) -> Answer:
        """From here the price leaves: it is taken out of the slice, signed and answered."""
        item, (sale, cleared, _, _, sent), held, hashed, draw, scale = offer
        # A test ticket must look like any other, but no slice and no money stand behind it.
        if held is None or opportunity.test:
            slice_id, counter, day = secrets.token_bytes(16), 0, 1
        else:
            slice_id, counter, day = held.id, held.take(cleared.price), held.day
            if draw.arm == CONTROL:
                self._leasing.hand.by_control(item.id, cleared.price)
        ticket = Ticket(
            item.id,
            opportunity.source,
            slice_id,
            counter,
            cleared.price,
            item.snapshot,
            day,
            self._incarnation,
            opportunity.test,
            sale.floor,
            sale.auction,
            item.limits.fees,
            hashing.to_bytes(hashed) if hashed else b"",
            opportunity.value_hint,
            draw.arm,
            scale,
        )
        return Answer(
            opportunity.request_id,
            item.id,
            sent,
            None,
            self._keys.sign(ticket),
            ticket.ref,
            item.terms.method if draw.arm == MAIN else "flat",
            cleared.set_by,
            item.snapshot,
            cleared.price,
            draw,
            scale.currency,
            sale,
        )

    def _seen(self, item: Item, opportunity: Opportunity) -> Opportunity:
        """With hashed features, where the line item learns of them; else none are kept."""
        if not METHODS[item.terms.method].by_features:
            return opportunity
        return opportunity.seen_as(hashing.hashed(opportunity.features, self._feature_key))

    def _allowed_s(self, opportunity: Opportunity) -> float:
        asked = opportunity.deadline_ms
        allowed = self._clocks.deadline_ms if asked is None else asked
        return min(allowed, self._clocks.deadline_ms_max) / 1000

    def _sale(self, line_item: str, opportunity: Opportunity) -> Sale | None:
        """What was for sale, with its fees, for an answer that does not say."""
        item = self._catalog.get(line_item)
        if item is None:
            return None
        return sale_of(gross(opportunity, item.limits.fees), item.terms.auction)

    def _logged(self, answer: Answer, opportunity: Opportunity) -> Answer:
        if opportunity.test:
            self._tally.add("test_answers")
        elif answer.reason is not None:
            self._tally.add("passes", answer.reason)
        else:
            self._tally.add("bids")
        # Hindsight reads what was for sale when the fees may have changed.
        sale = answer.sale or self._sale(answer.line_item, opportunity)
        self._backlog.add(decision(answer, opportunity, sale, _wall_ms()))
        return answer


def _check_sale(item: Item, opportunity: Opportunity) -> None:
    """Only with the line item at hand is it known which auction one that names none stands for."""
    auction = opportunity.auction or item.terms.auction
    if auction == FIXED and opportunity.price is None:
        raise Malformed("bad_field", "A fixed-price sale needs its price.", {"field": "price_cpm"})
    if auction != SECOND and METHODS[item.terms.method].by_law:
        raise Malformed(
            "auction_not_for_method",
            "The line item's method draws its bids for a second price; it bids in no other.",
            {"field": "auction"},
        )


def _pass(opportunity: Opportunity, reason: str) -> Answer:
    return Answer(opportunity.request_id, opportunity.line_item, None, reason)


def _wall_ms() -> int:
    return time.time_ns() // 1_000_000
