"""Secrets do not show: not in logs, answers, journal, refusals or anything else that is kept.

A real server is given a value that nobody could mistake in every secret setting; then it is
called well, badly and while its database is away, and everything it says is searched.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import httpx
import pytest
from pydantic import SecretStr
from sqlalchemy import create_engine, inspect, text

from service.commands.server_process import ServerProcess
from service.settings import PREFIX, Settings
from tests.api.test_hostile import LINE_ITEM
from tests.builders import outage

CANARY = "canary-0123456789-abcdefghij-0123456789"
# One for each secret setting; the address of the database carries its own as a password.
CANARIES = {
    "ticket_keys": f"{CANARY}-ticket,{CANARY}-older",
    "health_key": f"{CANARY}-health",
    "webhook_secret": f"{CANARY}-webhook",
}


def secret_settings() -> set[str]:
    """The names of all settings that are secrets."""
    return {
        name
        for name, field in Settings.model_fields.items()
        if "SecretStr" in str(field.annotation)
    }


def test_every_secret_setting_has_a_canary() -> None:
    """A new secret is searched for too, or this fails."""
    assert secret_settings() == {*CANARIES, "database_url"}
    assert SecretStr("x").get_secret_value() == "x"


def kept(url: str) -> str:
    """Everything that the database holds, as text."""
    engine = create_engine(url)
    with engine.connect() as connection:
        tables = inspect(connection).get_table_names()
        assert {"journal", "refusal", "access_key", "key_text"} <= set(tables)
        rows = [
            repr(tuple(row))
            for table in tables
            for row in connection.execute(text(f"SELECT * FROM {table}"))  # noqa: S608
        ]
    engine.dispose()
    return "\n".join(rows)


def conversation(server: ServerProcess) -> tuple[list[str], list[str]]:
    """Call well and badly; returns what was answered, and the secrets that came up meanwhile."""
    said: list[str] = []
    admin = {"Authorization": f"Bearer {server.key}"}
    health = {"Authorization": f"Bearer {CANARIES['health_key']}"}
    wrong = {"Authorization": f"Bearer {CANARY}-wrong"}
    with httpx.Client(base_url=server.address, timeout=30) as http:

        def call(method: str, path: str, headers: dict[str, str], **more: Any) -> httpx.Response:
            answer = http.request(method, path, headers=headers, **more)
            said.append(f"{answer.headers} {answer.text}")
            return answer

        call("POST", "/v1/line-items", admin, json=LINE_ITEM)
        bid = {"line_item": LINE_ITEM["id"], "deadline_ms": 200}
        # What a caller is meant to hold is left out of what is searched: its ticket, its new key.
        ticket = ""
        while not ticket:
            ticket = http.post("/v1/bids", headers=admin, json=bid).json()["ticket"] or ""
        wish = {"name": "desk", "scopes": ["read"], "reason": "A test."}
        made = http.post("/v1/keys", headers=admin, json=wish).json()
        turn = {"reason": "It is old.", "overlap_s": 0}
        turned = http.post(f"/v1/keys/{made['id']}/rotate", headers=admin, json=turn).json()
        secrets = [server.key, made["key"], turned["key"], ticket]
        rows = [{"kind": "lost", "ticket": ticket}, {"kind": "lost", "ticket": ticket[:-1] + "!"}]
        call("POST", "/v1/outcomes", admin, json={"outcomes": rows})
        for path in ("/health/ready", "/metrics", "/openapi.json", "/docs", "/v1/keys"):
            call("GET", path, {})
            call("GET", path, health)
            call("GET", path, admin)
            call("GET", path, wrong)
        for secret in (made["key"], turned["key"], ticket, f"{CANARY}-path"):
            bearer = {"Authorization": f"Bearer {secret}"}
            call("POST", f"/v1/line-items/{secret[:64]}/freeze", bearer, json={"reason": "A test."})
            call("GET", f"/v1/line-items?key={secret}", bearer)
            call("POST", "/v1/bids", admin, content=f'{{"line_item": "{secret}"')
            call("POST", "/v1/bids", admin, json={"line_item": secret, secret: 1})
        call("GET", "/v1/refusals", admin)
        call("GET", "/v1/keys", admin)
        if "postgresql" in server.environment[f"{PREFIX}DATABASE_URL"]:
            with outage(server.environment[f"{PREFIX}DATABASE_URL"]):
                call("GET", "/v1/line-items", admin)
                call("GET", "/v1/line-items", {"Authorization": f"Bearer {CANARY}-new"})
    return said, secrets


@pytest.mark.parametrize(
    ("backend", "form"), [("sqlite", "text"), ("postgresql", "json")], indirect=["backend"]
)
def test_no_secret_shows(migrated_url: str, tmp_path: Path, form: str) -> None:
    """In no log, answer, row or file; refusals and the journal have rows, so both were searched."""
    url = migrated_url.replace("postgres@", f"postgres:{CANARY}-password@")
    given = {f"{PREFIX}{name.upper()}": value for name, value in CANARIES.items()}
    given |= {f"{PREFIX}DATABASE_URL": url, f"{PREFIX}LOG_FORMAT": form}
    with ServerProcess(tmp_path, given) as server:
        said, secrets = conversation(server)
    log = server.log_path.read_text()
    rows = kept(migrated_url)
    assert "unknown_key" in rows
    assert "key_rotate" in rows
    assert len(log.splitlines()) > 3
    for place, what in (("log", log), ("rows", rows), ("answers", "\n".join(said))):
        found = [secret for secret in (CANARY, *secrets) if secret in what]
        assert found == [], (place, [what[max(0, what.index(s) - 200) :][:400] for s in found])
    if migrated_url.startswith("sqlite"):
        files = [path for path in tmp_path.iterdir() if path.is_file()]
        raw = b"".join(path.read_bytes() for path in files)
        assert [secret for secret in (CANARY, *secrets) if secret.encode() in raw] == []
