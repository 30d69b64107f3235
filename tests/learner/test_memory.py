"""A memory survives its bytes, adds up its cells, and refuses bytes it did not write."""

from __future__ import annotations

import json

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner.memory import Cell, Memory, Prior, UnreadableMemory
from service.learner.tally import NAMES, Tally
from service.learner.watch import FIRST

whole = some.integers(-(2**80), 2**80)
tallies = some.builds(Tally, **{name: whole for name in NAMES})
cells = some.lists(some.builds(Cell, *[whole] * 7), max_size=5).map(
    lambda found: tuple(sorted(found, key=lambda cell: cell.start_ms))
)
memories = some.builds(
    Memory,
    base=tallies,
    cells=cells,
    clock_ms=whole,
    heard_ms=whole,
    began_ms=whole,
    delays=whole,
    delay_sum_ms=whole,
    prior=some.none() | some.builds(Prior, whole, whole),
    watch=some.builds(FIRST._replace, trials=whole, up=whole, alarms=whole),
    tree=some.binary(max_size=40),
    parts=some.dictionaries(some.text(max_size=5), some.binary(max_size=9), max_size=3).map(
        lambda found: tuple(sorted(found.items()))
    ),
)
FRESH = Memory.fresh().to_bytes()


@given(memories)
def test_a_memory_survives_its_bytes(memory: Memory) -> None:
    """What is written is read back equal, and written again byte for byte."""
    state = memory.to_bytes()

    assert Memory.from_bytes(state) == memory
    assert Memory.from_bytes(state).to_bytes() == state


@pytest.mark.parametrize(
    "state",
    [
        b"",
        b"\xff",
        b"[]",
        b"{}",
        b"null",
        b'{"form":1,"wins":3}',
        FRESH.replace(b'"form":2', b'"form":1'),
        FRESH.replace(b'"form":2', b'"form":3'),
        FRESH.replace(b'"clock_ms":0', b'"clock_ms":0.5'),
        FRESH.replace(b'"clock_ms":0', b'"clock_ms":true'),
        FRESH.replace(b'"clock_ms":0', b'"clock_us":0'),
        FRESH.replace(b'"closed":0', b'"closed":1'),
        FRESH.replace(b'"cells":[]', b'"cells":[[1,2]]'),
        FRESH.replace(b'"cells":[]', b'"cells":7'),
        FRESH.replace(b'"base":[0', b'"base":[null'),
        FRESH.replace(b'"watch":[0,', b'"watch":['),
        FRESH.replace(b'"tree":""', b'"tree":"*"'),
        FRESH.replace(b'"tree":""', b'"tree":0'),
        FRESH.replace(b'"prior":[]', b'"prior":[1]'),
        FRESH.replace(b'"parts":{}', b'"parts":[]'),
        FRESH.replace(b'"parts":{}', b'"parts":{"pace":7}'),
    ],
)
def test_foreign_bytes_are_refused(state: bytes) -> None:
    """Bytes of another form, of an earlier release or out of order never become a memory."""
    with pytest.raises(UnreadableMemory):
        Memory.from_bytes(state)


def test_cells_out_of_order_are_refused() -> None:
    """Age is read from the order of the cells, so another order would be misread."""
    state = Memory(cells=(Cell(5), Cell(3))).to_bytes()

    with pytest.raises(UnreadableMemory, match="order"):
        Memory.from_bytes(state)


def test_the_bytes_are_canonical_json() -> None:
    """Keys are sorted, numbers are integers, and the form is named."""
    content = json.loads(Memory(base=Tally(amount=10**30), clock_ms=3).to_bytes())

    assert list(content) == sorted(content)
    assert content["form"] == 2
    assert content["base"][NAMES.index("amount")] == 10**30


@pytest.mark.parametrize("square", [2**63 - 1, 2**64 - 1, 2**64, 10**40])
def test_sums_beyond_64_bits_are_written_and_read_whole(square: int) -> None:
    """By whatever writes the JSON, in the same canonical form."""
    memory = Memory(Tally(amount_square=square), (Cell(7, amount_square=-square),), tree=b"a tree")
    state = memory.to_bytes()
    again = json.dumps(json.loads(state), sort_keys=True, separators=(",", ":")).encode()

    assert state == again
    assert Memory.from_bytes(state) == memory


def test_the_total_adds_what_is_in_cells() -> None:
    """Values in open cells are in the sums, but their impressions are not known yet."""
    memory = Memory(
        base=Tally(wins=9, known=4, converted=1, amount=7, amount_square=49),
        cells=(Cell(1, bought=5, converted=2, amount=5, amount_square=13),),
    )

    assert memory.total == Tally(wins=9, known=4, converted=3, amount=12, amount_square=62)
