"""Calls and words that must not appear, each with the harm it would do."""

from __future__ import annotations

import ast
import re
from collections.abc import Callable, Iterator

import pytest

from tests.house import ROOT, Source, dotted, imports, nodes, read, tracked

SEEDED = {"Generator", "BitGenerator", "PCG64", "Philox", "SeedSequence", "default_rng"}
CLOCKS = re.compile(r"(time|datetime)\..*|(perf_counter|monotonic)(_ns)?")
ADDRESS = re.compile(
    r"https?://(?!127\.0\.0\.1|localhost|\[::1\]|test(server)?\b|[{$]|\S+\.example\b)"
)
WORDS = re.compile(r"\bissue #?\d+|\bmicros\b|_micros\b|\blearning[ _-](phase|limited)\b", re.I)

Rule = Callable[[Source], Iterator[ast.AST]]


def naive_time(source: Source) -> Iterator[ast.AST]:
    """A time without a zone is read as another time by the next machine."""
    for call in nodes(source, ast.Call):
        name = dotted(call.func)
        bare = name.endswith("datetime.now") and not call.args and not call.keywords
        if bare or name.endswith((".utcnow", ".utcfromtimestamp")):
            yield call


def global_randomness(source: Source) -> Iterator[ast.AST]:
    """Randomness from a global state cannot be repeated by whoever looks for a fault."""
    for node, name in imports(source):
        if name.partition(".")[0] == "random" or _unseeded(name):
            yield node
    for attribute in nodes(source, ast.Attribute):
        if _unseeded(re.sub(r"^np\.", "numpy.", dotted(attribute))):
            yield attribute


def _unseeded(name: str) -> bool:
    parts = name.split(".")
    return parts[:2] == ["numpy", "random"] and len(parts) > 2 and parts[2] not in SEEDED


def inexact_money(source: Source) -> Iterator[ast.AST]:
    """The ledger counts in whole nanos: no floats, and no division that makes one."""
    if source.place != "ledger":
        return
    for node in ast.walk(source.tree):
        if isinstance(node, ast.Call) and dotted(node.func) == "float":
            yield node
        if isinstance(node, ast.Constant) and isinstance(node.value, float):
            yield node
        if isinstance(node, ast.BinOp | ast.AugAssign) and isinstance(node.op, ast.Div):
            yield node


def stray_commit(source: Source) -> Iterator[ast.AST]:
    """A transaction is closed by whoever opened it, in the store, and by nobody on the way."""
    for call in nodes(source, ast.Call):
        if source.place != "store" and dotted(call.func).endswith(".commit"):
            yield call


def assertion(source: Source) -> Iterator[ast.AST]:
    """Python drops assert statements when asked to optimise; a promise is checked in the open."""
    return nodes(source, ast.Assert)


def hidden_clock(source: Source) -> Iterator[ast.AST]:
    """Learner, decision and ledger are pure: the time is an argument, or a replay differs."""
    for call in nodes(source, ast.Call):
        name = dotted(call.func)
        reads = CLOCKS.fullmatch(name) and not name.endswith((".fromtimestamp", ".combine"))
        if source.place in {"learner", "decision", "ledger"} and reads:
            yield call


def hidden_import(source: Source) -> Iterator[ast.AST]:
    """An import by a computed name passes by the import rule."""
    for call in nodes(source, ast.Call):
        if dotted(call.func).rpartition(".")[2] in {"__import__", "import_module"}:
            yield call


RULES: list[Rule] = [
    *(naive_time, global_randomness, inexact_money, stray_commit),
    *(assertion, hidden_clock, hidden_import),
]


@pytest.mark.parametrize("rule", RULES, ids=lambda rule: rule.__name__)
def test_the_service_keeps_the_rule(rule: Rule) -> None:
    """No file of the service does what the rule bans."""
    assert [s.at(node) for s in read("service") for node in rule(s)] == [], rule.__doc__


@pytest.mark.parametrize(
    ("rule", "path", "text"),
    [
        (naive_time, "service/app.py", "datetime.now()"),
        (naive_time, "service/app.py", "datetime.datetime.utcnow()"),
        (global_randomness, "service/upkeep.py", "import random"),
        (global_randomness, "service/upkeep.py", "from random import choice"),
        (global_randomness, "service/upkeep.py", "np.random.rand(3)"),
        (global_randomness, "service/upkeep.py", "from numpy.random import normal"),
        (inexact_money, "service/ledger/settle.py", "float(amount)"),
        (inexact_money, "service/ledger/settle.py", "share = amount / 2"),
        (inexact_money, "service/ledger/settle.py", "amount * 0.5"),
        (stray_commit, "service/feedback.py", "self.session.commit()"),
        (assertion, "service/guard/hand.py", "assert remaining >= 0"),
        (hidden_clock, "service/decision/price.py", "time.monotonic()"),
        (hidden_clock, "service/learner/fold.py", "datetime.now(UTC)"),
        (hidden_import, "service/app.py", "importlib.import_module(name)"),
    ],
)
def test_a_breach_of_the_rule_is_found(rule: Rule, path: str, text: str) -> None:
    """Each rule sees what it bans."""
    assert len(list(rule(Source(path, text)))) == 1


@pytest.mark.parametrize(
    ("rule", "path", "text"),
    [
        (naive_time, "service/app.py", "datetime.now(UTC)"),
        (global_randomness, "service/upkeep.py", "np.random.default_rng(7).random()"),
        (global_randomness, "service/upkeep.py", "from numpy.random import Generator"),
        (inexact_money, "service/ledger/settle.py", "amount // 2"),
        (inexact_money, "service/learner/bounds.py", "float(amount) / 2"),
        (stray_commit, "service/store/database.py", "connection.commit()"),
        (hidden_clock, "service/ledger/days.py", "datetime.fromtimestamp(at_s, zone)"),
        (hidden_clock, "service/bidding.py", "time.monotonic()"),
    ],
)
def test_what_is_no_breach_is_let_through(rule: Rule, path: str, text: str) -> None:
    """No rule bans more than it says."""
    assert list(rule(Source(path, text))) == []


def _lines() -> Iterator[tuple[str, str]]:
    for path in tracked():
        text = (ROOT / path).read_text("utf-8", errors="replace")
        yield from ((f"{path}:{n}", line) for n, line in enumerate(text.splitlines(), 1))


def test_no_file_names_an_address_elsewhere() -> None:
    """What is installed is named by name and version; only this machine has an address here."""
    assert [spot for spot, line in _lines() if ADDRESS.search(line)] == []


def test_the_pinned_versions_are_names_and_versions() -> None:
    """A constraint is a name and a version: no address, no hash, no option."""
    pinned = (ROOT / "deploy" / "constraints.txt").read_text("utf-8").splitlines()
    assert [line for line in pinned if not re.fullmatch(r"[A-Za-z0-9_.-]+==[0-9a-z.]+", line)] == []


def test_no_file_uses_a_word_that_we_do_not() -> None:
    """Numbers of an issue tracker go stale, and some words belong to one product."""
    here = "tests/test_bans.py"
    spots = [spot for spot, line in _lines() if WORDS.search(line)]
    assert [spot for spot in spots if not spot.startswith(here)] == []


def test_no_file_reaches_out_of_the_checkout() -> None:
    """A clone holds all that it needs."""
    up = "." * 2 + "/"
    spots = [spot for spot, line in _lines() if up in line]
    assert spots == []


@pytest.mark.parametrize(
    ("pattern", "text", "banned"),
    [
        (ADDRESS, "see https:" + "//registry.invalid/simple", True),
        (ADDRESS, "curl http://127.0.0.1:8080/v1/bids", False),
        (ADDRESS, "f'http://{host}:{port}/'", False),
        (WORDS, "closes Issue #12", True),
        (WORDS, "bid_micros", True),
        (WORDS, "the learning phase of a line item", True),
        (WORDS, "the learning allowance", False),
    ],
)
def test_addresses_and_words_are_told_apart(
    pattern: re.Pattern[str], text: str, banned: bool
) -> None:
    """The patterns find what they ban and let the rest through."""
    assert bool(pattern.search(text)) is banned
