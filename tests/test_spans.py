"""Traces: the spans of a bid and its outcome, with nothing in them that tells of people."""

from __future__ import annotations

import gzip
import subprocess
import sys
import threading
from collections.abc import AsyncIterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer

import httpx
import pytest
from opentelemetry.sdk.trace import TracerProvider
from opentelemetry.sdk.trace.export import SimpleSpanProcessor
from opentelemetry.sdk.trace.export.in_memory_span_exporter import InMemorySpanExporter

from service import spans
from service.app import create_app
from service.connecting import open_database
from service.settings import load
from service.store import keys
from tests.commands.crews import GARDEN

pytestmark = pytest.mark.anyio
ALLOWED = {
    *("bidkeel.method", "bidkeel.set_by", "bidkeel.reason", "bidkeel.rows", "bidkeel.line_items")
}


@pytest.fixture(name="client")
async def _client(migrated_url: str) -> AsyncIterator[httpx.AsyncClient]:
    patient = {"BIDKEEL_DEADLINE_MS": "5000", "BIDKEEL_DEADLINE_MS_MAX": "5000"}
    settings = load({"BIDKEEL_DATABASE_URL": migrated_url, **patient})
    database = open_database(settings)
    _, bearer = keys.add(database, "tests", ["admin"])
    database.close()
    app = create_app(settings)
    transport = httpx.ASGITransport(app=app)
    headers = {"Authorization": f"Bearer {bearer}"}
    async with (
        app.router.lifespan_context(app),
        httpx.AsyncClient(transport=transport, base_url="http://test", headers=headers) as client,
    ):
        yield client


async def trade(client: httpx.AsyncClient) -> None:
    """One bid with everything a caller may say, and its win."""
    await client.post("/v1/line-items", json=GARDEN)
    features = {"device": "canary-device", "hour": 13}
    body = {"line_item": "garden", "request_id": "canary-request", "features": features}
    answer = (await client.post("/v1/bids", json=body)).json()
    row = {"ticket": answer["ticket"], "kind": "won", "clearing_cpm": 1.5}
    told = await client.post("/v1/outcomes", json={"outcomes": [row]})
    assert told.json()["results"][0]["status"] == "recorded"


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_bid_and_its_outcome_leave_spans(client: httpx.AsyncClient) -> None:
    """Bid, lease, outcomes and commit, each with counts and reasons only."""
    exporter = InMemorySpanExporter()
    provider = TracerProvider()
    provider.add_span_processor(SimpleSpanProcessor(exporter))
    with spans.tracing(provider.get_tracer("tests")):
        await trade(client)
    seen = {span.name: dict(span.attributes or {}) for span in exporter.get_finished_spans()}
    assert seen["bidkeel.bid"] == {"bidkeel.method": "flat", "bidkeel.set_by": "value"}
    assert seen["bidkeel.lease"] == {"bidkeel.line_items": 1}
    assert seen["bidkeel.outcomes"] == seen["bidkeel.commit"] == {"bidkeel.rows": 1}
    assert {name for attributes in seen.values() for name in attributes} <= ALLOWED
    said = "".join(span.to_json() for span in exporter.get_finished_spans())
    assert "canary" not in said
    assert "garden" not in said


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_without_a_tracer_nothing_is_made(client: httpx.AsyncClient) -> None:
    """Off, a span is one shared object that does nothing."""
    await trade(client)
    assert spans.span("bid") is spans.span("commit")
    with spans.exported(""), spans.span("bid") as span:
        spans.note(span, rows=1)
        assert span is None


def test_an_endpoint_turns_them_on_and_a_stop_off() -> None:
    """What was made in between has reached the endpoint when the process may end."""
    took = list[bytes]()

    class Collector(BaseHTTPRequestHandler):
        def do_POST(self) -> None:
            took.append(self.rfile.read(int(self.headers["Content-Length"])))
            self.send_response(200)
            self.end_headers()

        def log_message(self, *_: object) -> None: ...

    with ThreadingHTTPServer(("127.0.0.1", 0), Collector) as server:
        threading.Thread(target=server.serve_forever).start()
        with spans.exported(f"http://127.0.0.1:{server.server_port}/v1/traces"):
            with spans.span("bid") as span:
                assert span is not None
        server.shutdown()
    assert b"bidkeel.bid" in gzip_or_plain(b"".join(took))
    assert spans.span("bid") is spans.span("bid")


def gzip_or_plain(body: bytes) -> bytes:
    """The body as it was before an exporter may have packed it."""
    return gzip.decompress(body) if body.startswith(b"\x1f\x8b") else body


def test_without_its_packages_the_service_runs_and_tracing_is_refused() -> None:
    """Nothing is imported while traces are off; asked for, the sentence names the extra."""
    program = """
import sys
sys.modules["opentelemetry.sdk"] = None
from service import app, spans
from service.errors import Unsafe
try:
    with spans.exported("http://127.0.0.1:9/"):
        sys.exit(1)
except Unsafe as error:
    sys.exit(0 if "the extra traces" in str(error) else 2)
"""
    assert subprocess.run([sys.executable, "-c", program]).returncode == 0


def recording() -> tuple[InMemorySpanExporter, TracerProvider]:
    """Spans that a test can look at."""
    exporter, provider = InMemorySpanExporter(), TracerProvider()
    provider.add_span_processor(SimpleSpanProcessor(exporter))
    return exporter, provider


def test_the_innermost_tracer_makes_the_spans() -> None:
    """And when its block is left by an error, the one before makes them again."""
    outer, inner = recording(), recording()
    with spans.tracing(outer[1].get_tracer("outer")):
        with pytest.raises(ValueError, match="ours"), spans.tracing(inner[1].get_tracer("inner")):
            with spans.span("bid"):
                raise ValueError("ours")
        with spans.span("lease"):
            pass
    names = [
        [span.name for span in exporter.get_finished_spans()] for exporter, _ in (inner, outer)
    ]
    assert names == [["bidkeel.bid"], ["bidkeel.lease"]]
    with spans.span("bid") as nothing:
        assert nothing is None


def test_what_is_not_known_is_not_said_of_a_span() -> None:
    """None is left out; nought and false are said."""
    exporter, provider = recording()
    with spans.tracing(provider.get_tracer("tests")), spans.span("bid") as span:
        spans.note(span, reason=None, rows=0, test=False, method="flat")
    (seen,) = exporter.get_finished_spans()
    assert dict(seen.attributes or {}) == {
        "bidkeel.rows": 0, "bidkeel.test": False, "bidkeel.method": "flat"
    }  # fmt: skip
