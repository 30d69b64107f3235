"""The numbers of the house: small files, short functions, as much test as source, no mocks."""

from __future__ import annotations

import ast
import statistics

import pytest

from tests.house import Function, Source, functions, length, nodes, read

FILE_LINES_MEDIAN = 120
FILE_LINES_MAX = 400
FUNCTION_LINES_MEDIAN = 9
FUNCTION_LINES_MAX = 70
TEST_LINES_PER_SOURCE_LINE = 1.0
STAND_INS_PER_HUNDRED_TESTS = 5

# Ways to leave a test out, and ways to put something else in place of the real thing.
LEFT_OUT = {"skip", "skipif", "xfail", "importorskip", "expectedFailure"}


def cases(source: Source) -> list[Function]:
    """The test functions of a file."""
    return [function for function in functions(source) if function.name.startswith("test_")]


def names_of(source: Source) -> list[tuple[ast.AST, str]]:
    """Every name, attribute and argument that a file uses."""
    return [
        *((name, name.id) for name in nodes(source, ast.Name)),
        *((attribute, attribute.attr) for attribute in nodes(source, ast.Attribute)),
        *((argument, argument.arg) for argument in nodes(source, ast.arg)),
    ]


def left_out(source: Source) -> list[str]:
    """Name every spot that leaves a test out."""
    return [source.at(node) for node, name in names_of(source) if name in LEFT_OUT]


def stand_ins(source: Source) -> list[str]:
    """Name every spot that uses a stand-in instead of the real thing."""
    found = names_of(source)
    return [source.at(n) for n, name in found if "mock" in name.lower() or name[:6] == "monkey"]


def test_files_are_small() -> None:
    """The median file of the service is a page or two."""
    lines = [source.lines for source in read("service")]
    assert statistics.median(lines) <= FILE_LINES_MEDIAN


@pytest.mark.parametrize("folder", ["service", "tests", "migrations"])
def test_no_file_is_long(folder: str) -> None:
    """No file grows past the number where it should have been split."""
    assert [f"{s.path} {s.lines}" for s in read(folder) if s.lines > FILE_LINES_MAX] == []


def test_functions_are_short() -> None:
    """The median function of the service is read at a glance."""
    lines = [length(function) for source in read("service") for function in functions(source)]
    assert statistics.median(lines) <= FUNCTION_LINES_MEDIAN


@pytest.mark.parametrize("folder", ["service", "tests", "migrations"])
def test_no_function_is_long(folder: str) -> None:
    """No function grows past one screen."""
    sized = [(s.at(f), f.name, length(f)) for s in read(folder) for f in functions(s)]
    assert [spot for spot in sized if spot[2] > FUNCTION_LINES_MAX] == []


def test_there_is_as_much_test_as_source() -> None:
    """At least one line of test stands behind each line of source."""
    lines = {folder: sum(s.lines for s in read(folder)) for folder in ("service", "tests")}
    assert lines["tests"] >= TEST_LINES_PER_SOURCE_LINE * lines["service"], lines


def test_no_test_is_left_out() -> None:
    """A test that may be passed over is no test."""
    assert [spot for source in read("tests") for spot in left_out(source)] == []


def test_tests_use_the_real_thing() -> None:
    """Fewer than five stand-ins in a hundred tests."""
    count = sum(len(cases(source)) for source in read("tests"))
    spots = [spot for source in read("tests") for spot in stand_ins(source)]
    assert 100 * len(spots) < STAND_INS_PER_HUNDRED_TESTS * count, spots


def test_every_test_says_its_sentence() -> None:
    """What a test holds is written in it, as one sentence with a full stop."""
    silent = []
    for source in read("tests"):
        for test in cases(source):
            if not (ast.get_docstring(test) or "").rstrip().endswith("."):
                silent.append(f"{source.at(test)} {test.name}")
    assert silent == []


def test_the_length_of_a_function_leaves_its_docstring_out() -> None:
    """Explaining a function never makes it too long."""
    text = 'def one():\n    """\n    Say.\n    """\n    two = 2\n    return two\n'
    assert [length(f) for f in functions(Source("service/x.py", text))] == [3]


@pytest.mark.parametrize("way", sorted(LEFT_OUT))
@pytest.mark.parametrize("line", ["@pytest.mark.{}\ndef test_x(): ...", "pytest.{}('x')"])
def test_a_left_out_test_is_found(line: str, way: str) -> None:
    """Marks and calls are both seen."""
    assert len(left_out(Source("tests/test_x.py", line.format(way)))) == 1


def test_a_stand_in_is_found() -> None:
    """Arguments, calls and attributes are all seen."""
    text = "def test_x(monkey" + "patch): ...\nMagic" + "Mock()\n"
    assert len(stand_ins(Source("tests/test_x.py", text))) == 2
