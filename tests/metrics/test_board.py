"""The memory of a crew: rows of processes, the clerk's page, and strangers kept out."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
import time

from service.metrics.board import PAGE_BYTES, Board
from service.metrics.series import PLACES

COUNTS_AND_WAITS = """
import sys
from service.metrics.board import Board
tally = Board.inherited(int(sys.argv[1])).tally(1)
for _ in range(1000):
    tally.add("bids")
print("counted", flush=True)
sys.stdin.read()
"""


def test_what_a_killed_process_counted_stays_and_goes_on() -> None:
    """Nothing is flushed and nothing is lost: its successor counts on in the same row."""
    board, descriptor = Board.shared(3)
    for _ in range(2):
        child = subprocess.Popen(
            [sys.executable, "-c", COUNTS_AND_WAITS, str(descriptor)],
            pass_fds=[descriptor], stdin=subprocess.PIPE, stdout=subprocess.PIPE,
        )  # fmt: skip
        assert child.stdout is not None
        assert child.stdout.readline() == b"counted\n"
        child.send_signal(signal.SIGKILL)
        child.communicate()
    assert [row[PLACES[("bids",)]] for row in board.read()] == [0, 2000, 0]
    os.close(descriptor)


def test_a_board_of_another_layout_is_not_read() -> None:
    """A child of another release counts alone, and spoils nobody's numbers."""
    board, descriptor = Board.shared(2)
    board._words[0] += 1
    stranger = Board.inherited(descriptor)
    stranger.tally(1).add("bids")
    assert stranger.rows == 1
    assert [row[PLACES[("bids",)]] for row in board.read()] == [0, 0]
    os.close(descriptor)


def test_the_page_is_read_as_it_was_written() -> None:
    """Nothing before the first page, then always the last; one that does not fit is left out."""
    board = Board.alone()
    assert board.page() is None
    board.post({"money": {"EUR": {"spent": str(2**70)}}})
    board.post({"too": "x" * PAGE_BYTES})
    assert board.page() == {"money": {"EUR": {"spent": str(2**70)}}}


def test_no_reader_ever_sees_half_a_page() -> None:
    """While pages are written one upon the other, what is read is whole or nothing."""
    board, over = Board.alone(), threading.Event()
    pages = [{"text": letter * length} for letter, length in (("a", 30_000), ("b", 7))]

    def write() -> None:
        while not over.is_set():
            for page in pages:
                board.post(page)
                time.sleep(0.0002)

    board.post(pages[0])
    writer = threading.Thread(target=write)
    writer.start()
    try:
        seen = [page for _ in range(500) if (page := board.page()) is not None]
    finally:
        over.set()
        writer.join()
    assert seen
    assert [page for page in seen if page not in pages] == []


def test_the_bell_of_the_clerk_is_heard_in_another_process() -> None:
    """A worker that compares two looks knows that something was published between them."""
    board, descriptor = Board.shared(2)
    other = Board.inherited(descriptor)
    before = board.rings()
    other.ring()
    assert board.rings() == before + 1
    os.close(descriptor)
