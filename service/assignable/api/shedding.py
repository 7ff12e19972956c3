"""A bound on the calculations a worker does at once; more than that is refused at once, not queued.

The wait for a place is short, and counts from when the request came: under load the accepted requests stay
quick, the refused ones hear so early, and the health probes need no place at all.
"""

from __future__ import annotations

import threading
from queue import Empty, SimpleQueue
from time import monotonic
from types import TracebackType

from .problems import BUSY, Problem


class _Arrival(threading.local):
    at: float | None = None


ARRIVAL = _Arrival()
"""When the request that this thread answers had come, by the monotonic clock; a server with a queue of its own
says so, and the time in that queue is then part of the wait."""


class Slots:
    """``count`` places; entering waits up to ``wait_seconds``, then raises the problem ``busy``."""

    __slots__ = ("_places", "_wait_seconds")

    def __init__(self, count: int, wait_seconds: float) -> None:
        # A queue of places waits and wakes in C; a semaphore does so in Python, which under load cost more
        # than the calculations.
        self._places: SimpleQueue[None] = SimpleQueue()
        for _ in range(count):
            self._places.put(None)
        self._wait_seconds = wait_seconds

    def __enter__(self) -> None:
        try:
            self._places.get_nowait()
        except Empty:
            self._wait()

    def _wait(self) -> None:
        waited = 0.0 if ARRIVAL.at is None else monotonic() - ARRIVAL.at
        try:
            self._places.get(timeout=max(self._wait_seconds - waited, 0.0))
        except Empty:
            raise Problem(BUSY, headers=(("Retry-After", "1"),)) from None

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._places.put(None)
