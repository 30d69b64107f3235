"""What a seller lets in: types, sizes, advertisers, categories, attributes, languages."""

from __future__ import annotations

from typing import Any

from service.openrtb import codes
from service.openrtb.mapping import Line
from service.openrtb.paths import sizes, word
from service.openrtb.requests import texts


def unfit(line: Line, imp: dict[str, Any], body: dict[str, Any]) -> str | None:
    """Why this creative may not be shown there, or None."""
    return _form(line, imp) or _advertiser(line, body) or _categories(line, body)


def size_of(line: Line, imp: dict[str, Any]) -> str | None:
    """The size in which the creative fits, the seller's first wish first."""
    return next((size for size in sizes(imp) if size in line.sizes), None)


def _form(line: Line, imp: dict[str, Any]) -> str | None:
    place = imp.get(line.type)
    if not isinstance(place, dict):
        return "other_type"
    if line.sizes and size_of(line, imp) is None:
        return "size"
    if word(imp.get("secure")) == "1" and not line.secure:
        return "not_secure"
    if _numbers(place.get("battr")) & set(line.attr):
        return "attribute_blocked"
    if line.duration_s is not None and not _in_time(line.duration_s, place):
        return "duration"
    return None


def _in_time(duration_s: int, place: dict[str, Any]) -> bool:
    exact = _numbers(place.get("rqddurs"))
    if exact:
        return duration_s in exact
    least, most = place.get("minduration"), place.get("maxduration")
    if _is_number(least) and duration_s < float(least or 0):
        return False
    return not _is_number(most) or not 0 < float(most or 0) < duration_s


def _advertiser(line: Line, body: dict[str, Any]) -> str | None:
    blocked = [domain.lower() for domain in texts(body.get("badv"))]
    domains = [domain.lower() for domain in line.adomain]
    # A blocked domain blocks what lies below it; a name that only ends alike is another's.
    if any(d == b or d.endswith(f".{b}") for d in domains for b in blocked):
        return "advertiser_blocked"
    if line.bundle is not None and line.bundle in texts(body.get("bapp")):
        return "app_blocked"
    allowed, barred = texts(body.get("wlang")), texts(body.get("wlangb"))
    # Two lists for two ways to write languages; which of them is meant the mapping knows.
    if (allowed or barred) and line.language not in (*allowed, *barred):
        return "language"
    return None


def _categories(line: Line, body: dict[str, Any]) -> str | None:
    allowed, blocked = texts(body.get("acat")), texts(body.get("bcat"))
    if not allowed and not blocked:
        return None
    taxonomy = word(body.get("cattax")) or str(codes.TAXONOMY_DEFAULT)
    # Codes of two taxonomies say nothing about each other, so no list could be kept to.
    if line.cat and taxonomy != str(line.cattax):
        return "other_taxonomy"
    if any(_under(one, blocked) for one in line.cat):
        return "category_blocked"
    if allowed and not (line.cat and all(_under(one, allowed) for one in line.cat)):
        return "category_not_allowed"
    return None


def _under(category: str, listed: list[str]) -> bool:
    """Whether a category or what it is part of is listed: IAB25-3 is part of IAB25."""
    return any(category == one or category.startswith(f"{one}-") for one in listed)


def _numbers(found: object) -> set[int]:
    several = found if isinstance(found, list) else []
    return {int(one) for one in several if _is_number(one) and int(one) == one}


def _is_number(found: Any) -> bool:
    return isinstance(found, int | float) and not isinstance(found, bool)
