"""The worker: no client, however slow, keeps a thread from the others.

Gunicorn hands a connection to a thread as soon as it says anything, and the thread then waits for the rest: a
handful of clients that stall would hold all threads for ever. Here a request is gathered by the worker's one
event loop and reaches a thread when it is whole. What cannot be gathered (a body longer than this server takes, or
one that is to be streamed) does reach a thread before; the waits there are bounded. A connection that is to be
closed is closed by the event loop too, which waits for nobody.
"""

from __future__ import annotations

import errno
import re
import selectors
import socket
import time
from collections import deque
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from contextlib import suppress
from functools import partial
from typing import Any
from uuid import uuid4

from gunicorn.http.errors import ParseException
from gunicorn.http.unreader import SocketUnreader
from gunicorn.workers.gthread import TConn, ThreadWorker

from ..api import problems
from ..api.shedding import ARRIVAL
from ..api.tally import OTHER, Tally

HEAD_SECONDS = 10.0  # for the request line and the headers, from the first byte
BODY_SECONDS = 60.0  # for the body, which must not be silent for longer than:
SILENCE_SECONDS = 10.0
SEND_SECONDS = 60.0  # for all of an answer
LINGER_SECONDS = 2.0  # for a client to read the last answer before its connection is closed

_MOST_HEAD = 65_536
_MOST_LINE = 1024  # of a chunk's size
_MOST_READ = 262_144
_PROBES = (b"GET /health/", b"HEAD /health/", b"GET /metrics")
_STREAMED = (b"POST /v1/bulk",)

_LENGTH = re.compile(rb"(?i)\r\ncontent-length:[ \t]*([0-9]{1,18})[ \t]*\r\n")
_CODING = re.compile(rb"(?i)\r\ntransfer-encoding:")
_EXPECT = re.compile(rb"(?i)\r\nexpect:[ \t]*100-continue[ \t]*(?=\r\n)")
_SIZE = re.compile(rb"[0-9a-fA-F]{1,15}[ \t]*(?:;.*)?")
_CONTINUE = b"HTTP/1.1 100 Continue\r\n\r\n"


class Client(socket.socket):
    """A client's socket: where others would wait for ever, it waits so long."""

    def setblocking(self, flag: bool) -> None:
        self.settimeout(SILENCE_SECONDS if flag else 0.0)

    def sendall(self, data: Any, *flags: int) -> None:
        self.settimeout(SEND_SECONDS)  # in all, however slowly it goes
        try:
            super().sendall(data, *flags)
        except TimeoutError:
            raise ConnectionResetError(errno.ECONNRESET, "the client does not read") from None
        self.settimeout(SILENCE_SECONDS)


class Gathered(SocketUnreader):  # type: ignore[misc]
    """The bytes of one request; of one that is streamed, what came before its thread, then what the socket has."""

    def __init__(self, client: socket.socket) -> None:
        super().__init__(client)
        self.pieces: deque[bytes] = deque()
        self.streamed = False

    def chunk(self, size_hint: int | None = None) -> bytes:
        if self.pieces:
            return self.pieces.popleft()
        if not self.streamed:
            return b""
        found: bytes = super().chunk(size_hint)
        return found


class Framing:
    """Where a request ends, found piece by piece as it comes; it judges nothing, and leaves that to the parser."""

    __slots__ = ("_body", "_head", "_line", "_most", "_step", "expects", "streamed", "whole")

    def __init__(self, most_body: int) -> None:
        self._most = most_body
        self._head = b""
        self._body = 0  # bytes of the body, or of its chunk, still to come
        self._line = b""
        self._step: Callable[[bytes], int] = self._of_head
        self.whole = False
        self.streamed = False
        self.expects = False

    @property
    def in_head(self) -> bool:
        return self._step == self._of_head

    def take(self, piece: bytes) -> int:
        """How many bytes of the piece belong to this request; sets ``whole`` where a thread should have it."""
        taken = 0
        while taken < len(piece) and not self.whole:
            taken += self._step(piece[taken:] if taken else piece)
        return taken

    def _of_head(self, piece: bytes) -> int:
        before = len(self._head)
        self._head += piece
        end = self._head.find(b"\r\n\r\n", max(0, before - 3))
        if end < 0:
            self.whole = self.streamed = len(self._head) > _MOST_HEAD  # the parser says what is wrong
            return len(piece)
        head, self._head = self._head[: end + 2], b""
        lengths = _LENGTH.findall(head)
        coded = _CODING.search(head) is not None
        self.expects = _EXPECT.search(head) is not None
        if head.startswith(_STREAMED):
            self.whole = self.streamed = True
        elif coded:
            # Both framings at once, or two lengths, are for the parser to refuse.
            self.whole = self.streamed = bool(lengths)
            self._step = self._of_chunk_size
        elif len(lengths) == 1:
            self._body = int(lengths[0])
            self.streamed = self._body > self._most
            self.whole = self.streamed or not self._body
            self._step = self._of_body
        else:
            self.whole = True
            self.streamed = bool(lengths)
        return end + 4 - before

    def _of_body(self, piece: bytes) -> int:
        taken = min(self._body, len(piece))
        self._body -= taken
        self.whole = not self._body
        return taken

    def _of_chunk_size(self, piece: bytes) -> int:
        end = self._ended_line(piece)
        if end is None:
            return len(piece)
        line, self._line = self._line, b""
        size = int(re.split(rb"[; \t]", line)[0], 16) if _SIZE.fullmatch(line) else -1
        self._most -= max(size, 0)
        if size < 0 or self._most < 0:
            self.whole = self.streamed = True
        elif size:
            self._body = size + 2
            self._step = self._of_chunk
        else:
            self._step = self._of_trailer
        return end

    def _of_chunk(self, piece: bytes) -> int:
        taken = min(self._body, len(piece))
        self._body -= taken
        if not self._body:
            self._step = self._of_chunk_size
        return taken

    def _of_trailer(self, piece: bytes) -> int:
        end = self._ended_line(piece)
        if end is None:
            return len(piece)
        self.whole = not self._line
        self._line = b""
        return end

    def _ended_line(self, piece: bytes) -> int | None:
        """Where the line that the piece goes on with ends in it, the line itself then in ``_line``."""
        before = len(self._line)
        self._line += piece[: _MOST_LINE + 2]
        end = self._line.find(b"\r\n", max(0, before - 1))
        if end < 0:
            self.whole = self.streamed = len(self._line) > _MOST_LINE
            return None
        self._line = self._line[:end]
        return end + 2 - before


class Connection(TConn):  # type: ignore[misc]
    """A client's connection, and what has come of its next request."""

    def __init__(self, cfg: Any, client: Client, address: Any, server: Any, most_body: int) -> None:
        super().__init__(cfg, client, address, server)
        self.most_body = most_body
        self.data_ready = True  # a thread gets it when there is something for it
        self.left = b""  # read already, of the request after this one
        self.begin()

    def begin(self) -> None:
        """Starts to gather the next request."""
        self.framing = Framing(self.most_body)
        self.pieces: deque[bytes] = deque()
        self.held = 0
        self.ended = False
        self.began: float | None = None
        self.heard = 0.0

    def hear(self, piece: bytes) -> None:
        """Takes up what came."""
        self.heard = time.monotonic()
        self.began = self.began or self.heard
        taken = self.framing.take(piece)
        if self.framing.streamed:
            taken = len(piece)
        self.pieces.append(piece[:taken] if taken < len(piece) else piece)
        self.held += taken
        self.left = piece[taken:]

    def due(self) -> float:
        """When it is given up, unless more comes."""
        if self.began is None:
            return float(self.timeout)
        if self.framing.in_head:
            return self.began + HEAD_SECONDS
        return min(self.began + BODY_SECONDS, self.heard + SILENCE_SECONDS)

    def init(self) -> None:
        """Called by the thread: what has come is what the parser reads first."""
        if not self.initialized:
            super().init()
            self.parser.unreader = Gathered(self.sock)
        unreader = self.parser.unreader
        unreader.streamed = self.framing.streamed
        unreader.pieces.extend(self.pieces)
        self.pieces = deque()


class Worker(ThreadWorker):  # type: ignore[misc]
    """Gathers requests, stops at once for new callers, and answers in its own form what never becomes a request."""

    def __init__(self, *args: Any, **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        settings = self.app.settings
        self._most_body: int = settings.max_body_bytes
        self._most_held: int = settings.threads * settings.max_body_bytes
        self._held = 0
        # However many requests wait for a thread, whoever asks after the service's health does not.
        self._probes: ThreadPoolExecutor
        self._gathering: set[Connection] = set()
        self._lingering: dict[socket.socket, tuple[Connection, float]] = {}
        self._swept = 0.0

    def init_process(self) -> None:
        self._probes = ThreadPoolExecutor(2)
        super().init_process()

    # Coming ------------------------------------------------------------------------------------------

    def accept(self, listener: socket.socket) -> None:
        try:
            accepted, address = listener.accept()
        except (BlockingIOError, ConnectionAbortedError):
            return
        client = Client(fileno=accepted.detach())
        self.nr_conns += 1
        connection = Connection(self.cfg, client, address, listener.getsockname(), self._most_body)
        self._gather(connection)

    def _gather(self, connection: Connection) -> None:
        """Begins the next request of a connection, with what was read of it already."""
        connection.begin()
        connection.timeout = time.monotonic() + self.cfg.keepalive
        self._gathering.add(connection)
        self.poller.register(connection.sock, selectors.EVENT_READ, partial(self._readable, connection))
        if connection.left:
            self._heard(connection, connection.left)

    def _readable(self, connection: Connection, _client: object) -> None:
        try:
            piece = connection.sock.recv(_MOST_READ)
        except (BlockingIOError, InterruptedError):
            return
        except OSError:
            self._drop(connection)
            return
        if piece:
            self._heard(connection, piece)
        elif connection.began is None:
            self._drop(connection)
        else:
            connection.ended = True
            self._hand_over(connection)

    def _heard(self, connection: Connection, piece: bytes) -> None:
        before = connection.held
        connection.hear(piece)
        self._held += connection.held - before
        framing = connection.framing
        if framing.whole:
            self._hand_over(connection)
        elif self._held > self._most_held:
            self._refuse(connection, problems.Problem(problems.BUSY, headers=(("Retry-After", "1"),)))
        elif framing.expects and not framing.in_head:
            framing.expects = False
            with suppress(OSError):
                connection.sock.send(_CONTINUE)
            connection.pieces = deque((_EXPECT.sub(b"", b"".join(connection.pieces)),))

    def _hand_over(self, connection: Connection) -> None:
        self._forget(connection)
        self.enqueue_req(connection)

    def enqueue_req(self, connection: Connection) -> None:
        probe = bool(connection.pieces) and connection.pieces[0].startswith(_PROBES)
        future = (self._probes if probe else self.tpool).submit(self.handle, connection)
        future.add_done_callback(lambda done: self.method_queue.defer(self.finish_request, connection, done))

    def handle_request(self, request: Any, connection: Connection) -> Any:
        ARRIVAL.at = connection.heard
        if connection.framing.streamed:
            request.force_close()  # where its body ends need not be known
        return super().handle_request(request, connection)

    def _forget(self, connection: Connection) -> None:
        self._gathering.discard(connection)
        with suppress(KeyError, ValueError):
            self.poller.unregister(connection.sock)

    # Going -------------------------------------------------------------------------------------------

    def finish_request(self, connection: Connection, future: Any) -> None:
        """What a thread is done with: the next request of the connection, or its end."""
        try:
            going_on = not future.cancelled() and bool(future.result())
        except Exception:
            going_on = False
        if going_on and not connection.framing.streamed and not connection.ended:
            connection.left = connection.parser.unreader.take_buffered() + connection.left
            connection.sock.setblocking(False)
            self._held -= connection.held
            self._gather(connection)
            if not self.alive:
                connection.timeout = min(connection.timeout, time.monotonic() + LINGER_SECONDS)
        else:
            self._linger(connection)

    def _refuse(self, connection: Connection, problem: problems.Problem) -> None:
        self._forget(connection)
        with suppress(OSError):
            connection.sock.send(_raw(problem))
        self._linger(connection)

    def _linger(self, connection: Connection) -> None:
        """Closes a connection when the client has, or shortly: at once it could lose the answer on its way."""
        client = connection.sock
        self._held -= connection.held
        connection.held = 0
        try:
            client.setblocking(False)
            client.shutdown(socket.SHUT_WR)
            self.poller.register(client, selectors.EVENT_READ, self._discard)
        except (OSError, ValueError, KeyError):
            self._drop(connection)
            return
        self._lingering[client] = (connection, time.monotonic() + LINGER_SECONDS)

    def _discard(self, client: socket.socket) -> None:
        try:
            if client.recv(_MOST_READ):
                return
        except (BlockingIOError, InterruptedError):
            return
        except OSError:
            pass
        connection, _ = self._lingering.pop(client)
        self._drop(connection)

    def _drop(self, connection: Connection) -> None:
        self._forget(connection)
        self._held -= connection.held
        self.nr_conns -= 1
        connection.close()

    def murder_pending(self) -> None:
        """Gives up what has waited too long; called at every turn of the event loop."""
        now = time.monotonic()
        if now < self._swept + 0.25:
            return
        self._swept = now
        for connection in [one for one in self._gathering if one.due() <= now]:
            self._drop(connection)
        for client in [one for one, (_, due) in self._lingering.items() if due <= now]:
            connection, _ = self._lingering.pop(client)
            self._drop(connection)

    def _cap_keepalive(self, deadline: float) -> None:
        """A stopping worker keeps silent connections until then at the latest."""
        for connection in self._gathering:
            if connection.began is None:
                connection.timeout = min(connection.timeout, deadline)

    def set_accept_enabled(self, enabled: bool) -> None:
        super().set_accept_enabled(enabled)
        if not self.alive:
            # Left open, it would hold new connections, which nobody takes, until the last request is done.
            for listener in self.sockets:
                listener.close()

    def handle_error(self, _request: Any, client: socket.socket, _address: Any, error: Exception) -> None:
        if isinstance(error, ParseException):
            problem = problems.Problem(
                problems.BAD_REQUEST, "The request line, a header or the body's framing cannot be read."
            )
            self.log.warning("A request could not be read: %s", type(error).__name__)
        else:
            problem = problems.Problem(problems.INTERNAL)
            self.log.exception("A request could not be handled")
        if (metrics := self.wsgi.extensions["assignable.contract"].metrics) is not None:
            tally = Tally()
            tally.problem = problem
            metrics.request(OTHER, str(problem.kind.status), 0.0, tally)
        with suppress(OSError):
            client.settimeout(1)
            socket.socket.sendall(client, _raw(problem))


_REASONS = {400: "Bad Request", 500: "Internal Server Error", 503: "Service Unavailable"}


def _raw(problem: problems.Problem) -> bytes:
    """A problem as a whole answer, for what the application never sees."""
    request_id = str(uuid4())
    body = problem.body(request_id)
    more = "".join(f"{name}: {value}\r\n" for name, value in problem.headers)
    head = (
        f"HTTP/1.1 {problem.kind.status} {_REASONS[problem.kind.status]}\r\nConnection: close\r\n"
        f"Cache-Control: no-store\r\nX-Request-ID: {request_id}\r\nX-Content-Type-Options: nosniff\r\n{more}"
        f"Content-Type: {problems.MEDIA_TYPE}\r\nContent-Length: {len(body)}\r\n\r\n"
    )
    return head.encode() + body
