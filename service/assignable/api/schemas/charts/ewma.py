"""Requests of the chart of exponentially weighted moving averages."""

from __future__ import annotations

from typing import Any

from ....spc.charts.ewma import EwmaOptions
from ....spc.runlength.memory import LARGEST_LIMIT, SMALLEST_SMOOTHING
from ... import fields as f
from ._memory import MemoryFit, PointData, ShiftToDetect, detect_of, points, source_of
from .common import ChartRequest


class EwmaFit(MemoryFit):
    """A baseline for an EWMA chart, with its parameters or what it is to detect."""

    smoothing = f.StrictNumber(
        least=SMALLEST_SMOOTHING,
        most=1,
        metadata={"description": "Weight of the newest point, λ; with `limit`, instead of `detect`."},
    )
    limit = f.StrictNumber(
        above=0,
        most=LARGEST_LIMIT,
        metadata={"description": "Limits lie this many standard deviations of the average out, L."},
    )
    limit_variance = f.Choice(
        "time-varying",
        "asymptotic",
        load_default="time-varying",
        metadata={
            "description": "`time-varying`: limits widen with the exact variance of each average since the start. "
            "`asymptotic`: limits at the variance it settles at."
        },
    )
    detect = f.Object(
        ShiftToDetect, metadata={"description": "What the chart is designed for, instead of its parameters."}
    )


def ewma_options(loaded: dict[str, Any]) -> EwmaOptions:
    """The options of an EWMA chart."""
    return EwmaOptions(
        source_of(loaded),
        loaded.get("smoothing"),
        loaded.get("limit"),
        loaded["limit_variance"],
        detect_of(loaded),
    )


REQUESTS = {"ewma": ChartRequest(EwmaFit, PointData, points, ewma_options)}
