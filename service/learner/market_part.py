"""The part of a memory that reads outcomes as news of competing bids, apart from its bytes.

In a second-price auction a win tells the highest competing bid; in a first-price auction only
what the source tells in `to_win` does. The two kinds are counted apart, since rivals bid
otherwise in each, and a price taken or left tells nothing of rivals. Passes under the floor
are not counted: their entries name neither source nor bid.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from service.learner.curve_counts import Feed, Outcome, told
from service.learner.lesson import Lesson
from service.learner.market_in_place import MarketBytes
from service.learner.market_state import AUCTIONS, Key, MarketState, UnreadableMarket, read
from service.learner.partition import Ticks
from service.learner.rules import CELLS, SPANS_KEPT, Drift, MarketRules, Rules

NAME = "market"
# round(2^32 exp(-SPANS_KEPT / CELLS)), what is left of a count after one piece; a constant, so
# that every machine forgets alike.
KEPT_PER_PIECE = 3_451_103_176
PIECES_MAX = 256
OUTCOMES = ("won", "lost")
TELLING = (*OUTCOMES, "reset")
FEW = 4  # So many outcomes are counted in the bytes; for more all of them are read.

Body = Mapping[str, Any]


def wanted(rules: Rules) -> bool:
    """Whether a configuration has ticks to count on."""
    return rules.market is not None


def learn(state: bytes, lessons: Sequence[Lesson], rules: Rules) -> bytes:
    """
    Count what lessons tell; pure, integers only.

    Raises:
        UnreadableMarket: The state is damaged, or of ticks that the rules do not name.
    """
    if rules.market is None:
        return b""
    aging = rules.drift is not None
    if not aging and not any(lesson.kind in TELLING for lesson in lessons):
        return state
    telling = [lesson for lesson in lessons if lesson.kind in TELLING]
    if not aging and state and len(telling) <= FEW:
        added = _in_place(state, telling, rules.market)
        if added is not None:
            return added
    market = read(state) if state else MarketState(rules.market.top)
    if market.top != rules.market.top:
        raise UnreadableMarket("counted on other ticks")
    for lesson in lessons:
        if aging and lesson.at_ms > market.clock_ms:
            market.clock_ms = lesson.at_ms
            _forget(market, rules.drift)
        if aging:
            market.rounds += _rounds(lesson)
        if lesson.kind in TELLING:
            market = _taught(market, lesson, priced=rules.market.priced)
    return market.to_bytes() if market.sources or market.rounds or market.clock_ms else b""


def _in_place(state: bytes, lessons: Sequence[Lesson], rules: MarketRules) -> bytes | None:
    """The state with some outcomes counted; None where one of them is new to it."""
    market = MarketBytes(state)
    if not market.sound:
        return None
    empty = market.empty
    if empty.top != rules.top or any(lesson.kind == "reset" for lesson in lessons):
        return None
    for lesson in lessons:
        heard = _heard(lesson, empty.ticks, priced=rules.priced)
        if heard is not None and not market.count(*heard):
            return None
    return market.to_bytes()


def _taught(market: MarketState, lesson: Lesson, *, priced: bool) -> MarketState:
    if lesson.kind == "reset":
        return MarketState(market.top, 0, market.clock_ms, market.rounds, market.forgotten)
    heard = _heard(lesson, market.ticks, priced=priced)
    if heard is not None:
        key, place, column = heard
        market.count(market.key_of(*key), place, column)
    return market


def _heard(lesson: Lesson, ticks: Ticks, *, priced: bool) -> tuple[Key, int, int] | None:
    """The source, the place and the column in which an outcome counts; None where in none."""
    body, auction = lesson.body, lesson.body.get("auction", "second")
    # Nothing can be read off an outcome whose bid is not said.
    if auction not in AUCTIONS or "bid" not in body or body.get("only") == "value":
        return None
    outcome = said(lesson.kind == "won", auction, body, ticks, priced=priced)
    return None if outcome is None else ((auction, body["source"]), *told(outcome, ticks))


def _rounds(lesson: Lesson) -> int:
    body = lesson.body
    if lesson.kind in ("tick", "retire"):
        return int(body["rounds"] + body["under_floor"])
    counted = lesson.kind in (*OUTCOMES, "void") and body.get("only") != "value"
    return int(body["round"]) if counted else 0


def said(won: bool, auction: str, body: Body, ticks: Ticks, *, priced: bool) -> Outcome | None:
    """
    What an entry says of the highest competing bid; None where it says nothing.

    Args:
        won: Whether the bid won.
        auction: "second" or "first".
        body: Of the entry: `bid`, `to_win`, and `price` of a win, in nanos.
        ticks: A bid above their top, made under a larger cap, counts as one at the top.
        priced: Whether the source tells the competing bid of every loss.
    """
    bid, least = body["bid"], body.get("to_win")
    if least is None and won and auction == "second":
        least = body["price"]
    if least is not None and (least <= bid) is not won:
        # A seller's slip, or a bill above the bid: whichever of the two is wrong, we cannot tell.
        return None
    if not priced and not won:
        # Who tells only some losses may tell the near ones; a source that tells all says so.
        least = None
    if bid > ticks.top:
        return _beyond(won, least, ticks)
    return Outcome(bid, won, least, _feed(won, auction, least, priced=priced))


def _feed(won: bool, auction: str, least: int | None, *, priced: bool) -> Feed:
    if auction == "second":
        return "always" if priced and least is not None else "on_win"
    if least is not None:
        return "always" if priced else "on_win" if won else "never"
    return "on_loss" if priced and won else "never"


def _beyond(won: bool, least: int | None, ticks: Ticks) -> Outcome | None:
    if won and least is not None:
        return Outcome(min(ticks.top, max(least, 0)), least <= ticks.top, least, "always")
    return None if won else Outcome(ticks.top, False, None, "on_win")


def _forget(market: MarketState, drift: Drift | None) -> None:
    """
    Forget by whole pieces of the drift, and only between moments.

    A window forgets here as a discount of the same memory does, since counts have no age.
    """
    if drift is None:
        return
    spent = market.rounds if drift.by == "rounds" else market.clock_ms
    pieces = spent // max(1, drift.size * SPANS_KEPT // CELLS)
    passed = min(pieces - market.forgotten, PIECES_MAX)
    market.forgotten = pieces
    for _ in range(passed if market.sources else 0):
        market.keep(KEPT_PER_PIECE)
