"""Servers, and the proxy of ``docker/proxy`` before them, as processes of this machine."""

from __future__ import annotations

import http.client
import json
import os
import re
import shutil
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

ROOT = Path(__file__).resolve().parents[1]
PROXY = ROOT / "docker" / "proxy"
PATIENCE_SECONDS = 30
PLAIN = {name: value for name, value in os.environ.items() if not name.startswith("ASSIGNABLE_")}

needs_nginx = pytest.mark.skipif(shutil.which("nginx") is None, reason="nginx is not installed")


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port


@dataclass
class Answer:
    status: int
    headers: http.client.HTTPMessage
    body: bytes

    @property
    def json(self) -> Any:
        return json.loads(self.body)


def call(
    port: int,
    method: str,
    path: str,
    body: object = None,
    headers: dict[str, str] | None = None,
    patience: float = PATIENCE_SECONDS,
) -> Answer:
    """One request over a connection of its own; a body that is not bytes goes as JSON."""
    written = body if body is None or isinstance(body, bytes) else json.dumps(body).encode()
    connection = http.client.HTTPConnection("127.0.0.1", port, timeout=patience)
    try:
        connection.request(method, path, written, {"Content-Type": "application/json", **(headers or {})})
        response = connection.getresponse()
        return Answer(response.status, response.headers, response.read())
    finally:
        connection.close()


def raw(port: int, text: bytes, patience: float = PATIENCE_SECONDS) -> Answer:
    """The answer to bytes that need not be a request."""
    with socket.create_connection(("127.0.0.1", port), timeout=patience) as client:
        client.sendall(text)
        response = http.client.HTTPResponse(client)
        response.begin()
        return Answer(response.status, response.headers, response.read())


def _wait_for(process: subprocess.Popen[bytes], port: int, path: str, log: Path) -> None:
    until = time.monotonic() + PATIENCE_SECONDS
    while True:
        assert process.poll() is None, log.read_text()
        assert time.monotonic() < until, log.read_text()
        try:
            call(port, "GET", path)
        except OSError:
            time.sleep(0.05)
        else:
            return


def eventually(condition: Callable[[], bool]) -> bool:
    """Whether it comes true before patience ends: a server writes its log after it has answered."""
    until = time.monotonic() + PATIENCE_SECONDS
    while not condition() and time.monotonic() < until:
        time.sleep(0.05)
    return condition()


@dataclass
class Replica:
    """One server, which knows nothing of another."""

    process: subprocess.Popen[bytes]
    port: int
    log: Path

    def answered(self) -> list[str]:
        """The ids of the requests it logged, in their order."""
        found = map(json.loads, self.log.read_text().splitlines())
        return [line["request_id"] for line in found if line["event"] == "request"]

    def end(self) -> None:
        """As a machine that loses its power: the server and its workers, at once."""
        if self.process.poll() is None:
            os.killpg(self.process.pid, signal.SIGKILL)
            self.process.wait(PATIENCE_SECONDS)


@contextmanager
def replica(folder: Path, *arguments: str, **variables: str) -> Iterator[Replica]:
    port = free_port()
    log = folder / f"replica-{port}.log"
    with log.open("wb") as errors:
        process = subprocess.Popen(
            [
                sys.executable,
                "-m",
                "assignable.cli",
                "serve",
                "--port",
                str(port),
                "--workers",
                "1",
                *arguments,
            ],
            env={**PLAIN, **variables},
            stdout=errors,
            stderr=errors,
            start_new_session=True,  # a group of its own, to end all of it
        )
    started = Replica(process, port, log)
    try:
        _wait_for(process, port, "/health/ready", log)
        yield started
    finally:
        started.end()


def configure(
    folder: Path, port: int, upstreams: Sequence[int], more: str = "", scaled: Mapping[str, str] | None = None
) -> Path:
    """The proxy's configuration in ``folder``, with the two files that differ from site to site.

    ``more`` goes into its ``server``; ``scaled`` gives directives other values, so that a test need not wait long.
    """
    shutil.copytree(PROXY, folder, dirs_exist_ok=True)
    text = (folder / "nginx.conf").read_text()
    for name, value in (scaled or {}).items():
        text, times = re.subn(rf"(?<= ){name} [^;]+;", f"{name} {value};", text)
        assert times == 1
    (folder / "nginx.conf").write_text(text)
    (folder / "listen.conf").write_text(f"listen 127.0.0.1:{port};\n{more}\n")
    servers = "".join(f"server 127.0.0.1:{one} max_fails=1 fail_timeout=5s;\n" for one in upstreams)
    (folder / "upstream.conf").write_text(f"zone service 64k;\n{servers}")
    return folder / "nginx.conf"


def nginx(configuration: Path, *arguments: str) -> list[str]:
    """The command; where root starts nginx, its workers are root's too, to reach the folder."""
    user = " user root;" if os.geteuid() == 0 else ""
    return [
        *("nginx", "-e", "stderr", "-p", str(configuration.parent), "-c", str(configuration)),
        *("-g", f"daemon off;{user}", *arguments),
    ]


@contextmanager
def proxy(
    folder: Path, upstreams: Sequence[int], more: str = "", scaled: Mapping[str, str] | None = None
) -> Iterator[int]:
    """nginx before servers at these ports, configured so; gives its own port."""
    port = free_port()
    configuration = configure(folder / f"proxy-{port}", port, upstreams, more, scaled)
    log = configuration.parent / "log"
    with log.open("wb") as errors:
        process = subprocess.Popen(nginx(configuration), stderr=errors, env=PLAIN)
    try:
        _wait_for(process, port, "/metrics", log)  # which it answers itself
        yield port
    finally:
        process.terminate()
        process.wait(PATIENCE_SECONDS)
