"""Worked steps of the charts of rare events."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from ..charts.common import LimitBasis, normal_multiple
from ..charts.rare import OpportunityLimits, TimeLimits, opportunity_lines
from ..data import Floats, Intervals
from .pieces import alone, shown_point, which
from .steps import Pad, Step, Value, present, summed, total_of

_AT = "#/limits/panels/interval"


def _used(data: Intervals, limits: Any) -> Floats:
    values = data.values.copy()
    for one in limits.baseline.excluded:
        values[one.index] = np.nan
    return values


def fit_opportunities(data: Intervals | None, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from opportunities between events to the limits."""
    pad, limits = Pad(), result.limits
    if data is not None and limits.estimator != "given":
        used = _used(data, limits)
        text, given = summed("y", present(used))
        count = len(present(used))
        total = pad.work(f"Opportunities of the {count} intervals in all", text, None, **given)
        less = " - 1" if limits.estimator == "unbiased" else ""
        pad.work(
            "Mean, counted from the smallest possible interval",
            f"(total - start * n) / (n{less}) + start",
            "#/limits/mean",
            total=total,
            start=limits.starts_at,
            n=count,
        )
        pad.work(
            "Probability of an event at an opportunity",
            f"(n{less}) / (n{less} + total - start * n)",
            "#/limits/event_probability",
            total=total,
            start=limits.starts_at,
            n=count,
        )
    elif limits.estimator == "given":
        pad.work(
            "Mean from the known probability",
            "(1 - p) / p + start",
            "#/limits/mean",
            p=limits.event_probability,
            start=limits.starts_at,
        )
    _opportunity_lines(pad, limits, limits.basis, f"{_AT}/lower", f"{_AT}/upper")
    if result.baseline is not None:
        _opportunity_point(pad, limits, result.baseline)
    _opportunity_price(pad, limits, result.performance)
    return pad.steps


def _opportunity_lines(
    pad: Pad, limits: OpportunityLimits, basis: LimitBasis, low: str | None, high: str | None
) -> None:
    start = limits.starts_at
    if basis.sigma_multiple is not None:
        y = pad.work("Mean counted from 0", "mean - start", None, mean=limits.mean, start=start)
        sd = pad.work("Standard deviation", "sqrt(y * (y + 1))", None, y=y)
        values: dict[str, Value] = {"start": start, "y": y, "k": basis.sigma_multiple, "sd": sd}
        exists = limits.panels.interval.lower is not None
        pad.work(
            "Lower limit" if exists else "Lower limit: none, as it would not lie above the smallest interval",
            "start + y - k * sd",
            low if exists else None,
            **values,
        )
        pad.work("Upper limit", "start + y + k * sd", high, **values)
        return
    tail = pad.work(
        "Probability beyond each limit, at most",
        "probability / 2",
        None,
        probability=basis.false_alarm_probability or 0.0,
    )
    p: Value = limits.event_probability
    lower, upper = opportunity_lines(limits.mean - start, basis)
    pad.work(
        "Lower limit: largest interval undercut with no more than that; none where it is the smallest possible",
        "start + floor(log(1 - tail) / log(1 - p))",
        None if lower is None else low,
        start=start,
        tail=tail,
        p=p,
    )
    pad.work(
        "Upper limit: smallest interval exceeded with no more than that",
        "start + max(0, ceil(log(tail) / log(1 - p)) - 1)",
        high,
        start=start,
        tail=tail,
        p=p,
    )
    pad.work(
        "Probability above the upper limit",
        "(1 - p)**(y + 1)",
        None,
        p=p,
        y=upper,
    )


def _opportunity_point(pad: Pad, limits: OpportunityLimits, judged: Any) -> None:
    found = shown_point(judged.signals, judged.panels.interval)
    if found is None:
        return
    index, place = found
    value = float(judged.panels.interval.value[place])
    p = limits.event_probability
    pad.work(
        f"Probability of an interval as long as that of {which(index, judged.signals)}, {value:g}, or longer",
        "(1 - p)**(x - start)",
        None,
        p=p,
        x=value,
        start=limits.starts_at,
    )
    pad.work(
        "Probability of one as short, or shorter",
        "1 - (1 - p)**(x - start + 1)",
        None,
        p=p,
        x=value,
        start=limits.starts_at,
    )
    pad.work(
        "Its distance from the centre line in standard deviations, as the run rules see it",
        "(x - mean) / sqrt((mean - start) * (mean - start + 1))",
        None,
        x=value,
        mean=limits.mean,
        start=limits.starts_at,
    )


def _opportunity_price(pad: Pad, limits: OpportunityLimits, performance: Any) -> None:
    if performance.in_control_arl is None:
        return
    if not alone(limits.rules):
        _chain(pad, performance.in_control_arl)
        return
    lower, upper = opportunity_lines(limits.mean - limits.starts_at, limits.basis)
    p = limits.event_probability
    # A count on a limit is within; below, up to the last whole number under it.
    above = math.floor(upper + 1e-9) + 1.0
    below = 0.0 if lower is None else float(math.ceil(lower - 1e-9))
    outside = pad.work(
        f"Probability of an interval, counted from 0, of {above:g} or more, or fewer than {below:g}",
        "(1 - p)**above + 1 - (1 - p)**below",
        None,
        p=p,
        above=above,
        below=below,
    )
    pad.work("In-control average run length, in events", "1 / outside", None, outside=outside)


def _chain(pad: Pad, arl: float) -> None:
    pad.state(
        "With the run rules the run length is that of a Markov chain: its states are what the rules must remember of "
        "the points before, Q holds the probabilities of passing from one to another without a signal",
        "(I - Q) * arl = 1",
        in_control_arl=arl,
    )


def judge_opportunities(
    limits: OpportunityLimits, data: Intervals, carry: Any, result: Any
) -> tuple[Step, ...]:
    """The steps of one interval."""
    pad = Pad()
    _opportunity_lines(pad, limits, limits.basis, None, None)
    found = shown_point(result.signals, result.panels.interval)
    _opportunity_point(pad, limits, result)
    if found is not None:
        lines = limits.panels.interval
        place = found[1]
        if lines.upper is not None:
            pad.work(
                "Upper limit at this point: the frozen one",
                "upper",
                f"#/panels/interval/upper/{place}",
                upper=lines.upper,
            )
    return pad.steps


def fit_times(data: Intervals | None, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from times between events to the limits."""
    pad, limits = Pad(), result.limits
    shape = limits.shape
    if data is not None and limits.mean_source == "estimated":
        times = present(_used(data, limits))
        if shape == 1.0:
            pad.mean(f"Scale: mean of the {len(times)} times", times, "#/limits/scale")
        else:
            _weibull(pad, times, shape, limits.shape_source == "maximum-likelihood")
    elif shape == 1.0:
        pad.work(
            "Scale of the exponential distribution: its mean", "mean", "#/limits/scale", mean=limits.mean
        )
    else:
        pad.work(
            "Scale from the known mean",
            "mean / gamma(1 + 1 / shape)",
            "#/limits/scale",
            mean=limits.mean,
            shape=shape,
        )
    if shape != 1.0:
        pad.work("Mean", "scale * gamma(1 + 1 / shape)", "#/limits/mean", scale=limits.scale, shape=shape)
    _time_lines(pad, limits, True)
    if result.baseline is not None:
        _time_point(pad, limits, result.baseline, "#/baseline/panels")
    if alone(limits.rules):
        p = limits.false_alarm_probability
        pad.work("In-control average run length, in events", "1 / p", "#/performance/in_control_arl", p=p)
    elif result.performance.in_control_arl is not None:
        _chain(pad, result.performance.in_control_arl)
    return pad.steps


def _weibull(pad: Pad, times: list[float], shape: float, fitted: bool) -> None:
    largest = max(times)
    powers = [(x / largest) ** shape for x in times]
    logs = [math.log(x / largest) for x in times] if min(times) > 0 else []
    if fitted:
        pad.work(
            "The shape of largest likelihood is found by Newton steps; put in, it makes this 0, but for rounding",
            "sum_weighted_logs / sum_powers - 1 / shape - mean_log",
            None,
            sum_weighted_logs=(
                total_of(w * y for w, y in zip(powers, logs, strict=True)),
                "sum of (x / largest)**shape times log(x / largest)",
            ),
            sum_powers=(total_of(powers), "sum of (x / largest)**shape"),
            shape=shape,
            mean_log=(total_of(logs) / len(logs), "mean of log(x / largest)"),
        )
    pad.work(
        "Scale of largest likelihood for this shape",
        "largest * (sum_powers / n)**(1 / shape)",
        "#/limits/scale",
        largest=largest,
        sum_powers=(total_of(powers), "sum of (x / largest)**shape"),
        n=len(times),
        shape=shape,
    )


def _time_lines(pad: Pad, limits: TimeLimits, told: bool) -> None:
    tail = pad.work(
        "Probability beyond each limit", "probability / 2", None, probability=limits.false_alarm_probability
    )
    values: dict[str, Value] = {"scale": limits.scale, "shape": limits.shape}
    pad.work(
        "Lower limit",
        "scale * (-log1p(-tail))**(1 / shape)",
        f"{_AT}/lower" if told else None,
        tail=tail,
        **values,
    )
    pad.work(
        "Centre line: the median", "scale * log(2)**(1 / shape)", f"{_AT}/centre" if told else None, **values
    )
    pad.work(
        "Upper limit",
        "scale * (-log(tail))**(1 / shape)",
        f"{_AT}/upper" if told else None,
        tail=tail,
        **values,
    )


def _time_point(pad: Pad, limits: TimeLimits, judged: Any, at: str) -> None:
    found = shown_point(judged.signals, judged.panels.interval)
    if found is None:
        return
    index, place = found
    value = float(judged.panels.interval.value[place])
    if value > 0:
        pad.work(
            f"Probability of a time as short as that of {which(index, judged.signals)}, or shorter",
            "1 - exp(-(x / scale)**shape)",
            None,
            x=value,
            scale=limits.scale,
            shape=limits.shape,
        )
    pad.work(
        "Lower limit at this point: the frozen one",
        "lower",
        f"{at}/interval/lower/{place}",
        lower=limits.panels.interval.lower or 0.0,
    )
    k = normal_multiple(limits.false_alarm_probability / 2.0)
    pad.work(
        "The run rules look at the normal score of that probability; limits lie at the scores -k and k, beyond which "
        "a point in control lies with probability",
        "erfc(k / sqrt(2))",
        None,
        k=k,
    )


def judge_times(limits: TimeLimits, data: Intervals, carry: Any, result: Any) -> tuple[Step, ...]:
    """The steps of one time."""
    pad = Pad()
    _time_lines(pad, limits, False)
    _time_point(pad, limits, result, "#/panels")
    return pad.steps
