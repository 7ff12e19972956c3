"""The real server for the tests of what can go wrong: started, watched, called over plain sockets, and ended."""

from __future__ import annotations

import http.client
import json
import os
import random
import signal
import socket
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any

from assignable.api.contract import examples_directory
from assignable.api.problems import MEDIA_TYPE, TYPES
from machines import PLAIN, free_port

PATIENCE_SECONDS = 40
COMMAND = (sys.executable, "-W", "error", "-m", "assignable.cli")
XBAR = "/v1/charts/xbar-r/limits"


@dataclass
class Answer:
    status: int
    headers: http.client.HTTPMessage
    body: bytes

    def json(self) -> Any:
        return json.loads(self.body)

    def problem(self) -> dict[str, Any]:
        """The members of a problem that is right in all that problems share."""
        assert self.headers["Content-Type"] == MEDIA_TYPE, (self.status, self.body[:500])
        members: dict[str, Any] = self.json()
        known = TYPES[members["type"].removeprefix("/problems/")]
        assert members["status"] == self.status == known.status
        assert members["request_id"] == self.headers["X-Request-ID"]
        return members


def read_answer(client: socket.socket) -> Answer:
    """The next answer on a socket. Raises what a broken connection raises."""
    response = http.client.HTTPResponse(client)
    response.begin()
    return Answer(response.status, response.headers, response.read())


@dataclass
class Service:
    process: subprocess.Popen[bytes]
    port: int
    log: IO[bytes]

    def connect(self, timeout: float = PATIENCE_SECONDS) -> socket.socket:
        return socket.create_connection(("127.0.0.1", self.port), timeout=timeout)

    def connection(self, timeout: float = PATIENCE_SECONDS) -> http.client.HTTPConnection:
        return http.client.HTTPConnection("127.0.0.1", self.port, timeout=timeout)

    def call(
        self, method: str, path: str, body: Any = None, timeout: float = PATIENCE_SECONDS, **headers: str
    ) -> Answer:
        with closing(self.connection(timeout)) as connection:
            return ask(connection, method, path, body, **headers)

    def workers(self) -> list[int]:
        """The process ids of the workers, the eldest first."""
        task = Path(f"/proc/{self.process.pid}/task/{self.process.pid}/children")
        return [int(word) for word in task.read_text().split()]

    def memory(self) -> int:
        """Bytes that the workers hold in memory, all together."""
        return sum(resident(pid) for pid in self.workers())

    def written(self) -> str:
        """All that the server has written to its log."""
        self.log.seek(0)
        return self.log.read().decode()

    def is_whole(self, workers: int) -> None:
        """Every worker is there and the service computes rightly; raises otherwise."""
        until = time.monotonic() + PATIENCE_SECONDS
        while len(self.workers()) != workers:
            assert time.monotonic() < until, self.workers()
            time.sleep(0.05)
        for _ in range(4 * workers):
            assert self.call("GET", "/health/ready").status == 200
            answer = self.call("POST", XBAR, request_of("xbar-r-limits"))
            assert (answer.status, answer.body) == (200, expected("xbar-r-limits"))

    def stop(self) -> int:
        """SIGTERM; the exit status."""
        self.process.send_signal(signal.SIGTERM)
        return self.process.wait(PATIENCE_SECONDS)


def ask(
    connection: http.client.HTTPConnection, method: str, path: str, body: Any = None, **headers: str
) -> Answer:
    written = body if body is None or isinstance(body, bytes) else json.dumps(body).encode()
    sent = {"Content-Type": "application/json"} if written is not None else {}
    connection.request(method, path, written, {**sent, **headers})
    response = connection.getresponse()
    return Answer(response.status, response.headers, response.read())


def resident(pid: int) -> int:
    """Bytes that a process holds in memory; 0 where it has ended."""
    try:
        text = Path(f"/proc/{pid}/status").read_text()
    except OSError:
        return 0
    return next((int(line.split()[1]) * 1024 for line in text.splitlines() if line.startswith("VmRSS")), 0)


@contextmanager
def serving(*arguments: str, clean: bool = True, **variables: str) -> Iterator[Service]:
    """The server as `assignable serve` starts it; whatever happens, none of its processes is left.

    Where ``clean``, its log must show no fault of the service at the end.
    """
    port = free_port()
    with tempfile.TemporaryFile() as log:
        process = subprocess.Popen(
            [*COMMAND, "serve", "--port", str(port), *arguments],
            env={**PLAIN, "ASSIGNABLE_LOG": "errors", **variables},
            stdout=subprocess.DEVNULL,
            stderr=log,
            start_new_session=True,
        )
        service = Service(process, port, log)
        try:
            until = time.monotonic() + PATIENCE_SECONDS
            while True:
                assert process.poll() is None, service.written()
                assert time.monotonic() < until, service.written()
                try:
                    assert service.call("GET", "/health/ready").status == 200
                    break
                except OSError:
                    time.sleep(0.05)
            yield service
            written = service.written()
            assert "Traceback" not in written, written
            assert not clean or '"level":"error"' not in written, written
        finally:
            if process.poll() is None:
                process.terminate()
                try:
                    process.wait(PATIENCE_SECONDS)
                except subprocess.TimeoutExpired:
                    os.killpg(process.pid, signal.SIGKILL)  # a group of its own, made above
                    process.wait(PATIENCE_SECONDS)


def request_of(name: str) -> bytes:
    """The body of an example."""
    return (examples_directory() / f"{name}.request.json").read_bytes()


_EXPECTED: dict[str, bytes] = {}


def expected(name: str) -> bytes:
    """The bytes that answer an example, computed here and not by the server."""
    if name not in _EXPECTED:
        from contract import served

        operation_id = next(found for found, example in served.examples() if example == name)
        _EXPECTED[name] = served.operations()[operation_id].execute(request_of(name))
    return _EXPECTED[name]


def large_body(rows: int, columns: int = 5, seed: int = 1) -> bytes:
    """A baseline of so many subgroups."""
    draw = random.Random(seed)
    values = [[round(draw.gauss(2.5, 0.012), 4) for _ in range(columns)] for _ in range(rows)]
    return json.dumps({"data": {"values": values}}).encode()


def head_of(path: str, length: int, *more: str) -> bytes:
    """The head of a request with a JSON body."""
    lines = (f"POST {path} HTTP/1.1", "Host: here", "Content-Type: application/json", *more)
    return "\r\n".join((*lines, f"Content-Length: {length}", "", "")).encode()


class Load:
    """Clients that go on until told to stop; ``action`` is called with the client's number and how often it was."""

    def __init__(self, clients: int, action: Callable[[int, int], None]) -> None:
        self._over = threading.Event()
        self._action = action
        self.failures: list[BaseException] = []
        self._threads = [threading.Thread(target=self._run, args=(at,)) for at in range(clients)]

    def _run(self, client: int) -> None:
        turn = 0
        while not self._over.is_set():
            try:
                self._action(client, turn)
            except BaseException as error:
                self.failures.append(error)
                return
            turn += 1

    def __enter__(self) -> Load:
        for thread in self._threads:
            thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._over.set()
        for thread in self._threads:
            thread.join(PATIENCE_SECONDS)
        if self.failures:
            raise self.failures[0]
