"""Nonconforming product: what a normal process is expected to make, and what was seen."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy

from ..data import Floats
from .specification import Specification

_MILLION = 1e6


@dataclass(frozen=True, slots=True)
class Nonconforming:
    """Expected nonconforming product of a normal process, in parts per million (ppm).

    below_ppm, above_ppm: ``None`` for a side without a limit. lower_ppm, upper_ppm: two-sided interval for
    the total at the confidence asked; upper_bound_ppm: one-sided upper confidence bound for it.
    method: ``non-central-t`` (one limit; exact for the overall standard deviation) or
    ``mover-non-central-t`` (both limits, see :func:`sum_limits`).
    """

    below_ppm: float | None
    above_ppm: float | None
    total_ppm: float
    lower_ppm: float
    upper_ppm: float
    upper_bound_ppm: float
    method: str


@dataclass(frozen=True, slots=True)
class ObservedNonconforming:
    """Nonconforming values counted: a value equal to a limit conforms.

    below, above: ``None`` for a side without a limit; inspected: the values there were. lower_ppm,
    upper_ppm: the two-sided interval of Clopper & Pearson at the confidence asked.
    """

    below: int | None
    above: int | None
    total: int
    inspected: int
    total_ppm: float
    lower_ppm: float
    upper_ppm: float
    method: str = "clopper-pearson-1934"


def clopper_pearson(events: int, trials: int, confidence: float) -> tuple[float, float]:
    """Exact two-sided interval for a proportion, 0 ≤ events ≤ trials, trials ≥ 1.

    Its coverage is at least `confidence`. Source: [clopper-pearson-1934].
    """
    tail = 0.5 * (1.0 - confidence)
    lower = 0.0
    if events > 0:
        lower = float(scipy.special.betaincinv(events, trials - events + 1.0, tail))
    upper = 1.0
    if events < trials:
        upper = float(scipy.special.betainccinv(events + 1.0, float(trials - events), tail))
    return lower, upper


def observed(values: Floats, specification: Specification, confidence: float) -> ObservedNonconforming:
    """Count the values, (N,) without gaps, that lie outside the specification."""
    lower, upper = specification.lower, specification.upper
    below = None if lower is None else int(np.count_nonzero(values < lower))
    above = None if upper is None else int(np.count_nonzero(values > upper))
    total = (below or 0) + (above or 0)
    low, high = clopper_pearson(total, values.size, confidence)
    return ObservedNonconforming(
        below, above, total, values.size, total / values.size * _MILLION, low * _MILLION, high * _MILLION
    )


def sum_limits(
    below: Floats,
    above: Floats,
    below_limits: Floats,
    above_limits: Floats,
    correlation: Floats,
    *,
    side: int,
) -> Floats:
    """Confidence limit for the sum of two tail areas, from the limit of each.

    All (k,), proportions; side -1 for the lower limit, +1 for the upper. With no second tail it is the
    first one's own limit, and with tails that rise and fall together it is the sum of their limits.
    Source: the variance recovered from the limits themselves, for dependent estimates
    [zou-donner-2008, section 2].
    """
    first = np.maximum(side * (below_limits - below), 0.0)
    second = np.maximum(side * (above_limits - above), 0.0)
    # Scaled by the larger, so that areas of 1e-200 do not underflow when squared.
    scale = np.maximum(np.maximum(first, second), 1e-300)
    a, b = first / scale, second / scale
    distance = scale * np.sqrt(np.maximum(a * a + b * b + 2.0 * correlation * a * b, 0.0))
    return np.clip(below + above + side * distance, 0.0, 1.0)


def tail_correlation(to_lower: Floats, to_upper: Floats, count: float, freedom: float) -> Floats:
    """Correlation of the two estimated tail areas, by the delta method.

    to_lower, to_upper: (k,) estimated distances of the mean from the limits, in sigma, positive inside.
    A shift of the mean trades one tail for the other; an error of sigma moves both the same way.
    """
    mean, spread = 1.0 / count, 0.5 / freedom
    both = spread * to_lower * to_upper - mean
    return both / np.sqrt((mean + spread * to_lower**2) * (mean + spread * to_upper**2))
