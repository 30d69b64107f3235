"""News leaves signed, comes again after a failure, is given up in the end, and waits for nobody."""

from __future__ import annotations

import asyncio
import hashlib
import hmac
import json
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from dataclasses import dataclass, field

import pytest

from service.posting import ID, SIGNATURE, TIMESTAMP, Posting, Receiver
from service.store import outbox
from tests.builders import NAME, Worker, working

pytestmark = pytest.mark.anyio

SECRET = b"an invented secret of some length"


@dataclass
class Call:
    """One request as it came: its headers in lower case, and its body."""

    path: str
    headers: dict[str, str]
    body: bytes


@dataclass
class Listener:
    """A receiver on this machine that answers as it is told."""

    url: str = ""
    answer: bytes = b"HTTP/1.1 204 No Content\r\nContent-Length: 0\r\n\r\n"
    mute: bool = False
    calls: list[Call] = field(default_factory=list)

    async def serve(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        """Take one call."""
        head = (await reader.readuntil(b"\r\n\r\n")).decode()
        first, *lines = head.strip().split("\r\n")
        headers = {k.lower(): v.strip() for k, _, v in (line.partition(":") for line in lines)}
        body = await reader.readexactly(int(headers["content-length"]))
        self.calls.append(Call(first.split()[1], headers, body))
        if self.mute:
            await reader.read()  # Until the caller hangs up.
        else:
            writer.write(self.answer)
        writer.close()


@asynccontextmanager
async def listening() -> AsyncIterator[Listener]:
    """A listener on a port of its own."""
    listener = Listener()
    server = await asyncio.start_server(listener.serve, "127.0.0.1", 0)
    port = server.sockets[0].getsockname()[1]
    listener.url = f"http://127.0.0.1:{port}/news"
    try:
        yield listener
    finally:
        server.close()
        await server.wait_closed()


def posting(worker: Worker, url: str, tries: int = 3, timeout_s: float = 2.0) -> Posting:
    """What tells a receiver at this address."""
    receiver = Receiver(url, SECRET, timeout_s, tries)
    return Posting(worker.database, worker.threads, receiver)


def put(worker: Worker, kind: str = "finding") -> None:
    """One piece of news, as old as the wall clock says."""
    body = {"rule": "voids", "numbers": {"spent_nanos": 2_500_000_000}, "since_ms": 0}
    now = worker.database.wall_ms()
    worker.database.write(lambda c: outbox.put(c, kind, NAME, body, now))


def states(worker: Worker) -> list[str]:
    """What has become of each."""
    return worker.column("SELECT state FROM outbox ORDER BY number")


def hasten(worker: Worker) -> None:
    """Let the wait before the next try be over."""
    worker.run("UPDATE outbox SET next_ms = 0")


async def test_news_is_signed_and_sent_once(migrated_url: str) -> None:
    """The proof is over the time of sending and the very bytes; amounts are decimal text."""
    async with working(migrated_url) as worker, listening() as listener:
        put(worker)
        teller = posting(worker, listener.url)
        await teller.post()
        await teller.post()
        (call,) = listener.calls
        stamp = call.headers[TIMESTAMP.lower()]
        proof = hmac.new(SECRET, stamp.encode() + b"\n" + call.body, hashlib.sha256).hexdigest()
        assert call.headers[SIGNATURE.lower()] == proof
        assert abs(int(stamp) - worker.database.wall_ms() / 1000) < 60
        said = json.loads(call.body)
        assert said["id"] == call.headers[ID.lower()]
        assert (said["kind"], said["line_item"], said["rule"]) == ("finding", NAME, "voids")
        assert said["numbers"] == {"spent": "2.50"}
        assert said["since"] == "1970-01-01T00:00:00.000Z"
        assert states(worker) == ["sent"]
        assert SECRET not in call.body


async def test_what_fails_comes_again_with_the_same_id_and_is_given_up(migrated_url: str) -> None:
    """With a wait between that grows, and after the last try it is shown as given up."""
    async with working(migrated_url) as worker, listening() as listener:
        listener.answer = b"HTTP/1.1 500 Oh\r\nContent-Length: 0\r\n\r\n"
        put(worker)
        teller = posting(worker, listener.url)
        waits = []
        for _ in range(3):
            await teller.post()
            waits.append(worker.one("SELECT next_ms FROM outbox") - worker.database.wall_ms())
            await teller.post()  # Not due yet, so it is not sent.
            hasten(worker)
        assert len(listener.calls) == 3
        assert len({call.body for call in listener.calls}) == 1
        assert 900 < waits[0] <= 2000 < waits[1] + 300 <= 4300
        assert states(worker) == ["given_up"]
        assert worker.one("SELECT error FROM outbox") == "status 500"
        await teller.post()
        assert len(listener.calls) == 3


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
@pytest.mark.parametrize(
    "answer",
    [
        b"HTTP/1.1 302 Found\r\nLocation: /elsewhere\r\nContent-Length: 0\r\n\r\n",
        b"HTTP/1.1 403 No\r\nContent-Length: 0\r\n\r\n",
        b"this is no answer\r\n\r\n",
        b"",
    ],
    ids=["redirect", "refused", "rubbish", "hung up"],
)
async def test_no_other_answer_counts_as_taken(migrated_url: str, answer: bytes) -> None:
    """A redirect is not followed, for who knows where it leads."""
    async with working(migrated_url) as worker, listening() as listener:
        listener.answer = answer
        put(worker)
        await posting(worker, listener.url).post()
        assert [call.path for call in listener.calls] == ["/news"]
        assert (states(worker), worker.one("SELECT tries FROM outbox")) == (["waiting"], 1)


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_a_receiver_that_is_mute_or_away_blocks_nothing(migrated_url: str) -> None:
    """Its time runs out for all pieces at once, and meanwhile everything else is done."""
    async with working(migrated_url) as worker, listening() as listener:
        listener.mute = True
        for _ in range(5):
            put(worker)
        telling = asyncio.create_task(posting(worker, listener.url, timeout_s=0.5).post())
        await worker.create()
        await worker.bids(3)
        assert not telling.done()
        await asyncio.wait_for(telling, 5)
        assert len(listener.calls) == 5
        assert worker.column("SELECT DISTINCT error FROM outbox") in (
            ["ReadTimeout"],
            ["TimeoutError"],
        )
        listener.mute = False
    async with working(migrated_url, "two") as worker:
        hasten(worker)
        await posting(worker, listener.url).post()
        assert set(worker.column("SELECT error FROM outbox")) == {"ConnectError"}


async def test_of_two_clerks_one_tells(migrated_url: str) -> None:
    """What one has claimed the other leaves; if the first dies it is due again."""
    async with working(migrated_url) as worker, listening() as listener:
        put(worker)
        (news,) = worker.database.read(lambda c: outbox.due(c, worker.database.wall_ms()))
        until = worker.database.wall_ms() + 60_000
        assert worker.database.write(lambda c: outbox.claim(c, news, until))
        assert not worker.database.write(lambda c: outbox.claim(c, news, until))
        await posting(worker, listener.url).post()
        assert listener.calls == []
        hasten(worker)
        await posting(worker, listener.url).post()
        assert len(listener.calls) == 1


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
async def test_without_a_receiver_news_is_forgotten(migrated_url: str) -> None:
    """And what was told is forgotten after a while."""
    async with working(migrated_url) as worker, listening() as listener:
        put(worker)
        await posting(worker, "").post()
        assert states(worker) == []
        put(worker)
        await posting(worker, listener.url).post()
        later = worker.database.wall_ms() + 1
        assert worker.database.write(lambda c: outbox.prune(c, later)) == 1


async def test_orders_are_told_without_reason_or_name(migrated_url: str) -> None:
    """A freeze and a thaw of a person, of one line item and of all."""
    async with working(migrated_url) as worker, listening() as listener:
        await worker.create()
        for name in (NAME, None):
            await worker.operator.freeze(name, "a private word", "Ann Example")
            await worker.operator.freeze(name, "a private word", "Ann Example")
            await worker.operator.thaw(name, "a private word", "Ann Example")
        hasten(worker)
        await posting(worker, listener.url).post()
        said = sorted((json.loads(call.body) for call in listener.calls), key=str)
        assert sorted((one["kind"], one["line_item"]) for one in said if one["line_item"]) == [
            ("freeze", NAME), ("thaw", NAME),
        ]  # fmt: skip
        assert len(said) == 4
        assert not any(b"private" in call.body or b"Ann" in call.body for call in listener.calls)
