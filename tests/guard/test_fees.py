"""Fees: what a price costs, and the largest price that a cost allows."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as some

from service.guard.fees import NONE, Fees

fees = some.builds(Fees, some.integers(0, 10**9), some.integers(0, 10**9))


def test_a_share_and_a_flat_fee_by_hand() -> None:
    """12 % and 0.15 CPM on a price of 2 CPM cost 2.39 CPM."""
    assert Fees(120_000_000, 150_000).gross(2_000_000) == 2_390_000
    assert Fees(120_000_000, 150_000).net(2_390_000) == 2_000_000
    assert Fees.of({"share": 120_000_000}) == Fees(120_000_000, 0)
    assert Fees.of(None) == NONE


@given(fees, some.integers(0, 10**15))
def test_a_cost_allows_the_largest_price_within_it(one: Fees, cost: int) -> None:
    """One nano more would cost more; and every price is found again from its cost."""
    net = one.net(cost)
    assert one.gross(net) <= cost < one.gross(net + 1)
    assert one.net(one.gross(cost)) == cost
    assert NONE.net(cost) == NONE.gross(cost) == cost
