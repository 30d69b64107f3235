"""Reading our own source as data, so that the rules of the house can be tests."""

from __future__ import annotations

import ast
import subprocess
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TypeVar

ROOT = Path(__file__).parent.parent

Node = TypeVar("Node", bound=ast.AST)
Function = ast.FunctionDef | ast.AsyncFunctionDef


@dataclass(frozen=True)
class Source:
    """One file of Python: where it lies, below the root, and what it says."""

    path: str
    text: str

    @cached_property
    def tree(self) -> ast.Module:
        """What the parser makes of it."""
        return ast.parse(self.text, self.path)

    @property
    def place(self) -> str:
        """The folder or file right below the first folder: service/learner/fold.py is learner."""
        return self.path.removesuffix(".py").split("/")[1]

    @property
    def lines(self) -> int:
        """Physical lines."""
        return len(self.text.splitlines())

    def at(self, node: ast.AST) -> str:
        """Name a spot as an editor reads it."""
        return f"{self.path}:{getattr(node, 'lineno', 1)}"


def read(folder: str) -> list[Source]:
    """All Python files below a folder of the checkout, in order."""
    paths = sorted((ROOT / folder).rglob("*.py"))
    return [Source(p.relative_to(ROOT).as_posix(), p.read_text("utf-8")) for p in paths]


def tracked() -> list[str]:
    """The paths that git keeps."""
    command = ["git", "-C", str(ROOT), "ls-files", "-z"]  # A quoted path would hide its name.
    listed = subprocess.run(command, capture_output=True, text=True, check=True)
    return [path for path in listed.stdout.split("\0") if (ROOT / path).is_file()]


def nodes(source: Source, *kinds: type[Node]) -> Iterator[Node]:
    """Every node of the given kinds, wherever it stands."""
    return (node for node in ast.walk(source.tree) if isinstance(node, kinds))


def functions(source: Source) -> Iterator[Function]:
    """Every function and method."""
    return nodes(source, ast.FunctionDef, ast.AsyncFunctionDef)


def length(function: Function) -> int:
    """Lines of a function without its docstring, its decorators not counted."""
    lines = (function.end_lineno or function.lineno) - function.lineno + 1
    if ast.get_docstring(function, clean=False) is None:
        return lines
    opening = function.body[0]
    return lines - ((opening.end_lineno or opening.lineno) - opening.lineno + 1)


def dotted(node: ast.AST) -> str:
    """Write a name with its dots; what is not a name becomes a question mark."""
    if isinstance(node, ast.Name):
        return node.id
    if isinstance(node, ast.Attribute):
        return f"{dotted(node.value)}.{node.attr}"
    return "?"


def imports(source: Source) -> Iterator[tuple[ast.AST, str]]:
    """Every import as one full dotted name, relative ones resolved, with its node."""
    for plain in nodes(source, ast.Import):
        yield from ((plain, alias.name) for alias in plain.names)
    for node in nodes(source, ast.ImportFrom):
        base = _base(source, node)
        yield from ((node, f"{base}.{alias.name}") for alias in node.names)


def _base(source: Source, node: ast.ImportFrom) -> str:
    if not node.level:
        return node.module or ""
    package = source.path.removesuffix(".py").split("/")
    parents = package[: len(package) - node.level]
    return ".".join([*parents, *([node.module] if node.module else [])])
