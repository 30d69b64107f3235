"""Bodies come back as they went in, whatever numbers and letters stand in them."""

from __future__ import annotations

import json
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.store.bodies import parsed, written

whole = some.integers(-(2**90), 2**90)
members = some.dictionaries(
    some.text(some.characters(codec="utf-8"), max_size=8),
    some.recursive(
        some.none() | some.booleans() | whole | some.text(some.characters(codec="utf-8")),
        lambda inner: some.lists(inner, max_size=3),
        max_leaves=5,
    ),
)


@given(members)
def test_a_body_comes_back_as_it_was(body: dict[str, Any]) -> None:
    """Whole numbers beyond 64 bits too, which the fast writer does not take."""
    assert parsed(written(body)) == body
    assert json.loads(written(body)) == body


@given(members)
def test_what_earlier_releases_wrote_is_read_the_same(body: dict[str, Any]) -> None:
    """They escaped every letter beyond ASCII, lone surrogates among them."""
    assert parsed(json.dumps(body)) == body
    assert parsed('{"why": "\\ud800"}') == {"why": "\ud800"}


@pytest.mark.parametrize("damaged", ["", "{", '{"a": 1', "nonsense"])
def test_a_damaged_body_is_a_value_error(damaged: str) -> None:
    """So that whoever reads it can tell it from an empty one."""
    with pytest.raises(ValueError):  # noqa: PT011 - Both parsers have words of their own.
        parsed(damaged)
