"""The contract in the words of OpenAPI 3.0.3, for gateways and generators that do not read 3.1.

Mechanical: the same requests and answers are valid. 3.0 knows null only beside a type, bounds that are
exclusive only as a mark on a bound, and no words beside a reference. A reference or null is written as
``allOf`` with ``nullable``, which is how the tools of 3.0 have it, though its text gives ``nullable`` no say
there.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

Json = Any
_UNKNOWN = ("contentMediaType", "contentEncoding")
_ENDS = (("exclusiveMinimum", "minimum"), ("exclusiveMaximum", "maximum"))


def as_3_0(document: Mapping[str, Json]) -> Json:
    """An OpenAPI 3.1 document as one of 3.0.3."""
    made = _document(document)
    made["openapi"] = "3.0.3"
    made["info"].get("license", {}).pop("identifier", None)
    return made


def _document(node: Json) -> Json:
    if isinstance(node, list):
        return [_document(one) for one in node]
    if not isinstance(node, Mapping):
        return node
    made = {}
    for name, inner in node.items():
        if name == "schema":
            made[name] = _schema(inner)
        elif name == "schemas":
            made[name] = {shape: _schema(one) for shape, one in inner.items()}
        else:
            made[name] = inner if name in ("examples", "example", "links") else _document(inner)
    return made


def _schema(schema: Mapping[str, Json]) -> Json:
    made = {name: one for name, one in schema.items() if name not in _UNKNOWN}
    if "properties" in made:
        made["properties"] = {name: _schema(one) for name, one in made["properties"].items()}
    for name in ("items", "additionalProperties", "x-line"):
        if isinstance(made.get(name), Mapping):
            made[name] = _schema(made[name])
    if "const" in made:
        made["enum"] = [made.pop("const")]
    if "examples" in made:
        made["example"] = made.pop("examples")[0]
    for exclusive, bound in _ENDS:
        if exclusive in made:
            made[bound], made[exclusive] = made[exclusive], True
    types = made.get("type")
    if isinstance(types, list):
        made |= _one_of_types([one for one in types if one != "null"], nullable="null" in types)
    for name in ("anyOf", "oneOf"):
        if name in made:
            choices = [_schema(one) for one in made.pop(name) if one.get("type") != "null"]
            nullable = len(choices) < len(schema[name])
            made |= choices[0] if len(choices) == 1 else {name: choices}
            made |= {"nullable": True} if nullable else {}
    if made.get("nullable") and "enum" in made and None not in made["enum"]:
        made["enum"] = [*made["enum"], None]
    if "$ref" in made and len(made) > 1:
        made["allOf"] = [{"$ref": made.pop("$ref")}]
    return made


def _one_of_types(types: list[str], *, nullable: bool) -> Json:
    if len(types) != 1:
        raise ValueError(f"OpenAPI 3.0 knows one type at a time, not {types}")
    return {"type": types[0], **({"nullable": True} if nullable else {})}
