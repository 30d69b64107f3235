"""All real sealed bids go through a real server, and the money and the learnt value hold."""

from __future__ import annotations

import asyncio
import json
import subprocess
from argparse import Namespace

import pytest

from service import money
from service.commands import bench_real, timber
from service.commands.bench_real import Outcome
from service.commands.server_process import ServerProcess, command


@pytest.fixture(name="outcome", scope="module")
def _outcome(tmp_path_factory: pytest.TempPathFactory) -> Outcome:
    with ServerProcess(tmp_path_factory.mktemp("bench")) as server:
        played = bench_real.play(server, timber.read(timber.DISTRIBUTION), 7, lambda count: None)
        return asyncio.run(played)


def test_every_sound_auction_is_played(outcome: Outcome) -> None:
    """16,469 less the 68 absurd ones; each is won, lost or passed for want of free money."""
    book = outcome.book
    assert book.auctions == len(outcome.auctions) == 16_469 - 68
    assert book.wins + book.losses + book.passes.total() == book.auctions
    assert set(book.passes) <= {"budget_spent", "budget_held", "past_deadline", "overloaded"}
    assert book.wins > 5000


def test_spend_stays_within_the_budget_and_nearly_uses_it(outcome: Outcome) -> None:
    """The budget is too small for all that could be won, so it is what ends the buying."""
    assert outcome.learnt.budget == bench_real.BUDGET
    assert 0.95 * bench_real.BUDGET < outcome.learnt.spent <= bench_real.BUDGET


def test_no_price_is_above_the_cap(outcome: Outcome) -> None:
    """Neither a bid nor, therefore, a charge; the first bids of an optimist stand at the cap."""
    assert outcome.book.bid_max == bench_real.CAP
    assert max(auction.rival for auction in outcome.book.won) < bench_real.CAP


def test_the_exchange_charged_exactly_what_the_service_spent(outcome: Outcome) -> None:
    """Two sets of books, kept apart, agree to the nano."""
    assert outcome.book.charged == outcome.learnt.spent
    assert outcome.kept


def test_the_learnt_value_is_the_mean_over_won_auctions(outcome: Outcome) -> None:
    """Each value cut at the ceiling; the interval covers it and is not empty."""
    learnt = outcome.learnt
    assert learnt.known == outcome.book.wins
    assert abs(learnt.mean - outcome.mean_won) <= 1
    assert 0 <= learnt.low < learnt.mean < learnt.high <= bench_real.CEILING


def test_values_above_the_ceiling_are_counted_as_clipped(outcome: Outcome) -> None:
    """The service says so for exactly the wins whose value was above it."""
    above = sum((auction.value or 0) > bench_real.CEILING for auction in outcome.book.won)
    assert outcome.book.clipped == above > 0


def test_what_is_won_is_worth_less_than_what_is_on_sale(outcome: Outcome) -> None:
    """Selection: where price follows value, the wins are the cheap and lesser lots."""
    assert outcome.mean_won < 0.9 * outcome.mean_all
    assert outcome.learnt.high < outcome.mean_all


def test_the_command_prints_the_gap_and_agrees_with_itself() -> None:
    """A short run for a program: exit code 0 and the figures as JSON."""
    done = subprocess.run(
        command("bench", "real", "--limit", "300", "--json"),
        capture_output=True,
        check=True,
        text=True,
    )
    figures = json.loads(done.stdout)
    assert figures["auctions"] + sum(figures["dropped"].values()) == 300
    assert money.nanos(figures["charged"]) == money.nanos(figures["spent"])
    gap = figures["mean_won_cpm"] - figures["mean_all_cpm"]
    assert figures["selection_cpm"] == pytest.approx(gap)


def test_without_the_package_the_command_says_how_to_get_it(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """One sentence on the error output, exit code 2, and no server is started."""
    monkeypatch.setattr(timber, "DISTRIBUTION", "no-such-thing-here")
    assert bench_real.run(Namespace(seed=7, limit=None, json=False)) == 2
    written = capsys.readouterr()
    assert "no-such-thing-here is not installed" in written.err
    assert written.out == ""
