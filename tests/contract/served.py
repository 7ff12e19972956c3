"""The whole service in process, as the tests of the contract and of the operations use it.

Everything here follows the registry and the bound operations: nothing is listed by hand.
"""

from __future__ import annotations

import copy
import json
from collections.abc import Iterator
from functools import cache
from typing import Any
from urllib.parse import unquote

from flask import Flask
from werkzeug.test import TestResponse

from assignable.api import problems
from assignable.api.app import create_app
from assignable.api.contract import Contract, Operation, examples_directory
from assignable.api.settings import Settings

Json = Any


@cache
def app() -> Flask:
    return create_app(Settings(log="off"))


@cache
def contract() -> Contract:
    return app().extensions["assignable.contract"]


def operations() -> dict[str, Operation]:
    return contract().operations


@cache
def document() -> dict[str, Any]:
    return json.loads(contract().document())


def example(name: str) -> Json:
    """The request of an example, to be changed at will."""
    return json.loads((examples_directory() / f"{name}.request.json").read_bytes())


def examples() -> list[tuple[str, str]]:
    """Every example with the id of its operation."""
    return [
        (operation.operation_id, name) for operation in operations().values() for name in operation.examples
    ]


def described(operation_id: str) -> dict[str, Any]:
    """An operation's entry in the document."""
    operation = operations()[operation_id]
    return document()["paths"][operation.path][operation.method.lower()]


def post(path: str, body: Json, **kwargs: Any) -> TestResponse:
    """A request with this body: bytes as they are, anything else as JSON."""
    data = body if isinstance(body, bytes) else json.dumps(body).encode()  # whatever it holds
    return app().test_client().post(path, data=data, **{"content_type": "application/json", **kwargs})


def call(operation_id: str, body: Json, **kwargs: Any) -> TestResponse:
    return post(operations()[operation_id].path, body, **kwargs)


def answer_of(operation_id: str, body: Json) -> dict[str, Any]:
    """The answer to a request that is expected to be good."""
    found = call(operation_id, body)
    assert found.status_code == 200, found.get_data(as_text=True)
    return json.loads(found.data)


def problem_of(
    answer: TestResponse, sent: Json = None, kind: problems.ProblemType | None = None
) -> dict[str, Any]:
    """The members of a problem, which is right in all that problems share; pointers resolve in what was sent."""
    assert 400 <= answer.status_code < 500, answer.get_data(as_text=True)
    assert answer.content_type == problems.MEDIA_TYPE
    members = json.loads(answer.data)
    known = problems.TYPES[members["type"].removeprefix("/problems/")]
    assert kind is None or known is kind, members
    assert members["status"] == answer.status_code == known.status
    assert members["title"] == known.title
    assert members["detail"].strip()
    assert members["request_id"] == answer.headers["X-Request-ID"]
    assert len(members.get("errors", ())) <= problems.MAX_ERRORS
    for entry in members.get("errors", ()):
        assert entry["detail"].strip()
        assert entry["code"] == entry["code"].lower()
        if known.status == 422 and "parameter" not in entry:
            assert resolves(entry["pointer"], sent), entry
            if entry["code"] != "unknown-field":
                assert is_of_contract(entry["pointer"], _sent_to(answer)), entry
    if known.status == 422:
        assert members["errors"], members
    return members


def steps_of(pointer: str) -> list[str]:
    return [unquote(step).replace("~1", "/").replace("~0", "~") for step in pointer[1:].split("/")[1:]]


def is_of_contract(pointer: str, schema: dict[str, Any]) -> bool:
    """Whether a pointer leads to a place that a request's schema knows; an open object may hold any."""
    here = [schema]
    for step in steps_of(pointer):
        inner = []
        if any(one.get("additionalProperties") is True and step not in one["properties"] for one in here):
            return True
        for one in here:
            if step in one.get("properties", {}):
                inner.append(one["properties"][step])
            if step.isdigit() and "items" in one:
                inner.append(one["items"])
        here = [one for found in inner for one in alternatives(found)]
        if not here:
            return False
    return True


def alternatives(schema: dict[str, Any]) -> Iterator[dict[str, Any]]:
    """What a schema may stand for, references followed, null left out."""
    while "$ref" in schema:
        schema = document()["components"]["schemas"][schema["$ref"].rpartition("/")[2]]
    if "anyOf" in schema:
        for one in schema["anyOf"]:
            yield from alternatives(one)
    elif schema.get("type") != "null":
        yield schema


def request_schema(operation_id: str) -> dict[str, Any]:
    """The schema of what an operation takes, with a reference at most at its members."""
    (schema,) = alternatives(described(operation_id)["requestBody"]["content"]["application/json"]["schema"])
    return schema


def resolves(pointer: str, body: Json) -> bool:
    """Whether a pointer leads to something in the body, or by names alone to what the body lacks."""
    if not pointer.startswith("#"):
        return False
    steps = steps_of(pointer)
    for at, step in enumerate(steps):
        if isinstance(body, dict):
            if step not in body:
                return not any(name.isdigit() for name in steps[at:])
            body = body[step]
        elif isinstance(body, list):
            if not step.isdigit() or int(step) >= len(body):
                return False
            body = body[int(step)]
        else:
            return False
    return True


def _sent_to(answer: TestResponse) -> dict[str, Any]:
    path = answer.request.path
    return next(request_schema(name) for name, found in operations().items() if found.path == path)


def pointers(members: dict[str, Any]) -> list[str]:
    return [entry["pointer"] for entry in members["errors"]]


def codes(members: dict[str, Any]) -> set[str]:
    return {entry["code"] for entry in members["errors"]}


def put(body: Json, path: tuple[str | int, ...], value: Json) -> Json:
    """A copy of the body with this value at this path; objects and lists on the way are made."""
    if not path:
        return value
    made = copy.deepcopy(body)
    here = made
    for step, following in zip(path, (*path[1:], None), strict=True):
        put_here = value if following is None else None
        if following is not None:
            there = here[step] if (step in here if isinstance(here, dict) else step < len(here)) else None
            wanted = list if isinstance(following, int) else dict
            put_here = there if type(there) is wanted else wanted()
        if isinstance(here, list):
            here.extend([None] * (step + 1 - len(here)))
        here[step] = put_here
        here = put_here
    return made


def has(body: Json, path: tuple[str | int, ...]) -> bool:
    """Whether there is something at this path."""
    for step in path:
        if step in body if isinstance(body, dict) else isinstance(body, list) and step < len(body):
            body = body[step]
        else:
            return False
    return True


def nodes(body: Json, path: tuple[str | int, ...] = ()) -> Iterator[tuple[str | int, ...]]:
    """Every place of a body."""
    yield path
    if isinstance(body, dict):
        for name, inner in body.items():
            yield from nodes(inner, (*path, name))
    elif isinstance(body, list):
        for at, inner in enumerate(body):
            yield from nodes(inner, (*path, at))


def pointer_of(path: tuple[str | int, ...]) -> str:
    return problems.pointer(path)
