"""The forms that say how a line item learns: forgetting, change detection, alarms of the feed."""

from __future__ import annotations

from decimal import Decimal
from typing import Annotated, Literal

from pydantic import Field, PlainValidator, WithJsonSchema

from service.api.forms.fields import LineItemId
from service.api.forms.reading import StrictForm

DAY_S = 86_400
ROUNDS_MAX = 10**12

Seconds = Annotated[int, Field(ge=1, le=400 * DAY_S, description="Seconds.")]
Rounds = Annotated[int, Field(ge=100, le=ROUNDS_MAX, description="Rounds.")]
Kin = Annotated[list[LineItemId], Field(max_length=20, description="Line items of one prior.")]


def between(low: float, high: float) -> PlainValidator:
    """A number from `low` to `high`, read as a float."""

    def check(number: object) -> float:
        if isinstance(number, bool) or not isinstance(number, int | Decimal):
            raise ValueError("It must be a number.")
        if not low <= number <= high:
            raise ValueError(f"It must lie between {low:g} and {high:g}.")
        return float(number)

    return PlainValidator(check)


Ratio = Annotated[float, between(1.05, 100.0), WithJsonSchema({"type": "number"})]
Threshold = Annotated[float, between(1.0, 100.0), WithJsonSchema({"type": "number"})]


class DriftForm(StrictForm):
    """How the old is forgotten: by exactly one of `rounds` and `memory_s`."""

    how: Literal["discount", "window"]
    rounds: Rounds | None = None
    memory_s: Seconds | None = None


class ChangeDetectorForm(StrictForm):
    """What change of the rate of values to look for, and what to do when it is found."""

    action: Literal["flag", "restart"]
    ratio: Ratio = 2.0
    threshold: Threshold = 8.0
