"""Requests of the chart of single values."""

from __future__ import annotations

from typing import Any

from ....spc.charts.common import Standards
from ....spc.charts.individuals import IndividualsOptions
from ....spc.charts.nonnormal import NAMES
from ....spc.data import Individuals
from ....spc.errors import UnusableData
from ....spc.sigma import LARGEST_SPAN
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


class IndividualsData(f.RequestShape):
    """Single values in time order."""

    table = Columns({"value": "values", "id": "ids", "time": "times"})
    values = f.NumberList(
        required=True,
        nullable=True,
        max_items=f.MAX_ROWS,
        metadata={
            "description": "Values in the unit of the characteristic; null is a gap that keeps its place."
        },
    )
    ids = f.StringList(**IDS)
    times = f.TimeList(**TIMES)


def individuals(loaded: dict[str, Any]) -> Individuals:
    """Single values as posted."""
    if faults := check_labels(loaded, len(loaded["values"])):
        raise UnusableData(*faults)
    return Individuals(loaded["values"])


class IndividualsFit(StudyRequest):
    """A baseline of single values."""

    data = f.Object(
        IndividualsData,
        metadata={"description": "The baseline; may be left out where both standards are given."},
    )
    sigma_estimator = f.Choice(
        "mean-moving-range",
        "median-moving-range",
        load_default="mean-moving-range",
        metadata={"description": "Estimator of sigma; the median resists a few wild values."},
    )
    span = f.StrictInteger(
        least=2,
        most=LARGEST_SPAN,
        load_default=2,
        metadata={"description": "Successive values in a moving range; 2 unless given."},
    )
    distribution = f.Choice(
        *NAMES,
        "auto",
        load_default="normal",
        metadata={
            "description": "`normal` unless given. Another: limits are its quantiles, fitted by maximum likelihood, at "
            "the false-alarm probability of the limits chosen. `auto`: chosen by AICc among those that the "
            "Anderson-Darling test does not reject; the answer tells every one tried."
        },
    )
    standards = f.Object(StandardsRequest, metadata={"description": "Values known in advance."})


def individuals_options(loaded: dict[str, Any]) -> IndividualsOptions:
    """The options of a chart of single values."""
    return IndividualsOptions(
        loaded["sigma_estimator"],
        loaded["span"],
        limit_basis(loaded),
        rules_of(loaded.get("rules")),
        Standards(**loaded.get("standards", {})),
        exclusions(loaded),
        guarantee(loaded),
        loaded.get("joint_false_alarm_probability"),
        screening(loaded),
        loaded["distribution"],
    )


REQUESTS = {
    "individuals": ChartRequest(IndividualsFit, IndividualsData, individuals, individuals_options),
}
