"""Evidence before a change of method: what fits a line item's feedback and market, with reasons.

For people, and never applied by itself: nothing here moves a price, ranks a method or scores it.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from typing import Any

from service import money
from service.decision.learnability import objection, wins_at_cap
from service.decision.method import Method
from service.decision.methods import METHODS
from service.decision.rule import SECOND
from service.decision.terms import Terms
from service.learner.memory import Memory
from service.learner.rules import RARE_FROM

LOSSES_FEW = 20  # Of fewer losses nobody can tell what a source usually tells.
ALWAYS_SHARE = 0.99
NEVER_APPLIED = (
    "evidence, not advice: in alphabetical order, without a score, and never applied by itself; "
    "rehearse a change before money rides on it"
)
NO_FIGURE = "no figure: what it costs to learn hangs on a market that nobody knows"


def evidence(
    config: Mapping[str, Any], state: bytes, told: Sequence[tuple[str, Mapping[str, Any]]]
) -> dict[str, Any]:
    """
    What a line item's own log says of each method; money in nanos under names in `_nanos`.

    Args:
        config: Internal configuration, defaults filled in.
        state: The published memory.
        told: Kind and body of its newest outcomes.
    """
    memory, terms = Memory.from_bytes(state), Terms.from_config(config)
    feedback, market = _feedback(config, told), _market(memory, terms, told)
    return {
        "currency": terms.currency,
        "says": NEVER_APPLIED,
        "feedback": feedback,
        "market": market,
        "methods": [_method(METHODS[name], config, feedback) for name in sorted(METHODS)],
    }


def _feedback(
    config: Mapping[str, Any], told: Sequence[tuple[str, Mapping[str, Any]]]
) -> dict[str, Any]:
    losses = [body for kind, body in told if kind == "lost"]
    # Told is not the same as nought: a competing bid of 0 is news as well.
    priced = sum(body.get("to_win") is not None for body in losses)
    enough = len(losses) >= LOSSES_FEW
    return {
        "outcomes_read": len(told),
        "losses": len(losses),
        "losses_with_competing_bid": priced,
        "losses_are_priced": priced >= ALWAYS_SHARE * len(losses) if enough else None,
        "configured_as": config.get("losses", "bare"),
        "says": "too few losses to tell what the source tells of them" if not enough else None,
    }


def _market(
    memory: Memory, terms: Terms, told: Sequence[tuple[str, Mapping[str, Any]]]
) -> dict[str, Any]:
    total = memory.total
    auctions = Counter(body.get("auction") or terms.auction for _, body in told)
    return {
        "auctions_seen": dict(sorted(auctions.items())),
        "ceiling_in_caps": terms.ceiling / terms.cap,
        "values_are_rare": terms.ceiling > RARE_FROM * terms.cap,
        "impressions_known": total.known,
        "impressions_that_brought_something": total.converted,
        "changes_found": memory.watch.alarms,
        "looks_for_changes": terms.on_change is not None,
        "forgets": terms.drift is not None,
    }


def _method(
    method: Method, config: Mapping[str, Any], feedback: Mapping[str, Any]
) -> dict[str, Any]:
    losses = _losses(config, feedback)
    # Asked as a change of method would be, so that evidence and refusal never differ.
    wished = {**config, "policy": _policy(method, config), "losses": losses}
    against = objection(wished, None)
    # What only costs money can be confirmed, so it is a reason and no misfit.
    refused = against is not None and against.code != "learning_cost"
    return {
        "method": method.name,
        "in_use": config["policy"]["method"] == method.name,
        "fits": not refused,
        "reasons": _reasons(method, config, feedback, None if against is None else against.detail),
        "learning_cost": None if refused else _cost(method, Terms.from_config(wished)),
        "assumes": method.assumes,
        "source": method.source,
    }


def _policy(method: Method, config: Mapping[str, Any]) -> dict[str, Any]:
    """The policy in use, or another method's with its defaults; a flat price bids the guess."""
    if config["policy"]["method"] == method.name:
        return dict(config["policy"])
    guess = min(config["value"]["expected"]["per_impression"], config["bid_cap"])
    given = {name: one.default for name, one in method.settings.items()}
    said = {name: guess if one is None else one for name, one in given.items()}
    return {"method": method.name, **said}


def _losses(config: Mapping[str, Any], feedback: Mapping[str, Any]) -> str:
    """As configured, unless the log shows otherwise."""
    seen = feedback["losses_are_priced"]
    return str(config.get("losses", "bare")) if seen is None else "priced" if seen else "bare"


def _reasons(
    method: Method, config: Mapping[str, Any], feedback: Mapping[str, Any], against: str | None
) -> list[str]:
    said = [] if against is None else [against]
    if method.needs_priced_losses and feedback["losses_are_priced"]:
        said.append("nearly every loss of late told its competing bid, which it learns from")
        if config.get("losses", "bare") != "priced":
            said.append('the line item would have to say losses: "priced"')
    if not method.learns:
        said.append("it learns nothing of values, so it costs nothing to learn and finds nothing")
    if method.takes_prior:
        said.append("the guess of the configuration moves its first prices")
    if method.by_features:
        said.append("it reads features, and is of use where callers send them")
    if config["auction"] != SECOND and not method.by_law:
        said.append("its value is shaded by the win curve: no theorem joins the two")
    return said


def _cost(method: Method, terms: Terms) -> dict[str, Any]:
    """What it may cost until a bid leaves the cap, where that can be worked out."""
    if not method.learns or method.by_law or method.draw is not None:
        free = not method.learns and not method.by_law
        return {"at_most_nanos": 0 if free else None, "wins": None, "says": _free(free)}
    # The dearest start there is: nothing converts, and every win costs the cap.
    wins = wins_at_cap(terms)
    most = wins * terms.cap
    allowed = terms.allowance
    limited = (
        ""
        if allowed is None
        else (
            f"; the learning allowance of {money.nanos_text(allowed)} {terms.currency} holds "
            "bids to the estimate once so much is lost"
        )
    )
    known = f"{wins:,} wins are known, all of them worthless" if wins > 1 else "a win is known"
    says = (
        f"until {known}, it may bid the cap, which costs up "
        f"to {money.nanos_text(most)} {terms.currency}; with values it takes longer and costs less"
        f"{limited}"
    )
    return {"at_most_nanos": most, "wins": wins, "says": says}


def _free(free: bool) -> str:
    return "nothing is learnt, so nothing is paid for learning" if free else NO_FIGURE
