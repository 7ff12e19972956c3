"""Canonical form and digest of documents."""

import json

import pytest
import rfc8785
from hypothesis import example, given, settings
from hypothesis import strategies as st

from assignable.documents.canonical import NotFinite, canonical, digest, plain

NUMBERS = st.one_of(
    st.integers(-(2**53) + 1, 2**53 - 1),
    st.floats(allow_nan=False, allow_infinity=False),
    st.floats(1e-5, 1e-3),
    st.floats(1e14, 1e22),
    st.integers(-1000, 1000).map(float),
)
VALUES = st.recursive(
    st.one_of(st.none(), st.booleans(), NUMBERS, st.text(max_size=8)),
    lambda inner: st.one_of(
        st.lists(inner, max_size=4), st.dictionaries(st.text(max_size=4), inner, max_size=4)
    ),
    max_leaves=12,
)


@settings(derandomize=True, deadline=None, max_examples=400)
@given(VALUES)
@example({"a": 1e-4, "b": 123456789012345.0, "c": 0.0001, "d": -0.0, "e": 1e15, "f": 0.1 + 0.2})
@example({"aa": 1, "a": 2, "B": 3, "_": 4, "€": 5, "\U0001f600": 6})
@example(["\x7f", "\t", '"', "\\", "/", "é"])
def test_the_quick_road_writes_what_the_standards_library_writes(value):
    # rfc8785 is an independent implementation of RFC 8785.
    assert canonical(value) == rfc8785.dumps(value)


def test_the_standards_own_sample():
    # RFC 8785, section 3.2.2 and 3.2.3, the numbers and their order (checked in print).
    value = json.loads('{"numbers":[333333333.33333329,1E30,4.50,2e-3,0.000000000000000000000000001]}')
    assert canonical(value) == b'{"numbers":[333333333.3333333,1e+30,4.5,0.002,1e-27]}'


@pytest.mark.parametrize("member", ["digest", "seal"])
def test_digest_and_seal_are_not_digested(member):
    document = {"chart": "xbar-r", "centre": 2.5}
    assert digest({**document, member: "anything"}) == digest(document)
    assert digest({**document, "centre": 2.6}) != digest(document)
    assert digest({"centre": 2.5, "chart": "xbar-r"}) == digest(document)


def test_a_document_is_never_written_with_a_number_that_is_none():
    for bad in (float("nan"), float("inf"), -float("inf")):
        with pytest.raises(NotFinite):
            plain({"limits": [{"centre": bad}]})


def test_whole_numbers_are_integers_in_a_document():
    assert plain({"a": 3.0, "b": (1.5, -2.0), "c": 1e300}) == {"a": 3, "b": [1.5, -2], "c": 1e300}
    assert type(plain(3.0)) is int
