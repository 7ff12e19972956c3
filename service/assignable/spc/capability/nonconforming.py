"""Nonconforming product: what a normal process is expected to make, and what was seen."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Annotated

import numpy as np
import scipy

from ..data import Floats
from ..factors import gauss_legendre
from .specification import Specification

_MILLION = 1e6
_NODES = 96
_SHARPEST = 8.0
_STEPS = 40
_END_STEPS = 6


@dataclass(frozen=True, slots=True)
class Nonconforming:
    """Expected nonconforming product of a normal process, in parts per million (ppm).

    method: ``non-central-t`` (one limit; exact for the overall standard deviation) or
    ``weerahandi-1993`` (both limits, see :func:`total_area_cdf`).
    """

    below_ppm: Annotated[float | None, "Below the lower limit; null where there is none."]
    above_ppm: Annotated[float | None, "Above the upper limit; null where there is none."]
    total_ppm: Annotated[float, "Outside the limits there are."]
    total_lower_ppm: Annotated[
        float, "Lower end of the two-sided interval for the total, at the confidence asked."
    ]
    total_upper_ppm: Annotated[float, "Upper end of it."]
    total_upper_bound_ppm: Annotated[
        float, "One-sided bound: the true total is at most this, with the confidence asked."
    ]
    method: Annotated[str, "Of interval and bound."]


@dataclass(frozen=True, slots=True)
class ObservedNonconforming:
    """Nonconforming values counted: a value equal to a limit conforms."""

    below: Annotated[int | None, "Values below the lower limit; null where there is none."]
    above: Annotated[int | None, "Values above the upper limit; null where there is none."]
    total: Annotated[int, "Values outside the limits there are."]
    inspected: Annotated[int, "How many values there were."]
    total_ppm: Annotated[float, "Their share in parts per million."]
    total_lower_ppm: Annotated[float, "Lower end of its two-sided interval, at the confidence asked."]
    total_upper_ppm: Annotated[float, "Upper end of it."]
    method: Annotated[str, "Of the interval."] = "clopper-pearson-1934"


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


def total_area_cdf(probit: Floats, to_lower: Floats, to_upper: Floats, count: int, freedom: float) -> Floats:
    """P(the area outside both limits ≤ Φ(probit)), by the generalised pivot of mean and sigma.

    probit: (k,) in -37 to 8. to_lower, to_upper: (k,) distances of the mean from the limits, positive inside,
    in the sigma whose square is taken as σ²χ²(ν)/ν. Returns (k,).
    Given the data, sigma is s/W and the mean x̄ - Zs/(W√N); the area is at most p where the mean is within
    y of the middle, in sigma, and y depends on the limits' half distance κ in sigma alone. Instead of y for
    each κ, both are had from g = κ + y, the far tail being Φ(-g): the integrand over g is analytic, and the
    96-point rule exact to 1e-9 up to the sharpness at which :func:`total_area_limits` stops using it.
    Source: [weerahandi-1993].
    """
    ndtr, ndtri = scipy.special.ndtr, scipy.special.ndtri
    half = 0.5 * freedom
    low = math.sqrt(float(scipy.special.gammaincinv(half, 1e-15)) / half)
    high = math.sqrt(float(scipy.special.gammainccinv(half, 1e-15)) / half)
    width, offset = 0.5 * (to_lower + to_upper), 0.5 * (to_lower - to_upper)
    area = ndtr(probit)
    least = -ndtri(0.5 * area)
    # The ends of the range of g from those of W. g - probit(near tail) - 2κ is convex and rises in g, so
    # Newton steps from the right stay there; a few suffice, the density at either end being nothing.
    ends = np.stack([low * width, high * width])
    g = np.maximum(2.0 * ends + probit, least)
    for _ in range(_END_STEPS):
        near = ndtri(np.maximum(area - ndtr(-g), 0.5 * area))
        excess = g - near - 2.0 * ends
        slope = -np.expm1(np.minimum(0.5 * (near - g) * (near + g), 0.0))
        g = np.maximum(g - np.maximum(excess, 0.0) / np.maximum(slope, 1e-8), least)
    first, last = g
    x, weight = gauss_legendre(_NODES)
    length = np.maximum(last - first, 0.0)[:, None]
    g = first[:, None] + length * x
    near = ndtri(np.maximum(area[:, None] - ndtr(-g), 0.5 * area[:, None]))
    y = 0.5 * (g + near)
    # dκ/dg = (1 - φ(g)/φ(near))/2
    slope = -0.5 * np.expm1(np.minimum(0.5 * (near - g) * (near + g), 0.0))
    w = 0.5 * (g - near) / width[:, None]
    log_w = np.log(np.maximum(w, 1e-300))
    constant = math.log(2.0) + half * math.log(half) - half - math.lgamma(half)
    density = np.exp(constant - log_w - half * (np.expm1(2.0 * log_w) - 2.0 * log_w))
    root = math.sqrt(count)
    mean = root * offset[:, None] * w
    inside = ndtr(mean + root * y) - ndtr(mean - root * y)
    return np.clip((density * slope * inside * length / width[:, None]) @ weight, 0.0, 1.0)


def total_area_limits(
    to_lower: float,
    to_upper: float,
    below: Floats,
    above: Floats,
    count: int,
    freedom: float,
    probability: Floats,
) -> Floats:
    """The areas outside both limits below which the true one lies with each probability, (k,).

    to_lower, to_upper: as in :func:`total_area_cdf`. below, above: (k,) the same limits for each tail by
    itself, exact by non-central t. Where sigma is so much less certain than the mean that the tails rise and
    fall together, the limits of the tails add up. Elsewhere secant steps in the probits of area and
    probability, kept in a bracket, end at a step of 1e-9 of a probit, or after 40 steps with the last one.
    """
    if to_lower + to_upper < 1e-9:  # nothing to speak of fits between the limits
        return np.ones(below.size)
    together = np.clip(below + above, 1e-300, 1.0 - 1e-15)
    sharp = min(abs(to_lower), abs(to_upper)) * math.sqrt(0.5 * count / freedom)
    larger = np.clip(np.maximum(below, above), 1e-300, 1.0 - 1e-15)
    low, high = scipy.special.ndtri(larger), np.full(below.size, 8.0)
    if sharp > _SHARPEST or float(low.min()) < -30.0:
        return together
    left, right = np.full(below.size, to_lower), np.full(below.size, to_upper)
    wanted = scipy.special.ndtri(probability)

    def gap(x: Floats) -> Floats:
        found = total_area_cdf(x, left, right, count, freedom)
        return scipy.special.ndtri(np.clip(found, 1e-300, 1.0 - 1e-15)) - wanted

    before, gap_before = low, gap(low)
    x = np.clip(scipy.special.ndtri(together), low + 1e-6, high)
    for _ in range(_STEPS):
        value = gap(x)
        low = np.where(value < 0, np.maximum(x, low), low)
        high = np.where(value >= 0, np.minimum(x, high), high)
        rise = value - gap_before
        with_slope = np.abs(rise) > 1e-14
        step = np.where(with_slope, -value * (x - before) / np.where(with_slope, rise, 1.0), -value)
        new = x + step
        done = (np.abs(step) <= 1e-9) | (high - low <= 1e-9)
        new = np.where((new > low) & (new < high) | done, np.clip(new, low, high), 0.5 * (low + high))
        before, gap_before, x = x, value, new
        if done.all():
            break
    return scipy.special.ndtr(x)
