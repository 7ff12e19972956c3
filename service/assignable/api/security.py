"""Who may call: anyone, or whoever shows an API key or a token.

With keys configured, every route asks for a credential that is not named in :data:`OPEN`, also one that is
added later; without them nothing of this module takes part in a request. No credential, and no part of one,
is logged or answered.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from hashlib import sha256
from hmac import compare_digest
from time import time
from typing import Any

from flask import Flask, Response, request

from ..documents.seal import BadKeys, jwks_in
from . import strict_json
from .contract import OPERATION
from .problems import NOT_ADMITTED, NOT_AUTHENTICATED, Problem, ProblemType
from .settings import PREFIX, BadSettings, Settings, contents_of

OPEN = frozenset(
    (
        "getLiveness",
        "getReadiness",
        "getSealingKeys",
        "pages.start",
        "pages.document",
        "pages.reference",
        "pages.contents",
        "pages.reading",
        "pages.methods",
        "pages.try",
        "pages.asset",
        "pages.problems",
        "pages.problem",
    )
)
"""The endpoints that ask nobody: probes, public keys, and the documentation; metrics too, where a setting says so."""

LEEWAY_SECONDS = 30
LEAST_RSA_BITS = 2048
_KEPT_TOKENS = 1024
_REALM = 'realm="assignable"'
_DIGEST = re.compile(r"[0-9a-f]{64}")
_NAME = re.compile(r"[A-Za-z0-9._-]{1,64}")

Headers = tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True)
class Access:
    """The credentials an installation takes, API keys by their digests, tokens by their keys, or both; and where
    it asks for none."""

    keys: tuple[bytes, ...] = ()
    tokens: Tokens | None = None
    open: frozenset[str] = OPEN

    def challenges(self, error: str = "") -> Headers:
        """The WWW-Authenticate headers (RFC 9110, 11.6.1; RFC 6750, section 3)."""
        found = []
        if self.tokens is not None:
            found.append(("WWW-Authenticate", f"Bearer {_REALM}{error}"))
        if self.keys:
            found.append(("WWW-Authenticate", f"ApiKey {_REALM}"))
        return tuple(found)

    def problems(self) -> tuple[ProblemType, ...]:
        """What a caller may be told."""
        return (NOT_AUTHENTICATED,) if self.tokens is None else (NOT_AUTHENTICATED, NOT_ADMITTED)

    def schemes(self) -> dict[str, dict[str, str]]:
        """The security schemes as the contract names them."""
        found: dict[str, dict[str, str]] = {}
        if self.keys:
            found["apiKey"] = {
                "type": "apiKey",
                "in": "header",
                "name": "X-API-Key",
                "description": "A key that whoever runs the service gave out.",
            }
        if self.tokens is not None:
            found["bearerToken"] = {
                "type": "http",
                "scheme": "bearer",
                "bearerFormat": "JWT",
                "description": "A token of the site's own issuer, made for this service.",
            }
        return found

    def admit(self, environ: Mapping[str, Any]) -> None:
        """Takes the first valid credential. Raises the problem ``not-authenticated`` or ``not-admitted``."""
        key = environ.get("HTTP_X_API_KEY") if self.keys else None
        if key is not None and self._is_known(key):
            return
        scheme, _, token = environ.get("HTTP_AUTHORIZATION", "").partition(" ")
        if self.tokens is not None and scheme.lower() == "bearer":
            try:
                self.tokens.check(token.strip())
            except BadToken as error:
                raise Problem(
                    NOT_AUTHENTICATED, error.sentence, headers=self.challenges(', error="invalid_token"')
                ) from None
            return
        if key is not None:
            raise Problem(
                NOT_AUTHENTICATED,
                "The key in the X-API-Key header is not one that this service admits.",
                headers=self.challenges(),
            )
        ways = [
            *(["an API key in the X-API-Key header"] if self.keys else []),
            *(["a token as Authorization: Bearer"] if self.tokens is not None else []),
        ]
        raise Problem(
            NOT_AUTHENTICATED,
            f"The request has no credential; this service takes {', or '.join(ways)}.",
            headers=self.challenges(),
        )

    def _is_known(self, key: str) -> bool:
        """Every entry is compared whatever the others gave, so that all wrong keys take the same time."""
        digest = sha256(key.encode("latin-1", "replace")).hexdigest().encode()
        known = False
        for entry in self.keys:
            known |= compare_digest(digest, entry)
        return known


class BadToken(Exception):
    """A token that proves nothing; ``sentence`` says why."""

    def __init__(self, sentence: str) -> None:
        super().__init__(sentence)
        self.sentence = sentence


@dataclass(frozen=True, slots=True)
class TokenKey:
    """A public key that may sign tokens, and the one algorithm it does so by."""

    key_id: str | None
    algorithm: str
    key: Any

    def answers_to(self, key_id: object) -> bool:
        """Whether a token that names this key, or none, may be this key's; the signature decides."""
        return key_id is None or self.key_id is None or key_id == self.key_id


@dataclass(frozen=True, slots=True)
class Tokens:
    """JWTs (RFC 7519) of one issuer for one audience, checked against keys of a file.

    Tokens found good are remembered, by their digest, until they expire.
    """

    keys: tuple[TokenKey, ...]
    audience: str
    issuer: str
    _good_until: dict[bytes, float] = field(default_factory=dict)

    def check(self, token: str) -> None:
        """Raises BadToken, or the problem ``not-admitted`` for a good token that is meant for others."""
        name = sha256(token.encode("latin-1", "replace")).digest()
        if time() < self._good_until.get(name, 0.0):
            return
        expires = self._expiry(token)
        if len(self._good_until) >= _KEPT_TOKENS:
            self._good_until.clear()
        self._good_until[name] = expires + LEEWAY_SECONDS

    def _expiry(self, token: str) -> int:
        """When the token expires, once it is found good."""
        import jwt
        from jwt import exceptions as wrong

        try:
            header = jwt.get_unverified_header(token)
            for key in self.keys:
                if header.get("alg") != key.algorithm or not key.answers_to(header.get("kid")):
                    continue
                try:
                    claims = jwt.decode(
                        token,
                        key.key,
                        algorithms=[key.algorithm],
                        audience=self.audience,
                        issuer=self.issuer,
                        leeway=LEEWAY_SECONDS,
                        options={"require": ["exp", "aud", "iss"]},
                    )
                except wrong.InvalidSignatureError:
                    continue
                return int(claims["exp"])
        except wrong.ExpiredSignatureError:
            raise BadToken("The token has expired; ask its issuer for a new one.") from None
        except wrong.ImmatureSignatureError:
            raise BadToken("The token is not valid yet; check the clocks of its issuer and here.") from None
        except (wrong.InvalidAudienceError, wrong.InvalidIssuerError):
            raise Problem(NOT_ADMITTED, "The token is good, and was not made for this service.") from None
        except wrong.MissingRequiredClaimError as error:
            raise BadToken(f"The token does not state {error.claim}, which is needed here.") from None
        except (wrong.PyJWTError, ValueError, TypeError, OverflowError, RecursionError):
            raise BadToken("The bearer token cannot be read as a JWT.") from None
        raise BadToken("The token is not signed by a key, and an algorithm, that this service takes.")


def guard(app: Flask, access: Access) -> None:
    """Asks for a credential at every route but the open ones, before anything of a request is read."""

    def ask() -> None:
        endpoint = request.endpoint
        if endpoint is None or endpoint in access.open:  # None: no such path or method, and told so
            return
        environ = request.environ
        try:
            access.admit(environ)
        except Problem:
            if "." not in endpoint:
                environ[OPERATION] = endpoint
            raise

    def private(answer: Response) -> Response:
        # What was asked for with a credential is not for a cache that others share.
        if request.endpoint not in access.open:
            kept = answer.headers.get("Cache-Control", "")
            if kept.startswith("public"):
                answer.headers["Cache-Control"] = "private" + kept.removeprefix("public")
        return answer

    app.before_request(ask)
    app.after_request(private)


def access_of(settings: Settings) -> Access | None:
    """What the settings ask of a caller; None where they ask nothing. Raises BadSettings."""
    keys = _digests(settings.api_keys) if settings.api_keys else ()
    tokens = _tokens(settings)
    if not settings.asks_who:
        return None
    return Access(keys, tokens, OPEN | {"getMetrics"} if settings.metrics == "open" else OPEN)


def _digests(path: str) -> tuple[bytes, ...]:
    variable = PREFIX + "API_KEYS"
    try:
        found = strict_json.loads(contents_of("api_keys", path))
    except strict_json.BadJson as error:
        raise BadSettings(f"{variable}: {path} is not JSON: {error.detail}") from None
    if (
        not isinstance(found, dict)
        or not found
        or not all(_NAME.fullmatch(name) and isinstance(digest, str) for name, digest in found.items())
        or not all(_DIGEST.fullmatch(digest) for digest in found.values())
    ):
        raise BadSettings(
            f"{variable}: {path} must be one JSON object of names (letters, digits, dots, hyphens, underscores), each "
            "with the SHA-256 of a key in 64 lower-case hexadecimal digits, as assignable keys api prints them."
        )
    return tuple(digest.encode() for digest in found.values())


def _tokens(settings: Settings) -> Tokens | None:
    given = {
        PREFIX + name.upper(): getattr(settings, name) for name in ("jwt_keys", "jwt_audience", "jwt_issuer")
    }
    if not any(given.values()):
        return None
    if not all(given.values()):
        raise BadSettings(
            "\n".join(
                f"{name}: needed beside the other two ASSIGNABLE_JWT_*." for name in given if not given[name]
            )
        )
    try:
        blob = contents_of("jwt_keys", settings.jwt_keys)
        keys = tuple(_token_key(jwk) for jwk in jwks_in(blob) if jwk.get("use", "sig") == "sig")
        if not keys:
            raise BadKeys("no key in it is for signatures.")
    except BadKeys as error:
        raise BadSettings(f"{PREFIX}JWT_KEYS: {settings.jwt_keys}: {error}") from None
    return Tokens(keys, settings.jwt_audience, settings.jwt_issuer)


_OF_KIND = {("OKP", "Ed25519"): "EdDSA", ("EC", "P-256"): "ES256", ("RSA", None): "RS256"}


def _token_key(jwk: dict[str, Any]) -> TokenKey:
    """A public key with the one algorithm of its kind: none that a token may choose. Raises BadKeys."""
    from jwt import PyJWK
    from jwt.exceptions import PyJWTError

    key_id = jwk.get("kid")
    named = f"the key {key_id}" if isinstance(key_id, str) else "a key without an id"
    algorithm = _OF_KIND.get((jwk.get("kty"), jwk.get("crv")))  # type: ignore[arg-type]
    if algorithm is None or jwk.get("alg", algorithm) != algorithm or not isinstance(key_id, str | None):
        raise BadKeys(f"{named} is none for EdDSA (Ed25519), ES256 (P-256) or RS256.")
    if "d" in jwk:
        raise BadKeys(f"{named} is private; only public keys belong here.")
    try:
        key = PyJWK(jwk, algorithm=algorithm).key
    except (PyJWTError, ValueError, TypeError, AttributeError):
        raise BadKeys(f"{named} cannot be read.") from None
    if algorithm == "RS256" and key.key_size < LEAST_RSA_BITS:
        raise BadKeys(f"{named} is shorter than {LEAST_RSA_BITS} bits.")
    return TokenKey(key_id, algorithm, key)
