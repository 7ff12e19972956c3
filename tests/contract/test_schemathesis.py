"""The service against its own document, by requests that a generator makes from it.

All of the generator's checks run, but for the one that takes every refusal of valid data for a fault: what a
schema cannot say (unequal lengths, no variation, a document edited) is refused by a problem type of its own,
and only those are allowed. Seeds are fixed and nothing is kept from run to run.
"""

from __future__ import annotations

import json
from collections import Counter
from typing import Any

import pytest
import schemathesis
from hypothesis import HealthCheck, settings
from hypothesis.stateful import run_state_machine_as_test
from schemathesis import GenerationMode
from schemathesis.checks import load_all_checks
from schemathesis.specs.openapi.checks import positive_data_acceptance

from assignable.api import problems
from assignable.spc.charts import CHARTS
from contract import served

SEMANTIC = (problems.NOT_COMPUTABLE, problems.DOCUMENT_MISMATCH)
# What the generator itself does with the random module in its strategies is no fault of the service.
pytestmark = pytest.mark.filterwarnings("ignore::hypothesis.errors.HypothesisDeprecationWarning")

QUIET = settings(derandomize=True, deadline=None, database=None, suppress_health_check=list(HealthCheck))
load_all_checks()


def wired(document: dict[str, Any]) -> dict[str, Any]:
    """The document with its links in a form that the generator follows, and without tables.

    OpenAPI allows a link one runtime expression for the whole body, so the wiring of the members is in an
    extension; the data of the request that was answered goes along. It has no words for parameters that go with
    one media type only, so CSV bodies have tests of their own.
    """
    for path in document["paths"].values():
        for operation in path.values():
            if operation.get("requestBody", {}).get("content", {}).pop("text/csv", None):
                del operation["parameters"]
            for link in operation["responses"]["200"].get("links", {}).values():
                if members := link.pop("x-request-body", None):
                    link["requestBody"] = {"data": "$request.body#/data", **members}
                    link["x-schemathesis"] = {"merge_body": False}
    return document


def application(environ: dict[str, Any], start_response: Any) -> Any:
    """The service, with the document wired."""
    if environ["PATH_INFO"] == "/openapi.json":
        start_response("200 OK", [("Content-Type", "application/json")])
        return [json.dumps(wired(json.loads(served.contract().document()))).encode()]
    return served.app()(environ, start_response)


def generated(**phases: bool) -> Any:
    """The document as the generator reads it, with these of its phases."""
    schema = schemathesis.openapi.from_wsgi("/openapi.json", application)
    for name, enabled in phases.items():
        getattr(schema.config.phases, name).enabled = enabled
    return schema


def refusal(_: Any, response: Any, case: Any) -> None:
    """What every refusal owes, and which refusals of valid data there may be."""
    if response.status_code < 400:
        return
    members = response.json()
    assert response.headers["content-type"][0] == problems.MEDIA_TYPE
    assert members["status"] == response.status_code
    assert members["request_id"] == response.headers["x-request-id"][0]
    assert members["detail"].strip()
    kind = problems.TYPES[members["type"].removeprefix("/problems/")]
    assert kind.status == response.status_code
    for entry in members.get("errors", ()):
        assert entry["detail"].strip()
        if kind.status == 422 and "pointer" in entry and isinstance(case.body, (dict, list)):
            schema = served.request_schema(case.operation.definition.raw["operationId"])
            assert served.resolves(entry["pointer"], case.body), entry
            assert entry["code"] == "unknown-field" or served.is_of_contract(entry["pointer"], schema), entry
    if case.meta is not None and case.meta.generation.mode == GenerationMode.POSITIVE:
        assert kind in SEMANTIC, f"valid data is refused: {members}"


def check(case: Any, answer: Any) -> None:
    case.validate_response(answer, additional_checks=[refusal], excluded_checks=[positive_data_acceptance])


# Requests at random, good and bad, for every operation. The pictures take the requests of others: those of one
# chart stand for those of all. Streams of lines are texts to the document: what is in them has tests of its own.
FIRST = next(iter(CHARTS))
EVERY = generated(coverage=False).exclude(path_regex=f"/v1/(bulk|charts/(?!{FIRST}/).*/picture$)")


@EVERY.parametrize()
@settings(QUIET, max_examples=6)
def test_every_operation(case: Any) -> None:
    check(case, case.call())


# Every edge of every schema, where shapes differ and answers are quick: the charts after the first have the
# same machinery, designs search for long, and the bounds of all of them are tried in test_document.
EDGES = generated(fuzzing=False).exclude(path_regex=f"/v1/(bulk|charts/(?!{FIRST}/)|designs/)|/picture$")


@EDGES.parametrize()
@settings(QUIET, max_examples=1)
def test_the_edges_of_the_schemas(case: Any) -> None:
    check(case, case.call())


# From limits to signals, and on with the carry: a machine for each chart follows the links of the document.
FOLLOWED: Counter[str] = Counter()


def machine(chart: str) -> Any:
    """Limits are fitted, and go with data into the operation that judges; the carry goes into the next."""

    class Following(
        generated(coverage=False).include(path_regex=f"/v1/charts/{chart}/[a-z]+$").as_state_machine()
    ):  # type: ignore[misc]
        def validate_response(self, response: Any, case: Any, *_: Any, **__: Any) -> None:
            if response.status_code == 200:
                body = case.body if isinstance(case.body, dict) else {}
                FOLLOWED["carried" if body.get("carry") else "judged" if "limits" in body else "fitted"] += 1
            case.validate_response(
                response,
                additional_checks=[refusal],
                excluded_checks=[positive_data_acceptance],
                recorder=self.recorder,
            )

    return Following


@pytest.mark.parametrize("chart", list(CHARTS))
def test_the_links_are_followed(chart: str) -> None:
    run_state_machine_as_test(machine(chart), settings=settings(QUIET, max_examples=8, stateful_step_count=5))


def test_the_links_led_somewhere() -> None:
    if not FOLLOWED:
        pytest.skip("only after the machines have run")
    assert FOLLOWED["fitted"] >= 10, FOLLOWED
    assert FOLLOWED["judged"] >= 5, FOLLOWED
    assert FOLLOWED["carried"] >= 2, FOLLOWED
