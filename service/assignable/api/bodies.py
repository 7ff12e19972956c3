"""What a request says about itself, and its body: whole, bounded, and never cut off in silence."""

from __future__ import annotations

import zlib
from collections.abc import Iterable, Iterator
from typing import Any

from werkzeug.datastructures import MIMEAccept
from werkzeug.http import parse_accept_header, parse_options_header

from .problems import (
    BAD_REQUEST,
    CONTENT_TOO_LARGE,
    NOT_ACCEPTABLE,
    NOT_JSON,
    UNSUPPORTED_CONTENT_ENCODING,
    UNSUPPORTED_MEDIA_TYPE,
    Problem,
    ProblemType,
)

JSON = "application/json"
NDJSON = "application/x-ndjson"
CSV = "text/csv"
_CHUNK = 65536
_NOT_ONE_GZIP = "The gzip body is cut off, or has more after its end."

Environ = dict[str, Any]


def require_acceptable(environ: Environ, media_type: str) -> None:
    """Raises the problem ``not-acceptable`` where the Accept header rules the media type out."""
    accept = environ.get("HTTP_ACCEPT")
    if not accept or accept == "*/*" or accept == media_type:
        return
    ranges = parse_accept_header(accept, MIMEAccept)
    # A parameter, such as the version that a scraper names, narrows nothing here.
    if not ranges.quality(media_type) > 0 and not any(
        range_.partition(";")[0].strip().lower() == media_type and quality > 0 for range_, quality in ranges
    ):
        raise Problem(
            NOT_ACCEPTABLE, f"This operation answers {media_type}, which the Accept header rules out."
        )


def require(environ: Environ, *expected: str) -> str:
    """Which of these media types the body calls itself, in UTF-8, and a table with a header row.

    Raises the problem ``unsupported-media-type`` for anything else.
    """
    content_type: str = environ.get("CONTENT_TYPE", "")
    if content_type == expected[0]:
        return content_type
    media_type, options = parse_options_header(content_type)
    named = media_type.lower()
    utf_8 = options.get("charset", "utf-8").lower() in ("utf-8", "utf8")
    if named in expected and utf_8 and options.get("header", "present") == "present":
        return named
    shown = "has no Content-Type" if not content_type else "has another Content-Type"
    raise Problem(
        UNSUPPORTED_MEDIA_TYPE,
        f"The body {shown}; this operation reads {' or '.join(expected)} in UTF-8.",
        headers=(("Accept-Post", ", ".join(expected)),),
    )


def encoding_of(environ: Environ) -> bool:
    """Whether the body is compressed with gzip; any other coding raises a problem."""
    coding = environ.get("HTTP_CONTENT_ENCODING", "").strip().lower()
    if coding in ("", "identity"):
        return False
    if coding in ("gzip", "x-gzip"):
        return True
    raise Problem(UNSUPPORTED_CONTENT_ENCODING, headers=(("Accept-Encoding", "gzip"),))


def read(environ: Environ, limit: int) -> bytes:
    """The body as it was sent.

    Werkzeug's own reading returns a chunked body over the limit as its first part, as if that were
    all: the statistics would be those of half the data. Here it is read to its end or refused.
    """
    stream = environ["wsgi.input"]
    declared = environ.get("CONTENT_LENGTH") or ""
    try:
        if declared:
            if not (declared.isascii() and declared.isdigit()):
                raise Problem(BAD_REQUEST, "Content-Length is not a whole number.")
            length = int(declared)
            if length > limit:
                raise too_large(limit)
            body: bytes = stream.read(length)
            if len(body) < length:
                body += _rest(stream, length - len(body))
            return body
        if not environ.get("wsgi.input_terminated"):
            return b""
        parts: list[bytes] = []
        total = 0
        while part := stream.read(_CHUNK):
            total += len(part)
            if total > limit:
                raise too_large(limit)
            parts.append(part)
        return b"".join(parts)
    except Problem:
        raise
    except (
        Exception
    ):  # whatever the server's own reader raises: a broken connection, bad chunks, bad trailers
        raise Problem(BAD_REQUEST, "The body could not be read to its end.") from None


def pieces(environ: Environ, limit: int) -> Iterator[bytes]:
    """The body piece by piece as it arrives, for what is never whole in memory. Raises as :func:`read` does."""
    stream = environ["wsgi.input"]
    declared = environ.get("CONTENT_LENGTH") or ""
    if declared and not (declared.isascii() and declared.isdigit()):
        raise Problem(BAD_REQUEST, "Content-Length is not a whole number.")
    if not declared and not environ.get("wsgi.input_terminated"):
        return
    missing = int(declared) if declared else None
    total = 0
    while missing is None or missing:
        try:
            piece = stream.read(_CHUNK if missing is None else min(_CHUNK, missing))
        except (OSError, EOFError):
            raise Problem(BAD_REQUEST, "The body could not be read to its end.") from None
        if not piece:
            if missing:
                raise Problem(BAD_REQUEST, "The body ends before the length it was announced with.")
            return
        total += len(piece)
        if total > limit:
            raise too_large(limit)
        missing = None if missing is None else missing - len(piece)
        yield piece


def inflated(packed: Iterable[bytes], limit: int) -> Iterator[bytes]:
    """A gzip body undone piece by piece, as far as the limit."""
    unpacker = zlib.decompressobj(31)
    total = 0
    for piece in packed:
        rest, part = piece, b""
        # Output may be left inside when all input is taken: as long as parts are full there may be more.
        while rest or len(part) == _CHUNK:
            if unpacker.eof:
                raise Problem(NOT_JSON, _NOT_ONE_GZIP)
            try:
                part = unpacker.decompress(rest, _CHUNK)
            except zlib.error:
                raise Problem(NOT_JSON, "The body calls itself gzip and is not.") from None
            total += len(part)
            if total > limit:
                raise _inflates_too_far(limit)
            yield part
            rest = unpacker.unused_data if unpacker.eof else unpacker.unconsumed_tail
            if unpacker.eof and not rest:
                break
    if not unpacker.eof:
        raise Problem(NOT_JSON, _NOT_ONE_GZIP)


def _rest(stream: Any, missing: int) -> bytes:
    parts: list[bytes] = []
    while missing:
        part = stream.read(min(missing, _CHUNK))
        if not part:
            raise Problem(BAD_REQUEST, "The body ends before the length it was announced with.")
        parts.append(part)
        missing -= len(part)
    return b"".join(parts)


def inflate(body: bytes, limit: int, unreadable: ProblemType = NOT_JSON) -> bytes:
    """A gzip body undone, as far as the limit and not a byte further; ``unreadable`` where it is none."""
    unpacker = zlib.decompressobj(31)
    try:
        whole = unpacker.decompress(body, limit + 1)
    except zlib.error:
        raise Problem(unreadable, "The body calls itself gzip and is not.") from None
    if len(whole) > limit:
        raise _inflates_too_far(limit)
    if not unpacker.eof or unpacker.unused_data:
        raise Problem(unreadable, _NOT_ONE_GZIP)
    return whole


def _inflates_too_far(limit: int) -> Problem:
    return Problem(CONTENT_TOO_LARGE, f"The body inflates to more than the {limit} bytes this server takes.")


def too_large(limit: int) -> Problem:
    """The problem of a body beyond this limit."""
    return Problem(CONTENT_TOO_LARGE, f"The body is larger than the {limit} bytes this server takes.")
