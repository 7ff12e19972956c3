"""What limits and rules cost and buy: the run lengths that every fit states."""

from __future__ import annotations

import functools
import math
from collections.abc import Callable, Iterable

import numpy as np

from .. import runlength
from ..errors import UnusableParameter
from ..rules import Rule
from .common import LimitBasis, Performance, ShiftPerformance
from .counts import count_law, count_lines
from .lattice import run_law
from .lines import Spread, beyond_spread_lines

SHIFTS = (0.5, 1.0, 1.5, 2.0, 3.0)
"""Shifts of the mean, in sigma of a single value, for which every fit states its run length."""

FACTORS = (0.5, 1.5, 2.0, 3.0)
"""Factors on a proportion or rate for which every fit states its run length."""

_BEYOND_SENSE = 1e15


def priced(run_length: Callable[[], runlength.RunLength]) -> tuple[float | None, str]:
    """An average run length with its method; ``None`` with the reason where it cannot be computed.

    A chart's limits are good without their price, so that a fit never fails for it.
    """
    try:
        found = run_length()
    except UnusableParameter as error:
        return None, f"not computed: {error}"
    return (found.arl if found.arl < _BEYOND_SENSE else None), found.method


def after_shifts(
    run_length: Callable[[float], runlength.RunLength], shifts: Iterable[float]
) -> tuple[ShiftPerformance, ...]:
    """The average run length after each shift."""
    return tuple(ShiftPerformance(shift, priced(functools.partial(run_length, shift))[0]) for shift in shifts)


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

    in_control, method = priced(lambda: run_length(0.0))
    beyond = None
    if spread is not None and size == int(size) and size > 1:
        beyond = beyond_spread_lines(spread, int(size), basis.sigma_multiple, basis.tail)
    return Performance(
        "value" if spread is None else "mean",
        in_control,
        beyond,
        after_shifts(run_length, SHIFTS),
        "standard deviations of a single value",
        size,
        method,
    )


@functools.lru_cache(1024)
def count_performance(
    panel: str, rules: tuple[Rule, ...], binomial: bool, mean: float, size: float | None, basis: LimitBasis
) -> Performance:
    """Run lengths of a panel of counts, exact under the binomial or Poisson law; for whole sizes only if binomial.

    ``size`` is the units or area of a sample (the rounded average where sizes vary, ``None`` where unknown).
    Where :mod:`.lattice` takes the counts as continuous, the method says so.
    """
    unit = "factors on the proportion" if binomial else "factors on the rate"
    if size is None:
        return Performance(panel, None, None, (), unit, None, "not computed: the sample size is not known")
    at = max(float(round(size)), 1.0) if binomial else size
    lines = count_lines(binomial, mean, np.array([at]), basis)
    centre, sigma = float(lines.centre[0]), float(lines.sd[0])
    lower, upper = float(lines.lower[0]), float(lines.upper[0])

    def run_length(factor: float) -> runlength.RunLength:
        law = count_law(binomial, mean * factor, at)
        return run_law(rules, law, centre=centre, sigma=sigma, lower=lower, upper=upper).run_length()

    in_control, method = priced(lambda: run_length(1.0))
    possible = [factor for factor in FACTORS if not binomial or mean * factor < 1.0]
    return Performance(panel, in_control, None, after_shifts(run_length, possible), unit, at, method)
