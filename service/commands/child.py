"""One child of the crew, in a process of its own: a worker that serves, or the clerk.

    python -m service.commands.child worker --socket 3 --worker ID --watched 4 --board 5 --place 0

Started by the crew only. Connections are opened here, never before the process begins.
"""

from __future__ import annotations

import argparse
import asyncio
import gc
import logging
import logging.config
import os
import signal
import socket
import sys
import threading

import uvicorn

from service import spans
from service.app import Post, clerk_of, create_app, on_duty, opened
from service.commands.logs import log_config
from service.errors import BidkeelError
from service.metrics.board import Board
from service.sampling import sample
from service.settings import Settings, load

logger = logging.getLogger(__name__)

SWITCH_S = 0.0002
# New objects until the young are looked through, and rounds until the older are: a fifth of the
# processor time of outcomes went into the rounds of the interpreter's own thresholds.
COLLECT_AFTER = (5000, 20, 20)
NICE = 10
FINISH_S = 4  # For requests in flight; the rest of the ten seconds is for slices and the log.


def main(words: list[str] | None = None) -> int:
    """Serve or clerk until a signal; returns the exit code."""
    arguments = _parser().parse_args(words)
    settings = load()
    _leave_with(arguments.watched)
    board = Board.inherited(arguments.board)
    try:
        if arguments.role == "clerk":
            asyncio.run(_clerk(settings, board, arguments.place))
        else:
            ids = (arguments.worker, arguments.predecessor)
            post = Post(*ids, clerk=False, board=board, place=arguments.place)
            serve(settings, post, [socket.socket(fileno=one) for one in arguments.socket])
    except BidkeelError as error:
        logger.error("%s cannot work: %s", arguments.role, error)
        return 1
    return 0


def serve(settings: Settings, post: Post, shared: list[socket.socket]) -> None:
    """One serving process, on sockets that listen already."""
    # Threads that book outcomes would hold a price up for 5 ms at a time.
    sys.setswitchinterval(SWITCH_S)
    config = uvicorn.Config(
        create_app(settings, post),
        host=settings.host,
        port=settings.port,
        log_config=log_config(settings.log_format),
        access_log=False,
        loop="uvloop",
        http="httptools",
        timeout_graceful_shutdown=FINISH_S,
    )
    _spare_collector()
    with spans.exported(settings.traces_endpoint):
        uvicorn.Server(config).run(shared)


async def _clerk(settings: Settings, board: Board, place: int) -> None:
    logging.config.dictConfig(log_config(settings.log_format))
    # Where processors are short, knowledge may come late but prices may not.
    os.nice(NICE)
    stop, loop = asyncio.Event(), asyncio.get_running_loop()
    for number in (signal.SIGTERM, signal.SIGINT):
        loop.add_signal_handler(number, stop.set)
    tally = board.tally(place)
    async with opened(settings, tally) as (database, threads):
        clerk = clerk_of(settings, database, threads, board, tally)
        _spare_collector()
        await clerk.start()
        async with on_duty([sample(tally, {}, {}), *clerk.duties()]):
            await stop.wait()


def _spare_collector() -> None:
    """What is loaded by now stays until the end, so that nobody looks for garbage in it again."""
    gc.collect()
    gc.freeze()
    # A call makes thousands of rows and lets them all go: far fewer rounds find as much.
    gc.set_threshold(*COLLECT_AFTER)


def _leave_with(watched: int) -> None:
    """Stop as on SIGTERM when the crew's process is gone, however it went."""

    def wait() -> None:
        # Nobody ever writes to it: the read returns when the other end is closed.
        os.read(watched, 1)
        os.kill(os.getpid(), signal.SIGTERM)

    threading.Thread(target=wait, name="watch", daemon=True).start()


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="bidkeel child", allow_abbrev=False)
    parser.add_argument("role", choices=("worker", "clerk"))
    parser.add_argument("--watched", type=int, required=True, help="closes when the crew is gone")
    parser.add_argument("--socket", type=int, action="append", help="a listening socket")
    parser.add_argument("--board", type=int, help="the memory that the crew counts in")
    parser.add_argument("--place", type=int, default=0, help="the row of it that is ours")
    parser.add_argument("--worker", help="this worker's id")
    parser.add_argument("--predecessor", help="the id of the worker that died in this place")
    return parser


if __name__ == "__main__":
    sys.exit(main())
