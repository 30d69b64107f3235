"""The process of one rehearsal: an order on its input, progress and result as lines on its output.

    python -m service.rehearsal.child

It is started by the service and gives way to bids: it is nice, of one thread, and gone as soon
as whoever started it is.
"""

from __future__ import annotations

import json
import os
import sys
import threading
import time
from collections.abc import Mapping
from typing import Any

NICE = 15
TELL_S = 0.25
GONE = 3


def main() -> int:
    """Play the order that stands on the first line; returns the exit code."""
    os.nice(NICE)
    order: dict[str, Any] = json.loads(sys.stdin.readline())
    # A daemon, so that it keeps nobody here once the result is written.
    threading.Thread(target=_leave_with_the_other_end, daemon=True).start()
    telling = _Telling()
    # Read only now, so that it is nice already while it loads.
    from service.rehearsal.playing import played

    telling.line({"result": played(order, telling.advance)})
    return 0


class _Telling:
    def __init__(self) -> None:
        self._done, self._told_at = 0, time.monotonic()

    def advance(self, auctions: int) -> None:
        """Say now and then how many auctions are played."""
        self._done += auctions
        now = time.monotonic()
        if now - self._told_at >= TELL_S:
            self._told_at = now
            self.line({"done": self._done})

    def line(self, said: Mapping[str, Any]) -> None:
        """Write one line at once."""
        sys.stdout.write(json.dumps(said, allow_nan=False) + "\n")
        sys.stdout.flush()


def _leave_with_the_other_end() -> None:
    # Nobody writes to it after the order: the read returns when the other end is closed.
    sys.stdin.read()
    # At once and without clean-up: the other thread may be deep in a long computation.
    os._exit(GONE)


if __name__ == "__main__":
    sys.exit(main())
