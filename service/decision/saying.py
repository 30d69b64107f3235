"""A bound in money as a sentence, for the methods whose theorem names an amount."""

from __future__ import annotations

from service import money
from service.decision.terms import Terms
from service.learner.tally import Tally


def bound_in_words(whose: str, nanos: int, tally: Tally, terms: Terms) -> str:
    """
    The bound with its numbers put in, or that it says nothing yet.

    Args:
        whose: Theorem and author, to begin the sentence.
        nanos: The bound on the loss so far.
    """
    bound, spent = (f"{money.nanos_text(n)} {terms.currency}" for n in (nanos, tally.paid))
    if nanos > tally.paid:
        return (
            f"{whose} says nothing yet: its bound over {tally.rounds:,} rounds is {bound}, "
            f"more than the {spent} spent so far."
        )
    return (
        f"{whose}: expected loss against the best fixed bid at most {bound} over "
        f"{tally.rounds:,} rounds."
    )
