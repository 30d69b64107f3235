"""Sign-in without a table: a signed cookie names the key, and tokens bind forms to the cookie.

The seal is made of a fact of the database, so that every worker reads what another has written.
"""

from __future__ import annotations

import hashlib
import hmac
import re
import secrets
from dataclasses import dataclass

SESSION_S = 12 * 3600  # A shift and a bit: whoever comes later signs in again.
_SESSION = re.compile(r"([0-9a-f]{1,32})\.([0-9]{1,12})\.([0-9a-f]{32})")


@dataclass(frozen=True, slots=True)
class Session:
    """Who is signed in, until which second since 1970, and a number drawn at signing in."""

    key_id: str
    ends_s: int
    nonce: str

    def __str__(self) -> str:
        return f"{self.key_id}.{self.ends_s}.{self.nonce}"


class Seal:
    """
    Signs sessions and tokens.

    Args:
        secret: A secret of the database; the key of the seal is derived and used for nothing else.
    """

    def __init__(self, secret: bytes) -> None:
        self._key = hmac.digest(secret, b"watch page, sessions", hashlib.sha256)

    def write(self, session: Session) -> str:
        """The text of a cookie."""
        return f"{session}.{self._sign('session', str(session))}"

    def read(self, cookie: str, now_s: int) -> Session | None:
        """The session in a cookie of ours that has not ended, else None."""
        said, _, signature = cookie.rpartition(".")
        matched = _SESSION.fullmatch(said)
        if matched is None or not self._fits("session", said, signature):
            return None
        session = Session(matched[1], int(matched[2]), matched[3])
        return session if now_s < session.ends_s else None

    def token(self, nonce: str) -> str:
        """What a form must bring with it to be taken as sent from a page of this session."""
        return self._sign("form", nonce)

    def token_fits(self, nonce: str, token: str) -> bool:
        """Whether a form came from a page of this session."""
        return self._fits("form", nonce, token)

    def _sign(self, purpose: str, text: str) -> str:
        return hmac.digest(self._key, f"{purpose}:{text}".encode(), hashlib.sha256).hex()

    def _fits(self, purpose: str, text: str, signature: str) -> bool:
        expected = self._sign(purpose, text)
        return hmac.compare_digest(expected.encode(), signature.encode("utf-8", "replace"))


def begin(key_id: str, now_s: int, until_ms: int | None = None) -> Session:
    """
    A new session of a key.

    Args:
        until_ms: When the text that was handed in ends; no session outlives it.
    """
    ends_s = now_s + SESSION_S
    ends_s = ends_s if until_ms is None else min(ends_s, until_ms // 1000)
    return Session(key_id, ends_s, secrets.token_hex(16))


class Attempts:
    """
    Counts failed sign-ins by address in this worker's memory, so that guessing is slow.

    Args:
        most: Failures that an address may have within the window.
        window_s: Seconds.
    """

    def __init__(self, most: int = 5, window_s: int = 60) -> None:
        self._most, self._window_s = most, window_s
        self._failed: dict[str, list[float]] = {}

    def wait_s(self, address: str, now_s: float) -> int:
        """Seconds until this address may try again; 0 for at once."""
        times = [at for at in self._failed.get(address, []) if now_s - at < self._window_s]
        if len(times) < self._most:
            return 0
        return max(1, round(times[-self._most] + self._window_s - now_s))

    def failed(self, address: str, now_s: float) -> None:
        """Remember a failure; addresses without a recent one are forgotten."""
        recent = {
            name: times
            for name, times in self._failed.items()
            if now_s - times[-1] < self._window_s
        }
        recent[address] = [*recent.get(address, []), now_s][-self._most :]
        self._failed = recent
