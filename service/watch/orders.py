"""Orders given by hand: a form that says what is exposed, perhaps a preview, the answer."""

from __future__ import annotations

import secrets
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from starlette.requests import Request
from starlette.responses import Response

from service.api.forms.orders import OrderForm, RetractForm, RewindForm
from service.api.forms.reading import StrictForm, read
from service.errors import Refusal
from service.operating import Operator
from service.watch.door import (
    Viewer,
    line_item_of,
    missing,
    operator,
    require_all,
    require_operate,
    shown,
    stories,
    viewer,
)
from service.watch.pages import page
from service.winding import Retraction


@dataclass(frozen=True, slots=True)
class Kind:
    """
    One order: what its pages say.

    Args:
        previews: Whether it is first tried without effect.
        fields: Names of its fields beside the reason.
    """

    name: str
    title: str
    button: str
    says: str
    previews: bool = False
    fields: tuple[str, ...] = ()


KINDS = {
    kind.name: kind
    for kind in (
        Kind("freeze", "Freeze", "Freeze now", "No price leaves any more until somebody thaws it."),
        Kind("thaw", "Thaw", "Thaw now", "It may bid again once no freeze is left on it."),
        Kind(
            *("reset", "Reset the learner", "Reset now"),
            "The learner begins afresh. Money stays as it is; a rewind brings back what it knew.",
            True,
        ),
        Kind(
            *("rewind", "Rewind the learner", "Rewind now"),
            "The learner goes back to what it knew at a seq or a moment. Money stays as it is.",
            True,
            ("to",),
        ),
        Kind(
            *("retract", "Retract lessons", "Retract now"),
            "What the named outcomes taught is cancelled. Money stays as it is.",
            True,
            ("source", "from_at", "until_at", "refs", "event_ids", "part"),
        ),
    )
}
FOR_ALL = ("freeze", "thaw")


@shown
async def get_order(request: Request) -> Response:
    """The form of an order on one line item."""
    who = await viewer(request)
    require_operate(who)
    kind, name = _kind(request), line_item_of(request, who)
    given = {field: request.query_params.get(field, "") for field in kind.fields}
    return await _form(request, who, kind, name, given)


@shown
async def post_order(request: Request) -> Response:
    """Preview or do it."""
    who, form = await operator(request)
    kind, name = _kind(request), line_item_of(request, who)
    preview = kind.previews and form.pop("step", "") != "do"
    once = form.pop("once", "") or None
    try:
        wish = _read(kind, form)
        done = await _given(stories(request).operator, kind, name, wish, who.actor, preview, once)
    except Refusal as refusal:
        # The form comes back as it was sent, with what is wrong about it.
        return await _form(request, who, kind, name, form, refusal=refusal)
    if preview:
        return await _form(request, who, kind, name, form, done=done)
    stories(request).watching.forget()
    return page("done.html", kind=kind, name=name, done=done, who=who)


@shown
async def get_order_for_all(request: Request) -> Response:
    """The form that stops or starts everything."""
    who = await viewer(request)
    require_all(who)
    return await _form_for_all(request, who, _kind(request, FOR_ALL), "")


@shown
async def post_order_for_all(request: Request) -> Response:
    """Throw or lift the switch over all line items."""
    who, form = await operator(request)
    require_all(who)
    kind, once = _kind(request, FOR_ALL), form.pop("once", "") or None
    try:
        reason = read(OrderForm, {"reason": form.get("reason", "").strip()}).reason
    except Refusal as refusal:
        return await _form_for_all(request, who, kind, refusal.detail)
    orders = stories(request).operator
    give = orders.freeze if kind.name == "freeze" else orders.thaw
    done = await give(None, reason, who.actor, once)
    stories(request).watching.forget()
    return page("done.html", kind=kind, name=None, done=done, who=who)


def _kind(request: Request, among: tuple[str, ...] = tuple(KINDS)) -> Kind:
    name = str(request.path_params["order"])
    if name not in among:
        raise missing()
    return KINDS[name]


def _read(kind: Kind, form: Mapping[str, str]) -> Any:
    """The order as the API reads it, so that both refuse the same with the same words."""
    given: dict[str, object] = {"reason": form.get("reason", "").strip()}
    for field in kind.fields:
        text = form.get(field, "").strip()
        if field in ("refs", "event_ids"):
            given[field] = text.split()
        elif field == "to" and text.isdecimal() and len(text) < 18:
            given[field] = int(text)
        elif text:
            given[field] = text
    forms: dict[str, type[StrictForm]] = {"rewind": RewindForm, "retract": RetractForm}
    return read(forms.get(kind.name, OrderForm), given)


async def _given(
    orders: Operator,
    kind: Kind,
    name: str,
    wish: Any,
    actor: str,
    preview: bool,
    once: str | None,
) -> dict[str, Any]:
    if kind.name == "rewind":
        seq, at_ms = wish.to
        given = {"at_ms": at_ms, "preview": preview, "idempotency": once}
        return await orders.winding.rewind(name, seq, wish.reason, actor, **given)
    if kind.name == "retract":
        retraction = Retraction(
            wish.part,
            tuple(sorted(set(wish.refs))),
            tuple(sorted(set(wish.event_ids))),
            *(wish.source, wish.from_at, wish.until_at),
        )
        given = {"preview": preview, "idempotency": once}
        return await orders.winding.retract(name, retraction, wish.reason, actor, **given)
    if kind.name == "reset":
        return await orders.reset(name, wish.reason, actor, once, preview=preview)
    give = orders.freeze if kind.name == "freeze" else orders.thaw
    return await give(name, wish.reason, actor, once)


async def _form(
    request: Request,
    who: Viewer,
    kind: Kind,
    name: str,
    given: Mapping[str, str],
    refusal: Refusal | None = None,
    done: dict[str, Any] | None = None,
) -> Response:
    sheet = await stories(request).watching.sheet(name)
    return page(
        "order.html",
        422 if refusal else 200,
        kind=kind,
        name=name,
        sheet=sheet,
        given={field: given.get(field, "") for field in ("reason", *kind.fields)},
        problem=sentence_of(refusal),
        done=done,
        # Drawn with the form: sent twice by an impatient hand, the order is given once.
        once=secrets.token_hex(16),
        who=who,
    )


async def _form_for_all(request: Request, who: Viewer, kind: Kind, problem: str) -> Response:
    board = await stories(request).watching.board(who.sees, "", 1, all_of_them=True)
    once = secrets.token_hex(16)
    status_code = 422 if problem else 200
    return page(
        "order_for_all.html",
        status_code,
        **{"kind": kind, "board": board, "problem": problem, "once": once, "who": who},
    )


def sentence_of(refusal: Refusal | None) -> str:
    """What was wrong, with the field that it was about."""
    if refusal is None:
        return ""
    field = refusal.data.get("field")
    return f"{str(field).replace('_', ' ')}: {refusal.detail}" if field else refusal.detail
