"""bidkeel openrtb explain: one request step by step, without a server and without a database."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from service.__main__ import main
from tests.openrtb.published import DEALS, POUNDS, Body
from tests.openrtb.sources import LINE, SOURCE, request

LINES = [LINE | {"deals": "any"}, LINE | {"line_item": "films", "type": "video"}]


def files(directory: Path, body: object, *names: str, **source: Any) -> list[str]:
    """The words that name a mapping and a request written for this test."""
    told = {"sources": {n: SOURCE | {"line_items": LINES} | source for n in names or ("north",)}}
    (directory / "mapping.json").write_text(json.dumps(told), "utf-8")
    text = body if isinstance(body, str) else json.dumps(body)
    (directory / "request.json").write_text(text, "utf-8")
    paths = (str(directory / "mapping.json"), str(directory / "request.json"))
    return ["openrtb", "explain", "--mapping", paths[0], "--request", paths[1]]


def test_a_request_is_explained_step_by_step(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Features found and missing, each line item's verdict, and what is asked, with units."""
    body = DEALS | {"device": {"devicetype": 4}, "tmax": 120}
    assert main(files(tmp_path, body, seat="Agency1")) == 0
    assert capsys.readouterr().out.splitlines() == [
        "source north: asks for prices",
        "  auction first, deadline 100 ms, currencies USD",
        "  imp 1",
        "    feature device = 4",
        "    feature tag is missing",
        "    line item garden (banner) may bid",
        "    line item films (video) does not bid: other_type",
        "    asks garden for deal AB-Agency1-0001: first price, floor 2.5 USD CPM",
    ]


@pytest.mark.parametrize(
    ("body", "source", "says"),
    [
        (DEALS, {}, "does not bid: private_auction"),
        (request(tmax=5), {}, "because: no_time"),
        (request(wseat=["x"]), {}, "because: seat_not_allowed"),
        ({"id": "r1"}, {}, "because: no imp"),
    ],
)
def test_who_asks_nobody_is_told_why(
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    body: Body,
    source: dict[str, Any],
    says: str,
) -> None:
    """Exit code 3: a check found something."""
    assert main(files(tmp_path, body, **source)) == 3
    assert says in capsys.readouterr().out


def test_programs_read_json(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """One object, with pounds and dollars told apart and the quantity as it is."""
    assert main([*files(tmp_path, POUNDS | {"test": 1}), "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert (told["test"], told["currencies"]) == (True, ["GBP"])
    (ask,) = told["imps"][0]["asks"]
    assert (ask["floor_cpm"], ask["floor_currency"], ask["multiplier"]) == (5.0, "GBP", "14.20")


@pytest.mark.parametrize(
    ("body", "words", "says"),
    [
        ("{", [], "not JSON"),
        (request(), ["--source", "west"], "Name one source of north, south."),
        (request(), [], "Name one source of north, south."),
        (request(), ["--request", "nothing.json"], "cannot be read"),
    ],
)
def test_what_cannot_be_explained_is_refused(
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    body: object,
    words: list[str],
    says: str,
) -> None:
    """Exit code 1 and one sentence."""
    names = () if body == "{" or "--request" in words else ("north", "south")
    assert main([*files(tmp_path, body, *names), *words]) == 1
    assert says in capsys.readouterr().err
