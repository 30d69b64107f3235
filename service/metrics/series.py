"""Every series a process counts, and its place in memory: labels are bounded because all are here.

Ids of callers, line items, bids and keys are never labels.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from itertools import product

OTHER = "other"  # What no list below names; a label that grows here wants a place of its own.
PASSES = (
    *("frozen", "out_of_flight", "budget_spent", "day_spent", "past_deadline", "overloaded"),
    *("learner_halted", "no_value", "price_rounds_to_zero", "under_floor", "outbid_inside"),
    *("budget_held", "no_rate", OTHER),
)
KINDS = ("won", "lost", "void", "billed", "value")
STATUSES = ("recorded", "duplicate", "conflict", "late", "parked", "refused", OTHER)
CODES = (
    *("bad_ticket", "bad_ref", "bad_field", "no_ticket", "no_price", "no_such_ref"),
    *("no_such_line_item", "no_such_event", "not_won", "ref_of_another_bid", "quarantined"),
    *("value_out_of_range", "other_currency", "bad_price", OTHER),
)
DUTIES = (
    *("keep_time", "follow", "give_back", "tick", "log"),
    *("teach", "close", "audit", "prune", "chart", "watch", "tell", "measure", OTHER),
)
ANSWERS = ("2xx", "3xx", "4xx", "5xx")

# Bounds in seconds; the promise is milliseconds, the longest allowed deadline a fifth of a second.
BOUNDS_S = (0.0005, 0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5)
BUCKETS = (*(f"{bound:g}" for bound in BOUNDS_S), "+Inf", "sum")


@dataclass(frozen=True, slots=True)
class Series:
    """
    One metric that processes keep in memory.

    Args:
        name: Without the prefix, with its unit.
        scale: What one of our whole numbers is worth in the unit told.
    """

    name: str
    help: str
    labels: tuple[tuple[str, tuple[str, ...]], ...] = ()
    scale: float = 1

    def keys(self) -> list[tuple[str, ...]]:
        """The name with each combination of labels."""
        return [(self.name, *values) for values in product(*(values for _, values in self.labels))]


COUNTERS = (
    Series("bids", "Prices that left, tests not counted."),
    Series("passes", "Opportunities passed, by reason.", (("reason", PASSES),)),
    Series("test_answers", "Opportunities marked as tests."),
    Series(
        "outcomes",
        "Outcomes answered, by kind and status.",
        (("kind", (*KINDS, OTHER)), ("status", STATUSES)),
    ),
    Series("refused_outcomes", "Outcomes refused, by code.", (("code", CODES),)),
    Series("outcome_calls_shed", "Calls with outcomes told to come again before they were read."),
    Series("leases", "Wishes for a slice, by what came.", (("result", ("leased", "denied")),)),
    Series("slices_given_back", "Slices given back or retired, told to the database."),
    Series("database_failures", "Pieces of work that the database did not answer."),
    Series("dropped_decisions", "Decisions that the log had no room for."),
    Series("http_answers", "HTTP answers by class of status.", (("status", ANSWERS),)),
)
GAUGES = (
    Series("loop_lag_seconds", "Most by which the event loop was late of late.", (), 1e-6),
    Series("waiting_bids", "Bids that wait for a slice or a first look."),
    Series("waiting_outcomes", "Outcomes that wait to be booked."),
    Series("waiting_decisions", "Decisions that wait to be logged."),
    Series("slices_in_hand", "Slices that this process may bid from."),
    Series("change_number", "The last change that this process has applied."),
    Series(
        *("teaching_seconds", "How far apart the clerk's last two rounds of lessons began."),
        *((), 1e-3),
    ),
    Series("memory_bytes", "Resident memory of the process."),
    Series("start_timestamp_seconds", "When the process started.", (), 1e-3),
)
DUTY = Series(
    "duty_success_timestamp_seconds",
    "When a background duty was last done without failing.",
    (("duty", DUTIES),),
    1e-3,
)
DURATION = Series(
    "bid_duration_seconds",
    "Seconds from arrival of an opportunity to its answer.",
    (("le", BUCKETS),),
)

ALL = (*COUNTERS, *GAUGES, DUTY, DURATION)
PLACES = {key: place for place, key in enumerate(key for one in ALL for key in one.keys())}
LABELS = {one.name: len(one.labels) for one in ALL}
# Two releases with other lists must not read one another's memory.
DIGEST = int.from_bytes(hashlib.sha256(repr(list(PLACES)).encode()).digest()[:7])
