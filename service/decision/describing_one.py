"""What is learnt of single opportunities, for people, apart from what is learnt of all of them."""

from __future__ import annotations

from service.decision.price import Ready
from service.decision.valuing import ByFeatures, ByHint

BY_FEATURES = (
    "each opportunity is priced by its own features; the bid and the mean shown here are those "
    "of an impression of which nothing is known. Only impressions bought under this method count"
)
BY_HINT = (
    "an opportunity with a hint is priced at the hint times this ratio, one without at the bid "
    "shown here; the ratio takes the order of hints as given and learns only how high they lie"
)


def said_of_one(ready: Ready) -> dict[str, object]:
    """The ellipsoid and the ratio of hints; None for what the line item does not learn."""
    valuing = ready.valuing
    by_features = valuing.by_features if valuing is not None else None
    by_hint = valuing.by_hint if valuing is not None else None
    return {
        "features": None if by_features is None else _features(by_features),
        "hints": None if by_hint is None else _hints(by_hint),
    }


def _features(by_features: ByFeatures) -> dict[str, object]:
    return {
        "dimensions": len(by_features.weights),
        "lessons": by_features.lessons,
        "radius": round(by_features.radius, 6),
        "says": BY_FEATURES,
    }


def _hints(by_hint: ByHint) -> dict[str, object]:
    seen = by_hint.seen
    return {
        "impressions": seen.impressions,
        "hinted_nanos": seen.hinted,
        "brought_nanos": seen.amount,
        "ratio": by_hint.ratio,
        "ratio_mean": by_hint.mean,
        "says": BY_HINT,
    }
