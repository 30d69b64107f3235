"""The forms as schemas for the description of the API, in the dialect OpenAPI 3.0."""

from __future__ import annotations

from typing import Any

from pydantic import BaseModel
from pydantic.json_schema import models_json_schema

from service.api.forms.bids import BatchForm, BidForm
from service.api.forms.changes import ChangeForm, FlightChange, ValueChange
from service.api.forms.hindsights import HindsightForm
from service.api.forms.keys import KeyForm, RotateForm
from service.api.forms.line_items import CreateForm
from service.api.forms.orders import (
    OrderForm,
    RateForm,
    ReconcileForm,
    ResetForm,
    RetractForm,
    ReverseForm,
    RewindForm,
)
from service.api.forms.outcomes import FORMS, OutcomesForm
from service.api.forms.rehearsals import RehearsalForm
from service.api.forms.tripwires import CandidateForm

_FORMS: tuple[type[BaseModel], ...] = (
    BidForm,
    BatchForm,
    OutcomesForm,
    *FORMS.values(),
    CreateForm,
    ChangeForm,
    OrderForm,
    ResetForm,
    RetractForm,
    RewindForm,
    ReverseForm,
    ReconcileForm,
    KeyForm,
    RotateForm,
    CandidateForm,
    HindsightForm,
    RateForm,
    RehearsalForm,
)
_PROBLEM: dict[str, Any] = {
    "type": "object",
    "description": "Problem details after RFC 9457; the code is stable.",
    "required": ["type", "title", "status", "code", "detail"],
    "properties": {
        "type": {"type": "string"},
        "title": {"type": "string"},
        "status": {"type": "integer"},
        "code": {"type": "string"},
        "detail": {"type": "string"},
        "field": {"type": "string"},
    },
}


def components() -> dict[str, Any]:
    """Every form and the problem, by name."""
    _, document = models_json_schema(
        [(form, "validation") for form in _FORMS], ref_template="#/components/schemas/{model}"
    )
    schemas: dict[str, Any] = _older(document["$defs"])
    rows = schemas["OutcomesForm"]["properties"]["outcomes"]
    rows["items"] = {"oneOf": [_reference(form) for form in FORMS.values()]}
    schemas["BatchForm"]["properties"]["opportunities"]["items"] = _reference(BidForm)
    for change in (ChangeForm, FlightChange, ValueChange):
        for field in schemas[change.__name__]["properties"].values():
            field.pop("default", None)  # What a change leaves out stays as it is.
    return {**schemas, "Problem": _PROBLEM}


def _reference(form: type[BaseModel]) -> dict[str, str]:
    return {"$ref": f"#/components/schemas/{form.__name__}"}


def _older(schema: Any) -> Any:
    if isinstance(schema, list):
        return [_older(member) for member in schema]
    if not isinstance(schema, dict):
        return schema
    older = {name: _older(member) for name, member in schema.items()}
    if "const" in older:
        older["enum"] = [older.pop("const")]
    return _nullable(older)


def _nullable(schema: dict[str, Any]) -> dict[str, Any]:
    choices = schema.get("anyOf")
    if not isinstance(choices, list) or {"type": "null"} not in choices:
        return schema
    others = [choice for choice in choices if choice != {"type": "null"}]
    return {**schema, "anyOf": others, "nullable": True}


COMPONENTS = components()
