"""Requests of the charts of dispersed counts."""

from __future__ import annotations

from typing import Any

from ....spc.charts.dispersed import DispersedOptions
from ... import fields as f
from ..common import rules_of
from .attributes import SMALLEST, EventsData, ProportionStandard, RateStandard, UnitsData, counts
from .common import BaselineRequest, ChartRequest, exclusions

_SIGMA_Z: dict[str, Any] = {
    "least": 1e-6,
    "most": 1e6,
    "metadata": {
        "description": "Known standard deviation of the standardised points; 1 is variation by chance alone."
    },
}


class DispersedProportionStandards(ProportionStandard):
    """Values known in advance; each replaces its estimate."""

    sigma_z = f.StrictNumber(**_SIGMA_Z)


class DispersedRateStandards(RateStandard):
    """Values known in advance; each replaces its estimate."""

    sigma_z = f.StrictNumber(**_SIGMA_Z)


class DispersedFitRequest(BaselineRequest):
    """A baseline of dispersed counts."""

    sigma_multiple = f.StrictNumber(
        above=0,
        most=10,
        load_default=3.0,
        metadata={"description": "How many scaled sigma out the limits lie; 3 unless given."},
    )


class PPrimeFit(DispersedFitRequest):
    """A baseline of samples of any size, for a chart of dispersed proportions."""

    data = f.Object(
        UnitsData,
        metadata={"description": "The baseline; may be left out where both standards are given."},
    )
    standards = f.Object(DispersedProportionStandards, metadata={"description": "Values known in advance."})
    sample_size = f.StrictInteger(
        least=1,
        most=10**9,
        metadata={"description": "Only without data: units in every sample, if they agree."},
    )


class UPrimeFit(DispersedFitRequest):
    """A baseline of areas of any size, for a chart of dispersed rates."""

    data = f.Object(
        EventsData,
        metadata={"description": "The baseline; may be left out where both standards are given."},
    )
    standards = f.Object(DispersedRateStandards, metadata={"description": "Values known in advance."})
    sample_size = f.StrictNumber(
        least=SMALLEST,
        most=1e15,
        metadata={"description": "Only without data: area of every sample, if they agree."},
    )


def dispersed_options(loaded: dict[str, Any]) -> DispersedOptions:
    """The options of a chart of dispersed counts."""
    given = loaded.get("standards", {})
    size = loaded.get("sample_size")
    return DispersedOptions(
        loaded["sigma_multiple"],
        rules_of(loaded.get("rules")),
        given.get("proportion", given.get("rate")),
        given.get("sigma_z"),
        None if size is None else float(size),
        exclusions(loaded),
    )


REQUESTS = {
    "p-prime": ChartRequest(PPrimeFit, UnitsData, counts, dispersed_options),
    "u-prime": ChartRequest(UPrimeFit, EventsData, counts, dispersed_options),
}
