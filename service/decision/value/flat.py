"""`flat`: one price for everything, learning nothing; the plainest comparison.

Units: the setting `price` is nanos per impression. Assumes nothing and guarantees nothing
but the price. Source: common practice.
"""

from __future__ import annotations

import numpy as np

from service.decision.method import Counts, Method, Setting
from service.decision.terms import Terms
from service.learner.bounds import Numbers
from service.learner.tally import Tally


def index(counts: Counts, terms: Terms) -> Numbers:
    """The price set by a person, in nanos per impression."""
    return np.full_like(counts.known, terms.settings["price"])


def guarantee(tally: Tally, terms: Terms) -> str:
    """What is proved, in words."""
    return "None: the price is yours."


METHOD = Method(
    name="flat",
    index=index,
    source="Common practice, no source.",
    assumes="Nothing.",
    guarantee=guarantee,
    settings={"price": Setting(default=None, low=0, high=2**62, whole=True)},
    learns=False,
)
