"""A capability study of measurements: the indices, and whether the process was in control at all."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated, Literal, TypeAlias

import numpy as np

from .. import cautions as caution
from .. import diagnostics
from ..cautions import Caution
from ..charts import individuals, subgroups
from ..data import Floats, Individuals, Subgroups
from ..errors import SpcError, UnusableData, UnusableParameter
from ..sigma import WITHIN, moving_range, within
from .indices import Capability, MachineCapability, NormalSummary, capability, machine_capability
from .specification import Specification

MOVING = ("mean-moving-range", "median-moving-range")
FEWEST_VALUES = 50

Status: TypeAlias = Literal["established", "provisional", "not-assessed"]


@dataclass(frozen=True, slots=True)
class CapabilityDiagnostics:
    """What the measurements show about themselves."""

    normality: Annotated[diagnostics.Normality | None, "Of the single values; null where too few."]
    resolution: Annotated[diagnostics.Resolution | None, "Of the measurement; null without variation."]


@dataclass(frozen=True, slots=True)
class CapabilityStudy:
    """Indices of a normal characteristic with what must be known to trust them."""

    status: Status
    capability: Capability
    machine: MachineCapability | None
    diagnostics: CapabilityDiagnostics | None
    cautions: tuple[Caution, ...]


def study(
    data: Floats | NormalSummary,
    specification: Specification,
    *,
    sigma_estimator: str | None = None,
    confidence: float = 0.95,
    short_run: bool = False,
) -> CapabilityStudy:
    """Capability of measurements (m, n) in rational subgroups, (n,) in time order, or of a summary.

    The values are charted at three sigma without run rules (means with deviations, or single values); where
    that signals, the study is provisional [iso-22514-1]. Raises what ``capability`` and the estimators raise;
    UnusableParameter ``estimator-needs-rows`` or ``estimator-needs-list`` for the other kind's estimator.
    """
    if isinstance(data, NormalSummary):
        if sigma_estimator is not None:
            raise UnusableParameter.of(
                "no-values",
                "A summary has its sigma already; an estimator needs the values.",
                "sigma_estimator",
            )
        machine = machine_capability(data, specification, confidence=confidence) if short_run else None
        found = capability(data, specification, confidence=confidence)
        return CapabilityStudy("not-assessed", found, machine, None, ())
    if not bool((data == data).any()):
        raise UnusableData.of("empty", "Every value is missing.", "data", "values")
    rows = data.ndim == 2
    if rows and not bool((np.count_nonzero(data == data, axis=1) > 1).any()):
        raise UnusableData.of(
            "no-subgroups",
            "No row holds two values, so nothing shows the spread within subgroups; send single values as one list.",
            "data",
            "values",
        )
    estimator = sigma_estimator or ("pooled-sd" if rows else "mean-moving-range")
    if rows != (estimator in WITHIN):
        code, kind = (
            ("estimator-needs-list", "one list of single values")
            if rows
            else (
                "estimator-needs-rows",
                "rows of subgroups",
            )
        )
        raise UnusableParameter.of(code, f"The estimator `{estimator}` is for {kind}.", "sigma_estimator")
    if rows:
        table = Subgroups(data)
        sigma = within(table.statistics(), estimator)
        resolution = diagnostics.resolution(data, table.statistics())
    else:
        sigma = moving_range(data, statistic="median" if estimator == "median-moving-range" else "mean")
        resolution = diagnostics.resolution(data)
    found = capability(data, specification, within=sigma, confidence=confidence)
    machine = machine_capability(data, specification, confidence=confidence) if short_run else None
    shown = CapabilityDiagnostics(diagnostics.normality(data), resolution)
    signals = _signals(data, rows)
    status: Status = "not-assessed" if signals is None else "provisional" if signals else "established"
    return CapabilityStudy(
        status,
        found,
        machine,
        shown,
        caution.collect(
            _not_in_control(signals),
            _few(found.count),
            caution.not_normal(shown.normality),
            caution.coarse_resolution(shown.resolution),
        ),
    )


def _signals(data: Floats, rows: bool) -> int | None:
    """Signals of the values' own chart; ``None`` where they cannot be charted."""
    try:
        if rows:
            judged = subgroups.fit(
                Subgroups(data), subgroups.SubgroupOptions("pooled-sd"), spread="sd"
            ).baseline
        else:
            judged = individuals.fit(Individuals(data), individuals.IndividualsOptions()).baseline
    except SpcError:
        return None
    return None if judged is None else judged.signals_found


def _not_in_control(signals: int | None) -> Caution | None:
    if not signals:
        return None
    return Caution(
        "not-in-control",
        f"The values' own control chart gives {signals} {'signal' if signals == 1 else 'signals'}: the process was "
        "not in control, so these figures describe what was made and promise nothing of what will be. Treat them "
        "as provisional; find the causes first.",
        ("data", "values"),
        "iso-22514-1",
    )


def _few(count: int) -> Caution | None:
    if count >= FEWEST_VALUES:
        return None
    return Caution(
        "few-values",
        f"The indices rest on {count} values; with fewer than {FEWEST_VALUES} their intervals are wide. Judge by "
        "the lower bound, not by the index.",
        ("data", "values"),
        "common practice",
    )
