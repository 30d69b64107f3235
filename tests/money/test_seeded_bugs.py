"""Bugs put on purpose into the rules of money, one at a time: the net has to catch each."""

from __future__ import annotations

import inspect
import re
import textwrap
from collections.abc import Iterator
from contextlib import closing
from dataclasses import dataclass
from typing import Any

import pytest
from sqlalchemy import TextClause, text

from service.errors import BrokenPromise
from service.guard.hand import Hand, SliceInHand
from service.ledger import settle
from service.ledger.accounts import Account, Day
from service.ledger.runs import Run
from service.store import clock, leases, line_items, outcomes
from service.store.books import Books
from service.store.database import Database
from service.store.known import Known
from tests.money import plays
from tests.money.plays import Play, Stage, Unkept
from tests.money.scene import Scene

EXTENDED = """\
old = self.slices.get(fresh.line_item)
    if old is not None:
        old.amount, old.expires_at = old.amount + fresh.amount, fresh.expires_at
        return"""


@dataclass(frozen=True)
class Bug:
    """
    A piece of the text of a rule, and what stands there instead.

    Args:
        play: The play in which it shows.
        seen: Who sees it: checks of the audit, the books of the exchange, a guard of the
            database, or the play alone.
    """

    name: str
    owner: Any
    rule: str
    text: str
    instead: str
    play: Play
    seen: str

    def break_it(self) -> Any:
        """
        The rule with the bug in it.

        Raises:
            ValueError: The text of the rule has changed, so this bug has to change with it.
        """
        rule = getattr(self.owner, self.rule)
        if isinstance(rule, TextClause):
            return text(self._altered(str(rule)))
        source = textwrap.dedent(inspect.getsource(getattr(rule, "fget", rule)))
        home = getattr(rule, "fget", rule).__globals__
        made = dict[str, Any]()
        code = compile(self._altered(source), self.name, "exec")
        exec(code, home, made)  # noqa: S102 - our own source, altered by this table alone.
        return made[self.rule]

    def _altered(self, source: str) -> str:
        if source.count(self.text) != 1:
            raise ValueError(f"{self.rule} does not hold {self.text!r} once")
        return source.replace(self.text, self.instead)


BUGS = [
    Bug("a slice is extended", Hand, "receive",
        "self.retire(fresh.line_item)", EXTENDED, plays.a_refresh, "guard"),
    Bug("a bid is not taken out of its slice", SliceInHand, "free",
        "self.amount - self.issued", "self.amount", plays.a_refresh, "guard"),
    Bug("a slice is used after its end", Hand, "usable",
        "now >= held.expires_at", "now > held.expires_at", plays.a_slice_at_its_end, "play"),
    Bug("a slice outlives its day", leases, "_lease_ms",
        "min(lease_ms, left_ms(wall_ms, flight[\"time_zone\"]))", "lease_ms",
        plays.a_slice_at_midnight, "play"),
    Bug("a hold is freed twice", leases, "_retire",
        'or found.state != "open"', "", plays.a_hand_put_down_twice, "V7"),
    Bug("holds of open bids are freed", leases, "_retire",
        "found.amount - report.issued", "found.amount", plays.a_refresh, "guard"),
    Bug("a lease is not held", leases._Lenders, "lend",
        "Movement(held=amount)", "Movement()", plays.a_usual_hour, "guard"),
    Bug("a lease is not held on its day", leases._Lenders, "lend",
        "Movement(held=amount), day=day.day)", "Movement(held=amount))",
        plays.a_usual_hour, "guard"),
    Bug("what is held is leased again", Account, "free",
        "self.target - self.spent - self.held", "self.target - self.spent",
        plays.a_win_after_grace, "guard"),
    Bug("the dead are forgotten", leases._Lenders, "_orphaned",
        "NOT IN :live", "IN :live", plays.a_crash_loop, "play"),
    Bug("grace is forgotten", leases, "_times_ms",
        'expires + config["grace_ms"]', "expires", plays.the_last_moment_of_grace, "play"),
    Bug("closing releases all that was leased", leases, "_close",
        "found.remaining if bids", "found.amount if bids", plays.a_usual_hour, "guard"),
    Bug("a closed slice is used again", leases, "_close",
        'found._replace(state="closed")', "found", plays.a_win_after_grace, "guard"),
    Bug("billing grace is grace", leases, "_times_ms",
        'close + config["billing_grace_ms"]', "close", plays.a_bill_at_the_last_moment, "play"),
    Bug("service time jumps", clock, "advance",
        "min(max(0, wall_ms - row.seen_ms), step_ms_max)", "wall_ms - row.seen_ms",
        plays.a_day_away, "play"),
    Bug("a win frees what it cost", settle, "of_open",
        "held=owed - hold", "held=-cost", plays.a_usual_hour, "V2 V7"),
    Bug("a win is not taken out of its slice", settle, "of_open",
        "remaining=-hold", "remaining=0", plays.a_group_sent_twice, "V2"),
    Bug("a win is not spent on its day", settle, "of_open",
        "day_spent=cost", "day_spent=0", plays.a_usual_hour, "V7"),
    Bug("a price above the bid is spent", settle, "shares",
        "min(price, hold), 0, max(0, price - hold)", "price, 0, 0",
        plays.a_usual_hour, "V7"),
    Bug("a price above the bid is dropped", settle, "of_open",
        ", disputed=excess", "", plays.a_usual_hour, "V3 V7 exchange"),
    Bug("a loss frees nothing", Run, "take",
        "self.hold += outcome.hold", "self.hold += outcome.hold if cost else 0",
        plays.a_usual_hour, "V7"),
    Bug("a loss told beside other outcomes frees nothing", settle, "_first_movement",
        "of_open(outcome.hold,", "of_open(outcome.hold if outcome.kind == 'won' else 0,",
        plays.a_loss_with_an_early_value, "V7"),
    Bug("sums of a slice are booked for its last row alone", Run, "take",
        "self.cost += cost", "self.cost = cost", plays.a_usual_hour, "V3 V7 exchange"),
    Bug("sums of a slice are booked twice", outcomes._Group, "_post_runs",
        "self._runs = {}", "pass", plays.a_win_and_its_bill_at_once, "V7"),
    Bug("sums of a slice come after what is decided on them", outcomes._Group, "_one",
        "self._post_runs()", "pass", plays.a_win_and_its_bill_at_once, "V7"),
    Bug("a late win is free", settle, "_pay",
        "late_cost(place.account, place.day, cost)", "NOTHING",
        plays.a_win_after_grace, "V7 exchange"),
    Bug("a late win looks at no budget", settle, "late_cost",
        "account.budget - account.spent - account.held < cost", "False",
        plays.a_win_after_grace, "guard"),
    Bug("a late win looks at no day", settle, "late_cost",
        "min(cost, day.room)", "cost", plays.a_win_after_grace_on_a_full_day, "guard"),
    Bug("a day forgets its late costs", Day, "free",
        " - self.over_spent", "", plays.a_win_after_grace_on_a_full_day, "play"),
    Bug("a repeat is booked again", outcomes, "settle",
        'place.slots.get("result")', "None", plays.a_group_sent_twice, "guard"),
    Bug("a group does not know its own rows", Known, "keep",
        "if entry.slot is not None:", "if False:", plays.a_group_sent_twice, "guard"),
    Bug("a bill and its win both cost", settle, "_first_result",
        "NOTHING if billed_before else", "", plays.a_bill_before_its_win, "V7 exchange"),
    Bug("a void leaves what a win owed", settle, "_void_of_win",
        "Movement(held=-owed, owed=-owed) if has_owed else NOTHING", "NOTHING",
        plays.a_win_called_off, "V7"),
    Bug("a bill takes what is no longer set aside", settle, "_billing",
        "place.slice.owed < owed or", "", plays.a_bill_after_its_grace, "guard"),
    Bug("a bill above its win finds money", settle, "_billing",
        "late_cost(account, day, beyond)", "Movement(spent=beyond)",
        plays.a_bill_above_its_win, "guard"),
    Bug("a win after a loss is free", outcomes, "settle",
        'pays=outcome.kind == "won" and taken[0] != "won"', "pays=False",
        plays.a_loss_won_twice, "V7 exchange"),
    Bug("a win after a loss costs each time", settle, "_paid_by_conflict",
        "any(", "False and any(", plays.a_loss_won_twice, "V7 exchange"),
    Bug("an entry does not name its cost", outcomes._Group, "_first",
        '"result", cost', '"result"', plays.a_usual_hour, "V3"),
    Bug("an entry of a late win does not name its cost", settle, "_first_result",
        '"result", movement.cost', '"result"', plays.a_win_after_grace, "V3"),
    Bug("a seq is left out", Books, "append",
        "account.seq) + 1", "account.seq) + 2", plays.a_usual_hour, "V5"),
    Bug("unfunded cost is not counted", Account, "moved",
        "self.unfunded + movement.unfunded", "self.unfunded",
        plays.a_win_after_grace, "V3 V7 exchange"),
    Bug("a budget below what is spent is taken", line_items, "set_budget",
        "if budget < account.spent:", "if False:", plays.a_budget_lowered, "play"),
    Bug("a lowered budget does not fall", Account, "moved",
        "if self.budget > self.target else", "if False else", plays.a_budget_lowered, "V1"),
    Bug("a lowered budget is not a target", line_items, "set_budget",
        "target=budget", "target=max(budget, account.target)", plays.a_budget_lowered, "guard"),
    Bug("new money does not pay old debt", line_items, "set_budget",
        "min(account.unfunded,", "min(0,", plays.a_win_after_grace, "V7"),
]  # fmt: skip
PLAYS = {bug.play.__name__: bug.play for bug in BUGS}


@pytest.fixture
def stage(migrated_url: str) -> Iterator[Stage]:
    """Opens the one scene of a test."""
    with closing(Database(migrated_url, pool_size=2)) as database:
        yield lambda spend_on="won", **terms: Scene(database, spend_on, **terms)


def seen_by(play: Play, stage: Stage) -> set[str]:
    """Who saw something wrong with a play; nobody when all went well."""
    try:
        faults = play(stage).faults()
    except BrokenPromise:
        return {"guard"}
    except Unkept:
        return {"play"}
    return set(re.findall(r"^(?:V\d|exchange)", "\n".join(faults), re.M))


@pytest.mark.parametrize("play", PLAYS.values(), ids=PLAYS)
def test_a_play_without_a_bug_shows_no_fault(stage: Stage, play: Play) -> None:
    """So what is seen below comes from the bugs."""
    assert seen_by(play, stage) == set()


@pytest.mark.parametrize("bug", BUGS, ids=lambda bug: bug.name)
def test_a_bug_is_caught(stage: Stage, monkeypatch: pytest.MonkeyPatch, bug: Bug) -> None:
    """Each is seen by exactly those who are there to see it."""
    monkeypatch.setattr(bug.owner, bug.rule, bug.break_it())
    assert seen_by(bug.play, stage) == set(bug.seen.split())
