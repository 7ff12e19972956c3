"""The released contract, replayed against the service as it is now.

A generator makes requests from the document that callers hold, not from the one served: its own examples, values
at each edge of its schemas, and some at random. What was valid then must be taken now, or refused by a
type of problem that says what no schema can; what is answered must be as the released document says.
"""

from __future__ import annotations

import copy
import json
from collections.abc import Iterator
from typing import Any

import pytest
import schemathesis
from hypothesis import HealthCheck, settings
from jsonschema import Draft202012Validator, ValidationError
from schemathesis import GenerationMode
from schemathesis.checks import load_all_checks
from schemathesis.core.failures import FailureGroup
from schemathesis.specs.openapi.checks import (
    content_type_conformance,
    response_schema_conformance,
    status_code_conformance,
)

from assignable.api import answers, problems
from contract import served
from contract.test_compatibility import released

Json = Any
SEMANTIC = {f"/problems/{kind.code}" for kind in (problems.NOT_COMPUTABLE, problems.DOCUMENT_MISMATCH)}
QUIET = settings(
    derandomize=True, deadline=None, database=None, suppress_health_check=list(HealthCheck), max_examples=1
)
# What the generator itself does with the random module in its strategies is no fault of the service.
pytestmark = pytest.mark.filterwarnings("ignore::hypothesis.errors.HypothesisDeprecationWarning")
load_all_checks()


Example = tuple[str, str, str, Json]


def last_release() -> Json:
    """The document, without tables as CSV: a table is a text to it, and its options are worth nothing alone."""
    document = json.loads(released()[-1].read_bytes())
    for entry in document["paths"].values():
        for operation in entry.values():
            if operation.get("requestBody", {}).get("content", {}).pop("text/csv", None):
                operation.pop("parameters", None)
    return document


# The released examples, each answered as its document says -------------------------------------------


def examples(document: Json) -> Iterator[Example]:
    """Path, media type, name and value of every example of a request."""
    for path, entry in document["paths"].items():
        for kind, content in entry.get("post", {}).get("requestBody", {}).get("content", {}).items():
            for name, example in content.get("examples", {}).items():
                yield path, kind, name, example["value"]


def replay(document: Json, example: Example) -> None:
    path, kind, _, value = example
    body = value.encode() if isinstance(value, str) else json.dumps(value).encode()
    answer = served.app().test_client().post(path, data=body, content_type=kind)
    assert answer.status_code == 200, answer.text
    content = document["paths"][path]["post"]["responses"]["200"]["content"]
    assert list(content) == [answer.mimetype]
    if answer.mimetype == answers.JSON:
        schema = {**content[answers.JSON]["schema"], "components": document["components"]}
        Draft202012Validator(schema).validate(json.loads(answer.data))


RELEASED = last_release()


@pytest.mark.parametrize("example", list(examples(RELEASED)), ids=lambda one: f"{one[0]}, {one[2]}")
def test_a_released_example_is_answered_as_it_was(example: Example) -> None:
    replay(RELEASED, example)


def test_an_answer_that_lacks_a_released_field_is_found() -> None:
    document = copy.deepcopy(RELEASED)
    shape = document["components"]["schemas"]["PanelLimits"]
    shape["properties"]["width"] = {"type": "number"}
    shape["required"].append("width")
    example = next(one for one in examples(document) if one[2] == "xbar-r-limits")
    with pytest.raises(ValidationError, match="'width' is a required property"):
        replay(document, example)


# What its schemas allow, edge by edge ----------------------------------------------------------------


def replayed(document: Json) -> Any:
    """A document as the generator reads it, beside the service of today: valid requests at every edge."""

    def application(environ: dict[str, Any], start_response: Any) -> Any:
        if environ["PATH_INFO"] == "/openapi.json":
            start_response("200 OK", [("Content-Type", "application/json")])
            return [json.dumps(document).encode()]
        return served.app()(environ, start_response)

    schema = schemathesis.openapi.from_wsgi("/openapi.json", application)
    schema.config.generation.update(modes=[GenerationMode.POSITIVE])
    schema.config.phases.examples.enabled = False
    schema.config.phases.fuzzing.enabled = False
    return schema


def taken(_: Any, response: Any, case: Any) -> None:
    """What was valid is answered, or refused for what no schema can say."""
    if response.status_code != 200:
        assert response.status_code == 422, f"gone: {response.status_code} {response.text}"
        assert response.json()["type"] in SEMANTIC, f"valid when released, now refused: {response.text}"


def check(case: Any) -> None:
    of_the_answer = (status_code_conformance, content_type_conformance, response_schema_conformance)
    case.validate_response(case.call(), checks=[taken, *of_the_answer])


# Charts of measurements, of counts and with a memory stand for all of them, which have the same machinery; every
# bound of every shape is compared by the check for breaking changes. Streams are texts to their document.
EDGES = replayed(RELEASED).exclude(path_regex="^/v1/charts/(?!(xbar-r|p|ewma)/)|^/v1/bulk|/picture$")


@EDGES.parametrize()
@QUIET
def test_what_was_valid_is_taken(case: Any) -> None:
    check(case)


def wider() -> Json:
    """A release that allowed more than is allowed now."""
    document = copy.deepcopy(RELEASED)
    document["components"]["schemas"]["XbarRFit"]["properties"]["sigma_multiple"]["maximum"] = 20
    return document


def larger() -> Json:
    """A release with an operation that is no more."""
    document = copy.deepcopy(RELEASED)
    document["paths"] = {"/v1/charts/np-r/limits": document["paths"]["/v1/charts/xbar-r/limits"]}
    return document


# Strict: were nothing found, the test would fail.
found = pytest.mark.xfail(strict=True, raises=FailureGroup, reason="the replay finds what it is to find")


@found
@replayed(wider()).include(path="/v1/charts/xbar-r/limits").parametrize()
@QUIET
def test_a_narrowed_maximum_is_found(case: Any) -> None:
    check(case)


@found
@replayed(larger()).parametrize()
@QUIET
def test_an_operation_that_is_gone_is_found(case: Any) -> None:
    check(case)
