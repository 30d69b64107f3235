"""The bytes of what is learnt of linear weights, and which code and machine made them."""

from __future__ import annotations

import struct
import zlib
from functools import cache
from hashlib import blake2b

import numpy as np

from service.learner.arrays import Numbers, double
from service.learner.linear import DIMENSIONS_MAX, Ridge

FORM = 1

_HEAD = struct.Struct(">3sBH8sddQ")
_SUM = struct.Struct(">I")
_NAME = b"lin"


class UnreadableRidge(ValueError):
    """The bytes are not what we write, are of other settings, or hold no numbers."""


@cache
def code_version() -> bytes:
    """
    Eight bytes that name this form, the version of numpy, its linear algebra and the processor.

    The same lessons give the same bytes where this is equal, and numbers within 1e-9 elsewhere.
    """
    config = np.show_config(mode="dicts")
    parts = (config["Build Dependencies"], config["SIMD Extensions"], config["Machine Information"])
    return blake2b(repr((FORM, np.__version__, parts)).encode(), digest_size=8).digest()


def to_bytes(ridge: Ridge) -> bytes:
    """At most 40 KiB: half of each matrix, the moment, and a head with the code version."""
    if ridge.dimensions > DIMENSIONS_MAX:
        raise UnreadableRidge(f"more than {DIMENSIONS_MAX} dimensions")
    head = _HEAD.pack(
        *(_NAME, FORM, ridge.dimensions, code_version()),
        *(ridge.penalty, ridge.log_det, ridge.lessons),
    )
    half = np.triu_indices(ridge.dimensions)
    numbers = np.concatenate([ridge.matrix[half], ridge.inverse[half], ridge.moment])
    # In one order of bytes, whatever that of the machine.
    body = head + numbers.astype(">f8").tobytes()
    return body + _SUM.pack(zlib.crc32(body))


def from_bytes(state: bytes, dimensions: int, penalty: float) -> Ridge:
    """
    Read what `to_bytes` wrote under the same settings, by whatever code version.

    Raises:
        UnreadableRidge: See there.
    """
    body, tail = state[: -_SUM.size], state[-_SUM.size :]
    half = dimensions * (dimensions + 1) // 2
    if len(body) != _HEAD.size + 8 * (2 * half + dimensions) or _SUM.pack(zlib.crc32(body)) != tail:
        raise UnreadableRidge("not whole, or of another number of dimensions")
    name, form, size, _, ridge_penalty, log_det, lessons = _HEAD.unpack_from(body)
    if (name, form, size, ridge_penalty) != (_NAME, FORM, dimensions, penalty):
        raise UnreadableRidge("another form or other settings")
    numbers = np.frombuffer(body, dtype=">f8", offset=_HEAD.size).astype(np.float64)
    halves = (numbers[:half], numbers[half:-dimensions])
    matrix, inverse = (_full(part, dimensions) for part in halves)
    if not np.isfinite(numbers).all() or not np.isfinite(log_det) or (np.diag(inverse) <= 0).any():
        raise UnreadableRidge("not numbers of a ridge")
    return Ridge(penalty, matrix, inverse, double(numbers[-dimensions:]), log_det, lessons)


def made_by(state: bytes) -> bytes:
    """
    The code version that wrote the state.

    Raises:
        UnreadableRidge: Too short to say.
    """
    if len(state) < _HEAD.size:
        raise UnreadableRidge("too short")
    return bytes(_HEAD.unpack_from(state)[3])


def _full(half: Numbers, dimensions: int) -> Numbers:
    whole = np.zeros((dimensions, dimensions))
    upper = np.triu_indices(dimensions)
    whole[upper] = half
    whole.T[upper] = half
    return double(whole)
