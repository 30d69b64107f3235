"""Does learning help here: words, limits, and how often they are wrong when read often."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from service.decision.comparing import HARMS, HELPS, SPENT, UNKNOWN, ratio, show_control
from service.decision.terms import Terms
from service.learner.arm_part import CONTROL, MAIN, NAME, Arms
from service.learner.memory import Memory
from tests.builders import line_item

CONFIG = line_item(control={"share": 10**8, "method": "flat", "price": 2_000_000})
CEILING, CAP = CONFIG["value"]["ceiling"], CONFIG["bid_cap"]


def shown(main: list[int], control: list[int], **changes: Any) -> dict[str, Any]:
    """The block for these sums: bought, paid, converted, amount."""
    arms = Arms("flat 2000000", 1, 0, 0, {MAIN: main, CONTROL: control})
    found = show_control({**CONFIG, **changes}, Memory(parts=((NAME, arms.to_bytes()),)))
    assert found is not None
    return dict(found)


def row(bought: int, price: int, rate: float) -> list[int]:
    """So many impressions at a price, this share of which brought the ceiling."""
    hits = round(bought * rate)
    return [bought, bought * price, hits, hits * CEILING]


def test_without_a_control_share_there_is_no_block() -> None:
    """And with one, before its first impression, nothing is pretended to be known."""
    assert show_control(line_item(), Memory()) is None
    found = show_control(CONFIG, Memory())
    assert found is not None
    assert found["says"] == UNKNOWN
    assert found["difference"]["estimate"] is None  # type: ignore[index]
    assert found["difference"]["low"] is found["difference"]["high"] is None  # type: ignore[index]


def test_a_clear_difference_is_said_in_words() -> None:
    """Twice the value for the same money, over enough impressions, either way round."""
    good, bad = row(50_000, 4_000_000, 0.2), row(50_000, 4_000_000, 0.1)
    helps, harms = shown(good, bad), shown(bad, good)
    assert helps["says"] == HELPS
    assert harms["says"] == HARMS
    assert helps["difference"]["estimate"] == pytest.approx(2.5)
    assert 0 < helps["difference"]["low"] < 2.5 < helps["difference"]["high"]
    assert harms["difference"]["high"] < 0


def test_a_small_difference_or_few_impressions_cannot_be_told() -> None:
    """Until the interval leaves 0 out."""
    assert shown(row(50, 4_000_000, 0.2), row(50, 4_000_000, 0.1))["says"] == UNKNOWN
    alike = shown(row(50_000, 4_000_000, 0.101), row(50_000, 4_000_000, 0.1))
    assert alike["says"] == UNKNOWN
    assert alike["difference"]["low"] < 0 < alike["difference"]["high"]


def test_every_arm_says_what_it_bought() -> None:
    """Impressions, money and value, and what a unit of money brought."""
    main = shown(row(1000, 4_000_000, 0.2), row(100, 2_000_000, 0.1))["arms"][0]
    assert (main["arm"], main["impressions"]) == ("main", 1000)
    assert (main["spent_nanos"], main["value_nanos"]) == (4 * 10**9, 200 * CEILING)
    assert main["value_per_unit"]["estimate"] == pytest.approx(5.0)


def test_rare_values_are_compared_by_counts() -> None:
    """The words say what that leaves out."""
    value = {**CONFIG["value"], "ceiling": 50 * 10**9, "typical": 2 * 10**9}
    good = [100_000, 10**11, 400, 800 * 10**9]
    bad = [100_000, 10**11, 100, 200 * 10**9]
    found = shown(good, bad, value=value)
    assert found["says"] == HELPS
    assert "counts how often" in found["difference"]["interval"]


def test_the_share_of_the_budget_that_is_spent_is_said() -> None:
    """A tenth of one unit of currency, and then the method bids for all."""
    assert shown(row(10, 1, 0.1), row(10, 2_000_000, 0.1))["money_says"] is None
    assert shown(row(10, 1, 0.1), row(50, 2_000_000, 0.1))["money_says"] == SPENT


def test_a_false_word_is_rare_however_often_it_is_read() -> None:
    """Two arms that are alike, 60 runs of 10 looks: at 5 % more than 10 is one in a thousand."""
    assert false_words(60, 10) <= 10


@pytest.mark.long
def test_a_false_word_is_as_rare_as_promised() -> None:
    """A thousand runs of 30 looks: at exactly 5 % more than 78 would be one in ten thousand."""
    assert false_words(1000, 30) <= 78


def false_words(runs: int, looks: int) -> int:
    """In how many runs of two arms that are alike a difference was ever claimed."""
    rng, wrong = np.random.default_rng(8), 0
    for _ in range(runs):
        arms = {MAIN: [0, 0, 0, 0], CONTROL: [0, 0, 0, 0]}
        said = False
        for _ in range(looks):
            for arm, many in ((MAIN, 360), (CONTROL, 40)):
                hits = int(rng.binomial(many, 0.3))
                paid = int(rng.uniform(0.0, CAP, many).sum())
                for at, one in enumerate((many, paid, hits, hits * CEILING)):
                    arms[arm][at] += one
            ratios = [ratio(Arms(ripe=arms), arm, Terms.from_config(CONFIG)) for arm in arms]
            said = said or ratios[0].low > ratios[1].high or ratios[0].high < ratios[1].low
        wrong += said
    return wrong


def test_nothing_paid_is_no_ratio() -> None:
    """Impressions for nothing have no value per unit of money."""
    free = ratio(Arms(ripe={MAIN: [5, 0, 1, 7]}), MAIN, Terms.from_config(CONFIG))
    assert (free.estimate, free.low, free.high) == (None, 0.0, math.inf)
