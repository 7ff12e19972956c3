"""Reference: the charts, factors, rules and methods there are."""

from __future__ import annotations

from typing import Any

from ...spc.charts import CHARTS
from ...spc.factors import LARGEST_SIZE, SMALLEST_SIZE, Factors, factors
from ...spc.methods import METHODS, Method
from ...spc.references import REFERENCES, Reference
from ...spc.rules import PUBLISHED, TOLERANCE, Rule
from .. import fields as f
from .. import problems
from ..contract import Contract
from ..schemas import derive

TAG = "Reference"


class ChartAnswer(f.AnswerShape):
    """A chart: what it is for, and where its operations are."""

    name = f.StrictString(required=True, metadata={"description": "As in the paths."})
    title = f.StrictString(required=True, metadata={"description": "In words."})
    purpose = f.StrictString(required=True, metadata={"description": "What it is for."})
    takes = f.StrictString(required=True, metadata={"description": "The data it needs."})
    beware = f.StrictString(required=True, metadata={"description": "Where it misleads."})
    panels = f.StringList(required=True, metadata={"description": "The statistics it plots."})
    references = f.StringList(required=True, metadata={"description": "Keys of its sources."})
    limits = f.StrictString(
        required=True, metadata={"description": "Path of the operation that fits limits."}
    )
    signals = f.StrictString(required=True, metadata={"description": "Path of the operation that judges."})


class ChartsAnswer(f.AnswerShape):
    """Every chart of the service."""

    charts = f.ObjectList(
        ChartAnswer, required=True, metadata={"description": "In the order of their kinds."}
    )


class FactorsQuery(f.RequestShape):
    """Which factors."""

    size = f.StrictInteger(
        required=True,
        least=SMALLEST_SIZE,
        most=LARGEST_SIZE,
        metadata={"description": "Values in a subgroup, 2 to 1000."},
    )
    sigma_multiple = f.StrictNumber(
        above=0,
        most=10,
        load_default=3.0,
        metadata={"description": "Limits this many sigma out; 3 unless given."},
    )


class RuleAnswer(derive.answer(Rule)):  # type: ignore[misc]
    """A rule in numbers and in words."""

    code = f.StrictString(required=True, metadata={"description": "As signals name it."})
    description = f.StrictString(required=True, metadata={"description": "In one sentence."})


class RuleSetAnswer(f.AnswerShape):
    """A published set of rules."""

    name = f.StrictString(required=True, metadata={"description": "As requests name it."})
    title = f.StrictString(required=True, metadata={"description": "Author and year."})
    reference = f.StrictString(required=True, metadata={"description": "Key of its source."})
    rules = f.ObjectList(RuleAnswer, required=True, metadata={"description": "The limit first."})


class RulesAnswer(f.AnswerShape):
    """The published sets, and what rules mean exactly."""

    sets = f.ObjectList(RuleSetAnswer, required=True, metadata={"description": "By author and year."})
    semantics = f.StringList(required=True, metadata={"description": "What all rules have in common."})


class MethodsAnswer(f.AnswerShape):
    """Every method with its formula, and the bibliography."""

    methods = f.ObjectList(
        derive.answer(Method), required=True, metadata={"description": "What is computed, and how."}
    )
    references = f.ObjectList(
        derive.answer(Reference), required=True, metadata={"description": "The sources, by key."}
    )


SEMANTICS = (
    "Beyond is strict: a point on a line is not beyond it. Within "
    f"{TOLERANCE:g} sigma of a line, a point lies on it.",
    "A zone rule counts points beyond a distance on one side, and signals only on a point that is itself beyond.",
    "A point on the centre line is on neither side and ends a run.",
    "Two equal neighbours end a trend and an alternation.",
    "A gap ends every run: a point before it never counts after it.",
    "Distances are in each point's own standard deviation, so limits that vary change no rule.",
    "A window may be partial at the start, and goes on after a signal.",
    "The control limits are always watched; one point beyond 3 stands for them, wherever they lie.",
    "Run rules watch the panel of the location or the count; a spread panel is watched by its limits alone.",
)


def charts() -> dict[str, Any]:
    """The charts there are."""
    return {
        "charts": [
            {
                "name": chart.name,
                "title": chart.title,
                "purpose": chart.purpose,
                "takes": chart.takes,
                "beware": chart.beware,
                "panels": chart.panels,
                "references": chart.references,
                "limits": f"/v1/charts/{chart.name}/limits",
                "signals": f"/v1/charts/{chart.name}/signals",
            }
            for chart in CHARTS.values()
        ]
    }


def factors_of(loaded: dict[str, Any]) -> Factors:
    """Factors for one size."""
    return factors(loaded["size"], loaded["sigma_multiple"])


def rules() -> dict[str, Any]:
    """The published sets of rules."""
    return {
        "sets": [
            {
                "name": name,
                "title": published.title,
                "reference": published.source,
                "rules": [
                    {
                        "form": rule.form,
                        "points": rule.points,
                        "window": rule.window,
                        "distance": rule.distance,
                        "severity": rule.severity,
                        "code": rule.code,
                        "description": rule.description,
                    }
                    for rule in published.rules
                ],
            }
            for name, published in PUBLISHED.items()
        ],
        "semantics": SEMANTICS,
    }


def methods() -> dict[str, Any]:
    """The methods and their sources."""
    return {"methods": METHODS, "references": list(REFERENCES.values())}


def register(contract: Contract) -> None:
    """Binds the reference operations."""
    contract.tag(TAG, "What there is: charts, factors, rules, methods and their sources.")
    contract.operation(
        "GET",
        "/v1/charts",
        operation_id="listCharts",
        tag=TAG,
        summary="The charts there are",
        description="What each chart is for, the data it takes, where it misleads, and its operations.",
        response=ChartsAnswer(),
        computes=False,
    )(charts)
    contract.operation(
        "GET",
        "/v1/factors",
        operation_id="getFactors",
        tag=TAG,
        summary="Control chart factors of one size",
        description="Every factor of mean, range and deviation charts for subgroups of 2 to 1000 values, computed, "
        "not looked up. A lower factor that would not be positive is null. Sources: iso-7870-2, astm-e2587.",
        query=FactorsQuery(),
        response=derive.answer(Factors)(),
        problems=(problems.NOT_COMPUTABLE,),
    )(factors_of)
    contract.operation(
        "GET",
        "/v1/rules",
        operation_id="getRules",
        tag=TAG,
        summary="Published sets of run rules",
        description="Each set by author and year, rule by rule, and the exact meaning of rules here.",
        response=RulesAnswer(),
        computes=False,
    )(rules)
    contract.operation(
        "GET",
        "/v1/methods",
        operation_id="getMethods",
        tag=TAG,
        summary="Methods and their sources",
        description="What is computed, by which formula, on whose authority; with the bibliography.",
        response=MethodsAnswer(),
        computes=False,
    )(methods)
