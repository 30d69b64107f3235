"""Rules on what becomes of bids: outcomes that fail to come, win rate, silence, voids, refusals."""

from __future__ import annotations

from collections.abc import Callable

from service.tripwires.counts import Counts
from service.tripwires.history import Facts, past
from service.tripwires.saying import Saw, chance, duration, share
from service.tripwires.setups import Setup
from service.tripwires.tails import Pair, binomial_at_most, shares_tail, spread_of_shares

Count = Callable[[Counts], int]
NO_HISTORY_FACTOR = 5  # Without a past, so many times the least count are wanted.


def no_outcomes(facts: Facts, setup: Setup) -> Saw | None:
    """Bids went out for a whole window and nothing came back, though it usually does."""
    window_ms, least, alpha = setup.window_ms or 0, setup.count_min or 1, setup.alpha or 0.0
    now = _answerable(facts, window_ms, 0.5)
    if now.bids < least or now.results:
        return None
    before = past(facts, window_ms)
    # Outcomes of an earlier stretch's bids would make shares above one.
    pairs = before.pairs(lambda c: min(c.results, c.bids), lambda c: c.bids) if before else []
    if not pairs and now.bids < NO_HISTORY_FACTOR * least:
        return None
    usual = _share(pairs)
    if pairs and binomial_at_most(0, now.bids / spread_of_shares(pairs), usual) > alpha:
        return None
    held_against = f"usually {share(usual)} of bids get one" if pairs else "none ever came"
    return Saw(
        f"{now.bids} bids, the newest {duration(window_ms // 2)} old, and not one outcome in"
        f" {duration(window_ms)}; {held_against}",
        {"bids": now.bids, "outcomes": 0, "usual_share": round(usual, 6)},
        facts.start_ms(window_ms),
    )


def win_rate(facts: Facts, setup: Setup) -> Saw | None:
    """A far larger or smaller share of outcomes is won than before."""
    return _off("outcomes were won", facts, setup, lambda c: c.wins, lambda c: c.results)


def silent_bids(facts: Facts, setup: Setup) -> Saw | None:
    """More bids than usual get no outcome at all."""
    now = _answerable(facts, setup.window_ms or 0, 0.75)
    return _more("bids got no outcome", facts, setup, _silent, lambda c: c.bids, now=now)


def voids(facts: Facts, setup: Setup) -> Saw | None:
    """More bids than usual failed for another reason than their price."""
    return _more("outcomes were void", facts, setup, lambda c: c.voids, lambda c: c.results)


def late_outcomes(facts: Facts, setup: Setup) -> Saw | None:
    """More outcomes than usual came after the grace of their bid."""
    said = "outcomes came after their grace"
    return _more(said, facts, setup, lambda c: c.late, lambda c: c.results)


def refused_outcomes(facts: Facts, setup: Setup) -> Saw | None:
    """More reports than usual were refused; none of them is kept."""
    # By refusals alone: the outcomes beside them must not make a single one enough.
    if facts.window(setup.window_ms or 0).refused < (setup.count_min or 1):
        return None
    said = "reports were refused"
    return _more(said, facts, setup, lambda c: c.refused, _reports, alone=True)


def _more(
    said: str,
    facts: Facts,
    setup: Setup,
    count: Count,
    of: Count,
    *,
    alone: bool = False,
    now: Counts | None = None,
) -> Saw | None:
    """A share that has grown, and is worth a word; `alone` where it is wrong without a past too."""
    window_ms = setup.window_ms or 0
    now = now or facts.window(window_ms)
    trials = of(now)
    if trials < (setup.count_min or 1) or count(now) < (setup.share_min or 0.0) * trials:
        return None
    before = past(facts, window_ms)
    pairs = before.pairs(count, of) if before else []
    if not pairs and not alone:
        return None
    return _judged(said, facts, setup, (count(now), trials), pairs, upper=True)


def _off(said: str, facts: Facts, setup: Setup, count: Count, of: Count) -> Saw | None:
    """A share that has grown or shrunk."""
    now, before = facts.window(setup.window_ms or 0), past(facts, setup.window_ms or 0)
    pairs = before.pairs(count, of) if before else []
    if not pairs or of(now) < (setup.count_min or 1):
        return None
    upper = count(now) > _share(pairs) * of(now)
    return _judged(said, facts, setup, (count(now), of(now)), pairs, upper=upper)


def _judged(
    said: str, facts: Facts, setup: Setup, now: Pair, pairs: list[Pair], *, upper: bool
) -> Saw | None:
    ratio, usual, part = setup.ratio or 1.0, _share(pairs), now[0] / now[1]
    if not (part >= ratio * usual if upper else part <= usual / ratio):
        return None
    tail = shares_tail(now, pairs, upper=upper) if pairs else 0.0
    if tail > (setup.alpha or 0.0):
        return None
    window_ms = setup.window_ms or 0
    against = f"usually {share(usual)}; by chance {chance(tail)}" if pairs else "no earlier ones"
    return Saw(
        f"{share(part)} of {now[1]:.0f} {said} in {duration(window_ms)}; {against}",
        {"count": now[0], "of": now[1], "share": round(part, 6), "usual_share": round(usual, 6)},
        facts.start_ms(window_ms),
    )


def _share(pairs: list[Pair]) -> float:
    trials = sum(of for _, of in pairs)
    return sum(count for count, _ in pairs) / trials if trials else 0.0


def _answerable(facts: Facts, window_ms: int, part: float) -> Counts:
    """The window with only the bids of its first part: the newest had no time for an outcome."""
    start = facts.start_ms(window_ms)
    early = facts.until(start, start + int(part * window_ms))
    return facts.window(window_ms)._replace(bids=early.bids)


def _silent(counts: Counts) -> int:
    # Outcomes of bids that an earlier bucket counted may be more than the bids of this one.
    return max(0, counts.bids - counts.results)


def _reports(counts: Counts) -> int:
    return counts.refused + counts.results + counts.words
