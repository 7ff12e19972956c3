"""Variation between subgroups beside the variation within them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated

import scipy

from .factors import c4_of_freedom
from .sigma import SigmaEstimate


@dataclass(frozen=True, slots=True)
class VarianceComponents:
    """How the variance of single values divides into what differs between subgroups and within them."""

    between: Annotated[
        float, "Variance between subgroups, in the square of the unit; 0 where it comes out below."
    ]
    between_as_computed: Annotated[
        float, "The same as it comes, var(means) - within/n; below 0 where the means vary less than chance."
    ]
    within: Annotated[float, "Variance within subgroups, in the square of the unit."]
    between_share: Annotated[
        float, "Share of the variance of single values that lies between subgroups, 0 to 1."
    ]
    within_share: Annotated[float, "Share of it that lies within subgroups, 0 to 1."]
    ratio: Annotated[
        float, "Variance of the means over within/n; about 1 where nothing differs between subgroups."
    ]
    p_value: Annotated[
        float,
        "Probability of as large a ratio where nothing differs between subgroups, by an approximate F test.",
    ]


def components(means: SigmaEstimate, within: SigmaEstimate | float, size: float) -> VarianceComponents:
    """Components of variance from the deviation of subgroup means and that of values within subgroups.

    means: of subgroup means of ``size`` values (harmonic mean where sizes differ), from their successive
    differences; within: an estimate, or a known sigma. The ratio of the mean squares is held against F at both
    estimates' effective degrees of freedom, each deviation's own bias (c4) put back: approximate, since
    a moving range is no mean square. Source: [iso-7870-2] for the estimators; [patnaik-1950] for the freedom.
    """
    given = not isinstance(within, SigmaEstimate)
    sigma = within if not isinstance(within, SigmaEstimate) else within.sigma
    inside = sigma * sigma
    outside = means.sigma * means.sigma
    noise = inside / size
    found = outside - noise
    between = max(found, 0.0)
    top = means.degrees_of_freedom
    statistic = size * (means.sigma / sigma * c4_of_freedom(top)) ** 2
    if given:
        p = float(scipy.special.chdtrc(top, top * statistic))
    else:
        assert isinstance(within, SigmaEstimate)
        bottom = within.degrees_of_freedom
        p = float(scipy.special.fdtrc(top, bottom, statistic / c4_of_freedom(bottom) ** 2))
    total = between + inside
    return VarianceComponents(between, found, inside, between / total, inside / total, outside / noise, p)
