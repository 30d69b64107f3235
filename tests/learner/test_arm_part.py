"""What each arm has bought and brought, as it is folded from the stream."""

from __future__ import annotations

import pytest

from service.learner.arm_part import (
    AMOUNT,
    BOUGHT,
    CONTROL,
    CONVERTED,
    MAIN,
    PAID,
    Arms,
    UnreadableArms,
    learn,
    read,
)
from service.learner.lesson import Lesson
from service.learner.rules import Rules

WINDOW_MS = 3200  # A cell is a tenth of a second.
RULES = Rules(1000, window_ms=WINDOW_MS, control=True)
FLAT = {"method": "flat", "price": 7, "share": 10**8}


def create(control: object = FLAT, at_ms: int = 0, kind: str = "create") -> Lesson:
    """An entry that says which plain rule there is."""
    return Lesson(kind, {"control": control}, at_ms)


def won(at_ms: int, price: int, arm: str = "", **more: object) -> Lesson:
    """A win of an arm."""
    return Lesson("won", {"price": price, "bid": price, "arm": arm, "round": 1, **more}, at_ms)


def value(at_ms: int, won_ms: int, amount: int, arm: str = "", **more: object) -> Lesson:
    """A value of a win of an arm."""
    body = {"amount": amount, "was": None, "won_ms": won_ms, "total_was": 0, "arm": arm, **more}
    return Lesson("value", body, at_ms)


def folded(*lessons: Lesson, rules: Rules = RULES) -> Arms:
    """The arms after these lessons."""
    return read(learn(b"", lessons, rules))


STORY = [
    create(),
    won(100, 5),
    won(150, 9, CONTROL),
    value(200, 100, 300),
    value(900, 150, 40, CONTROL),
    won(5000, 6, CONTROL),
]


def test_what_had_its_window_is_ripe_and_the_rest_open() -> None:
    """By 5,000 the first two have; the third is counted beside them."""
    arms = folded(*STORY)
    assert arms.ripe == {MAIN: [1, 5, 1, 300], CONTROL: [1, 9, 1, 40]}
    assert arms.all_of(CONTROL, BOUGHT) == 2
    assert arms.all_of(CONTROL, PAID) == 15
    assert arms.all_of(MAIN, PAID) == 5


def test_any_cut_of_the_stream_gives_the_same_bytes() -> None:
    """As every part of a memory must."""
    whole = learn(b"", STORY, RULES)
    for cut in range(len(STORY)):
        assert learn(learn(b"", STORY[:cut], RULES), STORY[cut:], RULES) == whole
    assert read(whole).to_bytes() == whole


def test_values_are_cut_at_the_ceiling_and_corrected() -> None:
    """A correction counts as the difference; a second value of one impression converts nothing."""
    arms = folded(
        create(),
        won(100, 5),
        value(200, 100, 900),
        value(300, 100, 400, total_was=900),
        value(400, 100, 0, was=900, total_was=1300),
        won(9000, 5),
    )
    assert (arms.ripe[MAIN][AMOUNT], arms.ripe[MAIN][CONVERTED]) == (400, 1)


def test_what_comes_too_late_teaches_neither_arm() -> None:
    """Nor does what was cancelled, nor a value of before a reset."""
    late = folded(create(), won(100, 5), won(9000, 5), value(9100, 100, 300))
    assert late.ripe[MAIN] == [1, 5, 0, 0]
    taken_back = folded(create(), won(100, 5, only="market"), won(9000, 5))
    assert MAIN not in taken_back.ripe
    assert folded(create(), value(50, 20, 7, before_reset=True)).all_of(MAIN, AMOUNT) == 0


def test_a_cost_above_the_bid_is_disputed_and_not_counted() -> None:
    """As the books do."""
    body = {"price": 9, "bid": 5, "round": 1}
    assert folded(create(), Lesson("won", body, 100)).all_of(MAIN, PAID) == 5


def test_where_bills_count_wins_do_not() -> None:
    """Paid by is what the line item says."""
    billed = Rules(1000, window_ms=WINDOW_MS, control=True, paid_by="billed")
    bill = Lesson("billed", {"price": 4, "bid": 5, "arm": CONTROL}, 200)
    arms = folded(create(), won(100, 5), bill, rules=billed)
    assert (arms.all_of(MAIN, PAID), arms.all_of(CONTROL, PAID)) == (0, 4)


def test_another_rule_and_a_reset_begin_afresh() -> None:
    """Another share does not; a release that says nothing of control changes nothing."""
    for kind, said, kept in (
        ("edit", {**FLAT, "price": 8}, 0),
        ("edit", {**FLAT, "share": 1}, 1),
        ("edit", None, 0),
    ):
        arms = folded(create(), won(100, 5), create(said, 200, kind))
        assert arms.all_of(MAIN, BOUGHT) == kept
    assert folded(create(), won(100, 5), Lesson("edit", {}, 200)).all_of(MAIN, BOUGHT) == 1
    assert folded(create(), won(100, 5), Lesson("reset", {}, 200)).all_of(MAIN, BOUGHT) == 0
    assert learn(b"", [won(100, 5)], RULES) == b""


@pytest.mark.parametrize("state", [b"{}", b"[]", b"\xff", b'{"form":2}', b'{"form":1}'])
def test_other_bytes_are_refused(state: bytes) -> None:
    """They are no arms of ours."""
    with pytest.raises(UnreadableArms):
        read(state)
