"""Option values that commands share, so that a wrong one is refused before a server starts."""

from __future__ import annotations

import argparse


def count(text: str) -> int:
    """
    Read a whole number of at least one.

    Raises:
        argparse.ArgumentTypeError: It is none.
    """
    # By itself isdigit() also takes superscripts, which int() refuses.
    if not text.isascii() or not text.isdigit() or int(text) < 1:
        raise argparse.ArgumentTypeError("not a whole number above 0")
    return int(text)


def seed(text: str) -> int:
    """
    Read a seed, a whole number of at least nought.

    Raises:
        argparse.ArgumentTypeError: It is none.
    """
    if not text.isascii() or not text.isdigit():
        raise argparse.ArgumentTypeError("not a whole number of at least 0")
    return int(text)


def add_database(parser: argparse.ArgumentParser) -> None:
    """Let a command choose the database that its servers use."""
    parser.add_argument(
        "--database",
        choices=("sqlite", "postgresql"),
        default="sqlite",
        help="that the servers use, made for this run and deleted after it",
    )
