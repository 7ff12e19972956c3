"""The published cases, computed on this installation without a server."""

from __future__ import annotations

import sys
from pathlib import Path

from ..api.answers import service_version
from ..api.app import create_app
from ..api.contract import Contract
from ..api.operations.verification import executor
from ..api.settings import Settings
from ..verification.page import number, page, verdict
from ..verification.runner import Verification, VerifiedCase, VerifiedCheck, run


def verify(*, as_json: bool = False, html: str | None = None) -> int:
    """Prints a line for each case, and every figure that differs; returns 1 where one does."""
    contract: Contract = create_app(Settings(log="off", metrics="off")).extensions["assignable.contract"]
    found = run(executor(contract))
    if html is not None:
        try:
            Path(html).write_text(page(found, service_version()), encoding="utf-8")
        except OSError as error:
            print(f"{html} cannot be written ({error.strerror}).", file=sys.stderr)
            return 2
    if as_json:
        operation = contract.operations["getVerification"]
        result = {name: getattr(found, name) for name in found.__dataclass_fields__}
        sys.stdout.buffer.write(operation.write(result) + b"\n")
        sys.stdout.buffer.flush()
    else:
        print("\n".join(_lines(found)))
    return 0 if found.passed else 1


def _lines(found: Verification) -> list[str]:
    width = max((len(case.id) for case in found.cases), default=0)
    lines = []
    for case in found.cases:
        lines.append(f"{verdict(case.passed):8} {case.id:{width}}  {case.title}")
        if not case.passed:
            lines += _differing(case)
    agreeing = found.cases_run - found.cases_failed
    lines.append(
        f"{agreeing} of {found.cases_run} published cases agree ({found.checks_run} figures), "
        f"Assignable {service_version()}."
    )
    return lines


def _differing(case: VerifiedCase) -> list[str]:
    if case.problem is not None:
        return [f"    no answer: {case.problem}"]
    return [f"    {case.source}"] + [_shown(check) for check in case.checks if not check.passed]


def _shown(check: VerifiedCheck) -> str:
    def numbers(values: tuple[float, ...]) -> str:
        return ", ".join(map(number, values)) or "none"

    return (
        f"    {check.what} ({check.pointer}): published {numbers(check.expected)}, obtained "
        f"{numbers(check.obtained)}, within {number(check.rounding)}"
    )
