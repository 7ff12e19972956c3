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
from .survival import RunLength, follow

LONGEST_SPAN = 4
"""Beyond it the grid has too many dimensions; see :func:`bounds`."""

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


def _step(sums: Floats, shift: float, edge: float, points: int, count: int) -> tuple[Floats, Floats]:
    """Weights of the next point on the nodes, and the chance of a signal, after ``sums`` of the others.

    edge: of the sum of ``points`` points, each of mean ``shift``; sums: of the others' noise.
    """
    _, integral = _antiderivatives(count)
    low, high = -edge - points * shift - sums, edge - points * shift - sums
    degree = np.arange(len(integral))

    def up_to(end: Floats) -> Floats:
        angle = np.arccos(np.clip(end / _REACH, -1.0, 1.0))
        reached: Floats = np.cos(angle[..., None] * degree) @ integral
        return reached

    return up_to(high) - up_to(low), scipy.special.ndtr(low) + scipy.special.ndtr(-high)


@lru_cache(maxsize=1024)
def moving_average(*, span: int, limit: float, shift: float = 0.0) -> RunLength:
    """The run length of a moving average of the last ``span`` points, 2 to 4, with known mean and sigma.

    limit: in standard deviations of each average; while fewer than ``span`` points are there, of the average
    of those. shift: of all points from the first on, in their own standard deviations, -10 to 10.
    Raises UnusableParameter ``out-of-range``; ``never-signals`` and ``not-settled`` as ``follow`` does.
    """
    if not 2 <= span <= LONGEST_SPAN:
        raise UnusableParameter.of(
            "out-of-range",
            f"The run length is computed for spans of 2 to {LONGEST_SPAN}, not {span}.",
            "span",
        )
    if not (0.0 < limit <= 10.0 and abs(shift) <= 10.0):
        raise UnusableParameter.of(
            "out-of-range",
            "The limit must be above 0 and at most 10, and the shift -10 to 10.",
            "sigma_multiple",
        )
    count = _NODES[span]
    nodes, _ = _antiderivatives(count)
    measure, sums = np.array(1.0), np.array(0.0)
    filled = 0
    settled: tuple[Floats, Floats] | None = None

    def advance() -> tuple[float, float]:
        nonlocal measure, sums, filled, settled
        if filled < span - 1:
            weights, exits = _step(sums, shift, limit * math.sqrt(filled + 1), filled + 1, count)
            signal = float((measure * exits).sum())
            measure = measure[..., None] * weights
            sums = sums[..., None] + nodes
            filled += 1
        else:
            if settled is None:
                settled = _step(sums, shift, limit * math.sqrt(span), span, count)
            weights, exits = settled
            signal = float((measure * exits).sum())
            measure = np.einsum("a...,a...j->...j", measure, weights)
        return signal, float(measure.sum())

    return follow(
        advance,
        memory=span,
        work=count**span,
        method="Survivors followed on a spectral grid of the window's points, then the geometric tail.",
        accuracy=_ACCURACY[span],
    ).run_length()


def bounds(span: int, limit: float) -> tuple[float, float]:
    """Between what the in-control average run length of any span lies.

    Not below that of independent points [sidak-1967]; not above ``span`` times it, since averages ``span``
    points apart are independent, and the chart signals no later than they do.
    """
    beyond = 2.0 * float(scipy.special.ndtr(-limit))
    return 1.0 / beyond, span / beyond
