"""The form that changes a line item, apart because what is absent stays and some of it is fixed."""

from __future__ import annotations

from typing import Literal

from pydantic import Field, StrictBool

from service.api.forms import refused
from service.api.forms.control import ControlForm
from service.api.forms.fields import Amount, CapCpm, Confirm, Moment, Name, Reason
from service.api.forms.learning import ChangeDetectorForm, DriftForm, Kin
from service.api.forms.line_items import (
    DAY_S,
    ExpectedForm,
    FeesForm,
    Grace,
    Window,
)
from service.api.forms.policies import Policy
from service.api.forms.reading import StrictForm
from service.api.forms.spending import PacingForm, ReturnTargetForm
from service.api.forms.tripwires import TripwiresForm

# The defaults below are never read: only the fields that came are changed.


class FlightChange(StrictForm):
    """When the line item may bid; the zone is fixed."""

    starts_at: Moment = 0
    ends_at: Moment | None = None
    time_zone: refused.FixedZone = None


class ValueChange(StrictForm):
    """What one event may be worth; how its news arrives is fixed."""

    ceiling: Amount = 0
    typical: Amount = 0
    arrival: refused.FixedArrival = None
    window_s: Window = 0
    delay_mean_s: Window | None = None
    expected: ExpectedForm = ExpectedForm()
    drift: DriftForm | None = None
    change: ChangeDetectorForm | None = None
    hints: StrictBool = False


class ChangeForm(StrictForm):
    """What may change: all but id, currency, auction, zone, spend_on and arrival."""

    id: refused.FixedId = None
    currency: refused.FixedCurrency = None
    auction: refused.FixedAuction = None
    spend_on: refused.FixedSpendOn = None
    name: Name = ""
    budget: Amount = 0
    daily_budget: Amount | None = None
    bid_cap_cpm: CapCpm = 0
    flight: FlightChange = FlightChange()
    grace_s: Grace = 0
    billing_grace_s: Grace = DAY_S
    strict: bool = False
    value: ValueChange = ValueChange()
    policy: Policy = Field(default_factory=dict)
    pacing: PacingForm = PacingForm()
    return_target: ReturnTargetForm | None = None
    allowance: Amount | None = None
    control: ControlForm | None = None
    kin: Kin | None = None
    fees: FeesForm | None = None
    losses: Literal["bare", "priced"] = "bare"
    tripwires: TripwiresForm | None = None
    confirm: Confirm | None = None
    reason: Reason | None = None
