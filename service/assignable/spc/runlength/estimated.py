"""The run length of a chart whose limits are estimated: a random variable, fixed once the baseline is taken.

With the centre and sigma estimated, the probability that a point in control lies beyond the limits is

    p = Φ(-kW + Z/√m) + Φ(-kW - Z/√m),

Z the standard normal error of the centre, W = σ̂/σ independent of it, m the number of plotted statistics
that the centre is the mean of. Given the baseline the run length is geometric, of mean 1/p: the conditional
average run length, which differs from one baseline to the next [jensen-2006].

W is taken as χ_ν/(√ν·c4(ν + 1)), unbiased, with ν degrees of freedom. That is exact for the pooled standard
deviation; for the mean range, the mean standard deviation and the mean moving range ν is the effective one
that gives W its exact variance, and the shape is an approximation [patnaik-1950]: in simulations of ten
subgroups or more the shares of baselines below the stated percentiles agree to 0.003, the worst being the
lowest percentiles of thirty single values (0.007 where 0.010 is stated). Everything else here is quadrature
to about ten digits. Values are independent and normal, and the baseline in control.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from ..data import Floats
from ..errors import UnusableParameter
from ..factors import LARGEST_SIZE, c4, d2, d3, gauss_legendre, log_c4_of_freedom, relative_sd_of_sd
from ..sigma import _moving_mean_variance, freedom_of_relative_variance

SigmaEstimator: TypeAlias = Literal["mean-range", "mean-sd", "pooled-sd", "mean-moving-range"]

ESTIMATORS = ("mean-range", "mean-sd", "pooled-sd", "mean-moving-range")
FEWEST_SUBGROUPS, MOST_SUBGROUPS = 2, 1_000_000
SMALLEST_MULTIPLE, LARGEST_MULTIPLE = 0.5, 6.0
SHORTEST_ARL, LONGEST_ARL = 2.0, 1e8
PERCENTILES = (0.05, 0.10, 0.25, 0.50, 0.75, 0.90)
MOST_PERCENTILES = 20

# Half the range of Z; what is left out weighs 2e-17.
_REACH = 8.5
_PANELS, _PANEL_NODES = 34, 12
_MOMENT_NODES = 64
_MANY = 1e4  # degrees of freedom
_LARGEST = 690.0  # logarithm of the largest mean that is told


@dataclass(frozen=True, slots=True)
class BaselineKnowledge:
    """How well a baseline knows its centre and sigma."""

    means: Annotated[float, "Plotted statistics that the centre line is the mean of."]
    degrees_of_freedom: Annotated[float, "Degrees of freedom of sigma, effective ones where not whole."]
    exact: Annotated[bool, "Whether sigma has exactly the distribution that these imply."]


@dataclass(frozen=True, slots=True)
class ArlPercentile:
    """A percentile of the conditional in-control average run length, over baselines."""

    probability: Annotated[float, "Share of baselines with a shorter average run length."]
    arl: Annotated[float, "The average run length that this share falls short of."]
    false_alarm_probability: Annotated[
        float, "Probability that a point gives a false alarm: the inverse of the run length."
    ]


@dataclass(frozen=True, slots=True)
class ConditionalRunLength:
    """In control, over the baselines that might have been taken: what estimating the limits does."""

    nominal_arl: Annotated[float, "Average run length were the centre and sigma known."]
    mean_arl: Annotated[
        float | None,
        "Mean of the conditional average run length; null where it is infinite (few degrees of freedom) or "
        "beyond 1e299.",
    ]
    sd_arl: Annotated[
        float | None,
        "Its standard deviation; null where it is infinite (few degrees of freedom) or beyond 1e299.",
    ]
    mean_false_alarm_probability: Annotated[float, "Mean probability that a point gives a false alarm."]
    sd_false_alarm_probability: Annotated[float, "Its standard deviation over baselines."]
    percentiles: Annotated[tuple[ArlPercentile, ...], "Percentiles of the conditional average run length."]
    probability_below_nominal: Annotated[
        float, "Share of baselines whose average run length is shorter than nominal."
    ]
    probability_below_half_nominal: Annotated[
        float, "Share of baselines whose average run length is less than half the nominal."
    ]


# ---------------------------------------------------------------------------------------------------
# What a baseline knows


@lru_cache(maxsize=4096)
def baseline(subgroups: int, size: int, estimator: SigmaEstimator) -> BaselineKnowledge:
    """What ``subgroups`` (2 to 1e6) subgroups of ``size`` values tell, none missing.

    size: 2 to 1000; 1 with ``mean-moving-range`` (span 2) and only then: subgroups then counts the values.
    The effective degrees of freedom are those of ``sigma.within`` and ``sigma.moving_range``.
    Raises UnusableParameter: an argument out of its range, or an estimator that does not fit the size.
    """
    if not FEWEST_SUBGROUPS <= subgroups <= MOST_SUBGROUPS:
        raise UnusableParameter.of(
            "subgroups-out-of-range",
            f"A baseline has {FEWEST_SUBGROUPS} to {MOST_SUBGROUPS} subgroups, not {subgroups}.",
            "subgroups",
        )
    if not 1 <= size <= LARGEST_SIZE:
        raise UnusableParameter.of(
            "size-out-of-range", f"A subgroup has 1 to {LARGEST_SIZE} values, not {size}.", "size"
        )
    if estimator not in ESTIMATORS or (estimator == "mean-moving-range") != (size == 1):
        fit = "mean-moving-range" if size == 1 else "mean-range, mean-sd or pooled-sd"
        raise UnusableParameter.of(
            "estimator-does-not-fit",
            f"With {size} value{'s'[: size > 1]} a subgroup, sigma is estimated by {fit}, not by {estimator!r}.",
            "sigma_estimator",
        )
    m = subgroups
    if estimator == "pooled-sd":
        return BaselineKnowledge(float(m), float(m * (size - 1)), True)
    if estimator == "mean-moving-range":
        relative = _moving_mean_variance(m - 1, 2) / d2(2) ** 2
    else:
        expected, deviation = (
            (d2(size), d3(size)) if estimator == "mean-range" else (c4(size), relative_sd_of_sd(size))
        )
        relative = (deviation / expected) ** 2 / m
    # Two values have one range and one deviation, which is a chi whatever it is called.
    return BaselineKnowledge(float(m), freedom_of_relative_variance(relative), size <= 2 and m * size == 2)


def known(means: float, degrees_of_freedom: float, *, exact: bool = True) -> BaselineKnowledge:
    """A baseline stated by the weight of its centre (1 to 1e9) and its degrees of freedom (0.1 to 1e12)."""
    for value, low, high, name in (
        (means, 1.0, 1e9, "means"),
        (degrees_of_freedom, 0.1, 1e12, "degrees_of_freedom"),
    ):
        if not low <= value <= high:
            raise UnusableParameter.of("out-of-range", f"{name} must be from {low:g} to {high:g}.", name)
    return BaselineKnowledge(float(means), float(degrees_of_freedom), exact)


# ---------------------------------------------------------------------------------------------------
# Quadrature


@lru_cache(maxsize=1)
def _over_centre() -> tuple[Floats, Floats]:
    """|Z| and weights (q,) of its density, in short panels: with many degrees of freedom the integrand steps."""
    nodes, weights = gauss_legendre(_PANEL_NODES)
    width = _REACH / _PANELS
    z = (width * (np.arange(_PANELS)[:, None] + nodes)).ravel()
    return z, np.tile(width * weights, _PANELS) * math.sqrt(2.0 / math.pi) * np.exp(-0.5 * z * z)


def _reach(offset: Floats, alarm: float) -> Floats:
    """u with Φ(-u + d) + Φ(-u - d) = alarm for each offset d ≥ 0: (q,) in and out.

    Newton on the logarithm, kept between bounds that follow from one tail and from two; stops at a step
    of 1e-14 or after 60.
    """
    one, both = -float(scipy.special.ndtri(alarm)), -float(scipy.special.ndtri(0.5 * alarm))
    low = np.maximum(offset + one, both)
    high = offset + both
    u = low
    log_alarm = math.log(alarm)
    for _ in range(60):
        near, far = u - offset, u + offset
        p = scipy.special.ndtr(-near) + scipy.special.ndtr(-far)
        excess = np.log(p) - log_alarm
        low, high = np.where(excess > 0.0, u, low), np.where(excess > 0.0, high, u)
        slope = (np.exp(-0.5 * near * near) + np.exp(-0.5 * far * far)) / (math.sqrt(2.0 * math.pi) * p)
        step = u + excess / np.maximum(slope, 1e-300)
        step = np.where((step >= low) & (step <= high), step, 0.5 * (low + high))
        moved = float(np.abs(step - u).max())
        u = step
        if moved <= 1e-14 * float(u.max()):
            break
    return u


def _chi_scale(freedom: float) -> float:
    """ν·c4², so that this times W² is chi-square."""
    return freedom * math.exp(2.0 * log_c4_of_freedom(freedom))


def _probability_sigma_below(ratio: Floats, freedom: float) -> Floats:
    half = 0.5 * _chi_scale(freedom)
    below: Floats = scipy.special.gammainc(0.5 * freedom, half * ratio * ratio)
    return below


def probability_shorter(known_by: BaselineKnowledge, multiple: float, arl: float) -> float:
    """Share of baselines whose conditional in-control average run length is less than ``arl`` (above 1).

    multiple: of the limits, 0.5 to 6. Raises UnusableParameter outside these ranges.
    Source: [gandy-kvaloy-2013] for the question; the integral over the centre's error of the law of sigma.
    """
    _check_multiple(multiple)
    if not 1.0 < arl < 1e300:
        raise UnusableParameter.of("arl-out-of-range", "An average run length must be more than 1.", "arl")
    return _shorter(known_by, multiple, 1.0 / arl)


def _shorter(known_by: BaselineKnowledge, multiple: float, alarm: float) -> float:
    z, weight = _over_centre()
    u = _reach(z / math.sqrt(known_by.means), alarm)
    below = float(weight @ _probability_sigma_below(u / multiple, known_by.degrees_of_freedom))
    return min(max(below, 0.0), 1.0)


def _moments(known_by: BaselineKnowledge, multiple: float, power: int) -> float | None:
    """E[p^power] over baselines; None where it is infinite or beyond 1e299. power: -2, -1, 1 or 2."""
    freedom = known_by.degrees_of_freedom
    scale = _chi_scale(freedom)
    # 1/p grows like exp(k²W²/2): what is left of the decay of the density of W² settles the far end.
    left = scale + min(power, 0) * multiple**2
    if left <= 0.0:
        return None
    shape = 0.5 * (freedom - min(power, 0))
    low = math.sqrt(2.0 * float(scipy.special.gammaincinv(0.5 * freedom, 1e-18)) / scale)
    high = math.sqrt(2.0 * float(scipy.special.gammainccinv(shape, 1e-18)) / left)
    if power > 0:
        # p is largest where sigma is small, if that is not too seldom.
        low = 0.0 if freedom < 40.0 else low * (1.0 - 2.0 / math.sqrt(freedom))
    nodes, weights = gauss_legendre(_MOMENT_NODES)
    # Squared nodes crowd at the low end, where a density with few degrees of freedom is not smooth.
    w = low + (high - low) * nodes * nodes
    # Taken from w = 1, where what is large cancels before it is computed.
    e = w - 1.0
    log_density = np.log(nodes * weights) + (freedom - 1.0) * np.log1p(e) - scale * e * (1.0 + 0.5 * e)
    if freedom < _MANY:
        constant = 0.5 * freedom * math.log(0.5 * scale) - float(scipy.special.gammaln(0.5 * freedom))
        log_density += math.log(4.0 * (high - low)) + constant - 0.5 * scale
    else:
        # The range is that of the density itself, all but, and its own sum is nearer 1 than a constant of terms
        # of the size of ν could be.
        peak = float(log_density.max())
        log_density -= peak + math.log(float(np.exp(log_density - peak).sum()))
    z_nodes, z_weights = gauss_legendre(_MOMENT_NODES)
    z = _REACH * z_nodes * z_nodes
    log_centre = (
        math.log(2.0 * _REACH) + np.log(z_nodes * z_weights) + 0.5 * math.log(2.0 / math.pi) - 0.5 * z * z
    )
    offset = (z / math.sqrt(known_by.means))[:, None]
    log_p = np.logaddexp(
        scipy.special.log_ndtr(offset - multiple * w), scipy.special.log_ndtr(-offset - multiple * w)
    )
    terms = power * log_p + log_density + log_centre[:, None]
    top = float(terms.max())
    total = top + math.log(float(np.exp(terms - top).sum()))
    return math.exp(total) if total < _LARGEST else None


def _mean_alarm(known_by: BaselineKnowledge, multiple: float) -> float:
    # A new point's distance from the estimated centre, over the estimated sigma, is Student's t.
    c = math.exp(log_c4_of_freedom(known_by.degrees_of_freedom))
    t = multiple / (c * math.sqrt(1.0 + 1.0 / known_by.means))
    return 2.0 * float(scipy.special.stdtr(known_by.degrees_of_freedom, -t))


def rising_root(miss: Callable[[float], float], low: float, high: float, width: float) -> float:
    """Where ``miss``, negative at low and positive at high, is zero: Illinois steps, at most 100 of them.

    Both functions solved here are all but straight on their scales.
    """
    below, above = miss(low), miss(high)
    if low >= high or below >= 0.0:
        return low
    if above <= 0.0:
        return high
    side = 0
    x = low
    for _ in range(100):
        before, x = x, low - below * (high - low) / (above - below)
        value = miss(x)
        if value < 0.0:
            low, below = x, value
            above = 0.5 * above if side < 0 else above
            side = -1
        elif value > 0.0:
            high, above = x, value
            below = 0.5 * below if side > 0 else below
            side = 1
        if value == 0.0 or high - low <= width or abs(x - before) <= 0.1 * width:
            break
    return x


def _percentile(known_by: BaselineKnowledge, multiple: float, probability: float) -> float:
    """The logarithm of the ARL that a share of baselines falls short of."""
    freedom = known_by.degrees_of_freedom
    goal = float(scipy.special.ndtri(probability))

    def miss(log_arl: float) -> float:
        share = _shorter(known_by, multiple, math.exp(-log_arl))
        return float(scipy.special.ndtri(min(max(share, 1e-300), 1.0 - 1e-16))) - goal

    # Begun as if all the error were sigma's; the centre's makes it shorter.
    ratio = math.sqrt(
        2.0 * float(scipy.special.gammaincinv(0.5 * freedom, probability)) / _chi_scale(freedom)
    )
    start = math.log(0.5) - float(scipy.special.log_ndtr(-multiple * ratio))
    low = high = min(max(start, 1e-9), _LARGEST)
    step = 0.02 + 1.0 / known_by.means
    while miss(low) > 0.0 and low > 1e-9:
        high, low = low, max(0.5 * low, low - step) if low > 1e-3 else 1e-9
        step *= 2.0
    if high == low:
        step = 0.02
        while miss(high) < 0.0 and high < _LARGEST:
            low, high = high, min(high + step, _LARGEST)
            step *= 2.0
    return rising_root(miss, low, high, 1e-11)


def percentile(known_by: BaselineKnowledge, multiple: float, probability: float) -> float:
    """The conditional in-control ARL that a share of baselines (0.001 to 0.999) falls short of.

    multiple: of the limits, 0.5 to 6. Raises UnusableParameter outside these ranges.
    """
    return conditional_percentiles(known_by, multiple, (probability,))[0].arl


@lru_cache(maxsize=2048)
def conditional_percentiles(
    known_by: BaselineKnowledge, multiple: float, percentiles: tuple[float, ...]
) -> tuple[ArlPercentile, ...]:
    """Several percentiles; ranges and errors as for :func:`conditional`."""
    _check_multiple(multiple)
    if len(percentiles) > MOST_PERCENTILES or not all(0.001 <= q <= 0.999 for q in percentiles):
        raise UnusableParameter.of(
            "percentiles-out-of-range",
            f"Ask for up to {MOST_PERCENTILES} percentiles, each with a probability of 0.001 to 0.999.",
            "percentiles",
        )
    found = []
    for q in percentiles:
        arl = math.exp(_percentile(known_by, multiple, q))
        found.append(ArlPercentile(q, arl, 1.0 / arl))
    return tuple(found)


@lru_cache(maxsize=512)
def conditional(
    known_by: BaselineKnowledge, multiple: float, percentiles: tuple[float, ...] = PERCENTILES
) -> ConditionalRunLength:
    """The distribution of the conditional in-control average run length over baselines.

    multiple: of the limits, 0.5 to 6; percentiles: up to 20 probabilities of 0.001 to 0.999.
    The mean is infinite unless ν·c4² > k², the standard deviation unless ν·c4² > 2k²: None then.
    Raises UnusableParameter outside these ranges. Source: [jensen-2006], [jardim-2020].
    """
    found = conditional_percentiles(known_by, multiple, percentiles)
    nominal = 0.5 / float(scipy.special.ndtr(-multiple))
    mean, square = _moments(known_by, multiple, -1), _moments(known_by, multiple, -2)
    sd = None
    if mean is not None and square is not None:
        sd = math.sqrt(max(square - mean * mean, 0.0))
    alarm = _mean_alarm(known_by, multiple)
    alarm_square = _moments(known_by, multiple, 2)
    assert alarm_square is not None
    return ConditionalRunLength(
        nominal_arl=nominal,
        mean_arl=mean,
        sd_arl=sd,
        mean_false_alarm_probability=alarm,
        sd_false_alarm_probability=math.sqrt(max(alarm_square - alarm * alarm, 0.0)),
        percentiles=found,
        probability_below_nominal=_shorter(known_by, multiple, 1.0 / nominal),
        probability_below_half_nominal=_shorter(known_by, multiple, min(2.0 / nominal, 1.0 - 1e-12)),
    )


# ---------------------------------------------------------------------------------------------------
# The guarantee


@lru_cache(maxsize=4096)
def guaranteed_multiple(known_by: BaselineKnowledge, in_control_arl: float, confidence: float) -> float:
    """The limit multiple at which P(conditional in-control ARL ≥ in_control_arl) = confidence.

    in_control_arl: 2 to 1e8; confidence: 0.5 to 0.999. It is the factor of a two-sided tolerance interval
    for 1 - 1/ARL of the population, with c4 in it since sigma is unbiased here. Regula falsi in a
    bracket, on the normal scale, to 1e-13 of its logarithm. Raises UnusableParameter outside these ranges,
    or ``no-such-multiple`` where it would be beyond 1e6.
    Source: [gandy-kvaloy-2013]; [goedhart-2017]; [jardim-2020].
    """
    if not SHORTEST_ARL <= in_control_arl <= LONGEST_ARL:
        raise UnusableParameter.of(
            "arl-out-of-range",
            f"The in-control average run length must be {SHORTEST_ARL:g} to {LONGEST_ARL:g}; {in_control_arl!r} "
            "is not usable.",
            "in_control_arl",
        )
    if not 0.5 <= confidence <= 0.999:
        raise UnusableParameter.of(
            "confidence-out-of-range",
            f"The confidence must be 0.5 to 0.999; {confidence!r} is not usable.",
            "confidence",
        )
    z, weight = _over_centre()
    freedom = known_by.degrees_of_freedom
    u = _reach(z / math.sqrt(known_by.means), 1.0 / in_control_arl)
    half, shape = 0.5 * _chi_scale(freedom), 0.5 * freedom
    goal = float(scipy.special.ndtri(confidence))

    def miss(log_multiple: float) -> float:
        ratio = u * math.exp(-log_multiple)
        share = float(weight @ scipy.special.gammaincc(shape, half * ratio * ratio))
        return float(scipy.special.ndtri(min(max(share, 1e-300), 1.0 - 1e-16))) - goal

    low = high = math.log(float(u[0]))
    while miss(low) > 0.0 and low > -10.0:
        low -= 0.5
    while miss(high) < 0.0:
        high += 0.5
        if high > math.log(1e6):
            raise UnusableParameter.of(
                "no-such-multiple",
                "This baseline is too small: no usable multiple of its sigma gives the confidence asked.",
                "confidence",
            )
    return math.exp(rising_root(miss, low, high, 1e-13))


def _check_multiple(multiple: float) -> None:
    if not SMALLEST_MULTIPLE <= multiple <= LARGEST_MULTIPLE:
        raise UnusableParameter.of(
            "multiple-out-of-range",
            f"The multiple of the limits must be {SMALLEST_MULTIPLE:g} to {LARGEST_MULTIPLE:g}; {multiple!r} is "
            "not usable.",
            "multiple",
        )
