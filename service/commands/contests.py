"""What the service and the bare endpoints are both asked: one kind of traffic after the other.

Apart from how it is asked by turns, and from how it is shown.
"""

from __future__ import annotations

from collections.abc import Awaitable, Callable, Sequence
from dataclasses import dataclass
from functools import partial

from service.commands import bodies, planting
from service.commands.duel import Contest, Pair

SCALAR, COVARIATE = "bench-scalar", "bench-linear"
# Ours over the bare one's p99 at half of our own full rate.
WAIT_RATIO_MAX = 1.5

Requests = Callable[[Pair, int], Awaitable[list[bytes]]]


@dataclass(frozen=True, slots=True)
class Kind:
    """
    One kind of traffic.

    Args:
        requests: Makes those of one round, of about as much work as so many single bids.
        rows: Bids and outcomes in each request, on average.
        aim: Our rate over the bare one's; for an even load their p99 the other way round.
        even: At half of the rate that we answer at most, and not as fast as we can.
    """

    title: str
    requests: Requests
    rows: float = 1
    aim: float | None = None
    even: bool = False


async def play(
    pair: Pair, kind: Kind, rounds: int, requests: int, on_round: Callable[[], None]
) -> Contest:
    """Both sides by turns; the first round warms them, lets slices grow, and does not count."""
    contest, warm, rate = Contest(kind.title, kind.rows), Contest("warm"), None
    for number in range(rounds + 1):
        calls = await kind.requests(pair, requests)
        await pair.round(contest if number else warm, partial(iter, calls), rate)
        rate = warm.ours[0].rate / 2 if kind.even else None
        on_round()
    return contest


async def _single(pair: Pair, count: int) -> list[bytes]:
    return [bodies.bid(pair.server.key, SCALAR)] * count


async def _linear(pair: Pair, count: int) -> list[bytes]:
    return [bodies.bid(pair.server.key, COVARIATE, features=bodies.FEATURES)] * count


async def _batches(pair: Pair, count: int) -> list[bytes]:
    return [bodies.batch(pair.server.key, SCALAR)] * max(count // 20, 1)


async def _outcomes(pair: Pair, count: int) -> list[bytes]:
    """Of tickets that were never told of before."""
    rows, calls = bodies.BATCH_ROWS, max(count // 40, 1)
    tickets = await planting.tickets(pair.server, SCALAR, calls * rows)
    return [
        bodies.outcomes(pair.server.key, tickets[at : at + rows])
        for at in range(0, len(tickets), rows)
    ]


async def _mixed(pair: Pair, count: int) -> list[bytes]:
    """With outcomes of bids made just before."""
    turns = max(count // (2 * bodies.MIX_CALLS), 1)
    tickets = await planting.tickets(pair.server, SCALAR, turns * bodies.MIX_TOLD)
    return bodies.mixed(pair.server.key, SCALAR, COVARIATE, tickets)


MIX_ROWS = bodies.MIX_TURN_ROWS / bodies.MIX_CALLS
KINDS: dict[str, Kind] = {
    "single": Kind("bids, kl-ucbid", _single, aim=0.90),
    "linear": Kind("bids, linear", _linear, aim=0.75),
    "batch": Kind("batches", _batches, bodies.BATCH_ROWS, 0.50),
    "half": Kind("bids at half load", _single, aim=WAIT_RATIO_MAX, even=True),
    "outcomes": Kind("outcomes", _outcomes, bodies.BATCH_ROWS, 0.35),
    "mixed": Kind("mixed traffic", _mixed, MIX_ROWS),
    "mixed-half": Kind("mixed traffic at half load", _mixed, MIX_ROWS, even=True),
}


async def prepare(pair: Pair) -> None:
    """Make the line items that all kinds of traffic ask for."""
    configs: Sequence[dict[str, object]] = [
        bodies.line_item(SCALAR, "kl-ucbid"),
        bodies.line_item(COVARIATE, "linear"),
    ]
    await planting.create(pair.server, configs)
