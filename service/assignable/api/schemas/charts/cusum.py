"""Requests of the chart of cumulative sums."""

from __future__ import annotations

from typing import Any

from ....spc.charts.cusum import CusumOptions
from ....spc.runlength.memory import LARGEST_DECISION, LARGEST_REFERENCE
from ... import fields as f
from ._memory import MemoryFit, PointData, ShiftToDetect, detect_of, points, source_of
from .common import ChartRequest


class CusumFit(MemoryFit):
    """A baseline for a CUSUM chart, with its parameters or what it is to detect."""

    reference = f.StrictNumber(
        least=0,
        most=LARGEST_REFERENCE,
        metadata={
            "description": "Reference value k, in standard deviations of a point: half the shift to find, usually; "
            "with `decision`, instead of `detect`."
        },
    )
    decision = f.StrictNumber(
        above=0,
        most=LARGEST_DECISION,
        metadata={"description": "Decision interval h, in standard deviations of a point."},
    )
    head_start = f.StrictNumber(
        least=0,
        most=0.5,
        load_default=0.0,
        metadata={
            "description": "Where both sums start, as a fraction of the decision interval; 0 unless given, 0.5 for a "
            "quick answer right after a start."
        },
    )
    after_signal = f.Choice(
        "continue",
        "restart",
        load_default="continue",
        metadata={"description": "`continue`: the sums go on after a signal. `restart`: both start again."},
    )
    spread = f.StrictBoolean(
        load_default=False,
        metadata={
            "description": "Whether sums of spread are watched besides; they add false alarms of their own."
        },
    )
    detect = f.Object(
        ShiftToDetect, metadata={"description": "What the chart is designed for, instead of its parameters."}
    )


def cusum_options(loaded: dict[str, Any]) -> CusumOptions:
    """The options of a CUSUM chart."""
    return CusumOptions(
        source_of(loaded),
        loaded.get("reference"),
        loaded.get("decision"),
        loaded["head_start"],
        loaded["after_signal"],
        loaded["spread"],
        detect_of(loaded),
    )


REQUESTS = {"cusum": ChartRequest(CusumFit, PointData, points, cusum_options)}
