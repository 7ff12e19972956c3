"""The contract for tools that read OpenAPI 3.0 alone: valid, and as strict as the contract itself."""

from __future__ import annotations

import json
from collections.abc import Callable
from functools import cache
from typing import Any

import pytest
from jsonschema import Draft202012Validator
from openapi_schema_validator import OAS30Validator
from openapi_spec_validator import OpenAPIV30SpecValidator

from assignable.cli import main
from assignable.cli.older import as_3_0
from contract import served

Json = Any


@cache
def older() -> Json:
    return as_3_0(served.document())


def words(node: Json) -> set[str]:
    """Every keyword of a document's schemas."""
    found: set[str] = set()
    if isinstance(node, dict):
        found |= set(node)
        for name, inner in node.items():
            found |= set().union(*map(words, inner.values())) if name == "properties" else words(inner)
    elif isinstance(node, list):
        found |= set().union(*map(words, node))
    return found


def test_it_is_valid() -> None:
    OpenAPIV30SpecValidator(older()).validate()
    assert older()["openapi"] == "3.0.3"
    assert list(older()["paths"]) == list(served.document()["paths"])


def test_no_word_of_3_1_is_left() -> None:
    found = words(older()["components"]["schemas"])
    assert not found & {"const", "prefixItems", "contentMediaType", "contentEncoding", "$defs", "if", "null"}
    for shape in older()["components"]["schemas"].values():
        text = json.dumps(shape)
        assert '"type": "null"' not in text
        assert '"type": [' not in text


@cache
def _shapes_as_meant() -> Json:
    return as_meant(older()["components"])


def judges(schema: Json) -> Callable[[Json], tuple[bool, bool]]:
    """Tells whether a value is valid by the contract, and by its older form."""
    new = Draft202012Validator({**schema, "components": served.document()["components"]})
    old = OAS30Validator({**as_meant(_older(schema)), "components": _shapes_as_meant()})
    return lambda value: (new.is_valid(value), old.is_valid(value))


def as_meant(node: Json) -> Json:
    """``nullable`` beside ``allOf``, which the tools of 3.0 read as null allowed, and its text forgot."""
    if isinstance(node, list):
        return [as_meant(one) for one in node]
    if not isinstance(node, dict):
        return node
    made = {name: as_meant(one) for name, one in node.items()}
    if made.get("nullable") is True and "allOf" in made:
        made["anyOf"] = [*made.pop("allOf"), {"enum": [None]}]
    return made


def _older(schema: Json) -> Json:
    return as_3_0({"info": {}, "schema": schema})["schema"]


@pytest.mark.parametrize("operation_id", ["fitXbarRLimits", "judgeXbarR", "assessMeasurements", "fitPLimits"])
def test_requests_and_answers_are_judged_alike(operation_id: str) -> None:
    operation = served.operations()[operation_id]
    entry = served.described(operation_id)
    asked = entry["requestBody"]["content"]["application/json"]["schema"]
    answered = entry["responses"]["200"]["content"]["application/json"]["schema"]
    body = served.example(operation.examples[0])
    answer = served.answer_of(operation_id, body)
    of_request, of_answer = judges(asked), judges(answered)
    assert of_request(body) == of_answer(answer) == (True, True)
    different = 0
    for judged, sent in ((of_request, body), (of_answer, answer)):
        places = [path for path in served.nodes(sent) if path]
        for path in places[:: max(1, len(places) // 40)]:
            for value in (None, "x", -1, {}, []):
                verdicts = judged(served.put(sent, path, value))
                assert verdicts[0] == verdicts[1], (path, value)
                different += not verdicts[0]
    assert different > 20


@pytest.mark.parametrize(
    ("newer", "expected"),
    [
        (
            {"type": ["number", "null"], "format": "double"},
            {"type": "number", "format": "double", "nullable": True},
        ),
        ({"exclusiveMinimum": 0, "maximum": 1}, {"minimum": 0, "exclusiveMinimum": True, "maximum": 1}),
        ({"const": 3}, {"enum": [3]}),
        (
            {"anyOf": [{"type": "string", "enum": ["a"]}, {"type": "null"}]},
            {"type": "string", "enum": ["a", None], "nullable": True},
        ),
        (
            {"anyOf": [{"$ref": "#/x"}, {"type": "null"}], "description": "Words."},
            {"allOf": [{"$ref": "#/x"}], "nullable": True, "description": "Words."},
        ),
        ({"$ref": "#/x", "description": "Words."}, {"allOf": [{"$ref": "#/x"}], "description": "Words."}),
        ({"$ref": "#/x"}, {"$ref": "#/x"}),
        ({"properties": {"const": {"type": "string"}}}, {"properties": {"const": {"type": "string"}}}),
        (
            {"anyOf": [{"type": "integer"}, {"type": "array", "items": {"type": ["integer", "null"]}}]},
            {
                "anyOf": [
                    {"type": "integer"},
                    {"type": "array", "items": {"type": "integer", "nullable": True}},
                ]
            },
        ),
    ],
)
def test_one_schema(newer: Json, expected: Json) -> None:
    assert _older(newer) == expected


def test_what_3_0_cannot_say_is_told() -> None:
    with pytest.raises(ValueError, match="one type at a time"):
        _older({"type": ["string", "number"]})


def test_the_command_prints_it(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["contract", "--openapi-3.0"]) == 0
    assert json.loads(capsys.readouterr().out) == older()
