"""Single values with their moving ranges: ``individuals`` ([iso-7870-2], [astm-e2587])."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import partial
from typing import Annotated, Generic, Literal, TypeAlias, TypeVar

import numpy as np

from .. import cautions as caution
from .. import diagnostics
from ..baseline import change_points, estimation, joint, screening
from ..capability.nonnormal import DistributionChoice
from ..cautions import Caution
from ..data import Booleans, Floats, Individuals
from ..errors import Fault, UnusableData, UnusableParameter
from ..rules import Rule, Tail, watched
from ..sigma import moving_range, moving_ranges
from . import nonnormal
from .common import (
    AT_THREE_SIGMA,
    NO_STANDARDS,
    Baseline,
    BaselineRecord,
    Exclusion,
    Fit,
    Judgement,
    LimitBasis,
    Panel,
    PanelLimits,
    Plot,
    Standards,
    Watched,
    baseline_alone,
    exclusion_mask,
    standards_alone,
    too_many_signals,
    watch,
)
from .lines import spread_lines
from .price import mean_performance
from .registry import Chart

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class ValueMovingRange(Generic[T]):
    """The panels of an ``individuals`` chart."""

    value: Annotated[T, "The single values."]
    moving_range: Annotated[T, "Ranges of successive values."]


@dataclass(frozen=True, slots=True)
class IndividualsOptions:
    """How the limits of a chart of single values are to be computed."""

    sigma_estimator: Literal["mean-moving-range", "median-moving-range"] = "mean-moving-range"
    span: int = 2
    basis: LimitBasis = AT_THREE_SIGMA
    rules: tuple[Rule, ...] = ()
    standards: Standards = NO_STANDARDS
    exclude: tuple[Exclusion, ...] = ()
    guarantee: estimation.Guarantee | None = None
    joint_false_alarm_probability: float | None = None
    screening: screening.Screening | None = None
    distribution: str = "normal"


@dataclass(frozen=True, slots=True)
class IndividualsLimits:
    """The frozen parameters of a chart of single values."""

    centre: Annotated[
        float, "Mean of the values, in the unit of the characteristic; their centre line if they are normal."
    ]
    sigma: Annotated[float, "Standard deviation of single values, from successive differences."]
    sigma_estimator: Annotated[str, "How sigma was estimated; `given` where it was a standard."]
    degrees_of_freedom: Annotated[
        float | None, "Effective degrees of freedom of sigma; null where it was a standard."
    ]
    span: Annotated[int, "How many successive values a moving range spans."]
    limit_basis: Annotated[Literal["sigma", "probability"], "How the limits were placed."]
    sigma_multiple: Annotated[float | None, "Limits lie this many sigma out; null under `probability`."]
    false_alarm_probability: Annotated[float | None, "Of each panel and point; null under `sigma`."]
    panels: Annotated[ValueMovingRange[PanelLimits], "The lines of each panel."]
    rules: Annotated[tuple[Rule, ...], "The rules in force, the limit first."]
    baseline: Annotated[
        BaselineRecord | None, "What the limits were computed from; null for standards alone."
    ]
    distribution: Annotated[
        nonnormal.FrozenDistribution | None,
        "The distribution that the limits are quantiles of; null for the normal one, whose limits lie about the mean.",
    ] = None

    @property
    def basis(self) -> LimitBasis:
        """How far out the limits lie."""
        return LimitBasis(self.limit_basis, self.sigma_multiple, self.false_alarm_probability)


@dataclass(frozen=True, slots=True)
class IndividualsCarry:
    """What judging needs to remember of the values before."""

    points: Annotated[int, "Values judged so far under these limits."]
    value: Annotated[Tail, "The last points of the value panel, for the run rules."]
    recent: Annotated[tuple[float, ...], "The last values since a gap, for the next moving range."]


NEW = IndividualsCarry(0, Tail(), ())


@dataclass(frozen=True, slots=True, eq=False)
class IndividualsDiagnostics:
    """What the baseline itself shows."""

    autocorrelation: Annotated[
        diagnostics.Autocorrelation | None, "Of the values in time order; null where too few."
    ]
    normality: Annotated[diagnostics.Normality | None, "Of the values; null where too few."]
    resolution: Annotated[diagnostics.Resolution | None, "Of the measurement."]
    change_point: Annotated[
        change_points.ChangePoint | None, "A lasting step within the baseline; null for fewer than 8 values."
    ] = None
    judged_by: Annotated[
        joint.JointLimits | None,
        "The joint limits that judged the baseline, where asked for; null where its own frozen limits and "
        "rules did.",
    ] = None
    screening: Annotated[
        screening.Screened | None, "What automatic screening did; null where not asked for."
    ] = None
    distribution: Annotated[
        DistributionChoice | None,
        "The distributions tried and the choice among them; null where the normal one was asked for.",
    ] = None


@dataclass(frozen=True, slots=True)
class _Known:
    """Centre and sigma, given or from the ``filled`` values of ``used``."""

    used: Floats
    filled: int
    mean: float
    sigma: float
    estimator: str
    freedom: float | None
    choice: DistributionChoice | None = None
    shaped: nonnormal.Shaped | None = None


IndividualsFit: TypeAlias = Fit[IndividualsLimits, ValueMovingRange[Panel], IndividualsDiagnostics]


IndividualsJudgement: TypeAlias = Judgement[ValueMovingRange[Panel], IndividualsCarry]


def individual_plots(
    values: Floats, ranges: Floats, centre: float, sigma: float, span: int, basis: LimitBasis
) -> tuple[Plot, Plot]:
    """The value panel and the moving-range panel of single values under given parameters."""
    far = basis.multiple * sigma
    lines = spread_lines("range", span, basis.sigma_multiple, basis.tail)
    return (
        Plot(values, centre, sigma, centre - far, centre + far),
        Plot(
            ranges,
            lines.centre * sigma,
            lines.sd * sigma,
            None if lines.lower is None else lines.lower * sigma,
            lines.upper * sigma,
            floor=0.0,
        ),
    )


def _watch(
    plots: tuple[Plot, Plot], rules: tuple[Rule, ...], tail: Tail | None, kept: Booleans | None
) -> tuple[Watched, Tail]:
    """Run rules watch the values; neighbouring moving ranges share values, so runs of them mean nothing."""
    values, after = watch("value", plots[0], rules, tail=tail, kept=kept)
    spreads, _ = watch("moving_range", plots[1])
    return values.with_(spreads), after


def fit(data: Individuals | None, options: IndividualsOptions) -> IndividualsFit:
    """Limits of an ``individuals`` chart from a baseline, or from standards.

    ``σ̂ = MR̄/d2(w)`` over moving ranges of span w, or the median moving range over the median of W. A
    gap, and an excluded value, breaks the moving range: no range spans it.
    A guarantee sets the multiple. A joint false-alarm probability widens the limits (and replaces the rules)
    by which the baseline itself is judged and screened, and leaves the frozen limits as they are. Screening
    looks at the values alone: a wide moving range does not say which of its values is to blame.
    With another distribution than the normal, named or ``auto``, see :mod:`.nonnormal`.

    Raises UnusableData for fewer than two values or no variation; UnusableParameter for options that
    do not fit. Source: [iso-7870-2], [astm-e2587].
    """
    rules = watched(options.rules)
    given, basis = options.standards, options.basis
    if data is None:
        faults = standards_alone(given, options.exclude)
        faults += baseline_alone(options.guarantee, options.joint_false_alarm_probability, options.screening)
        faults += _not_normal_faults(options, data=False)
        if faults:
            raise UnusableParameter(*faults)
        assert given.mean is not None
        assert given.sigma is not None
        limits = _limits(options, rules, _Known(np.empty(0), 0, given.mean, given.sigma, "given", None), None)
        return Fit(limits, None, None, mean_performance(rules, basis, 1.0, None), ())

    if faults := _not_normal_faults(options, data=True):
        raise UnusableParameter(*faults)
    values = data.values
    kept = exclusion_mask(len(values), options.exclude)
    screened = None
    if options.screening is not None:
        present = values == values
        kept, left_out, screened = screening.screen(
            present if kept is None else present & kept, partial(_beyond, values, options), options.screening
        )
        options = replace(options, exclude=(*options.exclude, *left_out))
    known = _estimate(values, kept, options)
    if options.guarantee is not None:
        basis = _guaranteed(known, options)
        options = replace(options, basis=basis)
    used, filled = known.used, known.filled
    limits = _limits(options, rules, known, BaselineRecord(filled, filled, options.exclude))
    plots, judged_by = _judged(values, known, basis, options)
    seen, _ = _watch(plots, rules if judged_by is None else watched(()), None, kept)
    found = IndividualsDiagnostics(
        diagnostics.autocorrelation(used),
        diagnostics.normality(used),
        diagnostics.resolution(used, None),
        change_points.of_values(used),
        judged_by,
        screened,
        known.choice,
    )
    performance = mean_performance(rules, basis, 1.0, None)
    if known.shaped is None:
        delivered = estimation.performance(
            filled,
            known.freedom,
            basis.multiple,
            centre_known=given.mean is not None,
            guarantee=options.guarantee,
        )
        performance = replace(performance, estimated=delivered)
    else:
        performance = replace(performance, shift_unit="normal scores of the fitted distribution")
    return Fit(
        limits,
        Baseline(
            seen.verdict, ValueMovingRange(plots[0].panel(), plots[1].panel()), seen.signals, seen.found
        ),
        found,
        performance,
        caution.collect(
            caution.few_individuals(filled),
            caution.autocorrelated(found.autocorrelation),
            _not_normal(found) if known.shaped is None else None,
            None if found.normality else caution.normality_untested(filled),
            *nonnormal.cautions(known.choice, filled),
            caution.coarse_resolution(found.resolution),
            change_points.caution_of_level(found.change_point),
            change_points.caution_of_spread(found.change_point),
            screening.caution(screened),
            *too_many_signals(seen),
        ),
    )


def _estimate(values: Floats, kept: Booleans | None, options: IndividualsOptions) -> _Known:
    """Centre and sigma of the values kept; raises UnusableData where there are too few."""
    given = options.standards
    used = values if kept is None else np.where(kept, values, np.nan)
    filled = int(np.count_nonzero(used == used))
    if filled < 2 and (given.mean is None or given.sigma is None):
        raise UnusableData.of(
            "too-few-values",
            f"Limits need at least two values, and 25 or more to deserve trust; there "
            f"{'is one' if filled == 1 else 'are none'}.",
            "data",
            "values",
        )
    mean = given.mean if given.mean is not None else mean_of_values(used, filled)
    if given.sigma is not None:
        return _Known(used, filled, mean, given.sigma, "given", None)
    statistic: Literal["mean", "median"] = (
        "median" if options.sigma_estimator == "median-moving-range" else "mean"
    )
    found = moving_range(used, span=options.span, statistic=statistic)
    choice = shaped = None
    if options.distribution != "normal":
        choice, shaped = nonnormal.shaped(used, options.distribution, options.basis, options.span)
    return _Known(used, filled, mean, found.sigma, found.estimator, found.degrees_of_freedom, choice, shaped)


def _not_normal(found: IndividualsDiagnostics) -> Caution | None:
    told = caution.not_normal(found.normality)
    if told is None:
        return None
    return replace(
        told, sentence=f"{told.sentence} In the latter case ask for limits from a fitted `distribution`."
    )


def _not_normal_faults(options: IndividualsOptions, *, data: bool) -> list[Fault]:
    """The faults of asking for what limits of another distribution than the normal cannot have."""
    if options.distribution == "normal":
        return []
    faults = []
    if not data:
        faults.append(
            Fault(
                "data-missing",
                "A distribution is fitted to a baseline, and there is none.",
                ("distribution",),
            )
        )
    for name, asked, where in (
        ("A known mean", options.standards.mean, ("standards", "mean")),
        ("A known sigma", options.standards.sigma, ("standards", "sigma")),
        ("A guarantee", options.guarantee, ("guarantee",)),
        (
            "A joint false-alarm probability",
            options.joint_false_alarm_probability,
            ("joint_false_alarm_probability",),
        ),
    ):
        if asked is not None:
            faults.append(
                Fault(
                    "normal-alone",
                    f"{name} is for limits of normal values; leave it out, or ask for the normal distribution.",
                    where,
                )
            )
    return faults


def _guaranteed(known: _Known, options: IndividualsOptions) -> LimitBasis:
    assert options.guarantee is not None
    multiple = estimation.multiple_of(
        options.guarantee, known.filled, known.freedom, centre_known=options.standards.mean is not None
    )
    return LimitBasis("sigma", multiple, None)


def _judged(
    values: Floats, known: _Known, basis: LimitBasis, options: IndividualsOptions
) -> tuple[tuple[Plot, Plot], joint.JointLimits | None]:
    """The panels under the limits that judge the baseline: the joint ones where they are asked for."""
    span = options.span
    ranges = moving_ranges(known.used, span)
    probability = options.joint_false_alarm_probability
    if known.shaped is not None:
        shape = known.shaped
        return nonnormal.shaped_plots(
            values, ranges, shape.distribution, shape.value, shape.moving_range, known.sigma
        ), None
    if probability is None:
        return individual_plots(values, ranges, known.mean, known.sigma, span, basis), None
    limits = joint.of_values(
        probability,
        known.filled,
        span,
        known.freedom,
        resistant=known.estimator == "median-moving-range",
    )
    plot, _ = individual_plots(
        values, ranges, known.mean, known.sigma, span, LimitBasis("sigma", limits.sigma_multiple)
    )
    _, spread = individual_plots(
        values,
        ranges,
        known.mean,
        known.sigma,
        span,
        LimitBasis("probability", None, 2.0 * limits.spread_tail_probability),
    )
    return (plot, replace(spread, lower=None)), limits


def _beyond(values: Floats, options: IndividualsOptions, kept: Booleans) -> Booleans:
    """(m,) values beyond the limits that those kept give."""
    known = _estimate(values, kept, options)
    basis = options.basis if options.guarantee is None else _guaranteed(known, options)
    return _judged(values, known, basis, options)[0][0].beyond()


def mean_of_values(values: Floats, filled: int) -> float:
    """The mean of the ``filled`` values that are there; a second pass restores the first one's lost digits."""
    present = values if filled == len(values) else values[~np.isnan(values)]
    first = float(present.mean())
    return first + float((present - first).mean())


def _limits(
    options: IndividualsOptions, rules: tuple[Rule, ...], known: _Known, record: BaselineRecord | None
) -> IndividualsLimits:
    centre, sigma = known.mean, known.sigma
    if not (math.isfinite(centre) and math.isfinite(sigma) and sigma > 0):
        raise UnusableData.of("out-of-scale", "The spread of the values cannot be represented.", "data")
    basis, nothing = options.basis, np.empty(0)
    if known.shaped is None:
        plots = individual_plots(nothing, nothing, centre, sigma, options.span, basis)
        panels, distribution = ValueMovingRange(plots[0].limits(), plots[1].limits()), None
    else:
        panels = ValueMovingRange(known.shaped.value, known.shaped.moving_range)
        distribution = known.shaped.distribution
    return IndividualsLimits(
        centre,
        sigma,
        known.estimator,
        known.freedom,
        options.span,
        basis.limit_basis,
        basis.sigma_multiple,
        basis.false_alarm_probability,
        panels,
        rules,
        record,
        distribution,
    )


def judge(
    limits: IndividualsLimits, data: Individuals, carry: IndividualsCarry | None
) -> IndividualsJudgement:
    """New values under frozen limits: points, signals, and the carry for the next call.

    Judging in one call or in any split with the carry passed on gives identical signals.
    """
    before = carry or NEW
    values, recent = data.values, before.recent
    series = np.concatenate((recent, values)) if recent else values
    ranges = moving_ranges(series, limits.span)[len(recent) :]
    if limits.distribution is None:
        plots = individual_plots(values, ranges, limits.centre, limits.sigma, limits.span, limits.basis)
    else:
        lines = limits.panels
        plots = nonnormal.shaped_plots(
            values, ranges, limits.distribution, lines.value, lines.moving_range, limits.sigma
        )
    seen, tail = _watch(plots, limits.rules, before.value, None)
    return Judgement(
        seen.verdict,
        ValueMovingRange(plots[0].panel(), plots[1].panel()),
        seen.signals,
        seen.found,
        IndividualsCarry(before.points + len(values), tail, since_gap(series, limits.span - 1)),
        too_many_signals(seen),
    )


def since_gap(series: Floats, most: int) -> tuple[float, ...]:
    """The last values after the last gap, at most so many."""
    last = series[-most:]
    gaps = np.isnan(last).nonzero()[0]
    return tuple((last if not len(gaps) else last[gaps[-1] + 1 :]).tolist())


CHARTS = (
    Chart(
        name="individuals",
        title="Single values and moving ranges",
        purpose="Watches a measured characteristic of which only one value comes at a time.",
        takes="Single values in time order.",
        beware="Values that depend on their neighbours give wrong limits, and so do values far from normal unless a "
        "`distribution` is asked for: heed the cautions.",
        panels=("value", "moving_range"),
        references=("iso-7870-2", "astm-e2587"),
        fit=fit,
        judge=judge,
        limits=IndividualsLimits,
        plotted=ValueMovingRange[Panel],
        carry=IndividualsCarry,
        diagnostics=IndividualsDiagnostics,
    ),
)
