"""The canonical form of a document, and its digest."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from typing import Any

import orjson
import rfc8785

UNSIGNED = ("digest", "seal")
"""Members that speak about the rest of a document, and so are no part of what is digested."""


def plain(value: object) -> Any:
    """A result object as the plain JSON values that a caller reads back."""
    return orjson.loads(orjson.dumps(value, option=orjson.OPT_SERIALIZE_NUMPY))


def canonical(value: Any) -> bytes:
    """The canonical form (RFC 8785) of plain JSON values.

    Most documents hold nothing on which the quick writer and the standard differ; they take that road, which
    a test holds to the same bytes. All others are written by the library.
    """
    try:
        return orjson.dumps(_same_in_both(value), option=orjson.OPT_SORT_KEYS)
    except _Differs:
        return rfc8785.dumps(value)


class _Differs(Exception):
    """A value that the quick writer may not write as the standard wants it."""


def _same_in_both(value: Any) -> Any:
    kind = type(value)
    if kind is float:
        size = abs(value)
        if value == 0.0:
            return 0
        # The two write exponents differently, and whole numbers with or without a point.
        if not 1e-4 <= size < 1e15:
            raise _Differs
        return int(value) if value.is_integer() else value
    if kind is str:
        if not value.isascii() or not value.isprintable():
            raise _Differs
        return value
    if kind is dict:
        for name in value:
            if not name.isascii() or not name.isprintable():
                raise _Differs
        return {name: _same_in_both(inner) for name, inner in value.items()}
    if kind is list:
        return [_same_in_both(inner) for inner in value]
    if value is None or kind is bool:
        return value
    if kind is int and -(2**53) < value < 2**53:
        return value
    raise _Differs


def digest(document: Mapping[str, Any]) -> str:
    """SHA-256 of the document's canonical form, its digest and seal left out."""
    body = {name: value for name, value in document.items() if name not in UNSIGNED}
    return "sha-256:" + hashlib.sha256(canonical(body)).hexdigest()
