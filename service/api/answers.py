"""What callers read: amounts as text, prices as numbers, times as RFC 3339, no int of ours."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Iterable, Mapping
from typing import Any

import orjson
from starlette.responses import Response

from service import money
from service.api.forms.reading import warnings
from service.api.times import time_text
from service.bidding import Answer
from service.errors import Refusal
from service.feedback import Receipt
from service.operating import View

_JSON = (b"content-type", b"application/json")


class _Quick(Response):
    """Bytes of JSON; its two headers are written here, which the framework does in many steps."""

    def __init__(self, body: bytes) -> None:
        self.status_code, self.background, self.body = 200, None, body
        self.raw_headers = [(b"content-length", b"%d" % len(body)), _JSON]


def json_answer(
    members: object, status_code: int = 200, headers: Mapping[str, str] | None = None
) -> Response:
    """An answer in compact JSON, ASCII only, without NaN or Infinity."""
    return Response(
        json.dumps(members, separators=(",", ":"), allow_nan=False),
        status_code=status_code,
        media_type="application/json",
        headers=dict(headers or {}),
    )


def quick_answer(members: object) -> Response:
    """As `json_answer`, a few times as fast, for answers of our own small numbers and texts."""
    return _Quick(orjson.dumps(members))


def bid(answer: Answer) -> dict[str, object]:
    """One answer to an opportunity: a bid with its ticket, or a pass with its reason."""
    return {
        "request_id": answer.request_id,
        "line_item": answer.line_item,
        "bid_cpm": None if answer.bid is None else money.cpm_number(answer.bid),
        "pass": answer.reason,
        "ticket": answer.ticket,
        "ref": answer.ref,
        "method": answer.method,
        "set_by": answer.set_by,
        "snapshot": answer.snapshot,
    }


def bad_row(refusal: Refusal) -> dict[str, object]:
    """The place of a bad row in a batch."""
    return {"error": {**refusal.data, "code": refusal.code, "detail": refusal.detail}}


def receipt(row: Receipt) -> dict[str, object]:
    """One result of an outcome; what has nothing to say is left out, all but the ref."""
    result: dict[str, object] = {"ref": row.ref, "status": row.status}
    if row.code is not None:
        result["code"] = row.code
    if row.detail is not None:
        result["detail"] = row.detail
    if row.clipped:
        result["clipped"] = True
    if row.test:
        result["test"] = True
    return result


def with_warnings(answer: dict[str, object], unused: set[str]) -> dict[str, object]:
    """The answer, and the names of fields that were not used as sent, if there are any."""
    return {**answer, "warnings": warnings(unused)} if unused else answer


def line_item(view: View, defaults: Iterable[str] = ()) -> dict[str, Any]:
    """A line item in the form in which it was created, with its version and what it can learn."""
    return {
        **_config(view.config),
        "version": view.version,
        "created_at": time_text(view.created_ms),
        "updated_at": time_text(view.updated_ms),
        "freezes": plain(view.freezes),
        "learnability": view.learnability,
        "defaults": sorted({*defaults, *view.defaults}),
    }


def plain(members: Any) -> Any:
    """
    A structure of ours as callers read it.

    Keys ending in `_cpm_nanos` become numbers under `_cpm`, keys ending in `_nanos` amounts as
    text without the ending, and moments times; a number that is not finite becomes null.
    """
    if isinstance(members, Mapping):
        return dict(_member(str(name), value) for name, value in members.items())
    if isinstance(members, list | tuple | set | frozenset):
        return [plain(member) for member in members]
    if isinstance(members, float) and not math.isfinite(members):
        return None
    return members


def journal(rows: Iterable[Mapping[str, Any]]) -> list[Any]:
    """Rows of the journal; what they say of configurations is written as configurations are."""
    return [plain({**row, "detail": _config(row["detail"])}) for row in rows]


def _seconds(duration_ms: int) -> int:
    return duration_ms // 1000


def _millionths(number: int) -> str:
    """A plain decimal without needless zeros."""
    whole, part = divmod(number, 10**6)
    return f"{whole}.{part:06d}".rstrip("0").rstrip(".")


_ENDINGS: tuple[tuple[str, str, Callable[[int], object]], ...] = (
    # The longer ending first, or the shorter one would take its names.
    ("_cpm_nanos", "_cpm", money.cpm_number),
    ("_nanos", "", money.nanos_text),
)
# Names of moments on the wall clock; other names in `_ms` are durations.
_MOMENTS = {
    "at_ms": "at",
    "by_ms": "by",
    "last_ms": "last",
    "published_ms": "published_at",
    "money_ends_ms": "money_ends_at",
    "flight_ends_ms": "flight_ends_at",
    "expires_ms": "expires_at",
    "close_ms": "closes_at",
    "billing_close_ms": "billing_closes_at",
    "first_at_ms": "first_at",
    "last_at_ms": "last_at",
    "since_ms": "since",
    "from_ms": "from_at",
    "until_ms": "until_at",
    "raised_ms": "raised_at",
    "seen_ms": "seen_at",
    "froze_ms": "froze_at",
    "thawed_ms": "thawed_at",
    "cleared_ms": "cleared_at",
    "created_ms": "created_at",
    "started_ms": "started_at",
    "ended_ms": "ended_at",
}
_CONFIG: dict[str, tuple[str, Callable[[int], object]]] = {
    "budget": ("budget", money.nanos_text),
    "daily_budget": ("daily_budget", money.nanos_text),
    "ceiling": ("ceiling", money.nanos_text),
    "typical": ("typical", money.nanos_text),
    "per_impression": ("per_impression", money.nanos_text),
    "bid_cap": ("bid_cap_cpm", money.cpm_number),
    "price": ("price_cpm", money.cpm_number),
    "starts_ms": ("starts_at", time_text),
    "ends_ms": ("ends_at", time_text),
    "grace_ms": ("grace_s", _seconds),
    "billing_grace_ms": ("billing_grace_s", _seconds),
    "window_ms": ("window_s", _seconds),
    "delay_mean_ms": ("delay_mean_s", _seconds),
    "memory_ms": ("memory_s", _seconds),
    "value_silence_ms": ("value_silence_s", _seconds),
    "allowance": ("allowance", money.nanos_text),
    "fees.share": ("share", money.nanos_text),
    "control.share": ("share", lambda parts: parts / money.NANOS_PER_UNIT),
    "fees.cpm": ("cpm", lambda price_nanos: money.nanos_text(price_nanos * 1000)),
    "value_per_unit": ("value_per_unit", _millionths),
}


def _member(name: str, value: Any) -> tuple[str, Any]:
    if name in _MOMENTS:
        return _MOMENTS[name], _moments(value)
    for ending, replacement, write in _ENDINGS:
        if name.endswith(ending):
            renamed = name.removesuffix(ending) + replacement
            return renamed, write(value) if isinstance(value, int) else plain(value)
    return name, plain(value)


def _moments(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {str(name): _moments(moment) for name, moment in value.items()}
    return time_text(value) if isinstance(value, int) else value


def _config(config: Mapping[str, Any]) -> dict[str, Any]:
    return dict(_config_member("", name, value) for name, value in config.items())


def _config_member(within: str, name: str, value: Any) -> tuple[str, Any]:
    if isinstance(value, Mapping):
        return name, dict(_config_member(name, inner, of) for inner, of in value.items())
    # A name may mean another thing in another object.
    renamed, write = _CONFIG.get(f"{within}.{name}", _CONFIG.get(name, (name, None)))
    return renamed, write(value) if write is not None and isinstance(value, int) else value
