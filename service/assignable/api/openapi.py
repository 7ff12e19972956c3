"""The operations that were bound, as an OpenAPI 3.1.1 document.

Imported when the document is first asked for: apispec is no part of a start.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

import orjson
from apispec import APISpec
from apispec.ext.marshmallow import MarshmallowPlugin
from apispec.ext.marshmallow.common import resolve_schema_instance
from apispec.ext.marshmallow.openapi import OpenAPIConverter
from marshmallow import INCLUDE, Schema

from . import answers, problems, tables
from .bodies import CSV, NDJSON
from .contract import _PARAMETER, Operation, ProblemDetails, examples_directory
from .fields import json_schema_of, list_bounds_of
from .problems import ProblemType
from .security import Access

_HEADERS = {
    "X-Request-ID": "The request's id: the one that was sent, or one made for it.",
    "Content-Digest": "The SHA-256 digest of the body (RFC 9530).",
    "ETag": "A strong entity tag, for If-None-Match.",
    "Cache-Control": "Whether, and for how long, the answer may be kept.",
    "Retry-After": "Seconds after which to send the same request again.",
}

_CHALLENGE = "What the service takes as a credential (RFC 9110, 11.6.1)."
_HEADER_OF_STATUS = {401: ("WWW-Authenticate",), 503: ("Retry-After",)}

_OF_EVERY_OPERATION = (problems.NOT_ACCEPTABLE, problems.INTERNAL)
_OF_A_BODY = (
    problems.NOT_JSON,
    problems.BAD_REQUEST,
    problems.CONTENT_TOO_LARGE,
    problems.UNSUPPORTED_MEDIA_TYPE,
    problems.UNSUPPORTED_CONTENT_ENCODING,
    problems.CONTRACT_VIOLATION,
)
_OF_A_STREAM = tuple(
    kind for kind in _OF_A_BODY if kind not in (problems.NOT_JSON, problems.CONTRACT_VIOLATION)
)

_INTRODUCTION = (
    "The statistics of process control as a stateless HTTP service: the same request always gives the "
    "same answer. Repeating a request is safe. Failures are problems of RFC 9457."
)


class _Converter(OpenAPIConverter):
    def schema2jsonschema(self, schema: Any) -> dict[str, Any]:
        # The library leaves out whether a shape is closed where the shape has a description.
        made: dict[str, Any] = super().schema2jsonschema(schema)  # type: ignore[no-untyped-call]
        shape = resolve_schema_instance(schema)
        made["description"] = _text_of(shape)
        made["additionalProperties"] = shape.unknown == INCLUDE
        return made


class _Plugin(MarshmallowPlugin):
    Converter = _Converter


def _text_of(shape: Any) -> str:
    """A shape's first paragraph, as the contract writes names."""
    text = getattr(shape.Meta, "description", None) or (type(shape).__doc__ or "").split("\n\n")[0]
    return " ".join(text.replace("``", "`").split())


def problems_of(operation: Operation, access: Access | None = None) -> tuple[ProblemType, ...]:
    """Every problem an operation can answer, by status and in the order of the table."""
    possible = set(operation.problems) | set(_OF_EVERY_OPERATION)
    if access is not None and operation.operation_id not in access.open:
        possible |= set(access.problems())
    if operation.request is not None:
        possible |= set(_OF_A_BODY)
        if operation.tabled is not None:
            possible.add(problems.NOT_CSV)
    if operation.lines is not None:
        possible |= set(_OF_A_STREAM)
    if operation.query is not None:
        possible.add(problems.CONTRACT_VIOLATION)
    if "{" in operation.path:
        possible.add(problems.NOT_FOUND)
    if operation.computes:
        possible.add(problems.BUSY)
    return tuple(kind for kind in problems.TYPES.values() if kind in possible)


def describe(operations: Iterable[Operation], tags: Mapping[str, str], access: Access | None = None) -> bytes:
    """The document of these operations; equal calls give equal bytes."""
    plugin = _Plugin(schema_name_resolver=lambda shape: _name_of(shape))
    operations = tuple(operations)
    used = dict.fromkeys(operation.tag for operation in operations)
    spec = APISpec(
        title="Assignable",
        version=answers.CONTRACT_VERSION,
        openapi_version="3.1.1",
        plugins=[plugin],
        info={
            "description": _INTRODUCTION,
            "license": {"name": "Apache-2.0", "identifier": "Apache-2.0"},
        },
        servers=[{"url": "/"}],
        tags=[{"name": name, "description": tags[name]} for name in used],
    )
    assert plugin.converter is not None
    add = plugin.converter.add_attribute_function
    add(lambda _, field, ret, **__: json_schema_of(field, ret))  # type: ignore[no-untyped-call]
    add(lambda _, field, ret, **__: list_bounds_of(field, ret))  # type: ignore[no-untyped-call]
    for name, text in _HEADERS.items():
        spec.components.header(name, {"description": text, "schema": {"type": "string"}})
    if access is not None:
        spec.components.header("WWW-Authenticate", {"description": _CHALLENGE, "schema": {"type": "string"}})
        for name, scheme in access.schemes().items():
            spec.components.security_scheme(name, scheme)
    spec.components.schema("Problem", schema=ProblemDetails)
    options = {operation.tabled.name: operation.tabled for operation in operations if operation.tabled}
    for name, tabled in options.items():
        spec.components.schema(name, schema=tabled.shape())
    for operation in operations:
        for shape in () if operation.lines is None else (*operation.lines.asked, *operation.lines.answered):
            if shape.__name__ not in spec.components.schemas:
                spec.components.schema(shape.__name__, schema=shape)
        described = _operation(operation, access)
        spec.path(path=operation.path, operations={operation.method.lower(): described})
    return orjson.dumps(spec.to_dict(), option=orjson.OPT_NON_STR_KEYS)


def _name_of(shape: Any) -> str:
    cls = shape if isinstance(shape, type) else type(shape)
    return "Problem" if cls is ProblemDetails else cls.__name__


def _operation(operation: Operation, access: Access | None) -> dict[str, Any]:
    described: dict[str, Any] = {
        "operationId": operation.operation_id,
        "tags": [operation.tag],
        "summary": operation.summary,
        "description": operation.description,
    }
    parameters = [
        {"in": "path", "name": name, "required": True, "schema": {"type": "string"}}
        for name in _PARAMETER.findall(operation.path)
    ]
    if operation.query is not None:
        parameters.append({"in": "query", "schema": operation.query})
    if operation.tabled is not None:
        parameters.append(_options(operation, operation.tabled))
    if parameters:
        described["parameters"] = parameters
    if operation.request is not None:
        content: dict[str, Any] = {"schema": operation.request}
        if examples := _examples(operation, "request", required=True):
            content["examples"] = examples
        bodies: dict[str, Any] = {answers.JSON: content}
        if operation.tabled is not None:
            bodies[CSV] = _table(operation, operation.tabled)
        described["requestBody"] = {"required": True, "content": bodies}
    if operation.lines is not None:
        described["requestBody"] = {
            "required": True,
            "content": {NDJSON: _of_lines(operation.lines.asked, operation.lines.example, "request")},
        }
    described["responses"] = {"200": _success(operation), **_failures(operation, access)}
    if access is not None and operation.operation_id not in access.open:
        described["security"] = [{name: []} for name in access.schemes()]
    return described


def _options(operation: Operation, tabled: tables.Tabled) -> dict[str, Any]:
    """The options beside a table: one parameter for generated clients, whose members are those of the query."""
    described: dict[str, Any] = {
        "in": "query",
        "name": "options",
        "required": False,
        "style": "form",
        "explode": True,
        "description": tables.PARAMETER_TEXT,
        "schema": {"$ref": f"#/components/schemas/{tabled.name}"},
    }
    if asked := {name: {"value": given} for name, given, _ in operation.tables()}:
        described["examples"] = asked
    return described


def _table(operation: Operation, tabled: tables.Tabled) -> dict[str, Any]:
    content: dict[str, Any] = {"schema": {"type": "string", "description": tabled.described()}}
    if found := {name: {"value": body.decode()} for name, _, body in operation.tables()}:
        content["examples"] = found
    return content


def _success(operation: Operation) -> dict[str, Any]:
    content: dict[str, Any] = {
        "schema": {"type": "string"} if operation.response is None else operation.response
    }
    if operation.media_type == answers.JSON and (
        examples := _examples(operation, "response", required=False)
    ):
        content["examples"] = examples
    headers = ["X-Request-ID", "Content-Digest", "Cache-Control"]
    if operation.lines is not None:
        content = _of_lines(operation.lines.answered, operation.lines.example, "response")
        headers.remove("Content-Digest")
    if operation.cache_seconds is not None:
        headers.append("ETag")
    success: dict[str, Any] = {
        "description": "The answer.",
        "headers": _header_references(headers),
        "content": {operation.media_type: content},
    }
    if operation.links:
        success["links"] = {name: dict(link) for name, link in operation.links.items()}
    return success


def _of_lines(shapes: Iterable[type[Schema]], example: str, part: str) -> dict[str, Any]:
    """A stream as the document knows it: a text, beside the shapes of its lines, which OpenAPI cannot state."""
    file = examples_directory() / f"{example}.{part}.ndjson"
    lines = [{"$ref": f"#/components/schemas/{shape.__name__}"} for shape in shapes]
    content: dict[str, Any] = {
        "schema": {
            "type": "string",
            "description": "Newline-delimited JSON. Each line is one of the shapes of `x-line`.",
            "x-line": lines[0] if len(lines) == 1 else {"anyOf": lines},
        }
    }
    if file.exists():
        content["examples"] = {example: {"value": file.read_text(encoding="utf-8")}}
    return content


def _failures(operation: Operation, access: Access | None) -> dict[str, Any]:
    by_status: dict[int, list[ProblemType]] = {}
    for kind in problems_of(operation, access):
        by_status.setdefault(kind.status, []).append(kind)
    return {
        str(status): {
            "description": " ".join(f"{kind.code}: {kind.meaning}" for kind in kinds),
            "headers": _header_references(["X-Request-ID", *_HEADER_OF_STATUS.get(status, ())]),
            "content": {problems.MEDIA_TYPE: {"schema": ProblemDetails}},
        }
        for status, kinds in sorted(by_status.items())
    }


def _header_references(names: Iterable[str]) -> dict[str, Any]:
    return {name: {"$ref": f"#/components/headers/{name}"} for name in names}


def _examples(operation: Operation, part: str, *, required: bool) -> dict[str, Any]:
    found: dict[str, Any] = {}
    for name in operation.examples:
        file = examples_directory() / f"{name}.{part}.json"
        if required or file.exists():
            found[name] = {"value": orjson.loads(file.read_bytes())}
    return found
