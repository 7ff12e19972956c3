"""Steps that many charts share: the point shown, sigma, the limits of a level and of a spread, the price."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np

from .. import factors
from ..charts.common import LimitBasis, Panel, Performance
from ..charts.lines import Spread, spread_lines
from ..data import Floats, SubgroupStatistics
from ..rules import Rule
from ..sigma import moving_ranges
from .steps import Pad, Value, present, total_of

FACTOR = "factor for this size (GET /v1/factors)"


def shown_point(signals: Sequence[Any], panel: Panel) -> tuple[int, int] | None:
    """The point that the steps show: the first with a signal, else the last; its index, and its place in the panel.

    ``None`` where nothing is plotted.
    """
    index = np.asarray(panel.index)
    if not len(index):
        return None
    for signal in signals:
        places = np.flatnonzero(index == signal.index)
        if len(places):
            return int(signal.index), int(places[0])
    return int(index[-1]), len(index) - 1


def place_of(panel: Panel, index: int) -> int | None:
    """Where a point stands in a panel; ``None`` where it is a gap there."""
    places = np.flatnonzero(np.asarray(panel.index) == index)
    return int(places[0]) if len(places) else None


def which(index: int, signals: Sequence[Any], what: str = "point") -> str:
    """The point in words."""
    why = "the first with a signal" if any(signal.index == index for signal in signals) else "the last"
    return f"{what} {index} ({why})"


def multiple(pad: Pad, basis: LimitBasis) -> float:
    """How many deviations out the limits of a normal statistic lie, with the steps where it is a probability."""
    k = basis.multiple
    if basis.sigma_multiple is None:
        pad.work(
            "Probability of a point in control beyond both limits, which the multiple k is chosen for",
            "erfc(k / sqrt(2))",
            None,
            k=(k, "normal quantile exceeded with half the false-alarm probability"),
        )
    return k


def two_lines(
    pad: Pad,
    what: str,
    where: tuple[str | None, str | None],
    k: float,
    centre: float,
    sigma: float,
    size: float | None = None,
) -> tuple[float, float]:
    """Limits of a level: ``centre ± k·sigma/√n``, without the root for single values."""
    root = "" if size is None else " / sqrt(n)"
    values: dict[str, Value] = {"centre": centre, "k": k, "sigma": sigma}
    if size is not None:
        values["n"] = size
    return (
        pad.work(f"Lower limit {what}", f"centre - k * sigma{root}", where[0], **values),
        pad.work(f"Upper limit {what}", f"centre + k * sigma{root}", where[1], **values),
    )


def spread_steps(
    pad: Pad,
    what: str,
    spread: Spread,
    size: int,
    basis: LimitBasis,
    sigma: float,
    where: tuple[str | None, str | None, str | None],
    *,
    natural: bool = False,
) -> None:
    """Centre and limits of a panel of ranges or deviations; ``where`` of centre, lower and upper.

    natural: a limit that does not exist is told as 0, as a panel of points has it.
    """
    lines = spread_lines(spread, size, basis.sigma_multiple, basis.tail)
    name, deviation = ("d2", "d3") if spread == "range" else ("c4", "c5")
    e: Value = (lines.centre, FACTOR)
    s: Value = (lines.sd, FACTOR if spread == "range" else "sqrt(1 - c4**2)")
    pad.work(f"Centre line {what}", f"{name} * sigma", where[0], **{name: e}, sigma=sigma)
    if basis.sigma_multiple is not None:
        values = {name: e, deviation: s, "k": basis.sigma_multiple, "sigma": sigma}
        if lines.lower is not None:
            pad.work(f"Lower limit {what}", f"({name} - k * {deviation}) * sigma", where[1], **values)
        elif natural:
            pad.work(
                f"Lower limit {what}: none, as it would lie below 0",
                f"max(0, ({name} - k * {deviation}) * sigma)",
                where[1],
                **values,
            )
        pad.work(f"Upper limit {what}", f"({name} + k * {deviation}) * sigma", where[2], **values)
        return
    tail = pad.work(
        "Probability beyond each limit",
        "probability / 2",
        None,
        probability=basis.false_alarm_probability or 0.0,
    )
    of = f"the {'range' if spread == 'range' else 'standard deviation'} of {size} standard normal values"
    if lines.lower is not None:
        pad.work(
            f"Lower limit {what}",
            "quantile * sigma",
            where[1],
            quantile=(lines.lower, f"exceeded from below with probability {tail:.6g} by {of}"),
            sigma=sigma,
        )
    pad.work(
        f"Upper limit {what}",
        "quantile * sigma",
        where[2],
        quantile=(lines.upper, f"exceeded with probability {tail:.6g} by {of}"),
        sigma=sigma,
    )


def grand_mean_steps(
    pad: Pad, used: SubgroupStatistics, where: str | None, what: str = "Centre line"
) -> float:
    """The mean of all values, from the means of their subgroups."""
    there = used.size > 0
    means, sizes = used.mean[there], used.size[there]
    if used.common_size is not None:
        return pad.mean(f"{what}: mean of the {len(means)} subgroup means", means, where, "mean")
    total = total_of(means * sizes)
    return pad.work(
        f"{what}: mean of all values, each subgroup's mean weighing its size",
        "sum_values / values",
        where,
        sum_values=(total, "sum of size times mean over the subgroups"),
        values=int(sizes.sum()),
    )


def within_steps(pad: Pad, used: SubgroupStatistics, estimator: str, where: str | None) -> float:
    """Sigma from within the subgroups, by the estimator named."""
    by_range = estimator in ("mean-range", "median-range")
    spread = used.range if by_range else used.sd
    assert spread is not None
    usable = used.size > 1
    values, sizes = spread[usable], used.size[usable]
    size = int(sizes[0]) if bool((sizes == sizes[0]).all()) else None
    named = "ranges" if by_range else "standard deviations"
    name = "range" if by_range else "sd"
    if estimator == "pooled-sd":
        return _pooled_steps(pad, values, sizes, where)
    if estimator == "median-range":
        if size is not None:
            middle = pad.median(f"Median of the {len(values)} ranges", values)
            return pad.work(
                "Sigma from the median range",
                "median_range / factor",
                where,
                median_range=middle,
                factor=(factors.range_median(size), f"median range of {size} standard normal values"),
            )
        return pad.median(
            "Sigma: median of the ranges, each over the median range of its own size",
            values / factors.range_median_of(sizes),
            where,
        )
    if size is not None:
        mean = pad.mean(f"Mean of the {len(values)} {named}", values, None, name)
        if by_range:
            return pad.work(
                "Sigma from the mean range",
                "mean_range / d2",
                where,
                mean_range=mean,
                d2=(factors.d2(size), FACTOR),
            )
        c4 = c4_step(pad, size)
        return pad.work("Sigma from the mean standard deviation", "mean_sd / c4", where, mean_sd=mean, c4=c4)
    if by_range:
        expected, deviation = factors.d2_of(sizes), factors.d3_of(sizes)
        e, d = "d2", "d3"
    else:
        expected = factors.c4_of(sizes)
        deviation = factors.of_sizes(factors.relative_sd_of_sd, sizes)
        e, d = "c4", "c5"
    weight = expected / (deviation * deviation)
    pad.work(
        f"Weight of the last subgroup, of {int(sizes[-1])} values; each has that of its size",
        f"{e} / {d}**2",
        None,
        **{e: (float(expected[-1]), FACTOR), d: (float(deviation[-1]), FACTOR)},
    )
    return pad.work(
        f"Sigma from the {named} of subgroups of several sizes",
        "sum_weighted / sum_weights",
        where,
        sum_weighted=(total_of(weight * values), f"sum of weight times {named[:-1]}"),
        sum_weights=(total_of(weight * expected), f"sum of weight times {e}"),
    )


def _pooled_steps(pad: Pad, sd: Floats, sizes: Any, where: str | None) -> float:
    freedom = pad.work(
        "Degrees of freedom", "values - subgroups", None, values=int(sizes.sum()), subgroups=len(sizes)
    )
    pooled = pad.work(
        "Pooled standard deviation",
        "sqrt(sum_squares / freedom)",
        None,
        sum_squares=(
            total_of((sizes - 1) * sd * sd),
            "sum of (size - 1) times the squared standard deviation over the subgroups",
        ),
        freedom=freedom,
    )
    c4 = c4_step(pad, freedom + 1.0)
    return pad.work("Sigma, the deviation's bias taken off", "pooled / c4", where, pooled=pooled, c4=c4)


def c4_step(pad: Pad, size: float) -> float:
    """The mean standard deviation of n standard normal values."""
    return pad.work(
        f"Factor c4: mean standard deviation of {size:g} standard normal values (also in GET /v1/factors)",
        "sqrt(2 / (n - 1)) * exp(lgamma(n / 2) - lgamma((n - 1) / 2))",
        None,
        n=size,
    )


def moving_sigma_steps(
    pad: Pad, values: Floats, span: int, estimator: str, where: str | None, of: str = "values"
) -> float:
    """Sigma of single values from their moving ranges."""
    there = present(moving_ranges(values, span))
    if estimator.startswith("median"):
        middle = pad.median(f"Median of the {len(there)} moving ranges of {span} successive {of}", there)
        return pad.work(
            "Sigma from the median moving range",
            "median_range / factor",
            where,
            median_range=middle,
            factor=(factors.range_median(span), f"median range of {span} standard normal values"),
        )
    mean = pad.mean(f"Mean of the {len(there)} moving ranges of {span} successive {of}", there, None, "range")
    return pad.work(
        "Sigma from the mean moving range",
        "mean_range / d2",
        where,
        mean_range=mean,
        d2=(factors.d2(span), FACTOR),
    )


def values_mean_steps(pad: Pad, values: Iterable[float], where: str | None, what: str = "values") -> float:
    """The mean of single values."""
    there = present(values)
    return pad.mean(f"Centre line: mean of the {len(there)} {what}", there, where)


def moving_range_step(pad: Pad, series: Floats, at: int, span: int, where: str | None) -> float:
    """The moving range that ends at a place of a series."""
    return pad.range(
        f"Moving range: largest less smallest of the last {span} values",
        series[at - span + 1 : at + 1],
        where,
    )


def alone(rules: Sequence[Rule]) -> bool:
    """Whether the limit is the only rule that asks for action."""
    return all(rule.severity == "warning" for rule in rules[1:])


def normal_price_steps(pad: Pad, rules: Sequence[Rule], k: float, performance: Performance) -> None:
    """The run length of the limit alone; with run rules, how theirs is found."""
    p = pad.work("Probability of a point in control beyond the limits", "erfc(k / sqrt(2))", None, k=k)
    only = alone(rules)
    told = only and performance.in_control_arl is not None
    pad.work(
        "In-control average run length" + ("" if only else " of the limit alone"),
        "1 / p",
        "#/performance/in_control_arl" if told else None,
        p=p,
    )
    if not only:
        pad.state(
            "With the run rules the run length is that of a Markov chain: its states are what the rules must remember "
            "of the points before, Q holds the probabilities of passing from one to another without a signal, "
            "and the average run length of each state solves a linear system",
            "(I - Q) * arl = 1",
            **({} if performance.in_control_arl is None else {"in_control_arl": performance.in_control_arl}),
        )


def distance_step(pad: Pad, what: str, value: float, centre: float, sigma: float) -> float:
    """How far a plotted value lies from its centre line, as the run rules see it."""
    return pad.work(
        f"Distance {what} from the centre line, in standard deviations of what is plotted, as the run rules see it",
        "(value - centre) / sigma",
        None,
        value=value,
        centre=centre,
        sigma=sigma,
    )
