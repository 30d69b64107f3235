"""The command line: reads which command is meant and hands over to it.

A command's module is loaded only when it is called, so that small commands start quickly.
"""

from __future__ import annotations

import argparse
import importlib
import sys

from service.errors import BidkeelError

EXIT_CODES = "exit codes: 0 done, 1 refused or failed, 2 wrong usage, 3 the audit found something"
COMMANDS = {
    "serve": "serve bids, outcomes and operators over HTTP",
    "demo": "play an invented advertiser's auctions against a real server",
    "migrate": "bring the database to the schema of this release",
    "keys": "add, list and end access keys",
    "audit": "check every promise on the database as it is",
}
BENCHES = {"real": "play real sealed-bid auctions through a real server"}


def main(words: list[str] | None = None) -> int:
    """Run one command; returns its exit code."""
    given = sys.argv[1:] if words is None else words
    arguments = _parser(given).parse_args(given)
    try:
        return int(arguments.run(arguments))
    except BidkeelError as error:
        sys.stderr.write(f"bidkeel: {error}\n")
        return 1


def _parser(words: list[str]) -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="bidkeel",
        description="Names a price for every impression opportunity, never beyond the budget.",
        epilog=EXIT_CODES,
    )
    parts = parser.add_subparsers(dest="command", required=True)
    for name, text in COMMANDS.items():
        part = parts.add_parser(name, help=text, description=text, epilog=EXIT_CODES)
        if words[:1] == [name]:
            _load(part, f"service.commands.{name}")
    text = "measure the service against something outside it"
    bench = parts.add_parser("bench", help=text, description=text)
    kinds = bench.add_subparsers(dest="kind", required=True)
    for name, text in BENCHES.items():
        part = kinds.add_parser(name, help=text, description=text, epilog=EXIT_CODES)
        if words[:2] == ["bench", name]:
            _load(part, f"service.commands.bench_{name}")
    return parser


def _load(part: argparse.ArgumentParser, name: str) -> None:
    module = importlib.import_module(name)
    module.add_arguments(part)
    part.set_defaults(run=module.run)


if __name__ == "__main__":
    sys.exit(main())
