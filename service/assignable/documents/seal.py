"""Seals of limits documents, and the keys that make and check them.

A seal is a JWS (RFC 7515) by Ed25519 (RFC 8037) whose content, the canonical form (RFC 8785) of the document
without its seal, is detached (RFC 7515, appendix F) and not encoded (RFC 7797). The library is loaded with
the first key, so that a service without keys starts as quickly as before.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import orjson

from ..spc.errors import DocumentMismatch
from .canonical import canonical

ALGORITHM = "EdDSA"
KEY_ID = re.compile(r"[A-Za-z0-9._-]{1,64}")

Jwk = dict[str, Any]


class BadKeys(Exception):
    """Keys that cannot be used, in one sentence."""


@dataclass(frozen=True, slots=True, eq=False)
class Seals:
    """The keys of an installation, and whether it takes sealed documents only.

    ``signing`` is the id and the private key that seals; without it documents go out unsealed. ``known`` are
    the public keys by id, ``published`` the same as JWKs (RFC 7517), in the order of the file.
    """

    signing: tuple[str, Any] | None = None
    known: Mapping[str, Any] = field(default_factory=dict)
    published: tuple[Jwk, ...] = ()
    required: bool = False

    def sealed(self, document: dict[str, Any]) -> dict[str, Any]:
        """The document with its seal; as it is where there is no key to seal with."""
        if self.signing is None:
            return document
        key_id, key = self.signing
        return {**document, "seal": {"key_id": key_id, "jws": sign(content(document), key_id, key)}}

    def check(self, document: Mapping[str, Any]) -> None:
        """Refuse a document whose seal is missing though required, of an unknown key, or not over this content.

        Raises DocumentMismatch with ``seal-missing``, ``seal-not-known`` or ``seal-broken``.
        """
        seal = document["seal"]
        if seal is None:
            if self.required:
                raise _mismatch(
                    "seal-missing",
                    "This server takes sealed limits only, and these have no seal. Fit new limits on a server that "
                    "seals them.",
                )
            return
        key = self.known.get(seal["key_id"])
        if key is None:
            raise _mismatch(
                "seal-not-known",
                "The seal of these limits was made with a key that this server does not have; /.well-known/jwks.json "
                "lists those it has."
                if self.known
                else "This server has no key to check the seal of these limits with.",
            )
        if not verifies(content(document), seal["jws"], seal["key_id"], key):
            raise _mismatch(
                "seal-broken",
                "The seal of these limits is not over what the document holds: it was changed after it was sealed, or "
                "the seal is another's. Send the document exactly as it was received, or fit new limits.",
            )


UNSEALED = Seals()
"""No key, nothing required."""


def _mismatch(code: str, detail: str) -> Exception:
    return DocumentMismatch.of(code, detail, "limits", "seal")


def content(document: Mapping[str, Any]) -> bytes:
    """What a seal is over: the canonical form of the document, digest included, without its seal."""
    return canonical({name: value for name, value in document.items() if name != "seal"})


def sign(payload: bytes, key_id: str, key: Any) -> str:
    """The detached JWS over these bytes by an Ed25519 private key: header, two dots, signature."""
    from jwt import PyJWS

    return PyJWS().encode(
        payload,
        key,
        algorithm=ALGORITHM,
        headers={"typ": None, "kid": key_id, "b64": False, "crit": ["b64"]},
        is_payload_detached=True,
    )


def verifies(payload: bytes, jws: str, key_id: str, key: Any) -> bool:
    """Whether a detached JWS is over these bytes, by this Ed25519 public key and under its id."""
    from jwt import PyJWS
    from jwt.exceptions import PyJWTError

    try:
        found = PyJWS().decode_complete(jws, key, algorithms=[ALGORITHM], detached_payload=payload)
    except (PyJWTError, ValueError):  # a text that is no JWS at all, or has half a character in it
        return False
    return bool(found["header"].get("kid") == key_id)


def jwks_in(blob: bytes) -> list[Jwk]:
    """The keys of a file: of a JWK set (RFC 7517, section 5), or the one JWK it is. Raises BadKeys."""
    try:
        found = orjson.loads(blob)
    except orjson.JSONDecodeError:
        raise BadKeys("it is not JSON.") from None
    entries = found.get("keys", [found]) if isinstance(found, dict) else None
    if not isinstance(entries, list) or not entries or not all(isinstance(one, dict) for one in entries):
        raise BadKeys('it is no JWK set, {"keys": [...]}, with at least one key.')
    return entries


def seals_of(blob: bytes, *, required: bool = False) -> Seals:
    """The keys of a file: its first private key seals, all of them verify. Raises BadKeys."""
    signing: tuple[str, Any] | None = None
    known: dict[str, Any] = {}
    published: list[Jwk] = []
    for jwk in jwks_in(blob):
        public = public_of(jwk)
        key_id = public["kid"]
        if key_id in known:
            raise BadKeys(f"it has two keys of the id {key_id}.")
        known[key_id] = _loaded(public)
        published.append(public)
        if signing is None and "d" in jwk:
            signing = (key_id, _loaded(jwk))
    return Seals(signing, known, tuple(published), required)


def new_key(key_id: str) -> Jwk:
    """A new Ed25519 private key as a JWK (RFC 8037). Raises BadKeys for an id that cannot be one."""
    from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PrivateKey
    from jwt.algorithms import OKPAlgorithm

    made = OKPAlgorithm.to_jwk(Ed25519PrivateKey.generate(), as_dict=True)
    return {**public_of({**made, "kid": key_id}), "d": made["d"]}


def public_of(jwk: Mapping[str, Any]) -> Jwk:
    """The public part of an Ed25519 key, and nothing else of it. Raises BadKeys."""
    key_id = jwk.get("kid")
    if not isinstance(key_id, str) or not KEY_ID.fullmatch(key_id):
        raise BadKeys("each key needs an id (kid) of 1 to 64 letters, digits, dots, hyphens or underscores.")
    if jwk.get("kty") != "OKP" or jwk.get("crv") != "Ed25519":
        raise BadKeys(f"the key {key_id} is not of the kind OKP, curve Ed25519.")
    if jwk.get("use", "sig") != "sig" or jwk.get("alg", ALGORITHM) != ALGORITHM:
        raise BadKeys(f"the key {key_id} is for another use than signatures by {ALGORITHM}.")
    public = {name: jwk.get(name) for name in ("kty", "crv", "kid", "x")}
    _loaded(public)
    if "d" in jwk:
        _loaded(jwk)  # refuses halves that do not belong together
    return {"kty": "OKP", "crv": "Ed25519", "kid": key_id, "use": "sig", "alg": ALGORITHM, "x": public["x"]}


def public_set(jwks: Sequence[Mapping[str, Any]]) -> dict[str, list[Jwk]]:
    """A JWK set of the public parts of these keys. Raises BadKeys."""
    return {"keys": [public_of(jwk) for jwk in jwks]}


def _loaded(jwk: Mapping[str, Any]) -> Any:
    from jwt.algorithms import OKPAlgorithm
    from jwt.exceptions import PyJWTError

    try:
        return OKPAlgorithm.from_jwk(dict(jwk))
    except (PyJWTError, ValueError, TypeError, AttributeError):
        raise BadKeys(f"the key {jwk.get('kid')} cannot be read.") from None
