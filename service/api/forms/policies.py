"""The form of a policy: a method by its published name, and settings that only it can judge.

A setting is a number, or a price where its name ends in `_cpm`; which settings a method takes,
and how large they may be, is said in one place, beside the method.
"""

from __future__ import annotations

import re
from decimal import Decimal
from typing import Annotated, Any

from pydantic import AfterValidator, PlainValidator, WithJsonSchema

from service import money

_METHOD = re.compile(r"[a-z][a-z0-9-]{0,39}")
_SETTING = re.compile(r"(?!price$)[a-z][a-z_]{0,39}")  # A price is given as a CPM.
_SETTINGS_MAX = 16
NUMBER_MAX = 10**9

_SCHEMA: dict[str, Any] = {
    "type": "object",
    "properties": {
        "method": {"type": "string", "description": "The name of a published method."},
        "price_cpm": {"description": "For flat: the price it always bids.", "example": 2.0},
        "gamma": {"type": "number", "description": "For ucbid and kl-ucbid."},
        "order": {"type": "number", "description": "For posterior-quantile."},
        "dimensions": {"type": "integer", "description": "For linear: 16, 32 or 64."},
    },
    "additionalProperties": {"type": "number"},
    "example": {"method": "posterior-quantile", "order": 0.75},
}


def _policy(members: object) -> dict[str, Any]:
    if not isinstance(members, dict) or len(members) > _SETTINGS_MAX:
        raise ValueError("It must be an object with a method and its settings.")
    return {name: _member(name, value) for name, value in members.items()}


def _member(name: object, value: object) -> str | int | float:
    if not isinstance(name, str) or not _SETTING.fullmatch(name):
        raise ValueError("There is no setting of such a name.")
    if name == "method":
        return _method(value)
    return _price(value) if name.endswith("_cpm") else _number(value)


def _method(value: object) -> str:
    if not isinstance(value, str) or not _METHOD.fullmatch(value):
        raise ValueError("The method must be the name of a published method.")
    return value


def _price(value: object) -> int:
    try:
        price = money.price(value)
    except money.NotMoney as error:
        raise ValueError(f"A price of the policy is no amount: {error}.") from error
    if price <= 0:
        raise ValueError("A price of the policy must be above 0.")
    return price


def _number(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, int | Decimal):
        raise ValueError("A setting of the policy must be a number.")
    if not -NUMBER_MAX <= value <= NUMBER_MAX:
        raise ValueError("A setting of the policy is out of range.")
    return float(value)


def _named(policy: dict[str, Any]) -> dict[str, Any]:
    if "method" not in policy:
        raise ValueError("A policy needs its method.")
    return policy


Policy = Annotated[
    dict[str, Any], PlainValidator(_policy), AfterValidator(_named), WithJsonSchema(_SCHEMA)
]
