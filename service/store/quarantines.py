"""What was set aside, for people: rows to read, to try again and to let go.

An outcome is kept whole, so that it can be booked later; a lesson stands in the stream.
"""

from __future__ import annotations

import json
from typing import Any

from sqlalchemy import text

from service.errors import Conflict, NotFound
from service.ledger.settle import Outcome
from service.ledger.values import Value
from service.store.bookings import Booking
from service.store.database import Reading, Writing

KINDS = {"Outcome": Outcome, "Value": Value}


def page(connection: Reading, line_item: str, before: int, limit: int) -> list[dict[str, Any]]:
    """The newest rows of a line item before a number, newest first."""
    row = {"id": line_item, "before": before, "limit": limit}
    return [_read(found) for found in connection.execute(_PAGE, row)]


def waiting(connection: Reading | Writing, line_item: str, number: int) -> dict[str, Any]:
    """
    One row that nobody has dealt with yet.

    Raises:
        NotFound: This line item has no such row.
        Conflict: It was tried again or let go already.
    """
    found = connection.execute(_ONE, {"id": line_item, "number": number}).one_or_none()
    if found is None:
        raise NotFound("no_such_row", "The quarantine of this line item has no such row.")
    if found.state != "waiting":
        raise Conflict("not_waiting", "This row was tried again or let go already.")
    return _read(found)


def mark(connection: Writing, number: int, state: str) -> bool:
    """Say what became of a row; False when somebody was faster."""
    statement = text(
        "UPDATE quarantine SET state = :state WHERE number = :number AND state = 'waiting'"
    )
    return connection.execute(statement, {"state": state, "number": number}).rowcount == 1


def written(booking: Booking) -> dict[str, Any]:
    """A booking as it is kept."""
    event = {k: v.hex() if isinstance(v, bytes) else v for k, v in booking.event._asdict().items()}
    return {
        "event": type(booking.event).__name__,
        "said": event,
        "slice": booking.slice_id.hex() if booking.slice_id else None,
        "day": booking.day,
        "snapshot": booking.snapshot,
        "floor": booking.floor,
        "features": booking.features.hex(),
        "hint": booking.hint,
        "arm": booking.arm,
    }


def booking_of(line_item: str, body: dict[str, Any]) -> Booking:
    """
    Read what `written` wrote.

    Raises:
        ValueError: It was not kept whole.
    """
    said = dict(body.get("said") or {})
    if body.get("event") not in KINDS or not said:
        raise ValueError("this row was not kept whole")
    said["bid"] = bytes.fromhex(said["bid"])
    slice_id = bytes.fromhex(body["slice"]) if body["slice"] else None
    event = KINDS[body["event"]](**said)
    place = (slice_id, body["day"], body["snapshot"], body["floor"])
    features = bytes.fromhex(body.get("features", ""))
    seen = (features, body.get("hint"), body.get("arm", ""))
    return Booking(line_item, event, *place, *seen)


def _read(found: Any) -> dict[str, Any]:
    return {**found._mapping, "body": json.loads(found.body)}


_COLUMNS = "SELECT number, at_ms, line_item, error, body, seq, state FROM quarantine"
_PAGE = text(
    f"{_COLUMNS} WHERE line_item = :id AND number < :before ORDER BY number DESC LIMIT :limit"
)
_ONE = text(f"{_COLUMNS} WHERE line_item = :id AND number = :number")
