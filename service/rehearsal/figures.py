"""From what policies did to figures over seeds: means, standard errors, spans, curves."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from service.guard.fees import NONE, Fees
from service.learner.arrays import Numbers, double
from service.rehearsal.hindsight import FixedBid, best_fixed_bid
from service.rehearsal.taken import PASSED, Columns, Nanos

POINTS = 40  # Of a curve over time.
TRIED_MAX = 200  # Fixed bids looked at that a budget ends before the last auction.
LOW, HIGH = 10.0, 90.0  # Per cent of the seeds below either end of a span.


@dataclass(frozen=True, slots=True)
class Run:
    """
    One policy on one seed; money in nanos.

    Args:
        ends: The auction at which each point of the curves lies, from 1.
        surplus: Worth less cost of what was won, up to each point.
        spend: Cost up to each point.
        bid: The mean bid between two points; not a number where none was made.
        best: The best fixed bid in hindsight; None where prices are only bounded.
        exact: Surplus of wins whose value is known.
    """

    rounds: int
    ends: Nanos
    surplus: Numbers
    spend: Numbers
    bid: Numbers
    bids: int
    wins: int
    value: int
    exact: int
    unvalued: int
    unknown: int
    bounded: int
    best: FixedBid | None
    untold: int = 0
    untold_paid: int = 0


def run_of(
    columns: Columns, config: Mapping[str, Any], auction: str, untold: tuple[int, int] = (0, 0)
) -> Run:
    """Sum one run up; of outcomes that nobody reported, their number and cost."""
    rounds = columns.least.size
    # Of a short run every auction is a point, and none lies before the first.
    ends = np.unique(np.linspace(0, rounds, POINTS + 1).astype(np.int64))[1:]
    worth = np.where(columns.won, columns.worth, 0)
    gained = worth - columns.paid
    # A pass is kept out of the mean bid, or frugal pacing would look like bidding low.
    made = columns.bid != PASSED
    bids = _between(np.where(made, columns.bid, 0), ends), _between(made, ends)
    bounded = int((~columns.told).sum())
    return Run(
        rounds,
        ends,
        double(np.cumsum(gained)[ends - 1]) if rounds else np.zeros(0),
        double(np.cumsum(columns.paid)[ends - 1]) if rounds else np.zeros(0),
        np.divide(bids[0], bids[1], out=np.full(ends.size, np.nan), where=bids[1] > 0),
        int(made.sum()),
        int(columns.won.sum()),
        int(np.where(columns.won, columns.value, 0).sum()),
        int(gained[columns.valued].sum()),
        int((columns.won & ~columns.valued).sum()),
        int(columns.unknown.sum()),
        bounded,
        # One unknown price or value leaves every sum over all auctions unknown.
        None if bounded or not columns.valued.all() else _best(columns, config, auction),
        *untold,
    )


def policy_figures(
    name: str, config: Mapping[str, Any], runs: Sequence[Run], passes: Counter[str]
) -> dict[str, Any]:
    """Everything said of one policy; amounts in nanos under names in `_nanos`."""
    surplus = [run.surplus[-1] if run.rounds else 0.0 for run in runs]
    spend = [run.spend[-1] if run.rounds else 0.0 for run in runs]
    budget = int(config["budget"])
    return {
        "name": name,
        "method": config["policy"]["method"],
        "surplus": money_figure(surplus),
        "spend": money_figure(spend),
        "value": money_figure([run.value for run in runs]),
        "wins": figure([run.wins for run in runs]),
        "bids": figure([run.bids for run in runs]),
        # What nobody reported no budget knows of, so it fills none.
        "budget_share": figure(
            [(part - run.untold_paid) / budget for part, run in zip(spend, runs, strict=True)]
        ),
        "budget_nanos": budget,
        "cap_cpm_nanos": int(config["bid_cap"]),
        **_regret(runs, surplus),
        **_replayed(runs),
        **_untold(runs),
        "passes": {reason: count / len(runs) for reason, count in sorted(passes.items())},
        "curve": _curve(runs),
    }


def differences(names: Sequence[str], runs: Sequence[Sequence[Run]]) -> list[dict[str, Any]]:
    """What each further policy earned more than the first one, seed by seed."""
    # In pairs, as policies meet the same auctions: luck that both share cancels.
    final = [double([run.surplus[-1] if run.rounds else 0.0 for run in of]) for of in runs]
    return [
        {"policy": name, "than": names[0], "surplus": money_figure(one - final[0])}
        for name, one in zip(names[1:], final[1:], strict=True)
    ]


def figure(numbers: Sequence[float] | Numbers) -> dict[str, Any]:
    """Mean over the seeds, its standard error, and the span that holds 80 % of them."""
    each = double(numbers)
    # One seed says nothing of its own luck: no error rather than one of 0.
    error = float(each.std(ddof=1) / np.sqrt(each.size)) if each.size > 1 else None
    low, high = np.percentile(each, [LOW, HIGH])
    return {"mean": float(each.mean()), "error": error, "low": float(low), "high": float(high)}


def money_figure(numbers: Sequence[float] | Numbers) -> dict[str, Any]:
    """The same of amounts, rounded to whole nanos."""
    found = figure(numbers)
    return {f"{name}_nanos": None if n is None else round(n) for name, n in found.items()}


def price_figure(numbers: Sequence[float] | Numbers) -> dict[str, Any]:
    """The same of prices per impression, which people read as CPM."""
    found = figure(numbers)
    return {f"{name}_cpm_nanos": None if n is None else round(n) for name, n in found.items()}


def _regret(runs: Sequence[Run], surplus: Sequence[float]) -> dict[str, Any]:
    best = [run.best for run in runs]
    known = [one for one in best if one is not None]
    if len(known) < len(best):
        why = "what single auctions would have cost or brought is not known"
        return {"regret": None, "best_fixed": None, "regret_unknown": why}
    regrets = [one.surplus - own for one, own in zip(known, surplus, strict=True)]
    return {
        "regret": money_figure(regrets),
        # The median, since one odd seed whose best bid lies far off would move a mean.
        "best_fixed": {
            "bid_cpm_nanos": round(float(np.median([one.bid for one in known]))),
            "surplus": money_figure([one.surplus for one in known]),
        },
    }


def _replayed(runs: Sequence[Run]) -> dict[str, Any]:
    """What is said only where not all is known; nothing elsewhere."""
    if not any(run.unvalued or run.unknown or run.bounded for run in runs):
        return {}
    return {
        "surplus_exact": money_figure([run.exact for run in runs]),
        "wins_of_unknown_value": figure([run.unvalued for run in runs]),
        "auctions_of_unknown_outcome": figure([run.unknown for run in runs]),
        "auctions_of_bounded_price": figure([run.bounded for run in runs]),
    }


def _untold(runs: Sequence[Run]) -> dict[str, Any]:
    """What nobody reported: it is in the spend, but no budget knows of it."""
    if not any(run.untold for run in runs):
        return {}
    return {
        "outcomes_never_told": figure([run.untold for run in runs]),
        "spend_never_told": money_figure([run.untold_paid for run in runs]),
    }


def _curve(runs: Sequence[Run]) -> list[dict[str, Any]]:
    ends = runs[0].ends.tolist()
    columns = {
        name: np.stack([getattr(run, name) for run in runs]) for name in ("surplus", "spend")
    }
    bids = np.stack([run.bid for run in runs])
    rows = []
    for place, end in enumerate(ends):
        made = bids[:, place][~np.isnan(bids[:, place])]
        row = {name: money_figure(column[:, place]) for name, column in columns.items()}
        bid = None if not made.size else round(float(made.mean()))
        rows.append({"auction": end, **row, "bid_cpm_nanos": bid})
    return rows


def _best(columns: Columns, config: Mapping[str, Any], auction: str) -> FixedBid:
    fees, least = Fees.of(config.get("fees")), columns.least
    # The best bid pays fees as well; without them it would beat any policy too easily.
    if fees != NONE:
        least = np.array([fees.gross(one) for one in least.tolist()], dtype=np.int64)
    limits = int(config["bid_cap"]), int(config["budget"])
    own = auction == "first"
    return best_fixed_bid(least, columns.worth, *limits, pays_own=own, tried_max=TRIED_MAX)


def _between(numbers: Any, ends: Nanos) -> Numbers:
    sums = np.append(0.0, np.cumsum(numbers, dtype=np.float64)[ends - 1] if ends.size else [])
    return double(np.diff(sums))
