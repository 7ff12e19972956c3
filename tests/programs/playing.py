"""What the tests of the example programs share: a real service that can be killed, and the programs as processes."""

from __future__ import annotations

import http.client
import json
import os
import signal
import socket
import sqlite3
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
PROGRAMS = ROOT / "openapi" / "programs"
PATIENCE_SECONDS = 30
PLAIN = {name: value for name, value in os.environ.items() if not name.startswith("ASSIGNABLE_")}


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port


class Server:
    """The service on a port of its own, with all its processes in one group."""

    def __init__(self, **variables: str) -> None:
        self.port = free_port()
        self.address = f"http://127.0.0.1:{self.port}"
        self._variables = variables
        self._process: subprocess.Popen[bytes] | None = None

    def start(self) -> None:
        command = [
            sys.executable,
            "-m",
            "assignable.cli",
            "serve",
            "--port",
            str(self.port),
            "--workers",
            "1",
        ]
        self._process = subprocess.Popen(
            command,
            env={**PLAIN, "ASSIGNABLE_LOG": "off", **self._variables},
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            start_new_session=True,
        )
        until = time.monotonic() + PATIENCE_SECONDS
        while self.get("/health/ready") is None:
            assert self._process.poll() is None
            assert time.monotonic() < until
            time.sleep(0.05)

    def kill(self) -> None:
        """Ends all its processes at once, as a power cut does."""
        if self._process is not None:
            os.killpg(self._process.pid, signal.SIGKILL)
            self._process.wait(PATIENCE_SECONDS)
            self._process = None

    def get(self, path: str) -> Any:
        """The answer; None where nobody answers."""
        try:
            return self._call("GET", path, None)
        except OSError:
            return None

    def post(self, path: str, body: Any) -> Any:
        return self._call("POST", path, json.dumps(body).encode())

    def _call(self, method: str, path: str, body: bytes | None) -> Any:
        connection = http.client.HTTPConnection("127.0.0.1", self.port, timeout=PATIENCE_SECONDS)
        try:
            connection.request(method, path, body, {"Content-Type": "application/json"})
            response = connection.getresponse()
            found = json.loads(response.read())
            assert response.status == 200, found
            return found
        finally:
            connection.close()


def command(program: str, *arguments: object) -> list[str]:
    return [sys.executable, "-W", "error", str(PROGRAMS / f"{program}.py"), *map(str, arguments)]


def run(program: str, *arguments: object) -> subprocess.CompletedProcess[str]:
    """The program as a person starts it, to its end."""
    return subprocess.run(
        command(program, *arguments),
        capture_output=True,
        text=True,
        timeout=PATIENCE_SECONDS,
        check=False,
        env=PLAIN,
    )


@contextmanager
def started(program: str, *arguments: object) -> Iterator[subprocess.Popen[str]]:
    """The program at work, all that it says on standard output; it ends with the block, or when patience does."""
    with subprocess.Popen(
        command(program, *arguments), stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True, env=PLAIN
    ) as process:
        watch = threading.Timer(4 * PATIENCE_SECONDS, process.kill)
        watch.start()
        try:
            yield process
        finally:
            watch.cancel()
            process.kill()


def killed(program: str, runs: list[dict[str, Any]]) -> list[list[tuple[int, int]]]:
    """What `killed.py` says of these runs."""
    done = subprocess.run(
        [sys.executable, str(Path(__file__).parent / "killed.py")],
        input=json.dumps({"program": program, "runs": runs}, default=str),
        capture_output=True,
        text=True,
        timeout=4 * PATIENCE_SECONDS,
        check=False,
        env=PLAIN,
    )
    assert done.returncode == 0, done.stderr
    return [[(status, steps) for status, steps in one] for one in json.loads(done.stdout)]


def rows(database: Path, query: str) -> list[tuple[Any, ...]]:
    connection = sqlite3.connect(database)
    try:
        return connection.execute(query).fetchall()
    finally:
        connection.close()
