"""The ``mewma`` chart: exponentially weighted averages of several variables, as one distance.

zᵢ = λ (xᵢ − mean) + (1 − λ) zᵢ₋₁ from z₀ = 0, judged by zᵢ'Σz⁻¹zᵢ ([lowry-woodall-champ-rigdon-1992]). The
limit comes from the chart's own run length, not from a table.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass
from typing import Annotated, Generic, Literal, TypeAlias, TypeVar

import numpy as np
import scipy

from ..bounds import MULTIPLE, POSITIVE, SIZE, WEIGHT
from ..data import Booleans, Floats, Vectors
from ..errors import UnusableData, UnusableParameter
from ..runlength import mewma as run_length
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
from .multivariate import SHIFT_UNIT, SHIFTS, check_options
from .registry import Chart
from .vectors import (
    Decompositions,
    Estimate,
    Estimator,
    Matrix,
    Metric,
    VectorDiagnostics,
    VectorStandards,
    cautions_of,
    decompose,
    diagnose,
    estimate,
    filled,
    matrix,
    metric,
    same_data,
)

T = TypeVar("T")

Covariance = Literal["time-varying", "asymptotic"]

USUAL_SMOOTHING = 0.1
USUAL_ARL = 370.0
TERM_PROBABILITY = 0.0027
"""Of a term of a decomposed signal beyond its limit, were it looked at alone."""

LARGEST_LIMIT = 1000.0
_FEW = 64  # points up to which plain steps outrun the filter
_MOST_WORK = 5_000_000  # kernel values of run lengths after shifts: about a second
_LONGEST_TOLD = 1e15


@dataclass(frozen=True, slots=True)
class MewmaPanels(Generic[T]):
    """The panel of a ``mewma`` chart."""

    mewma: Annotated[T, "Squared distance of each smoothed vector from the mean, under its own covariance."]


@dataclass(frozen=True, slots=True)
class MewmaOptions:
    """How the limit of a ``mewma`` chart is to be computed: from a run length, unless it is given."""

    smoothing: float = USUAL_SMOOTHING
    limit_covariance: Covariance = "asymptotic"
    in_control_arl: float | None = None
    limit: float | None = None
    covariance_estimator: Estimator | None = None
    standards: VectorStandards | None = None
    subgroup_size: int | None = None
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True)
class MewmaLimits:
    """The frozen parameters of a ``mewma`` chart."""

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
    smoothing: Annotated[float, "Weight of the newest point, λ.", WEIGHT]
    limit_covariance: Annotated[
        Covariance,
        "`time-varying`: the exact covariance of each smoothed vector since the start. `asymptotic`: the one "
        "it settles at.",
    ]
    limit: Annotated[float, "The upper limit h.", MULTIPLE]
    panels: Annotated[MewmaPanels[PanelLimits], "The lines. The centre is the mean of the statistic."]
    baseline: Annotated[
        BaselineRecord | None, "What the limits were computed from; null for standards alone."
    ]


@dataclass(frozen=True, slots=True)
class MewmaCarry:
    """What judging needs to remember of the points before."""

    points: Annotated[int, "Points judged so far under these limits."]
    smoothed: Annotated[int, "Those of them that were no gaps."]
    vector: Annotated[tuple[float, ...], "The last smoothed vector less the mean, in the variables' units."]


MewmaFit: TypeAlias = Fit[MewmaLimits, MewmaPanels[Panel], VectorDiagnostics]


MewmaJudgement: TypeAlias = Judgement[MewmaPanels[Panel], MewmaCarry]


@functools.lru_cache(maxsize=512)
def mewma_performance(p: int, smoothing: float, limit: float, size: int, exact: bool) -> Performance:
    """Run lengths of the chart for known parameters, from a start at the mean; see ``runlength.mewma``."""
    in_control = run_length.in_control_arl(p, smoothing, limit, exact=exact)
    method = f"{run_length.METHOD}, {run_length.ACCURACY}, for a mean and a covariance known exactly"
    shifts: tuple[ShiftPerformance, ...] = ()
    if in_control < _LONGEST_TOLD:
        # The kernel is a Bessel function, which takes longer the higher its order is.
        slow = 1.0 + max(p - 10, 0) / 10
        if slow * run_length.work(smoothing, limit, exact=exact) > _MOST_WORK:
            method += "; those after shifts are not computed for so many variables with so little smoothing"
        else:
            scaled = tuple(shift * math.sqrt(size) for shift in SHIFTS)
            found = run_length.arls(p, smoothing, limit, scaled, exact=exact)
            shifts = tuple(ShiftPerformance(*pair) for pair in zip(SHIFTS, found, strict=True))
    return Performance(
        "mewma",
        in_control if in_control < _LONGEST_TOLD else None,
        None,
        shifts,
        SHIFT_UNIT,
        float(size),
        method,
    )


def fit(data: Vectors | None, options: MewmaOptions) -> MewmaFit:
    """Limits of a ``mewma`` chart from a baseline, or from a known mean and covariance.

    The limit h is the one whose in-control average run length is the one asked for (370 unless given),
    were mean and covariance known exactly; or h itself is given. An excluded point is shown as if it were
    the newest, and is not carried on.

    Raises UnusableData for a baseline too small or with dependent variables; UnusableParameter for
    options that do not fit. Source: [lowry-woodall-champ-rigdon-1992], [prabhu-runger-1997].
    """
    given = options.standards
    check_options(data, given, options.subgroup_size, options.exclude, options.covariance_estimator)
    if options.limit is not None and options.in_control_arl is not None:
        raise UnusableParameter.of(
            "limit-given-twice",
            "The limit follows from the in-control run length; give one of them, not both.",
            "limit",
        )
    found: Estimate | None = None
    record: BaselineRecord | None = None
    if given is None:
        assert data is not None
        found = estimate(data, options.covariance_estimator, options.exclude)
        names, mean, covariance = data.names, tuple(found.mean.tolist()), matrix(found.covariance)
        record = BaselineRecord(found.observations, found.observations * data.subgroup_size, options.exclude)
    else:
        names, mean, covariance = given.variables, given.mean, given.covariance
        if data is not None:
            count = int(np.count_nonzero(data.present()))
            record = BaselineRecord(count, count * data.subgroup_size, options.exclude)
    size = data.subgroup_size if data is not None else options.subgroup_size
    assert size is not None
    p, exact = len(names), options.limit_covariance == "time-varying"
    limit = options.limit
    if limit is None:
        wanted = USUAL_ARL if options.in_control_arl is None else options.in_control_arl
        limit = run_length.limit_for(p, options.smoothing, wanted, exact=exact)
    limits = MewmaLimits(
        names,
        mean,
        covariance,
        "given" if found is None else found.estimator,
        None if found is None else found.degrees_of_freedom,
        size,
        options.smoothing,
        options.limit_covariance,
        limit,
        MewmaPanels(PanelLimits(float(p), None, limit)),
        record,
    )
    performance = mewma_performance(p, options.smoothing, limit, size, exact)
    if data is None:
        return Fit(limits, None, None, performance, ())

    kept = exclusion_mask(len(data.values), options.exclude)
    measure = metric(mean, covariance)
    means = data.means()
    vectors, scale, plot, _ = _plot(limits, means, measure, data.present(), kept, None)
    seen, _ = watch("mewma", plot, kept=kept)
    shown = None if found is None else diagnose(found, means, measure, data)
    return Fit(
        limits,
        Baseline(
            seen.verdict,
            MewmaPanels(plot.panel()),
            seen.signals,
            seen.found,
            decompose(seen.signals, vectors, plot.value, scale, measure, names, _term_limits()),
        ),
        shown,
        performance,
        (
            *(() if found is None or shown is None else cautions_of(found, shown)),
            *too_many_signals(seen),
        ),
    )


@functools.cache
def _term_limits() -> tuple[float, float]:
    limit = float(scipy.special.chdtri(1, TERM_PROBABILITY))
    return limit, limit


def _smooth(steps: Floats, smoothing: float, start: Floats) -> Floats:
    """(m, p) ``zᵢ = (1 − λ) zᵢ₋₁ + λ xᵢ``; both roads round alike."""
    rest = 1.0 - smoothing
    if len(steps) > _FEW:
        smoothed: Floats = scipy.signal.lfilter(
            [smoothing], [1.0, -rest], steps, axis=0, zi=(rest * start)[None, :]
        )[0]
        return smoothed
    found = np.empty_like(steps)
    now = start
    for at, step in enumerate(smoothing * steps):
        now = rest * now + step
        found[at] = now
    return found


def _plot(
    limits: MewmaLimits,
    means: Floats,
    measure: Metric,
    present: Booleans,
    kept: Booleans | None,
    carry: MewmaCarry | None,
) -> tuple[Floats, float | Floats, Plot, MewmaCarry]:
    """The smoothed vectors (m, p), the scale of their distances, their panel, and the carry."""
    m, p = means.shape
    deviations = means - measure.mean
    smoothing = limits.smoothing
    start = np.zeros(p) if carry is None else np.array(carry.vector)
    before = 0 if carry is None else carry.smoothed
    counted = present if kept is None else present & kept
    whole = bool(counted.all())
    with np.errstate(over="ignore", invalid="ignore"):
        found = _smooth(deviations if whole else deviations[counted], smoothing, start)
    last = found[-1] if len(found) else start
    if whole:
        vectors = found
        number = before + 1.0 + np.arange(m)
    else:
        vectors = np.full((m, p), np.nan)
        vectors[counted] = found
        number = before + np.cumsum(counted) * 1.0
        if kept is not None:
            apart = present & ~kept
            held = filled(counted)[apart]
            earlier = np.where((held >= 0)[:, None], vectors[held], start)
            vectors[apart] = (1.0 - smoothing) * earlier + smoothing * deviations[apart]
            number[apart] += 1.0
    scale: float | Floats = limits.subgroup_size * (2.0 - smoothing) / smoothing
    if limits.limit_covariance == "time-varying" and smoothing < 1.0:
        settled = -np.expm1(2.0 * math.log1p(-smoothing) * np.maximum(number, 1.0))
        scale = scale / settled
    statistic = measure.squares(vectors) * scale
    plot = Plot(statistic, float(p), math.sqrt(2.0 * p), None, limits.limit, floor=0.0)
    points = (0 if carry is None else carry.points) + m
    return vectors, scale, plot, MewmaCarry(points, before + len(found), tuple(last.tolist()))


def judge(limits: MewmaLimits, data: Vectors, carry: MewmaCarry | None) -> MewmaJudgement:
    """New points under frozen limits: smoothed distances, signals taken apart by variable, and the carry.

    A gap leaves the smoothed vector as it is. Judging in one call or in any split with the carry passed
    on gives identical signals. Raises UnusableData where the data has other variables or another subgroup
    size than the limits.
    """
    same_data(limits.variables, limits.subgroup_size, data)
    if carry is not None and len(carry.vector) != len(limits.variables):
        raise UnusableData.of("carry-of-other-limits", "This carry is of other variables.", "carry", "vector")
    measure = metric(limits.mean, limits.covariance)
    vectors, scale, plot, after = _plot(limits, data.means(), measure, data.present(), None, carry)
    seen, _ = watch("mewma", plot)
    return Judgement(
        seen.verdict,
        MewmaPanels(plot.panel()),
        seen.signals,
        seen.found,
        after,
        too_many_signals(seen),
        decompose(seen.signals, vectors, plot.value, scale, measure, limits.variables, _term_limits()),
    )


CHARTS = (
    Chart(
        name="mewma",
        title="Weighted averages of several variables",
        purpose="Watches several correlated characteristics of a piece together for small, lasting shifts.",
        takes="Rows of 2 to 50 characteristics, a row an observation, or equal subgroups of rows.",
        beware="The limit supposes a mean and a covariance known exactly: from few observations false alarms are "
        "more frequent than stated. A point with a missing value is a gap as a whole.",
        panels=("mewma",),
        references=("lowry-woodall-champ-rigdon-1992", "rigdon-1995", "runger-prabhu-1996"),
        fit=fit,
        judge=judge,
        limits=MewmaLimits,
        plotted=MewmaPanels[Panel],
        carry=MewmaCarry,
        diagnostics=VectorDiagnostics,
        details=Decompositions,
    ),
)
