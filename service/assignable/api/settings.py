"""What an installation may choose, read once from the environment and checked there.

Each field carries the sentence that README's table and a start-up error show.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping
from dataclasses import MISSING, dataclass, field, fields
from pathlib import Path
from typing import Any

PREFIX = "ASSIGNABLE_"
MIB = 1024 * 1024


class BadSettings(Exception):
    """Settings that cannot be used; one line a fault."""


def _whole(least: int, most: int) -> Callable[[str], int]:
    def read(text: str) -> int:
        number = int(text) if text.isascii() and text.isdigit() else -1
        if not least <= number <= most:
            raise ValueError(f"a whole number from {least} to {most}")
        return number

    return read


def _seconds(most: float) -> Callable[[str], float]:
    def read(text: str) -> float:
        try:
            number = float(text)
        except ValueError:
            number = -1.0
        if not 0 <= number <= most:
            raise ValueError(f"seconds from 0 to {most:g}")
        return number

    return read


def _one_of(*choices: str) -> Callable[[str], str]:
    def read(text: str) -> str:
        if text not in choices:
            raise ValueError("one of " + ", ".join(choices))
        return text

    return read


def _yes_or_no(text: str) -> bool:
    if text not in ("yes", "no"):
        raise ValueError("yes or no")
    return text == "yes"


def _host(text: str) -> str:
    if not text or text != text.strip() or any(letter.isspace() or letter == "/" for letter in text):
        raise ValueError("a host name or an address")
    return text


def _origins(text: str) -> tuple[str, ...]:
    origins = tuple(part.strip() for part in text.split(",") if part.strip())
    for origin in origins:
        scheme, mark, rest = origin.partition("://")
        if scheme not in ("http", "https") or not mark or not rest or "/" in rest or "*" in rest:
            raise ValueError("origins such as https://line3.example, separated by commas; no wildcard")
    return origins


def _path(text: str) -> str:
    if not text or "\x00" in text:
        raise ValueError("the path of a file")
    return text


def _name(text: str) -> str:
    if not text or text != text.strip():
        raise ValueError("a name, without blanks around it")
    return text


def _setting(default: Any, description: str, read: Callable[[str], Any]) -> Any:
    return field(default=default, metadata={"description": description, "read": read})


@dataclass(frozen=True, slots=True, kw_only=True)
class Settings:
    """Everything that may differ between installations; the defaults suit one machine and loopback."""

    host: str = _setting("127.0.0.1", "Address the server listens on.", _host)
    port: int = _setting(8000, "Port the server listens on.", _whole(1, 65535))
    allow_remote: bool = _setting(
        False,
        "Whether it may listen where other machines reach it, though it asks nobody who they are: yes or no.",
        _yes_or_no,
    )
    api_keys: str = _setting(
        "",
        "File of the API keys that are admitted: a JSON object with the SHA-256 of each by its name, as `assignable "
        "keys api` prints them. With keys, of this or the next kind, every caller needs one.",
        _path,
    )
    jwt_keys: str = _setting(
        "",
        "File of the public keys, a JWK set, whose bearer tokens are admitted: JWTs by EdDSA (Ed25519), ES256 or "
        "RS256. Needs audience and issuer.",
        _path,
    )
    jwt_audience: str = _setting("", "Audience that a token must be made for.", _name)
    jwt_issuer: str = _setting("", "Issuer that a token must name.", _name)
    sealing_keys: str = _setting(
        "",
        "File of the Ed25519 keys of limits documents, a JWK set or one JWK: the first private key seals what is "
        "issued, all of them check what comes back.",
        _path,
    )
    require_seal: bool = _setting(
        False, "Whether limits documents are taken only with a good seal: yes or no.", _yes_or_no
    )
    workers: int = _setting(
        len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1,
        "Worker processes; as many as processors unless set.",
        _whole(1, 256),
    )
    threads: int = _setting(8, "Threads of a worker, which wait on clients.", _whole(1, 256))
    compute_slots: int = _setting(1, "Calculations a worker does at once.", _whole(1, 64))
    slot_wait_seconds: float = _setting(
        0.5, "Seconds a request waits for a calculation to end before it is answered 503.", _seconds(60)
    )
    max_body_bytes: int = _setting(
        32 * MIB, "Largest request body, as it is sent, in bytes.", _whole(1024, 1024 * MIB)
    )
    max_inflated_bytes: int = _setting(
        32 * MIB, "Largest request body after gzip is undone, in bytes.", _whole(1024, 1024 * MIB)
    )
    max_stream_bytes: int = _setting(
        4096 * MIB,
        "Largest body of lines (/v1/bulk), in bytes, gzip undone; a line of it is bounded as a body is.",
        _whole(1024, 1024 * 1024 * MIB),
    )
    log: str = _setting(
        "requests",
        "What is logged, one JSON object a line on standard error: requests, errors or off.",
        _one_of("requests", "errors", "off"),
    )
    metrics: str = _setting(
        "on",
        "Whether GET /metrics tells what was counted: on (to callers with a credential, where callers need one), open "
        "(to anyone) or off.",
        _one_of("on", "open", "off"),
    )
    cors_origins: tuple[str, ...] = _setting(
        (), "Origins whose pages may call the service from a browser, separated by commas.", _origins
    )

    @property
    def asks_who(self) -> bool:
        """Whether callers need a credential."""
        return bool(self.api_keys or self.jwt_keys)

    @classmethod
    def from_environment(cls, environment: Mapping[str, str] | None = None) -> Settings:
        """The settings that ``ASSIGNABLE_*`` variables give; an unknown one is an error too.

        Raises :class:`BadSettings` that names every variable at fault.
        """
        given = os.environ if environment is None else environment
        known = {PREFIX + entry.name.upper(): entry for entry in fields(cls)}
        faults: list[str] = []
        values: dict[str, Any] = {}
        for name in sorted(name for name in given if name.startswith(PREFIX)):
            entry = known.get(name)
            if entry is None:
                faults.append(f"{name}: there is no such setting{_nearest(name, known)}.")
                continue
            try:
                values[entry.name] = entry.metadata["read"](given[name])
            except ValueError as error:
                faults.append(f"{name}: {error} is expected. {entry.metadata['description']}")
        if faults:
            raise BadSettings("\n".join(faults))
        return cls(**values)


def contents_of(setting: str, path: str) -> bytes:
    """The file that a setting names. Raises :class:`BadSettings`."""
    try:
        return Path(path).read_bytes()
    except OSError as error:
        raise BadSettings(f"{PREFIX}{setting.upper()}: {path} cannot be read ({error.strerror}).") from None


@dataclass(frozen=True, slots=True)
class Described:
    """One row of the settings' table."""

    variable: str
    default: object
    description: str


def described() -> tuple[Described, ...]:
    """Every setting with its variable, default and sentence, in order."""
    return tuple(
        Described(PREFIX + entry.name.upper(), entry.default, entry.metadata["description"])
        for entry in fields(Settings)
        if entry.default is not MISSING
    )


def _nearest(name: str, known: Mapping[str, object]) -> str:
    from difflib import get_close_matches

    near = get_close_matches(name, known, n=1)
    return f"; did you mean {near[0]}?" if near else ""
