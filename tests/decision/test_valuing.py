"""Prices of single opportunities: by their features, by the caller's hint, and by neither."""

from __future__ import annotations

import math
import time
from base64 import b64encode
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from service.decision.describing import describe
from service.decision.opportunity import Opportunity
from service.decision.price import Passed, Proposal, Ready, ready
from service.decision.terms import Terms
from service.decision.valuing import ByFeatures
from service.learner import hashing, hints, linear
from service.learner.fold import Lesson, fold
from service.learner.linear_part import Sums
from service.learner.memory import Memory
from service.learner.rules import Rules
from tests.decision.invented import CAP, config, with_value

KEY = b"invented"
CEILING = CAP
ONE = {"ceiling": CEILING, "typical": CEILING // 2}
PHONE, DESK = ({"device": device} for device in ("phone", "desk"))
EVENT = 4_000_000


def made(method: str, lessons: list[Lesson], policy: Any = None, **value: Any) -> Ready:
    """A snapshot of a line item after these lessons."""
    wish = {**with_value(config(method, **(policy or {})), **ONE, **value), "allowance": None}
    return ready(fold(Memory.fresh(), lessons, Rules.from_config(wish)), Terms.from_config(wish))


def bought(features: dict[str, str], amounts: list[int], **more: Any) -> list[Lesson]:
    """Wins of one value each, of impressions with these features."""
    packed = b64encode(hashing.to_bytes(hashing.hashed(features, KEY))).decode()
    facts = {"features": packed, **more}
    return [
        Lesson(kind, {"price": 1, "round": 1, "amount": amount, "was": None} | facts)
        for amount in amounts
        for kind in ("won", "value")
    ]


def priced(snapshot: Ready, features: dict[str, Any] | None = None, **wish: Any) -> int:
    """What an opportunity is answered; hashed, unless no features are given at all."""
    hashed = () if features is None else hashing.hashed(features, KEY)
    opportunity = Opportunity("a", hashed=hashed, **wish)
    answer = snapshot.propose(opportunity, np.random.default_rng(1))
    assert isinstance(answer, Proposal)
    return answer.price


def test_the_price_is_the_top_of_the_ellipsoid() -> None:
    """Mean plus radius times width of the pure ridge, cut at the cap, rounded down."""
    lessons = bought(PHONE, [EVENT] * 900) + bought(DESK, [0] * 900)
    snapshot = made("linear", lessons)
    state = Sums.from_bytes(snapshot.memory.part("linear"), 32)
    ridge = state.ridge(1.0, CEILING)
    x = hashing.dense(hashing.hashed(PHONE, KEY), 32)
    expected = float(ridge.upper(x, 0.5, 1.0, 0.05)) * CEILING

    assert priced(snapshot, PHONE) == pytest.approx(expected, abs=2)
    assert EVENT < priced(snapshot, PHONE) < EVENT + CAP // 5
    assert priced(snapshot, DESK) < CAP // 5


@pytest.mark.parametrize("size", [16, 32, 64])
def test_few_sums_are_the_products_of_whole_matrices(size: int) -> None:
    """To the last bits, also where places fall together; and the prices are equal nanos."""
    rng = np.random.default_rng(size)
    sums = Sums.from_bytes(made("linear", [], {"dimensions": size}).memory.part("linear"), size)
    ridge = linear.learn(
        sums.ridge(1.0, CEILING),
        [linear.Lesson(rng.normal(size=size), rng.random()) for _ in range(300)],
    )
    known = ridge.weights.tolist(), ridge.inverse.tolist()
    features = ByFeatures(*known, 1.75, ridge.lessons, float(CEILING))
    for _ in range(500):
        places = sorted(rng.choice(64, size=rng.integers(1, 33), replace=False).tolist())
        hashed = tuple((place, int(rng.integers(-900, 900)) or 1) for place in places)
        x = hashing.dense(hashed, size)
        mean, width = float(x @ ridge.weights), math.sqrt(float(x @ ridge.inverse @ x))
        value, believed = features.value(hashed) or (-1.0, -1.0)

        assert value == pytest.approx(max(mean + 1.75 * width, 0.0) * CEILING, rel=1e-11)
        assert believed == pytest.approx(max(mean, 0.0) * CEILING, rel=1e-11, abs=1e-6)
        assert math.floor(value) == math.floor(max(mean + 1.75 * width, 0.0) * CEILING)


def test_unknown_missing_and_no_features_are_ordinary() -> None:
    """The unknown is bid high, as nothing is known of it; none at all has a price of its own."""
    lessons = bought(PHONE, [EVENT // 4] * 900) + bought(DESK, [0] * 900)
    snapshot = made("linear", lessons)
    unseen = {"device": "watch", "place": "top", "hour": 13, "returning": True}

    assert priced(snapshot, unseen) == CAP
    assert 0 < priced(snapshot, {}) <= CAP
    assert priced(snapshot) == snapshot.answer.price  # type: ignore[union-attr]


def test_features_that_cancel_out_fall_back() -> None:
    """Where no place is left after hashing, the price is that of an impression of its own."""
    snapshot = made("linear", bought(PHONE, [EVENT] * 50))
    gone = Opportunity("a", hashed=((1, 256), (33, -256)))

    assert snapshot.propose(gone, np.random.default_rng(1)) == snapshot.answer


def test_another_number_of_dimensions_halts_until_it_is_folded_again() -> None:
    """What was learnt in 32 places is never read as if it were 64."""
    wish = with_value(config("linear", dimensions=64), **ONE)
    memory = made("linear", bought(PHONE, [EVENT] * 5)).memory

    assert ready(memory, Terms.from_config(wish)).answer == Passed("learner_halted")


def test_an_allowance_holds_each_bid_at_its_own_mean() -> None:
    """Not at the mean of all: what features tell apart stays apart."""
    lessons = bought(PHONE, [EVENT] * 900) + bought(DESK, [0] * 900)
    held = replace(made("linear", lessons), most=1.0)
    ridge = Sums.from_bytes(held.memory.part("linear"), 32).ridge(1.0, CEILING)
    mean = float(ridge.mean(hashing.dense(hashing.hashed(PHONE, KEY), 32))) * CEILING

    assert priced(held, PHONE) == pytest.approx(mean, abs=2)
    assert priced(held, DESK) < EVENT // 100


def test_a_price_takes_less_than_sixty_microseconds() -> None:
    """At 32 dimensions and five features, the best of many; hashing apart."""
    snapshot = made("linear", bought(PHONE, [EVENT] * 50))
    assert snapshot.valuing is not None
    features: dict[str, Any] = {"device": "phone", "hour": 13, "place": "top", "a": True, "b": 2.5}
    opportunity = Opportunity("a", hashed=hashing.hashed(features, KEY))
    took = []
    for _ in range(2000):
        start = time.perf_counter()
        snapshot.valuing.value(opportunity)
        took.append(time.perf_counter() - start)

    assert min(took) < 60e-6


@pytest.mark.parametrize("arrival", ["once", "accrues"])
@pytest.mark.parametrize(
    ("method", "order"), [("posterior-quantile", 0.75), ("mean", None), ("thompson", None)]
)
def test_a_hint_is_bid_at_the_learnt_ratio(method: str, order: float | None, arrival: str) -> None:
    """Its quantile where the method bids one, else its mean; without a hint the plain value."""
    amounts = [EVENT, 0, 0, EVENT // 2] * 50
    lessons = bought(PHONE, amounts, hint=EVENT, won_ms=0)
    # Windows over, so that all hints count in full.
    lessons.append(Lesson("tick", {"rounds": 0, "under_floor": 0}, 10**10))
    said = {"arrival": arrival, "hints": True}
    snapshot, plain = made(method, lessons, **said), made(method, lessons, arrival=arrival)
    seen = hints.Hints(200, 200 * EVENT, sum(amounts), sum(one**2 for one in amounts))
    prior = hints.Prior(CEILING // 2)
    ratio = hints.ratio(seen, prior)
    if order is not None:
        ratio = hints.ratio_quantile(seen, prior, order)

    assert priced(snapshot, value_hint=EVENT) == pytest.approx(ratio * EVENT, abs=2)
    assert priced(snapshot, value_hint=1000 * EVENT) == CAP
    assert priced(snapshot, value_hint=0) == 0
    assert priced(snapshot) == priced(plain) == priced(plain, value_hint=EVENT)


def test_where_features_matter_they_earn_more() -> None:
    """Half the impressions are worth 0.9 caps and half nothing: 3,000 rounds, both ways."""
    surplus = {method: _played(method) for method in ("linear", "kl-ucbid")}

    assert surplus["linear"] > 1.2 * surplus["kl-ucbid"] > 0


def _played(method: str) -> float:
    """Surplus in caps of a method whose every bid goes through fold, snapshot and proposal."""
    rng, total = np.random.default_rng(8), 0.0
    wish = {**with_value(config(method), **ONE), "allowance": None}
    rules, terms, memory = Rules.from_config(wish), Terms.from_config(wish), Memory.fresh()
    for _ in range(60):
        snapshot, lessons = ready(memory, terms), list[Lesson]()
        for rival, phone in zip(rng.random(50), rng.random(50) < 0.5, strict=True):
            if priced(snapshot, PHONE if phone else DESK) >= rival * CAP:
                worth = 0.9 if phone else 0.0
                total += worth - rival
                lessons += bought(PHONE if phone else DESK, [round(worth * CAP)])
        memory = fold(memory, lessons, rules)
    return total


def test_open_windows_count_by_the_share_that_had_time_to_come() -> None:
    """Half of all values due by now: the ridge of half of every impression, values in full."""
    lessons = bought(PHONE, [EVENT // 2] * 400, won_ms=0)
    said = {"arrival": "accrues", "window_ms": 10**9, "delay_mean_ms": 10**8}
    # One delay law's median later; its cell began at 0 and still goes on, so its middle is half.
    lessons.append(Lesson("tick", _TICK, round(2 * 10**8 * np.log(2.0))))
    snapshot = made("linear", lessons, **said)
    sums = Sums.from_bytes(snapshot.memory.part("linear"), 32)
    x = hashing.dense(hashing.hashed(PHONE, KEY), 32)
    expected = sums.ridge(1.0, CEILING, 0.5).upper(x, 0.5, 1.0, 0.05)
    in_full = sums.ridge(1.0, CEILING).upper(x, 0.5, 1.0, 0.05)

    assert priced(snapshot, PHONE) == pytest.approx(min(float(expected), 1.0) * CEILING, rel=0.02)
    assert float(in_full) < 0.8 * float(expected)


def test_nothing_is_taken_for_worthless_while_its_window_is_open() -> None:
    """Impressions bought a moment ago, of which nothing was heard, leave the bid at the cap."""
    won = [lesson for lesson in bought(PHONE, [0] * 900) if lesson.kind == "won"]

    assert priced(made("linear", won, arrival="accrues"), PHONE) == CAP
    assert priced(made("linear", bought(PHONE, [0] * 900)), PHONE) < CAP // 5


def test_open_hints_do_not_pull_the_ratio_down() -> None:
    """Hints bought a moment ago count for as little as their values had time to come."""
    old = bought(PHONE, [EVENT // 2] * 200, hint=EVENT, won_ms=0)
    late_ms = 10**10
    fresh = [Lesson("won", {"price": 1, "round": 1, "hint": EVENT}, late_ms) for _ in range(200)]
    said = {"arrival": "accrues", "hints": True, "delay_mean_ms": 10**8}
    before = priced(made("mean", [*old, Lesson("tick", _TICK, late_ms)], **said), value_hint=EVENT)
    after = priced(made("mean", [*old, *fresh], **said), value_hint=EVENT)

    assert before == pytest.approx(EVENT // 2, rel=0.02)
    assert after == pytest.approx(before, rel=0.02)


def test_both_are_described_in_words() -> None:
    """What was learnt of features and hints, and that no theorem speaks of hints."""
    snapshot = made("linear", bought(PHONE, [EVENT] * 9, hint=EVENT), hints=True)
    shown: dict[str, Any] = describe(snapshot)
    none = describe(made("mean", []))

    assert shown["features"]["dimensions"] == 32
    assert shown["features"]["lessons"] == 9
    radius = linear.ellipsoid_radius(
        Sums.from_bytes(snapshot.memory.part("linear"), 32).ridge(1.0, CEILING).log_det,
        *(1.0, 0.5, 1.0, 0.05),
    )
    assert shown["features"]["radius"] == pytest.approx(float(radius), abs=1e-6)
    assert shown["hints"]["hinted_nanos"] == 9 * EVENT
    assert shown["hints"]["ratio"] == pytest.approx(1.0)
    assert "bidding by hints" in shown["guarantee"]
    assert (none["features"], none["hints"]) == (None, None)


def test_nothing_learnt_is_the_ellipsoid_before_the_first_lesson() -> None:
    """Radius R sqrt(2 ln 20) + S and no weights."""
    found = ByFeatures.of(Memory.fresh(), made("linear", []).terms)

    assert found.radius == pytest.approx(0.5 * np.sqrt(2 * np.log(20)) + 1.0, rel=1e-12)
    assert not any(found.weights)


_TICK = {"rounds": 0, "under_floor": 0}
