"""Several characteristics of one product: the share that conforms in all of them [iso-22514-6].

The values of an item are taken as multivariate normal. The share outside the box of specifications is an integral
over all but the last characteristic, each drawn inside its limits given those before it [genz-1992], at the points
of randomly shifted lattices; the shifts' spread is the standard error told. Its interval is that of a
generalised pivot: mean and covariance redrawn as the sample leaves them possible [weerahandi-1993].
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated

import numpy as np
import scipy

from .. import cautions as caution
from .. import diagnostics
from ..cautions import Caution
from ..data import Floats
from ..errors import Fault, UnusableData, UnusableParameter
from .indices import check_confidence
from .specification import Specification

MOST_CHARACTERISTICS = 8
MOST_ITEMS = 200_000
FEWEST_ITEMS = 10
_FEW_ITEMS = 100
_POINTS = 4096
_SHIFTS = 12
_DRAWS = 600
_DRAW_POINTS = 256
_SEED = 22514
_PRIMES = (2.0, 3.0, 5.0, 7.0, 11.0, 13.0, 17.0)
_MILLION = 1e6
_TINY = 1e-300
_SINGULAR = 1e-10
_LARGEST = 1e150


@dataclass(frozen=True, slots=True)
class CharacteristicShare:
    """What one of several characteristics does to the product."""

    mean: Annotated[float, "Of its values."]
    sd: Annotated[float, "Their standard deviation, divisor count - 1."]
    ppk: Annotated[float, "Of the characteristic by itself."]
    nonconforming_ppm: Annotated[float, "Items expected outside its own specification, in parts per million."]
    alone_ppm: Annotated[
        float, "Items expected to fail in this characteristic alone: what mending it would save."
    ]
    share: Annotated[float, "Its nonconforming product over the sum of all characteristics', 0 to 1."]


@dataclass(frozen=True, slots=True)
class JointCapability:
    """The share of product that conforms in every characteristic, normal together."""

    count: Annotated[int, "How many items had every value."]
    confidence: Annotated[float, "Of the interval, as a proportion."]
    conforming: Annotated[float, "Share of the product that conforms in every characteristic."]
    nonconforming_ppm: Annotated[float, "The rest, in parts per million."]
    standard_error_ppm: Annotated[float, "Of its numerical integration."]
    total_lower_ppm: Annotated[float, "Lower end of its interval for the sample taken."]
    total_upper_ppm: Annotated[float, "Upper end of it."]
    total_upper_bound_ppm: Annotated[float, "One-sided bound: the true share is at most this."]
    independent_ppm: Annotated[float, "What it would be if the characteristics were independent."]
    index: Annotated[
        float | None,
        "The Ppk of one normal characteristic with one limit and that share; null where it has none.",
    ]
    correlation: Annotated[tuple[tuple[float, ...], ...], "Of the characteristics, in their order."]
    characteristics: Annotated[tuple[CharacteristicShare, ...], "Each by itself, in their order."]
    observed: Annotated[int, "Items with every value that were outside some specification."]


def assess(
    values: Floats, specifications: Sequence[Specification], *, confidence: float = 0.95
) -> JointCapability:
    """Joint conforming proportion of items (m, k), NaN where missing, against k specifications.

    Items with a missing value are left out. Raises UnusableData ``too-few-values``, ``no-variation``,
    ``collinear``, ``too-large``; UnusableParameter ``unequal-length``, ``confidence-out-of-range``.
    """
    check_confidence(confidence)
    k = len(specifications)
    if values.ndim != 2 or values.shape[1] != k:
        raise UnusableParameter.of(
            "unequal-length",
            "Every item needs as many places as there are characteristics.",
            "data",
            "values",
        )
    rows = values[(values == values).all(axis=1)]
    n = rows.shape[0]
    if n < max(FEWEST_ITEMS, 2 * k + 2):
        raise UnusableData.of(
            "too-few-values",
            f"{k} characteristics together need {max(FEWEST_ITEMS, 2 * k + 2)} items with every value; there are {n}.",
            "data",
            "values",
        )
    if float(np.abs(rows).max()) > _LARGEST:
        raise UnusableData.of(
            "too-large", "The values are too large; choose a larger unit.", "data", "values"
        )
    mean = rows.mean(axis=0)
    centred = rows - mean
    still = np.flatnonzero((rows == rows[0]).all(axis=0))
    if still.size:
        raise UnusableData(
            *(
                Fault(
                    "no-variation",
                    "All values of this characteristic are the same.",
                    ("data", "values", 0, int(i)),
                )
                for i in still
            )
        )
    unit = np.abs(centred).max(axis=0)
    scaled = centred / unit
    sd = np.sqrt((scaled * scaled).sum(axis=0) / (n - 1))
    correlation = (scaled / sd).T @ (scaled / sd) / (n - 1)
    np.fill_diagonal(correlation, 1.0)
    if float(np.linalg.eigvalsh(correlation)[0]) < _SINGULAR:
        raise UnusableData.of(
            "collinear",
            "One characteristic is a combination of the others to rounding; leave one of them out.",
            "data",
            "values",
        )
    sd = sd * unit
    lower = np.array(
        [_limit(one.lower, float(mean[i]), float(sd[i]), -1.0) for i, one in enumerate(specifications)]
    )
    upper = np.array(
        [_limit(one.upper, float(mean[i]), float(sd[i]), 1.0) for i, one in enumerate(specifications)]
    )
    own = scipy.special.ndtr(lower) + scipy.special.ndtr(-upper)
    # The characteristic that fails most goes first: its part is then had without sampling.
    joint, error = _outside_with_error(lower, upper, correlation)
    alone = []
    for i in range(k):
        rest = np.delete(np.arange(k), i)
        without = (
            _outside_with_error(lower[rest], upper[rest], correlation[np.ix_(rest, rest)])[0]
            if k > 1
            else 0.0
        )
        alone.append(min(max(joint - without, 0.0), float(own[i])))
    ends = _interval(lower, upper, correlation, n, confidence)
    total = float(own.sum())
    finite_low, finite_high = lower > -1e10, upper < 1e10
    distance = np.minimum(np.where(finite_low, -lower, math.inf), np.where(finite_high, upper, math.inf))
    outside = np.zeros(n, dtype=np.bool_)
    for i, one in enumerate(specifications):
        if one.lower is not None:
            outside |= rows[:, i] < one.lower
        if one.upper is not None:
            outside |= rows[:, i] > one.upper
    return JointCapability(
        count=n,
        confidence=confidence,
        conforming=1.0 - joint,
        nonconforming_ppm=joint * _MILLION,
        standard_error_ppm=error * _MILLION,
        total_lower_ppm=min(ends[0], joint) * _MILLION,
        total_upper_ppm=max(ends[1], joint) * _MILLION,
        total_upper_bound_ppm=ends[2] * _MILLION,
        independent_ppm=-math.expm1(float(np.log1p(-np.minimum(own, 1.0 - 1e-16)).sum())) * _MILLION,
        index=float(-scipy.special.ndtri(joint)) / 3.0 if 0.0 < joint < 1.0 else None,
        correlation=tuple(map(tuple, correlation.tolist())),
        characteristics=tuple(
            CharacteristicShare(
                float(mean[i]),
                float(sd[i]),
                float(distance[i]) / 3.0,
                float(own[i]) * _MILLION,
                alone[i] * _MILLION,
                float(own[i]) / total if total > 0.0 else 1.0 / k,
            )
            for i in range(k)
        ),
        observed=int(np.count_nonzero(outside)),
    )


def _limit(limit: float | None, mean: float, sd: float, side: float) -> float:
    """A limit in standard deviations from the mean; far out where there is none."""
    return side * 1e12 if limit is None else min(max((limit - mean) / sd, -1e9), 1e9)


@lru_cache(maxsize=16)
def _lattice(points: int, dimensions: int, shifts: int) -> Floats:
    """Points (shifts, points, dimensions) in the open unit cube, folded so that the integrand is periodic."""
    base = np.arange(1, points + 1)[:, None] * np.sqrt(np.array(_PRIMES[:dimensions]))
    shift = np.random.Generator(np.random.PCG64(_SEED)).random((shifts, 1, dimensions))
    x = np.mod(base + shift, 1.0)
    return np.clip(np.abs(2.0 * x - 1.0), 1e-15, 1.0 - 1e-15)


def outside_box(lower: Floats, upper: Floats, correlation: Floats, points: Floats) -> Floats:
    """P(a standard normal vector leaves the box), (B,), of boxes (B, k) and correlations (B, k, k), at points.

    points: (N, k - 1) or (B, N, k - 1). Each box is averaged over its N points [genz-1992].
    """
    k = lower.shape[1]
    chol = np.linalg.cholesky(correlation)
    shape = (lower.shape[0], points.shape[-2])
    log_inside = np.zeros(shape)
    drawn: list[Floats] = []
    for i in range(k):
        centre = np.zeros(shape)
        for j, y in enumerate(drawn):
            centre += chol[:, i, j, None] * y
        width = chol[:, i, i, None]
        a, b = (lower[:, i, None] - centre) / width, (upper[:, i, None] - centre) / width
        low, high = scipy.special.ndtr(a), scipy.special.ndtr(-b)
        out = np.minimum(low + high, 1.0 - 1e-16)
        log_inside += np.log1p(-out)
        if i < k - 1:
            u = points[..., i]
            # From the nearer end, so that draws in either tail keep their digits.
            p = low + u * (1.0 - out)
            q = high + (1.0 - u) * (1.0 - out)
            y = np.where(
                p < 0.5,
                scipy.special.ndtri(np.clip(p, _TINY, 0.5)),
                -scipy.special.ndtri(np.clip(q, _TINY, 0.5)),
            )
            drawn.append(y)
    found: Floats = -np.expm1(log_inside).mean(axis=1)
    return found


def _ordered(lower: Floats, upper: Floats, correlation: Floats) -> tuple[Floats, Floats, Floats]:
    order = np.argsort(-(scipy.special.ndtr(lower) + scipy.special.ndtr(-upper)), kind="stable")
    return lower[order], upper[order], correlation[np.ix_(order, order)]


def _outside_with_error(lower: Floats, upper: Floats, correlation: Floats) -> tuple[float, float]:
    lower, upper, correlation = _ordered(lower, upper, correlation)
    k = lower.size
    if k == 1:
        return float((scipy.special.ndtr(lower) + scipy.special.ndtr(-upper))[0]), 0.0
    found = outside_box(
        np.tile(lower, (_SHIFTS, 1)),
        np.tile(upper, (_SHIFTS, 1)),
        np.tile(correlation, (_SHIFTS, 1, 1)),
        _lattice(_POINTS, k - 1, _SHIFTS),
    )
    return float(found.mean()), float(found.std(ddof=1)) / math.sqrt(_SHIFTS)


def _interval(
    lower: Floats, upper: Floats, correlation: Floats, count: int, confidence: float
) -> tuple[float, float, float]:
    """Lower and upper end and the one-sided bound of the share outside, from redrawn means and covariances.

    Given the sample, Σ = L W⁻¹ Lᵀ (n - 1) with W Wishart of n - 1 degrees of freedom and LLᵀ the sample's, and the
    mean is normal about the sample's with Σ/n.
    """
    lower, upper, correlation = _ordered(lower, upper, correlation)
    k, freedom = lower.size, count - 1.0
    random = np.random.Generator(np.random.PCG64(_SEED + 1))
    # Bartlett's decomposition of W, whose inverse's root is that of the triangle.
    triangle = np.tril(random.standard_normal((_DRAWS, k, k)), -1)
    for i in range(k):
        triangle[:, i, i] = np.sqrt(random.chisquare(freedom - i, _DRAWS))
    root = (
        np.linalg.cholesky(correlation)
        @ np.transpose(np.linalg.inv(triangle), (0, 2, 1))
        * math.sqrt(freedom)
    )
    mean = (root @ random.standard_normal((_DRAWS, k, 1)))[:, :, 0] / math.sqrt(count)
    covariance = root @ np.transpose(root, (0, 2, 1))
    sd = np.sqrt(np.diagonal(covariance, axis1=1, axis2=2))
    drawn = covariance / (sd[:, :, None] * sd[:, None, :])
    low, high = (lower - mean) / sd, (upper - mean) / sd
    if k == 1:
        shares = (scipy.special.ndtr(low) + scipy.special.ndtr(-high))[:, 0]
    else:
        shares = outside_box(low, high, drawn, _lattice(_DRAW_POINTS, k - 1, 1)[0])
    tail = 0.5 * (1.0 - confidence)
    ends = np.quantile(shares, [tail, 1.0 - tail, confidence])
    return float(ends[0]), float(ends[1]), float(ends[2])


def cautions_of(values: Floats, found: JointCapability) -> tuple[Caution, ...]:
    """What is to be known about a joint share of items (m, k)."""
    return caution.collect(_left_out(values.shape[0], found.count), _not_normal(values), _few(found.count))


def _left_out(items: int, used: int) -> Caution | None:
    if items == used:
        return None
    return Caution(
        "items-left-out",
        f"{items - used} of {items} items lack a value and were left out.",
        ("data", "values"),
        caution.COMMON_PRACTICE,
    )


def _not_normal(values: Floats) -> Caution | None:
    rejected = []
    for i in range(values.shape[1]):
        test = diagnostics.normality(values[:, i])
        if test is not None and test.anderson_darling.p_value < caution.SIGNIFICANCE / values.shape[1]:
            rejected.append(i)
    if not rejected:
        return None
    which = ", ".join(str(i + 1) for i in rejected)
    return Caution(
        "not-normal",
        f"The values of characteristic {which} (counted from 1) do not follow a normal distribution (Anderson-Darling "
        "test), and the joint share leans on it in the tails. Assess such a characteristic by itself.",
        ("data", "values"),
        "dagostino-stephens-1986",
    )


def _few(count: int) -> Caution | None:
    if count >= _FEW_ITEMS:
        return None
    return Caution(
        "few-values",
        f"The share rests on {count} items; with fewer than {_FEW_ITEMS} its interval is wide. Judge by the bound. "
        "Whether the process was in control is not assessed here: chart its values first.",
        ("data", "values"),
        caution.COMMON_PRACTICE,
    )
