"""Words for numbers and settings of rules, at the values where they change."""

from __future__ import annotations

from typing import Any

import pytest

from service.tripwires.saying import amount, chance, duration, share
from service.tripwires.setups import DEFAULTS, OFF, Setup, setups_of, thresholds


@pytest.mark.parametrize(
    ("part", "said"),
    [
        (0.0, "0 %"), (1.0, "100 %"), (0.1, "10 %"), (0.0999, "10 %"), (0.0123, "1.2 %"),
        (0.00004, "0.004 %"), (0.996, "100 %"), (2.5, "250 %"),
    ],
)  # fmt: skip
def test_a_share_has_as_many_digits_as_it_needs(part: float, said: str) -> None:
    """Whole percents from a tenth on, two digits below, and never a bare nought for a little."""
    assert share(part) == said


@pytest.mark.parametrize(
    ("milliseconds", "said"),
    [
        (172_800_000, "2 days"), (86_400_000, "24 hours"), (3_600_000, "60 minutes"),
        (7_200_001, "7200 seconds"), (120_000, "2 minutes"), (60_000, "60 seconds"),
        (1, "0.001 seconds"), (0, "0 seconds"), (90_000, "90 seconds"),
    ],
)  # fmt: skip
def test_a_length_of_time_is_said_whole(milliseconds: int, said: str) -> None:
    """In the largest unit of which there are two, else in a smaller one."""
    assert duration(milliseconds) == said


@pytest.mark.parametrize(
    ("nanos", "said"),
    [
        (0, "0.00 EUR"), (999, "0.000000999 EUR"), (1000, "0.000001 EUR"), (1499, "0.000001 EUR"),
        (1501, "0.000002 EUR"), (-5_000_000_000, "-5.00 EUR"), (-999, "-0.000000999 EUR"),
        (2.5e9, "2.50 EUR"), (10**18 + 1, "1000000000.00 EUR"),
    ],
)  # fmt: skip
def test_an_amount_is_cut_to_six_decimals_but_never_to_nothing(nanos: float, said: str) -> None:
    """Means have fractions of a nano; people read millionths of a unit."""
    assert amount(nanos, "EUR") == said


@pytest.mark.parametrize(
    ("tail", "said"),
    [
        (1.0, "1 in 1"), (0.5, "1 in 2"), (1e-6, "1 in 1,000,000"),
        (1.1e-12, "1 in 909,090,909,091"), (1e-12, "less than 1 in 10^12"),
        (0.0, "less than 1 in 10^12"),
    ],
)  # fmt: skip
def test_a_chance_is_said_until_nobody_would_count(tail: float, said: str) -> None:
    """Nought is never said: a tail that small is one that floats cannot tell."""
    assert chance(tail) == said


def test_a_setting_changes_what_it_names_and_nothing_else() -> None:
    """The other thresholds of the rule and all other rules keep their defaults."""
    found = setups_of({"tripwires": {"voids": {"ratio": 4.0}}})
    assert found["voids"] == Setup("warn", 3_600_000, 50, 4.0, 1e-6, 0.1)
    assert {name: one for name, one in found.items() if name != "voids"} == {
        name: one for name, one in DEFAULTS.items() if name != "voids"
    }


@pytest.mark.parametrize(
    "config", [{}, {"tripwires": None}, {"tripwires": {}}, {"tripwires": {"voids": None}}]
)
def test_nothing_said_is_the_default(config: dict[str, Any]) -> None:
    """A configuration of an earlier release, too, has every rule."""
    assert setups_of(config) == DEFAULTS


def test_a_rule_of_another_release_is_left_alone() -> None:
    """While two releases run, one must not stumble over what the other knows."""
    assert setups_of({"tripwires": {"a rule of next year": {"action": OFF}}}) == DEFAULTS


def test_a_threshold_that_no_rule_has_is_a_mistake() -> None:
    """It is refused where it is set; a configuration that has it is not silently half read."""
    with pytest.raises(TypeError):
        setups_of({"tripwires": {"voids": {"volume": 11}}})


@pytest.mark.parametrize("rule", sorted(DEFAULTS))
def test_thresholds_are_read_back_as_they_were_set(rule: str) -> None:
    """What a rule does not have is not shown as empty, and what is shown makes the same setup."""
    shown = thresholds(DEFAULTS[rule])
    assert None not in shown.values()
    assert Setup(**shown) == DEFAULTS[rule]
    assert shown["action"] in ("freeze", "warn")


def test_defaults_are_strict_enough_to_leave_a_quiet_line_item_alone() -> None:
    """A chance of at most one in a million a look, a ratio that people would see themselves."""
    for setup in DEFAULTS.values():
        assert setup.alpha is None or 0 < setup.alpha <= 1e-6
        assert setup.ratio is None or setup.ratio >= 2
        assert setup.window_ms is None or setup.window_ms % 60_000 == 0
