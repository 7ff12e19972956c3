"""What a baseline shows about itself, beside its chart: each diagnostic is ``None`` where it cannot be had.

A diagnostic states figures; what they mean for the user is said in :mod:`assignable.spc.cautions`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from . import normality as tests
from .data import Floats, SubgroupStatistics
from .factors import LARGEST_SIZE, SMALLEST_SIZE, d2, d2_of, d3
from .sigma import moving_ranges

FEWEST_VALUES = 8
FEWEST_RANGE_VALUES = 5
MOST_LAGS = 10
_SHORT = 200

CountDistribution: TypeAlias = Literal["binomial", "poisson"]


@dataclass(frozen=True, slots=True)
class Autocorrelation:
    """Correlation of each value with those before it, with a portmanteau test that there is none."""

    lag1: Annotated[float, "Correlation of successive values."]
    ljung_box: Annotated[float, "Ljung–Box statistic over all lags."]
    lags: Annotated[int, "Number of lags in the statistic; its degrees of freedom."]
    p_value: Annotated[float, "Probability of as large a statistic where values are independent."]


def autocorrelation(values: Floats) -> Autocorrelation | None:
    """Lag-1 autocorrelation and Ljung–Box test of values (m,) in time order, NaN for a gap.

    A gap keeps its place: a pair that holds it is left out, and each lag k enters with the pairs there
    are, n(n + 2)rₖ²/nₖ (nₖ = n - k without gaps). Lags: the smaller of 10 and a quarter of the n values.
    ``None`` for fewer than 8 values or no variation. Source: [ljung-box-1978].
    """
    present = values == values
    n = int(np.count_nonzero(present))
    if n < FEWEST_VALUES:
        return None
    gaps = n < len(values)
    if gaps:
        first = int(present.argmax())
        z = np.where(present, values, values[first])
        z = z - z[first]
        z = np.where(present, z - z.sum() / n, 0.0)
    else:
        z = values - values.mean()
    largest = max(float(z.max()), -float(z.min()))
    # A residue of rounding is no variation.
    if largest <= 1e-15 * abs(float(values[int(present.argmax())])):
        return None
    z = z / largest
    total = float(z @ z)
    lag1 = 0.0
    statistic = 0.0
    lags = 0
    most = min(MOST_LAGS, n // 4)
    # All lags of a short series in one call; of a long one only those that are needed.
    products = np.correlate(z, z, "full")[len(z) :] if len(z) <= _SHORT else None
    for lag in range(1, most + 1):
        pairs = int(np.count_nonzero(present[lag:] & present[:-lag])) if gaps else n - lag
        if not pairs:
            continue
        product = float(z[lag:] @ z[:-lag]) if products is None else float(products[lag - 1])
        r = product / total
        if lag == 1:
            lag1 = r
        statistic += r * r / pairs
        lags += 1
    if not lags:
        return None
    statistic *= n * (n + 2.0)
    return Autocorrelation(lag1, statistic, lags, float(scipy.special.chdtrc(lags, statistic)))


@dataclass(frozen=True, slots=True)
class AndersonDarling:
    """Anderson–Darling test of normality, mean and deviation estimated."""

    statistic: Annotated[float, "A²."]
    adjusted: Annotated[float, "A² adjusted for the number of values."]
    p_value: Annotated[float, "Probability of as large a statistic where values are normal."]


@dataclass(frozen=True, slots=True)
class ShapiroWilk:
    """Shapiro–Wilk test of normality."""

    statistic: Annotated[float, "W, at most 1."]
    p_value: Annotated[float, "Probability of as small a statistic where values are normal."]


@dataclass(frozen=True, slots=True)
class Normality:
    """Two tests of normality of the single values."""

    anderson_darling: Annotated[AndersonDarling, "Anderson and Darling's test, which weighs the tails."]
    shapiro_wilk: Annotated[ShapiroWilk, "Shapiro and Wilk's test."]
    values_tested: Annotated[int, "Number of values tested; of more than 5000, an evenly spaced 5000."]
    distinct_values: Annotated[int, "Number of different values among them; few where values are rounded."]


def normality(values: Floats) -> Normality | None:
    """Tests of normality of values of any shape in time order, NaN left out.

    Of more than 5000 values an evenly spaced 5000 are tested. ``None`` for fewer than 8 values, or no
    variation. Sources: see :mod:`assignable.spc.normality`.
    """
    flat = values.reshape(-1)
    present = flat == flat
    if not present.all():
        flat = flat[present]
    n = len(flat)
    if n < FEWEST_VALUES:
        return None
    if n > tests.MOST_VALUES:
        flat = flat[np.linspace(0, n - 1, tests.MOST_VALUES).round().astype(np.int64)]
    if 0.5 * float(flat.max()) - 0.5 * float(flat.min()) == 0.0:
        return None
    scores = tests.ordered_scores(flat)
    ad = tests.anderson_darling_of_scores(scores)
    w, p = tests.shapiro_wilk_of_scores(scores)
    distinct = 1 + int(np.count_nonzero(scores[1:] - scores[:-1] > 1e-12))
    return Normality(
        AndersonDarling(ad.statistic, ad.adjusted, ad.p_value), ShapiroWilk(w, p), len(flat), distinct
    )


@dataclass(frozen=True, slots=True)
class Resolution:
    """How finely the values were read, against the width of the range's limits."""

    smallest_step: Annotated[float, "Smallest difference of two values that differ, in the unit of the data."]
    possible_range_values: Annotated[
        int, "Number of values a range can take within its three-sigma limits at that step, zero included."
    ]
    coarse: Annotated[bool, "Whether these are fewer than five."]


def resolution(values: Floats, statistics: SubgroupStatistics | None = None) -> Resolution | None:
    """Resolution of values, rows of subgroups (m, n) with their statistics, or single values (m,) in order.

    Single values are judged by the limits of their moving range of two. Sizes that differ are judged by
    their average. Fewer than five possible values of the range within its limits is too coarse: common
    practice. ``None`` without variation, without ranges, or for sizes above 1000.
    """
    if statistics is None:
        ranges = moving_ranges(values.reshape(-1), 2)
        ranges = ranges[ranges == ranges]
        if not len(ranges):
            return None
        size, sigma = 2, float(ranges.mean()) / d2(2)
    else:
        if statistics.range is None:
            return None
        smallest, largest = int(statistics.size.min()), int(statistics.size.max())
        if not SMALLEST_SIZE <= largest <= LARGEST_SIZE:
            return None
        if smallest == largest:
            size, sigma = largest, float(statistics.range.mean()) / d2(largest)
        else:
            usable = statistics.size >= SMALLEST_SIZE
            sizes = statistics.size[usable]
            size = round(float(sizes.mean()))
            sigma = float(statistics.range[usable].sum()) / float(d2_of(sizes).sum())
    step = _smallest_step(values)
    if step is None or not 0.0 < sigma < math.inf:
        return None
    # A hair's width, so that a limit on a step counts the step.
    upper = (d2(size) + 3.0 * d3(size)) * sigma / step * (1.0 + 1e-9)
    lower = max((d2(size) - 3.0 * d3(size)) * sigma / step, 0.0) * (1.0 - 1e-9)
    possible = math.floor(upper) - math.ceil(lower) + 1
    return Resolution(step, possible, possible < FEWEST_RANGE_VALUES)


def _smallest_step(values: Floats) -> float | None:
    ordered = np.sort(values, axis=None)
    steps = ordered[1:] - ordered[:-1]
    known = int(np.count_nonzero(values == values))
    largest = max(abs(float(ordered[0])), abs(float(ordered[known - 1]))) if known else 0.0
    # Differences at the rounding of the values themselves are none; NaN compares false.
    steps = steps[steps > 1e-13 * largest]
    if not len(steps):
        return None
    step = float(steps.min())
    digits = int(math.log10(step / largest / 2e-16)) - 1
    # 2.51 - 2.50 is told as 0.01: no digit that the values cannot carry.
    return float(f"{step:.{min(max(digits, 1), 15) - 1}e}")


@dataclass(frozen=True, slots=True)
class SpreadStability:
    """Bartlett's test that all subgroups come from one variance."""

    statistic: Annotated[float, "Bartlett's statistic."]
    degrees_of_freedom: Annotated[int, "Subgroups with two values or more, less one."]
    p_value: Annotated[float, "Probability of as large a statistic where all variances are equal."]


def spread_stability(statistics: SubgroupStatistics) -> SpreadStability | None:
    """Bartlett's test of equal variances over the subgroups with two values or more.

    ``None`` for fewer than two of them, where only ranges were kept, or where a subgroup does not vary
    (the logarithm of its variance does not exist). Source: [bartlett-1937]; chi-square approximation.
    """
    sd = statistics.sd
    if sd is None:
        return None
    size = statistics.size
    smallest = int(size.min(initial=0))
    if smallest < SMALLEST_SIZE:
        usable = size >= SMALLEST_SIZE
        sd, size = sd[usable], size[usable]
        smallest = int(size.min(initial=LARGEST_SIZE))
    k = len(sd)
    if k < 2 or not float(sd.min()) > 0.0 or not math.isfinite(float(sd.max())):
        return None
    # Logarithms of ratios to the largest: no square overflows.
    scaled = sd / float(sd.max())
    if not float(scaled.min()) > 1e-150:
        return None
    if smallest == int(size.max()):
        each = float(smallest - 1)
        total = k * each
        pooled = float(scaled @ scaled) / k
        logs = 2.0 * each * float(np.log(scaled).sum())
        inverse = k / each
    else:
        freedom = size - 1.0
        total = float(freedom.sum())
        pooled = float(freedom @ (scaled * scaled)) / total
        logs = 2.0 * float(freedom @ np.log(scaled))
        inverse = float((1.0 / freedom).sum())
    correction = 1.0 + (inverse - 1.0 / total) / (3.0 * (k - 1))
    statistic = max((total * math.log(pooled) - logs) / correction, 0.0)
    return SpreadStability(statistic, k - 1, float(scipy.special.chdtrc(k - 1, statistic)))


@dataclass(frozen=True, slots=True)
class Dispersion:
    """Whether counts vary as much as their distribution says."""

    distribution: Annotated[CountDistribution, "The distribution the counts are held against."]
    ratio: Annotated[float, "Variation of the counts over what the distribution leads to; 1 where it holds."]
    statistic: Annotated[float, "Chi-square index of dispersion."]
    degrees_of_freedom: Annotated[int, "Samples less one."]
    p_value: Annotated[float, "Two-sided probability of an index as far out where the distribution holds."]


def dispersion(
    counts: Floats, inspected: Floats | None, *, distribution: CountDistribution
) -> Dispersion | None:
    """Chi-square index of dispersion of counts (m,), NaN for a gap, against binomial or Poisson.

    inspected: (m,) units or areas of opportunity; ``None`` for equal areas (Poisson alone). A sample of
    nothing inspected is a gap. The p-value is twice the smaller tail, by chi-square, an approximation
    where fewer than about one count a sample is expected. ``None`` for fewer than two samples, or where
    all counts are at a bound. Source: [fisher-1925], §§19, 21; [cochran-1954].
    """
    present = counts == counts
    if inspected is not None:
        present &= inspected > 0
    x = counts[present]
    m = len(x)
    if m < 2:
        return None
    area = np.ones(m) if inspected is None else inspected[present]
    rate = float(x.sum()) / float(area.sum())
    if rate <= 0.0 or (distribution == "binomial" and (inspected is None or rate >= 1.0)):
        return None
    expected = rate * area
    variance = expected * (1.0 - rate) if distribution == "binomial" else expected
    score = (x - expected) / np.sqrt(variance)
    statistic = float(score @ score)
    freedom = m - 1
    lower = float(scipy.special.chdtr(freedom, statistic))
    upper = float(scipy.special.chdtrc(freedom, statistic))
    p = min(1.0, 2.0 * min(lower, upper))
    return Dispersion(distribution, statistic / freedom, statistic, freedom, p)
