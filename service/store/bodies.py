"""Bodies of entries as text and back, apart because every outcome passes here several times.

Whole numbers of any length come back as they were: amounts fit 64 bits, sums of squares may not.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

import jiter
import orjson


def written(body: Mapping[str, Any]) -> str:
    """The compact text of a body."""
    try:
        return orjson.dumps(body).decode()
    # It takes no whole number beyond 64 bits, and no key but text.
    except TypeError:
        return json.dumps(body, separators=(",", ":"))


def parsed(text: str) -> Any:
    """
    What a text says.

    Raises:
        ValueError: It is damaged.
    """
    try:
        return jiter.from_json(text.encode())
    # Half of a pair of surrogates, which earlier releases could write and this parser refuses.
    except ValueError:
        return json.loads(text)
