"""Wishes that are refused: what this release lacks, and what is fixed once a line item exists."""

from __future__ import annotations

from typing import Annotated

from pydantic import BeforeValidator, WithJsonSchema

from service.errors import Malformed, NotOffered


def not_offered(field: str, wish: str | None = None) -> NotOffered:
    """The refusal of a wish that the contract knows and this release does not fulfil."""
    sentence = f"This release does not offer {wish or field}."
    return NotOffered("not_offered", sentence, {"field": field})


def _absent(field: str) -> BeforeValidator:
    def check(wish: object) -> None:
        if wish is not None and wish != {} and wish != []:
            raise not_offered(field)

    return BeforeValidator(check)


def _fixed(field: str) -> BeforeValidator:
    def check(_wish: object) -> None:
        raise Malformed(
            "fixed_at_creation", f"{field} is fixed once a line item exists.", {"field": field}
        )

    return BeforeValidator(check)


_NULL = WithJsonSchema({"nullable": True, "description": "Not offered in this release."})
_NEVER = WithJsonSchema({"not": {}, "description": "Fixed at creation; leave it out."})

Control = Annotated[None, _absent("control"), _NULL]

FixedId = Annotated[None, _fixed("id"), _NEVER]
FixedCurrency = Annotated[None, _fixed("currency"), _NEVER]
FixedAuction = Annotated[None, _fixed("auction"), _NEVER]
FixedSpendOn = Annotated[None, _fixed("spend_on"), _NEVER]
FixedZone = Annotated[None, _fixed("flight.time_zone"), _NEVER]
FixedArrival = Annotated[None, _fixed("value.arrival"), _NEVER]
