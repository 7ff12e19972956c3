"""Limits documents, and the carry that belongs to one."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import orjson

from ..spc.errors import DocumentMismatch
from .canonical import digest, plain

FORMAT = 1
"""The format of limits documents; a document of a later one is refused."""


def limits_document(chart: str, limits: object, characteristic: Mapping[str, Any] | None) -> dict[str, Any]:
    """The document that freezes some limits: their parameters, what they are of, and the digest."""
    document = {
        "chart": chart,
        "format": FORMAT,
        "characteristic": dict(characteristic or {}),
        **plain(limits),
    }
    document["digest"] = digest(document)
    document["seal"] = None
    return document


def written(document: Mapping[str, Any]) -> orjson.Fragment:
    """A document as it goes into an answer; every number of it was looked at when it was made."""
    return orjson.Fragment(orjson.dumps(document))


def check_limits(chart: str, document: Mapping[str, Any]) -> None:
    """Refuse a document of another chart or format, or one that was edited.

    Raises DocumentMismatch with ``limits-of-another-chart``, ``unknown-format`` or ``digest-mismatch``.
    """
    if document.get("chart") != chart:
        raise DocumentMismatch.of(
            "limits-of-another-chart",
            f"These limits belong to the {document.get('chart')} chart; this operation judges by {chart} limits.",
            "limits",
            "chart",
        )
    if document.get("format") != FORMAT:
        raise DocumentMismatch.of(
            "unknown-format",
            f"This service reads limits documents of format {FORMAT}; this one states {document.get('format')}.",
            "limits",
            "format",
        )
    if not _is_as_issued(document):
        raise DocumentMismatch.of(
            "digest-mismatch",
            "The limits document was changed after it was issued: its digest does not match its content. Send "
            "the document exactly as it was received, or fit new limits.",
            "limits",
            "digest",
        )


def _is_as_issued(document: Mapping[str, Any]) -> bool:
    try:
        return bool(document.get("digest") == digest(document))
    except (ValueError, OverflowError, TypeError, RecursionError):
        # It holds what has no canonical form, or is nested deeper than the writer goes, as no document of ours is.
        return False


def carry_document(chart: str, limits_digest: str, carry: object) -> dict[str, Any]:
    """The carry as the caller keeps it, bound to its limits by their digest."""
    document = {"chart": chart, "limits": limits_digest, **plain(carry)}
    document["digest"] = digest(document)
    return document


def check_carry(chart: str | None, limits_digest: str | None, document: Mapping[str, Any]) -> None:
    """Refuse a carry of other limits, or one that was edited.

    Raises DocumentMismatch with ``carry-of-other-limits`` or ``carry-edited``.
    """
    if document.get("chart") != chart or document.get("limits") != limits_digest:
        raise DocumentMismatch.of(
            "carry-of-other-limits",
            "This carry belongs to other limits. Send the carry that came with the last answer under these "
            "limits, or leave it out to start afresh.",
            "carry",
            "limits",
        )
    if not _is_as_issued(document):
        raise DocumentMismatch.of(
            "carry-edited",
            "The carry was changed after it was issued: its digest does not match its content. Send it exactly "
            "as it was received, or leave it out to start afresh.",
            "carry",
            "digest",
        )
