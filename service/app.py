"""The application: owns what lives long, starts it in order and closes it in reverse."""

from __future__ import annotations

import asyncio
import logging
import os
import secrets
import signal
from collections.abc import AsyncIterator, Coroutine
from contextlib import asynccontextmanager
from dataclasses import dataclass, field
from functools import partial
from importlib.metadata import PackageNotFoundError, version
from typing import Any

from fastapi import FastAPI

from service.admitting import FLUSH_S
from service.api.express import Service
from service.api.routes import install
from service.backlog import Backlog
from service.bidding import Bidder, Clocks
from service.catalog import Catalog
from service.clerk import Clerk, Habits
from service.connecting import open_database
from service.exchanging import Exchanging
from service.feedback import Feedback, Room
from service.guard.ticket import TicketKeys
from service.leasing import Leasing
from service.metrics.board import Board
from service.metrics.exposition import MEDIA_TYPE, Exposition
from service.metrics.tally import Tally
from service.openrtb import mapping
from service.operating import Operator
from service.ordering import Orders
from service.patience import Patience
from service.posting import Receiver
from service.pulse import Pulse
from service.rehearsing import Rehearsals, Stalls
from service.sampling import sample
from service.settings import Settings
from service.store import incarnations
from service.store.database import Database
from service.store.facts import fact
from service.store.migrate import newest, require_current
from service.threads import Threads
from service.upkeep import Rhythm, Upkeep
from service.watch import routes as watch
from service.watching import Watching

logger = logging.getLogger(__name__)

REFUSALS_S = 5.0


@dataclass(frozen=True, slots=True)
class Stories:
    """What the routes may call."""

    bidder: Bidder
    feedback: Feedback
    operator: Operator
    exchange: Exchanging
    rehearsals: Rehearsals
    watching: Watching
    watch_secret: bytes


@dataclass(frozen=True, slots=True)
class Post:
    """
    The place of one process among those that serve.

    Args:
        worker: Its id, which no other worker ever had.
        predecessor: The worker that stood here before and is known to be dead.
        clerk: Whether the clerk's duties are done here too, and not in a process of their own.
        board: The memory that the crew counts in.
        place: Which row of it is ours.
    """

    worker: str
    predecessor: str | None = None
    clerk: bool = True
    board: Board = field(default_factory=Board.alone)
    place: int = 0

    @property
    def tally(self) -> Tally:
        """Our own numbers."""
        return self.board.tally(self.place)


def new_worker() -> str:
    """An id that no two workers of any hosts share."""
    return f"{os.getpid()}-{secrets.token_hex(8)}"


def release() -> str:
    """The version installed; a checkout that was never installed has none."""
    try:
        return version("bidkeel")
    except PackageNotFoundError:
        return "unknown"


def create_app(settings: Settings, post: Post | None = None) -> FastAPI:
    """The service under these settings; nothing is opened before its lifespan begins."""
    here = post or Post(new_worker())

    @asynccontextmanager
    async def lifespan(app: FastAPI) -> AsyncIterator[None]:
        async with running(settings, here) as stories:
            app.state.stories = stories
            yield
            # Before the hand is emptied, so that a request which comes now is told to ask again.
            app.state.stories = None

    # Its own pages load scripts from other hosts; ours need no internet.
    app = Service(
        title="Bidkeel", lifespan=lifespan, docs_url=None, redoc_url=None, openapi_url=None
    )
    app.state.settings = settings
    told = Exposition(here.board, {"version": release(), "schema": newest()})
    app.state.metrics = lambda: (told.text(), MEDIA_TYPE)
    app.state.sources = sources_of(settings)
    install(app, partial(_answered, here.tally))
    app.include_router(watch.router)
    return app


@asynccontextmanager
async def running(settings: Settings, post: Post) -> AsyncIterator[Stories]:
    """
    One worker, from the first connection to the last slice given back.

    Raises:
        Unsafe: The database is of another schema or may forget what it acknowledged.
        StoreAway: It does not answer.
    """
    async with opened(settings, post.tally) as (database, threads):
        stories, upkeep, loops = _build(settings, post, database, threads)
        # It is on the list of workers before it leases, for a freeze waits for whoever is on it.
        await upkeep.start(post.predecessor)
        if post.clerk:
            clerk = clerk_of(settings, database, threads, post.board, post.tally)
            await clerk.start()
            loops += clerk.duties()
        try:
            async with on_duty(loops):
                yield stories
        finally:
            # First of all, since what waits for nobody must not hold up the stop.
            await asyncio.to_thread(stories.rehearsals.close)
        # After the loops have ended, or leasing would fill the hand while it is being emptied.
        await upkeep.stop()
        await stories.operator.admitting.stop()


@asynccontextmanager
async def opened(
    settings: Settings, tally: Tally | None = None
) -> AsyncIterator[tuple[Database, Threads]]:
    """
    The database, found safe and of our schema, and the threads that talk to it.

    Raises:
        Unsafe: The database is of another schema or may forget what it acknowledged.
        StoreAway: It does not answer.
    """
    database = open_database(settings)
    # No more threads than connections, so that none of them waits for one.
    threads = Threads(settings.pool_size, tally)
    try:
        # Better not to start than to promise on a database that forgets, or that we misread.
        database.check_safe()
        require_current(database)
        yield database, threads
    finally:
        # The threads first, since what they run still needs its connection.
        threads.close()
        database.close()


@asynccontextmanager
async def on_duty(loops: list[Coroutine[Any, Any, None]]) -> AsyncIterator[None]:
    """Run the loops beside the block; whatever each has begun is done when this returns."""
    tasks = [asyncio.create_task(duty) for duty in loops]
    for task in tasks:
        task.add_done_callback(_stop_if_broken)
    yield
    for task in tasks:
        task.cancel()
    # A loop that broke has said so already, and must not keep the slices from being given back.
    await asyncio.gather(*tasks, return_exceptions=True)


def sources_of(settings: Settings) -> mapping.Sources:
    """
    The exchanges that speak the open standard, by name.

    Raises:
        Unsafe: Their mapping cannot be read or has faults.
    """
    return {} if settings.openrtb_mapping is None else mapping.load(settings.openrtb_mapping)


def clerk_of(
    settings: Settings,
    database: Database,
    threads: Threads,
    board: Board | None = None,
    tally: Tally | None = None,
) -> Clerk:
    """The clerk under these settings."""
    habits = Habits(
        settings.teach_ms,
        settings.checkpoint_entries,
        settings.decision_keep_days,
        settings.slice_keep_days,
        settings.quarantine_keep_days,
        settings.repeat_keep_days,
        settings.chart_keep_days,
        settings.tripwire_s,
        settings.tripwire_minute_s * 1000,
        settings.tripwire_quiet_s * 1000,
        settings.tripwire_keep_days,
        settings.rehearsal_keep_days,
    )
    secret = settings.webhook_secret.get_secret_value().encode()
    receiver = Receiver(
        settings.webhook_url, secret, settings.webhook_timeout_s, settings.webhook_tries
    )
    return Clerk(database, threads, habits, receiver, board, tally)


def _build(
    settings: Settings, post: Post, database: Database, threads: Threads
) -> tuple[Stories, Upkeep, list[Coroutine[Any, Any, None]]]:
    news = asyncio.Event()
    keys = TicketKeys(_ticket_keys(settings, database))
    # A write, since on a changed timeline this begins a new life of the database.
    incarnation = bytes.fromhex(database.write(incarnations.current))
    catalog = Catalog(database, threads)
    tally = post.tally
    leasing = Leasing(database, threads, post.worker, settings.lease_s, tally=tally)
    pulse = Pulse()
    clocks = Clocks(
        *(settings.deadline_ms, settings.deadline_ms_max, settings.bids_waiting_max, pulse.lag_s)
    )
    backlog = Backlog(settings.decision_queue_max)
    feature_key = _feature_key(database)
    bidder = Bidder(catalog, leasing, keys, incarnation, clocks, backlog, feature_key, tally)
    room = Room(settings.outcome_calls_max, settings.outcome_rows_waiting_max)
    feedback = Feedback(database, threads, keys, incarnation, room, tally)
    minute_ms = settings.tripwire_minute_s * 1000
    operator = Operator(database, threads, catalog, news, settings.checkpoint_entries, minute_ms)
    rhythm = Rhythm(settings.change_poll_ms, settings.tick_s, settings.clock_step_ms_max)
    place = (database, threads, post.worker, catalog, leasing, backlog, news, rhythm)
    upkeep = Upkeep(*place, tally, post.board.rings)
    levels = {
        "loop_lag_seconds": lambda: int(pulse.worst_s() * 1e6),
        "waiting_bids": bidder.waiting,
        "waiting_outcomes": feedback.waiting,
        "waiting_decisions": lambda: len(backlog),
        "slices_in_hand": lambda: len(leasing.hand.slices),
        "change_number": lambda: catalog.change_seen,
    }
    measured = sample(tally, levels, {"dropped_decisions": lambda: backlog.dropped})
    counting = Patience(database, threads).every(FLUSH_S, operator.admitting.flush)
    refusals = Patience(database, threads).every(REFUSALS_S, feedback.keep_refusals)
    loops = [pulse.run(), leasing.run(), feedback.run(), measured, counting, refusals]
    stalls = Stalls(settings.rehearsal_processes, settings.rehearsals_waiting_max)
    rehearsals = Rehearsals(Orders(database, threads, news), post.worker, stalls)
    watching = Watching(database, threads), _watch_secret(database)
    exchange = Exchanging(bidder, feedback)
    stories = Stories(bidder, feedback, operator, exchange, rehearsals, *watching)
    return stories, upkeep, [*loops, *upkeep.duties()]


def _ticket_keys(settings: Settings, database: Database) -> list[bytes]:
    """The keys of the settings, else the one the database made for itself."""
    # Their order is kept: the first one signs, and all of them verify.
    given = [key for key in settings.ticket_keys.get_secret_value().split(",") if key.strip()]
    if given:
        return [key.strip().encode() for key in given]
    return [bytes.fromhex(database.read(lambda connection: fact(connection, "ticket_key")))]


def _watch_secret(database: Database) -> bytes:
    """What sign-ins are sealed under; of the database, so that all workers know it."""
    return bytes.fromhex(database.read(lambda connection: fact(connection, "ticket_key")))


def _feature_key(database: Database) -> bytes:
    """What features are hashed under; it stays with what was learnt of them."""
    return bytes.fromhex(database.read(lambda connection: fact(connection, "feature_key")))


def _answered(tally: Tally, status: int) -> None:
    tally.add("http_answers", f"{status // 100}xx")


def _stop_if_broken(task: asyncio.Future[None]) -> None:
    """A duty that dies takes the worker with it; its slices come back, its tickets settle."""
    if task.cancelled() or task.exception() is None:
        return
    logger.critical("a background duty failed; stopping", exc_info=task.exception())
    # As a signal, so that the server stops as it would by hand and gives back what it holds.
    os.kill(os.getpid(), signal.SIGTERM)
