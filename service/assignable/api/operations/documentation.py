"""The contract as people read it: the document, the reference page, the problem pages, the start page."""

from __future__ import annotations

from functools import cache
from hashlib import sha256
from importlib.resources import files

from flask import Response, request
from markupsafe import Markup, escape

from ..answers import JSON, service_version
from ..bodies import require_acceptable
from ..contract import Contract, cacheable
from ..problems import NOT_FOUND, TYPES, Problem, ProblemType

HTML = "text/html; charset=utf-8"

# blob: is how the reference page shows a picture an operation answers.
POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' data: blob:; font-src 'self'; "
    "connect-src 'self'; frame-ancestors 'none'; base-uri 'none'; form-action 'none'"
)

_OURS = {"reference.js": "text/javascript", "reference.css": "text/css", "page.css": "text/css"}
_THEIRS = {"swagger-ui-bundle.js": "text/javascript", "swagger-ui.css": "text/css"}
_FOREVER = 31_536_000


def register(contract: Contract) -> None:
    """Binds the pages; they are no operations of the contract."""

    def document() -> Response:
        require_acceptable(request.environ, JSON)
        return cacheable(contract.document(), JSON, 300)

    def start() -> Response:
        return _page("Assignable", _start())

    def reference() -> Response:
        text = _web("reference.html").decode().replace("{assets}", f"docs/assets/{_edition()}")
        return _html(text)

    def listing() -> Response:
        return _page("Problems", _listing())

    def problem(code: str) -> Response:
        kind = TYPES.get(code)
        if kind is None:
            raise Problem(NOT_FOUND, "There is no such problem.")
        return _page(kind.title, _described(kind))

    def verification() -> Response:
        from ...verification.page import page
        from .verification import verified

        link = f"docs/assets/{_edition()}/verification.css"
        return _html(page(verified(contract)(), service_version(), link=link), seconds=0)

    def asset(edition: str, name: str) -> Response:
        if edition != _edition() or name not in _assets():
            raise Problem(NOT_FOUND)
        body, content_type = _assets()[name]
        answer = cacheable(body, content_type, _FOREVER)
        answer.headers["Cache-Control"] = f"public, max-age={_FOREVER}, immutable"
        return answer

    for path, name, view in (
        ("/", "start", start),
        ("/openapi.json", "document", document),
        ("/docs", "reference", reference),
        ("/docs/assets/<edition>/<name>", "asset", asset),
        ("/problems", "problems", listing),
        ("/problems/<code>", "problem", problem),
        ("/verification", "verification", verification),
    ):
        contract.app.add_url_rule(path, f"pages.{name}", view, methods=["GET"])


def _web(name: str) -> bytes:
    return files("assignable.web").joinpath(name).read_bytes()


def _verification(name: str) -> bytes:
    return files("assignable.verification").joinpath(name).read_bytes()


@cache
def _assets() -> dict[str, tuple[bytes, str]]:
    """The only files served: ours by name, and two of the reference page's library."""
    theirs = files("flask_swagger_ui").joinpath("dist")
    found = {name: (_web(name), f"{kind}; charset=utf-8") for name, kind in _OURS.items()}
    found["verification.css"] = (_verification("page.css"), "text/css; charset=utf-8")
    for name, kind in _THEIRS.items():
        found[name] = (theirs.joinpath(name).read_bytes(), f"{kind}; charset=utf-8")
    return found


@cache
def _edition() -> str:
    """Changes with any byte of any asset, so that each may be kept for ever."""
    together = sha256()
    for name, (body, _) in sorted(_assets().items()):
        together.update(name.encode() + b"\0" + body)
    return together.hexdigest()[:16]


def _html(text: str, seconds: int = 300) -> Response:
    answer = cacheable(text.encode(), HTML, seconds)
    answer.headers["Content-Security-Policy"] = POLICY
    answer.headers["Referrer-Policy"] = "no-referrer"
    return answer


def _page(title: str, content: Markup) -> Response:
    # Links are relative to the page's depth, so that the service may stand behind a path prefix.
    depth = request.path.count("/") - 1
    page = Markup(_web("page.html").decode()).format(  # noqa: S704 - our own file
        title=title, content=content, root="../" * depth or "./", edition=_edition()
    )
    return _html(str(page))


def _start() -> Markup:
    return Markup(
        "<p>The statistics of process control as a service, version {version}. It keeps nothing between "
        "requests; the same request always gives the same answer.</p>"
        '<ul><li><a href="docs">Reference, to read and to try</a></li>'
        '<li><a href="openapi.json">The contract as an OpenAPI document</a></li>'
        '<li><a href="problems">Problems and what to do about each</a></li>'
        '<li><a href="verification">Published cases, computed on this installation</a></li>'
        '<li><a href="health/ready">Whether it is ready</a></li></ul>'
    ).format(version=service_version())


def _listing() -> Markup:
    rows = Markup("").join(
        Markup(
            '<tr><td>{status}</td><td><a href="problems/{code}">{code}</a></td><td>{meaning}</td></tr>'
        ).format(status=kind.status, code=kind.code, meaning=kind.meaning)
        for kind in TYPES.values()
    )
    return Markup(
        "<p>Every failure is answered as application/problem+json of one of these types.</p>"
        '<table><thead><tr><th scope="col">Status</th><th scope="col">Type</th>'
        '<th scope="col">What happened</th></tr></thead><tbody>{rows}</tbody></table>'
    ).format(rows=rows)


def _described(kind: ProblemType) -> Markup:
    return Markup(
        "<dl><dt>Type</dt><dd><code>{uri}</code></dd><dt>Status</dt><dd>{status}</dd>"
        "<dt>What happened</dt><dd>{meaning}</dd><dt>What to do</dt><dd>{remedy}</dd></dl>"
        '<p><a href="../problems">All problems</a></p>'
    ).format(uri=escape(kind.uri), status=kind.status, meaning=kind.meaning, remedy=kind.remedy)
