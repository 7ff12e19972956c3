"""CSV bodies: the same answers as JSON gives, and faults told by row and column."""

from __future__ import annotations

import gzip
import json
import math
import random
import time
import tracemalloc
from typing import Any
from urllib.parse import urlencode

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from werkzeug.test import TestResponse

from assignable.api import problems, tables
from assignable.api.answers import digest_of
from contract import served

XBAR = "fitXbarRLimits"
TABLED = {
    operation_id: operation
    for operation_id, operation in served.operations().items()
    if operation.tabled is not None
}
EXAMPLES = [
    (operation_id, name) for operation_id, operation in TABLED.items() for name, _, _ in operation.tables()
]


def written(query: dict[str, Any]) -> str:
    return urlencode(
        {name: value if isinstance(value, str) else json.dumps(value) for name, value in query.items()}
    )


def post(operation_id: str, body: str | bytes, query: Any = None, **kwargs: Any) -> TestResponse:
    data = body.encode() if isinstance(body, str) else body
    asked = query if isinstance(query, str) else written(query or {})
    return served.post(
        served.operations()[operation_id].path,
        data,
        **{"content_type": "text/csv", "query_string": asked, **kwargs},
    )


def refused(
    answer: TestResponse, kind: problems.ProblemType = problems.CONTRACT_VIOLATION
) -> list[dict[str, Any]]:
    """The faults of a problem of this kind, each with a place that CSV has."""
    assert answer.content_type == problems.MEDIA_TYPE, answer.get_data(as_text=True)
    members = json.loads(answer.data)
    assert members["type"] == kind.uri, members
    assert answer.status_code == kind.status
    for entry in members["errors"]:
        assert {"row", "column", "parameter", "pointer"} & entry.keys(), entry
        assert entry.get("pointer", "#") == "#" or "parameter" in entry
    return list(members["errors"])


def only(answer: TestResponse, kind: problems.ProblemType = problems.CONTRACT_VIOLATION) -> dict[str, Any]:
    (fault,) = refused(answer, kind)
    assert json.loads(answer.data)["detail"] == fault["detail"]
    return fault


def place(fault: dict[str, Any]) -> tuple[str, int | None, str | None]:
    return fault["code"], fault.get("row"), fault.get("column")


def same(one: bytes, other: bytes) -> bool:
    """Whether two answers are the same but for the digest of their request."""
    if one[:1] != b"{":
        return one == other
    found = [json.loads(answer) for answer in (one, other)]
    digests = [answer["provenance"].pop("request_digest") for answer in found]
    return found[0] == found[1] and digests[0] != digests[1]


# The same answers -----------------------------------------------------------------------------------


def test_every_operation_of_one_table_takes_csv() -> None:
    fits = {name for name in served.operations() if name.startswith("fit") and name.endswith("Limits")}
    pictures = {f"draw{name.removeprefix('fit')}" for name in fits} | {"drawMeasurements"}
    others = {
        "assessMeasurements",
        "assessAttributes",
        "computeToleranceInterval",
        "analyseCrossedStudy",
        "analyseNestedStudy",
        "analyseAgreementStudy",
        "analyseBiasStudy",
    }
    assert set(TABLED) == fits | pictures | others
    assert {operation_id for operation_id, _ in EXAMPLES} == set(TABLED)


@pytest.mark.parametrize(("operation_id", "name"), EXAMPLES)
def test_an_example_is_answered_as_its_json_is(operation_id: str, name: str) -> None:
    operation = TABLED[operation_id]
    ((query, body),) = [(query, body) for found, query, body in operation.tables() if found == name]
    answer = post(operation_id, body, query)
    assert answer.status_code == 200, answer.get_data(as_text=True)
    assert answer.content_type.startswith(operation.media_type)
    expected = served.call(operation_id, served.example(name))
    assert same(answer.data, expected.data)
