"""What limits and rules cost and buy: the run lengths that every fit states."""

from __future__ import annotations

import functools
import math

import numpy as np

from .. import runlength
from ..rules import Rule
from .common import LimitBasis, Performance, ShiftPerformance
from .counts import count_cdf, count_lines, count_sf
from .lines import Spread, beyond_spread_lines

SHIFTS = (0.5, 1.0, 1.5, 2.0, 3.0)
"""Shifts of the mean, in sigma of a single value, for which every fit states its run length."""

FACTORS = (0.5, 1.5, 2.0, 3.0)
"""Factors on a proportion or rate for which every fit states its run length."""

_BEYOND_SENSE = 1e15


def _told(arl: float) -> float | None:
    return arl if arl < _BEYOND_SENSE else None


@functools.lru_cache(1024)
def mean_performance(
    rules: tuple[Rule, ...], basis: LimitBasis, size: float, spread: Spread | None
) -> Performance:
    """Run lengths of a panel of means of ``size`` normal values, were the parameters known exactly.

    Source: [champ-woodall-1987]; see ``runlength`` for the method.
    """
    reach = basis.multiple

    def run_length(shift: float) -> runlength.RunLength:
        return runlength.shewhart(rules, lower=-reach, upper=reach, shift=shift * math.sqrt(size))

    in_control = run_length(0.0)
    beyond = None
    if spread is not None and size == int(size) and size > 1:
        beyond = beyond_spread_lines(spread, int(size), basis.sigma_multiple, basis.tail)
    return Performance(
        "value" if spread is None else "mean",
        _told(in_control.arl),
        beyond,
        tuple(ShiftPerformance(shift, _told(run_length(shift).arl)) for shift in SHIFTS),
        "standard deviations of a single value",
        size,
        in_control.method,
    )


@functools.lru_cache(1024)
def count_performance(
    rules: tuple[Rule, ...], binomial: bool, mean: float, size: float | None, basis: LimitBasis
) -> Performance:
    """Run lengths of a panel of counts, exact under the binomial or Poisson law; for whole sizes only if binomial.

    ``size`` is the units or area of a sample (the rounded average where sizes vary, ``None`` where unknown).
    """
    panel = ("proportion" if binomial else "rate")
    unit = "factors on the proportion" if binomial else "factors on the rate"
    if size is None:
        return Performance(panel, None, None, (), unit, None, "not computed: the sample size is not known")
    at = max(round(size), 1) if binomial else size
    lines = count_lines(binomial, mean, np.array([float(at)]), basis)
    lower, upper = float(lines.lower[0]), float(lines.upper[0])

    def run_length(factor: float) -> runlength.RunLength | None:
        shifted = mean * factor
        if binomial and shifted >= 1.0:
            return None
        return runlength.discrete(
            rules,
            *_support(binomial, shifted, float(at)),
            centre=float(lines.centre[0]),
            sigma=float(lines.sd[0]),
            lower=lower,
            upper=upper,
        )

    in_control = run_length(1.0)
    assert in_control is not None
    told = []
    for factor in FACTORS:
        found = run_length(factor)
        if found is not None:
            told.append(ShiftPerformance(factor, _told(found.arl)))
    return Performance(
        panel, _told(in_control.arl), None, tuple(told), unit, float(at), in_control.method
    )


def _support(binomial: bool, mean: float, size: float) -> tuple[np.ndarray, np.ndarray]:
    """Whole counts that can occur, and their probabilities; what is left out weighs below 1e-20."""
    expected = mean * size
    reach = 12.0 * math.sqrt(expected) + 50.0
    low = max(math.floor(expected - reach), 0)
    high = math.ceil(expected + reach)
    if binomial:
        high = min(high, int(size))
    counts = np.arange(low, high + 1, dtype=np.float64)
    # Differences of the nearer tail keep their digits on both sides of the mean.
    below = count_cdf(binomial, counts, mean, np.full(counts.shape, size))
    above = count_sf(binomial, counts, mean, np.full(counts.shape, size))
    upper = np.concatenate(([1.0 if low == 0 else float(count_sf(binomial, counts[:1] - 1, mean, np.array([size]))[0])], above[:-1]))
    lower = np.concatenate(([0.0 if low == 0 else float(count_cdf(binomial, counts[:1] - 1, mean, np.array([size]))[0])], below[:-1]))
    return counts, np.where(counts <= expected, below - lower, upper - above)
