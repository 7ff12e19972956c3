"""A capability study of measurements: the indices, and whether the process was in control at all."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from .. import cautions as caution
from .. import diagnostics
from ..baseline import change_points
from ..cautions import Caution
from ..charts import individuals, subgroups
from ..data import Floats, Individuals, Subgroups
from ..errors import SpcError, UnusableData, UnusableParameter
from ..sigma import WITHIN, moving_range, within
from .distributions import Fitted, Sample, split
from .indices import (
    Capability,
    MachineCapability,
    NormalSummary,
    capability,
    check_confidence,
    machine_capability,
)
from .nonnormal import AUTO, TAIL, DistributionChoice, QuantileCapability, by_quantiles, choose
from .specification import Specification

MOVING = ("mean-moving-range", "median-moving-range")
FEWEST_VALUES = 50
JOINT = 0.05  # of a process in control being called out of it

Status: TypeAlias = Literal["established", "provisional", "not-assessed"]


@dataclass(frozen=True, slots=True)
class CapabilityDiagnostics:
    """What the measurements show about themselves."""

    normality: Annotated[diagnostics.Normality | None, "Of the single values; null where too few."]
    resolution: Annotated[diagnostics.Resolution | None, "Of the measurement; null without variation."]


@dataclass(frozen=True, slots=True)
class CapabilityStudy:
    """Indices of a characteristic with what must be known to trust them.

    ``capability`` where the normal distribution was used on values none of which is below a limit, else
    ``quantiles``; the other is ``None``. fitted: the distribution of those quantiles, ``None`` for their own.
    """

    status: Status
    choice: DistributionChoice
    capability: Capability | None
    quantiles: QuantileCapability | None
    machine: MachineCapability | None
    diagnostics: CapabilityDiagnostics | None
    cautions: tuple[Caution, ...]
    fitted: Fitted | None = None


def study(
    data: Floats | NormalSummary,
    specification: Specification,
    *,
    sigma_estimator: str | None = None,
    distribution: str = "normal",
    below: Floats | None = None,
    confidence: float = 0.95,
    short_run: bool = False,
) -> CapabilityStudy:
    """Capability of measurements (m, n) in rational subgroups, (n,) in time order, or of a summary.

    distribution: ``normal``, another of ``nonnormal.CHOICES``, or ``auto``. below: (n,) beside values (n,),
    the limit that a result is below where its value is missing, NaN elsewhere.
    The values, or their normal scores under the distribution used, are charted (means with deviations, or
    single values) by limits that a process in control passes as a whole with 95 %, and searched for a lasting
    step of the level at 1 %; where either signals, the study is provisional [iso-22514-1]. At three sigma
    two of three studies of 100 single values in control would be.
    Raises what ``capability``, ``choose``, ``by_quantiles`` and the estimators raise; UnusableParameter
    ``estimator-needs-rows``, ``estimator-needs-list`` for the other kind's estimator, ``normal-only``,
    ``needs-values``; UnusableData ``beyond-natural-bound``, ``limits-need-list``.
    """
    specification = specification.effective
    if isinstance(data, NormalSummary):
        if sigma_estimator is not None:
            raise UnusableParameter.of(
                "no-values",
                "A summary has its sigma already; an estimator needs the values.",
                "sigma_estimator",
            )
        if distribution not in ("normal", AUTO):
            raise UnusableParameter.of(
                "needs-values",
                "Another distribution than the normal needs the values themselves.",
                "distribution",
            )
        machine = machine_capability(data, specification, confidence=confidence) if short_run else None
        found = capability(data, specification, confidence=confidence)
        choice = DistributionChoice(
            distribution, "normal", "A summary shows no distribution: taken as normal.", ()
        )
        return CapabilityStudy("not-assessed", choice, found, None, machine, None, ())
    sample = _sample(data, below, specification)
    if distribution != "normal" or sample.below.size:
        return _by_distribution(
            data, sample, specification, distribution, sigma_estimator, confidence, short_run
        )
    choice = DistributionChoice("normal", "normal", _AS_ASKED, ())
    return _of_normal(data, specification, choice, sigma_estimator, confidence, short_run)


_AS_ASKED = "The normal distribution, as asked for or for want of another; see the tests of normality."


def _sample(data: Floats, below: Floats | None, specification: Specification) -> Sample:
    if below is not None and data.ndim == 2:
        raise UnusableData.of(
            "limits-need-list",
            "Results below a limit are taken with single values in one list, not with rows of subgroups.",
            "data",
            "below",
        )
    values, limits = split(data.reshape(-1), below)
    if not values.size and not limits.size:
        raise UnusableData.of("empty", "Every value is missing.", "data", "values")
    least, most = specification.natural_lower, specification.natural_upper
    if values.size and (
        (least is not None and float(values.min()) < least)
        or (most is not None and float(values.max()) > most)
    ):
        raise UnusableData.of(
            "beyond-natural-bound",
            "There are values beyond a natural bound of the characteristic, where by its nature none can be; correct "
            "the bound or the values.",
            "data",
            "values",
        )
    return Sample(values, limits, least, most)


def _by_distribution(
    data: Floats,
    sample: Sample,
    specification: Specification,
    distribution: str,
    sigma_estimator: str | None,
    confidence: float,
    short_run: bool,
) -> CapabilityStudy:
    if distribution != AUTO:
        for asked, name, what in (
            (short_run, "short_run", "Cm and Cmk"),
            (sigma_estimator is not None, "sigma_estimator", "Indices with the within-subgroup sigma"),
        ):
            if asked:
                raise UnusableParameter.of(
                    "normal-only",
                    f"{what} are for the normal distribution, on values none of which is below a limit.",
                    name,
                )
    check_confidence(confidence)
    choice, fitted = choose(distribution, sample)
    if choice.used == "normal" and not sample.below.size:
        return _of_normal(data, specification, choice, sigma_estimator, confidence, short_run)
    found = by_quantiles(fitted, sample, specification, confidence)
    signals = None
    if not sample.below.size:
        scored = data if fitted is None else fitted.scores(data)
        signals = _signals(scored, data.ndim == 2)
    status: Status = "not-assessed" if signals is None else "provisional" if signals[0] else "established"
    resolution = diagnostics.resolution(data)
    return CapabilityStudy(
        status,
        choice,
        None,
        found,
        None,
        CapabilityDiagnostics(None if sample.below.size else diagnostics.normality(data), resolution),
        caution.collect(
            _not_in_control(signals),
            _few(found.count),
            _chosen(choice),
            _rejected(choice),
            _below_limits(sample, specification),
            _beyond_bound(fitted, specification),
            _normal_asked_too(choice, sigma_estimator, short_run),
            caution.coarse_resolution(resolution),
        ),
        fitted,
    )


def _of_normal(
    data: Floats,
    specification: Specification,
    choice: DistributionChoice,
    sigma_estimator: str | None,
    confidence: float,
    short_run: bool,
) -> CapabilityStudy:
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
    status: Status = "not-assessed" if signals is None else "provisional" if signals[0] else "established"
    return CapabilityStudy(
        status,
        choice,
        found,
        None,
        machine,
        shown,
        caution.collect(
            _not_in_control(signals),
            _few(found.count),
            _chosen(choice),
            _beyond_bound_normal(found, specification),
            caution.not_normal(shown.normality),
            caution.coarse_resolution(shown.resolution),
        ),
    )


def _signals(data: Floats, rows: bool) -> tuple[int, str] | None:
    """Signals of the values' own chart, and what they are; ``None`` where they cannot be charted."""
    try:
        if rows:
            table = Subgroups(data)
            judged = subgroups.fit(
                table,
                subgroups.SubgroupOptions("pooled-sd", joint_false_alarm_probability=JOINT),
                spread="sd",
            ).baseline
            steps = change_points.of_subgroups(table.statistics())
        else:
            judged = individuals.fit(
                Individuals(data), individuals.IndividualsOptions(joint_false_alarm_probability=JOINT)
            ).baseline
            steps = change_points.of_values(data)
    except SpcError:
        return None
    if judged is None:
        return None
    found = judged.signals_found
    told = (
        [f"{found} {'signal' if found == 1 else 'signals'} beyond limits that hold for all of them"]
        if found
        else []
    )
    step = None if steps is None else steps.mean
    if step is not None and step.p_value < caution.SIGNIFICANCE:
        found += 1
        told.append(f"a lasting step of the level at point {step.index}")
    return found, " and ".join(told)


def _not_in_control(signals: tuple[int, str] | None) -> Caution | None:
    if signals is None or not signals[0]:
        return None
    return Caution(
        "not-in-control",
        f"The values' own control chart gives {signals[1]}: the process was not in control, so these figures describe "
        "what was made and promise nothing of what will be. Treat them as provisional; find the causes first.",
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


def _chosen(choice: DistributionChoice) -> Caution | None:
    if choice.asked != AUTO:
        return None
    return Caution(
        "distribution-chosen",
        f"The distribution was chosen from these values ({choice.used}). The intervals take it as given, and its "
        "tails, where the indices look, are where the values say least: confirm it by what is known of the process, "
        "and then name it.",
        ("distribution",),
        "iso-22514-2",
    )


def _rejected(choice: DistributionChoice) -> Caution | None:
    test = next((one.goodness for one in choice.candidates if one.distribution == choice.used), None)
    if test is None or test.p_value >= caution.SIGNIFICANCE:
        return None
    return Caution(
        "distribution-rejected",
        f"The values do not follow the distribution {choice.used} (Anderson-Darling test with its parameters "
        f"estimated: p {'< 0.0001' if test.p_value < 1e-4 else f'= {test.p_value:.2g}'}). Look for shifts, mixed "
        "streams or rounding; its indices may be far off.",
        ("distribution",),
        "durbin-1973",
    )


def _below_limits(sample: Sample, specification: Specification) -> Caution | None:
    if not sample.below.size:
        return None
    share = sample.below.size / sample.count
    undecided = 0
    if specification.upper is not None:
        undecided += int(np.count_nonzero(sample.below > specification.upper))
    if specification.lower is not None:
        undecided += int(np.count_nonzero(sample.below > specification.lower))
    more = (
        f" Of {undecided} of them the limit itself lies beyond the specification's, so that nobody knows whether "
        "they conform; they are not counted as nonconforming."
        if undecided
        else ""
    )
    return Caution(
        "below-limits",
        f"{sample.below.size} of {sample.count} results ({100.0 * share:.0f} %) are below a limit. They enter with the "
        "probability of being so, which leans on the distribution used; its fit is not tested, nor the process's "
        f"control.{more}",
        ("data", "below"),
        "cohen-1959",
    )


def _beyond_bound(fitted: Fitted | None, specification: Specification) -> Caution | None:
    if fitted is None:
        return None
    least, most = specification.natural_lower, specification.natural_upper
    beyond = 0.0
    if least is not None:
        beyond += float(fitted.tails(np.array([least]))[0][0])
    if most is not None:
        beyond += float(fitted.tails(np.array([most]))[1][0])
    return _impossible(beyond)


def _beyond_bound_normal(found: Capability, specification: Specification) -> Caution | None:
    least, most = specification.natural_lower, specification.natural_upper
    if found.total is None or (least is None and most is None):
        return None
    beyond = 0.0
    if least is not None:
        beyond += float(scipy.special.ndtr((least - found.mean) / found.total.sigma))
    if most is not None:
        beyond += float(scipy.special.ndtr((found.mean - most) / found.total.sigma))
    return _impossible(beyond)


def _impossible(beyond: float) -> Caution | None:
    if beyond <= TAIL:
        return None
    return Caution(
        "beyond-natural-bound",
        f"The distribution used puts {100.0 * beyond:.2g} % of the product beyond a natural bound, where there can be "
        "none; use one that starts there.",
        ("distribution",),
        "iso-22514-2",
    )


def _normal_asked_too(
    choice: DistributionChoice, sigma_estimator: str | None, short_run: bool
) -> Caution | None:
    if sigma_estimator is None and not short_run:
        return None
    return Caution(
        "normal-only",
        f"The estimator of sigma and the indices of a short run are for the normal distribution; {choice.used} was "
        "used, and they are left out.",
        ("short_run",) if short_run else ("sigma_estimator",),
        "iso-22514-2",
    )
