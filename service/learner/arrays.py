"""Turns what callers pass into arrays of doubles, apart so that every formula does it alike."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Numbers = NDArray[np.float64]


def doubles(*given: ArrayLike) -> tuple[Numbers, ...]:
    """Each argument as an array of doubles, in its own shape."""
    return tuple(np.asarray(one, dtype=np.float64) for one in given)


def together(*given: ArrayLike) -> tuple[Numbers, ...]:
    """Each argument as an array of doubles, all in the shape they have together."""
    return tuple(np.broadcast_arrays(*doubles(*given)))


def double(given: object) -> Numbers:
    """One result as an array of doubles, whatever type the formula gave it."""
    return np.asarray(given, dtype=np.float64)
