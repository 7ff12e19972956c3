"""Requests of the chart of means as single values, with the spread within."""

from __future__ import annotations

from typing import Any

from ....spc.charts.between_within import BetweenWithinOptions, KnownComponents
from ....spc.factors import LARGEST_SIZE
from ....spc.sigma import LARGEST_SPAN, WITHIN
from ... import fields as f
from ..common import rules_of
from .common import ChartRequest, FitRequest, exclusions, limit_basis
from .subgroups import SubgroupData, subgroups


class KnownComponentsRequest(f.RequestShape):
    """Values known in advance; each replaces its estimate."""

    mean = f.StrictNumber(metadata={"description": "Process mean, in the unit of the characteristic."})
    sigma_within = f.StrictNumber(
        least=1e-140,
        most=1e150,
        metadata={"description": "Standard deviation of values within a subgroup, in the same unit."},
    )
    sigma_between = f.StrictNumber(
        least=0,
        most=1e150,
        metadata={"description": "Standard deviation of what differs between subgroups, in the same unit."},
    )


class BetweenWithinFit(FitRequest):
    """A baseline of subgroups whose means vary by nature."""

    data = f.Object(
        SubgroupData,
        metadata={"description": "The baseline; may be left out where all three standards are given."},
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
    means_estimator = f.Choice(
        "mean-moving-range",
        "median-moving-range",
        load_default="mean-moving-range",
        metadata={"description": "Estimator of the deviation of means; the median resists a few wild means."},
    )
    span = f.StrictInteger(
        least=2,
        most=LARGEST_SPAN,
        load_default=2,
        metadata={"description": "Successive means in a moving range; 2 unless given."},
    )
    standards = f.Object(KnownComponentsRequest, metadata={"description": "Values known in advance."})
    subgroup_size = f.StrictInteger(
        least=2, most=LARGEST_SIZE, metadata={"description": "Only without data: values in a subgroup."}
    )


def between_within_options(loaded: dict[str, Any]) -> BetweenWithinOptions:
    """The options of a chart of means as single values."""
    return BetweenWithinOptions(
        loaded["within_statistic"],
        loaded.get("sigma_estimator"),
        loaded["means_estimator"],
        loaded["span"],
        limit_basis(loaded),
        rules_of(loaded.get("rules")),
        KnownComponents(**loaded.get("standards", {})),
        loaded.get("subgroup_size"),
        exclusions(loaded),
    )


REQUESTS = {
    "between-within": ChartRequest(BetweenWithinFit, SubgroupData, subgroups, between_within_options),
}
