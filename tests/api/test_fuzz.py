"""Calls drawn from our own OpenAPI against a real server: whatever comes, no error of ours."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from typing import Any

import httpx
import pytest
import schemathesis
from hypothesis import HealthCheck, Phase, given, settings
from schemathesis import Case
from schemathesis.core.result import Ok
from schemathesis.schemas import APIOperation, BaseSchema

from service.commands.server_process import ServerProcess
from tests.api.test_hostile import LINE_ITEM

Operation = APIOperation[Any, Any, Any, Any]
Drawn = Case[Any]
EXAMPLES = 60
BY_ID = "/v1/line-items/{line_item_id}"
HONEST: dict[str, dict[str, object]] = {
    "POST /v1/bids": {"line_item": LINE_ITEM["id"]},
    "POST /v1/line-items": LINE_ITEM,
    f"PATCH {BY_ID}": {"reason": "A test."},
    **{f"POST {BY_ID}/{order}": {"reason": "A test."} for order in ("freeze", "thaw", "reset")},
}


@pytest.fixture(scope="module")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[ServerProcess]:
    """A server with one line item, so that drawn calls may also meet something."""
    with ServerProcess(tmp_path_factory.mktemp("fuzz")) as server:
        headers = {"Authorization": f"Bearer {server.key}"}
        made = httpx.post(f"{server.address}/v1/line-items", json=LINE_ITEM, headers=headers)
        assert made.status_code == 201
        yield server


def described(server: ServerProcess) -> BaseSchema:
    """Our OpenAPI as the server tells it."""
    answer = httpx.get(
        f"{server.address}/openapi.json", headers={"Authorization": f"Bearer {server.key}"}
    )
    schema = schemathesis.openapi.from_dict(answer.json())
    schema.location = f"{server.address}/openapi.json"
    return schema


def nearly_honest(case: Drawn, turn: int) -> None:
    """Aim at the line item that is there, with an honest body but for one drawn field."""
    if case.path_parameters:
        case.path_parameters = {**case.path_parameters, "line_item_id": LINE_ITEM["id"]}
    if case.method == "PATCH":
        case.headers["If-Match"] = '"1"'
    honest = HONEST.get(case.operation.label)
    if honest is not None and isinstance(case.body, dict):
        names = sorted(case.body)
        one = names[turn % len(names)] if names else ""
        drawn = {one: case.body[one]} if one else {}
        case.body = {**dict[str, Any](honest), **drawn}


def limited_keys(server: ServerProcess) -> list[str]:
    """A key limited to the line item that is there, and one limited to another."""
    keys = []
    for name in (LINE_ITEM["id"], "another"):
        wish = {"name": "limited", "line_items": [name], "reason": "A test."}
        made = httpx.post(
            f"{server.address}/v1/keys",
            json={**wish, "scopes": ["bid", "report", "read", "operate"]},
            headers={"Authorization": f"Bearer {server.key}"},
        )
        keys.append(str(made.json()["key"]))
    return keys


def play(
    server: ServerProcess,
    http: httpx.Client,
    operation: Operation,
    statuses: Counter[int],
    limited: list[str],
) -> None:
    """Call one operation many times with what its description allows."""

    @settings(
        max_examples=EXAMPLES,
        phases=[Phase.generate],
        suppress_health_check=list(HealthCheck),
    )
    @given(case=operation.as_strategy())
    def call(case: Drawn) -> None:
        if statuses.total() % 2:
            nearly_honest(case, statuses.total() // 2)
        request = case.as_transport_kwargs(base_url=server.address)
        drawn = {k: v for k, v in (request.get("headers") or {}).items() if sendable(v)}
        turn = statuses.total()
        # Every third call comes with a key that is limited, to the line item there or to another.
        bearer = server.key if turn % 3 else limited[turn // 3 % len(limited)]
        answer = http.request(
            request["method"],
            request["url"],
            params=request.get("params"),
            json=request.get("json"),
            headers={**drawn, "Authorization": f"Bearer {bearer}"},
        )
        statuses[answer.status_code] += 1
        assert answer.status_code < 500 or answer.status_code == 503, (request, answer.text)
        if answer.status_code == 503:
            assert answer.headers["retry-after"]

    call()


def sendable(value: str) -> bool:
    """Whether HTTP can carry it as a header at all."""
    return value.isascii() and value.isprintable() and value == value.strip()


def test_no_drawn_call_is_an_error_of_ours(server: ServerProcess) -> None:
    """On every operation: an answer or a refusal, and 503 only with its Retry-After."""
    seen: dict[str, Counter[int]] = {}
    limited = limited_keys(server)
    with httpx.Client(timeout=30) as http:
        for result in described(server).get_all_operations():
            assert isinstance(result, Ok)
            operation = result.ok()
            seen[operation.label] = Counter()
            play(server, http, operation, seen[operation.label], limited)
    assert len(seen) > 10
    met = {label for label, counts in seen.items() if any(s < 300 for s in counts)}
    assert met >= HONEST.keys() | {"POST /v1/outcomes", "POST /v1/bids/batch"}, seen
    log = server.log_path.read_text()
    assert "an error nobody expected" not in log
    assert not any(key in log for key in (server.key, *limited))
