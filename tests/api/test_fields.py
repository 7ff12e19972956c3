"""Fields: what each takes, what it refuses and where; and that its schema says the same."""

from __future__ import annotations

import time
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from jsonschema import Draft202012Validator
from marshmallow import ValidationError

from assignable.api import fields as f
from assignable.api import problems


def faults(field: f.Field, value: Any) -> list[tuple[str, str]]:
    """The pointers and codes a value is refused with; none when it is taken."""
    try:
        field.deserialize(value)
    except ValidationError as error:
        return [(entry.pointer, entry.code) for entry in problems.of(error).errors]
    return []


FIELDS = {
    "number": f.StrictNumber(least=-2, below=5),
    "number-null": f.StrictNumber(above=0, most=10, allow_none=True),
    "integer": f.StrictInteger(least=1, most=25),
    "boolean": f.StrictBoolean(),
    "string": f.StrictString(min_length=1, max_length=5),
    "choice": f.Choice("mean-range", "pooled"),
    "choice-null": f.Choice("mean-range", "pooled", allow_none=True),
    "list": f.NumberList(least=0, max_items=4),
    "list-null": f.NumberList(nullable=True, above=0, min_items=2),
    "counts": f.CountList(),
    "counts-null": f.CountList(nullable=True, most=9),
    "integers": f.IntegerList(min_items=0),
    "table": f.NumberTable(ragged=True, max_rows=3, max_columns=3),
    "table-no-null": f.NumberTable(ragged=True, nullable=False, min_columns=2),
    "one-or-many": f.OneOrMany(f.NumberList(above=0, max_items=3)),
    "one-or-many-null": f.OneOrMany(f.CountList(nullable=True), allow_none=True),
    "ids": f.StringList(max_items=3, max_length=4),
}

NUMBERS = st.one_of(
    st.integers(-30, 30),
    st.floats(-30, 30).map(lambda x: round(x, 1)),
    st.sampled_from([1e300, 1.1e300, -1.1e300, 2.0**53, 2**53 - 1, 10**400, 1.0, 5.0, -2, 25, 26, 0, -0.0]),
)
SCALARS = st.one_of(
    NUMBERS,
    st.none(),
    st.booleans(),
    st.sampled_from(["", "1", "pooled", "abcdef", "a\x00", "\x85", "a b", "é", "\ufffe"]),
)
VALUES = st.one_of(
    SCALARS,
    st.lists(NUMBERS, max_size=5),
    st.lists(SCALARS, max_size=5),
    st.lists(st.lists(SCALARS, max_size=4), max_size=4),
    st.lists(st.lists(NUMBERS, max_size=4), max_size=4),
    st.lists(st.text(alphabet="aé-", max_size=5), max_size=4),
    st.just({}),
)


@pytest.mark.parametrize("name", FIELDS)
@settings(derandomize=True, deadline=None, max_examples=150)
@given(value=VALUES)
def test_a_field_takes_what_its_schema_promises_and_no_more(name: str, value: Any) -> None:
    field = FIELDS[name]
    promised = Draft202012Validator(f.json_schema_of(field, {})).is_valid(value)
    assert (faults(field, value) == []) == promised


def test_a_row_of_another_length_is_refused_unless_ragged() -> None:
    assert faults(f.NumberTable(), [[1, 2], [1], [1, 2, 3]]) == [
        ("#/1", "unequal-length"),
        ("#/2", "unequal-length"),
    ]
    table = f.NumberTable(ragged=True).deserialize([[1, 2], [3], [None, 4]])
    np.testing.assert_array_equal(table, [[1, 2], [3, np.nan], [np.nan, 4]])


def test_arrays_have_the_type_the_numerics_take() -> None:
    table = f.NumberTable().deserialize([[1, 2.5], [3, None]])
    assert table.dtype == np.float64
    assert table.shape == (2, 2)
    counts = f.CountList().deserialize([3, 4.0])
    assert counts.dtype == np.int64
    with_gaps = f.CountList(nullable=True).deserialize([3, None])
    np.testing.assert_array_equal(with_gaps, [3, np.nan])
    assert isinstance(f.StrictNumber().deserialize(3), float)
    assert isinstance(f.StrictInteger().deserialize(3.0), int)


def test_every_fault_is_named_with_its_place() -> None:
    found = faults(f.NumberTable(most=9), [[1, "2", True], 5, [None, 10], [], [[], {}, 1e400]])
    assert found == [
        ("#/0/1", "not-a-number"),
        ("#/0/2", "not-a-number"),
        ("#/1", "not-a-list"),
        ("#/2", "unequal-length"),
        ("#/2/1", "too-large"),
        ("#/3", "too-few-items"),
        ("#/4/0", "not-a-number"),
        ("#/4/1", "not-a-number"),
        ("#/4/2", "too-large"),
    ]


def test_faults_beyond_the_cap_are_counted() -> None:
    with pytest.raises(ValidationError) as caught:
        f.NumberTable().deserialize([["x"] * 3] * 1000)
    problem = problems.of(caught.value)
    assert len(problem.errors) == problems.MAX_ERRORS
    assert problem.more == 3000 - problems.MAX_ERRORS
    assert "3000 faults" in problem.detail
    assert "2900 more" in problem.detail


def test_a_table_with_more_room_than_the_bound_is_refused() -> None:
    rows: list[list[float]] = [[1.0]] * 2000
    assert faults(f.NumberTable(ragged=True), [*rows, [1.0] * 1000]) == [("#", "too-many-values")]


@pytest.mark.parametrize(
    ("text", "good"),
    [
        ("2026-03-02T06:00:00Z", True),
        ("2026-03-02t06:00:00.123456z", True),
        ("2026-03-02T06:00:00+05:30", True),
        ("2024-02-29T00:00:00Z", True),
        ("2000-02-29T00:00:00Z", True),
        ("2016-12-31T23:59:60Z", True),
        ("1900-02-29T00:00:00Z", False),
        ("2026-02-29T00:00:00Z", False),
        ("2026-04-31T00:00:00Z", False),
        ("2026-13-01T00:00:00Z", False),
        ("2026-03-02T24:00:00Z", False),
        ("2026-03-02T06:00:00", False),
        ("2026-03-02 06:00:00Z", False),
        ("2026-03-02T06:00:00Z\n", False),
        ("2026-03-02T06:00:00Z\n2026-03-02T06:00:00Z", False),
        ("٢026-03-02T06:00:00Z", False),
        ("", False),
    ],
)
def test_times(text: str, good: bool) -> None:
    expected = [] if good else [("#/1", "not-a-time")]
    assert faults(f.TimeList(), ["2026-03-02T06:00:00Z", text]) == expected


def test_half_a_character_is_refused_in_texts() -> None:
    assert faults(f.StrictString(), "a\ud800") == [("#", "forbidden-character")]
    assert faults(f.StringList(), ["a", "\ud800"]) == [("#/1", "forbidden-character")]


class Part(f.RequestShape):
    index = f.StrictInteger(required=True)


class Whole(f.RequestShape):
    sigma_multiple = f.StrictNumber()
    named = f.Object(Part)
    parts = f.ObjectList(Part, max_items=3)
    other_name = f.StrictBoolean(data_key="as_called")


class Open(f.AnswerShape):
    text = f.StrictString()
    share = f.StrictNumber(least=0, most=1)
    numbers = f.NumberList()


def refused(body: Any) -> dict[str, tuple[str, str]]:
    with pytest.raises(ValidationError) as caught:
        Whole().load(body)
    return {str(entry.pointer): (entry.code, entry.detail) for entry in problems.of(caught.value).errors}


def test_all_faults_of_a_body_are_reported_at_once() -> None:
    found = refused({"sigma_multiple": "3", "parts": [{}, {"index": None}, 4], "named": [], "as_called": 1})
    assert {pointer: code for pointer, (code, _) in found.items()} == {
        "#/sigma_multiple": "not-a-number",
        "#/parts/0/index": "required",
        "#/parts/1/index": "null",
        "#/parts/2": "not-an-object",
        "#/named": "not-an-object",
        "#/as_called": "not-a-boolean",
    }


def test_an_unknown_field_is_told_the_nearest_known_one() -> None:
    found = refused({"sigma_multipel": 3, "zzzz": 1, "named": {"index": 1, "indx": 2}, "as_caled": True})
    assert found["#/sigma_multipel"] == (
        "unknown-field",
        "There is no field sigma_multipel here. Did you mean sigma_multiple?",
    )
    assert found["#/zzzz"] == ("unknown-field", "There is no field zzzz here.")
    assert found["#/named/indx"][1].endswith("Did you mean index?")
    assert found["#/as_caled"][1].endswith("Did you mean as_called?")


def test_a_list_of_objects_is_bounded() -> None:
    assert refused({"parts": [{"index": 1}] * 4}) == {
        "#/parts": ("too-many-items", "This list has 4 items; at most 3 are taken.")
    }
    assert refused({"parts": {}})["#/parts"][0] == "not-a-list"


def test_answers_promise_no_bound_that_only_protects_from_callers() -> None:
    shape = Open()
    emitted = {name: f.json_schema_of(field, {}) for name, field in shape.fields.items()}
    assert emitted["text"] == {"type": "string"}
    assert emitted["share"] == {"type": "number", "format": "double", "minimum": 0, "maximum": 1}
    assert emitted["numbers"]["items"] == {"type": "number", "format": "double"}


def test_a_large_table_is_taken_at_the_speed_of_arrays() -> None:
    rows = [[2.51234, 2.49876, 2.50011, 2.52345, 2.48]] * 200_000
    field = f.NumberTable(ragged=True)
    spent = []
    for _ in range(3):
        began = time.process_time()
        field.deserialize(rows)
        spent.append(time.process_time() - began)
    assert min(spent) < 0.25  # some 0.05 s on the machine this was written on; 4 s value by value
