"""Webhooks: news leaves the outbox here, signed, again and again until it is taken or too old.

Apart from the clerk, since it alone talks to somebody else's server. A slow receiver delays no
other duty, and what is tried twice carries the same id.
"""

from __future__ import annotations

import asyncio
import hashlib
import hmac
import json
import logging
import secrets
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

import httpx

from service.money import cpm_number, nanos_text
from service.store import outbox
from service.store.database import Database
from service.store.outbox import News
from service.threads import Threads

logger = logging.getLogger(__name__)

TIMESTAMP = "Bidkeel-Sent-At"
SIGNATURE = "Bidkeel-Proof"
ID = "Bidkeel-News-Id"
FIRST_AGAIN_S = 2.0
AGAIN_S_MAX = 3600.0
MS = 1000


@dataclass(frozen=True, slots=True)
class Receiver:
    """
    Who is told, and how often it is tried.

    Args:
        url: http or https; empty when nobody is told.
        secret: What the proof is made with.
        timeout_s: Seconds for one try, from the first byte to the last.
        tries_max: After so many the news is given up and shown as such.
    """

    url: str = ""
    secret: bytes = b""
    timeout_s: float = 5.0
    tries_max: int = 12


class Posting:
    """Tells one receiver what waits in the outbox of one database."""

    def __init__(self, database: Database, threads: Threads, receiver: Receiver) -> None:
        self._database, self._threads, self._receiver = database, threads, receiver

    async def post(self) -> None:
        """Tell what is due, all of it at once; where nobody is to be told, forget it."""
        if not self._receiver.url:
            await self._threads.run(self._database.write, outbox.drop)
            return
        now = self._database.wall_ms()
        due = await self._threads.run(self._database.read, lambda c: outbox.due(c, now))
        if not due:
            return
        # Redirects are not followed, and no proxy or password of the environment is taken up.
        async with httpx.AsyncClient(
            timeout=self._receiver.timeout_s, follow_redirects=False, trust_env=False
        ) as client:
            await asyncio.gather(*(self._tell(client, news) for news in due))

    async def _tell(self, client: httpx.AsyncClient, news: News) -> None:
        # Longer than one try can take, so that nothing is due again while it is on its way.
        until = self._database.wall_ms() + int(2 * self._receiver.timeout_s * MS) + MS
        write = self._database.write
        if not await self._threads.run(write, lambda c: outbox.claim(c, news, until)):
            return
        error = await self._send(client, news)
        if error is None:
            await self._threads.run(write, lambda c: outbox.sent(c, news.number))
            return
        tries = news.tries + 1
        again = None if tries >= self._receiver.tries_max else self._again_ms(tries)
        if again is None:
            logger.error("news %s is given up after %d tries: %s", news.id, tries, error)
        await self._threads.run(write, lambda c: outbox.failed(c, news.number, error, again))

    async def _send(self, client: httpx.AsyncClient, news: News) -> str | None:
        """Send once; returns what went wrong, without a word that the receiver chose."""
        body = written(news)
        stamp = str(self._database.wall_ms() // MS)
        headers = {
            "Content-Type": "application/json",
            ID: news.id,
            TIMESTAMP: stamp,
            SIGNATURE: proof(self._receiver.secret, stamp, body),
        }
        try:
            # Over the whole try: the client's own limit is for each read, and a slow drip never
            # ends.
            async with asyncio.timeout(self._receiver.timeout_s):
                url = self._receiver.url
                # Streamed and never read: an endless answer costs nothing.
                async with client.stream("POST", url, content=body, headers=headers) as reply:
                    status = reply.status_code
        except (httpx.HTTPError, httpx.InvalidURL, TimeoutError, OSError) as error:
            return type(error).__name__
        return None if 200 <= status < 300 else f"status {status}"

    def _again_ms(self, tries: int) -> int:
        wait_s = min(AGAIN_S_MAX, FIRST_AGAIN_S * 2.0 ** min(tries - 1, 20))
        # Between half and the whole, or all that failed together would come together.
        share = (1 + secrets.randbelow(1000) / 1000) / 2
        return self._database.wall_ms() + int(wait_s * share * MS)


def proof(secret: bytes, stamp: str, body: bytes) -> str:
    """HMAC-SHA256 in hex over the time of sending, a line break and the body."""
    return hmac.new(secret, stamp.encode() + b"\n" + body, hashlib.sha256).hexdigest()


def written(news: News) -> bytes:
    """The body of one piece of news; the same bytes at every try."""
    content = {
        "id": news.id,
        "kind": news.kind,
        "line_item": None if news.line_item == "*" else news.line_item,
        "at": _time(news.at_ms),
        **_plain(news.body),
    }
    return json.dumps(content, sort_keys=True, separators=(",", ":")).encode()


def _plain(members: dict[str, Any]) -> dict[str, Any]:
    """Amounts as decimal text, prices as CPM numbers, moments as times."""
    said = dict[str, Any]()
    for name, value in members.items():
        if isinstance(value, dict):
            said[name] = _plain(value)
        elif name.endswith("_cpm_nanos"):
            said[name.removesuffix("_nanos")] = cpm_number(value)
        elif name.endswith("_nanos"):
            said[name.removesuffix("_nanos")] = nanos_text(value)
        elif name.endswith("_ms"):
            said[name.removesuffix("_ms") + "_at" if name != "since_ms" else "since"] = _time(value)
        else:
            said[name] = value
    return said


def _time(at_ms: int) -> str:
    moment = datetime.fromtimestamp(at_ms / MS, UTC)
    return moment.isoformat(timespec="milliseconds").replace("+00:00", "Z")
