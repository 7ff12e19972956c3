"""The canonical form of a document, and its digest."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import fields
from functools import cache
from typing import Any

import orjson
import rfc8785

UNSIGNED = ("digest", "seal")
"""Members that speak about the rest of a document, and so are no part of what is digested."""


class NotFinite(Exception):
    """A result holds NaN or infinity, at ``path`` where that is known: never an answer, never a document."""

    def __init__(self, path: str = "$") -> None:
        super().__init__(f"not finite: {path}")
        self.path = path


def plain(value: Any) -> Any:
    """A result object as the plain JSON values that a caller reads back, whole numbers as integers.

    Raises :class:`NotFinite`.
    """
    kind = type(value)
    if kind is float:
        if value - value != 0.0:
            raise NotFinite
        return int(value) if value.is_integer() and abs(value) < 1e15 else value
    if kind in _AS_THEY_ARE:
        return value
    if kind is tuple or kind is list:
        return [plain(inner) for inner in value]
    if kind is dict:
        return {name: plain(inner) for name, inner in value.items()}
    return {name: plain(getattr(value, name)) for name in _names(kind)}  # type: ignore[arg-type]


_AS_THEY_ARE = frozenset((str, int, bool, type(None)))


@cache
def _names(kind: Any) -> tuple[str, ...]:
    return tuple(entry.name for entry in fields(kind))


def canonical(value: Any) -> bytes:
    """The canonical form (RFC 8785) of plain JSON values.

    Most documents hold nothing on which the quick writer and the standard differ; they take that road, which
    a test holds to the same bytes. All others are written by the library.
    """
    try:
        return orjson.dumps(_same_in_both(value), option=orjson.OPT_SORT_KEYS)
    except _Differs:
        return rfc8785.dumps(_doubles(value))


def _doubles(value: Any) -> Any:
    """Integers that a double skips as the doubles they stand for: another program may drop the exponent."""
    if type(value) is int and not -(2**53) < value < 2**53:
        return float(value)
    if type(value) is list:
        return [_doubles(inner) for inner in value]
    return {name: _doubles(inner) for name, inner in value.items()} if type(value) is dict else value


class _Differs(Exception):
    """A value that the quick writer may not write as the standard wants it."""


def _same_in_both(value: Any) -> Any:
    kind = type(value)
    if kind is float:
        if value == 0.0:
            return 0
        # The two write exponents differently, and whole numbers with or without a point.
        if not 1e-4 <= abs(value) < 1e15:
            raise _Differs
        return int(value) if value.is_integer() else value
    if kind is str:
        if not value.isascii() or not value.isprintable():
            raise _Differs
        return value
    if value is None or kind is bool:
        return value
    if kind is int:
        if not -(2**53) < value < 2**53:
            raise _Differs
        return value
    if kind is list:
        return [_same_in_both(inner) for inner in value]
    if not all(name.isascii() and name.isprintable() for name in value):
        raise _Differs
    return {name: _same_in_both(inner) for name, inner in value.items()}


def digest(document: Mapping[str, Any]) -> str:
    """SHA-256 of the document's canonical form, its digest and seal left out."""
    body = {name: value for name, value in document.items() if name not in UNSIGNED}
    return "sha-256:" + hashlib.sha256(canonical(body)).hexdigest()
