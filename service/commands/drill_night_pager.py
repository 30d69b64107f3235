"""The pager of the night drill: a receiver of webhooks that checks every proof; apart as it serves.

It shows what a receiver has to do: check the proof over the time of sending and the body, and
keep one of each id.
"""

from __future__ import annotations

import hmac
import json
import threading
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from types import TracebackType
from typing import Any, Self

from service.commands.server_process import HOST
from service.posting import ID, SIGNATURE, TIMESTAMP, proof


class Pager:
    """Listens on a port of this machine while it is open."""

    def __init__(self, secret: str) -> None:
        self._secret = secret.encode()
        self._heard: dict[str, dict[str, Any]] = {}
        self.unsound = 0
        self._server = ThreadingHTTPServer((HOST, 0), self._handler())
        self._thread = threading.Thread(target=self._server.serve_forever, daemon=True)
        self.url = f"http://{HOST}:{self._server.server_port}/news"

    @property
    def news(self) -> list[dict[str, Any]]:
        """What was heard, each piece once, in order."""
        return list(self._heard.values())

    def __enter__(self) -> Self:
        self._thread.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._server.shutdown()
        self._server.server_close()
        self._thread.join()

    def take(self, identity: str, stamp: str, said: str, body: bytes) -> bool:
        """Keep news whose proof is sound."""
        # In constant time, or the answer's delay would tell how much of a proof was right.
        if not hmac.compare_digest(proof(self._secret, stamp, body), said):
            self.unsound += 1
            return False
        # Senders try again when an answer is lost; the same news must not page twice.
        self._heard.setdefault(identity, json.loads(body))
        return True

    def _handler(self) -> type[BaseHTTPRequestHandler]:
        pager = self

        class Handler(BaseHTTPRequestHandler):
            """One call."""

            def do_POST(self) -> None:
                """Read the body, check it, and answer without a body."""
                body = self.rfile.read(int(self.headers["Content-Length"]))
                names = (ID, TIMESTAMP, SIGNATURE)
                identity, stamp, said = (self.headers.get(name, "") for name in names)
                self.send_response(204 if pager.take(identity, stamp, said, body) else 403)
                self.end_headers()

            def log_message(self, format: str, *arguments: object) -> None:
                """The drill says what was heard."""

        return Handler
