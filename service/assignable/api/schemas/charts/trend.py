"""Requests of the chart of a drifting level."""

from __future__ import annotations

from typing import Any

from ....spc.charts.trend import CONFIDENCE, AdjustmentLimits, TrendData, TrendOptions
from ... import fields as f
from ..common import rules_of
from ._memory import PointData, points
from .common import ChartRequest, FitRequest, exclusions, limit_basis


class TrendBaselineData(PointData):
    """Points in time order, subgroups or single values, with their positions where they do not come evenly."""

    table = PointData.table.and_of(position="positions")
    positions = f.NumberList(
        most=1e15,
        least=-1e15,
        max_items=f.MAX_ROWS,
        metadata={
            "description": "Where each point lies on the line (hours of use, pieces made); without them, its place "
            "in the order, from 0, gaps included."
        },
    )


class TrendNewData(TrendBaselineData):
    """New points in time order, with their positions where the line was fitted on given ones."""

    start = f.StrictInteger(
        least=0,
        most=10**9,
        metadata={
            "description": "Only without a carry: position of the first point in the order, 0 for a new tool; without "
            "it the points go on after the baseline."
        },
    )


def trend_data(loaded: dict[str, Any]) -> TrendData:
    """Points as posted."""
    return TrendData(points(loaded), loaded.get("positions"), loaded.get("start"))


class AdjustmentRequest(f.RequestShape):
    """Levels at which the process is adjusted."""

    lower = f.StrictNumber(metadata={"description": "Lower level, in the unit of the characteristic."})
    upper = f.StrictNumber(metadata={"description": "Upper level, in the unit of the characteristic."})


class LineSigmaRequest(f.RequestShape):
    """A sigma known in advance."""

    sigma = f.StrictNumber(
        least=1e-140,
        most=1e150,
        metadata={"description": "Standard deviation of single values about the line."},
    )


class TrendFit(FitRequest):
    """A baseline that drifts by nature."""

    data = f.Object(TrendBaselineData, required=True, metadata={"description": "The baseline."})
    sigma_from = f.Choice(
        "residual-sd",
        "residual-moving-range",
        "within-subgroup",
        load_default="residual-sd",
        metadata={
            "description": "Sigma from the distances to the line (their standard deviation, or their moving ranges), "
            "or from within the subgroups."
        },
    )
    standards = f.Object(LineSigmaRequest, metadata={"description": "A sigma known in advance."})
    adjustment = f.Object(
        AdjustmentRequest, metadata={"description": "Levels at which the process is adjusted."}
    )
    confidence = f.StrictNumber(
        least=0.5,
        most=0.9999,
        load_default=CONFIDENCE,
        metadata={
            "description": f"Of the interval for the adjustment's position; {CONFIDENCE} unless given."
        },
    )


def trend_options(loaded: dict[str, Any]) -> TrendOptions:
    """The options of a chart of a drifting level."""
    return TrendOptions(
        loaded["sigma_from"],
        loaded.get("standards", {}).get("sigma"),
        AdjustmentLimits(**loaded.get("adjustment", {})),
        loaded["confidence"],
        limit_basis(loaded),
        rules_of(loaded.get("rules")),
        exclusions(loaded),
    )


REQUESTS = {
    "trend": ChartRequest(TrendFit, TrendNewData, trend_data, trend_options),
}
