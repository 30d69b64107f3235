"""From a line item's form to the config we keep, apart because both units and names change."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from pydantic import BaseModel

from service.api.forms.changes import ChangeForm
from service.api.forms.line_items import CreateForm
from service.api.forms.reading import bad_field, read
from service.api.forms.tripwires import CandidateForm
from service.configuring import AS_A_WHOLE

MS_PER_S = 1000
# The form's name -> our name, and what one unit of the form is in ours.
NAMES = {
    "bid_cap_cpm": ("bid_cap", 1),
    "price_cpm": ("price", 1),
    "starts_at": ("starts_ms", 1),
    "ends_at": ("ends_ms", 1),
    "grace_s": ("grace_ms", MS_PER_S),
    "billing_grace_s": ("billing_grace_ms", MS_PER_S),
    "window_s": ("window_ms", MS_PER_S),
    "delay_mean_s": ("delay_mean_ms", MS_PER_S),
    "memory_s": ("memory_ms", MS_PER_S),
    "value_silence_s": ("value_silence_ms", MS_PER_S),
}
_NOT_KEPT = {"confirm", "reason"}
_MAY_BE_NULL = {
    *("daily_budget", "ends_at", "delay_mean_s", "drift", "change", "rounds", "memory_s"),
    *("value_silence_s", "allowance", "kin", "fees", "tripwires", "profile", "return_target"),
    "control",
}


def read_new(members: Mapping[str, object], today_ms: int) -> tuple[dict[str, Any], CreateForm]:
    """
    Read the form of a new line item as its config; what the story defaults stays absent.

    Args:
        members: The parsed body.
        today_ms: When the flight starts unless the form says so. It is the start of a day and
            not this moment, so that a call sent twice asks for the same.

    Raises:
        Malformed: A field is bad, or two fields contradict each other.
        NotOffered: A field asks for what this release does not do.
    """
    form = read(CreateForm, members)
    return new_config(form, today_ms), form


def new_config(form: CreateForm, today_ms: int) -> dict[str, Any]:
    """
    The config of a new line item's form; what the story defaults stays absent.

    Raises:
        Malformed: Two fields contradict each other.
    """
    config = _config(form.model_dump())
    if config["flight"].get("starts_ms") is None:
        config["flight"]["starts_ms"] = today_ms
    check_consistent(config)
    return config


def read_changes(members: Mapping[str, object]) -> tuple[dict[str, Any], ChangeForm]:
    """
    Read the form of a change as the part of the config that it names.

    Raises:
        Malformed: A field is bad, or fixed at creation, or nothing would change.
        NotOffered: A field asks for what this release does not do.
    """
    form = read(ChangeForm, members)
    changes = changes_of(form)
    if not changes:
        raise bad_field("", "The body names nothing to change.")
    return changes, form


def read_candidate(members: Mapping[str, object]) -> dict[str, Any]:
    """
    Read a setting of tripwires that is to be tried, as the part of the config it would be.

    Raises:
        Malformed: A field is bad.
    """
    form = read(CandidateForm, members)
    return dict(_config(form.tripwires.model_dump(exclude_unset=True)))


def changes_of(form: ChangeForm) -> dict[str, Any]:
    """The part of a config that the form of a change names."""
    return _config(_named(form))


def check_consistent(config: Mapping[str, Any]) -> None:
    """
    Refuse a config whose fields contradict each other.

    Raises:
        Malformed: With the field that contradicts another.
    """
    flight, value, policy = config["flight"], config["value"], config.get("policy") or {}
    per_impression = (value.get("expected") or {}).get("per_impression")
    if config["bid_cap"] > config["budget"]:
        raise bad_field("bid_cap_cpm", "The cap of one impression must not exceed the budget.")
    if flight.get("ends_ms") is not None and flight["ends_ms"] <= flight["starts_ms"]:
        raise bad_field("flight.ends_at", "The flight must end after it starts.")
    if _above(value.get("typical"), value.get("ceiling")):
        raise bad_field("value.typical", "The typical value must not exceed the ceiling.")
    if _above(per_impression, value.get("ceiling")):
        raise bad_field("value.expected.per_impression", "It must not exceed the ceiling.")
    drift = value.get("drift")
    if drift is not None and (drift.get("rounds") is None) == (drift.get("memory_ms") is None):
        raise bad_field("value.drift", "Name exactly one of rounds and memory_s.")
    if config["id"] in (config.get("kin") or []):
        raise bad_field("kin", "A line item is no kin of its own.")
    if _above(policy.get("price"), config["bid_cap"]):
        raise bad_field("policy.price_cpm", "The flat price must not exceed the cap.")
    _check_control(config.get("control"), config["bid_cap"], policy)


def _check_control(control: Mapping[str, Any] | None, cap: int, policy: Mapping[str, Any]) -> None:
    if control is None:
        return
    if control["price"] > cap:
        raise bad_field("control.price_cpm", "The price of the control share exceeds the cap.")
    if policy.get("method") == "flat" and policy.get("price") == control["price"]:
        raise bad_field("control.price_cpm", "It is the line item's own price: nothing differs.")


def defaults_taken(form: BaseModel, path: str = "") -> list[str]:
    """The fields whose value is the form's own default, as dotted names."""
    taken: list[str] = []
    for name in type(form).model_fields:
        value = getattr(form, name)
        if isinstance(value, BaseModel):
            taken += defaults_taken(value, f"{path}{name}.")
        elif name == "starts_at" and value is None:
            taken.append(path + name)
        elif value is not None and name not in form.model_fields_set:
            taken.append(path + name)
    return taken


def _named(form: ChangeForm) -> dict[str, Any]:
    """The members that came; an object that is replaced as a whole, with its own defaults."""
    said, full = form.model_dump(exclude_unset=True), form.model_dump()
    for name in AS_A_WHOLE & set(said.get("value") or {}):
        said["value"][name] = full["value"][name]
    for name in AS_A_WHOLE & set(said):
        said[name] = full[name]
    return said


def _above(amount: int | None, limit: int | None) -> bool:
    return amount is not None and limit is not None and amount > limit


def _config(members: Mapping[str, Any]) -> dict[str, Any]:
    config: dict[str, Any] = {}
    for field, value in members.items():
        if field in _NOT_KEPT or (value is None and field not in _MAY_BE_NULL):
            continue
        name, factor = NAMES.get(field, (field, 1))
        if isinstance(value, dict):
            config[name] = _config(value)
        else:
            config[name] = value * factor if factor != 1 and value is not None else value
    return config
