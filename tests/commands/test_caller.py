"""The advertiser's side waits until all is taught, and does not wait for ever."""

from __future__ import annotations

import asyncio
import json
from collections.abc import Callable, Mapping
from typing import Any

import pytest

from service.commands import caller
from service.commands.caller import Learnt, Unanswered
from service.commands.wire import Reply


class States:
    """Answers each question with a state of the next number of wins taught, the last for ever."""

    def __init__(self, *known: int) -> None:
        self.known = list(known)
        self.state: Callable[[int], dict[str, Any]] = state
        self.bodies: list[Mapping[str, object]] = []

    async def get(self, path: str) -> Reply:
        """Answer with a state."""
        known = self.known.pop(0) if len(self.known) > 1 else self.known[0]
        return Reply(200, json.dumps(self.state(known)).encode())

    async def post(self, path: str, body: Mapping[str, object]) -> Reply:
        """Make a line item, but not a second one."""
        self.bodies.append(body)
        return Reply(201 if len(self.bodies) == 1 else 409, b"{}")


def state(known: int, awaited: int = 0, behind: int = 0) -> dict[str, Any]:
    """What the tables read of a state."""
    mean = "0.0000015" if known else None
    certainty = {"known": known, "awaited": awaited, "mean": mean}
    return {
        "certainty": {**certainty, "low": "0.000001", "high": "0.000002"},
        "learner": {"entries_behind": behind},
        "money": {"budget": "4.00", "spent": "3.999999999"},
    }


def test_a_state_is_read_exactly() -> None:
    """Amounts become nanos; without a known win there is no mean."""
    assert caller.from_state(state(3, 1, 2)) == Learnt(
        *(4 * 10**9, 3_999_999_999), known=3, awaited=1, behind=2, mean=1500, low=1000, high=2000
    )
    assert caller.from_state(state(0)).mean == 0


def test_it_waits_until_every_win_is_taught() -> None:
    """States before that are not the end."""
    states = States(0, 2, 3)
    assert asyncio.run(caller.learnt(states, "item", 3)).known == 3
    assert states.known == [3]


def test_it_waits_for_what_is_behind(monkeypatch: pytest.MonkeyPatch) -> None:
    """With entries to read yet the figures are not the last, though all wins are counted."""
    monkeypatch.setattr(caller, "TAUGHT_S_MAX", 0.3)
    late = States(3)
    late.state = lambda known: state(known, behind=1)
    with pytest.raises(Unanswered, match="3 of 3 wins"):
        asyncio.run(caller.learnt(late, "item", 3))


def test_it_gives_up_when_no_more_comes(monkeypatch: pytest.MonkeyPatch) -> None:
    """The error says how far it came."""
    monkeypatch.setattr(caller, "TAUGHT_S_MAX", 0.3)
    with pytest.raises(Unanswered, match="item was taught 2 of 3 wins"):
        asyncio.run(caller.learnt(States(2), "item", 3))


def test_a_line_item_that_is_refused_is_an_error() -> None:
    """The first is made, the second is not."""
    states = States(0)
    asyncio.run(caller.create(states, {"id": "item"}))
    with pytest.raises(Unanswered, match="answered 409"):
        asyncio.run(caller.create(states, {"id": "item"}))
    assert states.bodies == [{"id": "item"}, {"id": "item"}]
