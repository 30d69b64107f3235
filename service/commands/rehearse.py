"""`bidkeel rehearse`: try policies on a market, on a line item's log or on auctions in a CSV.

What is asked comes from a JSON file, in the form of `POST /v1/rehearsals`, or from options.
"""

from __future__ import annotations

import argparse
import itertools
import json
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from rich.console import Console

from service import money
from service.api.answers import plain
from service.api.body import parse_object
from service.api.forms.rehearsals import read_rehearsal
from service.commands import charts, options, report
from service.connecting import open_database
from service.errors import BidkeelError, Refusal
from service.rehearsal import csv_auctions
from service.rehearsal.playing import played
from service.rehearsal.rehearse import auctions_of, replay
from service.rehearsal_orders import RECORDED, order_of
from service.rehearsing import order_from
from service.settings import load

NAME = "rehearsed"
COLUMNS = ", ".join((*csv_auctions.COLUMNS, f"{csv_auctions.FEATURE}NAME"))


class BadRequest(BidkeelError):
    """What was asked cannot be played."""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("file", nargs="?", type=Path, help="a JSON file, as POST /v1/rehearsals")
    parser.add_argument("--csv", type=Path, help=f"auctions to replay; columns: {COLUMNS}")
    parser.add_argument("--line-item", help="start from this line item of the database")
    parser.add_argument("--market", default="iid", help="iid, own_curve, own_log, drift, abrupt, …")
    kinds = ("second", "first")
    parser.add_argument("--auction", choices=kinds, default="second", help="kind of auction")
    parser.add_argument(
        "--policy", action="append", help="METHOD or METHOD:SETTING=NUMBER,…; once for each policy"
    )
    for name, usual, text in _MONEY:
        parser.add_argument(f"--{name}", default=usual, help=text)
    arrivals = ("once", "accrues")
    parser.add_argument("--arrival", choices=arrivals, default="once", help="how values come")
    parser.add_argument("--currency", default="EUR", help="code of the currency")
    parser.add_argument("--rounds", type=options.count, default=10_000, help="auctions per seed")
    parser.add_argument("--seeds", type=options.count, help="usually 20, of a replay 1")
    parser.add_argument("--seed", type=options.seed, default=0, help="the first seed")
    parser.add_argument("--block", type=options.count, default=50, help="auctions per snapshot")
    parser.add_argument("--png", type=Path, help="write the chart as a picture")
    parser.add_argument("--html", type=Path, help="write the chart as one page, without internet")
    parser.add_argument("--json", action="store_true", help="print figures for a program")


_MONEY = (
    ("cap-cpm", "8", "bid cap, as CPM"),
    ("budget", "1000", "budget, in currency"),
    ("ceiling", "0.16", "largest value of an impression, in currency"),
    ("typical", None, "usual value of one event, in currency"),
)


def run(arguments: argparse.Namespace) -> int:
    """
    Play what is asked and show it.

    Returns:
        0 when it was played; 1 when it was refused, with the reason.
    """
    try:
        result = _result(arguments)
    except Refusal as refusal:
        place = f" ({refusal.data['field']})" if "field" in refusal.data else ""
        raise BadRequest(f"{refusal.code}: {refusal.detail}{place}") from None
    except (OSError, csv_auctions.NoAuctions) as error:
        raise BadRequest(str(error)) from None
    for path, draw in ((arguments.png, charts.draw_png), (arguments.html, charts.draw_html)):
        if path is not None:
            draw(result, path)
    _show(result, arguments)
    return 0


def _result(arguments: argparse.Namespace) -> dict[str, Any]:
    members = _members(arguments)
    wish = read_rehearsal(members, 0)
    if arguments.csv is not None:
        return _replayed(wish, arguments.csv, str(wish["market"]["auction"]))
    order = _order(wish)
    total = len(order["log"]) if order.get("log") is not None else auctions_of(order)
    with report.progress() as bar:
        task = bar.add_task("Auctions", total=total)
        return played(order, lambda count: bar.advance(task, count))


def _order(wish: Mapping[str, Any]) -> Mapping[str, Any]:
    if wish["line_item"] is None:
        return order_of(wish, wish["config"])
    database = open_database(load())
    try:
        return database.read(lambda connection: order_from(connection, wish))
    finally:
        database.close()


def _replayed(wish: Mapping[str, Any], path: Path, auction: str) -> dict[str, Any]:
    """The file is read twice, row by row: for its length and what is wrong with it, then played."""
    told = csv_auctions.Told()
    with path.open(encoding="utf-8-sig", errors="replace", newline="") as file:
        first_ms, last_ms, count = 0, 0, 0
        for count, row in enumerate(csv_auctions.auctions(file, told), start=1):
            first_ms, last_ms = (row.at_ms if count == 1 else first_ms), row.at_ms
    if not count:
        raise BadRequest("The file has no row that can be read." + _first_fault(told))
    # The order is checked as for a drawn market, and then given the file's.
    order = dict(_order({**wish, "market": {**wish["market"], "kind": "iid"}}))
    market = {**order["market"], "kind": "csv", "values": RECORDED, "auction": auction}
    order["market"] = {**market, "span_ms": max(last_ms - first_ms + 1, 1)}
    with (
        path.open(encoding="utf-8-sig", errors="replace", newline="") as file,
        report.progress() as bar,
    ):
        task = bar.add_task("Auctions of the file", total=count)
        rows = csv_auctions.auctions(file, csv_auctions.Told())
        pieces = csv_auctions.pieces(rows, order["block"])
        result = replay(order, pieces, lambda n: bar.advance(task, n), first_ms)
    assumed = [*csv_auctions.ASSUMED, *result["assumed"]]
    exact = list(csv_auctions.EXACT)
    return {**result, "exact": exact, "assumed": assumed, "file": told.plain()}


def _members(arguments: argparse.Namespace) -> dict[str, object]:
    """The form of POST /v1/rehearsals, from the file or from the options."""
    if arguments.file is not None:
        return parse_object(arguments.file.read_bytes())
    policies = [_policy(text) for text in arguments.policy or ["kl-ucbid"]]
    asked: dict[str, object] = {
        "policies": policies,
        "market": {"kind": arguments.market, "auction": arguments.auction},
        "rounds": arguments.rounds,
        "seeds": arguments.seeds or (1 if arguments.csv or arguments.market == "own_log" else 20),
        "seed": arguments.seed,
        "block": arguments.block,
    }
    if arguments.line_item is not None:
        return {**asked, "line_item": arguments.line_item}
    value = {"ceiling": arguments.ceiling, "typical": arguments.typical}
    config: dict[str, object] = {
        "id": NAME,
        "name": "Rehearsed",
        "currency": arguments.currency,
        "budget": arguments.budget,
        "bid_cap_cpm": arguments.cap_cpm,
        "losses": "priced",
        "value": {**{k: v for k, v in value.items() if v}, "arrival": arguments.arrival},
    }
    return {**asked, "config": config}


def _policy(text: str) -> dict[str, object]:
    """METHOD:NAME=NUMBER,… as a policy; the form judges what stands there."""
    method, _, settings = text.partition(":")
    policy: dict[str, object] = {"method": method}
    for setting in filter(None, settings.split(",")):
        name, _, number = setting.partition("=")
        try:
            # By the parser of the API, so that a number means the same in both places.
            policy[name] = parse_object(f'{{"it": {number}}}'.encode())["it"]
        except Refusal:
            raise BadRequest(f"{setting} is no SETTING=NUMBER") from None
    return {"name": text[:64], "change": {"policy": policy}}


def _show(result: Mapping[str, Any], arguments: argparse.Namespace) -> None:
    console = Console()
    if arguments.json:
        console.print_json(json.dumps(plain(result), allow_nan=False))
        return
    console.print(report.table(charts.heading(result), _names(result), _rows(result)))
    for line in itertools.chain(_extra(result), _file(result), result["assumed"]):
        console.print(f"- {line}", style="dim", highlight=False)
    for path in filter(None, (arguments.png, arguments.html)):
        console.print(f"chart: {path}", highlight=False)


def _names(result: Mapping[str, Any]) -> list[str]:
    return [policy["name"] for policy in result["policies"]]


def _rows(result: Mapping[str, Any]) -> dict[str, list[str]]:
    currency, policies = result["currency"], result["policies"]
    rows: dict[str, Callable[[Mapping[str, Any]], str]] = {
        "bids (count)": lambda one: _count(one["bids"]),
        "wins (count)": lambda one: _count(one["wins"]),
        f"spend ({currency})": lambda one: _amount(one["spend"]),
        "share of budget (%)": lambda one: _per_cent(one["budget_share"]),
        f"value won ({currency})": lambda one: _amount(one["value"]),
        f"surplus ({currency})": lambda one: _amount(one["surplus"]),
        f"best fixed bid in hindsight, median ({currency} CPM)": _best,
        f"regret to it ({currency})": lambda one: _amount(one["regret"]),
        "passes (count per seed)": _passes,
    }
    if any("surplus_exact" in one for one in policies):
        rows[f"surplus of wins of known value ({currency})"] = lambda one: _amount(
            one.get("surplus_exact")
        )
        for name in ("wins_of_unknown_value", "auctions_of_unknown_outcome"):
            rows[f"{name.replace('_', ' ')} (count)"] = _counted(name)
    return {name: [write(one) for one in policies] for name, write in rows.items()}


def _counted(name: str) -> Callable[[Mapping[str, Any]], str]:
    return lambda one: _count(one.get(name))


def _count(figure: Mapping[str, Any] | None) -> str:
    if figure is None:
        return "none"
    # One seed has no error; a nought would claim certainty.
    error = "" if figure["error"] is None else f" ± {figure['error']:,.1f}"
    return f"{figure['mean']:,.1f}{error}" if error else f"{figure['mean']:,.0f}"


def _amount(figure: Mapping[str, Any] | None) -> str:
    if figure is None:
        return "not known"
    mean, error = figure["mean_nanos"], figure["error_nanos"]
    units = f"{mean / money.NANOS_PER_UNIT:,.4f}"
    return units if error is None else f"{units} ± {error / money.NANOS_PER_UNIT:,.4f}"


def _per_cent(figure: Mapping[str, Any]) -> str:
    error = "" if figure["error"] is None else f" ± {100 * figure['error']:.2f}"
    return f"{100 * figure['mean']:.2f}{error}"


def _best(policy: Mapping[str, Any]) -> str:
    best = policy["best_fixed"]
    return "not known" if best is None else report.cpm(best["bid_cpm_nanos"])


def _passes(policy: Mapping[str, Any]) -> str:
    said = [f"{count:,.1f} {reason}" for reason, count in policy["passes"].items()]
    return ", ".join(said) or "none"


def _extra(result: Mapping[str, Any]) -> list[str]:
    """What single kinds of market add."""
    lines = [f"exact: {line}" for line in result.get("exact", [])]
    for one in result["differences"]:
        difference = _amount(one["surplus"])
        lines.append(
            f"{one['policy']} earned {difference} {result['currency']} more than {one['than']} "
            "on the same auctions"
        )
    for policy, sold in zip(result["policies"], result.get("sellers", []), strict=False):
        floor = report.cpm(sold["floor_at_end"]["mean_cpm_nanos"])
        earned = f"{_amount(sold['revenue'])} {result['currency']}"
        lines.append(f"before {policy['name']} the seller earned {earned}, last floor {floor} CPM")
    arena = result.get("arena")
    if arena is None:
        return lines
    revenue = _amount(arena["revenue"])
    lines.append(f"the seller's revenue: {revenue} {result['currency']}")
    lines.append(f"settled in {arena['seeds_settled']} of {result['seeds']} seeds")
    if arena["equilibrium"] is None:
        return [*lines, f"no equilibrium to compare with: {arena['equilibrium_unknown']}"]
    off = {name: 100 * arena["equilibrium"][name]["mean"] for name in ("bid_off", "revenue_off")}
    lines.append(
        f"second half against the equilibrium: bids {off['bid_off']:.1f} % off, revenue "
        f"{off['revenue_off']:+.1f} %"
    )
    return lines


def _file(result: Mapping[str, Any]) -> list[str]:
    told = result.get("file")
    if told is None:
        return []
    lines = [f"{told['rows']:,} rows read, {told['bad_rows']:,} of them bad and left out"]
    lines += [f"line {one['line']}: {one['fault']}" for one in told["first_bad_rows"]]
    if told["unknown_columns"]:
        lines.append(f"columns nobody reads: {', '.join(told['unknown_columns'])}")
    return lines


def _first_fault(told: csv_auctions.Told) -> str:
    return f" Line {told.first_bad[0][0]}: {told.first_bad[0][1]}." if told.first_bad else ""
