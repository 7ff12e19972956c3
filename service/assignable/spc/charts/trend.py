"""A level that drifts by nature: ``trend`` ([mandel-1969], [montgomery-2013]).

Tool wear, a bath that is used up: a line is fitted by least squares, the limits run parallel to it, and
the position at which the line meets an adjustment limit is foretold with an interval [fieller-1954].
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from .. import cautions as caution
from .. import diagnostics
from ..bounds import MULTIPLE, POSITIVE, PROBABILITY, SIGMA, SIZE
from ..cautions import Caution
from ..data import Floats, SubgroupStatistics
from ..errors import Fault, UnusableData, UnusableParameter
from ..rules import Rule, Tail, watched
from ..sigma import moving_range, within
from ._levels import (
    SPAN,
    Data,
    Form,
    LevelSpread,
    check_form,
    form_of,
    level_lines,
    level_performance,
    level_plots,
    moving_of,
    points_of,
    watch_levels,
)
from .common import (
    AT_THREE_SIGMA,
    FOLLOWING,
    Baseline,
    BaselineRecord,
    Exclusion,
    Fit,
    Judgement,
    LimitBasis,
    Panel,
    PanelLimits,
    Plot,
    exclusion_mask,
    too_many_signals,
)
from .registry import Chart
from .subgroups import size_cautions

SigmaFrom = Literal["residual-sd", "residual-moving-range", "within-subgroup"]
FEWEST_POINTS = 3
CONFIDENCE = 0.95
NO_TREND = 0.05
"""A slope with a larger p-value than this may as well be none."""


@dataclass(frozen=True, slots=True)
class AdjustmentLimits:
    """Levels at which the process is adjusted, in the unit of the characteristic."""

    lower: float | None = None
    upper: float | None = None


NO_ADJUSTMENT = AdjustmentLimits()


@dataclass(frozen=True, slots=True)
class TrendOptions:
    """How the line and its limits are to be computed. sigma: of single values, where it is known."""

    sigma_from: SigmaFrom = "residual-sd"
    sigma: float | None = None
    adjustment: AdjustmentLimits = NO_ADJUSTMENT
    confidence: float = CONFIDENCE
    basis: LimitBasis = AT_THREE_SIGMA
    rules: tuple[Rule, ...] = ()
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class TrendData:
    """Points in time order with their positions along the line.

    positions: (m,), or ``None`` for the order itself, a step a point, gaps included. start: to judge by, the
    position of the first point in the order; ``None`` to go on after the last.
    """

    points: Data
    positions: Floats | None = None
    start: int | None = None


@dataclass(frozen=True, slots=True)
class Line:
    """The fitted line: level = mean_level + slope * (position - mean_position)."""

    slope: Annotated[float, "Change of the level for a step of 1 in position."]
    intercept: Annotated[float, "Level at position 0."]
    mean_position: Annotated[float, "Weighted mean of the baseline's positions."]
    mean_level: Annotated[float, "Level of the line there."]
    weight: Annotated[float, "Values the line rests on."]
    spread_of_positions: Annotated[
        float, "Weighted sum of squared distances of the positions from their mean."
    ]

    def at(self, positions: Floats) -> Floats:
        """The level at some positions."""
        return self.mean_level + self.slope * (positions - self.mean_position)


@dataclass(frozen=True, slots=True)
class AdjustmentPlan:
    """The adjustment limit that the line runs towards, and where it meets it."""

    limit: Annotated[float, "The adjustment limit, in the unit of the characteristic."]
    side: Annotated[Literal["lower", "upper"], "Which of the two it is."]
    position: Annotated[
        float | None,
        "Where the line meets it; null where the line runs away from it or does not rise or fall.",
    ]
    earliest: Annotated[
        float | None,
        "Lower end of the interval for that position; null where the slope is too uncertain for one.",
    ]
    latest: Annotated[
        float | None,
        "Upper end of the interval for that position; null where the slope is too uncertain for one.",
    ]
    confidence: Annotated[float, "Confidence of the interval."]


@dataclass(frozen=True, slots=True)
class TrendLimits:
    """The frozen parameters of a ``trend`` chart."""

    form: Annotated[Form, "Whether a point is a single value or a subgroup."]
    line: Annotated[Line, "The fitted line, which is the centre line."]
    position: Annotated[
        Literal["order", "given"],
        "`order`: position counts the points from 0, gaps included. `given`: as posted.",
    ]
    first_position: Annotated[float, "Position of the baseline's first point."]
    last_position: Annotated[float, "Position of the baseline's last point; `order` goes on after it."]
    sigma: Annotated[float, "Standard deviation of single values about the line.", SIGMA]
    sigma_estimator: Annotated[str, "How sigma was estimated; `given` where it was known."]
    degrees_of_freedom: Annotated[
        float | None, "(Effective) degrees of freedom of sigma; null where it was known.", POSITIVE
    ]
    adjustment: Annotated[
        AdjustmentPlan | None, "Where the line meets an adjustment limit; null where none was given."
    ]
    subgroup_size: Annotated[
        int | None,
        "The commonest size, which the lines are for; null for single values, or where none holds two.",
        SIZE,
    ]
    limit_basis: Annotated[Literal["sigma", "probability"], "How the limits were placed."]
    sigma_multiple: Annotated[
        float | None, "Limits lie this many sigma out; null under `probability`.", MULTIPLE
    ]
    false_alarm_probability: Annotated[
        float | None, "Of each panel and point; null under `sigma`.", PROBABILITY
    ]
    panels: Annotated[LevelSpread[PanelLimits], "The lines of each panel; null where they follow the line."]
    rules: Annotated[
        tuple[Rule, ...], "The rules in force, the limit first; they watch the distance from the line."
    ]
    baseline: Annotated[BaselineRecord, "What the line was computed from."]

    @property
    def basis(self) -> LimitBasis:
        """How far out the limits lie."""
        return LimitBasis(self.limit_basis, self.sigma_multiple, self.false_alarm_probability)


@dataclass(frozen=True, slots=True)
class TrendCarry:
    """What judging needs to remember of the points before."""

    points: Annotated[int, "Points judged so far under these limits."]
    position: Annotated[float, "Position of the last point; under `order` the next one follows it."]
    level: Annotated[Tail, "The last distances from the line, for the run rules."]
    recent: Annotated[tuple[float, ...], "The last distance since a gap, for the next moving range."]


@dataclass(frozen=True, slots=True, eq=False)
class TrendDiagnostics:
    """What the baseline itself shows."""

    slope_standard_error: Annotated[float, "Standard error of the slope, with the sigma of the limits."]
    slope_p_value: Annotated[
        float, "Two-sided probability of as steep a slope where the level does not drift."
    ]
    r_squared: Annotated[float, "Share of the variation of the level that the line explains, 0 to 1."]
    curvature_p_value: Annotated[
        float | None,
        "Probability of as large a quadratic part where the drift is straight; null where too few.",
    ]
    autocorrelation: Annotated[
        diagnostics.Autocorrelation | None, "Of the distances from the line; null where too few."
    ]
    normality: Annotated[diagnostics.Normality | None, "Of the distances from the line; null where too few."]


@dataclass(frozen=True, slots=True)
class Ahead:
    """How far off the adjustment is from the last point."""

    adjustment: Annotated[AdjustmentPlan, "Where the line meets the adjustment limit."]
    last_position: Annotated[float, "Position of the last point."]
    remaining: Annotated[
        float | None,
        "From the last point to where the line meets the limit, below 0 once past it; null where it does not.",
    ]


TrendFit: TypeAlias = Fit[TrendLimits, LevelSpread[Panel], TrendDiagnostics]


TrendJudgement: TypeAlias = Judgement[LevelSpread[Panel], TrendCarry]


def fit_line(positions: Floats, levels: Floats, weights: Floats) -> Line:
    """Weighted least squares of levels (m,) on positions (m,), without gaps.

    Raises UnusableData where all positions are one.
    """
    total = float(weights.sum())
    x = positions - positions[0]
    middle = float(weights @ x) / total
    x = x - middle
    y = levels - levels[0]
    height = float(weights @ y) / total
    y = y - height
    spread = float(weights @ (x * x))
    if not 0.0 < spread < math.inf:
        raise UnusableData.of(
            "one-position", "All points have one position, so no line goes through them.", "data", "positions"
        )
    slope = float(weights @ (x * y)) / spread
    mean_position = float(positions[0]) + middle
    mean_level = float(levels[0]) + height
    return Line(slope, mean_level - slope * mean_position, mean_position, mean_level, total, spread)


def meets(
    line: Line,
    limit: float,
    side: Literal["lower", "upper"],
    sigma: float,
    freedom: float | None,
    confidence: float,
) -> AdjustmentPlan:
    """Where the line meets a limit, with Fieller's interval.

    The positions δ (from the mean one) at which ``(D − bδ)² ≤ t²σ²(1/N + δ²/Sxx)``, D the limit less the mean
    level: an interval where the slope is significant, none otherwise. Source: [fieller-1954].
    """
    b = line.slope
    nothing = AdjustmentPlan(limit, side, None, None, None, confidence)
    if b == 0.0 or (b > 0.0) != (side == "upper"):
        return nothing
    distance = (limit - line.mean_level) / b
    tail = 0.5 * (1.0 + confidence)
    t = float(scipy.special.ndtri(tail) if freedom is None else scipy.special.stdtrit(freedom, tail))
    reach = t * sigma / b
    g = reach * reach / line.spread_of_positions
    position = line.mean_position + distance
    if not math.isfinite(position):
        return nothing
    if not g < 1.0:
        return replace(nothing, position=position)
    half = math.sqrt(g * distance * distance + (1.0 - g) * reach * reach / line.weight)
    earliest = line.mean_position + (distance - half) / (1.0 - g)
    latest = line.mean_position + (distance + half) / (1.0 - g)
    if not (math.isfinite(earliest) and math.isfinite(latest)):
        return replace(nothing, position=position)
    return AdjustmentPlan(limit, side, position, earliest, latest, confidence)


def _check(data: TrendData, options: TrendOptions) -> None:
    adjustment = options.adjustment
    faults = []
    if data.start is not None:
        faults.append(
            Fault(
                "start-of-baseline",
                "A baseline starts at position 0; give `start` only to judge by.",
                ("data", "start"),
            )
        )
    if form_of(data.points) == "individuals" and options.sigma_from == "within-subgroup":
        faults.append(
            Fault(
                "estimator-of-other-data",
                "Single values have no variation within a subgroup; use `residual-sd` or `residual-moving-range`.",
                ("sigma_from",),
            )
        )
    if adjustment.lower is not None and adjustment.upper is not None and adjustment.lower >= adjustment.upper:
        faults.append(
            Fault(
                "limits-out-of-order",
                "The lower adjustment limit must lie below the upper one.",
                ("adjustment", "lower"),
            )
        )
    if faults:
        raise UnusableParameter(*faults)


def _positions(data: TrendData, points: SubgroupStatistics, start: float) -> Floats:
    """(m,) position of each point."""
    if data.positions is None:
        return np.arange(len(points.size), dtype=np.float64) + start
    if len(data.positions) != len(points.size):
        raise UnusableData.of(
            "unequal-length",
            f"There are {len(data.positions)} positions for {len(points.size)} points; give one for each.",
            "data",
            "positions",
        )
    return data.positions


def _plots(
    points: SubgroupStatistics, ranges: Floats | None, line: Floats, limits: TrendLimits
) -> tuple[tuple[Plot, Plot], LevelSpread[Panel]]:
    """What the rules look at (distances from the line), and the panels, whose lines follow the line.

    ranges: moving ranges of the distances, where points are single values.
    """
    about = replace(points, mean=points.mean - line, range=points.range if ranges is None else ranges)
    plots = level_plots(about, limits.form, 0.0, limits.sigma, limits.basis)
    lower, upper = plots[0].lower, plots[0].upper
    assert lower is not None
    assert upper is not None
    shown = replace(plots[0], value=points.mean, centre=line, lower=line + lower, upper=line + upper)
    return plots, LevelSpread(shown.panel(), plots[1].panel())


def fit(data: TrendData | None, options: TrendOptions) -> TrendFit:
    """The line, its parallel limits and where it meets an adjustment limit, from a baseline.

    Weighted least squares of the level on position, a subgroup weighing its size. Limits: line ± k·σ/√nᵢ.
    σ: ``√(Σnᵢeᵢ²/(m − 2))`` from the residuals e; or from moving ranges of ``√nᵢ·eᵢ``, which a later step in the
    baseline widens less; or within the subgroups. The line is taken as exact in placing the limits.

    Raises UnusableData for fewer than three points, one position, or points on the line without
    variation; UnusableParameter for options that do not fit. Source: [mandel-1969], [montgomery-2013].
    """
    if data is None:
        raise UnusableParameter.of("data-missing", "A line is fitted to data: give a baseline.", "data")
    _check(data, options)
    rules, basis = watched(options.rules), options.basis
    form = form_of(data.points)
    points = points_of(data.points)
    positions = _positions(data, points, 0.0)
    kept = exclusion_mask(len(points.size), options.exclude)
    used = points if kept is None else points.keep(kept)
    there = used.size > 0
    filled = int(np.count_nonzero(there))
    if filled < FEWEST_POINTS:
        raise UnusableData.of(
            "too-few-points",
            f"A line with limits needs at least {FEWEST_POINTS} points, and 20 to 25 to deserve trust; there are "
            f"{filled}.",
            "data",
        )
    weights = used.size[there].astype(np.float64)
    line = fit_line(positions[there], used.mean[there], weights)
    centre = line.at(positions)
    distance = used.mean - centre
    residual = distance[there] * np.sqrt(weights)
    sigma, estimator, freedom = _sigma(options, used, distance, residual, used.mean[there])
    total = int(used.size.sum())
    plan = _plan(line, options, sigma, freedom)
    size = None if form == "individuals" else used.usual_size
    limits = TrendLimits(
        form,
        line,
        "order" if data.positions is None else "given",
        float(positions[0]),
        float(positions[-1]),
        sigma,
        estimator,
        freedom,
        plan,
        size,
        basis.limit_basis,
        basis.sigma_multiple,
        basis.false_alarm_probability,
        replace(level_lines(form, size, 0.0, sigma, basis), level=FOLLOWING),
        rules,
        BaselineRecord(filled, total, options.exclude),
    )
    ranges = moving_of(distance, ())[0] if form == "individuals" else None
    plots, panels = _plots(points, ranges, centre, limits)
    seen, _ = watch_levels(plots, rules, None, kept, form)
    ahead = _ahead(plan, float(positions[-1]))
    found = _diagnose(line, positions[there], used.mean[there], weights, residual, distance, sigma, freedom)
    return Fit(
        limits,
        Baseline(seen.verdict, panels, seen.signals, seen.found, ahead),
        found,
        level_performance(rules, basis, form, total / filled),
        caution.collect(
            caution.few_individuals(filled) if form == "individuals" else caution.few_subgroups(filled),
            _no_trend(found),
            _curved(found),
            _unreachable(plan),
            caution.autocorrelated(found.autocorrelation),
            caution.not_normal(found.normality),
            *too_many_signals(seen),
        ),
    )


def _sigma(
    options: TrendOptions, used: SubgroupStatistics, distance: Floats, residual: Floats, levels: Floats
) -> tuple[float, str, float | None]:
    """Sigma of single values about the line, its estimator and its degrees of freedom."""
    if options.sigma is not None:
        return options.sigma, "given", None
    if options.sigma_from == "within-subgroup":
        found = within(used, "mean-range")
        return found.sigma, found.estimator, found.degrees_of_freedom
    largest = float(np.abs(residual).max())
    scale = max(float(np.ptp(levels)), float(np.abs(levels).max()) * 1e-3)
    # What rounding leaves of points on a line is no variation.
    if not largest > 1e-12 * scale:
        raise UnusableData.of(
            "no-variation",
            "Every point lies on the line, so there is no variation to set limits from; check the resolution of the "
            "gauge or how the values were recorded.",
            "data",
        )
    if options.sigma_from == "residual-moving-range":
        whole = distance * np.sqrt(np.maximum(used.size, 1))
        estimate = moving_range(whole, span=SPAN)
        return estimate.sigma, "residual-moving-range", estimate.degrees_of_freedom
    freedom = len(residual) - 2
    scaled = residual / largest
    sigma = largest * math.sqrt(float(scaled @ scaled) / freedom)
    if not 1e-140 <= sigma <= 1e150:
        raise UnusableData.of("out-of-scale", "The spread of the values cannot be represented.", "data")
    return sigma, "residual-sd", float(freedom)


def _plan(line: Line, options: TrendOptions, sigma: float, freedom: float | None) -> AdjustmentPlan | None:
    """The adjustment limit ahead of the line, or the one there is."""
    lower, upper = options.adjustment.lower, options.adjustment.upper
    if lower is None and upper is None:
        return None
    rising = upper is not None and (line.slope > 0 or lower is None)
    limit, side = (upper, "upper") if rising else (lower, "lower")
    assert limit is not None
    found: Literal["lower", "upper"] = "upper" if side == "upper" else "lower"
    return meets(line, limit, found, sigma, freedom, options.confidence)


def _ahead(plan: AdjustmentPlan | None, last: float) -> Ahead | None:
    if plan is None:
        return None
    return Ahead(plan, last, None if plan.position is None else plan.position - last)


def _diagnose(
    line: Line,
    positions: Floats,
    levels: Floats,
    weights: Floats,
    residual: Floats,
    distance: Floats,
    sigma: float,
    freedom: float | None,
) -> TrendDiagnostics:
    error = sigma / math.sqrt(line.spread_of_positions)
    t = -abs(line.slope) / error
    p = 2.0 * float(scipy.special.ndtr(t) if freedom is None else scipy.special.stdtr(freedom, t))
    unit = float(np.abs(levels - line.mean_level).max()) or 1.0
    y, e = (levels - line.mean_level) / unit, residual / unit
    squares, left = float(weights @ (y * y)), float(e @ e)
    return TrendDiagnostics(
        error,
        p,
        min(max(1.0 - left / squares, 0.0), 1.0) if squares > 0 else 0.0,
        _curvature(line, positions, weights, e, left),
        diagnostics.autocorrelation(distance),
        diagnostics.normality(residual),
    )


def _curvature(line: Line, positions: Floats, weights: Floats, e: Floats, left: float) -> float | None:
    """F test of a quadratic part beside the line."""
    m = len(positions)
    freedom = m - 3
    if freedom < 1 or left <= 0.0:
        return None
    x = (positions - line.mean_position) / math.sqrt(line.spread_of_positions / line.weight)
    total = line.weight
    q = x * x - 1.0
    q = q - float(weights @ (q * x)) / total * x
    root = np.sqrt(weights)
    norm = float(weights @ (q * q))
    if norm <= 1e-12 * total:
        return None
    explained = float(root * q @ e) ** 2 / norm
    rest = left - explained
    if rest <= 0.0:
        return 0.0
    return float(scipy.special.fdtrc(1.0, freedom, explained * freedom / rest))


def _no_trend(found: TrendDiagnostics) -> Caution | None:
    if found.slope_p_value < NO_TREND:
        return None
    return Caution(
        "no-trend",
        f"The slope may as well be none (p = {found.slope_p_value:.2g}), so the line foretells nothing. Use the "
        "`individuals` chart or a chart of subgroups, unless the drift is known from elsewhere.",
        ("data",),
        "mandel-1969",
    )


def _curved(found: TrendDiagnostics) -> Caution | None:
    if found.curvature_p_value is None or found.curvature_p_value >= caution.SIGNIFICANCE:
        return None
    return Caution(
        "curved",
        f"The drift is not straight (test of a quadratic part: p = {found.curvature_p_value:.2g}): the limits lie "
        "wrong along it, and a position foretold from it is not to be trusted. Fit a shorter stretch.",
        ("data",),
        "montgomery-2013",
    )


def _unreachable(plan: AdjustmentPlan | None) -> Caution | None:
    if plan is None:
        return None
    if plan.position is None:
        return Caution(
            "adjustment-not-ahead",
            f"The line does not run towards the {plan.side} adjustment limit, so it never meets it.",
            ("adjustment", plan.side),
            "fieller-1954",
        )
    if plan.earliest is None:
        return Caution(
            "slope-uncertain",
            "The slope is too uncertain for an interval of the position at which the line meets the adjustment "
            "limit: it could be anywhere.",
            ("adjustment", plan.side),
            "fieller-1954",
        )
    return None


def judge(limits: TrendLimits, data: TrendData, carry: TrendCarry | None) -> TrendJudgement:
    """New points by the continued line: points, signals, and the carry for the next call.

    Under ``order`` the first point follows the carry's last, or the baseline's, or stands at ``start`` (0 for a
    new tool). Judging in one call or in any split with the carry passed on gives identical signals.
    Raises UnusableData where the points are of another form, or lack positions, or have them too many.
    """
    check_form(limits.form, data.points)
    _check_positions(limits, data, carry)
    points = points_of(data.points)
    before = carry or _after_baseline(limits)
    start = float(data.start) if data.start is not None else before.position + 1.0
    positions = _positions(data, points, start)
    line = limits.line.at(positions)
    ranges: Floats | None = None
    recent: tuple[float, ...] = ()
    if limits.form == "individuals":
        ranges, recent = moving_of(points.mean - line, before.recent)
    plots, panels = _plots(points, ranges, line, limits)
    seen, tail = watch_levels(plots, limits.rules, before.level, None, limits.form)
    last = float(positions[-1])
    ahead = _ahead(limits.adjustment, last)
    return Judgement(
        seen.verdict,
        panels,
        seen.signals,
        seen.found,
        TrendCarry(before.points + len(points.size), last, tail, recent),
        (
            *_judged_cautions(limits, ahead, positions),
            *size_cautions(limits.subgroup_size, points.size),
            *too_many_signals(seen),
        ),
        ahead,
    )


def _after_baseline(limits: TrendLimits) -> TrendCarry:
    """The carry of a start afresh, right after the baseline."""
    return TrendCarry(0, limits.last_position, Tail(), ())


def _check_positions(limits: TrendLimits, data: TrendData, carry: TrendCarry | None) -> None:
    if limits.position == "given":
        if data.positions is None:
            raise UnusableData.of(
                "positions-missing",
                "The line was fitted on given positions; give one with each new point.",
                "data",
                "positions",
            )
    elif data.positions is not None:
        raise UnusableData.of(
            "positions-not-used",
            "The line was fitted on the order of the points, so positions have no meaning to it.",
            "data",
            "positions",
        )
    if data.start is None:
        return
    if limits.position == "given":
        raise UnusableData.of(
            "start-not-used", "With given positions there is no start to count from.", "data", "start"
        )
    if carry is not None:
        raise UnusableData.of(
            "start-with-carry",
            "The carry says where the points go on; give `start` only without one, as for a new tool.",
            "data",
            "start",
        )


def _judged_cautions(limits: TrendLimits, ahead: Ahead | None, positions: Floats) -> tuple[Caution, ...]:
    found = []
    if (
        ahead is not None
        and ahead.adjustment.position is not None
        and ahead.last_position
        >= (ahead.adjustment.position if ahead.adjustment.earliest is None else ahead.adjustment.earliest)
    ):
        past = ahead.last_position >= ahead.adjustment.position
        found.append(
            Caution(
                "adjustment-due",
                f"The line {'has met' if past else 'may meet'} the {ahead.adjustment.side} adjustment limit by now "
                f"(foretold for position {ahead.adjustment.position:.6g}, the last point stands at "
                f"{ahead.last_position:.6g}). Adjust, and start the line anew.",
                ("data",),
                "mandel-1969",
            )
        )
    first, last = limits.first_position, limits.last_position
    length = abs(last - first)
    if (
        float(positions.max()) > max(first, last) + length
        or float(positions.min()) < min(first, last) - length
    ):
        found.append(
            Caution(
                "extrapolated",
                "The points lie farther beyond the baseline than it is long, where nothing shows that the drift goes "
                "on straight. Set the line again from newer points.",
                ("data",),
                "montgomery-2013",
            )
        )
    return tuple(found)


CHARTS = (
    Chart(
        name="trend",
        title="A level that drifts, with parallel limits",
        purpose="Watches a characteristic that drifts by nature (tool wear, a bath used up) about a fitted line, and "
        "foretells where the line meets an adjustment limit.",
        takes="Single values or subgroups in time order, and their positions where points do not come evenly.",
        beware="The line is continued straight: a drift that bends gives wrong limits, and worse predictions.",
        panels=("level", "spread"),
        references=("mandel-1969", "montgomery-2013", "fieller-1954"),
        fit=fit,
        judge=judge,
        limits=TrendLimits,
        plotted=LevelSpread[Panel],
        carry=TrendCarry,
        diagnostics=TrendDiagnostics,
        details=Ahead,
    ),
)
