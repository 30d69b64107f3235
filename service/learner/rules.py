"""How a line item's lessons are read, apart from the lessons: what a change of it refolds."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from itertools import count
from typing import Any

from service.learner import exptree_rules, return_target
from service.learner.pacing import STEP
from service.learner.partition import Ticks

ONCE = "once"
ACCRUES = "accrues"
DISCOUNT = "discount"

CELLS = 64  # So many cells cover an open window, and so many the span that is remembered.
SPANS_KEPT = 14  # exp(-14) is under a millionth: a discounted lesson that old is forgotten.
# However old, the newest impressions that are known count in full. Forgetting by the clock
# would otherwise leave a line item that wins rarely with nothing known, and a bid at the cap.
KEPT = 50
RARE_FROM = 20  # Ceilings of more than so many caps are for values that come rarely.
# Methods that grow a tree, and whether they learn from wins alone.
TREES = {"exptree": False, "exptree-win-only": True}
LINEAR = "linear"
RATIO = 2.0
ALARM = 8.0  # ln 3,000; by simulation 5,000 hits and more go by between two false alarms.


@dataclass(frozen=True, slots=True)
class Drift:
    """
    How the old is forgotten.

    Args:
        how: "discount" or "window".
        by: "rounds" or "time".
        size: Effective memory in rounds, or in milliseconds.
    """

    how: str
    by: str
    size: int

    @property
    def horizon(self) -> int:
        """How old a lesson may be and still count, in the unit of `size`."""
        return self.size * SPANS_KEPT if self.how == DISCOUNT else self.size

    @property
    def piece(self) -> int:
        """The span one cell may cover, in the unit of `size`."""
        return max(1, self.horizon // CELLS)


@dataclass(frozen=True, slots=True)
class MarketRules:
    """
    How news of competing bids is counted.

    Args:
        top: Largest price counted, in nanos; no cap lies above it.
        priced: Whether the source tells the competing bid of every loss.
    """

    top: int
    priced: bool

    @staticmethod
    def of(cap: int, *, priced: bool) -> MarketRules:
        """The top is the next of 1, 2, 5 times a power of ten: most new caps recount nothing."""
        return MarketRules(_top(cap), priced)


@lru_cache(maxsize=256)
def _top(cap: int) -> int:
    tops = (step * 10**power for power in count(3) for step in (1, 2, 5))
    return int(next(top for top in tops if top >= cap))


@dataclass(frozen=True, slots=True)
class Rules:
    """
    What the fold needs of a configuration; money in nanos, durations in milliseconds.

    Args:
        ceiling: Largest value of one impression.
        arrival: "once" (the first value of a win is its whole value) or "accrues" (all that
            comes within the window is).
        window_ms: How long values are waited for.
        paid_by: Kind of entry that makes an impression paid for: "won" or "billed".
        rare: Whether values come rarely, so that a detector counts them and not their size.
        silence_ms: A value source silent for longer keeps windows open; None for never.
        drift: How the old is forgotten; None for never.
        ratio: What a change detector looks for; None for no detector.
        alarm: The score that is an alarm, in nats.
        restarts: Whether an alarm makes the learner begin afresh.
        tree: The game of the tree of exponential weights, where a method grows one.
        dimensions: Length of the vector of features, where a method reads them; else 0.
        hints: Whether the caller's own predictions are calibrated.
        paced: Whether a multiplier holds spend to a rate; which one, the stream says.
        returning: The return target and how its multiplier moves; None for no target.
        control: Whether a share of traffic is kept on a plain rule; which one, the stream says.
    """

    ceiling: int
    arrival: str = ACCRUES
    window_ms: int = 604_800_000
    paid_by: str = "won"
    rare: bool = False
    silence_ms: int | None = None
    drift: Drift | None = None
    ratio: float | None = None
    alarm: float = ALARM
    restarts: bool = False
    tree: exptree_rules.Rules | None = None
    market: MarketRules | None = None
    dimensions: int = 0
    hints: bool = False
    paced: bool = False
    returning: return_target.Rules | None = None
    control: bool = False

    @property
    def cell_ms(self) -> int:
        """How long one cell of impressions with an open window lasts."""
        by_window = max(1, self.window_ms // CELLS)
        if self.drift is not None and self.drift.by == "time":
            return min(by_window, self.drift.piece)
        return by_window

    @staticmethod
    def from_config(config: Mapping[str, Any]) -> Rules:
        """Read a line item's internal configuration, defaults already filled in."""
        value, change = config["value"], config["value"].get("change")
        looked_for = change or {}
        return Rules(
            value["ceiling"],
            value["arrival"],
            value["window_ms"],
            config["spend_on"],
            value["ceiling"] > RARE_FROM * config["bid_cap"],
            (config.get("tripwires") or {}).get("value_silence_ms"),
            drift_of(value.get("drift")),
            None if change is None else looked_for.get("ratio", RATIO),
            looked_for.get("threshold", ALARM),
            looked_for.get("action") == "restart",
            tree_rules(config),
            MarketRules.of(config["bid_cap"], priced=config.get("losses", "bare") == "priced"),
            dimensions_of(config["policy"]),
            bool(value.get("hints")),
            is_paced(config),
            return_rules(config),
            config.get("control") is not None,
        )


def dimensions_of(policy: Mapping[str, Any]) -> int:
    """The length of the vector of features; 0 for a method that reads none."""
    return int(policy["dimensions"]) if policy["method"] == LINEAR else 0


def tree_rules(config: Mapping[str, Any]) -> exptree_rules.Rules | None:
    """The game of a line item whose method grows a tree; None for every other."""
    method = config["policy"]["method"]
    if method not in TREES:
        return None
    ticks = Ticks.fitting(config["bid_cap"])
    return exptree_rules.Rules(ticks, config["value"]["ceiling"], win_only=TREES[method])


def is_paced(config: Mapping[str, Any]) -> bool:
    """Whether a line item names a method of pacing."""
    return bool((config.get("pacing") or {}).get("method", "none") != "none")


def return_rules(config: Mapping[str, Any]) -> return_target.Rules | None:
    """
    The return target of a line item, with the scale of what a win does to it.

    By the guess, values of impressions spread by the root of usual value times mean value: with
    that for a scale a win moves ln lambda by about one step of chance, however rare values are.
    """
    wish = config.get("return_target")
    if wish is None:
        return None
    value = config["value"]
    scale = math.isqrt(value["typical"] * value["expected"]["per_impression"])
    return return_target.Rules(wish["value_per_unit"], STEP, max(scale, 1))


def drift_of(said: Mapping[str, Any] | None) -> Drift | None:
    """The drift a configuration asks for."""
    if said is None:
        return None
    by = "rounds" if said.get("rounds") is not None else "time"
    return Drift(said["how"], by, said["rounds"] if by == "rounds" else said["memory_ms"])
