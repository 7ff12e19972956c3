"""Capability operations."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from ...spc.capability import attributes as counting
from ...spc.capability import joint, uncertainty
from ...spc.capability.specification import Specification
from ...spc.capability.study import CapabilityStudy, study
from ...spc.errors import UnusableData, UnusableParameter
from ...spc.explain import capability as worked
from ...spc.explain.steps import Step
from .. import problems
from ..contract import Contract
from ..schemas.capability import (
    AttributeCapabilityAnswer,
    AttributeCapabilityRequest,
    ConformanceAnswer,
    ConformanceRequest,
    MeasurementsAnswer,
    MeasurementsRequest,
    SeveralAnswer,
    SeveralRequest,
    counted,
    measurements_of,
    process_of,
    specification_of,
)
from ..schemas.common import cautions, located

TAG = "Capability"


def study_of(loaded: dict[str, Any]) -> CapabilityStudy:
    """The study that a request asks for."""
    return study(
        measurements_of(loaded),
        specification_of(loaded["specification"]),
        sigma_estimator=loaded.get("sigma_estimator"),
        distribution=loaded["distribution"],
        below=loaded.get("data", {}).get("below"),
        confidence=loaded["confidence"],
        short_run=loaded["short_run"],
    )


def measurements(loaded: dict[str, Any]) -> dict[str, Any]:
    """Indices of measurements against their specification."""
    found = study_of(loaded)
    return {
        "status": found.status,
        "choice": found.choice,
        "quantiles": found.quantiles,
        "capability": found.capability,
        "machine": found.machine,
        "diagnostics": found.diagnostics,
        "cautions": cautions(found.cautions),
    }


def attributes(loaded: dict[str, Any]) -> dict[str, Any]:
    """Capability of counts."""
    counts, inspected = counted(loaded["data"])
    try:
        found = counting.study(counts, inspected, loaded["kind"], confidence=loaded["confidence"])
    except UnusableData as error:
        if len(loaded["data"]["inspected"]) > 1:
            raise
        # One number was given for all samples: that is where its faults are, once.
        faults = (
            replace(fault, where=fault.where[:2]) if "inspected" in fault.where else fault
            for fault in error.faults
        )
        raise UnusableData(*dict.fromkeys(faults)) from error
    return {
        "status": found.status,
        "capability": found.capability,
        "dispersion": found.dispersion,
        "cautions": cautions(found.cautions),
    }


def several(loaded: dict[str, Any]) -> dict[str, Any]:
    """Joint capability of several characteristics."""
    specifications = []
    for at, one in enumerate(loaded["characteristics"]):
        with located(specification=("characteristics", at, "specification")):
            specifications.append(specification_of(one["specification"]).effective)
    values = loaded["data"]["values"]
    found = joint.assess(values, specifications, confidence=loaded["confidence"])
    return {"joint": found, "cautions": cautions(joint.cautions_of(values, found))}


def conformance(loaded: dict[str, Any]) -> dict[str, Any]:
    """What measured values say of conformance under their uncertainty."""
    specification = specification_of(loaded["specification"]).effective
    given = loaded["standard_uncertainty"]
    process = process_of(loaded)
    prior = process if loaded["use_process"] else None
    results = [
        uncertainty.conformance(value, given, specification, process=prior, risk=loaded["verdict_risk"])
        for value in loaded.get("results", np.empty(0)).tolist()
    ]
    limits = None
    risk = loaded.get("consumer_risk")
    if risk is not None:
        limits = uncertainty.acceptance_limits(given, specification, risk, process=prior)
    plan = product = None
    if process is not None:
        plan = _plan(loaded, specification, limits, given, process)
        known = loaded["process"]
        if known["of"] == "measured-values":
            product = uncertainty.product_capability(
                known["mean"], known["sd"], given, specification, count=known.get("count")
            )
    elif "acceptance" in loaded:
        raise UnusableParameter.of(
            "process-missing",
            "The risks of a plan need the process; give its mean and standard deviation.",
            "process",
        )
    return {
        "results": results,
        "acceptance_limits": limits,
        "plan": plan,
        "product": product,
        "cautions": cautions(uncertainty.cautions_of(given, specification, risk, limits, process)),
    }


def _plan(
    loaded: dict[str, Any],
    specification: Specification,
    limits: uncertainty.GuardedLimits | None,
    given: float,
    process: uncertainty.ProcessDistribution,
) -> uncertainty.GlobalRisks | None:
    if "acceptance" in loaded:
        asked = loaded["acceptance"]
        lower, upper = asked.get("lower"), asked.get("upper")
    elif limits is not None:
        lower, upper = limits.lower, limits.upper
    elif "consumer_risk" in loaded:
        return None
    else:
        lower, upper = specification.lower, specification.upper
    return uncertainty.global_risks(given, specification, lower, upper, process)


def explain_measurements(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of indices."""
    return worked.of_measurements(
        measurements_of(loaded),
        specification_of(loaded["specification"]).effective,
        answer["capability"],
        answer["machine"],
        answer["quantiles"],
    )


def explain_attributes(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of a rate."""
    return worked.of_counts(counted(loaded["data"])[0], answer["capability"])


def explain_several(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of one of several characteristics, and of all together."""
    asked = [specification_of(one["specification"]).effective for one in loaded["characteristics"]]
    return worked.of_several(loaded["data"]["values"], asked, answer["joint"])


def explain_conformance(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of one measured value, of acceptance limits and of a plan."""
    process = process_of(loaded)
    return worked.of_conformance(
        loaded["standard_uncertainty"],
        specification_of(loaded["specification"]).effective,
        process if loaded["use_process"] else None,
        answer["results"],
        answer["acceptance_limits"],
        process,
        answer["plan"],
        answer["product"],
    )


def register(contract: Contract) -> None:
    """Binds the capability operations."""
    contract.tag(TAG, "What a process can hold, against what its specification asks.")
    contract.operation(
        "POST",
        "/v1/capability/measurements",
        operation_id="assessMeasurements",
        tag=TAG,
        summary="Capability of measurements",
        description="Cp, Cpk, Cpu, Cpl from the within-subgroup sigma; Pp, Ppk, Ppu, Ppl from the overall one; Cpm "
        "and Cpmk with a target; Cm and Cmk of a short run; each with its confidence interval, and the expected "
        "and observed nonconforming product. A one-sided specification gives what it can. For a characteristic that is "
        "not normal, or has results below a limit: Pp, Ppk, Ppu, Ppl by the quantiles of a distribution fitted by "
        "maximum likelihood, named or chosen with its evidence. Sources: kane-1986, bissell-1990, boyles-1991, "
        "iso-22514-2, durbin-1973.",
        request=MeasurementsRequest(),
        response=MeasurementsAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example=("capability-measurements", "capability-below-limits", "capability-chosen-distribution"),
        provenance="capability-of-measurements",
        explain=explain_measurements,
    )(measurements)
    contract.operation(
        "POST",
        "/v1/capability/attributes",
        operation_id="assessAttributes",
        tag=TAG,
        summary="Capability of a counted characteristic",
        description="Rate of nonconforming units (binomial) or of nonconformities (Poisson) with its exact interval, "
        "and the index that the share of nonconforming units amounts to; provisional where the counts' own chart "
        "signals. Sources: clopper-pearson-1934, garwood-1936.",
        request=AttributeCapabilityRequest(),
        response=AttributeCapabilityAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="capability-attributes",
        provenance="capability-of-attributes",
        explain=explain_attributes,
    )(attributes)
    contract.operation(
        "POST",
        "/v1/capability/several",
        operation_id="assessSeveral",
        tag=TAG,
        summary="Capability of several characteristics of one product",
        description="The share of product that conforms in every characteristic, taken as normal together, with its "
        "interval, what it would be if they were independent, and what each does to it. Sources: iso-22514-6, "
        "genz-1992.",
        request=SeveralRequest(),
        response=SeveralAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="capability-several",
        provenance="capability-of-several",
        explain=explain_several,
    )(several)
    contract.operation(
        "POST",
        "/v1/capability/conformance",
        operation_id="assessConformance",
        tag=TAG,
        summary="Conformance under measurement uncertainty",
        description="Probability that an item conforms, given its measured value and the measurement's uncertainty, "
        "with or without what is known of the process; acceptance limits (guard bands) at a stated consumer's risk; "
        "consumer's and producer's risk of a plan over all product; the product's own capability. Sources: jcgm-106, "
        "iso-14253-1.",
        request=ConformanceRequest(),
        response=ConformanceAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="capability-conformance",
        provenance="conformance",
        explain=explain_conformance,
    )(conformance)
