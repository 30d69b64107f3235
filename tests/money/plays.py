"""Short plays on one scene that keep every promise, apart from the bugs they are shown with.

A play returns its scene for the audit, and insists by itself on what only it can know.
"""

from __future__ import annotations

from collections.abc import Callable

from service.errors import Conflict
from service.store import clock
from tests.money.scene import BILLING_GRACE_MS, CAP, GRACE_MS, LEASE_MS, Bid, Scene

Stage = Callable[..., Scene]
Play = Callable[[Stage], Scene]
DAY_MS = 24 * 3_600_000


class Unkept(Exception):
    """A play did not go as it has to."""


def insist(seen: object, expected: object) -> None:
    """
    Go on only if it is so.

    Raises:
        Unkept: It is not.
    """
    if seen != expected:
        raise Unkept(f"{seen}, not {expected}")


def a_usual_hour(stage: Stage) -> Scene:
    """A win, a loss, a void and a price above the bid, each in time; then the slice ends."""
    scene = stage(daily_budget=300)
    scene.lease()
    bids = [scene.placed(8) for _ in range(4)]
    told = [scene.told(bids[0], "won", 6), scene.told(bids[1], "lost", 9)]
    scene.book(*told, scene.told(bids[2], "void"), scene.told(bids[3], "won", 11))
    scene.retire()
    scene.pass_ms(LEASE_MS + GRACE_MS)
    scene.close()
    return scene


def a_group_sent_twice(stage: Stage) -> Scene:
    """The exchange repeats a row within a group, and then the whole group."""
    scene = stage()
    scene.lease()
    bid = scene.placed(8)
    for statuses in (["recorded", "duplicate"], ["duplicate"] * 2):
        insist(scene.book(*[scene.told(bid, "won", 6)] * 2), statuses)
    return scene


def a_hand_put_down_twice(stage: Stage) -> Scene:
    """The order to retire is sent again after an answer that was lost; most bids are still out."""
    scene = stage()
    scene.lease()
    for _ in range(6):
        scene.placed()
    scene.retire(times=2)
    return scene


def a_refresh(stage: Stage) -> Scene:
    """All of a slice is bid, half a lease later all of the next, and every bid is won."""
    scene = stage()
    for _ in range(2):
        scene.lease()
        for _ in range(12):
            scene.bid()
        scene.pass_ms(LEASE_MS // 2)
    scene.book(*[scene.told(bid, "won", bid.hold) for bid in scene.bids])
    scene.retire()
    return scene


def a_win_after_grace(stage: Stage) -> Scene:
    """Its money was leased again, so it is unfunded until the operator raises the budget."""
    scene = stage(budget=100)
    bid = _reopened(scene)
    scene.lease_everything()
    insist(scene.tell(bid, "won", 7), "late")
    scene.edit(budget=200)
    return scene


def a_win_after_grace_on_a_full_day(stage: Stage) -> Scene:
    """The budget has the money but the day has not, so the day leases so much less."""
    scene = stage(daily_budget=20)
    bid = _reopened(scene)
    scene.lease_everything()
    scene.tell(bid, "won", 7)
    scene.pass_ms(LEASE_MS + GRACE_MS)
    scene.close()
    scene.lease_everything()
    insist(scene.day()["held"], 13)
    return scene


def the_last_moment_of_grace(stage: Stage) -> Scene:
    """A millisecond before its slice closes a bid still has its hold."""
    scene = stage()
    scene.lease()
    bid = scene.placed(8)
    scene.pass_ms(LEASE_MS + GRACE_MS - 1)
    scene.close()
    insist(scene.tell(bid, "won", 8), "recorded")
    return scene


def a_bill_at_the_last_moment(stage: Stage) -> Scene:
    """A millisecond before billing grace is over what is owed is still set aside."""
    scene = stage("billed", budget=100)
    scene.lease()
    bid = scene.placed(8)
    scene.tell(bid, "won", 7)
    scene.crash()
    scene.pass_ms(LEASE_MS + GRACE_MS + BILLING_GRACE_MS - 1)
    scene.close()
    scene.lease_everything()
    scene.tell(bid, "billed", 7)
    insist(scene.balance()["unfunded"], 0)
    return scene


def a_bill_after_its_grace(stage: Stage) -> Scene:
    """What was owed is free again and leased, while another bid of the slice is owed still less."""
    scene = stage("billed", budget=100)
    scene.lease()
    bid = scene.placed(8)
    scene.tell(bid, "won", 7)
    scene.crash()
    scene.pass_ms(LEASE_MS + GRACE_MS + BILLING_GRACE_MS)
    scene.close()
    scene.lease_everything()
    scene.tell(bid, "billed", 7)
    return scene


def a_bill_above_its_win(stage: Stage) -> Scene:
    """The difference was never set aside, and everything else is leased by then."""
    scene = stage("billed", budget=100)
    scene.lease()
    bid = scene.placed(8)
    scene.tell(bid, "won", 5)
    scene.lease_everything()
    scene.tell(bid, "billed", 11)
    return scene


def a_bill_before_its_win(stage: Stage) -> Scene:
    """The bill pays, the win that comes after it only teaches."""
    scene = stage()
    scene.lease()
    bid = scene.placed(8)
    for kind in ("billed", "won"):
        scene.tell(bid, kind, 6)
    return scene


def a_loss_with_an_early_value(stage: Stage) -> Scene:
    """A value waits for the win that never was; its bid still gives its hold back."""
    scene = stage()
    scene.lease()
    bid = scene.placed(8)
    insist(scene.value(bid, "a", 5), "parked")
    insist(scene.tell(bid, "lost", 9), "recorded")
    return scene


def a_win_and_its_bill_at_once(stage: Stage) -> Scene:
    """One group tells of a win, of its bill and of another win; all else is leased by then."""
    scene = stage("billed", budget=100)
    scene.lease()
    one, two = scene.placed(8), scene.placed(8)
    scene.lease_everything()
    scene.book(scene.told(one, "won", 6), scene.told(one, "billed", 6), scene.told(two, "won", 5))
    return scene


def a_win_called_off(stage: Stage) -> Scene:
    """A win that nobody billed yet is void after all."""
    scene = stage("billed")
    scene.lease()
    bid = scene.placed(8)
    scene.tell(bid, "won", 6)
    scene.tell(bid, "void")
    return scene


def a_loss_won_twice(stage: Stage) -> Scene:
    """Two different wins come after a loss: one bid costs once."""
    scene = stage()
    scene.lease()
    bid = scene.placed(8)
    scene.tell(bid, "lost", 9)
    for price in (6, 5):
        insist(scene.tell(bid, "won", price), "conflict")
    return scene


def a_budget_lowered(stage: Stage) -> Scene:
    """Below what is spent it is refused; above it falls with what comes free."""
    scene = stage(budget=100)
    scene.lease()
    scene.tell(scene.placed(8), "won", 8)
    try:
        scene.edit(budget=7)
    except Conflict:
        scene.edit(budget=10)
    else:
        raise Unkept("a budget below what is spent was taken")
    scene.retire()
    insist(scene.lease("two"), 2)
    return scene


def a_slice_at_midnight(stage: Stage) -> Scene:
    """Leased four seconds before it, no price may leave on the next day."""
    scene = stage()
    scene.wall_ms += DAY_MS // 2 - 4000
    scene.lease()
    scene.pass_ms(4000)
    insist(scene.bid(), None)
    return scene


def a_slice_at_its_end(stage: Stage) -> Scene:
    """No price leaves from it, or its bids would have less than their grace."""
    scene = stage()
    scene.lease()
    scene.pass_ms(LEASE_MS)
    insist(scene.bid(), None)
    return scene


def a_day_away(stage: Stage) -> Scene:
    """The database was away for a day, and no bid has aged by it."""
    scene = stage()
    scene.lease()
    bid = scene.placed(8)
    for _ in range(2):
        scene.database.write(lambda connection: clock.advance(connection, scene.wall_ms))
        scene.wall_ms += DAY_MS
    scene.close()
    insist(scene.tell(bid, "won", 8), "recorded")
    return scene


def a_crash_loop(stage: Stage) -> Scene:
    """A worker dies again and again: soon only slices of one bid are leased."""
    scene = stage(budget=10_000)
    for turn in range(8):
        amount = scene.lease(f"turn {turn}")
        scene.pass_ms(LEASE_MS + 1)
    insist(amount, CAP)
    return scene


def _reopened(scene: Scene) -> Bid:
    """A bid whose worker died and whose slice was closed, so that its hold is gone."""
    scene.lease()
    bid = scene.placed(8)
    scene.crash()
    scene.pass_ms(LEASE_MS + GRACE_MS)
    insist(scene.close(), 1)
    return bid
