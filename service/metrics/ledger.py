"""What the clerk read of the database, as families: alike on every host, so take the greatest."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from decimal import Decimal
from typing import Any

from prometheus_client.core import GaugeMetricFamily, Metric

UNIT = Decimal(10**9)  # Nanos in one unit of a currency.
MONEY = {
    "budget": "Budgets, in units of the currency.",
    "spent": "Spent and booked, in units of the currency.",
    "held": "Held for open bids and slices, in units of the currency.",
    "unfunded": "Booked after its grace when no money was free, in units of the currency.",
    "disputed": "Charged above the bid, in units of the currency.",
}
# Name, what it says, and what one of our whole numbers is worth in its unit.
PLAIN: dict[str, tuple[str, float]] = {
    "line_items": ("Line items.", 1),
    "learner_lag_entries": ("Entries of streams that no learner has read yet.", 1),
    "learner_lag_seconds": ("Service time since the oldest entry not read yet.", 1e-3),
    "halted_learners": ("Line items that pass because their learner is halted or stuck.", 1),
    "change_lag_changes": ("Changes that the slowest live worker has not applied.", 1),
    "live_workers": ("Workers of all hosts that beat.", 1),
    "quarantined_outcomes": ("Outcomes set aside that nobody has dealt with.", 1),
    "service_clock_seconds": ("Service time; it stands still while nobody serves.", 1e-3),
    "ledger_read_timestamp_seconds": ("When the clerk read what stands here.", 1e-3),
}
LABELLED: dict[str, tuple[str, str]] = {
    "freezes": ("source", "Freezes in force, by who or what put them; `all` is the switch."),
    "slices": ("state", "Slices that still hold money or may, by state."),
    "tripwires_firing": ("rule", "Line items on which a tripwire rule fires."),
}
NAMES = (*(f"money_{part}" for part in MONEY), *PLAIN, *LABELLED, "incarnation_info")


def families(prefix: str, page: Mapping[str, Any] | None) -> Iterator[Metric]:
    """A family for each name, empty while the clerk has read nothing."""
    said = page or {}
    for part, text in MONEY.items():
        family = GaugeMetricFamily(f"{prefix}money_{part}", text, labels=["currency"])
        for currency, sums in said.get("money", {}).items():
            family.add_metric([currency], float(Decimal(sums[part]) / UNIT))
        yield family
    for name, (text, scale) in PLAIN.items():
        plain = GaugeMetricFamily(prefix + name, text)
        if name in said:
            plain.add_metric([], round(said[name] * scale, 6))
        yield plain
    for name, (label, text) in LABELLED.items():
        family = GaugeMetricFamily(prefix + name, text, labels=[label])
        for value, count in said.get(name, {}).items():
            family.add_metric([value], count)
        yield family
    life = GaugeMetricFamily(
        f"{prefix}incarnation_info", "Which life of the database this is.", labels=["incarnation"]
    )
    if "incarnation" in said:
        life.add_metric([said["incarnation"]], 1)
    yield life
