"""The id of the request in whose name we work, apart because the edge sets it and the log says it.

It is known to everything that runs for one request, threads of the database included. What
requests share, such as one commit for several of them, belongs to none.
"""

from __future__ import annotations

import itertools
import re
import secrets
from contextvars import ContextVar

HEADER = "X-Request-Id"
_SANE = re.compile(r"[A-Za-z0-9._:-]{1,64}")
# Random once and counted on from there: to ask the system anew for each bid costs too much.
_MADE = itertools.count(secrets.randbits(60))
_current: ContextVar[str | None] = ContextVar("request_id", default=None)


def begin(offered: str | None) -> str:
    """Name the request at hand: by the id it came with if that is sane, else by a new one."""
    # Anything else could break a line of the log, or bring along what must not be kept.
    sane = offered is not None and _SANE.fullmatch(offered)
    name = offered if offered is not None and sane else f"{next(_MADE):016x}"
    _current.set(name)
    return name


def current() -> str | None:
    """The id of the request at hand, None outside of any."""
    return _current.get()
