"""The committed contract: its document, and an executed answer beside every example request.

Equal bytes are expected on one kind of processor. On another, numpy and the linear algebra take other roads
through the same sums, and a last digit, and with it the digest of a limits document, is another: that is told,
and is no difference of the contract.
"""

from __future__ import annotations

import json
import math
import re
import sys
from dataclasses import dataclass
from difflib import unified_diff
from itertools import islice
from pathlib import Path
from typing import Any
from uuid import uuid4

import orjson

from ..api import problems
from ..api.answers import JSON
from ..api.app import create_app
from ..api.contract import Contract, examples_directory
from ..api.settings import Settings

MEND = "assignable contract --write"

_REQUEST = ".request.json"
_RESPONSE = ".response.json"
_REQUEST_LINES = ".request.ndjson"
_RESPONSE_LINES = ".response.ndjson"
_CALL_ID = re.compile(rb"[0-9a-f]{8}(-[0-9a-f]{4}){3}-[0-9a-f]{12}")
_SOME_ID = b"4ac5a2c6-3d0e-4d5b-9a55-0c4f0a7f3c11"
_SHOWN = 24  # lines of a difference
_RELATIVE = 1e-9  # what another processor may make of a number; a change of method moves it further
_ABSOLUTE = 1e-12
_DIGEST = re.compile(r"sha-256:[0-9a-f]{64}")


@dataclass(frozen=True, slots=True)
class Executed:
    """The answers, indented, by the file each belongs in; and what cannot be answered, in sentences."""

    answers: dict[Path, bytes]
    faults: tuple[str, ...]


def execute(contract: Contract, directory: Path) -> Executed:
    """Runs every example request of the directory through the operations that name it."""
    found: dict[Path, bytes] = {}
    faults: list[str] = []
    requests = {path.name.removesuffix(_REQUEST): path for path in sorted(directory.glob("*" + _REQUEST))}
    for operation in contract.operations.values():
        if operation.request is not None and not operation.examples:
            faults.append(f"{operation.operation_id} takes a body and has no example.")
        for name in operation.examples:
            if name not in requests:
                faults.append(f"{operation.operation_id}: there is no {name}{_REQUEST}.")
    for name, path in requests.items():
        naming = [operation for operation in contract.operations.values() if name in operation.examples]
        if not naming:
            faults.append(f"{path.name}: no operation names it.")
        for operation in naming:
            try:
                answer = operation.execute(path.read_bytes())
            except Exception as error:
                problem = problems.of(error)
                if problem.kind is problems.INTERNAL:
                    raise
                shown = orjson.dumps(problem.members(str(uuid4())), option=orjson.OPT_INDENT_2).decode()
                faults.append(f"{path.name}: {operation.operation_id} answers a problem.\n{shown}")
                continue
            if operation.media_type == JSON:
                # The answer's text is one line; indented it can be read, and its changes reviewed.
                file = directory / f"{name}{_RESPONSE}"
                indented = orjson.dumps(orjson.loads(answer), option=orjson.OPT_INDENT_2) + b"\n"
                if found.setdefault(file, indented) != indented:
                    faults.append(f"{path.name}: two operations answer it differently.")
    for operation in contract.operations.values():
        if operation.lines is None:
            continue
        path = directory / f"{operation.lines.example}{_REQUEST_LINES}"
        if not path.exists():
            faults.append(f"{operation.operation_id}: there is no {path.name}.")
            continue
        # The id of the call differs from one to the next; nothing else does.
        told = _CALL_ID.sub(_SOME_ID, operation.execute(path.read_bytes()))
        found[directory / f"{operation.lines.example}{_RESPONSE_LINES}"] = told
    return Executed(found, tuple(faults))


def write() -> int:
    """Writes answers and document anew; answers to examples that are gone are removed."""
    directory = examples_directory()
    executed = execute(_contract(), directory)
    if executed.faults:
        return _failed(executed.faults)
    for path in _answered(directory) - set(executed.answers):
        path.unlink()
    for path, answer in executed.answers.items():
        path.write_bytes(answer)
    # A new one: the document shows the answers just written.
    document = _document(_contract())
    (directory.parent / "openapi.json").write_bytes(document)
    print(f"Wrote {len(executed.answers)} answers and openapi.json ({len(document)} bytes).")
    return 0


def check() -> int:
    """Compares; returns 1 and shows the difference where there is one."""
    directory = examples_directory()
    contract = _contract()
    executed = execute(contract, directory)
    expected = dict(executed.answers)
    differences = [
        f"{path.name} answers an example that is not there."
        for path in sorted(_answered(directory) - set(expected))
    ]
    expected[directory.parent / "openapi.json"] = _document(contract)
    last_digits = 0
    for path, now in expected.items():
        committed = path.read_bytes() if path.exists() else b""
        if committed == now:
            continue
        if committed and _same_but_for_last_digits(committed, now):
            last_digits += 1
        else:
            differences.append(_difference(path.name, committed, now))
    if executed.faults or differences:
        mend = [] if executed.faults else [f"If the change is meant: {MEND}"]
        return _failed((*executed.faults, *differences, *mend))
    print(f"The contract is current: openapi.json and {len(executed.answers)} executed examples.")
    if last_digits:
        print(f"In {last_digits} of the files, last digits differ: they were written on another processor.")
    return 0


def _answered(directory: Path) -> set[Path]:
    return {*directory.glob("*" + _RESPONSE), *directory.glob("*" + _RESPONSE_LINES)}


def _contract() -> Contract:
    contract: Contract = create_app(Settings()).extensions["assignable.contract"]
    return contract


def _document(contract: Contract) -> bytes:
    """The document as it is committed: indented, so that its changes can be reviewed."""
    return orjson.dumps(orjson.loads(contract.document()), option=orjson.OPT_INDENT_2) + b"\n"


def _same_but_for_last_digits(committed: bytes, now: bytes) -> bool:
    """Whether two files hold the same members in the same order, and numbers that are close."""
    if len(committed.splitlines()) != len(now.splitlines()):
        return False
    try:
        return all(
            _close(json.loads(a), json.loads(b))
            for a, b in zip(_values(committed), _values(now), strict=True)
        )
    except ValueError:
        return False


def _values(file: bytes) -> list[bytes]:
    """The file's one value, or the value of each of its lines."""
    return file.splitlines() if file.startswith(b'{"line"') else [file]


def _close(a: Any, b: Any) -> bool:
    if type(a) is not type(b):
        return False
    if isinstance(a, float):
        return math.isclose(a, b, rel_tol=_RELATIVE, abs_tol=_ABSOLUTE)
    if isinstance(a, dict):
        return list(a) == list(b) and all(_close(a[name], b[name]) for name in a)
    if isinstance(a, list):
        return len(a) == len(b) and all(map(_close, a, b))
    if isinstance(a, str) and _DIGEST.fullmatch(a) and _DIGEST.fullmatch(b):
        return True
    return bool(a == b)


def _difference(name: str, committed: bytes, now: bytes) -> str:
    if not committed:
        return f"{name} is not there."
    lines = unified_diff(
        committed.decode().splitlines(),
        now.decode().splitlines(),
        f"{name} (committed)",
        f"{name} (now)",
        n=1,
        lineterm="",
    )
    shown = list(islice(lines, _SHOWN + 1))
    if len(shown) > _SHOWN:
        shown[_SHOWN] = "..."
    return "\n".join(line[:160] for line in shown)


def _failed(sentences: tuple[str, ...]) -> int:
    print("\n".join(sentences), file=sys.stderr)
    return 1
