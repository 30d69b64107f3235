"""One line item in a rehearsal: it bids, is told and learns by the very code of production.

Snapshot, generator and opportunity go through `service.pricing`, outcomes through the fold.
What is simpler than in production: one worker holds all the money there is, and a snapshot
comes every so many auctions in place of every few moments.
"""

from __future__ import annotations

import heapq
from base64 import b64encode
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, NamedTuple

from numpy.random import Generator

from service.decision.opportunity import Opportunity
from service.decision.price import ready
from service.decision.terms import Terms
from service.guard.fees import Fees
from service.guard.gate import Limits
from service.learner import hashing
from service.learner.fold import Lesson, fold
from service.learner.growing import weight
from service.learner.memory import Memory
from service.learner.rules import ONCE, Rules
from service.ledger.days import local_day
from service.pricing import Priced, Put, priced
from service.rehearsal.taken import PASSED, Taken

# Windows close strictly after their length, so two milliseconds on this one is over.
AT_ONCE_MS = 1  # The window of values that come with their win.
ONE_BLOCK_MS = 2


class Auction(NamedTuple):
    """
    One auction of which everything needed is known; money in nanos, net of fees.

    Args:
        at_ms: When it comes.
        least: The least bid that wins, floor included.
        value: What the impression brings if won; None where nobody knows.
        worth: What it counts for in the figures: its mean value where that is known.
        floor: The least the seller takes.
        source: Where it is sold.
        hint: The caller's own prediction of its value.
        hashed: Its features.
        value_delay_ms: How long after the auction the value comes.
        told_delay_ms: How long after the auction the outcome comes; None for never.
        most_lost: Where `least` is not known: the largest bid that is known to lose.
        least_won: Where `least` is not known: the least bid that is known to win.
    """

    at_ms: int
    least: int
    value: int | None
    worth: int
    floor: int = 0
    source: str = "rehearsal"
    hint: int | None = None
    hashed: hashing.Hashed = ()
    value_delay_ms: int = 0
    told_delay_ms: int | None = 0
    most_lost: int | None = None
    least_won: int | None = None

    def won_by(self, bid: int) -> bool | None:
        """Whether a bid wins; None where nobody can say."""
        if self.most_lost is None and self.least_won is None:
            return self.least <= bid
        if self.least_won is not None and bid >= self.least_won:
            return True
        return False if self.most_lost is not None and bid <= self.most_lost else None

    @property
    def told(self) -> bool:
        """Whether the least bid that wins is known."""
        return self.most_lost is None and self.least_won is None


@dataclass(frozen=True, slots=True)
class Stage:
    """
    What all policies of a rehearsal have in common.

    Args:
        auction: "second" or "first".
        span_ms: How long it lasts; flights are set to that.
        at_once: Whether outcomes and values are known before the next snapshot.
        starts_ms: When it begins.
    """

    auction: str
    span_ms: int
    at_once: bool
    starts_ms: int = 0


def staged(config: Mapping[str, Any], stage: Stage) -> dict[str, Any]:
    """A line item's configuration as it is rehearsed: its flight is the rehearsal."""
    # A flight of weeks would pace the money of weeks over one rehearsed day.
    flight = {**config["flight"], "starts_ms": stage.starts_ms}
    flight["ends_ms"] = stage.starts_ms + stage.span_ms if flight.get("ends_ms") else None
    value = dict(config["value"])
    if stage.at_once:
        value["window_ms"] = AT_ONCE_MS
    # Nobody watches a rehearsal, so no tripwire may stop it halfway and spoil its figures.
    changed = {"flight": flight, "value": value, "auction": stage.auction, "tripwires": None}
    return {**config, **changed, "spend_on": "won", "kin": None}


class Player:
    """
    One policy at play.

    Args:
        config: A line item's internal configuration, defaults filled in.
        stage: What it plays on.
        generator: The only source of chance.
        memory: What it has learnt before; None for nothing.
    """

    def __init__(
        self,
        config: Mapping[str, Any],
        stage: Stage,
        generator: Generator,
        memory: Memory | None = None,
    ) -> None:
        full = staged(config, stage)
        self.terms, self._rules = Terms.from_config(full), Rules.from_config(full)
        self._stage, self._generator = stage, generator
        self.limits = Limits(self.terms.cap, 0, None, False, Fees.of(full.get("fees")))
        self._purse = _Purse(full["budget"], full["daily_budget"], full["flight"]["time_zone"])
        self._priced_losses = full.get("losses", "bare") == "priced"
        self._grace_ms, self._id = full["grace_ms"], str(full.get("id", "rehearsal"))
        self._clock_ms, self._order = stage.starts_ms, 0
        # What is on its way: when it is heard, in which order, what it says, what it releases.
        self._due: list[tuple[int, int, Lesson, int, str]] = []
        self._lessons = list[Lesson]()
        self.taken, self.passes = Taken(), Counter[str]()
        # The lesson of creation carries the guess; a memory that is handed on has had it.
        begun = [] if memory is not None else [_created(full, stage.starts_ms)]
        self.memory = fold(memory or Memory.fresh(), begun, self._rules)
        self.snapshot = ready(self.memory, self.terms)

    def play(self, auction: Auction) -> int:
        """Bid, and be told sooner or later; returns the bid, -1 for a pass."""
        bid = self.bid(auction)
        self.settle(auction, bid)
        return bid

    def bid(self, auction: Auction) -> int:
        """The price that leaves, net of fees in nanos; -1 for a pass."""
        self._hear(auction.at_ms)
        opportunity = Opportunity(
            self._id,
            source=auction.source,
            floor=auction.floor,
            value_hint=auction.hint if self.terms.hints else None,
            auction=self._stage.auction,
            hashed=auction.hashed if "dimensions" in self.terms.settings else (),
        )
        free = self._purse.free(auction.at_ms)
        if free <= 0:
            self.passes[self._purse.why_none(auction.at_ms)] += 1
            return PASSED
        # Recorded prices are in its own currency and net of fees already: nothing is turned.
        put = Put(opportunity, opportunity)
        found = priced(self.snapshot, self.limits, put, free, self._generator)
        if isinstance(found, Priced):
            return found.sent
        self.passes[found.reason] += 1
        # Such a pass is a round all the same, which confidence bounds count by.
        if found.reason == "under_floor":
            body = {"rounds": 0, "under_floor": 1}
            self._tell(Lesson("tick", body, self._now(auction.at_ms)))
        return PASSED

    def settle(self, auction: Auction, bid: int) -> None:
        """Take in what became of a bid: the money at once, the news when it comes."""
        # Of a bid of -1 it may be unknown whether it wins; a pass has lost for sure.
        outcome = False if bid == PASSED else auction.won_by(bid)
        won, unknown = outcome is True, outcome is None
        # The market is net and the budget gross, as with an exchange.
        net = 0 if not won else bid if self._stage.auction == "first" else auction.least
        fees = self.limits.fees
        paid = fees.gross(net) if won else 0
        self.taken.add(auction, bid, paid, won, unknown)
        if bid == PASSED:
            return
        hold, day = fees.gross(bid), self._purse.hold(auction.at_ms, fees.gross(bid))
        if unknown:
            # Nobody can say who won, so it is counted, costs nothing and teaches nothing.
            self._purse.release(hold, day, 0)
            return
        self._report(auction, hold, day, paid if won else None)

    def end_block(self) -> None:
        """Fold what was heard, and take up the snapshot of it."""
        if self._stage.at_once:
            # It teaches nothing, but moves the clock on until every window has closed.
            self._clock_ms += ONE_BLOCK_MS
            self._lessons.append(Lesson("lease", {}, self._clock_ms, self._clock_ms))
        # Values lie between newer wins, and a fold only moves forward in time.
        told = sorted(self._lessons, key=lambda lesson: lesson.at_ms)
        self.memory, self._lessons = fold(self.memory, told, self._rules), []
        self.snapshot = ready(self.memory, self.terms)

    def _now(self, at_ms: int) -> int:
        # The first lesson of a block sets the moment that all of it shares.
        # Where all is told at once, a block is one moment, as its order within teaches nothing.
        if self._stage.at_once and self._lessons:
            return self._clock_ms
        self._clock_ms = max(self._clock_ms, at_ms)
        return self._clock_ms

    def _report(self, auction: Auction, hold: int, day: str, paid: int | None) -> None:
        delay_ms = auction.told_delay_ms
        if delay_ms is None or delay_ms > self._grace_ms:
            # It counts as a round with its slice's last tick; its hold comes back after grace.
            tick = Lesson("tick", {"rounds": 1, "under_floor": 0}, auction.at_ms + self._grace_ms)
            self.taken.never_told(paid)
            self._later(tick, hold, day, 0)
            return
        at_ms = self._now(auction.at_ms) if self._stage.at_once else auction.at_ms + delay_ms
        lesson = self._outcome(auction, hold, paid, at_ms)
        self._later(lesson, hold, day, paid or 0)
        value = auction.value
        # A win of which nobody knows the value teaches its price and nothing of value.
        if paid is not None and value is not None and (value > 0 or self.terms.arrival == ONCE):
            body = {"amount": value, "was": None, "won_ms": at_ms, "win": lesson.body}
            late_ms = auction.at_ms + auction.value_delay_ms
            heard_ms = at_ms if self._stage.at_once else max(at_ms, late_ms)
            self._later(Lesson("value", body, heard_ms, heard_ms), 0, day, 0)

    def _outcome(self, auction: Auction, hold: int, paid: int | None, at_ms: int) -> Lesson:
        # Lessons are gross, so that a curve of rivals is one of what they would cost us.
        least = self.limits.fees.gross(auction.least)
        told = least if self._priced_losses and auction.told else None
        kind = "lost" if paid is None else "won"
        body: dict[str, Any] = {
            **{"bid": hold, "source": auction.source, "auction": self._stage.auction},
            **{"round": 1, "late": False, "price": paid, "to_win": told},
        }
        if auction.hashed:
            body["features"] = b64encode(hashing.to_bytes(auction.hashed)).decode("ascii")
        if auction.hint is not None:
            body["hint"] = auction.hint
        # An unknown value is no value of nothing, which would drag the mean down.
        if paid is not None and auction.value is None:
            body["only"] = "market"
        law, tree = self.snapshot.law, self.terms.tree
        if law is not None and tree is not None:
            price = paid if paid is not None else told
            body |= weight(law.to_bytes(), kind, price, auction.floor, tree.win_only)
        return Lesson(kind, body, at_ms, at_ms, paid or 0)

    def _later(self, lesson: Lesson, hold: int, day: str, paid: int) -> None:
        if self._stage.at_once:
            self._lessons.append(lesson)
            self._purse.release(hold, day, paid)
            return
        # Of news of one moment the first sent comes first: lessons themselves do not compare.
        self._order += 1
        entry = (lesson.at_ms, self._order, lesson, hold, day)
        heapq.heappush(self._due, entry)

    def _tell(self, lesson: Lesson) -> None:
        self._lessons.append(lesson)

    def _hear(self, now_ms: int) -> None:
        # Heard before the bid is made, since money that came back may be bid at once.
        while self._due and self._due[0][0] <= now_ms:
            _, _, lesson, hold, day = heapq.heappop(self._due)
            self._lessons.append(lesson)
            self._purse.release(hold, day, lesson.cost)


class _Purse:
    """Spent and held money of one line item, in nanos, by budget and by local day."""

    def __init__(self, budget: int, daily: int | None, zone: str) -> None:
        self._budget, self._daily, self._zone = budget, daily, zone
        self.spent = self.held = 0
        self._of_day, self._spent_of_day = Counter[str](), Counter[str]()

    def free(self, at_ms: int) -> int:
        """What may still be bid."""
        free = self._budget - self.spent - self.held
        return free if self._daily is None else min(free, self._daily - self._today(at_ms))

    def why_none(self, at_ms: int) -> str:
        """Why nothing may be bid now, in the order in which production looks for a reason."""
        if self._budget <= self.spent:
            return "budget_spent"
        spent = self._daily is not None and self._daily <= self._spent_of_day[self._day(at_ms)]
        return "day_spent" if spent else "budget_held"

    def hold(self, at_ms: int, amount: int) -> str:
        """Set an amount aside; returns the day it belongs to."""
        day = self._day(at_ms)
        self.held += amount
        self._of_day[day] += amount
        return day

    def release(self, hold: int, day: str, paid: int) -> None:
        """Turn a hold into what was paid."""
        self.held -= hold
        self.spent += paid
        self._of_day[day] += paid - hold
        self._spent_of_day[day] += paid

    def _today(self, at_ms: int) -> int:
        return self._of_day[self._day(at_ms)]

    def _day(self, at_ms: int) -> str:
        # Without a limit by day the zone is never looked up, which every bid would pay for.
        return "" if self._daily is None else local_day(at_ms, self._zone)


def _created(config: Mapping[str, Any], at_ms: int) -> Lesson:
    body = {
        "budget": config["budget"],
        "daily_budget": config["daily_budget"],
        "ends_ms": config["flight"]["ends_ms"],
        "zone": config["flight"]["time_zone"],
        "pacing": config.get("pacing"),
        "guess": config["value"]["expected"]["per_impression"],
        "grace_ms": config["grace_ms"],
    }
    return Lesson("create", body, at_ms, at_ms)
