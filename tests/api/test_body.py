"""The body becomes one strict JSON object or a refusal, before it is read to its end if need be."""

from __future__ import annotations

import time
from collections.abc import AsyncIterator
from decimal import Decimal

import httpx
import pytest
from fastapi import FastAPI
from starlette.requests import Request
from starlette.responses import Response

from service.api.answers import json_answer
from service.api.body import BadJson, parse_object, read_object
from service.api.problems import install_handlers

GOOD = [
    (b"{}", {}),
    (b' {"a": [1, "x", null, true]} ', {"a": [1, "x", None, True]}),
    (b'{"a": 0.1}', {"a": Decimal("0.1")}),
    (b'{"a": 1e999}', {"a": Decimal("1e999")}),
    ('{"a": "ü"}'.encode(), {"a": "ü"}),
    (b'{"a": {"a": {"a": 1}}}', {"a": {"a": {"a": 1}}}),
]
BAD = [
    b"",
    b" ",
    b"null",
    b"[]",
    b'"text"',
    b"1",
    b"{",
    b'{"a": 1,}',
    b"{'a': 1}",
    b'{"a": 1} {}',
    b'{"a": NaN}',
    b'{"a": Infinity}',
    b'{"a": -Infinity}',
    b'{"a": 1, "a": 1}',
    b'{"a": {"b": 1, "b": 2}}',
    b'{"a": 1e9999999999999999999999}',
    b'{"a": ' + b"7" * 5000 + b"}",
    b'{"a": 01}',
    b'{"a": 0x1}',
    b'{"a": "\x00"}',
    b'{"a": "\xff"}',
    b'\xef\xbb\xbf{"a": 1}',
    '{"a": 1}'.encode("utf-16"),
    b"[" * 100_000,
    b'{"a":' * 100_000,
    b"[" * 100_000 + b"]" * 100_000,
]


def small_app(bytes_max: int) -> FastAPI:
    """An app with one route that answers how many members its body has."""
    app = FastAPI()
    install_handlers(app)

    @app.post("/")
    async def post(request: Request) -> Response:
        return json_answer({"members": len(await read_object(request, bytes_max))})

    return app


async def sent(
    content: bytes | AsyncIterator[bytes], headers: dict[str, str] | None = None
) -> httpx.Response:
    """What a small app with a limit of 100 bytes answers."""
    transport = httpx.ASGITransport(app=small_app(100))
    async with httpx.AsyncClient(transport=transport, base_url="http://test") as client:
        return await client.post("/", content=content, headers=headers)


@pytest.mark.parametrize(("body", "expected"), GOOD)
def test_strict_json_is_read_without_loss(body: bytes, expected: dict[str, object]) -> None:
    """Numbers with a point stay exact decimals; everything else is what JSON says."""
    assert parse_object(body) == expected


@pytest.mark.parametrize("body", BAD, ids=lambda body: repr(body[:24]))
def test_everything_else_is_bad_json(body: bytes) -> None:
    """Broken, doubled, endless, deep or odd bodies are refused with one code."""
    with pytest.raises(BadJson) as caught:
        parse_object(body)
    assert caught.value.code == "bad_json"


def test_deep_nesting_is_refused_at_once() -> None:
    """A hundred thousand brackets cost milliseconds; the bound leaves room for a busy machine."""
    begun = time.perf_counter()
    with pytest.raises(BadJson):
        parse_object(b"[" * 100_000)
    assert time.perf_counter() - begun < 0.25


@pytest.mark.anyio
@pytest.mark.parametrize(
    "content_type",
    [None, "", "application/json", "Application/JSON; charset=UTF-8", "application/x+json"],
)
async def test_json_or_no_content_type_is_read(content_type: str | None) -> None:
    """A missing content type means JSON, and a charset may be said if it is UTF-8."""
    headers = {} if content_type is None else {"content-type": content_type}
    answer = await sent(b'{"a": 1}', headers)
    assert (answer.status_code, answer.json()) == (200, {"members": 1})


@pytest.mark.anyio
@pytest.mark.parametrize(
    "headers",
    [
        {"content-type": "text/plain"},
        {"content-type": "application/x-www-form-urlencoded"},
        {"content-type": "application/json; charset=utf-16"},
        {"content-type": "application/jsonx"},
        {"content-encoding": "gzip"},
        {"content-encoding": "identity, br"},
    ],
)
async def test_other_types_and_encodings_are_415(headers: dict[str, str]) -> None:
    """What is not plain JSON is refused by its headers, so no bomb is ever inflated."""
    answer = await sent(b'{"a": 1}', headers)
    assert answer.status_code == 415
    assert answer.headers["content-type"] == "application/problem+json"


@pytest.mark.anyio
@pytest.mark.parametrize("length", [100, 101])
async def test_the_limit_is_met_and_not_passed(length: int) -> None:
    """A body of just the limit is read, one byte more is 413."""
    body = b'{"a": "' + b"x" * (length - 9) + b'"}'
    answer = await sent(body)
    assert answer.status_code == (200 if length == 100 else 413)


@pytest.mark.anyio
async def test_a_body_of_unknown_length_stops_at_the_limit() -> None:
    """A stream without an end is left after the first piece too much."""
    pieces = 0

    async def endless() -> AsyncIterator[bytes]:
        nonlocal pieces
        while pieces < 1000:
            pieces += 1
            yield b"x" * 60

    answer = await sent(endless())
    assert answer.status_code == 413
    assert pieces < 10


@pytest.mark.anyio
@pytest.mark.parametrize("announced", ["101", "9" * 30])
async def test_an_announced_giant_is_refused_unread(announced: str) -> None:
    """The announced length alone is reason enough."""
    answer = await sent(b"{}", {"content-length": announced})
    assert (answer.status_code, answer.json()["code"]) == (413, "body_too_large")
