"""`exptree` and `exptree-win-only`: bids drawn from weights that every outcome moves.

Weed, Perchet, Rigollet, "Online learning in repeated auctions", COLT 2016, PMLR 49,
Algorithm 2, with the doubling of Theorem 9 for an unknown number of rounds. Nothing is
assumed of values or competing bids, not even that they keep a mean, but that they do not
answer to single bids. Values and prices are shares of one scale, the larger of cap and
ceiling. As published it must be told the competing bid of every loss; the variant that
learns from wins alone is our own derivation and has not been reviewed. Two things here have
no theorem: one law serves all bids of an epoch, and outcomes come late.
"""

from __future__ import annotations

import numpy as np

from service.decision.method import Counts, Method
from service.decision.saying import bound_in_words
from service.decision.terms import Terms
from service.learner import exptree_bounds
from service.learner.bounds import Numbers
from service.learner.tally import Tally

SOURCE = "Weed, Perchet, Rigollet, Online learning in repeated auctions, COLT 2016"
ASSUMES = (
    "Second price; values up to the ceiling and competing bids that may do anything but answer "
    "to single bids; "
)
LATE = " It is for outcomes known at once; here one law serves all bids of an epoch."


def index(counts: Counts, terms: Terms) -> Numbers:
    """Half the cap: the median of the first law; later ones are drawn from, not indexed."""
    return np.full_like(counts.known, terms.cap / 2.0)


def published(tally: Tally, terms: Terms) -> str:
    """Theorem 9 in money, with intervals no narrower than one price tick."""
    return _in_money("Theorem 9", exptree_bounds.exptree_bound_doubling, tally, terms)


def derived(tally: Tally, terms: Terms) -> str:
    """Our own bound in money, with intervals no narrower than one price tick."""
    words = "Our own derivation, not reviewed"
    return _in_money(words, exptree_bounds.win_only_bound_doubling, tally, terms)


def _in_money(whose: str, bound: exptree_bounds.Bound, tally: Tally, terms: Terms) -> str:
    if terms.tree is None:
        return "None: the method is not configured."
    lost = bound(max(tally.rounds, 2), 1.0 / max(terms.tree.ticks.cells, 2))
    return f"{bound_in_words(whose, round(terms.tree.scale * lost), tally, terms)}{LATE}"


PUBLISHED = Method(
    name="exptree",
    index=index,
    source=f"{SOURCE}, Algorithm 2 and Theorem 9.",
    assumes=f"{ASSUMES}the competing bid told after every loss.",
    guarantee=published,
    learns=False,
    needs_priced_losses=True,
    by_law=True,
)
WIN_ONLY = Method(
    name="exptree-win-only",
    index=index,
    source=f"Our own derivation from {SOURCE}; not published, not reviewed.",
    assumes=f"{ASSUMES}nothing told after a loss.",
    guarantee=derived,
    learns=False,
    by_law=True,
)
