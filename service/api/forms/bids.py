"""The forms of one opportunity and of a batch of them."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Annotated, Literal, TypeGuard

from pydantic import Field

from service import money
from service.api.forms.features import features
from service.api.forms.fields import (
    ID,
    PRINTABLE,
    CapCpm,
    Features,
    FloorCpm,
    LineItemId,
    Printable,
    SeenValue,
)
from service.api.forms.reading import OpenForm, at_most, bad_field, read, unknown_fields
from service.decision.opportunity import NONE_SAID, Opportunity
from service.errors import Refusal

LONGEST_MS = 60_000
Deadline = Annotated[int, Field(ge=0, le=LONGEST_MS, description="Milliseconds from arrival here.")]

Competing = Annotated[
    list[LineItemId],
    Field(
        min_length=1,
        max_length=20,
        description="Instead of line_item: the one that values it most bids, with one hold.",
    ),
]


class BidForm(OpenForm):
    """One impression opportunity that asks for a price."""

    line_item: LineItemId | None = None
    line_items: Competing | None = None
    price_cpm: CapCpm | None = None
    request_id: Printable | None = None
    source: Printable = "default"
    auction: Literal["first", "second", "fixed"] | None = None
    floor_cpm: FloorCpm | None = None
    features: Features | None = None
    value_hint: SeenValue | None = None
    deadline_ms: Deadline | None = None
    test: bool = False


class BatchForm(OpenForm):
    """Opportunities, up to 500 unless set otherwise, and one deadline for all of them."""

    opportunities: Annotated[list[object], Field(min_length=1)]
    deadline_ms: Deadline | None = None


# What nearly all opportunities say, and no more.
_USUAL = {
    *("line_item", "request_id", "source", "auction", "floor_cpm", "features", "value_hint"),
    *("deadline_ms", "test"),
}


def read_bid(members: Mapping[str, object]) -> tuple[Opportunity, set[str]]:
    """
    Read one opportunity, and which of its fields were not used as sent.

    Raises:
        Malformed: A field is not of its form.
        NotOffered: The opportunity asks for what this release does not do.
    """
    found = usual(members)
    return by_form(members) if found is None else (found, set())


def read_batch(
    members: Mapping[str, object], rows_max: int
) -> tuple[list[Opportunity | Refusal], set[str]]:
    """
    Read a batch, each row alone: a bad row becomes its own refusal.

    Raises:
        Malformed: There is no list of 1 to `rows_max` opportunities, or the deadline is none.
    """
    batch = read(BatchForm, members)
    at_most(rows_max, "opportunities", batch.opportunities)
    unused = unknown_fields(BatchForm, members)
    rows = [_row(row, batch.deadline_ms, unused) for row in batch.opportunities]
    return rows, unused


def _row(row: object, deadline_ms: int | None, unused: set[str]) -> Opportunity | Refusal:
    if not isinstance(row, dict):
        return bad_field("", "An opportunity must be an object.")
    found = usual(row, deadline_ms)
    if found is not None:
        return found
    try:
        opportunity, unknown = by_form(row, deadline_ms)
    except Refusal as refusal:
        return refusal
    unused |= unknown
    return opportunity


def by_form(
    members: Mapping[str, object], batch_ms: int | None = None
) -> tuple[Opportunity, set[str]]:
    """As `read_bid`, of whatever there is; for a row with the deadline of its batch."""
    form = read(BidForm, members)
    deadline_ms = form.deadline_ms if batch_ms is None else batch_ms
    return _opportunity(form, deadline_ms), _unused(form, members)


def usual(members: Mapping[str, object], batch_ms: int | None = None) -> Opportunity | None:
    """
    One that says what nearly all say, in a third of the time that its form takes.

    Args:
        batch_ms: The deadline of its batch, which stands for its own.

    Returns:
        None for whatever else there is, and for what is unsound: the form says what is wrong.
    """
    if not members.keys() <= _USUAL:
        return None
    asked = members.get
    name, request_id, source = asked("line_item"), asked("request_id"), asked("source", "default")
    auction, deadline_ms, test = asked("auction"), asked("deadline_ms"), asked("test", False)
    if not (
        _is_text(name, ID)
        and _is_text(source, PRINTABLE)
        and (request_id is None or _is_text(request_id, PRINTABLE))
        and (auction is None or auction == "second" or auction == "first")
        and (deadline_ms is None or (type(deadline_ms) is int and 0 <= deadline_ms <= LONGEST_MS))
        and isinstance(test, bool)
    ):
        return None
    floor_cpm, hint, said = asked("floor_cpm"), asked("value_hint"), asked("features")
    try:
        floor = 0 if floor_cpm is None else money.price(floor_cpm, money.UP)
        value = None if hint is None else money.nanos_rounded(hint, money.HALF_EVEN)
        known = NONE_SAID if said is None else features(said)
    except ValueError:
        return None
    # Below nothing, a floor is warned of and a hint refused.
    if floor < 0 or (value is not None and value < 0):
        return None
    until_ms = deadline_ms if batch_ms is None else batch_ms
    return Opportunity(name, request_id, source, floor, known, value, until_ms, test, auction)


def _is_text(given: object, pattern: re.Pattern[str]) -> TypeGuard[str]:
    return isinstance(given, str) and pattern.fullmatch(given) is not None


def _opportunity(form: BidForm, deadline_ms: int | None) -> Opportunity:
    named, competing = form.line_item, tuple(form.line_items or ())
    if (named is None) is not bool(competing):
        field = "line_items" if competing else "line_item"
        raise bad_field(field, "It must name line_item, or line_items, and not both.")
    if competing and len(set(competing)) < len(competing):
        raise bad_field("line_items", "No line item may stand in it twice.")
    # By place, in half the time that names take.
    return Opportunity(
        named or competing[0],
        form.request_id,
        form.source,
        max(0, form.floor_cpm or 0),
        form.features or NONE_SAID,
        form.value_hint,
        deadline_ms,
        form.test,
        form.auction,
        form.price_cpm,
        competing,
    )


def _unused(form: BidForm, members: Mapping[str, object]) -> set[str]:
    names = unknown_fields(BidForm, members)
    if form.price_cpm is not None and form.auction in ("first", "second"):
        names.add("price_cpm")
    if form.floor_cpm is not None and form.floor_cpm < 0:
        names.add("floor_cpm")
    return names
