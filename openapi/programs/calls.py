"""Calls to Assignable over HTTP, as `mes.py` and `lims.py` make them: the standard library, and nothing else.

Every call is pure: it changes nothing on the server, so whoever is not sure that it was answered sends it again.
"""

from __future__ import annotations

import http.client
import io
import json
import logging
import random
import sys
import time
import uuid
from argparse import ArgumentParser, Namespace
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

LOG = logging.getLogger("calls")
LATER = (429, 502, 503, 504)
"""Statuses of a service, or of a proxy before it, that will take the same request another time."""


class BadOptions(Exception):
    """The options do not lead to a service."""


class Away(Exception):
    """The service cannot be reached, or is busy: the same request may be sent again, after ``seconds`` if it says."""

    def __init__(self, reason: str, seconds: float = 0.0) -> None:
        super().__init__(reason)
        self.seconds = seconds


class Refused(Exception):
    """The service will not take this request, however often it is sent. ``problem`` is as RFC 9457 has it."""

    def __init__(self, status: int, problem: dict[str, Any], request_id: str) -> None:
        self.status = status
        self.problem = problem
        self.kind = str(problem.get("type", "")).rpartition("/")[2]
        self.errors: list[dict[str, str]] = problem.get("errors", [])
        said = " ".join(f"{one.get('pointer', '')} {one.get('detail', '')}" for one in self.errors[:5])
        super().__init__(f"{problem.get('title')} ({status}): {said or problem.get('detail')} [{request_id}]")


@dataclass(frozen=True)
class Answer:
    """What a request was answered with, and the id under which the service has logged it."""

    body: dict[str, Any]
    request_id: str


class Service:
    """One kept connection to the service; ``timeout`` seconds are given to each step of a call."""

    def __init__(self, address: str, key: str | None = None, timeout: float = 30.0) -> None:
        parts = urlsplit(address)
        try:
            port = parts.port
        except ValueError:
            port = -1
        if parts.scheme not in ("http", "https") or not parts.hostname or port == -1:
            raise BadOptions(f"{address} is no address like http://127.0.0.1:8000")
        kind = http.client.HTTPSConnection if parts.scheme == "https" else http.client.HTTPConnection
        self._address = address
        self._prefix = parts.path.rstrip("/")
        self._connection = kind(parts.hostname, port, timeout=timeout)
        self._headers = {"Content-Type": "application/json", "Accept": "application/json"}
        if key:
            self._headers["X-API-Key"] = key

    def close(self) -> None:
        """Gives the connection back."""
        self._connection.close()

    def post(self, path: str, body: bytes) -> Answer:
        """The answer to a request. Raises Away and Refused."""
        request_id, began = str(uuid.uuid4()), time.perf_counter()
        try:
            status, headers, content = self._exchange(path, body, request_id)
        except (OSError, http.client.HTTPException) as error:
            self._connection.close()
            LOG.info("POST %s failed: %r, request id %s", path, error, request_id)
            raise Away(f"{self._address} cannot be reached: {error or type(error).__name__}") from error
        took = 1000 * (time.perf_counter() - began)
        LOG.info("POST %s %d in %.0f ms, request id %s", path, status, took, request_id)
        if status in LATER:
            asked = headers.get("Retry-After", "")
            raise Away(f"{self._address} is busy ({status})", float(asked) if asked.isdecimal() else 0.0)
        try:
            found = json.loads(content)
        except ValueError:
            found = None
        if not isinstance(found, dict):
            found, status = {"title": "No answer of Assignable", "detail": self._address}, status or 500
            raise Refused(status, found, request_id)
        if status != 200:
            raise Refused(status, found, request_id)
        return Answer(found, request_id)

    def _exchange(
        self, path: str, body: bytes, request_id: str
    ) -> tuple[int, http.client.HTTPMessage, bytes]:
        kept = self._connection.sock is not None
        try:
            return self._once(path, body, request_id)
        except ConnectionError:
            if not kept:
                raise
            self._connection.close()  # the server had closed the kept connection: that is no failure yet
            return self._once(path, body, request_id)

    def _once(self, path: str, body: bytes, request_id: str) -> tuple[int, http.client.HTTPMessage, bytes]:
        headers = {**self._headers, "X-Request-ID": request_id}
        self._connection.request("POST", self._prefix + path, body, headers)
        response = self._connection.getresponse()
        return response.status, response.headers, response.read()


def pause(failures: int, away: Away) -> float:
    """Seconds to wait after so many failures in a row: longer each time, never as one with all other callers."""
    return max(away.seconds, min(30.0, 0.5 * 2.0 ** min(failures - 1, 10)) * random.uniform(0.5, 1.0))


def set_up_output() -> None:
    """The log of calls on standard error; and no text, whatever a source sent, that cannot be printed."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")
    logging.basicConfig(level=logging.INFO, format="%(asctime)s %(message)s")


def add_options(parser: ArgumentParser) -> None:
    """The options of every program that calls the service."""
    parser.add_argument("--address", default="http://127.0.0.1:8000", help="of the service (%(default)s)")
    parser.add_argument("--key-file", type=Path, help="file that holds the API key, sent as X-API-Key")
    parser.add_argument("--timeout", type=float, default=30.0, help="seconds for a call (%(default)s)")


def from_options(given: Namespace) -> Service:
    """The service that the options name. Raises BadOptions."""
    try:
        key = given.key_file.read_text(encoding="ascii").strip() if given.key_file else None
    except (OSError, ValueError) as error:
        raise BadOptions(f"{given.key_file} holds no key that can be read: {error}") from error
    return Service(given.address, key, given.timeout)
