"""What the service tells of itself: counts that are right, over all workers, and hold nobody's data."""

from __future__ import annotations

import fcntl
import http.client
import io
import json
import os
import re
import signal
import socket
import tempfile
import threading
import time
from collections.abc import Iterator, Mapping
from hashlib import sha256
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import orjson
import pytest
from flask import Flask
from flask.testing import FlaskClient
from prometheus_client.parser import text_string_to_metric_families
from werkzeug.test import TestResponse

from api import toy
from api.test_serving import PATIENCE_SECONDS, Running, running
from assignable.api import problems
from assignable.api.answers import CONTRACT_VERSION
from assignable.api.app import create_app
from assignable.api.contract import examples_directory
from assignable.api.metrics import BUCKETS, MOST_CODES, Metrics
from assignable.api.observability import Log
from assignable.api.operations import health
from assignable.api.problems import Entry, Problem
from assignable.api.settings import Settings
from assignable.api.tally import Tally, measured_in
from assignable.cli import watching
from contract import served

GOOD = {"data": {"values": [[2.51, 2.49], [2.48, None]]}}
KEY = "line-3-key"

Samples = dict[tuple[str, tuple[tuple[str, str], ...]], float]


def samples(text: str) -> Samples:
    """Every sample by its name and labels; each once."""
    found: Samples = {}
    for family in text_string_to_metric_families(text):
        for sample in family.samples:
            key = (sample.name, tuple(sorted(sample.labels.items())))
            assert key not in found, key
            found[key] = sample.value
    return found


def of(found: Samples, name: str, **labels: str) -> float:
    return found.get((f"assignable_{name}", tuple(sorted(labels.items()))), 0.0)


def made(**settings: Any) -> Flask:
    given = Settings(**{"slot_wait_seconds": 0, "log": "off", **settings})
    return create_app(given, operations=(health.register, toy.register))


@pytest.fixture
def app() -> Flask:
    return made()


@pytest.fixture
def client(app: Flask) -> FlaskClient:
    return app.test_client()


def post(client: FlaskClient, body: object, path: str = "/v1/means", **kwargs: Any) -> TestResponse:
    data = body if isinstance(body, bytes) else orjson.dumps(body)
    return client.post(path, data=data, buffered=True, **{"content_type": "application/json", **kwargs})


def scraped(client: FlaskClient, headers: Mapping[str, str] | None = None) -> Samples:
    answer = client.get("/metrics", headers=headers)
    assert answer.status_code == 200
    return samples(answer.get_data(as_text=True))


# One process -------------------------------------------------------------------------------------


def test_requests_problems_faults_and_values_are_counted(client: FlaskClient) -> None:
    for _ in range(3):
        assert post(client, GOOD).status_code == 200
    post(client, {"data": {"values": [[1, "2"], [True]]}, "dta": 1})
    post(client, b"{")
    post(client, GOOD, "/v1/fail")
    post(client, GOOD, headers={"Accept": "text/html"})
    client.get("/v1/nothing")
    found = scraped(client)
    mean = {"operation": "computeMeans"}
    assert of(found, "requests_total", **mean, status="200") == 3
    assert of(found, "requests_total", **mean, status="422") == 1
    assert of(found, "requests_total", **mean, status="400") == 1
    assert of(found, "requests_total", operation="fail", status="500") == 1
    assert of(found, "requests_total", operation="other", status="404") == 1
    assert of(found, "problems_total", **mean, problem="contract-violation") == 1
    assert of(found, "problems_total", **mean, problem="not-json") == 1
    assert of(found, "problems_total", **mean, problem="not-acceptable") == 1
    assert of(found, "problems_total", operation="fail", problem="internal") == 1
    assert of(found, "problems_total", operation="other", problem="not-found") == 1
    assert of(found, "faults_total", code="not-a-number") == 2
    assert of(found, "faults_total", code="unknown-field") == 1
    assert of(found, "values_total", **mean) == 12
    assert of(found, "values_total", operation="fail") == 0
    assert of(found, "request_duration_seconds_count", **mean) == 6
    assert 0 < of(found, "request_duration_seconds_sum", **mean) < 10
    assert of(found, "request_duration_seconds_bucket", **mean, le="+Inf") == 6
    (build,) = (dict(labels) for name, labels in found if name == "assignable_build_info")
    assert build == {"version": version("assignable"), "contract": CONTRACT_VERSION}
    # The scrape itself is over only after it is written.
    assert of(scraped(client), "requests_total", operation="getMetrics", status="200") == 1


def test_cautions_are_counted_where_answers_have_them() -> None:
    app = create_app(Settings(log="off"))
    client = app.test_client()
    answer = post(
        client, {"data": {"values": [[2.51, 2.49], [2.48, 2.52], [2.5, 2.47]]}}, "/v1/charts/xbar-r/limits"
    )
    codes = [caution["code"] for caution in json.loads(answer.data)["cautions"]]
    assert "few-subgroups" in codes
    found = scraped(client)
    for code in codes:
        assert of(found, "cautions_total", code=code) == codes.count(code)
    assert sum(value for (name, _), value in found.items() if name == "assignable_cautions_total") == len(
        codes
    )


def test_a_table_counts_as_its_values_do() -> None:
    client = create_app(Settings(log="off")).test_client()
    table = b"a,b\n2.51,2.49\n2.48,2.52\n2.5,2.47\n"
    answer = post(client, table, "/v1/charts/xbar-r/limits", content_type="text/csv")
    assert answer.status_code == 200, answer.text
    found = scraped(client)
    assert of(found, "values_total", operation="fitXbarRLimits") == 6
    assert of(found, "cautions_total", code="few-subgroups") == 1


def test_the_buckets_go_from_a_millisecond_to_ten_seconds(client: FlaskClient) -> None:
    post(client, GOOD)
    edges = [
        float(dict(labels)["le"])
        for name, labels in scraped(client)
        if name.endswith("_bucket") and ("operation", "computeMeans") in labels
    ]
    assert edges == [*BUCKETS, float("inf")]
    assert (BUCKETS[0], BUCKETS[-1]) == (0.001, 10.0)


def test_the_text_is_what_scrapers_read_and_keeps_the_conventions(client: FlaskClient) -> None:
    post(client, GOOD)
    answer = client.get("/metrics")
    assert answer.content_type == "text/plain"
    assert answer.headers["Cache-Control"] == "no-store"
    families = list(text_string_to_metric_families(answer.get_data(as_text=True)))
    assert len(families) >= 8
    for family in families:
        assert re.fullmatch(r"assignable_[a-z_]+", family.name)
        assert family.documentation.endswith(".")
        assert family.type in ("counter", "gauge", "histogram")
        for sample in family.samples:
            assert family.type != "counter" or sample.name.endswith("_total")
            assert not sample.name.endswith("_created")
    for accept in (
        "text/plain;version=0.0.4",
        "application/openmetrics-text;version=1.0.0;q=0.5,text/plain;version=0.0.4;q=0.3,*/*;q=0.1",
    ):
        assert client.get("/metrics", headers={"Accept": accept}).status_code == 200
    refused = client.get("/metrics", headers={"Accept": "text/plain;version=0.0.4;q=0"})
    assert refused.status_code == 406


def test_no_path_caller_or_value_becomes_a_label(client: FlaskClient) -> None:
    client.get("/secret/2.51")
    client.open("/v1/means", method="SECRET")
    post(client, GOOD, headers={"X-API-Key": "secret", "X-Request-ID": "secret", "User-Agent": "secret"})
    post(client, {"secret": 2.51, "data": {"values": [[2.51, "secret"]]}})
    text = client.get("/metrics").get_data(as_text=True)
    assert "secret" not in text
    assert "2.51" not in text
    known = {"operation", "status", "problem", "outcome", "code", "le", "version", "contract"}
    assert {name for _, labels in samples(text) for name, _ in labels} <= known


def test_codes_are_of_a_closed_set_and_bounded_even_if_they_were_not() -> None:
    metrics = Metrics(1)
    tally = Tally()
    tally.cautions = [f"code-{i}" for i in range(MOST_CODES + 50)]
    metrics.request("computeMeans", "200", 0.1, tally)
    found = samples(metrics.exposition().decode())
    counted = {
        labels: value for (name, labels), value in found.items() if name == "assignable_cautions_total"
    }
    assert len(counted) == MOST_CODES + 1
    assert counted[("code", "other"),] == 50


def test_places_are_told_and_the_scrape_needs_none(app: Flask) -> None:
    toy.BUSY.clear()
    toy.GO_ON.clear()
    at_work = threading.Thread(target=lambda: post(app.test_client(), GOOD, "/v1/wait"))
    at_work.start()
    try:
        assert toy.BUSY.wait(10)
        assert post(app.test_client(), GOOD).status_code == 503
        found = scraped(app.test_client())
        assert of(found, "compute_slots") == 1
        assert of(found, "compute_slots_busy") == 1
        assert of(found, "problems_total", operation="computeMeans", problem="busy") == 1
    finally:
        toy.GO_ON.set()
        at_work.join(10)
    post(app.test_client(), b"{")
    post(app.test_client(), GOOD, "/v1/fail")
    assert of(scraped(app.test_client()), "compute_slots_busy") == 0


def test_a_line_of_a_bulk_request_is_counted_by_its_own_operation() -> None:
    metrics = Metrics(1)
    good = Tally()
    good.values, good.cautions = 125, ("few-subgroups", "few-subgroups")
    bad = Tally()
    bad.problem = Problem(problems.NOT_COMPUTABLE, errors=(Entry("too-few", "Too few.", "#/data"),))
    metrics.line("judgeXbarR", good)
    metrics.line("judgeXbarR", good)
    metrics.line("judgeXbarR", bad)
    found = samples(metrics.exposition().decode())
    judge = {"operation": "judgeXbarR"}
    assert of(found, "bulk_lines_total", **judge, outcome="answered") == 2
    assert of(found, "bulk_lines_total", **judge, outcome="not-computable") == 1
    assert of(found, "values_total", **judge) == 250
    assert of(found, "cautions_total", code="few-subgroups") == 4
    assert of(found, "problems_total", **judge, problem="not-computable") == 1
    assert of(found, "faults_total", code="too-few") == 1
    assert of(found, "requests_total", **judge, status="200") == 0


def test_both_streams_count_their_lines() -> None:
    client = create_app(Settings(log="off")).test_client()
    data = {"values": [[2.51, 2.49, 2.5, 2.5, 2.52]]}
    limits = json.loads(post(client, BODY, "/v1/charts/xbar-r/limits").data)["limits"]
    before = scraped(client)
    judged = {"operation": "judgeXbarR", "body": {"limits": limits, "data": data}}
    lines = [
        judged,
        judged,
        {**judged, "body": {}},
        {"operation": "nobody", "body": {}},
        {"operation": "getMetrics"},
    ]
    bulk = {"content_type": "application/x-ndjson"}
    assert post(client, b"\n".join(map(orjson.dumps, lines)), "/v1/bulk", **bulk).data.count(b"\n") == 6
    opened = {"characteristic": "wall", "limits": limits}
    brought = {"characteristic": "wall", "data": data}
    lines = [opened, brought, brought, brought, {"characteristic": "wall", "data": {"values": [[True]]}}]
    answer = post(client, b"\n".join(map(orjson.dumps, lines)), "/v1/bulk/signals", **bulk)
    assert json.loads(answer.data.splitlines()[-1])["answered"] == 4
    found = scraped(client)
    judge = {"operation": "judgeXbarR"}
    assert of(found, "bulk_lines_total", **judge, outcome="answered") == 2 + 3
    assert of(found, "bulk_lines_total", **judge, outcome="contract-violation") == 2
    assert of(found, "bulk_lines_total", operation="other", outcome="contract-violation") == 2
    assert of(found, "bulk_lines_total", operation="judgeLines", outcome="answered") == 1
    assert of(found, "values_total", **judge) - of(before, "values_total", **judge) == 5 * 5
    assert of(found, "requests_total", operation="answerLines", status="200") == 1
    assert of(found, "requests_total", operation="judgeLines", status="200") == 1
    assert of(found, "compute_slots_busy") == 0


MEASURING = sorted(
    name
    for name, operation in served.operations().items()
    if operation.request is not None
    and {"data", "results", "sample", "characteristics"} & operation.request.fields.keys()
)


@pytest.mark.parametrize("operation_id", MEASURING)
def test_the_values_of_every_operation_that_takes_some_are_counted(operation_id: str) -> None:
    operation = served.operations()[operation_id]
    counts = []
    for name in operation.examples:
        assert operation.request is not None
        counts.append(measured_in(operation.request.load(served.example(name))))
    # A chart may be set up from standards alone, and a request may describe its data in words.
    assert any(counts) or not any("data" in served.example(name) for name in operation.examples)


def test_how_values_are_counted() -> None:
    def count(name: str) -> int:
        operation_id = next(one for one, example in served.examples() if example == name)
        request = served.operations()[operation_id].request
        assert request is not None
        return measured_in(request.load(served.example(name)))

    assert count("xbar-r-limits") == 25 * 5
    assert count("xbar-r-signals") == sum(map(len, served.example("xbar-r-signals")["data"]["values"]))
    batch = served.example("release-checks")["characteristics"]
    assert count("release-checks") == sum(
        np.size(one["results"]) + len(one.get("capability", {}).get("earlier", ())) for one in batch
    )


def test_off_is_off() -> None:
    app = made(metrics="off")
    client = app.test_client()
    assert post(client, GOOD).status_code == 200
    assert client.get("/metrics").status_code == 404
    document = json.loads(app.extensions["assignable.contract"].document())
    assert "/metrics" not in document["paths"]
    assert served.described("getMetrics")["responses"]["200"]["content"].keys() == {"text/plain"}


@pytest.mark.parametrize(("setting", "bare"), [("on", 401), ("open", 200)])
def test_who_may_read_it(tmp_path: Path, setting: str, bare: int) -> None:
    keys = tmp_path / "keys.json"
    keys.write_text(json.dumps({"line-3": sha256(KEY.encode()).hexdigest()}))
    app = made(metrics=setting, api_keys=str(keys))
    client = app.test_client()
    assert post(client, GOOD).status_code == 401
    assert client.get("/metrics").status_code == bare
    found = scraped(client, {"X-API-Key": KEY})
    assert of(found, "problems_total", operation="computeMeans", problem="not-authenticated") == 1
    entry = json.loads(app.extensions["assignable.contract"].document())["paths"]["/metrics"]["get"]
    assert ("security" in entry) == (bare == 401)


def test_the_log_tells_values_problem_and_version() -> None:
    stream = io.BytesIO()
    app = create_app(Settings(), operations=(toy.register,), log=Log("requests", stream))
    post(app.test_client(), GOOD)
    post(app.test_client(), b"{")
    good, bad = map(json.loads, stream.getvalue().splitlines())
    assert (good["values"], good["problem"]) == (4, None)
    assert (bad["values"], bad["problem"]) == (0, "not-json")
    assert good["version"] == bad["version"] != ""


# Several processes --------------------------------------------------------------------------------


def text_of(server: Running) -> str:
    connection = http.client.HTTPConnection("127.0.0.1", server.port, timeout=PATIENCE_SECONDS)
    try:
        connection.request("GET", "/metrics")
        response = connection.getresponse()
        assert response.status == 200
        return response.read().decode()
    finally:
        connection.close()


def folders() -> set[Path]:
    return set(Path(watching.memory() or tempfile.gettempdir()).glob("assignable-metrics-*"))


@pytest.fixture(scope="module")
def server() -> Iterator[Running]:
    with running("--workers", "3", ASSIGNABLE_LOG="off", ASSIGNABLE_SLOT_WAIT_SECONDS="20") as started:
        yield started


BODY = (examples_directory() / "xbar-r-limits.request.json").read_bytes()
MAIN = {"operation": "fitXbarRLimits"}


def load(server: Running, callers: int, each: int) -> None:
    def call() -> None:
        for _ in range(each):
            assert server.call("POST", "/v1/charts/xbar-r/limits", BODY)[0] == 200

    threads = [threading.Thread(target=call) for _ in range(callers)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(PATIENCE_SECONDS)


def workers_in(folder: Path) -> set[int]:
    return {
        int(found[1])
        for path in folder.iterdir()
        if (found := re.fullmatch(r"counter_([1-9]\d*)\.db", path.name))
    }


def test_sums_are_exact_over_workers_and_over_their_deaths(server: Running) -> None:
    (folder,) = (found for found in folders() if _is_of(found, server.process.pid))
    assert folder.stat().st_mode & 0o777 == 0o700
    load(server, 6, 20)
    assert server.call("POST", "/v1/charts/xbar-r/limits", b"{")[0] == 400
    expected = 120
    for killed in range(3):
        found = samples(text_of(server))
        assert of(found, "requests_total", **MAIN, status="200") == expected
        assert of(found, "requests_total", **MAIN, status="400") == 1
        assert of(found, "values_total", **MAIN) == 125 * expected
        assert of(found, "request_duration_seconds_count", **MAIN) == expected + 1
        assert of(found, "request_duration_seconds_bucket", **MAIN, le="+Inf") == expected + 1
        assert of(found, "problems_total", **MAIN, problem="not-json") == 1
        assert of(found, "compute_slots") == 3
        assert of(found, "compute_slots_busy") == 0
        assert len(workers_in(folder)) == 3
        victim = min(workers_in(folder))
        os.kill(victim, signal.SIGKILL)
        until = time.monotonic() + PATIENCE_SECONDS
        while victim in workers_in(folder) or len(workers_in(folder)) < 3:
            assert time.monotonic() < until, killed
            time.sleep(0.05)
        load(server, 2, 5)
        expected += 10
    # Three of each that lives, two of all that died, the one of the server itself, and two locks.
    assert len(list(folder.iterdir())) <= 3 * 3 + 2 + 1 + 2


def _is_of(folder: Path, pid: int) -> bool:
    return (folder / f"gauge_livesum_{pid}.db").exists()


def test_what_cannot_be_read_is_counted_too(server: Running) -> None:
    other = {"operation": "other", "status": "400"}
    before = of(samples(text_of(server)), "requests_total", **other)
    with socket.create_connection(("127.0.0.1", server.port), timeout=PATIENCE_SECONDS) as client:
        client.sendall(b"NOT HTTP\r\n\r\n")
        assert b" 400 " in client.recv(1000)
    assert of(samples(text_of(server)), "requests_total", **other) == before + 1


def test_the_scrape_answers_under_load(server: Running) -> None:
    heavy = json.dumps(
        {"data": {"values": [[2.5 + 0.001 * (i * j % 7) for j in range(5)] for i in range(20_000)]}}
    ).encode()
    stop = threading.Event()

    def keep_busy() -> None:
        while not stop.is_set():
            server.call("POST", "/v1/charts/xbar-r/limits", heavy)

    threads = [threading.Thread(target=keep_busy) for _ in range(4)]
    for thread in threads:
        thread.start()
    try:
        busiest = 0.0
        for _ in range(10):
            began = time.monotonic()
            found = samples(text_of(server))
            assert time.monotonic() - began < 10
            busiest = max(busiest, of(found, "compute_slots_busy"))
    finally:
        stop.set()
        for thread in threads:
            thread.join(PATIENCE_SECONDS)
    assert 1 <= busiest <= 3
    assert of(samples(text_of(server)), "compute_slots_busy") == 0


def test_the_folder_goes_with_the_server() -> None:
    with running("--workers", "2", ASSIGNABLE_LOG="errors") as server:
        (folder,) = (found for found in folders() if _is_of(found, server.process.pid))
        text_of(server)
        status, out, errors = server.stop()
        assert not folder.exists()
    assert (status, out) == (0, "")
    assert all(json.loads(line)["event"] == "server" for line in errors.splitlines()), errors


def test_what_a_killed_server_left_is_removed_by_the_next_and_nothing_else(server: Running) -> None:
    with running("--workers", "1", ASSIGNABLE_LOG="off") as killed:
        (left,) = (found for found in folders() if _is_of(found, killed.process.pid))
        killed.process.kill()
        killed.process.wait(PATIENCE_SECONDS)
    until = time.monotonic() + PATIENCE_SECONDS
    while _is_held(left):  # until its worker has noticed
        assert time.monotonic() < until
        time.sleep(0.05)
    assert left.is_dir()
    with running("--workers", "1", ASSIGNABLE_LOG="off"):
        assert not left.exists()
    assert of(samples(text_of(server)), "compute_slots") == 3
    assert [found for found in folders() if _is_of(found, server.process.pid)]


def _is_held(folder: Path) -> bool:
    with (folder / "alive").open("rb") as alive:
        try:
            fcntl.flock(alive, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            return True
    return False


def test_without_metrics_there_is_no_folder() -> None:
    with running("--workers", "1", ASSIGNABLE_LOG="off", ASSIGNABLE_METRICS="off") as server:
        assert server.call("GET", "/metrics")[0] == 404
        assert not [found for found in folders() if _is_of(found, server.process.pid)]
        assert server.call("POST", "/v1/charts/xbar-r/limits", BODY)[0] == 200


def test_a_process_that_cannot_keep_counts_computes_all_the_same(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    app = made()
    metrics = app.extensions["assignable.contract"].metrics
    (tmp_path / "file").touch()
    monkeypatch.setattr(metrics, "_folder", str(tmp_path / "file" / "folder"))
    metrics.begin()
    assert post(app.test_client(), GOOD).status_code == 200
    monkeypatch.setattr(metrics, "_folder", None)
    assert of(scraped(app.test_client()), "values_total", operation="computeMeans") == 0
