"""Narrower lines: they narrow, they name what they assume, and they are right on logs by hand."""

from __future__ import annotations

import pytest

from service.rehearsal.alternatives import Alternative
from service.rehearsal.auction_log import Logged
from service.rehearsal.hindsight_assumed import (
    Worth,
    mean_value,
    values_alike,
)
from service.rehearsal.hindsight_bounds import summed
from service.rehearsal.hindsight_rivals import RIVALS, rivals_alike

WORTH = Worth(1_000_000, 900_000, 1_000_000)


def played(auction: str, many: int = 400) -> list[Logged]:
    """Rivals evenly up to a million, bids of half of that, every second win worth it all."""
    rows = []
    for at in range(many):
        rival = (at * 997 % many + 1) * 1_000_000 // many
        if rival <= 500_000:
            value, paid = 1_000_000 * (at % 2), rival if auction == "second" else 500_000
            rows.append(Logged(auction, 500_000, "won", value, value, price=paid))
        else:
            rows.append(Logged(auction, 500_000, "lost", 1_000_000))
    return rows


@pytest.mark.parametrize("auction", ["second", "first"])
def test_each_line_is_inside_the_bounds_it_narrows(auction: str) -> None:
    """Fewer values are possible once an assumption is made, never others."""
    rows, other = played(auction), Alternative("flat", 700_000)
    free, line = summed(rows, other), values_alike(rows, other, WORTH)
    assert free.low < line.low < line.high < free.high
    assert (line.label, line.auctions, line.level) == ("values_alike", 400, 0.95)
    assert "do not depend on each other" in line.assumes


def test_the_mean_value_has_limits_around_it() -> None:
    """Half a ceiling on average; before the first value it may be anything up to the ceiling."""
    low, high = mean_value(played("second"), WORTH)
    assert 350_000 < low < 500_000 < high < 650_000
    assert mean_value([], WORTH) == (0, 1_000_000)


def test_rare_values_are_counted() -> None:
    """Where ceilings are far above the cap, hits times their mean amount; and it is said."""
    rare = Worth(50_000_000, 900_000, 2_000_000)
    rows = [Logged("second", 500, "won", v, v, price=300) for v in [2_000_000] * 20 + [0] * 20_000]
    low, high = mean_value(rows, rare)
    assert low < 2000 < high < 6000
    line = values_alike(rows, Alternative("flat", 400), rare)
    assert "own error is not in it" in line.assumes


def test_what_is_exact_needs_no_assumption() -> None:
    """A flat quarter in second price: on this grid it earns (1/2 - 1/8) / 4, or nearly, surely."""
    rows = played("second")
    exact = summed(rows, Alternative("flat", 250_000))
    line = rivals_alike(rows, 250_000, WORTH)
    assert line is not None
    assert line.low == line.high == exact.low == exact.high
    assert exact.low == pytest.approx(400 * 93_750, rel=0.05)


def varied(many: int = 400) -> list[Logged]:
    """The same rivals against bids of a half and of nine tenths in turn."""
    rows = []
    for at in range(many):
        rival = (at * 997 % many + 1) * 1_000_000 // many
        bid = (500_000, 900_000)[at // 2 % 2]
        value = 1_000_000 * (at % 2)
        won = Logged("second", bid, "won", value, value, price=rival)
        rows.append(won if rival <= bid else Logged("second", bid, "lost", 1_000_000))
    return rows


def test_the_curve_beyond_a_losing_bid_narrows_what_it_would_have_won() -> None:
    """By the higher bids it is known how often 700,000 wins what a half lost, and at what cost."""
    rows, other = varied(), Alternative("flat", 700_000)
    free, alike = summed(rows, other), values_alike(rows, other, WORTH)
    line = rivals_alike(rows, 700_000, WORTH)
    assert line is not None
    assert free.low < alike.low < line.low < line.high < alike.high < free.high
    # Of a hundred rivals above a half two fifths are won at 600,000 on average, for values of a
    # half: nothing much is earned or lost by it.
    lost = sum(row.result == "lost" and row.bid == 500_000 for row in rows)
    exact = summed([row for row in rows if row.result == "won"], other).low
    assert line.low < exact + lost * 0.4 * (500_000 - 600_000) < line.high
    assert RIVALS["kaplan-meier"] in line.assumes
    assert line.level == 0.95


def test_wins_and_losses_alone_promise_no_level() -> None:
    """In first price the curve is only monotone, and its limits are a rough guide."""
    line = rivals_alike(played("first"), 400_000, WORTH)
    assert line is not None
    assert line.level is None
    assert RIVALS["isotonic"] in line.assumes


def test_beyond_what_was_tried_the_line_stays_wide() -> None:
    """No bid above a half was made, so at nine tenths rivals may be anywhere above it."""
    line = rivals_alike(played("second"), 900_000, WORTH)
    assert line is not None
    # From winning nothing more to winning everything there.
    assert line.high - line.low > 400 * 100_000


def test_without_auctions_that_told_something_there_is_no_line() -> None:
    """Passes and silence draw no curve."""
    rows = [Logged("second", 500, "silent", 1000), Logged("second", 0, "passed", 1000)]
    assert rivals_alike(rows, 400, WORTH) is None


def test_every_source_has_its_own_curve_and_its_part_of_the_risk() -> None:
    """Two sources are no narrower together than one."""
    rows = varied()
    mixed = [Logged(*_fields(row), source=("a", "b")[at // 4 % 2]) for at, row in enumerate(rows)]
    one, two = rivals_alike(rows, 700_000, WORTH), rivals_alike(mixed, 700_000, WORTH)
    assert one is not None
    assert two is not None
    assert two.high - two.low > one.high - one.low


def _fields(row: Logged) -> tuple[str, int, str, int, int, int, int, int | None, int | None]:
    return (
        *(row.auction, row.bid, row.result, row.high, row.low, row.floor, row.price),
        *(row.price_low, row.least),
    )
