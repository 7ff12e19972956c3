"""Clients that stall, trickle, or do not read: what the service does by itself; behind the proxy, tests/docker."""

from __future__ import annotations

import socket
import statistics
import time
from collections.abc import Iterator
from contextlib import ExitStack, closing

import pytest

from assignable.cli import worker
from faults.service import (
    PATIENCE_SECONDS,
    XBAR,
    Service,
    expected,
    head_of,
    large_body,
    read_answer,
    request_of,
    serving,
)

WORKERS = 2
STALLS = 40
BODY = request_of("xbar-r-limits")


@pytest.fixture(scope="module")
def service() -> Iterator[Service]:
    with serving("--workers", str(WORKERS)) as started:
        yield started


def stalled(service: Service, sent: bytes, count: int, stack: ExitStack) -> list[socket.socket]:
    """Clients that have sent so much, and no more."""
    clients = [stack.enter_context(closing(service.connect())) for _ in range(count)]
    for client in clients:
        client.sendall(sent)
    return clients


def answers_quickly(service: Service, calls: int = 20) -> float:
    """Calls, each right; the median of their seconds."""
    took = []
    for _ in range(calls):
        began = time.monotonic()
        answer = service.call("POST", XBAR, BODY, timeout=5)
        took.append(time.monotonic() - began)
        assert (answer.status, answer.body) == (200, expected("xbar-r-limits"))
    return statistics.median(took)


def ended(client: socket.socket, seconds: float) -> bool:
    """Whether the server ends this connection within so many seconds."""
    client.settimeout(seconds)
    try:
        while client.recv(65536):
            pass
    except TimeoutError:
        return False
    except OSError:
        pass
    return True


def test_stalled_heads_and_bodies_keep_nobody_waiting(service: Service) -> None:
    quiet = answers_quickly(service)
    began = time.monotonic()
    chunked = head_of(XBAR, 0).replace(b"Content-Length: 0", b"Transfer-Encoding: chunked")
    with ExitStack() as stack:
        clients = [
            *stalled(service, b"POST " + XBAR.encode() + b" HTTP/1.1\r\nHost: he", STALLS, stack),
            *stalled(service, head_of(XBAR, len(BODY)) + BODY[:100], STALLS, stack),
            *stalled(service, chunked + b"400\r\n" + BODY[:100], STALLS, stack),
            *stalled(service, b"", STALLS, stack),
        ]
        during = answers_quickly(service)
        print(f"median {quiet * 1e3:.1f} ms quiet, {during * 1e3:.1f} ms with {len(clients)} clients stalled")
        assert during < max(10 * quiet, 0.25)
        # They are given up in bounded time; the silent ones at the end of what a kept connection may be idle.
        bound = max(worker.HEAD_SECONDS, worker.SILENCE_SECONDS, 15) + 5
        for client in clients:
            assert ended(client, max(0.1, began + bound - time.monotonic()))
    service.is_whole(WORKERS)


def test_one_byte_a_second_is_served_or_given_up_and_hurts_nobody(service: Service) -> None:
    head = head_of(XBAR, len(BODY))
    with ExitStack() as stack:
        slow_heads = stalled(service, head[:1], STALLS, stack)
        slow_bodies = stalled(service, head + BODY[:-3], STALLS, stack)
        gone: set[socket.socket] = set()
        for second in range(1, int(worker.HEAD_SECONDS) + 4):
            time.sleep(1)
            for client in slow_heads:
                try:
                    client.sendall(head[second : second + 1])
                except OSError:
                    gone.add(client)
            if second <= 3:
                for client in slow_bodies:
                    client.sendall(BODY[len(BODY) - 4 + second :][:1])
            assert answers_quickly(service, 3) < 0.5
        for client in slow_bodies:  # slow, and whole in the end
            answer = read_answer(client)
            assert (answer.status, answer.body) == (200, expected("xbar-r-limits"))
        for client in slow_heads:
            assert client in gone or ended(client, 2)


def test_who_does_not_read_the_answer_keeps_no_place_to_compute(service: Service) -> None:
    """An answer of megabytes is on its way to clients that do not read: fewer than there are threads."""
    body = large_body(20_000)
    with ExitStack() as stack:
        clients = []
        for _ in range(WORKERS * 2):
            client = stack.enter_context(closing(socket.socket()))
            client.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4096)
            client.settimeout(PATIENCE_SECONDS)
            client.connect(("127.0.0.1", service.port))
            client.sendall(head_of(XBAR, len(body)) + body)
            clients.append(client)
        time.sleep(2)
        assert answers_quickly(service) < 0.5
    service.is_whole(WORKERS)


def test_the_bound_on_sending(monkeypatch: pytest.MonkeyPatch) -> None:
    """In all, not anew with each byte: who reads just enough to seem alive is given up too."""
    monkeypatch.setattr(worker, "SEND_SECONDS", 1.0)
    ours, theirs = socket.socketpair()
    with closing(theirs), closing(worker.Client(fileno=ours.detach())) as client:
        began = time.monotonic()
        with pytest.raises(ConnectionResetError):
            client.sendall(b"x" * 10_000_000)
        assert 0.9 < time.monotonic() - began < 10


def test_a_large_answer_reaches_a_slow_reader_whole(service: Service) -> None:
    body = large_body(20_000)
    with closing(service.connect()) as client:
        client.sendall(head_of(XBAR, len(body)) + body)
        time.sleep(3)
        answer = read_answer(client)
    assert answer.status == 200
    assert len(answer.json()["baseline"]["panels"]["mean"]["value"]) == 20_000


def test_too_much_that_is_half_there_is_refused_as_busy() -> None:
    """Bodies that are still coming are held in memory, within a bound."""
    mib = 1024 * 1024
    with (
        serving("--workers", "1", ASSIGNABLE_THREADS="2", ASSIGNABLE_MAX_BODY_BYTES=str(8 * mib)) as service,
        ExitStack() as stack,
    ):
        before = service.memory()
        clients = stalled(service, head_of(XBAR, 8 * mib), 6, stack)
        refused = 0
        for client in clients:
            try:
                client.sendall(b" " * (6 * mib))
            except OSError:
                refused += 1
                continue
            client.settimeout(1)
            try:
                found = read_answer(client)
            except OSError:
                continue
            assert found.status == 503
            assert found.headers["Retry-After"]
            found.problem()
            refused += 1
        assert refused >= 3
        assert service.memory() - before < 64 * mib
        assert answers_quickly(service) < 0.5
