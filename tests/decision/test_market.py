"""Bids where one pays what one bids: what is known is used, what is not is tried from below."""

from __future__ import annotations

from time import perf_counter

import numpy as np
import pytest
from numpy.random import default_rng
from numpy.typing import NDArray

from service.decision.market import CELLS_MIXED, Menu, drawable, market_of
from service.decision.opportunity import Opportunity
from service.decision.price import Proposal, Ready, ready
from service.decision.terms import Terms
from service.learner import market_part, shading
from service.learner.curve_counts import Counts, Outcome, add
from service.learner.lesson import Lesson
from service.learner.memory import Memory
from service.learner.partition import Ticks
from service.learner.rules import MarketRules, Rules
from tests.builders import line_item

Nanos = NDArray[np.int64]
CAP = 8_000_000
TOP = 10_000_000
RULES = Rules(CAP, market=MarketRules.of(CAP, priced=True))


def terms(**changes: object) -> Terms:
    """A first-price line item whose mean value is its guess of 4 CPM."""
    policy = {"method": "mean"}
    return Terms.from_config(line_item(auction="first", policy=policy, **changes))


def lesson(bid: int, rival: int, auction: str = "first", source: str = "north") -> Lesson:
    """An outcome of an exchange that tells the competing bid of every auction."""
    won = rival <= bid
    body = {"bid": bid, "price": bid if won else None, "to_win": rival, "round": 1}
    kind = "won" if won else "lost"
    return Lesson(kind, {**body, "auction": auction, "source": source})


def taught(*lessons: Lesson) -> Memory:
    """A memory whose market part has read these."""
    return Memory(parts=(("market", market_part.learn(b"", lessons, RULES)),))


def price(made: Ready, **wish: object) -> int:
    """The price for one opportunity."""
    asked = Opportunity("garden", **{"source": "north", **wish})  # type: ignore[arg-type]
    answer = made.propose(asked, default_rng(1))
    assert isinstance(answer, Proposal)
    return answer.price


UNIFORM = taught(*(lesson(CAP, int(rival)) for rival in np.linspace(1, CAP, 4000)))


@pytest.mark.parametrize("value", [1_000_000, 3_000_000, 7_777_777])
def test_half_the_value_is_bid_against_one_uniform_rival(value: int) -> None:
    """Krishna, "Auction Theory": v / 2; here to two ticks of a curve of 4,000 auctions."""
    bid = market_of(UNIFORM, terms(), value).first_price(value, "north", 0, CAP)
    assert bid == pytest.approx(value / 2, abs=2 * TOP / 800)


def test_a_menu_is_searched_as_every_bid_would_be() -> None:
    """Against the function that looks at all bids of all values, floors and caps included."""
    rng = default_rng(2)
    places = np.sort(rng.choice(np.arange(1, 1000), 200, replace=False)).astype(float)
    menu = Menu(places, np.sort(rng.random(200)))
    values = rng.uniform(places[0] + 1, 1200, 300)
    chosen = shading.best(menu.price, menu.chance, values).place
    assert [menu.best(v, 0, 1000) for v in values.tolist()] == menu.price[chosen].tolist()
    for value in values.tolist():
        capped = menu.best(value, 0, 400)
        assert capped is None or capped <= 400
        floored = menu.best(value, 300, 1000)
        assert floored is None or 300 <= floored < value


def test_a_floor_below_the_value_is_bid_where_shading_would_stay_under_it() -> None:
    """At 2 CPM of 4; a floor of 3 is bid itself, one above the value is left alone."""
    made = ready(UNIFORM, terms())
    assert price(made) == pytest.approx(2_000_000, abs=50_000)
    assert price(made, floor=3_000_001) == 3_000_001
    assert price(made, floor=4_100_000) < 4_100_000


def test_each_kind_of_auction_has_its_own_rule_on_one_value() -> None:
    """One value of 4 CPM: bid, shaded, or weighed against the price."""
    made = ready(UNIFORM, terms())
    assert price(made, auction="second") == 4_000_000
    assert price(made, auction="fixed", price=3_500_000) == 3_500_000
    assert price(made, auction="fixed", price=4_000_000) == 4_000_000
    assert price(made, auction="fixed", price=4_000_001) == 4_000_000
    assert price(made) < 2_100_000


def test_a_value_above_the_cap_is_shaded_and_not_cut_first() -> None:
    """Worth 12 CPM at a cap of 8, half of it is 6; cut first it would be 4."""
    rich = terms(value={"expected": {"per_impression": 12_000_000, "conversions": 1}})
    answer = ready(UNIFORM, rich).propose(Opportunity("garden", source="north"), default_rng(1))
    assert isinstance(answer, Proposal)
    assert (answer.set_by, answer.value) == ("value", 12_000_000)
    assert answer.price == pytest.approx(6_000_000, abs=50_000)


def test_nothing_known_is_tried_from_below() -> None:
    """The first bid is a small one, and news of lost bids make the next ones climb."""
    first = price(ready(Memory(), terms()))
    assert 0 < first <= 4_000_000 / 4
    lost = ready(taught(*(lesson(first, 3_000_000) for _ in range(3))), terms())
    assert price(lost) == pytest.approx(3_000_000, abs=12_500)


def test_bare_wins_and_losses_find_the_one_price_that_matters() -> None:
    """A rival who always bids 1.5 CPM is soon beaten by little, though no price is ever told."""
    bare, state, bids = Rules(CAP, market=MarketRules.of(CAP, priced=False)), b"", list[int]()
    for _ in range(120):
        bid = price(ready(Memory(parts=(("market", state),)), terms()))
        won = bid >= 1_500_000
        body = {"bid": bid, "price": bid, "to_win": None, "source": "north", "round": 1}
        told = Lesson("won" if won else "lost", {**body, "auction": "first"})
        state, bids = market_part.learn(state, [told], bare), [*bids, bid]
    assert np.median(bids[-40:]) == 1_600_000
    assert max(bids) < 3_000_000


def earned(rivals: Nanos, value: int, *, priced: bool) -> int:
    """What shading earns on these competing bids, learning every twenty, in nanos."""
    rules, state, surplus = Rules(CAP, market=MarketRules.of(CAP, priced=priced)), b"", 0
    for start in range(0, rivals.size, 20):
        bid = price(ready(Memory(parts=(("market", state),)), terms()))
        lessons = [lesson(bid, rival) for rival in rivals[start : start + 20].tolist()]
        told = [
            one._replace(
                body={**one.body, "to_win": one.body["to_win"] if priced and lost else None}
            )
            for one in lessons
            for lost in [one.kind == "lost"]
        ]
        surplus += sum(value - bid for one in lessons if one.kind == "won")
        state = market_part.learn(state, told, rules)
    return surplus


@pytest.mark.parametrize(("priced", "share"), [(True, 0.95), (False, 0.93)])
def test_shading_earns_most_of_what_the_best_fixed_bid_would_have(
    priced: bool, share: float
) -> None:
    """Lognormal rivals, 5,000 auctions, the bid of hindsight; bidding the value earns nothing."""
    value = 4_000_000
    rivals = np.minimum(1.2e6 * default_rng(7).lognormal(0, 0.6, 5000), 2e7).astype(np.int64) + 1
    bids = np.arange(TOP // 800, value, TOP // 800)
    best = max(((value - bid) * int((rivals <= bid).sum())) for bid in bids.tolist())
    assert share * best <= earned(rivals, value, priced=priced) <= best


def test_a_source_of_its_own_and_one_unknown_are_bid_for_apart() -> None:
    """What the north told says nothing of the south."""
    made = ready(UNIFORM, terms())
    assert price(made, source="south") == price(ready(Memory(), terms()))


def test_second_prices_do_not_speak_for_first_prices() -> None:
    """Rivals who shade bid otherwise, so the two are counted apart."""
    second = taught(*(lesson(CAP, 7_000_000, auction="second") for _ in range(50)))
    assert price(ready(second, terms())) == price(ready(Memory(), terms()))


def test_a_flat_price_is_not_shaded_and_a_fixed_one_weighed_against_it() -> None:
    """Its price is a person's; what is fixed is taken up to it."""
    flat = Terms.from_config(line_item(auction="first"))
    made = ready(UNIFORM, flat)
    assert price(made) == 1_000_000
    assert price(made, auction="fixed", price=900_000) == 900_000


def test_mixed_news_are_drawn_on_fewer_ticks() -> None:
    """Turnbull's estimate of 800 ticks would hold a snapshot back for a second."""
    ticks = Ticks(TOP, TOP // 800)
    mixed = [
        Outcome(bid, rival <= bid, rival if rival <= bid and bid % 2 else None, "never")
        for bid, rival in default_rng(3).integers(1, TOP, (2000, 2)).tolist()
    ]
    told = add(Counts(ticks), [o._replace(feed="on_win" if o.least else "never") for o in mixed])
    assert drawable(told).ticks.cells == CELLS_MIXED
    exact = add(Counts(ticks), [Outcome(5, True, 3, "always")])
    assert drawable(exact) == exact


def test_a_bid_is_looked_up_in_little_time() -> None:
    """Well below a millisecond each on the full menu of a source, whatever the machine."""
    market = market_of(UNIFORM, terms(), 4_000_000)
    begun = perf_counter()
    for value in range(1_000_000, 8_000_000, 7000):
        market.first_price(value, "north", 0, CAP)
    assert (perf_counter() - begun) / 1000 < 1e-3
