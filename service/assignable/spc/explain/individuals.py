"""Worked steps of the chart of single values."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy

from ..charts.common import LimitBasis
from ..charts.individuals import IndividualsFit, IndividualsJudgement, IndividualsLimits, IndividualsOptions
from ..data import Floats, Individuals
from .distributions import quantile_step
from .pieces import (
    distance_step,
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
)
from .steps import Pad, Step


def kept_values(values: Floats, excluded: tuple[int, ...]) -> Floats:
    """The values with those left out as gaps."""
    if not excluded:
        return values
    used = values.copy()
    used[list(excluded)] = np.nan
    return used


def fit(data: Individuals | None, options: IndividualsOptions, result: IndividualsFit) -> tuple[Step, ...]:
    """The steps from a baseline to the limits, and those of one value."""
    pad, limits = Pad(), result.limits
    record = limits.baseline
    used: Floats | None = None
    if data is not None and record is not None:
        used = kept_values(data.values, tuple(one.index for one in record.excluded))
        if options.standards.mean is None:
            values_mean_steps(pad, used, "#/limits/centre")
        if options.standards.sigma is None:
            moving_sigma_steps(pad, used, limits.span, limits.sigma_estimator, "#/limits/sigma")
    k = multiple(pad, limits.basis)
    if limits.distribution is not None:
        _shaped_lines(pad, limits, k, "#/limits/panels/value/{}")
    else:
        two_lines(
            pad,
            "of the values",
            ("#/limits/panels/value/lower", "#/limits/panels/value/upper"),
            k,
            limits.centre,
            limits.sigma,
        )
        at = "#/limits/panels/moving_range"
        spread_steps(
            pad,
            "of the moving ranges",
            "range",
            limits.span,
            limits.basis,
            limits.sigma,
            (f"{at}/centre", f"{at}/lower", f"{at}/upper"),
        )
    if used is not None and data is not None and result.baseline is not None:
        judged_by = None if result.diagnostics is None else result.diagnostics.judged_by
        bases = (limits.basis, limits.basis)
        if judged_by is not None:
            bases = (
                LimitBasis("sigma", judged_by.sigma_multiple),
                LimitBasis("probability", None, 2.0 * judged_by.spread_tail_probability),
            )
        _point(
            pad,
            limits,
            data.values,
            used,
            0,
            result.baseline,
            "#/baseline/panels",
            bases,
            joint=judged_by is not None,
        )
    normal_price_steps(pad, limits.rules, k, result.performance)
    return pad.steps


def _shaped_lines(pad: Pad, limits: IndividualsLimits, k: float, at: str | None) -> None:
    fitted, lines = limits.distribution, limits.panels.value
    assert fitted is not None
    tail = pad.work("Probability beyond each limit", "erfc(k / sqrt(2)) / 2", None, k=k)
    tail = float(scipy.special.ndtr(-k))
    for what, p, q, line, name in (
        ("Lower limit", tail, 1.0 - tail, lines.lower, "lower"),
        ("Centre line, the median", 0.5, 0.5, lines.centre, "centre"),
        ("Upper limit", 1.0 - tail, tail, lines.upper, "upper"),
    ):
        assert line is not None
        quantile_step(
            pad,
            f"{what}: quantile of the fitted {fitted.name} distribution",
            fitted.name,
            fitted.parameters,
            p,
            q,
            line,
            None if at is None else at.format(name),
        )
    pad.state(
        f"Limits of the moving ranges: the range of {limits.span} independent values of this distribution lies beyond "
        "them with the probability with which a normal one lies beyond its own, by numerical integration",
        "P(range > upper) = P(normal_range > normal_upper)",
        upper=lines.upper or 0.0,
    )


def judge(
    limits: IndividualsLimits, data: Individuals, carry: Any, result: IndividualsJudgement
) -> tuple[Step, ...]:
    """The steps from one value to its points and limits."""
    pad = Pad()
    recent = () if carry is None else carry.recent
    series = np.concatenate((recent, data.values)) if recent else data.values
    multiple(pad, limits.basis)
    if limits.distribution is not None:
        found = shown_point(result.signals, result.panels.value)
        at = None if found is None else f"#/panels/value/{{}}/{found[1]}"
        _shaped_lines(pad, limits, limits.basis.multiple, at)
    _point(pad, limits, data.values, series, len(recent), result, "#/panels", (limits.basis, limits.basis))
    if len(pad.steps) < 3:
        two_lines(pad, "of the values", (None, None), limits.basis.multiple, limits.centre, limits.sigma)
    return pad.steps


def _point(
    pad: Pad,
    limits: IndividualsLimits,
    values: Floats,
    series: Floats,
    before: int,
    judged: Any,
    at: str,
    bases: tuple[LimitBasis, LimitBasis],
    *,
    joint: bool = False,
) -> None:
    """``series``: the values that moving ranges span, those of earlier calls (``before`` of them) first."""
    panels, signals = judged.panels, judged.signals
    found = shown_point(signals, panels.value)
    if found is None:
        return
    index, place = found
    name = which(index, signals, "value")
    besides = ", by the joint limits that judge the baseline" if joint else ""
    if limits.distribution is None:
        two_lines(
            pad,
            f"at {name}{besides}",
            (f"{at}/value/lower/{place}", f"{at}/value/upper/{place}"),
            bases[0].multiple,
            limits.centre,
            limits.sigma,
        )
        distance_step(pad, f"of {name}", float(values[index]), limits.centre, limits.sigma)
    there = place_of(panels.moving_range, index)
    if there is None:
        return
    moving_range_step(pad, series, before + index, limits.span, f"{at}/moving_range/value/{there}")
    if limits.distribution is None:
        spread_steps(
            pad,
            f"of its moving range{besides}",
            "range",
            limits.span,
            bases[1],
            limits.sigma,
            (
                f"{at}/moving_range/centre/{there}",
                None if joint else f"{at}/moving_range/lower/{there}",
                f"{at}/moving_range/upper/{there}",
            ),
            natural=True,
        )
