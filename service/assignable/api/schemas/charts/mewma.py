"""Requests of the chart of weighted averages of several variables."""

from __future__ import annotations

from typing import Any

from ....spc.charts.mewma import LARGEST_LIMIT, USUAL_ARL, USUAL_SMOOTHING, MewmaOptions
from ....spc.runlength.mewma import (
    FEW_VARIABLES,
    LONGEST_ARL,
    SHORTEST_ARL,
    SMALLEST_SMOOTHING,
    SMALLEST_SMOOTHING_EXACT,
    SMALLEST_SMOOTHING_EXACT_OF_MANY,
)
from ... import fields as f
from .common import ChartRequest, exclusions
from .multivariate import VectorData, VectorFit, vector_standards, vectors


class MewmaFit(VectorFit):
    """A baseline of several variables, for a chart of weighted averages."""

    smoothing = f.StrictNumber(
        least=SMALLEST_SMOOTHING,
        most=1,
        load_default=USUAL_SMOOTHING,
        metadata={
            "description": f"Weight of the newest point, λ; {USUAL_SMOOTHING} unless given. Smaller finds smaller "
            f"shifts; with `time-varying` at least {SMALLEST_SMOOTHING_EXACT}, and "
            f"{SMALLEST_SMOOTHING_EXACT_OF_MANY} for more than {FEW_VARIABLES} variables."
        },
    )
    limit_covariance = f.Choice(
        "asymptotic",
        "time-varying",
        load_default="asymptotic",
        metadata={
            "description": "`asymptotic`: distances under the covariance the averages settle at. `time-varying`: "
            "under the exact one of each since the start, which finds early shifts sooner."
        },
    )
    in_control_arl = f.StrictNumber(
        least=SHORTEST_ARL,
        most=LONGEST_ARL,
        metadata={
            "description": "Average number of points between false alarms that the limit is to give; "
            f"{USUAL_ARL:g} unless given."
        },
    )
    limit = f.StrictNumber(
        above=0, most=LARGEST_LIMIT, metadata={"description": "The limit h itself, instead."}
    )


def mewma_options(loaded: dict[str, Any]) -> MewmaOptions:
    """The options of a ``mewma`` chart."""
    return MewmaOptions(
        loaded["smoothing"],
        loaded["limit_covariance"],
        loaded.get("in_control_arl"),
        loaded.get("limit"),
        loaded.get("covariance_estimator"),
        vector_standards(loaded.get("standards")),
        loaded.get("subgroup_size"),
        exclusions(loaded),
    )


REQUESTS = {"mewma": ChartRequest(MewmaFit, VectorData, vectors, mewma_options)}
