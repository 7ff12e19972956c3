"""The service under gunicorn: the one home of its settings, for the command and for the image.

Threads wait on clients, processes compute, and a place to compute is what bounds the work
(:mod:`assignable.api.shedding`): a thread cannot be stopped, so ``timeout`` only tells a dead worker.
Everything is loaded, and has computed once, before the workers are forked; they share that memory.
"""

from __future__ import annotations

import ctypes
import ipaddress
import logging
import os
import socket
import sys
from collections.abc import Mapping
from contextlib import suppress
from datetime import UTC, datetime
from importlib import import_module
from traceback import extract_tb
from typing import Any

import orjson
from flask import Flask
from gunicorn.app.base import BaseApplication
from gunicorn.glogging import Logger

from ..api.app import create_app
from ..api.contract import Contract, examples_directory
from ..api.settings import BadSettings, Settings
from . import watching
from .worker import Worker

# Seconds a stopping server waits for the requests it has; whoever kills it must wait longer.
GRACE_SECONDS = 30
SWITCH_SECONDS = 0.02

_ARENAS_AT_MOST, _MAPPED_FROM = -8, -3  # M_ARENA_MAX and M_MMAP_THRESHOLD of malloc.h
_MAPPED_BYTES = 4 * 1024 * 1024
_LOADED_BEFORE_FORK = ("scipy.special", "scipy.linalg", "scipy.sparse")
_FIRST_CALCULATION = ("fitXbarRLimits", "xbar-r-limits")
_LOG_LEVEL = {"requests": "info", "errors": "warning", "off": "critical"}


class CannotServe(Exception):
    """Why the service does not start, in one sentence and what to do."""


def serve(environment: Mapping[str, str], *, demonstrate: bool = False) -> int:
    """Serves until it is told to stop; returns the status to exit with."""
    try:
        settings = settings_from(environment)
        _require_free(settings)
        traced = watching.require_tracing(environment)
        with watching.counts(settings):
            app = create_app(settings)
            warm_up(app)
            Server(app, settings, demonstrate=demonstrate, traced=traced).run()
    except (BadSettings, CannotServe) as error:
        print(error, file=sys.stderr)
        return 2
    return 0


def settings_from(environment: Mapping[str, str]) -> Settings:
    """The settings, with an address this service may listen on.

    Where nobody has to prove who they are, any machine that reaches the port may compute: without API keys
    or keys of tokens an address that is not this machine's own needs ``ASSIGNABLE_ALLOW_REMOTE=yes``.
    Raises :class:`BadSettings`, :class:`CannotServe`.
    """
    settings = Settings.from_environment(environment)
    if not settings.allow_remote and not settings.asks_who and not _is_loopback(settings.host):
        raise CannotServe(
            f"{settings.host} can be reached from other machines, and this service asks nobody who they are. "
            "Listen on 127.0.0.1, or set ASSIGNABLE_API_KEYS or ASSIGNABLE_JWT_KEYS so that it asks; or, behind a "
            "proxy or in a network you trust, say --allow-remote or set ASSIGNABLE_ALLOW_REMOTE=yes."
        )
    return settings


def _is_loopback(host: str) -> bool:
    try:
        found = socket.getaddrinfo(host, None, type=socket.SOCK_STREAM)
    except OSError:
        raise CannotServe(f"{host} is no address of this machine.") from None
    return all(ipaddress.ip_address(entry[4][0]).is_loopback for entry in found)


def _require_free(settings: Settings) -> None:
    """Says at once that a port is taken, where gunicorn would try for some seconds first."""
    family, kind, _, _, address = socket.getaddrinfo(settings.host, settings.port, type=socket.SOCK_STREAM)[0]
    with socket.socket(family, kind) as probe:
        probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            probe.bind(address)
        except OSError as error:
            raise CannotServe(
                f"Cannot listen on port {settings.port} of {settings.host} "
                f"({error.strerror}). Choose another with --port."
            ) from None


def warm_up(app: Flask) -> None:
    """Loads what is loaded late, and computes once; raises what these raise."""
    for module in _LOADED_BEFORE_FORK:
        import_module(module)
    contract = _contract_of(app)
    contract.operations["getReadiness"].view()
    operation_id, example = _FIRST_CALCULATION
    body = (examples_directory() / f"{example}.request.json").read_bytes()
    contract.operations[operation_id].execute(body)
    contract.document()


def _contract_of(app: Flask) -> Contract:
    contract: Contract = app.extensions["assignable.contract"]
    return contract


def url_of(settings: Settings) -> str:
    """Where a browser on this machine finds the service."""
    host = {"0.0.0.0": "127.0.0.1", "::": "::1"}.get(settings.host, settings.host)  # noqa: S104
    return f"http://{_in_url(host)}:{settings.port}"


def _in_url(host: str) -> str:
    return f"[{host}]" if ":" in host else host


def options(settings: Settings) -> dict[str, Any]:
    """Gunicorn's settings."""
    chosen: dict[str, Any] = {
        "bind": f"{_in_url(settings.host)}:{settings.port}",
        "worker_class": Worker,
        "workers": settings.workers,
        "threads": settings.threads,
        "preload_app": True,
        "timeout": 60,
        "graceful_timeout": GRACE_SECONDS,
        "keepalive": 15,
        "max_requests": 0,  # workers do not grow; each new one would have to warm up
        "control_socket_disable": True,  # else it wants to write below the home directory
        "accesslog": None,  # the application's own log has a line for each request
        "logger_class": ServerLog,
        "loglevel": _LOG_LEVEL[settings.log],
        "proc_name": "assignable",
    }
    if (memory := watching.memory()) is not None:
        chosen["worker_tmp_dir"] = memory  # a heartbeat's file on a disk can stall a worker
    if settings.metrics != "off":
        chosen["child_exit"] = lambda server, worker: watching.worker_is_gone(server.log, worker.pid)
    return chosen


class Server(BaseApplication):  # type: ignore[misc]
    """Gunicorn around an application that is loaded already."""

    def __init__(
        self, app: Flask, settings: Settings, *, demonstrate: bool = False, traced: bool = False
    ) -> None:
        # Threads that wait for the interpreter ask for it at this interval. At Python's own, 5 ms, a worker
        # under load can spend more than half of its time on handing it over.
        sys.setswitchinterval(SWITCH_SECONDS)
        _keep_memory_together()
        self._app = app
        self.settings = settings
        self._demonstrate = demonstrate
        self._traced = traced
        super().__init__()

    def load_config(self) -> None:
        for name, value in options(self.settings).items():
            self.cfg.set(name, value)
        if self._demonstrate:
            self.cfg.set("when_ready", lambda _: _demonstrate(url_of(self.settings)))
        self.cfg.set("post_worker_init", self._begin)
        self.cfg.set("worker_exit", lambda _, worker: _end(worker))

    def _begin(self, worker: Any) -> None:
        """What a worker needs of its own, once it is forked."""
        if (metrics := _contract_of(self._app).metrics) is not None:
            metrics.begin()
        if self._traced:
            worker.traced = watching.trace(self._app, worker.log.error_log.handlers[0])

    def load(self) -> Flask:
        return self._app


def _keep_memory_together() -> None:
    """Has the C library take memory for all threads from one arena.

    Each thread that computes would else fill one of its own, which is seldom given back: a worker under mixed load
    held half as much again, and went on growing. Threads compute one at a time, so that they do not wait here.
    What is as large as a body goes back at once: the library would else learn to keep that much for the next.
    """
    with suppress(OSError, AttributeError):  # another C library has no such options, and no such habits
        library = ctypes.CDLL(None)
        library.mallopt(_ARENAS_AT_MOST, 1)
        library.mallopt(_MAPPED_FROM, _MAPPED_BYTES)


def _end(worker: Any) -> None:
    """What a worker does last, in its own process."""
    if (traced := getattr(worker, "traced", None)) is not None:
        traced.close()


def _demonstrate(url: str) -> None:
    """Shows the main job from a process of its own, which gunicorn reaps: no thread may run where workers fork."""
    command = (sys.executable, "-m", "assignable.cli", "demo", "--url", url)
    os.posix_spawn(sys.executable, command, os.environ)


class ServerLog(Logger):  # type: ignore[misc]
    """What gunicorn has to say, as lines of the same log as the application's."""

    def setup(self, cfg: Any) -> None:
        super().setup(cfg)
        for handler in self.error_log.handlers:
            handler.setFormatter(_Line())


class _Line(logging.Formatter):
    def format(self, record: logging.LogRecord) -> str:
        line: dict[str, object] = {
            "ts": datetime.fromtimestamp(record.created, UTC)
            .isoformat(timespec="milliseconds")
            .replace("+00:00", "Z"),
            "level": record.levelname.lower(),
            "event": "server",
            "message": record.getMessage(),
            "pid": record.process,
        }
        if record.exc_info and record.exc_info[1] is not None:
            line["error"] = type(record.exc_info[1]).__name__
            line["where"] = [
                f"{os.path.basename(frame.filename)}:{frame.lineno} {frame.name}"
                for frame in extract_tb(record.exc_info[2])
            ]
        return orjson.dumps(line).decode()
