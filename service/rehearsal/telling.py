"""What a source of each kind would have told of an auction of which everything is known."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from service.learner.curve_counts import Feed, Outcome

Nanos = NDArray[np.int64]


def outcomes(bids: Nanos, least: Nanos, feed: Feed) -> list[Outcome]:
    """
    The outcomes a bidder hears of.

    Args:
        bids: Its bids in nanos.
        least: The highest competing bid of each auction, floor included.
        feed: When the source tells it.
    """
    pairs = zip(bids.tolist(), least.tolist(), strict=True)
    to_winner, to_loser = feed in ("always", "on_win"), feed in ("always", "on_loss")
    return [
        Outcome(bid, m <= bid, m if (to_winner if m <= bid else to_loser) else None, feed)
        for bid, m in pairs
    ]
