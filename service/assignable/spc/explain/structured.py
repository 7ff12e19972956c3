"""Worked steps of the charts of structured processes."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy

from ..charts._levels import SPAN, points_of
from ..charts.acceptance import AcceptanceLimits, deviate
from ..charts.between_within import BetweenWithinLimits
from ..charts.common import LimitBasis
from ..charts.residual import ResidualLimits
from ..charts.short_run import PartData, ShortRunLimits, _comparable, _places
from ..charts.trend import TrendData, TrendLimits, _positions
from ..data import Floats, Individuals, Subgroups, SubgroupStatistics
from .individuals import kept_values
from .pieces import (
    distance_step,
    grand_mean_steps,
    moving_range_step,
    moving_sigma_steps,
    multiple,
    normal_price_steps,
    place_of,
    shown_point,
    spread_steps,
    two_lines,
    values_mean_steps,
    which,
    within_steps,
)
from .steps import Pad, Step, Value, total_of
from .subgroups import row_of, used_statistics

_NORMAL = "normal quantile exceeded with probability {:g}"


def _excluded(limits: Any) -> tuple[int, ...]:
    return () if limits.baseline is None else tuple(one.index for one in limits.baseline.excluded)


def _spread_name(spread: str) -> str:
    return "range" if spread == "range" else "standard deviation"


# Between and within ---------------------------------------------------------------------------------


def fit_between_within(data: Any, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from a baseline to the components and the limits of means, and those of one subgroup."""
    pad, limits = Pad(), result.limits
    known = options.standards
    used = None
    if data is not None:
        used = used_statistics(data, _excluded(limits))
        means = used.mean
        if known.mean is None:
            values_mean_steps(pad, means, "#/limits/centre", "subgroup means")
        if known.sigma_within is None:
            within_steps(pad, used, limits.sigma_estimator, "#/limits/sigma_within")
        sizes = used.size[used.size > 0]
        size = len(sizes) / float((1.0 / sizes).sum())
        if known.sigma_between is None:
            moving_sigma_steps(
                pad, means, limits.span, limits.means_estimator, "#/limits/sigma_of_means", "subgroup means"
            )
            pad.work(
                "Sigma between subgroups: what of the variance of means the variation within does not explain",
                "sqrt(max(0, sigma_of_means**2 - sigma_within**2 / n))",
                "#/limits/sigma_between",
                sigma_of_means=limits.sigma_of_means,
                sigma_within=limits.sigma_within,
                n=(size, "harmonic mean of the sizes"),
            )
    else:
        size = float(options.subgroup_size)
    if known.sigma_between is not None:
        pad.work(
            "Standard deviation of means from the known components",
            "sqrt(sigma_between**2 + sigma_within**2 / n)",
            "#/limits/sigma_of_means",
            sigma_between=limits.sigma_between,
            sigma_within=limits.sigma_within,
            n=size,
        )
    k = multiple(pad, limits.basis)
    at = "#/limits/panels"
    two_lines(
        pad, "of the means", (f"{at}/mean/lower", f"{at}/mean/upper"), k, limits.centre, limits.sigma_of_means
    )
    _between_spreads(pad, limits, at)
    if used is not None and result.baseline is not None:
        _between_point(pad, limits, data, used.mean, 0, result.baseline, "#/baseline/panels")
    normal_price_steps(pad, limits.rules, k, result.performance)
    return pad.steps


def _between_spreads(pad: Pad, limits: BetweenWithinLimits, at: str) -> None:
    moving = f"{at}/moving_range"
    spread_steps(
        pad,
        "of the moving ranges of means",
        "range",
        limits.span,
        limits.basis,
        limits.sigma_of_means,
        (f"{moving}/centre", f"{moving}/lower", f"{moving}/upper"),
    )
    if limits.subgroup_size is not None:
        inside = f"{at}/within"
        spread_steps(
            pad,
            f"of the {_spread_name(limits.within_statistic)} within subgroups of {limits.subgroup_size}",
            limits.within_statistic,
            limits.subgroup_size,
            limits.basis,
            limits.sigma_within,
            (f"{inside}/centre", f"{inside}/lower", f"{inside}/upper"),
        )


def judge_between_within(limits: BetweenWithinLimits, data: Any, carry: Any, result: Any) -> tuple[Step, ...]:
    """The steps of one subgroup."""
    pad = Pad()
    recent = () if carry is None else carry.recent
    means = data.statistics().mean
    multiple(pad, limits.basis)
    series = np.concatenate((recent, means)) if recent else means
    _between_point(pad, limits, data, series, len(recent), result, "#/panels")
    if len(pad.steps) < 3:
        two_lines(
            pad, "of the means", (None, None), limits.basis.multiple, limits.centre, limits.sigma_of_means
        )
        distance_step(pad, "of the centre line itself", limits.centre, limits.centre, limits.sigma_of_means)
    return pad.steps


def _between_point(
    pad: Pad, limits: BetweenWithinLimits, data: Any, series: Floats, before: int, judged: Any, at: str
) -> None:
    panels, signals = judged.panels, judged.signals
    found = shown_point(signals, panels.mean)
    if found is None:
        return
    index, place = found
    name = which(index, signals, "subgroup")
    statistics, row = data.statistics(), row_of(data, index)
    mean = float(statistics.mean[index])
    if row is not None:
        mean = pad.mean(f"Mean of {name}", row, f"{at}/mean/value/{place}")
    two_lines(
        pad,
        f"of the mean of {name}",
        (f"{at}/mean/lower/{place}", f"{at}/mean/upper/{place}"),
        limits.basis.multiple,
        limits.centre,
        limits.sigma_of_means,
    )
    distance_step(pad, "of its mean", mean, limits.centre, limits.sigma_of_means)
    there = place_of(panels.moving_range, index)
    if there is not None:
        moving_range_step(pad, series, before + index, limits.span, f"{at}/moving_range/value/{there}")
    there = place_of(panels.within, index)
    if there is None:
        return
    if row is not None:
        if limits.within_statistic == "range":
            pad.range(f"Range of {name}", row, f"{at}/within/value/{there}")
        else:
            pad.deviation(f"Standard deviation of {name}", row, mean, f"{at}/within/value/{there}")
    spread_steps(
        pad,
        f"of its {_spread_name(limits.within_statistic)}",
        limits.within_statistic,
        int(statistics.size[index]),
        limits.basis,
        limits.sigma_within,
        tuple(f"{at}/within/{line}/{there}" for line in ("centre", "lower", "upper")),  # type: ignore[arg-type]
        natural=True,
    )


# Levels: short runs and trends ----------------------------------------------------------------------


def _level_lines(pad: Pad, limits: Any, k: float, told: bool) -> None:
    """The frozen lines of the level and of the spread; the level's only where they stand still."""
    single = limits.form == "individuals"
    size = 1 if single else limits.subgroup_size
    at = "#/limits/panels"
    if size is None:
        return
    if told:
        two_lines(
            pad,
            "of the level",
            (f"{at}/level/lower", f"{at}/level/upper"),
            k,
            limits.centre,
            limits.sigma,
            None if single else size,
        )
    spread_steps(
        pad,
        "of the moving ranges" if single else f"of the ranges of {size}",
        "range",
        SPAN if single else size,
        limits.basis,
        limits.sigma,
        (f"{at}/spread/centre", f"{at}/spread/lower", f"{at}/spread/upper"),
    )


def _level_spread(
    pad: Pad,
    limits: Any,
    index: int,
    size: int,
    levels: Floats,
    before: int,
    row: Floats | None,
    judged: Any,
    at: str,
) -> None:
    """The spread of one point; ``row``: its values as they are plotted, ``levels``: those that moving ranges span."""
    there = place_of(judged.panels.spread, index)
    if there is None:
        return
    single = limits.form == "individuals"
    if single:
        moving_range_step(pad, levels, before + index, SPAN, f"{at}/spread/value/{there}")
    elif row is not None:
        pad.range("Range within it, as plotted", row, f"{at}/spread/value/{there}")
    spread_steps(
        pad,
        "of its moving range" if single else "of its range",
        "range",
        SPAN if single else size,
        limits.basis,
        limits.sigma,
        tuple(f"{at}/spread/{line}/{there}" for line in ("centre", "lower", "upper")),  # type: ignore[arg-type]
        natural=True,
    )


def fit_short_run(data: PartData | None, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from points of several parts to the limits, and those of one point."""
    pad, limits = Pad(), result.limits
    compared = None
    if data is not None:
        compared = _compared(data, limits, _excluded(limits))
        if limits.scale == "standardised":
            _part_sigma(pad, data, options, limits)
        elif options.sigma is None:
            if limits.form == "individuals":
                moving_sigma_steps(
                    pad,
                    compared.mean,
                    SPAN,
                    limits.sigma_estimator,
                    "#/limits/sigma",
                    "deviations from target",
                )
            else:
                within_steps(pad, compared, limits.sigma_estimator, "#/limits/sigma")
        if options.centre_line == "mean":
            if limits.form == "individuals":
                values_mean_steps(pad, compared.mean, "#/limits/centre", "plotted levels")
            else:
                grand_mean_steps(pad, compared, "#/limits/centre")
    k = multiple(pad, limits.basis)
    _level_lines(pad, limits, k, True)
    if data is not None and compared is not None and result.baseline is not None:
        _short_run_point(pad, limits, data, compared.mean, 0, result.baseline, "#/baseline/panels")
    normal_price_steps(pad, limits.rules, k, result.performance)
    return pad.steps


def _compared(data: PartData, limits: ShortRunLimits, excluded: tuple[int, ...]) -> SubgroupStatistics:
    points = points_of(data.points)
    if excluded:
        kept = np.ones(len(points.size), dtype=bool)
        kept[list(excluded)] = False
        points = points.keep(kept)
    return _comparable(points, _places(limits.parts, data.part_names, len(points.size)), limits.parts)


def _part_sigma(pad: Pad, data: PartData, options: Any, limits: ShortRunLimits) -> None:
    """Sigma of the first part whose own is estimated."""
    points = points_of(data.points)
    for at, part in enumerate(options.parts):
        if part.sigma is not None:
            continue
        own = np.array([name == part.name for name in data.part_names])
        for each in _excluded(limits):
            own[each] = False
        where = f"#/limits/parts/{at}/sigma"
        if limits.form == "individuals":
            estimator = options.sigma_estimator or "mean-moving-range"
            values = points.mean[np.array([name == part.name for name in data.part_names])].copy()
            kept = own[np.array([name == part.name for name in data.part_names])]
            values[~kept] = np.nan
            moving_sigma_steps(pad, values, SPAN, estimator, where, f"values of part {part.name}")
        else:
            mine = SubgroupStatistics(
                points.size[own],
                points.mean[own],
                None if points.range is None else points.range[own],
                None if points.sd is None else points.sd[own],
            )
            within_steps(pad, mine, options.sigma_estimator or "mean-range", where)
        return


def judge_short_run(limits: ShortRunLimits, data: PartData, carry: Any, result: Any) -> tuple[Step, ...]:
    """The steps of one point."""
    pad = Pad()
    recent = () if carry is None else carry.recent
    levels = _compared(data, limits, ()).mean
    multiple(pad, limits.basis)
    series = np.concatenate((recent, levels)) if recent else levels
    _short_run_point(pad, limits, data, series, len(recent), result, "#/panels")
    if len(pad.steps) < 3:
        two_lines(
            pad, "of a single value's level", (None, None), limits.basis.multiple, limits.centre, limits.sigma
        )
        distance_step(pad, "of the centre line itself", limits.centre, limits.centre, limits.sigma)
    return pad.steps


def _short_run_point(
    pad: Pad, limits: ShortRunLimits, data: PartData, levels: Floats, before: int, judged: Any, at: str
) -> None:
    panel, signals = judged.panels.level, judged.signals
    found = shown_point(signals, panel)
    if found is None:
        return
    index, place = found
    name = which(index, signals)
    part = next(each for each in limits.parts if each.name == data.part_names[index])
    points = points_of(data.points)
    size = int(points.size[index])
    mean = float(points.mean[index])
    row = None
    if isinstance(data.points, Subgroups):
        row = row_of(data.points, index)
        assert row is not None
        mean = pad.mean(f"Mean of {name}, of part {part.name}", row)
    values: dict[str, Value] = {"x": mean, "target": part.target}
    if part.sigma is not None:
        level = pad.work(
            f"Level of {name}, of part {part.name}, as plotted",
            "(x - target) / sigma_of_part",
            f"{at}/level/value/{place}",
            sigma_of_part=part.sigma,
            **values,
        )
    else:
        level = pad.work(
            f"Level of {name}, of part {part.name}, as plotted",
            "x - target",
            f"{at}/level/value/{place}",
            **values,
        )
    single = limits.form == "individuals"
    two_lines(
        pad,
        f"at {name}",
        (f"{at}/level/lower/{place}", f"{at}/level/upper/{place}"),
        limits.basis.multiple,
        limits.centre,
        limits.sigma,
        None if single else size,
    )
    pad.work(
        "Distance of its level from the centre line in standard deviations, as the run rules see it",
        "(level - centre) * sqrt(n) / sigma",
        None,
        level=level,
        centre=limits.centre,
        n=size,
        sigma=limits.sigma,
    )
    plotted = None if row is None else (row - part.target) / (1.0 if part.sigma is None else part.sigma)
    _level_spread(pad, limits, index, size, levels, before, plotted, judged, at)


def fit_trend(data: TrendData, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from points to the line, sigma and limits, and those of one point."""
    pad, limits = Pad(), result.limits
    line = limits.line
    points = points_of(data.points)
    positions = _positions(data, points, 0.0)
    excluded = _excluded(limits)
    used = points
    if excluded:
        kept = np.ones(len(points.size), dtype=bool)
        kept[list(excluded)] = False
        used = points.keep(kept)
    there = used.size > 0
    x, y, w = positions[there], used.mean[there], used.size[there].astype(np.float64)
    single = limits.form == "individuals"
    each = "" if single else ", each weighing its size"
    if single:
        pad.mean("Mean position", x, "#/limits/line/mean_position")
        pad.mean("Mean level", y, "#/limits/line/mean_level", "y")
    else:
        for of, values, name in (("position", x, "mean_position"), ("level", y, "mean_level")):
            pad.work(
                f"Mean {of}{each}",
                "total / weight",
                f"#/limits/line/{name}",
                total=(total_of(w * values), f"sum of size times {of}"),
                weight=line.weight,
            )
    dx, dy = x - line.mean_position, y - line.mean_level
    sxx, sxy = total_of(w * dx * dx), total_of(w * dx * dy)
    pad.work(
        f"Slope of the line of least squares{each}",
        "sum_xy / sum_xx",
        "#/limits/line/slope",
        sum_xy=(sxy, f"sum of (position - mean) times (level - mean){each}"),
        sum_xx=(sxx, f"sum of (position - mean)**2{each}"),
    )
    pad.work(
        "Level of the line at position 0",
        "mean_level - slope * mean_position",
        "#/limits/line/intercept",
        mean_level=line.mean_level,
        slope=line.slope,
        mean_position=line.mean_position,
    )
    distance = used.mean - line.at(positions)
    _trend_sigma(pad, limits, used, distance, there, w)
    k = multiple(pad, limits.basis)
    _level_lines(pad, limits, k, False)
    _meeting(pad, limits)
    _trend_point(pad, limits, data, points, positions, distance, 0, result.baseline, "#/baseline/panels")
    normal_price_steps(pad, limits.rules, k, result.performance)
    return pad.steps


def _trend_sigma(
    pad: Pad, limits: TrendLimits, used: SubgroupStatistics, distance: Floats, there: Any, w: Floats
) -> None:
    if limits.sigma_estimator == "given":
        return
    if limits.sigma_estimator == "residual-sd":
        residuals = distance[there]
        pad.work(
            "Sigma from the distances from the line",
            "sqrt(sum_squares / (points - 2))",
            "#/limits/sigma",
            sum_squares=(
                total_of(w * residuals * residuals),
                "sum of the squared distances from the line, each weighing the size of its point",
            ),
            points=len(residuals),
        )
    elif limits.sigma_estimator == "residual-moving-range":
        whole = distance * np.sqrt(np.maximum(used.size, 1))
        moving_sigma_steps(
            pad,
            whole,
            SPAN,
            limits.sigma_estimator,
            "#/limits/sigma",
            "distances from the line, times the root of size",
        )
    else:
        within_steps(pad, used, limits.sigma_estimator, "#/limits/sigma")


def _meeting(pad: Pad, limits: TrendLimits) -> None:
    plan = limits.adjustment
    if plan is None or plan.position is None:
        return
    line = limits.line
    distance = pad.work(
        f"Where the line meets the {plan.side} adjustment limit, from the mean position",
        "(limit - mean_level) / slope",
        None,
        limit=plan.limit,
        mean_level=line.mean_level,
        slope=line.slope,
    )
    pad.work(
        "Position at which the line meets it",
        "mean_position + distance",
        "#/limits/adjustment/position",
        mean_position=line.mean_position,
        distance=distance,
    )
    if plan.earliest is None:
        return
    tail = 0.5 * (1.0 + plan.confidence)
    freedom = limits.degrees_of_freedom
    t = float(scipy.special.ndtri(tail) if freedom is None else scipy.special.stdtrit(freedom, tail))
    table = "normal" if freedom is None else f"Student's t with {freedom:.6g} degrees of freedom"
    reach = pad.work(
        "Reach of the interval",
        "t * sigma / slope",
        None,
        t=(t, f"quantile at {tail:g} of {table}"),
        sigma=limits.sigma,
        slope=line.slope,
    )
    g = pad.work(
        "Uncertainty of the slope", "reach**2 / sum_xx", None, reach=reach, sum_xx=line.spread_of_positions
    )
    half = pad.work(
        "Half the interval, before it is divided by 1 - g",
        "sqrt(g * distance**2 + (1 - g) * reach**2 / weight)",
        None,
        g=g,
        distance=distance,
        reach=reach,
        weight=line.weight,
    )
    for sign, name in (("-", "earliest"), ("+", "latest")):
        pad.work(
            f"{name.capitalize()} position, by Fieller's theorem",
            f"mean_position + (distance {sign} half) / (1 - g)",
            f"#/limits/adjustment/{name}",
            mean_position=line.mean_position,
            distance=distance,
            half=half,
            g=g,
        )


def judge_trend(limits: TrendLimits, data: TrendData, carry: Any, result: Any) -> tuple[Step, ...]:
    """The steps of one point about the continued line."""
    pad = Pad()
    points = points_of(data.points)
    last = limits.last_position if carry is None else carry.position
    start = float(data.start) if data.start is not None else last + 1.0
    positions = _positions(data, points, start)
    recent = () if carry is None else carry.recent
    distance = points.mean - limits.line.at(positions)
    series = np.concatenate((recent, distance)) if recent else distance
    multiple(pad, limits.basis)
    _trend_point(pad, limits, data, points, positions, series, len(recent), result, "#/panels")
    if len(pad.steps) < 3:
        line = limits.line
        pad.work(
            "Level of the line at the first position",
            "intercept + slope * position",
            None,
            intercept=line.intercept,
            slope=line.slope,
            position=float(positions[0]),
        )
        two_lines(
            pad, "of the distance of a single value", (None, None), limits.basis.multiple, 0.0, limits.sigma
        )
    return pad.steps


def _trend_point(
    pad: Pad,
    limits: TrendLimits,
    data: TrendData,
    points: SubgroupStatistics,
    positions: Floats,
    distance: Floats,
    before: int,
    judged: Any,
    at: str,
) -> None:
    panel, signals = judged.panels.level, judged.signals
    found = shown_point(signals, panel)
    if found is None:
        return
    index, place = found
    name = which(index, signals)
    line, size = limits.line, int(points.size[index])
    row = row_of(data.points, index) if isinstance(data.points, Subgroups) else None
    mean = float(points.mean[index])
    if row is not None:
        mean = pad.mean(f"Mean of {name}", row, f"{at}/level/value/{place}")
    centre = pad.work(
        f"Level of the line at {name}",
        "mean_level + slope * (position - mean_position)",
        f"{at}/level/centre/{place}",
        mean_level=line.mean_level,
        slope=line.slope,
        position=float(positions[index]),
        mean_position=line.mean_position,
    )
    single = limits.form == "individuals"
    two_lines(
        pad,
        f"at {name}",
        (f"{at}/level/lower/{place}", f"{at}/level/upper/{place}"),
        limits.basis.multiple,
        centre,
        limits.sigma,
        None if single else size,
    )
    pad.work(
        "Distance from the line in standard deviations, as the run rules see it",
        "(x - line) * sqrt(n) / sigma",
        None,
        x=mean,
        line=centre,
        n=size,
        sigma=limits.sigma,
    )
    _level_spread(pad, limits, index, size, distance, before, row, judged, at)


# Residuals ------------------------------------------------------------------------------------------


def fit_residual(data: Individuals | None, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from a model to the limits, and those of one residual."""
    pad, limits = Pad(), result.limits
    if data is not None and limits.source == "estimated":
        _model(pad, data, limits)
    k = multiple(pad, limits.basis)
    at = "#/limits/panels/residual"
    two_lines(pad, "of the residuals", (f"{at}/lower", f"{at}/upper"), k, 0.0, limits.sigma)
    if len(limits.coefficients) == 1:
        pad.work(
            "Standard deviation of the values themselves",
            "sigma / sqrt(1 - phi1**2)",
            "#/limits/process_sigma",
            sigma=limits.sigma,
            phi1=limits.coefficients[0],
        )
    if data is not None and result.baseline is not None:
        _residual_point(pad, limits, data.values, 0, result.baseline, "#/baseline/panels")
        _forecast(pad, limits, data.values, result.baseline.details, "#/baseline/details")
    normal_price_steps(pad, limits.rules, k, result.performance)
    return pad.steps


def _model(pad: Pad, data: Individuals, limits: ResidualLimits) -> None:
    p = limits.order
    used = kept_values(data.values, _excluded(limits))
    windows = np.lib.stride_tricks.sliding_window_view(used, p + 1)
    windows = windows[~np.isnan(windows).any(axis=1)]
    centres = windows.mean(axis=0)
    y, x = windows[:, -1], windows[:, -2] if p else windows[:, -1]
    if p == 1:
        dx, dy = x - centres[0], y - centres[1]
        pad.work(
            f"Coefficient by least squares on the {len(windows)} pairs of a value and the one before",
            "sum_xy / sum_xx",
            "#/limits/coefficients/0",
            sum_xy=(total_of(dx * dy), "sum of (previous - mean) times (value - mean)"),
            sum_xx=(total_of(dx * dx), "sum of (previous - mean)**2"),
        )
    elif p > 1:
        pad.state(
            f"Coefficients phi1 … phi{p} by least squares on {len(windows)} runs of {p + 1} values: "
            "they solve the normal equations",
            "X'X phi = X'y",
            **{f"phi{i}": each for i, each in enumerate(limits.coefficients, 1)},
        )
    named: dict[str, Value] = {f"phi{i}": each for i, each in enumerate(limits.coefficients, 1)}
    lagged = {f"m{i}": (float(centres[-1 - i]), f"mean of the values {i} before") for i in range(1, p + 1)}
    products = "".join(f" - phi{i} * m{i}" for i in range(1, p + 1))
    total = "".join(f" - phi{i}" for i in range(1, p + 1))
    pad.work(
        "Mean of the process",
        f"(m0{products}) / (1{total})",
        "#/limits/mean",
        m0=(float(centres[-1]), "mean of the values that have all the values before them"),
        **lagged,
        **named,
    )
    rest = y - centres[-1]
    for i, each in enumerate(limits.coefficients, 1):
        rest = rest - each * (windows[:, -1 - i] - centres[-1 - i])
    pad.work(
        "Sigma of the residuals",
        "sqrt(sum_squares / (windows - p - 1))",
        "#/limits/sigma",
        sum_squares=(total_of(rest * rest), "sum of the squared residuals"),
        windows=len(windows),
        p=p,
    )


def _told_model(limits: ResidualLimits) -> tuple[str, dict[str, Value]]:
    text = "".join(f" + phi{i} * (x{i} - mean)" for i in range(1, limits.order + 1))
    values: dict[str, Value] = {"mean": limits.mean}
    values.update({f"phi{i}": each for i, each in enumerate(limits.coefficients, 1)})
    return f"mean{text}", values


def _residual_point(
    pad: Pad, limits: ResidualLimits, series: Floats, before: int, judged: Any, at: str
) -> None:
    panel = judged.panels.residual
    found = shown_point(judged.signals, panel)
    if found is None:
        return
    index, place = found
    name = which(index, judged.signals, "value")
    here = before + index
    text, values = _told_model(limits)
    earlier: dict[str, Value] = {
        f"x{i}": (float(series[here - i]), f"the value {i} before") for i in range(1, limits.order + 1)
    }
    forecast = pad.work(f"What the model foretold of {name}", text, None, **values, **earlier)
    residual = pad.work(
        f"Residual of {name}",
        "x - forecast",
        f"{at}/residual/value/{place}",
        x=float(series[here]),
        forecast=forecast,
    )
    distance_step(pad, f"of {name}", residual, 0.0, limits.sigma)


def _forecast(pad: Pad, limits: ResidualLimits, series: Floats, details: Any, at: str) -> None:
    if details is None:
        return
    text, values = _told_model(limits)
    earlier: dict[str, Value] = {f"x{i}": float(series[-i]) for i in range(1, limits.order + 1)}
    forecast = pad.work(
        "Forecast of the value to come, x1 being the last", text, f"{at}/forecast", **values, **earlier
    )
    for sign, name in (("-", "lower"), ("+", "upper")):
        pad.work(
            f"The value to come signals {'below' if sign == '-' else 'above'}",
            f"forecast {sign} k * sigma",
            f"{at}/{name}",
            forecast=forecast,
            k=limits.basis.multiple,
            sigma=limits.sigma,
        )


def judge_residual(limits: ResidualLimits, data: Individuals, carry: Any, result: Any) -> tuple[Step, ...]:
    """The steps of one residual, and the forecast."""
    pad = Pad()
    recent = () if carry is None else carry.recent
    series = np.concatenate((recent, data.values)) if recent else data.values
    k = multiple(pad, limits.basis)
    two_lines(pad, "of the residuals", (None, None), k, 0.0, limits.sigma)
    _residual_point(pad, limits, series, len(recent), result, "#/panels")
    _forecast(pad, limits, series, result.details, "#/details")
    if len(pad.steps) < 3:
        distance_step(pad, "of the mean", limits.mean, limits.mean, limits.sigma)
    return pad.steps


# Acceptance -----------------------------------------------------------------------------------------


def fit_acceptance(data: Any, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from specification and risks to n, the levels and the limits, and those of one subgroup."""
    pad, limits = Pad(), result.limits
    plan = limits.plan
    if data is not None and limits.sigma_estimator != "given":
        within_steps(pad, used_statistics(data, _excluded(limits)), limits.sigma_estimator, "#/limits/sigma")
    z = {
        name: (deviate(value), _NORMAL.format(value))
        for name, value in (
            ("z_p1", plan.acceptable_fraction),
            ("z_p2", plan.rejectable_fraction),
            ("z_alpha", plan.producer_risk),
            ("z_beta", plan.consumer_risk),
        )
    }
    pad.work(
        "Values a subgroup at which both risks are met exactly",
        "((z_alpha + z_beta) / (z_p1 - z_p2))**2",
        "#/limits/exact_sample_size",
        **z,
    )
    n = limits.sample_size
    for side, name, inward, outward in ((limits.lower, "lower", "+", "-"), (limits.upper, "upper", "-", "+")):
        if side is None:
            continue
        at = f"#/limits/{name}"
        for what, member, key in (
            ("Acceptable process level", "acceptable_level", "z_p1"),
            ("Rejectable process level", "rejectable_level", "z_p2"),
        ):
            pad.work(
                f"{what} at the {name} specification limit",
                f"limit {inward} {key} * sigma",
                f"{at}/{member}",
                limit=side.specification_limit,
                sigma=limits.sigma,
                **{key: z[key]},
            )
        pad.work(
            f"{name.capitalize()} acceptance control limit",
            f"acceptable_level {outward} z_alpha * sigma / sqrt(n)",
            f"{at}/control_limit",
            acceptable_level=side.acceptable_level,
            z_alpha=z["z_alpha"],
            sigma=limits.sigma,
            n=n,
        )
    _acceptance_risk(pad, limits)
    if n > 1:
        at = "#/limits/panels/within"
        spread_steps(
            pad,
            f"of the {_spread_name(limits.within_statistic)} within subgroups of {n}",
            limits.within_statistic,
            n,
            LimitBasis("sigma", limits.sigma_multiple, None),
            limits.sigma,
            (f"{at}/centre", f"{at}/lower", f"{at}/upper"),
        )
    if data is not None and result.baseline is not None:
        _acceptance_point(pad, limits, data, result.baseline, "#/baseline/panels")
    return pad.steps


def _acceptance_risk(pad: Pad, limits: AcceptanceLimits) -> None:
    side = limits.upper or limits.lower
    assert side is not None
    values: dict[str, Value] = {
        "level": side.rejectable_level,
        "sigma": limits.sigma,
        "n": limits.sample_size,
    }
    terms = []
    if limits.upper is not None:
        values["upper"] = limits.upper.control_limit
        terms.append("erfc((level - upper) * sqrt(n) / sigma / sqrt(2)) / 2")
    if limits.lower is not None:
        values["lower"] = limits.lower.control_limit
        if limits.upper is None:
            terms.append("erfc((lower - level) * sqrt(n) / sigma / sqrt(2)) / 2")
        else:
            terms.append("-erfc((level - lower) * sqrt(n) / sigma / sqrt(2)) / 2")
    pad.work(
        "Risk of accepting at the rejectable level: probability of a mean within the limits there",
        " + ".join(terms),
        "#/limits/consumer_risk",
        **values,
    )


def judge_acceptance(limits: AcceptanceLimits, data: Any, carry: Any, result: Any) -> tuple[Step, ...]:
    """The steps of one subgroup."""
    pad = Pad()
    _acceptance_point(pad, limits, data, result, "#/panels")
    if len(pad.steps) < 3:
        _acceptance_risk(pad, limits)
        pad.work(
            "Standard deviation of a mean", "sigma / sqrt(n)", None, sigma=limits.sigma, n=limits.sample_size
        )
        pad.work("Variance of single values", "sigma**2", None, sigma=limits.sigma)
    return pad.steps


def _acceptance_point(pad: Pad, limits: AcceptanceLimits, data: Any, judged: Any, at: str) -> None:
    panels, signals = judged.panels, judged.signals
    found = shown_point(signals, panels.mean)
    if found is None:
        return
    index, place = found
    name = which(index, signals, "subgroup")
    statistics, row = data.statistics(), row_of(data, index)
    size, mean = int(statistics.size[index]), float(statistics.mean[index])
    if row is not None:
        mean = pad.mean(f"Mean of {name}", row, f"{at}/mean/value/{place}")
    plan = limits.plan
    z1, za = plan.acceptable_fraction, plan.producer_risk
    for side, line, inward in ((limits.lower, "lower", "+"), (limits.upper, "upper", "-")):
        if side is None:
            continue
        pad.work(
            f"{line.capitalize()} limit of the mean of {name}, of {size} values",
            f"limit {inward} (z_p1 - z_alpha / sqrt(n)) * sigma",
            f"{at}/mean/{line}/{place}",
            limit=side.specification_limit,
            z_p1=(deviate(z1), _NORMAL.format(z1)),
            z_alpha=(deviate(za), _NORMAL.format(za)),
            n=size,
            sigma=limits.sigma,
        )
    pad.work("Standard deviation of its mean", "sigma / sqrt(n)", None, sigma=limits.sigma, n=size)
    there = place_of(panels.within, index)
    if there is None:
        return
    if row is not None:
        if limits.within_statistic == "range":
            pad.range(f"Range of {name}", row, f"{at}/within/value/{there}")
        else:
            pad.deviation(f"Standard deviation of {name}", row, mean, f"{at}/within/value/{there}")
    spread_steps(
        pad,
        f"of its {_spread_name(limits.within_statistic)}",
        limits.within_statistic,
        size,
        LimitBasis("sigma", limits.sigma_multiple, None),
        limits.sigma,
        tuple(f"{at}/within/{line}/{there}" for line in ("centre", "lower", "upper")),  # type: ignore[arg-type]
        natural=True,
    )
