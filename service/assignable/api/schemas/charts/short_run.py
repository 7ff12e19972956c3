"""Requests of the chart of many parts."""

from __future__ import annotations

from typing import Any

from ....spc.charts.short_run import PartData, PartTarget, ShortRunOptions
from ....spc.factors import LARGEST_SIZE
from ....spc.sigma import WITHIN
from ... import fields as f
from ..common import rules_of
from ._memory import PointData, points
from .common import ChartRequest, FitRequest, exclusions, limit_basis

MOST_PARTS = 500


class PartPointData(PointData):
    """Points of several parts in the order made: subgroups, or single values."""

    table = PointData.table.and_of(part="part_names")
    part_names = f.StringList(
        required=True, metadata={"description": "Which part each point is of, by its name among `parts`."}
    )


def part_points(loaded: dict[str, Any]) -> PartData:
    """Points of several parts as posted."""
    return PartData(points(loaded), loaded["part_names"])


class PartRequest(f.RequestShape):
    """A part number with its target."""

    name = f.StrictString(
        required=True, min_length=1, metadata={"description": "Its name, as `part_names` has it."}
    )
    target = f.StrictNumber(
        required=True, metadata={"description": "Its target, in the unit of the characteristic."}
    )
    sigma = f.StrictNumber(
        load_default=None,
        allow_none=True,
        least=1e-140,
        most=1e150,
        metadata={
            "description": "Standard deviation of its single values, under `standardised`; estimated from its "
            "own points unless given."
        },
    )


class CommonSigmaRequest(f.RequestShape):
    """A sigma known in advance."""

    sigma = f.StrictNumber(
        least=1e-140,
        most=1e150,
        metadata={"description": "Standard deviation of single values of any part, under `deviation`."},
    )


class ShortRunFit(FitRequest):
    """A baseline of several parts."""

    data = f.Object(
        PartPointData,
        metadata={"description": "The baseline; may be left out where targets and sigmas are given."},
    )
    parts = f.ObjectList(
        PartRequest,
        required=True,
        min_items=1,
        max_items=MOST_PARTS,
        metadata={"description": "Every part that is to come, with its target."},
    )
    scale = f.Choice(
        "deviation",
        "standardised",
        load_default="deviation",
        metadata={
            "description": "`deviation`: value less target; one sigma holds for all parts. `standardised`: that over "
            "the part's own sigma."
        },
    )
    centre_line = f.Choice(
        "target",
        "mean",
        load_default="target",
        metadata={
            "description": "`target`: the centre line is 0. `mean`: it is the mean of the baseline's plotted level."
        },
    )
    sigma_estimator = f.Choice(
        *WITHIN,
        "mean-moving-range",
        "median-moving-range",
        metadata={
            "description": "Estimator of sigma; `mean-range` for subgroups and `mean-moving-range` for single "
            "values unless given."
        },
    )
    standards = f.Object(CommonSigmaRequest, metadata={"description": "A sigma known in advance."})
    subgroup_size = f.StrictInteger(
        least=1,
        most=LARGEST_SIZE,
        metadata={"description": "Only without data: values behind a point; 1 unless given."},
    )


def short_run_options(loaded: dict[str, Any]) -> ShortRunOptions:
    """The options of a chart of many parts."""
    return ShortRunOptions(
        tuple(PartTarget(**part) for part in loaded["parts"]),
        loaded["scale"],
        loaded["centre_line"],
        loaded.get("sigma_estimator"),
        loaded.get("standards", {}).get("sigma"),
        limit_basis(loaded),
        rules_of(loaded.get("rules")),
        loaded.get("subgroup_size"),
        exclusions(loaded),
    )


REQUESTS = {
    "short-run": ChartRequest(ShortRunFit, PartPointData, part_points, short_run_options),
}
