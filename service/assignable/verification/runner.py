"""Published cases, run through the road of a request: what print says beside what comes out.

A case is a file of ``cases``: a request of one operation, and checks of its answer. Each check has the
number as printed and half a unit of print's last digit, within which the answer must lie. Where print is
wrong, or was computed from rounded intermediates, the check has the right number and its note says so.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Annotated, Any, Literal, get_args

Execute = Callable[[str, bytes], bytes]
"""From an operation's id and a body to the bytes of the answer."""

Trust = Literal["checked-in-print", "partly-checked-in-print", "quoted-second-hand", "from-memory"]

MEANING: dict[str, str] = {
    "checked-in-print": "compared with the printed source itself",
    "partly-checked-in-print": "part of it compared with the printed source, the rest from memory; all of it "
    "computed again by other means",
    "quoted-second-hand": "as quoted by another source; computed again by other means",
    "from-memory": "as remembered by those who wrote the case; computed again by other means",
}

# Of a rounding, so that a value right at its edge is not lost to binary fractions.
_EDGE = 1e-6


class BadCase(Exception):
    """A case's file that is not one."""


@dataclass(frozen=True, slots=True)
class Check:
    """A number of an answer, or a list of them, and what it must be; none at all stands for null."""

    what: str
    pointer: str
    expected: tuple[float, ...]
    rounding: float
    note: str | None


@dataclass(frozen=True, slots=True)
class Case:
    """A published case, as its file has it."""

    id: str
    title: str
    source: str
    trust: Trust
    operation_id: str
    request: str
    checks: tuple[Check, ...]


@dataclass(frozen=True, slots=True)
class VerifiedCheck:
    """One number of a published case, or a list of numbers: expected beside obtained."""

    what: Annotated[str, "What the number is, in words."]
    pointer: Annotated[str, "Where it stands in the answer, as a JSON Pointer (RFC 6901)."]
    expected: Annotated[
        tuple[float, ...], "As published; empty where the answer must be null, as for a limit there is not."
    ]
    obtained: Annotated[tuple[float, ...], "As computed now; empty for null."]
    rounding: Annotated[float, "Half a unit of print's last digit: obtained may be so far from expected."]
    difference: Annotated[
        float | None, "The largest difference of obtained from expected; null where they cannot be compared."
    ]
    note: Annotated[str | None, "Where print is wrong, or rounded on its way: what it has, and why not."]
    passed: Annotated[bool, "Whether obtained is expected, within the rounding."]


@dataclass(frozen=True, slots=True)
class VerifiedCase:
    """A published case, and how this installation fares with it."""

    id: Annotated[str, "Stable name of the case."]
    title: Annotated[str, "What is computed."]
    source: Annotated[str, "Where it was published."]
    trust: Annotated[
        Trust,
        "How far the figures are to be trusted: "
        + "; ".join(f"`{k}`: {v}" for k, v in MEANING.items())
        + ".",
    ]
    operation_id: Annotated[str, "The operation that computes it."]
    request: Annotated[str, "The request, as JSON: for an operation by GET, its parameters."]
    checks: Annotated[tuple[VerifiedCheck, ...], "Each number compared."]
    problem: Annotated[str | None, "Why there is no answer; null where there is one."]
    passed: Annotated[bool, "Whether every check passed."]


@dataclass(frozen=True, slots=True)
class Verification:
    """Every published case, run on this installation."""

    passed: Annotated[bool, "Whether every case passed."]
    cases_run: Annotated[int, "How many cases there are."]
    cases_failed: Annotated[int, "How many of them did not pass."]
    checks_run: Annotated[int, "How many checks there are in all."]
    cases: Annotated[tuple[VerifiedCase, ...], "Each case, in the order of their names."]


@cache
def cases() -> tuple[Case, ...]:
    """Every published case, in the order of their names. Raises :class:`BadCase`."""
    found = [
        _read(file.name.removesuffix(".json"), file.read_bytes())
        for file in files("assignable.verification").joinpath("cases").iterdir()
        if file.name.endswith(".json")
    ]
    return tuple(sorted(found, key=lambda case: case.id))


def run(execute: Execute, published: tuple[Case, ...] | None = None) -> Verification:
    """Runs the cases, all there are unless given. Whatever ``execute`` raises fails its case alone."""
    done = tuple(_verified(case, execute) for case in (cases() if published is None else published))
    failed = sum(not case.passed for case in done)
    return Verification(
        not failed and bool(done), len(done), failed, sum(len(case.checks) for case in done), done
    )


def _verified(case: Case, execute: Execute) -> VerifiedCase:
    problem = None
    answer: Any = None
    try:
        answer = json.loads(execute(case.operation_id, case.request.encode()))
    except Exception as error:
        problem = str(error) or type(error).__name__
    checks = tuple(_verified_check(check, answer, problem is None) for check in case.checks)
    return VerifiedCase(
        case.id,
        case.title,
        case.source,
        case.trust,
        case.operation_id,
        case.request,
        checks,
        problem,
        problem is None and all(check.passed for check in checks),
    )


def _verified_check(check: Check, answer: Any, answered: bool) -> VerifiedCheck:
    obtained = _numbers(resolve(answer, check.pointer)) if answered else None
    difference = None
    passed = False
    if obtained is not None and len(obtained) == len(check.expected):
        apart = [abs(a - b) for a, b in zip(obtained, check.expected, strict=True)]
        difference = max(apart, default=None)
        passed = difference is None or difference <= check.rounding * (1 + _EDGE)
    return VerifiedCheck(
        check.what,
        check.pointer,
        check.expected,
        obtained or (),
        check.rounding,
        difference,
        check.note,
        passed,
    )


class _Nothing:
    """What a pointer that leads nowhere finds."""


def resolve(document: Any, pointer: str) -> Any:
    """What a JSON Pointer (RFC 6901) leads to, or an object that is no JSON where it leads nowhere."""
    for step in pointer.split("/")[1:]:
        name = step.replace("~1", "/").replace("~0", "~")
        if isinstance(document, dict) and name in document:
            document = document[name]
        elif isinstance(document, list) and name.isdigit() and int(name) < len(document):
            document = document[int(name)]
        else:
            return _Nothing()
    return document


def _numbers(value: Any) -> tuple[float, ...] | None:
    """A number or a list of numbers; none for null; ``None`` for anything else."""
    if value is None:
        return ()
    found = value if isinstance(value, list) else [value]
    if not found or any(type(one) not in (int, float) for one in found):
        return None
    return tuple(float(one) for one in found)


def _read(name: str, text: bytes) -> Case:
    """A case from its file; anything missing, misspelt or of another kind is told."""
    try:
        given = json.loads(text)
        case = Case(
            given.pop("id"),
            given.pop("title"),
            given.pop("source"),
            given.pop("trust"),
            given.pop("operation_id"),
            json.dumps(given.pop("request"), separators=(",", ":"), ensure_ascii=False),
            tuple(_checks(given.pop("checks"))),
        )
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise BadCase(f"{name}: {error!r}") from error
    if given or case.id != name or case.trust not in get_args(Trust) or not case.checks:
        raise BadCase(f"{name}: {', '.join(given) or 'its id, its trust or its checks'} cannot be.")
    return case


def _checks(given: list[dict[str, Any]]) -> Iterator[Check]:
    for one in given:
        expected = _numbers(one["expected"])
        if expected is None or not one["pointer"].startswith("/") or set(one) - _MEMBERS:
            raise ValueError(one)
        yield Check(one["what"], one["pointer"], expected, float(one["rounding"]), one.get("note"))


_MEMBERS = {"what", "pointer", "expected", "rounding", "note"}
