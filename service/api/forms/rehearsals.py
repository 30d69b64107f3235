"""The form of a rehearsal: which policies, against which market, how often."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import Field, WithJsonSchema

from service.api.forms.changes import ChangeForm
from service.api.forms.configs import changes_of, new_config
from service.api.forms.fields import Amount, CapCpm, FloorCpm, LineItemId, Printable
from service.api.forms.learning import between
from service.api.forms.line_items import CreateForm
from service.api.forms.reading import StrictForm, bad_field, read

DAY_S = 86_400
MS_PER_S = 1000
ROUNDS_MAX, SEEDS_MAX, POLICIES_MAX, BLOCK_MAX = 1_000_000, 200, 8, 10_000
AUCTIONS_MAX = 20_000_000  # Over policies and seeds: some minutes to an hour of one core.

_NUMBER = WithJsonSchema({"type": "number"})
Chance = Annotated[float, between(0.0, 1.0), _NUMBER]
Sigma = Annotated[float, between(0.01, 5.0), _NUMBER]
Change = Annotated[float, between(0.0, 10.0), _NUMBER]
Gap = Annotated[float, between(0.0001, 0.5), _NUMBER]
LostShare = Annotated[float, between(0.0, 0.9), _NUMBER]
Delay = Annotated[int, Field(ge=0, le=90 * DAY_S, description="Seconds.")]
Span = Annotated[int, Field(ge=60, le=400 * DAY_S, description="Seconds.")]


class PolicyForm(StrictForm):
    """One policy: the line item as it is, with the changes named here."""

    name: Printable
    change: ChangeForm | None = None


class RivalsForm(StrictForm):
    """The law of the highest competing bid."""

    law: Literal["uniform", "lognormal", "exponential"]
    low_cpm: FloorCpm = 0
    high_cpm: CapCpm | None = None
    median_cpm: CapCpm | None = None
    sigma: Sigma | None = None
    mean_cpm: CapCpm | None = None


class ValuesForm(StrictForm):
    """
    The law of what an impression brings.

    `events`: an amount with a chance. `baskets`: exponential amounts with a chance, cut at a
    ceiling. `even`: uniform amounts that the bidder knows before it bids.
    """

    law: Literal["events", "baskets", "even"]
    chance: Chance | None = None
    amount: Amount | None = None
    mean: Amount | None = None
    ceiling: Amount | None = None
    low: Amount | None = None
    high: Amount | None = None


class MarketForm(StrictForm):
    """What the policies are set against; what is absent follows from the first policy."""

    kind: Literal[
        "iid",
        "own_curve",
        "own_log",
        "drift",
        "abrupt",
        "coin_flip",
        "above_value",
        "learning_seller",
        "arena",
    ]
    auction: Literal["second", "first"] = "second"
    rivals: RivalsForm | None = None
    values: ValuesForm | None = None
    floor_cpm: FloorCpm = 0
    span_s: Span = DAY_S
    value_delay_mean_s: Delay = 0
    outcome_delay_s: Delay = 0
    outcomes_lost: LostShare = 0.0
    change: Change = 0.25
    gap: Gap = 0.05
    bidders: Annotated[int, Field(ge=2, le=10)] = 2
    seller: Literal["fixed", "learns"] = "fixed"


class RehearsalForm(StrictForm):
    """
    A rehearsal: policies by their differences from a line item, and a market.

    The line item is one that exists (`line_item`) or one as it would be created (`config`).
    """

    name: Printable = "rehearsal"
    line_item: LineItemId | None = None
    config: CreateForm | None = None
    policies: Annotated[list[PolicyForm], Field(min_length=1, max_length=POLICIES_MAX)]
    market: MarketForm
    rounds: Annotated[int, Field(ge=10, le=ROUNDS_MAX, description="Auctions.")] = 10_000
    seeds: Annotated[int, Field(ge=1, le=SEEDS_MAX)] = 20
    seed: Annotated[int, Field(ge=0, le=2**31)] = 0
    block: Annotated[int, Field(ge=1, le=BLOCK_MAX, description="Auctions per snapshot.")] = 50


_NEEDED = {
    "uniform": ("high_cpm",),
    "lognormal": ("median_cpm", "sigma"),
    "exponential": ("mean_cpm",),
    "events": ("chance", "amount"),
    "baskets": ("chance", "mean", "ceiling"),
    "even": ("high",),
}


def read_rehearsal(members: Mapping[str, object], today_ms: int) -> dict[str, Any]:
    """
    Read the form as a wish: plain data in our units, policies still as changes.

    Args:
        members: The parsed body.
        today_ms: When the flight of a `config` starts unless it says so.

    Raises:
        Malformed: A field is bad, or two contradict each other.
        NotOffered: A field asks for what this release does not do.
    """
    form = read(RehearsalForm, members)
    _check(form)
    policies = [
        {"name": one.name, "changes": {} if one.change is None else changes_of(one.change)}
        for one in form.policies
    ]
    return {
        "name": form.name,
        "line_item": form.line_item,
        "config": None if form.config is None else new_config(form.config, today_ms),
        "policies": policies,
        "market": _market(form.market),
        **{name: getattr(form, name) for name in ("rounds", "seeds", "seed", "block")},
    }


def _check(form: RehearsalForm) -> None:
    if (form.line_item is None) == (form.config is None):
        raise bad_field("line_item", "Name exactly one of line_item and config.")
    names = [one.name for one in form.policies]
    if len(set(names)) != len(names):
        raise bad_field("policies", "Their names must differ.")
    # What one field cannot know of another is looked at here, each by the field to change.
    kind = form.market.kind
    if kind == "arena" and len(names) < 2:
        raise bad_field("policies", "An arena needs at least two.")
    if kind in ("own_curve", "own_log") and form.line_item is None:
        raise bad_field("line_item", "The market is that of a line item, so name one.")
    if form.rounds * form.seeds * len(names) > AUCTIONS_MAX:
        raise bad_field(
            "rounds", f"Rounds times seeds times policies may be at most {AUCTIONS_MAX:,}."
        )
    # Told at once, a block takes two milliseconds of the clock beside its auctions.
    if form.market.span_s * MS_PER_S < 4 * form.rounds:
        raise bad_field("market.span_s", "Two auctions must lie at least 4 ms apart.")
    for path, law in (("market.rivals", form.market.rivals), ("market.values", form.market.values)):
        missing = [name for name in _NEEDED[law.law] if getattr(law, name) is None] if law else []
        if missing:
            raise bad_field(f"{path}.{missing[0]}", "This law needs it.")
    _check_values(form.market)


def _check_values(market: MarketForm) -> None:
    rivals, values = market.rivals, market.values
    if rivals and rivals.high_cpm is not None and rivals.low_cpm > rivals.high_cpm:
        raise bad_field("market.rivals.low_cpm", "It must not exceed high_cpm.")
    if values and values.high is not None and (values.low or 0) > values.high:
        raise bad_field("market.values.low", "It must not exceed high.")
    # Their course changes how often values come, which only events have a chance for.
    moving = market.kind in ("drift", "abrupt", "coin_flip", "above_value")
    if moving and values and values.law != "events":
        raise bad_field("market.values.law", "This market needs events.")


def _market(form: MarketForm) -> dict[str, Any]:
    return {
        "kind": form.kind,
        "auction": form.auction,
        "rivals": None if form.rivals is None else _law(form.rivals),
        "values": None if form.values is None else _law(form.values),
        "floor": form.floor_cpm,
        "span_ms": form.span_s * MS_PER_S,
        "value_delay_mean_ms": form.value_delay_mean_s * MS_PER_S,
        "outcome_delay_ms": form.outcome_delay_s * MS_PER_S,
        "lost_share": form.outcomes_lost,
        "change": form.change,
        "gap": form.gap,
        "bidders": form.bidders,
        "seller": form.seller,
    }


def _law(form: RivalsForm | ValuesForm) -> dict[str, Any]:
    said = {name: value for name, value in form.model_dump().items() if value is not None}
    named = {name.removesuffix("_cpm"): value for name, value in said.items()}
    return {"low": 0, **named} if form.law in ("uniform", "even") else named
