"""Strict JSON: against the standard library's decoder with strict hooks, and case by case."""

from __future__ import annotations

import json
import time
from typing import Any, NoReturn

import orjson
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.api import strict_json
from assignable.api.strict_json import MAX_DEPTH, BadJson, loads


def reference(body: bytes) -> Any:
    """The plain, slow way; ValueError for what is not JSON."""

    def pairs(found: list[tuple[str, Any]]) -> dict[str, Any]:
        if len({key for key, _ in found}) != len(found):
            raise ValueError("repeated")
        return dict(found)

    def refuse(_: str) -> NoReturn:
        raise ValueError("constant")

    def number(text: str) -> float:
        if abs(float(text)) == float("inf"):
            raise ValueError("too large")
        return float(text)

    return json.loads(body.decode(), object_pairs_hook=pairs, parse_constant=refuse, parse_float=number)


def same(one: Any, other: Any) -> bool:
    """Equal values and types, except that integers beyond 64 bits may be floats."""
    if isinstance(one, dict) and isinstance(other, dict):
        return one.keys() == other.keys() and all(same(one[key], other[key]) for key in one)
    if isinstance(one, list) and isinstance(other, list):
        return len(one) == len(other) and all(map(same, one, other))
    if isinstance(one, (int, float)) and isinstance(other, (int, float)) and not isinstance(one, bool):
        return float(one) == float(other) and not isinstance(other, bool)
    return type(one) is type(other) and one == other


SPACE = st.sampled_from(["", "", " ", "\n", "\t "])
STRINGS = st.one_of(
    st.sampled_from(
        ['"a"', '"a"', '"b"', '"\\u0061"', '":"', '"\\":"', '"a\\": 1"', '"x\\\\"', '"é:"', '"{["']
    ),
    st.text(max_size=4).map(json.dumps),
)
NUMBERS = st.one_of(
    st.integers(-(10**25), 10**25).map(str),
    st.floats(allow_nan=False, allow_infinity=False).map(repr),
    st.sampled_from(["1e999", "NaN", "-Infinity", "-0", "1E5", "01", ".5", "+1", "1" * 320, "1e-400"]),
)


@st.composite
def spaced(draw: st.DrawFn, items: list[str], left: str, right: str) -> str:
    return left + ",".join(draw(SPACE) + item + draw(SPACE) for item in items) + right


def objects(inner: st.SearchStrategy[str]) -> st.SearchStrategy[str]:
    member = st.tuples(STRINGS, SPACE, SPACE, inner).map(lambda m: f"{m[0]}{m[1]}:{m[2]}{m[3]}")
    return st.lists(member, max_size=4).flatmap(lambda items: spaced(items, "{", "}"))


TEXTS = st.recursive(
    st.one_of(STRINGS, NUMBERS, st.sampled_from(["true", "null", "1", "2.5"])),
    lambda inner: st.one_of(
        objects(inner), st.lists(inner, max_size=4).flatmap(lambda items: spaced(items, "[", "]"))
    ),
    max_leaves=12,
)


@settings(derandomize=True, deadline=None, max_examples=600)
@given(TEXTS, st.sampled_from(["", "", "", "x", ",", '"', "}"]))
def test_agrees_with_the_slow_way(text: str, tail: str) -> None:
    body = (text + tail).encode()
    try:
        expected = reference(body)
    except ValueError:
        with pytest.raises(BadJson):
            loads(body)
        return
    if "1" * 320 in text:
        return  # an integer to the slow way, and beyond a double to ours
    assert same(loads(body), expected)


@settings(derandomize=True, deadline=None, max_examples=200)
@given(st.binary(max_size=12))
def test_any_bytes_are_read_or_refused(body: bytes) -> None:
    try:
        loads(body)
    except BadJson as error:
        refused = error
    else:
        return
    assert refused.detail.endswith((".", ".)"))


@pytest.mark.parametrize(
    ("body", "code", "line", "column"),
    [
        (b'{"data": 1,\n "data": 2}', "repeated-key", 2, 2),
        (b'{"a" : 1, "a" : ":"}', "repeated-key", 1, 11),
        (b'{"a": 1, "\\u0061": 2}', "repeated-key", 1, 10),
        (b'[{"b": [{"c": 1, "c": 1}]}]', "repeated-key", 1, 18),
        (b'[[{"c": 1, "c": 1}]]', "repeated-key", 1, 12),
        (b'[1, {"c": 1, "c": 1}]', "repeated-key", 1, 14),
        (b'["NaN", NaN]', "not-a-json-number", 1, 9),
        (b"[1,\n\n -Infinity]", "not-a-json-number", 3, 2),
        (b'["1e999", 1e999]', "number-too-large", 1, 11),
        (b"[-1e999]", "number-too-large", 1, 2),
        (b"[" + b"9" * 5000 + b"]", "number-too-large", 1, 2),
        (b"[" * 100_000, "nested-too-deeply", 1, MAX_DEPTH + 1),
        (b'{"a":' * 100_000, "nested-too-deeply", 1, 5 * MAX_DEPTH + 1),
        (b"\xef\xbb\xbf{}", "byte-order-mark", 1, 1),
        ("{}".encode("utf-16"), "not-utf-8", 1, 1),
        ('{"a": "\u00e9'.encode() + b'\xe9"}', "not-utf-8", 1, 9),
        (b"", "empty-body", 1, 1),
        (b" \n", "empty-body", 1, 1),
        (b"[1, 2", "not-json", 1, 6),
        (b"{'a': 1}", "not-json", 1, 2),
        (b'{"a": 1}\n{"b": 2}', "not-json", 2, 1),
        (b'["a\nb"]', "not-json", 1, 4),
    ],
)
def test_refuses_with_the_place(body: bytes, code: str, line: int, column: int) -> None:
    with pytest.raises(BadJson) as caught:
        loads(body)
    assert (caught.value.code, caught.value.line, caught.value.column) == (code, line, column)


def test_the_repeated_key_is_named() -> None:
    with pytest.raises(BadJson, match='The key "data" is given twice'):
        loads(b'{"data": [1], "other": {"data": 1}, "data": [2]}')


def test_keys_alike_in_different_objects_are_no_repetition() -> None:
    assert loads(b'[{"a": 1}, {"a": 2}, {"b": {"a": 3}}]') == [{"a": 1}, {"a": 2}, {"b": {"a": 3}}]


def test_half_a_character_is_left_to_the_fields() -> None:
    assert loads(b'["\\ud800"]') == ["\ud800"]


def test_numbers_read_fast_have_no_second_reading(monkeypatch: pytest.MonkeyPatch) -> None:
    def never(_: bytes) -> NoReturn:
        raise AssertionError("read twice")

    monkeypatch.setattr(strict_json, "_read_slowly", never)
    loads(
        b'{"data": {"values": [[1, 2.5], [null, 3]], "times": ["2026-03-02T06:00:00Z"]}, "e": [{"index": 1}]}'
    )


def test_a_large_body_of_numbers_costs_little_more_than_its_parsing() -> None:
    body = orjson.dumps({"data": {"values": [[2.51234, 2.49876, 2.50011, 2.52345, 2.48]] * 50_000}})

    def best(read: Any) -> float:
        spent = []
        for _ in range(5):
            began = time.process_time()
            read(body)
            spent.append(time.process_time() - began)
        return min(spent)

    assert best(loads) < 1.5 * best(orjson.loads)


def test_a_hostile_text_costs_no_more_than_its_length() -> None:
    """Unterminated strings, each of which could be begun at every quote."""
    began = time.process_time()
    with pytest.raises(BadJson):
        loads(b"[" * 1030 + b'"' + b'\\"' * 200_000)
    assert time.process_time() - began < 2
