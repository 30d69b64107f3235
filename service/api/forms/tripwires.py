"""The form of a line item's tripwires: one member per rule, with the thresholds that it has."""

from __future__ import annotations

from decimal import Decimal
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field, PlainValidator, WithJsonSchema

from service.api.forms.reading import StrictForm


def _between(low: float, high: float) -> PlainValidator:
    def check(number: object) -> float:
        if isinstance(number, bool) or not isinstance(number, int | float | Decimal):
            raise ValueError("It must be a number.")
        if not low <= number <= high:
            raise ValueError(f"It must lie between {low:g} and {high:g}.")
        return float(number)

    return PlainValidator(check)


def _said(rule: Any) -> Any:
    # Null could mean off or the default, and which of them it is matters.
    if rule is None:
        raise ValueError("Leave it out for what it is, or say its action.")
    return rule


_NUMBER = WithJsonSchema({"type": "number"})
Action = Literal["freeze", "warn", "off"]
Window = Annotated[int, Field(ge=1, le=7 * 86_400, description="Seconds that are judged.")]
Least = Annotated[int, Field(ge=1, le=1_000_000, description="Fewer say nothing.")]
Factor = Annotated[float, _between(1.05, 1000.0), _NUMBER]
Alpha = Annotated[float, _between(1e-12, 0.5), _NUMBER]
Part = Annotated[float, _between(0.0, 1.0), _NUMBER]


class ActionForm(StrictForm):
    """A rule on a bare fact: what to do about it."""

    action: Action | None = None


class HaltForm(ActionForm):
    """How long a learner may be halted."""

    window_s: Window | None = None


class SilenceForm(HaltForm):
    """Over what time, from how many on, and how unlikely nothing must be."""

    count_min: Least | None = None
    alpha: Alpha | None = None


class AmountForm(HaltForm):
    """By what factor an amount must be off its history."""

    count_min: Least | None = None
    ratio: Factor | None = None


class CountForm(AmountForm):
    """How unlikely a count must be, and by what factor it must be off."""

    alpha: Alpha | None = None


class ShareForm(CountForm):
    """Below which share nothing is worth a word."""

    share_min: Part | None = None


_Said = BeforeValidator(_said)


class RulesForm(StrictForm):
    """Every rule by its name; what is left out stays as it is, at first the default."""

    no_outcomes: Annotated[SilenceForm | None, _Said] = None
    win_rate: Annotated[CountForm | None, _Said] = None
    clearing_price: Annotated[AmountForm | None, _Said] = None
    spend_speed: Annotated[AmountForm | None, _Said] = None
    value_count: Annotated[CountForm | None, _Said] = None
    value_size: Annotated[CountForm | None, _Said] = None
    zero_values: Annotated[CountForm | None, _Said] = None
    unknown_values: Annotated[CountForm | None, _Said] = None
    silent_bids: Annotated[ShareForm | None, _Said] = None
    voids: Annotated[ShareForm | None, _Said] = None
    late_outcomes: Annotated[ShareForm | None, _Said] = None
    refused_outcomes: Annotated[ShareForm | None, _Said] = None
    unfunded: Annotated[ActionForm | None, _Said] = None
    disputed: Annotated[ActionForm | None, _Said] = None
    learner_halted: Annotated[HaltForm | None, _Said] = None


class TripwiresForm(RulesForm):
    """The rules, and how long the source of values may be silent before windows stand still."""

    value_silence_s: Annotated[int, Field(ge=1, le=400 * 86_400)] | None = None


class CandidateForm(StrictForm):
    """A setting to be tried on recorded history: what it says otherwise than the line item's."""

    tripwires: Annotated[TripwiresForm, _Said] = TripwiresForm()
