"""Which other origins' pages may call the service from a browser: none, unless the settings name them."""

from __future__ import annotations

from typing import Any

_EXPOSED = "X-Request-ID, Content-Digest, ETag, Retry-After"
_ALLOWED_HEADERS = (
    "Content-Type, Content-Encoding, X-Request-ID, X-API-Key, Authorization, traceparent, If-None-Match"
)


class Cors:
    """The named origins, compared whole; an origin is never reflected unseen."""

    def __init__(self, origins: tuple[str, ...]) -> None:
        self._origins = frozenset(origins)

    def headers(self, environ: dict[str, Any]) -> list[tuple[str, str]]:
        """What every answer carries; nothing at all while no origin is named."""
        if not self._origins:
            return []
        origin = environ.get("HTTP_ORIGIN")
        if origin not in self._origins:
            return [("Vary", "Origin")]
        return [
            ("Vary", "Origin"),
            ("Access-Control-Allow-Origin", str(origin)),
            ("Access-Control-Expose-Headers", _EXPOSED),
        ]

    def is_preflight(self, environ: dict[str, Any]) -> bool:
        return (
            environ["REQUEST_METHOD"] == "OPTIONS"
            and environ.get("HTTP_ORIGIN") in self._origins
            and "HTTP_ACCESS_CONTROL_REQUEST_METHOD" in environ
        )

    @staticmethod
    def preflight() -> list[tuple[str, str]]:
        return [
            ("Access-Control-Allow-Methods", "GET, HEAD, POST"),
            ("Access-Control-Allow-Headers", _ALLOWED_HEADERS),
            ("Access-Control-Max-Age", "600"),
        ]
