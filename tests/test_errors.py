"""Every error of our own belongs to one tree, and a refusal carries a code and its data."""

from __future__ import annotations

import inspect

import pytest

from service import errors

REFUSALS = [
    errors.Malformed,
    errors.Unauthenticated,
    errors.Forbidden,
    errors.NotFound,
    errors.Conflict,
    errors.Stale,
    errors.NotOffered,
    errors.NeedsConfirmation,
]
FAILURES = [errors.StoreAway, errors.BrokenPromise, errors.Unsafe]


@pytest.mark.parametrize("kind", REFUSALS)
def test_a_refusal_keeps_its_code_its_sentence_and_its_data(kind: type[errors.Refusal]) -> None:
    """What the answer needs travels with the error, without a word about HTTP."""
    refusal = kind("some_code", "A sentence.", {"spent": "1.00"})
    assert (refusal.code, refusal.detail, refusal.data) == (
        "some_code",
        "A sentence.",
        {"spent": "1.00"},
    )
    assert str(refusal) == "A sentence."


def test_a_refusal_does_not_share_its_data_with_the_caller() -> None:
    """Later changes to the caller's mapping leave the refusal as it was."""
    data: dict[str, object] = {"spent": "1.00"}
    refusal = errors.Conflict("some_code", "A sentence.", data)
    data["spent"] = "2.00"
    assert refusal.data == {"spent": "1.00"}


@pytest.mark.parametrize("kind", FAILURES)
def test_a_failure_is_no_refusal(kind: type[errors.BidkeelError]) -> None:
    """Nobody who handles an expected no can swallow a broken promise."""
    assert issubclass(kind, errors.BidkeelError)
    assert not issubclass(kind, errors.Refusal)


def test_the_tree_at_the_top_of_the_file_names_every_class() -> None:
    """The map that readers see first is complete."""
    classes = [
        name
        for name, thing in vars(errors).items()
        if inspect.isclass(thing) and thing.__module__ == errors.__name__
    ]
    drawing = errors.__doc__ or ""
    assert [name for name in classes if name not in drawing] == []


def test_an_unknown_line_item_has_one_refusal() -> None:
    """Every story answers an unknown line item with the same code."""
    refusal = errors.no_such_line_item()
    assert isinstance(refusal, errors.NotFound)
    assert refusal.code == "no_such_line_item"
