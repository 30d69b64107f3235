"""A candidate setup on recorded history: when each rule would have fired; the same pure rules.

Minute by minute where minutes are kept, hour by hour before. What did freeze in truth left no
bids behind it, so nothing fires there; what would have been frozen now goes on bidding here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

from service.tripwires.counts import Counts, Series
from service.tripwires.history import Facts
from service.tripwires.judging import judge
from service.tripwires.saying import Finding
from service.tripwires.setups import FREEZE, OFF, Setup

WEEK_MS = 7 * 86_400_000
MOMENTS_MAX = 1500  # Of minutes; a longer record is judged at every second or third of them.


@dataclass(slots=True)
class Episode:
    """One time a rule would have fired: from its first finding to its last."""

    finding: Finding
    first_ms: int
    last_ms: int


@dataclass(frozen=True, slots=True)
class Replay:
    """
    What a setup would have done.

    Args:
        from_ms: Where the record begins.
        until_ms: Where it ends.
        looks: How many moments were judged.
        episodes: By rule, in order of time.
    """

    from_ms: int
    until_ms: int
    looks: int
    episodes: dict[str, list[Episode]]

    def per_week(self, rule: str) -> float:
        """How often a week a rule would have fired; over a short record this says little."""
        length_ms = max(self.until_ms - self.from_ms, 1)
        return round(len(self.episodes[rule]) * WEEK_MS / length_ms, 3)

    @property
    def freezes(self) -> list[Episode]:
        """The episodes that would have stopped bids, in order of time."""
        every = [one for several in self.episodes.values() for one in several]
        stops = [one for one in every if one.finding.action == FREEZE]
        return sorted(stops, key=lambda one: one.first_ms)


def replay(facts: Facts, setups: Mapping[str, Setup]) -> Replay:
    """Judge every recorded moment by these setups, as it would have been judged then."""
    armed = {name: setup for name, setup in setups.items() if setup.action != OFF}
    moments = _moments(facts)
    episodes: dict[str, list[Episode]] = {name: [] for name in armed}
    for moment in moments:
        for finding in judge(_then(facts, moment), armed):
            _note(episodes[finding.rule], finding, moment, facts)
    first = moments[0] if moments else facts.now_ms
    return Replay(first, facts.now_ms, len(moments), episodes)


def _moments(facts: Facts) -> list[int]:
    """The last moment of each bucket, by hours as long as there are no minutes."""
    minutes, hours = facts.minutes, facts.hours
    from_ms = minutes.starts[0] if minutes.starts else facts.now_ms
    before = [start + hours.span_ms - 1 for start in hours.starts]
    moments = [moment for moment in before if moment < from_ms]
    # People wait for a preview, and few findings last for less than a stride.
    stride = 1 + len(minutes.starts) // MOMENTS_MAX
    return moments + [start + minutes.span_ms - 1 for start in minutes.starts[::stride]]


def _then(facts: Facts, moment: int) -> Facts:
    """What was known at a moment: buckets that began later are behind every window's end."""
    since = _moved(facts, moment)
    return replace(
        facts,
        now_ms=moment,
        minutes=_Until(facts.minutes, facts.hours, moment),
        unfunded=facts.unfunded - since.unfunded,
        disputed=facts.disputed - since.disputed,
        halted=facts.halted - since.halted > 0,
    )


def _moved(facts: Facts, moment: int) -> Counts:
    series = facts.minutes
    # Where minutes are gone, hours still hold what has moved since.
    if not series.starts or moment < series.starts[0]:
        series = facts.hours
    return series.between(moment + 1, facts.now_ms + 1)


class _Until(Series):
    """Minutes up to a moment; where none are kept, hours stand in for them."""

    def __init__(self, minutes: Series, hours: Series, moment: int) -> None:
        self._coarse = not minutes.starts or moment < minutes.starts[0]
        self._of = hours if self._coarse else minutes
        self._moment = moment
        self.span_ms = minutes.span_ms
        self.starts, self.buckets = self._of.starts, self._of.buckets

    def between(self, from_ms: int, until_ms: int) -> Counts:
        """As of a series, cut at the moment; a window of minutes is the hour that holds it."""
        end = min(until_ms, self._moment + 1)
        return self._of.between(self._of.floor(from_ms) if self._coarse else from_ms, end)


def _note(several: list[Episode], finding: Finding, moment: int, facts: Facts) -> None:
    """One episode goes on while the same rule fires again within its window or an hour."""
    gap_ms = max(finding.window_ms, facts.hours.span_ms)
    if several and moment - several[-1].last_ms <= gap_ms:
        several[-1].last_ms = moment
    else:
        several.append(Episode(finding, moment, moment))
