"""The form of an order: every freeze, thaw and reset says why."""

from __future__ import annotations

from service.api.forms.fields import Reason
from service.api.forms.reading import StrictForm


class OrderForm(StrictForm):
    """Why somebody freezes, thaws or resets."""

    reason: Reason
