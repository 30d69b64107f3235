"""Wishes that are refused: what is fixed once a line item exists."""

from __future__ import annotations

from typing import Annotated

from pydantic import BeforeValidator, WithJsonSchema

from service.errors import Malformed


def _fixed(field: str) -> BeforeValidator:
    def check(_wish: object) -> None:
        raise Malformed(
            "fixed_at_creation", f"{field} is fixed once a line item exists.", {"field": field}
        )

    return BeforeValidator(check)


_NEVER = WithJsonSchema({"not": {}, "description": "Fixed at creation; leave it out."})

FixedId = Annotated[None, _fixed("id"), _NEVER]
FixedCurrency = Annotated[None, _fixed("currency"), _NEVER]
FixedAuction = Annotated[None, _fixed("auction"), _NEVER]
FixedSpendOn = Annotated[None, _fixed("spend_on"), _NEVER]
FixedZone = Annotated[None, _fixed("flight.time_zone"), _NEVER]
FixedArrival = Annotated[None, _fixed("value.arrival"), _NEVER]
