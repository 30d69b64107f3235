"""One test for each moment at which money is in danger; random steps alone seldom meet them."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import closing

import pytest
from sqlalchemy import text

from service.errors import BrokenPromise, Conflict
from service.store import clock
from service.store.database import Database
from tests.money.scene import BILLING_GRACE_MS, GRACE_MS, LEASE_MS, Bid, Scene

Stage = Callable[..., Scene]
CLOSE_MS = LEASE_MS + GRACE_MS
HOUR_MS = 3_600_000


@pytest.fixture
def stage(migrated_url: str) -> Iterator[Stage]:
    """Opens the one scene of a test; its audit and the exchange's books must agree at the end."""
    with closing(Database(migrated_url, pool_size=2)) as database:
        opened: list[Scene] = []

        def opens(spend_on: str = "won", **changes: object) -> Scene:
            opened.append(Scene(database, spend_on, **changes))
            return opened[0]

        yield opens
        assert [one.faults() for one in opened] == [[]]


def money(played: Scene) -> tuple[int, int, int]:
    """Spent, held and unfunded."""
    balance = played.balance()
    return balance["spent"], balance["held"], balance["unfunded"]


def alter(played: Scene, statement: str) -> None:
    """Change the database behind the back of the rules."""
    played.database.write(lambda connection: connection.execute(text(statement)))


def tick(played: Scene) -> None:
    """Move service time on as upkeep does, by what the wall clock shows."""
    played.database.write(lambda connection: clock.advance(connection, played.wall_ms))


def reopened(played: Scene) -> Bid:
    """A bid whose worker died and whose slice was closed, so that its hold is gone."""
    played.lease()
    bid = played.placed(8)
    played.crash()
    played.pass_ms(CLOSE_MS)
    assert played.close() == 1
    return bid


def test_a_late_win_takes_free_money(stage: Stage) -> None:
    """After closing, a win is spent if money is free, and the receipt says late."""
    played = stage()
    bid = reopened(played)

    assert money(played) == (0, 0, 0)
    assert played.tell(bid, "won", 7) == "late"
    assert money(played) == (7, 0, 0)


def test_a_late_win_never_passes_the_budget_when_the_money_was_leased_again(stage: Stage) -> None:
    """It is unfunded, the line item freezes and says why, and a raised budget pays it first."""
    played = stage(budget=100)
    bid = reopened(played)
    played.lease_everything()

    assert money(played) == (0, 100, 0)
    assert played.tell(bid, "won", 7) == "late"
    assert money(played) == (0, 100, 7)
    freeze = "SELECT source || ': ' || reason FROM freezing"
    assert played.one(freeze) == "tripwire: 0.000000007 EUR found no free money"
    assert played.one("SELECT count(*) FROM journal WHERE reason = 'unfunded'") == 1
    assert played.tell(bid, "won", 7) == "duplicate"
    played.edit(budget=104)
    assert money(played) == (4, 100, 3)
    played.edit(budget=200)
    assert money(played) == (7, 100, 0)


@pytest.mark.parametrize("first", ["retire", "win"])
def test_a_win_may_race_the_retiring_of_its_slice(stage: Stage, first: str) -> None:
    """In either order the win has its hold and only what was never issued comes free."""
    played = stage()
    amount = played.lease()
    bid = played.placed(8)
    played.placed(5)
    played.hand().retire_all()
    if first == "retire":
        played.give_back()
    assert played.tell(bid, "won", 6) == "recorded"
    played.give_back()

    assert amount > 13
    assert money(played) == (6, 5, 0)


def test_a_slice_that_is_retired_twice_comes_free_once(stage: Stage) -> None:
    """Nor does a third time, after outcomes, free anything."""
    played = stage()
    played.lease()
    bid = played.placed(8)
    held = played.hand().slices["garden"]
    played.retire(times=2)
    assert money(played) == (0, 8, 0)
    played.tell(bid, "lost")
    played.hand().receive(held)
    played.retire()

    assert money(played) == (0, 0, 0)


@pytest.mark.parametrize(("offset_ms", "status"), [(-1, "recorded"), (0, "late"), (1, "late")])
def test_a_slice_closes_at_its_grace_to_the_millisecond(
    stage: Stage, offset_ms: int, status: str
) -> None:
    """One millisecond before, the hold is there; at the moment itself it is gone."""
    played = stage()
    played.lease()
    bid = played.placed(8)
    played.pass_ms(CLOSE_MS + offset_ms)

    assert played.close() == int(offset_ms >= 0)
    assert played.tell(bid, "won", 8) == status


@pytest.mark.parametrize(("offset_ms", "passes"), [(-1, False), (0, True), (1, True)])
def test_no_price_leaves_at_or_after_the_end_of_a_slice(
    stage: Stage, offset_ms: int, passes: bool
) -> None:
    """The last bid leaves a millisecond before; so no bid is younger than its slice."""
    played = stage()
    played.lease()
    played.pass_ms(LEASE_MS + offset_ms)

    assert (played.bid(8) is None) is passes


def test_the_last_bid_has_its_whole_grace(stage: Stage) -> None:
    """A bid of the last moment that is won after all of its grace is not late."""
    played = stage()
    played.lease()
    played.pass_ms(LEASE_MS - 1)
    bid = played.placed(8)
    played.pass_ms(GRACE_MS)
    played.close()

    assert played.tell(bid, "won", 8) == "recorded"


@pytest.mark.parametrize(("offset_ms", "billed"), [(-1, (7, 0, 0)), (0, (0, 100, 7))])
def test_what_is_owed_is_held_until_billing_grace_is_over(
    stage: Stage, offset_ms: int, billed: tuple[int, int, int]
) -> None:
    """A bill within it finds its money; a later one finds what is left, here none."""
    played = stage("billed", budget=100)
    played.lease()
    bid = played.placed(8)
    played.tell(bid, "won", 7)
    played.crash()
    played.pass_ms(CLOSE_MS + BILLING_GRACE_MS + offset_ms)
    played.close()
    if offset_ms >= 0:
        played.lease_everything()

    assert played.tell(bid, "billed", 7) == "recorded"
    assert money(played) == billed


def test_an_outage_closes_nothing(stage: Stage) -> None:
    """The wall clock may jump by a day: service time moves on by two seconds at most."""
    played = stage()
    played.lease()
    bid = played.placed(8)
    tick(played)
    for jump_ms in (24 * HOUR_MS, -48 * HOUR_MS, 24 * HOUR_MS + 1):
        played.wall_ms += jump_ms
        tick(played)
        assert played.close() == 0

    assert played.one("SELECT now_ms FROM service_clock") <= 3 * clock.STEP_MS_MAX
    assert played.tell(bid, "won", 8) == "recorded"


def test_a_group_may_be_repeated_after_an_answer_that_was_lost(stage: Stage) -> None:
    """Whether it was booked or not, the second time it stands once."""
    played = stage()
    played.lease()
    won, lost, void, paid = (played.placed(4) for _ in range(4))
    group = [
        *(played.told(won, "won", 3), played.told(lost, "lost", 9), played.told(void, "void")),
        *(played.told(paid, "billed", 4), played.told(won, "won", 3)),
    ]

    assert played.book(*group) == [*["recorded"] * 4, "duplicate"]
    before = played.balance()
    assert played.book(*group) == ["duplicate"] * 5
    assert played.balance() == before


def test_a_group_that_cannot_be_written_leaves_nothing(stage: Stage) -> None:
    """One row of it breaks a guard, so not one of them is there; when that is mended all are."""
    played = stage()
    played.lease()
    group = [played.told(played.placed(8), "lost") for _ in range(2)]
    before = played.balance()
    alter(played, "UPDATE slice SET remaining = remaining - 90")
    with pytest.raises(BrokenPromise, match="the guard of a slice"):
        played.book(*group)
    assert played.balance() == before
    alter(played, "UPDATE slice SET remaining = remaining + 90")

    assert played.book(*group) == ["recorded"] * 2


def test_the_day_of_a_bid_is_the_day_of_its_slice(stage: Stage) -> None:
    """A win that comes tomorrow counts against yesterday's budget, not against today's."""
    played = stage(daily_budget=60)
    played.lease()
    bid = played.placed(8)
    yesterday = played.wall_ms
    played.wall_ms += 24 * HOUR_MS
    played.pass_ms(LEASE_MS)
    played.lease()
    today = played.day()
    assert played.tell(bid, "won", 7) == "recorded"

    assert played.day() == today
    played.wall_ms = yesterday
    assert played.day()["spent"] == 7


def test_a_slice_ends_with_its_local_day(stage: Stage) -> None:
    """Leased four seconds before midnight it can be used for four seconds."""
    played = stage(flight={"time_zone": "Asia/Kathmandu"})
    played.wall_ms += 6 * HOUR_MS + 15 * 60_000 - 4000
    played.lease()
    played.pass_ms(3999)
    assert played.bid(1) is not None
    played.pass_ms(1)
    assert played.bid(1) is None


def test_a_late_win_that_the_day_cannot_take_counts_beside_it(stage: Stage) -> None:
    """It is spent, the day's own limit stands, and the day leases so much less."""
    played = stage(daily_budget=20)
    bid = reopened(played)
    played.lease_everything()
    assert played.day()["held"] == 20
    assert played.tell(bid, "won", 7) == "late"

    day = played.day()
    assert (day["spent"], day["over_spent"]) == (0, 7)
    played.pass_ms(CLOSE_MS)
    played.close()
    played.lease_everything()
    assert played.day()["held"] == 13


def test_silent_slices_of_a_strict_line_item_stay_open(stage: Stage) -> None:
    """Its money may be stranded, but no win of it is ever late."""
    played = stage(strict=True)
    amount = played.lease()
    bid = played.placed(8)
    played.crash()
    played.pass_ms(1000 * (CLOSE_MS + BILLING_GRACE_MS))

    assert played.close() == 0
    assert money(played) == (0, amount, 0)
    assert played.tell(bid, "won", 8) == "recorded"


def test_a_lowered_budget_falls_with_its_holds(stage: Stage) -> None:
    """Nothing is leased above it meanwhile, and below what is spent it is refused."""
    played = stage(budget=100)
    played.lease()
    bid = played.placed(8)
    played.tell(bid, "won", 8)
    with pytest.raises(Conflict, match="spent already"):
        played.edit(budget=7)
    played.edit(budget=8)
    assert (played.balance()["budget"], played.balance()["target"]) == (25, 8)
    assert played.lease("two") == 0
    played.retire()

    assert played.balance()["budget"] == 8
    assert played.lease("two") == 0


def test_a_price_above_the_bid_costs_the_bid(stage: Stage) -> None:
    """What goes beyond is disputed: neither spent nor dropped."""
    played = stage(budget=100)
    played.lease()
    bid = played.placed(8)
    played.tell(bid, "won", 1_000_000)

    assert played.balance()["disputed"] == 999_992
    assert played.balance()["spent"] == 8


def test_a_ticket_of_another_incarnation_takes_the_late_way(stage: Stage) -> None:
    """Its slice is not looked at, so the hold of whoever has that id now is safe."""
    played = stage()
    amount = played.lease()
    bid = played.placed(8)

    assert played.tell(bid, "won", 7, here=False) == "late"
    assert money(played) == (7, amount, 0)


def test_the_money_of_a_dead_worker_comes_back_after_grace(stage: Stage) -> None:
    """Whatever was in its hands, known and unknown bids alike, is free again."""
    played = stage()
    for worker in ("one", "two", "three"):
        played.lease(worker)
        played.placed(8, worker)
        played.crash(worker)
    assert money(played)[1] > 0
    played.pass_ms(CLOSE_MS)

    assert played.close() == 3
    assert money(played) == (0, 0, 0)


def test_a_crash_loop_strands_little(stage: Stage) -> None:
    """When a twentieth is held by the dead, only slices of one bid are leased."""
    played = stage(budget=10_000)
    played.lease("first")
    played.pass_ms(LEASE_MS)
    leased = []
    for turn in range(40):
        leased.append(played.lease(f"turn {turn}"))
        played.pass_ms(LEASE_MS + 1)

    assert leased[-1] == 10
    assert money(played)[1] <= 10_000 // 20 + 160 + 40 * 10
