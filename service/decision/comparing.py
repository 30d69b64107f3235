"""Does learning help here: the two arms of a control share compared, for people; moves no price.

The difference of value per unit of money spent, with an interval that holds at every moment at
once. It joins four sequences: of the mean value of an impression and of its mean cost, in each
arm (Howard, Ramdas, McAuliffe, Sekhon, "Time-uniform, nonparametric, nonasymptotic confidence
sequences", Ann. Statist. 49(2):1055-1080, 2021). A ratio lies between the least value over the
most cost and the most value over the least cost, so no variance of a ratio is needed.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any, NamedTuple

from service.decision.terms import Terms
from service.learner import arm_part, count_sequences
from service.learner.arm_part import AMOUNT, BOUGHT, CONTROL, CONVERTED, MAIN, PAID, Arms
from service.learner.memory import Memory, UnreadableMemory
from service.learner.rules import RARE_FROM
from service.learner.sequences import bounded_half_width

RISK = 0.05
PARTS = 4  # Sequences that must all hold, each with its part of the risk.
NARROWEST = 1000.0
NARROWEST_HITS = 10.0
UNKNOWN = "cannot tell yet: the interval of the difference holds 0"
HELPS = "learning helps here: a unit of money brings more than under the plain rule"
HARMS = "the plain rule brings more per unit of money than the method does here"
SPENT = (
    "the control arm has spent its share of the budget, so the method bids for all traffic; what "
    "both have brought is still compared"
)
ASSUMES = (
    "95 % interval for the difference, valid at every moment at once, however often it is read; "
    "assumes that in each arm the mean value of an impression does not change and that values do "
    "not depend on each other, and nothing of costs but that none is above the cap; only "
    "impressions whose window has closed are compared, in both arms alike"
)
RARE = (
    "; of rare values it counts how often something came and takes the mean amount to be the "
    "same in both arms, whose own error is not in it"
)
TEACHES = (
    "wins of the control arm teach value and market as all wins do; the method's law of bids, "
    "where it has one, learns nothing from them, since they were not drawn from it"
)


class Ratio(NamedTuple):
    """Value per unit of money of one arm: so far, and its limits."""

    estimate: float | None
    low: float
    high: float


def show_control(config: Mapping[str, Any], memory: Memory) -> dict[str, object] | None:
    """The control block of a state; money in nanos under names in `_nanos`; None without one."""
    said = config.get("control")
    if said is None:
        return None
    try:
        arms = arm_part.read(memory.part(arm_part.NAME))
    except UnreadableMemory:
        arms = Arms()
    terms = Terms.from_config(config)
    ratios = {arm: ratio(arms, arm, terms) for arm in (MAIN, CONTROL)}
    low = ratios[MAIN].low - ratios[CONTROL].high
    high = ratios[MAIN].high - ratios[CONTROL].low
    found = [ratios[arm].estimate for arm in (MAIN, CONTROL)]
    over = (arms.all_of(CONTROL, PAID) + said["price"]) * 10**9 > said["share"] * config["budget"]
    rare = terms.ceiling > RARE_FROM * terms.cap
    return {
        "share": said["share"] / 10**9,
        "method": said["method"],
        "price_cpm_nanos": said["price"],
        "arms": [_arm(arms, arm, ratios[arm]) for arm in (MAIN, CONTROL)],
        "difference": {
            "unit": f"value per {terms.currency} spent, the method less the plain rule",
            "estimate": None if None in found else (found[0] or 0.0) - (found[1] or 0.0),
            **_limits(low, high),
            "interval": ASSUMES + (RARE if rare else ""),
        },
        "says": HELPS if low > 0.0 else HARMS if high < 0.0 else UNKNOWN,
        "money_says": SPENT if over else None,
        "teaches": TEACHES,
    }


def ratio(arms: Arms, arm: str, terms: Terms) -> Ratio:
    """What a unit of money has brought in one arm, of what has had its time."""
    row = arms.ripe.get(arm)
    if row is None or not row[BOUGHT] or not row[PAID]:
        return Ratio(None, 0.0, math.inf)
    bought, paid = row[BOUGHT], row[PAID]
    value_low, value_high = _value(arms, arm, terms)
    half = float(bounded_half_width(float(bought), NARROWEST, RISK / PARTS))
    cost_low, cost_high = paid / bought - half * terms.cap, paid / bought + half * terms.cap
    high = value_high / cost_low if cost_low > 0.0 else math.inf
    return Ratio(row[AMOUNT] / paid, value_low / min(cost_high, float(terms.cap)), high)


def _value(arms: Arms, arm: str, terms: Terms) -> tuple[float, float]:
    row = arms.ripe[arm]
    bought, risk = float(row[BOUGHT]), RISK / PARTS
    if terms.ceiling <= RARE_FROM * terms.cap:
        hits = min(row[AMOUNT] / terms.ceiling, bought)
        low, high = count_sequences.bernoulli_interval(hits, bought, risk, NARROWEST)
        return float(low) * terms.ceiling, float(high) * terms.ceiling
    tuned = NARROWEST_HITS * terms.typical / terms.expected
    low, high = count_sequences.poisson_interval(float(row[CONVERTED]), bought, risk, tuned)
    both = [sum(one[which] for one in arms.ripe.values()) for which in (AMOUNT, CONVERTED)]
    amount = both[0] / both[1] if both[1] else float(terms.typical)
    return float(low) * amount, float(high) * amount


def _arm(arms: Arms, arm: str, found: Ratio) -> dict[str, object]:
    row = arms.ripe.get(arm, [0, 0, 0, 0])
    return {
        "arm": arm,
        "impressions": row[BOUGHT],
        "impressions_still_open": arms.all_of(arm, BOUGHT) - row[BOUGHT],
        "spent_nanos": row[PAID],
        "value_nanos": row[AMOUNT],
        "value_per_unit": {"estimate": found.estimate, **_limits(found.low, found.high)},
    }


def _limits(low: float, high: float) -> dict[str, object]:
    ends = {"low": low, "high": high}
    return {name: end if math.isfinite(end) else None for name, end in ends.items()}
