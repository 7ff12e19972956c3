"""Worked steps of the charts of several variables: T² and the multivariate EWMA."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy

from ..charts import successive
from ..charts.multivariate import TSquaredLimits
from ..charts.vectors import Metric, metric
from ..data import Floats, Vectors
from .pieces import shown_point, which
from .steps import Pad, Step, Value, summed

WRITTEN_OUT = 4
"""Variables up to which a squared distance is written out."""


def _estimates(pad: Pad, data: Vectors, limits: Any) -> None:
    """Mean, variance and covariance of the first two variables."""
    if limits.covariance_estimator == "given":
        return
    keep = data.present()
    for one in limits.baseline.excluded:
        keep[one.index] = False
    first, second = limits.variables[:2]
    flat = data.values[keep].reshape(-1, len(limits.variables))
    mean = pad.mean(f"Mean of {first}; the other variables likewise", flat[:, 0], "#/limits/mean/0")
    centre = np.array(limits.mean)
    size = data.subgroup_size
    if limits.covariance_estimator == "successive-differences":
        values = np.where(keep[:, None], data.values, np.nan)
        steps = np.diff(values, axis=0)
        steps = steps[~np.isnan(steps).any(axis=1)]
        k = len(steps)
        parts = ((0, 0, first, "variance"), (0, 1, f"{first} and {second}", "covariance"))
        for i, j, of, what in parts:
            text, given = summed("p", steps[:, i] * steps[:, j])
            pad.work(
                f"{what.capitalize()} of {of} from the products of {k} differences of neighbours",
                f"({text}) / (2 * k)",
                f"#/limits/covariance/{i}/{j}",
                k=k,
                **given,
            )
        return
    if size > 1:
        away = data.values[keep]
        away = (away - away.mean(axis=1, keepdims=True)).reshape(-1, len(centre))
        freedom, about = "m * (n - 1)", "the mean of its subgroup"
        counts: dict[str, Value] = {"m": int(keep.sum()), "n": size}
    else:
        away = flat - mean if len(centre) == 1 else flat - centre
        freedom, about = "m - 1", "the mean"
        counts = {"m": len(flat)}
    for i, j, of, what in ((0, 0, first, "variance"), (0, 1, f"{first} and {second}", "covariance")):
        products = away[:, i] * away[:, j]
        text, given = summed("p", products)
        pad.work(
            f"{what.capitalize()} of {of}: products of the distances from {about}, over the degrees of freedom",
            f"({text}) / ({freedom})",
            f"#/limits/covariance/{i}/{j}",
            **given,
            **counts,
        )


def _distance(
    pad: Pad,
    what: str,
    deviations: Floats,
    measure: Metric,
    limits: Any,
    factor: tuple[str, dict[str, Value]],
    where: str | None,
) -> float:
    """A squared distance under the covariance, times a factor."""
    p = len(deviations)
    text, values = factor
    if p > WRITTEN_OUT:
        white = measure.whiten(deviations[None, :])[0]
        parts, given = summed("s", white * white)
        return pad.work(
            what,
            f"{text} * ({parts})",
            where,
            **values,
            **{
                name: (value, "square of a deviation made independent of the others, by the Cholesky factor")
                if not isinstance(value, tuple)
                else value
                for name, value in given.items()
            },
        )
    sd = measure.sd
    correlation = np.array(limits.covariance) / sd[:, None] / sd
    inverse = np.linalg.inv(correlation)
    named: dict[str, Value] = {}
    terms = []
    for i in range(p):
        named[f"d{i + 1}"] = float(deviations[i] / sd[i])
    for i in range(p):
        for j in range(i, p):
            name = f"r{i + 1}{j + 1}"
            named[name] = (
                float(0.5 * (inverse[i, j] + inverse[j, i])),
                "entry of the inverse of the correlation matrix",
            )
            terms.append(f"{'' if i == j else '2 * '}{name} * d{i + 1} * d{j + 1}")
    return pad.work(what, f"{text} * ({' + '.join(terms)})", where, **values, **named)


def fit_t_squared(data: Vectors | None, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from a baseline to mean, covariance and limits, and the distance of one point."""
    pad, limits = Pad(), result.limits
    p, alpha = len(limits.variables), limits.false_alarm_probability
    if data is not None:
        _estimates(pad, data, limits)
    upper = "#/limits/panels/t_squared/upper"
    pad.work(
        "Centre line: the mean of the statistic is the number of variables",
        "p",
        "#/limits/panels/t_squared/centre",
        p=p,
    )
    if limits.covariance_estimator == "given":
        _known_limit(pad, limits, upper)
    else:
        _estimated_limit(pad, data, limits, alpha, upper)
    if data is not None and result.baseline is not None:
        _t_squared_point(pad, limits, data, result.baseline, "#/baseline/panels")
    arl = result.performance.in_control_arl
    pad.work(
        "In-control average run length, for a mean and a covariance known exactly",
        "1 / probability",
        None if arl is None else "#/performance/in_control_arl",
        probability=alpha,
    )
    return pad.steps


def _known_limit(pad: Pad, limits: TSquaredLimits, where: str | None) -> None:
    p, alpha = len(limits.variables), limits.false_alarm_probability
    chi = float(scipy.special.chdtri(p, alpha))
    pad.work(
        "Upper limit",
        "quantile",
        where,
        quantile=(
            chi,
            f"quantile of chi-square with {p} degrees of freedom exceeded with probability {alpha:g}",
        ),
    )


def _f_quantile(p: int, freedom: float, alpha: float) -> float:
    y = float(scipy.special.betainccinv(0.5 * p, 0.5 * freedom, alpha))
    return y / (1.0 - y) * freedom / p


def _estimated_limit(
    pad: Pad, data: Vectors | None, limits: TSquaredLimits, alpha: float, where: str
) -> None:
    assert data is not None
    assert limits.baseline is not None
    p, m, n = len(limits.variables), limits.baseline.points, limits.subgroup_size
    if limits.covariance_estimator == "successive-differences":
        keep = data.present()
        for one in limits.baseline.excluded:
            keep[one.index] = False
        scale, freedom = successive.new_point_law(tuple(sorted(successive.paths(keep)[1])), p)
        f = _f_quantile(p, freedom, alpha)
        pad.work(
            "Upper limit for new points: a multiple of F whose moments are those of the statistic",
            "scale * p / freedom * F",
            where,
            scale=(scale, "from the moments of the covariance of successive differences"),
            p=p,
            freedom=(freedom, "from the same"),
            F=(
                f,
                f"quantile of F with {p} and {freedom:.9g} degrees of freedom exceeded with probability {alpha:g}",
            ),
        )
        return
    if n > 1:
        own = m * (n - 1.0)
        freedom = pad.work("Second degrees of freedom of F", "m * (n - 1) - p + 1", None, m=m, n=n, p=p)
        formula, counts = "p * (m + 1) * (n - 1) / freedom * F", dict[str, Value](n=n)
    else:
        own = m - 1.0
        freedom = pad.work("Second degrees of freedom of F", "m - p", None, m=m, p=p)
        formula, counts = "p * (m + 1) * (m - 1) / (m * freedom) * F", {}
    f = _f_quantile(p, own - p + 1.0, alpha)
    text = f"quantile of F with {p} and {freedom:g} degrees of freedom exceeded with probability {alpha:g}"
    pad.work("Upper limit for new points", formula, where, p=p, m=m, freedom=freedom, F=(f, text), **counts)
    if n > 1:
        pad.work(
            "Upper limit of the baseline's own points",
            "p * (m - 1) * (n - 1) / freedom * F",
            "#/limits/baseline_upper",
            p=p,
            m=m,
            n=n,
            freedom=freedom,
            F=(f, text),
        )
    else:
        beta = float(scipy.special.betainccinv(0.5 * p, 0.5 * (m - p - 1), alpha))
        pad.work(
            "Upper limit of the baseline's own points",
            "(m - 1)**2 / m * B",
            "#/limits/baseline_upper",
            m=m,
            B=(beta, f"quantile of Beta(p/2, (m - p - 1)/2) exceeded with probability {alpha:g}"),
        )


def judge_t_squared(limits: TSquaredLimits, data: Vectors, carry: Any, result: Any) -> tuple[Step, ...]:
    """The distance of one point, and its limit."""
    pad = Pad()
    _t_squared_point(pad, limits, data, result, "#/panels")
    upper = limits.panels.t_squared.upper
    found = shown_point(result.signals, result.panels.t_squared)
    pad.work(
        "Upper limit: the frozen one",
        "upper",
        None if found is None else f"#/panels/t_squared/upper/{found[1]}",
        upper=upper or 0.0,
    )
    pad.work(
        "In-control average run length, for parameters known exactly",
        "1 / probability",
        None,
        probability=limits.false_alarm_probability,
    )
    return pad.steps


def _t_squared_point(pad: Pad, limits: TSquaredLimits, data: Vectors, judged: Any, at: str) -> None:
    found = shown_point(judged.signals, judged.panels.t_squared)
    if found is None:
        return
    index, place = found
    name = which(index, judged.signals)
    measure = metric(limits.mean, limits.covariance)
    means = data.means()[index]
    n = limits.subgroup_size
    first = limits.variables[0]
    value = float(means[0])
    if n > 1:
        value = pad.mean(f"Mean of {first} in {name}", data.values[index][:, 0])
    pad.work(
        f"Distance of {first} at {name} from its mean, in standard deviations of a single piece; the others likewise "
        "(d1, d2, …)",
        "(x - mean) / sqrt(variance)",
        None,
        x=value,
        mean=limits.mean[0],
        variance=limits.covariance[0][0],
    )
    _distance(
        pad,
        f"T-squared at {name}",
        means - measure.mean,
        measure,
        limits,
        ("n", {"n": n}),
        f"{at}/t_squared/value/{place}",
    )


# MEWMA ----------------------------------------------------------------------------------------------


def fit_mewma(data: Vectors | None, options: Any, result: Any) -> tuple[Step, ...]:
    """The steps from a baseline to mean and covariance, and the smoothed distance of one point."""
    pad, limits = Pad(), result.limits
    if data is not None:
        _estimates(pad, data, limits)
    _mewma_lines(pad, limits, "#/limits/panels/mewma/centre")
    if data is not None and result.baseline is not None:
        excluded = {one.index for one in limits.baseline.excluded}
        _mewma_point(pad, limits, data, None, result.baseline, "#/baseline/panels", excluded)
    performance = result.performance
    pad.state(
        f"The limit belongs to the in-control average run length: {performance.method}; the average run length from "
        "each distance u solves an integral equation",
        "arl(u) = 1 + integral over v of K(u, v) * arl(v)",
        limit=limits.limit,
        **({} if performance.in_control_arl is None else {"in_control_arl": performance.in_control_arl}),
    )
    return pad.steps


def _mewma_lines(pad: Pad, limits: Any, centre: str | None) -> None:
    pad.work(
        "Centre line: the mean of the statistic is the number of variables",
        "p",
        centre,
        p=len(limits.variables),
    )
    pad.work(
        "Factor from the variance of a point to that of a settled average, taken backwards",
        "n * (2 - smoothing) / smoothing",
        None,
        n=limits.subgroup_size,
        smoothing=limits.smoothing,
    )


def judge_mewma(limits: Any, data: Vectors, carry: Any, result: Any) -> tuple[Step, ...]:
    """The smoothed distance of one point."""
    pad = Pad()
    _mewma_lines(pad, limits, None)
    _mewma_point(pad, limits, data, carry, result, "#/panels", set())
    if len(pad.steps) < 3:
        pad.work("Upper limit: the frozen one", "limit", None, limit=limits.limit)
    return pad.steps


def _mewma_point(
    pad: Pad, limits: Any, data: Vectors, carry: Any, judged: Any, at: str, excluded: set[int]
) -> None:
    panel = judged.panels.mewma
    found = shown_point(judged.signals, panel)
    if found is None:
        return
    index, place = found
    name = which(index, judged.signals)
    measure = metric(limits.mean, limits.covariance)
    w, rest = limits.smoothing, 1.0 - limits.smoothing
    z = np.zeros(len(limits.mean)) if carry is None else np.array(carry.vector)
    number = 0 if carry is None else carry.smoothed
    deviations = data.means() - measure.mean
    there = np.flatnonzero(data.present()).tolist()
    for each in there:
        if each >= index:
            break
        if each not in excluded:
            z = rest * z + w * deviations[each]
            number += 1
    number += 1
    first = limits.variables[0]
    pad.work(
        f"Average of {first} at {name}, less its mean; the other variables likewise",
        "smoothing * (x - mean) + (1 - smoothing) * previous",
        None,
        smoothing=w,
        x=float(data.means()[index][0]),
        mean=limits.mean[0],
        previous=(float(z[0]), "the same at the point before; of the carry, or 0, at the start"),
    )
    now = rest * z + w * deviations[index]
    factor = "n * (2 - smoothing) / smoothing"
    values: dict[str, Value] = {"n": limits.subgroup_size, "smoothing": w}
    if limits.limit_covariance == "time-varying" and w < 1.0:
        factor += " / (1 - (1 - smoothing)**(2 * t))"
        values["t"] = (number, "points smoothed so far, this one included")
    _distance(
        pad,
        f"Squared distance of the averages at {name} (d1, d2, …: each average over the standard deviation of a piece)",
        now,
        measure,
        limits,
        (factor, values),
        f"{at}/mewma/value/{place}",
    )
    pad.work("Upper limit there: the frozen one", "limit", f"{at}/mewma/upper/{place}", limit=limits.limit)
