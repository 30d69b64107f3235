"""What of a request may become a feature or a condition: nothing that is not named here.

No path leads to a person or a device: no user, no device or network address, no place finer
than a metropolitan area, no consent text, no page address, no private `ext`.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

Feature = str | float | bool

NAME, CODE, NUMBER, FLAG = "name", "code", "number", "flag"
CHARACTERS_MAX = 64
_METRIC = re.compile(r"imp\.metric\.([a-z0-9_-]{1,40})")

_KINDS: dict[str, dict[str, tuple[str, ...]]] = {
    "imp": {
        NAME: ("tagid", "displaymanager", "type", "size"),
        CODE: (
            *("banner.pos", "video.pos", "video.plcmt", "video.placement", "video.linearity"),
            *("video.startdelay", "video.slotinpod", "audio.startdelay", "audio.slotinpod"),
        ),
        NUMBER: (
            *("exp", "refresh.count", "banner.w", "banner.h", "video.w", "video.h"),
            *("video.minduration", "video.maxduration", "audio.minduration", "audio.maxduration"),
        ),
        FLAG: ("instl", "rwdd", "ssai", "secure", "clickbrowser", "video.skip"),
    },
    "site": {
        NAME: (
            *("id", "name", "domain", "publisher.id", "publisher.name", "inventorypartnerdomain"),
            *("cat", "sectioncat", "pagecat", "content.genre", "content.language"),
        ),
        CODE: ("content.context", "content.prodq", "content.qagmediarating"),
        NUMBER: ("content.len",),
        FLAG: ("mobile", "content.livestream"),
    },
    "app": {
        NAME: (
            *("id", "name", "bundle", "domain", "ver", "publisher.id", "publisher.name"),
            *("inventorypartnerdomain", "cat", "sectioncat", "pagecat"),
            *("content.genre", "content.language"),
        ),
        CODE: ("content.context", "content.prodq", "content.qagmediarating"),
        NUMBER: ("content.len",),
        FLAG: ("paid", "content.livestream"),
    },
    "dooh": {
        NAME: ("id", "name", "domain", "publisher.id", "publisher.name", "venuetype"),
        CODE: ("venuetypetax",),
    },
    "device": {
        NAME: (
            *("make", "model", "os", "osv", "carrier", "language", "langb"),
            *("geo.country", "geo.region", "geo.metro"),
        ),
        CODE: ("devicetype", "connectiontype", "geo.type"),
        NUMBER: ("w", "h", "geo.utcoffset"),
        FLAG: ("dnt", "lmt", "js"),
    },
    "regs": {FLAG: ("coppa", "gdpr")},
    "source": {FLAG: ("fd", "schain.complete")},
    "": {CODE: ("at",), FLAG: ("allimps",)},
}
ALLOWED: dict[str, str] = {
    f"{place}.{name}".lstrip("."): kind
    for place, kinds in _KINDS.items()
    for kind, names in kinds.items()
    for name in names
}
# Where a sender of 2.5 puts what has a place of its own since 2.6.
OLDER: dict[str, str] = {
    "regs.gdpr": "regs.ext.gdpr",
    "source.schain.complete": "source.ext.schain.complete",
}


@dataclass(frozen=True, slots=True)
class Path:
    """
    One place of a request.

    Args:
        keys: From the request down, or from one imp where the first is `imp`.
        older: The same for a sender of 2.5; empty where nothing moved.
        metric: The type of an imp's metric, whose value is meant.
    """

    name: str
    kind: str
    keys: tuple[str, ...]
    older: tuple[str, ...] = ()
    metric: str = ""

    def find(self, request: Mapping[str, Any], imp: Mapping[str, Any]) -> Any:
        """What stands there, in its older place too; None where nothing does."""
        if self.keys[0] == "imp":
            return self._in_imp(imp)
        found = _walk(request, self.keys)
        return _walk(request, self.older) if found is None and self.older else found

    def feature(self, request: Mapping[str, Any], imp: Mapping[str, Any]) -> Feature | None:
        """What stands there as a feature; None where it is missing or of no use as one."""
        found = self.find(request, imp)
        # Of several, such as categories, the first is the one the seller thinks most of.
        found = found[0] if isinstance(found, list) and found else found
        if self.kind == NUMBER:
            return found if _is_number(found) else None
        text = word(found)
        if text is None or not 0 < len(text) <= CHARACTERS_MAX or not text.isprintable():
            return None
        return text == "1" if self.kind == FLAG else text

    def words(self, request: Mapping[str, Any], imp: Mapping[str, Any]) -> list[str]:
        """All that stands there, as words to compare."""
        found = self.find(request, imp)
        several = found if isinstance(found, list) else [found]
        return [text for one in several if (text := word(one)) is not None]

    def _in_imp(self, imp: Mapping[str, Any]) -> Any:
        if self.metric:
            metrics = imp.get("metric")
            several = metrics if isinstance(metrics, list) else []
            named = (m for m in several if isinstance(m, dict) and m.get("type") == self.metric)
            return next(named, {}).get("value")
        if self.name == "imp.size":
            return next(iter(sizes(imp)), None)
        if self.name == "imp.type":
            return "+".join(t for t in ("audio", "banner", "native", "video") if t in imp) or None
        return _walk(imp, self.keys[1:])


def path(name: str) -> Path | None:
    """The path of this name, or None where a mapping may not name it."""
    if matched := _METRIC.fullmatch(name):
        return Path(name, NUMBER, ("imp", "metric"), metric=matched[1])
    kind = ALLOWED.get(name)
    if kind is None:
        return None
    return Path(name, kind, tuple(name.split(".")), tuple(filter(None, _older(name))))


def _older(name: str) -> list[str]:
    return OLDER.get(name, "").split(".")


def sizes(imp: Mapping[str, Any]) -> list[str]:
    """The sizes an imp names, such as 300x250, those of its banner before that of its video."""
    found = []
    for medium in ("banner", "video"):
        place = imp.get(medium)
        if not isinstance(place, dict):
            continue
        formats = place.get("format")
        for one in [*(formats if isinstance(formats, list) else []), place]:
            if isinstance(one, dict) and _is_size(one.get("w")) and _is_size(one.get("h")):
                found.append(f"{one['w']}x{one['h']}")
    return found


def word(found: object) -> str | None:
    """Text, a whole number or a truth value as one word, alike however a sender writes it."""
    if isinstance(found, str):
        return found
    if isinstance(found, bool):
        return "1" if found else "0"
    if isinstance(found, float) and found.is_integer() and abs(found) < 2**53:
        return str(int(found))
    if isinstance(found, int) and abs(found) < 2**63:
        return str(found)
    return str(found) if isinstance(found, float) else None


def _walk(place: Any, keys: tuple[str, ...]) -> Any:
    for key in keys:
        if not isinstance(place, dict):
            return None
        place = place.get(key)
    return place


def _is_number(found: object) -> bool:
    if isinstance(found, bool) or not isinstance(found, int | float):
        return False
    return abs(found) < 2**53 and math.isfinite(found)


def _is_size(found: object) -> bool:
    return isinstance(found, int) and not isinstance(found, bool) and 0 < found < 100_000
