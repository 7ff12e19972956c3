"""Worked steps of the charts with memory: EWMA, CUSUM and moving averages."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..charts._memory import Data, points_of
from ..charts.cusum import CusumLimits, _fourth_root
from ..charts.ewma import EwmaLimits
from ..charts.moving_average import MovingAverageLimits
from ..data import Individuals, Subgroups, SubgroupStatistics
from .pieces import (
    grand_mean_steps,
    moving_sigma_steps,
    shown_point,
    values_mean_steps,
    which,
    within_steps,
)
from .steps import Pad, Step, Value, total_of


def _parameters(pad: Pad, data: Data | None, options: Any, limits: Any) -> SubgroupStatistics | None:
    """Mean and sigma of a baseline."""
    if data is None:
        return None
    points = points_of(data)
    used = points
    if limits.baseline.excluded:
        kept = np.ones(len(points.size), dtype=bool)
        kept[[one.index for one in limits.baseline.excluded]] = False
        used = points.keep(kept)
    given = options.source.standards
    single = isinstance(data, Individuals)
    if given.mean is None:
        if single:
            values_mean_steps(pad, used.mean, "#/limits/centre")
        else:
            grand_mean_steps(pad, used, "#/limits/centre")
    if given.sigma is None:
        if single:
            moving_sigma_steps(pad, used.mean, options.source.span, limits.sigma_estimator, "#/limits/sigma")
        else:
            within_steps(pad, used, limits.sigma_estimator, "#/limits/sigma")
    return used


def _level(pad: Pad, data: Data, points: SubgroupStatistics, index: int, name: str) -> float:
    """The mean of one point."""
    if isinstance(data, Subgroups):
        row = data.values[index]
        return pad.mean(f"Mean of {name}", row[row == row])
    return float(points.mean[index])


def _before(points: SubgroupStatistics, index: int) -> list[int]:
    """The points that are there up to one, itself included."""
    return np.flatnonzero(points.size[: index + 1] > 0).tolist()


def _chain(pad: Pad, what: str, performance: Any) -> None:
    arl = performance.in_control_arl
    pad.state(
        f"{what}: {performance.method}; the average run length from each place u solves an integral equation",
        "arl(u) = 1 + sum over v of P(u -> v) * arl(v)",
        **({} if arl is None else {"in_control_arl": arl}),
    )


# EWMA -----------------------------------------------------------------------------------------------


def fit_ewma(data: Data | None, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from a baseline to settled limits, and those of one average."""
    pad, limits = Pad(), result.limits
    used = _parameters(pad, data, options, limits)
    _settled(pad, limits, "#/limits/panels/ewma")
    if used is not None and data is not None and result.baseline is not None:
        _ewma_point(pad, limits, data, used, None, result.baseline, "#/baseline/panels")
    _chain(pad, "Run lengths of averages that depend on each other", result.performance)
    return pad.steps


def _settled(pad: Pad, limits: EwmaLimits, at: str | None) -> None:
    n = limits.subgroup_size
    share = pad.work(
        "Variance of the average once settled, as a share of that of a point",
        "smoothing / (2 - smoothing)",
        None,
        smoothing=limits.smoothing,
    )
    values: dict[str, Value] = {
        "centre": limits.centre,
        "limit": limits.limit,
        "sigma": limits.sigma,
        "share": share,
        "n": n or 1,
    }
    told = at is not None and n is not None
    for sign, name in (("-", "lower"), ("+", "upper")):
        pad.work(
            f"{name.capitalize()} limit once settled, for points of {n or 1}",
            f"centre {sign} limit * sigma * sqrt(share / n)",
            f"{at}/{name}" if told else None,
            **values,
        )


def judge_ewma(limits: EwmaLimits, data: Data, carry: Any, result: Any) -> tuple[Step, ...]:
    """The steps of one average."""
    pad = Pad()
    _settled(pad, limits, None)
    _ewma_point(pad, limits, data, points_of(data), carry, result, "#/panels")
    return pad.steps


def _ewma_point(
    pad: Pad, limits: EwmaLimits, data: Data, points: SubgroupStatistics, carry: Any, judged: Any, at: str
) -> None:
    panel = judged.panels.ewma
    found = shown_point(judged.signals, panel)
    if found is None:
        return
    index, place = found
    name = which(index, judged.signals)
    w = limits.smoothing
    rest = 1.0 - w
    deviation, variance = (0.0, 0.0) if carry is None else (carry.deviation, carry.variance)
    *earlier, _ = _before(points, index)
    for each in earlier:
        deviation = rest * deviation + w * (float(points.mean[each]) - limits.centre)
        variance = rest * rest * variance + w * w / float(points.size[each])
    mean = _level(pad, data, points, index, name)
    size = int(points.size[index])
    if earlier:
        source = "the average at the point before" + (f" (#{at[1:]}/ewma/value/{place - 1})" if place else "")
    else:
        source = (
            "the carry, plus the centre line" if carry is not None else "the centre line, where it starts"
        )
    pad.work(
        f"Average at {name}",
        "smoothing * x + (1 - smoothing) * previous",
        f"{at}/ewma/value/{place}",
        smoothing=w,
        x=mean,
        previous=(limits.centre + deviation, source),
    )
    if limits.limit_variance == "asymptotic":
        v = pad.work(
            "Its variance, in units of sigma squared",
            "smoothing / (2 - smoothing) / n",
            None,
            smoothing=w,
            n=size,
        )
    else:
        v = pad.work(
            "Its exact variance, in units of sigma squared",
            "smoothing**2 / n + (1 - smoothing)**2 * previous",
            None,
            smoothing=w,
            n=size,
            previous=(variance, "the variance at the point before, 0 at the start"),
        )
    for sign, line in (("-", "lower"), ("+", "upper")):
        pad.work(
            f"{line.capitalize()} limit there",
            f"centre {sign} limit * sigma * sqrt(variance)",
            f"{at}/ewma/{line}/{place}",
            centre=limits.centre,
            limit=limits.limit,
            sigma=limits.sigma,
            variance=v,
        )


# CUSUM ----------------------------------------------------------------------------------------------


def fit_cusum(data: Data | None, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from a baseline to the sums of one point."""
    pad, limits = Pad(), result.limits
    used = _parameters(pad, data, options, limits)
    _in_units(pad, limits, "#/limits/panels")
    if used is not None and data is not None and result.baseline is not None:
        _cusum_point(pad, limits, data, used, None, result.baseline, "#/baseline")
    _chain(pad, "Run lengths of the sums", result.performance)
    return pad.steps


def _in_units(pad: Pad, limits: CusumLimits, at: str | None) -> None:
    n: Value = limits.subgroup_size or 1
    pad.work(
        "Decision interval in the unit of the characteristic",
        "decision * sigma / sqrt(n)",
        None,
        decision=limits.decision,
        sigma=limits.sigma,
        n=n,
    )
    pad.work(
        "Reference value in the unit of the characteristic: what a point may exceed the centre by and add nothing",
        "reference * sigma / sqrt(n)",
        None,
        reference=limits.reference,
        sigma=limits.sigma,
        n=n,
    )
    pad.work(
        "Lower limit, for the lower sum is counted downwards",
        "-decision",
        None if at is None else f"{at}/lower/lower",
        decision=limits.decision,
    )


def judge_cusum(limits: CusumLimits, data: Data, carry: Any, result: Any) -> tuple[Step, ...]:
    """The steps of the sums of one point."""
    pad = Pad()
    _in_units(pad, limits, None)
    _cusum_point(pad, limits, data, points_of(data), carry, result, "#")
    return pad.steps


def _cusum_point(
    pad: Pad, limits: CusumLimits, data: Data, points: SubgroupStatistics, carry: Any, judged: Any, at: str
) -> None:
    panels = judged.panels
    own = [signal for signal in judged.signals if signal.panel in ("upper", "lower")]
    found = shown_point(own, panels.upper)
    if found is None:
        return
    index, place = found
    name = which(index, own)
    mean = _level(pad, data, points, index, name)
    size = int(points.size[index])
    z = pad.work(
        f"{name.capitalize()}, in its own standard deviations from the centre",
        "(x - centre) * sqrt(n) / sigma",
        None,
        x=mean,
        centre=limits.centre,
        sigma=limits.sigma,
        n=size,
    )
    fresh = limits.head_start * limits.decision
    if place == 0:
        above, below = (fresh, fresh) if carry is None else (carry.upper.sum, carry.lower.sum)
        source = "the head start, 0 without one" if carry is None else "the carry"
    else:
        above, below = float(panels.upper.value[place - 1]), -float(panels.lower.value[place - 1])
        source = "the sum at the point before"
        if limits.after_signal == "restart" and max(above, below) > limits.decision + 1e-9:
            above = below = fresh
            source = "both sums start again after a signal, at the head start"
    pad.work(
        f"Upper sum at {name}",
        "max(0, previous + z - reference)",
        f"{at}/panels/upper/value/{place}",
        previous=(above, source),
        z=z,
        reference=limits.reference,
    )
    pad.work(
        f"Lower sum at {name}, counted downwards",
        "-max(0, previous - z - reference)",
        f"{at}/panels/lower/value/{place}",
        previous=(below, source),
        z=z,
        reference=limits.reference,
    )
    _shift(pad, limits, panels, judged, index, place, at)
    if limits.spread and isinstance(data, Individuals):
        _spread(pad, limits, z, panels, place, carry, at)


def _shift(pad: Pad, limits: CusumLimits, panels: Any, judged: Any, index: int, place: int, at: str) -> None:
    """The estimate of the shift, for points of one size without a head start in the sum."""
    details = judged.details
    for position, one in enumerate(() if details is None else details.shifts):
        if one.index != index or one.panel not in ("upper", "lower") or limits.head_start or one.since < 0:
            continue
        if limits.subgroup_size is None:
            return
        total = abs(float(getattr(panels, one.panel).value[place]))
        pad.work(
            f"Mean since the sum was last zero, {one.points} points ago",
            f"centre {'+' if one.panel == 'upper' else '-'} sigma / sqrt(n) * (reference + total / points)",
            f"{at}/details/shifts/{position}/mean",
            centre=limits.centre,
            sigma=limits.sigma,
            n=limits.subgroup_size,
            reference=limits.reference,
            total=total,
            points=one.points,
        )
        return


def _spread(pad: Pad, limits: CusumLimits, z: float, panels: Any, place: int, carry: Any, at: str) -> None:
    expected, deviation = _fourth_root(1.0)
    y = pad.work(
        "Score of the spread: the root of the distance, less its mean, in its own standard deviation",
        "(sqrt(abs(z)) - expected) / deviation",
        None,
        z=z,
        expected=(expected, "mean of the root of a standard normal distance"),
        deviation=(deviation, "its standard deviation"),
    )
    if place == 0:
        before = limits.head_start * limits.decision if carry is None else carry.spread_upper.sum
    else:
        before = float(panels.spread_upper.value[place - 1])
        if limits.after_signal == "restart":
            lower = -float(panels.spread_lower.value[place - 1])
            if max(before, lower) > limits.decision + 1e-9:
                before = limits.head_start * limits.decision
    pad.work(
        "Upper sum of spread",
        "max(0, previous + y - reference)",
        f"{at}/panels/spread_upper/value/{place}",
        previous=(before, "the sum at the point before, or where it starts"),
        y=y,
        reference=limits.reference,
    )


# Moving averages ------------------------------------------------------------------------------------


def fit_moving_average(data: Data | None, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from a baseline to the limits of a full window, and those of one average."""
    pad, limits = Pad(), result.limits
    used = _parameters(pad, data, options, limits)
    _full_window(pad, limits, "#/limits/panels/average")
    if used is not None and data is not None and result.baseline is not None:
        _average_point(pad, limits, used, None, result.baseline, "#/baseline/panels")
    _chain(pad, "Run lengths of averages that share points", result.performance)
    return pad.steps


def _full_window(pad: Pad, limits: MovingAverageLimits, at: str | None) -> None:
    n = limits.subgroup_size
    count = pad.work(
        "Values behind the average of a full window", "n * span", None, n=n or 1, span=limits.span
    )
    for sign, name in (("-", "lower"), ("+", "upper")):
        pad.work(
            f"{name.capitalize()} limit of a full window of points of {n or 1}",
            f"centre {sign} k * sigma / sqrt(count)",
            f"{at}/{name}" if at is not None and n is not None else None,
            centre=limits.centre,
            k=limits.sigma_multiple,
            sigma=limits.sigma,
            count=count,
        )


def judge_moving_average(
    limits: MovingAverageLimits, data: Data, carry: Any, result: Any
) -> tuple[Step, ...]:
    """The steps of one average."""
    pad = Pad()
    _full_window(pad, limits, None)
    _average_point(pad, limits, points_of(data), carry, result, "#/panels")
    return pad.steps


def _average_point(
    pad: Pad, limits: MovingAverageLimits, points: SubgroupStatistics, carry: Any, judged: Any, at: str
) -> None:
    panel = judged.panels.average
    found = shown_point(judged.signals, panel)
    if found is None:
        return
    index, place = found
    name = which(index, judged.signals)
    window = _before(points, index)[-limits.span :]
    means = [float(points.mean[each]) for each in window]
    sizes = [float(points.size[each]) for each in window]
    missing = limits.span - len(window)
    if carry is not None and missing > 0:
        means = [limits.centre + each for each in carry.deviations[-missing:]] + means
        sizes = [*carry.sizes[-missing:], *sizes]
    at = f"{at}/average"
    if len(set(sizes)) == 1:
        pad.mean(f"Average of the last {len(means)} points at {name}", means, f"{at}/value/{place}")
    else:
        pad.work(
            f"Average of the values of the last {len(means)} points at {name}",
            "total / count",
            f"{at}/value/{place}",
            total=(total_of(m * n for m, n in zip(means, sizes, strict=True)), "sum of size times mean"),
            count=total_of(sizes),
        )
    count = total_of(sizes)
    for sign, line in (("-", "lower"), ("+", "upper")):
        pad.work(
            f"{line.capitalize()} limit there",
            f"centre {sign} k * sigma / sqrt(count)",
            f"{at}/{line}/{place}",
            centre=limits.centre,
            k=limits.sigma_multiple,
            sigma=limits.sigma,
            count=count,
        )
