"""Limits of single values that are not normal: quantiles of a fitted distribution.

A value is judged by its normal score z = Φ⁻¹(F(x)): limits are the quantiles at z = ±k, the centre is the
median, and run rules look at z, so that limits and rules alarm falsely as often as they do with normal
values. Moving ranges get the limits that the range of independent values of the fitted distribution exceeds
with the probability with which a normal one exceeds its own.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass
from typing import Annotated, Literal, TypeAlias, get_args

import numpy as np
import scipy

from .. import factors
from ..capability.distributions import DistributionParameter, Fitted, Sample
from ..capability.nonnormal import EMPIRICAL, DistributionChoice, choose
from ..capability.transforms import ALL_LAWS
from ..cautions import Caution
from ..data import Floats
from ..errors import UnusableData, UnusableParameter
from .common import LimitBasis, PanelLimits, Plot
from .lines import spread_lines

DistributionName: TypeAlias = Literal[
    "normal",
    "lognormal",
    "lognormal-3",
    "weibull",
    "weibull-3",
    "gamma",
    "exponential",
    "half-normal",
    "folded-normal",
    "rayleigh",
    "largest-extreme-value",
    "smallest-extreme-value",
    "box-cox",
    "johnson-sl",
    "johnson-sb",
    "johnson-su",
]
NAMES: tuple[str, ...] = get_args(DistributionName)
SIGNIFICANCE = 0.05
ENOUGH_VALUES = 100


@dataclass(frozen=True, slots=True)
class FrozenDistribution:
    """The distribution that the limits of the values are quantiles of."""

    name: Annotated[DistributionName, "Its name."]
    parameters: Annotated[
        tuple[DistributionParameter, ...], "Estimates of maximum likelihood, as people read them."
    ]
    theta: Annotated[tuple[float, ...], "The same as the program uses them, in units of its own."]
    shift: Annotated[float, "Origin of that unit, in the unit of the characteristic."]
    unit: Annotated[float, "Size of that unit, in the unit of the characteristic."]
    direction: Annotated[int, "1, or -1 where the unit counts downwards, as for a tail to the left."]


@dataclass(frozen=True, slots=True, eq=False)
class ScoredPlot(Plot):
    """A panel of which the rules look at normal scores."""

    distribution: FrozenDistribution | None = None

    def _standardised(self, value: Floats) -> Floats:
        assert self.distribution is not None
        return law_of(self.distribution).scores(value)


@dataclass(frozen=True, slots=True, eq=False)
class Shaped:
    """A fitted distribution with the lines it gives."""

    distribution: FrozenDistribution
    choice: DistributionChoice
    value: PanelLimits
    moving_range: PanelLimits


@functools.lru_cache(256)
def law_of(frozen: FrozenDistribution) -> Fitted:
    """The distribution as it can be calculated with. Raises UnusableParameter for one that cannot be."""
    law = ALL_LAWS[frozen.name]
    if len(frozen.theta) != law.parameters or not frozen.unit > 0.0 or frozen.direction not in (1, -1):
        raise UnusableParameter.of(
            "not-this-distribution",
            f"These are no parameters of the distribution {frozen.name}.",
            "limits",
            "distribution",
        )
    return Fitted(law, np.array(frozen.theta), frozen.shift, frozen.unit, frozen.direction, 0, 0.0, None)


def shaped(
    used: Floats, distribution: str, basis: LimitBasis, span: int
) -> tuple[DistributionChoice, Shaped | None]:
    """The distribution named, or chosen (``auto``), fitted to values (m,), NaN for a gap, and its lines.

    ``None`` where the choice falls on the normal, whose limits are the usual ones. Raises UnusableData where it
    cannot be fitted, or ``no-distribution-fits`` where every one is rejected.
    """
    present = used[used == used]
    size = np.abs(present[present != 0.0])
    if len(size) and not (
        size.min() > 1e-100 and size.max() < 1e100 and np.ptp(present) > 1e-12 * size.max()
    ):
        raise UnusableData.of(
            "out-of-scale",
            "A distribution is fitted to values from 1e-100 to 1e100 that differ; give them in another unit.",
            "data",
            "values",
        )
    sample = Sample(present, np.empty(0))
    choice, found = choose(distribution, sample)
    if found is None or choice.used == EMPIRICAL:
        raise UnusableData.of(
            "no-distribution-fits",
            "The Anderson-Darling test rejects every distribution at 0.05, so none can give limits. Look for shifts, "
            "mixed streams, outliers or rounding first; a change point stands in the diagnostics of a fit with "
            "the normal distribution.",
            "data",
            "values",
        )
    if choice.used == "normal":
        return choice, None
    frozen = FrozenDistribution(
        choice.used,  # type: ignore[arg-type]
        found.parameters,
        tuple(found.theta.tolist()),
        found.shift,
        found.unit,
        found.direction,
    )
    reach = basis.multiple
    tail = float(scipy.special.ndtr(-reach))
    low, middle, high = found.quantile(
        np.array([tail, 0.5, 1.0 - tail]), np.array([1.0 - tail, 0.5, tail])
    ).tolist()
    if not (math.isfinite(low) and math.isfinite(high) and low < high):
        raise UnusableData.of(
            "out-of-scale",
            f"The {tail:.2g} quantiles of the distribution {choice.used} cannot be represented.",
            "distribution",
        )
    return choice, Shaped(frozen, choice, PanelLimits(middle, low, high), _range_lines(found, basis, span))


def _range_lines(law: Fitted, basis: LimitBasis, span: int) -> PanelLimits:
    """Lines of the range of ``span`` independent values, by the trapezium rule over the normal score of its least."""
    z = np.linspace(-8.2, 8.2, 329)
    weight = np.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi) * (z[1] - z[0])
    below, above = scipy.special.ndtr(z), scipy.special.ndtr(-z)
    x = law.quantile(below, above)
    centre = span * float((weight * x) @ (below ** (span - 1) - above ** (span - 1)))

    def reached(width: float) -> float:
        """P(range ≤ width)."""
        under, over = law.tails(x + width)
        between = np.maximum(np.where(z < 0.0, under - below, above - over), 0.0)
        return span * float(weight @ between ** (span - 1))

    normal = spread_lines("range", span, basis.sigma_multiple, basis.tail)
    widest = float(x[-1] - x[0])

    def solve(share: float) -> float:
        found: float = scipy.optimize.brentq(
            lambda width: reached(width) - share, 0.0, widest, xtol=1e-12 * widest, rtol=1e-12, maxiter=300
        )
        return found

    upper = solve(1.0 - factors.range_sf(normal.upper, span))
    lower = None if normal.lower is None else solve(factors.range_cdf(normal.lower, span))
    return PanelLimits(centre, lower, upper)


def shaped_plots(
    values: Floats,
    ranges: Floats,
    distribution: FrozenDistribution,
    value: PanelLimits,
    moving_range: PanelLimits,
    sigma: float,
) -> tuple[Plot, Plot]:
    """The value panel and the moving-range panel under lines of a fitted distribution."""
    assert value.centre is not None
    assert moving_range.centre is not None
    return (
        ScoredPlot(values, value.centre, sigma, value.lower, value.upper, distribution=distribution),
        Plot(ranges, moving_range.centre, sigma, moving_range.lower, moving_range.upper, floor=0.0),
    )


def cautions(choice: DistributionChoice | None, values: int) -> tuple[Caution, ...]:
    """What to know about limits from a fitted distribution."""
    if choice is None or choice.used == "normal":
        return ()
    few = "" if values >= ENOUGH_VALUES else f": {ENOUGH_VALUES} values or more are better"
    told = [
        Caution(
            "limits-from-distribution",
            f"The limits are quantiles of a distribution fitted to {values} values. {choice.reason} "
            f"Its far tails rest on its shape rather than on data{few}. "
            "Be sure that the process is skewed by nature, and not shifted, mixed or disturbed.",
            ("distribution",),
            "common practice",
        )
    ]
    used = next((one for one in choice.candidates if one.distribution == choice.used), None)
    if used is not None and used.goodness is not None and used.goodness.p_value < SIGNIFICANCE:
        told.append(
            Caution(
                "distribution-doubtful",
                f"The values do not look as if they came from the distribution {choice.used} (Anderson-Darling test, "
                f"p = {used.goodness.p_value:.2g}).",
                ("distribution",),
                "dagostino-stephens-1986",
            )
        )
    return tuple(told)
