"""The real auctions are read where they lie, cleaned for stated reasons, and scaled exactly."""

from __future__ import annotations

import math
from collections import Counter

import pytest

from service.commands import timber
from service.commands.timber import Lot

FAULTS = [
    (Lot(100.0, (110.0, 90.0)), None),
    (Lot(100.0, (2000.0, 90.0)), None),
    (Lot(100.0, (2000.1, 90.0)), "a bid above 20 x the advertised value"),
    (Lot(math.nan, (110.0, 90.0)), "not a finite number"),
    (Lot(100.0, (math.inf, 90.0)), "not a finite number"),
    (Lot(0.0, (110.0, 90.0)), "no advertised value"),
    (Lot(100.0, (110.0, 0.0)), "a bid not above zero"),
    (Lot(100.0, (110.0,)), "a single bidder"),
]


@pytest.fixture(name="lots", scope="module")
def _lots() -> list[Lot]:
    return timber.read(timber.DISTRIBUTION)


def test_the_package_carries_the_auctions_that_it_is_known_for(lots: list[Lot]) -> None:
    """16,469 auctions, 60,758 bids, two to nine bidders: so its data are the published ones."""
    assert (len(lots), sum(len(lot.bids) for lot in lots)) == (16_469, 60_758)
    assert Counter(len(lot.bids) for lot in lots) == {
        2: 5164,
        3: 4159,
        4: 2778,
        5: 1894,
        6: 1095,
        7: 637,
        8: 336,
        9: 406,
    }


@pytest.mark.parametrize(("lot", "reason"), FAULTS)
def test_an_absurd_lot_is_named(lot: Lot, reason: str | None) -> None:
    """The limit itself is still sound."""
    assert timber.fault(lot) == reason


def test_absurd_lots_are_dropped_and_counted(lots: list[Lot]) -> None:
    """68 of the real ones; what is played and what is dropped is everything."""
    played, dropped = timber.auctions(lots, "timber", 7)
    assert dropped == {"a bid above 20 x the advertised value": 68}
    assert len(played) + dropped.total() == len(lots)


def test_the_highest_other_bid_competes_with_ours() -> None:
    """Both are scaled by the advertised value: one times is 1 CPM, a million nanos."""
    ((auction,), dropped) = timber.auctions([Lot(200.0, (250.0, 300.0, 100.0))], "timber", 1)
    pairs = {(300, 250), (250, 300), (300, 100)}
    assert (auction.rival, auction.value) in {(a * 5000, b * 5000) for a, b in pairs}
    assert dropped == Counter()


def test_every_bidder_may_be_us() -> None:
    """Over many equal lots each place is chosen about as often."""
    played, _ = timber.auctions([Lot(1.0, (1.0, 2.0, 3.0))] * 3000, "timber", 5)
    chosen = Counter(auction.value for auction in played)
    assert set(chosen) == {1_000_000, 2_000_000, 3_000_000}
    assert min(chosen.values()) > 850


def test_the_seed_chooses_our_bidders(lots: list[Lot]) -> None:
    """The same seed chooses the same, and dropping a lot moves no other choice."""
    first, _ = timber.auctions(lots[:500], "timber", 7)
    assert first == timber.auctions(lots[:500], "timber", 7)[0]
    assert first != timber.auctions(lots[:500], "timber", 8)[0]
    broken = [Lot(0.0, lots[0].bids), *lots[1:500]]
    assert timber.auctions(broken, "timber", 7)[0] == first[1:]


def test_a_missing_package_is_named_in_one_sentence() -> None:
    """The sentence says how to get it."""
    with pytest.raises(timber.DataMissing, match=r"no-such-thing-here is not installed.*real"):
        timber.read("no-such-thing-here")


def test_a_package_without_the_file_is_named() -> None:
    """A later version may carry the data elsewhere."""
    with pytest.raises(timber.DataMissing, match=r"does not carry haile_data\.csv"):
        timber.read("pytest")
