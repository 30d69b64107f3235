"""The forms of orders: each says why; those that take lessons or money back say what."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, PlainValidator, WithJsonSchema, model_validator

from service.api.forms.fields import (
    Amount,
    Currency,
    Moment,
    Printable,
    Rate,
    Reason,
    Ref,
    SeenValue,
)
from service.api.forms.reading import StrictForm
from service.api.times import milliseconds

NAMES_MAX = 1000
SEQ_MAX = 2**53


class OrderForm(StrictForm):
    """Why somebody freezes, thaws, resets, closes, tries again or lets go."""

    reason: Reason


class ResetForm(OrderForm):
    """Why a learner begins afresh; with preview nothing changes."""

    preview: bool = False


class RetractForm(OrderForm):
    """Which outcomes teach no more: by refs and event ids, or by a source and a span of time."""

    refs: Annotated[list[Ref], Field(max_length=NAMES_MAX, default_factory=list)]
    event_ids: Annotated[list[Printable], Field(max_length=NAMES_MAX, default_factory=list)]
    source: Printable | None = None
    from_at: Moment | None = None
    until_at: Moment | None = None
    part: Literal["value", "market", "both"] = "both"
    preview: bool = False

    @model_validator(mode="after")
    def _one_way(self) -> RetractForm:
        wide = (self.source, self.from_at, self.until_at) != (None, None, None)
        if bool(self.refs or self.event_ids) == wide:
            raise ValueError("Name refs and event_ids, or a source and a span of time.")
        return self


def _to(moment: object) -> tuple[int, int | None]:
    if isinstance(moment, int) and not isinstance(moment, bool):
        if not 0 <= moment <= SEQ_MAX:
            raise ValueError("It must be a seq of the stream, or a time with a zone.")
        return moment, None
    return 0, milliseconds(moment)


To = Annotated[
    tuple[int, int | None],
    PlainValidator(_to),
    WithJsonSchema(
        {
            "anyOf": [
                {"type": "integer", "minimum": 0, "maximum": SEQ_MAX},
                {"type": "string", "format": "date-time"},
            ],
            "description": "The last seq that stands, or a moment.",
            "example": "2026-12-01T09:00:00Z",
        }
    ),
]


class RewindForm(OrderForm):
    """To which seq or moment a learner is put back."""

    to: To
    preview: bool = False


class ReverseForm(OrderForm):
    """How much of a clearing price was refunded; of one bid when its ref is named."""

    amount: Amount
    ref: Ref | None = None


class ReconcileForm(OrderForm):
    """What was spent in all, by the books of those who were paid."""

    spent: SeenValue


class RateForm(OrderForm):
    """What one unit of a currency costs in another, from a moment on or at once."""

    currency: Currency
    into: Currency
    rate: Rate
    from_at: Moment | None = None
    until_at: Moment | None = None
