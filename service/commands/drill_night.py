"""`bidkeel drill night`: a value feed goes wrong, and what it taught is undone byte for byte.

Two line items of one setting get the same traffic. At "02:00" the feed of one of them goes wrong
(values x 5, below the ceiling, and zeros stop), while the other gets no traffic. A tripwire
fires; on-call finds it frozen or freezes it, previews, retracts the bad stretch, rewinds to its
beginning and thaws. Afterwards both get the same traffic again. Then the value learner of the
one must equal that of the other, byte for byte. Time is compressed: tripwires judge arrival, so
an "hour" is as long as their window is set.
"""

from __future__ import annotations

import argparse
import asyncio
import hashlib
import json
import signal
import sys
import tempfile
import time
from collections.abc import Callable
from contextlib import ExitStack
from dataclasses import asdict, dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import uvloop

from service.commands import options
from service.commands.caller import Unanswered, create, read
from service.commands.drill_night_exchange import Exchange
from service.commands.drill_night_pager import Pager
from service.commands.postgresql_process import PostgreSQLProcess
from service.commands.server_process import ServerProcess
from service.commands.wire import Wire
from service.learner.memory import Memory
from service.store import learners, lessons
from service.store.database import Database, Reading

PAIRS_MAX = 20
SECRET = "an-invented-secret-of-the-night-drill"  # noqa: S105 - Of a server that ends with us.
WINDOWS_BEFORE = 4  # So many earlier windows a rule wants.
BAD_S_MAX = 30.0
LOOK_S = 0.2
CAUGHT_UP_S_MAX = 20.0
# Of what a learner knows, all that impressions and values taught; rounds and prices are not.
SUMS = ("known", "converted", "amount", "amount_square", "clipped", "values_seen")
CELLS = ("start_ms", "bought", "known", "converted", "amount", "amount_square")
FACTS = ("closed", "heard_ms", "ripe_ms", "ripe_again_ms", "began_ms", "delays", "delay_sum_ms")


@dataclass(slots=True)
class Story:
    """What happened when, and what was found wrong."""

    moments: list[tuple[str, str]] = field(default_factory=list)
    faults: list[str] = field(default_factory=list)
    digests: dict[str, str] = field(default_factory=dict)
    told: dict[str, dict[str, Any]] = field(default_factory=dict)
    began: float = field(default_factory=time.monotonic)
    night: str = ""
    twin: str = ""
    quiet: bool = False

    def note(self, what: str) -> None:
        """Add a moment, and say it as it happens."""
        after = f"{time.monotonic() - self.began:6.1f} s"
        self.moments.append((after, what))
        if not self.quiet:
            sys.stdout.write(f"{after}  {what}\n")
            sys.stdout.flush()

    def want(self, holds: bool, otherwise: str) -> None:
        """Keep as a fault what does not hold."""
        if not holds:
            self.faults.append(otherwise)
            self.note(f"WRONG: {otherwise}")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--window-s", type=options.count, default=5, help="an 'hour', in seconds")
    parser.add_argument("--only-warn", action="store_true", help="tripwires warn, a person freezes")
    parser.add_argument("--postgresql", action="store_true", help="instead of SQLite")
    parser.add_argument("--seed", type=options.seed, default=2, help="of the traffic")
    parser.add_argument("--json", action="store_true", help="print what was found for a program")


def run(arguments: argparse.Namespace) -> int:
    """
    Run the drill on a server and a database of its own.

    Returns:
        0 when the fault was found, stopped and undone, else 3.
    """
    # Told to end, end like on Ctrl-C, so that no server outlives the drill.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    with ExitStack() as stack:
        folder = stack.enter_context(tempfile.TemporaryDirectory(prefix="bidkeel-drill-"))
        pager = stack.enter_context(Pager(SECRET))
        settings = {
            "BIDKEEL_TRIPWIRE_S": "1",
            "BIDKEEL_TRIPWIRE_MINUTE_S": "1",
            "BIDKEEL_TICK_S": "1",
            "BIDKEEL_WEBHOOK_URL": pager.url,
            "BIDKEEL_WEBHOOK_SECRET": SECRET,
        }
        if arguments.postgresql:
            url = stack.enter_context(PostgreSQLProcess()).url
            settings |= {"BIDKEEL_DATABASE_URL": url, "BIDKEEL_WORKERS": "2"}
        server = stack.enter_context(ServerProcess(Path(folder), settings))
        database = Database(server.environment["BIDKEEL_DATABASE_URL"], pool_size=2)
        stack.callback(database.close)
        story = uvloop.run(_night(arguments, server, database, pager))
    _tell(story, as_json=arguments.json)
    return 3 if story.faults else 0


async def _night(
    arguments: argparse.Namespace, server: ServerProcess, database: Database, pager: Pager
) -> Story:
    story, window_s = Story(quiet=arguments.json), arguments.window_s
    async with server.wire() as wire:
        action = "warn" if arguments.only_warn else "freeze"
        await begin_pair(wire, database, story, lambda name: pair_body(name, window_s, action))
        exchange = Exchange(wire, arguments.seed)
        story.note(f"01:00  both line items get the same traffic; an 'hour' lasts {window_s} s")
        await exchange.play([story.night, story.twin], (1 + WINDOWS_BEFORE) * window_s + 2)
        await caught_up(wire, story.night)
        usual = await _bid_cpm(wire, story.night)
        story.want(
            not await open_findings(wire, story.night), "a tripwire fired before anything was wrong"
        )
        from_at = moment_now()
        story.note(f"02:00  values x 5 and no zeros on '{story.night}'; it bids {usual:.4f} CPM")
        await _go_wrong(wire, exchange, story, frozen=not arguments.only_warn)
        await _mend(wire, story, from_at, usual)
        await exchange.play([story.night, story.twin], window_s + 1)
        for name in (story.night, story.twin):
            await caught_up(wire, name)
        state = await _get(wire, story.night, "state")
        story.want(state["status"] == "open", f"it is {state['status']} again after the thaw")
        story.note(
            f"04:00  both have had the same traffic again; '{story.night}' is {state['status']}"
        )
    story.told = {name: asdict(told) for name, told in exchange.told.items()}
    _compare(database, story)
    _paged(pager, story)
    return story


async def begin_pair(
    wire: Wire, database: Database, story: Story, body: Callable[[str], dict[str, object]]
) -> None:
    """
    Make two line items that began at one moment of service time, as their cells tell age by it.

    Service time moves once a second, so a second pair is seldom needed.
    """
    for number in range(1, PAIRS_MAX + 1):
        names = [f"night-{number}", f"twin-{number}"]
        await asyncio.gather(*(create(wire, body(name)) for name in names))
        began = database.read(lambda c, two=names: _began_ms(c, two))  # type: ignore[misc]
        if len(began) == 1:
            story.night, story.twin = names
            return
    raise Unanswered("No two line items began at one moment.")


async def _go_wrong(wire: Wire, exchange: Exchange, story: Story, *, frozen: bool) -> None:
    """Let the feed be wrong until on-call knows of it."""
    end = time.monotonic() + BAD_S_MAX
    while time.monotonic() < end:
        await exchange.call([story.night], wrong=True)
        await asyncio.sleep(LOOK_S / 2)
        found = await open_findings(wire, story.night)
        sources = {
            freeze["source"] for freeze in (await _get(wire, story.night, "state"))["freezes"]
        }
        if found and (not frozen or "tripwire" in sources):
            break
    for finding in await open_findings(wire, story.night):
        story.note(f"02:..  {finding['rule']}: {finding['saw']}")
        story.note(f"       runbook: {finding['runbook']['do']}")
    rules = {finding["rule"] for finding in await open_findings(wire, story.night)}
    story.want(bool(rules & {"value_size", "zero_values"}), "no tripwire on values fired")
    if not frozen:
        order = {"reason": "the values of one feed look wrong"}
        done = read(await wire.post(f"/v1/line-items/{story.night}/freeze", order))
        story.note(f"       on-call freezes: in_force {done['in_force']}")
    state = await _get(wire, story.night, "state")
    story.want(state["status"] == "frozen", "it is not frozen")
    story.note(f"       it is {state['status']}, by {state['freezes'][0]['source']}")


async def _mend(wire: Wire, story: Story, from_at: str, usual: float) -> None:
    """What on-call does: look, preview, retract, rewind, thaw."""
    await caught_up(wire, story.night)
    until_at, wrong = moment_now(), await _bid_cpm(wire, story.night)
    story.note(f"03:00  the feed is mended; by what it was taught it would bid {wrong:.4f} CPM")
    story.want(wrong > usual, "the wrong values moved no price, so nothing was tried")
    span = {"from_at": from_at, "until_at": until_at, "part": "both"}
    order = {**span, "reason": "values of a broken feed"}
    path = f"/v1/line-items/{story.night}"
    seen = read(await wire.post(f"{path}/retract", {**order, "preview": True}))
    story.note(f"       preview: {seen['counts']} would teach no more: {_from_to(seen)}")
    done = read(await wire.post(f"{path}/retract", order))
    story.note(f"       retracted {done['cancelled']} lessons, seq {done['seq']}: {_from_to(done)}")
    story.want(done["after"] == seen["after"], "the preview promised another state")
    back = {"to": from_at, "reason": "nothing since then is to teach"}
    seen = read(await wire.post(f"{path}/rewind", {**back, "preview": True}))
    done = read(await wire.post(f"{path}/rewind", back))
    said = f"{done['counts']} taken back" if done["seq"] else "nothing was left"
    story.note(f"       rewound to 02:00: {said}: {_from_to(done)}")
    story.want(done["after"] == seen["after"], "the preview promised another state")
    done = read(await wire.post(f"{path}/thaw", {"reason": "the feed is mended"}))
    story.note(f"       thawed; freezes left: {len(done['after'])}")


def value_part(state: bytes) -> bytes:
    """All that impressions and values taught, as bytes: no rounds, no prices, no clock."""
    memory = Memory.from_bytes(state)
    said = {
        "sums": {name: getattr(memory.base, name) for name in SUMS},
        "cells": [[getattr(cell, name) for name in CELLS] for cell in memory.cells],
        "prior": None if memory.prior is None else asdict(memory.prior),
        "watch": list(memory.watch),
        **{name: getattr(memory, name) for name in FACTS},
    }
    return json.dumps(said, sort_keys=True, separators=(",", ":")).encode()


def _compare(database: Database, story: Story) -> None:
    held = database.read(lambda c: learners.snapshots(c, [story.night, story.twin]))
    parts = {name: value_part(snapshot.state) for name, snapshot in held.items()}
    story.digests = {name: hashlib.sha256(part).hexdigest() for name, part in parts.items()}
    for name, part in parts.items():
        story.note(f"       value part of '{name}': {len(part)} bytes, {story.digests[name][:16]}…")
    story.want(parts[story.night] == parts[story.twin], f"value parts differ: {parts}")
    known = sum(cell.known for cell in Memory.from_bytes(held[story.night].state).cells)
    story.want(known > 0, "nothing was learnt, so nothing was compared")


def _paged(pager: Pager, story: Story) -> None:
    kinds = [news["kind"] for news in pager.news if news["line_item"] == story.night]
    story.note(f"       the pager heard, each with a sound proof: {', '.join(kinds)}")
    story.want(not pager.unsound, f"{pager.unsound} pieces of news bore no sound proof")
    story.want({"finding", "freeze", "thaw"} <= set(kinds), f"the pager heard only {kinds}")


def _began_ms(connection: Reading, names: list[str]) -> set[int]:
    return {lessons.began_ms(connection, name) for name in names}


async def caught_up(wire: Wire, name: str) -> None:
    """Wait until a learner has learnt all that its stream holds."""
    end = time.monotonic() + CAUGHT_UP_S_MAX
    while (await _get(wire, name, "state"))["learner"]["entries_behind"]:
        if time.monotonic() > end:
            raise Unanswered(f"The learner of {name} did not catch up.")
        await asyncio.sleep(LOOK_S)


async def _get(wire: Wire, name: str, what: str) -> dict[str, Any]:
    return read(await wire.get(f"/v1/line-items/{name}/{what}"))


async def open_findings(wire: Wire, name: str) -> list[dict[str, Any]]:
    """What the tripwires of a line item see now."""
    return list((await _get(wire, name, "tripwires"))["open"])


async def _bid_cpm(wire: Wire, name: str) -> float:
    """What the learner would bid, frozen or not."""
    return 1000 * float((await _get(wire, name, "state"))["certainty"]["bid"])


def _from_to(done: dict[str, Any]) -> str:
    before, after = done["before"]["bid_cpm"], (done["after"] or {}).get("bid_cpm")
    return f"bid {before} -> {after} CPM"


def moment_now() -> str:
    """This moment, as orders take it."""
    return datetime.now(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


def pair_body(name: str, window_s: int, action: str) -> dict[str, object]:
    """How both line items are set up."""
    rule = {"action": action, "window_s": window_s}
    return {
        "id": name,
        "name": "An invented line item of the night",
        "currency": "EUR",
        "budget": "100",
        "bid_cap_cpm": 20,
        "value": {"ceiling": "0.15", "typical": "0.02", "arrival": "once"},
        "tripwires": {"value_size": rule, "zero_values": rule},
    }


def _tell(story: Story, *, as_json: bool) -> None:
    if as_json:
        said = {name: getattr(story, name) for name in ("moments", "faults", "digests", "told")}
        sys.stdout.write(json.dumps(said) + "\n")
        return
    sys.stdout.write(
        "Compared: the value part of both published snapshots (sums, cells of impressions and"
        " values, delays, prior, detector), without rounds, prices and the clock of the market.\n"
    )
    sys.stdout.write("WRONG\n" if story.faults else "Equal, byte for byte.\n")
