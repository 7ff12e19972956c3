"""Control chart factors, and the distributions of range and standard deviation behind them.

Everything is computed for a subgroup of n independent standard normal values: W is its range, S its
standard deviation (divisor n - 1). No table is typed in; each figure is computed once and kept.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, overload

import numpy as np
import scipy
from numpy.typing import NDArray

from .data import Floats, Integers
from .errors import UnusableParameter

SMALLEST_SIZE = 2
LARGEST_SIZE = 1000

# Beyond a tail area of this much over n, an integrand no longer shows in double precision.
_NEGLIGIBLE = 1e-19
_ALMOST_ONE = 1.0 - 2.0**-53
_USUAL_SIZE = 25
_NODES = 128
_PANEL_NODES = 64


@dataclass(frozen=True, slots=True)
class Factors:
    """Factors of mean, range and standard deviation charts for subgroups of one size.

    The names are those of ISO 7870-2 and ASTM E2587, but for d2 and d3: in many languages a program could not
    tell them from D2 and D3. A limit nothing can cross is no limit, so a lower factor of a spread chart that
    is not positive is null.
    """

    size: Annotated[int, "Values in a subgroup, n."]
    multiple: Annotated[float, "Limits lie this many sigma out, k."]
    mean_range: Annotated[float, "d2: mean range of n values over sigma."]
    range_sd: Annotated[float, "d3: standard deviation of the range over sigma."]
    c4: Annotated[float, "Mean standard deviation of n values over sigma."]
    A: Annotated[float, "Limits of the mean from a known sigma: k/√n."]
    A2: Annotated[float, "Limits of the mean from the mean range: k/(d2√n)."]
    A3: Annotated[float, "Limits of the mean from the mean standard deviation: k/(c4√n)."]
    B3: Annotated[float | None, "Lower limit of s over its mean; null where not positive."]
    B4: Annotated[float, "Upper limit of s over its mean."]
    B5: Annotated[float | None, "Lower limit of s over a known sigma; null where not positive."]
    B6: Annotated[float, "Upper limit of s over a known sigma."]
    D1: Annotated[float | None, "Lower limit of the range over a known sigma; null where not positive."]
    D2: Annotated[float, "Upper limit of the range over a known sigma."]
    D3: Annotated[float | None, "Lower limit of the range over its mean; null where not positive."]
    D4: Annotated[float, "Upper limit of the range over its mean."]
    E2: Annotated[float, "Limits of single values from the mean range of n: k/d2."]
    median_range: Annotated[float, "Median range of n values over sigma."]


def factors(n: int, multiple: float = 3.0) -> Factors:
    """All factors for subgroups of size n and limits at ``multiple`` sigma.

    Raises UnusableParameter ``size-out-of-range`` or ``multiple-out-of-range``.
    Source: [iso-7870-2], [astm-e2587].
    """
    _check_size(n)
    k = float(multiple)
    if not 0.0 < k < 1e6:
        raise UnusableParameter.of(
            "multiple-out-of-range",
            f"The sigma multiple must be a positive number; {multiple!r} is not usable.",
            "sigma_multiple",
        )
    return _factors(int(n), k)


@lru_cache(maxsize=4096)
def _factors(n: int, k: float) -> Factors:
    e, s, c = d2(n), d3(n), c4(n)
    root = math.sqrt(n)
    t = k * relative_sd_of_sd(n)
    return Factors(
        size=n,
        multiple=k,
        mean_range=e,
        range_sd=s,
        c4=c,
        A=k / root,
        A2=k / (e * root),
        A3=k / (c * root),
        B3=_positive(1.0 - t / c),
        B4=1.0 + t / c,
        B5=_positive(c - t),
        B6=c + t,
        D1=_positive(e - k * s),
        D2=e + k * s,
        D3=_positive(1.0 - k * s / e),
        D4=1.0 + k * s / e,
        E2=k / e,
        median_range=range_median(n),
    )


def _positive(value: float) -> float | None:
    return value if value > 0.0 else None


def _check_size(n: int) -> None:
    if not SMALLEST_SIZE <= n <= LARGEST_SIZE:
        raise UnusableParameter.of(
            "size-out-of-range",
            f"Factors exist for subgroups of {SMALLEST_SIZE} to {LARGEST_SIZE} values; this one has {n}.",
            "data",
        )


# ---------------------------------------------------------------------------------------------------
# Standard deviation


@lru_cache(maxsize=4096)
def c4_of_freedom(freedom: float) -> float:
    """E[S] of a sample standard deviation with ``freedom`` > 0 degrees of freedom, not necessarily whole.

    c4(n) is ``c4_of_freedom(n - 1)``; used beyond n = 1000 for pooled deviations.
    Source: [abramowitz-stegun-1964], 6.1.40 for the series of the ratio of gamma functions.
    """
    return math.exp(log_c4_of_freedom(freedom))


def log_c4_of_freedom(freedom: float) -> float:
    """ln E[S], kept apart because 1 - E[S]² loses digits when the degrees of freedom are many."""
    z = 0.5 * freedom
    if z < 25.0:
        return math.log(math.gamma(z + 0.5) / (math.gamma(z) * math.sqrt(z)))
    # ln Γ(z + ½) - ln Γ(z) - ½ ln z; a difference of two log-gammas would lose what this keeps.
    y = 1.0 / (z * z)
    return -(0.125 - y * (1 / 192 - y * (1 / 640 - y * (17 / 14336 - y * (31 / 18432))))) / z


def c4(n: int) -> float:
    """E[S] for n standard normal values: √(2/(n-1)) Γ(n/2) / Γ((n-1)/2), n of 2 to 1000."""
    _check_size(n)
    return c4_of_freedom(float(n - 1))


def relative_sd_of_sd(n: int) -> float:
    """SD[S] = √(1 - c4²) for n standard normal values, without the cancellation at large n."""
    _check_size(n)
    return math.sqrt(-math.expm1(2.0 * log_c4_of_freedom(float(n - 1))))


@lru_cache(maxsize=4096)
def sd_ppf(q: float, n: int) -> float:
    """The value S stays below with probability q, in sigma (chi-square with n - 1 degrees of freedom)."""
    _check_size(n)
    _check_probability(q)
    freedom = n - 1
    return math.sqrt(2.0 * float(scipy.special.gammaincinv(0.5 * freedom, q)) / freedom)


@lru_cache(maxsize=4096)
def sd_isf(p: float, n: int) -> float:
    """The value S exceeds with probability p, in sigma; exact for small p, where 1 - p is not."""
    _check_size(n)
    _check_probability(p)
    freedom = n - 1
    return math.sqrt(2.0 * float(scipy.special.gammainccinv(0.5 * freedom, p)) / freedom)


def _check_probability(q: float) -> None:
    if not 0.0 < q < 1.0:
        raise UnusableParameter.of(
            "probability-out-of-range", f"A probability must lie between 0 and 1; {q!r} does not."
        )


# ---------------------------------------------------------------------------------------------------
# Range


@lru_cache(maxsize=8)
def gauss_legendre(count: int) -> tuple[Floats, Floats]:
    """Nodes and weights (count,) of Gauss–Legendre quadrature on [0, 1]."""
    # The library's weights hold 11 digits near the ends; one Newton step in extended precision mends them.
    x: NDArray = np.polynomial.legendre.leggauss(count)[0].astype(np.longdouble)
    for last in (False, True):
        before, now = np.ones_like(x), x.copy()
        for k in range(2, count + 1):
            before, now = now, ((2 * k - 1) * x * now - (k - 1) * before) / k
        slope = count * (before - x * now) / ((1.0 - x) * (1.0 + x))
        if not last:
            x = x - now / slope
    weights = 1.0 / ((1.0 - x) * (1.0 + x) * slope * slope)
    return (0.5 * (x + 1.0)).astype(np.float64), weights.astype(np.float64)


@lru_cache(maxsize=2048)
def _reach(n: int) -> float:
    """Where the largest of n standard normals is, in double precision, certain to be below."""
    return -float(scipy.special.ndtri(_NEGLIGIBLE / n))


@lru_cache(maxsize=2048)
def _floor(n: int) -> float:
    """Where the smallest of n standard normals is, in double precision, certain to be below."""
    return float(scipy.special.ndtri(-math.expm1(math.log(_NEGLIGIBLE) / n)))


def d2(n: int) -> float:
    """E[W] for n standard normal values, n of 2 to 1000, by quadrature to about 14 digits.

    Source: [tippett-1925]; E[W] = ∫ (1 - Φⁿ - (1 - Φ)ⁿ) dx.
    """
    _check_size(n)
    return _range_moments(n)[0]


def d3(n: int) -> float:
    """SD[W] for n standard normal values, n of 2 to 1000, by quadrature to about 13 digits.

    Source: [tippett-1925]; the second moment about d2 from the distribution of W [hartley-1942].
    """
    _check_size(n)
    return _range_moments(n)[1]


@lru_cache(maxsize=2048)
def _range_moments(n: int) -> tuple[float, float]:
    nodes, weights = gauss_legendre(_NODES)
    reach = _reach(n)
    q = scipy.special.ndtr(-nodes * reach)
    mean = 2.0 * reach * float(weights @ (-np.expm1(n * np.log1p(-q)) - q**n))
    # The second moment about the mean itself: nothing is subtracted, so no digit is lost.
    x, v = gauss_legendre(_PANEL_NODES)
    down = mean - max(0.0, -2.0 * _floor(n))
    up = 2.0 * reach - mean
    lower = 2.0 * down * down * float(v @ (x * _range_cdf(mean - down * x, n)))
    upper = 2.0 * up * up * float(v @ (x * _range_sf(mean + up * x, n)))
    return mean, math.sqrt(lower + upper)


def _range_cdf(w: Floats, n: int) -> Floats:
    """P(W ≤ w), (k,), by Hartley's form: only positive terms, so small values keep their digits."""
    nodes, weights = gauss_legendre(_NODES)
    half = 0.5 * w
    length = np.maximum(_reach(n) + 0.5 - half, 0.5)
    x = half[:, None] + length[:, None] * nodes
    inside = scipy.special.ndtr(w[:, None] - x) - scipy.special.ndtr(-x)
    integral = (np.exp(-0.5 * x * x) * inside ** (n - 1)) @ weights
    centred = scipy.special.erf(half * math.sqrt(0.5)) ** n
    total: Floats = centred + (2.0 * n / math.sqrt(2.0 * math.pi)) * length * integral
    return np.minimum(total, 1.0)


def _range_sf(w: Floats, n: int) -> Floats:
    """P(W > w), (k,): the smallest value at x, and at least one of the others above x + w."""
    nodes, weights = gauss_legendre(_NODES)
    low = -_reach(n) - 0.5
    length = _floor(n) - low
    x = low + length * nodes
    tail = scipy.special.ndtr(-x)
    share = scipy.special.ndtr(-x - w[:, None]) / tail
    beyond = -np.expm1((n - 1) * np.log1p(-np.minimum(share, _ALMOST_ONE)))
    density = (n * length / math.sqrt(2.0 * math.pi)) * weights * np.exp(-0.5 * x * x) * tail ** (n - 1)
    result: Floats = beyond @ density
    return np.minimum(result, 1.0)


def _range_pdf(w: float, n: int) -> float:
    nodes, weights = gauss_legendre(_NODES)
    half = 0.5 * w
    length = max(_reach(n) + 0.5 - half, 0.5)
    # With u = x - w/2 the integrand is even in u, so half of it is enough.
    u = length * nodes
    inside = scipy.special.ndtr(half - u) - scipy.special.ndtr(-half - u)
    kernel = np.exp(-u * u - 0.5 * w * half) * inside ** (n - 2)
    return float(n * (n - 1) / math.pi * length * (weights @ kernel))


@overload
def range_cdf(w: float, n: int) -> float: ...
@overload
def range_cdf(w: Floats, n: int) -> Floats: ...
def range_cdf(w: float | Floats, n: int) -> float | Floats:
    """P(W ≤ w) for the range of n standard normal values; w a number or an array (k,), in sigma.

    Source: [hartley-1942].
    """
    _check_size(n)
    return _each(_range_cdf, w, n, at_most_zero=0.0)


@overload
def range_sf(w: float, n: int) -> float: ...
@overload
def range_sf(w: Floats, n: int) -> Floats: ...
def range_sf(w: float | Floats, n: int) -> float | Floats:
    """P(W > w) for the range of n standard normal values; keeps its digits far in the upper tail."""
    _check_size(n)
    return _each(_range_sf, w, n, at_most_zero=1.0)


def _each(
    function: Callable[[Floats, int], Floats], w: float | Floats, n: int, *, at_most_zero: float
) -> float | Floats:
    given = np.asarray(w, dtype=np.float64)
    flat = np.clip(given.reshape(-1), 0.0, 2.0 * _reach(n) + 10.0)
    value = np.where(flat > 0.0, function(flat, n), at_most_zero).reshape(given.shape)
    return float(value) if given.ndim == 0 else value


@lru_cache(maxsize=4096)
def range_ppf(q: float, n: int) -> float:
    """The value W stays below with probability q, in sigma: Newton steps held in a bracket.

    Stops at a relative step of 1e-13, after 100 steps at the latest (bisection alone needs fewer).
    """
    _check_size(n)
    _check_probability(q)
    return _range_quantile(q, n, upper=False) if q <= 0.5 else _range_quantile(1.0 - q, n, upper=True)


@lru_cache(maxsize=4096)
def range_isf(p: float, n: int) -> float:
    """The value W exceeds with probability p, in sigma; exact for small p, where 1 - p is not."""
    _check_size(n)
    _check_probability(p)
    return _range_quantile(p, n, upper=True) if p <= 0.5 else _range_quantile(1.0 - p, n, upper=False)


def _range_quantile(p: float, n: int, *, upper: bool) -> float:
    low, high = 0.0, 2.0 * -float(scipy.special.ndtri(p / (2.0 * n))) if upper else d2(n) + 1.0
    w = d2(n)
    for _ in range(100):
        point = np.array([w])
        excess = p - float(_range_sf(point, n)[0]) if upper else float(_range_cdf(point, n)[0]) - p
        if excess > 0.0:
            high = w
        else:
            low = w
        slope = _range_pdf(w, n)
        tail = p - excess if upper else p + excess
        if slope <= 0.0:
            new = math.nan
        elif n > _USUAL_SIZE and tail > 0.0:
            # Far out the logarithm of a tail is nearly a parabola, and takes few steps; a usual size is soon there.
            step = math.log(tail / p) * tail / slope
            new = w + step if upper else w - step
        else:
            new = w - excess / slope
        if not low < new < high:
            new = 0.5 * (low + high)
        if abs(new - w) <= 1e-13 * w:
            return new
        w = new
    return w


def range_median(n: int) -> float:
    """The median of W: 0.9539 for n = 2, by which a median range is divided."""
    return range_ppf(0.5, n)


def range_density_at_median(n: int) -> float:
    """Density of W at its median: what the precision of a median range depends on."""
    return _range_density_at_median(n)


@lru_cache(maxsize=2048)
def _range_density_at_median(n: int) -> float:
    return _range_pdf(range_median(n), n)


# ---------------------------------------------------------------------------------------------------
# Many subgroups at once


def of_sizes(function: Callable[[int], float], sizes: Integers) -> Floats:
    """``function(n)`` for each of sizes, (m,) int; NaN where a size is below 2.

    Evaluated once a distinct size. Raises UnusableParameter ``size-out-of-range`` above 1000.
    """
    largest = int(sizes.max(initial=0))
    _check_size(max(largest, SMALLEST_SIZE))
    smallest = int(sizes.min(initial=largest))
    if smallest == largest and largest >= SMALLEST_SIZE:
        return np.full(sizes.shape, function(largest))
    table = np.full(largest + 1, np.nan)
    for n in np.flatnonzero(np.bincount(np.maximum(sizes, 0).reshape(-1))).tolist():
        if n >= SMALLEST_SIZE:
            table[n] = function(n)
    return table[np.maximum(sizes, 0)]


def d2_of(sizes: Integers) -> Floats:
    """d2 of each size, (m,); NaN where a size is below 2."""
    return of_sizes(d2, sizes)


def d3_of(sizes: Integers) -> Floats:
    """d3 of each size, (m,); NaN where a size is below 2."""
    return of_sizes(d3, sizes)


def c4_of(sizes: Integers) -> Floats:
    """c4 of each size, (m,); NaN where a size is below 2."""
    return of_sizes(c4, sizes)


def range_median_of(sizes: Integers) -> Floats:
    """Median of W of each size, (m,); NaN where a size is below 2."""
    return of_sizes(range_median, sizes)
