"""Each rule on an invented record: silent on a usual one, firing on the fault it is for."""

from __future__ import annotations

import re

import pytest

from service.tripwires.counts import LOG_UNITS, NOTHING, Counts, counted
from service.tripwires.judging import RULES, judge
from service.tripwires.money_rules import far_off
from service.tripwires.runbooks import RUNBOOKS
from service.tripwires.saying import amount, chance, duration, share
from service.tripwires.setups import DEFAULTS, FREEZE, setups_of
from tests.tripwires.recorded import LOG, USUAL, Minute, alone, facts, found

HOURS = 8 * 60
WON = Counts(1, 1, late=1, paid=7, spent=5)
LOG_5 = LOG + 1609  # Five times the value.
BAD = {
    "no_outcomes": Counts(bids=20),
    "win_rate": USUAL._replace(wins=1, losses=18),
    "clearing_price": USUAL._replace(paid=40_000_000),
    "spend_speed": USUAL._replace(spent=60_000_000),
    "value_size": USUAL._replace(logs=2 * LOG_5, log_squares=2 * LOG_5 * LOG_5),
    "zero_values": USUAL._replace(words=2, zeros=0),
    "silent_bids": USUAL._replace(wins=4, losses=4),
    "voids": USUAL._replace(losses=2, voids=8),
    "late_outcomes": USUAL._replace(late=6),
    "refused_outcomes": USUAL._replace(refused=20),
}


def test_a_usual_record_is_silent() -> None:
    """Every rule is armed by default, and none has anything to say of even traffic."""
    assert set(found(facts(HOURS))) == set()
    assert {setup.action for setup in DEFAULTS.values()} == {"freeze", "warn"}
    assert set(found(facts(40 * 24 * 60 // 4))) == set()


@pytest.mark.parametrize("rule", sorted(BAD))
def test_its_fault_is_found_and_said_with_units(rule: str) -> None:
    """Fifty minutes of it are enough, and the sentence names numbers and time."""
    spoilt = facts(HOURS, last=lambda _: BAD[rule], of_last=50)
    finding = found(spoilt)[rule]
    assert re.search(r"\d+.* in (5|15|60) minutes", finding.saw.sentence)
    assert 0 <= finding.saw.since_ms <= spoilt.now_ms
    assert finding.saw.numbers


@pytest.mark.parametrize("rule", sorted(BAD))
def test_an_unknown_past_says_nothing_of_a_share(rule: str) -> None:
    """A line item that has always been so is left alone, but for what is wrong by itself."""
    bare = found(facts(HOURS, usual=lambda _: BAD[rule]))
    assert set(bare) <= {"no_outcomes", "refused_outcomes"}


def test_a_slow_hour_of_each_day_is_no_fault() -> None:
    """At night a tenth is spent, as every night: the same hour of earlier days is what counts."""

    def usual(minute: int) -> Counts:
        return USUAL._replace(spent=1_000_000) if minute // 60 % 24 == 2 else USUAL

    ten_days = 10 * 24 * 60 + 3 * 60
    assert "spend_speed" not in found(facts(ten_days, usual))
    late = facts(ten_days, usual, last=lambda _: USUAL, of_last=60)
    assert "usually 0.06 EUR" in found(late)["spend_speed"].saw.sentence


def test_values_times_five_below_the_ceiling_are_found_within_five_values() -> None:
    """And times 1.5 are not, for values vary."""
    few = facts(HOURS, usual=lambda m: USUAL if m % 12 == 0 else USUAL._replace(
        words=8, logs=0, log_squares=0), last=lambda _: BAD["value_size"], of_last=8)  # fmt: skip
    saw = found(few)["value_size"].saw
    assert saw.numbers["factor"] > 2
    log = LOG + 405
    more = USUAL._replace(logs=2 * log, log_squares=2 * log * log)
    assert "value_size" not in found(facts(HOURS, last=lambda _: more, of_last=45))


def test_zeros_that_fail_to_come_freeze_by_default() -> None:
    """Where a feed never sent any, none is missed."""
    finding = found(facts(HOURS, last=lambda _: BAD["zero_values"], of_last=45))["zero_values"]
    assert finding.action == FREEZE
    never = USUAL._replace(words=2, zeros=0)
    assert found(facts(HOURS, usual=lambda _: never)) == {}


def test_values_per_win_are_counted_against_the_wins() -> None:
    """Half the wins bring half the values, and nobody is woken; none at all wakes somebody."""
    days = 7 * 24 * 60
    half = USUAL._replace(wins=5, words=5, zeros=4, logs=LOG, log_squares=LOG * LOG)
    assert "value_count" not in found(facts(days, last=lambda _: half, of_last=24 * 60))
    none = USUAL._replace(words=8, logs=0, log_squares=0)
    assert "value_count" in found(facts(days, last=lambda _: none, of_last=24 * 60))


def test_wins_without_their_word_are_unknown() -> None:
    """Where each win gets one word; elsewhere it is values whose win never comes."""
    days = 7 * 24 * 60
    mute = USUAL._replace(words=2, zeros=1, logs=LOG, log_squares=LOG * LOG)
    spoilt = facts(days, last=lambda _: mute, of_last=24 * 60)
    assert "wins" in found(spoilt)["unknown_values"].saw.numbers
    parked = USUAL._replace(words=1, zeros=0, parked=9)
    late = facts(days, last=lambda _: parked, of_last=24 * 60, arrival="accrues")
    assert found(late)["unknown_values"].saw.numbers["unknown"] == 9 * 24 * 60


def test_bids_that_have_just_gone_out_are_not_silent_yet() -> None:
    """After a pause, or at the start, outcomes get half of the window to come; then it fires."""
    idle = [facts(HOURS, lambda _: USUAL, last=_resumed(at), of_last=120) for at in (6, 14)]
    assert [set(found(one)) & {"no_outcomes", "silent_bids"} for one in idle] == [
        set(), {"no_outcomes"},
    ]  # fmt: skip
    assert "no_outcomes" not in found(
        facts(6, usual=lambda _: BAD["no_outcomes"]._replace(bids=99))
    )


def _resumed(minutes: int) -> Minute:
    """Nothing for two hours but bids in the last minutes, which nobody has answered yet."""
    return lambda number: Counts(bids=20) if number >= HOURS - minutes else NOTHING


def test_bare_facts_are_told_with_their_amount() -> None:
    """Unfunded and disputed cost, and a learner that is halted for a minute and more."""
    grown = USUAL._replace(unfunded=5_000_000, disputed=1_000_000, halted=1)
    known = facts(HOURS, last=lambda _: grown, of_last=1, unfunded=5_000_000, disputed=1_000_000)
    said = found(known)
    assert said["unfunded"].saw.sentence == "0.005 EUR of cost found no free money"
    assert said["disputed"].saw.sentence == "0.001 EUR was asked above what was bid"
    assert "learner_halted" not in found(facts(HOURS, halted=True))
    held = facts(HOURS, last=lambda m: grown if m == HOURS - 5 else USUAL, of_last=5, halted=True)
    assert found(held)["learner_halted"].saw.numbers["halted_s"] == 299


def test_a_rule_that_is_off_says_nothing() -> None:
    """And a changed threshold is the one that counts."""
    spoilt = facts(HOURS, last=lambda _: BAD["voids"], of_last=45)
    assert judge(spoilt, alone("voids", action="off")) == []
    assert judge(spoilt, alone("voids", share_min=0.9)) == []
    assert judge(spoilt, alone("voids"))[0].rule == "voids"
    assert setups_of({"tripwires": None}) == DEFAULTS


def test_every_rule_has_its_defaults_and_its_runbook() -> None:
    """Meaning, first look, remedy and way back, each in sentences."""
    assert RULES.keys() == DEFAULTS.keys() == RUNBOOKS.keys()
    texts = [getattr(book, part) for book in RUNBOOKS.values() for part in book.__slots__]
    assert [text for text in texts if len(text) < 15 or text[-1] != "."] == []


@pytest.mark.parametrize(
    ("kind", "slot", "body", "counts"),
    [
        ("won", "result", {"round": 1, "price": 7, "late": True}, WON),
        ("lost", "result", {"round": 0, "late": False}, Counts(losses=1)),
        ("void", "result", {"round": 1}, Counts(1, voids=1)),
        ("void", "void", {"round": 0}, NOTHING),
        ("tick", None, {"rounds": 4, "under_floor": 9}, Counts(4)),
        ("value", "value:a", {"amount": 0, "was": None}, Counts(words=1, zeros=1)),
        ("value", "value:a", {"amount": 9, "was": 4}, NOTHING),
        ("parked", "parked:a", {"amount": 9}, Counts(parked=1)),
        ("billed", "billed", {"price": 7}, Counts(spent=5)),
        ("lease", None, {"amount": 5}, NOTHING),
    ],
)  # fmt: skip
def test_an_entry_counts_for_what_it_says(
    kind: str, slot: str | None, body: dict[str, object], counts: Counts
) -> None:
    """Bids, outcomes, cost and first words; corrections, leases and second voids count nothing."""
    assert counted(kind, slot, body, 5) == counts


def test_a_value_counts_by_its_logarithm() -> None:
    """In thousandths, so that sums stay whole."""
    one = counted("value", "value:a", {"amount": 10**9, "was": None, "parked": True}, 0)
    assert (one.words, one.unparked, one.logs) == (1, 1, round(LOG_UNITS * 20.7232658))
    assert one.log_squares == one.logs**2


def test_robust_distance_needs_ratio_and_deviations() -> None:
    """A wild past forgives more; nothing where something is usual is far off."""
    steady, wild = [10.0, 10.0, 10.1, 9.9], [5.0, 10.0, 30.0, 60.0]
    assert far_off(20.0, steady, 2.0)
    assert not far_off(19.0, steady, 2.0)
    assert not far_off(60.0, wild, 2.0)
    assert far_off(0.0, steady, 2.0)
    assert not far_off(5.0, [], 2.0)


def test_words_for_numbers() -> None:
    """Shares, lengths, amounts and chances as people read them."""
    assert [share(p) for p in (0.0, 0.004, 0.5)] == ["0 %", "0.4 %", "50 %"]
    assert [duration(n) for n in (86_400_000, 7_200_000, 900_000, 10_500)] == [
        "24 hours", "2 hours", "15 minutes", "10.5 seconds",
    ]  # fmt: skip
    assert amount(1_234_567_890.0, "EUR") == "1.234568 EUR"
    assert amount(5, "EUR") == "0.000000005 EUR"
    assert [chance(t) for t in (0.001, 0.0)] == ["1 in 1,000", "less than 1 in 10^12"]
