"""An order as it was handed over, played to its result: a market drawn, or a log replayed."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from service.guard.fees import Fees
from service.rehearsal import own_log
from service.rehearsal.csv_auctions import pieces
from service.rehearsal.rehearse import rehearse, replay


def played(order: Mapping[str, Any], advance: Callable[[int], None]) -> dict[str, Any]:
    """
    Play an order; amounts in nanos under names in `_nanos`.

    Args:
        order: With `log`, a line item's own decisions, where its market is `own_log`.
        advance: Told how many auctions were played since it was last told.
    """
    log, more = order.get("log"), list(order.get("also_assumed", []))
    if log is None:
        told = rehearse(order, advance)
        return {**told, "assumed": [*more, *told["assumed"]]}
    rows = [own_log.Logged(**row) for row in log]
    found = own_log.auctions(rows, Fees.of(order["log_fees"]))
    # Days and flights are those of the log, so its own clock is the clock.
    starts_ms = found[0].at_ms if found else 0
    told = replay(order, pieces(found, order["block"]), advance, starts_ms)
    said = own_log.says(rows)
    assumed = [*more, *said["assumed"], *told["assumed"]]
    return {**told, "exact": said["exact"], "assumed": assumed}
