"""The kinds of field that several forms share, each with its limits and its description."""

from __future__ import annotations

import re
import unicodedata
import zoneinfo
from collections.abc import Callable
from typing import Annotated

from pydantic import AfterValidator, PlainValidator, WithJsonSchema

from service import money
from service.api.forms.features import FEATURES_SCHEMA, features
from service.api.forms.reading import shaped
from service.api.times import milliseconds, time_text
from service.decision.opportunity import Feature

ID = re.compile(r"[A-Za-z0-9._-]{1,64}")
PRINTABLE = re.compile(r"[ -~]{1,64}")
TICKET = re.compile(r"[!-~]{1,512}")
# Any short text as ever; longer only what several dear changes ask for together.
_CONFIRM = re.compile(
    r"[ -~]{1,64}|[a-z_]{1,20}(=[a-z0-9.]{1,24})?( [a-z_]{1,20}=[a-z0-9.]{1,24}){0,4}"
)
NANOS_PER_WHOLE = 10**9
_UNSEEN = {"Cc", "Cf", "Cs", "Zl", "Zp"}  # Controls, marks of direction, lone surrogates, breaks.
_ZONES = zoneinfo.available_timezones() - {"Factory", "localtime"}


def _words(characters_max: int) -> Callable[[str], str]:
    def check(text: str) -> str:
        if not 1 <= len(text) <= characters_max or not text.strip():
            raise ValueError(f"It must be text of 1 to {characters_max} characters.")
        if any(unicodedata.category(character) in _UNSEEN for character in text):
            raise ValueError("It must be printable text without control characters.")
        return text

    return check


def _money(read: Callable[[object], int], least: int | None) -> Callable[[object], int]:
    def check(amount: object) -> int:
        try:
            nanos = read(amount)
        except money.NotMoney as error:
            raise ValueError(f"It is no amount: {error}.") from error
        if least is not None and nanos < least:
            raise ValueError("It must not be negative." if least == 0 else "It must be above 0.")
        return nanos

    return check


def _share(given: object) -> int:
    """Parts of 10^9: read as an amount is, since an amount is kept in such parts too."""
    parts = money.nanos(given)
    if parts > NANOS_PER_WHOLE:
        raise money.NotMoney("a share above 1")
    return parts


def _rate(given: object) -> int:
    """Parts of 10^9 too; beyond a thousand million it is a slip of the pen."""
    parts = money.nanos(given)
    if parts > 10**18:
        raise money.NotMoney("out of range")
    return parts


def _instant(text: object) -> str:
    return time_text(milliseconds(text))


def _zone(text: str) -> str:
    if text not in _ZONES:
        raise ValueError("It must be the name of a time zone, such as Europe/Zurich.")
    return text


def _floor(cpm: object) -> int:
    return money.price(cpm, money.UP)


def _seen(cpm: object) -> int:
    return money.price(cpm, money.HALF_EVEN)


def _value(amount: object) -> int:
    return money.nanos_rounded(amount, money.HALF_EVEN)


def _schema(description: str, example: object) -> WithJsonSchema:
    either = [{"type": "string"}, {"type": "number"}]
    return WithJsonSchema({"anyOf": either, "description": description, "example": example})


LineItemId = Annotated[
    str,
    shaped(ID, "It must be 1 to 64 letters, digits, dots, dashes or underlines."),
    WithJsonSchema({"type": "string", "pattern": f"^{ID.pattern}$"}),
]
Printable = Annotated[
    str,
    shaped(PRINTABLE, "It must be 1 to 64 printable ASCII characters."),
    WithJsonSchema({"type": "string", "pattern": f"^{PRINTABLE.pattern}$"}),
]
Confirm = Annotated[
    str,
    shaped(_CONFIRM, "It must be a word, or the values that a refusal has named."),
    WithJsonSchema({"type": "string", "minLength": 1, "maxLength": 256}),
]
Ticket = Annotated[
    str,
    shaped(TICKET, "It is no ticket of ours."),
    WithJsonSchema({"type": "string", "maxLength": 512}),
]
Ref = Annotated[
    str,
    shaped(re.compile(r"[A-Za-z0-9_-]{22}"), "It is no ref of ours."),
    WithJsonSchema({"type": "string", "pattern": "^[A-Za-z0-9_-]{22}$"}),
]
Currency = Annotated[
    str,
    shaped(re.compile(r"[A-Z]{3}"), "It must be three capital letters."),
    WithJsonSchema({"type": "string", "pattern": "^[A-Z]{3}$", "example": "EUR"}),
]
TimeZone = Annotated[
    str, AfterValidator(_zone), WithJsonSchema({"type": "string", "example": "Europe/Zurich"})
]
Name = Annotated[
    str,
    AfterValidator(_words(200)),
    WithJsonSchema({"type": "string", "minLength": 1, "maxLength": 200}),
]
Reason = Annotated[
    str,
    AfterValidator(_words(500)),
    WithJsonSchema({"type": "string", "minLength": 1, "maxLength": 500}),
]
Moment = Annotated[
    int, PlainValidator(milliseconds), WithJsonSchema({"type": "string", "format": "date-time"})
]
Instant = Annotated[
    str, PlainValidator(_instant), WithJsonSchema({"type": "string", "format": "date-time"})
]
Features = Annotated[dict[str, Feature], PlainValidator(features), WithJsonSchema(FEATURES_SCHEMA)]
Amount = Annotated[
    int,
    PlainValidator(_money(money.nanos, 1)),
    _schema("An amount above 0, at most nine decimals.", "500.00"),
]
CapCpm = Annotated[
    int,
    PlainValidator(_money(money.price, 1)),
    _schema("A CPM price above 0, at most six decimals.", 8.0),
]
FeeCpm = Annotated[
    int,
    PlainValidator(_money(money.price, 0)),
    _schema("A CPM price, at most six decimals.", "0.15"),
]
Rate = Annotated[
    int,
    PlainValidator(_money(_rate, 1)),
    _schema("What one unit costs, above 0 and at most 10^9, at most nine decimals.", "0.92"),
]
Share = Annotated[
    int,
    PlainValidator(_money(_share, 0)),
    _schema("A share of the price from 0 to 1, at most nine decimals.", "0.12"),
]
FloorCpm = Annotated[
    int,
    PlainValidator(_money(_floor, None)),
    _schema("A CPM price; rounded up; below 0 counts as 0.", 0.4),
]
SeenCpm = Annotated[
    int,
    PlainValidator(_money(_seen, 0)),
    _schema("A CPM price of up to 30 decimals, rounded half to even.", 0.91),
]
SeenValue = Annotated[
    int,
    PlainValidator(_money(_value, 0)),
    _schema("An amount of up to 30 decimals, rounded half to even.", "2.40"),
]
