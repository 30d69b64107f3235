"""The registry: a new method is one file in value/ and one line here."""

from __future__ import annotations

from collections.abc import Mapping

from service.decision.method import Method, Setting
from service.decision.value import (
    bayes_ucb,
    bernstein_ucbid,
    exptree,
    flat,
    kl_ucbid,
    linear,
    mean,
    posterior_quantile,
    thompson,
    ucbid,
)

METHODS: dict[str, Method] = {
    method.name: method
    for method in (
        flat.METHOD,
        mean.METHOD,
        ucbid.METHOD,
        kl_ucbid.METHOD,
        bernstein_ucbid.METHOD,
        bayes_ucb.METHOD,
        thompson.METHOD,
        posterior_quantile.METHOD,
        linear.METHOD,
        exptree.PUBLISHED,
        exptree.WIN_ONLY,
    )
}


def settings_of(name: str) -> Mapping[str, Setting]:
    """The settings a method takes; none for a name we do not know."""
    return METHODS[name].settings if name in METHODS else {}
