"""The forms of one opportunity and of a batch of them."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Literal

from pydantic import Field, TypeAdapter, ValidationError

from service.api.forms.fields import CapCpm, Features, FloorCpm, LineItemId, Printable, SeenValue
from service.api.forms.reading import OpenForm, at_most, bad_field, read, unknown_fields
from service.decision.opportunity import NONE_SAID, Opportunity
from service.errors import Refusal

Deadline = Annotated[int, Field(ge=0, le=60_000, description="Milliseconds from arrival here.")]

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


_FORMS = TypeAdapter(list[BidForm])


def read_bid(members: Mapping[str, object]) -> tuple[Opportunity, set[str]]:
    """
    Read one opportunity, and which of its fields were not used as sent.

    Raises:
        Malformed: A field is not of its form.
        NotOffered: The opportunity asks for what this release does not do.
    """
    form = read(BidForm, members)
    return _opportunity(form, form.deadline_ms), _unused(form, members)


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
    return _rows(batch.opportunities, batch.deadline_ms, unused), unused


def _rows(
    rows: list[object], deadline_ms: int | None, unused: set[str]
) -> list[Opportunity | Refusal]:
    try:
        # All at once, which is quicker; nearly always every row is well.
        forms = _FORMS.validate_python(rows)
    except ValidationError:
        return [_row_alone(row, deadline_ms, unused) for row in rows]
    return [
        _row(form, row, deadline_ms, unused)
        for form, row in zip(forms, rows, strict=True)
        if isinstance(row, dict)
    ]


def _row_alone(row: object, deadline_ms: int | None, unused: set[str]) -> Opportunity | Refusal:
    if not isinstance(row, dict):
        return bad_field("", "An opportunity must be an object.")
    try:
        form = read(BidForm, row)
    except Refusal as refusal:
        return refusal
    return _row(form, row, deadline_ms, unused)


def _row(
    form: BidForm, row: Mapping[str, object], deadline_ms: int | None, unused: set[str]
) -> Opportunity | Refusal:
    unused |= _unused(form, row)
    try:
        return _opportunity(form, form.deadline_ms if deadline_ms is None else deadline_ms)
    except Refusal as refusal:
        return refusal


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
