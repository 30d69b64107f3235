"""bidkeel audit: V1 to V7 on the database as it is, the figure of V8, and the journal's chain."""

from __future__ import annotations

import argparse
import json
import re
import sys
from dataclasses import asdict

from service.connecting import open_database
from service.errors import Malformed
from service.money import nanos_text
from service.settings import load
from service.store.audit import CHECKS, Finding, audit, unfunded
from service.store.chain import Verdict, verify
from service.store.migrate import require_current

_HASH = re.compile(r"[0-9a-f]{64}")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The form of the answer, and what was kept of the last one."""
    parser.add_argument("--json", action="store_true", help="one JSON object")
    parser.add_argument(
        "--journal-head", metavar="HASH",
        help="the head that an earlier audit showed: finds rows cut off the end of the journal",
    )  # fmt: skip


def run(arguments: argparse.Namespace) -> int:
    """Exit code 0 when every promise holds, 3 when one does not."""
    remembered = arguments.journal_head
    if remembered is not None and not _HASH.fullmatch(remembered):
        raise Malformed("bad_hash", "A head of the journal has 64 digits of 0-9 and a-f.")
    database = open_database(load())
    try:
        require_current(database)
        # One view, or money that moves between two reads would look like a difference.
        found, loose, chain = database.read(
            lambda c: (audit(c), unfunded(c), verify(c, remembered))
        )
    finally:
        database.close()
    if arguments.json:
        told = {"findings": [asdict(f) for f in found], "unfunded": nanos_text(loose)}
        sys.stdout.write(json.dumps({**told, "journal": asdict(chain)}) + "\n")
    else:
        sys.stdout.write("\n".join([*_money(found, loose), *_journal(chain), ""]))
    return 3 if found or chain.broken is not None else 0


def _money(found: list[Finding], loose: int) -> list[str]:
    lines = [f"{finding.line_item}: {finding.check}: off by {finding.off}" for finding in found]
    lines.append(f"{len(CHECKS)} checks and a replay: {len(found)} differences.")
    return [*lines, f"V8: {nanos_text(loose)} units of currency are unfunded."]


def _journal(chain: Verdict) -> list[str]:
    lines = []
    if chain.broken is not None:
        where = "" if chain.number is None else f" row {chain.number}"
        lines.append(f"Journal{where}: {chain.broken}.")
    lines.append(f"Journal: {chain.rows} rows follow one another; head {chain.head}")
    if chain.adopted:
        lines.append(f"{chain.adopted} of them were sealed after an earlier release wrote them.")
    if chain.unsealed:
        lines.append(f"{chain.unsealed} rows wait for their seal.")
    return lines
