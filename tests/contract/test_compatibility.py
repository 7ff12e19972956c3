"""The check for breaking changes, on changes made to the real document; and the contract as it was released."""

from __future__ import annotations

import copy
import json
import re
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any

import pytest
from openapi_spec_validator import validate

from assignable.api.contract import examples_directory
from assignable.cli import main
from assignable.cli.compatibility import breaking, frozen
from assignable.cli.contract_files import ACCEPTED, unannounced
from contract import served

Json = Any
Change = Callable[[Json], object]
RELEASED = examples_directory().parent / "released"

LIMITS, SIGNALS = "/v1/charts/xbar-r/limits", "/v1/charts/xbar-r/signals"


def shape(document: Json, name: str) -> Json:
    return document["components"]["schemas"][name]


def field(document: Json, name: str, member: str) -> Json:
    return shape(document, name)["properties"][member]


def of(path: str, method: str = "post") -> Callable[[Json], Json]:
    return lambda document: document["paths"][path][method]


def replace(schema: Json, **members: Json) -> None:
    schema.clear()
    schema.update(members)


def secure(document: Json, *options: Json) -> None:
    document["components"]["securitySchemes"] = {
        "key": {"type": "apiKey", "in": "header", "name": "X-API-Key"}
    }
    document["security"] = list(options)


def optional_header(document: Json, **more: Json) -> None:
    found = {"in": "header", "name": "X-Line", "schema": {"type": "string"}, **more}
    of(LIMITS)(document).setdefault("parameters", []).append(found)


def rename_shape(document: Json) -> None:
    text = json.dumps(document).replace("schemas/ScreeningRequest", "schemas/Screening")
    document.clear()
    document.update(json.loads(text))
    shapes = document["components"]["schemas"]
    shapes["Screening"] = shapes.pop("ScreeningRequest")


BREAKING: dict[str, tuple[Change, str]] = {
    "a path is gone": (lambda d: d["paths"].pop("/v1/rules"), "GET /v1/rules: this operation is gone."),
    "an operation is gone": (
        lambda d: d["paths"][LIMITS].pop("post"),
        f"POST {LIMITS}: this operation is gone.",
    ),
    "a path is renamed": (
        lambda d: d["paths"].update({"/v1/charts/x/limits": d["paths"].pop(LIMITS)}),
        f"POST {LIMITS}: this operation is gone.",
    ),
    "an operation id is renamed": (
        lambda d: of(LIMITS)(d).update(operationId="fitMeansAndRanges"),
        "the operation id fitXbarRLimits is now fitMeansAndRanges",
    ),
    "a shape is renamed": (rename_shape, "ScreeningRequest: this shape is gone"),
    "a field of a request is gone": (
        lambda d: shape(d, "XbarRFit")["properties"].pop("screening"),
        "XbarRFit/screening: this field is gone.",
    ),
    "an optional field of an answer is gone": (
        lambda d: shape(d, "XbarRLimitsAnswer")["properties"].pop("steps"),
        "XbarRLimitsAnswer/steps: this field is gone.",
    ),
    "a required field of an answer is gone": (
        lambda d: (
            shape(d, "PanelLimits")["properties"].pop("upper"),
            shape(d, "PanelLimits")["required"].remove("upper"),
        ),
        "PanelLimits/upper: this field is gone.",
    ),
    "a field of an answer may be absent": (
        lambda d: shape(d, "PanelLimits")["required"].remove("upper"),
        "PanelLimits/upper: this field may now be absent.",
    ),
    "a number of an answer may be null": (
        lambda d: field(d, "XbarRLimits", "centre").update(type=["number", "null"]),
        "XbarRLimits/centre: null is new in answers.",
    ),
    "an object of an answer may be null": (
        lambda d: replace(
            field(d, "XbarRLimitsAnswer", "limits"),
            anyOf=[{"$ref": "#/components/schemas/XbarRLimits"}, {"type": "null"}],
        ),
        "XbarRLimitsAnswer/limits: null is new in answers.",
    ),
    "an integer of an answer may be a fraction": (
        lambda d: field(d, "XbarRCarry", "points").update(type="number", format="double"),
        "XbarRCarry/points: number is new in answers.",
    ),
    "a text of an answer is another type": (
        lambda d: field(d, "CautionAnswer", "code").update(type="integer", format="int64"),
        "CautionAnswer/code: integer is new in answers.",
    ),
    "an answer has a further choice": (
        lambda d: field(d, "XbarRSignalsAnswer", "verdict")["enum"].append("warning"),
        "XbarRSignalsAnswer/verdict: the list of choices is wider in answers.",
    ),
    "an answer's choice is free text": (
        lambda d: field(d, "XbarRSignalsAnswer", "verdict").pop("enum"),
        "XbarRSignalsAnswer/verdict: the list of choices is wider in answers.",
    ),
    "a list of an answer holds nulls": (
        lambda d: field(d, "Panel", "value")["items"].update(type=["number", "null"]),
        "Panel/value[]: null is new in answers.",
    ),
    "a field of a request is required": (
        lambda d: shape(d, "XbarRFit").update(required=["data"]),
        "XbarRFit/data: this field is now required.",
    ),
    "a new field of a request is required": (
        lambda d: (
            shape(d, "XbarRFit")["properties"].update(line={"type": "string"}),
            shape(d, "XbarRFit").setdefault("required", []).append("line"),
        ),
        "XbarRFit/line: this field is now required.",
    ),
    "a maximum is lower": (
        lambda d: field(d, "XbarRFit", "sigma_multiple").update(maximum=5),
        "XbarRFit/sigma_multiple: the maximum takes less",
    ),
    "a minimum is higher": (
        lambda d: field(d, "XbarRFit", "subgroup_size").update(minimum=3),
        "XbarRFit/subgroup_size: the minimum takes less",
    ),
    "a minimum is exclusive": (
        lambda d: field(d, "XbarRFit", "subgroup_size").update(
            exclusiveMinimum=field(d, "XbarRFit", "subgroup_size").pop("minimum")
        ),
        "XbarRFit/subgroup_size: the minimum takes less",
    ),
    "a list may be shorter": (
        lambda d: field(d, "SubgroupData", "values").update(maxItems=1000),
        "SubgroupData/values: maxItems takes less",
    ),
    "a list has to be longer": (
        lambda d: field(d, "SubgroupData", "values").update(minItems=2),
        "SubgroupData/values: minItems takes less",
    ),
    "a text may be shorter": (
        lambda d: field(d, "Characteristic", "name").update(maxLength=20),
        "Characteristic/name: maxLength takes less",
    ),
    "a text has to match": (
        lambda d: field(d, "Characteristic", "name").update(pattern="^[a-z]+$"),
        "Characteristic/name: the pattern takes less",
    ),
    "a request's choice is gone": (
        lambda d: field(d, "XbarRFit", "sigma_estimator")["enum"].remove("mean-sd"),
        "XbarRFit/sigma_estimator: the list of choices takes less",
    ),
    "null is no longer a missing piece": (
        lambda d: field(d, "SubgroupData", "values")["items"]["items"].update(type="number"),
        "SubgroupData/values[][]: null is no longer taken.",
    ),
    "one number is no longer taken for a list": (
        lambda d: field(d, "SubgroupData", "sizes")["anyOf"].pop(0),
        "SubgroupData/sizes: integer is no longer taken.",
    ),
    "a number has to be whole": (
        lambda d: field(d, "XbarRFit", "sigma_multiple").update(type="integer", format="int64"),
        "XbarRFit/sigma_multiple: number is no longer taken.",
    ),
    "an open request is closed": (
        lambda d: shape(d, "AnyLimitsDocument").update(additionalProperties=False),
        "AnyLimitsDocument: other fields are no longer taken.",
    ),
    "a default is another": (
        lambda d: field(d, "XbarRFit", "sigma_estimator").update(default="pooled-sd"),
        "XbarRFit/sigma_estimator: the default is another.",
    ),
    "a default is gone": (
        lambda d: field(d, "XbarRFit", "explain").pop("default"),
        "XbarRFit/explain: the default is another.",
    ),
    "a new header is required": (
        lambda d: optional_header(d, required=True),
        f"POST {LIMITS}: the header parameter X-Line is now required.",
    ),
    "a parameter is gone": (
        lambda d: of("/v1/factors", "get")(d)["parameters"].clear(),
        "GET /v1/factors: the query parameter size is gone.",
    ),
    "a parameter takes less": (
        lambda d: of("/v1/factors", "get")(d)["parameters"][0]["schema"].update(maximum=25),
        "GET /v1/factors: the query parameter size: the maximum takes less",
    ),
    "credentials are mandatory": (
        lambda d: secure(d, {"key": []}),
        f"POST {LIMITS}: callers with no credential are no longer let in.",
    ),
    "a status is gone": (
        lambda d: of(LIMITS)(d)["responses"].pop("422"),
        f"POST {LIMITS}: the answer 422 is gone.",
    ),
    "problems have another media type": (
        lambda d: of(LIMITS)(d)["responses"]["422"].update(
            content={"application/json": {"schema": {"$ref": "#/components/schemas/Problem"}}}
        ),
        f"POST {LIMITS}: the answer 422 is no longer application/problem+json.",
    ),
    "the body has another media type": (
        lambda d: of(LIMITS)(d)["requestBody"].update(content={"text/csv": {"schema": {"type": "string"}}}),
        f"POST {LIMITS}: the request is no longer application/json.",
    ),
    "a header of an answer is gone": (
        lambda d: of("/v1/rules", "get")(d)["responses"]["200"]["headers"].pop("ETag"),
        "GET /v1/rules: the header ETag of the answer 200 is gone.",
    ),
    "a line of a stream is another": (
        lambda d: shape(d, "BulkAnswer")["properties"].pop("status"),
        "BulkAnswer/status: this field is gone.",
    ),
}

HARMLESS: dict[str, Change] = {
    "nothing": lambda d: None,
    "a new path": lambda d: d["paths"].update({"/v1/charts/new/limits": copy.deepcopy(d["paths"][LIMITS])}),
    "a new operation": lambda d: d["paths"][LIMITS].update(get={"operationId": "getLimits", "responses": {}}),
    "a new shape": lambda d: d["components"]["schemas"].update(New={"type": "object", "properties": {}}),
    "a new optional field of a request": lambda d: shape(d, "XbarRFit")["properties"].update(
        line={"type": "string", "default": "all"}
    ),
    "a new field of an answer": lambda d: (
        shape(d, "XbarRLimitsAnswer")["properties"].update(more={"type": "string"}),
        shape(d, "XbarRLimitsAnswer")["required"].append("more"),
    ),
    "a field of an answer is always there": lambda d: shape(d, "XbarRLimitsAnswer")["required"].append(
        "steps"
    ),
    "a number of an answer is never null": lambda d: field(d, "PanelLimits", "upper").update(type="number"),
    "an answer has a choice less": lambda d: field(d, "XbarRSignalsAnswer", "verdict")["enum"].remove(
        "signal"
    ),
    "a required field of a request is optional": lambda d: shape(d, "XbarRJudge")["required"].remove("data"),
    "a higher maximum": lambda d: field(d, "XbarRFit", "sigma_multiple").update(maximum=20),
    "an exclusive end is inside": lambda d: field(d, "XbarRFit", "sigma_multiple").update(
        minimum=field(d, "XbarRFit", "sigma_multiple").pop("exclusiveMinimum")
    ),
    "a longer list": lambda d: field(d, "SubgroupData", "values").update(maxItems=500_000),
    "a request's further choice": lambda d: field(d, "XbarRFit", "sigma_estimator")["enum"].append("own"),
    "an integer of a request may be a fraction": lambda d: field(d, "XbarRFit", "subgroup_size").update(
        type="number", format="double"
    ),
    "a request's number may be null": lambda d: field(d, "XbarRFit", "sigma_multiple").update(
        type=["number", "null"]
    ),
    "a closed request is open": lambda d: shape(d, "XbarRFit").update(additionalProperties=True),
    "a new header that may be left out": lambda d: optional_header(d),
    "credentials that may be left out": lambda d: secure(d, {}, {"key": []}),
    "a new status": lambda d: of(LIMITS)(d)["responses"].update(
        {"429": copy.deepcopy(of(LIMITS)(d)["responses"]["503"])}
    ),
    "a body may be CSV too": lambda d: of(LIMITS)(d)["requestBody"]["content"].update(
        {"text/csv": {"schema": {"type": "string"}}}
    ),
    "words": lambda d: (
        d["info"].update(description="Other words."),
        field(d, "XbarRFit", "sigma_multiple").update(description="Other words."),
        of(LIMITS)(d).update(summary="Other words", deprecated=True, tags=["Other"]),
    ),
    "null beside choices is written the other way": lambda d: replace(
        field(d, "Signal", "side"), type=["string", "null"], enum=["above", "below", None]
    ),
}


@cache
def base() -> Json:
    """The document as a release keeps it."""
    return frozen(served.document())


def changed(change: Change) -> Json:
    document = json.loads(json.dumps(base()))
    change(document)
    return document


@pytest.mark.parametrize("name", BREAKING)
def test_a_breaking_change_is_found(name: str) -> None:
    change, sentence = BREAKING[name]
    found = breaking(base(), changed(change))
    assert any(sentence in one for one in found), found


@pytest.mark.parametrize("name", HARMLESS)
def test_a_harmless_change_raises_no_alarm(name: str) -> None:
    assert breaking(base(), changed(HARMLESS[name])) == []


@pytest.mark.parametrize("name", [name for name in HARMLESS if name != "nothing"])
def test_a_harmless_change_is_a_change(name: str) -> None:
    assert changed(HARMLESS[name]) != base()


def test_the_last_word_of_a_shape_is_told_once() -> None:
    found = breaking(base(), changed(BREAKING["a field of an answer may be absent"][0]))
    assert found == ["PanelLimits/upper: this field may now be absent."]


# What is committed ----------------------------------------------------------------------------------


def released() -> list[Path]:
    return sorted(RELEASED.glob("*.json"), key=lambda path: [int(n) for n in path.stem.split(".")])


def test_callers_of_the_released_contract_are_safe() -> None:
    assert released()
    assert unannounced(served.document(), RELEASED) == []


@pytest.mark.parametrize("path", released(), ids=lambda path: path.stem)
def test_a_released_contract_is_one(path: Path) -> None:
    document = json.loads(path.read_bytes())
    validate(document)
    assert document["info"]["version"] == path.stem
    assert path.stat().st_size < 1_000_000
    assert re.search(rf"^## {re.escape(path.stem)}\b", (RELEASED.parent / "CHANGELOG.md").read_text(), re.M)


def test_freezing_keeps_all_that_is_compared() -> None:
    assert base() != served.document()
    assert breaking(served.document(), base()) == breaking(base(), served.document()) == []


def test_a_change_that_is_meant_is_accepted_by_its_sentence(tmp_path: Path) -> None:
    (tmp_path / "1.0.0.json").write_text(json.dumps(base()))
    now = changed(BREAKING["a maximum is lower"][0])
    (told,) = unannounced(now, tmp_path)
    sentence = told.removeprefix("Breaks callers of 1.0.0: ")
    assert sentence.startswith("XbarRFit/sigma_multiple: ")
    (tmp_path / ACCEPTED).write_text(f"# beyond it no limit was ever useful\n{sentence}\n")
    assert unannounced(now, tmp_path) == []
    (stale,) = unannounced(served.document(), tmp_path)
    assert "is no change" in stale


def test_the_last_release_is_the_newest_by_number(tmp_path: Path) -> None:
    for version in ("1.9.0", "1.10.0"):
        (tmp_path / f"{version}.json").write_text(json.dumps(base()))
    (told,) = unannounced(changed(BREAKING["a maximum is lower"][0]), tmp_path)
    assert told.startswith("Breaks callers of 1.10.0: ")


def test_the_command_compares_with_any_contract(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "openapi.json"
    file.write_text(json.dumps(served.document()))
    assert main(["contract", "--against", str(file)]) == 0
    wider = changed(lambda d: field(d, "XbarRFit", "sigma_multiple").update(maximum=20))
    file.write_text(json.dumps(wider))
    assert main(["contract", "--against", str(file)]) == 1
    assert "XbarRFit/sigma_multiple: the maximum takes less" in capsys.readouterr().err
    file.write_text("{}")
    assert main(["contract", "--against", str(file)]) == 1
    assert "no contract can be read there" in capsys.readouterr().err
