"""From a wish to an order, and how a rehearsal is shown: pure, case by case."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from service.errors import Malformed
from service.hindsights import logged
from service.learner.memory import Memory
from service.rehearsal.rehearse import auctions_of, replay, rng_of
from service.rehearsal_orders import order_of, own_law
from service.rehearsing import show
from service.store.hindsights import Line, Said
from tests.rehearsal.orders import SCALE, config, market, order

SIZES = {"rounds": 100, "seeds": 2, "seed": 5, "block": 10}


def wish(*changes: dict[str, Any], **said: Any) -> dict[str, Any]:
    """A wish whose policies are these changes of the line item."""
    policies = [{"name": f"policy {at}", "changes": one} for at, one in enumerate(changes or ({},))]
    on = market(rivals=None, values=None, **said)
    return {"name": "a wish", "policies": policies, "market": on, **SIZES}


def refused(asked: dict[str, Any], own: dict[str, Any]) -> Malformed:
    """Why this wish makes no order."""
    with pytest.raises(Malformed) as caught:
        order_of(asked, own)
    return caught.value


def test_policies_are_differences_from_the_line_item() -> None:
    """One that changes nothing is the line item itself, and none changes another."""
    own = config("flat")
    found = order_of(wish({}, {"bid_cap": SCALE // 2}, {"budget": 7}), own)
    caps = [one["config"]["bid_cap"] for one in found["policies"]]
    budgets = [one["config"]["budget"] for one in found["policies"]]
    assert caps == [SCALE, SCALE // 2, SCALE]
    assert budgets == [own["budget"], own["budget"], 7]
    assert {name: found[name] for name in SIZES} == SIZES
    assert own == config("flat")


def test_a_market_that_is_not_named_follows_from_the_first_policy() -> None:
    """Rivals up to its cap, and events of the usual value as often as its guess says."""
    value = {"typical": SCALE // 5, "expected": {"per_impression": SCALE // 50, "conversions": 1}}
    found = order_of(wish({"bid_cap": SCALE // 4}, {}), config("mean", value=value))["market"]
    assert found["rivals"] == {"law": "uniform", "low": 0, "high": SCALE // 4}
    assert found["values"]["amount"] == SCALE // 5
    assert found["values"]["chance"] == pytest.approx(0.1)
    assert found["top"] == SCALE // 4


def test_a_guess_above_the_usual_value_comes_every_time() -> None:
    """A chance is at most 1."""
    value = {"typical": 10, "expected": {"per_impression": SCALE // 2, "conversions": 1}}
    found = order_of(wish(), config("flat", value=value))["market"]
    assert found["values"]["chance"] == 1.0


@pytest.mark.parametrize("kind", ["arena", "coin_flip", "above_value"])
def test_some_markets_have_no_rivals_of_their_own(kind: str) -> None:
    """There the other policies, or the adversary, are all the competition."""
    assert order_of(wish({}, {}, kind=kind), config("flat"))["market"]["rivals"] is None


def test_a_log_brings_its_own_values() -> None:
    """Nothing is drawn for it."""
    found = order_of(wish(kind="own_log"), config("flat"))["market"]
    assert (found["values"], found["rivals"]) == ({"law": "recorded"}, None)


def test_named_laws_are_kept() -> None:
    """What the wish says goes before what follows from the line item."""
    asked = wish()
    laws = {"rivals": {"law": "exponential", "mean": 5}, "values": {"law": "events", "chance": 0.5}}
    asked["market"] = {**asked["market"], **laws}
    found = order_of(asked, config("flat"))["market"]
    assert {name: found[name] for name in laws} == laws


def test_values_known_before_need_hints() -> None:
    """The refusal names the policy that could not read them, not the first one."""
    asked = wish({"value": {"hints": True}}, {})
    asked["market"]["values"] = {"law": "even", "low": 0, "high": SCALE}
    said = refused(asked, config("mean"))
    assert (said.code, said.data["field"]) == ("bad_field", "policies.1")


def test_a_method_of_one_auction_plays_in_no_other() -> None:
    """A law of bids for second price is refused in first price."""
    asked = wish({"policy": {"method": "exptree"}}, auction="first")
    assert refused(asked, config("mean")).code == "auction_not_for_method"


@pytest.mark.parametrize(("cap", "beyond"), [(SCALE, 2 * SCALE + 1), (5 * SCALE, 5 * SCALE + 1)])
def test_no_policy_wins_where_its_curve_says_nothing(cap: int, beyond: int) -> None:
    """What competes beyond the curve is more than any policy bids, however high its cap."""
    rivals = {"law": "empirical", "prices": [5], "chances": [0.5], "beyond": 2 * SCALE + 1}
    curve = {"rivals": rivals, "values": {"law": "events", "chance": 0.5, "amount": 9}}
    asked = wish({}, {"bid_cap": cap}, kind="own_curve")
    found = order_of(asked, config("mean"), curve)["market"]
    assert found["rivals"] == {**rivals, "beyond": beyond}
    assert rivals["beyond"] == 2 * SCALE + 1


@pytest.mark.parametrize("auction", ["second", "first"])
def test_a_curve_of_nothing_is_no_market(auction: str) -> None:
    """Where no auction has told anything there is nothing to draw from."""
    with pytest.raises(Malformed) as caught:
        own_law(Memory.fresh().to_bytes(), config("mean"), auction)
    assert caught.value.code == "nothing_known"


@pytest.mark.parametrize(
    ("kind", "policies", "auctions"), [("iid", 1, 200), ("iid", 3, 600), ("arena", 3, 200)]
)
def test_the_length_of_a_rehearsal(kind: str, policies: int, auctions: int) -> None:
    """Rounds times seeds times policies, but the bidders of an arena meet in one auction."""
    said = order(*[config("flat")] * policies, market=market(kind=kind), rounds=100, seeds=2)
    assert auctions_of(said) == auctions


def test_market_and_policies_have_chance_of_their_own() -> None:
    """No two streams are alike, so a policy's draws say nothing of the market's."""
    said = order(config("flat"))
    streams = [(seed, policy) for seed in range(3) for policy in (None, 0, 1)]
    draws = {key: rng_of(said, *key).random(3).tolist() for key in streams}
    assert len({tuple(one) for one in draws.values()}) == len(streams)
    assert rng_of(said, 2, 1).random(3).tolist() == draws[2, 1]


@pytest.mark.parametrize("methods", [("flat",), ("flat", "mean"), ("mean", "thompson", "flat")])
def test_a_replay_of_nothing_is_nothing(methods: tuple[str, ...]) -> None:
    """A log without auctions has figures of 0 and not a failure."""
    said = order(*map(config, methods), market=market(kind="csv"))
    found = replay(said, [], lambda count: None, 0)
    assert found["auctions"] == 0
    assert [one["surplus"]["mean_nanos"] for one in found["policies"]] == [0] * len(methods)


ROW: dict[str, Any] = {
    **{"number": 7, "name": "one", "actor": "ann", "state": "running", "error": None},
    **{"line_item": "", "total": 200, "done": 50},
    **{"created_ms": 0, "started_ms": 1_000, "ended_ms": None},
}


@pytest.mark.parametrize(
    ("changes", "progress", "left"),
    [
        ({}, 0.25, 27.0),  # A quarter took 9 seconds, so three quarters take 27.
        ({"done": 0}, 0.0, None),
        ({"done": 200}, 1.0, 0.0),
        ({"state": "waiting", "done": 0, "started_ms": None}, 0.0, None),
        ({"state": "cancelled"}, 0.25, None),
        ({"total": 0, "done": 0}, 0.0, None),
        ({"done": 1, "total": 3}, 0.3333, 18.0),
    ],
)
def test_progress_and_the_time_left(
    changes: dict[str, Any], progress: float, left: float | None
) -> None:
    """By the pace so far, and only while it plays."""
    found = show({**ROW, **changes}, 10_000)
    assert (found["progress"], found["seconds_left"]) == (progress, left)


def test_a_rehearsal_is_shown_without_what_was_not_read() -> None:
    """A page has no results, and no line item is null and not an empty name."""
    assert "result" not in show(ROW, 10_000)
    assert show({**ROW, "result": {"a": 1}}, 10_000)["result"] == {"a": 1}
    assert show(ROW, 10_000)["line_item"] is None
    assert show(ROW, 10_000)["id"] == "7"


DECISION: dict[str, Any] = {
    **{"price": 40, "auction": None, "floor": 10, "floor_held": None, "held": None},
    **{"source": "north", "reason": None, "set_by": "value", "at_ms": 9},
    **{"arm": "", "arm_odds": None, "odds": None},
}


def line(said: Said, **changes: Any) -> Line:
    """One decision and what is said of it."""
    return Line({**DECISION, **changes}, "2026-12-01", said)


@pytest.mark.parametrize(
    ("said", "service_ms", "worth"),
    [
        (Said("won", price=30, amount=7, paid_ms=100), 1_100, (7, SCALE)),
        (Said("won", price=30, amount=7, paid_ms=100), 1_101, (7, 7)),
        (Said("won", price=30, amount=-5, paid_ms=100), 1_101, (0, 0)),
        (Said("won", price=30, amount=2 * SCALE, paid_ms=100), 500, (SCALE, SCALE)),
        (Said("won", price=30, amount=7), 10**9, (0, SCALE)),
        (Said("lost", amount=7), 10**9, (0, SCALE)),
        (Said(), 10**9, (0, SCALE)),
    ],
)
def test_a_value_is_open_until_its_window_closes(
    said: Said, service_ms: int, worth: tuple[int, int]
) -> None:
    """A window of a second: at its last moment more may come, a moment later it may not."""
    own = config("flat", value={"window_ms": 1_000})
    found = logged(line(said), own, service_ms)
    assert (found.low, found.high) == worth


@pytest.mark.parametrize(("valued", "worth"), [(True, (7, 7)), (False, (0, SCALE))])
def test_a_value_that_comes_once_is_known_at_once(valued: bool, worth: tuple[int, int]) -> None:
    """No window has to close for it, and before it has come it may be anything."""
    own = config("flat", value={"arrival": "once"})
    found = logged(line(Said("won", amount=7, valued=valued, paid_ms=100)), own, 101)
    assert (found.low, found.high) == worth


@pytest.mark.parametrize(
    ("changes", "body", "bid", "floor"),
    [
        ({}, {}, 40, 10),
        ({"held": 44}, {}, 44, 10),
        ({"held": 44, "floor_held": 12}, {"bid": 43}, 44, 12),
        ({}, {"bid": 43}, 43, 10),
        ({"price": None}, {}, 0, 10),
        ({"floor": 0}, {}, 40, 0),
        ({"floor_held": -1}, {}, 40, 0),
    ],
)
def test_the_bid_and_floor_of_a_line(
    changes: dict[str, Any], body: dict[str, Any], bid: int, floor: int
) -> None:
    """What was held goes before what the stream says, and both before what can be reckoned."""
    found = logged(line(Said("lost", body), **changes), config("flat"), 0)
    assert (found.bid, found.floor) == (bid, floor)
    assert found.result == ("passed" if changes.get("price", 40) is None else "lost")


def test_fees_are_added_to_lines_from_before_they_were_kept() -> None:
    """A tenth and 2 on top of a bid of 40 and a floor of 10."""
    own = config("flat", fees={"share": 10**8, "cpm": 2})
    found = logged(line(Said("lost")), own, 0)
    assert (found.bid, found.floor) == (46, 13)


def test_only_a_win_has_a_price() -> None:
    """A price that came with a loss costs nothing, and a pass has no least winning bid."""
    own = config("flat")
    assert logged(line(Said("won", price=30)), own, 0).price == 30
    assert logged(line(Said("lost", price=30)), own, 0).price == 0
    assert logged(line(Said("lost", {"to_win": 60})), own, 0).least == 60
    assert logged(line(Said("lost", {"to_win": 60}), price=None), own, 0).least is None


@pytest.mark.parametrize(
    ("decided", "told", "auction"),
    [(None, {}, "second"), ("first", {}, "first"), ("first", {"auction": "fixed"}, "fixed")],
)
def test_the_kind_of_auction_of_a_line(
    decided: str | None, told: dict[str, Any], auction: str
) -> None:
    """What the stream says, else what was decided, else the line item's."""
    assert logged(line(Said("lost", told), auction=decided), config("flat"), 0).auction == auction


def test_chance_of_a_seed_is_that_of_numpy() -> None:
    """The order's seed, the market's and the policy's place are all of it."""
    said = order(config("flat"), seed=11)
    assert rng_of(said, 4, 2).random() == np.random.default_rng([11, 4, 3]).random()
