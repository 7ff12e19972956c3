"""Measurement uncertainty in deciding whether an item conforms: probabilities, guard bands, and both risks.

A measured value is the true one plus a normal error of known standard uncertainty u. With nothing known of the
product beforehand the true value is normal about the measured one; with a normal process it is drawn towards the
process's mean [jcgm-106]. The decision rules are those of [iso-14253-1].
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from .. import cautions as caution
from ..cautions import Caution
from ..data import Floats
from ..errors import Fault, UnusableParameter
from ..factors import gauss_legendre
from .indices import LARGEST_INDEX, chi_factors
from .specification import Specification

ConformanceVerdict: TypeAlias = Literal["conforming", "nonconforming", "undecided"]

_NODES = 64
_REACH = 8.5
_STEPS = 200
_COARSE = 3.0
_LEAST_RATIO = 1e-6


@dataclass(frozen=True, slots=True)
class ProcessDistribution:
    """A normal process: mean and standard deviation of the product itself."""

    mean: float
    sd: float


@dataclass(frozen=True, slots=True)
class ResultConformance:
    """What one measured value says of the item."""

    value: Annotated[float, "As measured."]
    expected: Annotated[
        float, "The true value's expectation: as measured, or drawn towards the process's mean."
    ]
    standard_uncertainty: Annotated[float, "Of the true value, given the result and what else was known."]
    conformance_probability: Annotated[float, "That the item conforms."]
    below_probability: Annotated[float | None, "That it is below the lower limit; null where there is none."]
    above_probability: Annotated[float | None, "That it is above the upper limit; null where there is none."]
    verdict: Annotated[
        ConformanceVerdict,
        "`conforming` or `nonconforming` where the risk of being wrong is within the one stated; else `undecided`. It "
        "informs a decision and never replaces the site's approved procedure.",
    ]


@dataclass(frozen=True, slots=True)
class GuardedLimits:
    """Limits within which a measured value may be accepted with a stated consumer's risk."""

    consumer_risk: Annotated[
        float,
        "Largest probability that an item is nonconforming whose measured value is on or within the limits.",
    ]
    lower: Annotated[float | None, "Null where the specification has no lower limit."]
    upper: Annotated[float | None, "Null where the specification has no upper limit."]
    guard_lower: Annotated[
        float | None,
        "From the lower specification limit inwards, negative where acceptance reaches beyond it.",
    ]
    guard_upper: Annotated[float | None, "From the upper specification limit inwards, likewise."]


@dataclass(frozen=True, slots=True)
class GlobalRisks:
    """How often a plan of inspection is wrong, over all product."""

    accepted: Annotated[float, "Share of the product accepted."]
    nonconforming: Annotated[float, "Share of the product that does not conform."]
    consumer: Annotated[float, "Share of the product that is accepted and does not conform."]
    producer: Annotated[float, "Share of the product that is rejected and conforms."]
    consumer_of_accepted: Annotated[
        float | None, "Share of the accepted product that does not conform; null where nothing is accepted."
    ]
    producer_of_rejected: Annotated[
        float | None, "Share of the rejected product that conforms; null where nothing is rejected."
    ]
    accuracy: Annotated[float, "Absolute error of the shares at the most."]


@dataclass(frozen=True, slots=True)
class ProductCapability:
    """The product's own spread: what was observed, less what the measurement adds."""

    observed_sd: Annotated[float, "Standard deviation of the measured values."]
    product_sd: Annotated[float, "Of the product itself: the root of the difference of the squares."]
    product_sd_lower: Annotated[
        float | None,
        "Lower end of its interval by chi-square, the uncertainty taken as known; null without a count.",
    ]
    product_sd_upper: Annotated[float | None, "Upper end of it; null likewise."]
    observed_pp: Annotated[float | None, "Pp of the measured values; null with one limit."]
    product_pp: Annotated[float | None, "Pp of the product itself; null with one limit."]
    observed_ppk: Annotated[float, "Ppk of the measured values."]
    product_ppk: Annotated[float, "Ppk of the product itself."]
    measurement_share: Annotated[float, "Share of the observed variance that is the measurement's."]


def product_distribution(mean: float, observed_sd: float, uncertainty: float) -> ProcessDistribution:
    """The product's own distribution from that of measured values.

    Raises UnusableParameter ``uncertainty-exceeds-spread`` where the measurement explains all of the spread.
    """
    ratio = uncertainty / observed_sd
    if not ratio < 1.0:
        raise UnusableParameter.of(
            "uncertainty-exceeds-spread",
            f"The standard uncertainty, {uncertainty:g}, is no less than the standard deviation of the values, "
            f"{observed_sd:g}: nothing is left for the product, so one of the two is wrong.",
            "process",
            "sd",
        )
    return ProcessDistribution(mean, observed_sd * math.sqrt((1.0 - ratio) * (1.0 + ratio)))


def product_capability(
    mean: float,
    observed_sd: float,
    uncertainty: float,
    specification: Specification,
    *,
    count: int | None = None,
    confidence: float = 0.95,
) -> ProductCapability:
    """Pp and Ppk with and without the measurement's share of the spread; see :func:`product_distribution`.

    Raises UnusableParameter ``limits-too-far`` too.
    """
    own = product_distribution(mean, observed_sd, uncertainty).sd
    for name, limit in (("lower", specification.lower), ("upper", specification.upper)):
        if limit is not None and abs(0.5 * limit - 0.5 * mean) > LARGEST_INDEX * own:
            raise UnusableParameter.of(
                "limits-too-far",
                f"The {name} limit, {limit:.15g}, is out of all proportion to the mean, {mean:g}, and the spread; "
                "check that they have the same unit.",
                "specification",
                name,
            )
    low = high = None
    if count is not None:
        factors = chi_factors(count - 1.0, confidence)
        # χ is inverted: the larger factor bounds sigma from below.
        low, high = (
            math.sqrt(max((observed_sd / float(factor)) ** 2 - uncertainty**2, 0.0))
            for factor in (factors[1], factors[0])
        )
    distances = [
        distance
        for distance in (
            None if specification.lower is None else mean - specification.lower,
            None if specification.upper is None else specification.upper - mean,
        )
        if distance is not None
    ]
    width = sum(distances) if specification.two_sided else None
    return ProductCapability(
        observed_sd=observed_sd,
        product_sd=own,
        product_sd_lower=low,
        product_sd_upper=high,
        observed_pp=None if width is None else width / (6.0 * observed_sd),
        product_pp=None if width is None else width / (6.0 * own),
        observed_ppk=min(distances) / (3.0 * observed_sd),
        product_ppk=min(distances) / (3.0 * own),
        measurement_share=(uncertainty / observed_sd) ** 2,
    )


def _shrinkage(uncertainty: float, process: ProcessDistribution | None) -> tuple[float, float]:
    """Weight of the measured value in the true one's expectation, and the true one's standard uncertainty."""
    if process is None:
        return 1.0, uncertainty
    if process.sd < _LEAST_RATIO * uncertainty:
        raise UnusableParameter.of(
            "process-too-narrow",
            f"The process's own spread, {process.sd:g}, is so small beside the uncertainty, {uncertainty:g}, that a "
            "result says nothing; check that both have the same unit.",
            "process",
            "sd",
        )
    both = math.hypot(uncertainty, process.sd)
    return (process.sd / both) ** 2, uncertainty * (process.sd / both)


def conformance(
    value: float,
    uncertainty: float,
    specification: Specification,
    *,
    process: ProcessDistribution | None = None,
    risk: float = 0.05,
) -> ResultConformance:
    """Probability that an item conforms whose measured value is ``value`` [jcgm-106], sections 6.2 and 7.

    process: what is known of the product beforehand. risk: of a wrong verdict, below 0.5.
    """
    weight, sd = _shrinkage(uncertainty, process)
    expected = value if process is None else process.mean + weight * (value - process.mean)
    below = above = None
    if specification.lower is not None:
        below = float(scipy.special.ndtr((specification.lower - expected) / sd))
    if specification.upper is not None:
        above = float(scipy.special.ndtr((expected - specification.upper) / sd))
    wrong = min((below or 0.0) + (above or 0.0), 1.0)
    verdict: ConformanceVerdict = (
        "conforming" if wrong <= risk else "nonconforming" if 1.0 - wrong <= risk else "undecided"
    )
    return ResultConformance(value, expected, sd, 1.0 - wrong, below, above, verdict)


def acceptance_limits(
    uncertainty: float,
    specification: Specification,
    consumer_risk: float,
    *,
    process: ProcessDistribution | None = None,
) -> GuardedLimits | None:
    """The widest limits for measured values at which an item is nonconforming with the risk stated.

    With one limit and no process the guard band is u·Φ⁻¹(1 - risk) [jcgm-106], section 8.3; with two limits
    both tails count. ``None`` where no measured value is that safe. consumer_risk: above 0 and below 0.5.
    """
    weight, sd = _shrinkage(uncertainty, process)
    one = float(-scipy.special.ndtri(consumer_risk))
    lower, upper = specification.lower, specification.upper
    guard = one * sd
    if lower is not None and upper is not None:
        width = (0.5 * upper - 0.5 * lower) * 2.0

        def risk(at: float) -> float:
            return float(scipy.special.ndtr(-at / sd) + scipy.special.ndtr((at - width) / sd))

        low, high = guard, 0.5 * width
        if high <= low or risk(high) > consumer_risk:
            return None
        for _ in range(_STEPS):
            middle = 0.5 * (low + high)
            if not low < middle < high:
                break
            low, high = (middle, high) if risk(middle) > consumer_risk else (low, middle)
        guard = high

    def measured(expected: float) -> float:
        return expected if process is None else process.mean + (expected - process.mean) / weight

    low_limit = None if lower is None else measured(lower + guard)
    high_limit = None if upper is None else measured(upper - guard)
    return GuardedLimits(
        consumer_risk,
        low_limit,
        high_limit,
        None if lower is None or low_limit is None else low_limit - lower,
        None if upper is None or high_limit is None else upper - high_limit,
    )


def global_risks(
    uncertainty: float,
    specification: Specification,
    accept_lower: float | None,
    accept_upper: float | None,
    process: ProcessDistribution,
) -> GlobalRisks:
    """Consumer's and producer's risk of accepting measured values within limits [jcgm-106], section 9.

    ∫ f(x) P(accepted | x) dx over nonconforming x, and its complement over conforming x, by Gauss–Legendre rules
    between the places where either changes. Raises UnusableParameter ``limits-crossed``,
    ``no-limit``, ``uncertainty-out-of-proportion``.
    """
    faults = []
    if accept_lower is None and accept_upper is None:
        faults.append(Fault("no-limit", "A plan needs a limit of acceptance.", ("acceptance",)))
    elif accept_lower is not None and accept_upper is not None and not accept_lower < accept_upper:
        faults.append(
            Fault("limits-crossed", "The lower limit must be below the upper one.", ("acceptance", "lower"))
        )
    if faults:
        raise UnusableParameter(*faults)
    mean, sd = process.mean, process.sd

    def scaled(x: float | None, none: float) -> float:
        # Beyond 40 deviations there is no product, and no overflow.
        return none if x is None else min(max((x - mean) / sd, -40.0), 40.0)

    lower, upper = scaled(specification.lower, -40.0), scaled(specification.upper, 40.0)
    a, b = scaled(accept_lower, -math.inf), scaled(accept_upper, math.inf)
    error = uncertainty / sd
    if not _LEAST_RATIO <= error <= 1.0 / _LEAST_RATIO:
        raise UnusableParameter.of(
            "uncertainty-out-of-proportion",
            f"The uncertainty, {uncertainty:g}, and the process's own spread, {sd:g}, differ so much that the plan has "
            "no risk worth computing; check that both have the same unit.",
            "process",
            "sd",
        )
    marks = {-_REACH, _REACH, 0.0, lower, upper}
    for limit in (a, b):
        if math.isfinite(limit):
            marks |= {limit + step * error for step in (-8.0, -3.0, 0.0, 3.0, 8.0)}
    ends = sorted(mark for mark in marks if -_REACH <= mark <= _REACH)
    x, weight = gauss_legendre(_NODES)
    start, length = np.array(ends[:-1])[:, None], np.diff(ends)[:, None]
    z = start + length * x
    mass = length * weight * np.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi)
    rejected = scipy.special.ndtr((a - z) / error) + scipy.special.ndtr((z - b) / error)
    accepted = _between((a - z) / error, (b - z) / error)
    middle = (start + 0.5 * length)[:, 0]
    conforming = (middle > lower) & (middle < upper)
    consumer = float((mass * accepted)[~conforming].sum())
    producer = float((mass * rejected)[conforming].sum())
    both = math.hypot(1.0, error)
    share = float(_between(np.array([a / both]), np.array([b / both]))[0])
    outside = float(scipy.special.ndtr(lower) if specification.lower is not None else 0.0) + float(
        scipy.special.ndtr(-upper) if specification.upper is not None else 0.0
    )
    left = 1.0 - share
    return GlobalRisks(
        accepted=share,
        nonconforming=outside,
        consumer=consumer,
        producer=producer,
        consumer_of_accepted=min(consumer / share, 1.0) if share > 1e-14 else None,
        producer_of_rejected=min(producer / left, 1.0) if left > 1e-14 else None,
        accuracy=1e-12,
    )


def _between(low: Floats, high: Floats) -> Floats:
    """Φ(high) - Φ(low), from the nearer tail."""
    right = low > 0.0
    first = np.where(right, -high, low)
    second = np.where(right, -low, high)
    return scipy.special.ndtr(second) - scipy.special.ndtr(first)


def cautions_of(
    uncertainty: float,
    specification: Specification,
    consumer_risk: float | None,
    limits: GuardedLimits | None,
    process: ProcessDistribution | None,
) -> tuple[Caution, ...]:
    """What is to be known about a decision under this uncertainty."""
    return caution.collect(
        _no_zone(consumer_risk, limits),
        _reaches_beyond(limits),
        _coarse(uncertainty, specification),
        _leans(process),
    )


def _no_zone(consumer_risk: float | None, limits: GuardedLimits | None) -> Caution | None:
    if consumer_risk is None or limits is not None:
        return None
    return Caution(
        "no-acceptance-zone",
        "No measured value is so safe: the uncertainty is too large for this specification and risk. Measure better, "
        "average repeats, or agree on another risk.",
        ("consumer_risk",),
        "jcgm-106",
    )


def _reaches_beyond(limits: GuardedLimits | None) -> Caution | None:
    if limits is None or min(limits.guard_lower or 0.0, limits.guard_upper or 0.0) >= 0.0:
        return None
    return Caution(
        "acceptance-beyond-specification",
        "An acceptance limit lies beyond the specification's, for the process is trusted more than the measured value. "
        "Such acceptance needs the consumer's agreement.",
        ("process",),
        "jcgm-106",
    )


def _coarse(uncertainty: float, specification: Specification) -> Caution | None:
    if specification.lower is None or specification.upper is None:
        return None
    width = 0.5 * specification.upper - 0.5 * specification.lower
    if 2.0 * width >= 4.0 * _COARSE * uncertainty:
        return None
    return Caution(
        "coarse-measurement",
        f"The specification is {2.0 * width / uncertainty:.2g} standard uncertainties wide; below {4 * _COARSE:g} the "
        "measurement decides much of what is accepted.",
        ("standard_uncertainty",),
        "common practice",
    )


def _leans(process: ProcessDistribution | None) -> Caution | None:
    if process is None:
        return None
    return Caution(
        "process-supposed",
        "The risks suppose a normal process in control with the mean and standard deviation given; they mislead where "
        "it has drifted or has tails of its own.",
        ("process",),
        "jcgm-106",
    )
