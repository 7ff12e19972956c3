"""What the page for one's own numbers offers: charts by the form of the data, and sets of run rules."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from ..spc.charts import CHARTS
from ..spc.rules import PUBLISHED

# A page of pasted columns cannot ask for parts, targets, several characteristics or risks: their charts
# are for the API.
FORMS = {
    "xbar-r": "subgroups",
    "xbar-s": "subgroups",
    "between-within": "subgroups",
    "individuals": "singles",
    "residual": "singles",
    "ewma": "subgroups singles",
    "cusum": "subgroups singles",
    "trend": "subgroups singles",
    "p": "counts",
    "np": "counts",
    "c": "counts",
    "u": "counts",
    "p-prime": "counts",
    "u-prime": "counts",
}


@dataclass(frozen=True, slots=True)
class Offered:
    """A chart, and the forms of data it takes on the page."""

    name: str
    title: str
    purpose: str
    forms: str
    ruled: bool


@dataclass(frozen=True, slots=True)
class RuleSet:
    """A published set of run rules."""

    name: str
    title: str


def offered(ruled: Callable[[str], bool]) -> tuple[Offered, ...]:
    """The charts; ``ruled`` tells whether the operation that fits a chart takes run rules."""
    return tuple(
        Offered(name, CHARTS[name].title, CHARTS[name].purpose, forms, ruled(f"fit{CHARTS[name].stem}Limits"))
        for name, forms in FORMS.items()
    )


def rule_sets() -> tuple[RuleSet, ...]:
    """Those that are more than limits."""
    return tuple(
        RuleSet(name, published.title) for name, published in PUBLISHED.items() if len(published.rules) > 1
    )
