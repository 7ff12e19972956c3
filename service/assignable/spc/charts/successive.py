"""The law of T² where the covariance comes from successive differences ([holmes-mergen-1993]).

S = Σ d d' / (2k) over the k differences d of neighbours. No exact law is known, and the law differs from
position to position: an end point takes part in one difference, an inner one in two. The approximation
here has two steps, of which the first is exact.

*Exact.* With L the Laplacian of the paths of neighbours, ``S = X'LX/(2k)``, and ``T²ᵢ > t`` says that
``X'(L − bb'·2k/t)X`` has a negative eigenvalue, ``b`` being the contrast of point i with the mean. That
matrix has one negative eigenvalue −μ and others λ ≥ 0, so

    P(T²ᵢ > t) = P(y₀' (Σ λⱼ yⱼyⱼ')⁻¹ y₀ > 1/μ),    all y independent N(0, I).

The numerator no longer depends on the denominator. A new observation leads to the same form.

*Approximate.* A quadratic form so made is χ² of p degrees over an independent sum of squares. That sum
is taken as a multiple of a χ²: for one variable its first two inverse moments are matched exactly (by
quadrature); each further variable takes a random direction away, by the ratio of the first two moments
in the large-dimension limit. Where all λ are equal the whole is exact (Hotelling). Against simulation
the false-alarm rate lies within about a tenth of the one stated from 15 observations of 3 variables or
25 of 5, and falls below it, on the safe side, where observations are few for the variables.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import lru_cache

import numpy as np
import scipy

from ..data import Booleans, Floats, Integers

FEWEST = 10
"""Observations below which the moments matched do not exist."""

_FEW = 120
"""Observations up to which the eigenvalues are computed; beyond, their limiting law stands for them."""
_FAR = 6  # neighbours away, from where the end of a path is no longer felt
_STAND_INS = 64
_T = np.linspace(-3.6, 3.6, 121)
_S = np.exp(0.5 * np.pi * np.sinh(_T))
_S_WEIGHT = _S * 0.5 * np.pi * np.cosh(_T) * (_T[1] - _T[0])


def _reduced(lam: Floats, count: Floats, away: int) -> tuple[float, float]:
    """Trace, and trace of the square, of diag(λ) less ``away`` random directions taken in its own metric.

    lam: the λ; count: how often each stands. The deterministic equivalent of a random projection: exact
    in the mean where all λ are equal.
    """
    if not away:
        return float(count @ lam), float(count @ (lam * lam))

    def surplus(log_theta: float) -> float:
        return float(count @ (1.0 / (1.0 + math.exp(-log_theta) / lam))) - away

    theta = math.exp(scipy.optimize.brentq(surplus, -60.0, 60.0, xtol=1e-10))
    left = lam / (1.0 + theta * lam)
    square = float(count @ (left * left))
    return float(count @ left), square * away / (away - theta * theta * square)


def _denominator(lam: Floats, count: Floats, p: int) -> tuple[float, float]:
    """(mean, freedom) of the multiple of χ² that stands for the sum of squares beside p variables."""
    top = float(lam.max())
    some = lam > 1e-9 * top
    lam, count = lam[some] / top, count[some]
    mean, square = _reduced(lam, count, 0)
    s = _S / mean
    survival = np.exp(-0.5 * (np.log1p(2.0 * s[:, None] * lam) @ count)) * _S_WEIGHT / mean
    inverse, inverse_square = float(survival.sum()), float(survival @ s)
    ratio = inverse_square / inverse**2
    freedom = (4.0 * ratio - 2.0) / (ratio - 1.0)
    matched = freedom / (inverse * (freedom - 2.0))
    less, less_square = _reduced(lam, count, p - 1)
    return top * matched * less / mean, freedom * (less * less / less_square) / (mean * mean / square)


def _beyond(x: float, p: int, freedom: float) -> float:
    """P(χ²_p / χ²_freedom > x)."""
    return float(scipy.special.betaincc(0.5 * p, 0.5 * freedom, x / (1.0 + x)))


def _stand_ins(differences: int) -> tuple[Floats, Floats]:
    """The limiting law of the eigenvalues of long paths: 2 − 2 cos φ, φ uniform."""
    angle = math.pi * (np.arange(_STAND_INS) + 0.5) / _STAND_INS
    return 2.0 - 2.0 * np.cos(angle), np.full(_STAND_INS, differences / _STAND_INS)


def _spectrum(lengths: tuple[int, ...]) -> tuple[Floats, Floats]:
    """Eigenvalues above 0 of the Laplacian of paths, and how often each stands."""
    if sum(lengths) > _FEW:
        return _stand_ins(sum(lengths) - len(lengths))
    lam = np.concatenate([2.0 - 2.0 * np.cos(np.pi * np.arange(1, n) / n) for n in lengths])
    return lam, np.ones(len(lam))


@lru_cache(maxsize=256)
def new_point_law(lengths: tuple[int, ...], p: int) -> tuple[float, float]:
    """(scale, freedom) of T² of a new observation: ``scale · χ²_p / χ²_freedom``.

    lengths: of the paths of neighbours in the baseline, in ascending order.
    """
    lam, count = _spectrum(lengths)
    mean, freedom = _denominator(lam, count, p)
    points = sum(lengths)
    return (1.0 + 1.0 / points) * 2.0 * (points - len(lengths)) * freedom / mean, freedom


def freedom(lengths: tuple[int, ...]) -> float:
    """Effective degrees of freedom of a variance from successive differences: those of its own moments.

    2(m − 1)²/(3m − 4) for one path of m.
    """
    differences = sum(lengths) - len(lengths)
    return 2.0 * differences**2 / (3.0 * differences - sum(n > 1 for n in lengths))


def _resolvent(mu: float, length: int, place: int) -> float:
    """The diagonal entry of (L + μ)⁻¹ at a place, from 0, of a path."""
    phi = math.acosh(1.0 + 0.5 * mu)

    def decayed(steps: int) -> float:
        return math.exp(-min(phi * steps, 700.0))

    ends = (1.0 + decayed(2 * place + 1)) * (1.0 + decayed(2 * (length - place) - 1))
    return ends / (2.0 * math.sinh(phi) * (1.0 - decayed(2 * length)))


def _limit(
    points: int,
    differences: int,
    length: int,
    place: int,
    p: int,
    alpha: float,
    law: Callable[[float, float], tuple[float, float]],
) -> float:
    """The limit of T² at a place of a path: μ is what is solved for, to a relative 1e-7.

    law: from μ and the ratio T²/2k that belongs to it, the mean and freedom of the denominator.
    """

    def ratio_at(mu: float) -> float:
        return _resolvent(mu, length, place) - 1.0 / (points * mu)

    def surplus(log_mu: float) -> float:
        mu = math.exp(log_mu)
        mean, freedom = law(mu, ratio_at(mu))
        return math.log(max(_beyond(mean / (freedom * mu), p, freedom), 1e-300) / alpha)

    log_mu = scipy.optimize.brentq(surplus, math.log(1e-4), math.log(100.0 * points), xtol=1e-7)
    return 2.0 * differences * ratio_at(math.exp(log_mu))


@lru_cache(maxsize=1024)
def _limit_of_few(lengths: tuple[int, ...], length: int, place: int, p: int, alpha: float) -> float:
    points = sum(lengths)
    laplacian = np.zeros((points, points))
    offset = 0
    for n in lengths:
        i = np.arange(offset, offset + n - 1)
        laplacian[i, i] += 1.0
        laplacian[i + 1, i + 1] += 1.0
        laplacian[i, i + 1] = laplacian[i + 1, i] = -1.0
        offset += n
    contrast = np.full(points, -1.0 / points)
    contrast[sum(lengths[: lengths.index(length)]) + place] += 1.0

    def law(_: float, ratio: float) -> tuple[float, float]:
        lam = np.linalg.eigvalsh(laplacian - np.outer(contrast, contrast / ratio))[1:]
        lam = np.maximum(lam, 0.0)
        return _denominator(lam, np.ones(len(lam)), p)

    return _limit(points, points - len(lengths), length, place, p, alpha, law)


@lru_cache(maxsize=1024)
def _limit_of_many(
    points: int, differences: int, runs: int, length: int, place: int, p: int, alpha: float
) -> float:
    """runs: paths of two points or more."""
    lam, count = _stand_ins(differences)
    first, second = float(count @ lam), float(count @ (lam * lam))
    degree = int(place > 0) + int(place < length - 1)
    norm = 1.0 - 1.0 / points

    def law(mu: float, ratio: float) -> tuple[float, float]:
        # The stand-ins, moved so that the first two sums of what remains are exact.
        total = 2.0 * differences - norm / ratio + mu
        square = 6.0 * differences - 2.0 * runs - 2.0 * degree / ratio + (norm / ratio) ** 2 - mu * mu
        stretch = (square / second) / (total / first)
        return _denominator(stretch * lam, count * (total / first) / stretch, p)

    return _limit(points, differences, length, place, p, alpha, law)


def paths(kept: Booleans) -> tuple[Integers, tuple[int, ...]]:
    """Starts of the paths of neighbours among the points kept, (k,), and their lengths in time order."""
    edges = np.flatnonzero(np.diff(np.concatenate(([False], kept, [False])).astype(np.int8)))
    return edges[::2], tuple((edges[1::2] - edges[::2]).tolist())


def baseline_limits(kept: Booleans, p: int, alpha: float) -> Floats:
    """(m,) limits of T² of the points kept, each for its own position; NaN elsewhere."""
    starts, lengths = paths(kept)
    ordered = tuple(sorted(lengths))
    points, count = sum(lengths), len(lengths)
    runs = sum(n > 1 for n in lengths)
    lengths_of = np.array(lengths)
    limits = np.full(len(kept), np.nan)
    for length in sorted(set(lengths)):
        own = np.empty(length)
        reach = min(_FAR, (length - 1) // 2)
        for place in range(reach + 1):
            if points <= _FEW:
                limit = _limit_of_few(ordered, length, place, p, alpha)
            else:
                seen = min(length, 2 * _FAR + 1)
                limit = _limit_of_many(points, points - count, runs, seen, place, p, alpha)
            own[place] = own[length - 1 - place] = limit
        own[reach + 1 : length - 1 - reach] = own[reach]
        limits[starts[lengths_of == length][:, None] + np.arange(length)] = own
    return limits
