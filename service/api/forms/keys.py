"""The forms of keys: what one may do, where, until when, and why it is made, ended or renewed."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from service.api.forms.fields import LineItemId, Moment, Name
from service.api.forms.orders import OrderForm

Scope = Literal["bid", "report", "read", "operate", "admin"]


class KeyForm(OrderForm):
    """A new key; without line_items it reaches all of them, without expires_at it stays."""

    name: Name
    scopes: Annotated[list[Scope], Field(min_length=1, max_length=5)]
    line_items: Annotated[list[LineItemId], Field(min_length=1, max_length=1000)] | None = None
    expires_at: Moment | None = None


class RotateForm(OrderForm):
    """How long the old text of a key still works beside the new one."""

    overlap_s: Annotated[int, Field(ge=0, le=90 * 86_400, description="Seconds.")] = 86_400
