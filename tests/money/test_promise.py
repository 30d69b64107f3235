"""The promise under thousands of random steps on real databases."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import closing

import pytest
from hypothesis import HealthCheck, settings
from hypothesis.stateful import run_state_machine_as_test

from service.store.database import Database
from tests.money.machine import machines

EXAMPLES = {"sqlite": 50, "postgresql": 10}  # Four times over: 200 and 40 histories.


@pytest.fixture
def database(migrated_url: str) -> Iterator[Database]:
    """One database for all histories of a test; each begins by wiping it."""
    with closing(Database(migrated_url, pool_size=2)) as opened:
        yield opened


@pytest.mark.parametrize("orderly", [False, True], ids=["wild", "orderly"])
@pytest.mark.parametrize("spend_on", ["won", "billed"])
def test_no_history_breaks_a_promise(
    database: Database, backend: str, spend_on: str, orderly: bool
) -> None:
    """V1 to V7 and the exchange's own books after each of 40 steps; V8 when all is in order."""
    sized = settings(
        max_examples=EXAMPLES[backend],
        stateful_step_count=40,
        suppress_health_check=[HealthCheck.too_slow],
    )
    run_state_machine_as_test(machines(database, spend_on, orderly=orderly), settings=sized)
