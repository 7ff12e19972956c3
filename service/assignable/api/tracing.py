"""A span for each request, where OpenTelemetry is installed (the extra ``otel``) and its environment asks for one.

A layer of WSGI of its own, on the stable API alone. Attributes are the operation, the status, the problem's
code, the request's id and numbers of values: no path, no header, no measurement. Imported only where spans
are asked for; the exporter's thread is started where the layer is made, so after a fork.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Mapping
from importlib.metadata import entry_points
from threading import Thread
from typing import Any

from opentelemetry.sdk.resources import OTELResourceDetector, Resource
from opentelemetry.sdk.trace import TracerProvider
from opentelemetry.sdk.trace.export import BatchSpanProcessor, SpanExporter
from opentelemetry.trace import Span, SpanKind, Status, StatusCode, format_trace_id
from opentelemetry.trace.propagation.tracecontext import TraceContextTextMapPropagator

from .answers import service_version
from .contract import OPERATION, REQUEST_ID
from .observability import TRACE_ID, Environ, StartResponse, Streamed, method_of
from .settings import BadSettings
from .tally import TALLY

LAST_SECONDS = 5  # for the last spans to get away

_GROUP = "opentelemetry_traces_exporter"
_OURS = "otlp_proto_http"  # what the extra installs
_HEADERS = (("traceparent", "HTTP_TRACEPARENT"), ("tracestate", "HTTP_TRACESTATE"))


def exporters(environment: Mapping[str, str]) -> tuple[Callable[[], SpanExporter], ...]:
    """What makes the exporters that ``OTEL_TRACES_EXPORTER`` names, OTLP over HTTP unless it names others.

    They read the rest of their settings from the environment themselves. Raises :class:`BadSettings`.
    """
    names = [name.strip() for name in environment.get("OTEL_TRACES_EXPORTER", "").split(",") if name.strip()]
    protocol = environment.get("OTEL_EXPORTER_OTLP_TRACES_PROTOCOL") or environment.get(
        "OTEL_EXPORTER_OTLP_PROTOCOL", ""
    )
    otlp = "otlp_proto_grpc" if protocol == "grpc" else _OURS
    found = []
    for name in names or ["otlp"]:
        known = tuple(entry_points(group=_GROUP, name=otlp if name == "otlp" else name))
        if not known:
            there = ", ".join(sorted({"otlp", *(entry.name for entry in entry_points(group=_GROUP))}))
            by = f"{name} by {protocol}" if name == "otlp" and protocol else name
            raise BadSettings(f"OTEL_TRACES_EXPORTER: no exporter is installed for {by}; there are {there}.")
        found.append(known[0].load())
    return tuple(found)


def provider(made: Iterable[SpanExporter]) -> TracerProvider:
    """What makes spans and hands them to these exporters, in batches from a thread of its own."""
    own = Resource.create({"service.name": "assignable", "service.version": service_version()})
    found = TracerProvider(
        resource=own.merge(OTELResourceDetector().detect()),  # the environment has the last word
        shutdown_on_exit=False,
    )
    for exporter in made:
        found.add_span_processor(BatchSpanProcessor(exporter))
    return found


class Traced:
    """The WSGI application with a span around each request."""

    def __init__(
        self, inner: Callable[[Environ, StartResponse], Iterable[bytes]], provider: TracerProvider
    ) -> None:
        self._inner = inner
        self._provider = provider
        self._tracer = provider.get_tracer("assignable", service_version())
        self._propagator = TraceContextTextMapPropagator()

    def __call__(self, environ: Environ, start_response: StartResponse) -> Iterable[bytes]:
        carrier = {name: environ[key] for name, key in _HEADERS if key in environ}
        method = method_of(environ)
        span = self._tracer.start_span(
            method,
            context=self._propagator.extract(carrier),
            kind=SpanKind.SERVER,
            attributes={"http.request.method": method},
        )
        environ[TRACE_ID] = format_trace_id(span.get_span_context().trace_id)
        seen = [""]

        def start(status: str, headers: list[tuple[str, str]], exc_info: Any = None) -> Any:
            seen[0] = status
            return start_response(status, headers, exc_info)

        try:
            answer = self._inner(environ, start)
        except BaseException:
            _end(span, environ, "500")
            raise
        return Streamed(answer, lambda _: _end(span, environ, seen[0]))

    def close(self) -> None:
        """Hands over the spans there are, as far as that can be done soon: a stopping server is waited for."""
        closing = Thread(target=self._provider.shutdown, daemon=True)
        closing.start()
        closing.join(LAST_SECONDS)


def _end(span: Span, environ: Environ, status: str) -> None:
    if span.is_recording():
        code = int(status[:3]) if status else 500
        span.set_attribute("http.response.status_code", code)
        if (own_id := environ.get(REQUEST_ID)) is not None:
            span.set_attribute("assignable.request_id", own_id)
        if (operation := environ.get(OPERATION)) is not None:
            span.update_name(operation)
            span.set_attribute("assignable.operation_id", operation)
        if (tally := environ.get(TALLY)) is not None:
            span.set_attribute("assignable.values", tally.values)
            if tally.problem is not None:
                span.set_attribute("error.type", tally.problem.kind.code)
        if code >= 500:
            span.set_status(Status(StatusCode.ERROR))
    span.end()


def from_environment(inner: Callable[[Environ, StartResponse], Iterable[bytes]]) -> Traced:
    """The layer that this process's environment asks for. Raises :class:`BadSettings`."""
    return Traced(inner, provider(make() for make in exporters(os.environ)))
