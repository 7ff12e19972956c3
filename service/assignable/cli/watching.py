"""What is seen of the server's processes from outside: their counts in one folder, their spans.

The counts lie on a file system in memory, in a folder made at the start and removed at the end. Spans are
OpenTelemetry's affair: its own variables say whether there are any, and where they go.
"""

from __future__ import annotations

import fcntl
import logging
import os
import shutil
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from importlib.util import find_spec
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..api.settings import BadSettings, Settings

if TYPE_CHECKING:
    from ..api.tracing import Traced

_PREFIX = "assignable-metrics-"
_ALIVE = "alive"
_FOLDER = "PROMETHEUS_MULTIPROC_DIR"
_SPANS_GO_TO = (
    "OTEL_TRACES_EXPORTER",
    "OTEL_EXPORTER_OTLP_ENDPOINT",
    "OTEL_EXPORTER_OTLP_TRACES_ENDPOINT",
)


def memory() -> str | None:
    """A folder on a file system in memory, if there is one to write to."""
    found = Path("/dev/shm")  # noqa: S108 - no file of a known name is made there
    return str(found) if found.is_dir() and os.access(found, os.W_OK | os.X_OK) else None


@contextmanager
def counts(settings: Settings) -> Iterator[None]:
    """The folder of this server's counts; entered before anything that counts is imported.

    Whoever made it removes it: the workers, forked inside, leave this as well.
    """
    if settings.metrics == "off":
        yield
        return
    owner = os.getpid()
    place = Path(memory() or tempfile.gettempdir())
    _sweep(place)
    folder = Path(tempfile.mkdtemp(prefix=_PREFIX, dir=place))
    os.environ[_FOLDER] = str(folder)
    # Held by this process and by all that are forked from it, until the last of them is gone.
    alive = (folder / "new").open("wb")
    fcntl.flock(alive, fcntl.LOCK_EX)
    (folder / "new").rename(folder / _ALIVE)
    try:
        yield
    finally:
        from prometheus_client.values import close_all_multiprocess_files

        close_all_multiprocess_files()
        if os.getpid() == owner:
            shutil.rmtree(folder, ignore_errors=True)
            os.environ.pop(_FOLDER, None)
        alive.close()


def _sweep(place: Path) -> None:
    """Removes what servers left behind that were killed."""
    for folder in place.glob(_PREFIX + "*"):
        with suppress(OSError), (folder / _ALIVE).open("rb") as alive:  # another's cannot be opened
            fcntl.flock(alive, fcntl.LOCK_EX | fcntl.LOCK_NB)
            shutil.rmtree(folder)


def worker_is_gone(log: Any, pid: int) -> None:
    """Keeps what a worker counted, and takes its places out of the sums."""
    from ..api.metrics import forget

    try:
        forget(os.environ[_FOLDER], pid)
    except (OSError, RuntimeError) as error:  # the server goes on, whatever becomes of a count
        log.warning("What worker %s counted could not be kept: %s", pid, type(error).__name__)


def require_tracing(environment: Mapping[str, str]) -> bool:
    """Whether requests are to have spans: where OpenTelemetry's variables name an exporter, or an endpoint.

    All of it is loaded then, before the workers are forked. Raises :class:`BadSettings` where that cannot be.
    """
    if environment.get("OTEL_SDK_DISABLED", "").lower() == "true":
        return False
    if environment.get("OTEL_TRACES_EXPORTER", "").strip() == "none":
        return False
    asked = next((name for name in _SPANS_GO_TO if environment.get(name)), None)
    if asked is None:
        return False
    if find_spec("opentelemetry") is None or find_spec("opentelemetry.sdk") is None:
        raise BadSettings(
            f"{asked} asks for traces, and what makes them is not installed: pip install 'assignable[otel]', or set "
            "OTEL_SDK_DISABLED=true."
        )
    from ..api.tracing import exporters

    exporters(environment)
    return True


def trace(app: Any, handler: logging.Handler) -> Traced:
    """Puts spans around the requests of this process, which no longer forks; ``handler`` takes what goes wrong."""
    from ..api.tracing import from_environment

    theirs = logging.getLogger("opentelemetry")
    theirs.handlers[:] = [handler]
    theirs.propagate = False
    traced = app.wsgi_app = from_environment(app.wsgi_app)
    return traced
