"""Rehearsals on the page: listed, started from a small form, watched, cancelled, read."""

from __future__ import annotations

import json
import secrets
import time
from collections.abc import Mapping
from typing import Any

from starlette.requests import Request
from starlette.responses import RedirectResponse, Response

from service.api.access import FOREIGN
from service.api.forms.orders import OrderForm
from service.api.forms.reading import read
from service.api.forms.rehearsals import read_rehearsal
from service.api.times import start_of_today_ms
from service.decision.methods import METHODS
from service.errors import NotFound, Refusal, no_such_line_item
from service.watch.door import Viewer, count, missing, operator, shown, stories, viewer
from service.watch.orders import sentence_of
from service.watch.pages import PRIVATE, page
from service.watch.pictures import rehearsal_charts

ROWS = 20
DIGITS_MAX = 15
OPEN = ("queued", "running")
MARKETS = {
    "own_curve": "drawn from the line item's own win curve",
    "own_log": "the line item's own log again",
    "iid": "invented: every auction alike",
    "drift": "invented: values drift",
    "abrupt": "invented: values change at once",
    "coin_flip": "invented: a coin-flip adversary",
    "above_value": "invented: an adversary just above the value",
    "learning_seller": "invented: a seller who learns its floor",
    "arena": "arena: the policies bid against one another",
}
# A flat price is asked for by its price.
LEARNERS = tuple(name for name in METHODS if name != "flat")


@shown
async def get_rehearsals(request: Request) -> Response:
    """The newest rehearsals, and the form that starts one."""
    given = {"line_item": request.query_params.get("line_item", "")}
    return await _all(request, await viewer(request), given)


@shown
async def get_rehearsals_now(request: Request) -> Response:
    """The part of the list that is renewed every few seconds."""
    who = await viewer(request)
    return page("rehearsals_now.html", rows=await _rows(request, who), wall_ms=_wall_ms(), who=who)


@shown
async def post_rehearsals(request: Request) -> Response:
    """Start one, and show it."""
    who, form = await operator(request)
    once = form.pop("once", "") or None
    try:
        wish = read_rehearsal(members(form), start_of_today_ms())
        if not who.sees(wish["line_item"]):
            count(request, FOREIGN)
            raise no_such_line_item()
        begun = await stories(request).rehearsals.ask(wish, who.actor, once)
    except Refusal as refusal:
        # The form comes back as it was sent, with what is wrong about it.
        return await _all(request, who, form, sentence_of(refusal))
    return RedirectResponse(f"/watch/rehearsals/{begun['id']}", 303, headers=PRIVATE)


@shown
async def get_rehearsal(request: Request) -> Response:
    """One rehearsal, and what it came to."""
    who = await viewer(request)
    return _one(await _own(request, who), who)


@shown
async def get_rehearsal_now(request: Request) -> Response:
    """How far one is; says when it has ended."""
    who = await viewer(request)
    one = await _own(request, who)
    is_open = one["state"] in OPEN
    return page("rehearsal_now.html", one=one, open=is_open, wall_ms=_wall_ms(), who=who)


@shown
async def get_rehearsal_charts(request: Request) -> Response:
    """The figures and sentences of its charts."""
    one = await _own(request, await viewer(request))
    drawn = rehearsal_charts(one["result"]) if one["result"] else []
    told = {chart.id: {"says": chart.says, "figure": chart.figure} for chart in drawn}
    text = json.dumps(told, separators=(",", ":"), allow_nan=False)
    return Response(text, headers=PRIVATE, media_type="application/json")


@shown
async def post_cancel(request: Request) -> Response:
    """Stop one that waits or plays."""
    who, form = await operator(request)
    one = await _own(request, who)
    try:
        reason = read(OrderForm, {"reason": form.get("reason", "").strip()}).reason
    except Refusal as refusal:
        return _one(one, who, sentence_of(refusal))
    await stories(request).rehearsals.cancel(int(one["id"]), reason, who.actor)
    return RedirectResponse(f"/watch/rehearsals/{one['id']}", 303, headers=PRIVATE)


def members(form: Mapping[str, str]) -> dict[str, Any]:
    """The form of the page as the body that the API reads, so that both refuse the same."""
    policies: list[dict[str, Any]] = [{"name": "as it is"}] if form.get("as_it_is") else []
    policies += [
        {"name": name, "change": {"policy": {"method": name}}}
        for name in LEARNERS
        if form.get(f"method_{name}")
    ]
    if cap := form.get("cap_cpm", "").strip():
        policies.append({"name": f"cap {cap} CPM", "change": {"bid_cap_cpm": cap}})
    if price := form.get("flat_cpm", "").strip():
        policy = {"method": "flat", "price_cpm": price}
        policies.append({"name": f"flat {price} CPM", "change": {"policy": policy}})
    return {
        "name": form.get("name", "").strip(),
        "line_item": form.get("line_item", "").strip(),
        "policies": policies,
        "market": {"kind": form.get("market", ""), "auction": form.get("auction", "")},
        **{name: _whole(form.get(name, "").strip()) for name in ("rounds", "seeds")},
    }


def _whole(text: str) -> int | str:
    plain = text.replace(",", "")
    fits = plain.isascii() and plain.isdecimal() and len(plain) <= DIGITS_MAX
    return int(plain) if fits else text


async def _all(
    request: Request, who: Viewer, given: Mapping[str, str], problem: str = ""
) -> Response:
    rows = await _rows(request, who)
    names = (
        *("name", "line_item", "market", "auction", "as_it_is", "cap_cpm", "flat_cpm", "rounds"),
        *("seeds", *(f"method_{name}" for name in LEARNERS)),
    )
    return page(
        "rehearsals.html",
        422 if problem else 200,
        rows=rows,
        further=rows[-1]["id"] if len(rows) == ROWS else None,
        given={name: given.get(name, "") for name in names},
        markets=MARKETS,
        methods=LEARNERS,
        problem=problem,
        # Drawn with the form: sent twice by an impatient hand, one is started.
        once=secrets.token_hex(16),
        wall_ms=_wall_ms(),
        who=who,
    )


async def _rows(request: Request, who: Viewer) -> list[dict[str, Any]]:
    before = _whole(request.query_params.get("before", ""))
    number = before if isinstance(before, int) else None
    return await stories(request).rehearsals.page(number, ROWS, who.key.line_items)


async def _own(request: Request, who: Viewer) -> dict[str, Any]:
    """The rehearsal in the path; to a limited key one of another line item is as good as none."""
    number = _whole(str(request.path_params["rehearsal_id"]))
    if not isinstance(number, int):
        raise missing()
    found = await stories(request).rehearsals.one(number)
    if not who.sees_all and found["line_item"] not in (who.key.line_items or ()):
        count(request, FOREIGN)
        raise NotFound("no_such_rehearsal", "There is no rehearsal with this id.")
    return found


def _one(one: Mapping[str, Any], who: Viewer, problem: str = "") -> Response:
    return page(
        "rehearsal.html",
        422 if problem else 200,
        one=one,
        open=one["state"] in OPEN,
        charts=rehearsal_charts(one["result"]) if one["result"] else [],
        problem=problem,
        wall_ms=_wall_ms(),
        who=who,
    )


def _wall_ms() -> int:
    return time.time_ns() // 1_000_000
