"""The command line: reads which command is meant and hands over to it."""

from __future__ import annotations

import argparse
import sys

from service.commands import audit, bench_real, demo, keys, migrate, serve
from service.errors import BidkeelError

EXIT_CODES = (
    "exit codes: 0 done, 1 refused or failed, 2 wrong usage, 3 the audit found a difference"
)


def main(words: list[str] | None = None) -> int:
    """Run one command; returns its exit code."""
    arguments = _parser().parse_args(words)
    try:
        return int(arguments.run(arguments))
    except BidkeelError as error:
        sys.stderr.write(f"bidkeel: {error}\n")
        return 1


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="bidkeel",
        description="Names a price for every impression opportunity, never beyond the budget.",
        epilog=EXIT_CODES,
    )
    parts = parser.add_subparsers(dest="command", required=True)
    for name, module, text in (
        ("serve", serve, "serve bids, outcomes and operators over HTTP"),
        ("demo", demo, "play an invented advertiser's auctions against a real server"),
        ("migrate", migrate, "bring the database to the schema of this release"),
        ("keys", keys, "add, list and end access keys"),
        ("audit", audit, "check every promise on the database as it is"),
    ):
        part = parts.add_parser(name, help=text, description=text, epilog=EXIT_CODES)
        module.add_arguments(part)
        part.set_defaults(run=module.run)
    _bench(parts)
    return parser


def _bench(parts: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    text = "measure the service against something outside it"
    bench = parts.add_parser("bench", help=text, description=text)
    kinds = bench.add_subparsers(dest="kind", required=True)
    real = kinds.add_parser("real", help="play real sealed-bid auctions through a real server")
    bench_real.add_arguments(real)
    real.set_defaults(run=bench_real.run)


if __name__ == "__main__":
    sys.exit(main())
