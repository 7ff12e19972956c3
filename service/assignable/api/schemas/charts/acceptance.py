"""Requests of the chart of means against acceptance limits."""

from __future__ import annotations

from typing import Any

from ....spc.charts.acceptance import AcceptanceOptions, AcceptancePlan
from ....spc.factors import LARGEST_SIZE
from ....spc.sigma import WITHIN
from ... import fields as f
from ..capability import SpecificationRequest, specification_of
from .common import AnyFitRequest, ChartRequest, exclusions
from .subgroups import SubgroupData, subgroups


def _probability(text: str, usual: float | None = None) -> f.StrictNumber:
    given: dict[str, Any] = {"required": True} if usual is None else {"load_default": usual}
    shown = text if usual is None else f"{text}; {usual} unless given."
    return f.StrictNumber(least=1e-9, most=0.49, metadata={"description": shown}, **given)


class SigmaRequest(f.RequestShape):
    """A sigma known in advance."""

    sigma = f.StrictNumber(
        least=1e-140,
        most=1e150,
        metadata={"description": "Within-subgroup standard deviation, in the unit of the characteristic."},
    )


class AcceptanceFit(AnyFitRequest):
    """A specification with two levels and two risks, and a baseline or a sigma."""

    data = f.Object(
        SubgroupData,
        metadata={"description": "The baseline sigma comes from; may be left out where sigma is given."},
    )
    specification = f.Object(
        SpecificationRequest, required=True, metadata={"description": "What single pieces must meet."}
    )
    acceptable_fraction = _probability("Fraction nonconforming at the acceptable process level, p₁.")
    rejectable_fraction = _probability("Fraction nonconforming at the rejectable process level, p₂.")
    producer_risk = _probability("Risk of rejecting at the acceptable level, α", 0.05)
    consumer_risk = _probability("Risk of accepting at the rejectable level, β", 0.1)
    sample_size = f.StrictInteger(
        least=1,
        most=LARGEST_SIZE,
        metadata={"description": "n where it is fixed; computed from the risks unless given."},
    )
    within_statistic = f.Choice(
        "range",
        "sd",
        load_default="range",
        metadata={"description": "What the panel within plots: ranges, or standard deviations."},
    )
    sigma_estimator = f.Choice(
        *WITHIN,
        metadata={
            "description": "Estimator of sigma within; `mean-range` unless given, `mean-sd` where standard "
            "deviations are plotted."
        },
    )
    sigma_multiple = f.StrictNumber(
        above=0,
        most=10,
        load_default=3.0,
        metadata={"description": "How many of its standard deviations out the limits of the spread lie."},
    )
    standards = f.Object(SigmaRequest, metadata={"description": "A sigma known in advance."})


def acceptance_options(loaded: dict[str, Any]) -> AcceptanceOptions:
    """The options of a chart of means against acceptance limits."""
    return AcceptanceOptions(
        specification_of(loaded["specification"]),
        AcceptancePlan(
            loaded["acceptable_fraction"],
            loaded["rejectable_fraction"],
            loaded["producer_risk"],
            loaded["consumer_risk"],
        ),
        loaded.get("sample_size"),
        loaded["within_statistic"],
        loaded.get("sigma_estimator"),
        loaded.get("standards", {}).get("sigma"),
        loaded["sigma_multiple"],
        exclusions(loaded),
    )


REQUESTS = {
    "acceptance": ChartRequest(AcceptanceFit, SubgroupData, subgroups, acceptance_options),
}
