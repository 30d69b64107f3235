"""The brake for silent values, as a table."""

from __future__ import annotations

import dataclasses

import pytest

from service.decision.brakes import no_value
from service.learner.tally import Tally
from tests.decision.invented import terms


@pytest.mark.parametrize(
    ("wins", "known", "brakes"),
    [
        (0, 0, False),
        (50, 0, False),
        (51, 0, True),
        (75, 25, False),
        (76, 25, True),
        (300, 100, False),
        (301, 100, True),
        (0, 5, False),
    ],
)
def test_more_than_fifty_and_twice_the_known_is_too_many(
    wins: int, known: int, brakes: bool
) -> None:
    """max(50, 2 x known) wins may await their first word, and values after a reset are no debt."""
    assert no_value(Tally(wins=wins, known=known), terms("kl-ucbid")) is brakes


def test_accruing_values_have_windows_instead() -> None:
    """Under `accrues` a win waits for its window, so waiting wins mean nothing."""
    accruing = dataclasses.replace(terms("kl-ucbid"), arrival="accrues")

    assert not no_value(Tally(wins=10**6), accruing)
