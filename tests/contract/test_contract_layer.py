"""The contract layer: what a binding puts into the document, and what it refuses to bind."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import orjson
import pytest
from openapi_spec_validator import validate

from api import toy
from assignable.api import answers, contract, openapi, problems
from assignable.api.app import create_app
from assignable.api.contract import Contract
from assignable.api.operations import documentation, health
from assignable.api.settings import Settings

REGISTERS = (health.register, documentation.register, toy.register)


def bound(*registers: Any) -> Contract:
    app = create_app(Settings(log="off"), operations=registers or REGISTERS)
    return app.extensions["assignable.contract"]


@pytest.fixture(scope="module")
def document() -> dict[str, Any]:
    return json.loads(bound().document())


def test_the_document_is_valid(document: dict[str, Any]) -> None:
    validate(document)
    assert document["openapi"] == "3.1.1"


def test_the_document_is_the_same_bytes_every_time() -> None:
    assert bound().document() == bound().document()


def test_the_document_is_the_same_in_another_process() -> None:
    code = (
        "import sys; from assignable.api.app import create_app; from assignable.api.settings import Settings\n"
        "from api import toy\n"
        "app = create_app(Settings(), operations=(toy.register,))\n"
        "sys.stdout.buffer.write(app.extensions['assignable.contract'].document())"
    )
    made = {
        subprocess.run(
            [sys.executable, "-c", code],
            check=True,
            capture_output=True,
            env={"PYTHONPATH": str(Path(toy.__file__).parent.parent), "PYTHONHASHSEED": seed},
        ).stdout
        for seed in ("1", "2")
    }
    assert made == {bound(toy.register).document()}


def test_named_components_only(document: dict[str, Any]) -> None:
    def objects(schema: Any) -> bool:
        if isinstance(schema, dict):
            return schema.get("type") == "object" or any(map(objects, schema.values()))
        return isinstance(schema, list) and any(map(objects, schema))

    assert not objects(document["paths"])
    for schema in document["components"]["schemas"].values():
        assert not any(objects(member) for member in schema["properties"].values())


def test_requests_are_closed_and_answers_open(document: dict[str, Any]) -> None:
    shapes = document["components"]["schemas"]
    for name in ("CarMeansRequest", "CarData", "CarExclusion"):
        assert shapes[name]["additionalProperties"] is False
    for name in ("CarMeans", "Problem", "ProblemEntry", "Provenance"):
        assert shapes[name].get("additionalProperties", True) is True


def test_numbers_say_their_format_and_bounds(document: dict[str, Any]) -> None:
    request = document["components"]["schemas"]["CarMeansRequest"]
    assert request["required"] == ["data"]
    assert request["properties"]["multiple"] == {
        "type": "number",
        "format": "double",
        "exclusiveMinimum": 0,
        "maximum": 10,
        "default": 3.0,
    }
    values = document["components"]["schemas"]["CarData"]["properties"]["values"]
    assert values == {
        "type": "array",
        "minItems": 1,
        "maxItems": 1000,
        "items": {
            "type": "array",
            "minItems": 1,
            "maxItems": 10,
            "items": {"type": ["number", "null"], "format": "double", "minimum": -1e300, "maximum": 1e300},
        },
    }
    answer = document["components"]["schemas"]["CarMeans"]["properties"]
    assert answer["upper"] == {"type": ["number", "null"], "format": "double"}
    assert answer["means"]["items"] == {"type": "number", "format": "double"}


def test_every_problem_an_operation_can_answer_is_in_the_document(document: dict[str, Any]) -> None:
    means = document["paths"]["/v1/means"]["post"]["responses"]
    assert list(means) == ["200", "400", "406", "413", "415", "422", "500", "503"]
    for status, answer in means.items():
        if status != "200":
            assert list(answer["content"]) == [problems.MEDIA_TYPE]
            assert answer["content"][problems.MEDIA_TYPE]["schema"] == {
                "$ref": "#/components/schemas/Problem"
            }
    assert all(code in means["422"]["description"] for code in ("contract-violation", "not-computable"))
    assert "Retry-After" in means["503"]["headers"]
    live = document["paths"]["/health/live"]["get"]["responses"]
    assert list(live) == ["200", "406", "500"]
    assert "not-ready" in document["paths"]["/health/ready"]["get"]["responses"]["503"]["description"]


def test_one_success_media_type_and_a_picture_of_its_own(document: dict[str, Any]) -> None:
    for path in document["paths"].values():
        for operation in path.values():
            assert len(operation["responses"]["200"]["content"]) == 1
    picture = document["paths"]["/v1/means/picture"]["post"]["responses"]["200"]["content"]
    assert picture == {"image/svg+xml": {"schema": {"type": "string"}}}


def test_links_and_parameters(document: dict[str, Any]) -> None:
    means = document["paths"]["/v1/means"]["post"]
    assert means["operationId"] == "computeMeans"
    assert means["responses"]["200"]["links"]["again"]["requestBody"] == "$request.body"
    parameters = document["paths"]["/v1/factors"]["get"]["parameters"]
    assert [(found["in"], found["name"], found["required"]) for found in parameters] == [
        ("query", "n", True),
        ("query", "name", False),
    ]


def test_examples_come_from_files(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def register(bind: Contract) -> None:
        bind.tag("Toys", "Only for tests.")
        bind.operation(
            "POST",
            "/v1/x",
            operation_id="doX",
            tag="Toys",
            summary="x",
            description="x",
            request=toy.CarMeansRequest(),
            response=toy.CarMeans(),
            example=("plain", "other"),
        )(toy.means)

    monkeypatch.setattr(openapi, "examples_directory", lambda: tmp_path)
    with pytest.raises(FileNotFoundError):
        bound(register).document()
    for name in ("plain", "other"):
        (tmp_path / f"{name}.request.json").write_bytes(orjson.dumps({"name": name}))
    (tmp_path / "plain.response.json").write_bytes(b'{"means": [1.0]}')
    operation = json.loads(bound(register).document())["paths"]["/v1/x"]["post"]
    asked = operation["requestBody"]["content"]["application/json"]["examples"]
    assert asked == {"plain": {"value": {"name": "plain"}}, "other": {"value": {"name": "other"}}}
    answered = operation["responses"]["200"]["content"]["application/json"]["examples"]
    assert answered == {"plain": {"value": {"means": [1.0]}}}


@pytest.mark.parametrize(
    "wrong",
    [
        {"operation_id": "ComputeX"},
        {"operation_id": "compute-x"},
        {"operation_id": "computeMeans"},
        {"method": "PUT"},
        {"path": "v1/x"},
        {"tag": "Unknown"},
        {"links": {"next": {"operationId": "x", "requestBody": {"limits": "$response.body"}}}},
    ],
)
def test_what_would_spoil_the_contract_is_not_bound(wrong: dict[str, Any]) -> None:
    good: dict[str, Any] = {
        "method": "POST",
        "path": "/v1/x",
        "operation_id": "computeX",
        "tag": "Toys",
        "summary": "x",
        "description": "x",
        "request": toy.CarMeansRequest(),
        "response": toy.CarMeans(),
    }
    bind = bound()
    given = {**good, **wrong}
    method, path = given.pop("method"), given.pop("path")
    with pytest.raises(ValueError, match=r"^[A-Za-z-]+: "):
        bind.operation(method, path, **given)
    bind.operation(good.pop("method"), good.pop("path"), **good)(toy.means)


def test_an_operation_can_be_executed_without_http() -> None:
    operation = bound().operations["computeMeans"]
    body = b'{"data": {"values": [[1, 3], [2, 4]]}}'
    answer = operation.execute(body)
    assert json.loads(answer)["means"] == [2.0, 3.0]
    assert operation.answer_to(json.loads(body), body) == answer
    with pytest.raises(problems.BadJson):
        operation.execute(b"{")


# From result to bytes -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    "result",
    [
        float("nan"),
        {"a": [1.0, float("inf")]},
        {"a": ({"b": float("nan")},)},
        np.array([1.0, np.nan]),
        np.array([[1.0], [np.inf]])[::-1],
        {"a": np.float64("nan")},
        {"a": np.float32("nan")},
        np.array([1.0, float("nan"), "x"], dtype=object),
        answers.NotFinite,
    ],
)
def test_what_is_not_finite_is_never_written(result: Any) -> None:
    with pytest.raises((answers.NotFinite, TypeError)):
        answers.dumps(result)


def test_the_place_of_what_is_not_finite_is_named() -> None:
    result = {"upper": None, "panels": [{"value": np.array([1.0])}, {"value": np.array([np.nan])}]}
    with pytest.raises(answers.NotFinite) as caught:
        answers.dumps(result)
    assert caught.value.path == "$.panels[1].value"


def test_plain_results_are_written() -> None:
    table = np.arange(6.0).reshape(2, 3)
    result = {"none": None, "strided": table[:, 1], "texts": np.array(["a", "b"]), "ints": np.array([1, 2])}
    assert answers.dumps(result) == b'{"none":null,"strided":[1.0,4.0],"texts":["a","b"],"ints":[1,2]}'


def test_provenance_is_the_last_member() -> None:
    for plain in ({}, {"a": 1}):
        whole = json.loads(answers.dumps(answers.with_provenance(plain, "toy", b"body")))
        assert list(whole)[-1] == "provenance"
        assert whole["provenance"]["request_digest"] == answers.digest_of(b"body")
        assert {key: value for key, value in whole.items() if key != "provenance"} == plain


def test_one_number_seen_many_times_is_written_as_such() -> None:
    line = np.ndarray((3,), np.float64, np.array(1.5), 0, (0,))
    assert answers.dumps({"a": line, "b": line[:0]}) == b'{"a":[1.5,1.5,1.5],"b":[]}'
    with pytest.raises(answers.NotFinite):
        answers.dumps({"a": np.ndarray((3,), np.float64, np.array(np.nan), 0, (0,))})


def test_a_start_loads_no_scipy_and_no_document_maker() -> None:
    code = (
        "import sys; from assignable.api.app import create_app; from assignable.api.settings import Settings\n"
        "from assignable.api.operations import health, documentation\n"
        "create_app(Settings(), operations=(health.register, documentation.register))\n"
        "print(sorted({'apispec', 'yaml', 'flask_swagger_ui'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    assert done.stdout.strip() == "[]"


def test_where_examples_are() -> None:
    assert contract.examples_directory().parts[-2:] == ("openapi", "examples")
