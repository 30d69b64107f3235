"""A checksum behind the bytes of a state, so that a damaged one is refused and never misread."""

from __future__ import annotations

import struct
import zlib

_SUM = struct.Struct(">I")


def sealed(body: bytes) -> bytes:
    """The bytes with their checksum behind them."""
    return body + _SUM.pack(zlib.crc32(body))


def unsealed(state: bytes) -> tuple[bytes, bool]:
    """The bytes without their checksum, and whether it fits them."""
    body, tail = state[: -_SUM.size], state[-_SUM.size :]
    return body, _SUM.pack(zlib.crc32(body)) == tail
