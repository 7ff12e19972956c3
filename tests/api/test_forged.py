"""Limits documents and carries made by hand, with a digest of their own: a clear problem, or finite numbers."""

import copy
import json
import random

import pytest

from assignable.api.app import create_app
from assignable.api.contract import examples_directory
from assignable.api.settings import Settings
from assignable.documents.canonical import digest
from assignable.spc.charts import CHARTS
from contract import served

NASTY = (0, -1, 1, 5e-324, 1e-300, 1e300, -1e300, 1e15, 0.5, 3.7, None, "x", [], [0.0], [1e300, -1e300], True)
UNTOUCHED = ("digest", "seal", "chart", "format", "limits")


def _nodes(value, path=()):
    if isinstance(value, dict):
        inner = value.items()
    elif isinstance(value, list):
        inner = enumerate(value[:3])
    else:
        inner = ()
    for key, each in inner:
        yield (*path, key)
        yield from _nodes(each, (*path, key))


def _forged(document, draw):
    changed = copy.deepcopy(document)
    *steps, last = draw.choice([path for path in _nodes(document) if path[0] not in UNTOUCHED])
    here = changed
    for step in steps:
        here = here[step]
    here[last] = draw.choice(NASTY)
    changed["digest"] = digest(changed)
    return changed


@pytest.mark.filterwarnings("default")
@pytest.mark.parametrize("name", list(CHARTS))
def test_forged_documents_never_break_the_service(name):
    client = create_app(Settings(log="off")).test_client()
    path = f"/v1/charts/{name}/signals"
    example = json.loads((examples_directory() / f"{name}-signals.request.json").read_text())
    carry = client.post(path, json=example).json["carry"]
    draw = random.Random(3)
    refused = 0
    for _ in range(40):
        for body in (
            {**example, "limits": _forged(example["limits"], draw)},
            {**example, "carry": _forged(carry, draw)},
        ):
            answer = client.post(path, json=body)
            assert answer.status_code in (200, 422), (answer.json, body)
            refused += answer.status_code == 422
    assert refused


@pytest.mark.parametrize("operation_id", ["judgeXbarR", "checkRelease"])
def test_a_document_nested_deeper_than_any_is_not_as_it_was_issued(operation_id):
    deep = []
    for _ in range(400):
        deep = [deep]
    limits = {**served.example("xbar-r-signals")["limits"], "more": deep}
    body = served.example("xbar-r-signals" if operation_id == "judgeXbarR" else "release-checks")
    if operation_id == "judgeXbarR":
        body["limits"] = limits
    else:
        body["characteristics"][0]["trend"] = {"limits": limits}
    served.problem_of(served.call(operation_id, body), body)
