"""The form of a question of hindsight: one alternative, and a span of time."""

from __future__ import annotations

from typing import Annotated

from pydantic import AfterValidator, Field, model_validator

from service.api.forms.fields import CapCpm, FeeCpm, Moment
from service.api.forms.reading import StrictForm
from service.hindsights import Question

ALTERNATIVES = ("bid_cap_cpm", "flat_price_cpm", "floor_cpm", "method")


def _method(name: str) -> str:
    # Whether there is such a method is said by the story, with a code of its own.
    if not 1 <= len(name) <= 40:
        raise ValueError("The method must be the name of a published method.")
    return name


MethodName = Annotated[str, AfterValidator(_method), Field(max_length=40)]


class HindsightForm(StrictForm):
    """Exactly one of cap, flat price, floor and method; prices with the line item's fees."""

    bid_cap_cpm: CapCpm | None = None
    flat_price_cpm: CapCpm | None = None
    floor_cpm: FeeCpm | None = None
    method: MethodName | None = None
    from_at: Moment | None = None
    until_at: Moment | None = None

    @model_validator(mode="after")
    def _one(self) -> HindsightForm:
        if sum(getattr(self, name) is not None for name in ALTERNATIVES) != 1:
            raise ValueError(f"Name exactly one of {', '.join(ALTERNATIVES)}.")
        return self

    @property
    def question(self) -> Question:
        """What is asked, in our words."""
        span = (self.from_at, self.until_at)
        if self.flat_price_cpm is not None:
            return Question("flat", self.flat_price_cpm, None, *span)
        if self.bid_cap_cpm is not None:
            return Question("cap", self.bid_cap_cpm, None, *span)
        if self.floor_cpm is not None:
            return Question("floor", self.floor_cpm, None, *span)
        return Question("method", 0, self.method, *span)
