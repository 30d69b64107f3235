"""A mapping of one invented exchange, for tests that change a thing or two of it."""

from __future__ import annotations

from typing import Any

from service.openrtb import mapping
from service.openrtb.mapping import Line, Source
from service.openrtb.offers import Judged, judge
from service.openrtb.requests import Asked, read

LINE: dict[str, Any] = {
    "line_item": "garden",
    "type": "banner",
    "adomain": ["garden.example"],
    "crid": "creative-1",
}
SOURCE: dict[str, Any] = {
    "notice_url": "https://bids.example",
    "features": {"device": "device.devicetype", "tag": "imp.tagid"},
}


def mapped(*lines: dict[str, Any], **changes: Any) -> Source:
    """The source with these lines, each a change of the usual one."""
    built = [LINE | line for line in lines or ({},)]
    return mapping.read({"sources": {"north": SOURCE | changes | {"line_items": built}}})["north"]


def line_of(**changes: Any) -> Line:
    """The one line of a source."""
    return mapped(changes).line_items[0]


def asked(body: dict[str, Any], source: Source | None = None) -> Asked:
    """A request that is asked for prices."""
    found = read(body, source or mapped())
    assert isinstance(found, Asked), found
    return found


def request(imp: dict[str, Any] | None = None, **changes: Any) -> dict[str, Any]:
    """A small banner request, with one imp changed."""
    slot = {"id": "1", "banner": {"w": 300, "h": 250}} | (imp or {})
    return {"id": "r1", "imp": [slot], **changes}


def judged(line: dict[str, Any], body: dict[str, Any], **source: Any) -> Judged:
    """What the rules say of one line for the first imp of a request."""
    where = mapped(line, **source)
    read_ = asked(body, where)
    return judge(where.line_items[0], read_.imps[0], read_, where)
