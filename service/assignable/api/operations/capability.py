"""Capability operations."""

from __future__ import annotations

from typing import Any

from ...spc.capability.study import study
from .. import problems
from ..contract import Contract
from ..schemas.capability import (
    MeasurementsAnswer,
    MeasurementsRequest,
    measurements_of,
    specification_of,
)
from ..schemas.common import cautions

TAG = "Capability"


def measurements(loaded: dict[str, Any]) -> dict[str, Any]:
    """Indices of measurements against their specification."""
    found = study(
        measurements_of(loaded),
        specification_of(loaded["specification"]),
        sigma_estimator=loaded.get("sigma_estimator"),
        confidence=loaded["confidence"],
        short_run=loaded["short_run"],
    )
    return {
        "status": found.status,
        "capability": found.capability,
        "machine": found.machine,
        "diagnostics": found.diagnostics,
        "cautions": cautions(found.cautions),
    }


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
        "and observed nonconforming product. A one-sided specification gives what it can. For normal "
        "characteristics. Sources: kane-1986, bissell-1990, boyles-1991, iso-22514-2.",
        request=MeasurementsRequest(),
        response=MeasurementsAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="capability-measurements",
        provenance="capability-of-measurements",
    )(measurements)
