"""The import rule runs one way, and everything lies where the map says."""

from __future__ import annotations

import ast
import re
import sys
import tomllib

import pytest

from tests.house import ROOT, Source, imports, read, tracked

STORIES = {"bidding", "feedback", "upkeep", "operating", "clerk", "exchanging", "rehearsing"}
# What several stories need and none of them owns.
SHARED = set(
    """
    admitting answer backlog catalog choosing configuring connecting correcting drawing estimates
    foreseeing hindsights judging leasing ordering patience posting previewing pulse quarantining
    rating records recounting rehearsal_orders reporting sampling showing spans spending teaching
    threads tripwiring watching winding
    """.split()
)
PURE = {"money", "errors", "learner", "decision", "ledger", "guard", "tripwires", "rehearsal"}
PURE |= {"openrtb", "currencies", "pricing"}
EVERYTHING = PURE | STORIES | SHARED | {"settings", "store", "api", "app", "commands", "__main__"}
EVERYTHING |= {"metrics", "request_ids"}
EVERYTHING |= {"watch"}

# What each place may import of our own, besides itself.
OWN: dict[str, set[str]] = {
    "money": set(),
    "errors": set(),
    "metrics": set(),
    "request_ids": set(),
    "settings": {"errors"},
    "learner": {"errors"},
    "decision": {"learner", "money", "errors"},
    "ledger": {"money", "errors"},
    "guard": {"ledger", "money", "errors"},
    "tripwires": {"money", "errors"},
    "openrtb": {"decision.opportunity", "money", "errors"},
    "currencies": {"decision.opportunity", "guard"},
    # The pure middle of a bid, which bidding and rehearsals share.
    "pricing": {"currencies", "decision", "guard"},
    "store": {"ledger", "money", "errors"},
    "rehearsal": {"decision", "learner", "guard", "ledger", "money", "errors", "pricing"},
    **dict.fromkeys(STORIES | SHARED, PURE | SHARED | {"metrics", "store", "settings"}),
    # Made of the two stories that every caller comes to.
    "exchanging": {"bidding", "feedback", "openrtb", "decision.opportunity", "errors"},
    # Of the store only its named reads, of the decision only the form a bid takes.
    "api": STORIES
    | {"errors", "money", "store.reading", "decision.opportunity", "configuring", "winding"}
    | {"admitting", "hindsights", "openrtb", "records", "recounting", "request_ids"},
    # An order is read as the API reads it, so that both refuse the same.
    "watch": {"operating", "rehearsing", "watching", "judging", "winding", "errors", "money", "api"}
    | {"drawing", "hindsights", "decision.methods"},
    **dict.fromkeys(("app", "commands", "__main__"), EVERYTHING),
}

INSTALLED = set(
    """
    alembic fastapi httpx jinja2 jiter matplotlib numpy orjson plotly prometheus_client psycopg
    pydantic pydantic_settings rich scipy sqlalchemy starlette swagger_ui_bundle uvicorn uvloop
    """.split()
)

# What each place may import of others' packages; the standard library is free everywhere.
OTHERS: dict[str, set[str]] = {
    "money": set(),
    "errors": set(),
    "settings": {"pydantic_settings", "pydantic"},
    "learner": {"numpy", "scipy.special", "jiter", "orjson"},
    "decision": {"numpy", "scipy.special"},
    "ledger": set(),
    "guard": set(),
    "tripwires": {"scipy.special"},
    "currencies": set(),
    "pricing": {"numpy"},
    "store": {"sqlalchemy", "alembic", "jiter", "orjson"},
    "rehearsal": {"numpy", "scipy"},
    "openrtb": {"pydantic", "pydantic_core"},
    "metrics": {"prometheus_client"},
    "request_ids": set(),
    **{story: {"numpy", "scipy"} for story in STORIES | SHARED},
    # Alone talks to somebody else's server.
    "posting": {"httpx"},
    # Only where the settings ask for traces, and then inside the function that needs them.
    "spans": {"opentelemetry"},
    "api": {
        *("fastapi", "jiter", "orjson", "pydantic", "pydantic_core", "starlette"),
        "swagger_ui_bundle",
    },
    "watch": {"fastapi", "starlette", "jinja2"},
    **dict.fromkeys(("app", "commands", "__main__"), INSTALLED),
}

TOP = re.compile(
    r"README\.md|DEVELOPERS\.md|CHANGELOG\.md|LICENSE|Dockerfile|pyproject\.toml|alembic\.ini"
    r"|service|migrations|tests|deploy|\..*"
)
FORBIDDEN_NAMES = {"utils", "helpers", "common", "core", "manager"}


def misplaced(source: Source) -> list[str]:
    """Name every import of a file that its place may not make."""
    found = []
    for node, name in imports(source):
        root, _, rest = name.partition(".")
        if root == "service":
            allowed = not rest or _within(rest, {source.place, *OWN.get(source.place, set())})
        else:
            allowed = root in sys.stdlib_module_names
            allowed = allowed or _within(name, OTHERS.get(source.place, set()))
        if not allowed:
            found.append(f"{source.at(node)} {source.place} imports {name}")
    return found


def _within(name: str, allowed: set[str]) -> bool:
    return any(name == one or name.startswith(f"{one}.") for one in allowed)


def forbidden_names(path: str) -> set[str]:
    """The words of a path that say nothing about what lies there."""
    words = {word for part in path.split("/") for word in part.split(".")[0].split("_")}
    return words & FORBIDDEN_NAMES


def test_every_place_imports_only_what_it_may() -> None:
    """Imports run one way, as the map says, and nothing unknown comes in."""
    sources = [s for s in read("service") if s.path != "service/__init__.py"]
    assert [line for source in sources for line in misplaced(source)] == []


def test_every_place_has_its_rule() -> None:
    """A new folder or file beside the others is first given its line in the tables above."""
    places = {s.place for s in read("service")} - {"__init__"}
    assert sorted(places - OWN.keys()) == []
    assert OWN.keys() == OTHERS.keys()


@pytest.mark.parametrize(
    ("path", "line"),
    [
        ("service/learner/fold.py", "import sqlalchemy"),
        ("service/learner/fold.py", "from scipy import stats"),
        ("service/learner/fold.py", "from ..decision import terms"),
        ("service/learner/deep/fold.py", "from ...store import books"),
        ("service/ledger/settle.py", "import numpy.linalg as linalg"),
        ("service/decision/price.py", "from service import settings"),
        ("service/guard/hand.py", "from service.store.books import Books"),
        ("service/store/books.py", "def late():\n    import service.learner.tally"),
        ("service/bidding.py", "from fastapi import Request"),
        ("service/catalog.py", "from service import bidding"),
        ("service/api/bids.py", "from service.store import books"),
        ("service/api/bids.py", "from sqlalchemy import text"),
        ("service/money.py", "from . import errors"),
        ("service/app.py", "import some_new_package"),
    ],
)
def test_an_import_against_the_rule_is_found(path: str, line: str) -> None:
    """The rule sees absolute, relative, dotted, renamed and late imports."""
    assert len(misplaced(Source(path, line))) == 1


@pytest.mark.parametrize(
    ("path", "line"),
    [
        ("service/learner/fold.py", "from .tally import Tally\nimport numpy as np\nimport json"),
        ("service/learner/bounds.py", "from scipy.special import xlogy\nfrom .. import errors"),
        ("service/store/migrate.py", "import service\nfrom alembic import command"),
        ("service/api/bids.py", "from service.store.reading import facts\nimport fastapi.routing"),
        ("service/upkeep.py", "from service.store import books\nfrom . import money"),
        ("service/commands/serve.py", "import uvicorn\nfrom service.api import problems"),
    ],
)
def test_an_import_by_the_rule_is_let_through(path: str, line: str) -> None:
    """The rule refuses nothing that the map allows."""
    assert misplaced(Source(path, line)) == []


def test_packages_open_with_a_docstring_and_nothing_else() -> None:
    """A package file that runs code makes imports run it too."""
    busy = [
        source.path
        for source in read("service")
        if source.path.endswith("__init__.py")
        and (len(source.tree.body) != 1 or ast.get_docstring(source.tree) is None)
    ]
    assert busy == []


def test_every_module_says_what_it_is() -> None:
    """A module opens with what it is and why it is apart, as a sentence."""
    silent = []
    for source in read("service") + read("tests") + read("migrations"):
        first = (ast.get_docstring(source.tree) or "").partition("\n\n")[0]
        if not first.rstrip().endswith((".", ":", "?")):
            silent.append(source.path)
    assert silent == []


def test_nothing_is_named_after_nothing() -> None:
    """No folder or file takes a name under which anything could lie."""
    assert [path for path in tracked() if forbidden_names(path)] == []
    assert forbidden_names("service/store/core_rules.py") == {"core"}


def test_only_agreed_entries_lie_at_the_top() -> None:
    """Whoever opens the repository sees the agreed entries and no others."""
    assert sorted({p.partition("/")[0] for p in tracked()} - _agreed()) == []
    assert TOP.fullmatch("notes.txt") is None


def _agreed() -> set[str]:
    return {p.partition("/")[0] for p in tracked() if TOP.fullmatch(p.partition("/")[0])}


def test_what_the_service_imports_is_what_it_declares() -> None:
    """Every foreign package in the tables above is a declared dependency, or comes with one."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))["project"]
    declared = {re.split(r"[\[<>=]", d)[0].replace("-", "_") for d in project["dependencies"]}
    assert INSTALLED - {"starlette"} <= declared  # Starlette comes with FastAPI.
