"""What tripwires have found, and what a candidate setting would have done; changes nothing.

Apart from tending them, since people ask for it: over HTTP and at the command line.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

from service.configuring import merged
from service.ordering import Orders
from service.store import findings, line_items, outbox, tripwires
from service.store.database import Reading
from service.store.findings import Kept
from service.tripwires.replaying import Episode, Replay, replay
from service.tripwires.runbooks import RUNBOOKS
from service.tripwires.setups import OFF, Setup, setups_of, thresholds
from service.tripwiring import Widths, recorded

FINDINGS_MAX = 50
EPISODES_MAX = 20


class Foreseeing:
    """Answers people's questions on tripwires, for one worker."""

    def __init__(self, orders: Orders, widths: Widths) -> None:
        self._orders, self._widths = orders, widths

    async def shown(self, line_item: str) -> dict[str, Any]:
        """
        The rules of a line item, its newest findings with what to do, and the news of it.

        Raises:
            NotFound: There is none.
        """
        answer: dict[str, Any] = await self._orders.read(lambda c: shown(c, line_item))
        return answer

    async def preview(self, line_item: str, candidate: Mapping[str, Any]) -> dict[str, Any]:
        """
        When each rule would have fired on the recorded history under a candidate setting.

        Args:
            candidate: What it sets otherwise than the line item's configuration.

        Raises:
            NotFound: There is no such line item.
        """
        now, widths = self._orders.database.wall_ms(), self._widths
        answer: dict[str, Any] = await self._orders.read(
            lambda c: foreseen(c, line_item, candidate, widths, now)
        )
        return answer


def shown(connection: Reading, line_item: str) -> dict[str, Any]:
    """The rules of a line item, its newest findings with what to do, and the news of it."""
    config = line_items.one(connection, line_item).config
    newest = findings.newest(connection, line_item, FINDINGS_MAX)
    return {
        "line_item": line_item,
        "rules": {name: _said(setup) for name, setup in setups_of(config).items()},
        "open": [told(kept) for kept in newest if kept.cleared_ms is None],
        "over": [told(kept) for kept in newest if kept.cleared_ms is not None],
        "news": outbox.standing(connection, line_item),
    }


def summary(config: Mapping[str, Any], kept: list[Kept]) -> dict[str, Any]:
    """What a line item's state says of its tripwires: armed rules and open findings."""
    armed = {name: s.action for name, s in setups_of(config).items() if s.action != OFF}
    return {"armed": armed, "findings": [told(one) for one in kept]}


def told(kept: Kept) -> dict[str, Any]:
    """A finding with what a person does about it."""
    said = {name: value for name, value in asdict(kept).items() if name != "number"}
    return {**said, "runbook": asdict(RUNBOOKS[kept.rule])}


def foreseen(
    connection: Reading, line_item: str, candidate: Mapping[str, Any], widths: Widths, now: int
) -> dict[str, Any]:
    """What a candidate setting would have done on the recorded history of a line item."""
    config = line_items.one(connection, line_item).config
    # As a PATCH would merge it, so that a preview is of the very setting it would make.
    after = merged(config, {"tripwires": {**(candidate or {})}})
    setups = setups_of(after)
    gauges = tripwires.gauges(connection, line_item)
    done = replay(recorded(connection, config, widths, now, gauges), setups)
    fired = {name: _rule(name, setup, done) for name, setup in setups.items()}
    stops = [{"rule": e.finding.rule, "at_ms": e.first_ms} for e in done.freezes[:EPISODES_MAX]]
    return {
        "line_item": line_item,
        "preview": True,
        # Of a history too short for one whole step nothing was looked at.
        "from_ms": min(done.from_ms, done.until_ms),
        "until_ms": done.until_ms,
        "looks": done.looks,
        "would_freeze": stops,
        "would_freeze_in_all": len(done.freezes),
        "rules": fired,
    }


def _said(setup: Setup) -> dict[str, Any]:
    said = thresholds(setup)
    # People read and write seconds.
    if "window_ms" in said:
        said["window_s"] = said.pop("window_ms") // 1000
    return said


def _rule(name: str, setup: Setup, done: Replay) -> dict[str, Any]:
    if setup.action == OFF:
        return {"setup": _said(setup), "fired": 0, "per_week": 0.0, "episodes": []}
    episodes = done.episodes[name]
    return {
        "setup": _said(setup),
        "fired": len(episodes),
        "per_week": done.per_week(name),
        "episodes": [_episode(one) for one in episodes[-EPISODES_MAX:]],
    }


def _episode(episode: Episode) -> dict[str, Any]:
    saw = episode.finding.saw
    return {
        "from_ms": episode.first_ms,
        "until_ms": episode.last_ms,
        "saw": saw.sentence,
        "numbers": dict(saw.numbers),
    }
