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


def digest(document: Mapping[str, Any]) -> str:
    """SHA-256 of the document's canonical form (RFC 8785), its digest and seal left out."""
    body = {name: value for name, value in document.items() if name not in UNSIGNED}
    return "sha-256:" + hashlib.sha256(rfc8785.dumps(body)).hexdigest()
