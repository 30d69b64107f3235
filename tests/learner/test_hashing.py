"""Features are hashed as documented, the same for ever, and right on average over keys.

Weinberger, Dasgupta, Langford, Smola, Attenberg, "Feature hashing for large scale multitask
learning", ICML 2009. The mean and the variance of two features were found by enumerating all
hash and sign functions, here as well.
"""

from __future__ import annotations

import math
from collections import Counter
from hashlib import blake2b
from itertools import product

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.learner import hashing
from service.learner.hashing import PARTS, BadFeatures, Feature

KEY = b"a key of tests"
# (1/m) sum over i != j of x_i^2 x'_j^2 + x_i x'_i x_j x'_j: 7 and 2 for what is below.
VARIANCE = 9 / 64
FIXED = ((0, 256), (9, 676), (27, -256), (61, 256))
NUMBERS = some.floats(allow_nan=False, allow_infinity=False)
FEATURES = some.dictionaries(
    some.text(max_size=8), some.one_of(some.text(max_size=8), NUMBERS, some.booleans()), max_size=32
)


@pytest.mark.parametrize(("size", "variance"), [(2, 2.0), (4, 1.0)])
def test_all_hash_and_sign_functions(size: int, variance: float) -> None:
    """x = x' = (1, 1): the mean of the inner product is 2, its variance 4 / m."""
    found = []
    for places in product(range(size), repeat=2):
        for signs in product((PARTS, -PARTS), repeat=2):
            vector = hashing.dense(hashing.summed(zip(places, signs, strict=True)), 16)
            found.append(float(vector @ vector))
    assert float(np.mean(found)) == 2.0
    assert float(np.var(found)) == variance


def test_over_keys_the_hash_is_as_good_as_chance() -> None:
    """Two impressions that share the constant and a feature: mean 2 over 3,000 keys."""
    ones, others = {"a": "x", "b": "y"}, {"a": "x", "b": "z"}
    found = []
    for number in range(3_000):
        key = number.to_bytes(4)
        left, right = (hashing.dense(hashing.hashed(f, key), 64) for f in (ones, others))
        found.append(float(left @ right))
    assert np.mean(found) == pytest.approx(2.0, abs=0.03)
    assert np.var(found) == pytest.approx(VARIANCE, abs=0.02)


def test_the_hash_is_the_documented_one() -> None:
    """Done again by hand from the text: place, sign and token of each kind."""
    for features, token, weight in (
        ({"device": "phone"}, b"tdevice\0phone", 1.0),
        ({"vip": True}, b"bvip\x001", 1.0),
        ({"vip": False}, b"bvip\x000", 1.0),
        ({"hour": 13}, b"nhour\0", np.log(14)),
        ({"hour": -13.0}, b"nhour\0", -np.log(14)),
    ):
        expected = np.zeros(64)
        for one, weighs in ((b"c", 1.0), (token, weight)):
            digest = blake2b(one, digest_size=8, key=KEY, person=b"features").digest()
            expected[digest[0] % 64] += (1 if digest[1] & 1 else -1) * round(weighs * PARTS) / PARTS
        assert hashing.dense(hashing.hashed(features, KEY), 64) == pytest.approx(expected, abs=0)


@given(FEATURES)
def test_hashing_is_the_sum_over_tokens_in_any_order(features: dict[str, Feature]) -> None:
    """Token by token from the text, without a memory, in the order of names."""
    tokens = [(b"c", 1.0)]
    for name, value in sorted(features.items()):
        if isinstance(value, bool):
            tokens.append((b"b" + name.encode() + b"\0" + str(int(value)).encode(), 1.0))
        elif isinstance(value, str):
            tokens.append((b"t" + name.encode() + b"\0" + value.encode(), 1.0))
        else:
            weight = math.copysign(min(math.log1p(abs(value)), hashing.NUMBER_MAX), value)
            tokens.append((b"n" + name.encode() + b"\0", weight))
    sums = Counter[int]()
    for token, weight in tokens:
        digest = blake2b(token, digest_size=8, key=KEY, person=b"features").digest()
        sums[digest[0] % 64] += (1 if digest[1] & 1 else -1) * round(weight * PARTS)
    most = hashing.WEIGHT_MAX
    expected = [(place, min(max(sums[place], -most), most)) for place in sorted(sums)]
    assert hashing.hashed(features, KEY) == tuple(pair for pair in expected if pair[1])


def test_the_hash_never_changes() -> None:
    """What is in the stream was hashed by an earlier release; these numbers stay."""
    features: dict[str, Feature] = {"device": "phone", "hour": 13, "vip": True}
    assert hashing.hashed(features, KEY) == FIXED
    assert hashing.hashed(features, b"another key") != FIXED


def test_order_does_not_matter_and_types_do() -> None:
    """1, "1" and true are three things."""
    ones = [hashing.hashed({"a": one}, KEY) for one in ("1", 1.0, True)]
    assert len(set(ones)) == 3
    pair: list[dict[str, Feature]] = [{"a": "x", "b": 2.0}, {"b": 2.0, "a": "x"}]
    assert hashing.hashed(pair[0], KEY) == hashing.hashed(pair[1], KEY)
    assert hashing.hashed({"a": 1}, KEY) == hashing.hashed({"a": 1.0}, KEY)


def test_missing_features_and_unknown_categories_are_ordinary() -> None:
    """Without features the constant is left; a new category changes at most two places."""
    bare = hashing.dense(hashing.hashed({}, KEY), 64)
    assert np.abs(bare).sum() == 1.0
    known, unknown = (hashing.dense(hashing.hashed({"a": c}, KEY), 64) for c in ("x", "new"))
    assert 1 <= np.count_nonzero(known - unknown) <= 2


@given(FEATURES)
def test_hashed_features_survive_their_bytes(features: dict[str, Feature]) -> None:
    """And with 32 features they take at most 99 bytes."""
    one = hashing.hashed(features, KEY)
    packed = hashing.to_bytes(one)
    assert hashing.from_bytes(packed) == one
    assert len(packed) <= 99


@given(FEATURES)
def test_a_smaller_size_folds_the_larger(features: dict[str, Feature]) -> None:
    """Places modulo 32 and 16 of the same 64, so what was kept at 64 serves all."""
    one = hashing.hashed(features, KEY)
    wide = hashing.dense(one, 64)
    assert hashing.dense(one, 32) == pytest.approx(wide[:32] + wide[32:])
    assert hashing.dense(one, 16) == pytest.approx(wide.reshape(4, 16).sum(axis=0))


@pytest.mark.parametrize("number", [float("nan"), float("inf"), float("-inf")])
def test_no_number_is_refused(number: float) -> None:
    """Not finite is not a number; the largest finite one is."""
    with pytest.raises(BadFeatures):
        hashing.hashed({"a": number}, KEY)
    assert np.abs(hashing.dense(hashing.hashed({"a": 1.7e308}, KEY), 64)).max() >= 19.0


@pytest.mark.parametrize(
    "packed", [b"\1", b"\1\0\1\1\0\1", b"\2\0\1\1\0\1", b"\x40\0\1", b"\1\0\0"]
)
def test_bytes_that_are_none_are_refused(packed: bytes) -> None:
    """Not whole, twice the same place, out of order, out of range, a weight of nought."""
    with pytest.raises(BadFeatures):
        hashing.from_bytes(packed)
