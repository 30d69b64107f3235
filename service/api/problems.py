"""Errors as RFC 9457 problem details, apart because only here do our errors meet HTTP status."""

from __future__ import annotations

import json
import logging
from collections.abc import Mapping
from http import HTTPStatus

from fastapi import FastAPI
from starlette.exceptions import HTTPException
from starlette.requests import ClientDisconnect, Request
from starlette.responses import Response

from service import errors, request_ids
from service.api.body import BadJson, NotJson, TooLarge

MEDIA_TYPE = "application/problem+json"

_log = logging.getLogger(__name__)


class PreconditionMissing(errors.Refusal):
    """A change came without the version it is meant for."""


STATUS: dict[type[errors.Refusal], HTTPStatus] = {
    BadJson: HTTPStatus.BAD_REQUEST,
    TooLarge: HTTPStatus.REQUEST_ENTITY_TOO_LARGE,
    NotJson: HTTPStatus.UNSUPPORTED_MEDIA_TYPE,
    PreconditionMissing: HTTPStatus.PRECONDITION_REQUIRED,
    errors.Malformed: HTTPStatus.UNPROCESSABLE_ENTITY,
    errors.Unauthenticated: HTTPStatus.UNAUTHORIZED,
    errors.Forbidden: HTTPStatus.FORBIDDEN,
    errors.NotFound: HTTPStatus.NOT_FOUND,
    errors.Conflict: HTTPStatus.CONFLICT,
    errors.Stale: HTTPStatus.PRECONDITION_FAILED,
    errors.NotOffered: HTTPStatus.UNPROCESSABLE_ENTITY,
    errors.NeedsConfirmation: HTTPStatus.CONFLICT,
    errors.Refusal: HTTPStatus.BAD_REQUEST,
}
HEADERS: dict[HTTPStatus, dict[str, str]] = {
    HTTPStatus.UNAUTHORIZED: {"WWW-Authenticate": "Bearer"},
    HTTPStatus.SERVICE_UNAVAILABLE: {"Retry-After": "1"},
}


def status_of(refusal: errors.Refusal) -> HTTPStatus:
    """The status of the nearest class in the table, along the class tree."""
    # A new refusal thus has the status of its parent until somebody gives it one of its own.
    return next(STATUS[kind] for kind in type(refusal).__mro__ if kind in STATUS)


def problem(
    status: HTTPStatus,
    code: str,
    detail: str,
    data: Mapping[str, object] | None = None,
    headers: Mapping[str, str] | None = None,
) -> Response:
    """One answer of type application/problem+json; `data` never hides a standard member."""
    # The data come first, so that none of theirs can stand in place of a standard member.
    members = {
        **(data or {}),
        "type": "about:blank",
        "title": status.phrase,
        "status": status.value,
        "code": code,
        "detail": detail,
    }
    name = request_ids.current()
    # In the header here too: what the outermost handler answers passes no layer of ours.
    named = {} if name is None else {request_ids.HEADER: name}
    if name is not None:
        members["request_id"] = name
    return Response(
        json.dumps(members, separators=(",", ":"), allow_nan=False),
        status_code=status.value,
        media_type=MEDIA_TYPE,
        headers={**HEADERS.get(status, {}), **(headers or {}), **named},
    )


def install_handlers(app: FastAPI) -> None:
    """Let every error of a route leave as a problem, none with what the caller sent."""
    app.add_exception_handler(errors.Refusal, _refused)
    app.add_exception_handler(errors.StoreAway, _store_away)
    app.add_exception_handler(errors.Overloaded, _overloaded)
    app.add_exception_handler(HTTPException, _http)
    app.add_exception_handler(ClientDisconnect, _gone)
    app.add_exception_handler(Exception, _unexpected)


async def _refused(_request: Request, error: Exception) -> Response:
    if not isinstance(error, errors.Refusal):
        raise error
    return problem(status_of(error), error.code, error.detail, error.data)


async def _store_away(_request: Request, _error: Exception) -> Response:
    _log.warning("the database did not answer", exc_info=_error)
    return problem(
        HTTPStatus.SERVICE_UNAVAILABLE,
        "store_away",
        "The database did not answer; perhaps the call took effect. Send it again.",
    )


async def _overloaded(_request: Request, _error: Exception) -> Response:
    return problem(
        HTTPStatus.SERVICE_UNAVAILABLE,
        "overloaded",
        "Too much came at once; nothing of this call was done. Send it again.",
    )


async def _http(_request: Request, error: Exception) -> Response:
    if not isinstance(error, HTTPException):
        raise error
    status = HTTPStatus(error.status_code)
    code = status.name.lower()
    # Not the framework's own detail, which may hold what the caller sent.
    return problem(status, code, f"{status.phrase}.", headers=error.headers)


async def _gone(_request: Request, _error: Exception) -> Response:
    # Nobody reads this answer, but without it the log would call a hang-up an error of ours.
    return problem(HTTPStatus.BAD_REQUEST, "bad_json", "The body ended early.")


async def _unexpected(_request: Request, error: Exception) -> Response:
    # What went wrong may hold what the caller sent, so it goes to the log and not to the caller.
    _log.error("an error nobody expected", exc_info=error)
    return problem(
        HTTPStatus.INTERNAL_SERVER_ERROR,
        "internal",
        "Something failed on our side; it is in the log.",
    )
