"""What follows from the standing of each line item: who needs somebody, and what is at stake; pure.

Money at risk is what could go out within the next hour: while a line item bids, what it spends
at today's speed; stopped, what its open bids may still cost.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

from service.learner.pace_part import weights_of
from service.learner.profile import Plan, day_of, weight_between
from service.store.watching import Overview, Standing

HOUR_MS = 3_600_000
PEOPLE = {"person", "all"}  # Freezes by which somebody has already acted.


@dataclass(frozen=True, slots=True)
class Judged:
    """
    One line item with what follows from its standing; money in nanos.

    Args:
        status: "bids", "frozen", "halted", "spent", "resting", "closed" or "waits".
        why: Sentences, the gravest first.
        needs: Whether somebody must look.
        speed: Nanos an hour at which today's money went out.
        at_risk: Nanos that could go out within the next hour.
        spent_today: None while no day of it is known.
        ends_ms: When the day's money (or all money) ends at this speed; None if it lasts.
    """

    standing: Standing
    status: str
    why: tuple[str, ...]
    needs: bool
    speed: int
    at_risk: int
    spent_today: int
    day_budget: int | None
    ends_ms: int | None
    wall_ms: int

    @property
    def planned(self) -> int | None:
        """What should be spent of the day's money by now; None without a daily budget."""
        # Only the rows that are shown are asked, so that it is not reckoned for thousands.
        config, created_ms = self.standing.config, self.standing.created_ms
        return None if self.day_budget is None else planned_at(config, created_ms, self.wall_ms)

    @property
    def id(self) -> str:
        """The line item's id."""
        return self.standing.id


@dataclass(frozen=True, slots=True)
class Alarm:
    """The one sentence: how many need somebody, and what is at stake by currency, an hour."""

    total: int
    needing: int
    stopped_by_people: int
    stakes: dict[str, int]


def judge(overview: Overview) -> list[Judged]:
    """Every line item judged: first those that need somebody, each part by money at risk."""
    # There are few zones and many line items.
    zones = {one.config["flight"]["time_zone"] for one in overview.standings}
    days = {zone: day_of(overview.wall_ms, zone) for zone in zones}
    judged = [
        _judged(one, overview, days[one.config["flight"]["time_zone"]])
        for one in overview.standings
    ]
    return sorted(judged, key=lambda one: (not one.needs, -one.at_risk, one.id))


def alarm(judged: Iterable[Judged]) -> Alarm:
    """Count and sum; amounts of different currencies are never added."""
    total = needing = stopped = 0
    stakes: dict[str, int] = {}
    for one in judged:
        total += 1
        stopped += one.status == "frozen" and not one.needs
        if one.needs:
            needing += 1
            currency = str(one.standing.config["currency"])
            stakes[currency] = stakes.get(currency, 0) + one.at_risk
    return Alarm(total, needing, stopped, dict(sorted(stakes.items())))


def found(judged: list[Judged], wanted: str) -> list[Judged]:
    """Those whose id or name holds the wanted words, whatever their case."""
    words = wanted.casefold().split()

    def matches(one: Judged) -> bool:
        said = f"{one.id} {one.standing.config['name']} {one.status}".casefold()
        return all(word in said for word in words)

    return [one for one in judged if matches(one)]


def planned_at(config: Mapping[str, Any], created_ms: int, at_ms: int) -> int:
    """The day's money by the weight of the hours gone since the line item began that day."""
    flight, daily = config["flight"], int(config["daily_budget"])
    starts_ms, ends_ms = day_of(at_ms, flight["time_zone"])
    began_ms = max(starts_ms, created_ms, flight["starts_ms"])
    wish = config.get("pacing") or {}
    plan = Plan(flight["time_zone"], weights_of(wish.get("profile")))
    whole = weight_between(began_ms, ends_ms, plan)
    if not whole or at_ms <= began_ms:
        return 0
    return daily * weight_between(began_ms, at_ms, plan) // whole


def _judged(one: Standing, overview: Overview, today: tuple[int, int]) -> Judged:
    wall_ms, config = overview.wall_ms, one.config
    sources = {freeze["source"] for freeze in (*one.freezes, *overview.all_freezes)}
    status = _status(one, sources, wall_ms)
    alarming = _alarming(one, sources)
    daily = config["daily_budget"]
    spent = one.day["spent"] + one.day["over_spent"] if one.day else 0
    starts_ms, day_ends_ms = today
    began_ms = min(max(starts_ms, one.created_ms, config["flight"]["starts_ms"]), wall_ms)
    # In its first minute a line item has no speed yet, only a first price.
    speed = spent * HOUR_MS // max(wall_ms - began_ms, 60_000)
    left = _left(one, daily, spent)
    bids = status == "bids"
    return Judged(
        one,
        status,
        (*alarming, *_quiet(one, overview, status)),
        bool(alarming),
        speed,
        min(speed, left + one.open_holds) if bids else one.open_holds,
        spent,
        daily,
        _ends_ms(speed, left, wall_ms, day_ends_ms) if bids else None,
        wall_ms,
    )


def _status(one: Standing, sources: set[str], wall_ms: int) -> str:
    flight = one.config["flight"]
    over = flight["ends_ms"] is not None and wall_ms >= flight["ends_ms"]
    cases = (
        ("closed", "closed" in sources),
        ("waits", "restore" in sources),
        ("frozen", bool(sources)),
        ("halted", one.halted),
        ("resting", wall_ms < flight["starts_ms"] or over),
        ("spent", one.balance["spent"] + one.balance["held"] >= one.balance["target"]),
    )
    # The gravest of several is said, in the order of the cases.
    return next((name for name, holds in cases if holds), "bids")


def _alarming(one: Standing, sources: set[str]) -> tuple[str, ...]:
    """Why somebody must look; none of it is a decision that a person has taken."""
    said = [f"{_SOURCES[f['source']]}: {f['reason']}" for f in _not_by_people(one)]
    cases = (
        ("its learner is halted: it is being refolded or cannot go on", one.halted),
        ("an entry of its stream cannot be learnt", one.stuck),
        ("wins came after their grace and found no free money", one.balance["unfunded"] > 0),
        ("prices above the bid are in dispute", one.balance["disputed"] > 0),
        (f"{one.waiting} outcomes are set aside in quarantine", one.waiting > 0),
    )
    said += [f"tripwire, {finding}" for finding in one.findings]
    # Whoever closed a line item has seen what was left of it.
    return () if "closed" in sources else (*said, *(text for text, holds in cases if holds))


def _not_by_people(one: Standing) -> list[dict[str, Any]]:
    return [f for f in one.freezes if f["source"] not in PEOPLE | {"closed"}]


def _quiet(one: Standing, overview: Overview, status: str) -> tuple[str, ...]:
    """What somebody decided, or what passes by itself."""
    by_people = [f for f in (*overview.all_freezes, *one.freezes) if f["source"] in PEOPLE]
    said = [f"{_SOURCES[f['source']]} by {f['actor']}: {f['reason']}" for f in by_people]
    said += [_REST[status]] if status in _REST else []
    return tuple(said)


def _left(one: Standing, daily: int | None, spent: int) -> int:
    """Money that may still go out today."""
    # A budget may have been lowered below what is spent; that is no money owed to us.
    free = max(0, one.balance["target"] - one.balance["spent"])
    return free if daily is None else max(0, min(free, daily - spent))


def _ends_ms(speed: int, left: int, wall_ms: int, day_ends_ms: int) -> int | None:
    if speed <= 0:
        return None
    at_ms = wall_ms + left * HOUR_MS // speed
    return at_ms if at_ms < day_ends_ms else None


_SOURCES = {
    "person": "frozen",
    "all": "everything is frozen",
    "tripwire": "frozen by a tripwire",
    "audit": "frozen by the audit",
    "restore": "waits for its spend to be confirmed after a restore",
}
_REST = {
    "closed": "closed for good",
    "resting": "outside its flight",
    "spent": "its money is spent or held",
}
