"""The registry: a new method is one file in value/ and one line here."""

from __future__ import annotations

from collections.abc import Mapping

from service.decision.method import Method, Setting
from service.decision.value import flat, kl_ucbid, mean, posterior_quantile, ucbid

METHODS: dict[str, Method] = {
    method.name: method
    for method in (
        flat.METHOD,
        mean.METHOD,
        ucbid.METHOD,
        kl_ucbid.METHOD,
        posterior_quantile.METHOD,
    )
}

# Named by the interface, and refused by name until a later release brings them.
NOT_OFFERED = frozenset(
    {"bernstein-ucbid", "bayes-ucb", "thompson", "linear", "exptree", "exptree-win-only"}
)


def settings_of(name: str) -> Mapping[str, Setting]:
    """The settings a method takes; none for a name we do not know."""
    return METHODS[name].settings if name in METHODS else {}
