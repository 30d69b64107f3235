"""The features of an opportunity, apart because their names are the caller's and never echoed."""

from __future__ import annotations

import math
from decimal import Decimal
from functools import lru_cache
from typing import Any

from service.decision.opportunity import Feature

FEATURES_MAX = 32
CHARACTERS_MAX = 64
_NUMBERS = (int, float, Decimal)

FEATURES_SCHEMA: dict[str, Any] = {
    "type": "object",
    "maxProperties": FEATURES_MAX,
    "additionalProperties": {
        "anyOf": [
            {"type": "string", "maxLength": CHARACTERS_MAX},
            {"type": "number"},
            {"type": "boolean"},
        ]
    },
    "example": {"device": "phone", "hour": 13},
}


def features(members: object) -> dict[str, Feature]:
    """
    Read features; a null is a feature that is missing.

    Raises:
        ValueError: Too many, a name or a text too long or unprintable, or an odd kind of value.
    """
    if not isinstance(members, dict) or len(members) > FEATURES_MAX:
        raise ValueError(f"It must be an object of at most {FEATURES_MAX} members.")
    return {_text(name): _value(value) for name, value in members.items() if value is not None}


def _value(value: object) -> Feature:
    if isinstance(value, str):
        return _text(value)
    # Asked before numbers, since True is one.
    if isinstance(value, bool):
        return value
    if isinstance(value, _NUMBERS):
        return _finite(value)
    raise ValueError("A feature must be text, a number or true or false.")


# The same few words come with nearly every bid.
@lru_cache(maxsize=4096)
def _text(text: str) -> str:
    if len(text) > CHARACTERS_MAX or not text.isprintable():
        raise ValueError(f"A feature's text is at most {CHARACTERS_MAX} printable characters.")
    return text


def _finite(value: int | float | Decimal) -> int | float:
    if isinstance(value, int) and value.bit_length() <= 53:
        return value
    try:
        number = float(value)
    except OverflowError as error:
        raise ValueError("A feature's number must be finite.") from error
    if not math.isfinite(number):
        raise ValueError("A feature's number must be finite.")
    return number
