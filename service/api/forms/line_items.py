"""The form that creates a line item, with the limits of every field."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, StrictBool

from service.api.forms.control import ControlForm
from service.api.forms.fields import (
    Amount,
    CapCpm,
    Currency,
    FeeCpm,
    LineItemId,
    Moment,
    Name,
    Printable,
    Reason,
    Share,
    TimeZone,
)
from service.api.forms.learning import ChangeDetectorForm, DriftForm, Kin
from service.api.forms.policies import Policy
from service.api.forms.reading import StrictForm
from service.api.forms.spending import PacingForm, ReturnTargetForm
from service.api.forms.tripwires import TripwiresForm

DAY_S = 86_400

Grace = Annotated[int, Field(ge=1, le=30 * DAY_S, description="Seconds.")]
Window = Annotated[int, Field(ge=1, le=400 * DAY_S, description="Seconds.")]


class FlightForm(StrictForm):
    """When the line item may bid; its days are days of its zone."""

    starts_at: Moment | None = None
    ends_at: Moment | None = None
    time_zone: TimeZone = "UTC"


class ExpectedForm(StrictForm):
    """A guess at the value of one impression, and what it weighs in conversions."""

    per_impression: Amount | None = None
    conversions: Annotated[int, Field(ge=1, le=1_000_000)] = 1


class ValueForm(StrictForm):
    """What one event may be worth, and how its news arrives."""

    ceiling: Amount | None = None
    typical: Amount | None = None
    arrival: Literal["accrues", "once"] = "accrues"
    window_s: Window = 604_800
    delay_mean_s: Window | None = None
    expected: ExpectedForm | None = None
    drift: DriftForm | None = None
    change: ChangeDetectorForm | None = None
    hints: StrictBool = False


class FeesForm(StrictForm):
    """What an impression costs beyond its price; budget, cap and holds include it."""

    share: Share = 0
    cpm: FeeCpm = 0


class CreateForm(StrictForm):
    """A new line item; everything after the cap has a default."""

    id: LineItemId
    name: Name
    currency: Currency
    budget: Amount
    bid_cap_cpm: CapCpm
    daily_budget: Amount | None = None
    auction: Literal["first", "second", "fixed"] = "second"
    flight: FlightForm = FlightForm()
    spend_on: Literal["won", "billed"] = "won"
    grace_s: Grace = 900
    billing_grace_s: Grace = DAY_S
    strict: bool = False
    value: ValueForm = ValueForm()
    policy: Policy | None = None
    pacing: PacingForm = PacingForm()
    return_target: ReturnTargetForm | None = None
    allowance: Amount | None = None
    control: ControlForm | None = None
    kin: Kin | None = None
    fees: FeesForm | None = None
    losses: Literal["bare", "priced"] = "bare"
    tripwires: TripwiresForm | None = None
    confirm: Printable | None = None
    reason: Reason | None = None
