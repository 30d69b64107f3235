"""One battery of checks for every method, so that a new one is held to all of them."""

from __future__ import annotations

import copy
from base64 import b64encode
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.decision.describing import describe
from service.decision.methods import METHODS
from service.decision.opportunity import Opportunity
from service.decision.price import Passed, Proposal, ready
from service.decision.terms import Terms
from service.learner import hashing
from service.learner.fold import Lesson, fold
from service.learner.memory import Memory, UnreadableMemory
from service.learner.rules import Drift, Rules, dimensions_of
from service.learner.tally import Tally
from tests.decision.invented import CAP, CEILING, terms

every_method = pytest.mark.parametrize("method", sorted(METHODS))
every_drift = pytest.mark.parametrize(
    "drift", [None, Drift("discount", "rounds", 300), Drift("window", "time", 40_000)]
)
HASHED = hashing.hashed({"device": "phone", "hour": 13}, b"battery")
OTHER = hashing.hashed({"device": "desk", "place": "top", "returning": True}, b"battery")
OPPORTUNITY = Opportunity("alpine-season-pass", floor=400_000, hashed=HASHED)
FACTS = [
    {"features": b64encode(hashing.to_bytes(hashed)).decode(), "hint": hint}
    for hashed, hint in ((HASHED, 3_000_000), (OTHER, 5_000_000))
]
WINDOW_MS = 6400
Entry = tuple[str, dict[str, Any]]


def of(method: str, drift: Drift | None = None) -> tuple[Terms, Rules]:
    """Terms of a line item under a method, and the rules its lessons are read by."""
    found = replace(terms(method), window_ms=WINDOW_MS)
    if found.tree is not None or method == "linear":
        drift = None
    policy = {"method": method, **found.settings}
    rules = Rules(
        CEILING,
        found.arrival,
        WINDOW_MS,
        drift=drift,
        tree=found.tree,
        dimensions=dimensions_of(policy),
    )
    return replace(found, drift=drift), rules


def proposed(memory: Memory, terms_: Terms, seed: int = 1) -> Proposal | Passed:
    """What the service would be told on this snapshot."""
    return ready(memory, terms_).propose(OPPORTUNITY, np.random.default_rng(seed))


def of_wins(known: int, converted: int, amount_each: int, rounds: int | None = None) -> Memory:
    """A memory in which every win is known."""
    tally = Tally(
        rounds=known if rounds is None else rounds,
        wins=known,
        paid=known * CAP // 2,
        known=known,
        converted=converted,
        amount=converted * amount_each,
        amount_square=converted * amount_each**2,
    )
    return Memory(base=tally)


memories = some.builds(
    lambda known, share, amount, more: of_wins(known, round(share * known), amount, known + more),
    some.integers(0, 10**9),
    some.floats(0.0, 1.0),
    some.integers(1, CEILING),
    some.integers(0, 10**9),
)
chances = some.floats(0.01, 1.0)
laws = {"chance": chances, "stage": some.just([3, 1])}
facts = some.sampled_from(FACTS)


def entries(kind: str, **members: some.SearchStrategy[Any]) -> some.SearchStrategy[Entry]:
    """Entries of a kind, with what was known of their impression."""
    body = some.builds(lambda one, of: one | of, some.fixed_dictionaries(members), facts)
    return some.tuples(some.just(kind), body)


prices = some.integers(0, CAP)
wins = entries("won", price=prices, round=some.integers(0, 1), **laws)
losses = entries("lost", round=some.just(1), to_win=some.integers(0, 2 * CAP), **laws)
values = entries(
    "value",
    amount=some.integers(0, 2 * CEILING),
    was=some.none(),
    win=some.fixed_dictionaries({"price": prices, **laws}),
)
streams = some.lists(wins | losses | values, max_size=40)


def lessons(rows: list[Entry], at_ms: int = 0) -> list[Lesson]:
    """The entries as lessons of one moment."""
    return [Lesson(kind, body, at_ms) for kind, body in rows]


@every_method
@every_drift
def test_it_works_before_the_first_lesson(method: str, drift: Drift | None) -> None:
    """A fresh line item has a price above nothing and not above the cap."""
    answer = proposed(Memory.fresh(), of(method, drift)[0])

    assert isinstance(answer, Proposal)
    assert 0 < answer.price <= CAP


@every_method
@every_drift
@given(memory=memories)
def test_the_price_is_whole_nanos_between_nothing_and_the_cap(
    method: str, drift: Drift | None, memory: Memory
) -> None:
    """Whatever was learnt, a price is an int from 0 to the cap and says what set it."""
    answer = proposed(memory, of(method, drift)[0])

    assert isinstance(answer, Proposal)
    assert type(answer.price) is int
    assert 0 <= answer.price <= CAP
    assert answer.set_by in {"value", "cap", "allowance"}
    assert answer.set_by != "cap" or answer.price == CAP


@every_method
@pytest.mark.parametrize("known", [0, 1, 2, 10**9])
@pytest.mark.parametrize("share", [0, 1])
@pytest.mark.parametrize("amount", [1, CEILING])
def test_extreme_memories_give_finite_prices(
    method: str, known: int, share: int, amount: int
) -> None:
    """Nothing known, one lesson, a thousand million of them, all worthless or at the ceiling."""
    snapshot = ready(of_wins(known, share * known, amount), of(method)[0])
    shown = describe(snapshot)
    low, high = shown["low_nanos"], shown["high_nanos"]

    assert isinstance(snapshot.answer, Proposal)
    assert 0 <= snapshot.answer.price <= CAP
    assert isinstance(low, int)
    assert isinstance(high, int)
    assert 0 <= low <= high <= CEILING


@every_method
@every_drift
@given(before=streams, rows=streams, chance=some.randoms(use_true_random=False))
def test_the_order_of_lessons_within_an_epoch_moves_nothing(
    method: str, drift: Drift | None, before: list[Entry], rows: list[Entry], chance: Any
) -> None:
    """The same lessons of one moment in any order leave the same bytes, and the same answer."""
    terms_, rules = of(method, drift)
    start = fold(Memory.fresh(), lessons(before, 5), rules)
    other = list(rows)
    chance.shuffle(other)
    one, two = (fold(start, lessons(some_rows, 900), rules) for some_rows in (rows, other))

    assert one.to_bytes() == two.to_bytes()
    assert proposed(one, terms_) == proposed(two, terms_)


@every_method
@every_drift
@given(parts=some.lists(streams, max_size=5), cut=some.integers(0, 200))
def test_a_fold_from_zero_equals_checkpoint_and_tail(
    method: str, drift: Drift | None, parts: list[list[Entry]], cut: int
) -> None:
    """Cut anywhere and passed through bytes, the state is the same to the byte."""
    terms_, rules = of(method, drift)
    rows = [lesson for at, part in enumerate(parts) for lesson in lessons(part, 3000 * at)]
    checkpoint = fold(Memory.fresh(), rows[:cut], rules).to_bytes()
    tail = fold(Memory.from_bytes(checkpoint), rows[cut:], rules)
    whole = fold(Memory.fresh(), rows, rules)

    assert tail.to_bytes() == whole.to_bytes()
    assert proposed(tail, terms_) == proposed(whole, terms_)


@every_method
@every_drift
def test_the_state_does_not_grow_with_lessons(method: str, drift: Drift | None) -> None:
    """Thirty thousand lessons later the state is still below 64 KiB."""
    rules, rng = of(method, drift)[1], np.random.default_rng(5)
    memory = Memory.fresh()
    for at in range(300):
        rows: list[Entry] = []
        for price in rng.integers(0, CAP, 50).tolist():
            win = {"price": price, "chance": 0.5, "stage": [3, 1], "round": 1}
            worth = {"amount": int(rng.integers(0, CEILING)), "was": None, "win": win, **FACTS[1]}
            rows += [("won", win), ("value", worth)]
        memory = fold(memory, lessons(rows, 700 * at), rules)

    assert len(memory.to_bytes()) < 64 * 1024


@every_method
def test_the_same_inputs_give_the_same_price_and_stay_as_they_were(method: str) -> None:
    """Asking twice changes neither the answer nor anything that was passed in."""
    terms_, rules = of(method)
    rows: list[Entry] = [
        ("won", {"price": 5, "bid": 9, "round": 1, "chance": 0.9, "stage": [0, 0]}),
        ("value", {"amount": 2 * CEILING, "was": None}),
    ]
    kept, memory = copy.deepcopy(rows), of_wins(40, 3, CEILING // 2)
    state = memory.to_bytes()
    answers = [proposed(fold(memory, lessons(rows), rules), terms_) for _ in range(2)]

    assert answers[0] == answers[1]
    assert rows == kept
    assert memory.to_bytes() == state


@every_method
def test_seeded_draws_repeat_and_differ_where_they_are_drawn(method: str) -> None:
    """Chance comes from the generator alone; a method that draws nothing never uses it."""
    memory, (terms_, _) = of_wins(400, 30, CEILING // 9), of(method)
    draws = [proposed(memory, terms_, seed) for seed in (*range(8), *range(8))]

    assert draws[:8] == draws[8:]
    assert (len(set(draws)) > 1) is ready(memory, terms_).draws


@every_method
@pytest.mark.parametrize("amount", [10**400, -(10**400), 10**200])
def test_sums_out_of_range_halt_or_are_harmless(method: str, amount: int) -> None:
    """No sum becomes a price that is no number; nothing is raised while bidding."""
    base = Tally(rounds=10, wins=10, known=10, converted=1, amount=amount, amount_square=amount**2)
    answer = proposed(Memory(base=base), of(method)[0])

    assert answer == Passed("learner_halted") or isinstance(answer, Proposal)
    assert isinstance(answer, Passed) or 0 <= answer.price <= CAP


@every_method
def test_a_state_of_an_earlier_form_is_refused(method: str) -> None:
    """It is never misread as a state of this form; the stream is read again in its place."""
    state = of_wins(40, 3, CEILING // 2).to_bytes()

    with pytest.raises(UnreadableMemory):
        Memory.from_bytes(state.replace(b'"form":2', b'"form":1'))


@every_method
@given(memory=memories)
def test_it_can_be_described(method: str, memory: Memory) -> None:
    """The state page gets the method's name, source, assumptions and what is proved."""
    shown = describe(ready(memory, of(method)[0]))

    assert shown["method"] == method
    assert all(shown[name] for name in ("source", "assumptions", "guarantee", "interval"))


@every_method
def test_a_correction_after_a_reset_leaves_a_price(method: str) -> None:
    """A correction of what a reset forgot leaves sums below zero, and still a sound price."""
    terms_, rules = of(method)
    rows: list[Entry] = [
        ("value", {"amount": CEILING, "was": None}),
        ("reset", {}),
        ("value", {"amount": 0, "was": CEILING}),
    ]
    memory = fold(Memory.fresh(), lessons(rows), rules)

    assert memory.total.amount < 0
    assert proposed(memory, terms_) == proposed(Memory.fresh(), terms_)
