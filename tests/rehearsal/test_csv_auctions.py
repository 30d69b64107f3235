"""Auctions out of a CSV: what is read, and what is counted and told in place of failing."""

from __future__ import annotations

import io

import pytest

from service.learner import hashing
from service.rehearsal.csv_auctions import HASH_KEY, NoAuctions, Told, auctions, pieces
from service.rehearsal.player import Auction

HEAD = "at,highest_competing_cpm,value,floor_cpm,source,value_hint,feature.device,shade"


def read(*lines: str) -> tuple[list[Auction], Told]:
    """The auctions of these lines, and what is told of them."""
    told = Told()
    return list(auctions(io.StringIO("\n".join(lines) + "\n", newline=""), told)), told


def test_every_documented_column_is_read() -> None:
    """Prices as CPM, amounts in currency, the floor into the least bid that wins."""
    rows, told = read(HEAD, "2026-12-01T09:00:00Z,1.5,0.002,2,north,0.001,phone,x")
    one = rows[0]
    assert (one.at_ms, one.least, one.floor) == (1_796_115_600_000, 2_000_000, 2_000_000)
    assert (one.value, one.worth, one.hint, one.source) == (
        2_000_000,
        2_000_000,
        1_000_000,
        "north",
    )
    assert one.hashed == hashing.hashed({"device": "phone"}, HASH_KEY)
    assert (told.rows, told.bad, told.features) == (1, 0, ["device"])
    assert told.unknown_columns == ["shade"]


def test_only_one_column_is_needed() -> None:
    """Without times auctions come a second apart; an unknown value stays unknown."""
    rows, _ = read("highest_competing_cpm", "1", "2")
    assert [(one.at_ms, one.least, one.value) for one in rows] == [
        (0, 1_000_000, None),
        (1000, 2_000_000, None),
    ]
    with pytest.raises(NoAuctions, match="highest_competing_cpm"):
        read("price", "1")
    with pytest.raises(NoAuctions):
        read("")


@pytest.mark.parametrize(
    ("row", "fault"),
    [
        (",,,,,,,", "highest_competing_cpm is missing"),
        (",dear,,,,,,", "highest_competing_cpm is no price"),
        (",-1,,,,,,", "highest_competing_cpm is no price"),
        (",nan,,,,,,", "highest_competing_cpm is no price"),
        (",1e999,,,,,,", "highest_competing_cpm is no price"),
        (",1,much,,,,,", "value is no amount"),
        (",1,,low,,,,", "floor_cpm is no price"),
        (",1,,,,-2,,", "value_hint is no amount"),
        ("yesterday,1,,,,,,", "at is no time"),
        ("2026-12-01T09:00:00,1,,,,,,", "at is no time"),
        (f",1,,,{'x' * 65},,,", "source is longer"),
        (",1,,,,,,,,,", "more fields"),
    ],
)
def test_a_bad_row_is_counted_and_told(row: str, fault: str) -> None:
    """It is left out with its line and a sentence; those around it are read."""
    rows, told = read(HEAD, ",1,,,,,,", row, ",2,,,,,,")
    assert [one.least for one in rows] == [1_000_000, 2_000_000]
    assert (told.rows, told.bad) == (3, 1)
    assert told.first_bad[0][0] == 3
    assert fault in told.first_bad[0][1]


def test_only_the_first_twenty_are_told_in_full() -> None:
    """All are counted."""
    _, told = read("highest_competing_cpm", *["x"] * 50)
    assert (told.bad, len(told.first_bad)) == (50, 20)
    assert told.plain()["bad_rows"] == 50


def test_oddities_of_files_are_never_fatal() -> None:
    """Quotes with breaks inside, bytes of nothing, fields without end, times that go back."""
    _, told = read("highest_competing_cpm,source", '1,"a\nb"', "2\0,c", f'3,"{"y" * 200_000}')
    assert told.bad == 1
    back = "2026-12-01T08:00:00Z"
    rows, told = read(HEAD, "2026-12-01T09:00:00Z,1,,,,,,", f"{back},2,,,,,,")
    assert (rows[0].at_ms == rows[1].at_ms, told.moved) == (True, 1)


def test_pieces_hold_all_rows_in_order() -> None:
    """The last one may be shorter."""
    rows, _ = read("highest_competing_cpm", *[str(n) for n in range(1, 8)])
    parts = list(pieces(rows, 3))
    assert [len(part) for part in parts] == [3, 3, 1]
    assert [one for part in parts for one in part] == rows


@pytest.mark.parametrize(
    ("cpm", "least"),
    [
        ("0", 0),
        ("0.000001", 1),
        ("0.0000011", 2),  # A part of a nano less would not win.
        ("1.5", 1_500_000),
        (" 2 ", 2_000_000),
    ],
)
def test_a_competing_bid_rounds_up(cpm: str, least: int) -> None:
    """To whole nanos per impression, so that a bid of it is enough."""
    rows, told = read("highest_competing_cpm", cpm)
    assert ([one.least for one in rows], told.bad) == ([least], 0)


@pytest.mark.parametrize(("competing", "floor", "least"), [("1", "2", 2), ("2", "1", 2)])
def test_the_higher_of_rival_and_floor_must_be_beaten(
    competing: str, floor: str, least: int
) -> None:
    """The floor stays what it is all the same."""
    rows, _ = read("highest_competing_cpm,floor_cpm", f"{competing},{floor}")
    assert (rows[0].least, rows[0].floor) == (least * 10**6, int(floor) * 10**6)


@pytest.mark.parametrize(
    ("text", "feature"),
    [
        ("phone", "phone"),
        ("13", 13.0),
        ("1.30e1", 13.0),
        ("true", True),
        ("True", "True"),
        ("nan", "nan"),
        ("inf", "inf"),
        ("x" * 70, "x" * 64),
    ],
)
def test_a_feature_is_text_number_or_truth(text: str, feature: str | float | bool) -> None:
    """A number that is none stays text, and long text is cut as in a bid."""
    rows, _ = read("highest_competing_cpm,feature.a", f"1,{text}")
    assert rows[0].hashed == hashing.hashed({"a": feature}, HASH_KEY)


def test_an_empty_feature_is_no_feature() -> None:
    """Nor are those beyond the thirty-second, which are named as unread."""
    rows, told = read("highest_competing_cpm,feature.a", "1,")
    assert (rows[0].hashed, told.features) == ((), ["a"])
    names = [f"feature.f{at}" for at in range(34)]
    _, told = read(",".join(["highest_competing_cpm", *names]), "1" + ",x" * 34)
    assert len(told.features) == 32
    assert told.unknown_columns == ["feature.f32", "feature.f33"]


def test_offsets_are_read_and_rows_without_a_time_follow() -> None:
    """Nine in the morning an hour ahead is eight; the next row comes a second later."""
    rows, _ = read("at,highest_competing_cpm", "2026-12-01T09:00:00+01:00,1", ",2", ",3")
    first = rows[0].at_ms
    assert first == 1_796_115_600_000 - 3_600_000
    assert [one.at_ms - first for one in rows] == [0, 1000, 2000]


def test_a_bad_row_does_not_move_the_clock() -> None:
    """Its time is not read, so the row after it is not moved."""
    head, bad = "at,highest_competing_cpm", "2027-01-01T00:00:00Z,dear"
    rows, told = read(head, "2026-12-01T09:00:00Z,1", bad, "2026-12-01T09:00:01Z,2")
    assert (told.bad, told.moved) == (1, 0)
    assert rows[1].at_ms - rows[0].at_ms == 1000


def test_order_of_columns_does_not_matter() -> None:
    """They go by their names."""
    first, _ = read("highest_competing_cpm,value,floor_cpm", "1,2,3")
    other, _ = read("floor_cpm,highest_competing_cpm,value", "3,1,2")
    assert first == other


@pytest.mark.parametrize("size", [1, 2, 5, 100])
def test_pieces_of_nothing_are_none(size: int) -> None:
    """And never is a piece empty."""
    assert list(pieces([], size)) == []
    rows, _ = read("highest_competing_cpm", *["1"] * 5)
    assert all(0 < len(part) <= size for part in pieces(rows, size))


def test_what_is_told_is_plain_data() -> None:
    """A count of good rows can be taken from it, and each bad one has its line and fault."""
    _, told = read("highest_competing_cpm,colour", "1,red", "dear,blue")
    plain = told.plain()
    assert (plain["rows"], plain["bad_rows"]) == (2, 1)
    assert plain["unknown_columns"] == ["colour"]
    (bad,) = told.first_bad
    assert plain["first_bad_rows"] == [{"line": bad[0], "fault": bad[1]}]
    assert "dear" not in bad[1]
