"""Every error leaves as a problem with a code, and never with what the caller sent."""

from __future__ import annotations

import logging

import httpx
import pytest
from fastapi import FastAPI
from starlette.requests import ClientDisconnect, Request
from starlette.responses import Response

from service import errors
from service.api.body import BadJson, NotJson, TooLarge
from service.api.problems import STATUS, PreconditionMissing, install_handlers, status_of

CANARY = "canary-7f3a"

STATUSES = [
    (BadJson("Sentence."), 400),
    (errors.Malformed("c", "Sentence."), 422),
    (errors.Unauthenticated("c", "Sentence."), 401),
    (errors.Forbidden("c", "Sentence."), 403),
    (errors.NotFound("c", "Sentence."), 404),
    (errors.Conflict("c", "Sentence."), 409),
    (errors.NeedsConfirmation("c", "Sentence."), 409),
    (errors.Stale("c", "Sentence."), 412),
    (TooLarge("c", "Sentence."), 413),
    (NotJson("c", "Sentence."), 415),
    (errors.NotOffered("c", "Sentence."), 422),
    (PreconditionMissing("c", "Sentence."), 428),
]


def failing_app(error: Exception) -> FastAPI:
    """An app whose one route fails with the given error."""
    app = FastAPI(docs_url=None, redoc_url=None, openapi_url=None)
    install_handlers(app)

    @app.post("/fail")
    async def post(_request: Request) -> Response:
        raise error

    return app


async def answer_of(error: Exception, method: str = "POST", path: str = "/fail") -> httpx.Response:
    """What the failing app answers."""
    transport = httpx.ASGITransport(app=failing_app(error), raise_app_exceptions=False)
    async with httpx.AsyncClient(transport=transport, base_url="http://test") as client:
        return await client.request(method, path, content=CANARY.encode())


@pytest.mark.anyio
@pytest.mark.parametrize(("refusal", "status"), STATUSES, ids=lambda thing: type(thing).__name__)
async def test_each_refusal_has_its_status(refusal: errors.Refusal, status: int) -> None:
    """One table decides, and the body repeats the status with a code and a sentence."""
    answer = await answer_of(refusal)
    assert answer.status_code == status
    assert answer.headers["content-type"] == "application/problem+json"
    members = answer.json()
    assert (members["type"], members["status"]) == ("about:blank", status)
    assert (members["code"], members["detail"]) == (refusal.code, "Sentence.")
    assert members["title"]


def test_every_refusal_is_in_the_table() -> None:
    """A class added to errors.py cannot be forgotten here."""
    kinds = {kind for kind in vars(errors).values() if isinstance(kind, type)}
    refusals = {kind for kind in kinds if issubclass(kind, errors.Refusal)}
    assert refusals <= set(STATUS)


def test_a_subclass_has_the_status_of_its_nearest_parent() -> None:
    """The table is looked up along the class tree."""

    class Finer(errors.Conflict):
        pass

    assert status_of(Finer("c", "Sentence.")) == 409


@pytest.mark.anyio
async def test_data_travels_along_but_hides_no_standard_member() -> None:
    """Numbers of a refusal are members of the problem; its code stays its code."""
    answer = await answer_of(errors.Conflict("c", "Sentence.", {"spent": "1.00", "code": "x"}))
    assert answer.json()["spent"] == "1.00"
    assert answer.json()["code"] == "c"


@pytest.mark.anyio
async def test_a_missing_key_names_the_scheme() -> None:
    """401 says how to authenticate."""
    answer = await answer_of(errors.Unauthenticated("c", "Sentence."))
    assert answer.headers["www-authenticate"] == "Bearer"


@pytest.mark.anyio
async def test_an_absent_database_is_503_with_a_time_to_come_back() -> None:
    """The caller is told to repeat, since the write may or may not have happened."""
    answer = await answer_of(errors.StoreAway("psycopg: secret-host"))
    assert (answer.status_code, answer.json()["code"]) == (503, "store_away")
    assert answer.headers["retry-after"] == "1"
    assert "secret-host" not in answer.text


@pytest.mark.anyio
@pytest.mark.parametrize(
    "error", [ValueError(CANARY), errors.BrokenPromise(CANARY), KeyError(CANARY)]
)
async def test_what_nobody_expected_is_logged_in_full_and_answered_neutrally(
    error: Exception, caplog: pytest.LogCaptureFixture
) -> None:
    """500 carries no word of the error; the log has all of it."""
    with caplog.at_level(logging.ERROR, logger="service.api.problems"):
        answer = await answer_of(error)
    assert (answer.status_code, answer.json()["code"]) == (500, "internal")
    assert CANARY not in answer.text
    assert any(record.exc_info and record.exc_info[1] is error for record in caplog.records)


@pytest.mark.anyio
@pytest.mark.parametrize(
    ("method", "path", "status", "code"),
    [
        ("GET", f"/{CANARY}", 404, "not_found"),
        ("DELETE", "/fail", 405, "method_not_allowed"),
    ],
)
async def test_unknown_paths_and_methods_are_problems_too(
    method: str, path: str, status: int, code: str
) -> None:
    """The framework's own refusals have our form, and do not repeat the path."""
    answer = await answer_of(ValueError(), method, path)
    assert (answer.status_code, answer.json()["code"]) == (status, code)
    assert CANARY not in answer.text
    assert ("allow" in answer.headers) == (status == 405)


@pytest.mark.anyio
async def test_a_caller_who_left_is_no_error_of_ours() -> None:
    """A body that ends early is the caller's doing, not a 500."""
    assert (await answer_of(ClientDisconnect())).status_code == 400
