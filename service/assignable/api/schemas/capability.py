"""Shapes of capability requests and answers."""

from __future__ import annotations

from typing import Any

import numpy as np

from ...spc.capability.attributes import AttributeCapability
from ...spc.capability.indices import (
    LARGEST_COUNT,
    LEAST_CONFIDENCE,
    MOST_CONFIDENCE,
    Capability,
    MachineCapability,
    NormalSummary,
)
from ...spc.capability.joint import MOST_CHARACTERISTICS, MOST_ITEMS, JointCapability
from ...spc.capability.nonnormal import CHOICES, DistributionChoice, QuantileCapability
from ...spc.capability.specification import Specification
from ...spc.capability.study import MOVING, CapabilityDiagnostics
from ...spc.capability.uncertainty import (
    GlobalRisks,
    GuardedLimits,
    ProcessDistribution,
    ProductCapability,
    ResultConformance,
    product_distribution,
)
from ...spc.data import Floats
from ...spc.diagnostics import Dispersion
from ...spc.errors import UnusableData, UnusableParameter
from ...spc.sigma import WITHIN, SigmaEstimate
from .. import fields as f
from ..tables import Columns
from . import derive
from .common import CAUTIONS, PROVENANCE, CautionAnswer, Characteristic


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
    natural_lower = f.StrictNumber(
        allow_none=True,
        metadata={
            "description": "Bound that no value can be below by its nature, such as 0 for a roundness; a limit there "
            "asks for nothing, and distributions on a half line start there."
        },
    )
    natural_upper = f.StrictNumber(
        allow_none=True, metadata={"description": "Bound that no value can be above by its nature."}
    )


class MeasurementData(f.RequestShape):
    """Measurements in time order."""

    table = Columns({"value": "values", "below": "below"}, rows_of="values")
    values = f.ListOrTable(
        f.NumberList(nullable=True),
        f.NumberTable(nullable=True, ragged=True, min_columns=0),
        required=True,
        metadata={
            "description": "Rows of rational subgroups, or one list of single values; null is a missing value."
        },
    )
    below = f.NumberList(
        nullable=True,
        metadata={
            "description": "Beside a list of single values, for each result that a laboratory reports as below a "
            "limit, such as <0.05: that limit, where `values` holds null; null everywhere else. Such results enter "
            "through the likelihood, never as a part of the limit."
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


def _confidence() -> f.StrictNumber:
    return f.StrictNumber(
        above=LEAST_CONFIDENCE,
        most=MOST_CONFIDENCE,
        load_default=0.95,
        metadata={"description": "Of each interval by itself; 0.95 unless given."},
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
    distribution = f.Choice(
        *CHOICES,
        load_default="normal",
        metadata={
            "description": "Distribution of the characteristic: `normal` unless given; another, whatever the evidence; "
            "`empirical` for the values' own quantiles; `auto` to choose by the values, the evidence in the answer."
        },
    )
    confidence = _confidence()
    short_run = f.StrictBoolean(
        load_default=False,
        metadata={"description": "Whether the values are a short run of one machine: adds Cm and Cmk."},
    )


def specification_of(loaded: dict[str, Any]) -> Specification:
    """The specification as posted."""
    return Specification(
        loaded.get("lower"),
        loaded.get("upper"),
        loaded.get("target"),
        loaded.get("natural_lower"),
        loaded.get("natural_upper"),
    )


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
    choice = f.Object(
        derive.answer(DistributionChoice),
        required=True,
        metadata={"description": "Which distribution the figures rest on, and why."},
    )
    capability = f.Object(
        derive.answer(Capability),
        required=True,
        allow_none=True,
        metadata={
            "description": "Process capability and performance of a normal characteristic; null where another "
            "distribution was used, or there are results below a limit."
        },
    )
    quantiles = f.Object(
        derive.answer(QuantileCapability),
        required=True,
        allow_none=True,
        metadata={
            "description": "Performance by the quantiles of the distribution used; null where `capability` is given."
        },
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
    provenance = PROVENANCE


# Counted characteristics ----------------------------------------------------------------------------


class CountedData(f.RequestShape):
    """Counts in time order, and what was inspected for each."""

    table = Columns({"count": "counts", "inspected": "inspected"})
    counts = f.CountList(
        nullable=True,
        most=10**12,
        max_items=f.MAX_ROWS,
        required=True,
        metadata={"description": "Nonconforming units, or nonconformities, of each sample; null for a gap."},
    )
    inspected = f.OneOrMany(
        f.NumberList(least=1e-6, most=1e12, nullable=True, max_items=f.MAX_ROWS),
        required=True,
        metadata={
            "description": "Units inspected, or area of opportunity: one number for all samples, or one for each."
        },
    )


class AttributeCapabilityRequest(f.RequestShape):
    """Counts whose capability is asked for."""

    characteristic = f.Object(Characteristic, metadata={"description": "What was counted."})
    kind = f.Choice(
        "nonconforming-units",
        "nonconformities",
        required=True,
        metadata={
            "description": "`nonconforming-units`: of the units inspected, so many do not conform. `nonconformities`: "
            "so many faults, of which a unit may have several."
        },
    )
    data = f.Object(CountedData, required=True, metadata={"description": "The counts."})
    confidence = _confidence()


def counted(loaded: dict[str, Any]) -> tuple[Floats, Floats]:
    """Counts and what was inspected, (m,) each. Raises UnusableData ``unequal-length``."""
    counts, inspected = loaded["counts"], loaded["inspected"]
    if inspected.size not in (1, counts.size):
        raise UnusableData.of(
            "unequal-length",
            f"There are {counts.size} counts and {inspected.size} samples inspected.",
            "data",
            "inspected",
        )
    return counts.astype(float), np.broadcast_to(inspected.astype(float), counts.shape)


class AttributeCapabilityAnswer(f.AnswerShape):
    """Rate of a counted characteristic, and the index that it amounts to."""

    status = f.Choice(
        "established",
        "provisional",
        "not-assessed",
        required=True,
        metadata={
            "description": "`provisional` where the counts' own chart shows a process that is not in control; "
            "`not-assessed` where they cannot be charted, as without any event."
        },
    )
    capability = f.Object(
        derive.answer(AttributeCapability), required=True, metadata={"description": "Rate and index."}
    )
    dispersion = f.Object(
        derive.answer(Dispersion),
        required=True,
        allow_none=True,
        metadata={
            "description": "Spread of the counts against the law their interval supposes; null where not computable."
        },
    )
    cautions = f.ObjectList(CautionAnswer, **CAUTIONS)
    provenance = PROVENANCE


# Several characteristics ----------------------------------------------------------------------------


class SpecifiedCharacteristic(f.RequestShape):
    """One of several characteristics of a product."""

    name = f.StrictString(metadata={"description": "Name of the characteristic."})
    unit = f.StrictString(max_length=40, metadata={"description": "Unit of its values, as it is written."})
    specification = f.Object(
        SpecificationRequest, required=True, metadata={"description": "What the characteristic must meet."}
    )


class ItemData(f.RequestShape):
    """Values of several characteristics, measured on the same items."""

    values = f.NumberTable(
        nullable=True,
        max_rows=MOST_ITEMS,
        max_columns=MOST_CHARACTERISTICS,
        required=True,
        metadata={
            "description": "A row for each item, with its values in the order of the characteristics; null is missing, "
            "and leaves the item out."
        },
    )


class SeveralRequest(f.RequestShape):
    """Several characteristics of one product, measured on the same items."""

    characteristics = f.ObjectList(
        SpecifiedCharacteristic,
        min_items=2,
        max_items=MOST_CHARACTERISTICS,
        required=True,
        metadata={"description": "The characteristics, in the order of the columns."},
    )
    data = f.Object(ItemData, required=True, metadata={"description": "The measurements."})
    confidence = _confidence()


class SeveralAnswer(f.AnswerShape):
    """The share of product that conforms in all its characteristics."""

    joint = f.Object(
        derive.answer(JointCapability),
        required=True,
        metadata={"description": "The share, what each characteristic does to it, and its interval."},
    )
    cautions = f.ObjectList(CautionAnswer, **CAUTIONS)
    provenance = PROVENANCE


# Conformance under measurement uncertainty ----------------------------------------------------------


class ProcessRequest(f.RequestShape):
    """What is known of the process that made the items, as a normal distribution."""

    mean = f.StrictNumber(required=True, metadata={"description": "Mean of the process."})
    sd = f.StrictNumber(
        required=True, least=1e-290, metadata={"description": "Standard deviation, of what `of` says."}
    )
    of = f.Choice(
        "measured-values",
        "product",
        load_default="measured-values",
        metadata={
            "description": "Whether the standard deviation holds the measurement's own share (`measured-values`, "
            "unless given), which is then taken out, or is the product's alone."
        },
    )
    count = f.StrictInteger(
        least=2,
        most=LARGEST_COUNT,
        metadata={
            "description": "How many measured values the standard deviation rests on; for its interval."
        },
    )


class AcceptanceRequest(f.RequestShape):
    """Limits for measured values within which items are accepted."""

    lower = f.StrictNumber(allow_none=True, metadata={"description": "Lower limit of acceptance."})
    upper = f.StrictNumber(allow_none=True, metadata={"description": "Upper limit of acceptance."})


class ConformanceRequest(f.RequestShape):
    """Measured values, their uncertainty, and what they must meet."""

    characteristic = f.Object(Characteristic, metadata={"description": "What was measured."})
    specification = f.Object(
        SpecificationRequest, required=True, metadata={"description": "What the characteristic must meet."}
    )
    standard_uncertainty = f.StrictNumber(
        required=True,
        least=1e-290,
        metadata={
            "description": "Of one measured value, in the characteristic's unit; half an expanded one of k = 2."
        },
    )
    results = f.NumberList(
        max_items=10_000,
        metadata={"description": "Measured values that are to be judged, one for each item."},
    )
    process = f.Object(
        ProcessRequest,
        metadata={
            "description": "What is known of the process beforehand; needed for the risks of a plan. Without it a "
            "result speaks for itself alone."
        },
    )
    use_process = f.StrictBoolean(
        load_default=True,
        metadata={
            "description": "Whether what is known of the process also enters the probabilities of the single results "
            "and the acceptance limits; yes unless given."
        },
    )
    verdict_risk = f.StrictNumber(
        above=0,
        below=0.5,
        load_default=0.05,
        metadata={"description": "Largest risk of a wrong verdict on a result; 0.05 unless given."},
    )
    consumer_risk = f.StrictNumber(
        least=1e-12,
        below=0.5,
        metadata={
            "description": "Asks for acceptance limits: the largest probability that an item accepted on such a limit "
            "does not conform."
        },
    )
    acceptance = f.Object(
        AcceptanceRequest,
        metadata={
            "description": "The plan whose risks are asked for; unless given, that of the acceptance limits computed, "
            "or acceptance within the specification."
        },
    )


def process_of(loaded: dict[str, Any]) -> ProcessDistribution | None:
    """The product's own distribution as posted; ``None`` where nothing is known of it."""
    given = loaded.get("process")
    if given is None:
        return None
    if given["of"] == "product":
        return ProcessDistribution(given["mean"], given["sd"])
    return product_distribution(given["mean"], given["sd"], loaded["standard_uncertainty"])


class ConformanceAnswer(f.AnswerShape):
    """What measured values say of conformance, and how often a plan of inspection is wrong."""

    results = f.ObjectList(
        derive.answer(ResultConformance),
        required=True,
        metadata={"description": "Each result, in their order."},
    )
    acceptance_limits = f.Object(
        derive.answer(GuardedLimits),
        required=True,
        allow_none=True,
        metadata={
            "description": "Limits for measured values at the consumer's risk stated; null where none was stated, or "
            "no measured value is that safe."
        },
    )
    plan = f.Object(
        derive.answer(GlobalRisks),
        required=True,
        allow_none=True,
        metadata={
            "description": "Risks of the plan over all product; null where nothing is known of the process."
        },
    )
    product = f.Object(
        derive.answer(ProductCapability),
        required=True,
        allow_none=True,
        metadata={
            "description": "The product's own capability, the measurement's share taken out; null unless the process "
            "is given by its measured values."
        },
    )
    cautions = f.ObjectList(CautionAnswer, **CAUTIONS)
    provenance = PROVENANCE
