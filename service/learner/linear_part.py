"""What impressions bought have taught of linear weights: whole sums, apart from the ridge of them.

The sums of x x' and of value times x are integers, since hashed weights are parts of 2^-8 and
values are nanos. So the bytes are equal in any order of lessons, in pieces or at once, and on
every processor and library; what is inverted is inverted afresh from them for every snapshot.
"""

from __future__ import annotations

import struct
from base64 import b64decode
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

from service.learner import hashing, linear
from service.learner.arrays import double
from service.learner.hashing import PARTS, Hashed
from service.learner.impressions import begun_afresh, said
from service.learner.lesson import Lesson
from service.learner.memory import UnreadableMemory
from service.learner.rules import Rules
from service.learner.sealed import sealed, unsealed

FORM = 1

_HEAD = struct.Struct(">3sBBQ")
_NAME = b"lin"
_WIDE = 16  # Bytes of a sum of value times weight.


@cache
def _upper(dimensions: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """The places of a matrix from its diagonal on; there are only a few sizes."""
    rows, columns = np.triu_indices(dimensions)
    return rows, columns


class UnreadableSums(UnreadableMemory):
    """Bytes that we did not write for this number of dimensions."""


@dataclass(frozen=True, slots=True)
class Sums:
    """
    Sums over the impressions that had features.

    Args:
        square: Sum of x x', in parts of 2^-16.
        moment: Sum of value times x, in nanos of parts of 2^-8.
        lessons: Impressions counted.
    """

    square: NDArray[np.int64]
    moment: tuple[int, ...]
    lessons: int = 0

    @staticmethod
    def fresh(dimensions: int) -> Sums:
        """Before the first lesson."""
        return Sums(np.zeros((dimensions, dimensions), dtype=np.int64), (0,) * dimensions)

    @property
    def dimensions(self) -> int:
        """Length of the vectors."""
        return len(self.moment)

    def to_bytes(self) -> bytes:
        """At most 18 KiB, half of the matrix; nothing before the first lesson."""
        if not self.lessons and not any(self.moment):
            return b""
        half = self.square[_upper(self.dimensions)].astype(">i8").tobytes()
        moment = b"".join(one.to_bytes(_WIDE, signed=True) for one in self.moment)
        body = _HEAD.pack(_NAME, FORM, self.dimensions, self.lessons) + half + moment
        return sealed(body)

    @staticmethod
    def from_bytes(state: bytes, dimensions: int) -> Sums:
        """
        Read what `to_bytes` wrote for so many dimensions.

        Raises:
            UnreadableSums: See there.
        """
        if not state:
            return Sums.fresh(dimensions)
        body, sound = unsealed(state)
        upper = _upper(dimensions)
        end = _HEAD.size + 8 * len(upper[0])
        whole = len(body) == end + _WIDE * dimensions
        if not whole or not sound:
            raise UnreadableSums("not whole, or of another number of dimensions")
        name, form, size, lessons = _HEAD.unpack_from(body)
        if (name, form, size) != (_NAME, FORM, dimensions):
            raise UnreadableSums("another form")
        square = np.zeros((dimensions, dimensions), dtype=np.int64)
        square[upper] = square.T[upper] = np.frombuffer(body[_HEAD.size : end], dtype=">i8")
        places = range(end, len(body), _WIDE)
        moment = tuple(int.from_bytes(body[at : at + _WIDE], signed=True) for at in places)
        return Sums(square, moment, lessons)

    def ridge(self, penalty: float, scale: float, share: float = 1.0) -> linear.Ridge:
        """
        The ridge estimate that these sums give.

        Args:
            penalty: The ridge, lambda.
            scale: Unit of the values, in nanos.
            share: Of their value, how much impressions have had time to bring; each counts so far.

        Raises:
            UnreadableSums: Sums of squares that no impressions can have.
        """
        matrix = self.square * (share / PARTS**2) + penalty * np.eye(self.dimensions)
        moment = double([float(one) / (PARTS * scale) for one in self.moment])
        try:
            inverse, log_det = linear.factored(matrix, penalty)
        except np.linalg.LinAlgError as error:
            raise UnreadableSums("no sums of squares") from error
        return linear.Ridge(penalty, matrix, inverse, moment, log_det, self.lessons)


def learn(state: bytes, lessons: Sequence[Lesson], rules: Rules) -> bytes:
    """
    Add what impressions with features were worth; the part `linear` of a memory.

    An impression that was priced without features, by another method, teaches nothing here.
    Where values accrue it counts from the moment it is bought, with what it has brought so far;
    how much of that can have come by now is known to who reads the sums.
    """
    reset, rest = begun_afresh(lessons)
    sums = Sums.from_bytes(b"" if reset else state, rules.dimensions)
    rows, moment = list[Hashed](), list(sums.moment)
    for _, one in said(rest, rules):
        features = one.body.get("features")
        if features is None:
            continue
        hashed = hashing.from_bytes(b64decode(features, validate=True))
        if one.counts:
            rows.append(hashed)
        for place, weight in hashed if one.after != one.before else ():
            moment[place % sums.dimensions] += weight * (one.after - one.before)
    square = sums.square + _square(rows, sums.dimensions) if rows else sums.square
    return Sums(square, tuple(moment), sums.lessons + len(rows)).to_bytes()


def _square(rows: list[Hashed], dimensions: int) -> NDArray[np.int64]:
    vectors = np.zeros((len(rows), dimensions), dtype=np.int64)
    for at, hashed in enumerate(rows):
        for place, weight in hashed:
            vectors[at, place % dimensions] += weight
    return np.asarray(vectors.T @ vectors)
