"""A bound on the calculations a worker does at once; more than that is refused at once, not queued.

The wait for a place is short, and counts from when the request came: under load the accepted requests stay
quick, the refused ones hear so early, and the health probes need no place at all.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from queue import Empty, SimpleQueue
from time import monotonic, sleep
from types import TracebackType
from typing import Protocol

from .problems import BUSY, Problem

_STEP_BACK_SECONDS = 0.001


class Watch(Protocol):
    """Who is told when a place is taken, and when it is free again; neither may raise anything."""

    def place_taken(self) -> None: ...

    def place_freed(self) -> None: ...


class _Arrival(threading.local):
    at: float | None = None


ARRIVAL = _Arrival()
"""When the request that this thread answers had come, by the monotonic clock; a server with a queue of its own
says so, and the time in that queue is then part of the wait."""


class Slots:
    """``count`` places; entering waits up to ``wait_seconds``, then raises the problem ``busy``."""

    __slots__ = ("_places", "_wait_seconds", "_waiting", "_watch")

    def __init__(self, count: int, wait_seconds: float, watch: Watch | None = None) -> None:
        # A queue of places waits and wakes in C; a semaphore does so in Python, which under load cost more
        # than the calculations.
        self._places: SimpleQueue[None] = SimpleQueue()
        for _ in range(count):
            self._places.put(None)
        self._wait_seconds = wait_seconds
        self._waiting: SimpleQueue[None] = SimpleQueue()
        self._watch = watch

    def __enter__(self) -> None:
        try:
            self._places.get(False)
        except Empty:
            self._wait()
        if self._watch is not None:
            self._watch.place_taken()

    def _wait(self) -> None:
        waited = 0.0 if ARRIVAL.at is None else monotonic() - ARRIVAL.at
        self._waiting.put(None)
        try:
            self._places.get(timeout=max(self._wait_seconds - waited, 0.0))
        except Empty:
            raise Problem(BUSY, headers=(("Retry-After", "1"),)) from None
        finally:
            self._waiting.get(False)

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.release()

    def release(self) -> None:
        """Gives a place back."""
        if self._watch is not None:
            self._watch.place_freed()
        self._places.put(None)

    def occupied_by(self, parts: Iterator[bytes]) -> Occupying:
        """An answer that is not whole yet and takes a place until it is over. Raises the problem ``busy``."""
        self.__enter__()
        return Occupying(parts, self.release)

    @contextmanager
    def in_turn(self) -> Iterator[None]:
        """A place for one turn of work that has begun and cannot be refused any more: waits as long as it takes.

        After the turn whoever waits goes first; the thread that gives a place back would else be the one to take
        it again.
        """
        self._places.get()
        if self._watch is not None:
            self._watch.place_taken()
        try:
            yield
        finally:
            self.release()
            if not self._waiting.empty():
                sleep(_STEP_BACK_SECONDS)


class Occupying:
    """Parts of an answer; when they are over, or nobody wants the rest, ``over`` is called once."""

    __slots__ = ("_over", "_parts")

    def __init__(self, parts: Iterator[bytes], over: Callable[[], None]) -> None:
        self._parts = parts
        self._over: Callable[[], None] | None = over

    def __iter__(self) -> Iterator[bytes]:
        try:
            yield from self._parts
        finally:
            self.close()

    def close(self) -> None:
        """Nobody wants the rest."""
        if (over := self._over) is not None:
            self._over = None
            over()
