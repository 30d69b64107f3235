"""The addresses of the watch page, and the pages that only show."""

from __future__ import annotations

import json
import time
from typing import Any

from fastapi import APIRouter
from starlette.requests import Request
from starlette.responses import RedirectResponse, Response

from service.watch import hindsight, orders, rehearsals, signing
from service.watch.door import Viewer, line_item_of, shown, stories, viewer
from service.watch.pages import PRIVATE, file, page
from service.watch.words import sentence
from service.watching import Board, Sheet

router = APIRouter(include_in_schema=False)
WANTED_CHARACTERS_MAX = 100


@router.get("/")
async def get_root(_request: Request) -> Response:
    """Whoever types only the host wants to watch."""
    return RedirectResponse("/watch", 303, headers=PRIVATE)


async def _board(request: Request, who: Viewer) -> dict[str, Any]:
    wanted = request.query_params.get("q", "").strip()[:WANTED_CHARACTERS_MAX]
    number = request.query_params.get("page", "1")
    number = number if number.isascii() and number.isdecimal() and len(number) < 7 else "1"
    watching = stories(request).watching
    board: Board = await watching.board(who.sees, wanted, int(number), all_of_them=who.sees_all)
    return {"board": board, "sentence": sentence(board.alarm), "wanted": wanted, "who": who}


@router.get("/watch")
@shown
async def get_front(request: Request) -> Response:
    """All line items, those that need somebody first."""
    return page("front.html", **await _board(request, await viewer(request)))


@router.get("/watch/now")
@shown
async def get_front_now(request: Request) -> Response:
    """The part of the front page that is renewed every few seconds."""
    shown = await _board(request, await viewer(request))
    return _aged(page("board_now.html", **shown), shown["board"].wall_ms)


@router.get("/watch/line-items/{line_item_id}")
@shown
async def get_line_item(request: Request) -> Response:
    """One line item with its charts as text; the script draws them."""
    who = await viewer(request)
    name, watching = line_item_of(request, who), stories(request).watching
    sheet: Sheet = await watching.sheet(name)
    return page("line_item.html", sheet=sheet, charts=await watching.charts(name), who=who)


@router.get("/watch/line-items/{line_item_id}/now")
@shown
async def get_line_item_now(request: Request) -> Response:
    """The part of a line item's page that is renewed every few seconds."""
    who = await viewer(request)
    sheet = await stories(request).watching.sheet(line_item_of(request, who))
    return _aged(page("sheet_now.html", sheet=sheet, who=who), sheet.wall_ms)


def _aged(answer: Response, wall_ms: int) -> Response:
    """Say how old it is by the clocks of this side: those of a phone may be wrong."""
    answer.headers["X-Age-Ms"] = str(max(0, time.time_ns() // 1_000_000 - wall_ms))
    return answer


@router.get("/watch/line-items/{line_item_id}/charts")
@shown
async def get_charts(request: Request) -> Response:
    """The figures and sentences of a line item's charts."""
    who = await viewer(request)
    drawn = await stories(request).watching.charts(line_item_of(request, who))
    told = {one.id: {"says": one.says, "figure": one.figure} for one in drawn}
    text = json.dumps(told, separators=(",", ":"), allow_nan=False)
    return Response(text, headers=PRIVATE, media_type="application/json")


@router.get("/watch/files/{version}/{name}")
@shown
async def get_file(request: Request) -> Response:
    """A script, a style or the mark; the version in the address only keeps old copies apart."""
    return file(request, str(request.path_params["name"]))


router.add_api_route("/watch/sign-in", signing.get_sign_in, methods=["GET"])
router.add_api_route("/watch/sign-in", signing.post_sign_in, methods=["POST"])
router.add_api_route("/watch/sign-out", signing.post_sign_out, methods=["POST"])
router.add_api_route("/watch/all/{order}", orders.get_order_for_all, methods=["GET"])
router.add_api_route("/watch/all/{order}", orders.post_order_for_all, methods=["POST"])
REHEARSALS = "/watch/rehearsals"
REHEARSAL = REHEARSALS + "/{rehearsal_id}"
router.add_api_route(REHEARSALS, rehearsals.get_rehearsals, methods=["GET"])
router.add_api_route(REHEARSALS, rehearsals.post_rehearsals, methods=["POST"])
router.add_api_route(REHEARSALS + "/now", rehearsals.get_rehearsals_now, methods=["GET"])
router.add_api_route(REHEARSAL, rehearsals.get_rehearsal, methods=["GET"])
router.add_api_route(REHEARSAL + "/now", rehearsals.get_rehearsal_now, methods=["GET"])
router.add_api_route(REHEARSAL + "/charts", rehearsals.get_rehearsal_charts, methods=["GET"])
router.add_api_route(REHEARSAL + "/cancel", rehearsals.post_cancel, methods=["POST"])
LOOK_BACK = "/watch/line-items/{line_item_id}/hindsight"
router.add_api_route(LOOK_BACK, hindsight.get_hindsight, methods=["GET"])
ORDER = "/watch/line-items/{line_item_id}/{order}"
router.add_api_route(ORDER, orders.get_order, methods=["GET"])
router.add_api_route(ORDER, orders.post_order, methods=["POST"])
