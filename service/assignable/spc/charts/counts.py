"""Binomial and Poisson counts: their tails, and the lines of a panel that plots them."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import scipy

from ..data import Booleans, Floats
from .common import LimitBasis
from .lattice import WholeLaw


@dataclass(frozen=True, slots=True, eq=False)
class CountLines:
    """Lines of a count, one entry a sample size: (k,) each. Limits hold the natural bound where none is."""

    centre: Floats
    sd: Floats
    lower: Floats
    upper: Floats


def count_lines(binomial: bool, mean: float, sizes: Floats, basis: LimitBasis) -> CountLines:
    """Lines of the count in samples of ``sizes`` (k,), in counts.

    ``sigma``: mean ± multiple · standard deviation, clipped to what is possible. ``probability``: the
    upper limit is the smallest count that is exceeded with at most half the false-alarm probability, the
    lower one the largest count that is undercut with at most half of it; a count on a limit is within.
    A lower limit that is not above 0, and an upper one that nothing can exceed, does not exist.

    Source: [iso-7870-2]; exact tails by the incomplete beta and gamma functions.
    """
    centre = mean * sizes
    sd = np.sqrt(centre * (1.0 - mean)) if binomial else np.sqrt(centre)
    ceiling = sizes if binomial else np.full(sizes.shape, np.inf)
    if basis.sigma_multiple is not None:
        lower, upper = centre - basis.sigma_multiple * sd, centre + basis.sigma_multiple * sd
    else:
        lower = _largest_undercut(binomial, mean, sizes, basis.tail)
        upper = _smallest_exceeded(binomial, mean, sizes, basis.tail)
    return CountLines(centre, sd, np.maximum(lower, 0.0), np.minimum(upper, ceiling))


def count_sf(binomial: bool, count: Floats, mean: float, sizes: Floats) -> Floats:
    """P(X > count) of whole counts ≥ 0, (k,)."""
    if not binomial:
        return scipy.special.gammainc(count + 1.0, mean * sizes)
    room = np.maximum(sizes - count, 0.5)
    return np.where(count >= sizes, 0.0, scipy.special.betainc(count + 1.0, room, mean))


def count_cdf(binomial: bool, count: Floats, mean: float, sizes: Floats) -> Floats:
    """P(X ≤ count) of whole counts, (k,); 0 below 0."""
    known = np.maximum(count, 0.0)
    if binomial:
        room = np.maximum(sizes - known, 0.5)
        value = np.where(count >= sizes, 1.0, scipy.special.betaincc(known + 1.0, room, mean))
    else:
        value = scipy.special.gammaincc(known + 1.0, mean * sizes)
    return np.where(count < 0, 0.0, value)


def _bracket(mean: float, sizes: Floats) -> Floats:
    # Chernoff: no tail above 1e-300 reaches further than this from a mean of mean·size.
    expected = mean * sizes
    return np.ceil(expected + 40.0 * np.sqrt(expected) + 800.0)


def _apart(low: Floats, high: Floats) -> Booleans:
    """Where a bisection goes on: until whole numbers, or beyond 2**53 doubles, are neighbours."""
    return high - low > np.maximum(1.0, 4e-16 * high)


def _smallest_exceeded(binomial: bool, mean: float, sizes: Floats, tail: float) -> Floats:
    """Smallest whole count with P(X > count) ≤ tail, by bisection over the integers."""
    low, high = np.full(sizes.shape, -1.0), _bracket(mean, sizes)
    while bool((move := _apart(low, high)).any()):
        middle = np.floor(0.5 * (low + high))
        enough = count_sf(binomial, np.maximum(middle, 0.0), mean, sizes) <= tail
        high = np.where(move & enough, middle, high)
        low = np.where(move & ~enough, middle, low)
    return high


def _largest_undercut(binomial: bool, mean: float, sizes: Floats, tail: float) -> Floats:
    """Largest whole count with P(X < count) ≤ tail, by bisection over the integers."""
    low, high = np.zeros(sizes.shape), _bracket(mean, sizes)
    while bool((move := _apart(low, high)).any()):
        middle = np.floor(0.5 * (low + high))
        enough = count_cdf(binomial, middle - 1.0, mean, sizes) <= tail
        low = np.where(move & enough, middle, low)
        high = np.where(move & ~enough, middle, high)
    return low


def count_law(binomial: bool, mean: float, size: float) -> WholeLaw:
    """The binomial or Poisson law of the count in one sample, for its run length."""

    def below(count: Floats) -> Floats:
        return count_cdf(binomial, count, mean, np.full(count.shape, size))

    def above(count: Floats) -> Floats:
        return count_sf(binomial, count, mean, np.full(count.shape, size))

    return WholeLaw(below, above, mean * size, 0.0, size if binomial else math.inf)
