"""Tests of normality with mean and standard deviation estimated from the values themselves."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import scipy

from .data import Floats
from .errors import UnusableData

FEWEST_VALUES = 3
MOST_VALUES = 5000


@dataclass(frozen=True, slots=True)
class NormalityTest:
    """Anderson–Darling's A²; adjusted: A²(1 + 0.75/n + 2.25/n²), which p_value belongs to."""

    statistic: float
    adjusted: float
    p_value: float


def ordered_scores(values: Floats) -> Floats:
    """Values, of any shape and NaN where missing, in rising order less their mean over their deviation.

    Raises UnusableData ``too-few-values`` (fewer than 3) or ``no-variation``.
    """
    flat = values.reshape(-1)
    ordered = np.sort(flat)
    # NaN sorts last.
    if ordered.size and math.isnan(float(ordered[-1])):
        ordered = ordered[: int(np.count_nonzero(flat == flat))]
    n = len(ordered)
    if n < FEWEST_VALUES:
        raise UnusableData.of(
            "too-few-values", f"Normality is tested with {FEWEST_VALUES} values or more.", "data", "values"
        )
    # Scaled before anything is squared or summed, so that no size of value overflows.
    scale = 0.5 * float(ordered[-1]) - 0.5 * float(ordered[0])
    if scale == 0.0:
        raise UnusableData.of("no-variation", "Every value is the same.", "data", "values")
    residual = (ordered - ordered[n // 2]) / scale
    residual -= residual.sum() / n
    scores: Floats = residual / math.sqrt(float(residual @ residual) / (n - 1))
    return scores


def anderson_darling(values: Floats) -> NormalityTest:
    """Anderson–Darling test of normality, mean and deviation estimated; values of any shape, NaN left out.

    The p-value is by the formulas of D'Agostino & Stephens for this case [dagostino-stephens-1986],
    table 4.9, good to about two digits where it matters.
    Raises UnusableData ``too-few-values`` or ``no-variation``.
    """
    return anderson_darling_of_scores(ordered_scores(values))


def anderson_darling_of_scores(scores: Floats) -> NormalityTest:
    """The same from scores (n,) in rising order, as :func:`ordered_scores` gives them."""
    n = len(scores)
    logs = scipy.special.log_ndtr(scores) + scipy.special.log_ndtr(-scores[::-1])
    statistic = -n - float(_odd_weights(n) @ logs)
    adjusted = statistic * (1.0 + 0.75 / n + 2.25 / (n * n))
    return NormalityTest(statistic, adjusted, _stephens(adjusted))


@lru_cache(maxsize=64)
def _odd_weights(n: int) -> Floats:
    weights: Floats = (2.0 * np.arange(1, n + 1) - 1.0) / n
    return weights


def _stephens(a: float) -> float:
    if a >= 0.6:
        # The parabola turns at 153, far beyond where it was fitted.
        a = min(a, 150.0)
        return math.exp(1.2937 - 5.709 * a + 0.0186 * a * a)
    if a > 0.34:
        return math.exp(0.9177 - 4.279 * a - 1.38 * a * a)
    if a > 0.2:
        return -math.expm1(-8.318 + 42.796 * a - 59.938 * a * a)
    return -math.expm1(-13.436 + 101.14 * a - 223.73 * a * a)


def shapiro_wilk(values: Floats) -> tuple[float, float]:
    """Shapiro–Wilk W and its p-value, for 3 to 5000 values of any shape, NaN left out.

    Weights and p-value are Royston's approximations [royston-1995], algorithm AS R94.
    Raises UnusableData ``too-few-values``, ``too-many-values`` or ``no-variation``.
    """
    return shapiro_wilk_of_scores(ordered_scores(values))


def shapiro_wilk_of_scores(scores: Floats) -> tuple[float, float]:
    """The same from scores (n,) in rising order, as :func:`ordered_scores` gives them."""
    n = len(scores)
    if n > MOST_VALUES:
        raise UnusableData.of(
            "too-many-values",
            f"The Shapiro–Wilk test is known for up to {MOST_VALUES} values; there are {n}.",
            "data",
            "values",
        )
    # The scores' squares add up to n - 1.
    w = min(float(_royston_weights(n) @ scores) ** 2 / (n - 1), 1.0)
    short = max(1.0 - w, 1e-19)
    if n == 3:
        p = 6.0 / math.pi * (math.asin(math.sqrt(w)) - math.asin(math.sqrt(0.75)))
        return w, min(max(p, 0.0), 1.0)
    y = math.log(short)
    if n <= 11:
        gamma = 0.459 * n - 2.273
        if y >= gamma:
            return w, 0.0
        y = -math.log(gamma - y)
        mean = 0.5440 + n * (-0.39978 + n * (0.025054 - n * 6.714e-4))
        deviation = math.exp(1.3822 + n * (-0.77857 + n * (0.062767 - n * 0.0020322)))
    else:
        x = math.log(n)
        mean = -1.5861 + x * (-0.31082 + x * (-0.083751 + x * 0.0038915))
        deviation = math.exp(-0.4803 + x * (-0.082676 + x * 0.0030302))
    return w, float(scipy.special.ndtr((mean - y) / deviation))


@lru_cache(maxsize=64)
def _royston_weights(n: int) -> Floats:
    if n == 3:
        return np.array([-math.sqrt(0.5), 0.0, math.sqrt(0.5)])
    m = scipy.special.ndtri((np.arange(1, n + 1) - 0.375) / (n + 0.25))
    square = float(m @ m)
    u = 1.0 / math.sqrt(n)
    last = m[-1] / math.sqrt(square) + u * (
        0.221157 + u * (-0.147981 + u * (-2.071190 + u * (4.434685 - u * 2.706056)))
    )
    if n <= 5:
        inner = (square - 2.0 * m[-1] ** 2) / (1.0 - 2.0 * last**2)
        weights = m / math.sqrt(inner)
    else:
        second = m[-2] / math.sqrt(square) + u * (
            0.042981 + u * (-0.293762 + u * (-1.752461 + u * (5.682633 - u * 3.582633)))
        )
        inner = (square - 2.0 * m[-1] ** 2 - 2.0 * m[-2] ** 2) / (1.0 - 2.0 * last**2 - 2.0 * second**2)
        weights = m / math.sqrt(inner)
        weights[-2], weights[1] = second, -second
    weights[-1], weights[0] = last, -last
    result: Floats = weights
    return result
