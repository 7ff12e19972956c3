"""The contract's document as pages to read: what each operation is for, takes, answers and refuses."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any
from urllib.parse import urlencode

_DEEPEST = 12
_LINES = 6  # of a table that is shown
_NO_BOUND = 1e15
"""A bound as large is one of arithmetic: it tells a reader nothing."""
_BOUNDS = (
    ("minimum", "at least {}"),
    ("exclusiveMinimum", "above {}"),
    ("maximum", "at most {}"),
    ("exclusiveMaximum", "below {}"),
    ("minItems", "{} or more"),
    ("maxItems", "no more than {}"),
    ("minLength", "{} characters or more"),
    ("maxLength", "no more than {} characters"),
)
_PLURAL = {
    "object": "objects",
    "array": "lists",
    "number": "numbers",
    "integer": "whole numbers",
    "string": "texts",
}
_SINGULAR = {
    "object": "object",
    "array": "list",
    "number": "number",
    "integer": "whole number",
    "string": "text",
}


@dataclass(frozen=True, slots=True)
class Field:
    """A member of a request or an answer, with the path that leads to it."""

    parents: str
    name: str
    kind: str
    needed: bool
    text: str


@dataclass(frozen=True, slots=True)
class Failure:
    """A problem an operation can answer."""

    status: int
    code: str
    meaning: str
    remedy: str


@dataclass(frozen=True, slots=True)
class Example:
    """A request that the contract holds, and a part of the answer where it holds one."""

    name: str
    request: str
    answer: str | None


@dataclass(frozen=True, slots=True)
class Table:
    """A body that may be a table instead: what it holds, the options beside it, and the beginning of one."""

    text: str
    options: tuple[Field, ...]
    asked: str
    shown: str


@dataclass(frozen=True, slots=True)
class Reading:
    """An operation as it is read."""

    operation_id: str
    draws: str | None
    method: str
    path: str
    group: str
    title: str
    purpose: str
    deprecated: bool
    asks: tuple[Field, ...]
    sends: tuple[Field, ...] | None
    table: Table | None
    examples: tuple[Example, ...]
    media_type: str
    by_line: bool
    answers: tuple[Field, ...]
    failures: tuple[Failure, ...]
    leads_to: tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True)
class Group:
    """Operations that belong together: id, method, path and title of each."""

    name: str
    purpose: str
    operations: tuple[tuple[str, str, str, str], ...]


class Document:
    """The parsed document. ``problems`` gives status, meaning and remedy of each problem's code."""

    def __init__(self, document: Mapping[str, Any], problems: Mapping[str, tuple[int, str, str]]) -> None:
        self._schemas = document.get("components", {}).get("schemas", {})
        self._problems = problems
        self.version: str = document["info"]["version"]
        self._found = {
            entry["operationId"]: (method.upper(), path, entry)
            for path, methods in document["paths"].items()
            for method, entry in methods.items()
        }
        self._tags = document.get("tags", ())

    def groups(self) -> tuple[Group, ...]:
        """Every operation, in the document's order."""
        purposes = {tag["name"]: tag["description"] for tag in self._tags}
        found: dict[str, list[tuple[str, str, str, str]]] = {}
        for name, (method, path, entry) in self._found.items():
            found.setdefault(entry["tags"][0], []).append((name, method, path, entry["summary"]))
        return tuple(Group(name, purposes.get(name, ""), tuple(of)) for name, of in found.items())

    def reading(self, operation_id: str) -> Reading | None:
        """One operation; None where there is no such."""
        if operation_id not in self._found:
            return None
        method, path, entry = self._found[operation_id]
        (media_type, content), *_ = entry["responses"]["200"]["content"].items()
        bodies = entry.get("requestBody", {}).get("content", {})
        body = next(iter(bodies.values()), None)
        table = bodies.get("text/csv")
        return Reading(
            operation_id=operation_id,
            draws=next(
                (name for name, (_, other, _) in self._found.items() if f"{other}/picture" == path), None
            ),
            method=method,
            path=path,
            group=entry["tags"][0],
            title=entry["summary"],
            purpose=entry["description"],
            deprecated=entry.get("deprecated", False),
            asks=tuple(
                Field("", one["name"], self._kind(one["schema"]), one["required"], one.get("description", ""))
                for one in (entry.get("parameters", ()) if table is None else ())
            ),
            sends=None if body is None else tuple(self._fields(_each(body["schema"]), "", ())),
            table=None if table is None else self._table(path, table, entry["parameters"][0]),
            examples=() if body is None else self._examples(body, content),
            media_type=media_type,
            by_line="x-line" in content["schema"],
            answers=tuple(self._fields(_each(content["schema"]), "", ())),
            failures=tuple(self._failures(entry["responses"])),
            leads_to=tuple(
                (name, link["operationId"])
                for name, link in entry["responses"]["200"].get("links", {}).items()
                if "operationId" in link
            ),
        )

    def _table(self, path: str, body: Mapping[str, Any], options: Mapping[str, Any]) -> Table:
        name, given = next(iter(body["examples"].items()))
        asked = options.get("examples", {}).get(name, {}).get("value", {})
        query = urlencode({key: one if isinstance(one, str) else _written(one) for key, one in asked.items()})
        lines = given["value"].splitlines()
        more = [f"... and {len(lines) - _LINES} rows more"] if len(lines) > _LINES + 1 else []
        return Table(
            body["schema"]["description"],
            tuple(self._fields(options["schema"], "", ())),
            f"{path}?{query}" if query else path,
            "\n".join([*lines[: _LINES if more else None], *more]),
        )

    def _examples(self, body: Mapping[str, Any], content: Mapping[str, Any]) -> tuple[Example, ...]:
        answers = content.get("examples", {})
        return tuple(
            Example(
                name,
                shown(given["value"]),
                shown(answers[name]["value"]) if name in answers else None,
            )
            for name, given in body.get("examples", {}).items()
        )

    def _failures(self, responses: Mapping[str, Any]) -> Iterator[Failure]:
        for status, response in responses.items():
            for code, (of, meaning, remedy) in self._problems.items():
                if str(of) == status and f"{code}: " in response["description"]:
                    yield Failure(of, code, meaning, remedy)

    # Shapes -----------------------------------------------------------------------------------------

    def _fields(self, schema: Mapping[str, Any], parents: str, above: tuple[str, ...]) -> Iterator[Field]:
        """Every member below a shape, each after the one that holds it."""
        shown: set[str] = set()
        for one in self._alternatives(schema):
            if one.get("type") == "array":
                yield from self._fields(one["items"], f"{parents}[]", above)
                continue
            needed = one.get("required", ())
            for name, inner in one.get("properties", {}).items():
                if name in shown:
                    continue
                shown.add(name)
                yield Field(
                    f"{parents}." if parents else "",
                    name,
                    self._kind(inner),
                    name in needed,
                    self._text(inner),
                )
                if len(above) < _DEEPEST:
                    below = f"{parents}.{name}" if parents else name
                    yield from self._fields(inner, below, (*above, name))

    def _alternatives(self, schema: Mapping[str, Any]) -> Iterator[Mapping[str, Any]]:
        while "$ref" in schema:
            schema = self._schemas[schema["$ref"].rpartition("/")[2]]
        if "anyOf" in schema:
            for one in schema["anyOf"]:
                yield from self._alternatives(one)
        elif schema.get("type") != "null":
            yield schema

    def _nullable(self, schema: Mapping[str, Any]) -> bool:
        kind = schema.get("type")
        return (isinstance(kind, list) and "null" in kind) or any(
            one.get("type") == "null" for one in schema.get("anyOf", ())
        )

    def _kind(self, schema: Mapping[str, Any]) -> str:
        kinds = dict.fromkeys(self._singular(one) for one in self._alternatives(schema))
        return " or ".join(kinds) + (", or null" if self._nullable(schema) else "")

    def _singular(self, schema: Mapping[str, Any]) -> str:
        if "enum" in schema:
            return "one of " + ", ".join(f"`{one}`" for one in schema["enum"] if one is not None)
        kind = _main(schema)
        if kind == "array":
            return f"list of {self._plural(schema.get('items', {}))}"
        return {"boolean": "true or false"}.get(kind, _SINGULAR.get(kind, kind or "any JSON"))

    def _plural(self, schema: Mapping[str, Any]) -> str:
        kinds = dict.fromkeys(
            f"lists of {self._plural(one.get('items', {}))}"
            if _main(one) == "array"
            else _PLURAL.get(_main(one), _main(one) or "any JSON")
            for one in self._alternatives(schema)
        )
        return " or ".join(kinds) + (" (null is a gap)" if self._nullable(schema) else "")

    def _text(self, schema: Mapping[str, Any]) -> str:
        found = schema.get("description", "")
        whole = list(self._alternatives(schema))
        if not found and len(whole) == 1:
            found = whole[0].get("description", "")
        bounds = [
            words.format(_number(one[name]))
            for one in whole
            for name, words in _BOUNDS
            if one.get(name) and abs(one[name]) < _NO_BOUND and (name, one[name]) != ("minLength", 1)
        ]
        more = f"{', '.join(dict.fromkeys(bounds))}." if bounds else ""
        return " ".join(part for part in (found, more[:1].upper() + more[1:]) if part)


def shown(value: Any) -> str:
    """An example for people: a stream of lines as it is, anything else laid out."""
    return value if isinstance(value, str) else laid_out(value)


def laid_out(value: Any, indent: str = "") -> str:
    """JSON for people: a member a line, a row of numbers a line."""
    inner = indent + "  "
    if isinstance(value, dict) and value:
        members = (f"{inner}{_written(name)}: {laid_out(one, inner)}" for name, one in value.items())
        return "{\n" + ",\n".join(members) + f"\n{indent}}}"
    if isinstance(value, list) and any(isinstance(one, dict | list) for one in value):
        return "[\n" + ",\n".join(f"{inner}{laid_out(one, inner)}" for one in value) + f"\n{indent}]"
    return _written(value)


def _written(value: Any) -> str:
    return json.dumps(value, ensure_ascii=False)


def _each(schema: Mapping[str, Any]) -> Mapping[str, Any]:
    """The shape of a whole body, or of each line of one."""
    found: Mapping[str, Any] = schema.get("x-line", schema)
    return found


def _main(schema: Mapping[str, Any]) -> str:
    kind = schema.get("type", "")
    return next((one for one in kind if one != "null"), "") if isinstance(kind, list) else kind


def _number(value: float) -> str:
    return f"{value:,}".replace(",", "\u202f") if isinstance(value, int) else f"{value:g}"
