"""The outermost layer: a request's id, the headers every answer has, and one line in the log.

It wraps the WSGI application, so that what Flask refuses, or fails at, is seen here too. A line holds
no data of the caller's, and no path: a path nobody bound can hold anything.
"""

from __future__ import annotations

import os
import re
import sys
from collections.abc import Callable, Iterable, Iterator
from datetime import UTC, datetime
from time import perf_counter_ns
from traceback import extract_tb
from typing import TYPE_CHECKING, Any, BinaryIO
from uuid import UUID

import orjson

from .answers import service_version
from .contract import OPERATION, REQUEST_ID
from .cors import Cors
from .problems import INTERNAL, MEDIA_TYPE, Problem
from .tally import OTHER, TALLY, Tally

if TYPE_CHECKING:
    from .metrics import Metrics

TRACE_ID = "assignable.trace_id"  # of the span of this request, where spans are made

_GOOD_ID = re.compile(r"[A-Za-z0-9._-]{1,128}")
_TRACEPARENT = re.compile(
    r"(?!ff)[0-9a-f]{2}-(?!0{32})([0-9a-f]{32})-(?!0{16})[0-9a-f]{16}-[0-9a-f]{2}(?:-.*)?"
)

Environ = dict[str, Any]
StartResponse = Callable[..., Any]


class Log:
    """One JSON object a line; ``level`` is ``requests``, ``errors`` or ``off``."""

    def __init__(self, level: str, stream: BinaryIO | None = None) -> None:
        self.requests = level == "requests"
        self.errors = level != "off"
        self._stream = stream

    def write(self, **members: object) -> None:
        now = datetime.now(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")
        line = orjson.dumps({"ts": now, **members}, option=orjson.OPT_APPEND_NEWLINE)
        stream = sys.stderr.buffer if self._stream is None else self._stream
        try:
            stream.write(line)
            stream.flush()
        except (OSError, ValueError):
            pass  # a log that is full or closed fails no request

    def failure(self, error: BaseException, environ: Environ) -> None:
        """A fault of the service: what it is and where, without its message, which may quote data."""
        if self.errors:
            self.write(
                level="error",
                event="failure",
                request_id=environ.get(REQUEST_ID),
                trace_id=trace_id(environ),
                operation_id=environ.get(OPERATION),
                error=type(error).__name__,
                where=[
                    f"{os.path.basename(frame.filename)}:{frame.lineno} {frame.name}"
                    for frame in extract_tb(error.__traceback__)
                ],
                version=service_version(),
            )


def request_id(environ: Environ) -> str:
    """The caller's id, where it is one that can stand in a log and a header; otherwise a new one."""
    given = environ.get("HTTP_X_REQUEST_ID")
    if given is not None and _GOOD_ID.fullmatch(given):
        return given
    return str(UUID(bytes=os.urandom(16), version=4))


def trace_id(environ: Environ) -> str | None:
    """The trace of this request's span, or else the one a W3C ``traceparent`` header names."""
    if (own := environ.get(TRACE_ID)) is not None:
        return str(own)
    given = environ.get("HTTP_TRACEPARENT")
    if given is None:
        return None
    found = _TRACEPARENT.fullmatch(given)
    return found[1] if found else None


_METHODS = frozenset(("GET", "HEAD", "POST", "OPTIONS", "PUT", "PATCH", "DELETE"))


def method_of(environ: Environ) -> str:
    """The request's method; any text can stand there."""
    method: str = environ["REQUEST_METHOD"]
    return method if method in _METHODS else "other"


class Edge:
    """The WSGI application around Flask's."""

    def __init__(
        self,
        inner: Callable[[Environ, StartResponse], Iterable[bytes]],
        log: Log,
        cors: Cors,
        metrics: Metrics | None = None,
    ) -> None:
        self._inner = inner
        self._log = log
        self._cors = cors
        self._metrics = metrics

    def __call__(self, environ: Environ, start_response: StartResponse) -> Iterable[bytes]:
        began = perf_counter_ns()
        own_id = environ[REQUEST_ID] = request_id(environ)
        tally = environ[TALLY] = Tally()
        more = [("X-Request-ID", own_id), ("X-Content-Type-Options", "nosniff"), *self._cors.headers(environ)]
        seen: list[Any] = ["", None]  # status, bytes out

        def start(status: str, headers: list[tuple[str, str]], exc_info: Any = None) -> Any:
            seen[0] = status
            seen[1] = next((value for name, value in headers if name == "Content-Length"), None)
            return start_response(status, [*headers, *more], exc_info)

        if self._cors.is_preflight(environ):
            start("204 No Content", self._cors.preflight())
            answer: Iterable[bytes] = ()
        else:
            try:
                answer = self._inner(environ, start)
            except Exception as error:
                self._log.failure(error, environ)
                tally.problem = Problem(INTERNAL)
                body = tally.problem.body(own_id)
                start(
                    "500 Internal Server Error",
                    [("Content-Type", MEDIA_TYPE), ("Content-Length", str(len(body)))],
                    sys.exc_info(),
                )
                answer = (body,)
        if not self._log.requests and self._metrics is None:
            return answer
        if seen[1] is None and seen[0][:3] not in ("204", "304"):
            return Streamed(answer, lambda sent: self._over(environ, tally, seen[0], sent, began))
        self._over(environ, tally, seen[0], int(seen[1] or 0), began)
        return answer

    def _over(self, environ: Environ, tally: Tally, status: str, sent: int, began: int) -> None:
        taken = perf_counter_ns() - began
        if self._metrics is not None:
            self._metrics.request(environ.get(OPERATION, OTHER), status[:3], taken / 1e9, tally)
        if self._log.requests:
            self._line(environ, tally, status, sent, taken)

    def _line(self, environ: Environ, tally: Tally, status: str, sent: int, taken: int) -> None:
        declared = environ.get("CONTENT_LENGTH") or ""
        self._log.write(
            level="info",
            event="request",
            request_id=environ[REQUEST_ID],
            trace_id=trace_id(environ),
            method=method_of(environ),
            operation_id=environ.get(OPERATION),
            status=int(status[:3]) if status else 0,
            problem=None if tally.problem is None else tally.problem.kind.code,
            ms=taken / 1e6,
            bytes_in=int(declared) if declared.isascii() and declared.isdigit() else None,
            bytes_out=sent,
            values=tally.values,
            version=service_version(),
        )


class Streamed:
    """An answer of unknown length; what is to be told of it is told when it is over."""

    def __init__(self, inner: Iterable[bytes], over: Callable[[int], None]) -> None:
        self._inner = inner
        self._over = over
        self._sent = 0

    def __iter__(self) -> Iterator[bytes]:
        for part in self._inner:
            self._sent += len(part)
            yield part

    def close(self) -> None:
        try:
            close = getattr(self._inner, "close", None)
            if close is not None:
                close()
        finally:
            self._over(self._sent)
