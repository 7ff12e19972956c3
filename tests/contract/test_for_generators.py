"""What generated clients do that people who write JSON by hand do not, and what their languages cannot hold."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest

from contract import served
from contract.test_document import shapes, validator

Json = Any
TYPED = [pair for pair in served.examples() if served.operations()[pair[0]].media_type == "application/json"]


def folded(name: str) -> str:
    """A name as languages, and file systems, that rewrite names have it."""
    return name.replace("_", "").lower()


def test_no_two_names_differ_by_case_alone() -> None:
    assert len({folded(name) for name in shapes()}) == len(shapes())
    for name, shape in shapes().items():
        members = shape["properties"]
        assert len({folded(member) for member in members}) == len(members), name


def with_defaults(schema: Json, value: Json) -> Json:
    """A value with every default of its schema written out, as generated classes write it."""
    fitting = [one for one in served.alternatives(schema) if validator(one).is_valid(value)]
    if isinstance(value, list):
        return [with_defaults(fitting[0]["items"], one) for one in value] if fitting else value
    if not isinstance(value, dict) or not fitting:
        return value
    members = fitting[0].get("properties", {})
    given = {
        name: with_defaults(members[name], one) if name in members else one for name, one in value.items()
    }
    return {**{name: one["default"] for name, one in members.items() if "default" in one}, **given}


def written_out() -> Iterator[tuple[str, str]]:
    for operation_id, name in TYPED:
        body = served.example(name)
        if with_defaults(served.request_schema(operation_id), body) != body:
            yield operation_id, name


WRITTEN_OUT = tuple(written_out())


@pytest.mark.parametrize(("operation_id", "name"), WRITTEN_OUT)
def test_a_default_that_is_sent_changes_no_answer(operation_id: str, name: str) -> None:
    body = served.example(name)
    expected = served.answer_of(operation_id, body)
    found = served.answer_of(operation_id, with_defaults(served.request_schema(operation_id), body))
    for answer in (expected, found):
        answer["provenance"].pop("request_digest")
    assert found == expected


def test_defaults_are_sent_in_most_examples() -> None:
    assert len(WRITTEN_OUT) > 60
