"""The service counted, in the form that Prometheus reads.

Labels come from closed sets of this program's own: ids of operations, codes of problems, faults and
cautions. No path, no caller and no measurement is one. Imported only where metrics are on.

With ``PROMETHEUS_MULTIPROC_DIR`` in the environment before this module is imported, each process counts
in files of its own in that folder, and any of them tells the sums; without it the process tells its own.
"""

from __future__ import annotations

import os
from collections import Counter as Counted
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from prometheus_client import CollectorRegistry, Counter, Gauge, Histogram, disable_created_metrics
from prometheus_client.core import GaugeMetricFamily
from prometheus_client.exposition import generate_latest
from prometheus_client.mmap_dict import MmapedDict
from prometheus_client.multiprocess import MultiProcessCollector, mark_process_dead
from prometheus_client.registry import Collector

from .answers import CONTRACT_VERSION, service_version
from .tally import OTHER, Tally

FOLDER = "PROMETHEUS_MULTIPROC_DIR"
ANSWERED = "answered"  # the outcome of a line without a problem
BUCKETS = (0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 10.0)
MOST_CODES = 1000  # far more than there are; beyond, a code counts as "other"

_LOCK = "lock"
_OF_THE_DEAD = 0  # in the place of a process id, which is never 0

# When a counter was made is told by no process of several, so by none.
disable_created_metrics()


class Metrics:
    """What one application counts."""

    def __init__(self, compute_slots: int) -> None:
        self._folder = os.environ.get(FOLDER)
        self._compute_slots = compute_slots
        self._counting = True
        own = self._registry = CollectorRegistry()
        self._requests = Counter(
            "assignable_requests_total", "Requests answered.", ("operation", "status"), registry=own
        )
        self._seconds = Histogram(
            "assignable_request_duration_seconds",
            "Seconds from a request's arrival to its answer; to the end of one that is streamed.",
            ("operation",),
            buckets=BUCKETS,
            registry=own,
        )
        self._problems = Counter(
            "assignable_problems_total",
            "Requests, and lines of bulk requests, that ended in a problem, by its type.",
            ("operation", "problem"),
            registry=own,
        )
        self._faults = Counter(
            "assignable_faults_total", "Faults listed in problems, by their code.", ("code",), registry=own
        )
        self._values = Counter(
            "assignable_values_total",
            "Measured or counted values computed on, missing pieces included.",
            ("operation",),
            registry=own,
        )
        self._cautions = Counter(
            "assignable_cautions_total", "Cautions given in answers, by their code.", ("code",), registry=own
        )
        self._lines = Counter(
            "assignable_bulk_lines_total",
            "Lines of bulk requests, by operation and outcome: answered, or the problem's type.",
            ("operation", "outcome"),
            registry=own,
        )
        self._busy = Gauge(
            "assignable_compute_slots_busy",
            "Places for calculations that are taken.",
            registry=own,
            multiprocess_mode="livesum",
        )
        self._places = Gauge(
            "assignable_compute_slots",
            "Places for calculations there are.",
            registry=own,
            multiprocess_mode="livesum",
        )
        own.register(_Build())
        # Looking a child up by its labels costs more than counting with it.
        self._answers: dict[tuple[str, str], tuple[Callable[[], None], Callable[[float], None]]] = {}
        self._of_operation: dict[str, Callable[[float], None]] = {}
        self._of_caution: dict[str, Counter] = {}
        self._of_fault: dict[str, Counter] = {}
        if self._folder is None:
            self.begin()

    def begin(self) -> None:
        """Opens the files of this process, and tells its places; one of several calls it once it is forked.

        Where it cannot, this process counts nothing: no count is worth a calculation.
        """
        try:
            if self._folder is not None:
                os.makedirs(self._folder, mode=0o700, exist_ok=True)
            self._places.set(self._compute_slots)
            self._answer(OTHER, "200")
        except OSError:
            self._counting = False

    def place_taken(self) -> None:
        """Counts a place for calculations that is taken."""
        if self._counting:
            self._busy.inc()

    def place_freed(self) -> None:
        """Counts one that is free again."""
        if self._counting:
            self._busy.dec()

    def request(self, operation: str, status: str, seconds: float, tally: Tally) -> None:
        """Counts a request that is over."""
        if not self._counting:
            return
        counted, timed = self._answers.get((operation, status)) or self._answer(operation, status)
        counted()
        timed(seconds)
        if tally.values:
            self._valued(operation, tally.values)
        if tally.cautions or tally.problem is not None:
            self._told(operation, tally)

    def line(self, operation: str, tally: Tally, lines: int = 1) -> None:
        """Counts a line of a bulk request, or several in one calculation.

        ``operation`` is the id of one there is, or ``OTHER``.
        """
        if not self._counting:
            return
        outcome = ANSWERED if tally.problem is None else tally.problem.kind.code
        self._lines.labels(operation, outcome).inc(lines)
        if tally.values:
            self._valued(operation, tally.values)
        self._told(operation, tally)

    def _valued(self, operation: str, values: int) -> None:
        valued = self._of_operation.get(operation)
        if valued is None:
            valued = self._of_operation[operation] = self._values.labels(operation).inc
        valued(values)

    def _answer(self, operation: str, status: str) -> tuple[Callable[[], None], Callable[[float], None]]:
        made = self._answers[operation, status] = (
            self._requests.labels(operation, status).inc,
            self._seconds.labels(operation).observe,
        )
        return made

    def _told(self, operation: str, tally: Tally) -> None:
        for code in tally.cautions:
            _of_code(self._of_caution, self._cautions, code).inc()
        if tally.problem is not None:
            self._problems.labels(operation, tally.problem.kind.code).inc()
            for code, count in Counted(entry.code for entry in tally.problem.errors).items():
                _of_code(self._of_fault, self._faults, code).inc(count)

    def exposition(self) -> bytes:
        """Everything counted, as text."""
        if self._folder is None:
            return generate_latest(self._registry)
        registry = CollectorRegistry()
        registry.register(_Build())
        MultiProcessCollector(registry, self._folder)
        with _held(self._folder):
            return generate_latest(registry)


def forget(folder: str, pid: int) -> None:
    """Puts what a process that has ended counted together with that of all others that have.

    So the sums stay, and the files do not grow in number with every worker that is replaced.
    """
    mark_process_dead(pid, folder)
    with _held(folder, alone=True) as held:
        if not held:
            return  # somebody reads just now: its files stay, and count, as they are
        for kind in ("counter", "histogram"):
            own = Path(folder) / f"{kind}_{pid}.db"
            if not own.exists():
                continue
            together = MmapedDict(str(own.with_name(f"{kind}_{_OF_THE_DEAD}.db")))
            try:
                for key, value, _, _ in MmapedDict.read_all_values_from_file(str(own)):
                    together.write_value(key, together.read_value(key)[0] + value, 0.0)
            finally:
                together.close()
            own.unlink()


@contextmanager
def _held(folder: str, *, alone: bool = False) -> Iterator[bool]:
    """The folder's files, for readers together, or for one process ``alone`` if nobody reads; whether it has them."""
    import fcntl

    with open(os.path.join(folder, _LOCK), "ab") as lock:
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB if alone else fcntl.LOCK_SH)
        except BlockingIOError:
            yield False
            return
        yield True


def _of_code(known: dict[str, Counter], counter: Counter, code: str) -> Counter:
    child = known.get(code)
    if child is None:
        if len(known) >= MOST_CODES:
            return counter.labels(OTHER)
        child = known[code] = counter.labels(code)
    return child


class _Build(Collector):
    """What is running; each scrape tells it anew."""

    def collect(self) -> Iterator[GaugeMetricFamily]:
        told = GaugeMetricFamily(
            "assignable_build_info",
            "The version of the program, and of its contract; always 1.",
            labels=("version", "contract"),
        )
        told.add_metric((service_version(), CONTRACT_VERSION), 1.0)
        yield told
