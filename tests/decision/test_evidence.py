"""Evidence before a change: what speaks against a method, and what learning it may cost."""

from __future__ import annotations

from typing import Any

import pytest

from service.decision.evidence import LOSSES_FEW, evidence
from service.decision.learnability import defaults
from service.decision.methods import METHODS
from service.teaching import FRESH
from tests.builders import CAP, line_item


def told(many: int, **body: Any) -> list[tuple[str, dict[str, Any]]]:
    """So many losses that say this."""
    return [("lost", {"auction": "second", **body}) for _ in range(many)]


def asked(outcomes: list[tuple[str, dict[str, Any]]] | None = None, **changes: Any) -> Any:
    """The evidence of a line item, and its methods by name."""
    config, _ = defaults(line_item(**changes))
    found = evidence(config, FRESH, outcomes or [])
    return found, {one["method"]: one for one in found["methods"]}


def test_every_method_stands_once_with_its_reasons() -> None:
    """None is left out, and none is put first for being better."""
    found, by_name = asked()
    assert list(by_name) == sorted(METHODS)
    assert [one["in_use"] for one in found["methods"]].count(True) == 1
    assert not {"score", "rank", "recommended"} & set(found["methods"][0])
    assert "without a score" in found["says"]


def test_what_the_feed_tells_decides_what_fits() -> None:
    """A method that needs the competing bid of every loss fits where every loss tells it."""
    _, bare = asked(told(LOSSES_FEW, to_win=None))
    _, priced = asked(told(LOSSES_FEW, to_win=5))
    found, few = asked(told(LOSSES_FEW - 1, to_win=5))
    assert not bare["exptree"]["fits"]
    assert priced["exptree"]["fits"]
    assert not few["exptree"]["fits"]
    assert found["feedback"]["losses_are_priced"] is None
    assert "too few losses" in found["feedback"]["says"]


def test_auctions_where_one_pays_the_bid_rule_laws_out() -> None:
    """And the others say that shading and value have no theorem together."""
    _, by_name = asked(auction="first")
    assert not by_name["exptree-win-only"]["fits"]
    assert any("no theorem" in said for said in by_name["kl-ucbid"]["reasons"])


@pytest.mark.parametrize("name", ["ucbid", "kl-ucbid", "bernstein-ucbid"])
def test_rare_values_make_published_bounds_dear(name: str) -> None:
    """In money: so many wins at the cap, all worthless, until a bid leaves it."""
    found, by_name = asked(value={"ceiling": 1000 * CAP, "typical": 100 * CAP})
    assert found["market"]["values_are_rare"]
    cost = by_name[name]["learning_cost"]
    assert cost["at_most_nanos"] == cost["wins"] * CAP
    assert "learning_cost" in by_name[name]["reasons"][0]
    assert "learning allowance" in cost["says"]


def test_where_no_figure_is_known_none_is_given() -> None:
    """Draws and laws learn at a price that hangs on rivals; flat learns nothing for nothing."""
    _, by_name = asked()
    assert by_name["thompson"]["learning_cost"]["at_most_nanos"] is None
    assert "no figure" in by_name["thompson"]["learning_cost"]["says"]
    assert by_name["flat"]["learning_cost"]["at_most_nanos"] == 0
