"""The numbers of a crew in the text form that Prometheus reads, added up over its processes."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from prometheus_client import CollectorRegistry, generate_latest
from prometheus_client.core import (
    CounterMetricFamily,
    GaugeMetricFamily,
    HistogramMetricFamily,
    Metric,
)
from prometheus_client.exposition import CONTENT_TYPE_LATEST
from prometheus_client.registry import Collector

from service.metrics.board import Board
from service.metrics.ledger import families
from service.metrics.series import BUCKETS, COUNTERS, DURATION, DUTY, GAUGES, PLACES, Series
from service.metrics.tally import NANOS

PREFIX = "bidkeel_"
MEDIA_TYPE = CONTENT_TYPE_LATEST


class Exposition(Collector):
    """
    Tells what stands on a board.

    Args:
        build: What this release is, as labels.
    """

    def __init__(self, board: Board, build: Mapping[str, str]) -> None:
        self._board, self._build = board, dict(build)
        self._registry = CollectorRegistry()
        # Without a look at it first, for nothing may stand there yet.
        self._registry.register(self)

    def text(self) -> bytes:
        """Everything, as one scrape reads it."""
        return generate_latest(self._registry)

    def describe(self) -> Iterator[Metric]:
        """Nothing: every name is ours, so there is nothing that it could collide with."""
        return iter(())

    def collect(self) -> Iterator[Metric]:
        """Each family once, with a value for every combination of labels."""
        rows = self._board.read()
        total = [sum(column) for column in zip(*rows, strict=True)]
        for series in COUNTERS:
            yield _counter(series, total)
        yield _histogram(total)
        for series in (*GAUGES, DUTY):
            yield _gauge(series, rows)
        info = GaugeMetricFamily(f"{PREFIX}build_info", "What runs.", labels=list(self._build))
        info.add_metric(list(self._build.values()), 1)
        yield info
        yield from families(PREFIX, self._board.page())


def process_names(rows: int) -> list[str]:
    """What the rows of a board belong to: workers in their places, and the clerk if apart."""
    # Alone, one process does everything, the clerk's work included.
    if rows == 1:
        return ["worker-0"]
    return [*(f"worker-{place}" for place in range(rows - 1)), "clerk"]


def _counter(series: Series, total: list[int]) -> Metric:
    labels = [name for name, _ in series.labels]
    family = CounterMetricFamily(PREFIX + series.name, series.help, labels=labels)
    for key in series.keys():
        family.add_metric(list(key[1:]), total[PLACES[key]] * series.scale)
    return family


def _gauge(series: Series, rows: list[list[int]]) -> Metric:
    labels = ["process", *(name for name, _ in series.labels)]
    family = GaugeMetricFamily(f"{PREFIX}process_{series.name}", series.help, labels=labels)
    for process, row in zip(process_names(len(rows)), rows, strict=True):
        for key in series.keys():
            # A duty that is not this process's has never been done; saying 1970 would alarm.
            if series is not DUTY or row[PLACES[key]]:
                value = round(row[PLACES[key]] * series.scale, 6)
                family.add_metric([process, *key[1:]], value)
    return family


def _histogram(total: list[int]) -> Metric:
    buckets, seen = list[Any](), 0
    for bound in BUCKETS[:-1]:
        seen += total[PLACES[(DURATION.name, bound)]]
        buckets.append((bound, seen))
    whole = total[PLACES[(DURATION.name, "sum")]] / NANOS
    family = HistogramMetricFamily(PREFIX + DURATION.name, DURATION.help)
    family.add_metric([], buckets, whole)
    return family
