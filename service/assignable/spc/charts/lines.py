"""The lines of a spread panel: of a range, or of a standard deviation, for one size."""

from __future__ import annotations

import functools
from dataclasses import dataclass
from typing import Literal

import scipy

from .. import factors

Spread = Literal["range", "sd"]


@dataclass(frozen=True, slots=True)
class SpreadLines:
    """Centre, standard deviation and limits of a spread statistic, in units of sigma.

    ``lower`` is ``None`` where it would not be positive: a limit nothing can cross is no limit.
    """

    centre: float
    sd: float
    lower: float | None
    upper: float


@functools.lru_cache(4096)
def spread_lines(spread: Spread, n: int, multiple: float | None, tail: float) -> SpreadLines:
    """Lines for subgroups of ``n``: ``multiple`` standard deviations out, or with ``tail`` beyond each.

    Source: [iso-7870-2] for the multiple; exact distributions of range and deviation for the tails.
    """
    if spread == "range":
        centre, sd = factors.d2(n), factors.d3(n)
    else:
        centre, sd = factors.c4(n), factors.relative_sd_of_sd(n)
    if multiple is not None:
        lower = centre - multiple * sd
        return SpreadLines(centre, sd, lower if lower > 0 else None, centre + multiple * sd)
    if spread == "range":
        return SpreadLines(centre, sd, factors.range_ppf(tail, n), factors.range_isf(tail, n))
    return SpreadLines(centre, sd, factors.sd_ppf(tail, n), factors.sd_isf(tail, n))


@functools.lru_cache(4096)
def beyond_spread_lines(spread: Spread, n: int, multiple: float | None, tail: float) -> float:
    """Probability that the spread of ``n`` normal values in control lies outside its lines."""
    lines = spread_lines(spread, n, multiple, tail)
    if spread == "range":
        below = 0.0 if lines.lower is None else factors.range_cdf(lines.lower, n)
        return below + factors.range_sf(lines.upper, n)
    half = 0.5 * (n - 1)
    below = 0.0 if lines.lower is None else float(scipy.special.gammainc(half, half * lines.lower**2))
    return below + float(scipy.special.gammaincc(half, half * lines.upper**2))
