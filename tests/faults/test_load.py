"""More clients than places, workers that are killed, and a server that is told to stop."""

from __future__ import annotations

import http.client
import json
import os
import signal
import statistics
import threading
import time
from contextlib import closing

from faults.service import (
    PATIENCE_SECONDS,
    XBAR,
    Load,
    ask,
    expected,
    head_of,
    large_body,
    read_answer,
    request_of,
    serving,
)

WORKERS = 2
CLIENTS = 48
KILL_SECONDS = 60
BODY = request_of("xbar-r-limits")
BROKEN = (ConnectionError, http.client.HTTPException, TimeoutError)


def _exists(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    return True


def _gone(pids: list[int], seconds: float = 10) -> bool:
    until = time.monotonic() + seconds
    while any(map(_exists, pids)):
        if time.monotonic() > until:
            return False
        time.sleep(0.05)
    return True


def test_overload_is_refused_early_and_probes_are_not_kept_waiting() -> None:
    large = large_body(20_000)  # some hundred milliseconds of work
    with serving("--workers", str(WORKERS)) as service:
        whole = service.call("POST", XBAR, large).body
        found: list[tuple[int, float]] = []

        def client(_client: int, _turn: int) -> None:
            began = time.monotonic()
            answer = service.call("POST", XBAR, large)
            found.append((answer.status, time.monotonic() - began))
            if answer.status == 200:
                assert answer.body == whole
            else:
                assert answer.status == 503
                assert int(answer.headers["Retry-After"]) >= 1
                assert answer.problem()["type"] == "/problems/busy"

        probes = []
        with Load(CLIENTS, client):
            time.sleep(2)
            until = time.monotonic() + 10
            while time.monotonic() < until:
                began = time.monotonic()
                assert service.call("GET", "/health/live").status == 200
                probes.append(time.monotonic() - began)
                time.sleep(0.05)
        accepted = [seconds for status, seconds in found if status == 200]
        refused = [seconds for status, seconds in found if status == 503]
        median = statistics.median(probes)
        print(
            f"{len(accepted)} accepted, median {statistics.median(accepted):.2f} s; {len(refused)} refused, median "
            f"{statistics.median(refused):.2f} s; probes {median * 1e3:.0f} ms, slowest {max(probes) * 1e3:.0f} ms"
        )
        assert len(accepted) >= WORKERS
        assert refused
        # The machine that runs this does the clients' work too; without a queue of their own, probes took seconds.
        assert median < 0.05 or median < 0.25 * statistics.median(refused)
        # The queue is bounded: nobody waits much longer than the wait for a place.
        assert statistics.median(refused) < 3
        service.is_whole(WORKERS)


def test_killed_workers_cost_connections_and_never_a_wrong_answer() -> None:
    right = expected("xbar-r-limits")
    with serving("--workers", str(WORKERS), clean=False) as service:  # it says that workers were killed
        answered, broken = [0], [0]
        lock = threading.Lock()

        def client(_client: int, _turn: int) -> None:
            try:
                with closing(service.connection()) as connection:
                    for _ in range(20):
                        answer = ask(connection, "POST", XBAR, BODY)
                        if answer.status == 503:
                            answer.problem()
                            continue
                        assert (answer.status, answer.body) == (200, right)
                        with lock:
                            answered[0] += 1
            except BROKEN:  # clean: the connection ends, or there is none
                with lock:
                    broken[0] += 1
                time.sleep(0.01)

        killed = 0
        with Load(8, client) as load:
            until = time.monotonic() + KILL_SECONDS
            while time.monotonic() < until and not load.failures:
                time.sleep(1)
                workers = service.workers()
                if workers:
                    os.kill(workers[0], signal.SIGKILL)  # the eldest, one that this test's server started
                    killed += 1
        print(
            f"{killed} workers killed; {answered[0]} requests answered rightly, {broken[0]} connections broken"
        )
        assert killed >= KILL_SECONDS * 0.8
        assert answered[0] > 10 * killed
        assert broken[0]
        service.is_whole(WORKERS)


def test_sigterm_drains() -> None:
    large = large_body(100_000)
    with serving("--workers", str(WORKERS)) as service:
        whole = service.call("POST", XBAR, large).body
        workers = service.workers()
        with closing(service.connect()) as computing, closing(service.connect()) as sending:
            computing.sendall(head_of(XBAR, len(large)) + large)
            sending.sendall(head_of(XBAR, len(BODY)) + BODY[:100])
            time.sleep(0.3)
            service.process.send_signal(signal.SIGTERM)
            began = time.monotonic()
            refused_after = None
            while refused_after is None and time.monotonic() - began < 5:
                try:
                    service.connect(1).close()
                except ConnectionError:
                    refused_after = time.monotonic() - began
                except TimeoutError:
                    pass
                time.sleep(0.02)
            assert refused_after is not None
            assert service.process.poll() is None
            sending.sendall(BODY[100:])
            answer = read_answer(sending)
            assert (answer.status, answer.body) == (200, expected("xbar-r-limits"))
            answer = read_answer(computing)
            assert (answer.status, answer.body) == (200, whole)
        assert service.process.wait(PATIENCE_SECONDS) == 0
        took = time.monotonic() - began
        print(f"new connections refused after {refused_after * 1e3:.0f} ms; ended after {took:.1f} s")
        assert took < 30
        assert _gone(workers)


def test_sigterm_does_not_wait_for_the_idle_and_the_stalled() -> None:
    with serving("--workers", str(WORKERS)) as service:
        workers = service.workers()
        with (
            closing(service.connection()) as kept,
            closing(service.connect()),
            closing(service.connect()) as stalled,
        ):
            assert ask(kept, "POST", XBAR, BODY).status == 200
            stalled.sendall(head_of(XBAR, len(BODY)) + BODY[:100])
            time.sleep(0.2)
            began = time.monotonic()
            assert service.stop() == 0
            assert time.monotonic() - began < 20
        assert _gone(workers)


# A soak --------------------------------------------------------------------------------------------


def test_memory_is_flat_under_mixed_load() -> None:
    """SOAK_SECONDS in the environment of the tests makes it longer than its 30 seconds."""
    seconds = float(os.environ.get("SOAK_SECONDS", "30"))
    mixed = [
        ("xbar-r-limits", "/v1/charts/xbar-r/limits"),
        ("individuals-limits", "/v1/charts/individuals/limits"),
        ("ewma-signals", "/v1/charts/ewma/signals"),
        ("capability-measurements", "/v1/capability/measurements"),
        ("release-checks", "/v1/release-checks"),
        ("designs-subgroups", "/v1/designs/subgroups"),
    ]
    large = large_body(2_000)
    with serving("--workers", str(WORKERS)) as service:
        whole = service.call("POST", XBAR, large).body
        count = [0] * 4

        def client(number: int, turn: int) -> None:
            with closing(service.connection()) as connection:
                for at in range(50):
                    name, path = mixed[(turn + at + number) % len(mixed)]
                    answer = ask(connection, "POST", path, request_of(name))
                    assert answer.status == 503 or (answer.status, answer.body) == (200, expected(name))
                    count[number] += 1
                bad = ask(connection, "POST", XBAR, json.dumps({f"field{turn}": turn}).encode())
                assert bad.status in (422, 503)
                answer = ask(connection, "POST", XBAR, large)
                assert answer.status == 503 or (answer.status, answer.body) == (200, whole)

        taken: list[int] = []
        began = time.monotonic()
        with Load(4, client) as load:
            while time.monotonic() - began < seconds and not load.failures:
                time.sleep(max(seconds / 30, 0.5))
                taken.append(service.memory())
        third = len(taken) // 3
        early, late = statistics.median(taken[third : 2 * third]), statistics.median(taken[2 * third :])
        print(
            f"{seconds:.0f} s, {sum(count)} requests: {taken[0] / 1e6:.0f} MB at first, median of the middle third "
            f"{early / 1e6:.0f} MB, of the last {late / 1e6:.0f} MB"
        )
        assert sum(count) > 10 * seconds
        assert late < early * 1.05 + 8e6
        service.is_whole(WORKERS)
