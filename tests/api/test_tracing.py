"""Spans: one a request, in the caller's trace, with nothing of the caller's. Without the extra: test_watching.py."""

from __future__ import annotations

import json
import os
import subprocess
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any

import orjson
import pytest
from flask import Flask

from api import toy
from api.test_serving import COMMAND, PATIENCE_SECONDS, PLAIN, example, free_port, running
from assignable.api.app import create_app
from assignable.api.observability import Log
from assignable.api.settings import BadSettings, Settings

GOOD = {"data": {"values": [[2.51, 2.49], [2.48, None]]}}
TRACE, PARENT = "4bf92f3577b34da6a3ce929d0e0e4736", "00f067aa0ba902b7"
SAMPLED = {"traceparent": f"00-{TRACE}-{PARENT}-01"}
ENDPOINT = "OTEL_EXPORTER_OTLP_ENDPOINT"


sdk = pytest.importorskip("opentelemetry.sdk.trace", reason="the extra otel is not installed")
pytest.importorskip("opentelemetry.exporter.otlp.proto.http", reason="the extra otel is not installed")

from opentelemetry.proto.collector.trace.v1.trace_service_pb2 import ExportTraceServiceRequest  # noqa: E402
from opentelemetry.sdk.trace.export import SimpleSpanProcessor  # noqa: E402
from opentelemetry.sdk.trace.export.in_memory_span_exporter import InMemorySpanExporter  # noqa: E402
from opentelemetry.trace import SpanKind, StatusCode  # noqa: E402

from assignable.api import tracing  # noqa: E402


class Lines:
    """A log that keeps what is written."""

    def __init__(self) -> None:
        self.written: list[dict[str, Any]] = []

    def write(self, line: bytes) -> None:
        self.written.append(json.loads(line))

    def flush(self) -> None:
        pass


@pytest.fixture
def lines() -> Lines:
    return Lines()


@pytest.fixture
def kept() -> InMemorySpanExporter:
    return InMemorySpanExporter()


@pytest.fixture
def app(kept: InMemorySpanExporter, lines: Lines) -> Iterator[Flask]:
    log = Log("requests", lines)  # type: ignore[arg-type]
    found = create_app(Settings(slot_wait_seconds=0), operations=(toy.register,), log=log)
    provider = sdk.TracerProvider()
    provider.add_span_processor(SimpleSpanProcessor(kept))
    traced = found.wsgi_app = tracing.Traced(found.wsgi_app, provider)  # type: ignore[method-assign]
    yield found
    traced.close()


def post(app: Flask, body: object, path: str = "/v1/means", **headers: str) -> int:
    data = body if isinstance(body, bytes) else orjson.dumps(body)
    with app.test_client().post(
        path, data=data, content_type="application/json", headers=headers, buffered=True
    ) as answer:
        return answer.status_code


def test_a_span_is_in_the_trace_of_the_caller(app: Flask, kept: InMemorySpanExporter, lines: Lines) -> None:
    assert post(app, GOOD, **SAMPLED, **{"X-Request-ID": "r1", "tracestate": "line=3"}) == 200
    (span,) = kept.get_finished_spans()
    assert span.name == "computeMeans"
    assert span.kind is SpanKind.SERVER
    assert f"{span.context.trace_id:032x}" == TRACE
    assert f"{span.parent.span_id:016x}" == PARENT
    assert span.context.trace_state.to_header() == "line=3"
    assert dict(span.attributes) == {
        "http.request.method": "POST",
        "http.response.status_code": 200,
        "assignable.request_id": "r1",
        "assignable.operation_id": "computeMeans",
        "assignable.values": 4,
    }
    assert span.end_time > span.start_time
    assert [line["trace_id"] for line in lines.written] == [TRACE]


def test_without_a_trace_one_begins_and_the_log_names_it(
    app: Flask, kept: InMemorySpanExporter, lines: Lines
) -> None:
    post(app, GOOD)
    post(app, GOOD, traceparent=f"00-{'0' * 32}-{PARENT}-01")
    first, second = kept.get_finished_spans()
    assert first.parent is None
    assert second.parent is None
    assert first.context.trace_id != second.context.trace_id
    assert [line["trace_id"] for line in lines.written] == [
        f"{span.context.trace_id:032x}" for span in (first, second)
    ]


def test_a_caller_who_does_not_sample_gets_no_span(app: Flask, kept: InMemorySpanExporter) -> None:
    assert post(app, GOOD, traceparent=f"00-{TRACE}-{PARENT}-00") == 200
    assert kept.get_finished_spans() == ()


def test_problems_are_told_by_code_and_only_the_services_own_faults_are_errors(
    app: Flask, kept: InMemorySpanExporter
) -> None:
    assert post(app, b"{") == 400
    assert post(app, GOOD, "/v1/fail") == 500
    assert post(app, GOOD, "/v1/nothing") == 404
    bad, failed, unknown = kept.get_finished_spans()
    assert (bad.attributes["error.type"], bad.status.status_code) == ("not-json", StatusCode.UNSET)
    assert (failed.attributes["error.type"], failed.status.status_code) == ("internal", StatusCode.ERROR)
    assert (unknown.name, unknown.attributes["error.type"]) == ("POST", "not-found")
    assert not failed.events  # an exception's message may quote data


def test_nothing_of_the_callers_is_in_a_span(app: Flask, kept: InMemorySpanExporter) -> None:
    secret = {"X-API-Key": "secret", "Authorization": "Bearer secret", "User-Agent": "secret"}
    post(app, {"secret": 2.51, "data": {"values": [[2.51, "secret"]]}}, **secret)
    post(app, GOOD, "/secret/2.51?secret=2.51", **secret)
    app.test_client().open("/v1/means", method="SECRET").close()
    for span in kept.get_finished_spans():
        told = span.to_json().lower()
        assert "secret" not in told
        assert "2.51" not in told
    assert len(kept.get_finished_spans()) == 3


def test_exporters_are_those_of_the_standard_variables() -> None:
    otlp, console = tracing.exporters({"OTEL_TRACES_EXPORTER": "otlp, console"})
    assert (otlp.__name__, console.__name__) == ("OTLPSpanExporter", "ConsoleSpanExporter")
    assert tracing.exporters({ENDPOINT: "http://127.0.0.1:4318"}) == (otlp,)
    for environment in (
        {"OTEL_TRACES_EXPORTER": "nobody"},
        {ENDPOINT: "http://127.0.0.1:4317", "OTEL_EXPORTER_OTLP_PROTOCOL": "grpc"},
    ):
        with pytest.raises(BadSettings, match="OTEL_TRACES_EXPORTER: no exporter is installed for"):
            tracing.exporters(environment)


@pytest.mark.parametrize(
    ("environment", "name"),
    [({}, "assignable"), ({"OTEL_SERVICE_NAME": "line-3"}, "line-3")],
)
def test_the_service_is_named(
    environment: dict[str, str], name: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.delenv("OTEL_SERVICE_NAME", raising=False)
    for variable, value in environment.items():
        monkeypatch.setenv(variable, value)
    attributes = tracing.provider(()).resource.attributes
    assert attributes["service.name"] == name
    assert attributes["service.version"]


# The real server, a real collector ------------------------------------------------------------------------


@contextmanager
def collector() -> Iterator[tuple[int, list[Any]]]:
    """Takes OTLP over HTTP; its port, and the spans that came, each with its resource's attributes."""
    came: list[Any] = []

    class Taking(BaseHTTPRequestHandler):
        def do_POST(self) -> None:
            assert self.path == "/v1/traces"
            assert self.headers["Content-Type"] == "application/x-protobuf"
            sent = ExportTraceServiceRequest.FromString(self.rfile.read(int(self.headers["Content-Length"])))
            for of_resource in sent.resource_spans:
                resource = {one.key: one.value.string_value for one in of_resource.resource.attributes}
                for of_scope in of_resource.scope_spans:
                    came.extend((resource, span) for span in of_scope.spans)
            self.send_response(200)
            self.send_header("Content-Length", "0")
            self.end_headers()

        def log_message(self, *_: object) -> None:
            pass

    server = ThreadingHTTPServer(("127.0.0.1", 0), Taking)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    try:
        yield server.server_address[1], came
    finally:
        server.shutdown()
        thread.join(PATIENCE_SECONDS)
        server.server_close()


def test_spans_of_all_workers_reach_a_collector() -> None:
    with (
        collector() as (port, came),
        running(
            *("--workers", "2"),
            ASSIGNABLE_LOG="errors",
            OTEL_EXPORTER_OTLP_ENDPOINT=f"http://127.0.0.1:{port}",
            OTEL_RESOURCE_ATTRIBUTES="deployment.environment.name=kiln",
            OTEL_BSP_SCHEDULE_DELAY="200",
            NO_PROXY="127.0.0.1",
        ) as server,
    ):
        body = example("xbar-r-limits")
        for _ in range(10):
            assert server.call("POST", "/v1/charts/xbar-r/limits", body)[0] == 200
        until = time.monotonic() + PATIENCE_SECONDS
        while not any(span.name == "fitXbarRLimits" for _, span in came):  # while it runs, not at its end
            assert time.monotonic() < until
            time.sleep(0.05)
        assert server.call("POST", "/v1/charts/xbar-r/limits", b"{")[0] == 400
        status, _, errors = server.stop()  # what is not yet sent is sent now
    assert (status, "Traceback" in errors) == (0, False), errors
    fitted = [(resource, span) for resource, span in came if span.name == "fitXbarRLimits"]
    assert len(fitted) == 11
    assert len({span.span_id for _, span in fitted}) == 11
    for resource, span in fitted:
        assert resource["service.name"] == "assignable"
        assert resource["deployment.environment.name"] == "kiln"
        found = {one.key: one.value for one in span.attributes}
        assert found["assignable.values"].int_value in (0, 125)
        assert found["http.response.status_code"].int_value in (200, 400)


def test_a_collector_that_is_not_there_harms_nobody() -> None:
    with running(
        *("--workers", "1"),
        ASSIGNABLE_LOG="errors",
        OTEL_EXPORTER_OTLP_ENDPOINT=f"http://127.0.0.1:{free_port()}",
        OTEL_BSP_SCHEDULE_DELAY="100",
        NO_PROXY="127.0.0.1",
    ) as server:
        for _ in range(5):
            assert server.call("POST", "/v1/charts/xbar-r/limits", example("xbar-r-limits"))[0] == 200
        time.sleep(0.5)
        began = time.monotonic()
        status, out, errors = server.stop()
        assert time.monotonic() - began < 15  # far from the half minute that the library would take
    assert (status, out) == (0, "")
    assert all(json.loads(line)["event"] == "server" for line in errors.splitlines()), errors


def test_an_exporter_that_is_not_there_is_told_at_the_start() -> None:
    told = subprocess.run(
        [*COMMAND, "serve", "--port", str(free_port())],
        env={**PLAIN, "OTEL_TRACES_EXPORTER": "nobody"},
        capture_output=True,
        text=True,
        timeout=PATIENCE_SECONDS,
        check=False,
    )
    assert told.returncode == 2
    assert "no exporter is installed for nobody" in told.stderr
    assert "Traceback" not in told.stderr
    assert "OTEL_TRACES_EXPORTER" not in os.environ
