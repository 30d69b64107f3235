"""`bidkeel rebuild`, run in this process: equal folds, damage found, exit codes for programs."""

from __future__ import annotations

import argparse
import json
import os
from collections.abc import Iterator
from typing import Any

import pytest

from service.commands import rebuild
from service.errors import Malformed, NotFound
from service.learner.memory import Memory
from service.store.learners import digest_of
from service.teaching import FRESH
from tests.builders import NAME, Worker, append, valued, won, working

pytestmark = pytest.mark.anyio

NAMED = {"line_item": NAME, "to": None, "json": True}


@pytest.fixture(autouse=True)
def _named(migrated_url: str) -> Iterator[None]:
    os.environ["BIDKEEL_DATABASE_URL"] = migrated_url
    yield
    del os.environ["BIDKEEL_DATABASE_URL"]


async def taught(worker: Worker, entries: int = 24) -> None:
    """A learner that has read so many entries behind its first, one after the other."""
    await worker.create(policy={"method": "mean"})
    for number in range(entries // 2):
        append(worker.database, won(number), valued(number, 1000 * number))
        worker.pass_service_ms(1000)
        await worker.learn()


def run(capsys: pytest.CaptureFixture[str], **words: Any) -> tuple[int, Any]:
    """The exit code and what was told."""
    code = rebuild.run(argparse.Namespace(**{**NAMED, **words}))
    said = capsys.readouterr().out
    return code, json.loads(said)["rebuilt"] if words.get("json", True) else said


async def test_every_fold_agrees(migrated_url: str, capsys: pytest.CaptureFixture[str]) -> None:
    """From zero, from the checkpoint, the learner's own state and what is published."""
    async with working(migrated_url) as worker:
        await taught(worker)
        code, (told,) = run(capsys)
        assert (code, told["seq"], told["checkpoint"], told["differences"]) == (0, 25, 21, [])
        assert told["digest"] == worker.one("SELECT digest FROM learner")
        code, said = run(capsys, json=False, line_item=None)
        assert (code, said) == (0, f"{NAME}: 25 entries, checkpoint 21: equal\n")


async def test_an_earlier_moment(migrated_url: str, capsys: pytest.CaptureFixture[str]) -> None:
    """By seq or by time; then nothing that is published now is compared."""
    async with working(migrated_url) as worker:
        await taught(worker)
        worker.run("UPDATE learner SET working = :state", state=FRESH)
        code, (told,) = run(capsys, to="14")
        assert (code, told["seq"], told["checkpoint"]) == (0, 14, 11)
        code, (told,) = run(capsys, to="2001-01-01T00:00:00Z")
        assert (code, told["seq"], told["digest"]) == (0, 0, digest_of(FRESH))
        with pytest.raises(Malformed):
            run(capsys, to="yesterday")
        with pytest.raises(NotFound):
            run(capsys, line_item="meadow")


@pytest.mark.parametrize(
    ("statement", "word"),
    [
        ("UPDATE learner SET working = :state", "learner's state"),
        ("UPDATE learner SET state = :state, digest = :digest", "published snapshot 25 differs"),
        ("UPDATE learner SET state = :state", "published snapshot 25 is damaged"),
        ("UPDATE checkpoint SET state = :state, digest = :digest WHERE seq = 21", "checkpoint 21"),
        ("UPDATE checkpoint SET state = :state WHERE seq = 21", "damaged and was refused"),
        ("UPDATE stream SET body = replace(body, '1000000', '1000001')", "differs"),
    ],
)
async def test_each_difference_is_found(
    migrated_url: str, capsys: pytest.CaptureFixture[str], statement: str, word: str
) -> None:
    """Exit code 3, and words that say what differs from what."""
    state = Memory.fresh().to_bytes()
    async with working(migrated_url) as worker:
        await taught(worker)
        given = {"state": state, "digest": digest_of(state)}
        worker.run(statement, **{k: v for k, v in given.items() if f":{k}" in statement})
        code, (told,) = run(capsys)
        assert code == 3
        assert any(word in one for one in told["differences"]), told
        if "refused" in word:
            assert (told["checkpoint"], told["refused"]) == (11, [21])


async def test_a_change_of_terms_is_no_difference(
    migrated_url: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """While the refold runs what is published is of the past, and after it all agrees."""
    async with working(migrated_url) as worker:
        await taught(worker)
        change = {"value": {"ceiling": 21_000_000}}
        await worker.operator.patch(NAME, change, 1, None, "a try", "tester")
        assert run(capsys)[0] == 0
        await worker.learn()
        append(worker.database, won(99))
        await worker.learn()
        code, (told,) = run(capsys)
        assert (code, told["seq"], told["checkpoint"]) == (0, 27, 26)
