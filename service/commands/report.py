"""Tables and progress for commands, apart so that each command only says what stands in them."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence

from rich import box
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn
from rich.table import Table

from service import money


def progress() -> Progress:
    """A progress bar on the error output, so that the output stays clean for programs."""
    return Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeElapsedColumn(),
        console=Console(stderr=True),
    )


def table(title: str, heads: Sequence[str], rows: Mapping[str, Sequence[str]]) -> Table:
    """One row per quantity, its unit in its name; one column per thing compared."""
    # Narrow, so that a table of many columns still fits a terminal of eighty.
    grid = Table(title=title, title_justify="left", box=box.SIMPLE_HEAD, padding=(0, 1, 0, 0))
    grid.add_column("", no_wrap=True)
    for head in heads:
        grid.add_column(head, justify="right")
    for name, cells in rows.items():
        grid.add_row(name, *cells)
    return grid


def amount(nanos: int, currency: str) -> str:
    """An amount in full, such as 4.000123 EUR."""
    return f"{money.nanos_text(nanos)} {currency}"


def cpm(nanos: float) -> str:
    """A price or value per impression, as CPM to three decimals."""
    return f"{nanos / money.NANOS_PER_CPM:.3f}"


def interval(low_nanos: int, high_nanos: int) -> str:
    """Two ends per impression, as CPM."""
    return f"{low_nanos / money.NANOS_PER_CPM:.2f} to {high_nanos / money.NANOS_PER_CPM:.2f}"


def share(part: int, whole: int) -> str:
    """A share of a count in per cent."""
    return f"{100 * part / whole:.1f} %" if whole else "-"


def reasons(counts: Counter[str]) -> str:
    """Counts by reason, the most frequent first."""
    return ", ".join(f"{count:,} {reason}" for reason, count in counts.most_common()) or "none"
