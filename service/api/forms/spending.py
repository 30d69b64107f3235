"""The forms of how money is spread and what it must return, apart from what is bought with it."""

from __future__ import annotations

from decimal import Decimal
from typing import Annotated, Literal

from pydantic import PlainValidator, WithJsonSchema

from service import money
from service.api.forms.reading import StrictForm

HOURS = 24
WEIGHT_MAX = 10**6
MILLION = 10**6
NANOS_PER_MILLIONTH = 1000
RETURN_MAX = 10**6


def _profile(weights: object) -> list[int | float] | None:
    if weights is None:
        return None
    if not isinstance(weights, list) or len(weights) != HOURS:
        raise ValueError("It must be 24 numbers, one for each local hour from 0 to 23.")
    read = [_weight(weight) for weight in weights]
    if not any(read):
        raise ValueError("At least one hour must weigh more than 0.")
    return read


def _weight(weight: object) -> int | float:
    # In Python True is the int 1.
    if isinstance(weight, bool) or not isinstance(weight, int | Decimal):
        raise ValueError("Each hour must be a number.")
    if not 0 <= weight <= WEIGHT_MAX:
        raise ValueError(f"Each hour must lie between 0 and {WEIGHT_MAX:,}.")
    return weight if isinstance(weight, int) else float(weight)


def _return(value_per_unit: object) -> int:
    try:
        nanos = money.nanos(value_per_unit)
    except money.NotMoney as error:
        raise ValueError(f"It is no number: {error}.") from error
    millionths, finer = divmod(nanos, NANOS_PER_MILLIONTH)
    if finer or not 0 < millionths <= RETURN_MAX * MILLION:
        raise ValueError("It must be above 0, at most a million, with at most six decimals.")
    return millionths


Profile = Annotated[
    list[int | float] | None,
    PlainValidator(_profile),
    WithJsonSchema(
        {
            "type": "array",
            "items": {"type": "number", "minimum": 0, "maximum": WEIGHT_MAX},
            "minItems": HOURS,
            "maxItems": HOURS,
            "nullable": True,
            "description": "Share of a day's spend for each local hour, in any one unit.",
        }
    ),
]
ValuePerUnit = Annotated[
    int,
    PlainValidator(_return),
    WithJsonSchema(
        {
            "anyOf": [{"type": "string"}, {"type": "number"}],
            "description": "Least value per unit of money spent.",
            "example": "2.5",
        }
    ),
]


class PacingForm(StrictForm):
    """How the budget is spread; without a method, `dual` where there is a rate to hold to."""

    method: Literal["none", "dual", "adaptive", "entropy"] | None = None
    profile: Profile = None


class ReturnTargetForm(StrictForm):
    """What a unit of money must bring: on average, or by `strict` at every moment."""

    value_per_unit: ValuePerUnit
    strict: bool = False
