"""The service as it is run: the real command, real sockets, real signals."""

from __future__ import annotations

import hashlib
import http.client
import json
import os
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from assignable.api.contract import examples_directory
from assignable.api.problems import TYPES
from assignable.api.settings import BadSettings, Settings
from assignable.cli.demonstration import STEPS
from assignable.cli.serving import CannotServe, options, settings_from

PATIENCE_SECONDS = 30
COMMAND = (sys.executable, "-W", "error", "-m", "assignable.cli")
PLAIN = {name: value for name, value in os.environ.items() if not name.startswith("ASSIGNABLE_")}


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port


@dataclass
class Running:
    process: subprocess.Popen[str]
    port: int

    def stop(self) -> tuple[int, str, str]:
        """Status, standard output and error after SIGTERM."""
        self.process.send_signal(signal.SIGTERM)
        out, errors = self.process.communicate(timeout=PATIENCE_SECONDS)
        return self.process.returncode, out, errors

    def call(self, method: str, path: str, body: object = None) -> tuple[int, dict[str, Any]]:
        connection = http.client.HTTPConnection("127.0.0.1", self.port, timeout=PATIENCE_SECONDS)
        try:
            written = body if body is None or isinstance(body, bytes) else json.dumps(body).encode()
            connection.request(method, path, written, {"Content-Type": "application/json"})
            response = connection.getresponse()
            return response.status, json.loads(response.read())
        finally:
            connection.close()


@contextmanager
def running(*arguments: str, **variables: str) -> Iterator[Running]:
    port = free_port()
    process = subprocess.Popen(
        [*COMMAND, "serve", "--port", str(port), *arguments],
        env={**PLAIN, **variables},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    server = Running(process, port)
    try:
        until = time.monotonic() + PATIENCE_SECONDS
        while True:
            assert process.poll() is None, process.communicate()
            assert time.monotonic() < until
            try:
                status, _ = server.call("GET", "/health/ready")
            except OSError:
                time.sleep(0.05)
                continue
            assert status == 200
            break
        yield server
    finally:
        process.terminate()  # so that it clears up; of no effect where it has ended
        try:
            process.communicate(timeout=PATIENCE_SECONDS)
        except subprocess.TimeoutExpired:
            process.kill()
            process.communicate(timeout=PATIENCE_SECONDS)


@pytest.fixture(scope="module")
def server() -> Iterator[Running]:
    with running("--workers", "2") as started:
        yield started


def example(name: str) -> dict[str, Any]:
    found: dict[str, Any] = json.loads((examples_directory() / f"{name}.request.json").read_bytes())
    return found


def test_the_main_job_over_a_socket(server: Running) -> None:
    status, fitted = server.call("POST", "/v1/charts/xbar-r/limits", example("xbar-r-limits"))
    assert status == 200
    assert fitted["baseline"]["verdict"] == "in-control"

    # Frozen limits and the carry make any split of the data, over any workers, say the same.
    data = example("xbar-r-signals")["data"]
    status, whole = server.call(
        "POST", "/v1/charts/xbar-r/signals", {"limits": fitted["limits"], "data": data}
    )
    assert status == 200
    assert whole["verdict"] == "signal"
    carry, signals = None, []
    for i, row in enumerate(data["values"]):
        body = {"limits": fitted["limits"], "data": {"values": [row]}, "carry": carry}
        status, judged = server.call("POST", "/v1/charts/xbar-r/signals", body)
        assert status == 200
        carry = judged["carry"]
        signals += [(signal["rule"], i) for signal in judged["signals"]]
    assert signals == [(signal["rule"], signal["index"]) for signal in whole["signals"]]

    status, assessed = server.call("POST", "/v1/capability/measurements", example("capability-measurements"))
    assert status == 200
    assert assessed["capability"]["cpk"]["value"] > 1


def test_a_fault_is_a_problem_and_the_next_request_is_answered(server: Running) -> None:
    status, problem = server.call("POST", "/v1/charts/xbar-r/limits", b'{"data": NaN}')
    assert (status, problem["type"]) == (400, "/problems/not-json")
    assert server.call("GET", "/health/live")[0] == 200


@pytest.mark.parametrize(
    "request_text",
    [
        b"NOT HTTP\r\n\r\n",
        b"GET / HTTP/1.1\r\nHost: here\r\nBad Header: 1\r\n\r\n",
        b"GET /" + b"x" * 9000 + b" HTTP/1.1\r\nHost: here\r\n\r\n",
    ],
)
def test_what_is_no_request_is_answered_with_a_problem(server: Running, request_text: bytes) -> None:
    with socket.create_connection(("127.0.0.1", server.port), timeout=PATIENCE_SECONDS) as client:
        client.sendall(request_text)
        response = http.client.HTTPResponse(client)
        response.begin()
        problem = json.loads(response.read())
    assert response.status == 400
    assert response.headers["Content-Type"] == "application/problem+json"
    assert response.headers["X-Request-ID"] == problem["request_id"]
    assert problem["type"].removeprefix("/problems/") in TYPES


def test_the_demonstration_shows_a_key_where_one_is_asked_for(tmp_path: Path) -> None:
    (tmp_path / "key").write_text("wall-thickness-4711\n")
    digest = hashlib.sha256(b"wall-thickness-4711").hexdigest()
    (tmp_path / "keys.json").write_text(json.dumps({"demo": digest}))
    with running("--workers", "1", ASSIGNABLE_API_KEYS=str(tmp_path / "keys.json")) as server:
        command = [*COMMAND, "demo", "--url", f"http://127.0.0.1:{server.port}"]
        shown = subprocess.run(
            [*command, "--api-key-file", str(tmp_path / "key")], capture_output=True, text=True, env=PLAIN
        )
        assert shown.returncode == 0, shown.stderr
        assert "verdict: " in shown.stdout
        assert "4711" not in shown.stdout
        refused = subprocess.run(command, capture_output=True, text=True, env=PLAIN)
        assert refused.returncode == 1
        assert "--api-key-file FILE" in refused.stderr


def test_the_demonstration_shows_real_answers(server: Running) -> None:
    shown = subprocess.run(
        [*COMMAND, "demo", "--url", f"http://127.0.0.1:{server.port}"],
        env=PLAIN,
        capture_output=True,
        text=True,
        timeout=PATIENCE_SECONDS,
        check=False,
    )
    assert shown.returncode == 0, shown.stderr
    assert "does not offer" not in shown.stdout
    assert all(step.title in shown.stdout and step.path in shown.stdout for step in STEPS)
    assert "verdict: signal" in shown.stdout
    assert "The point lies above the upper control limit." in shown.stdout
    assert "Cpk " in shown.stdout
    assert shown.stdout.endswith(f"Documentation: http://127.0.0.1:{server.port}/docs\n")
    for file in (word for word in shown.stdout.split() if word.startswith("@")):
        assert (examples_directory().parent.parent / file[1:]).is_file()


def test_a_request_that_has_begun_is_answered_after_sigterm() -> None:
    body = json.dumps(example("xbar-r-limits")).encode()
    with running("--workers", "1", "--demo") as server:
        head = f"POST /v1/charts/xbar-r/limits HTTP/1.1\r\nHost: here\r\nContent-Length: {len(body)}\r\n"
        with socket.create_connection(("127.0.0.1", server.port), timeout=PATIENCE_SECONDS) as client:
            client.sendall(head.encode() + b"Content-Type: application/json\r\n\r\n" + body[:100])
            time.sleep(0.5)
            finished: list[tuple[int, str, str]] = []
            stopping = threading.Thread(target=lambda: finished.append(server.stop()))
            stopping.start()
            time.sleep(0.5)
            assert server.process.poll() is None
            with pytest.raises(ConnectionError):  # at once, so that a balancer turns to another server
                server.call("GET", "/health/live")
            client.sendall(body[100:])
            response = http.client.HTTPResponse(client)
            response.begin()
            assert response.status == 200
            assert json.loads(response.read())["limits"]["chart"] == "xbar-r"
        stopping.join(PATIENCE_SECONDS)
    ((status, _, errors),) = finished
    assert status == 0
    assert "Traceback" not in errors


def test_every_line_of_the_log_is_json() -> None:
    with running("--workers", "1", ASSIGNABLE_LOG="requests") as server:
        server.call("POST", "/v1/charts/xbar-r/limits", b"{}")
        status, out, errors = server.stop()
    assert (status, out) == (0, "")
    lines = [json.loads(line) for line in errors.splitlines()]
    assert {line["event"] for line in lines} == {"server", "request"}
    assert "fitXbarRLimits" in {line.get("operation_id") for line in lines}


def test_another_machine_is_let_in_only_when_told_so() -> None:
    refused = subprocess.run(
        [*COMMAND, "serve", "--host", "0.0.0.0", "--port", str(free_port())],
        env=PLAIN,
        capture_output=True,
        text=True,
        timeout=PATIENCE_SECONDS,
        check=False,
    )
    assert refused.returncode == 2
    assert "ASSIGNABLE_ALLOW_REMOTE=yes" in refused.stderr
    assert "Traceback" not in refused.stderr


@pytest.mark.parametrize("host", ["0.0.0.0", "::", "192.0.2.1"])
def test_addresses_others_reach(host: str) -> None:
    with pytest.raises(CannotServe, match="allow-remote"):
        settings_from({"ASSIGNABLE_HOST": host})
    with pytest.raises(CannotServe, match="allow-remote"):
        settings_from({"ASSIGNABLE_HOST": host, "ASSIGNABLE_ALLOW_REMOTE": "no"})
    assert settings_from({"ASSIGNABLE_HOST": host, "ASSIGNABLE_ALLOW_REMOTE": "yes"}).host == host


@pytest.mark.parametrize("host", ["127.0.0.1", "127.8.0.1", "::1", "localhost"])
def test_addresses_of_this_machine_only(host: str) -> None:
    assert settings_from({"ASSIGNABLE_HOST": host}).host == host


def test_an_unclear_permission_is_none() -> None:
    with pytest.raises(BadSettings, match="yes or no"):
        settings_from({"ASSIGNABLE_ALLOW_REMOTE": "1"})


def test_a_port_that_is_taken_is_told_at_once() -> None:
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        told = subprocess.run(
            [*COMMAND, "serve", "--port", str(taken.getsockname()[1])],
            env=PLAIN,
            capture_output=True,
            text=True,
            timeout=PATIENCE_SECONDS,
            check=False,
        )
    assert told.returncode == 2
    assert "--port" in told.stderr


def test_the_workers_share_what_is_loaded_and_write_no_file_at_home() -> None:
    chosen = options(Settings(workers=3, threads=5, host="::1", port=8123))
    assert chosen["bind"] == "[::1]:8123"
    assert (chosen["workers"], chosen["threads"]) == (3, 5)
    assert chosen["preload_app"]
    assert chosen["control_socket_disable"]
    assert not Path("/dev/shm").is_dir() or chosen["worker_tmp_dir"] == "/dev/shm"


def compute(*arguments: str, body: bytes = b"") -> subprocess.CompletedProcess[bytes]:
    return subprocess.run(
        [*COMMAND, "compute", *arguments],
        env=PLAIN,
        input=body,
        capture_output=True,
        timeout=PATIENCE_SECONDS,
        check=False,
    )


def test_a_computation_without_a_server_gives_the_same_bytes(server: Running) -> None:
    file = examples_directory() / "xbar-r-limits.request.json"
    alone = compute("fitXbarRLimits", str(file))
    assert alone.returncode == 0, alone.stderr
    _, served = server.call("POST", "/v1/charts/xbar-r/limits", file.read_bytes())
    assert json.loads(alone.stdout) == served
    assert compute("fitXbarRLimits", "-", body=file.read_bytes()).stdout == alone.stdout


def test_a_computation_that_fails_says_why() -> None:
    failed = compute("fitXbarRLimits", "-", body=b'{"data": {"values": [[1, true]]}}')
    assert failed.returncode == 1
    assert failed.stdout == b""
    assert json.loads(failed.stderr)["errors"][0]["pointer"] == "#/data/values/0/1"


def test_a_computation_that_is_not_there_names_the_nearest() -> None:
    told = compute("fitXbarRLimit", "-")
    assert told.returncode == 2
    assert b"Did you mean fitXbarRLimits?" in told.stderr
