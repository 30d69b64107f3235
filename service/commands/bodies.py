"""What the load sends, as whole bytes made beforehand, apart so that making it is not timed."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from typing import Any

from service.commands.load import post

BATCH_ROWS = 100
PATIENT_MS = 5000
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


def tickets_of(answers: Iterable[bytes]) -> list[str]:
    """The tickets in the answers to batches; rows that passed have none."""
    rows = (row for answer in answers for row in json.loads(answer)["answers"])
    return [row["ticket"] for row in rows if row.get("ticket")]


def _written(members: Mapping[str, Any]) -> bytes:
    # Without blanks, as programs write it.
    return json.dumps(members, separators=(",", ":")).encode()
