"""The figures of a duel of two servers, worked out by hand from rounds that are written down."""

from __future__ import annotations

import statistics

import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from service.commands.duel import Bare, Contest, Side, spread
from service.commands.load import Seen

POSITIVE = some.floats(0.01, 1e6)


def side(rate: float, processor_us: float = 100.0, wait_ms_99: float = 9.0) -> Side:
    """One round of one server."""
    return Side(rate, processor_us, 2 * processor_us, 1.0, wait_ms_99, marked=0, wrong=0)


def contest(*pairs: tuple[float, float], rows: int = 1) -> Contest:
    """Rounds of answers a second, the bare server's first."""
    return Contest("x", rows, [side(bare) for bare, _ in pairs], [side(our) for _, our in pairs])


def test_ratios_are_taken_round_by_round() -> None:
    """Noise of one round meets both, so it must not be averaged away before."""
    found = contest((1000, 500), (100, 90), (400, 300))
    assert found.ratios == [0.5, 0.9, 0.75]
    assert found.ratio == 0.75


def test_work_is_compared_the_other_way_round() -> None:
    """A server that spends twice the processor time does half the work for it."""
    found = Contest("x", 1, [side(1, 10.0), side(1, 30.0)], [side(1, 20.0), side(1, 40.0)])
    assert found.work_ratio == statistics.median([0.5, 0.75])


@pytest.mark.parametrize(("rows", "rate"), [(1, 200.0), (100, 20_000.0)])
def test_rows_are_counted_as_often_as_a_request_holds(rows: int, rate: float) -> None:
    """Two hundred batches of a hundred are twenty thousand prices a second."""
    assert contest((1, 100), (1, 200), (1, 300), rows=rows).rows_rate == rate


def test_rounds_of_unequal_number_are_an_error() -> None:
    """A round that only one side played compares nothing."""
    found = Contest("x", 1, [side(1)], [])
    with pytest.raises(ValueError, match="longer"):
        _ = found.ratios


@given(some.lists(some.tuples(POSITIVE, POSITIVE), min_size=1, max_size=7), some.data())
@settings(max_examples=40, deadline=None)
def test_the_order_of_rounds_does_not_matter(
    pairs: list[tuple[float, float]], data: some.DataObject
) -> None:
    """A median knows no order, and swapping the sides of one round turns its ratio over."""
    mixed = data.draw(some.permutations(pairs))
    assert contest(*mixed).ratio == contest(*pairs).ratio
    bare, ours = pairs[0]
    assert contest((ours, bare)).ratio == pytest.approx(1 / contest((bare, ours)).ratio)


@pytest.mark.parametrize(
    ("numbers", "words"),
    [([0.5], "0.50 to 0.50"), ([0.9, 0.125, 0.5], "0.12 to 0.90"), ([2, 1], "1.00 to 2.00")],
)
def test_a_spread_names_the_least_and_the_most(numbers: list[float], words: str) -> None:
    """To two decimals, in this order."""
    assert spread(numbers) == words


def test_waits_are_compared_round_by_round() -> None:
    """Ours over the bare one's, so that more is worse."""
    bare, ours = [side(1, 1, 2.0), side(1, 1, 8.0)], [side(1, 1, 3.0), side(1, 1, 4.0)]
    assert Contest("x", 1, bare, ours).wait_ratios == [1.5, 0.5]


def test_a_contest_without_rounds_has_no_ratio() -> None:
    """No number is made up for it."""
    with pytest.raises(statistics.StatisticsError):
        _ = Contest("x").ratio


def test_two_contests_share_no_rounds() -> None:
    """Each has lists of its own."""
    one, other = Contest("a"), Contest("b")
    one.ours.append(side(1))
    assert other.ours == []


def test_a_bare_server_that_was_not_started_has_no_process() -> None:
    """Its port is free to be taken, and leaving it ends nothing."""
    bare = Bare()
    assert bare.pid == 0
    assert 1024 <= bare.port < 65_536
    bare.__exit__(None, None, None)


@pytest.mark.parametrize(("share", "wait_ms"), [(0.0, 1.0), (0.5, 6.0), (0.99, 10.0), (1.0, 10.0)])
def test_a_wait_is_that_of_the_answer_at_its_place(share: float, wait_ms: float) -> None:
    """Ten answers of one to ten milliseconds, in any order; never past the last."""
    seen = Seen(seconds=2.0, waits_s=[n / 1000 for n in (3, 1, 2, 10, 9, 8, 7, 6, 5, 4)])
    assert seen.wait_ms(share) == pytest.approx(wait_ms)
    assert seen.rate == 5.0
