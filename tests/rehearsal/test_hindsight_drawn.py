"""Where bids were drawn: weights by hand, refusals with their code, estimates that are right."""

from __future__ import annotations

import numpy as np
import pytest

from service.rehearsal.auction_log import Logged
from service.rehearsal.hindsight_drawn import NOT_DRAWN, TOO_FEW, Refused, drawn, estimates

PRICE = 1000


def won(bid: int, value: int, price: int, **facts: object) -> Logged:
    """A win whose value is known."""
    return Logged("second", bid, "won", value, value, price=price, **facts)  # type: ignore[arg-type]


def test_a_control_arm_weighs_by_its_share() -> None:
    """One over the share for the arm, nothing for the rest, and rows without a draw left out."""
    rows = [
        won(PRICE, 900, 400, arm="control", arm_odds=0.1),
        Logged("second", 700, "lost", 5000, arm_odds=0.9),
        won(700, 500, 300, arm_odds=1.0),
        Logged("second", 700, "lost", 5000),
    ]
    found = drawn(rows, PRICE)
    assert found is not None
    assert found.weights.tolist() == [10.0, 0.0]
    assert found.rewards.tolist() == [500.0, 0.0]
    assert "control arm" in found.stands_for


def test_a_law_weighs_a_band_around_the_price() -> None:
    """A bid inside has its part of the band over its chance; a pass below the floor its share."""
    rows = [
        won(950, 2000, 500, odds=0.001),
        Logged("second", 1200, "lost", 5000, odds=0.001),
        Logged("second", 0, "passed", 5000, floor=1000, reason="under_floor", odds=0.8),
    ]
    found = drawn(rows, PRICE)
    assert found is not None
    assert found.weights == pytest.approx([1 / 201 / 0.001, 0.0, 100 / 201 / 0.8])
    assert found.rewards.tolist() == [1500.0, 0.0, 0.0]


def test_bids_that_were_not_drawn_are_refused() -> None:
    """No kept chance, or none near the price: a code, and a sentence that says what is left."""
    for rows in ([won(PRICE, 900, 400)], [won(500, 900, 400, odds=0.01)], []):
        found = estimates(rows, PRICE)
        assert isinstance(found, Refused)
        assert found.code == NOT_DRAWN
        assert "bounds" in found.says


def test_under_thirty_effective_auctions_there_is_no_verdict() -> None:
    """Twenty-nine are refused with their number; thirty are not."""
    rows = [won(PRICE, 900, 400, arm="control", arm_odds=0.5) for _ in range(29)]
    found = estimates(rows, PRICE)
    assert isinstance(found, Refused)
    assert found.code == TOO_FEW
    assert found.effective == pytest.approx(29.0)
    assert isinstance(estimates([*rows, rows[0]], PRICE), dict)


def test_what_is_younger_than_an_open_window_is_left_out() -> None:
    """Wins that may still bring something and all after them, and bids of which no word came."""
    rows = [won(PRICE, 900, 400, arm="control", arm_odds=0.5, at_ms=at) for at in range(40)]
    rows.append(Logged("second", PRICE, "won", 900, 0, price=400, at_ms=35, arm_odds=0.5))
    rows.append(Logged("second", PRICE, "silent", 900, at_ms=1, arm="control", arm_odds=0.5))
    found = drawn(rows, PRICE)
    assert found is not None
    assert found.weights.size == 35


def test_a_law_of_bids_finds_what_a_price_near_it_earns() -> None:
    """Bids and rivals even on 1 to 2,000: on average (1,000 b - b (b + 1) / 2) / 2,000."""
    rng = np.random.default_rng(11)
    rows = []
    for bid, rival in rng.integers(1, 2000, (8000, 2), endpoint=True).tolist():
        if rival <= bid:
            rows.append(won(bid, 1000, rival, odds=1 / 2000))
        else:
            rows.append(Logged("second", bid, "lost", 1000, odds=1 / 2000))
    found = estimates(rows, PRICE)
    assert isinstance(found, dict)
    band = np.arange(900, 1101)
    truth = float((1000 * band - band * (band + 1) / 2).mean() / 2000)
    for estimate in found.values():
        assert abs(estimate.mean - truth) < 5 * estimate.error
        assert estimate.error < 20
