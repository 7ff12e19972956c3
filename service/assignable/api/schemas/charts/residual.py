"""Requests of the chart of residuals."""

from __future__ import annotations

from typing import Any

from ....spc.charts.residual import LARGEST_ORDER, USUAL_BOUND, KnownModel, ResidualOptions
from ... import fields as f
from ..common import rules_of
from .common import ChartRequest, FitRequest, exclusions, limit_basis
from .individuals import IndividualsData, individuals


class ModelRequest(f.RequestShape):
    """A model known in advance."""

    mean = f.StrictNumber(
        required=True, metadata={"description": "Mean of the process, in the unit of the characteristic."}
    )
    coefficients = f.NumberList(
        required=True,
        least=-1e6,
        most=1e6,
        min_items=0,
        max_items=LARGEST_ORDER,
        metadata={"description": "φ₁ … φₚ, of the nearest value first."},
    )
    sigma = f.StrictNumber(
        required=True,
        least=1e-140,
        most=1e150,
        metadata={"description": "Standard deviation of the residuals, in the unit of the characteristic."},
    )


class ResidualFit(FitRequest):
    """A baseline of values that depend on those before them."""

    data = f.Object(
        IndividualsData,
        metadata={"description": "The baseline; may be left out where the model is given."},
    )
    order = f.StrictInteger(
        least=0,
        most=LARGEST_ORDER,
        metadata={
            "description": "How many values before each the model looks at; chosen by AICc unless given."
        },
    )
    largest_order = f.StrictInteger(
        least=1,
        most=LARGEST_ORDER,
        load_default=USUAL_BOUND,
        metadata={"description": f"The largest order to choose from; {USUAL_BOUND} unless given."},
    )
    standards = f.Object(ModelRequest, metadata={"description": "A model known in advance."})


def residual_options(loaded: dict[str, Any]) -> ResidualOptions:
    """The options of a chart of residuals."""
    model = loaded.get("standards")
    known = None
    if model is not None:
        known = KnownModel(model["mean"], tuple(model["coefficients"].tolist()), model["sigma"])
    return ResidualOptions(
        loaded.get("order"),
        loaded["largest_order"],
        known,
        limit_basis(loaded),
        rules_of(loaded.get("rules")),
        exclusions(loaded),
    )


REQUESTS = {
    "residual": ChartRequest(ResidualFit, IndividualsData, individuals, residual_options),
}
