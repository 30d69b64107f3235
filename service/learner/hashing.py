"""Named features become a short vector by a keyed, documented hash, apart from who learns of it.

Weinberger, Dasgupta, Langford, Smola, Attenberg, "Feature hashing for large scale multitask
learning", ICML 2009: place i holds the sum of sign(j) x_j over tokens j hashed to i. Inner
products are right on average over keys, with variance 4 / d for two features of 1 each.

The hash: BLAKE2b of 8 bytes under the key, person "features", of the kind (one letter), the
UTF-8 name, a zero byte, and the UTF-8 value of a category. The first byte modulo 64 is the
place, the lowest bit of the second the sign. Nothing is listed anywhere, so a category never
seen before and a feature that is missing are ordinary: the one brings a token, the other none.
"""

from __future__ import annotations

import math
import struct
from collections.abc import Iterable, Mapping
from functools import cache, lru_cache
from hashlib import blake2b
from itertools import chain

import numpy as np

from service.learner.arrays import Numbers, double

PLACES = 64
SIZES = (16, 32, 64)
# Weights are whole parts, so that equal features give equal bytes in a ticket and in the stream.
PARTS = 256
WEIGHT_MAX = 2**15 - 1
NUMBER_MAX = 20.0  # Of the logarithm; a larger number says no more than this one.

Feature = str | float | bool
Placed = tuple[int, int]
Hashed = tuple[tuple[int, int], ...]

_ENTRY = struct.Struct(">Bh")


class BadFeatures(ValueError):
    """A number that is not finite, or bytes that are no hashed features."""


def hashed(features: Mapping[str, Feature], key: bytes) -> Hashed:
    """
    Place and weight of what is not nought, ascending by place; weights in parts of 2^-8.

    Args:
        features: Text and true or false are categories and weigh 1. A number x weighs
            sign(x) ln(1 + |x|), so that hours and thousands fit one vector; numbers that are
            really names belong into text.
        key: At most 64 bytes; whoever knows it can aim two categories at one place.

    Raises:
        BadFeatures: A number is not finite.
    """
    placed = [_placed(name, value, key) for name, value in features.items()]
    # The constant, which every impression has.
    return summed([_aimed(b"c", PARTS, key), *placed])


# The same few words come with nearly every bid; what is counted on is the hash, not the memory.
# By type as well, since True equals 1 and is another feature.
@lru_cache(maxsize=16_384, typed=True)
def _placed(name: str, value: Feature, key: bytes) -> Placed:
    """Where one feature goes, and with what signed weight."""
    # The zero byte keeps a name ending in x apart from a value that begins with it.
    head = name.encode() + b"\0"
    # Asked first, since True is a number as well.
    if isinstance(value, bool):
        return _aimed(b"b" + head + (b"1" if value else b"0"), PARTS, key)
    if isinstance(value, str):
        return _aimed(b"t" + head + value.encode(), PARTS, key)
    if not math.isfinite(value):
        raise BadFeatures("a number that is not finite")
    weight = math.copysign(min(math.log1p(abs(value)), NUMBER_MAX), value)
    return _aimed(b"n" + head, round(weight * PARTS), key)


def _aimed(token: bytes, parts: int, key: bytes) -> Placed:
    place, sign = _aim(token, key)
    return place, sign * parts


# Apart from the memory of features: numbers are many, their names few.
@lru_cache(maxsize=16_384)
def _aim(token: bytes, key: bytes) -> tuple[int, int]:
    digest = blake2b(token, digest_size=8, key=key, person=b"features").digest()
    return digest[0] % PLACES, 1 if digest[1] & 1 else -1


def summed(placed: Iterable[Placed]) -> Hashed:
    """Add the signed weights at each place; whole numbers, so their order is all one."""
    sums: dict[int, int] = {}
    for place, parts in placed:
        sums[place] = sums.get(place, 0) + parts
    # Nearly never is there anything to cut.
    if not -WEIGHT_MAX <= min(sums.values()) <= max(sums.values()) <= WEIGHT_MAX:
        sums = {place: max(-WEIGHT_MAX, min(sums[place], WEIGHT_MAX)) for place in sums}
    return tuple([pair for pair in sorted(sums.items()) if pair[1]])


def folded(features: Hashed, size: int) -> dict[int, int]:
    """Parts of 2^-8 at each place of 16, 32 or 64; a smaller size takes places modulo itself."""
    sums: dict[int, int] = {}
    for wide, parts in features:
        place = wide % size
        sums[place] = sums.get(place, 0) + parts
    return sums


def dense(features: Hashed, size: int) -> Numbers:
    """As a vector of 16, 32 or 64 numbers."""
    vector = np.zeros(size)
    for place, parts in folded(features, size).items():
        vector[place] = parts / PARTS
    return double(vector)


def to_bytes(features: Hashed) -> bytes:
    """Three bytes for each place that is not nought."""
    return _entries(len(features)).pack(*chain.from_iterable(features))


@cache
def _entries(count: int) -> struct.Struct:
    return struct.Struct(">" + count * "Bh")


def from_bytes(packed: bytes) -> Hashed:
    """
    Read what `to_bytes` wrote.

    Raises:
        BadFeatures: Not whole, or places out of order or out of range.
    """
    if len(packed) % _ENTRY.size:
        raise BadFeatures("not whole")
    features = tuple(_ENTRY.iter_unpack(packed))
    places = [place for place, _ in features]
    if places != sorted(set(places)) or any(place >= PLACES for place in places):
        raise BadFeatures("places out of order or out of range")
    if any(weight == 0 for _, weight in features):
        raise BadFeatures("a weight of nought")
    return features
