"""What one entry adds, and sums of any stretch: worked by hand, and beside adding one by one."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.tripwires.counts import (
    LOG_UNITS,
    NAMES,
    NOTHING,
    Counts,
    Series,
    counted,
    minus,
    plus,
)

SPAN_MS = 10
FEW = st.integers(-5, 5)
SUMS = st.tuples(*(FEW for _ in NAMES)).map(lambda sums: Counts(*sums))
BUCKETS = st.dictionaries(st.integers(-4, 12).map(lambda n: n * SPAN_MS), SUMS, max_size=8)


@settings(max_examples=40)
@given(one=SUMS, other=SUMS)
def test_taking_away_undoes_adding(one: Counts, other: Counts) -> None:
    """Both ways round, and adding does not care for order."""
    assert minus(plus(one, other), other) == one
    assert plus(one, other) == plus(other, one)
    assert plus(one, NOTHING) == one
    assert minus(one, one) == NOTHING


@settings(max_examples=80)
@given(buckets=BUCKETS, from_ms=st.integers(-60, 140), until_ms=st.integers(-60, 140))
def test_a_stretch_is_the_sum_of_its_buckets(
    buckets: dict[int, Counts], from_ms: int, until_ms: int
) -> None:
    """Those that begin in it, its end left out; a stretch that ends before it begins is empty."""
    wanted = NOTHING
    for start, counts in buckets.items():
        if from_ms <= start < until_ms:
            wanted = plus(wanted, counts)
    assert Series(SPAN_MS, buckets.items()).between(from_ms, until_ms) == wanted


@settings(max_examples=40)
@given(buckets=BUCKETS, cut=st.integers(-60, 140))
def test_two_neighbouring_stretches_make_one(buckets: dict[int, Counts], cut: int) -> None:
    """Nothing is counted twice or lost at the cut."""
    series = Series(SPAN_MS, buckets.items())
    halves = plus(series.between(-100, cut), series.between(cut, 200))
    assert halves == series.between(-100, 200)


def test_buckets_may_come_in_any_order() -> None:
    """They are put in order of time, whatever database they come from."""
    series = Series(SPAN_MS, [(20, Counts(3)), (0, Counts(1)), (10, Counts(2))])
    assert series.starts == [0, 10, 20]
    assert [counts.bids for counts in series.buckets] == [1, 2, 3]
    assert series.between(0, 20) == Counts(3)


@pytest.mark.parametrize(("start_ms", "bids"), [(0, 1), (20, 3), (10, 0), (-10, 0), (30, 0)])
def test_a_bucket_that_was_not_kept_is_empty(start_ms: int, bids: int) -> None:
    """Between two that were, and beyond both ends."""
    series = Series(SPAN_MS, [(0, Counts(1)), (20, Counts(3))])
    assert series.at(start_ms) == Counts(bids)


def test_a_series_of_nothing_sums_to_nothing() -> None:
    """A line item that nothing has happened to."""
    series = Series(SPAN_MS, [])
    assert (series.at(0), series.between(-1000, 1000)) == (NOTHING, NOTHING)


@pytest.mark.parametrize(("at_ms", "start_ms"), [(0, 0), (9, 0), (10, 10), (19, 10), (-1, -10)])
def test_a_moment_belongs_to_the_bucket_before_it(at_ms: int, start_ms: int) -> None:
    """The beginning itself too; before the year 1970 buckets go on without a gap."""
    assert Series(SPAN_MS, []).floor(at_ms) == start_ms


def test_results_and_conversions_are_reckoned() -> None:
    """Won, lost and void have come; words less zeros have earned something."""
    counts = Counts(bids=9, wins=3, losses=2, voids=1, words=5, zeros=4)
    assert (counts.results, counts.conversions) == (6, 1)
    assert (NOTHING.results, NOTHING.conversions) == (0, 0)


@pytest.mark.parametrize(
    ("kind", "slot", "body", "counts"),
    [
        ("won", "result", {"price": 0}, Counts(wins=1, spent=3)),
        ("won", "result", {"price": 4, "round": None}, Counts(wins=1, paid=4, spent=3)),
        ("won", "billed", {"price": 4, "round": 1}, NOTHING),
        ("lost", "result", {}, Counts(losses=1)),
        ("lost", "result", {"round": 1, "late": True}, Counts(1, losses=1, late=1)),
        ("void", "result", {"round": 1, "late": True}, Counts(1, voids=1, late=1)),
        ("retire", None, {"rounds": 7}, Counts(7)),
        ("tick", None, {"rounds": 0}, NOTHING),
        ("value", "value:a", {"amount": 0, "parked": True}, Counts(words=1, zeros=1, unparked=1)),
        ("value", "value:a", {"amount": -4}, Counts(words=1, zeros=1)),
        ("value", "value:a", {"amount": 1}, Counts(words=1)),
        ("value", "value:a", {"amount": 0, "was": 0}, NOTHING),
        ("conflict", "conflict:x", {"said": {}}, Counts(spent=3)),
        ("reversal", None, {}, NOTHING),
        ("a kind of next year", None, {}, NOTHING),
    ],
)  # fmt: skip
def test_the_edges_of_what_an_entry_counts(
    kind: str, slot: str | None, body: dict[str, object], counts: Counts
) -> None:
    """What is missing is nought, a refund is no spending, and unknown kinds count nothing."""
    assert counted(kind, slot, body, 3) == counts


@pytest.mark.parametrize(
    ("kind", "slot", "body"),
    [
        ("won", "result", {}),
        ("won", "result", {"price": None}),
        ("value", "value:a", {}),
        ("value", "value:a", {"amount": "much"}),
        ("tick", None, {}),
    ],
)
def test_a_damaged_entry_is_told_and_not_guessed(
    kind: str, slot: str | None, body: dict[str, object]
) -> None:
    """Whoever counts decides what a damaged entry is worth; here it only says so."""
    with pytest.raises((KeyError, TypeError, ValueError)):
        counted(kind, slot, body, 3)


@pytest.mark.parametrize(("amount", "log"), [(1, 0), (2, 693), (3, 1099), (10**9, 20_723)])
def test_logarithms_are_whole_thousandths(amount: int, log: int) -> None:
    """ln 2 = 0.693147, ln 3 = 1.098612, ln 10^9 = 20.723266, each rounded at the third place."""
    one = counted("value", "value:a", {"amount": amount, "was": None}, 0)
    assert (one.logs, one.log_squares) == (log, log * log)
    assert one.logs / LOG_UNITS == pytest.approx(log / 1000)


def test_an_entry_moves_only_what_it_names() -> None:
    """Gauges and refusals never come from the stream."""
    bodies = {"price": 1, "amount": 1, "rounds": 1}
    kinds = ("won", "lost", "void", "billed", "value", "parked", "conflict", "tick", "retire")
    for kind in kinds:
        one = counted(kind, "result", bodies, 1)
        assert (one.refused, one.unfunded, one.disputed, one.halted) == (0, 0, 0, 0)
