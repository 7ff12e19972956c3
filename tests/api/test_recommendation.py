"""The recommendation over HTTP: the forms of a sample, and what does not fit."""

from __future__ import annotations

from typing import Any

import pytest
from flask.testing import FlaskClient

from assignable.api.app import create_app

PATH = "/v1/charts/recommendation"


@pytest.fixture(scope="module")
def client() -> FlaskClient:
    return create_app().test_client()


@pytest.mark.parametrize(
    ("body", "chart"),
    [
        ({"description": {"kind": "measurements", "subgroup_size": 5}}, "xbar-r"),
        ({"sample": {"values": [2.5, 2.6, None, 2.4]}}, "individuals"),
        ({"sample": {"values": [[2.5, 2.6], [2.4, None], [2.5, 2.4]]}}, "xbar-s"),
        ({"sample": {"variables": [[1, 2], [2, 3], [2, 4]]}}, "t-squared"),
        ({"sample": {"counts": [1, 3, 2], "counted": "units", "inspected": 120}}, "np"),
        ({"sample": {"counts": [1, 3, 2], "counted": "events", "inspected": [1.5, 2, 1]}}, "u"),
        ({"sample": {"opportunities": [120, 40, 333]}}, "g"),
        ({"sample": {"times_between": [12.5, 4.25]}, "description": {"small_shifts": True}}, "t"),
    ],
)
def test_every_form(client: FlaskClient, body: dict[str, Any], chart: str) -> None:
    answer = client.post(PATH, json=body)
    assert answer.status_code == 200
    told = answer.get_json()
    assert told["chart"] == chart
    assert told["limits"] == f"/v1/charts/{chart}/limits"
    assert (told["evidence"] is None) == ("sample" not in body)


@pytest.mark.parametrize(
    ("body", "pointer", "code"),
    [
        ({}, "#/description/kind", "kind-missing"),
        ({"description": {"small_shifts": True}}, "#/description/kind", "kind-missing"),
        ({"sample": {}}, "#/sample", "one-form"),
        ({"sample": {"values": [1], "counts": [1]}}, "#/sample", "one-form"),
        ({"sample": {"values": [1], "counted": "units"}}, "#/sample/counted", "only-with-counts"),
        ({"sample": {"counts": [1]}}, "#/sample/counted", "counted-missing"),
        ({"sample": {"counts": [1], "counted": "units"}}, "#/sample/inspected", "inspected-missing"),
        (
            {"sample": {"counts": [1, 2], "counted": "events", "inspected": [1, 2, 3]}},
            "#/sample/inspected",
            "unequal-length",
        ),
        (
            {"sample": {"counts": [1, 2], "counted": "events", "inspected": [1, 0]}},
            "#/sample/inspected/1",
            "nothing-inspected",
        ),
        (
            {"sample": {"values": [1.0]}, "description": {"kind": "nonconformities"}},
            "#/description/kind",
            "another-kind",
        ),
        (
            {"sample": {"values": [1.0]}, "description": {"subgroup_size": 4}},
            "#/description/subgroup_size",
            "size-with-data",
        ),
    ],
)
def test_what_does_not_fit(client: FlaskClient, body: dict[str, Any], pointer: str, code: str) -> None:
    answer = client.post(PATH, json=body)
    assert answer.status_code == 422
    (fault,) = answer.get_json()["errors"]
    assert (fault["pointer"], fault["code"]) == (pointer, code)
