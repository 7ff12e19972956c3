"""What comes over the wire and is no clean request: bodies too long or too short, bombs, garbage, smuggling."""

from __future__ import annotations

import gzip
import http.client
import json
import socket
import time
import zlib
from collections.abc import Iterator
from contextlib import closing

import pytest

from faults.service import XBAR, Answer, Service, ask, expected, head_of, read_answer, request_of, serving

WORKERS = 2
MIB = 1024 * 1024
LIMIT = 2 * MIB
BODY = request_of("xbar-r-limits")
HEALTH = b"GET /health/live HTTP/1.1\r\nHost: here\r\n\r\n"


@pytest.fixture(scope="module")
def service() -> Iterator[Service]:
    limits = {"ASSIGNABLE_MAX_BODY_BYTES": str(LIMIT), "ASSIGNABLE_MAX_INFLATED_BYTES": str(LIMIT)}
    with serving("--workers", str(WORKERS), **limits) as started:
        yield started
        started.is_whole(WORKERS)


def chunked_head(*more: str) -> bytes:
    lines = (
        f"POST {XBAR} HTTP/1.1",
        "Host: here",
        "Content-Type: application/json",
        "Transfer-Encoding: chunked",
        *more,
    )
    return "\r\n".join((*lines, "", "")).encode()


def chunks(body: bytes, size: int = 1000) -> bytes:
    parts = [body[at : at + size] for at in range(0, len(body), size)]
    return b"".join(b"%x\r\n%s\r\n" % (len(part), part) for part in parts) + b"0\r\n\r\n"


def is_right(answer: Answer) -> None:
    assert (answer.status, answer.body) == (200, expected("xbar-r-limits"))


def is_answered_by(client: socket.socket) -> list[Answer]:
    """All answers until the connection ends or falls silent."""
    found = []
    client.settimeout(5)
    while True:
        try:
            found.append(read_answer(client))
        except (OSError, http.client.HTTPException):
            return found


# Bodies ---------------------------------------------------------------------------------------------


def test_chunked_bodies_are_whole_and_the_connection_is_kept(service: Service) -> None:
    with closing(service.connect()) as client:
        for size in (1, 7, 100_000):
            client.sendall(chunked_head() + chunks(BODY, size))
            is_right(read_answer(client))
        client.sendall(head_of(XBAR, len(BODY)) + BODY)
        is_right(read_answer(client))


def test_trailers_are_read_or_refused_and_are_no_request(service: Service) -> None:
    for trailer in (
        b"X-Check: 1\r\n",
        b"nothing\r\n",
        b"Content-Length: 5\r\n",
        b"X: " + b"x" * 9000 + b"\r\n",
    ):
        with closing(service.connect()) as client:
            client.sendall(chunked_head() + chunks(BODY)[:-2] + trailer + b"\r\n" + HEALTH)
            first, *_ = is_answered_by(client)
            if first.status != 200:
                assert first.status == 400
                first.problem()
            else:
                is_right(first)


@pytest.mark.parametrize("over", [1, 1000, LIMIT])
def test_a_chunked_body_over_the_bound_is_refused_and_never_cut(service: Service, over: int) -> None:
    """Padded at its end: cut at the bound it would be a whole request, with another answer."""
    body = BODY + b" " * (LIMIT - len(BODY) + over)
    with closing(service.connect()) as client:
        try:
            client.sendall(chunked_head() + chunks(body, 50_000))
        except OSError:
            return  # refused while it was still being sent
        answers = is_answered_by(client)
    assert [answer.status for answer in answers] in ([413], [])
    for answer in answers:
        assert answer.problem()["type"] == "/problems/content-too-large"
    assert service.call("POST", XBAR, BODY).status == 200


def test_a_chunked_body_of_just_the_bound_is_taken(service: Service) -> None:
    body = BODY + b" " * (LIMIT - len(BODY))
    with closing(service.connect()) as client:
        client.sendall(chunked_head() + chunks(body, 50_000))
        assert read_answer(client).status == 200


def test_a_long_body_is_refused_before_it_is_sent(service: Service) -> None:
    with closing(service.connect()) as client:
        client.sendall(head_of(XBAR, LIMIT + 1))
        answer = read_answer(client)
        assert answer.problem()["type"] == "/problems/content-too-large"
        assert answer.headers["Connection"] == "close"


def test_a_body_shorter_than_announced_is_no_request(service: Service) -> None:
    for head in (head_of(XBAR, len(BODY) + 10), chunked_head() + b"%x\r\n" % (len(BODY) + 10)):
        with closing(service.connect()) as client:
            client.sendall(head + BODY)
            client.shutdown(socket.SHUT_WR)
            for answer in is_answered_by(client):
                assert answer.status == 400
                answer.problem()


def test_what_was_not_read_is_not_taken_for_the_next_request(service: Service) -> None:
    """A refusal before the body is read leaves a body that looks like a request of its own."""
    hidden = b"POST " + XBAR.encode() + b" HTTP/1.1\r\nHost: here\r\nContent-Length: 0\r\n\r\n"
    with closing(service.connect()) as client:
        head = head_of(XBAR, len(hidden)).replace(b"application/json", b"text/plain")
        client.sendall(head + hidden + HEALTH)
        statuses = [answer.status for answer in is_answered_by(client)]
    assert statuses in ([415, 200], [415])


def test_expect_continue(service: Service) -> None:
    with closing(service.connect()) as client:
        client.sendall(head_of(XBAR, len(BODY), "Expect: 100-continue"))
        client.settimeout(5)
        assert client.recv(100).startswith(b"HTTP/1.1 100 Continue\r\n\r\n")
        client.sendall(BODY)
        is_right(read_answer(client))
        client.sendall(HEALTH)
        assert read_answer(client).status == 200


# Bombs ----------------------------------------------------------------------------------------------


def _bomb(megabytes: int) -> bytes:
    packer = zlib.compressobj(9, zlib.DEFLATED, 31)
    parts = [packer.compress(b" " * MIB) for _ in range(megabytes)]
    return b"".join((*parts, packer.flush()))


def test_bombs_are_bounded_in_memory_and_time(service: Service) -> None:
    once = _bomb(1000)
    members = gzip.compress(BODY) + _bomb(500)
    nested = gzip.compress(gzip.compress(_bomb(1000)))
    before = service.memory()
    for body, statuses in (
        (once, (413,)),
        (members, (400, 413)),
        (nested, (400,)),
        (members * 3, (400, 413)),
    ):
        began = time.monotonic()
        for _ in range(8):
            answer = service.call("POST", XBAR, body, **{"Content-Encoding": "gzip"})
            assert answer.status in statuses
            answer.problem()
        assert time.monotonic() - began < 8
    grown = service.memory() - before
    print(f"workers grew by {grown / 1e6:.1f} MB over 32 bombs of up to 1000 MB")
    assert grown < WORKERS * 16 * MIB
    is_right(service.call("POST", XBAR, gzip.compress(BODY), **{"Content-Encoding": "gzip"}))


# Garbage --------------------------------------------------------------------------------------------

_POST = f"POST {XBAR} HTTP/1.1\r\nHost: here\r\nContent-Type: application/json\r\n".encode()
_SMUGGLED = b"GET /v1/factors?size=5 HTTP/1.1\r\nHost: here\r\n\r\n"

GARBAGE: dict[str, bytes] = {
    "no http": b"NOT HTTP\r\n\r\n",
    "binary": bytes(range(256)) + b"\r\n\r\n",
    "tls": bytes.fromhex("16030100c8010000c40303") + bytes(200) + b"\r\n\r\n",
    "http 0.9": b"GET /\r\n\r\n",
    "http 2": b"PRI * HTTP/2.0\r\n\r\nSM\r\n\r\n",
    "http 9": b"GET / HTTP/9.9\r\nHost: here\r\n\r\n",
    "long line": b"GET /" + b"x" * 20_000 + b" HTTP/1.1\r\nHost: here\r\n\r\n",
    "long header": b"GET / HTTP/1.1\r\nHost: here\r\nX: " + b"x" * 30_000 + b"\r\n\r\n",
    "many headers": b"GET / HTTP/1.1\r\nHost: here\r\n" + b"X: 1\r\n" * 500 + b"\r\n",
    "endless headers": b"GET / HTTP/1.1\r\n" + b"X: " + b"x" * 200_000,
    "bad header": b"GET / HTTP/1.1\r\nHost: here\r\nBad Header: 1\r\n\r\n",
    "no colon": b"GET / HTTP/1.1\r\nHost: here\r\nNothing\r\n\r\n",
    "null in a header": b"GET / HTTP/1.1\r\nHost: here\r\nX: a\0b\r\n\r\n",
    "space before the colon": _POST + b"Content-Length : 2\r\n\r\n{}",
    "length and coding": _POST
    + b"Content-Length: 5\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n"
    + _SMUGGLED,
    "coding and length": _POST
    + b"Transfer-Encoding: chunked\r\nContent-Length: 5\r\n\r\n0\r\n\r\n"
    + _SMUGGLED,
    "two lengths": _POST + b"Content-Length: 2\r\nContent-Length: 60\r\n\r\n{}" + _SMUGGLED,
    "equal lengths": _POST + b"Content-Length: 2\r\nContent-Length: 2\r\n\r\n{}" + _SMUGGLED,
    "lengths in a list": _POST + b"Content-Length: 2, 2\r\n\r\n{}" + _SMUGGLED,
    "negative length": _POST + b"Content-Length: -2\r\n\r\n{}" + _SMUGGLED,
    "signed length": _POST + b"Content-Length: +2\r\n\r\n{}" + _SMUGGLED,
    "length in hexadecimal": _POST + b"Content-Length: 0x2\r\n\r\n{}" + _SMUGGLED,
    "length with an underscore": _POST + b"Content-Length: 1_0\r\n\r\n{}" + _SMUGGLED,
    "huge length": _POST + b"Content-Length: 99999999999999999999\r\n\r\n{}" + _SMUGGLED,
    "folded header": _POST + b"Content-Length: 2\r\nX: a\r\n b\r\n\r\n{}" + _SMUGGLED,
    "folded coding": _POST + b"Transfer-Encoding:\r\n chunked\r\n\r\n0\r\n\r\n" + _SMUGGLED,
    "obscured coding": _POST + b"Transfer-Encoding: xchunked\r\n\r\n0\r\n\r\n" + _SMUGGLED,
    "doubled coding": _POST + b"Transfer-Encoding: chunked, chunked\r\n\r\n0\r\n\r\n" + _SMUGGLED,
    "repeated coding": _POST
    + b"Transfer-Encoding: chunked\r\nTransfer-Encoding: identity\r\n\r\n0\r\n\r\n"
    + _SMUGGLED,
    "chunk of no size": _POST + b"Transfer-Encoding: chunked\r\n\r\n\r\n" + _SMUGGLED,
    "chunk of a bad size": _POST + b"Transfer-Encoding: chunked\r\n\r\nxyz\r\n{}\r\n0\r\n\r\n" + _SMUGGLED,
    "chunk of a negative size": _POST
    + b"Transfer-Encoding: chunked\r\n\r\n-2\r\n{}\r\n0\r\n\r\n"
    + _SMUGGLED,
    "chunk of a huge size": _POST
    + b"Transfer-Encoding: chunked\r\n\r\nffffffffffffffff1\r\n{}\r\n"
    + _SMUGGLED,
    "chunk longer than its size": _POST
    + b"Transfer-Encoding: chunked\r\n\r\n1\r\n{}\r\n0\r\n\r\n"
    + _SMUGGLED,
    "chunk ended by a line feed": _POST + b"Transfer-Encoding: chunked\r\n\r\n2\n{}\n0\n\n" + _SMUGGLED,
    "bad trailer": _POST + b"Transfer-Encoding: chunked\r\n\r\n2\r\n{}\r\n0\r\nnothing\r\n\r\n" + _SMUGGLED,
    "line feeds alone": b"GET /health/live HTTP/1.1\nHost: here\n\n" + _SMUGGLED,
    "empty lines": b"\r\n\r\n\r\n" + _SMUGGLED,
    "garbage after a request": HEALTH + b"\0\1\2garbage\r\n\r\n" + _SMUGGLED,
}
# After which a second request may rightly be answered: both sides agree where the first one ended.
AGREED = {"equal lengths", "folded header", "empty lines", "line feeds alone", "no http", "bad trailer"}


@pytest.mark.parametrize("shape", GARBAGE)
def test_garbage_is_refused_and_hides_no_request(service: Service, shape: str) -> None:
    with closing(service.connect()) as client:
        try:
            client.sendall(GARBAGE[shape])
            client.shutdown(socket.SHUT_WR)
        except OSError:
            pass
        answers = is_answered_by(client)
    for answer in answers:
        if answer.status != 200:
            answer.problem()
    good = [json.loads(answer.body) for answer in answers if answer.status == 200]
    if shape == "garbage after a request":
        assert good[:1] == [{"status": "live"}] or answers[0].status == 200
        good = good[1:]
    if shape not in AGREED:
        assert not good, answers
    is_right(service.call("POST", XBAR, BODY))


def test_pipelined_requests_are_answered_in_order(service: Service) -> None:
    wrong = b'{"data": 1}'
    with closing(service.connect()) as client:
        client.sendall(
            head_of(XBAR, len(BODY))
            + BODY
            + head_of(XBAR, len(wrong))
            + wrong
            + chunked_head()
            + chunks(BODY)
            + HEALTH
        )
        is_right(read_answer(client))
        assert read_answer(client).status == 422
        is_right(read_answer(client))
        assert read_answer(client).status == 200


def test_requests_byte_by_byte_are_the_same_requests(service: Service) -> None:
    with closing(service.connect()) as client:
        client.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        for request in (HEALTH, chunked_head() + chunks(b'{"data": 1}', 3), HEALTH):
            for at in range(len(request)):
                client.sendall(request[at : at + 1])
            assert read_answer(client).status == (200 if request is HEALTH else 422)


def test_a_kept_connection_outlives_refusals(service: Service) -> None:
    with closing(service.connection()) as connection:
        for path, status in (("/v1/nothing", 404), (XBAR, 422), ("/v1/factors", 405)):
            assert ask(connection, "POST", path, b"{}").status == status
        is_right(ask(connection, "POST", XBAR, BODY))
