"""What a line item's configuration becomes before it is kept, apart from who may order it; pure."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

from service.decision.counts import Counts
from service.decision.learnability import defaults, objection
from service.decision.terms import Terms
from service.errors import Malformed, NeedsConfirmation
from service.learner.memory import Memory
from service.learner.rules import RARE_FROM, Rules, tree_rules
from service.ledger.entries import Entry
from service.money import nanos_text

LEARNING_COST = "learning_cost"
# What is confirmed when it is raised to so many times what it was, and whether it is a CPM.
DANGEROUS = (("budget", 10, False), ("daily_budget", 10, False), ("bid_cap", 3, True))
# Their settings belong together: what is not said anew is not kept from before.
AS_A_WHOLE = frozenset({"policy", "drift", "change", "return_target", "control"})


def filled(config: Mapping[str, Any]) -> tuple[dict[str, Any], list[str]]:
    """Defaults for what nobody gave, and their names."""
    value = dict(config.get("value") or {})
    taken = [] if value.get("ceiling") else ["value.ceiling"]
    # The largest ceiling for which a published bound still says much.
    value["ceiling"] = value.get("ceiling") or RARE_FROM * config["bid_cap"]
    full, more = defaults({**config, "value": value})
    return full, taken + more


def merged(config: Mapping[str, Any], changed: Mapping[str, Any]) -> dict[str, Any]:
    """Objects are merged, all else is replaced; a new method begins with its own settings."""
    after = dict(config)
    for name, value in changed.items():
        old = after.get(name)
        if name not in AS_A_WHOLE and isinstance(value, Mapping) and isinstance(old, Mapping):
            value = merged(old, value)
        after[name] = value
    return after


def object_to(config: Mapping[str, Any], confirm: str | None) -> None:
    """
    Refuse what cannot work, and what only a caller who knows may order.

    Raises:
        Malformed: Settings that the method cannot work with.
        NeedsConfirmation: Allowed only with the word named in the refusal.
    """
    found = objection(config, confirm)
    if found is None:
        return
    if found.code == LEARNING_COST:
        raise NeedsConfirmation(found.code, found.detail, {"confirm": found.code})
    raise Malformed(found.code, found.detail)


def object_to_change(
    before: Mapping[str, Any], after: Mapping[str, Any], confirm: str | None, reason: str | None
) -> None:
    """
    Refuse a change that cannot work, or that may cost a lot and is not confirmed by its values.

    Raises:
        Malformed: Settings that the method cannot work with.
        NeedsConfirmation: With the exact value that `confirm` must carry.
    """
    said = set((confirm or "").split())
    object_to(after, LEARNING_COST if LEARNING_COST in said else confirm)
    wanted = dangers(before, after)
    if not wanted:
        return
    # What was confirmed of the cost of learning is confirmed still.
    words = " ".join([*sorted(said & {LEARNING_COST}), *wanted])
    if not set(wanted) <= said:
        detail = f"This change may cost a lot of money: {'; '.join(wanted.values())}."
        detail += " Send confirm as named here, with a reason."
        raise NeedsConfirmation("needs_confirmation", detail, {"confirm": words})
    if reason is None:
        raise Malformed("reason_missing", "A change that may cost a lot of money needs a reason.")


def dangers(before: Mapping[str, Any], after: Mapping[str, Any]) -> dict[str, str]:
    """
    What of a change may cost a lot of money: the value that confirms each, and a sentence.

    The value carries the new amount, so that a word kept from yesterday confirms nothing else.
    """
    found = {}
    for name, times, in_cpm in DANGEROUS:
        old, new = before.get(name), after.get(name)
        # Without a daily budget a day may spend all there is.
        if old is None or (after["budget"] if new is None else new) < times * old:
            continue
        label = f"{name}_cpm" if in_cpm else name
        if new is None:
            found[f"{label}=none"] = f"{label} is taken away"
        else:
            amount = nanos_text(new * 1000 if in_cpm else new)
            found[f"{label}={amount}"] = f"{label} is raised to {amount}, {times} times or more"
    if before.get("strict") and not after.get("strict"):
        found["strict=false"] = "strict is turned off, so silent holds are freed"
    return found


def taught_otherwise(before: Mapping[str, Any], after: Mapping[str, Any]) -> bool:
    """Whether the lessons must be read again, since they are read by other rules now."""
    return Rules.from_config(before) != Rules.from_config(after)


def drawn_otherwise(before: Mapping[str, Any], after: Mapping[str, Any]) -> bool:
    """Whether the published state stands for another law of bids than it did."""
    return tree_rules(before) != tree_rules(after)


def guessed_otherwise(before: Mapping[str, Any], after: Mapping[str, Any]) -> bool:
    """Whether what kin once gave is to be taken back: they or the guess beside them changed."""
    if not before.get("kin"):
        return False
    old, new = before["value"], after["value"]
    asked = [(value["typical"], value["expected"]["per_impression"]) for value in (old, new)]
    return asked[0] != asked[1] or bool(after.get("kin") != before["kin"])


def pooled(kin: Iterable[tuple[Mapping[str, Any], bytes]], ceiling: int) -> Entry | None:
    """
    The prior lesson that sibling line items give together; None while none has seen a value.

    Their impressions count as one: all that they brought over all that were bought. What this
    guess weighs is `value.expected.conversions`, however many impressions stand behind it.

    Args:
        kin: Configuration and learner state of each.
        ceiling: Largest value of the line item that takes the guess, in nanos.
    """
    known = converted = amount = 0.0
    for config, state in kin:
        counts = Counts.of(Memory.from_bytes(state), Terms.from_config(config))
        known += float(counts.known)
        converted += float(counts.converted)
        amount += float(counts.amount)
    if not (known > 0.0 and converted > 0.0 and amount > 0.0):
        return None
    body = {
        # A guess of nothing would never win and never learn, and no value lies above the ceiling.
        "per_impression": min(max(1, round(amount / known)), ceiling),
        "typical": min(max(1, round(amount / converted)), ceiling),
        "impressions": round(known, 3),
        "conversions": converted,
    }
    return Entry("prior", body)
