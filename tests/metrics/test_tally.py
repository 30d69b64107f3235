"""Counting in place: by name and labels, bounded, and cheap beside a bid."""

from __future__ import annotations

import time

import pytest

from service.metrics.series import ALL, BOUNDS_S, CODES, OTHER, PASSES, PLACES, STATUSES
from service.metrics.tally import Tally


def test_each_series_has_places_of_its_own() -> None:
    """No two combinations of labels share a place, and all of them are few."""
    keys = [key for series in ALL for key in series.keys()]
    assert len(set(keys)) == len(keys) == len(PLACES)
    assert len(PLACES) < 200


def test_a_count_goes_where_its_labels_say() -> None:
    """Only the place that was named moves."""
    tally = Tally()
    tally.add("passes", "frozen")
    tally.add("passes", "frozen", count=2)
    assert tally.value("passes", "frozen") == 3
    assert sum(tally.value("passes", reason) for reason in PASSES) == 3


def test_an_unknown_label_counts_as_other_and_makes_no_place() -> None:
    """Whatever comes in as a reason, the number of series stays."""
    tally, before = Tally(), len(PLACES)
    tally.add("passes", "a reason of next year")
    tally.add("outcomes", "won", "a status of next year")
    tally.add("refused_outcomes", "x" * 1000)
    assert tally.value("passes", OTHER) == 1
    assert tally.value("outcomes", "won", OTHER) == 1
    assert tally.value("refused_outcomes", OTHER) == 1
    assert len(PLACES) == before


@pytest.mark.parametrize("labels", [(), ("won",), ("won", "recorded", "more")])
def test_a_wrong_number_of_labels_is_a_mistake_of_ours(labels: tuple[str, ...]) -> None:
    """It is told at once and not counted somewhere."""
    with pytest.raises(KeyError):
        Tally().add("outcomes", *labels)


@pytest.mark.parametrize(
    ("seconds", "bucket"),
    [(0.0, "0.0005"), (0.0005, "0.0005"), (0.00051, "0.001"), (0.5, "0.5"), (0.51, "+Inf")],
)
def test_a_duration_falls_into_the_bucket_that_holds_it(seconds: float, bucket: str) -> None:
    """The bound itself belongs to its bucket, as Prometheus reads `le`."""
    tally = Tally()
    tally.took(seconds)
    assert tally.value("bid_duration_seconds", bucket) == 1
    assert tally.value("bid_duration_seconds", "sum") == int(seconds * 10**9)


def test_the_lists_hold_what_callers_may_read() -> None:
    """The passes of the interface, in its order, and nothing counted twice."""
    assert len(set(PASSES)) == len(PASSES)
    assert len(set(CODES)) == len(CODES)
    assert {"recorded", "duplicate", "conflict", "late", "parked", "refused"} < set(STATUSES)
    assert list(BOUNDS_S) == sorted(BOUNDS_S)


def test_counting_costs_a_bid_next_to_nothing() -> None:
    """A count and a duration take under ten microseconds of processor even on a busy machine."""
    tally, rounds = Tally(), 20_000
    began = time.process_time()
    for _ in range(rounds):
        tally.add("passes", "under_floor")
        tally.took(0.003)
    each_us = (time.process_time() - began) / rounds * 1e6
    print(f"one count and one duration: {each_us:.2f} µs")  # noqa: T201 - A figure for -s.
    assert each_us < 10
