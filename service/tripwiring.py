"""Tending tripwires: count what is new, judge it, freeze or warn, and clear what is over.

The rules are pure and lie apart. Several clerks may tend one database: what was counted is
guarded by the seq it was counted up to, and a finding is opened once, whoever saw it first.
"""

from __future__ import annotations

import json
import logging
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from service.store import changes, findings, freezes, line_items, outbox, tripwires
from service.store.database import Database, Reading, Writing
from service.store.findings import Kept
from service.store.journal import note
from service.store.tripwires import DAYS, HOURS, MINUTES, Standing
from service.tripwires.counts import NOTHING, Counts, Series, counted, plus
from service.tripwires.history import (
    ANY_HOURS_MAX,
    DAYS_MAX,
    HOURS_A_DAY,
    LONG_HOURS,
    STRETCHES_MAX,
    Facts,
)
from service.tripwires.judging import judge
from service.tripwires.saying import Finding
from service.tripwires.setups import FREEZE, OFF, Setup, setups_of

logger = logging.getLogger(__name__)

MINUTES_AN_HOUR = 60
PAGES_MAX = 20  # Of one line item in one turn; who has more waits for the next.
BUCKET_MS = 60_000
QUIET_MS = 86_400_000
ACTOR = "bidkeel"
# What a bare fact says needs no bids to be over.
BARE = frozenset({"unfunded", "disputed", "learner_halted"})
# What a damaged entry may raise; it teaches nobody anything, and stops no rule.
DAMAGED = (KeyError, TypeError, ValueError)


@dataclass(frozen=True, slots=True)
class Widths:
    """How wide the three kinds of buckets are; a minute may be shorter in a drill."""

    minute_ms: int = BUCKET_MS

    @property
    def hour_ms(self) -> int:
        """Sixty minutes."""
        return MINUTES_AN_HOUR * self.minute_ms

    @property
    def day_ms(self) -> int:
        """Twenty-four hours."""
        return HOURS_A_DAY * self.hour_ms

    def of(self, width: int) -> int:
        """The width of one kind."""
        return {MINUTES: self.minute_ms, HOURS: self.hour_ms, DAYS: self.day_ms}[width]


class Tending:
    """
    Looks after the tripwires of one database.

    Args:
        quiet_ms: How long a finding that somebody thawed freezes nothing, unless it clears.
    """

    def __init__(self, database: Database, widths: Widths, quiet_ms: int = QUIET_MS) -> None:
        self._database, self._widths, self._quiet_ms = database, widths, quiet_ms

    def due(self, after: str) -> list[Standing]:
        """The next line items to look at; none is looked at twice within one bucket."""
        now = self._database.wall_ms()
        due_ms = now - self._widths.minute_ms
        return self._database.read(lambda c: tripwires.active(c, due_ms, now, after))

    def look(self, standing: Standing) -> None:
        """Count what is new of one line item, and judge it once all is counted."""
        for _ in range(PAGES_MAX):
            seq = self._count(standing)
            if seq is None:
                return
            # Judged only when all is counted: half of a page would look like a fault.
            if seq >= standing.head:
                self._judge(standing)
                return
            standing = replace(standing, seq=seq, gauges_seen=standing.gauges)

    def prune(self, width: int, spans: int) -> int:
        """Forget buckets of one width older than so many of the days they are kept."""
        before = self._database.wall_ms() - spans * self._widths.day_ms
        return self._database.write(lambda c: tripwires.prune(c, width, before))

    def _count(self, standing: Standing) -> int | None:
        name, now = standing.line_item, self._database.wall_ms()
        # Read and summed outside of the write: parsing is slow, and SQLite has one writer.
        read, seq = self._database.read(lambda c: tripwires.entries(c, name, standing.seq))
        minutes = dict[int, Counts]()
        for at_ms, kind, slot, body, cost in read:
            start = at_ms - at_ms % self._widths.minute_ms
            more = _counted(kind, slot, body, cost)
            minutes[start] = plus(minutes[start], more) if start in minutes else more
        sums = dict[tuple[int, int], Counts]()
        for start, counts in minutes.items():
            self._add(sums, start, counts)

        def work(connection: Writing) -> bool:
            moved = [a - b for a, b in zip(standing.gauges, standing.gauges_seen, strict=True)]
            refused = tripwires.take_refusals(connection, name)
            gauges = Counts(refused=refused, unfunded=moved[0], disputed=moved[1], halted=moved[2])
            # Copied, since a transaction that is repeated must not count twice.
            with_gauges = dict(sums)
            self._add(with_gauges, now, gauges)
            # What is not counted to its end is due again at once.
            looked_ms = now if seq >= standing.head else 0
            return tripwires.advance(connection, standing, seq, looked_ms, with_gauges)

        return seq if self._database.write(work) else None

    def _add(self, sums: dict[tuple[int, int], Counts], at_ms: int, counts: Counts) -> None:
        if counts == NOTHING:
            return
        for width in (MINUTES, HOURS, DAYS):
            start = at_ms - at_ms % self._widths.of(width)
            sums[width, start] = plus(sums.get((width, start), NOTHING), counts)

    def _judge(self, standing: Standing) -> None:
        name, now = standing.line_item, self._database.wall_ms()

        def read(connection: Reading) -> tuple[Facts, dict[str, Setup], dict[str, Kept], set[str]]:
            row = line_items.one(connection, name)
            setups = setups_of(row.config)
            facts = facts_of(
                connection, row.config, self._widths, now, standing.gauges, armed(setups)
            )
            kept = findings.still_open(connection, name)
            return facts, setups, kept, {freeze["source"] for freeze in row.freezes}

        facts, setups, kept, sources = self._database.read(read)
        found = {finding.rule: finding for finding in judge(facts, setups)}
        for rule, finding in found.items():
            if rule not in kept:
                self._raise(name, finding, now)
            else:
                self._see(name, finding, kept[rule], sources, now)
        for rule in kept.keys() - found.keys():
            if self._is_over(kept[rule], setups[rule], sources, now):
                self._clear(name, kept[rule], now)

    def _raise(self, name: str, finding: Finding, now: int) -> None:
        def work(connection: Writing) -> None:
            saw = finding.saw
            if finding.action == FREEZE:
                # Under the lock of leases, so that no slice slips in beside the freeze.
                freezes.hold_still(connection, name)
            # Another clerk may have been first; all the rest is done by whoever was.
            if not findings.put(
                connection, name, finding.rule, action=finding.action, saw=saw.sentence,
                numbers=saw.numbers, since_ms=saw.since_ms, wall_ms=now,
            ):  # fmt: skip
                return
            outbox.put(connection, "finding", name, told(finding), now)
            if finding.action == FREEZE:
                self._freeze(connection, name, finding, now)
            else:
                _note(connection, "warn", name, finding, now)

        self._database.write(work)
        logger.warning("tripwire %s of line item %s: %s", finding.rule, name, finding.saw.sentence)

    def _freeze(self, connection: Writing, name: str, finding: Finding, now: int) -> None:
        reason = f"{finding.rule}: {finding.saw.sentence}"
        put = freezes.put(connection, name, "tripwire", wall_ms=now, actor=ACTOR, reason=reason)
        findings.froze(connection, name, finding.rule, now)
        _note(connection, "freeze" if put else "warn", name, finding, now)
        if put:
            changes.announce(connection, "freeze", [name])

    def _see(self, name: str, finding: Finding, kept: Kept, sources: set[str], now: int) -> None:
        """A finding that goes on; what somebody thawed is left alone until it is quiet again."""
        thawed = kept.froze_ms is not None and "tripwire" not in sources
        quiet = kept.thawed_ms is None or now - kept.thawed_ms < self._quiet_ms
        again = finding.action == FREEZE and (kept.froze_ms is None or (thawed and not quiet))

        def work(connection: Writing) -> None:
            if again:
                freezes.hold_still(connection, name)
            findings.see(
                connection, kept.number, action=finding.action, saw=finding.saw.sentence,
                numbers=finding.saw.numbers, now=now,
            )  # fmt: skip
            if again:
                self._freeze(connection, name, finding, now)
            elif thawed:
                findings.thawed(connection, kept.number, now)

        self._database.write(work)

    def _is_over(self, kept: Kept, setup: Setup, sources: set[str], now: int) -> bool:
        if setup.action == OFF or kept.rule in BARE:
            return True
        # Without bids nothing can show that it is over; and it must stay away for a whole window.
        return not sources and now - kept.seen_ms >= (setup.window_ms or 0)

    def _clear(self, name: str, kept: Kept, now: int) -> None:
        def work(connection: Writing) -> None:
            if findings.clear(connection, kept.number, now):
                body = {"rule": kept.rule, "raised_ms": kept.raised_ms}
                outbox.put(connection, "cleared", name, body, now)

        self._database.write(work)


def armed(setups: Mapping[str, Setup]) -> dict[str, Setup]:
    """The rules that are not off."""
    return {name: setup for name, setup in setups.items() if setup.action != OFF}


def facts_of(
    connection: Reading,
    config: Mapping[str, Any],
    widths: Widths,
    now: int,
    gauges: tuple[int, int, int],
    setups: Mapping[str, Setup],
) -> Facts:
    """What the rules need of a line item now, and no more of its past than they look at."""
    name, hour, day = str(config["id"]), widths.hour_ms, widths.day_ms
    places = [(now - back) // hour * hour % day for back in (0, hour // 2)]
    hours = tripwires.buckets(
        connection, name, HOURS, now - (DAYS_MAX + 1) * day,
        (now - (ANY_HOURS_MAX + LONG_HOURS) * hour, day, places[0], places[1]),
    )  # fmt: skip
    windows = [setup.window_ms or 0 for setup in setups.values()]
    short = [one for one in windows if one < LONG_HOURS * hour] or [0]
    # An hour more than any short window reaches, so that its first bucket is whole.
    back = max(*short, hour) + hour
    if not hours or hours[0][0] > now - LONG_HOURS * hour:
        # Too young for hours to be held against: the windows just before have to do.
        back += (STRETCHES_MAX + 1) * max([one for one in short if one < hour] or [0])
    minutes = tripwires.buckets(connection, name, MINUTES, now - back)
    # Behind the longest window, and one more than is looked at, for the first is left out.
    oldest = now - (DAYS_MAX + 2) * day - max([0, *windows])
    days = tripwires.buckets(connection, name, DAYS, oldest)
    return _facts(config, widths, now, gauges, (minutes, hours, days))


def recorded(
    connection: Reading,
    config: Mapping[str, Any],
    widths: Widths,
    now: int,
    gauges: tuple[int, int, int],
) -> Facts:
    """All that is kept of a line item."""
    read = [tripwires.buckets(connection, str(config["id"]), w, 0) for w in (MINUTES, HOURS, DAYS)]
    return _facts(config, widths, now, gauges, (read[0], read[1], read[2]))


def told(finding: Finding) -> dict[str, Any]:
    """A finding as it is told to whoever listens."""
    return {
        "rule": finding.rule,
        "action": finding.action,
        "saw": finding.saw.sentence,
        "numbers": dict(finding.saw.numbers),
        "since_ms": finding.saw.since_ms,
    }


Rows = list[tripwires.Row]


def _facts(
    config: Mapping[str, Any],
    widths: Widths,
    now: int,
    gauges: tuple[int, int, int],
    rows: tuple[Rows, Rows, Rows],
) -> Facts:
    minutes, hours, days = (
        Series(widths.of(width), [(start, Counts(*sums)) for start, sums in some])
        for width, some in zip((MINUTES, HOURS, DAYS), rows, strict=True)
    )
    value = config["value"]
    return Facts(
        now, minutes, hours, days, value["arrival"], config["currency"],
        gauges[0], gauges[1], bool(gauges[2]),
    )  # fmt: skip


def _counted(kind: str, slot: str | None, body: Mapping[str, Any], cost: int) -> Counts:
    try:
        return counted(kind, slot, body, cost)
    except DAMAGED:
        logger.warning("an entry of kind %s is damaged and counts for no tripwire", kind)
        return NOTHING


def _note(connection: Writing, action: str, name: str, finding: Finding, now: int) -> None:
    detail = json.loads(json.dumps(told(finding)))
    note(
        connection, wall_ms=now, actor=ACTOR, action=action, line_item=name,
        reason=f"tripwire {finding.rule}: {finding.saw.sentence}", detail={"finding": detail},
    )  # fmt: skip
