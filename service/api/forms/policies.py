"""The form of a policy: a published method by its published name, and its settings."""

from __future__ import annotations

from decimal import Decimal
from typing import Annotated, Literal, Self

from pydantic import AfterValidator, PlainValidator, WithJsonSchema, model_validator

from service.api.forms.fields import CapCpm
from service.api.forms.reading import StrictForm
from service.api.forms.refused import not_offered

SETTINGS: dict[str, set[str]] = {
    "flat": {"price_cpm"},
    "mean": set(),
    "ucbid": {"gamma"},
    "kl-ucbid": {"gamma"},
    "posterior-quantile": {"order"},
}
Method = Literal[
    "flat",
    "mean",
    "ucbid",
    "kl-ucbid",
    "posterior-quantile",
    "bernstein-ucbid",
    "bayes-ucb",
    "thompson",
    "linear",
    "exptree",
    "exptree-win-only",
]


def _offered(method: str) -> str:
    if method not in SETTINGS:
        raise not_offered("policy.method", "this method")
    return method


def _between(low: Decimal, high: Decimal, sentence: str) -> PlainValidator:
    def check(number: object) -> float:
        if isinstance(number, bool) or not isinstance(number, int | Decimal):
            raise ValueError("It must be a number.")
        if not low < number < high:
            raise ValueError(sentence)
        return float(number)

    return PlainValidator(check)


Gamma = Annotated[
    float,
    _between(Decimal("0.001"), Decimal(10), "It must lie between 0.001 and 10."),
    WithJsonSchema({"type": "number", "description": "Width of the bound; theory wants above 1."}),
]
Order = Annotated[
    float,
    _between(Decimal("0.001"), Decimal("0.999"), "It must lie between 0.001 and 0.999."),
    WithJsonSchema({"type": "number", "description": "Order of the quantile that is bid."}),
]


class PolicyForm(StrictForm):
    """A method and the settings that it takes."""

    method: Annotated[Method, AfterValidator(_offered)]
    gamma: Gamma | None = None
    order: Order | None = None
    price_cpm: CapCpm | None = None

    @model_validator(mode="after")
    def _settings_fit(self) -> Self:
        given = {name for name in ("gamma", "order", "price_cpm") if getattr(self, name)}
        if given - SETTINGS[self.method]:
            raise ValueError("A setting was given that this method does not take.")
        if self.method == "flat" and self.price_cpm is None:
            raise ValueError("The method flat needs price_cpm.")
        return self
