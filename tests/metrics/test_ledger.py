"""The clerk's page as families: units, labels, and what stands there before anything is known."""

from __future__ import annotations

import pytest

from service.metrics.ledger import LABELLED, MONEY, NAMES, PLAIN, families
from service.store.gauges import PARTS

EMPTY = dict.fromkeys(PARTS, "0")


def samples(page: dict[str, object] | None) -> dict[tuple[str, tuple[str, ...]], float]:
    """Every sample by name and values of labels."""
    return {
        (sample.name, tuple(sample.labels.values())): sample.value
        for family in families("b_", page)
        for sample in family.samples
    }


@pytest.mark.parametrize("page", [None, {}])
def test_before_the_first_page_all_families_are_there_and_empty(
    page: dict[str, object] | None,
) -> None:
    """A dashboard knows every name from the start, and no value that nobody has read."""
    found = list(families("b_", page))
    assert [family.name for family in found] == [f"b_{name}" for name in NAMES]
    assert samples(page) == {}
    assert all(family.documentation for family in found)


def test_money_has_the_parts_that_the_database_sums() -> None:
    """A part that one side forgot would be a graph that stands still."""
    assert set(MONEY) == set(PARTS)


@pytest.mark.parametrize(
    ("nanos", "units"),
    [("1", 1e-9), ("-2500000000", -2.5), ("12000000000000000000000", 1.2e13), ("0", 0.0)],
)
def test_nanos_become_units(nanos: str, units: float) -> None:
    """Beyond 64 bits too, since sums over line items may be; an over-held sum is negative."""
    page: dict[str, object] = {"money": {"EUR": {**EMPTY, "held": nanos}, "JPY": EMPTY}}
    found = samples(page)
    assert found[("b_money_held", ("EUR",))] == units
    assert found[("b_money_held", ("JPY",))] == 0.0
    assert found[("b_money_spent", ("EUR",))] == 0.0


@pytest.mark.parametrize(
    ("name", "told", "value"),
    [
        ("line_items", 7, 7.0),
        ("learner_lag_seconds", 1500, 1.5),
        ("service_clock_seconds", 1_700_000_000_123, 1_700_000_000.123),
        ("live_workers", 0, 0.0),
    ],
)
def test_plain_numbers_are_told_in_their_unit(name: str, told: int, value: float) -> None:
    """Milliseconds become seconds; nought is a value, unlike what is not known."""
    assert samples({name: told}) == {(f"b_{name}", ()): value}


def test_labels_are_those_of_the_page() -> None:
    """Freezes by source, slices by state, findings by rule, and the life of the database."""
    page: dict[str, object] = {
        "freezes": {"person": 2, "all": 0}, "slices": {"open": 5}, "tripwires_firing": {"voids": 1},
        "incarnation": "ab", "something of next year": 4,
    }  # fmt: skip
    assert samples(page) == {
        ("b_freezes", ("person",)): 2, ("b_freezes", ("all",)): 0, ("b_slices", ("open",)): 5,
        ("b_tripwires_firing", ("voids",)): 1, ("b_incarnation_info", ("ab",)): 1,
    }  # fmt: skip


def test_no_name_is_told_twice() -> None:
    """Neither among these nor with a series that a process counts itself."""
    assert len(set(NAMES)) == len(NAMES) == len(MONEY) + len(PLAIN) + len(LABELLED) + 1
