"""Curves and first-price bids learnt from the real sealed bids hold what is said of them."""

from __future__ import annotations

import json
from argparse import Namespace

import pytest

from service.commands import bench_curve, timber
from service.commands.bench_curve import Figures
from service.rehearsal.censoring import Distance

# Largest error over all prices of which the curve says something, at 1,000 and at all auctions.
LARGEST = {"on_win": (0.08, 0.02), "on_loss": (0.08, 0.02), "never": (0.15, 0.08)}


@pytest.fixture(name="found", scope="module")
def _found() -> Figures:
    return bench_curve.figures(timber.read(timber.DISTRIBUTION), 7)


def _at(distances: list[Distance], auctions: int) -> Distance:
    return next(one for one in distances if one.auctions == auctions)


def test_all_sound_auctions_are_used(found: Figures) -> None:
    """16,401 of the 16,469."""
    assert found.auctions == 16_401
    assert all(of[-1].auctions == 16_401 for of in found.distances.values())


@pytest.mark.parametrize("told", LARGEST)
def test_censored_curves_come_near_the_full_one(found: Figures, told: str) -> None:
    """With bids independent of who competes; win and loss alone are the slowest, as theory says."""
    of = found.distances[(told, True)]
    early, late = LARGEST[told]
    assert _at(of, 1_000).largest <= early
    assert of[-1].largest <= late
    assert of[-1].largest < 0.5 * of[0].largest
    assert of[-1].identified >= 0.8


def test_a_mixed_feed_comes_near_too(found: Figures) -> None:
    """Turnbull's estimate from sources of three kinds, by turns."""
    of = found.distances[("mixed", True)]
    assert _at(of, 1_000).largest <= 0.08
    assert of[-1].largest <= 0.02


def test_intervals_hold_the_full_curve(found: Figures) -> None:
    """At 1,000 auctions at 85 % of the prices or more, whatever is told."""
    for (told, foreign), of in found.distances.items():
        assert not foreign or _at(of, 1_000).covered >= 0.85, told


def test_bids_that_follow_who_competes_bend_the_curve(found: Figures) -> None:
    """Our own bids rise with the others': the assumption fails, and more auctions do not help."""
    for told in ("on_win", "never", "on_loss"):
        own, foreign = (found.distances[(told, is_foreign)][-1] for is_foreign in (False, True))
        assert own.largest > 4 * foreign.largest, told
    assert found.distances[("on_win", False)][-1].largest > 0.2


def test_shading_earns_where_bidding_the_value_earns_nothing(found: Figures) -> None:
    """Of the best fixed share in hindsight: 95 % if always told, three quarters whatever is."""
    assert found.value.surplus == 0
    assert found.value.wins > 5_000
    assert 0.5 < found.fixed_share < 1.0
    for way, result in found.learners.items():
        assert result.surplus >= 0.75 * found.fixed.surplus, way
    assert found.learners[("always", "share")].surplus >= 0.95 * found.fixed.surplus
    assert found.learners[("on_win", "share")].surplus > found.learners[("on_win", "price")].surplus


def test_the_tables_are_printed(capsys: pytest.CaptureFixture[str]) -> None:
    """Two of curves and one of bids, with where the auctions come from."""
    assert bench_curve.run(Namespace(seed=7, limit=400, json=False)) == 0
    text = capsys.readouterr().out
    assert text.count("Largest error of the win curve") == 2
    assert "bid the value" in text
    assert "arXiv:2106.13856" in text


def test_figures_for_a_program(capsys: pytest.CaptureFixture[str]) -> None:
    """The same as JSON."""
    assert bench_curve.run(Namespace(seed=7, limit=400, json=True)) == 0
    data = json.loads(capsys.readouterr().out)
    assert len(data["first_price"]) == 8
    assert {row["bids"] for row in data["curves"]} == {"foreign", "own"}
