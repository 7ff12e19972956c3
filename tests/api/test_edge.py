"""The edge over HTTP: every refusal, every header, on operations only the tests have."""

from __future__ import annotations

import base64
import gzip
import io
import json
import os
import re
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from hashlib import sha256
from pathlib import Path
from typing import Any

import orjson
import pytest
from flask import Flask
from flask.testing import FlaskClient
from werkzeug.serving import make_server
from werkzeug.test import TestResponse

from api import toy
from assignable.api import problems
from assignable.api.app import create_app
from assignable.api.observability import Log
from assignable.api.operations import documentation, health
from assignable.api.settings import BadSettings, Settings, described
from assignable.api.shedding import Slots

GOOD = {"data": {"values": [[2.51, 2.49], [2.48, None]]}}
LIMIT = 4096
PAGES = (health.register, documentation.register)


class Logged(io.BytesIO):
    def lines(self) -> list[dict[str, Any]]:
        return [json.loads(line) for line in self.getvalue().splitlines()]


@pytest.fixture(scope="module")
def log() -> Logged:
    return Logged()


@pytest.fixture(scope="module")
def app(log: Logged) -> Flask:
    settings = Settings(max_body_bytes=LIMIT, max_inflated_bytes=2 * LIMIT, slot_wait_seconds=0)
    return create_app(settings, operations=(*PAGES, toy.register), log=Log("requests", log))


@pytest.fixture
def client(app: Flask, log: Logged) -> FlaskClient:
    log.seek(0)
    log.truncate()
    return app.test_client()


def post(
    client: FlaskClient, body: bytes | dict[str, Any], path: str = "/v1/means", **kwargs: Any
) -> TestResponse:
    data = orjson.dumps(body) if isinstance(body, dict) else body
    return client.post(path, data=data, **{"content_type": "application/json", **kwargs})


def is_problem(answer: TestResponse, kind: problems.ProblemType) -> dict[str, Any]:
    """The members of a problem answer, which is right in everything all problems share."""
    assert answer.status_code == kind.status
    assert answer.content_type == problems.MEDIA_TYPE
    members = json.loads(answer.data)
    assert members["type"] == f"/problems/{kind.code}"
    assert members["title"] == kind.title
    assert members["status"] == kind.status
    assert members["request_id"] == answer.headers["X-Request-ID"]
    assert answer.headers["Cache-Control"] == "no-store"
    assert answer.headers["X-Content-Type-Options"] == "nosniff"
    return members


# What is taken ------------------------------------------------------------------------------------


def test_a_good_request(client: FlaskClient) -> None:
    answer = post(client, GOOD)
    assert answer.status_code == 200
    assert answer.content_type == "application/json"
    members = json.loads(answer.data)
    assert members["means"] == [2.5, 2.48]
    assert members["upper"] is None
    assert members["provenance"] == {
        "service": "assignable",
        "version": members["provenance"]["version"],
        "contract": "1.0.0",
        "method": "toy-means",
        "request_digest": "sha-256:" + sha256(orjson.dumps(GOOD)).hexdigest(),
    }
    assert answer.headers["Cache-Control"] == "no-store"
    assert answer.headers["X-Content-Type-Options"] == "nosniff"
    digest = base64.b64encode(sha256(answer.data).digest()).decode()
    assert answer.headers["Content-Digest"] == f"sha-256=:{digest}:"
    assert "ETag" not in answer.headers


def test_the_same_request_gives_the_same_bytes(client: FlaskClient) -> None:
    assert post(client, GOOD).data == post(client, GOOD).data


def test_gzip_gives_the_same_bytes(client: FlaskClient) -> None:
    packed = gzip.compress(orjson.dumps(GOOD))
    answer = post(client, packed, headers={"Content-Encoding": "gzip"})
    assert answer.data == post(client, GOOD).data


@pytest.mark.parametrize(
    "content_type", ["application/json", "Application/JSON", "application/json; charset=UTF-8"]
)
def test_json_by_other_spellings(client: FlaskClient, content_type: str) -> None:
    assert post(client, GOOD, content_type=content_type).status_code == 200


@pytest.mark.parametrize("accept", ["*/*", "application/*", "text/html, application/json;q=0.1", ""])
def test_accept_that_allows_json(client: FlaskClient, accept: str) -> None:
    assert post(client, GOOD, headers={"Accept": accept}).status_code == 200


def test_a_picture_has_its_own_media_type(client: FlaskClient) -> None:
    answer = post(client, GOOD, "/v1/means/picture", headers={"Accept": "image/svg+xml"})
    assert answer.status_code == 200
    assert answer.content_type.startswith("image/svg+xml")
    answer = post(client, GOOD, "/v1/means/picture", headers={"Accept": "application/json"})
    is_problem(answer, problems.NOT_ACCEPTABLE)


# What is refused ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "body",
    [
        b'{"data": {"values": [[NaN]]}}',
        b'{"data": {"values": [[1e999]]}}',
        b'{"data": {"values": [[1]]}, "data": {"values": [[2]]}}',
        b"[" * 100_000,
        b"\xef\xbb\xbf{}",
        b"\xff\xfe{",
        b"{",
        b"",
    ],
)
def test_what_is_not_json(app: Flask, body: bytes) -> None:
    large = create_app(Settings(), operations=(toy.register,), log=Log("off"))
    members = is_problem(post(large.test_client(), body), problems.NOT_JSON)
    assert len(members["errors"]) == 1


def test_a_repeated_key_is_named_with_line_and_column(client: FlaskClient) -> None:
    answer = post(client, b'{"data": {"values": [[1], [2]]},\n "data": {"values": [[2], [3]]}}')
    members = is_problem(answer, problems.NOT_JSON)
    assert members["detail"] == 'The key "data" is given twice in the same object. (Line 2, column 2.)'
    assert members["errors"] == [{"pointer": "#", "code": "repeated-key", "detail": members["detail"]}]


def test_a_body_that_breaks_the_contract(client: FlaskClient) -> None:
    answer = post(client, {"data": {"values": [[1, "2"], [True]]}, "multiple": 0, "dta": 1})
    members = is_problem(answer, problems.CONTRACT_VIOLATION)
    assert [(entry["pointer"], entry["code"]) for entry in members["errors"]] == [
        ("#/data/values/0/1", "not-a-number"),
        ("#/data/values/1/0", "not-a-number"),
        ("#/multiple", "too-small"),
        ("#/dta", "unknown-field"),
    ]


@pytest.mark.parametrize("body", [b"[]", b"1", b"null", b'"a"'])
def test_a_body_that_is_no_object(client: FlaskClient, body: bytes) -> None:
    members = is_problem(post(client, body), problems.CONTRACT_VIOLATION)
    assert members["errors"][0] == {
        "pointer": "#",
        "code": "not-an-object",
        "detail": "This must be a JSON object.",
    }


def test_a_key_of_half_a_character_is_answered(client: FlaskClient) -> None:
    members = is_problem(
        post(client, b'{"data": {"values": [[1], [2]]}, "\\ud800/~ ": 1}'), problems.CONTRACT_VIOLATION
    )
    assert members["errors"][0]["pointer"] == "#/%3F~1~0%20"


def test_what_cannot_be_computed(client: FlaskClient) -> None:
    members = is_problem(post(client, {"data": {"values": [[1]]}}), problems.NOT_COMPUTABLE)
    assert members["errors"] == [
        {"pointer": "#/data/values", "code": "too-few", "detail": "Two cars are needed."},
        {"pointer": "#/data/a~1b~0c%20d", "code": "odd-key", "detail": "A key that needs escaping."},
    ]


def test_a_document_of_another_origin(client: FlaskClient) -> None:
    members = is_problem(post(client, {**GOOD, "multiple": 9}), problems.DOCUMENT_MISMATCH)
    assert members["detail"] == "These are limits of another chart. (At #/limits.)"


@pytest.mark.parametrize("content_type", ["text/plain", "application/json; charset=latin-1", "", "text/json"])
def test_another_media_type(client: FlaskClient, content_type: str) -> None:
    answer = post(client, GOOD, content_type=content_type)
    is_problem(answer, problems.UNSUPPORTED_MEDIA_TYPE)
    assert answer.headers["Accept-Post"] == "application/json"


def test_an_accept_that_rules_json_out(client: FlaskClient) -> None:
    is_problem(post(client, GOOD, headers={"Accept": "text/html"}), problems.NOT_ACCEPTABLE)
    is_problem(post(client, GOOD, headers={"Accept": "application/json;q=0"}), problems.NOT_ACCEPTABLE)


@pytest.mark.parametrize("coding", ["br", "deflate", "gzip, gzip"])
def test_another_content_coding(client: FlaskClient, coding: str) -> None:
    answer = post(client, GOOD, headers={"Content-Encoding": coding})
    is_problem(answer, problems.UNSUPPORTED_CONTENT_ENCODING)
    assert answer.headers["Accept-Encoding"] == "gzip"


def test_a_body_over_the_limit(client: FlaskClient) -> None:
    padding = b" " * LIMIT
    members = is_problem(post(client, orjson.dumps(GOOD) + padding), problems.CONTENT_TOO_LARGE)
    assert str(LIMIT) in members["detail"]
    fits = orjson.dumps(GOOD).ljust(LIMIT)
    assert post(client, fits).status_code == 200


def test_a_gzip_body_that_inflates_over_the_limit(client: FlaskClient) -> None:
    bomb = gzip.compress(b" " * 2_000_000)
    assert len(bomb) < LIMIT
    members = is_problem(post(client, bomb, headers={"Content-Encoding": "gzip"}), problems.CONTENT_TOO_LARGE)
    assert str(2 * LIMIT) in members["detail"]


@pytest.mark.parametrize(
    "spoil", [lambda b: b[:-4], lambda b: b + b"x", lambda b: b"no gzip", lambda b: b * 2]
)
def test_a_gzip_body_that_is_none(client: FlaskClient, spoil: Any) -> None:
    packed = spoil(gzip.compress(orjson.dumps(GOOD)))
    is_problem(post(client, packed, headers={"Content-Encoding": "gzip"}), problems.NOT_JSON)


def test_an_unknown_path(client: FlaskClient) -> None:
    is_problem(client.get("/v1/nothing"), problems.NOT_FOUND)


def test_a_method_that_is_not_taken_keeps_allow(client: FlaskClient) -> None:
    answer = client.get("/v1/means")
    is_problem(answer, problems.METHOD_NOT_ALLOWED)
    assert set(answer.headers["Allow"].split(", ")) == {"POST", "OPTIONS"}


def test_a_fault_of_the_service_tells_nothing(client: FlaskClient, log: Logged) -> None:
    answer = post(client, GOOD, "/v1/fail")
    members = is_problem(answer, problems.INTERNAL)
    assert set(members) == {"type", "title", "status", "detail", "instance", "request_id"}
    assert b"2.51" not in answer.data
    assert b"Traceback" not in answer.data
    failure = next(line for line in log.lines() if line["event"] == "failure")
    assert failure["error"] == "ValueError"
    assert failure["request_id"] == members["request_id"]
    assert failure["operation_id"] == "fail"
    assert failure["where"][-1].endswith(" fail")
    assert "2.51" not in log.getvalue().decode()


def test_nan_is_never_answered(client: FlaskClient) -> None:
    told = is_problem(post(client, GOOD, "/v1/notfinite"), problems.NOT_COMPUTABLE)
    assert [entry["code"] for entry in told["errors"]] == ["out-of-scale"]


def test_busy_is_said_at_once(app: Flask) -> None:
    toy.BUSY.clear()
    toy.GO_ON.clear()
    first: list[TestResponse] = []
    at_work = threading.Thread(target=lambda: first.append(post(app.test_client(), GOOD, "/v1/wait")))
    at_work.start()
    try:
        assert toy.BUSY.wait(10)
        answer = post(app.test_client(), GOOD)
        is_problem(answer, problems.BUSY)
        assert answer.headers["Retry-After"] == "1"
        assert app.test_client().get("/health/ready").status_code == 200
        assert app.test_client().get("/health/live").status_code == 200
    finally:
        toy.GO_ON.set()
        at_work.join(10)
    assert first[0].status_code == 200
    assert post(app.test_client(), GOOD).status_code == 200


def test_a_place_that_is_given_back_in_time_is_taken() -> None:
    slots = Slots(1, wait_seconds=10)
    with slots:
        waiting = threading.Thread(target=lambda: slots.__enter__() or slots.__exit__(None, None, None))
        waiting.start()
        waiting.join(0.1)
        assert waiting.is_alive()
    waiting.join(5)
    assert not waiting.is_alive()
    short = Slots(1, wait_seconds=0.01)
    with short, pytest.raises(problems.Problem), short:
        pass


def test_a_refused_request_gives_its_place_back(client: FlaskClient) -> None:
    for _ in range(3):
        post(client, b"{")
        post(client, GOOD, "/v1/fail")
    assert post(client, GOOD).status_code == 200


# Request ids, traces, the log ---------------------------------------------------------------------


def test_a_request_id_is_echoed(client: FlaskClient) -> None:
    answer = post(client, GOOD, headers={"X-Request-ID": "line-3.batch_7"})
    assert answer.headers["X-Request-ID"] == "line-3.batch_7"
    members = is_problem(client.get("/nothing", headers={"X-Request-ID": "line-3"}), problems.NOT_FOUND)
    assert members["instance"] == "line-3"


@pytest.mark.parametrize("bad", ["a b", "x" * 129, "", "é", 'a"b', "a/b"])
def test_a_bad_request_id_is_replaced(client: FlaskClient, bad: str) -> None:
    answer = client.get("/nothing", headers={"X-Request-ID": bad})
    assert re.fullmatch(r"[0-9a-f]{8}-([0-9a-f]{4}-){3}[0-9a-f]{12}", answer.headers["X-Request-ID"])
    assert json.loads(answer.data)["instance"] == "urn:uuid:" + answer.headers["X-Request-ID"]


def test_the_log_has_one_line_a_request_and_no_data(client: FlaskClient, log: Logged) -> None:
    trace = "4bf92f3577b34da6a3ce929d0e0e4736"
    post(client, GOOD, headers={"traceparent": f"00-{trace}-00f067aa0ba902b7-01", "X-Request-ID": "r1"})
    client.get("/secret-path", headers={"traceparent": f"00-{'0' * 32}-00f067aa0ba902b7-01"})
    first, second = log.lines()
    assert first["request_id"] == "r1"
    assert first["trace_id"] == trace
    assert first["operation_id"] == "computeMeans"
    assert first["status"] == 200
    assert first["bytes_in"] == len(orjson.dumps(GOOD))
    assert first["bytes_out"] > 100
    assert second["status"] == 404
    assert second["trace_id"] is None
    assert b"secret-path" not in log.getvalue()
    assert b"2.51" not in log.getvalue()


def test_the_log_can_be_off() -> None:
    stream = Logged()
    for level, lines in (("off", 0), ("errors", 1), ("requests", 3)):
        app = create_app(Settings(), operations=(toy.register,), log=Log(level, stream))
        stream.seek(0)
        stream.truncate()
        post(app.test_client(), GOOD)
        post(app.test_client(), GOOD, "/v1/fail")
        assert len(stream.lines()) == lines


# GETs ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "path", ["/openapi.json", "/docs", "/", "/problems", "/problems/busy", "/v1/factors?n=5"]
)
def test_gets_have_a_strong_tag(client: FlaskClient, path: str) -> None:
    answer = client.get(path)
    assert answer.status_code == 200
    tag = answer.headers["ETag"]
    assert tag.startswith('"')
    assert re.search(r"max-age=\d+", answer.headers["Cache-Control"])
    assert "Content-Digest" in answer.headers
    for named in (tag, f'"other", {tag}', f"W/{tag}", "*"):
        again = client.get(path, headers={"If-None-Match": named})
        assert again.status_code == 304
        assert again.data == b""
        assert again.headers["ETag"] == tag
    assert client.get(path, headers={"If-None-Match": '"other"'}).status_code == 200


def test_head_and_options(client: FlaskClient) -> None:
    whole = client.get("/v1/factors?n=5")
    head = client.head("/v1/factors?n=5")
    assert head.status_code == 200
    assert head.data == b""
    assert head.headers["Content-Length"] == whole.headers["Content-Length"]
    options = client.options("/v1/means")
    assert options.status_code == 200
    assert set(options.headers["Allow"].split(", ")) == {"POST", "OPTIONS"}


@pytest.mark.parametrize(
    ("query", "parameters"),
    [
        ("", {"n": "required"}),
        ("?n=x", {"n": "not-an-integer"}),
        ("?n=1", {"n": "too-small"}),
        ("?n=2.5", {"n": "not-an-integer"}),
        ("?n=5&n=6", {"n": "repeated-parameter"}),
        ("?n=5&nam=x", {"nam": "unknown-field"}),
    ],
)
def test_a_query_is_checked_like_a_body(client: FlaskClient, query: str, parameters: dict[str, str]) -> None:
    members = is_problem(client.get("/v1/factors" + query), problems.CONTRACT_VIOLATION)
    assert {entry["parameter"]: entry["code"] for entry in members["errors"]} == parameters
    assert json.loads(client.get("/v1/factors?n=5&name=12").data) == {"n": 5}


def test_health(client: FlaskClient) -> None:
    for path in ("/health/live", "/health/ready"):
        answer = client.get(path)
        assert answer.status_code == 200
        assert json.loads(answer.data)["status"] == "pass"
        assert answer.headers["Cache-Control"] == "no-store"


def test_not_ready_when_the_numerics_are_wrong(client: FlaskClient, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(health, "self_test", lambda: False)
    is_problem(client.get("/health/ready"), problems.NOT_READY)
    assert client.get("/health/live").status_code == 200


def test_every_problem_has_a_page(client: FlaskClient) -> None:
    listing = client.get("/problems").get_data(as_text=True)
    for code, kind in problems.TYPES.items():
        page = client.get(kind.uri).get_data(as_text=True)
        assert f"<h1>{kind.title}</h1>" in page
        assert f'href="problems/{code}"' in listing
    is_problem(client.get("/problems/nothing"), problems.NOT_FOUND)


def test_the_reference_page_needs_no_network_and_no_inline_code(client: FlaskClient) -> None:
    answer = client.get("/docs")
    page = answer.get_data(as_text=True)
    policy = answer.headers["Content-Security-Policy"]
    assert "default-src 'none'" in policy
    assert "unsafe" not in policy
    assert "http" not in page.replace("https", "http").split("<body>")[0]
    assert not re.search(r"<script>|<style|style=|onload=", page)
    assert '<html lang="en-GB">' in page
    for source in re.findall(r'(?:src|href)="(docs/assets/[^"]+)"', page):
        asset = client.get("/" + source)
        assert asset.status_code == 200
        assert "immutable" in asset.headers["Cache-Control"]
        assert len(asset.data) > 100
    edition = re.search(r"docs/assets/([0-9a-f]+)/", page)
    assert edition
    for other in (
        f"{edition[1]}/LICENSE",
        f"{edition[1]}/../app.py",
        "0000/page.css",
        f"{edition[1]}/index.css",
    ):
        assert client.get(f"/docs/assets/{other}").status_code == 404


# Other origins ------------------------------------------------------------------------------------


def test_other_origins_are_off_by_default(client: FlaskClient) -> None:
    for answer in (
        post(client, GOOD, headers={"Origin": "https://line3.example"}),
        client.options(
            "/v1/means",
            headers={"Origin": "https://line3.example", "Access-Control-Request-Method": "POST"},
        ),
    ):
        assert not [name for name in dict(answer.headers) if name.startswith("Access-Control")]


def test_named_origins_only() -> None:
    settings = Settings(cors_origins=("https://line3.example",), log="off")
    client = create_app(settings, operations=(toy.register,)).test_client()
    answer = post(client, GOOD, headers={"Origin": "https://line3.example"})
    assert answer.headers["Access-Control-Allow-Origin"] == "https://line3.example"
    assert answer.headers["Vary"] == "Origin"
    asked = {"Origin": "https://line3.example", "Access-Control-Request-Method": "POST"}
    preflight = client.options("/v1/means", headers=asked)
    assert preflight.status_code == 204
    assert "POST" in preflight.headers["Access-Control-Allow-Methods"]
    for origin in ("https://line3.example.evil", "null", "http://line3.example"):
        answer = post(client, GOOD, headers={"Origin": origin})
        assert "Access-Control-Allow-Origin" not in answer.headers
        assert answer.headers["Vary"] == "Origin"


# Settings -----------------------------------------------------------------------------------------


def test_settings_come_from_the_environment() -> None:
    given = {
        "ASSIGNABLE_PORT": "9000",
        "ASSIGNABLE_SLOT_WAIT_SECONDS": "0.25",
        "ASSIGNABLE_CORS_ORIGINS": "https://a.example, http://b.example:8080",
        "PATH": "x",
    }
    settings = Settings.from_environment(given)
    assert settings.port == 9000
    assert settings.slot_wait_seconds == 0.25
    assert settings.cors_origins == ("https://a.example", "http://b.example:8080")
    assert settings.host == "127.0.0.1"


def test_bad_settings_are_all_named() -> None:
    given = {
        "ASSIGNABLE_PORT": "0",
        "ASSIGNABLE_WORKERS": "two",
        "ASSIGNABLE_SLOT_WAIT_SECONDS": "nan",
        "ASSIGNABLE_LOG": "loud",
        "ASSIGNABLE_CORS_ORIGINS": "*",
        "ASSIGNABLE_THREDS": "4",
    }
    with pytest.raises(BadSettings) as caught:
        Settings.from_environment(given)
    lines = str(caught.value).splitlines()
    assert [line.split(":")[0] for line in lines] == sorted(given)
    assert "did you mean ASSIGNABLE_THREADS?" in str(caught.value)


def test_every_setting_is_described() -> None:
    rows = described()
    assert len(rows) >= 10
    assert all(row.description.endswith(".") and row.variable.startswith("ASSIGNABLE_") for row in rows)


# Over a real socket -------------------------------------------------------------------------------


@contextmanager
def served(app: Flask) -> Iterator[int]:
    server = make_server("127.0.0.1", 0, app, threaded=True)
    thread = threading.Thread(target=server.serve_forever, daemon=True)
    thread.start()
    try:
        yield server.server_port
    finally:
        server.shutdown()
        thread.join(5)
        server.server_close()


def chunked(port: int, body: bytes, *, end: bytes = b"0\r\n\r\n") -> bytes:
    """The whole answer to a body sent in chunks, without a length."""
    with socket.create_connection(("127.0.0.1", port), timeout=10) as connection:
        connection.sendall(
            b"POST /v1/means HTTP/1.1\r\nHost: x\r\nContent-Type: application/json\r\n"
            b"Transfer-Encoding: chunked\r\nConnection: close\r\n\r\n"
        )
        try:
            for start in range(0, len(body), 1000):
                part = body[start : start + 1000]
                connection.sendall(f"{len(part):x}\r\n".encode() + part + b"\r\n")
            connection.sendall(end)
            connection.shutdown(socket.SHUT_WR)
        except OSError:
            pass  # refused before all was sent
        received = b""
        try:
            while part := connection.recv(65536):
                received += part
        except ConnectionResetError:
            pass
        return received


def test_a_chunked_body_is_whole_or_refused(app: Flask) -> None:
    body = orjson.dumps(GOOD)
    with served(app) as port:
        assert b" 200 " in chunked(port, body.ljust(LIMIT)).splitlines()[0]
        # A JSON document that is complete within the limit, with more after it: cut off, it would be taken.
        assert b" 413 " in chunked(port, body.ljust(LIMIT + 1)).splitlines()[0]
        assert b" 413 " in chunked(port, body.ljust(20 * LIMIT)).splitlines()[0]


def test_a_chunked_body_that_breaks_off_is_refused(app: Flask) -> None:
    with served(app) as port:
        answer = chunked(port, orjson.dumps(GOOD), end=b"")
        assert b" 200 " not in answer[:20]


def test_a_body_shorter_than_announced_is_refused(client: FlaskClient) -> None:
    body = orjson.dumps(GOOD)
    answer = post(client, body, environ_overrides={"CONTENT_LENGTH": str(len(body) + 1)})
    is_problem(answer, problems.BAD_REQUEST)


TOY_APP = """
from api import toy
from assignable.api.app import create_app
from assignable.api.settings import Settings
app = create_app(Settings(max_body_bytes=4096), operations=(toy.register,))
"""


def test_under_the_server_that_installations_run(tmp_path: Path) -> None:
    (tmp_path / "toy_app.py").write_text(TOY_APP)
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    tests = Path(__file__).resolve().parent.parent
    process = subprocess.Popen(
        [
            *(sys.executable, "-m", "gunicorn", "--bind", f"127.0.0.1:{port}", "--worker-class", "gthread"),
            *("--threads", "2", "--no-control-socket", "toy_app:app"),
        ],
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": f"{tests}{os.pathsep}{tmp_path}"},
        stderr=subprocess.PIPE,
    )
    try:
        body = orjson.dumps(GOOD)
        for _ in range(100):
            try:
                socket.create_connection(("127.0.0.1", port), timeout=1).close()
                break
            except OSError:
                time.sleep(0.1)
        assert b" 200 " in chunked(port, body.ljust(LIMIT)).splitlines()[0]
        assert b" 413 " in chunked(port, body.ljust(LIMIT + 1)).splitlines()[0]
        broken = chunked(port, body, end=b"")
        assert b" 200 " not in broken[:20]
    finally:
        process.send_signal(signal.SIGTERM)
        _, errors = process.communicate(timeout=15)
    assert b'"event":"request"' in errors
