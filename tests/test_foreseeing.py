"""What people are told of tripwires: settings in seconds, findings with remedies, no traces."""

from __future__ import annotations

from typing import Any

import pytest

from service.errors import NotFound
from service.foreseeing import EPISODES_MAX, FINDINGS_MAX, summary, told
from service.store import findings
from service.store.findings import Kept
from service.tripwires.setups import DEFAULTS
from tests.builders import NAME, Worker, line_item, working

pytestmark = pytest.mark.anyio
on_sqlite = pytest.mark.parametrize("backend", ["sqlite"], indirect=True)

KEPT = Kept(3, "voids", "warn", "80 % void", {"count": 8}, 1, 2, 3, None, None, None)


def find(worker: Worker, rule: str, *, over: bool = False, name: str = NAME) -> None:
    """One finding, open or cleared at once."""
    said: dict[str, Any] = {"action": "warn", "saw": "odd", "numbers": {}, "since_ms": 1}

    def work(connection: Any) -> None:
        findings.put(connection, name, rule, wall_ms=2, **said)
        if over:
            number = findings.still_open(connection, name)[rule].number
            findings.clear(connection, number, 3)

    worker.database.write(work)


def test_a_finding_is_told_with_its_remedy_and_without_its_number() -> None:
    """A number of ours is no business of whoever reads."""
    said = told(KEPT)
    assert "number" not in said
    assert (said["rule"], said["saw"], said["numbers"]) == ("voids", "80 % void", {"count": 8})
    assert set(said["runbook"]) == {"means", "look", "do", "undo"}


def test_a_summary_names_what_is_armed_and_open() -> None:
    """Rules that are off are left out; without findings it says so by an empty list."""
    config = line_item(tripwires={"voids": {"action": "off"}})
    found = summary(config, [])
    assert set(found["armed"]) == set(DEFAULTS) - {"voids"}
    assert (found["armed"]["zero_values"], found["findings"]) == ("freeze", [])
    assert [one["rule"] for one in summary(config, [KEPT])["findings"]] == ["voids"]


@on_sqlite
async def test_a_line_item_that_is_not_there_is_refused(migrated_url: str) -> None:
    """For both questions, with the code that every other read has."""
    async with working(migrated_url) as worker:
        for question in (
            worker.operator.tripwires.shown("nobody"),
            worker.operator.tripwires.preview("nobody", {}),
        ):
            with pytest.raises(NotFound) as refused:
                await question
            assert refused.value.code == "no_such_line_item"


async def test_open_findings_and_past_ones_stand_apart(migrated_url: str) -> None:
    """Newest first, of this line item only, and settings in seconds."""
    async with working(migrated_url) as worker:
        await worker.create(tripwires={"voids": {"window_ms": 7_200_000}})
        await worker.create(id="meadow")
        for rule, over in (("voids", True), ("voids", False), ("win_rate", False)):
            find(worker, rule, over=over)
        find(worker, "disputed", name="meadow")
        shown = await worker.operator.tripwires.shown(NAME)
        assert [one["rule"] for one in shown["open"]] == ["win_rate", "voids"]
        assert [(one["rule"], one["cleared_ms"]) for one in shown["over"]] == [("voids", 3)]
        assert shown["rules"]["voids"]["window_s"] == 7200
        assert "window_ms" not in shown["rules"]["voids"]
        assert "window_s" not in shown["rules"]["unfunded"]


@on_sqlite
async def test_no_more_findings_are_told_than_a_bound(migrated_url: str) -> None:
    """The newest of them."""
    async with working(migrated_url) as worker:
        await worker.create()
        for _ in range(FINDINGS_MAX + 3):
            find(worker, "voids", over=True)
        shown = await worker.operator.tripwires.shown(NAME)
        assert len(shown["over"]) == FINDINGS_MAX
        assert FINDINGS_MAX >= EPISODES_MAX


@on_sqlite
async def test_a_preview_of_no_record_fires_nothing(migrated_url: str) -> None:
    """Every rule is answered for, those that are off included, and nothing is written."""
    async with working(migrated_url) as worker:
        await worker.create()
        before = worker.one("SELECT config FROM line_item"), worker.one("SELECT seq FROM balance")
        answer = await worker.operator.tripwires.preview(NAME, {"voids": {"action": "off"}})
        assert (answer["looks"], answer["would_freeze"], answer["preview"]) == (0, [], True)
        assert set(answer["rules"]) == set(DEFAULTS)
        assert answer["rules"]["voids"] == {
            "setup": answer["rules"]["voids"]["setup"], "fired": 0, "per_week": 0.0, "episodes": []
        }  # fmt: skip
        assert answer["rules"]["voids"]["setup"]["action"] == "off"
        assert answer["rules"]["win_rate"]["setup"]["window_s"] == 3600
        after = worker.one("SELECT config FROM line_item"), worker.one("SELECT seq FROM balance")
        assert after == before
