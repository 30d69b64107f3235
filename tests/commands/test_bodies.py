"""What the benches send: whole requests, read back as the service would read them."""

from __future__ import annotations

import json
from decimal import Decimal
from typing import Any

import pytest

from service.api.forms.bids import BatchForm, BidForm
from service.api.forms.reading import read
from service.commands import bodies

KEY = "bk_key"


def taken_apart(request: bytes) -> tuple[list[str], dict[str, str], Any]:
    """First line, heads and body of a request."""
    head, _, body = request.partition(b"\r\n\r\n")
    first, *heads = head.decode("ascii").split("\r\n")
    named = {name.lower(): value for name, _, value in (one.partition(": ") for one in heads)}
    assert int(named["content-length"]) == len(body)
    return first.split(), named, json.loads(body)


def test_one_bid_is_one_whole_request() -> None:
    """A POST with the key, its length, and a body that the service's own form takes."""
    first, heads, body = taken_apart(bodies.bid(KEY, "bench-7"))
    assert first == ["POST", "/v1/bids", "HTTP/1.1"]
    assert KEY in heads["authorization"]
    assert body == bodies.opportunity("bench-7")
    exact = json.loads(json.dumps(body), parse_float=Decimal)
    assert read(BidForm, exact).line_item == "bench-7"


@pytest.mark.parametrize("rows", [1, 7, bodies.BATCH_ROWS])
def test_a_batch_has_as_many_rows_as_asked(rows: int) -> None:
    """All alike, in one call."""
    first, _, body = taken_apart(bodies.batch(KEY, "b", rows))
    assert first[1] == "/v1/bids/batch"
    assert body == {
        "opportunities": [bodies.opportunity("b")] * rows,
        "deadline_ms": bodies.PATIENT_MS,
    }
    assert len(read(BatchForm, body).opportunities) == rows


def test_each_ticket_becomes_a_win_at_one_price() -> None:
    """In the order of the tickets; none makes a call with none."""
    first, _, body = taken_apart(bodies.outcomes(KEY, ["t1", "t2"]))
    assert first[1] == "/v1/outcomes"
    assert [row["ticket"] for row in body["outcomes"]] == ["t1", "t2"]
    assert {(row["kind"], row["clearing_cpm"]) for row in body["outcomes"]} == {("won", 0.41)}
    assert taken_apart(bodies.outcomes(KEY, iter(())))[2] == {"outcomes": []}


@pytest.mark.parametrize(
    ("features", "sent"),
    [
        (None, {"device": "phone", "hour": 13}),
        ({}, {}),
        (bodies.FEATURES, bodies.FEATURES),
    ],
)
def test_features_are_the_contracts_example_unless_others_are_given(
    features: dict[str, Any] | None, sent: dict[str, Any]
) -> None:
    """No features are not the same as the usual ones."""
    assert bodies.opportunity("b", features=features)["features"] == sent


def test_features_given_are_copied() -> None:
    """A bench that changes its own afterwards changes no request."""
    mine = {"hour": 1}
    made = bodies.opportunity("b", features=mine)
    mine["hour"] = 2
    assert made["features"] == {"hour": 1}


@pytest.mark.parametrize(
    ("method", "policy"),
    [
        ("kl-ucbid", {"method": "kl-ucbid"}),
        ("linear", {"method": "linear", "dimensions": 32}),
    ],
)
def test_only_a_method_that_reads_features_has_dimensions(
    method: str, policy: dict[str, Any]
) -> None:
    """Any other would refuse them."""
    assert bodies.line_item("b", method)["policy"] == policy


def test_what_a_bench_adds_to_a_line_item_wins() -> None:
    """Over the usual members too."""
    made = bodies.line_item("b", "mean", budget="1.00", losses="priced")
    assert (made["id"], made["budget"], made["losses"]) == ("b", "1.00", "priced")


def test_tickets_are_found_in_answers_and_passes_have_none() -> None:
    """In the order of the answers; a null, an empty or a missing ticket is none."""
    rows = [{"ticket": "t1"}, {"ticket": None}, {"pass": "x"}, {"ticket": ""}, {"ticket": "t2"}]
    answers = [json.dumps({"answers": part}).encode() for part in (rows[:2], [], rows[2:])]
    assert bodies.tickets_of(answers) == ["t1", "t2"]
    assert bodies.tickets_of([]) == []


def test_the_mark_of_a_pass_is_how_the_service_writes_one() -> None:
    """Answers are written without blanks, so the bytes can simply be counted."""
    written = json.dumps({"ticket": None}, separators=(",", ":")).encode()
    assert bodies.PASSED in written


def test_mixed_calls_come_in_turns_of_twenty() -> None:
    """As many turns as whole groups of tickets; nothing is told twice, and three in ten won."""
    tickets = [f"t{number}" for number in range(2 * bodies.MIX_TOLD + 7)]
    calls = [taken_apart(one) for one in bodies.mixed(KEY, "s", "c", tickets)]
    assert len(calls) == 2 * bodies.MIX_CALLS
    paths = [first[1] for first, _, _ in calls[: bodies.MIX_CALLS]]
    counts = [paths.count(f"/v1/{path}") for path in ("bids", "bids/batch", "outcomes")]
    assert counts == [17, 2, 1]
    rows = [row for _, _, body in calls for row in body.get("outcomes", [])]
    assert [row["ticket"] for row in rows] == tickets[: 2 * bodies.MIX_TOLD]
    assert [row["kind"] for row in rows].count("won") == 2 * 6
    bids = sum(len(body.get("opportunities", [0])) for _, _, body in calls) - 2
    assert bids + len(rows) == 2 * bodies.MIX_TURN_ROWS


def test_too_few_tickets_make_no_mixed_call() -> None:
    """Half a turn would be another mix."""
    assert bodies.mixed(KEY, "s", "c", ["t"] * (bodies.MIX_TOLD - 1)) == []
