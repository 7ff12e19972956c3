"""Requests of the chart of moving averages."""

from __future__ import annotations

from typing import Any

from ....spc.charts.moving_average import LONGEST_SPAN, MovingAverageOptions
from ... import fields as f
from ._memory import MemoryFit, PointData, points, source_of
from .common import ChartRequest


class MovingAverageFit(MemoryFit):
    """A baseline for a chart of moving averages."""

    span = f.StrictInteger(
        required=True,
        least=1,
        most=LONGEST_SPAN,
        metadata={"description": "Points in a window. Run lengths are computed for up to 4."},
    )
    sigma_multiple = f.StrictNumber(
        above=0,
        most=10,
        load_default=3.0,
        metadata={
            "description": "How many standard deviations of the average out the limits lie; 3 unless given."
        },
    )


def moving_average_options(loaded: dict[str, Any]) -> MovingAverageOptions:
    """The options of a chart of moving averages."""
    return MovingAverageOptions(source_of(loaded), loaded["span"], loaded["sigma_multiple"])


REQUESTS = {"moving-average": ChartRequest(MovingAverageFit, PointData, points, moving_average_options)}
