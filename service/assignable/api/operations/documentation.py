"""The contract as people read it: the pages, and the document behind them."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache
from hashlib import sha256
from importlib.resources import files
from typing import Any

import orjson
from flask import Response, request

from ... import web
from ...web import auditing, trying
from ...web.reading import Document, Picture
from ..answers import JSON, SVG, service_version
from ..bodies import require_acceptable
from ..contract import Contract, cacheable, examples_directory
from ..problems import NOT_FOUND, TYPES, Problem

HTML = "text/html; charset=utf-8"

# blob: is how the reference page shows a picture an operation answers.
POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' data: blob:; font-src 'self'; "
    "connect-src 'self'; frame-ancestors 'none'; base-uri 'none'; form-action 'none'"
)
# The pages to read hold no script at all.
QUIET_POLICY = (
    "default-src 'none'; style-src 'self'; img-src data:; "
    "frame-ancestors 'none'; base-uri 'none'; form-action 'none'"
)

_SCRIPTS = (
    "reference.js",
    "start.js",
    "trial.js",
    "sheet.js",
    "calls.js",
    "words.js",
    "takeaway.js",
    "plant.js",
)
_SHEETS = ("page.css", "reference.css")
_THEIRS = {"swagger-ui-bundle.js": "text/javascript", "swagger-ui.css": "text/css"}
_FOREVER = 31_536_000


def register(contract: Contract) -> None:
    """Binds the pages; they are no operations of the contract."""

    def document() -> Response:
        require_acceptable(request.environ, JSON)
        return cacheable(contract.document(), JSON, 300)

    def start() -> Response:
        return _page("start.html", "Assignable", {"offered": " ".join(trying.FORMS)}, here="start")

    def trial() -> Response:
        def ruled(operation_id: str) -> bool:
            shape = contract.bound(operation_id).request
            return shape is not None and "rules" in shape.fields

        offered = {"charts": trying.offered(ruled), "rules": trying.rule_sets()}
        return _page("try.html", "Your own numbers on a chart", offered, here="try")

    def reference() -> Response:
        return _page("reference.html", "Reference", here="docs")

    @cache
    def parsed() -> Document:
        problems = {kind.code: (kind.status, kind.meaning, kind.remedy) for kind in TYPES.values()}
        return Document(orjson.loads(contract.document()), problems)

    def contents() -> Response:
        found = {"groups": parsed().groups(), "contract": parsed().version}
        return _page("contents.html", "The contract to read", found, here="reading", policy=QUIET_POLICY)

    @cache
    def drawn(operation_id: str) -> Mapping[str, Picture]:
        """The examples of an operation that draws, drawn."""
        operation = contract.bound(operation_id)
        if operation.media_type != SVG:
            return {}
        requests = ((name, examples_directory() / f"{name}.request.json") for name in operation.examples)
        return {
            name: Picture.of(operation.execute(file.read_bytes()).decode())
            for name, file in requests
            if file.is_file()
        }

    def reading(operation_id: str) -> Response:
        found = parsed().reading(operation_id)
        if found is None:
            raise Problem(
                NOT_FOUND, "There is no operation of this name; /docs/reading lists those there are."
            )
        computed = found.draws or operation_id
        values = {
            "of": found,
            "pictures": drawn(operation_id),
            "methods": auditing.with_sources(computed),
            "sources": auditing.sources_of_chart(computed),
        }
        return _page("operation.html", found.title, values, here="reading", policy=QUIET_POLICY)

    def methods() -> Response:
        from ...verification.runner import cases

        published = (
            auditing.PublishedCase(case.id, case.title, case.trust, case.operation_id) for case in cases()
        )
        found = {"methods": auditing.audited(published)}
        return _page("methods.html", "Methods", found, here="methods", policy=QUIET_POLICY)

    def listing() -> Response:
        return _page("problems.html", "Problems", {"kinds": TYPES.values()}, policy=QUIET_POLICY)

    def problem(code: str) -> Response:
        kind = TYPES.get(code)
        if kind is None:
            raise Problem(NOT_FOUND, "There is no such problem.")
        return _page("problem.html", kind.title, {"kind": kind}, policy=QUIET_POLICY)

    def verification() -> Response:
        from ...verification.page import page
        from .verification import verified

        link = f"docs/assets/{_edition()}/verification.css"
        return _html(page(verified(contract)(), service_version(), link=link), QUIET_POLICY, seconds=0)

    def asset(edition: str, name: str) -> Response:
        if edition != _edition() or name not in _assets():
            raise Problem(NOT_FOUND)
        body, content_type = _assets()[name]
        answer = cacheable(body, content_type, _FOREVER)
        answer.headers["Cache-Control"] = f"public, max-age={_FOREVER}, immutable"
        return answer

    for path, name, view in (
        ("/", "start", start),
        ("/try", "try", trial),
        ("/openapi.json", "document", document),
        ("/docs", "reference", reference),
        ("/docs/reading", "contents", contents),
        ("/docs/reading/<operation_id>", "reading", reading),
        ("/docs/assets/<edition>/<name>", "asset", asset),
        ("/methods", "methods", methods),
        ("/problems", "problems", listing),
        ("/problems/<code>", "problem", problem),
        ("/verification", "verification", verification),
    ):
        contract.app.add_url_rule(path, f"pages.{name}", view, methods=["GET"])


@cache
def _assets() -> dict[str, tuple[bytes, str]]:
    """The only files served: ours by name, and two of the reference page's library."""
    theirs = files("flask_swagger_ui").joinpath("dist")
    found = {name: (web.read(name), "text/javascript; charset=utf-8") for name in _SCRIPTS}
    found |= {name: (web.read(name), "text/css; charset=utf-8") for name in _SHEETS}
    sheet = files("assignable.verification").joinpath("page.css").read_bytes()
    found["verification.css"] = (sheet, "text/css; charset=utf-8")
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


def _page(
    template: str,
    title: str,
    values: Mapping[str, Any] | None = None,
    *,
    here: str = "",
    policy: str = POLICY,
) -> Response:
    # Links are relative to the page's depth, so that the service may stand behind a path prefix.
    root = "../" * (request.path.count("/") - 1) or "./"
    framed = {
        "title": title,
        "root": root,
        "here": here,
        "edition": _edition(),
        "version": service_version(),
    }
    return _html(web.render(template, {**framed, **(values or {})}), policy)


def _html(text: str, policy: str, seconds: int = 300) -> Response:
    answer = cacheable(text.encode(), HTML, seconds)
    answer.headers["Content-Security-Policy"] = policy
    answer.headers["Referrer-Policy"] = "no-referrer"
    return answer
