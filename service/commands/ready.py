"""Asks the server of this container whether prices can leave: 0 yes, 1 no.

    python -m service.commands.ready

Apart and small, since it is started every few seconds in an image that has no curl.
"""

from __future__ import annotations

import os
import sys
from http.client import HTTPConnection, HTTPException

ASK_S_MAX = 2.5


def is_ready(port: int, key: str | None) -> bool:
    """Whether a server on the port of this machine answers 200 to the question."""
    connection = HTTPConnection("127.0.0.1", port, timeout=ASK_S_MAX)
    try:
        connection.request("GET", "/health/ready", headers=_headers(key))
        return connection.getresponse().status == 200
    except (OSError, HTTPException):
        return False
    finally:
        connection.close()


def _headers(key: str | None) -> dict[str, str]:
    return {"Authorization": f"Bearer {key}"} if key else {}


if __name__ == "__main__":
    # As the settings read them, without the weight of reading them all.
    given = os.environ
    port = int(given.get("BIDKEEL_PORT", "8080"))
    sys.exit(0 if is_ready(port, given.get("BIDKEEL_HEALTH_KEY")) else 1)
