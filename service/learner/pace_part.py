"""Pacing as a part of a memory: the multiplier and what was spent by when, from the stream.

What may be spent comes from the stream as well, as it was at each moment, and not from the
configuration of today: an edit changes what is due from there on and keeps the multiplier, and
a fold from zero gives the same bytes. Costs count when they are booked, late wins too; a win
that was retracted has still cost its money. Days go by the wall clock, as the budget's own do.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

from service.learner import pacing, profile
from service.learner.lesson import SPENT, Lesson
from service.learner.memory import UnreadableMemory
from service.learner.pacing import Pace, Seen
from service.learner.profile import FLAT, WEIGHT_MAX, Plan, Progress

FORM = 1
NONE = "none"
FORMS: dict[str, pacing.Form] = {"dual": "shifted", "adaptive": "euclidean", "entropy": "entropy"}
# How long a price is on its way: notices come within seconds, a bill or a slow feed takes
# longer, and a snapshot its turn. It only slows the multiplier of a line item that spends much.
LATE_MS = 60_000
BUYS = ("won", "billed", "conflict", SPENT)


class UnreadablePart(UnreadableMemory):
    """The bytes are not a part of the form we write."""


@dataclass(frozen=True, slots=True)
class Spending:
    """
    How money is to be spent, as the last entry that named it said.

    Args:
        method: Of pacing; "none" for none.
        plan: What may be spent and when.
        guess: Value of an impression by the configuration, in nanos; what the published forms
            measure money by.
        late_ms: How long a price is on its way.
    """

    method: str
    plan: Plan
    guess: int
    late_ms: int

    @property
    def paces(self) -> bool:
        """Whether there is a method, and a rate for it to hold to."""
        return self.method != NONE and self.plan.paces

    @property
    def rules(self) -> pacing.Rules:
        """How the multiplier moves; that of another method is carried over."""
        form = FORMS.get(self.method, "shifted")
        scale = 1 if form == "shifted" else self.guess
        return pacing.Rules(form, pacing.STEP, scale)

    @staticmethod
    def of(body: Mapping[str, Any]) -> Spending:
        """Read the entry that creates or edits a line item."""
        wish = body["pacing"] or {}
        weights = weights_of(wish.get("profile"))
        daily, total, ends_ms = body["daily_budget"], body["budget"], body["ends_ms"]
        plan = Plan(body["zone"], weights, daily, total, ends_ms)
        late_ms = min(LATE_MS, body["grace_ms"])
        return Spending(wish.get("method", NONE), plan, body["guess"], late_ms)


@dataclass(frozen=True, slots=True)
class Pacing:
    """
    Where the pacing of a line item stands.

    Args:
        spending: How money is to be spent.
        pace: The multiplier.
        progress: What was spent.
    """

    spending: Spending
    pace: Pace
    progress: Progress

    @property
    def multiplier(self) -> int:
        """Mu in units of 2^-40; 0 where nothing is paced."""
        return self.pace.multiplier(self.spending.rules) if self.spending.paces else 0

    def to_bytes(self) -> bytes:
        """Canonical JSON of integers and names: equal states give equal bytes."""
        content = {"form": FORM, **asdict(self)}
        return json.dumps(content, sort_keys=True, separators=(",", ":")).encode()

    @staticmethod
    def from_bytes(state: bytes) -> Pacing:
        """
        Read what `to_bytes` wrote.

        Raises:
            UnreadablePart: Another form, or not whole.
        """
        try:
            content = json.loads(state)
            if content.pop("form") != FORM:
                raise UnreadablePart("not the form of pacing this release writes")
            said = content["spending"]
            plan = Plan(**{**said["plan"], "weights": tuple(said["plan"]["weights"])})
            return Pacing(
                Spending(**{**said, "plan": plan}),
                Pace(**content["pace"]),
                Progress(**content["progress"]),
            )
        except (ValueError, TypeError, LookupError, AttributeError) as error:
            raise UnreadablePart("not a pacing") from error


def learn(state: bytes, lessons: Sequence[Lesson]) -> bytes:
    """Fold lessons; before the first one that says how money is to be spent there is nothing."""
    now = Pacing.from_bytes(state) if state else None
    for lesson in lessons:
        now = _taught(now, lesson)
    return b"" if now is None else now.to_bytes()


def weights_of(weights: Sequence[float] | None) -> tuple[int, ...]:
    """The profile of a configuration as whole weights: the largest of fractions is a million."""
    if weights is None:
        return FLAT
    if all(isinstance(weight, int) for weight in weights):
        return tuple(int(weight) for weight in weights)
    most = max(weights)
    return tuple(round(WEIGHT_MAX * weight / most) for weight in weights)


def _taught(now: Pacing | None, lesson: Lesson) -> Pacing | None:
    told = Spending.of(lesson.body) if lesson.kind in ("create", "edit") else None
    if now is None:
        return None if told is None else _begun(told, lesson.wall_ms)
    now = _moved(now, lesson)
    if told is not None:
        pace = pacing.carried(now.pace, now.spending.rules, told.rules)
        return replace(now, spending=told, pace=pace)
    # Money stays spent; what was learnt of the rate goes, as the values it came from do.
    return _afresh(now) if lesson.kind == "reset" else now


def _begun(spending: Spending, wall_ms: int) -> Pacing:
    return _afresh(Pacing(spending, Pace(0), Progress(wall_ms)))


def _afresh(now: Pacing) -> Pacing:
    # Nothing tells what a line item will meet before it has bid, so it starts at its value.
    price = pacing.usual_price(now.spending.guess, 0)
    return replace(now, pace=Pace.fresh(now.spending.rules, 0, price))


def _moved(now: Pacing, lesson: Lesson) -> Pacing:
    spending, rules, body = now.spending, now.spending.rules, lesson.body
    # What a price asks beyond the bid is disputed, and no money of the budget.
    spent = min(lesson.cost, body.get("bid", lesson.cost))
    spent = -spent if lesson.kind == "reversal" else spent
    progress, due = profile.advance(now.progress, lesson.wall_ms, spent, spending.plan)
    if not spending.paces:
        return replace(now, progress=progress)
    at_ms = progress.clock_ms
    late = profile.due_between(progress, at_ms, at_ms + spending.late_ms, spending.plan)
    rounds = body.get("round", 0) + body.get("rounds", 0) + body.get("under_floor", 0)
    # Money that people book in one sum says nothing of what the bids of now cost.
    bought = spent if lesson.kind in BUYS else 0
    seen = Seen(rounds, int(bought > 0), bought)
    return replace(now, progress=progress, pace=pacing.learn(now.pace, seen, due, rules, late))
