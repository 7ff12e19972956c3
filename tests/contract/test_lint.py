"""The lint of the contract: the committed document passes it, and each of our own rules can fail."""

from __future__ import annotations

import copy
import json
import shutil
import subprocess
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from contract import served
from contract.test_document import used_by

Json = Any
HERE = Path(__file__).resolve().parent
ROOT = HERE.parent.parent
SPECTRAL = ROOT / "tests" / "clients" / "node_modules" / ".bin" / "spectral"
RULES = HERE / "spectral.yaml"
PATIENCE_SECONDS = 240
PATH = "/v1/charts/xbar-r/limits"

pytestmark = pytest.mark.skipif(
    shutil.which("node") is None or not SPECTRAL.exists(),
    reason="the tools of tests/clients/package.json are not installed: 'npm ci' in tests/clients installs them",
)


def lint(*documents: Path) -> dict[str, set[str]]:
    """The rules that each document breaks, by its name."""
    done = subprocess.run(
        [
            SPECTRAL,
            "lint",
            *documents,
            "--ruleset",
            RULES,
            "--format",
            "json",
            "--quiet",
            "--fail-severity",
            "hint",
        ],
        capture_output=True,
        text=True,
        timeout=PATIENCE_SECONDS,
        check=False,
    )
    assert done.returncode in (0, 1), done.stderr
    found: dict[str, set[str]] = {document.name: set() for document in documents}
    for one in json.loads(done.stdout):
        found[Path(one["source"]).name].add(
            f"{one['code']}: {'/'.join(map(str, one['path']))} {one['message']}"
        )
    return found


def test_the_committed_contract_passes() -> None:
    assert lint(ROOT / "openapi" / "openapi.json") == {"openapi.json": set()}


def operation(document: Json) -> Json:
    return document["paths"][PATH]["post"]


def answer(document: Json) -> Json:
    return operation(document)["responses"]["200"]


def shape(document: Json, name: str) -> Json:
    return document["components"]["schemas"][name]


def member(document: Json, name: str, field: str) -> Json:
    return shape(document, name)["properties"][field]


# Each a small breach of one rule of our own.
BREACHES: dict[str, Callable[[Json], object]] = {
    "operation-id-lower-camel": lambda d: operation(d).update(operationId="Fit_limits"),
    "paths-with-hyphens": lambda d: d["paths"].update({"/v1/charts/xbarR/limits": d["paths"].pop(PATH)}),
    "field-names": lambda d: shape(d, "XbarRFit")["properties"].update(
        sigmaMultiple={"description": "Words.", "type": "boolean"}
    ),
    "one-success": lambda d: answer(d)["content"].update(
        {"image/svg+xml": {"schema": {"type": "string"}, "examples": {}}}
    ),
    "failures-are-problems": lambda d: operation(d)["responses"]["422"].update(
        content={"application/json": {"schema": {"$ref": "#/components/schemas/Problem"}}}
    ),
    "requests-are-closed": lambda d: shape(d, "XbarRFit").update(additionalProperties=True),
    "answers-are-open": lambda d: shape(d, "XbarRLimitsAnswer").update(additionalProperties=False),
    "bodies-have-examples": lambda d: operation(d)["requestBody"]["content"]["application/json"].pop(
        "examples"
    ),
    "numbers-have-a-format": lambda d: member(d, "PanelLimits", "upper").pop("format"),
    "lists-of-numbers-hold-no-null": lambda d: member(d, "Panel", "value")["items"].update(
        type=["number", "null"]
    ),
    "named-shapes": lambda d: shape(d, "XbarRLimitsAnswer")["properties"].update(
        limits={"description": "Words.", "type": "object", "properties": {}}
    ),
    "nullable-choices-are-alternatives": lambda d: member(d, "XbarRLimits", "limit_basis").update(
        type=["string", "null"], enum=["sigma", "probability", None]
    ),
    "no-one-of": lambda d: member(d, "SubgroupData", "sizes").update(
        oneOf=member(d, "SubgroupData", "sizes").pop("anyOf")
    ),
    "links-are-expressions": lambda d: next(iter(answer(d)["links"].values())).update(
        requestBody={"limits": {}}
    ),
    "everything-is-described": lambda d: member(d, "PanelLimits", "upper").pop("description"),
    "words-are-for-readers": lambda d: member(d, "PanelLimits", "upper").update(description="Else `None`."),
}


def small() -> Json:
    """The document of one operation."""
    document = copy.deepcopy(served.document())
    kept = document["paths"][PATH]
    document["paths"] = {PATH: kept}
    document["tags"] = [tag for tag in document["tags"] if tag["name"] in kept["post"]["tags"]]
    kept["post"]["responses"]["200"]["links"] = {
        "again": {"operationId": "fitXbarRLimits", "requestBody": "$request.body"}
    }
    kept["post"].pop("parameters", None)
    kept["post"]["requestBody"]["content"] = {
        name: one
        for name, one in kept["post"]["requestBody"]["content"].items()
        if name == "application/json"
    }
    names = {"Problem"}
    for content in (kept["post"]["requestBody"]["content"], kept["post"]["responses"]["200"]["content"]):
        for one in content.values():
            names |= used_by(one["schema"])
    names |= used_by({"$ref": "#/components/schemas/Problem"})
    document["components"]["schemas"] = {
        name: one for name, one in document["components"]["schemas"].items() if name in names
    }
    document["components"].pop("headers").clear()
    for response in kept["post"]["responses"].values():
        response.pop("headers", None)
    return document


def test_each_own_rule_can_fail(tmp_path: Path) -> None:
    """One run for all: a document each, and one that breaks nothing."""
    files = [tmp_path / "whole.json"]
    files[0].write_text(json.dumps(small()))
    for rule, breach in BREACHES.items():
        document = small()
        breach(document)
        files.append(tmp_path / f"{rule}.json")
        files[-1].write_text(json.dumps(document))
    found = lint(*files)
    assert found.pop("whole.json") == set()
    for name, broken in found.items():
        rule = name.removesuffix(".json")
        assert any(one.startswith(f"{rule}: ") for one in broken), (rule, broken)


def test_every_own_rule_has_its_breach() -> None:
    text = RULES.read_text(encoding="utf-8")
    own = [
        line[2:-1]
        for line in text.splitlines()
        if line.startswith("  ") and line[2] != " " and line.endswith(":")
    ]
    assert sorted(own) == sorted(BREACHES)
