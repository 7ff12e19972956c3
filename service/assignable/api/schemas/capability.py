"""Shapes of capability requests and answers."""

from __future__ import annotations

from typing import Any

from ...spc.capability.indices import (
    LARGEST_COUNT,
    LEAST_CONFIDENCE,
    MOST_CONFIDENCE,
    Capability,
    MachineCapability,
    NormalSummary,
)
from ...spc.capability.specification import Specification
from ...spc.capability.study import MOVING, CapabilityDiagnostics
from ...spc.data import Floats
from ...spc.errors import UnusableParameter
from ...spc.sigma import WITHIN, SigmaEstimate
from .. import fields as f
from ..contract import Provenance
from . import derive
from .common import CAUTIONS, CautionAnswer, Characteristic


class SpecificationRequest(f.RequestShape):
    """What the drawing or the monograph asks; at least one limit. A value on a limit conforms."""

    lower = f.StrictNumber(
        allow_none=True, metadata={"description": "Lower limit, in the characteristic's unit."}
    )
    upper = f.StrictNumber(
        allow_none=True, metadata={"description": "Upper limit, in the characteristic's unit."}
    )
    target = f.StrictNumber(
        allow_none=True, metadata={"description": "The value aimed at, strictly between the limits given."}
    )


class MeasurementData(f.RequestShape):
    """Measurements in time order."""

    values = f.ListOrTable(
        f.NumberList(nullable=True),
        f.NumberTable(nullable=True, ragged=True, min_columns=0),
        required=True,
        metadata={
            "description": "Rows of rational subgroups, or one list of single values; null is a missing value."
        },
    )


class SummaryRequest(f.RequestShape):
    """What the indices need, where the values themselves were not kept."""

    mean = f.StrictNumber(required=True, metadata={"description": "Mean of all values."})
    count = f.StrictInteger(
        required=True, least=2, most=LARGEST_COUNT, metadata={"description": "How many values there were."}
    )
    total_sd = f.StrictNumber(
        above=0, metadata={"description": "Overall standard deviation, divisor count - 1."}
    )
    within_sigma = f.StrictNumber(above=0, metadata={"description": "Within-subgroup standard deviation."})
    within_degrees_of_freedom = f.StrictNumber(
        least=0.1,
        most=LARGEST_COUNT,
        metadata={"description": "Its degrees of freedom; needed with within_sigma."},
    )


class MeasurementsRequest(f.RequestShape):
    """Measurements, or a summary of them, against a specification."""

    characteristic = f.Object(Characteristic, metadata={"description": "What was measured."})
    data = f.Object(MeasurementData, metadata={"description": "The measurements; either these or a summary."})
    summary = f.Object(SummaryRequest, metadata={"description": "Instead of the measurements."})
    specification = f.Object(
        SpecificationRequest, required=True, metadata={"description": "What the characteristic must meet."}
    )
    sigma_estimator = f.Choice(
        *WITHIN,
        *MOVING,
        metadata={
            "description": "Estimator of the within-subgroup sigma: `pooled-sd` for rows and "
            "`mean-moving-range` for single values unless given."
        },
    )
    confidence = f.StrictNumber(
        above=LEAST_CONFIDENCE,
        most=MOST_CONFIDENCE,
        load_default=0.95,
        metadata={"description": "Of each interval by itself; 0.95 unless given."},
    )
    short_run = f.StrictBoolean(
        load_default=False,
        metadata={"description": "Whether the values are a short run of one machine: adds Cm and Cmk."},
    )


def specification_of(loaded: dict[str, Any]) -> Specification:
    """The specification as posted."""
    return Specification(loaded.get("lower"), loaded.get("upper"), loaded.get("target"))


def measurements_of(loaded: dict[str, Any]) -> Floats | NormalSummary:
    """The values (n,) or (m, n), or their summary. Raises UnusableParameter unless one of them is given."""
    if ("data" in loaded) == ("summary" in loaded):
        raise UnusableParameter.of(
            "data-or-summary",
            "Give either the data or a summary of it.",
            "summary" if "data" in loaded else "data",
        )
    if "data" in loaded:
        values: Floats = loaded["data"]["values"]
        return values
    given = loaded["summary"]
    within = None
    if ("within_sigma" in given) != ("within_degrees_of_freedom" in given):
        raise UnusableParameter.of(
            "freedom-missing", "within_sigma and within_degrees_of_freedom go together.", "summary"
        )
    if "within_sigma" in given:
        within = SigmaEstimate(given["within_sigma"], given["within_degrees_of_freedom"], "given")
    total = None
    if "total_sd" in given:
        total = SigmaEstimate(given["total_sd"], given["count"] - 1.0, "overall-sd")
    return NormalSummary(given["mean"], within, total, given["count"])


class MeasurementsAnswer(f.AnswerShape):
    """Indices with their intervals, and the share of nonconforming product."""

    status = f.Choice(
        "established",
        "provisional",
        "not-assessed",
        required=True,
        metadata={
            "description": "`provisional` where the values themselves show a process that is not in control; "
            "`not-assessed` from a summary or too few values."
        },
    )
    capability = f.Object(
        derive.answer(Capability),
        required=True,
        metadata={"description": "Process capability and performance."},
    )
    machine = f.Object(
        derive.answer(MachineCapability),
        required=True,
        allow_none=True,
        metadata={"description": "Cm and Cmk, where `short_run` asks for them; else null."},
    )
    diagnostics = f.Object(
        derive.answer(CapabilityDiagnostics),
        required=True,
        allow_none=True,
        metadata={"description": "What the values show about themselves; null from a summary."},
    )
    cautions = f.ObjectList(CautionAnswer, **CAUTIONS)
    provenance = f.Object(Provenance, required=True, metadata={"description": "What computed this answer."})
