"""One conversion in a thousand impressions: what each method earns over 200 seeded runs.

An invented market: second price, rivals' best bid lognormal with median 3 CPM and sigma
0.8, cap 8 CPM, 50,000 opportunities, exponential baskets of mean 2 EUR cut at 50 EUR,
outcomes known at once, no budget, a new snapshot every 50 opportunities.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import integrate, stats

from service.decision.learnability import objection
from service.rehearsal.rare import BLOCK, CAP, ORACLE, RARE, Row, rare_paths, rare_table, rare_terms

METHODS = ["posterior-quantile", "kl-ucbid"]
RUNS = 200


@pytest.fixture(scope="module")
def table() -> dict[str, Row]:
    """The table over 200 seeds, played once."""
    return {row.method: row for row in rare_table(METHODS, RUNS)}


def in_words(table: dict[str, Row]) -> str:
    """The whole table in one line, for messages."""
    rows = (f"{row.method} {row.surplus:.2f} ± {row.error:.2f} EUR" for row in table.values())
    return "; ".join(rows)


def expected_surplus(bid_cpm: float) -> float:
    """50,000 times the integral of (v - m) over competing bids m up to the bid, in EUR."""
    law = stats.lognorm(s=0.8, scale=3.0)
    value_cpm = 2.0 * (1.0 - math.exp(-25.0))
    each, _ = integrate.quad(lambda m: (value_cpm - m) * law.pdf(m), 0.0, bid_cpm)
    return float(50_000 * each / 1000.0)


def test_the_oracle_earns_what_the_integral_says(table: dict[str, Row]) -> None:
    """Bidding the true mean value earns 10.9 EUR, by quadrature over the competing bids."""
    oracle = table[ORACLE]

    assert expected_surplus(2.0) == pytest.approx(10.9, abs=0.1)
    assert abs(oracle.surplus - expected_surplus(2.0)) < 4 * oracle.error, in_words(table)


def test_the_posterior_quantile_earns_at_least_four(table: dict[str, Row]) -> None:
    """The default for such values ends well above nothing, even two standard errors lower."""
    row = table["posterior-quantile"]

    assert row.surplus - 2 * row.error >= 4.0, in_words(table)
    assert row.surplus < table[ORACLE].surplus, in_words(table)


def test_kl_ucbid_loses_about_forty_eight(table: dict[str, Row]) -> None:
    """It bids the cap all the way, and what that loses is an integral as well: about -48 EUR."""
    row = table["kl-ucbid"]

    assert expected_surplus(8.0) == pytest.approx(-48.0, abs=1.0)
    assert abs(row.surplus - expected_surplus(8.0)) < 4 * row.error, in_words(table)


def test_the_defaults_of_the_case() -> None:
    """The guess is half the cap and the order 0.75, as anyone gets who says nothing."""
    terms = rare_terms("posterior-quantile")

    assert terms.expected == CAP // 2
    assert terms.settings == {"order": 0.75}
    assert terms.prior_conversions == 1.0


def test_kl_ucbid_is_refused_without_confirmation() -> None:
    """Nobody gets that loss by default: the word learning_cost is asked for first."""
    terms = rare_terms("kl-ucbid")
    value = {
        "ceiling": terms.ceiling,
        "typical": terms.typical,
        "expected": {"per_impression": terms.expected, "conversions": 1},
        "arrival": "accrues",
    }
    policy = {"method": "kl-ucbid", **terms.settings}
    config = {"currency": "EUR", "bid_cap": CAP, "auction": "second"}
    found = objection({**config, "value": value, "policy": policy}, None)

    assert found is not None
    assert found.code == "learning_cost"


def test_the_same_seed_gives_the_same_case() -> None:
    """Sequences depend on their seed alone, so the table can be printed again."""
    one, again = rare_paths([3, 4])[1], rare_paths([4])[0]

    assert np.array_equal(one.competing, again.competing)
    assert np.array_equal(one.values, again.values)
    assert one.competing.size % BLOCK == 0
    assert RARE.values.mean == pytest.approx(2_000_000, rel=1e-9)
