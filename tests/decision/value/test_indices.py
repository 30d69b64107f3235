"""Each method's price in money against its published formula worked out apart from the code."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from scipy import stats

from service.decision.methods import METHODS
from service.decision.opportunity import Opportunity
from service.decision.price import Proposal, ready
from service.decision.terms import Terms
from service.learner.memory import Memory
from service.learner.tally import Tally
from tests.decision.invented import CAP, CEILING, config, terms, with_value


def price(tally: Tally, of: Terms) -> int:
    """The price in nanos on this snapshot."""
    answer = ready(Memory(base=tally), of).answer
    assert isinstance(answer, Proposal)
    return answer.price


def on_the_whole_scale(method: str, **policy: float) -> Terms:
    """A cap at the ceiling, so that no index is cut before it can be compared."""
    return dataclasses.replace(terms(method, **policy), cap=CEILING)


def played(rounds: int, known: int, mean: float) -> Tally:
    """A tally after so many rounds, with this mean as a share of the ceiling."""
    converted = round(mean * known)
    return Tally(
        rounds=rounds,
        wins=known,
        known=known,
        converted=converted,
        amount=converted * CEILING,
        amount_square=converted * CEILING**2,
    )


@pytest.mark.parametrize(
    ("method", "gamma", "mean", "bid"),
    [
        ("ucbid", 3.0, 0.1, 0.5552281388),
        ("ucbid", 1.0, 0.02, 0.2828260885),
        ("bernstein-ucbid", 2.0, 0.2, 1.0),
        ("kl-ucbid", 1.0, 0.2, 0.4505799205),
        ("kl-ucbid", 1.0, 0.02, 0.186797496),
        ("kl-ucbid", 1.0, 0.0, 0.12903641),
    ],
)
def test_published_bounds_in_money(method: str, gamma: float, mean: float, bid: float) -> None:
    """
    Round t = 1000 with N = 50 known, by the formulas of Weed, Perchet, Rigollet, COLT 2016,
    and Achddou, Cappé, Garivier, ALT 2021; 999 rounds are over, and the bid is rounded down.
    """
    found = price(played(999, 50, mean), on_the_whole_scale(method, gamma=gamma))

    assert found == pytest.approx(bid * CEILING, abs=2.0)


def test_bernstein_ucbid_in_money() -> None:
    """Mean 0.2, variance 0.16, N = 500, t = 1000, gamma = 2, by the formula of ALT 2021."""
    found = price(played(999, 500, 0.2), on_the_whole_scale("bernstein-ucbid", gamma=2.0))

    assert found == pytest.approx(0.3871834506 * CEILING, abs=2.0)


def without_prior(method: str) -> Terms:
    """A cap at the ceiling and the uniform prior of the published form."""
    base = with_value(config(method), expected={"conversions": 0})
    return dataclasses.replace(Terms.from_config(base), cap=CEILING)


@pytest.mark.parametrize(("mean", "bid"), [(0.3, 0.6604167582), (0.0, 0.3420667753)])
def test_bayes_ucb_in_money(mean: float, bid: float) -> None:
    """
    N = 10, t = 100: the 0.99 quantiles of Beta(4, 8) and Beta(1, 11), the second 1 - 100^(-1/11);
    Kaufmann, Cappé, Garivier, AISTATS 2012, with the uniform prior and c = 0.
    """
    found = price(played(99, 10, mean), without_prior("bayes-ucb"))

    assert found == pytest.approx(bid * CEILING, abs=2.0)


def test_thompson_draws_from_the_posterior() -> None:
    """Draws of Beta(4, 8), as scipy has it, by the test of Kolmogorov and Smirnov, seeded."""
    snapshot = ready(Memory(base=played(99, 10, 0.3)), without_prior("thompson"))
    rng = np.random.default_rng(3)
    answers = [snapshot.propose(Opportunity("a"), rng) for _ in range(4000)]
    shares = [answer.price / CEILING for answer in answers if isinstance(answer, Proposal)]

    assert stats.kstest(shares, stats.beta(4, 8).cdf).pvalue > 0.01
    # P(Beta(4, 8) > 1/2) = P(Bin(11, 1/2) <= 3).
    above = sum(share > 0.5 for share in shares) / len(shares)
    assert above == pytest.approx(0.11328125, abs=4 * 0.005)


@pytest.mark.parametrize("method", ["mean", "bayes-ucb", "thompson"])
def test_a_guess_weighs_its_conversions(method: str) -> None:
    """With much weight the price before the first lesson is close to the guess."""
    guess = {"per_impression": 3_000_000, "conversions": 10_000}
    base = with_value(config(method), typical=50_000_000, expected=guess)

    assert price(Tally(), Terms.from_config(base)) == pytest.approx(3_000_000, rel=0.04)


def test_ucbid_leaves_the_cap_at_the_fifth_round() -> None:
    """Always winning with mean 0.2, the first bid below 1 comes at t = 5: 0.976877865."""
    whole = on_the_whole_scale("ucbid")
    bids = [price(Tally(rounds=n, wins=n, known=n, amount=n * CEILING // 5), whole) for n in (3, 4)]

    assert bids[0] == CEILING
    assert bids[1] == pytest.approx(0.976877865 * CEILING, abs=1.0)


def test_values_after_a_reset_do_not_shrink_the_bonus() -> None:
    """With values but no rounds, ln t of the first round would be 0 and the bonus gone."""
    late = Tally(known=4, wins=0)
    whole = on_the_whole_scale("ucbid")

    assert price(late, whole) == price(Tally(rounds=4, wins=4, known=4), whole)


def test_posterior_quantile_before_the_first_lesson() -> None:
    """The prior Gamma(1, typical / expected) has quantile -ln(1 - 0.75) expected / typical."""
    of = terms("posterior-quantile")

    assert price(Tally(), of) == math.floor(CAP // 2 * math.log(4.0))


@pytest.mark.parametrize(("order", "chi_square"), [(0.75, 12.549), (0.95, 18.307), (0.99, 23.209)])
def test_posterior_quantile_by_the_chi_square_table(order: float, chi_square: float) -> None:
    """
    Four conversions and a prior of one are Gamma(5, rate) = chi-square with 10 degrees of
    freedom / (2 rate); printed table (from memory, as in the NIST handbook).
    """
    base = with_value(config("posterior-quantile", order=order), typical=50_000_000)
    of = dataclasses.replace(Terms.from_config(base), cap=CEILING)
    tally = Tally(rounds=900, wins=400, known=400, converted=4, amount=240_000_000, amount_square=1)
    rate = 50_000_000 / (CAP // 2) + 400
    amount = (50_000_000 + 240_000_000) / (1 + 4)

    assert price(tally, of) == pytest.approx(chi_square / 2 / rate * amount, rel=5e-5)


def test_mean_with_its_prior() -> None:
    """One conversion of 0.05 at a guess of 0.004 weighs 12.5 impressions: (0.05 + 0.2) / 112.5."""
    of = Terms.from_config(with_value(config("mean"), typical=50_000_000))
    tally = Tally(rounds=100, wins=100, known=100, converted=4, amount=200_000_000)

    assert price(Tally(), of) == CAP // 2
    assert price(tally, of) == math.floor(250_000_000 / 112.5)


def test_mean_without_a_prior() -> None:
    """The guess until the first value, then the plain mean, which may be nothing."""
    of = Terms.from_config(with_value(config("mean"), expected={"conversions": 0}))

    assert price(Tally(rounds=9), of) == CAP // 2
    assert price(Tally(rounds=9, wins=1, known=1), of) == 0
    assert price(Tally(rounds=9, wins=2, known=2, converted=1, amount=7_000_000), of) == 3_500_000


def test_flat_bids_its_price() -> None:
    """Whatever was learnt."""
    assert price(played(999, 50, 0.9), terms("flat", price=3_000_000)) == 3_000_000


def test_each_method_states_its_guarantee_honestly() -> None:
    """Only the published bounds claim a theorem, and not outside what it was proved for."""
    claims = {
        name: method.guarantee(played(999, 50, 0.1), terms(name))
        for name, method in METHODS.items()
    }

    assert "no regret theorem" in claims["posterior-quantile"]
    assert claims["mean"].startswith("None")
    assert claims["flat"].startswith("None")
    assert METHODS["kl-ucbid"].guarantee(Tally(), terms("kl-ucbid", gamma=1.0)).startswith("None")
    assert "gamma = 3" in METHODS["ucbid"].guarantee(Tally(), terms("ucbid", gamma=1.0))
