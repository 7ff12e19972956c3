"""Keys: those that seal limits documents, and those that admit callers."""

from __future__ import annotations

import os
import secrets
import sys
from hashlib import sha256
from pathlib import Path
from typing import Any

import orjson

from ..documents.seal import KEY_ID, BadKeys, jwks_in, new_key, public_of, public_set

_NO_NAME = "A name has 1 to 64 letters, digits, dots, hyphens or underscores."


def new(key_id: str, out: str, keep: str | None) -> int:
    """Writes a new private key, with the public halves of those kept, and prints the new one's public half."""
    if not KEY_ID.fullmatch(key_id):
        return _not_understood(_NO_NAME)
    try:
        made = new_key(key_id)
        written: Any = made
        if keep is not None:
            kept = public_set(_keys_of(keep))["keys"]
            if key_id in {jwk["kid"] for jwk in kept}:
                raise BadKeys(f"{keep} has a key of the id {key_id} already.")
            written = {"keys": [made, *kept]}
        # Never readable by others, not even for a moment; and no key is lost under a new one.
        file = os.open(out, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
    except BadKeys as error:
        return _not_understood(str(error))
    except OSError as error:
        return _not_understood(f"{out} cannot be made ({error.strerror}).")
    with os.fdopen(file, "wb") as stream:
        stream.write(_indented(written))
    _print(_indented(public_of(made)))
    return 0


def public(file: str) -> int:
    """Prints the public half of a key, or of each in a set."""
    try:
        keys = public_set(_keys_of(file))
        is_set = b'"keys"' in Path(file).read_bytes()
    except BadKeys as error:
        return _not_understood(str(error))
    _print(_indented(keys if is_set else keys["keys"][0]))
    return 0


def api(name: str) -> int:
    """Prints a new API key, and the line that admits it."""
    if not KEY_ID.fullmatch(name):
        return _not_understood(_NO_NAME)
    key = secrets.token_urlsafe(32)
    print("The key, shown this once, for the X-API-Key header; and its line for the file:", file=sys.stderr)
    print(key)
    print(f'"{name}": "{sha256(key.encode()).hexdigest()}"')
    return 0


def _keys_of(file: str) -> list[dict[str, Any]]:
    try:
        return jwks_in(Path(file).read_bytes())
    except OSError as error:
        raise BadKeys(f"{file} cannot be read ({error.strerror}).") from None
    except BadKeys as error:
        raise BadKeys(f"{file}: {error}") from None


def _indented(value: Any) -> bytes:
    return orjson.dumps(value, option=orjson.OPT_INDENT_2 | orjson.OPT_APPEND_NEWLINE)


def _print(text: bytes) -> None:
    sys.stdout.write(text.decode())


def _not_understood(sentence: str) -> int:
    print(sentence, file=sys.stderr)
    return 2
