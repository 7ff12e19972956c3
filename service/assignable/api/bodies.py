"""What a request says about itself, and its body: whole, bounded, and never cut off in silence."""

from __future__ import annotations

import zlib
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
)

JSON = "application/json"
_CHUNK = 65536

Environ = dict[str, Any]


def require_acceptable(environ: Environ, media_type: str) -> None:
    """Raises the problem ``not-acceptable`` where the Accept header rules the media type out."""
    accept = environ.get("HTTP_ACCEPT")
    if not accept or accept == "*/*" or accept == media_type:
        return
    if not parse_accept_header(accept, MIMEAccept).quality(media_type) > 0:
        raise Problem(
            NOT_ACCEPTABLE, f"This operation answers {media_type}, which the Accept header rules out."
        )


def require_json(environ: Environ) -> None:
    """Raises the problem ``unsupported-media-type`` for a body that does not call itself JSON in UTF-8."""
    content_type = environ.get("CONTENT_TYPE", "")
    if content_type == JSON:
        return
    media_type, options = parse_options_header(content_type)
    if media_type.lower() == JSON and options.get("charset", "utf-8").lower() in ("utf-8", "utf8"):
        return
    shown = "has no Content-Type" if not content_type else "has another Content-Type"
    raise Problem(
        UNSUPPORTED_MEDIA_TYPE,
        f"The body {shown}; this operation reads {JSON} in UTF-8.",
        headers=(("Accept-Post", JSON),),
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
                raise _too_large(limit)
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
                raise _too_large(limit)
            parts.append(part)
        return b"".join(parts)
    except Problem:
        raise
    except (
        Exception
    ):  # whatever the server's own reader raises: a broken connection, bad chunks, bad trailers
        raise Problem(BAD_REQUEST, "The body could not be read to its end.") from None


def _rest(stream: Any, missing: int) -> bytes:
    parts: list[bytes] = []
    while missing:
        part = stream.read(min(missing, _CHUNK))
        if not part:
            raise Problem(BAD_REQUEST, "The body ends before the length it was announced with.")
        parts.append(part)
        missing -= len(part)
    return b"".join(parts)


def inflate(body: bytes, limit: int) -> bytes:
    """A gzip body undone, as far as the limit and not a byte further."""
    unpacker = zlib.decompressobj(31)
    try:
        inflated = unpacker.decompress(body, limit + 1)
    except zlib.error:
        raise Problem(NOT_JSON, "The body calls itself gzip and is not.") from None
    if len(inflated) > limit:
        raise Problem(
            CONTENT_TOO_LARGE, f"The body inflates to more than the {limit} bytes this server takes."
        )
    if not unpacker.eof or unpacker.unused_data:
        raise Problem(NOT_JSON, "The gzip body is cut off, or has more after its end.")
    return inflated


def _too_large(limit: int) -> Problem:
    return Problem(CONTENT_TOO_LARGE, f"The body is larger than the {limit} bytes this server takes.")
