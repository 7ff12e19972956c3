"""Estimators of a process's standard deviation, each with its effective degrees of freedom.

Effective degrees of freedom ν of an unbiased estimator: those of the standard deviation S/c4(ν + 1) that
has the same relative variance, 1/c4(ν + 1)² - 1. They are what a confidence interval by chi-square needs.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, Literal, NoReturn, TypeAlias

import numpy as np
import scipy

from .data import Booleans, Floats, Integers, SubgroupStatistics
from .errors import UnusableData, UnusableParameter
from .factors import (
    c4,
    c4_of,
    c4_of_freedom,
    d2,
    d2_of,
    d3,
    d3_of,
    gauss_legendre,
    log_c4_of_freedom,
    of_sizes,
    range_density_at_median,
    range_median,
    range_median_of,
    relative_sd_of_sd,
)

MovingStatistic: TypeAlias = Literal["mean", "median"]

WITHIN = ("mean-range", "mean-sd", "pooled-sd", "median-range")
LARGEST_SPAN = 100

# Spreads whose squares keep full precision: outside, a variance would underflow or overflow.
_SMALLEST_SPREAD = 1e-140
_LARGEST_SPREAD = 1e150


@dataclass(frozen=True, slots=True)
class SigmaEstimate:
    """An estimate of sigma; see the module for its degrees of freedom."""

    sigma: Annotated[float, "In the unit of the data."]
    degrees_of_freedom: Annotated[float, "Effective ones, not necessarily whole."]
    estimator: Annotated[str, "Its name."]


def within(statistics: SubgroupStatistics, estimator: str) -> SigmaEstimate:
    """Within-subgroup sigma by one of ``WITHIN``, from the subgroups with two values or more.

    mean-range: Σfᵢ(Rᵢ/d2(nᵢ))/Σfᵢ, fᵢ = (d2/d3)², of minimum variance [burr-1969]; R̄/d2 at equal sizes.
    mean-sd: the same with Sᵢ/c4(nᵢ) and c4²/(1 - c4²). pooled-sd: √(Σ(nᵢ - 1)Sᵢ²/ν)/c4(ν + 1).
    median-range: the median of Rᵢ over each size's own median of W; its degrees of freedom are approximate
    (asymptotic variance of a median, exact again for a single subgroup).
    The degrees of freedom of the other three match the exact variance of the estimator.

    Raises UnusableParameter ``unknown-estimator``, ``estimator-needs-ranges``,
    ``estimator-needs-deviations`` or ``size-out-of-range``; UnusableData ``no-spread-information``,
    ``no-variation`` or ``out-of-scale``.
    """
    if estimator not in WITHIN:
        raise UnusableParameter.of(
            "unknown-estimator",
            f"There is no estimator {estimator!r} of the within-subgroup sigma; those there are: "
            + ", ".join(WITHIN)
            + ".",
            "sigma_estimator",
        )
    by_range = estimator in ("mean-range", "median-range")
    kept = statistics.range if by_range else statistics.sd
    if kept is None:
        raise UnusableParameter.of(
            "estimator-needs-ranges" if by_range else "estimator-needs-deviations",
            f"The estimator {estimator!r} needs the subgroups' "
            + (
                "ranges, and only standard deviations were given."
                if by_range
                else "standard deviations, and only ranges were given."
            ),
            "sigma_estimator",
        )
    size, spread, common = _usable(statistics.size, kept)
    m = len(spread)
    if estimator == "pooled-sd":
        sigma, freedom = _pooled(size, spread, common)
    elif estimator == "median-range":
        sigma, freedom = _median_range(size, spread, common)
    elif common is not None:
        mean = float(spread.mean())
        if by_range:
            sigma, share = mean / d2(common), d3(common) / d2(common)
        else:
            sigma, share = mean / c4(common), relative_sd_of_sd(common) / c4(common)
        freedom = freedom_of_relative_variance(share * share / m)
    else:
        if by_range:
            expected, deviation = d2_of(size), d3_of(size)
        else:
            expected, deviation = c4_of(size), of_sizes(relative_sd_of_sd, size)
        weight = expected / (deviation * deviation)
        total = float(weight @ expected)
        sigma = float(weight @ spread) / total
        freedom = freedom_of_relative_variance(1.0 / total)
    # What the deviations lost to underflow still shows in the ranges.
    _check_spread(sigma, statistics.range, spread)
    return SigmaEstimate(sigma, freedom, estimator)


def _usable(size: Integers, spread: Floats) -> tuple[Integers, Floats, int | None]:
    """The sizes and spreads of the subgroups with two values or more, and their one size if they agree."""
    smallest, largest = int(size.min(initial=1)), int(size.max(initial=0))
    if smallest == largest and smallest > 1:
        return size, spread, smallest
    usable: Booleans = size > 1
    size, spread = size[usable], spread[usable]
    if not len(size):
        raise UnusableData.of(
            "no-spread-information",
            "No subgroup holds two values or more, so nothing shows how values vary within a subgroup.",
            "data",
        )
    return size, spread, largest if int(size.min()) == largest else None


def _pooled(size: Integers, sd: Floats, common: int | None) -> tuple[float, float]:
    if common is not None:
        freedom = float((common - 1) * len(sd))
        mean_square = float(sd @ sd) / len(sd) if _squares(sd) else math.inf
    else:
        each = size - 1
        freedom = float(each.sum())
        mean_square = float(each @ (sd * sd)) / freedom if _squares(sd) else math.inf
    return math.sqrt(mean_square) / c4_of_freedom(freedom), freedom


def _squares(values: Floats) -> bool:
    return bool(values.max() < _LARGEST_SPREAD)


def _median_range(size: Integers, spread: Floats, common: int | None) -> tuple[float, float]:
    m = len(spread)
    if common is not None:
        middle = range_median(common)
        density = middle * range_density_at_median(common)
        single = (d3(common) / d2(common)) ** 2
        sigma = _median(spread) / middle
    else:
        middles = range_median_of(size)
        sigma = _median(spread / middles)
        density = float((middles * of_sizes(range_density_at_median, size)).mean())
        single = float(((d3_of(size) / d2_of(size)) ** 2).mean())
    return sigma, freedom_of_relative_variance(_median_variance(density, single, m))


def _median_variance(density: float, single: float, m: int) -> float:
    """Relative variance of a median of m: 1/(4 m density²) for many, ``single`` for one."""
    many = 0.25 / (density * density)
    return many / (m - 1 + many / single)


def _median(values: Floats) -> float:
    ordered = np.sort(values)
    m = len(ordered)
    return 0.5 * float(ordered[(m - 1) // 2]) + 0.5 * float(ordered[m // 2])


def _check_spread(sigma: float, ranges: Floats | None, spread: Floats) -> None:
    if _SMALLEST_SPREAD <= sigma <= _LARGEST_SPREAD:
        return
    shown = spread if ranges is None else ranges
    largest = float(shown[shown == shown].max(initial=0.0))
    if largest == 0.0:
        raise UnusableData.of(
            "no-variation",
            "Every value within each subgroup is the same, so there is no variation to set limits from; "
            "check the resolution of the gauge or how the values were recorded.",
            "data",
        )
    if sigma == 0.0 and largest >= _SMALLEST_SPREAD:
        raise UnusableData.of(
            "no-variation",
            "In at least half of the subgroups every value is the same, so their median range is zero; "
            "use another estimator, or a gauge that reads finer steps.",
            "data",
        )
    _refuse_scale()


def _refuse_scale() -> NoReturn:
    raise UnusableData.of(
        "out-of-scale",
        f"The spread of the values is outside {_SMALLEST_SPREAD:g} to {_LARGEST_SPREAD:g} and cannot be "
        "calculated with; give the values in another unit.",
        "data",
    )


# ---------------------------------------------------------------------------------------------------
# Single values


def moving_ranges(values: Floats, span: int = 2) -> Floats:
    """Moving ranges of values (m,): largest less smallest of each value and the span - 1 before it.

    Returns (m,), in the unit of the data, NaN where a window is incomplete or holds a gap (NaN).
    Raises UnusableParameter ``span-out-of-range``.
    """
    _check_span(span)
    m = len(values)
    result = np.full(m, np.nan)
    if m < span:
        return result
    # Windows twice as long from pairs of windows, then two that overlap: log2(span) passes in all.
    top = bottom = values
    length = 1
    while length < span:
        step = min(length, span - length)
        top, bottom = np.maximum(top[:-step], top[step:]), np.minimum(bottom[:-step], bottom[step:])
        length += step
    result[span - 1 :] = top - bottom
    return result


def moving_range(values: Floats, *, span: int = 2, statistic: MovingStatistic = "mean") -> SigmaEstimate:
    """Sigma of single values in time order, (m,) with NaN for a gap, from their moving ranges.

    mean: MR̄/d2(span); its degrees of freedom match its exact variance, the correlation of overlapping
    ranges included [cryer-ryan-1990]. median: the median moving range over the median of W; its degrees
    of freedom are approximate (asymptotic variance of a median, enlarged by the correlation of ranges on
    the same side of it for span 2, by what the overlap costs the mean for longer spans).
    The estimator is named ``mean-moving-range`` or ``median-moving-range``.

    Raises UnusableParameter ``span-out-of-range`` or ``unknown-statistic``; UnusableData
    ``no-spread-information``, ``no-variation`` or ``out-of-scale``.
    """
    if statistic not in ("mean", "median"):
        raise UnusableParameter.of(
            "unknown-statistic",
            f"Moving ranges are summarised by their mean or median, not by {statistic!r}.",
            "moving_range_statistic",
        )
    ranges = moving_ranges(values, span)
    there = ranges == ranges
    present = ranges[there]
    m = len(present)
    if not m:
        raise UnusableData.of(
            "no-spread-information",
            f"A moving range needs {span} values in a row without a gap, and there are none.",
            "data",
        )
    if m == len(values) - span + 1:
        variance = _moving_mean_variance(m, span)
    else:
        lags = _range_covariances(span)
        total = m * lags[0]
        for lag in range(1, span):
            total += 2.0 * int(np.count_nonzero(there[lag:] & there[:-lag])) * lags[lag]
        variance = total / (m * m)
    e = d2(span)
    if statistic == "mean":
        sigma = float(present.mean()) / e
        relative = variance / (e * e)
    else:
        middle = range_median(span)
        sigma = _median(present) / middle
        single = (d3(span) / e) ** 2
        independent = _median_variance(middle * range_density_at_median(span), single, m)
        overlap = variance * m / d3(span) ** 2
        if span == 2:
            overlap = 1.0 + (overlap - 1.0) * _median_overlap()
        relative = independent * overlap
    _check_moving(sigma, present)
    return SigmaEstimate(sigma, freedom_of_relative_variance(relative), f"{statistic}-moving-range")


def _check_moving(sigma: float, present: Floats) -> None:
    if _SMALLEST_SPREAD <= sigma <= _LARGEST_SPREAD:
        return
    largest = float(present.max())
    if largest == 0.0:
        raise UnusableData.of(
            "no-variation",
            "No value differs from the one before it, so there is no variation to set limits from; "
            "check the resolution of the gauge or how the values were recorded.",
            "data",
        )
    if sigma == 0.0 and largest >= _SMALLEST_SPREAD:
        raise UnusableData.of(
            "no-variation",
            "At least half of the moving ranges are zero, and so is their median; "
            "use their mean, or a gauge that reads finer steps.",
            "data",
        )
    _refuse_scale()


def _check_span(span: int) -> None:
    if not 2 <= span <= LARGEST_SPAN:
        raise UnusableParameter.of(
            "span-out-of-range",
            f"A moving range spans 2 to {LARGEST_SPAN} values, not {span}.",
            "moving_range_span",
        )


@lru_cache(maxsize=4096)
def _moving_mean_variance(m: int, span: int) -> float:
    """Variance, in sigma squared, of the mean of m successive moving ranges without a gap."""
    lags = _range_covariances(span)
    total = m * lags[0]
    for lag in range(1, min(span, m)):
        total += 2.0 * (m - lag) * lags[lag]
    return total / (m * m)


@lru_cache(maxsize=1)
def _median_overlap() -> float:
    """Span 2: how much more two successive ranges agree in their side of the median than in their size."""
    nodes, weights = gauss_legendre(96)
    z = 17.0 * nodes - 8.5
    middle = range_median(2)
    near = scipy.special.ndtr(z + middle) - scipy.special.ndtr(z - middle)
    density = 17.0 / math.sqrt(2.0 * math.pi) * weights * np.exp(-0.5 * z * z)
    sides = (float(density @ (near * near)) - 0.25) / 0.25
    lags = _range_covariances(2)
    return sides / (lags[1] / lags[0])


@lru_cache(maxsize=128)
def _range_covariances(span: int) -> tuple[float, ...]:
    """Covariance of two ranges of ``span`` standard normals whose windows are k apart, k = 0 … span - 1.

    By Hoeffding's formula for the largest and smallest of two windows that share span - k values:
    Cov = 2 Cov(max, max') - 2 Cov(max, min'), each a double integral of distribution functions.
    For span 2 and k = 1 it is (2√3 - 4)/π + 1/3, which the tests compare with.
    """
    nodes, weights = gauss_legendre(96)
    reach = 8.5
    y = reach * (2.0 * nodes - 1.0)
    x = -reach + (y[:, None] + reach) * nodes
    area = (2.0 * reach * weights * (y + reach))[:, None] * weights
    # x < y throughout: P and p their distribution functions, Q and q the tails.
    P, p = scipy.special.ndtr(y)[:, None], scipy.special.ndtr(x)
    Q, q = scipy.special.ndtr(-y)[:, None], scipy.special.ndtr(-x)
    apart = np.where(P < 0.5, P - p, q - Q)
    w = span
    both = float((area * (p * Q) ** w).sum() + (area * (P * q) ** w).sum())
    found = [d3(span) ** 2]
    for k in range(1, span):
        shared = w - k
        largest = 2.0 * float(
            (area * p**w * P**k * -np.expm1(shared * np.log1p(-np.minimum(Q, 0.999999)))).sum()
        )
        opposite = both - float((area * (P * q) ** k * apart**shared).sum())
        found.append(2.0 * (largest - opposite))
    return tuple(found)


# ---------------------------------------------------------------------------------------------------
# Overall


def overall(values: Floats) -> SigmaEstimate:
    """Standard deviation (divisor N - 1) of all values present, of any shape, NaN where missing.

    Two-pass with a correction, so that values with a large common part keep their digits [chan-1983].
    The degrees of freedom are N - 1; the estimate is not divided by c4. Named ``overall-sd``.
    Raises UnusableData ``no-spread-information``, ``no-variation`` or ``out-of-scale``.
    """
    flat = values.reshape(-1)
    present = flat == flat
    if not present.all():
        flat = flat[present]
    count = len(flat)
    if count < 2:
        raise UnusableData.of(
            "no-spread-information",
            "There are fewer than two values, so nothing shows how they vary.",
            "data",
        )
    lowest, highest = float(flat.min()), float(flat.max())
    if highest == lowest:
        raise UnusableData.of(
            "no-variation",
            "Every value is the same, so there is no variation to calculate with; "
            "check the resolution of the gauge or how the values were recorded.",
            "data",
        )
    if not _SMALLEST_SPREAD <= 0.5 * highest - 0.5 * lowest <= _LARGEST_SPREAD:
        _refuse_scale()
    # Scaling first: a sum of very large values overflows where their mean does not.
    residual = flat - flat[0]
    residual -= residual.mean()
    total = float(residual @ residual) - float(residual.sum()) ** 2 / count
    return SigmaEstimate(math.sqrt(total / (count - 1)), float(count - 1), "overall-sd")


def overall_from_statistics(statistics: SubgroupStatistics) -> SigmaEstimate | None:
    """The same from means, sizes and standard deviations; ``None`` where only ranges were kept.

    Raises as :func:`overall` does.
    """
    if statistics.sd is None:
        return None
    there = statistics.size > 0
    size, mean = statistics.size[there], statistics.mean[there]
    count = int(size.sum())
    if count < 2:
        raise UnusableData.of(
            "no-spread-information",
            "There are fewer than two values, so nothing shows how they vary.",
            "data",
        )
    sd = np.where(size > 1, statistics.sd[there], 0.0)
    largest = max(0.5 * float(mean.max()) - 0.5 * float(mean.min()), float(sd.max()))
    if largest == 0.0:
        if statistics.range is not None and bool((statistics.range > 0).any()):
            _refuse_scale()
        raise UnusableData.of(
            "no-variation",
            "Every value is the same, so there is no variation to calculate with; "
            "check the resolution of the gauge or how the values were recorded.",
            "data",
        )
    if not _SMALLEST_SPREAD <= largest <= _LARGEST_SPREAD:
        _refuse_scale()
    residual = mean - mean[0]
    residual -= float(size @ residual) / count
    between = float(size @ (residual * residual)) - float(size @ residual) ** 2 / count
    inside = float((size - 1) @ (sd * sd))
    return SigmaEstimate(math.sqrt((inside + between) / (count - 1)), float(count - 1), "overall-sd")


# ---------------------------------------------------------------------------------------------------


@lru_cache(maxsize=4096)
def freedom_of_relative_variance(variance: float) -> float:
    """The ν at which 1/c4(ν + 1)² - 1 equals ``variance`` > 0, a variance relative to the square of the mean.

    Fixed-point steps ν ← ν·(-2 ln c4)/ln(1 + variance), which contract by about 1/(3ν²) each; stops at a
    relative step of 1e-13 or after 200 steps.
    Source: [patnaik-1950] for matching a chi to the distribution of a range.
    """
    aim = math.log1p(variance)
    freedom = max(0.5 / aim, 0.05)
    for _ in range(200):
        new = freedom * -2.0 * log_c4_of_freedom(freedom) / aim
        if abs(new - freedom) <= 1e-13 * new:
            return new
        freedom = new
    return freedom
