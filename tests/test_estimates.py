"""Estimates at earlier moments: the last is what is published, the way there the stream's."""

from __future__ import annotations

import pytest

from service import estimates
from service.estimates import STEPS, Estimate
from service.feedback import Report
from service.store import line_items
from tests.builders import NAME, Worker, working

pytestmark = [
    pytest.mark.anyio,
    pytest.mark.parametrize("backend", ["sqlite"], indirect=True),
]


async def won(worker: Worker, count: int) -> None:
    """So many wins, the n-th of which brings n hundredths."""
    for number, bid in enumerate(await worker.bids(count), 1):
        await worker.report(Report("won", bid.ticket, clearing=900_000))
        value = number * 10**7
        await worker.report(Report("value", ref=bid.ref, value=value, event_id=f"e{number}"))
    await worker.learn()


def known(worker: Worker) -> list[Estimate]:
    """What was known of the garden, moment by moment."""

    def read(connection: object) -> list[Estimate]:
        config = line_items.one(connection, NAME).config  # type: ignore[arg-type]
        return estimates.estimates(connection, NAME, config)  # type: ignore[arg-type]

    return worker.database.read(read)


async def test_the_last_estimate_is_the_published_one(migrated_url: str) -> None:
    """The mean of one to five hundredths is three; it rose on the way, as values did."""
    async with working(migrated_url) as worker:
        await worker.create()
        await won(worker, 5)
        found = known(worker)
        state = await worker.operator.state(NAME)
        last = found[-1]
        assert last.mean == state["certainty"]["mean_nanos"] == 3 * 10**7
        assert (last.low, last.high) == (
            state["certainty"]["low_nanos"],
            state["certainty"]["high_nanos"],
        )
        means = [one.mean for one in found if one.mean is not None]
        assert means == sorted(means)
        assert [one.at_ms for one in found] == sorted(one.at_ms for one in found)


async def test_a_fresh_checkpoint_hides_no_step(migrated_url: str) -> None:
    """Where the newest state has just been kept, the way there is still shown, step by step."""
    async with working(migrated_url) as worker:
        await worker.create()
        await won(worker, 12)  # This worker keeps a checkpoint every ten entries.
        assert worker.one("SELECT count(*) FROM checkpoint") > 0
        assert STEPS - 1 <= len(known(worker)) <= STEPS


async def test_of_a_fresh_line_item_little_is_known(migrated_url: str) -> None:
    """No mean, and an interval as wide as the ceiling allows."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.learn()
        assert {(one.mean, one.low) for one in known(worker)} <= {(None, 0)}


async def test_of_a_tail_too_long_only_checkpoints_are_shown(migrated_url: str) -> None:
    """Nobody waits for a fold of a hundred thousand entries: what was kept is what is shown."""
    async with working(migrated_url) as worker:
        await worker.create()
        await won(worker, 12)
        kept = worker.one("SELECT count(*) FROM checkpoint")
        worker.run("UPDATE learner SET seq = 100000")
        assert len(known(worker)) == kept > 0
