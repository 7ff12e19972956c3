"""The document of the whole service: what every operation and every shape owes its readers.

All tests follow the bound operations; each bound that the document states is tried on both sides.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterator
from typing import Any

import pytest
from jsonschema import Draft202012Validator
from marshmallow import ValidationError
from openapi_spec_validator import validate

from assignable.api import answers, openapi, problems
from assignable.api.contract import Operation
from assignable.spc.charts import CHARTS
from contract import served

OPERATIONS = tuple(served.operations())
TAKING_BODY = tuple(name for name, found in served.operations().items() if found.request is not None)
PICTURES = tuple(name for name, found in served.operations().items() if found.media_type == answers.SVG)
OWN_BODY = tuple(name for name in TAKING_BODY if name not in PICTURES)
REFERENCE = "#/components/schemas/"
Path = tuple[str | int, ...]


def shapes() -> dict[str, dict[str, Any]]:
    return served.document()["components"]["schemas"]


def types_of(schema: dict[str, Any]) -> set[str]:
    found = schema.get("type", [])
    return set(found if isinstance(found, list) else [found])


def parts(schema: Any) -> Iterator[dict[str, Any]]:
    """A schema and all schemas inside it, references not followed."""
    yield schema
    for one in (*schema.get("anyOf", ()), *schema.get("oneOf", ()), *schema.get("allOf", ())):
        yield from parts(one)
    if "items" in schema:
        yield from parts(schema["items"])
    for one in schema.get("properties", {}).values():
        yield from parts(one)


def used_by(schema: dict[str, Any]) -> set[str]:
    """The names of all components that a schema leads to."""
    found: set[str] = set()
    todo = [schema]
    while todo:
        for part in parts(todo.pop()):
            name = part.get("$ref", "").removeprefix(REFERENCE)
            if name and name not in found:
                found.add(name)
                todo.append(shapes()[name])
    return found


def of_requests() -> set[str]:
    found: set[str] = set()
    for operation_id in TAKING_BODY:
        found |= used_by(served.request_schema(operation_id))
    return found


def answer_schema(operation_id: str) -> dict[str, Any]:
    (content,) = served.described(operation_id)["responses"]["200"]["content"].values()
    return content["schema"]


def validator(schema: dict[str, Any]) -> Draft202012Validator:
    return Draft202012Validator({**schema, "components": {"schemas": shapes()}})


# Operations -----------------------------------------------------------------------------------------


def test_the_document_is_valid() -> None:
    validate(served.document())


def test_operation_ids_are_unique_and_lower_camel() -> None:
    found = [entry["operationId"] for path in served.document()["paths"].values() for entry in path.values()]
    assert sorted(found) == sorted(OPERATIONS)
    assert len(set(found)) == len(found)
    assert all(re.fullmatch(r"[a-z]+([A-Z][a-z0-9]*)+", name) for name in found)


def test_every_chart_has_its_operations() -> None:
    for chart in CHARTS.values():
        for verb, name in (("limits", f"fit{chart.stem}Limits"), ("signals", f"judge{chart.stem}")):
            assert served.operations()[name].path == f"/v1/charts/{chart.name}/{verb}"
            picture = served.operations()[f"draw{chart.stem}{verb.capitalize()}"]
            assert picture.path == f"/v1/charts/{chart.name}/{verb}/picture"


@pytest.mark.parametrize("operation_id", PICTURES)
def test_a_picture_takes_what_its_operation_takes(operation_id: str) -> None:
    picture = served.operations()[operation_id]
    (source,) = (found for found in served.operations().values() if picture.path == f"{found.path}/picture")
    assert picture.request is source.request
    assert picture.examples == source.examples
    assert set(picture.problems) == set(source.problems)
    assert answer_schema(operation_id) == {"type": "string"}
    (content,) = served.described(operation_id)["responses"]["200"]["content"].values()
    assert not {"example", "examples"} & set(content)


@pytest.mark.parametrize("operation_id", OPERATIONS)
def test_an_operation_is_described(operation_id: str) -> None:
    entry = served.described(operation_id)
    assert len(entry["summary"]) >= 10
    assert not entry["summary"].endswith(".")
    assert len(entry["description"]) > len(entry["summary"]) or entry["description"].endswith(".")
    assert set(entry["tags"]) <= {tag["name"] for tag in served.document()["tags"]}
    success = entry["responses"]["200"]
    assert len(success["content"]) == 1
    assert "X-Request-ID" in success["headers"]
    # What leaves before it is whole has no digest.
    streams = served.operations()[operation_id].lines is not None
    assert ("Content-Digest" in success["headers"]) is not streams
    for parameter in entry.get("parameters", ()):
        assert parameter["description"]
    for link in success.get("links", {}).values():
        assert link["operationId"] in OPERATIONS
        assert isinstance(link.get("requestBody", ""), str)
    if "requestBody" in entry:
        assert entry["requestBody"]["required"] is True
        expected = "application/x-ndjson" if streams else "application/json"
        tabled = served.operations()[operation_id].tabled is not None
        content = entry["requestBody"]["content"]
        assert list(content) == [expected, *(["text/csv"] if tabled else [])]
        assert all(one["examples"] for one in content.values())
        assert [one["name"] for one in entry.get("parameters", ())] == (["options"] if tabled else [])


@pytest.mark.parametrize("operation_id", OPERATIONS)
def test_every_problem_is_documented(operation_id: str) -> None:
    responses = served.described(operation_id)["responses"]
    kinds = openapi.problems_of(served.operations()[operation_id])
    assert set(responses) == {"200"} | {str(kind.status) for kind in kinds}
    for kind in kinds:
        answer = responses[str(kind.status)]
        assert f"{kind.code}: {kind.meaning}" in answer["description"]
        assert answer["content"] == {problems.MEDIA_TYPE: {"schema": {"$ref": REFERENCE + "Problem"}}}


# Shapes ---------------------------------------------------------------------------------------------


# Documents of any chart, beside other things: the shape of their own chart closes them.
OPEN = {"AnyLimitsDocument", "AnyCarryDocument"}


def test_requests_are_closed_and_answers_open() -> None:
    for name in of_requests():
        assert shapes()[name]["additionalProperties"] is (name in OPEN), name
    for operation_id in OPERATIONS:
        for name in used_by(answer_schema(operation_id)):
            assert shapes()[name].get("additionalProperties", True) is not False, name


def test_every_number_has_its_format_and_every_choice_is_text() -> None:
    for name, shape in shapes().items():
        for part in parts(shape):
            if "number" in types_of(part):
                assert part["format"] == "double", name
            if "integer" in types_of(part):
                assert part["format"] == "int64", name
            if "enum" in part:
                assert "string" in types_of(part), name
                assert all(choice is None or isinstance(choice, str) for choice in part["enum"]), name


def test_everything_a_caller_sends_is_bounded() -> None:
    for name in of_requests():
        for part in parts(shapes()[name]):
            kinds = types_of(part)
            if "array" in kinds:
                assert part["maxItems"] <= 1_000_000, (name, part)
            if kinds & {"number", "integer"}:
                assert {"minimum", "exclusiveMinimum"} & set(part), (name, part)
                assert {"maximum", "exclusiveMaximum"} & set(part), (name, part)
            if "string" in kinds and "enum" not in part:
                assert part["maxLength"] <= 2000, (name, part)


def test_every_member_is_described() -> None:
    missing = [
        f"{name}.{member}"
        for name, shape in shapes().items()
        for member, schema in shape["properties"].items()
        if not schema.get("description", "").strip()
    ]
    assert missing == []


def test_every_shape_is_described() -> None:
    missing = [name for name, shape in shapes().items() if not shape.get("description", "").strip()]
    assert missing == []


def test_no_object_is_without_a_name() -> None:
    def objects(schema: Any) -> bool:
        if isinstance(schema, dict):
            return schema.get("type") == "object" or any(map(objects, schema.values()))
        return isinstance(schema, list) and any(map(objects, schema))

    for operation_id in OPERATIONS:
        entry = served.described(operation_id)
        assert not objects(
            entry.get("requestBody", {}).get("content", {}).get("application/json", {}).get("schema")
        )
        assert not objects([answer.get("content") for answer in entry["responses"].values()])
    for name, shape in shapes().items():
        assert shape["type"] == "object", name
        assert not any(objects(member) for member in shape["properties"].values()), name


def test_names_are_lower_case_with_underscores() -> None:
    factors = {"A", "A2", "A3", "B3", "B4", "B5", "B6", "D1", "D2", "D3", "D4", "E2"}  # the trade's own
    for name, shape in shapes().items():
        for member in shape["properties"]:
            # In a query, the members of nested objects have their path.
            plain = member.replace(".", "_") if name.endswith("Query") else member
            assert re.fullmatch(r"[a-z][a-z0-9_]*", plain) or (name == "Factors" and member in factors)
        for part in parts(shape):
            for choice in part.get("enum", ()):
                assert choice is None or re.fullmatch(r"[a-z][a-z0-9-]*", choice), (name, choice)


# Examples -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("operation_id", "name"), [(found, name) for found, name in served.examples() if found not in PICTURES]
)
def test_an_example_is_answered_as_the_contract_says(operation_id: str, name: str) -> None:
    sent = served.example(name)
    validator(served.request_schema(operation_id)).validate(sent)
    answer = served.answer_of(operation_id, sent)
    validator(answer_schema(operation_id)).validate(answer)
    for path in served.nodes(answer):
        node: Any = answer
        for step in path:
            node = node[step]
        if isinstance(node, list):
            assert None not in node, path
        assert not isinstance(node, float) or math.isfinite(node), path


@pytest.mark.parametrize(
    "operation_id", [name for name in OPERATIONS if served.operations()[name].method == "GET"]
)
def test_a_get_is_answered_as_the_contract_says(operation_id: str) -> None:
    operation = served.operations()[operation_id]
    asked = {
        parameter["name"]: parameter["schema"].get("minimum", 1)
        for parameter in served.described(operation_id).get("parameters", ())
        if parameter["required"]
    }
    answer = served.app().test_client().get(operation.path, query_string=asked)
    assert answer.status_code == 200
    if operation.media_type == "application/json":
        validator(answer_schema(operation_id)).validate(json.loads(answer.data))


def test_a_shape_that_is_wrong_would_be_noticed() -> None:
    checked = validator(answer_schema("computeRunLength"))
    answer = served.answer_of("computeRunLength", served.example("designs-run-length"))
    answer["run_lengths"][0]["arl"] = "370.4"
    assert not checked.is_valid(answer)


# Bounds: what the document promises is what is enforced, on both sides of each ----------------------


def places(operation_id: str) -> Iterator[tuple[Path, dict[str, Any], dict[str, Any]]]:
    """Every place of a request: its path, its schema, and the body it can be set in."""

    def walk(schema: dict[str, Any], path: Path, sent: Any) -> Iterator[tuple[Path, dict[str, Any], Any]]:
        choices = list(served.alternatives(schema))
        for one in choices:
            listed = "array" in types_of(one)
            base = sent
            if listed and (len(choices) > 1 or not served.has(sent, (*path, one.get("minItems", 1) - 1))):
                base = served.put(sent, path, [None] * one.get("minItems", 0))
            yield path, one, base
            for member, inner in one.get("properties", {}).items():
                yield from walk(inner, (*path, member), base)
            if listed:
                yield from walk(one["items"], (*path, 0), base)

    example = served.example(served.operations()[operation_id].examples[0])
    yield from walk(served.request_schema(operation_id), (), example)


def beyond(schema: dict[str, Any]) -> Iterator[tuple[Any, Any]]:
    """Values just outside a schema's bounds, each with one just inside."""
    whole = "integer" in types_of(schema)
    for name, bound in schema.items():
        if name in ("minimum", "maximum"):
            away = -1 if name == "minimum" else 1
            yield (bound + away if whole else math.nextafter(bound, away * math.inf)), bound
        elif name in ("exclusiveMinimum", "exclusiveMaximum"):
            away = 1 if name == "exclusiveMinimum" else -1
            yield bound, (bound + away if whole else math.nextafter(bound, away * math.inf))


def faults(operation: Operation, body: Any) -> dict[str, set[str]]:
    """The codes that the shape of a request finds, by pointer; empty where it takes the body."""
    assert operation.request is not None
    try:
        operation.request.load(body)
    except ValidationError as error:
        found: dict[str, set[str]] = {}
        for entry in problems.pointers(error.messages):
            if isinstance(entry, problems.Entry):
                found.setdefault(entry.pointer or "#", set()).add(entry.code)
        return found
    except Exception:  # a document that does not fit: the shape itself was right
        return {}
    return {}


@pytest.mark.parametrize("operation_id", OWN_BODY)
def test_bounds_of_numbers(operation_id: str) -> None:
    operation = served.operations()[operation_id]
    tried = 0
    for path, schema, example in places(operation_id):
        if not types_of(schema) & {"number", "integer"}:
            continue
        for outside, inside in beyond(schema):
            body = served.put(example, path, outside)
            found = served.problem_of(served.call(operation_id, body), body, problems.CONTRACT_VIOLATION)
            at = {entry["code"] for entry in found["errors"] if entry["pointer"] == served.pointer_of(path)}
            assert at & {"too-small", "too-large"}, (path, outside, found)
            found_inside = faults(operation, served.put(example, path, inside))
            assert not found_inside.get(served.pointer_of(path), set()) - {"unequal-length"}, (path, inside)
            tried += 1
        wrong = served.put(example, path, "1")
        assert served.pointer_of(path) in faults(operation, wrong), path
        assert served.pointer_of(path) in faults(operation, served.put(example, path, True)), path
        nullable = "null" in types_of(schema)
        found_null = faults(operation, served.put(example, path, None)).get(served.pointer_of(path), set())
        assert nullable or found_null or path[-1] != 0, path
        if "integer" in types_of(schema):
            fraction = served.put(example, path, 1.5)
            assert served.pointer_of(path) in faults(operation, fraction), path
    assert tried >= 2


@pytest.mark.parametrize("operation_id", OWN_BODY)
def test_bounds_of_lists_texts_and_choices(operation_id: str) -> None:
    operation = served.operations()[operation_id]
    for path, schema, example in places(operation_id):
        pointer = served.pointer_of(path)

        def codes(value: Any, path: Path = path, example: Any = example, pointer: str = pointer) -> set[str]:
            return faults(operation, served.put(example, path, value)).get(pointer, set())

        kinds = types_of(schema)
        if "array" in kinds:
            least, most = schema.get("minItems", 0), schema["maxItems"]
            item: Any = [] if "array" in types_of(schema["items"]) else None
            assert "too-many-items" in codes([item] * (most + 1)), path
            assert "too-many-items" not in codes([item] * min(most, 1000)), path
            if least:
                assert "too-few-items" in codes([item] * (least - 1)), path
            assert "too-few-items" not in codes([item] * least), path
        if "enum" in schema:
            assert "unknown-choice" in codes("no-such-choice"), path
            for choice in schema["enum"]:
                assert choice is None or not codes(choice), path
        elif "string" in kinds and schema.get("format") != "date-time":
            most = schema["maxLength"]
            assert "too-long" in codes("x" * (most + 1)), path
            assert not codes("x" * most), path
            if schema.get("minLength"):
                assert "too-short" in codes(""), path
            assert "forbidden-character" in codes("\x00"), path
        if "object" in kinds and schema["additionalProperties"] is False:
            stray = faults(operation, served.put(example, (*path, "no_such_field"), 1))
            assert "unknown-field" in stray[served.pointer_of((*path, "no_such_field"))], path
            for member in schema.get("required", ()):
                lacking = served.put(example, path, {})
                missing = faults(operation, lacking)
                assert "required" in missing[served.pointer_of((*path, member))], (path, member)
