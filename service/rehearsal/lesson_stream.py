"""An endless stream of invented lessons for one line item, to see what folding them costs.

Three in ten impressions are won, one win in ten brings a value, and a new law is drawn from
at every batch where the method bids by one. A lesson comes every tenth of a second, so after
a few thousand lessons the oldest windows close and forgetting has something to forget.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from service.decision.methods import METHODS
from service.decision.terms import Terms
from service.learner.fold import Lesson
from service.learner.growing import law_of
from service.learner.memory import Memory
from service.learner.rules import Rules
from service.rehearsal.rare import CAP, FREQUENT, OFTEN, RIVALS, rare_config

BATCH = 500  # Impressions folded together.
STEP_MS = 100
WINDOW_MS = 300_000
BID = 2_000_000
CHANCE_OF_VALUE = 0.1


@dataclass(frozen=True, slots=True)
class Learner:
    """A method, and what its line item asks for beyond it."""

    method: str
    asks: Mapping[str, Any]

    @property
    def config(self) -> dict[str, Any]:
        """The configuration, defaults filled in."""
        config = dict(rare_config(self.method, OFTEN))
        value = {**config["value"], "window_ms": WINDOW_MS, **self.asks}
        return {**config, "spend_on": "won", "value": value}

    @property
    def rules(self) -> Rules:
        """How its lessons are read."""
        return Rules.from_config(self.config)

    @property
    def terms(self) -> Terms:
        """What its price depends on."""
        return Terms.from_config(self.config)


LEARNERS: dict[str, Learner] = {
    **{name: Learner(name, {}) for name in METHODS if name != "flat"},
    "kl-ucbid, discount by rounds": Learner(
        "kl-ucbid", {"drift": {"how": "discount", "rounds": 1000}}
    ),
    "kl-ucbid, window by rounds": Learner("kl-ucbid", {"drift": {"how": "window", "rounds": 5000}}),
    "kl-ucbid, discount by time": Learner(
        "kl-ucbid", {"drift": {"how": "discount", "memory_ms": 100_000}}
    ),
    "kl-ucbid, change detector": Learner("kl-ucbid", {"change": {"action": "restart"}}),
    "kl-ucbid, both": Learner(
        "kl-ucbid",
        {"drift": {"how": "discount", "rounds": 1000}, "change": {"action": "restart"}},
    ),
}


class Stream:
    """
    Lessons without end.

    Args:
        rules: Of the line item that hears them.
        seed: Chooses every draw.
    """

    def __init__(self, rules: Rules, seed: int) -> None:
        self._rules, self._rng, self._now_ms = rules, np.random.default_rng(seed), 0

    def batch(self, memory: Memory) -> list[Lesson]:
        """The outcomes of the next `BATCH` impressions, bid for on what the memory holds."""
        law = None if self._rules.tree is None else law_of(memory.tree, self._rules.tree)
        stage = {} if law is None else {"stage": list(law.stage)}
        worth = (self._rng.random(BATCH) < CHANCE_OF_VALUE).tolist()
        lessons = list[Lesson]()
        for rival, valued in zip(RIVALS.draw(self._rng, BATCH).tolist(), worth, strict=True):
            self._now_ms += STEP_MS
            bid = BID if law is None else law.draw(self._rng)
            if rival > bid:
                lost = {"to_win": rival, "round": 1, **stage}
                lessons.append(Lesson("lost", lost, self._now_ms))
                continue
            win = {"price": min(rival, CAP), "round": 1, **stage}
            if law is not None:
                win["chance"] = law.chance_above(rival - 1)
            lessons.append(Lesson("won", win, self._now_ms))
            if valued:
                body = {"amount": FREQUENT, "was": None, "won_ms": self._now_ms, "win": win}
                lessons.append(Lesson("value", body, self._now_ms))
        return lessons
