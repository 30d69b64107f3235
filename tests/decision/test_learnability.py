"""What is said, objected to and filled in before a line item spends anything."""

from __future__ import annotations

from typing import Any

import pytest

from service.decision.learnability import defaults, learnability, objection, wins_at_cap
from service.decision.terms import Terms
from tests.decision.invented import CAP, EUR, config, partial, with_value

RARE = {"ceiling": 50 * EUR, "typical": 2 * EUR}


def rare(method: str | None, **value: Any) -> dict[str, Any]:
    """A line item whose ceiling is thousands of bid caps."""
    base = {**partial(method), "value": {**RARE, "arrival": "accrues", **value}}
    return defaults(base)[0]


@pytest.mark.parametrize(
    ("budget", "words"),
    [
        (500, "about 250 conversions at break-even; the value can be known to about ± 12 %"),
        (20, "about 10 conversions at break-even; the value can be known to about ± 62 %"),
        (6, "about 3 conversions at break-even; too few to know the value"),
        (2, "about 1 conversion at break-even; too few"),
        (1, "less than one conversion at break-even; the value cannot be known"),
        (10**9, "to about ± 1 %"),
    ],
)
def test_learnability_in_words(budget: int, words: str) -> None:
    """1.96 / sqrt(conversions), the normal limit for a Poisson count of budget / typical."""
    assert words in learnability({**rare(None), "budget": budget * EUR})


def test_the_default_method_follows_the_ceiling() -> None:
    """Up to twenty caps the published bound, above them the posterior's quantile."""
    at = with_value(partial(), ceiling=20 * CAP)
    above = with_value(partial(), ceiling=20 * CAP + 1)

    assert at["policy"] == {"method": "kl-ucbid", "gamma": 1.01}
    assert above["policy"] == {"method": "posterior-quantile", "order": 0.75}


def test_the_default_guess_is_half_the_cap_weighed_as_one_conversion() -> None:
    """What nobody gave is filled in and named; what was given stays."""
    given = {**partial(), "value": {**RARE, "arrival": "accrues"}}
    filled, taken = defaults(given)

    assert filled["value"]["expected"] == {"per_impression": CAP // 2, "conversions": 1}
    assert filled["value"]["typical"] == 2 * EUR
    assert set(taken) == {
        "policy.method",
        "policy.order",
        "value.expected.per_impression",
        "value.expected.conversions",
        "allowance",
        "pacing.method",
    }
    assert filled["allowance"] == 2 * EUR
    assert "expected" not in given["value"]


@pytest.mark.parametrize(
    ("ceiling", "typical"),
    [(CAP, CAP), (20 * CAP, 20 * CAP), (21 * CAP, 20 * CAP), (50 * EUR, 5 * EUR)],
)
def test_the_default_typical_value(ceiling: int, typical: int) -> None:
    """The ceiling itself for frequent values, a tenth of it for rare ones."""
    assert with_value(partial(), ceiling=ceiling)["value"]["typical"] == typical


def test_defaults_are_filled_in_once() -> None:
    """Filling in again changes nothing and names nothing."""
    filled = rare(None)

    assert defaults(filled) == (filled, [])


@pytest.mark.parametrize("method", ["ucbid", "kl-ucbid"])
def test_a_published_bound_on_rare_values_needs_confirmation(method: str) -> None:
    """The refusal says in money what it takes until the bid leaves the cap."""
    found = objection(rare(method), None)

    assert found is not None
    assert found.code == "learning_cost"
    assert "EUR" in found.detail
    assert objection(rare(method), "learning_cost") is None
    assert objection(rare(method), "yes") == found


def test_the_price_of_learning() -> None:
    """
    klUCBid with mean 0 bids below the cap once 1 - (N + 1)^(-gamma / N) < cap / ceiling, in
    closed form; that takes 70,460 wins, at 0.008 each 563.68.
    """
    confident = rare("kl-ucbid")
    wins = wins_at_cap(Terms.from_config(confident))

    share = CAP / (50 * EUR)
    assert 1 - (wins + 1) ** (-1.01 / wins) < share <= 1 - wins ** (-1.01 / (wins - 1))
    found = objection(confident, None)
    assert found is not None
    assert "70,460 wins" in found.detail
    assert "563.68 EUR" in found.detail


@pytest.mark.parametrize("method", [None, "mean", "flat"])
def test_other_methods_need_no_confirmation_for_rare_values(method: str | None) -> None:
    """Only the published bounds pay such a price."""
    assert objection(rare(method), None) is None


@pytest.mark.parametrize("method", ["mean", "posterior-quantile"])
def test_a_low_guess_needs_confirmation(method: str) -> None:
    """A guess below a quarter of the cap never wins and never learns; a quarter is enough."""
    low = rare(method, expected={"per_impression": CAP // 4 - 1})
    enough = rare(method, expected={"per_impression": CAP // 4})
    found = objection(low, None)

    assert found is not None
    assert found.code == "learning_cost"
    assert objection(low, "learning_cost") is None
    assert objection(enough, None) is None


def test_a_low_guess_is_no_matter_to_a_method_that_ignores_it() -> None:
    """The published bounds start at the cap whatever the guess."""
    assert objection(with_value(config("kl-ucbid"), expected={"per_impression": 1}), None) is None


@pytest.mark.parametrize(
    ("method", "policy"),
    [
        ("ucbid", {"gamma": 0}),
        ("ucbid", {"gamma": -1.0}),
        ("ucbid", {"gamma": 100.0}),
        ("kl-ucbid", {"gamma": float("nan")}),
        ("kl-ucbid", {"gamma": float("inf")}),
        ("kl-ucbid", {"gamma": True}),
        ("kl-ucbid", {"gamma": "3"}),
        ("kl-ucbid", {"order": 0.5}),
        ("posterior-quantile", {"order": 0.0}),
        ("posterior-quantile", {"order": 1.0}),
        ("flat", {"price": 0}),
        ("flat", {"price": 1.5}),
        ("flat", {"price": CAP + 1}),
        ("mean", {"gamma": 3.0}),
        ("no-such-method", {}),
    ],
)
def test_bad_settings_are_refused(method: str, policy: dict[str, Any]) -> None:
    """A setting out of range, of another kind or of another method; no word lets it pass."""
    wrong = {**config("mean"), "policy": {"method": method, **policy}}
    found = objection(defaults(wrong)[0], "learning_cost")

    assert found is not None
    assert found.code == "bad_setting"


def test_a_flat_price_must_be_said() -> None:
    """There is no sensible default for a price of one's own."""
    wrong = defaults({**partial(), "policy": {"method": "flat"}})[0]
    found = objection(wrong, None)

    assert found is not None
    assert "policy.price is needed" in found.detail


@pytest.mark.parametrize(
    ("method", "settings", "value", "words"),
    [
        ("linear", {}, {"ceiling": 21 * CAP}, "the ellipsoid of linear then says nothing"),
        ("linear", {"dimensions": 24}, {}, "policy.dimensions must be one of: 16, 32, 64."),
        ("linear", {}, {"drift": {"how": "window", "rounds": 500}}, "linear forgets nothing"),
        ("linear", {}, {"change": {"action": "restart"}}, "linear forgets nothing"),
        ("ucbid", {}, {"hints": True, "change": {"action": "restart"}}, "value.hints forgets"),
        ("flat", {"price": CAP}, {"hints": True}, "flat takes no account of values"),
        ("exptree", {}, {"hints": True}, "exptree takes no account of values"),
    ],
)
def test_what_single_impressions_cannot_teach_is_refused(
    method: str, settings: dict[str, float], value: dict[str, Any], words: str
) -> None:
    """Features where values are rare, another size of vector, forgetting, a hint nobody reads."""
    wish = with_value(config(method, **settings), **value)
    found = objection(wish, "learning_cost")

    assert found is not None
    assert found.code == "bad_setting"
    assert words in found.detail
    fine = {"change": {"action": "flag"}, "hints": True}
    assert objection(with_value(config("linear", dimensions=64), **fine), None) is None


@pytest.mark.parametrize(
    "value",
    [
        {"typical": 51 * EUR},
        {"typical": -1},
        {"expected": {"per_impression": 51 * EUR}},
        {"expected": {"per_impression": -1}},
        {"expected": {"conversions": -1}},
        {"expected": {"conversions": 0}},
        {"expected": {"conversions": 10**7}},
    ],
)
def test_impossible_guesses_are_refused(value: dict[str, Any]) -> None:
    """Typical value and guess lie between nothing and the ceiling, with a weight above zero."""
    found = objection(rare("posterior-quantile", **value), "learning_cost")

    assert found is not None
    assert found.code == "bad_setting"


def test_the_plain_mean_may_do_without_a_prior() -> None:
    """Only `mean` has a price when the guess weighs nothing."""
    assert objection(rare("mean", expected={"conversions": 0}), None) is None
