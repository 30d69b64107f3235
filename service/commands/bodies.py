"""What the load sends, as whole bytes made beforehand, apart so that making it is not timed."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from service.commands.load import post

BATCH_ROWS = 100
PATIENT_MS = 5000
# In the mix: bids of a batch, outcomes of a call, calls of a turn, bids and outcomes of a turn.
MIX_ROWS, MIX_TOLD, MIX_CALLS = 20, 20, 20
MIX_TURN_ROWS = 17 + 2 * MIX_ROWS + MIX_TOLD
# Counted as bytes, since to parse each answer would slow the load it measures.
PASSED = b'"ticket":null'
FEATURES: dict[str, str | float | bool] = {
    "device": "phone",
    "hour": 13,
    "place": "lake",
    "format": "wide",
    "fold": "above",
}


def line_item(name: str, method: str, **others: Any) -> dict[str, Any]:
    """A line item of an invented garden that has money for every bid of a bench."""
    # Any other method would refuse a setting that it does not take.
    dimensions = {"dimensions": 32} if method == "linear" else {}
    return {
        "id": name,
        "name": "Bench of the alpine garden",
        "currency": "EUR",
        "budget": "4000000.00",
        "bid_cap_cpm": 8.0,
        "auction": "second",
        "flight": {"starts_at": "2026-01-01T00:00:00Z", "ends_at": None, "time_zone": "UTC"},
        "value": {"ceiling": "0.02", "typical": "0.01"},
        "policy": {"method": method, **dimensions},
        **others,
    }


def opportunity(name: str, *, features: Mapping[str, Any] | None = None) -> dict[str, Any]:
    """One opportunity with every member of the contract's example."""
    return {
        "request_id": "op-81f2",
        "line_item": name,
        "source": "north-exchange",
        "auction": "second",
        "floor_cpm": 0.4,
        "features": {"device": "phone", "hour": 13} if features is None else dict(features),
        "value_hint": None,
        "deadline_ms": 80,
        "test": False,
    }


def bid(key: str, name: str, *, features: Mapping[str, Any] | None = None) -> bytes:
    """One call for one price."""
    return post("/v1/bids", _written(opportunity(name, features=features)), key)


def batch(key: str, name: str, rows: int = BATCH_ROWS) -> bytes:
    """One call for many prices."""
    # Of many batches at once the last waits longer than an exchange would; here none may pass.
    asked = {"opportunities": [opportunity(name)] * rows, "deadline_ms": PATIENT_MS}
    return post("/v1/bids/batch", _written(asked), key)


def outcomes(key: str, tickets: Iterable[str]) -> bytes:
    """One call that tells of a win for each ticket."""
    told = [{"ticket": ticket, "kind": "won", "clearing_cpm": 0.41} for ticket in tickets]
    return post("/v1/outcomes", _written({"outcomes": told}), key)


def mixed(key: str, scalar: str, covariate: str, tickets: Sequence[str]) -> list[bytes]:
    """
    Calls as an exchange and its trackers send them, by turns, as many as the tickets allow.

    Of twenty calls seventeen ask for one price, two for `MIX_ROWS` at once, and one tells of
    `MIX_TOLD` earlier bids, three in ten of them won: a tenth of all bids is won and twice that
    reported lost. The shares are common practice, without a source.
    """
    steady = [bid(key, scalar)] * 8 + [batch(key, scalar, MIX_ROWS)]
    steady += [bid(key, covariate, features=FEATURES)] * 3
    steady += [bid(key, scalar)] * 6 + [batch(key, scalar, MIX_ROWS)]
    whole = range(0, len(tickets) - MIX_TOLD + 1, MIX_TOLD)
    turns = ([*steady, _told(key, tickets[at : at + MIX_TOLD])] for at in whole)
    return [call for turn in turns for call in turn]


def _told(key: str, tickets: Sequence[str]) -> bytes:
    won = len(tickets) * 3 // 10
    wins = [{"ticket": one, "kind": "won", "clearing_cpm": 0.41} for one in tickets[:won]]
    losses = [{"ticket": one, "kind": "lost", "to_win_cpm": 9.0} for one in tickets[won:]]
    return post("/v1/outcomes", _written({"outcomes": wins + losses}), key)


def tickets_of(answers: Iterable[bytes]) -> list[str]:
    """The tickets in the answers to batches; rows that passed have none."""
    rows = (row for answer in answers for row in json.loads(answer)["answers"])
    return [row["ticket"] for row in rows if row.get("ticket")]


def _written(members: Mapping[str, Any]) -> bytes:
    # Without blanks, as programs write it.
    return json.dumps(members, separators=(",", ":")).encode()
