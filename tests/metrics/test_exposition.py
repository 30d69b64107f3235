"""What a scrape reads: sums over processes, gauges by process, and the clerk's page."""

from __future__ import annotations

from prometheus_client.parser import text_string_to_metric_families

from service.metrics.board import Board
from service.metrics.exposition import Exposition
from service.store.gauges import PARTS

BUILD = {"version": "1", "schema": "0001"}
Samples = dict[tuple[str, tuple[str, ...]], float]


def scraped(board: Board) -> Samples:
    """Every sample by name and values of labels, these in the order of their names."""
    text = Exposition(board, BUILD).text().decode()
    return {
        (sample.name, tuple(value for _, value in sorted(sample.labels.items()))): sample.value
        for family in text_string_to_metric_families(text)
        for sample in family.samples
    }


def test_counts_are_added_up_over_processes() -> None:
    """Whoever is asked tells the same sums."""
    board = Board.alone(3)
    for place, count in enumerate((1, 20, 300)):
        board.tally(place).add("outcomes", "won", "recorded", count=count)
    seen = scraped(board)
    assert seen[("bidkeel_outcomes_total", ("won", "recorded"))] == 321
    assert seen[("bidkeel_outcomes_total", ("lost", "recorded"))] == 0


def test_gauges_stay_apart_by_process() -> None:
    """Two late loops are not one that is twice as late."""
    board = Board.alone(3)
    board.tally(0).set("loop_lag_seconds", value=2000)
    board.tally(1).set("loop_lag_seconds", value=500)
    board.tally(2).set("duty_success_timestamp_seconds", "teach", value=1_700_000_000_500)
    seen = scraped(board)
    assert seen[("bidkeel_process_loop_lag_seconds", ("worker-0",))] == 0.002
    assert seen[("bidkeel_process_loop_lag_seconds", ("worker-1",))] == 0.0005
    name = "bidkeel_process_duty_success_timestamp_seconds"
    assert {key[1]: value for key, value in seen.items() if key[0] == name} == {
        ("teach", "clerk"): 1_700_000_000.5
    }


def test_the_histogram_is_cumulative_and_adds_up() -> None:
    """Buckets hold all that was faster, and the last one everything."""
    board = Board.alone(2)
    for place, seconds in ((0, 0.0003), (0, 0.004), (1, 0.004), (1, 3.0)):
        board.tally(place).took(seconds)
    seen = scraped(board)
    bucket = "bidkeel_bid_duration_seconds_bucket"
    assert [seen[(bucket, (le,))] for le in ("0.0005", "0.002", "0.005", "0.5", "+Inf")] == [
        *(1, 1, 3, 3, 4)
    ]
    assert seen[("bidkeel_bid_duration_seconds_count", ())] == 4
    assert abs(seen[("bidkeel_bid_duration_seconds_sum", ())] - 3.0083) < 1e-9


def test_money_is_told_in_units_of_its_currency() -> None:
    """Nanos become units, exact up to what a float can hold."""
    board = Board.alone()
    sums = dict.fromkeys(PARTS, "0") | {"spent": "1234567890123", "held": "1"}
    board.post({"money": {"EUR": sums}, "freezes": {"person": 2}, "incarnation": "ab12"})
    seen = scraped(board)
    assert seen[("bidkeel_money_spent", ("EUR",))] == 1234.567890123
    assert seen[("bidkeel_money_held", ("EUR",))] == 1e-9
    assert seen[("bidkeel_freezes", ("person",))] == 2
    assert seen[("bidkeel_incarnation_info", ("ab12",))] == 1
    assert seen[("bidkeel_build_info", ("0001", "1"))] == 1


def test_before_the_first_page_there_is_no_money() -> None:
    """Nothing known is not nought: a graph must not show that budgets vanished."""
    names = {name for name, _ in scraped(Board.alone())}
    assert not any(name.startswith("bidkeel_money") for name in names)
    assert "bidkeel_bids_total" in names
