"""Ten thousand bodies that are nearly right: each is answered, or refused with a clear problem; nothing grows."""

from __future__ import annotations

import copy
import json
import os
import random
import threading
import time
from collections.abc import Iterator
from contextlib import closing
from typing import Any

import pytest

from assignable.api import answers
from assignable.api.contract import Operation
from contract import served
from faults.service import Service, ask, serving

BODIES = int(os.environ.get("FUZZ_BODIES", "10000"))
SEED = 20260302
WORKERS = 2
CLIENTS = 4
LARGEST = 200_000  # bytes of a body; larger ones have tests of their own
IDLE_SECONDS = 5
GROWTH = 50_000_000  # bytes a worker
FILLED = 300_000_000  # bytes a worker, caches and what is loaded late included

EXTREMES: tuple[Any, ...] = (
    0, -0.0, 1, -1, 2, 0.5, 1e-300, -1e-300, 1e300, -1e300, 1e301, 1e15, 1e-15, 2**53, 2**53 - 1, -(2**63), 10**30,
    5e-324, 0.1, 1e5, 3, 1000, 1001, 199_999, 1e-12, 0.9999999999999999,
)  # fmt: skip
ODDITIES: tuple[Any, ...] = (
    None, True, False, "", "1", "NaN", "\u00e9\u4e2d\U0001f600", "\ud800", "a" * 300, "\x00", [], {}, [[]], [None], [1],
    {"a": 1}, [[1, 2], [3]], [[[1]]], {"values": []},
)  # fmt: skip


def _places(body: Any) -> list[tuple[Any, Any]]:
    """Every place inside: what holds it, and its key or index."""
    found: list[tuple[Any, Any]] = []
    todo = [body]
    while todo:
        here = todo.pop()
        inside = here.items() if isinstance(here, dict) else enumerate(here) if isinstance(here, list) else ()
        for key, value in inside:
            found.append((here, key))
            todo.append(value)
    return found


def mutated(body: Any, draw: random.Random) -> bytes:
    """A body as sent, changed in one to four ways; sometimes no JSON any more."""
    made = copy.deepcopy(body)
    for _ in range(draw.choice((1, 1, 1, 2, 4))):
        places = _places(made)
        if not places:
            break
        holder, key = draw.choice(places)
        value = holder[key]
        way = draw.randrange(9)
        if way == 0:
            holder[key] = draw.choice(EXTREMES)
        elif way == 1:
            holder[key] = draw.choice(ODDITIES)
        elif way == 2:
            if isinstance(holder, dict):
                del holder[key]
            else:
                holder.pop(key)
        elif way == 3 and isinstance(holder, dict):
            holder[key + draw.choice("sx_")] = copy.deepcopy(value)
        elif way == 3:
            holder.insert(key, copy.deepcopy(value))
        elif way == 4 and isinstance(value, list) and value:
            simple = not any(isinstance(one, (list, dict)) for one in value)
            holder[key] = (value * (draw.choice((2, 3, 50, 2000)) // len(value) + 1))[
                : 5000 if simple else 20
            ]
        elif way == 4:
            holder[key] = [value]
        elif way == 5:
            deep: Any = value
            for _ in range(draw.choice((2, 50, 200))):
                deep = [deep] if draw.random() < 0.5 else {"values": deep}
            holder[key] = deep
        elif way == 6 and isinstance(value, (int, float)) and not isinstance(value, bool):
            holder[key] = draw.choice(
                (-value, value * 1e6, value / 1e6, value + 1, value * 1e150, int(value))
            )
        elif way == 7 and isinstance(value, list):
            number = draw.choice(EXTREMES)
            holder[key] = [number if isinstance(one, (int, float)) else one for one in value]
        else:
            other = draw.choice(places)
            holder[key] = copy.deepcopy(other[0][other[1]])
    written = json.dumps(made).encode()  # half characters and all
    if len(written) > LARGEST:
        written = json.dumps(body).encode()
    way = draw.randrange(12)
    if way == 0:
        at = draw.randrange(len(written))
        written = written[:at] + bytes((draw.randrange(256),)) + written[at + 1 :]
    elif way == 1:
        written = written[: draw.randrange(len(written))]
    elif way == 2:
        written = (
            written.replace(b'"', b'"data":1,"', 1) if draw.random() < 0.5 else written[:-1] + b',"data":1}'
        )
    elif way == 3:
        at = draw.randrange(len(written))
        written = written[:at] + written[draw.randrange(len(written)) :]
    return written


def _subjects() -> list[tuple[Operation, Any]]:
    """Every operation that takes a body with each of its examples; pictures take those of the operations they draw."""
    return [
        (operation, served.example(name))
        for operation in served.operations().values()
        if operation.method == "POST"
        for name in operation.examples
    ]


@pytest.fixture(scope="module")
def service() -> Iterator[Service]:
    # Long enough that what is refused is refused for what it is.
    with serving("--workers", str(WORKERS), ASSIGNABLE_SLOT_WAIT_SECONDS="30") as started:
        yield started


def _fault(operation: Operation, body: bytes, status: int, content_type: str, answer: bytes) -> str | None:
    """What is wrong with an answer, if anything."""
    if b"Traceback" in answer:
        return "a trace"
    if status == 200:
        if operation.media_type == answers.SVG:
            return None if answer.startswith(b"<svg") else "no picture"
        json.loads(answer, parse_constant=lambda text: pytest.fail(text))
        return None
    if status >= 500 or content_type != "application/problem+json":
        return f"{status} {content_type}"
    members = json.loads(answer)
    if status == 422 and not members.get("errors"):
        return "no errors"
    try:
        sent = json.loads(body)
    except (ValueError, RecursionError):
        return None if status in (400, 422) else f"{status} for what is no JSON"
    if status == 422:
        for entry in members["errors"]:
            if not served.resolves(entry["pointer"], sent):
                return f"{entry} leads nowhere"
    return None


def test_ten_thousand_bodies(service: Service) -> None:
    subjects = _subjects()
    faults: list[tuple[str, str, bytes]] = []
    statuses: dict[int, int] = {}
    memory: list[int] = []
    lock = threading.Lock()

    def client(number: int) -> None:
        connection, heard = service.connection(), time.monotonic()
        for at in range(number, BODIES, CLIENTS):
            operation, example = subjects[at % len(subjects)]
            body = b""
            if (
                time.monotonic() > heard + IDLE_SECONDS
            ):  # the server may end a connection that was idle for long
                connection.close()
            try:
                body = mutated(example, random.Random(SEED + at))
                answer = ask(connection, "POST", operation.path, body)
                found = _fault(
                    operation, body, answer.status, answer.headers["Content-Type"] or "", answer.body
                )
                status, heard = answer.status, time.monotonic()
            except Exception as error:
                found, status = f"{type(error).__name__}: {error}", 0
                connection.close()
                connection = service.connection()
            with lock:
                statuses[status] = statuses.get(status, 0) + 1
                if found is not None:
                    faults.append((operation.operation_id, found, body[:2000]))
            if number == 0 and at // CLIENTS == BODIES // CLIENTS // 2:
                memory.append(service.memory())
        connection.close()

    before = service.memory()
    threads = [threading.Thread(target=client, args=(number,)) for number in range(CLIENTS)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    after = service.memory()
    print(
        f"{BODIES} bodies, {len(faults)} faults, by status {dict(sorted(statuses.items()))}; memory "
        f"{before / 1e6:.0f} MB, half way {memory[0] / 1e6:.0f} MB, at the end {after / 1e6:.0f} MB"
    )
    folder = os.environ.get("FUZZ_FAULTS")
    if folder:
        with open(os.path.join(folder, "faults.json"), "w") as file:
            json.dump([(name, found, body.decode("latin-1")) for name, found, body in faults], file)
    assert not faults, faults[:5]
    assert statuses[200] > BODIES / 20  # many are still good, and are computed
    # The first half fills caches, which are bounded; the second finds them full.
    assert after - memory[0] < WORKERS * GROWTH
    assert after - before < WORKERS * FILLED
    with closing(service.connection()) as connection:
        assert ask(connection, "GET", "/health/ready").status == 200
