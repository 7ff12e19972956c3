"""Requests of the charts of counts."""

from __future__ import annotations

from typing import Any

import numpy as np

from ....spc.charts.attributes import AttributeOptions
from ....spc.data import Counts
from ....spc.errors import Fault, UnusableData
from ... import fields as f
from ...tables import Columns
from ..common import IDS, TIMES, check_labels, rules_of
from .common import ChartRequest, FitRequest, exclusions, limit_basis

SMALLEST = 1e-15
"""Of an area, a proportion or a rate: below it a standardised count could not be represented."""


def _counts_field(text: str) -> f.CountList:
    return f.CountList(
        required=True,
        nullable=True,
        max_items=f.MAX_ROWS,
        metadata={"description": f"{text}; null where no sample was taken."},
    )


class UnitsData(f.RequestShape):
    """Nonconforming units among those inspected, sample by sample in time order."""

    table = Columns({"count": "counts", "inspected": "inspected", "id": "ids", "time": "times"})
    counts = _counts_field("Nonconforming units")
    inspected = f.OneOrMany(
        f.CountList(least=1, nullable=True, max_items=f.MAX_ROWS),
        required=True,
        metadata={"description": "Units inspected: one number for all samples, or one each."},
    )
    ids = f.StringList(**IDS)
    times = f.TimeList(**TIMES)


class EventsData(f.RequestShape):
    """Nonconformities over an area of opportunity, sample by sample in time order."""

    table = UnitsData.table
    counts = _counts_field("Nonconformities")
    inspected = f.OneOrMany(
        f.NumberList(least=SMALLEST, most=1e15, nullable=True, max_items=f.MAX_ROWS),
        required=True,
        metadata={"description": "Area of opportunity, in units of your choice: one number, or one each."},
    )
    ids = f.StringList(**IDS)
    times = f.TimeList(**TIMES)


class EventsOfOneAreaData(EventsData):
    """Nonconformities over one constant area of opportunity, in time order."""

    inspected = f.OneOrMany(
        f.NumberList(least=SMALLEST, most=1e15, nullable=True, max_items=f.MAX_ROWS),
        metadata={"description": "Area of opportunity where it is not 1; it must not vary on this chart."},
    )


def counts(loaded: dict[str, Any]) -> Counts:
    """Counts as posted. Raises UnusableData for unequal lengths."""
    found = loaded["counts"]
    faults = check_labels(loaded, len(found))
    inspected = loaded.get("inspected")
    if inspected is not None:
        if len(inspected) == 1:
            inspected = np.broadcast_to(inspected, found.shape)
        elif len(inspected) != len(found):
            faults.append(
                Fault(
                    "unequal-length",
                    f"There are {len(inspected)} entries for {len(found)} counts; give one number for all, or "
                    "one for each.",
                    ("data", "inspected"),
                )
            )
    if faults:
        raise UnusableData(*faults)
    return Counts(found, inspected)


class ProportionStandard(f.RequestShape):
    """A proportion known in advance."""

    proportion = f.StrictNumber(
        least=SMALLEST, below=1, metadata={"description": "Proportion nonconforming."}
    )


class RateStandard(f.RequestShape):
    """A rate known in advance."""

    rate = f.StrictNumber(
        least=SMALLEST, most=1e12, metadata={"description": "Nonconformities per unit of area."}
    )


_COUNT_BASELINE: dict[str, Any] = {
    "metadata": {"description": "The baseline; may be left out where a standard is given."},
}


class PFit(FitRequest):
    """A baseline of samples of any size, for a chart of proportions."""

    data = f.Object(UnitsData, **_COUNT_BASELINE)
    standards = f.Object(ProportionStandard, metadata={"description": "A proportion known in advance."})
    sample_size = f.StrictInteger(
        least=1,
        most=10**9,
        metadata={"description": "Only without data: units in every sample, if they agree."},
    )


class NpFit(PFit):
    """A baseline of samples of one size, for a chart of numbers nonconforming."""


class UFit(FitRequest):
    """A baseline of areas of any size, for a chart of rates."""

    data = f.Object(EventsData, **_COUNT_BASELINE)
    standards = f.Object(RateStandard, metadata={"description": "A rate known in advance."})
    sample_size = f.StrictNumber(
        least=SMALLEST,
        most=1e15,
        metadata={"description": "Only without data: area of every sample, if they agree."},
    )


class CFit(UFit):
    """A baseline of one constant area, for a chart of counts."""

    data = f.Object(EventsOfOneAreaData, **_COUNT_BASELINE)


def attribute_options(loaded: dict[str, Any]) -> AttributeOptions:
    """The options of a chart of counts."""
    standard = next(iter(loaded.get("standards", {}).values()), None)
    size = loaded.get("sample_size")
    return AttributeOptions(
        limit_basis(loaded),
        rules_of(loaded.get("rules")),
        standard,
        None if size is None else float(size),
        exclusions(loaded),
    )


REQUESTS = {
    "p": ChartRequest(PFit, UnitsData, counts, attribute_options),
    "np": ChartRequest(NpFit, UnitsData, counts, attribute_options),
    "c": ChartRequest(CFit, EventsOfOneAreaData, counts, attribute_options),
    "u": ChartRequest(UFit, EventsData, counts, attribute_options),
}
