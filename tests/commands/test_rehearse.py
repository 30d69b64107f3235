"""`bidkeel rehearse` from options, a file and a CSV: a table, a chart, data for a program."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from service.__main__ import main
from service.commands import bench_rehearse
from service.commands.exchange import Auction
from service.commands.timber import write_csv

SMALL = ["--rounds", "200", "--seeds", "2", "--block", "20"]
CONFIG = {
    **{"id": "a", "name": "A", "currency": "EUR", "budget": "5.00", "bid_cap_cpm": 8},
    "value": {"ceiling": "0.1", "typical": "0.02"},
}


def rehearse(*words: str | Path) -> int:
    """Run the command."""
    return main(["rehearse", *map(str, words)])


def test_options_make_a_rehearsal(capsys: pytest.CaptureFixture[str]) -> None:
    """Two policies beside each other, every row with its unit."""
    code = rehearse(*SMALL, "--policy", "kl-ucbid", "--policy", "flat:price_cpm=2")
    out = capsys.readouterr().out
    assert code == 0
    assert "kl-ucbid" in out
    assert "surplus (EUR)" in out
    assert "regret to it (EUR)" in out
    assert "every learner begins with nothing learnt" in " ".join(out.split())


def test_a_file_in_the_form_of_the_api(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Policies by their differences; the answer is the result of the API, decimals as text."""
    path = tmp_path / "wish.json"
    policies = [{"name": "now"}, {"name": "higher cap", "change": {"bid_cap_cpm": 12}}]
    sizes = {"rounds": 100, "seeds": 2, "block": 10}
    path.write_text(
        json.dumps({"config": CONFIG, "policies": policies, "market": {"kind": "iid"}, **sizes})
    )
    assert rehearse(path, "--json") == 0
    told: dict[str, Any] = json.loads(capsys.readouterr().out)
    assert [one["name"] for one in told["policies"]] == ["now", "higher cap"]
    assert [one["cap_cpm"] for one in told["policies"]] == [8.0, 12.0]
    assert isinstance(told["policies"][0]["surplus"]["mean"], str)


def test_a_csv_is_replayed_with_charts(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Bad rows and unknown columns are told, and both charts are whole and alone."""
    path, png, html = (tmp_path / name for name in ("a.csv", "a.png", "a.html"))
    rows = [f"{1 + n % 5},{0.002 * (n % 3)},x" for n in range(120)]
    path.write_text("\n".join(["highest_competing_cpm,value,colour", *rows, "dear,,"]) + "\n")
    assert rehearse("--csv", path, "--policy", "mean", "--png", png, "--html", html) == 0
    out = capsys.readouterr().out
    assert "121 rows read, 1 of them bad" in out
    assert "line 122: highest_competing_cpm" in out
    assert "colour" in out
    assert "exact: every outcome" in " ".join(out.split())
    assert png.read_bytes().startswith(b"\x89PNG")
    page = html.read_text(encoding="utf-8")
    # The script stands in the page: nothing is fetched from anywhere.
    assert "<script src" not in page
    assert len(page) > 1_000_000


@pytest.mark.parametrize(
    ("words", "sentence"),
    [
        (["--policy", "nothing"], "method"),
        (["--policy", "flat:price_cpm=much"], "SETTING=NUMBER"),
        (["--market", "nowhere"], "market.kind"),
        (["--csv", "/nowhere/at/all.csv"], "No such file"),
        (["--market", "own_log"], "line_item"),
        (["--cap-cpm", "-1"], "bid_cap_cpm"),
    ],
)
def test_what_cannot_be_played_is_refused(
    words: list[str], sentence: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """One sentence with the field, and exit code 1."""
    assert rehearse(*words, *SMALL) == 1
    assert sentence in capsys.readouterr().err


def test_auctions_are_written_in_the_columns_that_are_read(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """What one command writes the other replays, to the nano."""
    path = tmp_path / "real.csv"
    assert (
        write_csv([Auction("a", 0, 1_234_567, 2_000_001), Auction("a", 1, 500_000, 0)], path) == 2
    )
    words = ["--policy", "flat:price_cpm=2", "--typical", "0.002", "--json"]
    assert rehearse("--csv", path, *words) == 0
    policy = json.loads(capsys.readouterr().out)["policies"][0]
    assert (policy["spend"]["mean"], policy["value"]["mean"]) == ("0.001734567", "0.002000001")


def test_the_bench_simulates_and_judges() -> None:
    """A small part of the million, on one core, within its share of the time."""
    speed = bench_rehearse.simulate(20_000)
    assert speed.auctions == 20_000
    assert 0 < speed.processor_s < 5
