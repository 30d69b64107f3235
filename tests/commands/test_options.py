"""A wrong option is refused with a sentence before anything starts."""

from __future__ import annotations

import argparse

import pytest

from service.commands import bench_real, demo, options


@pytest.mark.parametrize("text", ["0", "-5", "1.5", "", "many", "²"])
def test_what_is_no_count_is_refused(text: str) -> None:
    """A count begins at one."""
    with pytest.raises(argparse.ArgumentTypeError, match="above 0"):
        options.count(text)


@pytest.mark.parametrize("text", ["-1", "1.5", "", "x", "²"])
def test_what_is_no_seed_is_refused(text: str) -> None:
    """A seed may be nought, but not below."""
    with pytest.raises(argparse.ArgumentTypeError, match="at least 0"):
        options.seed(text)


def test_numbers_are_read() -> None:
    """Both give whole numbers."""
    assert (options.count("24000"), options.seed("0")) == (24_000, 0)


def test_the_demo_without_options_is_the_one_described() -> None:
    """At least 20,000 auctions, a fixed seed, a table, and an end."""
    parser = argparse.ArgumentParser()
    demo.add_arguments(parser)
    read = parser.parse_args([])
    assert (read.auctions, read.seed, read.json, read.keep_serving) == (24_000, 7, False, False)


def test_the_bench_without_options_plays_everything() -> None:
    """No limit, a fixed seed."""
    parser = argparse.ArgumentParser()
    bench_real.add_arguments(parser)
    read = parser.parse_args([])
    assert (read.limit, read.seed, read.json) == (None, 7, False)
