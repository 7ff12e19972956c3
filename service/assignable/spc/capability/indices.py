"""Capability and performance indices of a normal characteristic, each with its confidence interval.

Within-subgroup sigma gives Cp, Cpk, Cpu and Cpl; the overall standard deviation gives Pp, Ppk, Ppu, Ppl,
Cpm and Cpmk, and for a short run of one machine Cm and Cmk ([kane-1986], [iso-22514-2], [iso-22514-3]).

Intervals treat the mean and sigma as those of independent normal values. A within-subgroup estimator with
ν effective degrees of freedom is unbiased, so σ̂·c4(ν + 1) is taken as σχ(ν)/√ν [patnaik-1950]; the overall
standard deviation is exactly that with ν = N - 1. Where subgroup means vary by more than the spread within
subgroups explains, the within-subgroup intervals say too little about the mean.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from ..data import Floats
from ..errors import Fault, UnusableData, UnusableParameter
from ..factors import c4_of_freedom
from ..sigma import SigmaEstimate, overall
from .noncentral import noncentrality
from .nonconforming import (
    Nonconforming,
    ObservedNonconforming,
    observed,
    total_area_limits,
)
from .specification import Specification

IntervalMethod: TypeAlias = Literal[
    "chi-square", "non-central-t", "bissell-1990", "boyles-1991", "chen-hsu-1995"
]

LEAST_CONFIDENCE = 0.5
MOST_CONFIDENCE = 0.999999
LARGEST_INDEX = 1e12
LARGEST_COUNT = 10_000_000


@dataclass(frozen=True, slots=True)
class Index:
    """An index with what is known of it."""

    value: Annotated[float, "The estimate; no unit."]
    lower: Annotated[float, "Lower end of the two-sided interval at the confidence asked."]
    upper: Annotated[float, "Upper end of it."]
    lower_bound: Annotated[
        float, "One-sided bound: the true index is at least this, with the confidence asked."
    ]
    method: Annotated[
        IntervalMethod, "Of interval and bound: an exact law, or the author and year of an approximation."
    ]


@dataclass(frozen=True, slots=True)
class NormalSummary:
    """What the indices need of the values, where the values themselves are not at hand.

    mean: of all values; count: N, how many; within: unbiased within-subgroup sigma, total: overall standard
    deviation (divisor N - 1); either may be ``None``, and the indices from it are then ``None`` too.
    """

    mean: float
    within: SigmaEstimate | None
    total: SigmaEstimate | None
    count: int


@dataclass(frozen=True, slots=True)
class Capability:
    """Indices of a normal characteristic; each null where it is not defined or lacks its sigma.

    cpm is (upper - lower)/(6τ̂) and cpmk min(upper - x̄, x̄ - lower)/(3τ̂), with τ̂² = Σ(xᵢ - target)²/N, the mean
    square deviation from the target (divisor N [boyles-1991]).
    """

    count: Annotated[int, "How many values there were."]
    mean: Annotated[float, "Of all values, in the unit of the characteristic."]
    within: Annotated[SigmaEstimate | None, "Within-subgroup sigma; null where there is none."]
    total: Annotated[SigmaEstimate | None, "Overall standard deviation; null where there is none."]
    confidence: Annotated[float, "Of each interval by itself, as a proportion."]
    cp: Annotated[
        Index | None,
        "Width of the specification over six within-subgroup sigma; null unless both limits are given.",
    ]
    cpk: Annotated[Index | None, "The smaller of cpl and cpu, or the only one there is."]
    cpu: Annotated[
        Index | None,
        "From the mean to the upper limit, over three within-subgroup sigma; null without that limit.",
    ]
    cpl: Annotated[
        Index | None,
        "From the lower limit to the mean, over three within-subgroup sigma; null without that limit.",
    ]
    pp: Annotated[Index | None, "As cp, with the overall standard deviation."]
    ppk: Annotated[Index | None, "As cpk, with the overall standard deviation."]
    ppu: Annotated[Index | None, "As cpu, with the overall standard deviation."]
    ppl: Annotated[Index | None, "As cpl, with the overall standard deviation."]
    cpm: Annotated[
        Index | None,
        "Width over six root mean square deviations from the target; null unless both limits and a target are given.",
    ]
    cpmk: Annotated[
        Index | None,
        "From the mean to the nearer limit, over three root mean square deviations from the target; null likewise.",
    ]
    expected_within: Annotated[
        Nonconforming | None,
        "Nonconforming product expected of a normal process with the within-subgroup sigma.",
    ]
    expected_total: Annotated[
        Nonconforming | None,
        "Nonconforming product expected of a normal process with the overall standard deviation.",
    ]
    observed: Annotated[ObservedNonconforming | None, "Nonconforming values counted; null from a summary."]


@dataclass(frozen=True, slots=True)
class MachineCapability:
    """Cm and Cmk of a short run made under constant conditions, on the overall standard deviation."""

    count: Annotated[int, "How many values there were."]
    mean: Annotated[float, "Of all values, in the unit of the characteristic."]
    total: Annotated[SigmaEstimate, "Overall standard deviation."]
    confidence: Annotated[float, "Of each interval by itself, as a proportion."]
    cm: Annotated[
        Index | None, "Width of the specification over six standard deviations; null with one limit."
    ]
    cmk: Annotated[Index, "From the mean to the nearer limit, over three standard deviations."]
    expected: Annotated[Nonconforming, "Nonconforming product expected of a normal process."]
    observed: Annotated[ObservedNonconforming | None, "Nonconforming values counted; null from a summary."]


@dataclass(frozen=True, slots=True)
class _Side:
    """All that one sigma gives."""

    both: Index | None
    least: Index
    upper: Index | None
    lower: Index | None
    expected: Nonconforming


def capability(
    data: Floats | NormalSummary,
    specification: Specification,
    *,
    within: SigmaEstimate | None = None,
    confidence: float = 0.95,
) -> Capability:
    """Indices, intervals and nonconforming product of a normal characteristic.

    data: values of any shape, NaN where missing, in the specification's unit; or a :class:`NormalSummary`.
    within: within-subgroup sigma of those values (``sigma.within``, ``sigma.moving_range``); with a summary
    it comes inside the summary. confidence: of each interval by itself, above 0.5 and at most 0.999999.

    Intervals: Cp and Pp by chi-square [kane-1986]; one-sided indices by non-central t
    [chou-owen-borrego-1990], exact for the overall standard deviation; Cpk and Ppk with two limits by
    [bissell-1990], asymptotic; Cpm by [boyles-1991]; Cpmk by the delta method [chen-hsu-1995].
    Coverage of a nominal 0.95, simulated: Cpk 0.94 to 0.96 from 5 values on, and its one-sided bound up to
    0.99 for a mean in the middle; Cpm and Cpmk 0.92 and more from 10 values, 0.87 from 5 with the mean off
    target; expected nonconforming with both limits 0.93 and more from 10 values, 0.91 from 5.

    Raises UnusableParameter ``confidence-out-of-range`` or ``limits-too-far``; UnusableData ``no-variation``
    (and what ``sigma.overall`` raises), ``count-out-of-range``, ``no-sigma``, ``not-finite``.
    """
    check_confidence(confidence)
    summary, values = _summarised(data, within)
    _check_summary(summary)
    _check_distances(summary, specification)
    count = summary.count
    short = long = None
    if summary.within is not None:
        scale = c4_of_freedom(summary.within.degrees_of_freedom)
        short = _side(summary.mean, summary.within, scale, count, specification, confidence)
    if summary.total is not None:
        long = _side(summary.mean, summary.total, 1.0, count, specification, confidence)
    cpm, cpmk = _target_indices(summary, specification, confidence)
    return Capability(
        count=count,
        mean=summary.mean,
        within=summary.within,
        total=summary.total,
        confidence=confidence,
        cp=short.both if short else None,
        cpk=short.least if short else None,
        cpu=short.upper if short else None,
        cpl=short.lower if short else None,
        pp=long.both if long else None,
        ppk=long.least if long else None,
        ppu=long.upper if long else None,
        ppl=long.lower if long else None,
        cpm=cpm,
        cpmk=cpmk,
        expected_within=short.expected if short else None,
        expected_total=long.expected if long else None,
        observed=None if values is None else observed(values, specification, confidence),
    )


def machine_capability(
    data: Floats | NormalSummary, specification: Specification, *, confidence: float = 0.95
) -> MachineCapability:
    """Cm and Cmk of a short run: the arithmetic of Pp and Ppk, under a machine's usual names.

    Arguments, intervals and errors as for :func:`capability`; a summary must hold the overall standard
    deviation. Source: [iso-22514-3].
    """
    check_confidence(confidence)
    summary, values = _summarised(data, None)
    _check_summary(summary)
    total = summary.total
    if total is None:
        raise UnusableData.of(
            "no-sigma",
            "Machine capability needs the overall standard deviation, and the summary has none.",
            "data",
        )
    _check_distances(summary, specification)
    side = _side(summary.mean, total, 1.0, summary.count, specification, confidence)
    return MachineCapability(
        count=summary.count,
        mean=summary.mean,
        total=total,
        confidence=confidence,
        cm=side.both,
        cmk=side.least,
        expected=side.expected,
        observed=None if values is None else observed(values, specification, confidence),
    )


# ---------------------------------------------------------------------------------------------------
# Input


def _summarised(
    data: Floats | NormalSummary, within: SigmaEstimate | None
) -> tuple[NormalSummary, Floats | None]:
    if isinstance(data, NormalSummary):
        return data, None
    flat = data.reshape(-1)
    present = flat == flat
    if not present.all():
        flat = flat[present]
    total = overall(flat)
    mean = float(flat.mean())
    # A second pass over the residuals restores the digits the first one lost.
    mean += float((flat - mean).mean())
    return NormalSummary(mean, within, total, flat.size), flat


def check_confidence(confidence: float) -> None:
    """Raises UnusableParameter ``confidence-out-of-range`` unless above 0.5 and at most 0.999999."""
    if not LEAST_CONFIDENCE < confidence <= MOST_CONFIDENCE:
        raise UnusableParameter.of(
            "confidence-out-of-range",
            f"The confidence must be above {LEAST_CONFIDENCE:g} and at most {MOST_CONFIDENCE:.6f}; "
            f"{confidence!r} is not usable.",
            "confidence",
        )


def _check_summary(summary: NormalSummary) -> None:
    faults = []
    if not math.isfinite(summary.mean):
        faults.append(Fault("not-finite", "The mean must be a finite number.", ("data", "mean")))
    if not 2 <= summary.count <= LARGEST_COUNT:
        detail = f"Capability needs 2 to {LARGEST_COUNT} values; there are {summary.count}."
        faults.append(Fault("count-out-of-range", detail, ("data",)))
    if summary.within is None and summary.total is None:
        detail = "The summary holds neither a within-subgroup sigma nor an overall standard deviation."
        faults.append(Fault("no-sigma", detail, ("data",)))
    for estimate in (summary.within, summary.total):
        if estimate is None:
            continue
        if estimate.sigma == 0.0:
            detail = (
                "There is no variation, so no index can be computed; "
                "check the resolution of the gauge or how the values were recorded."
            )
            faults.append(Fault("no-variation", detail, ("data",)))
        elif not 0.0 < estimate.sigma < math.inf:
            detail = "A standard deviation must be a positive finite number."
            faults.append(Fault("not-finite", detail, ("data",)))
        if not 0.1 <= estimate.degrees_of_freedom <= LARGEST_COUNT:
            detail = (
                f"The degrees of freedom of a standard deviation must be 0.1 to {LARGEST_COUNT}; "
                f"they are {estimate.degrees_of_freedom:g}."
            )
            faults.append(Fault("degrees-of-freedom-out-of-range", detail, ("data",)))
    if faults:
        raise UnusableData(*faults)


def _check_distances(summary: NormalSummary, specification: Specification) -> None:
    least = min(e.sigma for e in (summary.within, summary.total) if e is not None)
    for name, value in (
        ("lower", specification.lower),
        ("upper", specification.upper),
        ("target", specification.target),
    ):
        # Halved, because the difference of two allowed numbers may overflow.
        if value is not None and abs(0.5 * value - 0.5 * summary.mean) > LARGEST_INDEX * least:
            raise UnusableParameter.of(
                "limits-too-far",
                f"The {'target' if name == 'target' else name + ' limit'}, {value:.15g}, is more than "
                f"{LARGEST_INDEX:g} standard deviations from the mean, {summary.mean:g}; "
                "check that limits and values have the same unit.",
                "specification",
                name,
            )


# ---------------------------------------------------------------------------------------------------
# One sigma's indices


def _side(
    mean: float,
    estimate: SigmaEstimate,
    scale: float,
    count: int,
    specification: Specification,
    confidence: float,
) -> _Side:
    """Indices of one sigma, of which ``scale`` times the estimate is taken as σχ(ν)/√ν."""
    sigma, freedom = estimate.sigma, estimate.degrees_of_freedom
    lower, upper = specification.lower, specification.upper
    distances = []
    if lower is not None:
        distances.append((mean - lower) / sigma)
    if upper is not None:
        distances.append((upper - mean) / sigma)
    limits = distance_limits(np.array(distances), scale, count, freedom, confidence)
    singles = [
        Index(distance / 3.0, float(low), float(high), float(bound), "non-central-t")
        for distance, low, high, bound in zip(distances, *(limits / 3.0), strict=True)
    ]
    below = singles[0] if lower is not None else None
    above = singles[-1] if upper is not None else None
    if lower is None or upper is None:
        return _Side(None, singles[0], above, below, _one_tail(below, above))
    cp = (upper - lower) / (6.0 * sigma)
    factors = chi_factors(freedom, confidence) / scale
    both = _scaled(cp, factors, "chi-square")
    least = min(distances) / 3.0
    half, bound = bissell_halfwidths(least, count, freedom, confidence)
    cpk = Index(least, least - half, least + half, least - bound, "bissell-1990")
    return _Side(
        both,
        cpk,
        above,
        below,
        _two_tails(distances[0], distances[1], limits, scale, count, freedom, confidence),
    )


def distance_limits(distances: Floats, scale: float, count: int, freedom: float, confidence: float) -> Floats:
    """Confidence limits for the distances of the mean from a limit, in sigma.

    distances: (k,) estimated ones, positive inside. Returns (3, k): lower and upper limit of the two-sided
    interval, and the one-sided lower bound. √N·distance/scale is a non-central t with noncentrality √N
    times the true distance. Source: [chou-owen-borrego-1990].
    """
    root = math.sqrt(count)
    tail = 0.5 * (1.0 - confidence)
    k = distances.size
    probability = np.repeat([1.0 - tail, tail, confidence], k)
    t = np.tile(distances * (root / scale), 3)
    return noncentrality(t, freedom, probability).reshape(3, k) / root


def _scaled(value: float, factors: Floats, method: IntervalMethod) -> Index:
    lower, upper, bound = (value * factors).tolist()
    return Index(value, lower, upper, bound, method)


def chi_factors(freedom: float, confidence: float) -> Floats:
    """√(χ²/ν) at the lower and upper limit and the one-sided lower bound, (3,)."""
    tail = 0.5 * (1.0 - confidence)
    half = 0.5 * freedom
    lower, bound = scipy.special.gammaincinv(half, np.array([tail, 1.0 - confidence]))
    upper = scipy.special.gammainccinv(half, tail)
    return np.sqrt(np.array([lower, upper, bound]) / half)


def bissell_halfwidths(cpk: float, count: int, freedom: float, confidence: float) -> tuple[float, float]:
    """z·√(1/(9N) + Cpk²/(2ν)) with the two-sided and the one-sided normal quantile [bissell-1990]."""
    deviation = math.sqrt(1.0 / (9.0 * count) + cpk * cpk / (2.0 * freedom))
    return _quantile(0.5 + 0.5 * confidence) * deviation, _quantile(confidence) * deviation


def _quantile(probability: float) -> float:
    return float(scipy.special.ndtri(probability))


# ---------------------------------------------------------------------------------------------------
# Nonconforming product


def _one_tail(below: Index | None, above: Index | None) -> Nonconforming:
    index = below or above
    assert index is not None
    value, low, high, bound = (
        1e6 * scipy.special.ndtr(-3.0 * np.array([index.value, index.upper, index.lower, index.lower_bound]))
    ).tolist()
    return Nonconforming(
        value if below else None, value if above else None, value, low, high, bound, "non-central-t"
    )


def _two_tails(
    to_lower: float,
    to_upper: float,
    limits: Floats,
    scale: float,
    count: int,
    freedom: float,
    confidence: float,
) -> Nonconforming:
    below, above = scipy.special.ndtr([-to_lower, -to_upper]).tolist()
    tail = 0.5 * (1.0 - confidence)
    # A short distance is a large tail: the lower limit of one is the upper limit of the other.
    area = scipy.special.ndtr(-limits)
    upper, lower, bound = total_area_limits(
        to_lower / scale,
        to_upper / scale,
        area[:, 0],
        area[:, 1],
        count,
        freedom,
        np.array([1.0 - tail, tail, confidence]),
    ).tolist()
    total = below + above
    return Nonconforming(
        1e6 * below,
        1e6 * above,
        1e6 * total,
        # A mean in the middle gives the least area its sigma allows, which a true one may hardly reach.
        1e6 * min(lower, total),
        1e6 * max(upper, total),
        1e6 * bound,
        "weerahandi-1993",
    )


# ---------------------------------------------------------------------------------------------------
# Indices with a target


def _target_indices(
    summary: NormalSummary, specification: Specification, confidence: float
) -> tuple[Index | None, Index | None]:
    lower, upper, target = specification.lower, specification.upper, specification.target
    if lower is None or upper is None or target is None or summary.total is None:
        return None, None
    n = summary.count
    # All in units of the standard deviation with divisor N.
    unit = summary.total.sigma * math.sqrt((n - 1) / n)
    offset = (summary.mean - target) / unit
    tau = math.hypot(1.0, offset)
    cpm = (upper - lower) / (6.0 * unit * tau)
    factors = chi_factors(boyles_freedom(offset, n), confidence)
    to_lower, to_upper = (summary.mean - lower) / unit, (upper - summary.mean) / unit
    deviation = cpmk_deviation(to_lower, to_upper, offset, n)
    cpmk = min(to_lower, to_upper) / (3.0 * tau)
    half = _quantile(0.5 + 0.5 * confidence) * deviation
    bound = _quantile(confidence) * deviation
    return (
        _scaled(cpm, factors, "boyles-1991"),
        Index(cpmk, cpmk - half, cpmk + half, cpmk - bound, "chen-hsu-1995"),
    )


def boyles_freedom(offset: float, count: int) -> float:
    """ν = n(1 + ξ²)²/(1 + 2ξ²), with ξ the distance of mean from target in sigma.

    The degrees of freedom at which χ²(ν)/ν has the first two moments of τ̂²/τ² [boyles-1991].
    """
    square = min(offset * offset, 1e100)
    # Bounded where a chi-square of so many degrees has no width left.
    return min(count * (1.0 + square) * (1.0 + square) / (1.0 + 2.0 * square), 1e15)


def cpmk_deviation(to_lower: float, to_upper: float, offset: float, count: int) -> float:
    """Asymptotic standard deviation of Ĉpmk, from those of x̄ and s² (delta method) [chen-hsu-1995].

    to_lower, to_upper: distances of the mean from the limits, and offset from the target, in sigma.
    """
    square = 1.0 + offset * offset
    tau = math.sqrt(square)
    distance = min(to_lower, to_upper)
    toward = 1.0 if to_lower < to_upper else -1.0
    by_mean = toward / (3.0 * tau) - distance * offset / (3.0 * square * tau)
    by_variance = -distance / (6.0 * square * tau)
    return math.sqrt((by_mean * by_mean + 2.0 * by_variance * by_variance) / count)
