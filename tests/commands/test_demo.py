"""The demo plays a real server, and its table can be believed because two sets of books agree."""

from __future__ import annotations

import asyncio
import io
import json
import re
import subprocess
from collections.abc import Iterator
from dataclasses import replace

import pytest
from rich.console import Console

from service import money
from service.commands import demo, garden
from service.commands.demo import Figures
from service.commands.server_process import ServerProcess, command
from service.rehearsal.hindsight import surplus_of

AUCTIONS = 2000


@pytest.fixture(name="server", scope="module")
def _server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[ServerProcess]:
    with ServerProcess(tmp_path_factory.mktemp("demo")) as server:
        yield server


@pytest.fixture(name="figures", scope="module")
def _figures(server: ServerProcess) -> list[Figures]:
    return asyncio.run(demo.play(server, AUCTIONS, 7, lambda count: None))


def test_every_auction_is_played_and_settled(figures: list[Figures]) -> None:
    """Won, lost or passed, and every outcome got a receipt that moves on."""
    assert sum(of_one.book.auctions for of_one in figures) == AUCTIONS
    for of_one in figures:
        book = of_one.book
        assert book.wins + book.losses + book.passes.total() == book.auctions
        assert book.wins > 0


def test_both_sides_count_the_same_money_within_the_budget(figures: list[Figures]) -> None:
    """The exchange's charges and the service's spend are kept apart and agree to the nano."""
    for of_one in figures:
        assert of_one.book.charged == of_one.learnt.spent <= of_one.learnt.budget
        assert of_one.kept


def test_everything_is_taught_before_the_table_is_made(figures: list[Figures]) -> None:
    """All wins are counted, those of the rare item with an open window by their age."""
    for of_one in figures:
        assert of_one.learnt.known + of_one.learnt.awaited == of_one.book.wins
        assert of_one.learnt.behind == 0


def test_the_frequent_values_are_learnt(figures: list[Figures]) -> None:
    """The truth, which the service never sees, lies in the interval that it shows."""
    for of_one in figures[:2]:
        truth = of_one.planned.mean * money.NANOS_PER_UNIT
        assert of_one.learnt.low < truth < of_one.learnt.high


def test_hindsight_earns_at_least_what_the_true_value_would_have(figures: list[Figures]) -> None:
    """On the very sequence that was played, where the budget did not bind."""
    auctions = garden.market(garden.line_items(), AUCTIONS, 7)
    for of_one in figures:
        mine = [auction for auction in auctions if auction.line_item == of_one.planned.id]
        truth = round(of_one.planned.mean * money.NANOS_PER_UNIT)
        rivals, values = [one.rival for one in mine], [one.value or 0 for one in mine]
        assert of_one.best.surplus >= max(0, surplus_of(rivals, values, truth))
        assert of_one.best.surplus == surplus_of(rivals, values, of_one.best.bid)


@pytest.mark.parametrize(
    ("charged", "spent", "budget", "kept"),
    [(5, 5, 5, True), (4, 5, 5, False), (5, 4, 5, False), (6, 6, 5, False)],
)
def test_a_broken_promise_is_told_apart(
    figures: list[Figures], charged: int, spent: int, budget: int, kept: bool
) -> None:
    """More than the budget, or two sums that differ, make the demo fail."""
    one = figures[0]
    changed = replace(
        one,
        book=replace(one.book, charged=charged),
        learnt=replace(one.learnt, spent=spent, budget=budget),
    )
    assert changed.kept == kept


def test_the_table_names_a_unit_for_every_number(figures: list[Figures]) -> None:
    """One row per quantity, the unit in brackets; one column per line item."""
    console = Console(width=160, file=io.StringIO())
    with console.capture() as captured:
        console.print(demo.table(figures))
    text = captured.get()
    inside = [line for line in text.splitlines() if line[:1] == " " and line.strip(" ─")]
    rows = inside[1:]
    assert len(rows) == 14
    assert [row.split()[0] for row in rows if "(" not in row] == ["method"]
    assert all(money.nanos_text(of_one.learnt.spent) in text for of_one in figures)


def test_the_command_ends_well_and_prints_figures_for_a_program() -> None:
    """A server of its own, a short market, exit code 0, JSON on the output."""
    done = subprocess.run(
        command("demo", "--auctions", "300", "--seed", "3", "--json"),
        capture_output=True,
        check=True,
        text=True,
    )
    assert re.search(r"Watch page, while the demo runs: http://127.0.0.1:[0-9]+/watch", done.stderr)
    assert "--keep-serving" in done.stderr
    figures = json.loads(done.stdout)
    assert [one["line_item"] for one in figures["line_items"]] == [
        planned.id for planned in garden.line_items()
    ]
    assert sum(one["auctions"] for one in figures["line_items"]) == 300
    assert all(one["charged"] == one["spent"] for one in figures["line_items"])
