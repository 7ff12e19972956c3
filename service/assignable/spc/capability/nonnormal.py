"""Capability of a characteristic that need not be normal, by the quantiles of its distribution.

Performance indices compare the specification with the 0.135 %, 50 % and 99.865 % quantiles, which of a normal
characteristic are the mean and three standard deviations from it [iso-22514-2], [clements-1989].

Intervals by the delta method: the observed information of the likelihood gives the covariance of the
parameters, and the slopes of each index its standard error; Student's quantile with n less the number of parameters.
Simulated coverage of a nominal 0.95 with the right distribution named: 0.92 to 0.97 from 50 values on for the
indices and the nonconforming share of laws without a threshold; a little less for the outer quantiles of skewed laws
(0.90 to 0.95). With four parameters to estimate (Johnson) or near a Weibull threshold it is 0.85 to 0.90 for 100
values, and 0.7 for a share below a limit that lies by the threshold. An
interval takes the distribution as given: what choosing it adds is not in it.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Annotated

import numpy as np
import scipy

from ..data import Floats
from ..errors import SpcError, UnusableData, UnusableParameter
from .distributions import LAWS, DistributionParameter, Fitted, Sample, check_size, fit_law
from .goodness import GoodnessOfFit
from .indices import LARGEST_INDEX
from .nonconforming import ObservedNonconforming, clopper_pearson, observed
from .specification import Specification
from .transforms import ALL_LAWS, TRANSFORMS

AUTO = "auto"
EMPIRICAL = "empirical"
CHOICES = (*ALL_LAWS, EMPIRICAL, AUTO)

TAIL = 0.00135
SIGNIFICANCE = 0.05
# A normal is kept where its criterion is within this of the least [burnham-anderson-2002].
AS_GOOD = 2.0
MOST_FOR_CHOICE = 10_000
_MILLION = 1e6
_TINY = 1e-300
_STEP = 1e-4
_LARGEST_ERROR = 100.0

_P = np.array([TAIL, 0.5, 1.0 - TAIL])
_Q = np.array([1.0 - TAIL, 0.5, TAIL])


@dataclass(frozen=True, slots=True)
class DistributionCandidate:
    """A distribution that was tried, and the evidence for and against it."""

    distribution: Annotated[str, "Its name."]
    parameters: Annotated[
        tuple[DistributionParameter, ...], "Estimates of maximum likelihood; empty where it was not fitted."
    ]
    log_likelihood: Annotated[float | None, "Natural logarithm; null where it was not fitted."]
    aicc: Annotated[
        float | None,
        "Akaike's criterion corrected for few values; the smaller the better. Null where not fitted.",
    ]
    goodness: Annotated[
        GoodnessOfFit | None, "Anderson-Darling test; null where not fitted, or with results below a limit."
    ]
    not_fitted: Annotated[str | None, "Why it was not fitted; null where it was."]


@dataclass(frozen=True, slots=True)
class DistributionChoice:
    """Which distribution the figures rest on, and why."""

    asked: Annotated[str, "As asked for: a name, or `auto`."]
    used: Annotated[str, "The one used; `empirical` for none."]
    reason: Annotated[str, "Why that one, in a sentence."]
    candidates: Annotated[tuple[DistributionCandidate, ...], "Those tried, the best criterion first."]


@dataclass(frozen=True, slots=True)
class QuantileEstimate:
    """A quantile of the characteristic, with its interval."""

    probability: Annotated[float, "Share of the product below it."]
    value: Annotated[float, "In the unit of the characteristic."]
    lower: Annotated[float | None, "Lower end of its interval; null where the values bound it on no side."]
    upper: Annotated[float | None, "Upper end of it; null likewise."]


@dataclass(frozen=True, slots=True)
class QuantileIndex:
    """An index by quantiles with what is known of it."""

    value: Annotated[float, "The estimate; no unit."]
    lower: Annotated[float | None, "Lower end of the two-sided interval; null where too few values bound it."]
    upper: Annotated[float | None, "Upper end of it; null likewise."]
    lower_bound: Annotated[
        float | None, "One-sided bound: the true index is at least this; null where too few values bound it."
    ]


@dataclass(frozen=True, slots=True)
class ExpectedByDistribution:
    """Nonconforming product expected of the distribution, in parts per million (ppm)."""

    below_ppm: Annotated[float | None, "Below the lower limit; null where there is none."]
    above_ppm: Annotated[float | None, "Above the upper limit; null where there is none."]
    total_ppm: Annotated[float, "Outside the limits there are."]
    total_lower_ppm: Annotated[
        float | None, "Lower end of the two-sided interval for the total; null where unknown."
    ]
    total_upper_ppm: Annotated[float | None, "Upper end of it."]
    total_upper_bound_ppm: Annotated[float | None, "One-sided bound: the true total is at most this."]


@dataclass(frozen=True, slots=True)
class QuantileCapability:
    """Performance by the 0.135 %, 50 % and 99.865 % quantiles of the distribution used."""

    distribution: Annotated[str, "The one used; `empirical` for the values' own quantiles."]
    count: Annotated[int, "How many values there were, those below a limit among them."]
    below_limits: Annotated[int, "How many were results below a limit."]
    confidence: Annotated[float, "Of each interval by itself, as a proportion."]
    parameters: Annotated[tuple[DistributionParameter, ...], "Of the distribution; empty for `empirical`."]
    quantiles: Annotated[tuple[QuantileEstimate, ...], "The three quantiles, the smallest first."]
    pp: Annotated[
        QuantileIndex | None,
        "Width of the specification over that of the outer quantiles; null with one limit.",
    ]
    ppk: Annotated[QuantileIndex, "The smaller of ppl and ppu, or the only one there is."]
    ppu: Annotated[
        QuantileIndex | None,
        "From the median to the upper limit, over from the median to the 99.865 % quantile; null without that limit.",
    ]
    ppl: Annotated[
        QuantileIndex | None,
        "From the lower limit to the median, over from the 0.135 % quantile to the median; null without that limit.",
    ]
    expected: Annotated[ExpectedByDistribution, "Nonconforming product expected of the distribution."]
    observed: Annotated[
        ObservedNonconforming,
        "Nonconforming values counted; a result below a limit counts where the limit leaves no doubt of it.",
    ]
    method: Annotated[str, "Of the intervals: `delta-method` or `order-statistics`."]


# ---------------------------------------------------------------------------------------------------
# Choice


def choose(asked: str, sample: Sample) -> tuple[DistributionChoice, Fitted | None]:
    """The distribution to use, with the evidence, and its fit; ``None`` for the empirical quantiles.

    A named one is fitted, whatever the evidence. ``auto`` tries every distribution, keeps those that the
    Anderson–Darling test does not reject at 0.05, and takes the least AICc, or the normal where its own is
    within 2 of that; where none is left, the transformations likewise; and then the values' own quantiles.
    Raises what ``distributions.fit_law`` does for a named one; UnusableParameter ``too-many-to-choose``,
    ``empirical-with-limits``.
    """
    if asked == EMPIRICAL:
        if sample.below.size:
            raise UnusableParameter.of(
                "empirical-with-limits",
                "Results below a limit have no empirical quantiles; name a distribution, or ask for `auto`.",
                "distribution",
            )
        reason = "The values' own quantiles, as asked for."
        return DistributionChoice(asked, EMPIRICAL, reason, ()), None
    if asked != AUTO:
        found = fit_law(ALL_LAWS[asked], sample)
        reason = f"The distribution {asked}, as asked for."
        return DistributionChoice(asked, asked, reason, (_candidate(found, sample),)), found
    if sample.count > MOST_FOR_CHOICE:
        raise UnusableParameter.of(
            "too-many-to-choose",
            f"A distribution is chosen from {MOST_FOR_CHOICE} values at the most; there are {sample.count}. Name one.",
            "distribution",
        )
    tried, fits = _try(tuple(LAWS), sample)
    used, reason = _best(tried, fits, sample)
    if used is None and not sample.below.size:
        more, more_fits = _try(tuple(TRANSFORMS), sample)
        used, reason = _best(more, more_fits, sample)
        tried, fits = tried + more, {**fits, **more_fits}
    if used is None:
        if sample.below.size:
            raise UnusableData.of(
                "no-distribution-fits",
                "No distribution could be fitted to these results, so many of which are below a limit.",
                "data",
                "below",
            )
        used = EMPIRICAL
        reason = (
            "The Anderson-Darling test rejects every distribution and transformation at 0.05, so the values' own "
            "quantiles are used; look for shifts, mixed streams or rounding before relying on them."
        )
    # A criterion is always there where a law was fitted to ten values or more.
    tried.sort(key=lambda one: math.inf if one.aicc is None else one.aicc)
    return DistributionChoice(asked, used, reason, tuple(tried)), fits.get(used)


def _candidate(found: Fitted, sample: Sample) -> DistributionCandidate:
    return DistributionCandidate(
        found.law.name,
        found.parameters,
        found.log_likelihood,
        found.aicc,
        found.goodness(sample),
        None,
    )


def _try(names: Sequence[str], sample: Sample) -> tuple[list[DistributionCandidate], dict[str, Fitted]]:
    tried: list[DistributionCandidate] = []
    fits: dict[str, Fitted] = {}
    for name in names:
        try:
            found = fit_law(ALL_LAWS[name], sample)
        except SpcError as error:
            if any(fault.code not in ("outside-support", "no-maximum") for fault in error.faults):
                raise
            tried.append(DistributionCandidate(name, (), None, None, None, error.faults[0].detail))
            continue
        tried.append(_candidate(found, sample))
        # Without a covariance the likelihood is flat or still rising: a simpler law says as much.
        if found.covariance is not None:
            fits[name] = found
    return tried, fits


def _best(
    tried: list[DistributionCandidate], fits: dict[str, Fitted], sample: Sample
) -> tuple[str | None, str]:
    left = {
        one.distribution: one.aicc
        for one in tried
        if one.aicc is not None
        and one.distribution in fits
        and (one.goodness is None or one.goodness.p_value >= SIGNIFICANCE)
    }
    if not left:
        return None, ""
    best = min(left, key=lambda name: left[name])
    tested = (
        ""
        if sample.below.size
        else f" of the {len(left)} that the Anderson-Darling test does not reject at 0.05"
    )
    if best != "normal" and left.get("normal", math.inf) <= left[best] + AS_GOOD:
        return (
            "normal",
            f"The normal distribution, whose AICc is within {AS_GOOD:g} of the least{tested} ({best}).",
        )
    return best, f"The distribution {best}, which has the least AICc{tested}."


# ---------------------------------------------------------------------------------------------------
# Indices


def by_quantiles(
    found: Fitted | None, sample: Sample, specification: Specification, confidence: float
) -> QuantileCapability:
    """Indices, intervals and nonconforming product by the quantiles of a fit, or of the values (``None``).

    specification: with at least one limit that is no natural bound. confidence: of each interval by
    itself, above 0.5. Raises UnusableData ``no-quantile`` where the distribution has no such quantile;
    UnusableParameter ``limits-too-far``.
    """
    _check_limits(sample, specification)
    if found is None:
        return _empirical(sample, specification, confidence)
    theta = found.theta
    centre = _figures(found, specification, theta)
    if not np.isfinite(centre).all() or not centre[0] < centre[1] < centre[2]:
        raise UnusableData.of(
            "no-quantile",
            f"The distribution {found.law.name} has no 0.135 % or 99.865 % quantile that can be had; choose another.",
            "data",
            "values",
        )
    half = bound = None
    error = _errors(found, specification, centre)
    if error is not None:
        freedom = max(found.count - found.law.parameters, 1)
        half = error * float(scipy.special.stdtrit(freedom, 0.5 + 0.5 * confidence))
        bound = error * float(scipy.special.stdtrit(freedom, confidence))
    indices = [_delta_index(centre, half, bound, i) for i in range(3, 6)]
    lower, upper = specification.lower, specification.upper
    pp = indices[0] if specification.two_sided else None
    ppl = indices[1] if lower is not None else None
    ppu = indices[2] if upper is not None else None
    sides = [one for one in (ppl, ppu) if one is not None]
    low, high = (None, None) if half is None else (float(centre[6] - half[6]), float(centre[6] + half[6]))
    below, above = _tails(found, specification, theta)
    return QuantileCapability(
        distribution=found.law.name,
        count=sample.count,
        below_limits=int(sample.below.size),
        confidence=confidence,
        parameters=found.parameters,
        quantiles=tuple(
            QuantileEstimate(
                float(_P[i]),
                float(centre[i]),
                None if half is None else float(centre[i] - half[i]),
                None if half is None else float(centre[i] + half[i]),
            )
            for i in range(3)
        ),
        pp=pp,
        ppk=min(sides, key=lambda one: one.value),
        ppu=ppu,
        ppl=ppl,
        expected=ExpectedByDistribution(
            None if below is None else below * _MILLION,
            None if above is None else above * _MILLION,
            ((below or 0.0) + (above or 0.0)) * _MILLION,
            None if low is None else _ppm(low),
            None if high is None else _ppm(high),
            None if bound is None else _ppm(float(centre[6] + bound[6])),
        ),
        observed=_observed(sample, specification, confidence),
        method="delta-method",
    )


def _errors(found: Fitted, specification: Specification, centre: Floats) -> Floats | None:
    """Standard errors of the figures by the delta method; ``None`` where the information does not give them."""
    if found.covariance is None:
        return None
    theta = found.theta
    slopes = np.empty((theta.size, centre.size))
    with np.errstate(all="ignore"):
        for k, size in enumerate(np.sqrt(np.diag(found.covariance))):
            step = np.zeros(theta.size)
            step[k] = _STEP * size
            ahead, behind = (_figures(found, specification, theta + sign * step) for sign in (1.0, -1.0))
            slopes[k] = (ahead - behind) / (2.0 * step[k])
        error = np.sqrt(np.maximum(np.einsum("ki,kl,li->i", slopes, found.covariance, slopes), 0.0))
    # An index so uncertain that its interval says nothing.
    return error if bool((error < _LARGEST_ERROR * (1.0 + np.abs(centre))).all()) else None


def _check_limits(sample: Sample, specification: Specification) -> None:
    values = sample.values
    # Halved, because the difference of two allowed numbers may overflow.
    middle = 0.5 * float(np.median(values))
    spread = float(values.max()) * 0.5 - float(values.min()) * 0.5
    for name, limit in (("lower", specification.lower), ("upper", specification.upper)):
        if limit is not None and abs(0.5 * limit - middle) > LARGEST_INDEX * spread:
            raise UnusableParameter.of(
                "limits-too-far",
                f"The {name} limit, {limit:.15g}, is out of all proportion to the values, which spread over "
                f"{2.0 * spread:g}; check that limits and values have the same unit, and that the values vary.",
                "specification",
                name,
            )


def _ppm(probit: float) -> float:
    return float(scipy.special.ndtr(probit)) * _MILLION


def _tails(found: Fitted, specification: Specification, theta: Floats) -> tuple[float | None, float | None]:
    below = above = None
    if specification.lower is not None:
        below = float(found.tails(np.array([specification.lower]), theta)[0][0])
    if specification.upper is not None:
        above = float(found.tails(np.array([specification.upper]), theta)[1][0])
    return below, above


def _figures(found: Fitted, specification: Specification, theta: Floats) -> Floats:
    """The three quantiles, log pp, ppl, ppu, and the probit of the share outside, (7,); 0 where not defined."""
    low, middle, high = found.quantile(_P, _Q, theta).tolist()
    lower, upper = specification.lower, specification.upper
    figures = np.zeros(7)
    figures[:3] = low, middle, high
    if lower is not None and upper is not None:
        figures[3] = math.log(upper - lower) - math.log(max(high - low, _TINY))
    if lower is not None:
        figures[4] = (middle - lower) / max(middle - low, _TINY)
    if upper is not None:
        figures[5] = (upper - middle) / max(high - middle, _TINY)
    below, above = _tails(found, specification, theta)
    outside = (below or 0.0) + (above or 0.0)
    figures[6] = scipy.special.ndtri(min(max(outside, _TINY), 1.0 - 1e-16))
    return figures


def _delta_index(centre: Floats, half: Floats | None, bound: Floats | None, at: int) -> QuantileIndex:
    value = float(centre[at])
    # A ratio of widths is positive, and its logarithm nearer to normal.
    transform = math.exp if at == 3 else float
    if half is None or bound is None:
        return QuantileIndex(transform(value), None, None, None)
    return QuantileIndex(
        transform(value),
        transform(value - float(half[at])),
        transform(value + float(half[at])),
        transform(value - float(bound[at])),
    )


def _observed(sample: Sample, specification: Specification, confidence: float) -> ObservedNonconforming:
    counted = observed(sample.values, specification, confidence)
    if not sample.below.size:
        return counted
    below = counted.below
    if below is not None and specification.lower is not None:
        below += int(np.count_nonzero(sample.below <= specification.lower))
    total = (below or 0) + (counted.above or 0)
    low, high = clopper_pearson(total, sample.count, confidence)
    return ObservedNonconforming(
        below,
        counted.above,
        total,
        sample.count,
        total / sample.count * _MILLION,
        low * _MILLION,
        high * _MILLION,
    )


# ---------------------------------------------------------------------------------------------------
# Empirical quantiles


def order_ranks(count: int, probability: float, confidence: float) -> tuple[int | None, int | None]:
    """Ranks (from 1) of the order statistics that enclose a quantile with at least this confidence.

    ``None`` for a side that so few values do not bound. Each end misses with at most (1 - confidence)/2.
    Source: [david-nagaraja-2003], section 7.1.
    """
    tail = 0.5 * (1.0 - confidence)
    spread = math.sqrt(count * probability * (1.0 - probability))
    first = max(0, math.floor(count * probability - 10.0 * spread - 30.0))
    last = min(count, math.ceil(count * probability + 10.0 * spread + 30.0))
    ranks = np.arange(first, last + 1)
    cumulative = scipy.special.bdtr(ranks.astype(np.float64), count, probability)
    # P(X(r) > quantile) = P(fewer than r below it).
    fits_low = ranks[cumulative <= tail]
    lower = int(fits_low[-1]) + 1 if fits_low.size else None
    fits_high = ranks[cumulative >= 1.0 - tail]
    upper = int(fits_high[0]) + 1 if fits_high.size else None
    return lower, None if upper is None or upper > count else upper


def _empirical(sample: Sample, specification: Specification, confidence: float) -> QuantileCapability:
    ordered = np.sort(sample.values)
    n = ordered.size
    if n < 2 or ordered[0] == ordered[-1]:
        raise UnusableData.of("no-variation", "There is no variation among the values.", "data", "values")
    check_size(sample)
    low, middle, high = (float(one) for one in np.quantile(ordered, _P, method="median_unbiased"))

    def ends(which: int, level: float) -> tuple[float | None, float | None]:
        ranks = order_ranks(n, float(_P[which]), level)
        at = [None if rank is None else float(ordered[rank - 1]) for rank in ranks]
        return at[0], at[1]

    lower, upper = specification.lower, specification.upper
    if not low < middle < high:
        raise UnusableData.of(
            "no-quantile",
            "So many values are alike that the median is also an outer quantile; record more digits.",
            "data",
            "values",
        )

    def index(level: float, side: str) -> tuple[float | None, float | None]:
        # Two quantiles, each at half the risk, together hold at the level asked.
        part = 0.5 + 0.5 * level
        if side == "both":
            assert lower is not None
            assert upper is not None
            (a, b), (c, d) = ends(0, part), ends(2, part)
            width = upper - lower
            narrow = None if b is None or c is None or c <= b else width / (c - b)
            return (None if a is None or d is None else width / (d - a)), narrow
        limit, which, sign = (upper, 2, 1.0) if side == "upper" else (lower, 0, -1.0)
        assert limit is not None
        medians, outer = ends(1, part), ends(which, part)
        found: list[float | None] = []
        # The outer end far from the median gives the least index, the near one the greatest.
        for at, pick in ((1 if sign > 0 else 0, min), (0 if sign > 0 else 1, max)):
            end = outer[at]
            values = [
                sign * (limit - median) / (sign * (end - median))
                for median in medians
                if end is not None and median is not None and sign * (end - median) > 0.0
            ]
            found.append(pick(values) if len(values) == 2 else None)
        return found[0], found[1]

    def told(value: float, side: str) -> QuantileIndex:
        least, most = index(confidence, side)
        return QuantileIndex(value, least, most, index(2.0 * confidence - 1.0, side)[0])

    pp = told((upper - lower) / (high - low), "both") if lower is not None and upper is not None else None
    ppu = told((upper - middle) / (high - middle), "upper") if upper is not None else None
    ppl = told((middle - lower) / (middle - low), "lower") if lower is not None else None
    sides = [one for one in (ppl, ppu) if one is not None]
    seen = observed(sample.values, specification, confidence)
    bound = clopper_pearson(seen.total, n, 2.0 * confidence - 1.0)[1]
    return QuantileCapability(
        distribution=EMPIRICAL,
        count=n,
        below_limits=0,
        confidence=confidence,
        parameters=(),
        quantiles=tuple(
            QuantileEstimate(float(_P[i]), value, *ends(i, confidence))
            for i, value in enumerate((low, middle, high))
        ),
        pp=pp,
        ppk=min(sides, key=lambda one: one.value),
        ppu=ppu,
        ppl=ppl,
        expected=ExpectedByDistribution(
            None if seen.below is None else seen.below / n * _MILLION,
            None if seen.above is None else seen.above / n * _MILLION,
            seen.total_ppm,
            seen.total_lower_ppm,
            seen.total_upper_ppm,
            bound * _MILLION,
        ),
        observed=seen,
        method="order-statistics",
    )
