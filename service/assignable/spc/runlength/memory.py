"""Run lengths of EWMA and CUSUM charts whose in-control mean and sigma are known.

Points are standardised: the plotted statistic (a value, or a subgroup's mean) in units of its own
in-control standard deviation, from its in-control mean. They are independent and normal with mean
``shift`` and standard deviation ``scale``. The run length N counts points up to and with the signal.

All results are by quadrature, not simulation; see :mod:`assignable.spc.runlength.quadrature`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import numpy as np
import scipy
from numpy.typing import NDArray

from assignable.spc.errors import SpcError, UnusableParameter
from assignable.spc.runlength.quadrature import Array, Ladder, StoppedChain, gauss_legendre

Sides = Literal["two", "upper", "lower"]

LEVELS = (0.05, 0.25, 0.50, 0.75, 0.95)
LONGEST_ARL = 1e15
SMALLEST_SMOOTHING = 0.005
LARGEST_LIMIT = 7.0
LARGEST_DECISION = 50.0
LARGEST_REFERENCE = 5.0
LARGEST_SHIFT = 10.0
SCALES = (0.5, 4.0)
MOST_POINTS = 1_000_000

# Two solutions on different grids must agree to this before either is returned.
_AGREEMENT = 2e-9
_STEADY_AGREEMENT = 1e-7
_GRIDS = (1.0, 1.35, 1.9, 2.7)
# Time-varying EWMA limits: order of the power series in the distance left from the asymptote. It takes
# over from stepping where its terms, which fall like (L²/2 · left)^m / m!, reach 1e-12 within that order.
_SERIES_ORDER = 14
_AT_ONCE = 32
_SERIES_FROM = (0.2, 1.8)
# One-sided EWMA: the grid ends this many standard deviations below everything the statistic does.
_FLOOR = 8.0


@dataclass(frozen=True, slots=True)
class MemoryRunLength:
    """Run length of a chart with memory.

    ``arl`` and ``sd`` are the mean and standard deviation of the number of points to a signal from
    the stated start (zero state, or the head start given); ``percentiles`` pairs a level with the
    smallest n for which P(N ≤ n) reaches it. ``steady_state_arl`` is the mean number of points from
    the moment the process changes, after a long in-control time without a signal (the conditional,
    or quasi-stationary, law of the statistic); None when two grids do not agree on it to 1e-7 (as for a
    two-sided CUSUM with a reference value near zero, which forgets its start too slowly).
    """

    arl: float
    sd: float
    percentiles: tuple[tuple[float, int], ...]
    method: str
    accuracy: str
    steady_state_arl: float | None


@dataclass(frozen=True, slots=True)
class _Moments:
    """What one grid gives: mean, standard deviation, steady-state mean (None: not asked for)."""

    arl: float
    sd: float
    steady: float | None
    nodes: int


# --- parameters ---------------------------------------------------------------------------------------


def _number(value: float, name: str, low: float, high: float, *, open_low: bool = False) -> float:
    number = float(value)
    if not (low <= number <= high) or (open_low and number == low):
        bounds = f"greater than {low:g} and at most {high:g}" if open_low else f"from {low:g} to {high:g}"
        raise UnusableParameter.of("out-of-range", f"{name} must be {bounds}; it is {number:.15g}.", name)
    return number


def _beyond_reach(name: str) -> SpcError:
    return UnusableParameter.of(
        "run-length-beyond-reach",
        "The average run length is beyond 1e15 points: in practice this chart never signals here, "
        "and no figure is given.",
        name,
    )


def _unconverged(name: str) -> SpcError:
    return UnusableParameter.of(
        "run-length-not-computed", "The run length did not settle on the finest grid allowed.", name
    )


def _checked_ewma(
    smoothing: float, limit: float, shift: float, scale: float, two_sided: bool, start: float
) -> tuple[float, float, float, float, bool, float]:
    smoothing = _number(smoothing, "smoothing", SMALLEST_SMOOTHING, 1.0)
    limit = _number(limit, "limit", 0.0, LARGEST_LIMIT, open_low=True)
    shift = _number(shift, "shift", -LARGEST_SHIFT, LARGEST_SHIFT)
    scale = _number(scale, "scale", *SCALES)
    start = float(start)
    edge = limit * math.sqrt(smoothing / (2.0 - smoothing))
    if not -edge < start < edge:
        raise UnusableParameter.of(
            "out-of-range",
            f"start must lie strictly between the control limits, −{edge:.6g} and {edge:.6g} in sigma units "
            f"of the points; it is {start:g}.",
            "start",
        )
    return smoothing, limit, shift, scale, bool(two_sided), start


def _checked_cusum(
    reference: float, decision: float, shift: float, scale: float, sides: Sides, head_start: float
) -> tuple[float, float, float, float, Sides, float]:
    reference = _number(reference, "reference", 0.0, LARGEST_REFERENCE)
    decision = _number(decision, "decision", 0.0, LARGEST_DECISION, open_low=True)
    shift = _number(shift, "shift", -LARGEST_SHIFT, LARGEST_SHIFT)
    scale = _number(scale, "scale", *SCALES)
    if sides not in ("two", "upper", "lower"):
        raise UnusableParameter.of("out-of-range", "sides must be two, upper or lower.", "sides")
    head_start = float(head_start)
    if not 0.0 <= head_start < decision:
        raise UnusableParameter.of(
            "out-of-range",
            f"head_start must be at least 0 and below the decision interval {decision:g}; it is "
            f"{head_start:g}.",
            "head_start",
        )
    if sides == "two" and head_start > 0.5 * decision + reference:
        raise UnusableParameter.of(
            "head-start-too-large",
            "With two sides, head_start must be at most half the decision interval plus the reference "
            f"value, here {0.5 * decision + reference:g}: above it the two sides can be near a signal "
            "together, and their run lengths do not combine exactly.",
            "head_start",
        )
    return reference, decision, shift, scale, sides, head_start


def _nodes(width: float) -> int:
    """Nodes for an interval ``width`` standard deviations of the transition density wide."""
    return 13 + 2 * math.ceil(0.85 * width)


def _change(old: _Moments, new: _Moments) -> float:
    return max(abs(old.arl - new.arl) / new.arl, abs(old.sd - new.sd) / max(new.sd, 1e-12))


def _agreed(old: _Moments, new: _Moments) -> float | None:
    """The steady-state mean, if the two grids agree on it."""
    if (
        old.steady is None
        or new.steady is None
        or abs(old.steady - new.steady) > _STEADY_AGREEMENT * new.steady
    ):
        return None
    return new.steady


def _words(change: float, old: _Moments, new: _Moments) -> str:
    return (
        f"Grids of {old.nodes} and {new.nodes} nodes agree to {max(change, 1e-15):.0e} (relative); the finer "
        "one is given. Percentiles are exact to the point up to two million points, beyond to about 1e-6."
    )


def _density(z: Array) -> Array:
    return np.exp(-0.5 * z * z) * (1.0 / math.sqrt(2.0 * math.pi))


# --- EWMA ---------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Ewma:
    """An EWMA chart and what happens to its points."""

    smoothing: float
    limit: float
    shift: float
    scale: float
    two_sided: bool
    start: float

    @property
    def edge(self) -> float:
        return self.limit * math.sqrt(self.smoothing / (2.0 - self.smoothing))

    @property
    def floor(self) -> float:
        """Lower end of the grid: the lower limit, or a level that is practically never reached."""
        if self.two_sided:
            return -self.edge
        spread = math.sqrt(self.smoothing / (2.0 - self.smoothing)) * max(self.scale, 1.0)
        return min(0.0, self.start, self.shift) - _FLOOR * spread

    def out_of_sight(self) -> bool:
        """One-sided only: the level lies so far below the limit that no signal is to be expected."""
        spread = math.sqrt(self.smoothing / (2.0 - self.smoothing)) * self.scale
        return not self.two_sided and self.shift < 0.0 and self.edge - self.shift > 9.0 * spread

    def nodes(self, refinement: float) -> int:
        width = (self.edge - self.floor) / (self.smoothing * self.scale)
        return math.ceil(refinement * _nodes(width)) | 1

    def row(self, at: Array, nodes: Array, weights: Array) -> Array:
        """Probabilities of moving from each of ``at`` (column) to the nodes' cells."""
        step = self.smoothing * self.scale
        centre = (1.0 - self.smoothing) * at + self.smoothing * self.shift
        return _density((nodes - centre[:, None]) / step) * (weights / step)

    def exit(self, at: Array, low: float, high: float) -> Array:
        """Probability of a signal at the next point, from each of ``at``."""
        step = self.smoothing * self.scale
        centre = (1.0 - self.smoothing) * at + self.smoothing * self.shift
        above: Array = scipy.special.ndtr((centre - high) / step)
        if self.two_sided:
            above = above + scipy.special.ndtr((low - centre) / step)
        return above


@dataclass(frozen=True, slots=True)
class _EwmaGrid:
    nodes: Array
    weights: Array


def _ewma_grid(chart: _Ewma, count: int) -> _EwmaGrid:
    """The grid with its home node first: the node nearest to where the points pull, within the limits."""
    unit, weights = gauss_legendre(count)
    half, middle = 0.5 * (chart.edge - chart.floor), 0.5 * (chart.edge + chart.floor)
    nodes = middle + half * unit
    lowest = -0.5 * chart.edge if chart.two_sided else chart.floor
    home = int(np.argmin(np.abs(nodes - min(max(chart.shift, lowest), 0.5 * chart.edge))))
    order = np.concatenate(([home], np.arange(home), np.arange(home + 1, count)))
    return _EwmaGrid(nodes[order], half * weights[order])


def _ewma_chain(chart: _Ewma, grid: _EwmaGrid) -> StoppedChain:
    return StoppedChain(
        chart.row(grid.nodes, grid.nodes, grid.weights), chart.exit(grid.nodes, chart.floor, chart.edge)
    )


def _ewma_enter(chart: _Ewma, grid: _EwmaGrid) -> tuple[Array, float]:
    at = np.array([chart.start])
    row = chart.row(at, grid.nodes, grid.weights)[0]
    return row, float(chart.exit(at, chart.floor, chart.edge)[0])


def _ewma_steady(chart: _Ewma, grid: _EwmaGrid, chain: StoppedChain) -> float:
    """Mean from the conditional in-control law, which has a grid of its own; carried over by Nyström."""
    if chart.shift == 0.0 and chart.scale == 1.0 and chart.start == 0.0:
        return float(chain.conditional_law() @ chain.mean) / chain.rate
    law, nodes = _ewma_calm(chart.smoothing, chart.limit, chart.two_sided, len(grid.nodes))
    means = chain.rate + chart.row(nodes, grid.nodes, grid.weights) @ chain.mean
    return float(law @ means) / chain.rate


@lru_cache(maxsize=64)
def _ewma_calm(smoothing: float, limit: float, two_sided: bool, about: int) -> tuple[Array, Array]:
    """Law of the EWMA in control, given no signal, and the nodes it is on (not fewer than needed)."""
    calm = _Ewma(smoothing, limit, 0.0, 1.0, two_sided, 0.0)
    grid = _ewma_grid(calm, max(calm.nodes(1.0), min(about, calm.nodes(_GRIDS[1]))))
    return _ewma_chain(calm, grid).conditional_law(), grid.nodes


def _ewma_fixed(
    chart: _Ewma, refinement: float, steady: bool = True
) -> tuple[_Moments, StoppedChain, Array, float]:
    grid = _ewma_grid(chart, chart.nodes(refinement))
    chain = _ewma_chain(chart, grid)
    row, exit_now = _ewma_enter(chart, grid)
    if chain.rate * LONGEST_ARL < 1.0:
        raise _beyond_reach("limit")
    variance = chain.variance_from(row, exit_now, chain.variances())
    moments = _Moments(
        chain.mean_from(row) / chain.rate,
        math.sqrt(variance) / chain.rate,
        _ewma_steady(chart, grid, chain) if steady else None,
        chain.size,
    )
    return moments, chain, row, exit_now


def _ewma_mean(chart: _Ewma, refinement: float = 1.15) -> float:
    """Mean run length alone, on one grid: for searches."""
    if chart.smoothing == 1.0:
        return 1.0 / _single_point(chart)
    grid = _ewma_grid(chart, chart.nodes(refinement))
    chain = _ewma_chain(chart, grid)
    if chain.rate * LONGEST_ARL < 1.0:
        raise _beyond_reach("limit")
    return chain.mean_from(_ewma_enter(chart, grid)[0]) / chain.rate


def _tail(chain: StoppedChain, moments: _Moments, home_variance: float) -> tuple[float, float]:
    """Rate and weight of the geometric tail, from means and second moments."""
    excess = 0.5 * (home_variance - 1.0 - chain.rate)
    return _geometric(chain.rate, excess, moments)


def _geometric(rate: float, excess: float, moments: _Moments) -> tuple[float, float]:
    decay = rate / (1.0 + excess + rate)
    survival = 0.5 * (moments.sd**2 + moments.arl * (moments.arl - 1.0))
    return decay, survival * decay * decay / (1.0 - decay) if decay < 1.0 else 1.0


def _single_point(chart: _Ewma) -> float:
    """Probability of a signal at any one point when nothing is remembered (λ = 1)."""
    exit_now = float(chart.exit(np.array([0.0]), -chart.limit, chart.limit)[0])
    if exit_now * LONGEST_ARL < 1.0:
        raise _beyond_reach("limit")
    return exit_now


def _memoryless(chart: _Ewma) -> MemoryRunLength:
    p = _single_point(chart)
    q_log = math.log1p(-p) if p < 1.0 else -math.inf
    percentiles = tuple((level, max(1, math.ceil(math.log1p(-level) / q_log))) for level in LEVELS)
    return MemoryRunLength(
        1.0 / p,
        math.sqrt(1.0 - p) / p,
        percentiles,
        "Geometric law: with a smoothing constant of 1 each point stands alone.",
        "Closed form, to rounding.",
        1.0 / p,
    )


@lru_cache(maxsize=1024)
def ewma(
    *,
    smoothing: float,
    limit: float,
    shift: float = 0.0,
    scale: float = 1.0,
    two_sided: bool = True,
    start: float = 0.0,
    time_varying: bool = False,
) -> MemoryRunLength:
    """Run length of an EWMA chart with known mean and sigma.

    ``smoothing``: λ, 0.005 to 1. ``limit``: L, in standard deviations of the EWMA: asymptotic ones,
    or with ``time_varying`` the exact one of each point. ``shift`` (−10 to 10) and ``scale`` (0.5 to 4)
    describe the points in sigma units of the plotted statistic. ``two_sided=False`` leaves the statistic
    as it is and lets only the upper limit signal. ``start``: the EWMA before the first point.

    Gauss–Legendre Nyström on the integral equation of the mean [crowder-1987], regenerated at one node
    so that no accuracy is lost in long run lengths; exact time-varying limits by stepping the density
    forward from limit to limit, then a power series in what is left of their distance from the asymptote.
    Raises :class:`UnusableParameter` outside the ranges above, or beyond an average of 1e15 points.
    """
    chart = _Ewma(*_checked_ewma(smoothing, limit, shift, scale, two_sided, start))
    if chart.smoothing == 1.0:
        return _memoryless(chart)
    if chart.out_of_sight():
        raise _beyond_reach("limit")
    if time_varying:
        return _ewma_growing(chart)
    old = None
    for refinement in _GRIDS:
        new, chain, row, exit_now = _ewma_fixed(chart, refinement)
        if old is not None and (change := _change(old, new)) < _AGREEMENT:
            break
        old = new
    else:
        raise _unconverged("smoothing")
    assert old is not None
    ladder = Ladder(chain.consistent_steps(), chain.exits)
    tail = _tail(chain, new, float(chain.variances()[0]))
    return MemoryRunLength(
        new.arl,
        new.sd,
        tuple(zip(LEVELS, ladder.quantiles(LEVELS, row, exit_now, tail), strict=True)),
        "Integral equation of the run length, Gauss–Legendre Nyström (Crowder 1987). Limits at the "
        "asymptotic standard deviation; steady state: conditional on no signal.",
        _words(change, old, new),
        _agreed(old, new),
    )


@lru_cache(maxsize=256)
def ewma_signalled_by(
    *,
    points: tuple[int, ...],
    smoothing: float,
    limit: float,
    shift: float = 0.0,
    scale: float = 1.0,
    two_sided: bool = True,
    start: float = 0.0,
    time_varying: bool = False,
) -> tuple[float, ...]:
    """Probability that an EWMA chart has signalled by each of ``points`` (1 to 1 000 000).

    Arguments and errors as :func:`ewma`. Sums of positive terms: small probabilities keep their digits.
    """
    chart = _Ewma(*_checked_ewma(smoothing, limit, shift, scale, two_sided, start))
    _checked_points(points)
    if chart.smoothing == 1.0:
        exit_now = float(chart.exit(np.array([0.0]), -chart.limit, chart.limit)[0])
        if exit_now >= 1.0:
            return (1.0,) * len(points)
        return tuple(-math.expm1(point * math.log1p(-exit_now)) for point in points)
    if chart.out_of_sight():
        raise _beyond_reach("limit")
    if time_varying:
        return _growing_signalled_by(chart, points)
    grid = _ewma_grid(chart, chart.nodes(_GRIDS[1]))
    chain = _ewma_chain(chart, grid)
    ladder = Ladder(chain.consistent_steps(), chain.exits)
    row, exit_now = _ewma_enter(chart, grid)
    return tuple(ladder.signalled_by(point, row, exit_now) for point in points)


def _checked_points(points: tuple[int, ...]) -> None:
    for index, point in enumerate(points):
        if not 1 <= point <= MOST_POINTS:
            raise UnusableParameter.of(
                "out-of-range",
                f"Each of points must be from 1 to {MOST_POINTS}; one is {point}.",
                "points",
                index,
            )


def ewma_work(
    *, smoothing: float, limit: float, scale: float = 1.0, two_sided: bool = True, time_varying: bool = False
) -> float:
    """About how many operations :func:`ewma` takes, and :func:`ewma_signalled_by` again: some 2e9 a second."""
    chart = _Ewma(smoothing, limit, 0.0, scale, two_sided, 0.0)
    nodes = float(chart.nodes(_GRIDS[2]))
    return nodes**2 * (40.0 / smoothing + 1600.0) if time_varying else 3.0 * nodes**3


def cusum_work(*, reference: float, decision: float, scale: float = 1.0) -> float:
    """The same of :func:`cusum` and :func:`cusum_signalled_by`."""
    return 6.0 * (_GRIDS[2] * _nodes(decision / scale)) ** 3


# --- EWMA with exact time-varying limits -----------------------------------------------------------------


class _Growing:
    """One grid's account of an EWMA chart whose limits widen with the exact variance.

    ``left`` is ``(1 − λ)^(2t)``, the relative distance of the variance from its asymptote. Grids keep
    their place relative to the limits, ``x = middle + half · u``.
    """

    __slots__ = ("chart", "law", "left", "series", "signals", "unit", "weights")

    def __init__(self, chart: _Ewma, refinement: float) -> None:
        self.chart = chart
        self.unit, self.weights = gauss_legendre(chart.nodes(refinement))
        keep = (1.0 - chart.smoothing) ** 2
        most, scaled = _SERIES_FROM
        last = min(most, scaled / chart.limit**2)
        self.left = keep
        high, nodes, weights = self._grid(keep, last)
        at = np.array([chart.start])
        self.law = chart.row(at, nodes, weights)[0]
        self.signals = [float(chart.exit(at, self._low(high), high)[0])]
        alive = 1.0 - self.signals[0]
        while self.left > last and alive > 1e-18:
            self.left *= keep
            before = nodes
            high, nodes, weights = self._grid(self.left, last)
            self.signals.append(float(self.law @ chart.exit(before, self._low(high), high)))
            self.law = self.law @ chart.row(before, nodes, weights)
            alive = float(self.law.sum())
        self.series = self._kernel_series() if alive > 1e-18 else None

    def _low(self, high: float) -> float:
        return -high if self.chart.two_sided else self.chart.floor

    def _grid(self, left: float, last: float = 1.0) -> tuple[float, Array, Array]:
        """Upper limit, nodes and weights; while ``left`` is above ``last``, only as many as the width asks for."""
        high = self.chart.edge * math.sqrt(1.0 - left)
        low = self._low(high)
        unit, weights = self.unit, self.weights
        if left > last:
            share = (high - low) / (self.chart.edge - self.chart.floor)
            unit, weights = gauss_legendre(min(len(unit), 24 + 8 * math.ceil(share * len(unit) / 8.0)))
        return high, 0.5 * (high + low) + 0.5 * (high - low) * unit, 0.5 * (high - low) * weights

    def _kernel_series(self) -> Array:
        """Taylor coefficients, in the distance left, of the step from one limit's grid to the next's."""
        chart, order = self.chart, _SERIES_ORDER
        keep = 1.0 - chart.smoothing
        powers = np.arange(order)
        root = scipy.special.binom(0.5, powers) * (-1.0) ** powers
        high = chart.edge * root
        if chart.two_sided:
            middle, half = np.zeros(order), high
        else:
            floor = np.zeros(order)
            floor[0] = chart.floor
            middle, half = 0.5 * (high + floor), 0.5 * (high - floor)
        next_middle, next_half = middle * keep ** (2 * powers), half * keep ** (2 * powers)
        step = chart.smoothing * chart.scale
        level = (next_middle - keep * middle) / step
        level[0] -= chart.shift / chart.scale
        z = (
            level[:, None, None]
            + (next_half / step)[:, None, None] * self.unit
            - (keep * half / step)[:, None, None] * self.unit[:, None]
        )
        exponent: Array = np.empty_like(z)
        for m in range(order):
            exponent[m] = -0.5 * np.einsum("kij,kij->ij", z[: m + 1], z[m::-1])
        del z  # these arrays are the peak of the memory used
        shape = np.empty_like(exponent)
        shape[0] = np.exp(exponent[0])
        for m in range(1, order):
            scaled = exponent[1 : m + 1] * powers[1 : m + 1, None, None]
            shape[m] = np.einsum("kij,kij->ij", scaled, shape[m - 1 :: -1][:m]) / m
        width = next_half / (step * math.sqrt(2.0 * math.pi))
        del exponent
        kernel: Array = np.empty_like(shape)
        for m in range(order):
            kernel[m] = np.einsum("k,kij->ij", width[: m + 1], shape[m::-1]) * self.weights
        return kernel

    def moments(self, chain: StoppedChain, order: NDArray[np.intp], steady: float | None) -> _Moments:
        """Mean and standard deviation from the steps taken and the series for what follows.

        ``chain`` is the chart at its asymptotic limits, on this grid in the order ``order``.
        """
        pmf = np.array(self.signals)
        n = np.arange(1, len(pmf) + 1)
        alive = 0.0
        if self.series is None:
            mean_left = square_left = 0.0
        else:
            alive = float(self.law.sum())
            mean, pairs = self._mean_series(chain, order)
            mean_left = float(self.law @ mean)
            square_left = float(self.law @ (2.0 * pairs - mean))
        taken = len(pmf)
        arl = float(pmf @ n) + alive * taken + mean_left
        about = taken - arl
        variance = float(pmf @ np.square(n - arl)) + square_left + 2.0 * about * mean_left + alive * about**2
        return _Moments(arl, math.sqrt(max(variance, 0.0)), steady, len(self.unit))

    def mean(self, chain: StoppedChain, order: NDArray[np.intp]) -> float:
        """Mean run length alone."""
        pmf = np.array(self.signals)
        arl = float(pmf @ np.arange(1, len(pmf) + 1))
        if self.series is None:
            return arl
        means = self._series(chain.mean / chain.rate, order, np.zeros((_SERIES_ORDER, len(self.unit))))
        return arl + len(pmf) * float(self.law.sum()) + float(self.law @ self._here(means))

    def _mean_series(self, chain: StoppedChain, order: NDArray[np.intp]) -> tuple[Array, Array]:
        """E[N] and E[N(N+1)/2] of what is left, from each node, at the distance reached."""
        first = chain.mean / chain.rate
        second = 0.5 * ((chain.variances() + np.square(chain.mean)) / chain.rate**2 + first)
        means = self._series(first, order, np.zeros((_SERIES_ORDER, len(self.unit))))
        return self._here(means), self._here(self._series(second, order, means))

    def _series(self, settled: Array, order: NDArray[np.intp], source: Array) -> Array:
        """Coefficients, in the distance left, of ``v(left) = source(left) + step(left) v(left q)``."""
        kernel, q = self.series, (1.0 - self.chart.smoothing) ** 2
        assert kernel is not None
        values: Array = np.empty_like(source)
        values[0, order] = settled
        factors = q ** np.arange(_SERIES_ORDER)
        for m in range(1, _SERIES_ORDER):
            earlier = (factors[:m, None] * values[:m])[::-1]
            right = np.matmul(kernel[1 : m + 1], earlier[:, :, None]).sum(axis=0)[:, 0] + source[m]
            system = -factors[m] * kernel[0]
            system[np.diag_indices(len(right))] += 1.0
            values[m] = np.linalg.solve(system, right)
        return values

    def _here(self, coefficients: Array) -> Array:
        here: Array = self.left ** np.arange(_SERIES_ORDER) @ coefficients
        return here

    def settle(self, most: int) -> None:
        """Step on by the series until the limits have settled, or ``most`` points are reached."""
        if self.series is None:
            return
        chart, q = self.chart, (1.0 - self.chart.smoothing) ** 2
        while self.left > 1e-13 and len(self.signals) < most:
            terms = min(_SERIES_ORDER, 2 + math.ceil(32.0 / -math.log(self.left)))
            law = self.left ** np.arange(terms) @ (self.law @ self.series[:terms])
            before = self._grid(self.left)[1]
            self.left *= q
            high = chart.edge * math.sqrt(1.0 - self.left)
            self.signals.append(float(self.law @ chart.exit(before, self._low(high), high)))
            self.law = law
            if float(law.sum()) < 1e-18:
                break


def _growing_parts(chart: _Ewma, growing: _Growing) -> tuple[StoppedChain, NDArray[np.intp], _EwmaGrid]:
    """The chart at its settled limits, the place of each of its states on the growing grid, its grid."""
    grid = _ewma_grid(chart, len(growing.unit))
    where = np.argsort(np.argsort(grid.nodes))
    return _ewma_chain(chart, grid), where, grid


def _ewma_growing_mean(chart: _Ewma, refinement: float = 1.15) -> float:
    """Mean run length alone with time-varying limits, on one grid: for searches."""
    if chart.smoothing == 1.0:
        return 1.0 / _single_point(chart)
    growing = _Growing(chart, refinement)
    chain, where, _ = _growing_parts(chart, growing)
    if chain.rate * LONGEST_ARL < 1.0:
        raise _beyond_reach("limit")
    return growing.mean(chain, where)


def _ewma_growing(chart: _Ewma) -> MemoryRunLength:
    old = None
    for refinement in _GRIDS[:3]:
        growing = _Growing(chart, refinement)
        chain, where, grid = _growing_parts(chart, growing)
        if chain.rate * LONGEST_ARL < 1.0:
            raise _beyond_reach("limit")
        new = growing.moments(chain, where, _ewma_steady(chart, grid, chain))
        if old is not None and (change := _change(old, new)) < _AGREEMENT:
            break
        old = new
    else:
        raise _unconverged("smoothing")
    assert old is not None
    growing.settle(MOST_POINTS)
    reached = np.cumsum(growing.signals)
    quick = np.searchsorted(reached, LEVELS)
    late = tuple(level for level, n in zip(LEVELS, quick, strict=True) if n == len(reached))
    found = [int(n) + 1 for n in quick if n < len(reached)]
    if late:
        ladder = Ladder(chain.consistent_steps(), chain.exits)
        home = float(chain.variances()[0])
        tail = _tail(chain, new, home)
        law = growing.law[where]
        exit_now = float(reached[-1]) + float(law @ chain.exits)
        # Time starts again after the points taken: the tail's weight moves with it.
        rate, weight = tail
        later = (rate, weight * math.exp(len(reached) * math.log1p(-rate))) if rate < 1.0 else tail
        found += [len(reached) + n for n in ladder.quantiles(late, law @ chain.steps, exit_now, later)]
    return MemoryRunLength(
        new.arl,
        new.sd,
        tuple(zip(LEVELS, found, strict=True)),
        "Density of the EWMA stepped from limit to limit (exact variance of each point), then a power series "
        "to the asymptotic limits, on Gauss–Legendre grids (after Crowder 1987). Steady state: conditional "
        "on no signal, limits settled.",
        _words(change, old, new),
        _agreed(old, new),
    )


def _growing_signalled_by(chart: _Ewma, points: tuple[int, ...]) -> tuple[float, ...]:
    growing = _Growing(chart, _GRIDS[1])
    growing.settle(max(points, default=1))
    reached = np.cumsum(growing.signals)
    if max(points, default=1) <= len(reached) or growing.series is None:
        return tuple(float(reached[min(point, len(reached)) - 1]) for point in points)
    chain, where, _ = _growing_parts(chart, growing)
    ladder = Ladder(chain.consistent_steps(), chain.exits)
    law = growing.law[where]
    row, exit_now = law @ chain.steps, float(reached[-1]) + float(law @ chain.exits)
    taken = len(reached)
    return tuple(
        float(reached[point - 1]) if point <= taken else ladder.signalled_by(point - taken, row, exit_now)
        for point in points
    )


# --- CUSUM --------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Side:
    """One side of a CUSUM on one grid: state 0 is the atom at zero, the rest the nodes in (0, h)."""

    reference: float
    decision: float
    shift: float
    scale: float
    nodes: Array
    weights: Array
    chain: StoppedChain

    def enter(self, head_start: float) -> tuple[Array, float]:
        """The first step from a head start: its row, and the probability that it signals."""
        at = np.array([head_start])
        rows, exits = _side_rows(
            at, self.reference, self.decision, self.shift, self.scale, self.nodes, self.weights
        )
        return rows[0], float(exits[0])


def _side_rows(
    at: Array, reference: float, decision: float, shift: float, scale: float, nodes: Array, weights: Array
) -> tuple[Array, Array]:
    drift = at + (shift - reference)
    steps = np.empty((len(at), len(nodes) + 1))
    steps[:, 0] = scipy.special.ndtr(-drift / scale)
    steps[:, 1:] = _density((nodes - drift[:, None]) / scale) * (weights / scale)
    return steps, scipy.special.ndtr((drift - decision) / scale)


@lru_cache(maxsize=16)
def _side(reference: float, decision: float, shift: float, scale: float, count: int) -> _Side:
    unit, weights = gauss_legendre(count)
    nodes, weights = 0.5 * decision * (1.0 + unit), 0.5 * decision * weights
    at = np.concatenate(([0.0], nodes))
    chain = StoppedChain(*_side_rows(at, reference, decision, shift, scale, nodes, weights))
    return _Side(reference, decision, shift, scale, nodes, weights, chain)


def _side_count(decision: float, scale: float, refinement: float) -> int:
    return math.ceil(refinement * _nodes(decision / min(scale, 1.0)))


@lru_cache(maxsize=64)
def _calm_law(reference: float, decision: float, count: int, two: bool) -> Array:
    """Law of one side in control, given no signal (of either side, when there are two)."""
    return _side(reference, decision, 0.0, 1.0, count).chain.conditional_law(opposed=two)


def _one_side(
    k: float, h: float, shift: float, scale: float, head_start: float, refinement: float
) -> tuple[_Moments, _Side]:
    count = _side_count(h, scale, refinement)
    side = _side(k, h, shift, scale, count)
    chain = side.chain
    if chain.rate * LONGEST_ARL < 1.0:
        raise _beyond_reach("decision")
    row, exit_now = side.enter(head_start)
    variance = chain.variance_from(row, exit_now, chain.variances())
    steady = float(_calm_law(k, h, count, False) @ chain.mean) / chain.rate
    return (
        _Moments(chain.mean_from(row) / chain.rate, math.sqrt(variance) / chain.rate, steady, chain.size),
        side,
    )


def _both_sides(
    k: float, h: float, shift: float, scale: float, head_start: float, refinement: float
) -> tuple[_Moments, _Side, _Side, float, float]:
    """Two sides at once; also the rate and excess of the pair's survival sum (for its tail).

    When one side signals the other is at zero, so the run lengths of the two sides decide that of the
    pair. With G(z) = Σ zⁿ P(N > n): 1/G = 1/G₊ + 1/G₋ − (1 − z) from zero, and from a head start
    G·(G₊ₛ/G₊ + G₋ₛ/G₋ − 1). The mean's part is [van-dobben-de-bruyn-1968] and [lucas-crosier-1982]; the
    coefficients of 1 − z give the second moments, in terms that stay small on an idle side.
    """
    count = _side_count(h, scale, refinement)
    upper, lower = _side(k, h, shift, scale, count), _side(k, h, -shift, scale, count)
    rate = upper.chain.rate + lower.chain.rate
    if rate * LONGEST_ARL < 1.0:
        raise _beyond_reach("decision")
    zero = 1.0 / rate
    shares, excesses, lags = [], [], []
    for side in (upper, lower):
        chain = side.chain
        lag, excess = chain.lags(float(chain.variances()[0]))
        excesses.append(excess)
        if head_start > 0.0:
            row, exit_now = side.enter(head_start)
            short_now = exit_now + float(row @ chain.short) - chain.rate
            shares.append(short_now)
            lags.append(float(row @ lag) + excess + chain.rate + short_now)
    excess = sum(excesses)
    law = _calm_law(k, h, count, True)
    steady = zero * float(law @ (upper.chain.mean + lower.chain.mean) - law.sum())
    if head_start > 0.0:
        ratio = 1.0 - sum(shares)
        arl = zero * ratio
        survival = zero**2 * (1.0 + excess) * ratio - zero * sum(lags)
        variance = arl + 2.0 * survival - arl**2
    else:
        arl = zero
        variance = zero**2 * (1.0 + 2.0 * excess) + zero
    sd = math.sqrt(max(variance, 0.0))
    if sd < 0.03 * arl or arl < 1.5:
        arl, sd = _short_pair(upper, lower, head_start)
    return _Moments(arl, sd, steady, upper.chain.size), upper, lower, rate, excess


def _pair_start(upper: _Side, lower: _Side, head_start: float) -> tuple[Array, Array, float, float]:
    """Laws of the two sides after the first point, on no signal, and the chances of either's signal."""
    up, up_exit = upper.enter(head_start)
    low, low_exit = lower.enter(head_start)
    up[0] -= low_exit
    low[0] -= up_exit
    return up, low, up_exit, low_exit


def _short_pair(upper: _Side, lower: _Side, head_start: float) -> tuple[float, float]:
    """Mean and standard deviation summed point by point: for laws much narrower than their mean."""
    up, low, up_exit, low_exit = _pair_start(upper, lower, head_start)
    size = len(up)
    one = np.zeros((2 * size, 2 * size))
    one[:size, :size], one[size:, size:] = upper.chain.steps, lower.chain.steps
    one[:size, size] -= upper.chain.exits
    one[size:, 0] -= lower.chain.exits
    # So many points at a time: a step by itself costs little more than the call.
    exits = [np.concatenate((upper.chain.exits, lower.chain.exits))]
    many = one
    for _ in range(_AT_ONCE - 1):
        exits.append(one @ exits[-1])
        many = many @ one
    told = np.column_stack(exits)
    state = np.concatenate((up, low))
    pmf = [np.array((up_exit + low_exit,))]
    while float(state[:size].sum()) > 1e-18 and len(pmf) * _AT_ONCE < 20_000:
        pmf.append(state @ told)
        state = state @ many
    law = np.concatenate(pmf)
    n = np.arange(1, len(law) + 1)
    arl = 1.0 + float(law @ (n - 1))
    return arl, math.sqrt(float(law @ np.square(n - arl)))


def _pair_ladder(upper: _Side, lower: _Side, head_start: float) -> tuple[Ladder, Array, float]:
    """The pair as one linear recursion: each side's law on no signal of either, side by side.

    A signal of one side takes its mass from zero in the other's law, where that side then is.
    """
    up, low, up_exit, low_exit = _pair_start(upper, lower, head_start)
    size = upper.chain.size
    if upper is lower:
        steps = upper.chain.consistent_steps()
        steps[:, 0] -= lower.chain.exits
        return Ladder(steps, 2.0 * upper.chain.exits), up, up_exit + low_exit
    steps = np.zeros((2 * size, 2 * size))
    steps[:size, :size] = upper.chain.consistent_steps()
    steps[size:, size:] = lower.chain.consistent_steps()
    steps[:size, size] = -upper.chain.exits
    steps[size:, 0] = -lower.chain.exits
    exits = np.concatenate((upper.chain.exits, lower.chain.exits))
    return Ladder(steps, exits), np.concatenate((up, low)), up_exit + low_exit


@lru_cache(maxsize=1024)
def cusum(
    *,
    reference: float,
    decision: float,
    shift: float = 0.0,
    scale: float = 1.0,
    sides: Sides = "two",
    head_start: float = 0.0,
) -> MemoryRunLength:
    """Run length of a tabular CUSUM chart with known mean and sigma.

    ``reference`` (k, 0 to 5), ``decision`` (h, up to 50) and ``head_start`` (0 ≤ s < h; with two sides
    s ≤ h/2 + k) in sigma units of the plotted statistic; ``shift`` (−10 to 10) and ``scale`` (0.5 to 4)
    describe its points. A signal is a side above h.

    One side: Nyström with an atom at zero ([vance-1986]; [page-1954] for the equation). Two sides: since
    with equal k ≥ 0 and equal h one side is at zero whenever the other signals (a head start up to
    h/2 + k included), the law of the pair follows exactly from the laws of the sides
    ([van-dobben-de-bruyn-1968], [lucas-crosier-1982], [siegmund-1985]); here for its second moment and
    percentiles as well as its mean. Steady state: conditional on no signal of either side.
    Raises :class:`UnusableParameter` outside these ranges, or beyond an average of 1e15 points.
    """
    k, h, shift, scale, sides, head_start = _checked_cusum(
        reference, decision, shift, scale, sides, head_start
    )
    toward = -shift if sides == "lower" else shift
    old = None
    for refinement in _GRIDS:
        if sides == "two":
            new, upper, lower, rate, excess = _both_sides(k, h, shift, scale, head_start, refinement)
        else:
            new, upper = _one_side(k, h, toward, scale, head_start, refinement)
        if old is not None and (change := _change(old, new)) < _AGREEMENT:
            break
        old = new
    else:
        raise _unconverged("decision")
    assert old is not None
    if sides == "two":
        ladder, row, exit_now = _pair_ladder(upper, lower, head_start)
        tail = _geometric(rate, excess, new)
    else:
        ladder, row, exit_now = _one_ladder(upper, head_start)
        tail = _tail(upper.chain, new, float(upper.chain.variances()[0]))
    both = " Both sides: exact combination of the sides' laws." if sides == "two" else ""
    return MemoryRunLength(
        new.arl,
        new.sd,
        tuple(zip(LEVELS, ladder.quantiles(LEVELS, row, exit_now, tail), strict=True)),
        "Integral equation of the run length with an atom at zero, Gauss–Legendre Nyström (Page 1954; Vance "
        f"1986).{both} Steady state: conditional on no signal.",
        _words(change, old, new),
        _agreed(old, new),
    )


def _one_ladder(side: _Side, head_start: float) -> tuple[Ladder, Array, float]:
    row, exit_now = side.enter(head_start)
    return Ladder(side.chain.consistent_steps(), side.chain.exits), row, exit_now


@lru_cache(maxsize=256)
def cusum_signalled_by(
    *,
    points: tuple[int, ...],
    reference: float,
    decision: float,
    shift: float = 0.0,
    scale: float = 1.0,
    sides: Sides = "two",
    head_start: float = 0.0,
) -> tuple[float, ...]:
    """Probability that a CUSUM chart has signalled by each of ``points`` (1 to 1 000 000).

    Arguments and errors as :func:`cusum`.
    """
    k, h, shift, scale, sides, head_start = _checked_cusum(
        reference, decision, shift, scale, sides, head_start
    )
    _checked_points(points)
    count = _side_count(h, scale, _GRIDS[1])
    if sides == "two":
        upper, lower = _side(k, h, shift, scale, count), _side(k, h, -shift, scale, count)
        ladder, row, exit_now = _pair_ladder(upper, lower, head_start)
    else:
        toward = -shift if sides == "lower" else shift
        ladder, row, exit_now = _one_ladder(_side(k, h, toward, scale, count), head_start)
    return tuple(ladder.signalled_by(point, row, exit_now) for point in points)


def _cusum_mean(
    k: float, h: float, shift: float, sides: Sides, head_start: float, refinement: float = 1.15
) -> float:
    """Mean run length alone, on one grid: for searches."""
    count = _side_count(h, 1.0, refinement)
    upper = _side(k, h, -shift if sides == "lower" else shift, 1.0, count)
    rate = upper.chain.rate
    ratio = upper.chain.mean_from(upper.enter(head_start)[0])
    if sides == "two":
        lower = _side(k, h, -shift, 1.0, count)
        rate += lower.chain.rate
        ratio += lower.chain.mean_from(lower.enter(head_start)[0]) - 1.0
    if rate * LONGEST_ARL < 1.0:
        raise _beyond_reach("decision")
    return ratio / rate


def _steady_ewma_mean(chart: _Ewma, refinement: float = 1.15) -> float:
    """Steady-state mean run length alone, on one grid: for searches."""
    if chart.smoothing == 1.0:
        return 1.0 / _single_point(chart)
    grid = _ewma_grid(chart, chart.nodes(refinement))
    chain = _ewma_chain(chart, grid)
    if chain.rate * LONGEST_ARL < 1.0:
        raise _beyond_reach("limit")
    return _ewma_steady(chart, grid, chain)


def _steady_cusum_mean(k: float, h: float, shift: float, sides: Sides, refinement: float = 1.15) -> float:
    """Steady-state mean run length alone, on one grid: for searches."""
    count = _side_count(h, 1.0, refinement)
    upper = _side(k, h, -shift if sides == "lower" else shift, 1.0, count).chain
    law = _calm_law(k, h, count, sides == "two")
    rate, ratio = upper.rate, float(law @ upper.mean)
    if sides == "two":
        lower = _side(k, h, -shift, 1.0, count).chain
        rate += lower.rate
        ratio += float(law @ lower.mean) - float(law.sum())
    if rate * LONGEST_ARL < 1.0:
        raise _beyond_reach("decision")
    return ratio / rate
