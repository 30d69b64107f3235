"""All rules on all facts: the one table of rules by name, and nothing that knows a database."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from service.tripwires import money_rules, traffic_rules, value_rules
from service.tripwires.history import Facts
from service.tripwires.saying import Finding, Saw
from service.tripwires.setups import OFF, Setup

RULES: dict[str, Callable[[Facts, Setup], Saw | None]] = {
    "no_outcomes": traffic_rules.no_outcomes,
    "win_rate": traffic_rules.win_rate,
    "clearing_price": money_rules.clearing_price,
    "spend_speed": money_rules.spend_speed,
    "value_count": value_rules.value_count,
    "value_size": value_rules.value_size,
    "zero_values": value_rules.zero_values,
    "unknown_values": value_rules.unknown_values,
    "silent_bids": traffic_rules.silent_bids,
    "voids": traffic_rules.voids,
    "late_outcomes": traffic_rules.late_outcomes,
    "refused_outcomes": traffic_rules.refused_outcomes,
    "unfunded": money_rules.unfunded,
    "disputed": money_rules.disputed,
    "learner_halted": money_rules.learner_halted,
}


def judge(facts: Facts, setups: Mapping[str, Setup]) -> list[Finding]:
    """What every armed rule has to say of these facts."""
    found = list[Finding]()
    for name, setup in setups.items():
        if setup.action == OFF:
            continue
        saw = RULES[name](facts, setup)
        if saw is not None:
            found.append(Finding(name, setup.action, saw, setup.window_ms or 0))
    return found
