"""What a line item says of how it learns: created, read back, patched, and refused when wrong."""

from __future__ import annotations

import json
from collections.abc import Callable
from typing import Any

import httpx
import pytest

pytestmark = pytest.mark.anyio

PATH = "/v1/line-items"
SMALLEST: dict[str, Any] = {
    "id": "a",
    "name": "A",
    "currency": "EUR",
    "budget": "5.00",
    "bid_cap_cpm": 8,
    "value": {"ceiling": "0.10"},
}
LEARNING: dict[str, Any] = {
    "value": {
        "ceiling": "0.10",
        "drift": {"how": "discount", "rounds": 5000, "memory_s": None},
        "change": {"action": "flag", "ratio": 3.0, "threshold": 12.5},
    },
    "allowance": "0.05",
    "losses": "priced",
    "tripwires": {"value_silence_s": 3600},
}
RARE = {"ceiling": "5.00"}  # 625 caps.
EXPTREE = {"method": "exptree"}


def form(**changes: Any) -> dict[str, Any]:
    """The smallest line item with other members; `value` is merged."""
    value = {**SMALLEST["value"], **changes.pop("value", {})}
    return {**SMALLEST, "value": value, **changes}


async def create(client: httpx.AsyncClient, **changes: Any) -> dict[str, Any]:
    """Create a line item; the answer."""
    answer = await client.post(PATH, json=form(**changes))
    assert answer.status_code == 201, answer.text
    created: dict[str, Any] = answer.json()
    return created


async def patch(client: httpx.AsyncClient, version: int = 1, **changes: Any) -> httpx.Response:
    """Change it as somebody who has seen this version."""
    headers = {"If-Match": f'"{version}"'}
    return await client.patch(f"{PATH}/a", json=changes, headers=headers)


async def read(client: httpx.AsyncClient) -> dict[str, Any]:
    """The line item as it is kept."""
    kept: dict[str, Any] = (await client.get(f"{PATH}/a")).json()
    return kept


def learning(kept: dict[str, Any]) -> dict[str, Any]:
    """The members that say how it learns."""
    value = {name: kept["value"][name] for name in ("ceiling", "drift", "change")}
    return {name: kept[name] for name in ("allowance", "losses", "tripwires")} | {"value": value}


async def test_how_it_learns_is_read_back_in_the_form_it_was_given(
    app_client: httpx.AsyncClient,
) -> None:
    """On creation and later, to the last digit, and none of it is called a default."""
    created = await create(app_client, **LEARNING)
    assert learning(created) == learning(await read(app_client)) == LEARNING
    assert not {"allowance", "losses", "value.drift"} & set(created["defaults"])


async def test_nothing_said_is_shown_as_null_and_an_allowance_is_taken(
    app_client: httpx.AsyncClient,
) -> None:
    """By default one typical value may be lost to learning, at most a tenth of the budget."""
    created = await create(app_client)
    nothing = {"value": {"ceiling": "0.10", "drift": None, "change": None}}
    assert learning(created) == nothing | {
        "allowance": created["value"]["typical"],
        "losses": "bare",
        "tripwires": None,
    }
    assert created["kin"] is None
    assert "allowance" in created["defaults"]


async def test_a_change_of_drift_replaces_it_as_a_whole(app_client: httpx.AsyncClient) -> None:
    """Rounds of before are not kept beside seconds of now, and null forgets nothing any more."""
    await create(app_client, **LEARNING)
    by_time = {"how": "window", "memory_s": 7200}
    answer = await patch(app_client, value={"drift": by_time, "change": {"action": "restart"}})
    assert answer.json()["value"]["drift"] == by_time | {"rounds": None}
    defaults = {"action": "restart", "ratio": 2.0, "threshold": 8.0}
    assert answer.json()["value"]["change"] == defaults
    assert (await patch(app_client, 2, value={"drift": None})).json()["value"]["drift"] is None
    kept = await read(app_client)
    assert (kept["value"]["drift"], kept["value"]["change"]) == (None, defaults)
    assert (kept["value"]["ceiling"], kept["version"]) == ("0.10", 3)


async def test_what_may_be_null_can_be_taken_back(app_client: httpx.AsyncClient) -> None:
    """An allowance of null is the default again; kin and tripwires of null are none."""
    await create(app_client, **LEARNING)
    await create(app_client, id="b")
    assert (await patch(app_client, kin=["b"])).json()["kin"] == ["b"]
    answer = await patch(app_client, 2, allowance=None, kin=None, tripwires=None)
    changed = answer.json()
    assert changed["allowance"] == changed["value"]["typical"] != LEARNING["allowance"]
    assert changed["kin"] is changed["tripwires"] is None
    again = await patch(app_client, 3, tripwires={"value_silence_s": 60})
    assert again.json()["tripwires"] == {"value_silence_s": 60}


WRONG: list[tuple[dict[str, Any], int, str]] = [
    ({"value": {"drift": {"how": "window"}}}, 422, "bad_field"),
    ({"value": {"drift": {"how": "window", "rounds": 500, "memory_s": 60}}}, 422, "bad_field"),
    ({"value": {"drift": {"how": "fade", "rounds": 500}}}, 422, "bad_field"),
    ({"value": {"drift": {"how": "window", "rounds": 99}}}, 422, "bad_field"),
    ({"value": {"drift": {"how": "window", "rounds": 10**12 + 1}}}, 422, "bad_field"),
    ({"value": {"drift": {"how": "window", "rounds": True}}}, 422, "bad_field"),
    ({"value": {"drift": {"how": "window", "memory_s": 0}}}, 422, "bad_field"),
    ({"value": {"change": {"ratio": 2.0}}}, 422, "bad_field"),
    ({"value": {"change": {"action": "restart", "ratio": 1.0}}}, 422, "bad_field"),
    ({"value": {"change": {"action": "restart", "ratio": 101}}}, 422, "bad_field"),
    ({"value": {"change": {"action": "restart", "ratio": "2"}}}, 422, "bad_field"),
    ({"value": {"change": {"action": "restart", "ratio": True}}}, 422, "bad_field"),
    ({"value": {"change": {"action": "restart", "threshold": 0.5}}}, 422, "bad_field"),
    ({"allowance": "-1.00"}, 422, "bad_field"),
    ({"allowance": "0.00"}, 422, "bad_field"),
    ({"kin": ["a"]}, 422, "bad_field"),
    ({"kin": ["nobody"]}, 422, "no_such_kin"),
    ({"kin": ["swiss"]}, 422, "other_currency"),
    ({"kin": "b"}, 422, "bad_field"),
    ({"losses": "some"}, 422, "bad_field"),
    ({"tripwires": {"value_silence_s": -1}}, 422, "bad_field"),
    ({"tripwires": {"silence": 5}}, 422, "bad_field"),
    ({"policy": EXPTREE}, 422, "bad_setting"),
    ({"policy": EXPTREE, "losses": "priced", "value": RARE}, 422, "bad_setting"),
    ({"policy": {"method": "exptree-win-only"}, "value": RARE}, 422, "bad_setting"),
    (
        {
            "policy": EXPTREE,
            "losses": "priced",
            "value": {"drift": {"how": "window", "rounds": 500}},
        },
        422,
        "bad_setting",
    ),
    (
        {"policy": EXPTREE, "losses": "priced", "value": {"change": {"action": "flag"}}},
        422,
        "bad_setting",
    ),
    ({"policy": {"method": "linear"}, "value": RARE}, 422, "bad_setting"),
    ({"policy": {"method": "linear", "dimensions": 33}}, 422, "bad_setting"),
    ({"policy": {"method": "flat", "price_cpm": 1}, "value": {"hints": True}}, 422, "bad_setting"),
    ({"value": {"hints": "yes"}}, 422, "bad_field"),
    ({"policy": {"method": "bernstein-ucbid"}, "value": RARE}, 409, "learning_cost"),
    ({"policy": {"method": "thompson"}, "value": RARE}, 409, "learning_cost"),
]


@pytest.mark.parametrize(("changes", "status", "code"), WRONG)
async def test_what_is_wrong_is_refused_and_nothing_changes(
    app_client: httpx.AsyncClient,
    written: Callable[[], dict[str, int]],
    changes: dict[str, Any],
    status: int,
    code: str,
) -> None:
    """Created or patched, the refusal is a problem with a stable code, and echoes nothing."""
    await create(app_client, id="swiss", currency="CHF")
    before = written()
    created = await app_client.post(PATH, json=form(**changes))
    assert (created.status_code, created.json()["code"]) == (status, code), created.text
    assert written() == before
    await create(app_client)
    kept, before = await read(app_client), written()
    patched = await patch(app_client, **changes)
    assert (patched.status_code, patched.json()["code"]) == (status, code), patched.text
    assert (await read(app_client), written()) == (kept, before)
    for answer in (created, patched):
        assert answer.headers["content-type"] == "application/problem+json"
        assert "nobody" not in answer.text


async def test_a_law_keeps_the_feed_it_needs(app_client: httpx.AsyncClient) -> None:
    """Losses cannot turn bare, nor the ceiling rare, under a method that needs them otherwise."""
    await create(app_client, policy=EXPTREE, losses="priced")
    for changes in ({"losses": "bare"}, {"value": RARE}, {"bid_cap_cpm": 0.5}):
        answer = await patch(app_client, **changes)
        assert (answer.status_code, answer.json()["code"]) == (422, "bad_setting"), changes
    assert (await read(app_client))["version"] == 1


@pytest.mark.parametrize(
    ("number", "status"), [("NaN", 400), ("-Infinity", 400), ("1e999", 422), ("1e-999", 422)]
)
async def test_a_ratio_that_is_no_number_is_refused(
    app_client: httpx.AsyncClient, number: str, status: int
) -> None:
    """Neither words for no number nor numbers beyond every float pass."""
    body = json.dumps(form(value={"change": {"action": "flag", "ratio": 4321}}))
    answer = await app_client.post(
        PATH,
        content=body.replace("4321", number),
        headers={"Content-Type": "application/json"},
    )
    assert answer.status_code == status, answer.text
    assert answer.headers["content-type"] == "application/problem+json"


@pytest.mark.parametrize(
    ("cap_cpm", "status"), [(0.000001, 422), (0.000002, 201), (0.1, 201), (4999.999999, 201)]
)
async def test_a_law_needs_a_price_to_draw(
    app_client: httpx.AsyncClient, cap_cpm: float, status: int
) -> None:
    """From two nanos up, a line item that bids by a law is created and shows its state."""
    value = {"ceiling": f"{cap_cpm / 100:.9f}"}
    wish = {"policy": EXPTREE, "losses": "priced", "bid_cap_cpm": cap_cpm, "value": value}
    answer = await app_client.post(PATH, json=form(**wish))
    assert answer.status_code == status, answer.text
    if status == 201:
        state = (await app_client.get(f"{PATH}/a/state")).json()
        assert 0 <= state["bid"]["price_cpm"] <= cap_cpm
