"""What breaks callers between two documents of the contract: the one released, and the one now.

One question is asked of every schema: does one allow all that the other allows? A request's schema now must
allow all that the released one did; a released answer's schema must allow all that is answered now. Besides,
names must stay: of operations, shapes and fields, which generated clients spell out, and of defaults, which
change results without a word.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import Any

Json = Any
_REFERENCE = "#/components/schemas/"
_METHODS = ("get", "put", "post", "delete", "options", "head", "patch", "trace")
_LEAST = ("minLength", "minItems", "minProperties")
_MOST = ("maxLength", "maxItems", "maxProperties")
_SAME_OR_NONE = ("pattern", "multipleOf", "uniqueItems")
_GONE = object()


def breaking(released: Mapping[str, Json], now: Mapping[str, Json]) -> list[str]:
    """Every change that breaks a caller of the released contract, a sentence each; none where callers are safe."""
    return list(dict.fromkeys(_Comparison(released, now).found()))


def frozen(document: Mapping[str, Json]) -> Json:
    """A document without what is only read by people: what is compared, and requests to be sent again."""
    return _without_words(document, ())


_OF_WORDS = {"description", "summary", "examples", "example", "tags", "links", "externalDocs", "title"}


def _without_words(node: Json, path: tuple[str, ...]) -> Json:
    if isinstance(node, list):
        return [_without_words(one, path) for one in node]
    if not isinstance(node, dict):
        return node
    if path[-1:] == ("properties",):  # names of fields, whatever they are called
        return {name: _without_words(one, (*path, name)) for name, one in node.items()}
    kept = {n: _without_words(one, (*path, n)) for n, one in node.items() if n not in _OF_WORDS}
    if "requestBody" in path and "examples" in node and "schema" in node:
        kept["examples"] = node["examples"]
    if path == ("info",):
        kept = {"title": node["title"], **kept}
    if path[-2:-1] == ("responses",):
        kept = {"description": "", **kept}  # a document without it is none
    return kept


class _Comparison:
    def __init__(self, released: Mapping[str, Json], now: Mapping[str, Json]) -> None:
        self._released = released
        self._now = now
        self._known: dict[tuple[str, str, bool], list[str]] = {}

    def found(self) -> Iterator[str]:
        shapes = self._now.get("components", {}).get("schemas", {})
        for name in self._released.get("components", {}).get("schemas", {}):
            if name not in shapes:
                yield f"{name}: this shape is gone; generated clients name it."
        for path, entry in self._released["paths"].items():
            for method in (name for name in _METHODS if name in entry):
                here = f"{method.upper()} {path}"
                operation = self._now["paths"].get(path, {}).get(method)
                if operation is None:
                    yield f"{here}: this operation is gone."
                else:
                    yield from self._operation(here, entry[method], operation)

    def _operation(self, here: str, old: Json, new: Json) -> Iterator[str]:
        if old["operationId"] != new["operationId"]:
            yield f"{here}: the operation id {old['operationId']} is now {new['operationId']}."
        for option in _credentials(self._released, old):
            if not any(needed <= option for needed in _credentials(self._now, new)):
                yield f"{here}: callers with {' and '.join(sorted(option)) or 'no credential'} are no longer let in."
        yield from self._parameters(here, old, new)
        yield from self._body(here, old.get("requestBody"), new.get("requestBody"))
        for status, answer in old["responses"].items():
            if status not in new["responses"]:
                yield f"{here}: the answer {status} is gone."
                continue
            answered = new["responses"][status]
            for name in answer.get("headers", ()):
                if name not in answered.get("headers", ()):
                    yield f"{here}: the header {name} of the answer {status} is gone."
            yield from self._content(f"{here}: the answer {status}", answer, answered, request=False)

    def _parameters(self, here: str, old: Json, new: Json) -> Iterator[str]:
        before = {(one["in"], one["name"]): one for one in old.get("parameters", ())}
        after = {(one["in"], one["name"]): one for one in new.get("parameters", ())}
        for (kind, name), one in after.items():
            if one.get("required") and not before.get((kind, name), {}).get("required"):
                yield f"{here}: the {kind} parameter {name} is now required."
        for (kind, name), one in before.items():
            if (kind, name) not in after:
                yield f"{here}: the {kind} parameter {name} is gone."
            else:
                place = f"{here}: the {kind} parameter {name}"
                yield from self._schemas(one["schema"], after[kind, name]["schema"], place, request=True)

    def _body(self, here: str, old: Json, new: Json) -> Iterator[str]:
        if new and new.get("required") and not (old and old.get("required")):
            yield f"{here}: a body is now required."
        if old and not new:
            yield f"{here}: no body is taken any more."
        elif old:
            yield from self._content(f"{here}: the request", old, new, request=True)

    def _content(self, here: str, old: Json, new: Json, *, request: bool) -> Iterator[str]:
        for kind, content in old.get("content", {}).items():
            if kind not in new.get("content", {}):
                yield f"{here} is no longer {kind}."
            else:
                yield from self._schemas(
                    content["schema"], new["content"][kind]["schema"], here, request=request
                )

    # Schemas ------------------------------------------------------------------------------------------

    def _schemas(self, old: Json, new: Json, place: str, *, request: bool) -> list[str]:
        """What breaks where ``new`` takes the place of ``old`` in requests, or in answers."""
        names = old.get("$ref", ""), new.get("$ref", "")
        if not all(names):
            return self._unnamed(old, new, place, request)
        key = (*names, request)
        if key not in self._known:
            self._known[key] = []  # within itself a shape is as good as it will turn out to be
            self._known[key] = self._unnamed(old, new, names[0].removeprefix(_REFERENCE), request)
        return [*self._default(old, new, place, request), *self._known[key]]

    def _unnamed(self, old: Json, new: Json, place: str, request: bool) -> list[str]:
        found = self._default(old, new, place, request)
        if "x-line" in old:
            found += self._schemas(old["x-line"], new.get("x-line", {}), f"{place}, a line", request=request)
        before, after = list(_kinds(self._released, old)), list(_kinds(self._now, new))
        wide, narrow = (after, before) if request else (before, after)
        for one in narrow:
            fitting = [other for other in wide if _takes(other[1], one[1])]
            if not fitting:
                kind = one[1].get("type", "anything")
                told = f"{kind} is no longer taken" if request else f"{kind} is new in answers"
                found.append(f"{place}: {told}.")
                continue
            trials = []
            for other in fitting:
                (name, then), (_, today) = (one, other) if request else (other, one)
                trials.append(self._simple(then, today, name or place, request))
            fewest: list[str] = min(trials, key=len)
            found += fewest
        return found

    def _default(self, old: Json, new: Json, place: str, request: bool) -> list[str]:
        before, after = old.get("default", _GONE), new.get("default", _GONE)
        same = before is after or (type(before) is type(after) and before == after)
        return [f"{place}: the default is another."] if request and not same else []

    def _simple(self, old: Json, new: Json, place: str, request: bool) -> list[str]:
        """Two schemas of one type each."""
        wide, narrow = (new, old) if request else (old, new)
        told = "takes less than it did" if request else "is wider in answers"
        found = [f"{place}: {name} {told}." for name in _narrower(wide, narrow)]
        if "array" in (old.get("type"), new.get("type")):
            found += self._schemas(old.get("items", {}), new.get("items", {}), f"{place}[]", request=request)
        if "object" in (old.get("type"), new.get("type")):
            found += self._members(old, new, place, request)
        return found

    def _members(self, old: Json, new: Json, place: str, request: bool) -> list[str]:
        found: list[str] = []
        before, after = old.get("properties", {}), new.get("properties", {})
        for name, member in before.items():
            if name not in after:
                found.append(f"{place}/{name}: this field is gone.")
            else:
                found += self._schemas(member, after[name], f"{place}/{name}", request=request)
        needed, was_needed = set(new.get("required", ())), set(old.get("required", ()))
        if request:
            found += [f"{place}/{name}: this field is now required." for name in sorted(needed - was_needed)]
            if old.get("additionalProperties", True) and not new.get("additionalProperties", True):
                found.append(f"{place}: other fields are no longer taken.")
        else:
            lost = sorted((was_needed - needed) & set(after))
            found += [f"{place}/{name}: this field may now be absent." for name in lost]
        return found


def _credentials(document: Mapping[str, Json], operation: Json) -> list[set[str]]:
    """The sets of credentials, each of which lets a caller in."""
    options = operation.get("security", document.get("security", []))
    return [set(option) for option in options] or [set()]


def _kinds(document: Mapping[str, Json], schema: Json, name: str = "") -> Iterator[tuple[str, Json]]:
    """What a schema may stand for, as schemas of one type each, with the shape's name where it has one.

    Without a type a schema is anything.
    """
    while "$ref" in schema:
        name = schema["$ref"].removeprefix(_REFERENCE)
        schema = document["components"]["schemas"][name]
    choices = schema.get("anyOf") or schema.get("oneOf")
    if choices:
        for one in choices:
            yield from _kinds(document, one, name)
        return
    types = schema.get("type")
    for kind in types if isinstance(types, list) else [types]:
        yield name, {**schema, "type": kind} if kind else {k: v for k, v in schema.items() if k != "type"}


def _takes(wide: Json, narrow: Json) -> bool:
    kinds = wide.get("type"), narrow.get("type")
    return kinds[0] is None or kinds[0] == kinds[1] or kinds == ("number", "integer")


def _narrower(wide: Json, narrow: Json) -> Iterator[str]:
    """The keywords by which ``wide`` does not allow all that ``narrow`` allows."""
    if wide.get("type") == "null":
        return
    if "enum" in wide or "const" in wide:
        allowed, used = _choices(wide), _choices(narrow)
        if used is None or allowed is None or any(one not in allowed for one in used):
            yield "the list of choices"
    formats = wide.get("format"), narrow.get("format")
    if formats[0] not in (None, formats[1]) and formats != ("double", "int64"):
        yield "the format"
    for name, direction in (("maximum", 1), ("minimum", -1)):
        if _end(wide, direction) < _end(narrow, direction):
            yield f"the {name}"
    for name in _MOST:
        if wide.get(name, math.inf) < narrow.get(name, math.inf):
            yield name
    for name in _LEAST:
        if wide.get(name, 0) > narrow.get(name, 0):
            yield name
    for name in _SAME_OR_NONE:
        if wide.get(name) and wide[name] != narrow.get(name):
            yield f"the {name}"


def _choices(schema: Json) -> list[Json] | None:
    found = [schema["const"]] if "const" in schema else schema.get("enum")
    return None if found is None else [one for one in found if one is not None or schema.get("type") is None]


def _end(schema: Json, direction: int) -> tuple[float, int]:
    """How far a number may go in a direction; of two equal ends the one that is inside goes further."""
    inside, outside = ("maximum", "exclusiveMaximum") if direction > 0 else ("minimum", "exclusiveMinimum")
    ends = [(direction * schema[inside], 1)] if inside in schema else []
    ends += [(direction * schema[outside], 0)] if outside in schema else []
    return min(ends, default=(math.inf, 1))
