"""One request step by step, for people who write a mapping: by the very rules that prices go.

Shown are only fields that a mapping may name; the request itself is not repeated.
"""

from __future__ import annotations

from typing import Any

from service import money
from service.openrtb.mapping import Source
from service.openrtb.offers import Terms, judge, lots
from service.openrtb.opportunities import features_of
from service.openrtb.requests import Asked, BadRequest, NoBid, read


def explain(name: str, source: Source, body: object) -> dict[str, Any]:
    """What this source's mapping makes of a request; no price is made and no money moves."""
    try:
        asked = read(body, source)
    except BadRequest as error:
        return {"source": name, "answer": "400, malformed", "why": f"{error}"}
    if isinstance(asked, NoBid):
        return {"source": name, "answer": "no bid", "why": asked.reason, "nbr": asked.code}
    return {
        "source": name,
        "answer": "asks for prices",
        "auction": asked.auction or "unknown",
        "currencies": list(asked.currencies),
        "deadline_ms": asked.deadline_ms,
        "test": asked.test,
        "imps": [_imp(source, asked, imp) for imp in asked.imps],
    }


def lines_of(told: dict[str, Any]) -> list[str]:
    """The same for a terminal."""
    lines = [f"source {told['source']}: {told['answer']}"]
    if "imps" not in told:
        return [*lines, f"  because: {told['why']}"]
    deadline = told["deadline_ms"]
    limit = "the service's own" if deadline is None else f"{deadline} ms"
    currencies = " ".join(told["currencies"]) or "none that is a currency"
    lines.append(f"  auction {told['auction']}, deadline {limit}, currencies {currencies}")
    if told["test"]:
        lines.append("  a test: answered without money")
    for imp in told["imps"]:
        lines += _imp_lines(imp)
    return lines


def _imp(source: Source, asked: Asked, imp: dict[str, Any]) -> dict[str, Any]:
    features = features_of(source, asked, imp)
    return {
        "impid": imp["id"],
        "features": features,
        "features_missing": sorted(set(source.features) - set(features)),
        "line_items": [
            {"line_item": line.line_item, "type": line.type, **_judged(judged)}
            for line in source.line_items
            # By the function that prices go by, or an explanation could differ from the answer.
            for judged in [judge(line, imp, asked, source)]
        ],
        "asks": [
            {"line_items": list(lines), **_terms(terms)}
            for terms, lines in lots(imp, asked, source)
        ],
    }


def _judged(judged: tuple[Terms, ...] | str) -> dict[str, Any]:
    if isinstance(judged, str):
        return {"may_bid": False, "why": judged}
    return {"may_bid": True, "ways": len(judged)}


def _terms(terms: Terms) -> dict[str, Any]:
    shown = {
        "deal": terms.deal,
        "auction": terms.auction,
        "floor_cpm": money.cpm_number(terms.floor),
        "floor_currency": terms.currency,
    }
    # One impression is what everybody expects, so only another number is said.
    many = terms.multiplier != money.NANOS_PER_UNIT
    return shown | ({"multiplier": money.nanos_text(terms.multiplier)} if many else {})


def _imp_lines(imp: dict[str, Any]) -> list[str]:
    lines = [f"  imp {imp['impid']}"]
    lines += [f"    feature {name} = {value}" for name, value in imp["features"].items()]
    lines += [f"    feature {name} is missing" for name in imp["features_missing"]]
    for one in imp["line_items"]:
        verdict = "may bid" if one["may_bid"] else f"does not bid: {one['why']}"
        lines.append(f"    line item {one['line_item']} ({one['type']}) {verdict}")
    for ask in imp["asks"]:
        where = "the open auction" if ask["deal"] is None else f"deal {ask['deal']}"
        names, floor = ", ".join(ask["line_items"]), f"{ask['floor_cpm']} {ask['floor_currency']}"
        times = f", {ask['multiplier']} impressions" if "multiplier" in ask else ""
        kind = "price" if ask["auction"] == "fixed" else "floor"
        lines.append(
            f"    asks {names} for {where}: {ask['auction']} price, {kind} {floor} CPM{times}"
        )
    return [*lines, *([] if imp["asks"] else ["    asks nobody"])]
