"""Statistical tolerance intervals: between which values a stated share of the product lies, with confidence.

Normal: the exact two-sided factor from its integral equation [wald-wolfowitz-1946], [iso-16269-6]; the exact
one-sided factor by non-central t [johnson-welch-1940]; [howe-1969] as the approximation it is. Any continuous
distribution: order statistics [wilks-1941].
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from ..data import Floats
from ..errors import UnusableData, UnusableParameter
from ..factors import gauss_legendre
from .noncentral import noncentral_t_cdf

Sides: TypeAlias = Literal["two-sided", "lower", "upper"]
ToleranceMethod: TypeAlias = Literal["normal-exact", "normal-howe-1969", "non-parametric"]

LEAST_COVERAGE, MOST_COVERAGE = 0.5, 0.999999
LARGEST_COUNT = 1_000_000
LARGEST_SAMPLE = 100_000_000
_NODES = 96
_REACH = 8.3
_BISECTIONS = 60


@dataclass(frozen=True, slots=True)
class ToleranceInterval:
    """An interval that holds a stated share of the product, with a stated confidence."""

    sides: Annotated[Sides, "`two-sided`, or a bound alone: `lower` or `upper`."]
    coverage: Annotated[float, "Share of the product that it is to hold."]
    confidence: Annotated[float, "With which it does."]
    method: Annotated[ToleranceMethod, "How it was computed."]
    count: Annotated[int, "How many values it rests on."]
    mean: Annotated[float | None, "Of the values; null for `non-parametric`."]
    sd: Annotated[float | None, "Their standard deviation, divisor count - 1; null likewise."]
    factor: Annotated[
        float | None, "The interval reaches this many standard deviations from the mean; null likewise."
    ]
    lower: Annotated[float | None, "Lower end; null for an upper bound alone."]
    upper: Annotated[float | None, "Upper end; null for a lower bound alone."]
    lower_rank: Annotated[
        int | None, "Which value is the lower end, counted from the smallest as 1; `non-parametric` only."
    ]
    upper_rank: Annotated[
        int | None, "Which value is the upper end, counted likewise; `non-parametric` only."
    ]
    achieved_confidence: Annotated[
        float,
        "The exact confidence of the interval given, its distribution supposed: at least the one asked but for Howe's.",
    ]


@dataclass(frozen=True, slots=True)
class ToleranceSampleSize:
    """How many values a tolerance interval needs."""

    sides: Annotated[Sides, "`two-sided`, or a bound alone."]
    coverage: Annotated[float, "Share of the product that the interval is to hold."]
    confidence: Annotated[float, "With which it does."]
    method: Annotated[ToleranceMethod, "Of the interval."]
    count: Annotated[int, "The least number of values."]
    achieved_confidence: Annotated[float, "That a sample of so many attains."]
    factor: Annotated[float | None, "Of the normal interval from so many values; null for `non-parametric`."]
    excess_coverage: Annotated[float | None, "The coverage that is to be exceeded seldom; null likewise."]
    excess_probability: Annotated[
        float | None, "How often it is exceeded with so many values; null likewise."
    ]


# ---------------------------------------------------------------------------------------------------
# Normal


@lru_cache(maxsize=256)
def _reaches(count: int, coverage: float) -> tuple[Floats, Floats]:
    """Half widths r (96,) that hold the coverage about a mean y/√n off, and the weights of y, which add up to 1."""
    x, weight = gauss_legendre(_NODES)
    y = _REACH * x
    mass = weight * np.exp(-0.5 * y * y)
    z = y / math.sqrt(count)
    outside = 1.0 - coverage
    low = np.maximum(z - float(scipy.special.ndtri(outside)), 0.0)
    high = z - float(scipy.special.ndtri(0.5 * outside))
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        wide = scipy.special.ndtr(-z - middle) + scipy.special.ndtr(z - middle) <= outside
        low, high = np.where(wide, low, middle), np.where(wide, middle, high)
    return 0.5 * (low + high), mass / mass.sum()


def _missed(factor: float, count: int, freedom: float, coverage: float) -> float:
    """P(the interval mean ± factor·s holds less than the coverage)."""
    reach, mass = _reaches(count, coverage)
    half = 0.5 * freedom
    return float(scipy.special.gammainc(half, half * (reach / factor) ** 2) @ mass)


def _root(rising: Callable[[float], float], start: float) -> float:
    """Where a rising function of a positive number is zero, to 1e-13 of it."""
    low = high = start
    while rising(low) > 0.0:
        low *= 0.5
    while rising(high) < 0.0:
        high *= 2.0
    if low == high:
        return low
    found: float = scipy.optimize.brentq(rising, low, high, xtol=1e-300, rtol=1e-13)
    return found


@lru_cache(maxsize=1024)
def normal_factor(count: int, coverage: float, confidence: float, two_sided: bool) -> float:
    """The exact factor k of mean ± ks (two sides) or mean + ks (one), of ``count`` ≥ 2 normal values.

    Two sides: ∫ φ(y) P(χ²(ν) > ν r(y/√n)²/k²) dy = confidence, where Φ(z + r) - Φ(z - r) = coverage
    [wald-wolfowitz-1946]; one: the confidence quantile of non-central t with δ = √n z(coverage), over √n.
    Accuracy 1e-9 relative.
    """
    freedom = count - 1.0
    risk = math.log(1.0 - confidence)
    if two_sided:
        return _root(
            lambda k: risk - math.log(max(_missed(k, count, freedom, coverage), 1e-300)),
            howe_factor(count, coverage, confidence),
        )
    root = math.sqrt(count)
    delta = np.array([root * float(scipy.special.ndtri(coverage))])
    wanted = float(scipy.special.ndtri(confidence))

    def gap(k: float) -> float:
        p = float(noncentral_t_cdf(np.array([k * root]), freedom, delta)[0])
        return float(scipy.special.ndtri(min(max(p, 1e-300), 1.0 - 1e-16))) - wanted

    return _root(gap, max(float(scipy.special.ndtri(coverage)), 0.5 / root))


def howe_factor(count: int, coverage: float, confidence: float) -> float:
    """Howe's approximation of the two-sided factor, z((1 + coverage)/2) √(ν(1 + 1/n)/χ²) [howe-1969]."""
    freedom = count - 1.0
    quantile = 2.0 * float(scipy.special.gammaincinv(0.5 * freedom, 1.0 - confidence))
    return float(
        -scipy.special.ndtri(0.5 * (1.0 - coverage)) * math.sqrt(freedom * (1.0 + 1.0 / count) / quantile)
    )


def normal_interval(
    count: int,
    mean: float,
    sd: float,
    *,
    coverage: float,
    confidence: float,
    sides: Sides = "two-sided",
    method: ToleranceMethod = "normal-exact",
) -> ToleranceInterval:
    """Tolerance interval of normal product from a sample's count (2 or more), mean and standard deviation.

    Raises UnusableParameter ``coverage-out-of-range``, ``confidence-out-of-range``, ``howe-two-sided``;
    UnusableData ``too-few-values``, ``no-variation``.
    """
    _check(coverage, confidence)
    two_sided = sides == "two-sided"
    if method == "normal-howe-1969" and not two_sided:
        raise UnusableParameter.of(
            "howe-two-sided",
            "Howe's approximation is for two sides; one side has its exact factor.",
            "method",
        )
    if count < 2:
        raise UnusableData.of(
            "too-few-values", "A tolerance interval needs 2 values or more.", "data", "values"
        )
    if not 0.0 < sd < math.inf:
        raise UnusableData.of(
            "no-variation",
            "There is no variation, so no tolerance interval can be computed.",
            "data",
            "values",
        )
    if method == "normal-howe-1969":
        factor = howe_factor(count, coverage, confidence)
        achieved = 1.0 - _missed(factor, count, count - 1.0, coverage)
    else:
        factor = normal_factor(count, coverage, confidence, two_sided)
        achieved = confidence
    lower, upper = mean - factor * sd, mean + factor * sd
    if not (math.isfinite(lower) and math.isfinite(upper)):
        raise UnusableData.of(
            "too-large", "The interval is too wide to be told; choose a larger unit.", "data", "values"
        )
    return ToleranceInterval(
        sides,
        coverage,
        confidence,
        method,
        count,
        mean,
        sd,
        factor,
        None if sides == "upper" else lower,
        None if sides == "lower" else upper,
        None,
        None,
        achieved,
    )


# ---------------------------------------------------------------------------------------------------
# Any continuous distribution


def _held(count: int, left_out: int, coverage: float) -> float:
    """P(the order statistics that leave out so many at the ends together hold the coverage) [wilks-1941]."""
    return float(scipy.special.betaincc(count - left_out + 1.0, float(left_out), coverage))


def _left_out(count: int, coverage: float, confidence: float) -> int:
    """The most that may be left out at the ends together, 0 where nothing may."""
    low, high = 0, count
    while low < high:
        middle = (low + high + 1) // 2
        if _held(count, middle, coverage) >= confidence:
            low = middle
        else:
            high = middle - 1
    return low


def nonparametric_interval(
    values: Floats, *, coverage: float, confidence: float, sides: Sides = "two-sided"
) -> ToleranceInterval:
    """Tolerance interval of any continuous distribution, between order statistics of values (n,) without gaps.

    Two-sided ones leave out as many below as above. Raises UnusableData ``too-few-values`` where even the
    extremes hold too little, with the number needed.
    """
    _check(coverage, confidence)
    count = values.size
    most = _left_out(count, coverage, confidence) if count else 0
    two_sided = sides == "two-sided"
    each = most // 2 if two_sided else most
    if each < 1:
        needed = nonparametric_size(coverage=coverage, confidence=confidence, sides=sides).count
        raise UnusableData.of(
            "too-few-values",
            f"Without a distribution this coverage and confidence need {needed} values; there are {count}.",
            "data",
            "values",
        )
    ordered = np.sort(values)
    lower = None if sides == "upper" else each
    upper = None if sides == "lower" else count + 1 - each
    return ToleranceInterval(
        sides,
        coverage,
        confidence,
        "non-parametric",
        count,
        None,
        None,
        None,
        None if lower is None else float(ordered[lower - 1]),
        None if upper is None else float(ordered[upper - 1]),
        lower,
        upper,
        _held(count, 2 * each if two_sided else each, coverage),
    )


# ---------------------------------------------------------------------------------------------------
# Sample sizes


def nonparametric_size(
    *, coverage: float, confidence: float, sides: Sides = "two-sided"
) -> ToleranceSampleSize:
    """The least sample whose extremes (or extreme) hold the coverage with the confidence [wilks-1941]."""
    _check(coverage, confidence)
    left_out = 2 if sides == "two-sided" else 1
    low, high = left_out - 1, LARGEST_SAMPLE
    while high - low > 1:
        middle = (low + high) // 2
        if _held(middle, left_out, coverage) >= confidence:
            high = middle
        else:
            low = middle
    return ToleranceSampleSize(
        sides, coverage, confidence, "non-parametric", high, _held(high, left_out, coverage), None, None, None
    )


def _exceeds(count: int, factor: float, coverage: float, two_sided: bool) -> float:
    """P(the normal interval holds more than the coverage)."""
    if two_sided:
        return 1.0 - _missed(factor, count, count - 1.0, coverage)
    root = math.sqrt(count)
    delta = np.array([root * float(scipy.special.ndtri(coverage))])
    return float(noncentral_t_cdf(np.array([factor * root]), count - 1.0, delta)[0])


def normal_size(
    *,
    coverage: float,
    confidence: float,
    excess_coverage: float,
    excess_risk: float,
    sides: Sides = "two-sided",
) -> ToleranceSampleSize:
    """The least sample whose normal interval holds the coverage, and seldom much more of it.

    It holds ``coverage`` with the confidence, and more than ``excess_coverage`` with a probability of at most
    ``excess_risk`` [faulkenberry-weeks-1968]. Raises UnusableParameter ``excess-out-of-range``,
    ``sample-too-large`` (above 1,000,000).
    """
    _check(coverage, confidence)
    if not coverage < excess_coverage < 1.0:
        raise UnusableParameter.of(
            "excess-out-of-range",
            f"The coverage to be exceeded seldom must be above the coverage, {coverage:g}, and below 1.",
            "excess_coverage",
        )
    if not 0.0 < excess_risk < confidence:
        raise UnusableParameter.of(
            "excess-out-of-range",
            "The risk of exceeding it must be above 0 and below the confidence.",
            "excess_risk",
        )
    two_sided = sides == "two-sided"

    def exceeded(count: int) -> float:
        return _exceeds(
            count, normal_factor(count, coverage, confidence, two_sided), excess_coverage, two_sided
        )

    low, high = 1, 2
    while exceeded(high) > excess_risk:
        if high >= LARGEST_COUNT:
            raise UnusableParameter.of(
                "sample-too-large",
                f"This needs more than {LARGEST_COUNT} values; allow more excess, or a larger risk of it.",
                "excess_coverage",
            )
        low, high = high, min(2 * high, LARGEST_COUNT)
    while high - low > 1:
        middle = (low + high) // 2
        if exceeded(middle) > excess_risk:
            low = middle
        else:
            high = middle
    return ToleranceSampleSize(
        sides,
        coverage,
        confidence,
        "normal-exact",
        high,
        confidence,
        normal_factor(high, coverage, confidence, two_sided),
        excess_coverage,
        exceeded(high),
    )


def _check(coverage: float, confidence: float) -> None:
    for name, value in (("coverage", coverage), ("confidence", confidence)):
        if not LEAST_COVERAGE <= value <= MOST_COVERAGE:
            raise UnusableParameter.of(
                f"{name}-out-of-range",
                f"The {name} must be {LEAST_COVERAGE:g} to {MOST_COVERAGE:.6f}; {value!r} is not usable.",
                name,
            )
