"""Requests of the charts of several variables."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from marshmallow import Schema

from ....spc.charts.multivariate import USUAL_FALSE_ALARM, TSquaredOptions
from ....spc.charts.vectors import MOST_VARIABLES, VectorStandards
from ....spc.data import Vectors
from ....spc.errors import Fault, UnusableData
from ... import fields as f
from ...tables import Columns, Read, Table
from ..common import IDS, TIMES, check_labels
from .common import AnyFitRequest, ChartRequest, exclusions

LARGEST_SUBGROUP = 1000

_NAMES: dict[str, Any] = {
    "required": True,
    "min_items": 2,
    "max_items": MOST_VARIABLES,
    "min_length": 1,
    "max_length": 80,
    "metadata": {"description": "Names of the variables, in the order of the columns; no two alike."},
}


class _VectorColumns(Columns):
    """Variables in columns. A subgroup's id and time stand in each of its rows, for it has but one."""

    def read(self, table: Table, shape: Schema, options: Mapping[str, Any]) -> Read:
        made = super().read(table, shape, options)
        size = options.get("data.subgroup_size")
        if type(size) is int and 1 < size <= LARGEST_SUBGROUP:
            for member in ("ids", "times"):
                labels = made.data.get(member, [])
                own = labels[::size]
                if labels and labels == [label for label in own for _ in range(size)]:
                    made.data[member] = own
                    made.places["data", member] = [(2 + at * size, member[:-1]) for at in range(len(own))]
        return made


class VectorData(f.RequestShape):
    """Several variables of each piece, in time order."""

    table = _VectorColumns({"id": "ids", "time": "times"}, rows_of="values", names="variables")
    variables = f.StringList(**_NAMES)
    values = f.NumberTable(
        required=True,
        nullable=True,
        min_columns=2,
        max_columns=MOST_VARIABLES,
        metadata={
            "description": "A row a piece, a column a variable, each in its own unit; null is a missing value. A "
            "point that lacks one, be it an observation or a whole subgroup, is a gap that keeps its place."
        },
    )
    subgroup_size = f.StrictInteger(
        least=1,
        most=LARGEST_SUBGROUP,
        load_default=1,
        metadata={
            "description": "Successive rows that form a subgroup, and so a point; 1, single observations, unless "
            "given."
        },
    )
    ids = f.StringList(**IDS)
    times = f.TimeList(**TIMES)


def vectors(loaded: dict[str, Any]) -> Vectors:
    """Several variables as posted. Raises UnusableData for parts that do not fit each other."""
    names, values, size = tuple(loaded["variables"]), loaded["values"], loaded["subgroup_size"]
    faults = _repeated(names, ("data", "variables"))
    if values.shape[1] != len(names):
        faults.append(
            Fault(
                "unequal-length",
                f"There are {values.shape[1]} numbers in a row for {len(names)} variables; give one for each.",
                ("data", "values"),
            )
        )
    points, left = divmod(len(values), size)
    if left:
        faults.append(
            Fault(
                "incomplete-subgroup",
                f"{len(values)} rows do not make whole subgroups of {size}; fill a missing piece with nulls.",
                ("data", "subgroup_size"),
            )
        )
    else:
        faults += check_labels(loaded, points)
    if faults:
        raise UnusableData(*faults)
    return Vectors(values if size == 1 else values.reshape(points, size, -1), names)


def _repeated(names: tuple[str, ...], where: tuple[str, ...]) -> list[Fault]:
    return [
        Fault("named-twice", f"The variable {name} is named twice.", (*where, at))
        for at, name in enumerate(names)
        if name in names[:at]
    ]


class VectorStandardsRequest(f.RequestShape):
    """Mean and covariance known in advance; both replace their estimates."""

    variables = f.StringList(**{**_NAMES, "min_items": 1})
    mean = f.NumberList(
        required=True,
        max_items=MOST_VARIABLES,
        metadata={"description": "Mean of each variable, in its own unit."},
    )
    covariance = f.NumberTable(
        required=True,
        nullable=False,
        max_rows=MOST_VARIABLES,
        max_columns=MOST_VARIABLES,
        metadata={
            "description": "Covariance matrix of single pieces: a row and a column a variable; symmetric."
        },
    )


def vector_standards(loaded: dict[str, Any] | None) -> VectorStandards | None:
    """Standards as posted. Raises UnusableData for names that are alike."""
    if loaded is None:
        return None
    names = tuple(loaded["variables"])
    if faults := _repeated(names, ("standards", "variables")):
        raise UnusableData(*faults)
    rows = np.asarray(loaded["covariance"])
    return VectorStandards(names, tuple(loaded["mean"].tolist()), tuple(map(tuple, rows.tolist())))


class VectorFit(AnyFitRequest):
    """What every fit of several variables takes."""

    data = f.Object(
        VectorData, metadata={"description": "The baseline; may be left out where the standards are given."}
    )
    covariance_estimator = f.Choice(
        "sample",
        "successive-differences",
        "pooled",
        metadata={
            "description": "`sample`: covariance of the whole baseline. `successive-differences`: of neighbours, "
            "which a lasting shift within the baseline does not widen. `pooled`: within subgroups. Unless given, "
            "`sample` for single observations and `pooled`, the only one, for subgroups."
        },
    )
    standards = f.Object(
        VectorStandardsRequest, metadata={"description": "Mean and covariance known in advance."}
    )
    subgroup_size = f.StrictInteger(
        least=1,
        most=LARGEST_SUBGROUP,
        metadata={"description": "Only without data: pieces in a subgroup; 1 for single observations."},
    )


class TSquaredFit(VectorFit):
    """A baseline of several variables, for a chart of distances."""

    false_alarm_probability = f.StrictNumber(
        least=1e-12,
        most=0.5,
        load_default=USUAL_FALSE_ALARM,
        metadata={
            "description": f"That a point in control lies beyond the limit; {USUAL_FALSE_ALARM} unless given, "
            "about what three sigma give a single normal statistic."
        },
    )


def t_squared_options(loaded: dict[str, Any]) -> TSquaredOptions:
    """The options of a ``t-squared`` chart."""
    return TSquaredOptions(
        loaded.get("covariance_estimator"),
        loaded["false_alarm_probability"],
        vector_standards(loaded.get("standards")),
        loaded.get("subgroup_size"),
        exclusions(loaded),
    )


REQUESTS = {"t-squared": ChartRequest(TSquaredFit, VectorData, vectors, t_squared_options)}
