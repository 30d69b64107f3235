"""The decisions of a line item with what became of each, for a replay of its own log."""

from __future__ import annotations

import json
from base64 import urlsafe_b64decode
from typing import Any

from sqlalchemy import LargeBinary, text

from service.store.database import Reading, among

PAGE = 500  # References in one look, well below what a statement may carry.
REF_PADDING = "=="


def past_decisions(
    connection: Reading, line_item: str, newest: int, *, accrues: bool
) -> list[dict[str, Any]]:
    """
    The newest decisions, oldest first, test bids left out.

    Each has `at_ms`, `source`, `floor`, `bid` (gross as the stream has it), `kind`, `price`,
    `to_win`, `auction`, `told_ms`, `value` and `valued_ms`; see `rehearsal.own_log.Logged`.
    Where values accrue, a win of which nothing came has brought nothing so far; where each win
    has its one word, one without it is not known.
    """
    rows = connection.execute(_NEWEST, {"id": line_item, "limit": newest}).all()
    found = list[dict[str, Any]]()
    for start in range(0, len(rows), PAGE):
        these = rows[start : start + PAGE]
        bids = [_bid(row.ref) for row in these if row.ref is not None]
        said = _outcomes(connection, line_item, bids, accrues)
        for row in these:
            plain = {"at_ms": row.at_ms, "source": row.source, "floor": row.floor}
            found.append({**plain, **said.get(_bid(row.ref) if row.ref else b"", {})})
    # Read newest first, so that the bound cuts the oldest; told in the order of time.
    return found[::-1]


def _bid(ref: str) -> bytes:
    return urlsafe_b64decode(ref + REF_PADDING)


def _outcomes(
    connection: Reading, line_item: str, bids: list[bytes], accrues: bool
) -> dict[bytes, dict[str, Any]]:
    if not bids:
        return {}
    found = dict[bytes, dict[str, Any]]()
    for row in connection.execute(_SAID, {"id": line_item, "bids": bids}):
        body, one = json.loads(row.body), found.setdefault(bytes(row.bid), {})
        if row.slot == "result":
            names = ("bid", "price", "to_win", "auction")
            one |= {"kind": row.kind, "told_ms": row.at_ms, **{n: body[n] for n in names}}
            # Where values accrue, silence is how a feed says that nothing was earned.
            if row.kind == "won" and accrues:
                one.setdefault("value", 0)
        elif row.kind == "value":
            # The change counts: a correction names the amount that it replaces.
            one["value"] = one.get("value", 0) + body["amount"] - (body["was"] or 0)
            # The first word is the one that a learner would have waited for.
            one.setdefault("valued_ms", row.at_ms)
    return found


_NEWEST = text(
    "SELECT at_ms, source, floor, ref FROM decision WHERE line_item = :id AND test = 0"
    " ORDER BY number DESC LIMIT :limit"
)
_SAID = among(
    "SELECT bid, slot, kind, at_ms, body FROM stream WHERE line_item = :id AND bid IN :bids"
    " AND kind IN ('won', 'lost', 'void', 'value') ORDER BY seq",
    "bids",
    LargeBinary,
)
