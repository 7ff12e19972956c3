"""One call binds an operation: its route, its road from bytes to bytes, and its entry in the contract.

The road: media types, body, a place to compute, strict JSON, the request's shape, the view, an answer
in bytes. A view is a pure function of what its request's shape loads; it knows no HTTP. The OpenAPI
document is made from the same calls, when it is first asked for.
"""

from __future__ import annotations

import re
import threading
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any
from uuid import uuid4

import orjson
from flask import Flask, Response, request
from marshmallow import Schema, ValidationError

from ..documents.seal import UNSEALED, Seals
from ..spc.errors import SpcError
from . import answers, bodies, explaining, problems, streams, strict_json, tables
from .fields import (
    AnswerShape,
    ObjectList,
    StrictInteger,
    StrictString,
    from_text,
    known_names,
    reads_json,
)
from .problems import Entry, Problem, ProblemType
from .settings import Settings
from .shedding import Slots
from .tally import TALLY, Tally

if TYPE_CHECKING:
    from .metrics import Metrics
    from .security import Access

View = Callable[..., Any]
Link = Mapping[str, Any]
Failed = Callable[[Exception, dict[str, Any]], None]
"""Is told of what no layer expected, with the request's environ."""
Route = tuple[str, str, str]
"""Method, path and operation id."""

OPERATION = "assignable.operation"  # the environ's key for the id of the operation that answers
REQUEST_ID = "assignable.request_id"  # and for the id of the request

_OF_A_PICTURE = (("Content-Security-Policy", "default-src 'none'; style-src 'unsafe-inline'"),)

_CAMEL = re.compile(r"[a-z][A-Za-z0-9]*")
_PARAMETER = re.compile(r"\{([a-z_]+)\}")


class ProblemEntry(AnswerShape):
    """One fault of a request."""

    pointer = StrictString(
        metadata={"description": "Where in the body, as a JSON Pointer (RFC 6901): #/data/values/3/1."}
    )
    parameter = StrictString(metadata={"description": "Which parameter of the query."})
    row = StrictInteger(metadata={"description": "Of a CSV body: which row; the header is row 1."})
    column = StrictString(
        metadata={"description": "Of a CSV body: which column, by its name; by its number where it has none."}
    )
    code = StrictString(required=True, metadata={"description": "Stable; for programs."})
    detail = StrictString(required=True, metadata={"description": "A sentence; for people."})


class ProblemDetails(AnswerShape):
    """A failure, as RFC 9457 has it."""

    type = StrictString(
        required=True, metadata={"description": "Which kind of problem; resolves on this service."}
    )
    title = StrictString(required=True, metadata={"description": "The kind in words."})
    status = StrictInteger(required=True, metadata={"description": "The HTTP status."})
    detail = StrictString(required=True, metadata={"description": "What happened, this time."})
    instance = StrictString(required=True, metadata={"description": "This occurrence."})
    request_id = StrictString(required=True, metadata={"description": "As in the X-Request-ID header."})
    errors = ObjectList(
        ProblemEntry,
        metadata={"description": f"Each fault with its place; the first {problems.MAX_ERRORS}."},
    )


class Provenance(AnswerShape):
    """What an answer was computed with, and of what."""

    service = StrictString(required=True, metadata={"description": "The program's name."})
    version = StrictString(required=True, metadata={"description": "Of the program."})
    contract = StrictString(required=True, metadata={"description": "Of this document."})
    method = StrictString(required=True, metadata={"description": "The method's name in this service."})
    request_digest = StrictString(
        required=True,
        metadata={
            "description": "Of the request's body, gzip undone: sha-256: and hexadecimal digits. Of a CSV request: of "
            "its query as it was sent, a line feed, and the body."
        },
    )


@dataclass(frozen=True, slots=True)
class Lines:
    """What an operation reads and answers where both are streams of JSON, a value a line."""

    asked: tuple[type[Schema], ...]
    answered: tuple[type[Schema], ...]
    example: str


@dataclass(frozen=True, kw_only=True)
class Operation:
    """One operation as it was bound; :meth:`execute` walks its road without HTTP."""

    method: str
    path: str
    operation_id: str
    tag: str
    summary: str
    description: str
    view: View
    request: Schema | None = None
    query: Schema | None = None
    response: Schema | None = None
    lines: Lines | None = None
    media_type: str = answers.JSON
    problems: tuple[ProblemType, ...] = ()
    examples: tuple[str, ...] = ()
    links: Mapping[str, Link] = field(default_factory=dict)
    provenance: str | None = None
    computes: bool = True
    cache_seconds: int | None = 300

    def execute(self, body: bytes) -> bytes:
        """The answer to a body; raises what :func:`assignable.api.problems.of` understands."""
        if self.lines is not None:
            return b"".join(streams.stream(self.view, streams.Call(str(uuid4())), (body,), _ALONE, len(body)))
        return self.answer_to(strict_json.loads(body), body)

    def answer_to(self, document: Any, body: bytes, tally: Tally | None = None) -> bytes:
        """The answer to a body that is parsed already; ``body`` is what the provenance's digest is of."""
        return self.write(self.computed(document, tally), body)

    def computed(self, document: Any, tally: Tally | None = None, /, **path: str) -> Any:
        """What the view makes of a body that is parsed already; faults are told where the body has them.

        Of an operation without a body it is the parameters of the query, or nothing.
        """
        shape = self.request or self.query
        try:
            loaded = None if shape is None else shape.load(document)
            result = self.view(**path) if shape is None else self.view(loaded, **path)
        except SpcError as error:
            raise problems.placed(error, document) from error
        if tally is not None and loaded is not None:
            tally.computed(loaded, result)
        return result

    @cached_property
    def tabled(self) -> tables.Tabled | None:
        """The request as a CSV table with options in the query, where its data is one rectangular table."""
        return tables.of(self.request)

    def answer_to_table(
        self, body: bytes, query: bytes = b"", tally: Tally | None = None, /, **path: str
    ) -> bytes:
        """The answer to a CSV body; its digest is of the query, a line feed and the body."""
        assert self.tabled is not None
        assert self.request is not None
        document, read = self.tabled.loaded(body, query)
        try:
            loaded = self.request.load(document)
            result = self.view(loaded, **path)
            if tally is not None:
                tally.computed(loaded, result)
            return self.write(result, query + b"\n" + body)
        except (ValidationError, SpcError) as error:
            raise self.tabled.placed(error, document, read) from error

    def tables(self) -> Iterator[tuple[str, dict[str, Any], bytes]]:
        """The examples that are tables: the name, the parameters and the body of each."""
        directory = examples_directory()
        for name in self.examples if self.tabled is not None else ():
            if (file := directory / f"{name}.request.csv").exists():
                query = directory / f"{name}.query.json"
                yield name, orjson.loads(query.read_bytes()) if query.exists() else {}, file.read_bytes()

    def write(self, result: Any, body: bytes = b"") -> bytes:
        """A view's result as the bytes of the answer."""
        if self.media_type != answers.JSON:
            return result.encode() if isinstance(result, str) else bytes(result)
        if self.provenance is not None:
            result = answers.with_provenance(result, self.provenance, body)
        return answers.dumps(result)


_ALONE = Slots(1, 0.0)


class Contract:
    """All operations of an application, in the order in which they were bound."""

    def __init__(
        self,
        app: Flask,
        settings: Settings,
        seals: Seals = UNSEALED,
        access: Access | None = None,
        failed: Failed = lambda error, environ: None,
        metrics: Metrics | None = None,
    ) -> None:
        self.seals = seals
        self.metrics = metrics
        self._failed = failed
        self._access = access
        self._app = app
        self._settings = settings
        self._slots = Slots(settings.compute_slots, settings.slot_wait_seconds, metrics)
        # Each occupies a thread for as long as it lasts; the others are for everybody else.
        self._streams = Slots(max(1, settings.threads // 2), 0.0)
        self._tags: dict[str, str] = {}
        self._constant: dict[str, tuple[bytes, str]] = {}
        self._bound: dict[str, Operation] = {}
        self._announced: dict[str, Callable[[Contract], None]] = {}
        self._binding = threading.RLock()

    @property
    def app(self) -> Flask:
        return self._app

    @property
    def operations(self) -> Mapping[str, Operation]:
        """Every operation by its id, those announced bound by now, in the order of the routes."""
        for operation_id in tuple(self._announced):
            self._bind_announced(operation_id)
        order = [rule.endpoint for rule in self._app.url_map.iter_rules() if rule.endpoint in self._bound]
        return {operation_id: self._bound[operation_id] for operation_id in dict.fromkeys(order)}

    def bound(self, operation_id: str) -> Operation:
        """An operation by its id, bound now where it was only announced."""
        self._bind_announced(operation_id)
        return self._bound[operation_id]

    def find(self, operation_id: str) -> Operation | None:
        """An operation by its id, if there is such."""
        if operation_id in self._announced:
            self._bind_announced(operation_id)
        return self._bound.get(operation_id)

    def announce(self, routes: Iterable[Route], register: Callable[[Contract], None]) -> None:
        """Takes up routes now whose operations ``register`` binds when one of them is first needed.

        Shapes and the numerics behind them are most of a start; a server binds them all before it forks.
        """
        for method, path, operation_id in routes:
            self._announced[operation_id] = register
            self._app.add_url_rule(
                _PARAMETER.sub(r"<\1>", path), operation_id, self._first_call(operation_id), methods=[method]
            )

    def _first_call(self, operation_id: str) -> Callable[..., Response]:
        def answer(**path: str) -> Response:
            self._bind_announced(operation_id)
            found: Response = self._app.view_functions[operation_id](**path)  # type: ignore[assignment]
            return found

        return answer

    def _bind_announced(self, operation_id: str) -> None:
        with self._binding:
            register = self._announced.get(operation_id)
            if register is None:
                return
            register(self)
            if operation_id in self._announced:
                raise ValueError(f"{operation_id}: announced, and bound by nobody")

    def tag(self, name: str, description: str) -> None:
        """Describes a group of operations."""
        self._tags[name] = description

    def operation(
        self,
        method: str,
        path: str,
        *,
        operation_id: str,
        tag: str,
        summary: str,
        description: str,
        response: Schema | None,
        request: Schema | None = None,
        query: Schema | None = None,
        lines: Lines | None = None,
        media_type: str = answers.JSON,
        problems: tuple[ProblemType, ...] = (),
        example: str | tuple[str, ...] = (),
        links: Mapping[str, Link] | None = None,
        provenance: str | None = None,
        explain: explaining.Explain | None = None,
        computes: bool = True,
        cache_seconds: int | None = 300,
    ) -> Callable[[View], View]:
        """Binds the view it decorates, or is called with.

        ``request``, ``query`` and ``response`` are instances of shapes. A view is called with what its
        request's or its query's shape loads (or nothing), and with the path's parameters by name; it
        returns plain values, arrays or dataclasses, or text for another ``media_type``. With ``lines`` it is
        a :data:`assignable.api.streams.Converse` instead. ``problems`` are those beyond the ones every such
        operation can answer. ``example`` names files of ``openapi/examples``. ``provenance`` is the method's
        name; with it the answer gets that member.
        ``explain`` gives the worked steps; with it a request may ask for them, and the answer then has them.
        ``computes`` takes a compute slot. ``cache_seconds`` is how long a GET may be kept, None not at all.
        """
        _check(method, path, operation_id, self._bound, self._tags, tag, links)

        if explain is not None and request is not None and response is not None:
            request, response = explaining.asking(request), explaining.telling(response)

        def bind(view: View) -> View:
            if explain is not None:
                view = explaining.with_steps(view, explain)
            operation = Operation(
                method=method,
                path=path,
                operation_id=operation_id,
                tag=tag,
                summary=summary,
                description=description,
                view=view,
                request=request,
                query=query,
                response=response,
                lines=lines,
                media_type=media_type,
                problems=problems,
                examples=(example,) if isinstance(example, str) else example,
                links=links or {},
                provenance=provenance,
                computes=computes,
                cache_seconds=cache_seconds if method == "GET" else None,
            )
            self._bound[operation_id] = operation
            rule = _PARAMETER.sub(r"<\1>", path)
            if self._announced.pop(operation_id, None) is None:
                self._app.add_url_rule(rule, operation_id, self._endpoint(operation), methods=[method])
                return view
            (known,) = self._app.url_map.iter_rules(operation_id)
            if known.rule != rule or known.methods is None or method not in known.methods:
                raise ValueError(f"{operation_id}: bound to another route than it was announced with")
            self._app.view_functions[operation_id] = self._endpoint(operation)
            return view

        return bind

    def _endpoint(self, operation: Operation) -> Callable[..., Response]:
        if operation.lines is not None:
            return self._taking_lines(operation)
        if operation.request is not None:
            return self._taking_body(operation)
        return self._taking_none(operation)

    def _taking_lines(self, operation: Operation) -> Callable[..., Response]:
        settings = self._settings

        def answer() -> Response:
            environ = request.environ
            environ[OPERATION] = operation.operation_id
            bodies.require_acceptable(environ, bodies.NDJSON)
            bodies.require(environ, bodies.NDJSON)
            packed = bodies.encoding_of(environ)
            declared = environ.get("CONTENT_LENGTH") or ""
            if declared.isascii() and declared.isdigit() and int(declared) > settings.max_stream_bytes:
                raise bodies.too_large(settings.max_stream_bytes)
            pieces = bodies.pieces(environ, settings.max_stream_bytes)
            if packed:
                pieces = bodies.inflated(pieces, settings.max_stream_bytes)
            counted = streams.uncounted if self.metrics is None else self.metrics.line
            call = streams.Call(environ[REQUEST_ID], lambda error: self._failed(error, environ), counted)
            parts = streams.stream(operation.view, call, pieces, self._slots, settings.max_body_bytes)
            told = self._streams.occupied_by(parts)
            answered = Response(told, headers=[("Cache-Control", "no-store")], content_type=bodies.NDJSON)
            answered.call_on_close(told.close)
            return answered

        return answer

    def _taking_body(self, operation: Operation) -> Callable[..., Response]:
        content_type = operation.media_type
        operation_id = operation.operation_id
        tabled = operation.tabled
        taken = (bodies.JSON,) if tabled is None else (bodies.JSON, bodies.CSV)

        def answer(**path: str) -> Response:
            environ = request.environ
            environ[OPERATION] = operation_id
            bodies.require_acceptable(environ, content_type)
            as_table = bodies.require(environ, *taken) == bodies.CSV
            packed = bodies.encoding_of(environ)
            body = bodies.read(environ, self._settings.max_body_bytes)
            tally = environ.get(TALLY)
            # The place is taken before parsing: objects weigh many times what the text does.
            with self._slots:
                if packed:
                    kind = problems.NOT_CSV if as_table else problems.NOT_JSON
                    body = bodies.inflate(body, self._settings.max_inflated_bytes, kind)
                if as_table:
                    written = operation.answer_to_table(body, request.query_string, tally, **path)
                else:
                    if tabled is not None and environ.get("QUERY_STRING"):
                        tables.refuse_parameters(request.args)
                    result = operation.computed(strict_json.loads(body), tally, **path)
                    written = operation.write(result, body)
            return _response(written, content_type, (("Cache-Control", "no-store"),))

        return answer

    def _taking_none(self, operation: Operation) -> Callable[..., Response]:
        takes_nothing = operation.query is None and "{" not in operation.path
        constant = takes_nothing and operation.cache_seconds is not None

        def answer(**path: str) -> Response:
            environ = request.environ
            environ[OPERATION] = operation.operation_id
            bodies.require_acceptable(environ, operation.media_type)
            if constant:
                if operation.operation_id not in self._constant:
                    self._constant[operation.operation_id] = self._tagged(operation, (), path)
                written, tag = self._constant[operation.operation_id]
            else:
                loaded = () if operation.query is None else (_load_query(operation.query),)
                written, tag = self._tagged(operation, loaded, path)
            if operation.cache_seconds is None:
                return _response(written, operation.media_type, (("Cache-Control", "no-store"),))
            return cacheable(written, operation.media_type, operation.cache_seconds, tag)

        return answer

    def _tagged(
        self, operation: Operation, loaded: tuple[Any, ...], path: dict[str, str]
    ) -> tuple[bytes, str]:
        asked = request.query_string if operation.provenance is not None else b""
        if operation.computes:
            with self._slots:
                written = operation.write(operation.view(*loaded, **path), asked)
        else:
            written = operation.write(operation.view(*loaded, **path), asked)
        return written, answers.etag(written)

    def document(self) -> bytes:
        """The OpenAPI document, the same bytes at every call."""
        with self._binding:
            return self._document

    @cached_property
    def _document(self) -> bytes:
        from .openapi import describe

        return describe(tuple(self.operations.values()), self._tags, self._access)


def cacheable(body: bytes, content_type: str, seconds: int, tag: str | None = None) -> Response:
    """A GET's answer with its entity tag; 304 and no body for who has it already."""
    tag = answers.etag(body) if tag is None else tag
    headers = (("Cache-Control", f"public, max-age={seconds}"), ("ETag", tag))
    if answers.matches(request.environ.get("HTTP_IF_NONE_MATCH"), tag):
        return Response(status=304, headers=headers)
    return _response(body, content_type, headers)


def _response(body: bytes, content_type: str, headers: tuple[tuple[str, str], ...]) -> Response:
    # A picture opened by itself is a document: it may draw, and nothing else.
    policy = _OF_A_PICTURE if content_type == answers.SVG else ()
    return Response(
        body,
        headers=[("Content-Digest", answers.content_digest(body)), *headers, *policy],
        content_type=content_type,
    )


def _load_query(shape: Schema) -> Any:
    """The query's parameters, through the strict fields that bodies go through."""
    known = known_names(shape)
    faults: list[Entry] = []
    given: dict[str, Any] = {}
    for name, texts in request.args.lists():
        if len(texts) > 1:
            faults.append(Entry("repeated-parameter", "This parameter is given twice.", parameter=name))
        given[name] = from_text(texts[0]) if name in known and reads_json(known[name]) else texts[0]
    try:
        loaded = shape.load(given)
    except ValidationError as error:
        for entry in problems.pointers(error.messages):
            if isinstance(entry, Entry):
                parameter = (entry.pointer or "#").removeprefix("#").removeprefix("/").split("/")[0]
                faults.append(Entry(entry.code, entry.detail, parameter=parameter))
    if faults:
        detail = faults[0].detail if len(faults) == 1 else f"{len(faults)} parameters are at fault."
        raise Problem(problems.CONTRACT_VIOLATION, detail, errors=faults[: problems.MAX_ERRORS])
    return loaded


def _check(
    method: str,
    path: str,
    operation_id: str,
    known: Mapping[str, Operation],
    tags: Mapping[str, str],
    tag: str,
    links: Mapping[str, Link] | None,
) -> None:
    """What a clean contract needs of every operation, told to whoever binds one."""
    if method not in ("GET", "POST"):
        raise ValueError(f"{operation_id}: {method} is not a method of this contract")
    if not path.startswith("/"):
        raise ValueError(f"{operation_id}: {path} is not a path")
    if not _CAMEL.fullmatch(operation_id):
        raise ValueError(f"{operation_id}: an operation id is lowerCamel")
    if operation_id in known:
        raise ValueError(f"{operation_id}: bound twice")
    if tag not in tags:
        raise ValueError(f"{operation_id}: the tag {tag} is not described")
    for name, link in (links or {}).items():
        if not isinstance(link.get("requestBody", ""), str):
            raise ValueError(f"{operation_id}: the link {name} takes its body from a runtime expression only")


def examples_directory() -> Path:
    """Where the executed examples are: inside an installed package, or at the root of the repository."""
    package = Path(__file__).resolve().parent.parent
    installed = package / "openapi" / "examples"
    return installed if installed.is_dir() else package.parent.parent / "openapi" / "examples"
