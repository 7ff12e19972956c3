"""The published cases, run on this installation: as an answer, and as a page."""

from __future__ import annotations

import threading
from collections.abc import Callable
from typing import Any

from ...verification import runner
from ..contract import Contract
from ..schemas import derive
from ..schemas.common import PROVENANCE

TAG = "Verification"
_KEPT = "assignable.verification"

VerificationAnswer = derive.answer(
    runner.Verification,
    "VerificationAnswer",
    "Every published case, run on this installation.",
    {"provenance": PROVENANCE},
)


def executor(contract: Contract) -> runner.Execute:
    """The road of a request from bytes to bytes; for an operation by GET, the body has its parameters."""
    operations = contract.operations
    return lambda operation_id, body: operations[operation_id].execute(body)


def verified(contract: Contract) -> Callable[[], runner.Verification]:
    """The verification of an application, computed at the first call: nothing that it rests on changes."""
    found: list[runner.Verification] = []
    computing = threading.Lock()

    def verification() -> runner.Verification:
        with computing:
            if not found:
                found.append(runner.run(executor(contract)))
            return found[0]

    kept: Callable[[], runner.Verification] = contract.app.extensions.setdefault(_KEPT, verification)
    return kept


def register(contract: Contract) -> None:
    """Binds the verification."""
    verification = verified(contract)

    def answer() -> dict[str, Any]:
        result = verification()
        return {name: getattr(result, name) for name in result.__dataclass_fields__}

    contract.tag(TAG, "Evidence that this installation computes what was published.")
    contract.operation(
        "GET",
        "/v1/verification",
        operation_id="getVerification",
        tag=TAG,
        summary="The published cases, computed now",
        description="Worked examples and tables of books, articles and handbooks, run through the road of a request "
        "on this installation: each published figure beside the one obtained, with print's rounding, the source, and "
        "how far the figure is to be trusted. Computed once in the life of a process. Evidence for a site's own "
        "validation, which it does not replace. The page `/verification` shows the same, to be printed.",
        response=VerificationAnswer(),
        provenance="verification",
        cache_seconds=0,
    )(answer)
