"""Checks the seal of a limits document without the service, as SEALS.md says.

The standard library has no Ed25519, so this needs two packages: pip install rfc8785 cryptography
"""

from __future__ import annotations

import base64
import json
from pathlib import Path
from typing import Any


class BadSeal(Exception):
    """A document that is not, number by number, the one that was issued."""


def check(document: Path, keys: Path) -> str:
    """The id of the key that sealed the document in this file. Raises BadSeal.

    ``keys`` is a JWK set, kept from a time when it was trusted.
    """
    try:
        import rfc8785
        from cryptography.exceptions import InvalidSignature
        from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PublicKey
    except ImportError as error:
        raise BadSeal("to check seals, pip install rfc8785 cryptography") from error
    try:
        known = {key["kid"]: _undone(key["x"]) for key in json.loads(keys.read_bytes())["keys"]}
        content = json.loads(document.read_bytes(), parse_int=float)
        seal: dict[str, Any] | None = content.pop("seal")
        if seal is None:
            raise BadSeal(f"{document} has no seal.")
        if seal["key_id"] not in known:
            raise BadSeal(f"{document} is sealed with the key {seal['key_id']}, which is not in {keys}.")
        header, nothing, signature = seal["jws"].split(".")
        if nothing or json.loads(_undone(header)) != {
            "alg": "EdDSA",
            "b64": False,
            "crit": ["b64"],
            "kid": seal["key_id"],
        }:
            raise BadSeal(f"The seal of {document} is of another kind.")
        key = Ed25519PublicKey.from_public_bytes(known[seal["key_id"]])
        key.verify(_undone(signature), header.encode() + b"." + rfc8785.dumps(content))
    except InvalidSignature as error:
        raise BadSeal(f"{document} was changed after it was sealed.") from error
    except (OSError, ValueError, KeyError, TypeError, AttributeError) as error:
        raise BadSeal(f"The seal of {document} cannot be checked: {error!r}") from error
    return str(seal["key_id"])


def _undone(text: str) -> bytes:
    return base64.urlsafe_b64decode(text + "=" * (-len(text) % 4))
