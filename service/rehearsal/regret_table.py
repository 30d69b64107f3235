"""The table of regret: bidders by markets by horizons, its jobs, and what must hold in it."""

from __future__ import annotations

import zlib
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field

import numpy as np

from service.rehearsal import contest, theory, tree_contest, worlds
from service.rehearsal.processes import spread
from service.rehearsal.worlds import STAGES, Shares

GRID_BEATEN = 2.5  # On a coin flip the grid loses more than so many times what a tree loses.
FORGETTING = {
    contest.UCBID: (contest.DISCOUNTED_UCBID, contest.WINDOWED_UCBID),
    contest.KL: (contest.DISCOUNTED_KL, contest.WINDOWED_KL),
}
METHODS = (*contest.BIDDERS, *tree_contest.TREES)


@dataclass(frozen=True, slots=True)
class Size:
    """
    How much is played.

    Args:
        horizons: Numbers of rounds, ascending, each played from its start.
        runs: Of each market, for bidders that play all runs at once.
        tree_runs: For trees, which play one run at a time.
    """

    horizons: tuple[int, ...]
    runs: int
    tree_runs: int


FULL = Size((1000, 4000, 16_000), 100, 4)
QUICK = Size((250, 1000, 4000), 20, 2)


@dataclass(frozen=True, slots=True)
class Job:
    """One bidder over some markets at one horizon; picklable, for a process of its own."""

    method: str
    markets: tuple[str, ...]
    rounds: int
    runs: int
    seed: int


@dataclass(frozen=True, slots=True)
class Cell:
    """Mean regret of one bidder on one market at one horizon and its standard error, in scales."""

    mean: float
    error: float


@dataclass(slots=True)
class Table:
    """
    All cells, by market, bidder and horizon.

    Args:
        size: How much was played.
        cells: Filled while jobs come in.
    """

    size: Size
    cells: dict[tuple[str, str, int], Cell] = field(default_factory=dict)

    def means(self, market: str, method: str) -> list[float]:
        """The mean regret at each horizon."""
        return [self.cells[market, method, rounds].mean for rounds in self.size.horizons]

    def exponent(self, market: str, method: str) -> float:
        """The fitted growth exponent of a bidder on a market."""
        return theory.exponent(self.size.horizons, self.means(market, method))

    def theory_exponent(self, market: str, method: str) -> float | None:
        """The same fit to the published growth, over the same horizons; None without one."""
        found = theory.growth(method, market)
        if found is None:
            return None
        horizons = self.size.horizons
        return theory.exponent(horizons, [found.of(float(rounds)) for rounds in horizons])

    def winner(self, market: str) -> str:
        """The bidder that lost least at the longest horizon."""
        last = self.size.horizons[-1]
        return min(self.methods(market), key=lambda name: self.cells[market, name, last].mean)

    def methods(self, market: str) -> list[str]:
        """The bidders that played a market, in the order of the table."""
        return [name for name in METHODS if (market, name, self.size.horizons[-1]) in self.cells]

    def markets(self) -> list[str]:
        """The markets played, in the order of the table."""
        played = {market for market, _, _ in self.cells}
        return [name for name in STAGES if name in played]

    def broken(self) -> list[str]:
        """What must hold and does not, one sentence each."""
        return [*self._bounds_broken(), *self._trees_beaten(), *self._forgetting_in_vain()]

    def _bounds_broken(self) -> Iterator[str]:
        for (market, method, rounds), cell in self.cells.items():
            most = theory.bound(method, market, rounds)
            if isinstance(most, float) and cell.mean > most:
                yield f"{method} on {market} lost {cell.mean:.1f} in {rounds:,}, bound {most:.1f}."

    def _trees_beaten(self) -> Iterator[str]:
        last = self.size.horizons[-1]
        for market in theory.COINS:
            grid = self.cells.get((market, contest.EXP3, last))
            for method in tree_contest.KNOWN:
                tree = self.cells.get((market, method, last))
                if grid and tree and grid.mean <= GRID_BEATEN * tree.mean:
                    yield f"{method} on {market} is not {GRID_BEATEN} times better than the grid."

    def _forgetting_in_vain(self) -> Iterator[str]:
        last = self.size.horizons[-1]
        for method, ways in FORGETTING.items():
            plain = self.cells.get((worlds.ABRUPT, method, last))
            for way in ways:
                forgets = self.cells.get((worlds.ABRUPT, way, last))
                if plain and forgets and forgets.mean >= plain.mean:
                    yield f"{way} does not beat its plain form after an abrupt change."


def jobs(
    size: Size,
    seed: int,
    methods: Sequence[str] = METHODS,
    markets: Sequence[str] = tuple(STAGES),
) -> list[Job]:
    """Everything to be played, the longest first."""
    found = []
    # The longest begin first, or one process would work on alone at the end.
    for rounds in reversed(size.horizons):
        for method in methods:
            if method in tree_contest.TREES:
                alone = [(market,) for market in markets]
                found += [Job(method, one, rounds, size.tree_runs, seed) for one in alone]
            else:
                found.append(Job(method, tuple(markets), rounds, size.runs, seed))
    return found


def played(job: Job) -> list[Shares]:
    """The regret of every run of each of the job's markets, in scales."""
    stages = [STAGES[market] for market in job.markets]
    ground = worlds.world(stages, job.rounds, job.runs, job.seed)
    # Not by hash(), which is another number in every process.
    rng = np.random.default_rng([job.seed, job.rounds, zlib.crc32(job.method.encode())])
    if job.method in tree_contest.TREES:
        regret = tree_contest.play_tree(ground, job.method, stages[0], rng)
    else:
        runs = ground.competing.shape[1]
        regret = contest.play(ground, contest.BIDDERS[job.method](runs, job.rounds, rng))
    return np.split(regret, len(stages))


def table(size: Size, todo: Sequence[Job], processes: int, advance: Callable[[], object]) -> Table:
    """Play the jobs in so many processes; `advance` is called after each."""
    filled = Table(size)
    for job, regrets in spread(played, todo, processes):
        for market, regret in zip(job.markets, regrets, strict=True):
            filled.cells[market, job.method, job.rounds] = _cell(regret)
        advance()
    return filled


def _cell(regret: Shares) -> Cell:
    error = float(regret.std(ddof=1) / np.sqrt(regret.size)) if regret.size > 1 else float("nan")
    return Cell(float(regret.mean()), error)
