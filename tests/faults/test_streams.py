"""Streams of lines on the real server: memory stays flat, others are answered meanwhile, places are given back."""

from __future__ import annotations

import json
import socket
import statistics
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack, closing

import pytest

from assignable.cli import worker
from contract import served
from faults.service import XBAR, Service, expected, large_body, request_of, serving

MEGABYTES = 60
MOST_GROWTH = 100  # MB: blocks, held answers, and what the allocator keeps; a fraction of what goes through
THREADS = 4
HEAD = (
    b"POST /v1/bulk%s HTTP/1.1\r\nHost: test\r\nContent-Type: application/x-ndjson\r\n"
    b"Transfer-Encoding: chunked\r\n\r\n"
)
LINE = json.dumps({"operation": "fitCLimits", "body": served.example("c-limits")}).encode() + b"\n"


@pytest.fixture(scope="module")
def service() -> Iterator[Service]:
    with serving("--workers", "1", "--threads", str(THREADS)) as started:
        yield started


def chunk(data: bytes) -> bytes:
    return b"%x\r\n%s\r\n" % (len(data), data)


def begun(service: Service, stack: ExitStack, path: bytes = b"") -> socket.socket:
    """A stream that has had its first line, and no more."""
    client = stack.enter_context(closing(service.connect()))
    client.sendall(HEAD % path + chunk(LINE))
    return client


def test_memory_is_flat_and_others_are_answered_while_much_goes_through(service: Service) -> None:
    rows = json.loads(large_body(20_000))["data"]["values"]
    line = json.dumps({"operation": "fitXbarRLimits", "body": {"data": {"values": rows}}}).encode() + b"\n"
    before = service.memory()
    told, tail, seconds, largest = 0, b"", [], before
    single = request_of("xbar-r-limits")
    with closing(service.connect(60)) as client:

        def read() -> None:
            nonlocal told, tail
            while not tail.endswith(b"0\r\n\r\n") and (part := client.recv(262_144)):
                told += len(part)
                tail = (tail + part)[-400:]

        reading = threading.Thread(target=read)
        reading.start()
        client.sendall(HEAD % b"")
        sent = 0
        while sent < MEGABYTES * 1_000_000:
            client.sendall(chunk(line))
            sent += len(line)
            began = time.monotonic()
            answer = service.call("POST", XBAR, single)
            seconds.append(time.monotonic() - began)
            assert (answer.status, answer.body) == (200, expected("xbar-r-limits"))
            largest = max(largest, service.memory())
        client.sendall(b"0\r\n\r\n")
        reading.join(60)
    count = len(seconds)
    assert b'{"done":true,"lines":%d,"answered":%d,"problems":0}' % (count, count) in tail
    print(
        f"{sent / 1e6:.0f} MB in, {told / 1e6:.0f} MB out, memory +{(largest - before) / 1e6:.0f} MB; a call "
        f"meanwhile {1e3 * statistics.median(seconds):.0f} ms, slowest {1e3 * max(seconds):.0f} ms"
    )
    assert told > sent
    assert largest - before < MOST_GROWTH * 1_000_000


def test_a_stream_that_is_left_gives_its_place_back(service: Service) -> None:
    for _ in range(3):
        with ExitStack() as stack:
            for _ in range(THREADS // 2):
                begun(service, stack)
            time.sleep(0.2)
            assert service.call("POST", XBAR, request_of("xbar-r-limits")).status == 200
        until = time.monotonic() + 5
        while True:
            answer = service.call("POST", "/v1/bulk", LINE, **{"Content-Type": "application/x-ndjson"})
            if answer.status == 200:
                break
            assert answer.status == 503
            assert time.monotonic() < until
            time.sleep(0.05)


def test_a_stream_that_falls_silent_is_told_so_and_ends(service: Service) -> None:
    with ExitStack() as stack:
        client = begun(service, stack, b"/signals")
        client.settimeout(2 * worker.SILENCE_SECONDS)
        whole = b""
        while part := client.recv(65_536):
            whole += part
        assert b'"done":false' in whole
        assert b"could not be read to its end" in whole
