"""Hindsight on a whole log in one answer: certain, bounded, assumed and drawn, kept apart.

Pure and picklable, so that another process can work it out while bids leave from this one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from service.rehearsal import hindsight_assumed, hindsight_drawn, off_policy
from service.rehearsal.alternatives import SAYS, Alternative
from service.rehearsal.auction_log import SILENT, Logged
from service.rehearsal.hindsight_assumed import Line, Worth
from service.rehearsal.hindsight_bounds import Account, Purse, Sums, shown
from service.rehearsal.hindsight_rivals import rivals_alike

WITHOUT_MODEL = (
    "holds whatever rivals and values are, if the log is true: each auction is exact where what "
    "was told settles it and between its worst and its best case where not (Manski 1990); a tie "
    "with the price paid counts as lost, a void auction as void at any price, a bid without word "
    "as either"
)
BUDGET_MAY_END = "budget_may_end"
CUT_SAYS = (
    "the money of this alternative may have ended on the way; from there on each auction may also "
    "be nothing, and lines under assumptions are refused, for they reckon with every auction"
)
LASTS_SAYS = (
    "the money of this alternative lasts for sure; holds of open bids are not reckoned with"
)
NOT_FLAT = "only_for_a_flat_price"
NOT_FLAT_SAYS = "what this alternative would have bid is not one price"
NO_AUCTIONS = "nothing_told"


@dataclass(frozen=True, slots=True)
class Ask:
    """
    What is asked of a log; money in nanos.

    Args:
        other: The alternative.
        worth: What is known of values.
        left: Money at the start of the span.
        daily: Money of each local day; None for no limit.
    """

    other: Alternative
    worth: Worth
    left: int
    daily: int | None


def answer(rows: Sequence[Logged], ask: Ask) -> dict[str, object]:
    """All that the log tells of an alternative; money in nanos under names in `_nanos`."""
    was, other = Account(Alternative("as_it_was")), Account(ask.other, Purse(ask.left, ask.daily))
    for row in rows:
        was.take(row)
        other.take(row)
    sums = other.sums
    return {
        "alternative_says": SAYS[ask.other.kind],
        "as_it_was": shown(was.sums),
        "without_model": {"label": "without_model", **shown(sums), "says": WITHOUT_MODEL},
        "assumed": _assumed(rows, ask, sums),
        "drawn": _drawn(rows, ask.other),
        "budget": {
            "left_at_start_nanos": ask.left,
            "daily_nanos": ask.daily,
            "auctions_after_it_may_have_ended": sums.cut,
            "says": CUT_SAYS if sums.cut else LASTS_SAYS,
        },
    }


def _assumed(rows: Sequence[Logged], ask: Ask, sums: Sums) -> list[dict[str, object]]:
    if sums.cut:
        return [
            _refused(name, BUDGET_MAY_END, CUT_SAYS) for name in ("values_alike", "rivals_alike")
        ]
    first = _line(hindsight_assumed.values_alike(rows, ask.other, ask.worth), sums.auctions)
    if ask.other.kind != "flat":
        return [first, _refused("rivals_alike", NOT_FLAT, NOT_FLAT_SAYS)]
    joint = rivals_alike(rows, ask.other.price, ask.worth)
    if joint is None:
        return [first, _refused("rivals_alike", NO_AUCTIONS, "no auction told anything of rivals")]
    return [first, _line(joint, sums.auctions)]


def _line(line: Line, auctions: int) -> dict[str, object]:
    means = [round(end / auctions) if auctions else None for end in (line.low, line.high)]
    return {
        "label": line.label,
        "auctions": line.auctions,
        "surplus": {"low_nanos": line.low, "high_nanos": line.high},
        "surplus_per_auction": {"low_cpm_nanos": means[0], "high_cpm_nanos": means[1]},
        "level": line.level,
        "assumes": line.assumes,
    }


def _refused(label: str, code: str, says: str) -> dict[str, object]:
    return {"label": label, "code": code, "says": says}


def _drawn(rows: Sequence[Logged], other: Alternative) -> list[dict[str, object]]:
    if other.kind != "flat":
        return [_refused("off_policy", NOT_FLAT, NOT_FLAT_SAYS)]
    found = hindsight_drawn.estimates(rows, other.price)
    if isinstance(found, hindsight_drawn.Refused):
        said = _refused("off_policy", found.code, found.says)
        return [{**said, "effective_auctions": round(found.effective, 3)}]
    drawn = hindsight_drawn.drawn(rows, other.price)
    auctions = 0 if drawn is None else int(drawn.weights.size)
    effective = 0.0 if drawn is None else off_policy.effective(drawn.weights)
    stands = "" if drawn is None else drawn.stands_for
    return [
        {
            "label": label,
            "auctions": auctions,
            "effective_auctions": round(effective, 3),
            "stands_for": stands,
            "surplus_per_auction": {
                "estimate_cpm_nanos": round(one.mean),
                "low_cpm_nanos": round(one.limits[0]),
                "high_cpm_nanos": round(one.limits[1]),
            },
            "assumes": hindsight_drawn.ASSUMES,
        }
        for label, one in found.items()
    ]


def counted(rows: Sequence[Logged]) -> dict[str, int]:
    """What the log holds, by what is to be said of it."""
    return {
        "auctions": sum(row.counts for row in rows),
        "passes_that_no_price_would_have_changed": sum(not row.counts for row in rows),
        "bids_without_word": sum(row.result == SILENT for row in rows),
        "wins_whose_value_is_still_open": sum(row.open for row in rows),
    }
