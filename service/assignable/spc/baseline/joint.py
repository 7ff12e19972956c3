"""Limits by which a baseline of m points in control signals anywhere with one stated probability.

A baseline is judged by limits that rest on the same points, all of them at once. Half of the false-alarm
probability (so that both together give it) goes to the panel of location, half to that of spread. With
W = σ̂/σ, of ν degrees of freedom, the multiple K of the location solves

``E[(2Φ(K' W) - 1)^m] = √(1 - α)``, ``K' = K √(m/(m - 1))``

and the spread's upper line u the same with its own distribution; integrals by Gauss–Legendre over the
quantiles of W, roots to 1e-10. A point's own part in σ̂ is taken out of it first: it hides outliers of a
short baseline. Points count as independent given σ̂, which their common mean makes slightly conservative.
Seeded simulation of 10 and 25 baselines of subgroups finds the joint probability right within a tenth of
it. Single values are on the safe side: both panels see the same wild value, so that together they signal
with 0.6 to 1 times the probability stated from 25 values on with the mean moving range, and with as little
as a fifth of it with the median one, whose few degrees of freedom are an approximation. Below 15 values
with the mean moving range it can be up to twice the probability stated, where that is 0.01 or less.

Only the upper side of the spread is judged: a subgroup that varies less is no reason to leave it out, and
rounding alone gives small ranges. Run rules are not: their joint probability is another.
Sources: [champ-jones-2004], and the definition.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, Literal

import numpy as np
import scipy

from ..data import Floats
from ..errors import UnusableParameter
from ..factors import c4, c4_of_freedom, d2, gauss_legendre, range_sf

_NODES = 48
_FARTHEST = 1e4


@dataclass(frozen=True, slots=True)
class JointLimits:
    """What the baseline was judged by instead of its frozen limits: these hold for all its points at once."""

    false_alarm_probability: Annotated[
        float, "Probability that any point of a baseline in control lies beyond these limits."
    ]
    points: Annotated[int, "Points it is shared among."]
    sigma_multiple: Annotated[float, "The location's limits lie this many sigma of the plotted point out."]
    spread_tail_probability: Annotated[
        float,
        "The spread's upper limit, as the probability beyond it in the distribution of a single spread with "
        "the estimated sigma; there is no lower one.",
    ]


@lru_cache(1024)
def of_subgroups(
    probability: float,
    points: int,
    size: int,
    freedom: float | None,
    spread: Literal["range", "sd"],
    estimator: str,
) -> JointLimits:
    """Limits for 3 or more subgroups of ``size``; ``freedom`` of sigma is ``None`` where it is known.

    The estimator (of :func:`.sigma.within`) says how large a subgroup's own part in sigma is.
    Raises UnusableParameter for fewer than three.
    """
    m = _enough(points)
    ratio, weight = _sigma_ratios(freedom)
    goal = _goal(probability)
    inflated = math.sqrt(m / (m - 1))

    def location(multiple: float) -> float:
        return _all_within(2.0 * scipy.special.ndtr(-multiple * inflated * ratio), m, weight)

    multiple = _solve(location, goal, 0.01, 60.0)
    centre = d2(size) if spread == "range" else c4(size)
    others, weight = _sigma_ratios(None if freedom is None else freedom * (m - 1) / m)

    def spreads(line: float) -> float:
        apart: float | None = line
        if freedom is not None:
            apart = _without_own(line, centre, m, estimator, freedom)
        if apart is None:
            return 1.0
        return _all_within(_beyond_spread(apart * others, size, spread), m, weight)

    line = _solve(spreads, goal, 0.01, centre + 40.0)
    tail = float(_beyond_spread(np.array([line]), size, spread)[0])
    return JointLimits(probability, m, multiple, tail)


@lru_cache(1024)
def of_values(
    probability: float, points: int, span: int, freedom: float | None, *, resistant: bool
) -> JointLimits:
    """Limits for 3 or more single values with moving ranges of ``span``; ``freedom`` as above.

    ``resistant``: whether sigma is from the median moving range, which one wild value hardly moves. Else a
    value far out by d adds about d to each of the ``span`` ranges that hold it. Raises UnusableParameter
    for too few values.
    """
    m = points
    ranges = _enough(m - span + 1)
    goal = _goal(probability)
    inflated = math.sqrt(m / (m - 1))
    expected = d2(span)
    ratio, weight = _sigma_ratios(freedom)
    own = freedom is not None and not resistant and ranges > span

    def location(multiple: float) -> float:
        apart = multiple
        if own:
            left = 1.0 - span * multiple / (expected * ranges)
            if left <= 0.0:
                return 1.0
            apart = multiple * (ranges - span) / ranges / left
        return _all_within(2.0 * scipy.special.ndtr(-apart * inflated * ratio), m, weight)

    def spreads(line: float) -> float:
        apart = line
        if own:
            left = 1.0 - line / (expected * ranges)
            if left <= 0.0:
                return 1.0
            apart = line * (ranges - 1) / ranges / left
        return _all_within(_beyond_spread(apart * ratio, span, "range"), ranges, weight)

    line = _solve(spreads, goal, 0.01, expected + 40.0)
    return JointLimits(probability, m, _solve(location, goal, 0.01, 60.0), range_sf(line, span))


def _enough(points: int) -> int:
    if points < 3:
        raise UnusableParameter.of(
            "too-few-points",
            "A joint false-alarm probability needs a baseline of three subgroups, or three moving ranges, or more.",
            "joint_false_alarm_probability",
        )
    return points


def _goal(probability: float) -> float:
    """The logarithm of the probability that one panel is quiet."""
    return 0.5 * math.log1p(-probability)


@lru_cache(256)
def _sigma_ratios(freedom: float | None) -> tuple[Floats, Floats]:
    """Nodes and weights over the distribution of σ̂/σ, unbiased; one node where sigma is known."""
    if freedom is None:
        return np.ones(1), np.ones(1)
    nodes, weights = gauss_legendre(_NODES)
    # Squared nodes crowd where sigma is small: that is where false alarms come from.
    square = scipy.special.gammaincinv(0.5 * freedom, nodes * nodes) / (0.5 * freedom)
    return np.sqrt(square) / c4_of_freedom(freedom), 2.0 * nodes * weights


def _all_within(beyond: Floats, points: int, weight: Floats) -> float:
    """Probability that no point is beyond, from that of one at each node."""
    return float(weight @ np.exp(points * np.log1p(-np.minimum(beyond, 1.0 - 1e-16))))


def _beyond_spread(line: Floats, size: int, spread: Literal["range", "sd"]) -> Floats:
    if spread == "range":
        return range_sf(line, size)
    half = 0.5 * (size - 1)
    beyond: Floats = scipy.special.gammaincc(half, half * line * line)
    return beyond


def _without_own(line: float, centre: float, m: int, estimator: str, freedom: float) -> float | None:
    """The line in units of the sigma of the other subgroups; ``None`` where nothing can reach it."""
    if estimator in ("mean-range", "mean-sd"):
        left = 1.0 - line / (centre * m)
        return line * (m - 1) / m / left if left > 0.0 else None
    if estimator == "pooled-sd":
        c, others = c4_of_freedom(freedom), c4_of_freedom(freedom * (m - 1) / m)
        left = 1.0 - (line / c) ** 2 / m
        return line * others / c * math.sqrt((m - 1) / m / left) if left > 0.0 else None
    return line


def _solve(quiet: Callable[[float], float], goal: float, low: float, high: float) -> float:
    """Where a panel is quiet with the logarithm of probability ``goal``; ``quiet`` rises with the line."""

    def miss(line: float) -> float:
        return math.log(max(quiet(line), 1e-300)) - goal

    while miss(high) <= 0.0:
        low, high = high, 2.0 * high
        if high > _FARTHEST:
            raise UnusableParameter.of(
                "no-such-limits",
                "This baseline is too small: no usable limits have so small a joint false-alarm probability.",
                "joint_false_alarm_probability",
            )
    found: float = scipy.optimize.brentq(miss, low, high, xtol=1e-10, maxiter=200)
    return found
