"""What guess and values say together, by hand."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from service.decision import posterior
from service.decision.counts import Counts, nothing
from service.decision.terms import Terms
from service.learner.memory import Prior
from tests.decision.invented import CEILING, config, with_value

GUESSED = Terms.from_config(
    with_value(config("mean"), typical=CEILING // 5, expected={"per_impression": CEILING // 100})
)


def counts(known: float, amount: float) -> Counts:
    """So many known impressions that brought so much."""
    return replace(nothing(), known=np.asarray(known), amount=np.asarray(amount))


def test_a_guess_weighs_its_conversions_at_the_guessed_rate() -> None:
    """One conversion of a fifth of the ceiling in twenty impressions, and it counts as that."""
    assert GUESSED.prior_impressions == 20.0
    assert float(posterior.mean(nothing(), GUESSED)) == CEILING / 100
    assert float(posterior.mean(counts(20, 0), GUESSED)) == CEILING / 200
    assert float(posterior.mean(counts(80, CEILING), GUESSED)) == pytest.approx(CEILING * 1.2 / 100)


def test_without_weight_the_mean_is_plain_and_at_first_the_guess() -> None:
    """There is nothing to divide by before the first value."""
    plain = replace(GUESSED, prior_conversions=0.0)

    assert float(posterior.mean(nothing(), plain)) == CEILING / 100
    assert float(posterior.mean(counts(4, CEILING), plain)) == CEILING / 4


@pytest.mark.parametrize("conversions", [0, 1, 3])
def test_one_line_item_and_many_runs_have_the_same_mean(conversions: int) -> None:
    """To the last bit, also before anything is known."""
    guess = {"per_impression": CEILING // 7, "conversions": conversions}
    terms = Terms.from_config(with_value(config("mean"), expected=guess))
    rng = np.random.default_rng(8)
    known = np.where(rng.random(200) < 0.2, 0.0, 1e3 * rng.random(200))
    many = Counts(known, known, known, known * CEILING * rng.random(200), known)
    single = [Counts(*(one[run] for one in many.all)) for run in range(200)]

    means = [float(posterior.mean(counts, terms)) for counts in single]

    assert means == posterior.mean(many, terms).tolist()


def test_a_value_adds_its_share_to_a_beta() -> None:
    """x / scale to the first and the rest of one to the second, with the guess's mean before."""
    first, second = posterior.beta(counts(10, 2.5 * CEILING), GUESSED)

    assert (float(first), float(second)) == pytest.approx((0.2 + 2.5, 19.8 + 7.5))
    plain = posterior.beta(counts(10, 2.5 * CEILING), replace(GUESSED, prior_conversions=0.0))
    assert [float(one) for one in plain] == pytest.approx([3.5, 8.5])


@pytest.mark.parametrize("expected", [1, CEILING])
def test_both_numbers_of_a_beta_stay_above_nothing(expected: int) -> None:
    """Also where a guess sits at an edge, or values outweigh what is known of them."""
    edge = replace(GUESSED, expected=expected, typical=CEILING)
    for told in (nothing(), counts(0.5, CEILING)):
        assert min(float(one) for one in posterior.beta(told, edge)) > 0.0


def test_a_prior_of_kin_stands_in_place_of_the_guess() -> None:
    """Its weight in conversions is still that of the line item, and the ceiling cuts it."""
    guided = GUESSED.guided(Prior(CEILING // 50, CEILING // 2))

    assert guided.prior_conversions == GUESSED.prior_conversions
    assert float(posterior.mean(nothing(), guided)) == CEILING / 50
    beyond = GUESSED.guided(Prior(3 * CEILING, 4 * CEILING))
    assert (beyond.expected, beyond.typical) == (CEILING, CEILING)
    assert GUESSED.guided(None) is GUESSED


def test_the_words_say_what_a_guess_weighs() -> None:
    """Singular and plural, and nothing where it weighs nothing."""
    assert "weighs 1 conversion:" in posterior.prior_in_words(GUESSED)
    assert "weighs 3 conversions:" in posterior.prior_in_words(
        replace(GUESSED, prior_conversions=3.0)
    )
    assert posterior.prior_in_words(replace(GUESSED, prior_conversions=0.0)) == ""
