"""The memory that the processes of one crew share: to count in, the clerk's page and its bell.

Each process owns one row of 64-bit integers and adds in place, so that counting costs no lock
and no call, nothing is lost when a process is killed, and a row counts on for its successor.
"""

from __future__ import annotations

import json
import mmap
import os
import zlib
from typing import Any, Self

from service.metrics.series import DIGEST, PLACES
from service.metrics.tally import Tally

PAGE_BYTES = 64 * 1024
_WORD = 8
_ROW_BYTES = len(PLACES) * _WORD
# The digest of the layout, length and checksum of the page, and how often the bell rang.
_HEAD_BYTES = 4 * _WORD
_FRONT_BYTES = _HEAD_BYTES + PAGE_BYTES
_LAYOUT = DIGEST + _HEAD_BYTES  # Who expects another head or other rows keeps away.
_READS_MAX = 3  # A page that is being written is read again.


class Board:
    """
    A head, the clerk's page and one row for each process.

    Args:
        memory: As long as `size` says for some number of processes.
    """

    def __init__(self, memory: mmap.mmap) -> None:
        self._memory = memory
        self._words = memoryview(memory).cast("q")
        self.rows = (len(memory) - _FRONT_BYTES) // _ROW_BYTES

    @classmethod
    def alone(cls, rows: int = 1) -> Self:
        """A board that nobody else sees."""
        return cls._fresh(mmap.mmap(-1, size(rows)))

    @classmethod
    def shared(cls, rows: int) -> tuple[Self, int]:
        """A new board and the descriptor by which children reach it; it has no file name."""
        descriptor = os.memfd_create("bidkeel-board")
        os.ftruncate(descriptor, size(rows))
        return cls._fresh(mmap.mmap(descriptor, size(rows))), descriptor

    @classmethod
    def inherited(cls, descriptor: int | None) -> Self:
        """The board of the crew; one of its own where a crew of another release made it."""
        if descriptor is None:
            return cls.alone()
        board = cls(mmap.mmap(descriptor, os.fstat(descriptor).st_size))
        return board if board._words[0] == _LAYOUT else cls.alone()

    def tally(self, row: int) -> Tally:
        """The row of one process, to count in."""
        # A board of our own has one row, whatever the place in the crew.
        start = _FRONT_BYTES // _WORD + min(row, self.rows - 1) * len(PLACES)
        return Tally(self._words[start : start + len(PLACES)])

    def read(self) -> list[list[int]]:
        """Every row as it is now."""
        start = _FRONT_BYTES // _WORD
        flat = self._words[start : start + self.rows * len(PLACES)].tolist()
        return [flat[place : place + len(PLACES)] for place in range(0, len(flat), len(PLACES))]

    def post(self, members: dict[str, Any]) -> None:
        """Write the clerk's page; one that would not fit is not written."""
        page = json.dumps(members, separators=(",", ":")).encode()
        if len(page) > PAGE_BYTES:
            return
        self._memory[_HEAD_BYTES : _HEAD_BYTES + len(page)] = page
        # After the page: whoever reads in between finds that they do not fit, and reads again.
        self._words[1], self._words[2] = len(page), zlib.crc32(page)

    def ring(self) -> None:
        """Let every worker of the crew look for news now; the clerk's alone, for it adds."""
        self._words[3] += 1

    def rings(self) -> int:
        """How often the bell has rung."""
        return int(self._words[3])

    def page(self) -> dict[str, Any] | None:
        """The clerk's page; None before the first, or while it is never found whole."""
        for _ in range(_READS_MAX):
            length, checksum = self._words[1], self._words[2]
            page = self._memory[_HEAD_BYTES : _HEAD_BYTES + length]
            if length and zlib.crc32(page) == checksum:
                return dict(json.loads(page))
        return None

    @classmethod
    def _fresh(cls, memory: mmap.mmap) -> Self:
        board = cls(memory)
        board._words[0] = _LAYOUT
        return board


def size(rows: int) -> int:
    """Bytes of a board for so many processes."""
    return _FRONT_BYTES + rows * _ROW_BYTES
