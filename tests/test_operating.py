"""The fourth story over a real database: orders, what they change, and what the journal keeps."""

from __future__ import annotations

import asyncio
import json
from typing import Any

import pytest

from service.errors import (
    BidkeelError,
    Conflict,
    Malformed,
    NeedsConfirmation,
    NotFound,
    Stale,
)
from service.feedback import Report
from service.ledger.accounts import NO_LIMIT
from tests.builders import (
    CAP,
    LEASE_S,
    NAME,
    PRICE,
    UNIT,
    Worker,
    line_item,
    running_beside,
    working,
)

pytestmark = pytest.mark.anyio

MEAN = {"method": "mean"}
RARE = {"ceiling": 21 * CAP, "typical": 20_000_000}


async def patch(worker: Worker, changed: dict[str, Any], version: int = 1) -> Any:
    """Change the line item as somebody who has seen this version."""
    return await worker.operator.patch(NAME, changed, version, None, "a try", "tester")


def journal(worker: Worker) -> list[tuple[str, str, str, str]]:
    """Action, line item, actor and reason of every row, oldest first."""
    columns = [
        worker.column(f"SELECT {name} FROM journal ORDER BY number")  # noqa: S608
        for name in ("action", "line_item", "actor", "reason")
    ]
    return list(zip(*columns, strict=True))


def detail(worker: Worker) -> Any:
    """Before and after of the newest journal row."""
    return json.loads(worker.column("SELECT detail FROM journal ORDER BY number")[-1])


async def test_a_new_line_item_may_bid_at_once(migrated_url: str) -> None:
    """It is stored with what was filled in, and the answer names that."""
    async with working(migrated_url) as worker:
        wish = line_item(policy=None, value={"ceiling": None, "typical": None, "expected": None})
        view = await worker.operator.create(wish, None, "tester")
        assert (view.id, view.version, view.freezes) == (NAME, 1, [])
        assert view.defaults == [
            *("value.ceiling", "policy.method", "policy.gamma", "value.typical"),
            *("value.expected.per_impression", "value.expected.conversions", "allowance"),
        ]
        assert view.config["value"]["ceiling"] == 20 * CAP
        assert view.config["policy"]["method"] == "kl-ucbid"
        assert "conversions at break-even" in view.learnability
        assert (await worker.bid()).bid is not None
        assert journal(worker) == [("create", NAME, "tester", "a new line item")]
        assert detail(worker) == {"after": view.config}


@pytest.mark.parametrize(
    ("changes", "error", "code"),
    [
        ({"policy": {"method": "guess"}}, Malformed, "bad_setting"),
        ({"policy": {"method": "flat", "price": CAP + 1}}, Malformed, "bad_setting"),
        ({"policy": {"method": "kl-ucbid"}, "value": RARE}, NeedsConfirmation, "learning_cost"),
    ],
)
async def test_what_cannot_work_is_refused_and_leaves_nothing(
    migrated_url: str, changes: dict[str, Any], error: type[BidkeelError], code: str
) -> None:
    """A method we lack, a setting it cannot take, a cost that needs the word."""
    async with working(migrated_url) as worker:
        with pytest.raises(error) as refused:
            await worker.create(**changes)
        assert getattr(refused.value, "code", None) == code
        assert worker.column("SELECT id FROM line_item") == journal(worker) == []
        with pytest.raises(NotFound):
            await worker.operator.get(NAME)


async def test_the_word_confirms_a_cost(migrated_url: str) -> None:
    """The refusal names the word, and with it the line item is made."""
    async with working(migrated_url) as worker:
        wish = line_item(policy={"method": "kl-ucbid"}, value=RARE)
        with pytest.raises(NeedsConfirmation) as refused:
            await worker.operator.create(wish, None, "tester")
        word = str(refused.value.data["confirm"])
        assert (await worker.operator.create(wish, word, "tester")).version == 1


async def test_an_id_is_taken_once(migrated_url: str) -> None:
    """A second line item of one id is a conflict."""
    async with working(migrated_url) as worker:
        await worker.create()
        with pytest.raises(Conflict, match="already"):
            await worker.create(budget=1)
        assert worker.balance()["budget"] == UNIT


async def test_an_edit_reaches_the_next_price(migrated_url: str) -> None:
    """Objects are merged, the policy replaced; version, journal and stream say so."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(1)
        await worker.upkeep.follow()
        changed = {"policy": {"method": "flat", "price": 2 * PRICE}, "value": {"window_ms": 1}}
        view = await patch(worker, changed)
        assert (view.version, view.config["value"]["window_ms"]) == (2, 1)
        assert view.config["value"]["arrival"] == "once"
        await worker.upkeep.follow()
        assert (await worker.bid()).bid == 2 * PRICE
        assert journal(worker)[-1] == ("patch", NAME, "tester", "a try")
        assert detail(worker)["before"]["policy"]["price"] == PRICE
        assert detail(worker)["after"] == view.config == (await worker.operator.get(NAME)).config


async def test_a_new_method_does_not_keep_the_settings_of_the_old(migrated_url: str) -> None:
    """A policy is one thing: what the old method took, the new one need not know."""
    async with working(migrated_url) as worker:
        await worker.create()
        assert (await patch(worker, {"policy": MEAN})).config["policy"] == MEAN


async def test_an_edit_of_an_old_version_is_stale(migrated_url: str) -> None:
    """Of two who have seen the same version only one may change it."""
    async with working(migrated_url) as worker:
        await worker.create()
        told = await asyncio.gather(
            *(patch(worker, {"name": name}) for name in ("a", "b")), return_exceptions=True
        )
        assert sorted(type(one).__name__ for one in told) == ["Stale", "View"]
        with pytest.raises(Stale):
            await patch(worker, {"name": "c"}, 1)
        with pytest.raises(NotFound):
            await worker.operator.patch("meadow", {}, 1, None, None, "tester")
        assert (await patch(worker, {"name": "c"}, 2)).version == 3


async def test_a_refused_edit_changes_nothing(migrated_url: str) -> None:
    """Neither money nor version nor journal; a budget below what is spent names the sum."""
    async with working(migrated_url) as worker:
        await worker.create()
        (answer,) = await worker.bids(1)
        await worker.report(Report("won", answer.ticket, clearing=PRICE))
        with pytest.raises(Conflict) as refused:
            await patch(worker, {"budget": PRICE - 1})
        assert refused.value.data == {"spent": "0.001"}
        with pytest.raises(Malformed):
            await patch(worker, {"bid_cap": PRICE - 1})
        assert (await worker.operator.get(NAME)).version == 1
        assert [row[0] for row in journal(worker)] == ["create"]


async def test_a_lowered_budget_is_a_target(migrated_url: str) -> None:
    """It falls as holds come free, and a daily budget may come and go."""
    async with working(migrated_url) as worker:
        await worker.create()
        await worker.bids(1)
        held = worker.balance()["held"]
        await patch(worker, {"budget": PRICE, "daily_budget": 2 * PRICE})
        assert (worker.balance()["budget"], worker.balance()["target"]) == (held, PRICE)
        assert worker.one("SELECT target FROM local_day") == 2 * PRICE
        await worker.stop()
        assert worker.balance()["budget"] == PRICE
        await patch(worker, {"daily_budget": None}, 2)
        assert worker.one("SELECT target FROM local_day") == NO_LIMIT
        assert worker.audit() == []


async def test_a_change_that_may_cost_a_lot_is_confirmed_by_its_value(migrated_url: str) -> None:
    """The refusal names the value; yesterday's value, a reason alone or no reason do not do."""
    async with working(migrated_url) as worker:
        await worker.create(daily_budget=UNIT // 20)
        raised = {"budget": 10 * UNIT, "bid_cap": 3 * CAP}
        words = "budget=10.00 bid_cap_cpm=24.00"
        for said in (None, "yes", "budget=10.00", "budget=10.00 bid_cap_cpm=32.00"):
            with pytest.raises(NeedsConfirmation) as refused:
                await worker.operator.patch(NAME, raised, 1, said, "a try", "tester")
            assert refused.value.data["confirm"] == words
        with pytest.raises(Malformed, match="reason"):
            await worker.operator.patch(NAME, raised, 1, words, None, "tester")
        assert worker.one("SELECT version FROM line_item") == 1
        view = await worker.operator.patch(NAME, raised, 1, words, "a try", "tester")
        assert (view.version, view.config["budget"]) == (2, 10 * UNIT)
        less = {"budget": 2 * UNIT, "bid_cap": CAP}
        await worker.operator.patch(NAME, less, 2, None, None, "tester")
        assert journal(worker)[-1][3] == "no reason given; changed: bid_cap, budget"


async def test_a_new_ceiling_is_taught_from_the_beginning(migrated_url: str) -> None:
    """Nothing learnt is lost: lessons keep what was said, and are read again."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        (answer,) = await worker.bids(1)
        await worker.report(
            Report("won", answer.ticket, clearing=PRICE),
            Report("value", answer.ticket, value=150_000_000, event_id="a"),
        )
        await worker.learn()
        assert (await worker.operator.state(NAME))["certainty"]["mean_nanos"] == 100_000_000
        await patch(worker, {"value": {"ceiling": 160_000_000}})
        await worker.learn()
        assert (await worker.operator.state(NAME))["certainty"]["mean_nanos"] == 150_000_000


async def test_a_freeze_is_in_force_when_every_live_worker_has_passed_it(migrated_url: str) -> None:
    """With a follower beside it answers at once; a worker that does not look has until `by`."""
    async with working(migrated_url) as one, working(migrated_url, "two") as two:
        await one.create()
        await two.bid()
        async with running_beside(one), running_beside(two):
            answer = await one.operator.freeze(NAME, "a look", "tester")
        assert (answer["in_force"], answer["by"], answer["before"]) == (True, None, [])
        assert [freeze["source"] for freeze in answer["after"]] == ["person"]
        assert (await two.bid()).reason == "frozen"
        assert two.leasing.hand.slices == {}
        assert journal(one)[-1] == ("freeze", NAME, "tester", "a look")


async def test_a_freeze_that_one_worker_has_not_seen_says_by_when(migrated_url: str) -> None:
    """No price leaves after the last open slice is over, whoever is asleep."""
    async with working(migrated_url) as one, working(migrated_url, "two") as asleep:
        await one.create()
        await asleep.bid()
        async with running_beside(one):
            answer = await one.operator.freeze(NAME, "a look", "tester")
        seen = one.one("SELECT seen_ms FROM service_clock")
        assert answer["in_force"] is False
        assert 25_000 < answer["by_ms"] - seen <= 30_000
        assert (await asleep.bid()).bid == PRICE


async def test_no_slice_is_leased_past_a_freeze(migrated_url: str) -> None:
    """One that slept past its slice and past `by` bids no more, though it has not read of it."""
    async with working(migrated_url) as one, working(migrated_url, "two") as asleep:
        for name in (NAME, "meadow"):
            await one.create(id=name)
            await asleep.bid(name)
        async with running_beside(one):
            await one.operator.freeze(NAME, "a look", "tester")
            asleep.clock.now += LEASE_S
            assert [(await asleep.bid(n)).reason for n in (NAME, "meadow")] == ["frozen", None]
            await one.operator.freeze(None, "all", "tester")
            asleep.clock.now += LEASE_S
            assert (await asleep.bid("meadow")).reason == "frozen"
            await one.operator.thaw(None, "all", "tester")
        asleep.clock.now += 1
        await asleep.upkeep.follow()
        assert [(await asleep.bid(n)).reason for n in (NAME, "meadow")] == ["frozen", None]


async def test_thawing_all_lifts_only_its_own_switch(migrated_url: str) -> None:
    """A line item bids when no freeze is left, whoever put them."""
    async with working(migrated_url) as worker:
        for name in (NAME, "meadow"):
            await worker.create(id=name)
            await worker.bid(name)
        async with running_beside(worker):
            await worker.operator.freeze(None, "all", "tester")
            assert [(await worker.bid(n)).reason for n in (NAME, "meadow")] == ["frozen"] * 2
            await worker.operator.freeze(NAME, "mine", "tester")
            sources = [f["source"] for f in (await worker.operator.get(NAME)).freezes]
            assert sources == ["all", "person"]
            answer = await worker.operator.thaw(None, "all", "tester")
            assert (answer["line_item"], answer["in_force"]) == (None, True)
            assert [(await worker.bid(n)).reason for n in (NAME, "meadow")] == ["frozen", None]
            await worker.operator.freeze(None, "again", "tester")
            answer = await worker.operator.thaw(NAME, "mine", "tester")
            assert [freeze["source"] for freeze in answer["after"]] == ["all"]
            assert (await worker.bid()).reason == "frozen"
        with pytest.raises(NotFound):
            await worker.operator.freeze("forest", "none", "tester")


async def test_a_reset_forgets_lessons_and_keeps_money(migrated_url: str) -> None:
    """What was won before teaches nothing more, not even by a value that comes after."""
    async with working(migrated_url) as worker:
        await worker.create(policy=MEAN)
        first = await worker.bid()
        await worker.report(Report("won", first.ticket, clearing=PRICE))
        await worker.learn()
        answer = await worker.operator.reset(NAME, "afresh", "tester")
        assert answer["after"]["seq"] == answer["before"]["seq"] + 1
        late = Report("value", ref=first.ref, value=90_000_000, event_id="a")
        assert [r.status for r in await worker.report(late)] == ["recorded"]
        await worker.learn()
        state = await worker.operator.state(NAME)
        assert (state["learner"]["wins"], state["learner"]["wins_with_known_value"]) == (0, 0)
        assert state["money"]["spent_nanos"] == PRICE
        assert (await worker.bid()).bid == first.bid
        assert journal(worker)[-1] == ("reset", NAME, "tester", "afresh")


async def test_an_order_that_is_sent_twice_is_obeyed_once(migrated_url: str) -> None:
    """The same key gives the same answer, for another wish it is a conflict, per actor."""
    async with working(migrated_url) as worker:
        operator = worker.operator
        first = await operator.create(line_item(), None, "tester", "key-1")
        assert await operator.create(line_item(), None, "tester", "key-1") == first
        resets = [await operator.reset(NAME, "afresh", "tester", "key-2") for _ in range(2)]
        assert resets[0] == resets[1]
        assert worker.one("SELECT count(*) FROM stream WHERE kind = 'reset'") == 1
        with pytest.raises(Conflict) as refused:
            await operator.freeze(NAME, "a look", "tester", "key-2")
        assert refused.value.code == "idempotency_key_reused"
        async with running_beside(worker):
            twice = [await operator.freeze(NAME, "a look", "other", "key-2") for _ in range(2)]
        assert twice[0] == twice[1]
        assert [row[0] for row in journal(worker)] == ["create", "reset", "freeze"]


async def test_line_items_are_paged_in_order(migrated_url: str) -> None:
    """Each once, after the last one seen."""
    async with working(migrated_url) as worker:
        for name in ("c", "a", "b"):
            await worker.create(id=name)
        pages = [await worker.operator.list(after, 2) for after in (None, "b")]
        assert [[view.id for view in page] for page in pages] == [["a", "b"], ["c"]]
