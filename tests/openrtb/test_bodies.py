"""Packed bodies within limits, and JSON that is none."""

from __future__ import annotations

import gzip
import tracemalloc

import pytest

from service.openrtb.bodies import BadBody, TooLong, parsed, unpacked

MEBIBYTE = 2**20


def test_a_packed_body_comes_out() -> None:
    """Up to its limit to the byte."""
    body = b'{"id": "r1"}'
    assert unpacked(gzip.compress(body), len(body)) == body


def test_a_bomb_is_not_unfolded() -> None:
    """Sixty-four mebibytes in a few packed bytes are refused before they take memory."""
    bomb = gzip.compress(b"\0" * 64 * MEBIBYTE, 9)
    tracemalloc.start()
    with pytest.raises(TooLong):
        unpacked(bomb, MEBIBYTE)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 8 * MEBIBYTE


@pytest.mark.parametrize(
    "raw",
    [
        b"",
        b"{}",
        gzip.compress(b"{}")[:-1],
        gzip.compress(b"{}") + b"x",
        gzip.compress(b"{}") * 2,
        gzip.compress(b"{}")[:10],
        b"\x1f\x8b" + b"\0" * 20,
    ],
)
def test_what_is_not_one_whole_stream_is_refused(raw: bytes) -> None:
    """Nothing, plain text, cut off, followed by more, or garbage."""
    with pytest.raises(BadBody):
        unpacked(raw, MEBIBYTE)


@pytest.mark.parametrize(
    "raw",
    [
        b"",
        b"{",
        b"{'id': 1}",
        b'{"id": NaN}',
        b'{"id": Infinity}',
        b'{"id": "\xff"}',
        b'{"id": "\\ud800"}',
        b"[" * 100_000,
        b'{"a":' * 100_000,
        b'{"id": 1} // remark',
        b'\xef\xbb\xbf{"id": 1}',
    ],
)
def test_what_is_not_json_is_refused(raw: bytes) -> None:
    """Broken, odd numbers, other codings, nested without end, or with remarks."""
    with pytest.raises(BadBody):
        parsed(raw)
