"""How much work one lesson and one snapshot are, in calls, which no busy machine changes.

Measured when written and bounded a little above; every published state costs this in every worker.
"""

from __future__ import annotations

import numpy as np

from service import teaching
from service.decision import counts
from service.decision.price import ready
from service.decision.terms import Terms
from service.learner.memory import Memory
from tests.builders import line_item
from tests.test_bid_work import calls

HOUR_MS = 3_600_000
CONFIG = line_item(
    policy={"method": "kl-ucbid", "gamma": 1.01},
    value={"arrival": "accrues", "window_ms": 168 * HOUR_MS},
)
OUTCOME = {"bid": 1_000_000, "source": "north", "auction": "second", "round": 1, "late": False}


def entries(hours: int) -> list[tuple[str, dict[str, object], int]]:
    """Four wins an hour, at one of two prices, and a value of every tenth some time later."""
    rng, found = np.random.default_rng(3), list[tuple[str, dict[str, object], int]]()
    for quarter in range(4 * hours):
        at_ms = quarter * HOUR_MS // 4
        price = int(rng.choice([400_000, 900_000]))
        found.append(("won", {**OUTCOME, "price": price}, at_ms))
        if quarter % 10 == 9:
            won_ms = at_ms - HOUR_MS // 3
            value: dict[str, object] = {"amount": 9_000_000, "was": None, "won_ms": won_ms}
            found.append(("value", value, at_ms))
    return found


LESSONS = entries(12)
STATE = teaching.lesson(teaching.FRESH, LESSONS, CONFIG)


def test_a_lesson_is_few_calls() -> None:
    """From the bytes of a state to the bytes of the next, of one win."""
    _, body, at_ms = LESSONS[0]
    won = [("won", body, LESSONS[-1][2] + at_ms + 1000)]

    assert calls(lambda: teaching.lesson(STATE, won, CONFIG)) <= 290


def test_a_snapshot_is_made_ready_in_few_calls() -> None:
    """From the bytes of a state to a price, with the delays of its values fitted afresh."""

    def made() -> None:
        counts._rate_of.cache_clear()
        ready(Memory.from_bytes(STATE), Terms.from_config(CONFIG))

    assert calls(made) <= 640
