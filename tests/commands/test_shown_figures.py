"""What a person reads in the tables of commands: every figure rounded, with its unit or a word."""

from __future__ import annotations

import argparse
import json
from typing import Any

import pytest

from service import money
from service.commands import (
    bench_curve,
    bench_decide,
    bench_delay,
    bench_growth,
    drill_rolling,
    garden,
    hindsight,
    openrtb_explain,
    rehearse,
    report,
    settings_table,
    tripwires_try,
)
from service.errors import Malformed
from service.rehearsal.late import ORACLE, WAYS

UNIT = money.NANOS_PER_UNIT
CPM = money.NANOS_PER_CPM


@pytest.mark.parametrize(
    ("figure", "words"),
    [
        (None, "none"),
        ({"mean": 0.0, "error": None}, "0"),
        ({"mean": 1234.4, "error": None}, "1,234"),
        ({"mean": 1234.44, "error": 0.0}, "1,234.4 ± 0.0"),
        ({"mean": 12.0, "error": 3.25}, "12.0 ± 3.2"),
    ],
)
def test_a_count_has_its_error_where_there_are_several_seeds(
    figure: dict[str, Any] | None, words: str
) -> None:
    """One run has none, and none is made up."""
    assert rehearse._count(figure) == words


@pytest.mark.parametrize(
    ("figure", "words"),
    [
        (None, "not known"),
        ({"mean_nanos": 0, "error_nanos": None}, "0.0000"),
        ({"mean_nanos": -UNIT, "error_nanos": None}, "-1.0000"),
        ({"mean_nanos": 1234 * UNIT + 56_789_000, "error_nanos": None}, "1,234.0568"),
        ({"mean_nanos": UNIT, "error_nanos": UNIT // 4}, "1.0000 ± 0.2500"),
    ],
)
def test_an_amount_is_written_in_units_of_its_currency(
    figure: dict[str, Any] | None, words: str
) -> None:
    """To four decimals, and what is not known is not nought."""
    assert rehearse._amount(figure) == words


@pytest.mark.parametrize(
    ("figure", "words"),
    [({"mean": 0.5, "error": None}, "50.00"), ({"mean": 0.12345, "error": 0.001}, "12.35 ± 0.10")],
)
def test_a_share_is_written_in_per_cent(figure: dict[str, Any], words: str) -> None:
    """The unit stands in the head of the row."""
    assert rehearse._per_cent(figure) in (words, words.replace("12.35", "12.34"))


def test_the_best_fixed_bid_is_a_cpm_or_not_known() -> None:
    """A market without known values has no best bid."""
    assert rehearse._best({"best_fixed": None}) == "not known"
    assert rehearse._best({"best_fixed": {"bid_cpm_nanos": 2_500_000}}) == "2.500"


def test_passes_are_named_with_their_count_or_none() -> None:
    """Means over the seeds, so with a decimal."""
    assert rehearse._passes({"passes": {}}) == "none"
    assert rehearse._passes({"passes": {"no_value": 1234.5, "paused": 2}}) == (
        "1,234.5 no_value, 2.0 paused"
    )


def test_rows_of_a_file_that_were_left_out_are_told_by_line() -> None:
    """With the columns that nobody reads; without a file there is nothing to tell."""
    told = {
        **{"rows": 12_345, "bad_rows": 2, "unknown_columns": ["colour", "taste"]},
        "first_bad_rows": [{"line": 7, "fault": "no price"}],
    }
    assert rehearse._file({"file": told}) == [
        "12,345 rows read, 2 of them bad and left out",
        "line 7: no price",
        "columns nobody reads: colour, taste",
    ]
    assert rehearse._file({}) == []


def test_a_difference_names_both_policies_and_the_currency() -> None:
    """On the same auctions, or it would be mostly chance."""
    one = {"policy": "a", "than": "b", "surplus": {"mean_nanos": UNIT, "error_nanos": None}}
    result = {"differences": [one], "policies": [], "currency": "EUR", "exact": ["by hand"]}
    assert rehearse._extra(result) == [
        "exact: by hand",
        "a earned 1.0000 EUR more than b on the same auctions",
    ]


@pytest.mark.parametrize(
    ("line", "cells"),
    [
        ({"code": "too_few"}, ["refused: too_few", "", "", ""]),
        (
            {
                **{"surplus": {"low": UNIT, "high": 2 * UNIT}, "level": 0.95},
                "auctions": 1234,
            },
            ["1.00", "2.00", "1,234", "95 %, assumed"],
        ),
        (
            {"surplus": {"low": 0, "high": 0}, "level": None, "auctions": 0},
            ["0.00", "0.00", "0", "a rough guide"],
        ),
    ],
)
def test_an_assumed_line_says_how_sure_it_is(line: dict[str, Any], cells: list[str]) -> None:
    """Or why it was refused, by its code."""
    assert hindsight._assumed(line) == cells


def test_a_drawn_line_is_per_auction_in_cpm() -> None:
    """With as many auctions as its weights are worth."""
    ends = {"estimate": CPM, "low": 0, "high": 2 * CPM}
    line = {"surplus_per_auction": ends, "effective_auctions": 1234.56}
    assert hindsight._drawn(line) == ["1.000", "0.000", "2.000", "1,234.6"]
    refused = {"code": "no_odds"}
    assert hindsight._drawn(refused) == ["refused: no_odds", "", "", "0.0"]


@pytest.mark.parametrize(("exact", "auctions", "share"), [(1, 4, "25.0 %"), (0, 0, "-")])
def test_what_is_known_for_certain_is_a_share_of_all_auctions(
    exact: int, auctions: int, share: str
) -> None:
    """Of none there is no share."""
    ends = {"low_nanos": -UNIT, "high_nanos": UNIT}
    shown = {"surplus": ends, "exact": {"auctions": exact}, "auctions": auctions}
    assert hindsight._row(shown) == ["-1.00", "1.00", f"{auctions}", share]


def test_every_assumption_is_told_once_and_a_cut_log_is_said() -> None:
    """Two lines with one label and one assumption are one sentence."""
    line = {"label": "curve", "assumes": "independence"}
    found = {
        **{"assumed": [line, line], "drawn": [{"label": "odds", "says": "refused"}]},
        **{"without_model": {"says": "bounds"}, "budget": {"says": "enough"}},
        **{"left_out": "0", "log_is_cut": True},
    }
    assert hindsight._words(found, "3 lines") == [
        "Without a model: bounds.",
        "curve: independence.",
        "odds: refused.",
        "Budget: enough.",
        "Log: 3 lines. Left out: 0.",
        "The log was cut at its limit of lines.",
    ]


def test_late_values_are_shares_of_the_oracle() -> None:
    """By hand: ways that earned half of it, and the oracle all of itself."""
    earned = {way: [UNIT, 3 * UNIT] for way in WAYS} | {ORACLE: [4 * UNIT, 4 * UNIT]}
    assert {bench_delay._share(earned, way) for way in WAYS} == {0.5, 1.0}
    cells = bench_delay._cells(earned, next(way for way in WAYS if way != ORACLE))
    assert cells[0].startswith("2.00 ± ")
    assert cells[1] == "50.0 %"


def test_late_values_are_told_to_a_program_with_currency_and_size(
    capsys: pytest.CaptureFixture[str],
) -> None:
    """Surplus and error in the currency, shares as fractions."""
    bench_delay._show({way: [UNIT, UNIT] for way in WAYS}, 700, for_a_program=True)
    told = json.loads(capsys.readouterr().out)
    assert (told["opportunities"], told["currency"], set(told["ways"])) == (700, "EUR", set(WAYS))
    assert told["ways"][ORACLE] == {"surplus": 1.0, "error": 0.0, "share": 1.0}


@pytest.mark.parametrize(
    ("words", "found"),
    [
        (None, {}),
        ('{"value_rate": "freeze"}', {"value_rate": "freeze"}),
        ("[1]", [1]),
        ("null", None),
    ],
)
def test_a_setting_to_try_is_json(words: str | None, found: object) -> None:
    """None is the setting as it is; its form is checked by the form of line items."""
    assert tripwires_try._setting(words) == found


@pytest.mark.parametrize("words", ["", "{", "value_rate", "@", "@/no/such/file"])
def test_a_setting_that_is_no_json_is_refused_by_code(words: str) -> None:
    """Whether it was said or lies in a file that is not there."""
    with pytest.raises(Malformed, match="no JSON and no file") as refused:
        tripwires_try._setting(words)
    assert refused.value.code == "bad_setting"


def test_what_would_have_fired_is_told_a_week(capsys: pytest.CaptureFixture[str]) -> None:
    """With action, counts and moments, and that nothing was changed."""
    rule = {"setup": {"action": "freeze"}, "fired": 2, "per_week": 0.5}
    episode = {"from_at": "2026-01-01T00:00:00Z", "saw": "80 where 16 are usual"}
    tripwires_try._tell(
        {
            **{"line_item": "garden", "looks": 12, "from_at": "2026-01-01T00:00:00Z"},
            **{"rules": {"value_rate": {**rule, "episodes": [episode]}}},
            "would_freeze_in_all": 2,
        }
    )
    lines = capsys.readouterr().out.splitlines()
    assert lines[0] == "garden: 12 moments from 2026-01-01T00:00:00Z on"
    assert lines[1].split() == "value_rate freeze fired 2 times, 0.5 a week".split()
    assert lines[2].strip() == "2026-01-01T00:00:00Z  80 where 16 are usual"
    assert lines[3] == "It would have frozen 2 times. Nothing was changed."


@pytest.mark.parametrize(
    ("command", "given", "read"),
    [
        (drill_rolling, [], {"servers": 3, "rounds": 2, "rate": 60, "seed": 7, "json": False}),
        (drill_rolling, ["--rounds", "1", "--json"], {"rounds": 1, "json": True}),
        (bench_delay, ["--quick"], {"quick": True, "seed": 0, "runs": None, "per_day": None}),
        (bench_decide, [], {"quick": False, "profile": None, "seed": 7, "json": False}),
        (bench_curve, ["--limit", "9"], {"limit": 9, "seed": 7}),
        (bench_growth, [], {"line_items": 10_000, "decisions": 10_000_000, "rate": 1000}),
        (settings_table, ["--markdown"], {"markdown": True, "json": False}),
        (tripwires_try, ["garden"], {"line_item": "garden", "setting": None, "json": False}),
        (hindsight, ["g", "--cap", "2"], {"bid_cap_cpm": "2", "floor_cpm": None, "method": None}),
    ],
)
def test_options_are_read_with_their_defaults(
    command: Any, given: list[str], read: dict[str, object]
) -> None:
    """As the help of each command says them."""
    parser = argparse.ArgumentParser()
    command.add_arguments(parser)
    found = vars(parser.parse_args(given))
    assert {name: found[name] for name in read} == read


@pytest.mark.parametrize(
    ("command", "given"),
    [
        (drill_rolling, ["--servers", "0"]),
        (drill_rolling, ["--seed", "-1"]),
        (bench_delay, ["--runs", "0"]),
        (bench_decide, ["--profile", "flat"]),
        (bench_growth, ["--rate", "1.5"]),
        (tripwires_try, []),
        (hindsight, ["g"]),
        (hindsight, ["g", "--cap", "2", "--flat", "1"]),
        (openrtb_explain, ["--mapping", "m.toml"]),
    ],
)
def test_a_wrong_option_ends_with_two_and_a_sentence(
    command: Any, given: list[str], capsys: pytest.CaptureFixture[str]
) -> None:
    """Before anything starts: out of range, missing, or two that exclude each other."""
    parser = argparse.ArgumentParser()
    command.add_arguments(parser)
    with pytest.raises(SystemExit) as ended:
        parser.parse_args(given)
    assert ended.value.code == 2
    assert "error:" in capsys.readouterr().err


def test_settings_for_a_page_are_a_table_of_three_columns() -> None:
    """Bars inside a description would open a fourth."""
    head, rule, *rows = settings_table.markdown().splitlines()
    assert (head.count("|"), rule) == (4, "|---|---|---|")
    assert {row.count("|") for row in rows} == {4}
    assert len(rows) == len(settings_table.rows())


@pytest.mark.parametrize(
    ("part", "whole", "words"),
    [(0, 5, "0.0 %"), (5, 5, "100.0 %"), (2, 3, "66.7 %"), (6, 5, "120.0 %"), (1, 0, "-")],
)
def test_a_share_of_a_count_has_one_decimal_and_its_sign(part: int, whole: int, words: str) -> None:
    """And of nothing there is none."""
    assert report.share(part, whole) == words


def test_a_table_keeps_its_rows_in_order_and_its_heads_above_them() -> None:
    """The unit of a quantity stands in its row's name."""
    grid = report.table("Title", ["one", "two"], {"b (count)": ["1", "2"], "a (EUR)": ["3", "4"]})
    assert (grid.title, [column.header for column in grid.columns]) == ("Title", ["", "one", "two"])
    assert [list(column.cells) for column in grid.columns] == [
        *(["b (count)", "a (EUR)"], ["1", "3"], ["2", "4"]),
    ]


@pytest.mark.parametrize("planned", garden.line_items(), ids=lambda one: one.id)
def test_the_true_mean_of_a_line_item_is_its_chance_times_its_amount(
    planned: garden.Planned,
) -> None:
    """Uniform and exponential amounts by their own means; the fixed one exactly."""
    amounts = {"garden-film": 0.01, "day-ticket": (0.002 + 0.008) / 2, "season-pass": 2.0}
    assert planned.mean == pytest.approx(planned.chance * amounts[planned.id])
    assert planned.method in ("kl-ucbid", "ucbid", "posterior-quantile")


def test_the_shares_of_the_garden_are_all_auctions() -> None:
    """Or the last line item would take what nobody meant for it."""
    assert sum(one.share for one in garden.line_items()) == 1.0
