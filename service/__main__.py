"""The command line: reads which command is meant and hands over to it.

A command's module is loaded only when it is called, so that small commands start quickly.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable
from types import ModuleType

from service.errors import BidkeelError

Load = Callable[[], ModuleType]
EXIT_CODES = "exit codes: 0 done, 1 refused or failed, 2 wrong usage, 3 a check found something"


def _serve() -> ModuleType:
    from service.commands import serve

    return serve


def _demo() -> ModuleType:
    from service.commands import demo

    return demo


def _migrate() -> ModuleType:
    from service.commands import migrate

    return migrate


def _keys() -> ModuleType:
    from service.commands import keys

    return keys


def _audit() -> ModuleType:
    from service.commands import audit

    return audit


def _rebuild() -> ModuleType:
    from service.commands import rebuild

    return rebuild


def _hindsight() -> ModuleType:
    from service.commands import hindsight

    return hindsight


def _backup() -> ModuleType:
    from service.commands import backup

    return backup


def _restore() -> ModuleType:
    from service.commands import restore

    return restore


def _settings() -> ModuleType:
    from service.commands import settings_table

    return settings_table


def _rehearse() -> ModuleType:
    from service.commands import rehearse

    return rehearse


def _bench_rehearse() -> ModuleType:
    from service.commands import bench_rehearse

    return bench_rehearse


def _bench_real() -> ModuleType:
    from service.commands import bench_real

    return bench_real


def _bench_regret() -> ModuleType:
    from service.commands import bench_regret

    return bench_regret


def _bench_rare() -> ModuleType:
    from service.commands import bench_rare

    return bench_rare


def _bench_delay() -> ModuleType:
    from service.commands import bench_delay

    return bench_delay


def _bench_learn() -> ModuleType:
    from service.commands import bench_learn

    return bench_learn


def _bench_pacing() -> ModuleType:
    from service.commands import bench_pacing

    return bench_pacing


def _bench_curve() -> ModuleType:
    from service.commands import bench_curve

    return bench_curve


def _bench_reads() -> ModuleType:
    from service.commands import bench_reads

    return bench_reads


def _bench_hindsight() -> ModuleType:
    from service.commands import bench_hindsight

    return bench_hindsight


def _bench_decide() -> ModuleType:
    from service.commands import bench_decide

    return bench_decide


def _bench_growth() -> ModuleType:
    from service.commands import bench_growth

    return bench_growth


def _bench_store() -> ModuleType:
    from service.commands import bench_store

    return bench_store


def _bench_workers() -> ModuleType:
    from service.commands import bench_workers

    return bench_workers


def _bench_http() -> ModuleType:
    from service.commands import bench_http

    return bench_http


def _drill_kill() -> ModuleType:
    from service.commands import drill_kill

    return drill_kill


def _drill_catalogue() -> ModuleType:
    from service.commands import drill_catalogue

    return drill_catalogue


def _drill_outage() -> ModuleType:
    from service.commands import drill_outage

    return drill_outage


def _drill_rolling() -> ModuleType:
    from service.commands import drill_rolling

    return drill_rolling


def _drill_soak() -> ModuleType:
    from service.commands import drill_soak

    return drill_soak


def _drill_night() -> ModuleType:
    from service.commands import drill_night

    return drill_night


def _tripwires_try() -> ModuleType:
    from service.commands import tripwires_try

    return tripwires_try


def _openrtb_explain() -> ModuleType:
    from service.commands import openrtb_explain

    return openrtb_explain


COMMANDS: dict[str, tuple[str, Load]] = {
    "serve": ("serve bids, outcomes and operators over HTTP", _serve),
    "demo": ("play an invented advertiser's auctions against a real server", _demo),
    "migrate": ("bring the database to the schema of this release", _migrate),
    "keys": ("add, list and end access keys", _keys),
    "settings": ("print every setting with its default and reason", _settings),
    "rehearse": ("try policies on a market, a log or a file of auctions", _rehearse),
    "audit": ("check every promise on the database as it is", _audit),
    "rebuild": ("fold learners from zero and compare with what is published", _rebuild),
    "hindsight": ("see what another cap, price, floor or method would have done", _hindsight),
    "backup": ("write a consistent copy of the database while it is served", _backup),
    "restore": ("put a backup in place of the database, spend to be confirmed", _restore),
}
BENCHES: dict[str, tuple[str, Load]] = {
    "real": ("play real sealed-bid auctions through a real server", _bench_real),
    "regret": ("hold every method against its theory on invented markets", _bench_regret),
    "rare": ("see in money what each method earns on rare values", _bench_rare),
    "delay": ("see in money what late values cost", _bench_delay),
    "learn": ("time the folding of each method's lessons", _bench_learn),
    "pacing": ("budgets, return targets and hints on invented markets", _bench_pacing),
    "rehearse": ("time simulated auctions, and bids beside a rehearsal", _bench_rehearse),
    "decide": ("time one price of each method, and the steps around it", _bench_decide),
    "growth": ("see whether bids stay quick as line items, log and lessons grow", _bench_growth),
    "store": ("time what a bid's life costs in the database", _bench_store),
    "http": ("put one load on the service and on bare endpoints", _bench_http),
    "workers": ("put one load on one worker and on two by turns", _bench_workers),
    "curve": ("learn win curves and first-price bids from real sealed bids", _bench_curve),
    "reads": ("time pages, tables and charts of a large log over HTTP", _bench_reads),
    "hindsight": ("see whether hindsight's intervals hold a known truth", _bench_hindsight),
}
DRILLS: dict[str, tuple[str, Load]] = {
    "catalogue": ("run the test of every known fault and print the table", _drill_catalogue),
    "night": ("let a value feed go wrong at night, and undo it byte for byte", _drill_night),
    "kill": ("kill workers and database under traffic, and check every promise", _drill_kill),
    "outage": ("stop the database under load and time the bids", _drill_outage),
    "rolling": ("restart servers one by one under load; nobody may notice", _drill_rolling),
    "soak": ("run even traffic for minutes; nothing may grow", _drill_soak),
}
TRIPWIRES: dict[str, tuple[str, Load]] = {
    "try": ("when rules would have fired on recorded history; changes nothing", _tripwires_try),
}
OPENRTB: dict[str, tuple[str, Load]] = {
    "explain": ("say step by step what a mapping makes of a bid request", _openrtb_explain),
}


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
    for name, (text, load) in COMMANDS.items():
        part = parts.add_parser(name, help=text, description=text, epilog=EXIT_CODES)
        if words[:1] == [name]:
            _fill(part, load())
    for family, text, members in (
        ("bench", "measure the service against something outside it", BENCHES),
        ("drill", "break something on purpose and check what was promised", DRILLS),
        ("tripwires", "rules that freeze or warn by themselves", TRIPWIRES),
        ("openrtb", "try a mapping of OpenRTB requests without a server", OPENRTB),
    ):
        kinds = parts.add_parser(family, help=text, description=text).add_subparsers(
            dest="kind", required=True
        )
        for name, (text, load) in members.items():
            part = kinds.add_parser(name, help=text, description=text, epilog=EXIT_CODES)
            if words[:2] == [family, name]:
                _fill(part, load())
    return parser


def _fill(part: argparse.ArgumentParser, command: ModuleType) -> None:
    command.add_arguments(part)
    part.set_defaults(run=command.run)


if __name__ == "__main__":
    sys.exit(main())
