"""The one place where the parts are joined."""

from __future__ import annotations

from collections.abc import Callable

from flask import Flask, Response, request

from . import problems
from .contract import REQUEST_ID, Contract
from .cors import Cors
from .observability import Edge, Log
from .operations import announce, documentation
from .sealing import seals_in
from .security import access_of, guard
from .settings import Settings
from .tally import TALLY

Register = Callable[[Contract], None]

OPERATIONS: tuple[Register, ...] = (announce, documentation.register)


def create_app(
    settings: Settings | None = None, *, operations: tuple[Register, ...] = OPERATIONS, log: Log | None = None
) -> Flask:
    """The application with all its operations; nothing is read from the environment but the settings.

    Raises :class:`assignable.api.settings.BadSettings`.
    """
    settings = Settings.from_environment() if settings is None else settings
    log = Log(settings.log) if log is None else log
    app = Flask("assignable", static_folder=None, template_folder=None)
    app.json.sort_keys = False  # type: ignore[attr-defined]
    access = access_of(settings)
    metrics = None
    if settings.metrics != "off":
        from .metrics import Metrics

        metrics = Metrics(settings.compute_slots)
    contract = Contract(app, settings, seals_in(settings), access, log.failure, metrics)
    app.extensions["assignable.contract"] = contract

    def failed(error: Exception) -> Response:
        problem = problems.of(error)
        if (tally := request.environ.get(TALLY)) is not None:
            tally.problem = problem
        if (unforeseen := problems.unforeseen(error)) is not None:
            log.failure(unforeseen, request.environ)
        return Response(
            problem.body(request.environ[REQUEST_ID]),
            status=problem.kind.status,
            headers=[("Cache-Control", "no-store"), *problem.headers],
            content_type=problems.MEDIA_TYPE,
        )

    app.register_error_handler(Exception, failed)
    if access is not None:
        guard(app, access)
    for register in operations:
        register(contract)
    if metrics is not None:
        from .operations import monitoring

        monitoring.announce(contract, metrics)
    app.wsgi_app = Edge(app.wsgi_app, log, Cors(settings.cors_origins), metrics)  # type: ignore[method-assign]
    return app
