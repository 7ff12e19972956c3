"""A lasting step of level or of spread within a baseline, looked for by likelihood ratio.

The split of the series that explains most is found by cumulative sums, and its p-value accounts for the
search over all splits. At each split the statistic has a known distribution (t, or F), through which it
is turned into the normal score ``z`` of equal probability. Along the splits these scores behave like a
stationary process with correlation exp(-\\|Δu\\|) in the time u = ½ ln(k/(m - k)) of the split after k of m
points, whose largest value has the distribution

``P(max > z) = 1 - (1 - 2Φ(-z)) exp(-2 z φ(z) g Σ Δu ν(z√(2Δu)))``

with Siegmund's correction ν for the gaps between splits [siegmund-1985] and, where p is above 0.1, a
factor g = 1 + 2.29 exp(-0.743 z²) fitted to exact values. Against the exact recursion of a known sigma it
is right within 5 % of p from 8 to 400 points wherever p < 0.5, and within 7 % above. With sigma estimated
the scores of a step of level move a little more freely (the sum times 1 + 2.5/m, fitted); 20,000 seeded
simulations each of 10, 25 and 100 points find p from 0.01 to 0.5 right within a tenth.

Sources: [sullivan-woodall-1996] for the likelihood ratio in a baseline; [worsley-1979], [james-1987] for
the distribution of the largest statistic.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated

import numpy as np
import scipy

from ..cautions import Caution
from ..data import Floats, Integers, SubgroupStatistics
from ..factors import LARGEST_SIZE, c4_of_freedom, d2, d3
from ..sigma import freedom_of_relative_variance

FEWEST_POINTS = 8
SHORTEST_LEVEL = 2
"""Points on either side of a step of level: one alone is an outlier."""
LEAST_FREEDOM = 4.0
"""Degrees of freedom on either side of a step of spread."""
SIGNIFICANCE = 0.01
_ROOT_TAU = math.sqrt(2.0 * math.pi)


@dataclass(frozen=True, slots=True)
class BaselineStep:
    """The most likely single step of a level or of a spread, with a p-value that accounts for the search."""

    index: Annotated[int, "Position in the baseline, from 0, of the first point after the step."]
    before: Annotated[float, "Mean, or standard deviation, of the points before it."]
    after: Annotated[float, "The same, of the points from it on."]
    statistic: Annotated[float, "Twice the log-likelihood ratio of a step here to none."]
    p_value: Annotated[
        float, "Probability of as strong evidence at the best of all places where there is no step."
    ]


@dataclass(frozen=True, slots=True)
class ChangePoint:
    """A step of the level and of the spread, each looked for by itself in normal points of one process."""

    mean: Annotated[
        BaselineStep | None, "Step of the level of the plotted points; null where there are too few."
    ]
    variance: Annotated[
        BaselineStep | None,
        "Step of the standard deviation: within subgroups, or of single values (a step of their mean that is "
        "significant at 0.01 taken out first); null where there are too few points, or none that vary.",
    ]


def of_values(values: Floats) -> ChangePoint | None:
    """Steps in single values (m,) in time order, NaN for a gap; ``None`` for fewer than 8 of them."""
    present, at = _present(values)
    if len(present) < FEWEST_POINTS:
        return None
    found = _centred(present)
    if found is None:
        return None
    centre, scale, z = found
    level, split = _step_of_mean(z, None)
    mean = None
    if level is not None:
        mean = _told(level, at, scale, centre)
        if level.p_value < SIGNIFICANCE:
            z = z.copy()
            z[:split] -= level.before
            z[split:] -= level.after
    spread = _step_of_spread_of_values(z)
    return ChangePoint(mean, None if spread is None else _told(spread, at, scale, 0.0))


def of_subgroups(statistics: SubgroupStatistics) -> ChangePoint | None:
    """Steps in subgroups: in their means, each weighted by its size, and in the spread within them.

    The means are judged by their own variation, so that differences between subgroups that no step
    explains do not count as one. Where only ranges were kept, each stands for a standard deviation with
    the degrees of freedom of its relative variance [patnaik-1950]. ``None`` for fewer than 8 subgroups.
    """
    size = statistics.size
    smallest, largest = int(size.min()), int(size.max())
    means, at = (statistics.mean, None) if smallest else _present(statistics.mean)
    if len(means) < FEWEST_POINTS:
        return None
    level = None
    found = _centred(means)
    if found is not None:
        weights = None
        if smallest != largest:
            weights = (size if at is None else size[at]).astype(np.float64)
        level, _ = _step_of_mean(found[2], weights)
        if level is not None:
            level = _told(level, at, found[1], found[0])
    return ChangePoint(level, _step_within(statistics, smallest, largest))


def _present(values: Floats) -> tuple[Floats, Integers | None]:
    there = values == values
    if there.all():
        return values, None
    at = there.nonzero()[0]
    return values[at], at


def _centred(values: Floats) -> tuple[float, float, Floats] | None:
    """Centre, scale, and the values less the one in units of the other; ``None`` without variation."""
    # Differences first: values like 10000000.2 keep their digits.
    first = float(values[0])
    z = values - first
    middle = float(z.sum()) / len(z)
    z -= middle
    scale = max(float(z.max()), -float(z.min()))
    if not scale > 1e-15 * max(abs(first), abs(middle)) or scale == math.inf:
        return None
    z /= scale
    return first + middle, scale, z


def _told(step: BaselineStep, at: Integers | None, scale: float, centre: float) -> BaselineStep:
    """The step in the unit and positions of the data."""
    return BaselineStep(
        step.index if at is None else int(at[step.index]),
        centre + scale * step.before,
        centre + scale * step.after,
        step.statistic,
        step.p_value,
    )


@lru_cache(64)
def _counts(m: int) -> tuple[Floats, Floats]:
    """Points before each split that leaves two on both sides, and the share k(m - k)/m of it."""
    k = np.arange(SHORTEST_LEVEL, m - SHORTEST_LEVEL + 1, dtype=np.float64)
    return k, k * (m - k) / m


def _step_of_mean(z: Floats, weights: Floats | None) -> tuple[BaselineStep | None, int]:
    """Step of the mean of centred values (m,) of one variance over their weights."""
    m = len(z)
    mean = 0.0
    inside = slice(SHORTEST_LEVEL - 1, m - SHORTEST_LEVEL)
    if weights is None:
        _, share = _counts(m)
        sums = z.cumsum()[inside]
        total = float(z @ z)
    else:
        weights = weights / weights.mean()
        mean = float(weights @ z) / m
        z = z - mean
        weighted = weights * z
        before = weights.cumsum()[inside]
        share = before * (m - before) / m
        sums = weighted.cumsum()[inside]
        total = float(weighted @ z)
    explained = sums * sums
    explained /= share
    best = int(explained.argmax())
    # Two exact levels leave no residue at all.
    rest = max(1.0 - float(explained[best]) / total, 1e-300)
    split = best + SHORTEST_LEVEL
    t = math.sqrt((m - 2) * (1.0 - rest) / rest)
    p = _of_search(2.0 * float(scipy.special.stdtr(m - 2, -t)), m, SHORTEST_LEVEL, 1.0 + 2.5 / m)
    s = float(sums[best])
    w = split if weights is None else float(before[best])
    return BaselineStep(split, mean + s / w, mean - s / (m - w), -m * math.log(rest), p), split


def _step_of_spread_of_values(z: Floats) -> BaselineStep | None:
    """Step of the standard deviation of centred values (m,), each side about its own mean."""
    m = len(z)
    edge = int(LEAST_FREEDOM) + 1
    if m < 2 * edge:
        return None
    inside = slice(edge - 1, m - edge)
    k = _counts(m)[0][edge - SHORTEST_LEVEL : m - edge - SHORTEST_LEVEL + 1]
    sums, squares = z.cumsum(), (z * z).cumsum()
    left, right = sums[inside], float(sums[-1]) - sums[inside]
    before = squares[inside] - left * left / k
    after = (float(squares[-1]) - squares[inside]) - right * right / (m - k)
    return _step_of_variance(before, after, k - 1.0, (m - 1.0) - k, edge, m)


def _step_within(statistics: SubgroupStatistics, smallest: int, largest: int) -> BaselineStep | None:
    """Step of the standard deviation within subgroups."""
    if largest < 2:
        return None
    size, at = statistics.size, None
    if statistics.sd is not None:
        spread, each = statistics.sd, float(largest - 1)
    else:
        assert statistics.range is not None
        if largest > LARGEST_SIZE:
            return None
        spread, each = statistics.range, 0.0
    if smallest < 2:
        at = (size > 1).nonzero()[0]
        size, spread = size[at], spread[at]
    m = len(spread)
    if m < FEWEST_POINTS:
        return None
    common = largest if int(size.min()) == largest else 0
    freedom: Floats | None = None
    if common:
        if not each:
            scale, each = _of_range(common)
            spread = spread * scale
    elif each:
        freedom = (size - 1).astype(np.float64)
    else:
        sizes, where = np.unique(size, return_inverse=True)
        table = np.array([_of_range(int(n)) for n in sizes])[where]
        spread, freedom = spread * table[:, 0], table[:, 1]
    unit = float(spread.max())
    if not 0.0 < unit < math.inf:
        return None
    spread = spread / unit
    square = spread * spread
    if freedom is None:
        edge = max(2, math.ceil(LEAST_FREEDOM / each))
        if m < 2 * edge:
            return None
        squares = square.cumsum() * each
        inside = slice(edge - 1, m - edge)
        k = _counts(m)[0][edge - SHORTEST_LEVEL : m - edge - SHORTEST_LEVEL + 1]
        nu1, nu2 = each * k, each * (m - k)
    else:
        totals = freedom.cumsum()
        total = float(totals[-1])
        edge = max(2, int(totals.searchsorted(LEAST_FREEDOM)) + 1)
        edge = max(edge, m - int(totals.searchsorted(total - LEAST_FREEDOM, "right")))
        if m < 2 * edge:
            return None
        squares = (freedom * square).cumsum()
        inside = slice(edge - 1, m - edge)
        nu1 = totals[inside]
        nu2 = total - nu1
    found = _step_of_variance(squares[inside], float(squares[-1]) - squares[inside], nu1, nu2, edge, m)
    return None if found is None else _told(found, at, unit, 0.0)


@lru_cache(1024)
def _of_range(n: int) -> tuple[float, float]:
    """What turns a range of n into a deviation whose square is unbiased, and its degrees of freedom."""
    freedom = freedom_of_relative_variance((d3(n) / d2(n)) ** 2)
    return c4_of_freedom(freedom) / d2(n), freedom


def _step_of_variance(
    before: Floats, after: Floats, nu1: Floats, nu2: Floats, edge: int, m: int
) -> BaselineStep | None:
    """The best split by Bartlett's corrected ratio, from the sums of squares and freedoms on both sides."""
    s1, s2 = before / nu1, after / nu2
    # What cancellation leaves of a constant stretch is no variance.
    least = 1e-13 * max(float(s1[-1]), float(s2[0]))
    if min(float(s1.min()), float(s2.min())) <= least:
        usable = (s1 > least) & (s2 > least)
        if not usable.any():
            return None
        s1, s2 = np.where(usable, s1, 1.0), np.where(usable, s2, 1.0)
    nu = float(nu1[0] + nu2[0])
    ratio = nu * np.log((nu1 * s1 + nu2 * s2) / nu)
    ratio -= nu1 * np.log(s1)
    ratio -= nu2 * np.log(s2)
    best = int((ratio / (1.0 + (nu / (nu1 * nu2) - 1.0 / nu) / 3.0)).argmax())
    a, b = float(nu1[best]), float(nu2[best])
    one, two = float(s1[best]), float(s2[best])
    tail = scipy.special.fdtr(a, b, one / two) if one < two else scipy.special.fdtr(b, a, two / one)
    p = _of_search(min(2.0 * float(tail), 1.0), m, edge)
    return BaselineStep(best + edge, math.sqrt(one), math.sqrt(two), max(float(ratio[best]), 0.0), p)


@lru_cache(256)
def _splits(m: int, edge: int) -> tuple[Floats, Floats]:
    """Steps of the time u between neighbouring splits: √(2Δu), and the u it stands for.

    Beyond 64 points from either end a stretch of a tenth of them is one entry.
    """
    half = np.arange(edge, min(m // 2, 64) + 1, dtype=np.float64)
    if m // 2 > 64:
        more = int(math.log(m / 128.0) / math.log(1.1)) + 1
        half = np.concatenate((half, 64.0 * (m / 128.0) ** (np.arange(1, more + 1) / more)))
    k = np.concatenate((half, (m - half)[::-1][1 if 2 * float(half[-1]) == m else 0 :]))
    u = 0.5 * np.log(k / (m - k))
    du = u[1:] - u[:-1]
    root = np.sqrt(2.0 * du / np.maximum(k[1:] - k[:-1], 1.0))
    return root, du


def _of_search(single: float, m: int, edge: int, sharing: float = 1.0) -> float:
    """P-value of the best of all splits, from that of its own split alone.

    ``sharing``: how much more freely the scores move where all splits share one estimate of sigma.
    """
    if single >= 1.0:
        return 1.0
    if single < 1e-290:
        return 0.0
    z = -float(scipy.special.ndtri(0.5 * single))
    root, du = _splits(m, edge)
    x = (0.5 * max(z, 1.0)) * root
    density = np.exp(-0.5 * x * x) / _ROOT_TAU
    above = scipy.special.ndtr(x)
    nu = (above - 0.5) / (x * (x * above + density))
    rate = max(z, 1.0)
    hazard = 2.0 * rate / _ROOT_TAU * math.exp(-0.5 * rate * rate) * float(du @ nu)
    hazard *= sharing * (1.0 + 2.29 * math.exp(-0.743 * z * z))
    return -math.expm1(math.log1p(-single) - hazard)


def caution_of_level(found: ChangePoint | None) -> Caution | None:
    """A baseline whose level made a step."""
    step = None if found is None else found.mean
    if step is None or step.p_value >= SIGNIFICANCE:
        return None
    return Caution(
        "shift-in-baseline",
        f"The level seems to have changed within the baseline, from {step.before:.6g} to {step.after:.6g} at "
        f"point {step.index} (likelihood ratio over all places, {_probability(step.p_value)}), so one centre "
        "line does not stand for all of it. Find what changed there; set limits from the part that stands "
        "for the process as it is to run. A drift, a cycle or a single wild point can look like a step.",
        ("data",),
        "sullivan-woodall-1996",
    )


def caution_of_spread(found: ChangePoint | None) -> Caution | None:
    """A baseline whose spread made a step."""
    step = None if found is None else found.variance
    if step is None or step.p_value >= SIGNIFICANCE:
        return None
    return Caution(
        "spread-shift-in-baseline",
        f"The spread seems to have changed within the baseline, from a standard deviation of {step.before:.4g} "
        f"to {step.after:.4g} at point {step.index} (likelihood ratio over all places, "
        f"{_probability(step.p_value)}), so one sigma does not stand for all of it. Find what changed there. "
        "Values far from normal, or a single wild one, can look like this.",
        ("data",),
        "sullivan-woodall-1996",
    )


def _probability(p: float) -> str:
    return f"p = {p:.2g}" if p >= 0.0001 else "p < 0.0001"
