"""Exponentially weighted moving averages: ``ewma`` ([roberts-1959], [iso-7870-6]).

``zᵢ = (1 − λ) zᵢ₋₁ + λ x̄ᵢ`` from the centre line. Its variance follows each point's own size:
``vᵢ = (1 − λ)² vᵢ₋₁ + λ² σ²/nᵢ`` from 0, so that the limits widen from the first point on; or it is taken
as settled, ``λ/(2 − λ) · σ²/nᵢ``. At a gap the average holds its value and nothing is plotted.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass
from typing import Annotated, Generic, Literal, TypeAlias, TypeVar

import numpy as np
import scipy

from ..bounds import MULTIPLE, WEIGHT
from ..data import SubgroupStatistics
from ..design import memory as design
from ..errors import UnusableData
from ..runlength import memory as runlength
from ._memory import (
    FROM_DATA,
    Data,
    Detect,
    Parameters,
    Source,
    check_carry,
    check_given,
    designed,
    establish,
    points_of,
    present,
    price,
    scattered,
)
from .common import (
    Baseline,
    Fit,
    Judgement,
    Panel,
    PanelLimits,
    Performance,
    Plot,
    Watched,
    too_many_signals,
    watch,
)
from .registry import Chart
from .subgroups import SubgroupDiagnostics, size_cautions

T = TypeVar("T")
Variance = Literal["time-varying", "asymptotic"]


@dataclass(frozen=True, slots=True)
class EwmaPanels(Generic[T]):
    """The panel of an ``ewma`` chart."""

    ewma: Annotated[T, "Exponentially weighted moving averages of the points."]


@dataclass(frozen=True, slots=True)
class EwmaOptions:
    """How the limits of an EWMA chart are to be computed: by smoothing and limit, or by what to detect."""

    source: Source = FROM_DATA
    smoothing: float | None = None
    limit: float | None = None
    limit_variance: Variance = "time-varying"
    detect: Detect | None = None


@dataclass(frozen=True, slots=True)
class EwmaLimits(Parameters):
    """The frozen parameters of an EWMA chart."""

    smoothing: Annotated[float, "Weight of the newest point, λ.", WEIGHT]
    limit: Annotated[float, "Limits lie this many standard deviations of the average out, L.", MULTIPLE]
    limit_variance: Annotated[
        Variance,
        "`time-varying`: the exact variance of each average since the start. `asymptotic`: the variance it settles at.",
    ]
    detect: Annotated[Detect | None, "What the chart was designed for; null where its parameters were given."]
    panels: Annotated[
        EwmaPanels[PanelLimits], "The lines once the variance has settled; null where sizes differ."
    ]


@dataclass(frozen=True, slots=True)
class EwmaCarry:
    """What judging needs to remember of the points before."""

    points: Annotated[int, "Points judged so far under these limits."]
    deviation: Annotated[float, "The last average less the centre line."]
    variance: Annotated[float, "Its exact variance, in units of sigma squared."]


NEW = EwmaCarry(0, 0.0, 0.0)


EwmaFit: TypeAlias = Fit[EwmaLimits, EwmaPanels[Panel], SubgroupDiagnostics]


EwmaJudgement: TypeAlias = Judgement[EwmaPanels[Panel], EwmaCarry]


def fit(data: Data | None, options: EwmaOptions) -> EwmaFit:
    """Limits of an EWMA chart, from a baseline or from standards.

    With ``detect`` the smoothing is the one that finds the shift soonest at the stated in-control average
    run length under settled limits [crowder-1989], [lucas-saccucci-1990], and the limit the one that
    gives this run length with the limits asked for. (With limits that widen from the start, the shortest
    average from the start alone would ask for a memory without end.)

    Raises UnusableData for fewer than two points or no variation; UnusableParameter for options that do
    not fit. Source: [roberts-1959]; exact variance [lucas-saccucci-1990].
    """
    found = establish(data, options.source)
    smoothing, limit = _design(options, found.typical)
    limits = _limits(found.parameters, smoothing, limit, options)
    performance = _performance(smoothing, limit, options.limit_variance, found.typical)
    if found.points is None:
        return Fit(limits, None, None, performance, ())
    plot, _ = _plot(found.points, limits, NEW)
    seen, _ = watch("ewma", plot)
    return Fit(
        limits,
        Baseline(seen.verdict, EwmaPanels(plot.panel()), seen.signals, seen.found),
        found.diagnostics,
        performance,
        (*found.cautions, *too_many_signals(seen)),
    )


def _design(options: EwmaOptions, typical: float) -> tuple[float, float]:
    detect = options.detect
    check_given(detect, ("smoothing", options.smoothing), ("limit", options.limit))
    if detect is None:
        assert options.smoothing is not None
        assert options.limit is not None
        return options.smoothing, options.limit
    target = detect.in_control_arl

    def best(shift: float) -> tuple[float, float]:
        found = design.optimal_ewma(shift=shift, in_control_arl=target, shifts=())
        if options.limit_variance == "asymptotic":
            return found.smoothing, found.limit
        return found.smoothing, design.ewma_limit(
            smoothing=found.smoothing, in_control_arl=target, time_varying=True
        )

    return designed(detect, typical, best)


def _limits(found: Parameters, smoothing: float, limit: float, options: EwmaOptions) -> EwmaLimits:
    lines = PanelLimits(found.centre, None, None)
    if found.subgroup_size is not None:
        far = limit * found.sigma * math.sqrt(smoothing / (2.0 - smoothing) / found.subgroup_size)
        lines = PanelLimits(found.centre, found.centre - far, found.centre + far)
        if not (math.isfinite(far) and far > 0):
            raise UnusableData.of("out-of-scale", "The spread of the values cannot be represented.", "data")
    return EwmaLimits(*found.row, smoothing, limit, options.limit_variance, options.detect, EwmaPanels(lines))


@functools.lru_cache(1024)
def _performance(smoothing: float, limit: float, variance: Variance, typical: float) -> Performance:
    def run_length(shift: float) -> runlength.MemoryRunLength:
        return runlength.ewma(
            smoothing=smoothing, limit=limit, shift=shift, time_varying=variance == "time-varying"
        )

    return price("ewma", run_length, typical)


def _plot(points: SubgroupStatistics, limits: EwmaLimits, before: EwmaCarry) -> tuple[Plot, EwmaCarry]:
    """The averages with their limits, and the carry after them.

    The filters run the recursions one point after the other, so a split anywhere changes no bit.
    """
    mean, size, there = present(points)
    weight, rest = limits.smoothing, 1.0 - limits.smoothing
    deviation, variance = before.deviation, before.variance
    averages, variances = _recursion(weight, rest, mean - limits.centre, deviation), None
    variances = _recursion(weight * weight, rest * rest, 1.0 / size, variance)
    if len(averages):
        deviation, variance = float(averages[-1]), float(variances[-1])
    if limits.limit_variance == "asymptotic":
        variances = (weight / (2.0 - weight)) / size
    sigma = scattered(there, limits.sigma * np.sqrt(variances), limits.sigma)
    far = limits.limit * sigma
    values = scattered(there, limits.centre + averages, np.nan)
    plot = Plot(values, limits.centre, sigma, limits.centre - far, limits.centre + far)
    return plot, EwmaCarry(before.points + len(points.size), deviation, variance)


def _recursion(weight: float, rest: float, x: np.ndarray, before: float) -> np.ndarray:
    """``yᵢ = rest · yᵢ₋₁ + weight · xᵢ``."""
    if not len(x):
        return x
    y: np.ndarray = scipy.signal.lfilter([weight], [1.0, -rest], x, zi=[rest * before])[0]
    return y


def judge(limits: EwmaLimits, data: Data, carry: EwmaCarry | None) -> EwmaJudgement:
    """New points under frozen limits: averages, signals, and the carry for the next call.

    Judging in one call or in any split with the carry passed on gives identical signals. Raises
    DocumentMismatch for a carry that cannot be.
    """
    before = carry or NEW
    check_carry(0.0 <= before.variance <= 1.0)
    points = points_of(data)
    plot, after = _plot(points, limits, before)
    seen: Watched = watch("ewma", plot)[0]
    return Judgement(
        seen.verdict,
        EwmaPanels(plot.panel()),
        seen.signals,
        seen.found,
        after,
        (*size_cautions(limits.subgroup_size, points.size), *too_many_signals(seen)),
    )


CHARTS = (
    Chart(
        name="ewma",
        title="Exponentially weighted moving averages",
        purpose="Finds small lasting shifts of the level of a measured characteristic, which a chart of single "
        "points is slow to see.",
        takes="Rational subgroups of one size or of several, their means and sizes, or single values.",
        beware="Averages depend on those before them, so run rules have no meaning here; a large shift in one point "
        "is found sooner by the limits of the points themselves: keep that chart beside this one.",
        panels=("ewma",),
        references=("roberts-1959", "lucas-saccucci-1990", "iso-7870-6"),
        fit=fit,
        judge=judge,
        limits=EwmaLimits,
        plotted=EwmaPanels[Panel],
        carry=EwmaCarry,
        diagnostics=SubgroupDiagnostics,
    ),
)
