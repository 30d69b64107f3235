"""What a line item can learn for its money, said before any is spent.

Here are the words, the objections that need `confirm`, and the defaults; none of it is
asked while bidding.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from service import money
from service.decision import spending
from service.decision.counts import nothing
from service.decision.method import Method
from service.decision.methods import METHODS, settings_of
from service.decision.setting_faults import Objection as Objection
from service.decision.setting_faults import setting_fault
from service.decision.terms import Terms
from service.learner.rules import RARE_FROM

LEARNING_COST = "learning_cost"

ALLOWANCE_SHARE = 10  # Learning may cost one typical value, and at most this part of a budget.
GUESS_SHARE_MIN = 4  # A guess below this part of the cap seldom wins, so it seldom learns.
NORMAL_QUANTILE = 1.959963984540054  # Of order 0.975.
WINS_MAX = 10**18


def defaults(partial: Mapping[str, Any]) -> tuple[dict[str, Any], list[str]]:
    """
    Fill in what a price needs and nobody gave.

    Args:
        partial: Internal configuration with at least `bid_cap` and `value.ceiling`.

    Returns:
        A new configuration, and the names of the fields that were filled in.
    """
    value, policy = dict(partial["value"]), dict(partial.get("policy") or {})
    cap, ceiling = partial["bid_cap"], value["ceiling"]
    taken: list[str] = []
    _fill(policy, "method", _method(cap, ceiling), "policy.method", taken)
    for name, setting in settings_of(policy["method"]).items():
        if setting.default is not None:
            _fill(policy, name, setting.default, f"policy.{name}", taken)
    typical = max(ceiling // 10, min(ceiling, RARE_FROM * cap))
    _fill(value, "typical", typical, "value.typical", taken)
    expected = dict(value.get("expected") or {})
    # Half the cap wins often enough to learn, and leaves room to be wrong upwards.
    guess = max(1, min(cap // 2, ceiling))
    _fill(expected, "per_impression", guess, "value.expected.per_impression", taken)
    _fill(expected, "conversions", 1, "value.expected.conversions", taken)
    value["expected"] = expected
    filled = {**partial, "value": value, "policy": policy}
    if "budget" in partial:
        pacing = dict(partial.get("pacing") or {})
        _fill(pacing, "method", spending.usual_pacing(filled), "pacing.method", taken)
        filled["pacing"] = {"profile": None, **pacing}
        filled.setdefault("return_target", None)
        allowance = max(1, min(value["typical"], partial["budget"] // ALLOWANCE_SHARE))
        _fill(filled, "allowance", allowance, "allowance", taken)
    return filled, taken


def learnability(config: Mapping[str, Any]) -> str:
    """
    Say how many conversions the budget buys at break-even, and how well that tells the value.

    The share is 1.96 / sqrt(conversions), the half-width of a 95 % interval for a Poisson
    count; amounts that differ from one another make it wider.
    """
    conversions = config["budget"] / config["value"]["typical"]
    if conversions < 1.0:
        return (
            "this budget buys less than one conversion at break-even; "
            "the value cannot be known from it"
        )
    share = 100.0 * NORMAL_QUANTILE / math.sqrt(conversions)
    counted = f"{conversions:.0f} conversion{'s' if round(conversions) != 1 else ''}"
    if share >= 100.0:
        return f"this budget buys about {counted} at break-even; too few to know the value"
    return (
        f"this budget buys about {counted} at break-even; "
        f"the value can be known to about ± {max(share, 1.0):.0f} %"
    )


def objection(config: Mapping[str, Any], confirm: str | None) -> Objection | None:
    """
    What stands against this configuration, or None.

    Args:
        config: Internal configuration, defaults filled in.
        confirm: The word of a caller who knows; "learning_cost" accepts that objection only.
    """
    fault = setting_fault(config)
    if fault is not None or confirm == LEARNING_COST:
        return fault
    terms = Terms.from_config(config)
    method = METHODS[terms.method]
    if method.published_bound and terms.ceiling > RARE_FROM * terms.cap:
        return Objection(LEARNING_COST, _bound_costs(method, terms))
    if method.takes_prior and terms.expected * GUESS_SHARE_MIN < terms.cap:
        return Objection(LEARNING_COST, _low_guess(terms))
    return None


def wins_at_cap(terms: Terms) -> int:
    """
    The fewest known wins, all worthless and all in a row, after which a bid leaves the cap.

    With values, or with rounds lost in between, it takes more.
    """
    method = METHODS[terms.method]
    # Doubling first: the answer spans from a handful to beyond any budget.
    few, many = 0, 1
    while many < WINS_MAX and not _left_cap(method, terms, many):
        few, many = many, 2 * many
    while many - few > 1:
        half = (few + many) // 2
        few, many = (few, half) if _left_cap(method, terms, half) else (half, many)
    return many


def _left_cap(method: Method, terms: Terms, wins: int) -> bool:
    won = np.asarray(float(wins))
    counts = replace(nothing(), rounds=won, known=won)
    return float(method.index(counts, terms)) < terms.cap


def _bound_costs(method: Method, terms: Terms) -> str:
    wins = wins_at_cap(terms)
    price = money.nanos_text(wins * terms.cap)
    return (
        f"With a ceiling of more than {RARE_FROM} bid caps, {method.name} bids the cap until at "
        f"least {wins:,} wins are known, even if none of them brings any value; at the cap "
        f"that costs up to {price} {terms.currency}. posterior-quantile is made for such "
        f'values. To go on, say confirm: "{LEARNING_COST}".'
    )


def _low_guess(terms: Terms) -> str:
    guess = money.nanos_text(terms.expected)
    cap = money.nanos_text(terms.cap)
    impressions = math.ceil(terms.prior_impressions)
    return (
        f"A guess of {guess} {terms.currency} per impression is below a quarter of the bid cap "
        f"of {cap} {terms.currency}. It may never win and so never learn; if it does win, about "
        f"{impressions:,} impressions, up to {money.nanos_text(impressions * terms.expected)} "
        f"{terms.currency} at the guess, weigh no more than the guess itself. A guess too high "
        f'costs less than one too low. To go on, say confirm: "{LEARNING_COST}".'
    )


def _method(cap: int, ceiling: int) -> str:
    return "posterior-quantile" if ceiling > RARE_FROM * cap else "kl-ucbid"


def _fill(into: dict[str, Any], name: str, default: object, path: str, taken: list[str]) -> None:
    if into.get(name) is None:
        into[name] = default
        taken.append(path)
