"""The methods as an auditor asks for them: formula, source, and what they are checked against."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from ..spc.charts import CHARTS
from ..spc.methods import METHODS, Method
from ..spc.references import REFERENCES, Reference


@dataclass(frozen=True, slots=True)
class PublishedCase:
    """A published case by its id, with the operation that computes it."""

    id: str
    title: str
    trust: str
    operation_id: str


@dataclass(frozen=True, slots=True)
class Audited:
    """A method with its sources in full, the operations it serves and their published cases."""

    method: Method
    operations: tuple[str, ...]
    sources: tuple[Reference, ...]
    cases: tuple[PublishedCase, ...]


def audited(cases: Iterable[PublishedCase]) -> tuple[Audited, ...]:
    """Every method, in the order of the listing."""
    published = tuple(cases)
    found = []
    for method in METHODS:
        operations = tuple(dict.fromkeys(one for user in method.used_by for one in _operations_of(user)))
        found.append(
            Audited(
                method,
                operations,
                tuple(REFERENCES[key] for key in method.references),
                tuple(case for case in published if case.operation_id in operations),
            )
        )
    return tuple(found)


def with_sources(operation_id: str) -> tuple[tuple[Method, tuple[Reference, ...]], ...]:
    """The methods of an operation, each with its sources in full."""
    return tuple(
        (method, tuple(REFERENCES[key] for key in method.references))
        for method in METHODS
        if any(operation_id in _operations_of(user) for user in method.used_by)
    )


def sources_of_chart(operation_id: str) -> tuple[Reference, ...]:
    """What a chart's own listing cites, for its two operations; none for others."""
    return tuple(
        REFERENCES[key]
        for name, chart in CHARTS.items()
        if operation_id in _operations_of(name)
        for key in chart.references
    )


def _operations_of(user: str) -> tuple[str, ...]:
    """A chart stands for its two operations."""
    if user not in CHARTS:
        return (user,)
    stem = CHARTS[user].stem
    return (f"fit{stem}Limits", f"judge{stem}")
