"""The ``t-squared`` chart: several variables of a piece as one distance ([hotelling-1947]).

Baseline and later points follow different laws, because the baseline made the estimates it is judged by:
the two limits are kept apart ([tracy-young-mason-1992]).
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass
from typing import Annotated, Generic, Literal, TypeAlias, TypeVar

import numpy as np
import scipy

from ..bounds import POSITIVE, PROBABILITY, SIZE
from ..data import Floats, Vectors
from ..errors import Fault, UnusableParameter
from ..runlength.mewma import chi_square_tail
from . import successive
from .common import (
    Baseline,
    BaselineRecord,
    Exclusion,
    Fit,
    Judgement,
    Panel,
    PanelLimits,
    Performance,
    Plot,
    ShiftPerformance,
    exclusion_mask,
    too_many_signals,
    watch,
)
from .registry import Chart
from .vectors import (
    Decompositions,
    Estimate,
    Estimator,
    Matrix,
    VectorDiagnostics,
    VectorStandards,
    cautions_of,
    check_standards,
    decompose,
    diagnose,
    estimate,
    matrix,
    metric,
    same_data,
)

T = TypeVar("T")

USUAL_FALSE_ALARM = 0.0027
SHIFTS = (0.5, 1.0, 1.5, 2.0, 3.0)
"""Shifts of the mean, as Mahalanobis distances of single pieces, for which every fit states its run length."""
SHIFT_UNIT = (
    "Mahalanobis distance of the new mean from the old, in standard deviations of single pieces: the "
    "square root of the squared distance under their covariance"
)


@dataclass(frozen=True, slots=True)
class TSquaredPanels(Generic[T]):
    """The panel of a ``t-squared`` chart."""

    t_squared: Annotated[T, "Squared distance of each point from the mean, in the metric of the covariance."]


@dataclass(frozen=True, slots=True)
class TSquaredOptions:
    """How the limits of a ``t-squared`` chart are to be computed."""

    covariance_estimator: Estimator | None = None
    false_alarm_probability: float = USUAL_FALSE_ALARM
    standards: VectorStandards | None = None
    subgroup_size: int | None = None
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True)
class TSquaredLimits:
    """The frozen parameters of a ``t-squared`` chart."""

    variables: Annotated[tuple[str, ...], "The variables, in the order of the data's columns."]
    mean: Annotated[tuple[float, ...], "Mean of each variable, in its own unit."]
    covariance: Annotated[
        Matrix, "Covariance of single observations: a row and a column a variable, in the product of units."
    ]
    covariance_estimator: Annotated[
        Literal["sample", "successive-differences", "pooled", "given"],
        "How the covariance was estimated; `given` where it was a standard.",
    ]
    degrees_of_freedom: Annotated[
        float | None,
        "Effective degrees of freedom of the covariance; null where it was a standard.",
        POSITIVE,
    ]
    subgroup_size: Annotated[int, "Pieces in a subgroup; 1 for single observations.", SIZE]
    false_alarm_probability: Annotated[float, "That a point in control lies beyond its limit.", PROBABILITY]
    baseline_upper: Annotated[
        float | None,
        "Limit of the points the estimates rest on; null where it follows each point's position, and without "
        "a baseline.",
    ]
    panels: Annotated[TSquaredPanels[PanelLimits], "The lines for new points. The centre is the mean of T²."]
    unconditional_limit: Annotated[float, "Limit of one variable's own term of a decomposed signal."]
    conditional_limit: Annotated[float, "Limit of one variable's term given all the others."]
    baseline: Annotated[
        BaselineRecord | None, "What the limits were computed from; null for standards alone."
    ]


@dataclass(frozen=True, slots=True)
class TSquaredCarry:
    """What judging needs to remember: nothing but the count."""

    points: Annotated[int, "Points judged so far under these limits."]


TSquaredFit: TypeAlias = Fit[TSquaredLimits, TSquaredPanels[Panel], VectorDiagnostics]


TSquaredJudgement: TypeAlias = Judgement[TSquaredPanels[Panel], TSquaredCarry]


def _ratio_quantile(alpha: float, p: int, freedom: float) -> float:
    """The value that χ²_p over an independent χ²_freedom exceeds with probability alpha: (p/f) F."""
    y = float(scipy.special.betainccinv(0.5 * p, 0.5 * freedom, alpha))
    return y / (1.0 - y)


@functools.lru_cache(maxsize=512)
def new_point_limits(
    estimator: Estimator, lengths: tuple[int, ...], m: int, size: int, p: int, alpha: float
) -> tuple[float, float, float]:
    """Limits for a new point: of T², of one variable's own term, and of its term given the others.

    ``sample``: p(m + 1)(m − 1)/(m(m − p)) F(p, m − p); ``pooled``: p(m + 1)(n − 1)/ν' F(p, ν') with
    ν' = mn − m − p + 1; ``successive-differences``: see :mod:`successive`. m: points of the baseline;
    lengths: of its runs of neighbours. The terms follow the same laws for one variable, the conditional one
    with p − 1 degrees of freedom less. Source: [tracy-young-mason-1992], [alt-1985],
    [mason-tracy-young-1995].
    """
    if estimator == "successive-differences":
        scale, freedom = successive.new_point_law(lengths, p)
        scale_alone, freedom_alone = successive.new_point_law(lengths, 1)
    else:
        own = float(m * (size - 1) if size > 1 else m - 1)
        scale = scale_alone = (1.0 + 1.0 / m) * own
        freedom, freedom_alone = own - p + 1.0, own
    return (
        scale * _ratio_quantile(alpha, p, freedom),
        scale_alone * _ratio_quantile(alpha, 1, freedom_alone),
        scale * _ratio_quantile(alpha, 1, freedom),
    )


@functools.lru_cache(maxsize=512)
def baseline_limit(estimator: Estimator, m: int, size: int, p: int, alpha: float) -> float:
    """Limit of the points that the estimates rest on, for ``sample`` and ``pooled``.

    ``sample``: (m − 1)²/m · Beta(p/2, (m − p − 1)/2); ``pooled``: p(m − 1)(n − 1)/ν' F(p, ν').
    Source: [tracy-young-mason-1992], [alt-1985].
    """
    if estimator == "sample":
        y = float(scipy.special.betainccinv(0.5 * p, 0.5 * (m - p - 1), alpha))
        return (m - 1.0) ** 2 / m * y
    own = m * (size - 1.0)
    return (1.0 - 1.0 / m) * own * _ratio_quantile(alpha, p, own - p + 1.0)


@functools.lru_cache(maxsize=512)
def t_squared_performance(p: int, alpha: float, size: int) -> Performance:
    """Run lengths for known parameters, exact: central and noncentral chi-square tails."""
    upper = float(scipy.special.chdtri(p, alpha))

    def run_length(shift: float) -> float | None:
        tail = chi_square_tail(upper, p, size * shift * shift)
        return 1.0 / tail if tail > 1e-15 else None

    return Performance(
        "t_squared",
        run_length(0.0),
        None,
        tuple(ShiftPerformance(shift, run_length(shift)) for shift in SHIFTS),
        SHIFT_UNIT,
        float(size),
        "exact (chi-square and noncentral chi-square) for a mean and a covariance known exactly; with estimates "
        "the limits are wider, so that false alarms keep their rate on average, and shifts are found later",
    )


def standards_only(given: VectorStandards | None, size: int | None, exclude: tuple[Exclusion, ...]) -> None:
    """Raises UnusableParameter for a fit without data that lacks what it needs."""
    faults = []
    if given is None:
        faults.append(
            Fault(
                "data-missing",
                "Without baseline data the standards must be given: the mean and the covariance.",
                ("standards",),
            )
        )
    if size is None:
        faults.append(
            Fault(
                "size-missing",
                "Without baseline data the subgroup size must be given; 1 for single observations.",
                ("subgroup_size",),
            )
        )
    if exclude:
        faults.append(Fault("no-such-point", "There is no baseline to exclude points from.", ("exclude",)))
    if faults:
        raise UnusableParameter(*faults)


def check_options(
    data: Vectors | None,
    given: VectorStandards | None,
    size: int | None,
    exclude: tuple[Exclusion, ...],
    estimator: Estimator | None,
) -> None:
    """Raises UnusableParameter for options that do not fit the data or each other."""
    if given is not None:
        check_standards(given)
        if estimator is not None:
            raise UnusableParameter.of(
                "estimator-with-standards",
                "The covariance is given, so there is nothing to estimate; leave the estimator out.",
                "covariance_estimator",
            )
    if data is None:
        standards_only(given, size, exclude)
        return
    if size is not None:
        raise UnusableParameter.of(
            "size-with-data",
            "The subgroup size comes with the data; give it here only without data.",
            "subgroup_size",
        )
    if given is not None and given.variables != data.names:
        raise UnusableParameter.of(
            "variables-differ",
            "The standards must name the variables of the data, in the same order.",
            "standards",
            "variables",
        )


def fit(data: Vectors | None, options: TSquaredOptions) -> TSquaredFit:
    """Limits of a ``t-squared`` chart from a baseline, or from a known mean and covariance.

    T² = n (x̄ − mean)' S⁻¹ (x̄ − mean). Standards given make the limit a chi-square quantile. An excluded
    point did not make the estimates, so the limit of new points is the one it is shown with.

    Raises UnusableData for a baseline too small or with dependent variables; UnusableParameter for
    options that do not fit. Source: [hotelling-1947], [tracy-young-mason-1992], [sullivan-woodall-1996].
    """
    given, alpha = options.standards, options.false_alarm_probability
    check_options(data, given, options.subgroup_size, options.exclude, options.covariance_estimator)
    found: Estimate | None = None
    if given is None:
        assert data is not None
        found = estimate(data, options.covariance_estimator, options.exclude)
        limits = _estimated(data, found, options)
    else:
        p = len(given.variables)
        record = None
        if data is not None:
            present = data.present()
            count = int(np.count_nonzero(present))
            record = BaselineRecord(count, count * data.subgroup_size, options.exclude)
        upper = float(scipy.special.chdtri(p, alpha))
        alone = float(scipy.special.chdtri(1, alpha))
        size = data.subgroup_size if data is not None else options.subgroup_size
        assert size is not None
        limits = TSquaredLimits(
            given.variables,
            given.mean,
            given.covariance,
            "given",
            None,
            size,
            alpha,
            None if data is None else upper,
            TSquaredPanels(PanelLimits(float(p), None, upper)),
            alone,
            alone,
            record,
        )
    upper_ = limits.panels.t_squared.upper
    assert upper_ is not None
    performance = t_squared_performance(len(limits.variables), alpha, limits.subgroup_size)
    if data is None:
        return Fit(limits, None, None, performance, ())

    kept = exclusion_mask(len(data.values), options.exclude)
    measure = metric(limits.mean, limits.covariance)
    means = data.means()
    deviations = means - measure.mean
    statistic = limits.subgroup_size * measure.squares(deviations)
    line: float | Floats
    if found is not None and found.estimator == "successive-differences":
        line = successive.baseline_limits(found.kept, len(limits.variables), alpha)
        line = np.where(found.kept, line, upper_)
    else:
        assert limits.baseline_upper is not None
        line = limits.baseline_upper
        if kept is not None:
            line = np.where(kept, line, upper_)
    plot = _plot(statistic, len(limits.variables), line)
    seen, _ = watch("t_squared", plot, kept=kept)
    terms = (limits.unconditional_limit, limits.conditional_limit)
    details = decompose(
        seen.signals, deviations, statistic, limits.subgroup_size, measure, limits.variables, terms
    )
    panels = TSquaredPanels(plot.panel())
    shown = None if found is None else diagnose(found, means, measure, data)
    return Fit(
        limits,
        Baseline(seen.verdict, panels, seen.signals, seen.found, details),
        shown,
        performance,
        (
            *(() if found is None or shown is None else cautions_of(found, shown)),
            *too_many_signals(seen),
        ),
    )


def _plot(statistic: Floats, p: int, upper: float | Floats) -> Plot:
    return Plot(statistic, float(p), math.sqrt(2.0 * p), None, upper, floor=0.0)


def _estimated(data: Vectors, found: Estimate, options: TSquaredOptions) -> TSquaredLimits:
    p, size, alpha = len(data.names), data.subgroup_size, options.false_alarm_probability
    m, estimator = found.observations, found.estimator
    lengths: tuple[int, ...] = ()
    before: float | None = None
    if estimator == "successive-differences":
        lengths = tuple(sorted(successive.paths(found.kept)[1]))
    else:
        before = baseline_limit(estimator, m, size, p, alpha)
    upper, alone, given = new_point_limits(estimator, lengths, m, size, p, alpha)
    return TSquaredLimits(
        data.names,
        tuple(found.mean.tolist()),
        matrix(found.covariance),
        estimator,
        found.degrees_of_freedom,
        size,
        alpha,
        before,
        TSquaredPanels(PanelLimits(float(p), None, upper)),
        alone,
        given,
        BaselineRecord(m, m * size, options.exclude),
    )


def judge(limits: TSquaredLimits, data: Vectors, carry: TSquaredCarry | None) -> TSquaredJudgement:
    """New points under frozen limits: distances, signals taken apart by variable, and the carry.

    Raises UnusableData where the data has other variables or another subgroup size than the limits.
    """
    same_data(limits.variables, limits.subgroup_size, data)
    measure = metric(limits.mean, limits.covariance)
    deviations = data.means() - measure.mean
    statistic = limits.subgroup_size * measure.squares(deviations)
    upper = limits.panels.t_squared.upper
    assert upper is not None
    plot = _plot(statistic, len(limits.variables), upper)
    seen, _ = watch("t_squared", plot)
    terms = (limits.unconditional_limit, limits.conditional_limit)
    return Judgement(
        seen.verdict,
        TSquaredPanels(plot.panel()),
        seen.signals,
        seen.found,
        TSquaredCarry((carry.points if carry else 0) + len(data.values)),
        too_many_signals(seen),
        decompose(
            seen.signals, deviations, statistic, limits.subgroup_size, measure, limits.variables, terms
        ),
    )


CHARTS = (
    Chart(
        name="t-squared",
        title="Several variables as one distance",
        purpose="Watches the level of several correlated characteristics of a piece together, and says which of "
        "them a signal comes from.",
        takes="Rows of 2 to 50 characteristics, a row an observation, or equal subgroups of rows.",
        beware="It sees large shifts; small lasting ones are the business of mewma. A point with a missing value "
        "is a gap as a whole.",
        panels=("t_squared",),
        references=("hotelling-1947", "tracy-young-mason-1992", "mason-tracy-young-1995"),
        fit=fit,
        judge=judge,
        limits=TSquaredLimits,
        plotted=TSquaredPanels[Panel],
        carry=TSquaredCarry,
        diagnostics=VectorDiagnostics,
        details=Decompositions,
    ),
)
