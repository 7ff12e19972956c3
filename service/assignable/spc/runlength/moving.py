"""The run length of a moving average, whose state is the points of its window but the oldest.

The survivors are followed as a measure on a grid of one dimension for each of those points. The limits
cut the next point off where the window's sum does, so a step integrates the normal density times each
interpolating polynomial exactly up to that cut: from one antiderivative a node, as a Chebyshev series. What
is integrated is smooth, so the error falls faster than any power of the nodes.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
import scipy
from numpy.polynomial import chebyshev

from ..data import Floats
from ..errors import UnusableParameter
from .survival import Decay, RunLength, follow, settle

LONGEST_SPAN = 4
"""Beyond it the grid has too many dimensions; see :func:`bounds`."""

SMALLEST_SCALE = 0.5
"""Below it the grid of the points held is too coarse for the points to come."""

_REACH = 7.5
_NODES = {2: 56, 3: 40, 4: 24}
_ACCURACY = {2: "relative 1e-10", 3: "relative 1e-8", 4: "relative 1e-5"}


@lru_cache(maxsize=8)
def _antiderivatives(count: int) -> tuple[Floats, Floats]:
    """Chebyshev nodes on the reach, and a column of series for each: ``∫ φ ℓⱼ`` from the left end."""
    unit = np.cos(np.pi * (np.arange(count) + 0.5) / count)
    fine = 2 * count + 120
    at = np.cos(np.pi * (np.arange(fine) + 0.5) / fine)
    halved = np.ones(count)
    halved[0] = 0.5
    # Each ℓⱼ at the fine nodes, by the discrete orthogonality of Chebyshev polynomials.
    degree = np.arange(count)
    basis = np.cos(np.outer(np.arccos(at), degree)) @ (
        halved[:, None] * (2.0 / count) * np.cos(np.outer(degree, np.arccos(unit)))
    )
    density = np.exp(-0.5 * (_REACH * at) ** 2) * (_REACH / math.sqrt(2.0 * math.pi))
    high = np.arange(fine)
    series = (2.0 / fine) * np.cos(np.outer(high, np.arccos(at))) @ (density[:, None] * basis)
    series[0] *= 0.5
    integral = chebyshev.chebint(series, lbnd=-1)
    large = np.abs(integral).max(axis=1) > 1e-17
    integral = np.ascontiguousarray(integral[: int(np.flatnonzero(large)[-1]) + 1])
    return unit * _REACH, integral


def _step(low: Floats, high: Floats, count: int) -> tuple[Floats, Floats]:
    """Weights of the next point's noise on the nodes, and the chance of a signal: it signals outside (low, high)."""
    _, integral = _antiderivatives(count)
    degree = np.arange(len(integral))

    def up_to(end: Floats) -> Floats:
        angle = np.arccos(np.clip(end / _REACH, -1.0, 1.0))
        reached: Floats = np.cos(angle[..., None] * degree) @ integral
        return reached

    return up_to(high) - up_to(low), scipy.special.ndtr(low) + scipy.special.ndtr(-high)


class _Walk:
    """The survivors' measure over the noise of the points held, point by point."""

    __slots__ = ("_held", "_limit", "_next", "_settled", "_span", "measure")

    def __init__(
        self, span: int, limit: float, shift: float, scale: float, measure: Floats | None = None
    ) -> None:
        self._span, self._limit, self._next = span, limit, (shift, scale)
        # Of each point held, the oldest first: its mean and its standard deviation.
        self._held: list[tuple[float, float]] = [] if measure is None else [(0.0, 1.0)] * (span - 1)
        self.measure: Floats = np.array(1.0) if measure is None else measure
        self._settled: tuple[Floats, Floats] | None = None

    def __call__(self) -> tuple[float, float]:
        full = len(self._held) == self._span - 1
        alike = full and all(one == self._next for one in self._held)
        found = self._settled if alike else None
        if found is None:
            found = self._weights()
            if alike:
                self._settled = found
        weights, exits = found
        signal = float((self.measure * exits).sum())
        if full:
            self.measure = np.einsum("a...,a...j->...j", self.measure, weights)
            self._held = [*self._held[1:], self._next]
        else:
            self.measure = self.measure[..., None] * weights
            self._held.append(self._next)
        return signal, float(self.measure.sum())

    def _weights(self) -> tuple[Floats, Floats]:
        count = _NODES[self._span]
        nodes, _ = _antiderivatives(count)
        sums = np.array(self._next[0])
        for shift, scale in self._held:
            sums = sums[..., None] + (shift + scale * nodes)
        edge = self._limit * math.sqrt(len(self._held) + 1)
        scale = self._next[1]
        return _step((-edge - sums) / scale, (edge - sums) / scale, count)


def _follow(walk: _Walk, span: int) -> Decay:
    return follow(
        walk,
        memory=span,
        work=_NODES[span] ** span,
        method="Survivors followed on a spectral grid of the window's points, then the geometric tail.",
        accuracy=_ACCURACY[span],
    )


def _check(span: int, limit: float, shift: float, scale: float) -> None:
    if not 2 <= span <= LONGEST_SPAN:
        raise UnusableParameter.of(
            "out-of-range",
            f"The run length is computed for spans of 2 to {LONGEST_SPAN}, not {span}.",
            "span",
        )
    if not 0.0 < limit <= 10.0:
        raise UnusableParameter.of(
            "out-of-range", "The limit must be above 0 and at most 10.", "sigma_multiple"
        )
    if not abs(shift) <= 10.0:
        raise UnusableParameter.of("out-of-range", "The shift must be -10 to 10.", "shift")
    if not SMALLEST_SCALE <= scale <= 10.0:
        raise UnusableParameter.of("out-of-range", f"The scale must be {SMALLEST_SCALE:g} to 10.", "scale")


@lru_cache(maxsize=64)
def moving_average_law(*, span: int, limit: float, shift: float = 0.0, scale: float = 1.0) -> Decay:
    """The law of the run length of a moving average of the last ``span`` points, 2 to 4, mean and sigma known.

    limit: in standard deviations of each average; while fewer than ``span`` points are there, of the average
    of those. shift: of all points from the first on, in sigma, -10 to 10; scale: their standard deviation
    over sigma, 0.5 to 10.
    Raises UnusableParameter ``out-of-range``; ``never-signals`` and ``not-settled`` as ``follow`` does.
    """
    _check(span, limit, shift, scale)
    return _follow(_Walk(span, limit, shift, scale), span)


@lru_cache(maxsize=1024)
def moving_average(*, span: int, limit: float, shift: float = 0.0, scale: float = 1.0) -> RunLength:
    """The run length of a moving average: that of :func:`moving_average_law`, whose arguments it takes."""
    return moving_average_law(span=span, limit=limit, shift=shift, scale=scale).run_length()


@lru_cache(maxsize=8)
def _calm(span: int, limit: float) -> Floats | None:
    walk = _Walk(span, limit, 0.0, 1.0)

    def state() -> Floats:
        return walk.measure

    for _ in range(span):
        walk()
    return settle(walk, state, work=_NODES[span] ** span)


@lru_cache(maxsize=1024)
def steady_state_arl(*, span: int, limit: float, shift: float = 0.0, scale: float = 1.0) -> float | None:
    """Mean points from a shift to the signal, after long operation in control without a signal.

    The window then holds points from before and after the shift. None where the law of the points held does
    not settle within the steps allowed. Arguments and errors as for :func:`moving_average_law`.
    """
    _check(span, limit, shift, scale)
    start = _calm(span, limit)
    if start is None:
        return None
    return _follow(_Walk(span, limit, shift, scale, start), span).run_length().arl


def bounds(span: int, limit: float) -> tuple[float, float]:
    """Between what the in-control average run length of any span lies.

    Not below that of independent points [sidak-1967]; not above ``span`` times it, since averages ``span``
    points apart are independent, and the chart signals no later than they do.
    """
    beyond = 2.0 * float(scipy.special.ndtr(-limit))
    return 1.0 / beyond, span / beyond
