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
