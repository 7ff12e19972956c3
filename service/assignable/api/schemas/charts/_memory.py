"""What the requests of the charts with memory share."""

from __future__ import annotations

from typing import Any

from ....spc.charts._memory import OF_SINGLE_VALUES, Data, Detect, Source
from ....spc.charts.common import Standards
from ....spc.data import Individuals
from ....spc.design.memory import HIGHEST_ARL, LOWEST_ARL
from ....spc.errors import Fault, UnusableData
from ....spc.factors import LARGEST_SIZE
from ....spc.runlength.memory import LARGEST_SHIFT
from ....spc.sigma import LARGEST_SPAN, WITHIN
from ... import fields as f
from ..common import check_labels
from .common import AnyFitRequest, StandardsRequest, exclusions
from .subgroups import SubgroupData, subgroups


class PointData(SubgroupData):
    """Points in time order: subgroups by their values or by a summary of each, or single values."""

    table = SubgroupData.table.and_of(value="individuals")
    individuals = f.NumberList(
        nullable=True,
        max_items=f.MAX_ROWS,
        metadata={"description": "Single values, instead of subgroups; null is a gap that keeps its place."},
    )


def points(loaded: dict[str, Any]) -> Data:
    """Points as posted. Raises UnusableData for parts that do not fit each other."""
    if "individuals" not in loaded:
        if "values" not in loaded and "means" not in loaded:
            raise UnusableData.of(
                "data-missing", "Give subgroups by their `values` or `means`, or `individuals`.", "data"
            )
        return subgroups(loaded, need_spread=False)
    faults = [
        Fault(
            "two-forms",
            f"Give either individuals or subgroups: {name} does not go with them.",
            ("data", name),
        )
        for name in ("values", "means", "ranges", "sds", "sizes")
        if name in loaded
    ]
    faults += check_labels(loaded, len(loaded["individuals"]))
    if faults:
        raise UnusableData(*faults)
    return Individuals(loaded["individuals"])


class MemoryFit(AnyFitRequest):
    """A baseline for a chart with memory."""

    data = f.Object(
        PointData,
        metadata={"description": "The baseline; may be left out where both standards are given."},
    )
    sigma_estimator = f.Choice(
        *WITHIN,
        *OF_SINGLE_VALUES,
        metadata={
            "description": "Estimator of sigma: a moving range for single values (`mean-moving-range` unless given), "
            "the others for subgroups (`mean-sd` unless given, `mean-range` where only ranges were kept)."
        },
    )
    moving_range_span = f.StrictInteger(
        least=2,
        most=LARGEST_SPAN,
        load_default=2,
        metadata={"description": "Successive single values in a moving range; 2 unless given."},
    )
    standards = f.Object(
        StandardsRequest,
        metadata={"description": "Values known in advance; the mean is then the target."},
    )
    subgroup_size = f.StrictInteger(
        least=1,
        most=LARGEST_SIZE,
        metadata={"description": "Only without data: values behind a point; 1 unless given."},
    )


class ShiftToDetect(f.RequestShape):
    """A shift to find soonest, at a stated rate of false alarms."""

    shift = f.StrictNumber(
        required=True,
        above=0,
        most=LARGEST_SHIFT,
        metadata={"description": "Lasting shift of the mean, in standard deviations of a single value."},
    )
    in_control_arl = f.StrictNumber(
        required=True,
        least=LOWEST_ARL,
        most=HIGHEST_ARL,
        metadata={"description": "Average number of points between false alarms."},
    )


def source_of(loaded: dict[str, Any]) -> Source:
    """Where mean and sigma come from."""
    return Source(
        loaded.get("sigma_estimator"),
        loaded["moving_range_span"],
        Standards(**loaded.get("standards", {})),
        loaded.get("subgroup_size"),
        exclusions(loaded),
    )


def detect_of(loaded: dict[str, Any]) -> Detect | None:
    """What the chart is to detect, where that was asked."""
    asked = loaded.get("detect")
    return None if asked is None else Detect(**asked)
