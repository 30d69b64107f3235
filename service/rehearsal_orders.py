"""From what somebody wishes rehearsed to an order that can be played, apart from who asks; pure.

Nothing rides on a rehearsal, so costly settings need no confirmation; those that cannot work are
refused as when a line item is created.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from service.configuring import filled, merged, object_to
from service.decision.curves import curves
from service.decision.learnability import LEARNING_COST, defaults
from service.decision.methods import METHODS
from service.decision.price import ready
from service.decision.terms import Terms
from service.errors import Malformed
from service.learner.memory import Memory

Config = Mapping[str, Any]
RECORDED = {"law": "recorded"}
CURVE_ASSUMED = (
    "competing bids are drawn from the line item's win curve; where it says nothing, they are "
    "taken for more than anybody bids",
    "values are drawn from the learnt mean and the usual value, independent of competing bids",
)


def order_of(wish: Mapping[str, Any], config: Config, curve: Config | None = None) -> Config:
    """
    The order for a wish.

    Args:
        wish: From the form.
        config: The line item that the policies start from, complete or as it is created.
        curve: For the market of its own curve: what `own_law` made of it.

    Raises:
        Malformed: A policy that cannot work, or a market that does not fit it.
    """
    # Defaults are filled in before the changes, so a change never meets a missing part.
    base, _ = filled(config)
    policies = [
        {"name": one["name"], "config": _policy(base, one["changes"])} for one in wish["policies"]
    ]
    market = _market(wish["market"], policies[0]["config"], curve)
    if curve is not None:
        # Where the curve says nothing no policy may win, so not one whose cap was raised either.
        beyond = max(int(one["config"]["bid_cap"]) for one in policies) + 1
        rivals = market["rivals"]
        market["rivals"] = {**rivals, "beyond": max(int(rivals["beyond"]), beyond)}
    for at, policy in enumerate(policies):
        _check(policy["config"], market, at)
    sizes = {name: wish[name] for name in ("rounds", "seeds", "seed", "block")}
    return {"name": wish["name"], "policies": policies, "market": market, **sizes}


def own_law(state: bytes, config: Config, auction: str) -> dict[str, Any]:
    """
    Laws of competing bids and values as a line item has learnt them.

    Raises:
        Malformed: Nothing is known of competing bids in this kind of auction yet.
    """
    snapshot = ready(Memory.from_bytes(state), Terms.from_config(config))
    told = curves(snapshot)
    sources = [one for one in _sources(told) if one["auction"] == auction]
    if not sources:
        raise Malformed("nothing_known", "No auction has told anything of competing bids yet.")
    # The source that told most, since one law stands for all.
    best = max(sources, key=lambda one: float(one["auctions"]))
    # From nothing, so that a chance that falls by luck of its cell is kept level.
    prices, chances = [0], [0.0]
    for row in best["prices"]:
        chance = row["win_probability"]["estimate"]
        if row["identified"] and chance is not None and row["price_cpm_nanos"] > prices[-1]:
            prices.append(row["price_cpm_nanos"])
            chances.append(max(chances[-1], float(chance)))
    beyond = 2 * int(config["bid_cap"]) + 1
    # Beyond what the line item could bid, with room for policies of a higher cap.
    rivals = {"law": "empirical", "prices": prices[1:], "chances": chances[1:], "beyond": beyond}
    if len(prices) < 2:
        raise Malformed("nothing_known", "The curve says nothing of any price yet.")
    return {"rivals": rivals, "values": _events(config, told["value"]), "source": best["source"]}


def _sources(told: Mapping[str, Any]) -> list[dict[str, Any]]:
    return list(told["sources"])


def _policy(base: Config, changes: Config) -> dict[str, Any]:
    after, _ = defaults(merged(base, changes))
    object_to(after, LEARNING_COST)
    return after


def _check(config: Config, market: Config, at: int) -> None:
    method, path = METHODS[config["policy"]["method"]], {"field": f"policies.{at}"}
    if market["auction"] != "second" and method.by_law:
        sentence = "This method draws its bids for a second price; it bids in no other."
        raise Malformed("auction_not_for_method", sentence, path)
    if market["values"]["law"] == "even" and not config["value"].get("hints"):
        sentence = "Values that are known before the bid reach a policy with value.hints only."
        raise Malformed("bad_field", sentence, path)


def _market(said: Config, config: Config, curve: Config | None) -> dict[str, Any]:
    market = dict(said)
    if curve is not None:
        market |= {"rivals": curve["rivals"], "values": curve["values"]}
    if market["kind"] == "own_log":
        return {**market, "values": RECORDED}
    if market["rivals"] is None and market["kind"] not in ("arena", "coin_flip", "above_value"):
        market["rivals"] = {"law": "uniform", "low": 0, "high": int(config["bid_cap"])}
    market["values"] = market["values"] or _events(config, None)
    market["top"] = max(int(config["bid_cap"]), 1)
    return market


def _events(config: Config, learnt: object) -> dict[str, Any]:
    """Values of the usual amount, as often as the mean says: the learnt one, or the guess."""
    value = config["value"]
    mean = value["expected"]["per_impression"]
    if isinstance(learnt, Mapping) and learnt.get("estimate_cpm_nanos"):
        mean = learnt["estimate_cpm_nanos"]
    amount = max(int(value["typical"]), 1)
    # A mean above the usual amount cannot be reached by events of it, only come close.
    chance = min(float(mean) / amount, 1.0)
    return {"law": "events", "chance": chance, "amount": amount}
