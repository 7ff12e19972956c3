"""The operation that recommends a chart."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from ...spc.explain import recommendation as worked
from ...spc.explain.steps import Step
from ...spc.recommendation import of_sample, recommend
from .. import problems
from ..contract import Contract
from ..schemas.recommendation import RecommendationAnswer, RecommendationRequest, asked

TAG = "Choosing a chart"


def recommendation(loaded: dict[str, Any]) -> dict[str, Any]:
    """The chart for the data described, or shown."""
    about, sample = asked(loaded)
    evidence = None
    if sample is None:
        told = recommend(about)
    else:
        told, about, evidence = of_sample(sample, about)
    return {
        "chart": told.chart,
        "title": told.title,
        "why": told.why,
        "alternatives": told.alternatives,
        "beware": told.beware,
        "limits": f"/v1/charts/{told.chart}/limits",
        "taken_as": about,
        "evidence": evidence,
    }


def explain(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The evidence of the sample in figures, and the choice."""
    about, sample = asked(loaded)
    told = recommend(about) if sample is None else of_sample(sample, about)[0]
    return worked.of_choice(told, sample, answer["evidence"])


def register(contract: Contract) -> None:
    """Binds the recommendation."""
    contract.tag(TAG, "Which chart answers to the data there is, and why.")
    contract.operation(
        "POST",
        "/v1/charts/recommendation",
        operation_id="recommendChart",
        tag=TAG,
        summary="Which chart to use",
        description="From a description of the data, a sample of it, or both: the chart to use, why, what else would "
        "do, and what to beware of. A sample is looked at for dependence in time, drift and steps, normality, "
        "differences between subgroups and dispersion of counts, at a significance of 0.01; what it shows is "
        "added to what is said. The choice is advice for a qualified person. Source: iso-7870-1.",
        request=RecommendationRequest(),
        response=RecommendationAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example=("charts-recommendation", "charts-recommendation-sample"),
        provenance="chart-recommendation",
        explain=explain,
    )(recommendation)
