"""Requests of the charts of subgroups."""

from __future__ import annotations

from typing import Any

import numpy as np

from ....spc.charts.common import Standards
from ....spc.charts.subgroups import SubgroupOptions
from ....spc.data import Subgroups, SubgroupSummary
from ....spc.errors import Fault, UnusableData
from ....spc.factors import LARGEST_SIZE
from ....spc.sigma import WITHIN
from ... import fields as f
from ...tables import Columns
from ..common import IDS, TIMES, check_labels, rules_of
from .common import (
    ChartRequest,
    StandardsRequest,
    StudyRequest,
    exclusions,
    guarantee,
    limit_basis,
    screening,
)


class SubgroupData(f.RequestShape):
    """Subgroups in time order: their values, or a summary of each."""

    table = Columns(
        {"mean": "means", "range": "ranges", "sd": "sds", "size": "sizes", "id": "ids", "time": "times"},
        rows_of="values",
    )
    values = f.NumberTable(
        nullable=True,
        ragged=True,
        min_columns=0,
        metadata={
            "description": "A row a subgroup, in the unit of the characteristic. Rows may differ in length; null "
            "is a missing piece, and a row of none is a gap that keeps its place."
        },
    )
    means = f.NumberList(
        nullable=True, max_items=f.MAX_ROWS, metadata={"description": "Subgroup means, instead of values."}
    )
    ranges = f.NumberList(
        nullable=True, least=0, max_items=f.MAX_ROWS, metadata={"description": "Subgroup ranges, with means."}
    )
    sds = f.NumberList(
        nullable=True,
        least=0,
        max_items=f.MAX_ROWS,
        metadata={"description": "Subgroup standard deviations (divisor n - 1), with means."},
    )
    sizes = f.OneOrMany(
        f.IntegerList(least=0, most=LARGEST_SIZE, max_items=f.MAX_ROWS),
        metadata={"description": "Values in each subgroup, with means: one number for all, or one each."},
    )
    ids = f.StringList(**IDS)
    times = f.TimeList(**TIMES)


def subgroups(loaded: dict[str, Any], *, need_spread: bool = True) -> Subgroups | SubgroupSummary:
    """Subgroups as posted. Raises UnusableData for parts that do not fit each other."""
    if "values" in loaded:
        faults = [
            Fault(
                "two-forms",
                f"Give either values or a summary: {name} does not go with values.",
                ("data", name),
            )
            for name in ("means", "ranges", "sds", "sizes")
            if name in loaded
        ]
        faults += check_labels(loaded, len(loaded["values"]))
        if faults:
            raise UnusableData(*faults)
        return Subgroups(loaded["values"])
    if "means" not in loaded:
        raise UnusableData.of("data-missing", "Give the values, or the means with sizes and spreads.", "data")
    means = loaded["means"]
    faults = check_labels(loaded, len(means))
    spreads = ("ranges" in loaded) + ("sds" in loaded)
    if spreads == 2 or (need_spread and not spreads):
        faults.append(
            Fault("one-spread", "With means, give either ranges or sds (standard deviations).", ("data",))
        )
    if "sizes" not in loaded:
        faults.append(
            Fault("sizes-missing", "With means, give the sizes: one number, or one each.", ("data", "sizes"))
        )
        raise UnusableData(*faults)
    sizes = np.broadcast_to(loaded["sizes"], means.shape) if len(loaded["sizes"]) == 1 else loaded["sizes"]
    for name, array in (("ranges", loaded.get("ranges")), ("sds", loaded.get("sds")), ("sizes", sizes)):
        if array is not None and array.shape != means.shape:
            faults.append(
                Fault(
                    "unequal-length",
                    f"There are {len(array)} {name} for {len(means)} means; give one for each.",
                    ("data", name),
                )
            )
    if faults:
        raise UnusableData(*faults)
    if not spreads:
        return SubgroupSummary(means, sizes)
    name = "ranges" if "ranges" in loaded else "sds"
    spread = loaded[name]
    missing = np.isnan(spread) & ~np.isnan(means) & (sizes > 1)
    if bool(missing.any()):
        raise UnusableData(
            *(
                Fault(
                    "spread-missing", "A subgroup of two values or more needs its spread.", ("data", name, at)
                )
                for at in np.flatnonzero(missing)[:100].tolist()
            )
        )
    return SubgroupSummary(means, sizes, loaded.get("ranges"), loaded.get("sds"))


class _SubgroupFit(StudyRequest):
    data = f.Object(
        SubgroupData,
        metadata={"description": "The baseline; may be left out where both standards are given."},
    )
    standards = f.Object(StandardsRequest, metadata={"description": "Values known in advance."})
    subgroup_size = f.StrictInteger(
        least=2, most=LARGEST_SIZE, metadata={"description": "Only without data: values in a subgroup."}
    )


def _estimator(default: str) -> f.Choice:
    return f.Choice(
        *WITHIN,
        load_default=default,
        metadata={"description": f"Estimator of the within-subgroup sigma; `{default}` unless given."},
    )


class XbarRFit(_SubgroupFit):
    """A baseline of subgroups, for a chart of means and ranges."""

    sigma_estimator = _estimator("mean-range")


class XbarSFit(_SubgroupFit):
    """A baseline of subgroups, for a chart of means and standard deviations."""

    sigma_estimator = _estimator("mean-sd")


def subgroup_options(loaded: dict[str, Any]) -> SubgroupOptions:
    """The options of a chart of subgroups."""
    return SubgroupOptions(
        loaded["sigma_estimator"],
        limit_basis(loaded),
        rules_of(loaded.get("rules")),
        Standards(**loaded.get("standards", {})),
        loaded.get("subgroup_size"),
        exclusions(loaded),
        guarantee(loaded),
        loaded.get("joint_false_alarm_probability"),
        screening(loaded),
    )


REQUESTS = {
    "xbar-r": ChartRequest(XbarRFit, SubgroupData, subgroups, subgroup_options),
    "xbar-s": ChartRequest(XbarSFit, SubgroupData, subgroups, subgroup_options),
}
