"""From a result to bytes: the same result always gives the same ones."""

from __future__ import annotations

from base64 import b64encode
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import fields, is_dataclass
from functools import cache
from hashlib import sha256
from math import isfinite
from operator import attrgetter
from typing import Any

import numpy as np
import orjson

from ..documents.canonical import NotFinite

JSON = "application/json"
SVG = "image/svg+xml"
CONTRACT_VERSION = "1.0.0"

_OPTIONS = orjson.OPT_SERIALIZE_NUMPY


def dumps(result: Any) -> bytes:
    """A result of plain values, arrays and dataclasses as JSON.

    The writer turns NaN and infinity into null without a word, and nothing else but ``None`` becomes
    null: so an answer without the word holds neither, and only one with it is looked through.
    Raises :class:`NotFinite`.
    """
    written = orjson.dumps(result, _plainer, _OPTIONS)
    if b"null" in written:
        refuse_not_finite(result)
    return written


def refuse_not_finite(result: Any) -> None:
    """Raises :class:`NotFinite` where NaN or infinity stands anywhere in a result."""
    stack = [result]
    while stack:
        value = stack.pop()
        kind = type(value)
        if kind in _HARMLESS:
            continue
        if kind is float:
            if value - value != 0.0:
                break
        elif kind is dict:
            stack.extend(value.values())
        elif kind is list or kind is tuple:
            stack.extend(value)
        elif kind is np.ndarray:
            if value.dtype.kind == "f":
                # Bounded numbers have a finite sum, and one that is none shows in it; one number seen many
                # times is looked at once.
                total = value[0] if value.strides == (0,) and len(value) else np.add.reduce(value, axis=None)
                if not isfinite(total) and not np.isfinite(value).all():
                    break
            elif value.dtype.kind == "O":
                stack.append(value.tolist())
        elif (members := _members(kind)) is not None:  # type: ignore[arg-type]
            stack.extend(members(value))
        elif isinstance(value, np.floating) and not np.isfinite(value):
            break
    else:
        return
    raise NotFinite(next(_not_finite(result, "$")))


_HARMLESS = frozenset((str, int, bool, type(None), orjson.Fragment))


@cache
def _members(kind: Any) -> Callable[[Any], Iterable[Any]] | None:
    """What gives all fields of a dataclass at once."""
    if not is_dataclass(kind):
        return None
    names = [entry.name for entry in fields(kind)]
    if len(names) < 2:
        return lambda value: [getattr(value, name) for name in names]
    return attrgetter(*names)


def _plainer(value: object) -> object:
    """What the writer does not take as it is: one number seen many times, strided arrays, arrays of texts."""
    if isinstance(value, np.ndarray):
        if value.ndim == 1 and value.strides == (0,) and len(value) and value.dtype.kind == "f":
            one = orjson.dumps(float(value[0]))
            return orjson.Fragment(b"[" + b",".join([one] * len(value)) + b"]")
        return value.tolist() if value.dtype.kind in "OUS" else np.ascontiguousarray(value)
    raise TypeError(f"no JSON for {type(value).__name__}")


def _not_finite(value: Any, path: str) -> Iterator[str]:
    """Where the numbers that are none stand: the slow road, for the message."""
    if isinstance(value, (float, np.floating)):
        if not isfinite(value):
            yield path
    elif isinstance(value, np.ndarray):
        if value.dtype.kind == "O":
            yield from _not_finite(value.tolist(), path)
        elif value.dtype.kind == "f" and not np.isfinite(value).all():
            yield path
    elif isinstance(value, dict):
        for name, inner in value.items():
            yield from _not_finite(inner, f"{path}.{name}")
    elif isinstance(value, (list, tuple)):
        for i, inner in enumerate(value):
            yield from _not_finite(inner, f"{path}[{i}]")
    elif is_dataclass(value):
        for entry in fields(value):
            yield from _not_finite(getattr(value, entry.name), f"{path}.{entry.name}")


@cache
def service_version() -> str:
    from importlib.metadata import version

    return version("assignable")


def digest_of(body: bytes) -> str:
    """The digest under which an answer names the request it is of."""
    return "sha-256:" + sha256(body).hexdigest()


@cache
def _provenance_of(method: str) -> bytes:
    known = {"service": "assignable", "version": service_version(), "contract": CONTRACT_VERSION}
    return orjson.dumps({**known, "method": method})[:-1] + b',"request_digest":"'


def with_provenance(result: Mapping[str, Any], method: str, request: bytes) -> dict[str, Any]:
    """The members of an answer with a last one that says what it is and of which request."""
    written = _provenance_of(method) + digest_of(request).encode() + b'"}'
    return {**result, "provenance": orjson.Fragment(written)}


def content_digest(body: bytes) -> str:
    """The value of the Content-Digest header (RFC 9530)."""
    return f"sha-256=:{b64encode(sha256(body).digest()).decode()}:"


def etag(body: bytes) -> str:
    """A strong entity tag: the same bytes, the same tag."""
    return f'"{sha256(body).hexdigest()[:32]}"'


def matches(if_none_match: str | None, tag: str) -> bool:
    """Whether an If-None-Match header names the tag (RFC 9110, 13.1.2: compared weakly)."""
    if not if_none_match:
        return False
    named = (part.strip().removeprefix("W/") for part in if_none_match.split(","))
    return any(part in ("*", tag) for part in named)
