"""`bidkeel tripwires try` on a database with a record: what it prints, and its exit codes."""

from __future__ import annotations

import json
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

from service.__main__ import main
from service.store import tripwires
from service.store.database import Database
from service.store.tripwires import Standing
from service.tripwires.counts import Counts
from tests.builders import NAME, begin

pytestmark = pytest.mark.parametrize("backend", ["sqlite"], indirect=True)

MINUTE_MS = 60_000
GOOD = Counts(bids=20, wins=10, losses=9, voids=1, paid=10**7, spent=10**7)
BAD = GOOD._replace(losses=1, voids=9)


@pytest.fixture(name="recorded")
def _recorded(migrated_url: str) -> Iterator[None]:
    """A line item with eight hours of minutes, the last forty of them with voids."""
    database = Database(migrated_url)
    begin(database)
    first = database.wall_ms() // MINUTE_MS * MINUTE_MS - 480 * MINUTE_MS
    sums = dict[tuple[int, int], Counts]()
    for number in range(480):
        start = first + number * MINUTE_MS
        counts = BAD if number >= 440 else GOOD
        for width, span in ((0, MINUTE_MS), (1, 60 * MINUTE_MS), (2, 1440 * MINUTE_MS)):
            key = (width, start - start % span)
            before = sums.get(key, Counts())
            sums[key] = Counts(*(a + b for a, b in zip(before, counts, strict=True)))
    standing = Standing(NAME, 0, 0, (0, 0, 0), (0, 0, 0))
    database.write(lambda c: tripwires.advance(c, standing, 0, 1, sums))
    database.close()
    with setting(BIDKEEL_DATABASE_URL=migrated_url):
        yield


@contextmanager
def setting(**variables: str) -> Iterator[None]:
    """Variables of the environment for a while."""
    os.environ.update(variables)
    try:
        yield
    finally:
        for name in variables:
            del os.environ[name]


@pytest.mark.usefixtures("recorded")
def test_it_says_when_rules_would_have_fired(capsys: pytest.CaptureFixture[str]) -> None:
    """A warning leaves the exit code 0; the same as a freeze makes it 3; nothing is changed."""
    assert main(["tripwires", "try", NAME]) == 0
    said = capsys.readouterr().out
    assert "voids             warn   fired 1 times" in said
    assert "outcomes were void in 60 minutes; usually" in said
    assert "It would have frozen 0 times. Nothing was changed." in said
    words = ["tripwires", "try", NAME, "--json", "--setting"]
    assert main([*words, '{"voids": {"action": "freeze"}}']) == 3
    told = json.loads(capsys.readouterr().out)
    assert [one["rule"] for one in told["would_freeze"]] == ["voids"]
    assert told["rules"]["voids"]["episodes"][0]["numbers"]["share"] > 0.1


@pytest.mark.usefixtures("recorded")
def test_a_setting_may_come_from_a_file(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """And one that is none is refused in a sentence."""
    path = tmp_path / "setting.json"
    path.write_text('{"voids": {"action": "off"}}')
    assert main(["tripwires", "try", NAME, "--json", "--setting", f"@{path}"]) == 0
    assert json.loads(capsys.readouterr().out)["rules"]["voids"]["fired"] == 0
    for bad in ("@no-such-file", "{", '{"voids": {"action": "stop"}}'):
        assert main(["tripwires", "try", NAME, "--setting", bad]) == 1
        assert capsys.readouterr().err.startswith("bidkeel: ")
    assert main(["tripwires", "try", "nobody"]) == 1
