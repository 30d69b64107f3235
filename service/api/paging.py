"""What a caller asks a list for: times, kinds, filters, a cursor; each with its limits."""

from __future__ import annotations

import base64
import binascii
import re
from collections.abc import Mapping
from dataclasses import dataclass

from starlette.requests import Request

from service.api.forms.fields import PRINTABLE
from service.api.forms.reading import bad_field
from service.api.headers import LIMIT_DEFAULT, LIMIT_MAX
from service.api.times import DAY_MS, milliseconds
from service.errors import Malformed
from service.records import KINDS_OF, LOGS, Place, Wish
from service.recounting import KINDS

SHARED = ("from", "until", "kind", "cursor", "limit", "format")
OF_DECISIONS = ("reason", "set_by", "source")
NUMBER_MAX = 2**63 - 1
CHART_DAYS_MAX = 62  # Of counts kept every five minutes: as many as are read in one look.

_WORD = re.compile(r"[a-z_]{1,32}")
_LIMIT = re.compile(r"[0-9]{1,4}")
_CURSOR = re.compile(r"[A-Za-z0-9_-]{1,96}")
_PLACE = re.compile(r"([a-z]+)((?:\.-?[0-9]{1,19}){1,2})")


@dataclass(frozen=True, slots=True)
class Asked:
    """A wish with the page it is for, or for all of it as CSV."""

    wish: Wish
    before: Place | None
    limit: int
    as_csv: bool


def parameters(name: str) -> tuple[str, ...]:
    """The query parameters that a list reads."""
    return SHARED + (OF_DECISIONS if name == "decisions" else ())


def asked(request: Request, name: str, line_item: str | None) -> Asked:
    """
    Read the query of a list.

    Raises:
        Malformed: Another parameter, one twice, or one that is not of its form.
    """
    given = request.query_params
    known = parameters(name)
    # A filter that is misspelt would otherwise show everything as if it had been asked for.
    if set(given) - set(known) or len(given.multi_items()) != len(given):
        raise bad_field("query", f"The parameters are {', '.join(known)}, once each.")
    if given.get("format", "json") not in ("json", "csv"):
        raise bad_field("format", "It must be json or csv.")
    as_csv = given.get("format") == "csv"
    if as_csv and {"cursor", "limit"} & set(given):
        raise bad_field("format", "A CSV holds the whole range; leave cursor and limit out.")
    cursor = given.get("cursor")
    before = None if cursor is None else _place(cursor, name)
    return Asked(_wish(given, name, line_item), before, _limit(given), as_csv)


def span_of(request: Request, now_ms: int) -> tuple[int, int]:
    """
    The moments between which a chart is asked for; the last day when none is named.

    Raises:
        Malformed: Another parameter, one twice, no time, or too long a span.
    """
    given = request.query_params
    if set(given) - {"from", "until"} or len(given.multi_items()) != len(given):
        raise bad_field("query", "The parameters are from and until, once each.")
    until_ms = _moment(given, "until") or now_ms
    from_ms = _moment(given, "from") or until_ms - DAY_MS
    if not from_ms < until_ms <= from_ms + CHART_DAYS_MAX * DAY_MS:
        raise bad_field("until", f"It must be after from, by at most {CHART_DAYS_MAX} days.")
    return from_ms, until_ms


def cursor_of(name: str, place: Place | None) -> str | None:
    """The text by which the next page is asked for."""
    if place is None:
        return None
    plain = ".".join([name, *(str(number) for number in place)])
    return base64.urlsafe_b64encode(plain.encode()).decode().rstrip("=")


def _place(cursor: str, name: str) -> Place:
    bad = Malformed("bad_cursor", "The cursor is none that this list gave.")
    if not _CURSOR.fullmatch(cursor):
        raise bad
    try:
        plain = base64.urlsafe_b64decode(cursor + "=" * (-len(cursor) % 4)).decode("ascii")
    except (binascii.Error, ValueError):
        raise bad from None
    matched = _PLACE.fullmatch(plain)
    if matched is None or matched[1] != name:
        raise bad
    place = tuple(int(number) for number in matched[2][1:].split("."))
    if len(place) != (2 if name in LOGS else 1) or not all(-1 <= n <= NUMBER_MAX for n in place):
        raise bad
    return place


def _wish(given: Mapping[str, str], name: str, line_item: str | None) -> Wish:
    from_ms, until_ms = (_moment(given, end) for end in ("from", "until"))
    if from_ms is not None and until_ms is not None and until_ms <= from_ms:
        raise bad_field("until", "It must be after from.")
    filters = tuple((word, _filter(word, given[word])) for word in OF_DECISIONS if word in given)
    return Wish(name, line_item, from_ms, until_ms, _kinds(given, name), filters)


def _moment(given: Mapping[str, str], name: str) -> int | None:
    if name not in given:
        return None
    try:
        return milliseconds(given[name])
    except ValueError as error:
        raise bad_field(name, str(error)) from None


def _kinds(given: Mapping[str, str], name: str) -> tuple[str, ...]:
    if "kind" not in given:
        return ()
    kinds = tuple(dict.fromkeys(given["kind"].split(",")))
    if name == "journal":
        if len(kinds) > len(KINDS) or not all(_WORD.fullmatch(kind) for kind in kinds):
            raise bad_field("kind", "It must be words for actions, comma between them.")
        return kinds
    known = ("bid", "pass") if name == "decisions" else KINDS_OF[name] or KINDS
    if not set(kinds) <= set(known):
        raise bad_field("kind", f"It must be of {', '.join(known)}, comma between them.")
    return kinds


def _filter(name: str, text: str) -> str:
    if not (PRINTABLE if name == "source" else _WORD).fullmatch(text):
        raise bad_field(name, "It is no word that a decision carries there.")
    return text


def _limit(given: Mapping[str, str]) -> int:
    limit = given.get("limit", str(LIMIT_DEFAULT))
    if not _LIMIT.fullmatch(limit) or not 1 <= int(limit) <= LIMIT_MAX:
        raise bad_field("limit", f"It must be a whole number from 1 to {LIMIT_MAX}.")
    return int(limit)
