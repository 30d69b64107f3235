"""The form of a control share: part of the traffic, kept on a plain rule."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import PlainValidator, WithJsonSchema

from service import money
from service.api.forms.fields import CapCpm
from service.api.forms.reading import StrictForm

WHOLE = 10**9


def _share(given: object) -> int:
    try:
        parts = money.nanos(given)
    except money.NotMoney as error:
        raise ValueError(f"It is no share: {error}.") from error
    # Beyond a half the plain rule would be the method, and the method the control.
    if not 0 < parts <= WHOLE // 2:
        raise ValueError("It must be above 0 and at most 0.5.")
    return parts


ControlShare = Annotated[
    int,
    PlainValidator(_share),
    WithJsonSchema(
        {
            "anyOf": [{"type": "string"}, {"type": "number"}],
            "description": "Of traffic, and of money at most: above 0, at most 0.5.",
            "example": 0.1,
        }
    ),
]


class ControlForm(StrictForm):
    """A plain rule beside the method, to see whether learning helps."""

    share: ControlShare
    method: Literal["flat"] = "flat"
    price_cpm: CapCpm
