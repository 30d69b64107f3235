"""Where a bench's processor time goes, by function, apart so that every bench shows it alike."""

from __future__ import annotations

import argparse
import cProfile
import pstats
import sys
from collections.abc import Iterator
from contextlib import contextmanager

LINES = 25


def add_profile(parser: argparse.ArgumentParser) -> None:
    """Declare the option."""
    said = "say on standard error where the time goes; what is timed then takes longer"
    parser.add_argument("--profile", action="store_true", help=said)


@contextmanager
def profiled(wanted: bool) -> Iterator[None]:
    """Say on standard error which functions took most of the block's own time."""
    if not wanted:
        yield
        return
    profile = cProfile.Profile()
    with profile:
        yield
    pstats.Stats(profile, stream=sys.stderr).sort_stats("tottime").print_stats(LINES)
