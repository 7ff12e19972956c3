"""Worked steps of the charts of counts, plain and dispersed."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from ..charts.attributes import CountChart, is_binomial
from ..charts.common import LimitBasis
from ..charts.counts import count_lines
from ..data import Counts, Floats
from ..factors import d2
from ..sigma import moving_ranges
from .pieces import FACTOR, alone, shown_point, which
from .steps import Pad, Step, Value, present, summed

_PANEL = {
    "p": "proportion",
    "np": "count",
    "c": "count",
    "u": "rate",
    "p-prime": "proportion",
    "u-prime": "rate",
}


def fit(data: Counts | None, options: Any, result: Any, chart: CountChart) -> tuple[Step, ...]:
    """The steps from a baseline to the limits, and those of one sample."""
    pad, limits = Pad(), result.limits
    panel = _PANEL[chart]
    sizes = None
    if data is not None:
        sizes = _sizes(data)
        counts = data.counts.copy()
        for one in limits.baseline.excluded:
            counts[one.index] = np.nan
        if limits.mean_source == "estimated":
            _mean_steps(pad, chart, counts, sizes)
        if hasattr(limits, "sigma_z") and limits.sigma_z_source == "estimated":
            _dispersion_steps(pad, chart, counts, sizes, limits.mean)
    lines = getattr(limits.panels, panel)
    if limits.sample_size is not None:
        at = f"#/limits/panels/{panel}"
        _lines(
            pad,
            chart,
            limits,
            limits.sample_size,
            f"of samples of {limits.sample_size:g}",
            (
                f"{at}/centre",
                None if lines.lower is None else f"{at}/lower",
                None if lines.upper is None else f"{at}/upper",
            ),
        )
    if data is not None and sizes is not None and result.baseline is not None:
        _point(pad, chart, limits, data, sizes, result.baseline, "#/baseline/panels")
    if not pad.steps or len(pad.steps) < 3:
        _lines(
            pad,
            chart,
            limits,
            1.0 if not is_binomial(chart) else 100.0,
            "of a sample of that size",
            (None,) * 3,
        )
    _price(pad, limits, result.performance)
    return pad.steps


def judge(limits: Any, data: Counts, carry: Any, result: Any, chart: CountChart) -> tuple[Step, ...]:
    """The steps from one sample to its point and limits."""
    pad = Pad()
    sizes = _sizes(data)
    if data.inspected is None and limits.sample_size is not None:
        sizes = np.full(len(data.counts), float(limits.sample_size))
    _point(pad, chart, limits, data, sizes, result, "#/panels")
    if not pad.steps:
        size = limits.sample_size or (100.0 if is_binomial(chart) else 1.0)
        _lines(pad, chart, limits, size, f"of samples of {size:g}", (None, None, None))
    return pad.steps


def _sizes(data: Counts) -> Floats:
    if data.inspected is None:
        return np.ones(len(data.counts))
    found: Floats = np.broadcast_to(np.asarray(data.inspected, dtype=np.float64), data.counts.shape)
    return found


def _mean_steps(pad: Pad, chart: CountChart, counts: Floats, sizes: Floats) -> None:
    there = ~np.isnan(counts)
    what = "proportion" if is_binomial(chart) else "rate"
    text, given = summed("x", counts[there])
    events = pad.work(f"Events in the {int(there.sum())} samples", text, None, **given)
    text, given = summed("n", sizes[there])
    inspected = pad.work("Inspected in all", text, None, **given)
    pad.work(
        f"Mean {what}: events over what was inspected",
        "events / inspected",
        "#/limits/mean",
        events=events,
        inspected=inspected,
    )


def _dispersion_steps(pad: Pad, chart: CountChart, counts: Floats, sizes: Floats, mean: float) -> None:
    binomial = is_binomial(chart)
    sd = np.sqrt(mean * (1.0 - mean) / sizes) if binomial else np.sqrt(mean / sizes)
    z = (counts / sizes - mean) / sd
    last = int(np.flatnonzero(~np.isnan(z))[-1])
    pad.work(
        f"Standardised point of sample {last}; the others likewise",
        "(x / n - mean) / sqrt(mean * (1 - mean) / n)" if binomial else "(x / n - mean) / sqrt(mean / n)",
        None,
        x=float(counts[last]),
        n=float(sizes[last]),
        mean=mean,
    )
    ranges = present(moving_ranges(z))
    average = pad.mean(
        f"Mean of the {len(ranges)} moving ranges of the standardised points", ranges, None, "range"
    )
    pad.work(
        "Sigma of the standardised points",
        "mean_range / d2",
        "#/limits/sigma_z",
        mean_range=average,
        d2=(d2(2), FACTOR),
    )


def _lines(
    pad: Pad, chart: CountChart, limits: Any, size: float, what: str, where: tuple[str | None, ...]
) -> None:
    """Centre, lower and upper limit for samples of one size; a limit that does not exist is told as the bound."""
    binomial, counts = is_binomial(chart), chart in ("np", "c")
    mean = limits.mean
    variance = "mean * (1 - mean)" if binomial else "mean"
    values: dict[str, Value] = {"mean": mean, "n": size}
    centre = mean
    if counts:
        centre = pad.work(f"Centre line {what}", "n * mean", where[0], **values)
    sd = pad.work(
        f"Standard deviation {what}",
        f"sqrt(n * {variance})" if counts else f"sqrt({variance} / n)",
        None,
        **values,
    )
    if limits.sigma_multiple is None:
        _exact_lines(pad, binomial, counts, limits.basis, mean, size, what, where)
        return
    far = "k * sd"
    values = {"centre": centre, "k": limits.sigma_multiple, "sd": sd}
    if chart in ("p-prime", "u-prime"):
        far, values["sigma_z"] = "k * sigma_z * sd", limits.sigma_z
    pad.work(f"Lower limit {what}: none where this is 0", f"max(0, centre - {far})", where[1], **values)
    if not binomial:
        pad.work(f"Upper limit {what}", f"centre + {far}", where[2], **values)
    elif counts:
        pad.work(
            f"Upper limit {what}: none where this is n", f"min(n, centre + {far})", where[2], n=size, **values
        )
    else:
        pad.work(f"Upper limit {what}: none where this is 1", f"min(1, centre + {far})", where[2], **values)


def _exact_lines(
    pad: Pad,
    binomial: bool,
    counts: bool,
    basis: LimitBasis,
    mean: float,
    size: float,
    what: str,
    where: tuple[str | None, ...],
) -> None:
    tail = pad.work(
        "Probability beyond each limit, at most",
        "probability / 2",
        None,
        probability=basis.false_alarm_probability or 0.0,
    )
    law = f"{'binomial' if binomial else 'Poisson'} law of the counts in a sample of {size:g}"
    found = count_lines(binomial, mean, np.array([size]), basis)
    lower, upper = float(found.lower[0]), float(found.upper[0])
    if 1.0 <= lower <= 12.0 and (not binomial or size == int(size)):
        _below(pad, binomial, mean, size, int(lower))
    formula = "count" if counts else "count / n"
    besides: dict[str, Value] = {} if counts else {"n": size}
    pad.work(
        f"Lower limit {what}: none where this is 0",
        formula,
        where[1],
        count=(lower, f"largest count with no more than {tail:.6g} below it, in the {law}"),
        **besides,
    )
    pad.work(
        f"Upper limit {what}",
        formula,
        where[2],
        count=(upper, f"smallest count with no more than {tail:.6g} above it, in the {law}"),
        **besides,
    )


def _below(pad: Pad, binomial: bool, mean: float, size: float, count: int) -> None:
    if binomial:
        terms = " + ".join(
            f"comb({int(size)}, {i}) * mean**{i} * (1 - mean)**(n - {i})" for i in range(count)
        )
        pad.work(f"Probability of fewer than {count}", terms, None, mean=mean, n=size)
    else:
        terms = " + ".join(f"(n * mean)**{i} / gamma({i} + 1)" for i in range(count))
        pad.work(f"Probability of fewer than {count}", f"exp(-n * mean) * ({terms})", None, mean=mean, n=size)


def _point(
    pad: Pad, chart: CountChart, limits: Any, data: Counts, sizes: Floats, judged: Any, at: str
) -> None:
    panel = _PANEL[chart]
    points = getattr(judged.panels, panel)
    found = shown_point(judged.signals, points)
    if found is None:
        return
    index, place = found
    name = which(index, judged.signals, "sample")
    x, size = float(data.counts[index]), float(sizes[index])
    value = x
    where = f"{at}/{panel}"
    if chart not in ("np", "c"):
        what = "Proportion nonconforming" if is_binomial(chart) else "Rate of nonconformities"
        value = pad.work(f"{what} in {name}", "x / n", f"{where}/value/{place}", x=x, n=size)
    _lines(
        pad,
        chart,
        limits,
        size,
        f"at {name}",
        (f"{where}/centre/{place}", f"{where}/lower/{place}", f"{where}/upper/{place}"),
    )
    mean = limits.mean
    centre = size * mean if chart in ("np", "c") else mean
    spread = mean * (1.0 - mean) if is_binomial(chart) else mean
    sd = math.sqrt(size * spread) if chart in ("np", "c") else math.sqrt(spread / size)
    scaled = getattr(limits, "sigma_z", None)
    if scaled is None:
        pad.work(
            "Distance from the centre line in standard deviations, as the run rules see it",
            "(value - centre) / sd",
            None,
            value=value,
            centre=centre,
            sd=sd,
        )
    else:
        pad.work(
            "Distance from the centre line in standard deviations, as the run rules see it",
            "(value - centre) / (sigma_z * sd)",
            None,
            value=value,
            centre=centre,
            sd=sd,
            sigma_z=scaled,
        )


def _price(pad: Pad, limits: Any, performance: Any) -> None:
    if performance.in_control_arl is None:
        return
    if alone(limits.rules):
        pad.work(
            "Probability of a point in control beyond the limits, from the in-control average run length: "
            f"{performance.method}",
            "1 / arl",
            None,
            arl=performance.in_control_arl,
        )
        return
    pad.state(
        "With the run rules the run length is that of a Markov chain: its states are what the rules must remember of "
        "the points before, Q holds the probabilities of passing from one to another without a signal",
        "(I - Q) * arl = 1",
        in_control_arl=performance.in_control_arl,
    )
