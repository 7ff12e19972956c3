"""Requests of the charts of rare events."""

from __future__ import annotations

from typing import Any

from ....spc.charts.rare import (
    LEAST_SHAPE,
    MOST_SHAPE,
    OpportunityOptions,
    TimeOptions,
)
from ....spc.data import Intervals
from ....spc.errors import UnusableData
from ... import fields as f
from ...tables import Columns
from ..common import IDS, TIMES, check_labels, rules_of
from .common import USUAL_FALSE_ALARM, BaselineRequest, ChartRequest, FitRequest, exclusions, limit_basis


class OpportunitiesData(f.RequestShape):
    """Opportunities between successive events, in the order of the events."""

    table = Columns({"interval": "intervals", "id": "ids", "time": "times"})
    intervals = f.CountList(
        required=True,
        nullable=True,
        max_items=f.MAX_ROWS,
        metadata={
            "description": "Opportunities from one event to the next, counted from `starts_at`; null is a gap that "
            "keeps its place."
        },
    )
    ids = f.StringList(**IDS)
    times = f.TimeList(**TIMES)


class TimesData(f.RequestShape):
    """Times between successive events, in the order of the events."""

    table = OpportunitiesData.table
    intervals = f.NumberList(
        required=True,
        least=0,
        nullable=True,
        max_items=f.MAX_ROWS,
        metadata={
            "description": "Time from one event to the next, in the unit of the characteristic; null is a gap that "
            "keeps its place."
        },
    )
    ids = f.StringList(**IDS)
    times = f.TimeList(**TIMES)


def intervals(loaded: dict[str, Any]) -> Intervals:
    """Intervals as posted."""
    if faults := check_labels(loaded, len(loaded["intervals"])):
        raise UnusableData(*faults)
    return Intervals(loaded["intervals"])


class EventProbability(f.RequestShape):
    """A probability known in advance."""

    event_probability = f.StrictNumber(
        least=1e-12, below=1, metadata={"description": "Probability of an event at an opportunity."}
    )


class GFit(FitRequest):
    """A baseline of opportunities between events."""

    data = f.Object(
        OpportunitiesData,
        metadata={"description": "The baseline; may be left out where a standard is given."},
    )
    standards = f.Object(EventProbability, metadata={"description": "A probability known in advance."})
    starts_at = f.StrictInteger(
        least=0,
        most=1,
        load_default=0,
        metadata={
            "description": "The interval of two events in a row: 0 where the units between two events are counted, 1 "
            "where the count includes the second event."
        },
    )
    estimator = f.Choice(
        "maximum-likelihood",
        "unbiased",
        load_default="maximum-likelihood",
        metadata={
            "description": "Of the probability of an event, from n intervals y counted from 0. "
            "`maximum-likelihood`: 1/(1 + mean of y). `unbiased`: (n - 1)/(n - 1 + sum of y)."
        },
    )


class TimeStandards(f.RequestShape):
    """Values known in advance; each replaces its estimate."""

    mean = f.StrictNumber(
        least=1e-300,
        metadata={"description": "Mean time between events, in the unit of the characteristic."},
    )
    shape = f.StrictNumber(
        least=LEAST_SHAPE, most=MOST_SHAPE, metadata={"description": "Shape of the Weibull distribution."}
    )


class TFit(BaselineRequest):
    """A baseline of times between events."""

    data = f.Object(
        TimesData, metadata={"description": "The baseline; may be left out where standards are given."}
    )
    distribution = f.Choice(
        "exponential",
        "weibull",
        load_default="exponential",
        metadata={
            "description": "`exponential`: events at a constant rate. `weibull`: with a shape besides, by maximum "
            "likelihood unless given as a standard."
        },
    )
    false_alarm_probability = f.StrictNumber(
        least=1e-12,
        most=0.5,
        load_default=USUAL_FALSE_ALARM,
        metadata={
            "description": "That a point in control lies outside the limits, half beyond each; "
            f"{USUAL_FALSE_ALARM} unless given."
        },
    )
    standards = f.Object(TimeStandards, metadata={"description": "Values known in advance."})


def opportunity_options(loaded: dict[str, Any]) -> OpportunityOptions:
    """The options of a chart of opportunities between events."""
    return OpportunityOptions(
        limit_basis(loaded),
        loaded["estimator"],
        loaded["starts_at"],
        rules_of(loaded.get("rules")),
        loaded.get("standards", {}).get("event_probability"),
        exclusions(loaded),
    )


def time_options(loaded: dict[str, Any]) -> TimeOptions:
    """The options of a chart of times between events."""
    given = loaded.get("standards", {})
    return TimeOptions(
        loaded["distribution"],
        loaded["false_alarm_probability"],
        rules_of(loaded.get("rules")),
        given.get("mean"),
        given.get("shape"),
        exclusions(loaded),
    )


REQUESTS = {
    "g": ChartRequest(GFit, OpportunitiesData, intervals, opportunity_options),
    "t": ChartRequest(TFit, TimesData, intervals, time_options),
}
