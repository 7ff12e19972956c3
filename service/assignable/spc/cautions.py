"""Cautions: what a qualified person should know about an answer, each with its place and its source.

Each function turns one diagnostic into a caution, or ``None`` where there is nothing to say.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated

import numpy as np

from .components import components
from .data import Floats, SubgroupStatistics
from .diagnostics import (
    FEWEST_RANGE_VALUES,
    FEWEST_VALUES,
    Autocorrelation,
    Dispersion,
    Normality,
    Resolution,
    SpreadStability,
)
from .errors import UnusableData, Where
from .factors import LARGEST_SIZE, c4, d2, d3, relative_sd_of_sd
from .sigma import SigmaEstimate, moving_range

COMMON_PRACTICE = "common practice"

FEW_SUBGROUPS = 20
LARGE_SUBGROUP = 10
SIGNIFICANCE = 0.01
# Share of the means outside the limits, from which the limits rather than the process are in question.
MANY_OUTSIDE = 0.1
# Values to each different reading, from which rounding shows in a test of normality.
TIED = 5


@dataclass(frozen=True, slots=True)
class Caution:
    """Something to know about an answer. It changes no number of it."""

    code: Annotated[str, "Stable and hyphenated."]
    sentence: Annotated[str, "What was found, and what to do about it."]
    where: Annotated[Where, "Path in the request's own names."]
    reference: Annotated[str, 'Key of the bibliography, or "common practice".']


def collect(*found: Caution | None) -> tuple[Caution, ...]:
    """The cautions there are, in the order given."""
    return tuple(caution for caution in found if caution is not None)


def _probability(p: float) -> str:
    return f"p = {p:.2g}" if p >= 0.0001 else "p < 0.0001"


def _things(count: int, one: str, many: str) -> str:
    return f"{count} {one if count == 1 else many}"


def few_subgroups(filled: int) -> Caution | None:
    """Fewer than 20 subgroups behind the limits."""
    return _few(filled, "few-subgroups", "subgroup", "subgroups")


def few_individuals(filled: int) -> Caution | None:
    """Fewer than 20 single values behind the limits."""
    return _few(filled, "few-values", "value", "values")


def few_samples(filled: int) -> Caution | None:
    """Fewer than 20 samples of counts behind the limits."""
    return _few(filled, "few-samples", "sample", "samples")


def _few(filled: int, code: str, one: str, many: str) -> Caution | None:
    if filled >= FEW_SUBGROUPS:
        return None
    return Caution(
        code,
        f"The limits rest on {_things(filled, one, many)}; with fewer than {FEW_SUBGROUPS} they are "
        f"uncertain. Treat them as provisional, and set them again when "
        f"{FEW_SUBGROUPS} to 25 {many} or more are there.",
        ("data",),
        COMMON_PRACTICE,
    )


def large_subgroups(statistics: SubgroupStatistics) -> Caution | None:
    """Subgroups larger than the 2 to 10 in use."""
    largest = int(statistics.size.max(initial=0))
    if largest <= LARGE_SUBGROUP:
        return None
    return Caution(
        "large-subgroups",
        f"Subgroups hold up to {largest} values, and 2 to {LARGE_SUBGROUP} are usual. Check that the values "
        "of a subgroup are made under the same conditions: differences between them widen the limits.",
        ("data",),
        COMMON_PRACTICE,
    )


def range_inefficient(statistics: SubgroupStatistics) -> Caution | None:
    """Ranges of more than ten values, for an estimator of sigma that uses them."""
    largest = int(statistics.size.max(initial=0))
    if not LARGE_SUBGROUP < largest <= LARGEST_SIZE:
        return None
    efficiency = (relative_sd_of_sd(largest) / c4(largest) * d2(largest) / d3(largest)) ** 2
    return Caution(
        "range-inefficient",
        f"A range of {largest} values uses only {100.0 * efficiency:.0f} % of the information that their "
        f"standard deviation does; above {LARGE_SUBGROUP} values use the standard deviation "
        "and the `xbar-s` chart.",
        ("sigma_estimator",),
        COMMON_PRACTICE,
    )


def autocorrelated(found: Autocorrelation | None) -> Caution | None:
    """Points that depend on those before them."""
    if found is None or found.p_value >= SIGNIFICANCE:
        return None
    return Caution(
        "autocorrelated",
        f"Points depend on those before them (correlation of successive points {found.lag1:.2f}; Ljung–Box "
        f"test over {_things(found.lags, 'lag', 'lags')}: {_probability(found.p_value)}). Limits and "
        "run lengths suppose independent points, so the rate of false alarms is not the one stated. Look "
        "for a drift or a cycle, sample less often, or use the `residual` chart.",
        ("data",),
        "ljung-box-1978",
    )


def not_normal(found: Normality | None) -> Caution | None:
    """Single values that do not follow a normal distribution."""
    if found is None or found.anderson_darling.p_value >= SIGNIFICANCE:
        return None
    test = found.anderson_darling
    if found.values_tested > TIED * found.distinct_values:
        advice = (
            f"They hold only {found.distinct_values} different readings, and such rounding alone can be the "
            "cause: record more digits before anything is concluded from this."
        )
    else:
        advice = (
            "Look for shifts, mixed streams or outliers first; where the process is skewed by nature, false "
            "alarms of single values, spread limits and capability indices are not as stated."
        )
    return Caution(
        "not-normal",
        f"The {found.values_tested} values tested do not look normal (Anderson–Darling "
        f"A² = {test.statistic:.3g}, {_probability(test.p_value)}). {advice}",
        ("data",),
        "dagostino-stephens-1986",
    )


def varies_between(
    means: Floats, outside: int, size: float, sigma: float, freedom: float | None
) -> Caution | None:
    """Means that vary, from each to the next, far more than the values within their subgroups explain.

    means: (m,), NaN at gaps, of ``size`` values each; outside: how many lie outside the limits; sigma:
    within subgroups, with its degrees of freedom (``None`` where it is known). A lasting shift alone
    does not raise this: it moves few of the successive differences.
    """
    present = int(np.count_nonzero(means == means))
    if outside < MANY_OUTSIDE * present or outside < 2 or present < FEWEST_VALUES:
        return None
    try:
        moving = moving_range(means)
    except UnusableData:
        return None
    within = sigma if freedom is None else SigmaEstimate(sigma, freedom, "")
    found = components(moving, within, size)
    if found.p_value >= SIGNIFICANCE:
        return None
    return Caution(
        "varies-between-subgroups",
        f"{outside} of {present} means lie outside their limits, and successive means differ far more than the "
        f"values within a subgroup explain (ratio of variances {found.ratio:.3g}, "
        f"{_probability(found.p_value)}). Where the pieces of a subgroup share a load, a mould or a reel, that is "
        "the nature of the process, and the `between-within` chart has the limits for it.",
        ("data",),
        "wheeler-chambers-1992",
    )


def normality_untested(values: int) -> Caution | None:
    """Too few values to test normality with."""
    if values >= FEWEST_VALUES:
        return None
    return Caution(
        "normality-untested",
        f"Normality was not tested: there are {_things(values, 'value', 'values')}, and the tests need "
        f"{FEWEST_VALUES} or more.",
        ("data",),
        COMMON_PRACTICE,
    )


def coarse_resolution(found: Resolution | None) -> Caution | None:
    """Values read in steps too wide for the range's limits."""
    if found is None or not found.coarse:
        return None
    return Caution(
        "coarse-resolution",
        f"Values differ by steps of {found.smallest_step:.6g}, so a range can take only "
        f"{_things(found.possible_range_values, 'value', 'values')} within its limits, and fewer than "
        f"{FEWEST_RANGE_VALUES} is too coarse. Record more digits, or use a gauge that reads finer steps.",
        ("data",),
        COMMON_PRACTICE,
    )


def unstable_spread(found: SpreadStability | None) -> Caution | None:
    """Subgroups whose variances differ by more than chance."""
    if found is None or found.p_value >= SIGNIFICANCE:
        return None
    return Caution(
        "unstable-spread",
        f"The spread within the {found.degrees_of_freedom + 1} subgroups differs by more than chance "
        f"(Bartlett's test: {_probability(found.p_value)}), so no single sigma stands behind the limits. "
        "Look at the spread panel and at single outlying values before the limits are used.",
        ("data",),
        "bartlett-1937",
    )


def dispersed(found: Dispersion | None) -> Caution | None:
    """Counts that vary more, or less, than their distribution says."""
    if found is None or found.p_value >= SIGNIFICANCE:
        return None
    over = found.ratio > 1.0
    name, primed = ("binomial", "p-prime") if found.distribution == "binomial" else ("Poisson", "u-prime")
    consequence = (
        "so the limits are too narrow and alarm falsely"
        if over
        else "so the limits are too wide and miss changes; check how the counts come about"
    )
    return Caution(
        "overdispersed" if over else "underdispersed",
        f"The counts vary {found.ratio:.3g} times as much as the {name} distribution leads to "
        f"({_probability(found.p_value)}), {consequence}. Use the `{primed}` chart (Laney 2002), whose "
        "limits follow the variation there is.",
        ("data", "counts"),
        "laney-2002",
    )


def single_value_subgroups(statistics: SubgroupStatistics) -> Caution | None:
    """Subgroups of one value, which say nothing about the spread."""
    lonely = int(np.count_nonzero(statistics.size == 1))
    if not lonely:
        return None
    return Caution(
        "single-value-subgroups",
        f"{_things(lonely, 'subgroup holds', 'subgroups hold')} one value alone: a point on the mean panel, "
        "and none on the spread panel.",
        ("data",),
        COMMON_PRACTICE,
    )
