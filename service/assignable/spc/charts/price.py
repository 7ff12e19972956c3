"""What limits and rules cost and buy: the run lengths that every fit states."""

from __future__ import annotations

import functools
import math

import numpy as np

from .. import runlength
from ..rules import Rule
from .common import LimitBasis, Performance, ShiftPerformance
from .counts import count_law, count_lines
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
    panel: str, rules: tuple[Rule, ...], binomial: bool, mean: float, size: float | None, basis: LimitBasis
) -> Performance:
    """Run lengths of a panel of counts, exact under the binomial or Poisson law; for whole sizes only if binomial.

    ``size`` is the units or area of a sample (the rounded average where sizes vary, ``None`` where unknown).
    """
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
        support, probability = count_law(binomial, shifted, float(at))
        return runlength.discrete(
            rules,
            support=support,
            probability=probability,
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
    return Performance(panel, _told(in_control.arl), None, tuple(told), unit, float(at), in_control.method)
