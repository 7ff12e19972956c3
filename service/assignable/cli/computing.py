"""One operation of the contract, without a server."""

from __future__ import annotations

import sys
from dataclasses import replace
from difflib import get_close_matches
from pathlib import Path
from uuid import uuid4

from ..api import problems
from ..api.app import create_app
from ..api.contract import Contract, Operation
from ..api.settings import BadSettings, Settings


def compute(operation_id: str, file: str | None) -> int:
    """Prints the answer to a file's body; a problem goes to standard error, with status 1."""
    try:
        contract: Contract = create_app(replace(Settings.from_environment(), metrics="off")).extensions[
            "assignable.contract"
        ]
    except BadSettings as error:
        return _not_understood(str(error))
    operation = contract.operations.get(operation_id)
    if operation is None:
        near = get_close_matches(operation_id, contract.operations, n=1, cutoff=0.5)
        hint = f" Did you mean {near[0]}?" if near else ""
        return _not_understood(f"There is no operation {operation_id}.{hint}")
    takes_body = operation.request is not None or operation.lines is not None
    if not takes_body and (operation.query is not None or "{" in operation.path):
        return _not_understood(f"{operation_id} takes parameters of its address: ask a server for it.")
    if not takes_body and file is not None:
        return _not_understood(f"{operation_id} takes no body.")
    if takes_body and file is None:
        return _not_understood(f"{operation_id} takes a body: name its file, or - for standard input.")
    try:
        body = b"" if file is None else sys.stdin.buffer.read() if file == "-" else Path(file).read_bytes()
    except OSError as error:
        return _not_understood(f"{file} cannot be read ({error.strerror}).")
    try:
        answer = answer_of(operation, body)
    except Exception as error:
        problem = problems.of(error)
        if problem.kind is problems.INTERNAL:
            raise
        sys.stderr.buffer.write(problem.body(str(uuid4())) + b"\n")
        return 1
    sys.stdout.buffer.write(answer + b"\n")
    sys.stdout.buffer.flush()
    return 0


def answer_of(operation: Operation, body: bytes) -> bytes:
    """The answer's bytes, as the service would send them."""
    if operation.request is None and operation.lines is None:
        return operation.write(operation.view())
    return operation.execute(body)


def _not_understood(sentence: str) -> int:
    print(sentence, file=sys.stderr)
    return 2
