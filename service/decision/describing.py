"""What is known and what is bid, for people, apart from pricing: nothing here moves a price."""

from __future__ import annotations

import math

import numpy as np

from service.decision import brakes
from service.decision.counts import Counts, delay_mean_ms, waiting
from service.decision.describing_one import said_of_one
from service.decision.methods import METHODS
from service.decision.price import Passed, Proposal, Ready
from service.decision.terms import Terms
from service.learner import count_sequences, delay
from service.learner.growing import tree_of
from service.learner.rules import ACCRUES, RARE_FROM
from service.learner.tally import Tally

RISK = 0.05  # Of ever being outside.
# An interval that holds at every moment is narrowest at one number, fixed beforehand.
NARROWEST = 1000.0
NARROWEST_HITS = 10.0
OF_SHARES = (
    "95 % interval for the mean value of an impression bought, valid at every moment at once, "
    "however often it is read: assumes values between 0 and the ceiling that do not depend on "
    "each other and keep one unchanging mean"
)
OF_COUNTS = (
    "95 % interval for how often an impression bought brings something, valid at every moment "
    "at once, times the mean amount so far: assumes a rate that does not change; how far the "
    "mean amount itself is off is not in it"
)
OF_WINS = (
    "95 % interval for the share of rounds won, valid at every moment at once: assumes a share "
    "that does not change, which bids and rivals that move do not give"
)
OF_COST = (
    "paid for impressions, less what they are worth if each is worth the posterior mean of now; "
    "below 0 is a gain; assumes that mean, and that all were alike"
)
NO_ALLOWANCE = "this method takes no account of an allowance"
NO_LIMIT = "learning may cost anything: no allowance is configured"
HELD = "learning has cost more than its allowance: no bid is above the posterior mean"
FREE = "learning has cost less than its allowance: bids are the method's own"
DELAY_KNOWN = "the mean delay is the one configured"
DELAY_FITTED = "the mean delay is fitted to values that came and that are awaited"
DELAY_UNKNOWN = (
    "not identified: what came so far does not tell the mean delay, which leans on a quarter "
    "of the window"
)
LOOKS = {
    None: "no change is looked for",
    "flag": "a change is only shown here",
    "restart": "a change makes the learner begin afresh",
}


def describe(ready: Ready) -> dict[str, object]:
    """What is known and what is bid; money as ints in nanos under names in `_nanos`."""
    method, total = METHODS[ready.terms.method], ready.memory.total
    bid = ready.usual if isinstance(ready.usual, Proposal) else None
    return {
        "method": method.name,
        "settings": dict(ready.terms.settings),
        "wins": total.wins,
        "known": total.known,
        "awaited": _awaited(ready),
        "converted": total.converted,
        "unit": f"{ready.terms.currency} per impression bought: mean, low, high, bid, guess",
        **_estimate(ready),
        "guess": _guess(ready),
        **_costs(ready, total),
        "win_rate": _win_rate(total),
        "delay": _delay(ready),
        "change": _change(ready),
        "tree": _tree(ready),
        **said_of_one(ready),
        "bid_nanos": bid.price if bid else None,
        "set_by": bid.set_by if bid else None,
        "spread": _spread(ready),
        "pass": ready.answer.reason if isinstance(ready.answer, Passed) else None,
        "source": method.source,
        "assumptions": method.assumes,
        "guarantee": _guarantee(ready, total),
    }


def mean_interval(counts: Counts, terms: Terms) -> tuple[float, float, str]:
    """Limits of the mean value in nanos and what they are; 0 to the ceiling before the first."""
    known, converted = float(counts.known), float(counts.converted)
    # An interval for shares is wide where single values dwarf the mean; counts are not.
    if terms.ceiling <= RARE_FROM * terms.cap:
        hits = min(float(counts.amount) / terms.scale, known)
        low, high = count_sequences.bernoulli_interval(hits, known, RISK, NARROWEST)
        return float(low) * terms.scale, float(high) * terms.scale, OF_SHARES
    low, high = count_sequences.poisson_interval(
        converted, known, RISK, NARROWEST_HITS * terms.typical / terms.expected
    )
    amount = float(counts.amount) / converted if converted else float(terms.typical)
    return float(low) * amount, min(float(high) * amount, terms.scale), OF_COUNTS


def _estimate(ready: Ready) -> dict[str, object]:
    counts, terms = ready.counts, ready.terms
    if counts is None:
        return {"mean_nanos": None, "low_nanos": 0, "high_nanos": terms.ceiling, "interval": None}
    with np.errstate(all="ignore"):
        low, high, words = mean_interval(counts, terms)
    known = float(counts.known)
    return {
        "mean_nanos": round(float(counts.amount) / known) if known > 0.0 else None,
        "low_nanos": math.floor(low),
        "high_nanos": min(math.ceil(high), terms.ceiling),
        "interval": _beyond(words, _interval_strains(ready)),
        "counted_as_known": round(known, 3),
    }


def _interval_strains(ready: Ready) -> list[str]:
    """What an interval was not proved for and this line item does."""
    memory, terms = ready.memory, ready.terms
    accrues, awaited = terms.arrival == ACCRUES, _awaited(ready) > 0
    return _those(
        ("forgetting the old", terms.drift is not None),
        ("beginning afresh after an alarm", memory.began_ms > 0),
        ("counting open windows by their age", accrues and awaited),
        ("leaving out impressions of which no word has come", awaited and not accrues),
    )


def _awaited(ready: Ready) -> int:
    """Impressions bought whose value may still come, or come first."""
    memory = ready.memory
    if ready.terms.arrival == ACCRUES:
        return sum(cell.bought for cell in memory.cells[memory.closed :])
    return max(0, memory.total.wins - memory.total.known)


def _guess(ready: Ready) -> dict[str, object]:
    """The prior: what it says, what it weighs, and who gave it."""
    terms = ready.terms
    return {
        "per_impression_nanos": terms.expected,
        "typical_nanos": terms.typical,
        "conversions": terms.prior_conversions,
        "from": "kin" if ready.memory.prior is not None else "configuration",
        "moves_bids": METHODS[terms.method].takes_prior,
    }


def _costs(ready: Ready, total: Tally) -> dict[str, object]:
    """What learning has cost in all, and the allowance, where the method has one."""
    terms, learns = ready.terms, METHODS[ready.terms.method].learns
    allowance = terms.allowance if learns else None
    cost = math.nan
    if ready.counts is not None:
        with np.errstate(all="ignore"):
            cost = brakes.learning_cost(total, ready.counts, terms)
    limited = NO_LIMIT if allowance is None else FREE if ready.most is None else HELD
    return {
        "learning_cost_nanos": round(cost) if math.isfinite(cost) else None,
        "learning_cost_is": f"{terms.currency} in all: {OF_COST}",
        "allowance_nanos": allowance,
        "allowance_says": limited if learns else NO_ALLOWANCE,
    }


def _win_rate(total: Tally) -> dict[str, object]:
    rounds = max(total.rounds, total.wins, 0)
    # Corrections may leave a sum of part of a stream below nothing.
    low, high = count_sequences.bernoulli_interval(max(total.wins, 0), rounds, RISK, NARROWEST)
    return {
        "share": total.wins / rounds if rounds else None,
        "low": float(low),
        "high": float(high),
        "interval": OF_WINS,
    }


def _delay(ready: Ready) -> dict[str, object] | None:
    """How late values come, where that moves a price."""
    memory, terms = ready.memory, ready.terms
    if terms.arrival != ACCRUES:
        return None
    if terms.delay_mean_ms is not None:
        words = DELAY_KNOWN
    else:
        data = waiting(memory, terms)
        # One delay alone says too little of a mean to call it fitted.
        found = memory.delays > 1 and bool(delay.identified(data))
        words = DELAY_FITTED if found else DELAY_UNKNOWN
    return {"mean_s": round(delay_mean_ms(memory, terms) / 1000.0, 3), "says": words}


def _change(ready: Ready) -> dict[str, object]:
    watch, on_change = ready.memory.watch, ready.terms.on_change
    ago_s = (ready.memory.clock_ms - watch.changed_ms) / 1000.0
    return {
        "found": watch.alarms,
        "last_began_ago_s": ago_s if watch.alarms else None,
        "says": LOOKS.get(on_change, LOOKS[None]),
    }


def _tree(ready: Ready) -> dict[str, object] | None:
    """How far a tree of exponential weights has grown, and what could not teach it."""
    if ready.law is None or ready.terms.tree is None:
        return None
    tree = tree_of(ready.memory.tree, ready.terms.tree)
    return {
        "intervals": len(tree.steps) + 1,
        "lessons": tree.lessons,
        "lessons_since_weights_began": tree.counted,
        "outcomes_no_bid_could_beat": tree.beyond,
        "outcomes_without_law_or_price": tree.unweighed,
    }


def _spread(ready: Ready) -> dict[str, object] | None:
    """Between what prices most answers lie, for a method that draws them."""
    prices = [ready.at(order) for order in (0.1, 0.5, 0.9)]
    if not ready.draws or any(isinstance(price, Passed) for price in prices):
        return None
    tenth, median, nine_tenths = (p.price for p in prices if isinstance(p, Proposal))
    return {
        "tenth_cpm_nanos": tenth,
        "median_cpm_nanos": median,
        "nine_tenths_cpm_nanos": nine_tenths,
    }


def _guarantee(ready: Ready, total: Tally) -> str:
    """The method's own words, unless the line item is configured past every theorem."""
    said = METHODS[ready.terms.method].guarantee(total, ready.terms)
    strains = _those(
        ("forgetting the old", ready.terms.drift is not None),
        ("beginning afresh after an alarm", ready.terms.on_change == "restart"),
        ("a learning allowance that holds bids now", ready.most is not None),
        ("bids shaded for a first price", ready.terms.auction == "first"),
        ("a price that is taken or left", ready.terms.auction == "fixed"),
        ("bidding by hints", ready.terms.hints),
        ("pacing that lowers bids now", ready.hold.mu > 0),
        ("a return target", ready.hold.target is not None),
    )
    if not strains:
        return said
    return f"No theorem covers this method together with {' and '.join(strains)}. Without: {said}"


def _beyond(words: str, strains: list[str]) -> str:
    return f"{words}; no theorem covers it with {' and '.join(strains)}" if strains else words


def _those(*named: tuple[str, bool]) -> list[str]:
    return [name for name, on in named if on]
