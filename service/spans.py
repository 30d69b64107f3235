"""Traces: spans for bid, outcomes, lease and commit, sent nowhere unless the settings say where.

Spans carry counts, reasons and names of line items' methods; never ids of callers, tickets,
features or keys.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import AbstractContextManager, contextmanager, nullcontext
from typing import Protocol

from service.errors import Unsafe

Value = str | int | float | bool


class Span(Protocol):
    """One span under way."""

    def set_attribute(self, key: str, value: Value) -> None:
        """Say something of it."""


class Tracer(Protocol):
    """Whoever makes spans; OpenTelemetry's tracer is one."""

    def start_as_current_span(self, name: str) -> AbstractContextManager[Span]:
        """A span around a block, below the one that is open."""


_NONE: AbstractContextManager[Span | None] = nullcontext()
# One for the process, as the log is: whoever works in it has no say where spans go.
_chosen: list[Tracer] = []


def span(name: str) -> AbstractContextManager[Span | None]:
    """A span around a block; None when nobody asked for traces."""
    return _chosen[-1].start_as_current_span(f"bidkeel.{name}") if _chosen else _NONE


def note(span: Span | None, **attributes: Value | None) -> None:
    """Say something of a span, if there is one; what is None is left out."""
    if span is not None:
        for name, value in attributes.items():
            if value is not None:
                span.set_attribute(f"bidkeel.{name}", value)


@contextmanager
def tracing(tracer: Tracer) -> Iterator[None]:
    """Let this tracer make the spans of the block."""
    _chosen.append(tracer)
    try:
        yield
    finally:
        # Not the last one: two blocks may end in another order than they began in.
        _chosen.remove(tracer)


@contextmanager
def exported(endpoint: str) -> Iterator[None]:
    """
    Send the spans of the block to an OTLP endpoint over HTTP, in batches; nowhere if it is empty.

    Raises:
        Unsafe: The packages of the extra `traces` are not installed.
    """
    if not endpoint:
        yield
        return
    try:
        from opentelemetry.exporter.otlp.proto.http.trace_exporter import OTLPSpanExporter
        from opentelemetry.sdk.resources import Resource
        from opentelemetry.sdk.trace import TracerProvider
        from opentelemetry.sdk.trace.export import BatchSpanProcessor
    except ImportError as error:
        text = "BIDKEEL_TRACES_ENDPOINT needs the packages of the extra traces."
        raise Unsafe(text) from error
    provider = TracerProvider(resource=Resource.create({"service.name": "bidkeel"}))
    provider.add_span_processor(BatchSpanProcessor(OTLPSpanExporter(endpoint=endpoint)))
    try:
        with tracing(provider.get_tracer("bidkeel")):
            yield
    finally:
        # What is left in the last batch is sent before the process ends.
        provider.shutdown()
