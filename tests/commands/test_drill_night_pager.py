"""The pager keeps news whose proof is sound, each piece once, and counts what is not."""

from __future__ import annotations

import hashlib
import hmac
import json

import pytest

from service.commands.drill_night_pager import Pager
from service.posting import proof

SECRET, STAMP = "s3cret", "1700000000"
BODY = json.dumps({"kind": "alarm"}).encode()


def test_a_proof_is_an_hmac_over_time_and_body() -> None:
    """Held against the standard library: HMAC-SHA-256 (Krawczyk, Bellare, Canetti, RFC 2104)."""
    digest = hmac.new(SECRET.encode(), STAMP.encode() + b"\n" + BODY, hashlib.sha256).hexdigest()
    assert digest in proof(SECRET.encode(), STAMP, BODY)


def told(pager: Pager, identity: str = "1", body: bytes = BODY, secret: str = SECRET) -> bool:
    """News with a proof under this secret."""
    return pager.take(identity, STAMP, proof(secret.encode(), STAMP, body), body)


def closed() -> Pager:
    """A pager that was never opened, its socket given back."""
    pager = Pager(SECRET)
    pager._server.server_close()
    return pager


def test_sound_news_is_kept_once_in_order() -> None:
    """The sender may say it again, and the first word stays."""
    pager = closed()
    assert told(pager, "2") is told(pager, "1") is True
    assert told(pager, "2", json.dumps({"kind": "other"}).encode())
    assert pager.news == [{"kind": "alarm"}, {"kind": "alarm"}]
    assert pager.unsound == 0


@pytest.mark.parametrize("change", ["secret", "stamp", "body", "proof"])
def test_whatever_is_changed_on_the_way_is_found_out(change: str) -> None:
    """Neither kept nor read as JSON, but counted."""
    pager = closed()
    said = proof(SECRET.encode(), STAMP, BODY)
    if change == "secret":
        assert not told(pager, secret="other")
    else:
        stamp = STAMP + "1" if change == "stamp" else STAMP
        body = b"no JSON" if change == "body" else BODY
        assert not pager.take("1", stamp, "" if change == "proof" else said, body)
    assert (pager.news, pager.unsound) == ([], 1)
