"""An imp on some terms as the opportunity that every other caller would send."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from service.decision.opportunity import Opportunity
from service.openrtb.mapping import Line, Source
from service.openrtb.offers import Terms
from service.openrtb.paths import Feature
from service.openrtb.requests import Asked

_PRINTABLE = re.compile(r"[ -~]{1,64}")


def features_of(source: Source, asked: Asked, imp: dict[str, Any]) -> dict[str, Feature]:
    """What the mapping asks to know of an imp, as far as the request says it."""
    found = {name: path.feature(asked.body, imp) for name, path in source.features.items()}
    return {name: feature for name, feature in found.items() if feature is not None}


def opportunity(
    name: str,
    asked: Asked,
    terms: Terms,
    lines: Mapping[str, Line],
    features: Mapping[str, Feature],
    currencies: tuple[str, ...],
) -> Opportunity:
    """
    What the bidder is asked.

    Args:
        name: Of the source.
        currencies: In which the answer may still be; one of them once a bid has been made.
    """
    line_items = tuple(lines)
    fixed = terms.auction == "fixed"
    return Opportunity(
        line_item=line_items[0],
        # Echoed nowhere but in the log of decisions, whose width it must fit.
        request_id=asked.id if _PRINTABLE.fullmatch(asked.id) else None,
        source=name,
        floor=0 if fixed else terms.floor,
        features=features,
        deadline_ms=asked.deadline_ms,
        test=asked.test,
        auction=terms.auction,
        price=terms.floor if fixed else None,
        line_items=line_items if len(line_items) > 1 else (),
        currencies=currencies,
        floor_currency=terms.currency,
        multiplier=terms.multiplier,
    )
