"""Design of charts of counts: how large a sample, where the limits really lie, and what they detect.

A count is whole, so a chart of counts decides on whole numbers: the fewest and the most that give no signal.
They are found in exact arithmetic from the level and the multiple as they are written (0.1 is a tenth, not
the double next to it), so that a limit that falls on a whole number is decided rightly: a count on a limit
is within it. Probabilities are exact ones of the binomial law (``p``, ``np``: of pieces) and of the Poisson
law (``c``, ``u``: of nonconformities in so many units).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from ..charts.common import LimitBasis
from ..charts.counts import count_cdf, count_lines, count_sf
from ..data import Floats
from ..errors import UnusableParameter

CountChart: TypeAlias = Literal["p", "np", "c", "u"]

CHARTS = ("p", "np", "c", "u")
LARGEST_SIZE = 1_000_000
LARGEST_MEAN = 1e9
SMALLEST_LEVEL = 1e-9
MOST_LEVELS = 500
MOST_SIZES_TRIED = 50_000
# Each probability limit is a search of its own.
MOST_SIZES_TRIED_WITH_PROBABILITIES = 5_000
SMALLEST_MULTIPLE, LARGEST_MULTIPLE = 0.1, 8.0
SMALLEST_ALARM, LARGEST_ALARM = 1e-12, 0.5
_NEAR = 1e-9
_NO_POWER = 1e-15
_EXACT_POWERS = 4096


@dataclass(frozen=True, slots=True)
class CountLimits:
    """Limits of one sample, as drawn and as the whole counts they come to."""

    chart: Annotated[Literal["p", "np", "c", "u"], "The chart."]
    size: Annotated[float, "Pieces (p, np) or units (c, u) in a sample."]
    level: Annotated[float, "Proportion nonconforming, or nonconformities a unit, in control."]
    centre: Annotated[float, "Centre line, in the unit of the chart."]
    lower: Annotated[
        float | None, "Lower limit, in the unit of the chart; null where no count can lie below it."
    ]
    upper: Annotated[
        float | None, "Upper limit, in the unit of the chart; null where no count can lie above it."
    ]
    lower_count: Annotated[int | None, "Fewest in a sample that give no signal; null where none are too few."]
    upper_count: Annotated[int | None, "Most in a sample that give no signal; null where none are too many."]


@dataclass(frozen=True, slots=True)
class CountDetection:
    """What the chart does at one level."""

    level: Annotated[float, "Proportion nonconforming, or nonconformities a unit."]
    no_signal_probability: Annotated[float, "Probability that a sample gives no signal."]
    signal_below_probability: Annotated[float, "Probability that a sample lies below the lower limit."]
    signal_above_probability: Annotated[float, "Probability that a sample lies above the upper limit."]
    power: Annotated[float, "Probability that a sample gives a signal, on either side."]
    arl: Annotated[float | None, "Samples to the signal on average; null beyond 1e15."]
    sd_run_length: Annotated[float | None, "Its standard deviation over signals; null beyond 1e15."]


@dataclass(frozen=True, slots=True)
class CountCharacteristics:
    """Limits of a chart of counts and what they detect, exactly."""

    limits: Annotated[CountLimits, "The limits."]
    in_control: Annotated[CountDetection, "With nothing changed: its power is the false-alarm probability."]
    levels: Annotated[tuple[CountDetection, ...], "At each level asked, in its order."]
    least_favourable_level: Annotated[
        float,
        "The level with the longest run length: where it is not the one in control, the chart is biased there.",
    ]
    longest_arl: Annotated[float | None, "The run length there; null beyond 1e15."]


@dataclass(frozen=True, slots=True)
class LowerLimitSize:
    """The least sample with a lower limit that a count can lie below."""

    chart: Annotated[Literal["p", "np", "c", "u"], "The chart."]
    level: Annotated[float, "Proportion nonconforming, or nonconformities a unit, in control."]
    size: Annotated[int, "Pieces, or units, in the least such sample."]
    limits: Annotated[CountLimits, "Its limits."]
    probability_of_none: Annotated[
        float, "Probability that such a sample has none at all, and so signals below."
    ]


@dataclass(frozen=True, slots=True)
class FormulaSize:
    """The answer of the usual formula, by the normal approximation, and what it really gives."""

    size: Annotated[int, "Pieces, or units, by the formula, rounded up."]
    power: Annotated[float | None, "The power that this sample really has; null beyond the largest sample."]
    false_alarm_probability: Annotated[
        float | None, "The false-alarm probability that it really has; null beyond the largest sample."
    ]


@dataclass(frozen=True, slots=True)
class DetectionSize:
    """The least sample that detects a stated level with a stated probability."""

    chart: Annotated[Literal["p", "np", "c", "u"], "The chart."]
    level: Annotated[float, "Proportion nonconforming, or nonconformities a unit, in control."]
    shifted_level: Annotated[float, "The level to detect."]
    wanted_power: Annotated[float, "The power asked for."]
    size: Annotated[int, "The least size with at least that power."]
    power: Annotated[float, "Its power."]
    false_alarm_probability: Annotated[float, "Its false-alarm probability."]
    limits: Annotated[CountLimits, "Its limits."]
    size_from_which_it_holds: Annotated[
        int | None,
        "The size from which on every one tried has at least that power: counts being whole, power falls wherever "
        "a limit passes a whole number. Null where the largest size tried has less.",
    ]
    largest_size_tried: Annotated[int, "The largest size tried."]
    formula: Annotated[FormulaSize, "The usual formula's answer beside it."]


# ---------------------------------------------------------------------------------------------------
# Limits on whole numbers


def limit_basis(
    *, sigma_multiple: float | None = None, false_alarm_probability: float | None = None
) -> LimitBasis:
    """How the limits lie, from at most one of two ways to say it: 3 sigma when neither is given.

    Raises UnusableParameter ``limits-twice``, or an argument out of its range.
    """
    if sigma_multiple is not None and false_alarm_probability is not None:
        raise UnusableParameter.of(
            "limits-twice",
            "State the limits in one way only: sigma_multiple or false_alarm_probability.",
            "false_alarm_probability",
        )
    if false_alarm_probability is not None:
        _check_range(false_alarm_probability, SMALLEST_ALARM, LARGEST_ALARM, "false_alarm_probability")
        return LimitBasis("probability", None, false_alarm_probability)
    multiple = 3.0 if sigma_multiple is None else sigma_multiple
    _check_range(multiple, SMALLEST_MULTIPLE, LARGEST_MULTIPLE, "sigma_multiple")
    return LimitBasis("sigma", multiple, None)


def _as_written(value: float) -> Fraction:
    return Fraction(repr(float(value)))


def _counts(binomial: bool, level: float, sizes: Floats, basis: LimitBasis) -> tuple[Floats, Floats]:
    """Fewest and most without a signal, (k,) each, for samples of ``sizes``; 0 and the size (or inf) where no limit."""
    if basis.sigma_multiple is None:
        lines = count_lines(binomial, level, sizes, basis)
        return lines.lower, lines.upper
    centre = level * sizes
    reach = basis.sigma_multiple * np.sqrt(centre * (1.0 - level) if binomial else centre)
    low, high = centre - reach, centre + reach
    fewest, most = np.ceil(low), np.floor(high)
    near = _NEAR * (1.0 + centre + reach)
    close = (np.abs(low - np.rint(low)) <= near) | (np.abs(high - np.rint(high)) <= near)
    if bool(close.any()):
        p, k = _as_written(level), _as_written(basis.sigma_multiple)
        spread = k * k * p * (1 - p if binomial else 1)
        for index in np.flatnonzero(close).tolist():
            size = _as_written(float(sizes[index]))
            middle, square = p * size, spread * size
            fewest[index] = _fewest(round(float(low[index])), middle, square)
            most[index] = _most(round(float(high[index])), middle, square)
    ceiling = sizes if binomial else np.full(sizes.shape, np.inf)
    return np.maximum(fewest, 0.0), np.minimum(most, ceiling)


def _fewest(near: int, middle: Fraction, square: Fraction) -> int:
    """The least whole number not below middle - √square, given one within one of it."""
    found = near + 1
    while not (found - 1 < middle and (middle - found + 1) ** 2 > square):
        found -= 1
    return found


def _most(near: int, middle: Fraction, square: Fraction) -> int:
    """The largest whole number not above middle + √square, given one within one of it."""
    found = near - 1
    while not (found + 1 > middle and (found + 1 - middle) ** 2 > square):
        found += 1
    return found


def _tails(
    binomial: bool, level: float, sizes: Floats, fewest: Floats, most: Floats
) -> tuple[Floats, Floats]:
    """Probabilities of a count below ``fewest`` and above ``most``."""
    below = count_cdf(binomial, fewest - 1.0, level, sizes)
    bounded = np.isfinite(most)
    above = np.where(bounded, count_sf(binomial, np.where(bounded, most, 0.0), level, sizes), 0.0)
    return below, above


def _limits(chart: CountChart, level: float, size: float, basis: LimitBasis) -> CountLimits:
    binomial = chart in ("p", "np")
    sizes = np.array([float(size)])
    fewest, most = (float(one[0]) for one in _counts(binomial, level, sizes, basis))
    drawn = count_lines(binomial, level, sizes, basis)
    unit = size if chart in ("p", "u") else 1.0
    ceiling = size if binomial else math.inf
    has_lower, has_upper = fewest > 0.0, most < ceiling
    return CountLimits(
        chart=chart,
        size=size,
        level=level,
        centre=level * size / unit,
        lower=float(drawn.lower[0]) / unit if has_lower else None,
        upper=float(drawn.upper[0]) / unit if has_upper else None,
        lower_count=int(fewest) if has_lower else None,
        upper_count=int(most) if has_upper else None,
    )


# ---------------------------------------------------------------------------------------------------
# What they detect


def characteristics(
    chart: CountChart,
    level: float,
    size: float,
    levels: Sequence[float],
    *,
    sigma_multiple: float | None = None,
    false_alarm_probability: float | None = None,
) -> CountCharacteristics:
    """Limits of a chart of counts in control at ``level``, and what they detect at each of ``levels``.

    level, levels: proportion in (0, 1) for ``p`` and ``np``, nonconformities a unit for ``c`` and ``u`` (a
    ``c`` chart's sample is 1 unit, or size of them taken together); up to 500 levels. size: pieces (whole) or
    units, up to 1e6. Limits as for :func:`limit_basis`; a count on a limit is within.
    Raises UnusableParameter: an argument out of its range.
    Source: [montgomery-2013], sections 7.2.3 and 7.3.4 for the operating characteristic; exact tails.
    """
    binomial = _checked(chart, level, "level")
    _check_size(size, binomial, level)
    basis = limit_basis(sigma_multiple=sigma_multiple, false_alarm_probability=false_alarm_probability)
    if not 1 <= len(levels) <= MOST_LEVELS:
        raise UnusableParameter.of(
            "levels-out-of-range", f"Give 1 to {MOST_LEVELS} levels; {len(levels)} were given.", "levels"
        )
    for index, one in enumerate(levels):
        _checked(chart, one, "levels", index)
        _check_size(size, binomial, one)
    sizes = np.array([float(size)])
    fewest, most = _counts(binomial, level, sizes, basis)

    def at(one: float) -> CountDetection:
        below, above = (float(tail[0]) for tail in _tails(binomial, one, sizes, fewest, most))
        power = min(below + above, 1.0)
        told = power > _NO_POWER
        return CountDetection(
            level=one,
            no_signal_probability=_between(binomial, one, sizes, fewest, most),
            signal_below_probability=below,
            signal_above_probability=above,
            power=power,
            arl=1.0 / power if told else None,
            sd_run_length=math.sqrt(1.0 - power) / power if told else None,
        )

    worst = _least_favourable(binomial, size, float(fewest[0]), float(most[0]), level)
    return CountCharacteristics(
        limits=_limits(chart, level, size, basis),
        in_control=at(level),
        levels=tuple(at(one) for one in levels),
        least_favourable_level=worst,
        longest_arl=at(worst).arl,
    )


def _between(binomial: bool, level: float, sizes: Floats, fewest: Floats, most: Floats) -> float:
    """P(fewest ≤ X ≤ most), from the tail in which the difference keeps its digits."""
    below, above = (float(tail[0]) for tail in _tails(binomial, level, sizes, fewest, most))
    if below + above < 0.5:
        return 1.0 - below - above
    if below < above:
        top = count_cdf(binomial, most, level, sizes) if math.isfinite(most[0]) else np.ones(1)
        return max(float(top[0]) - below, 0.0)
    bottom = count_sf(binomial, np.maximum(fewest - 1.0, 0.0), level, sizes) if fewest[0] > 0 else np.ones(1)
    return max(float(bottom[0]) - above, 0.0)


def _least_favourable(binomial: bool, size: float, fewest: float, most: float, level: float) -> float:
    """Where P(no signal) is largest.

    Its derivative vanishes where P(X = fewest - 1) equals P(X = most), of sizes n - 1 (binomial) or of the
    same mean (Poisson): in closed form.
    """
    low, high = fewest > 0.0, most < (size if binomial else math.inf)
    if not (low and high):
        # With one limit the chart is the quieter the further it is from that limit.
        return (
            level
            if not (low or high)
            else (1.0 if binomial else LARGEST_MEAN / size)
            if low
            else SMALLEST_LEVEL
        )
    span = most - fewest + 1.0
    if span <= 0.0:
        # No whole number lies between the limits: every sample signals, at every level.
        return level
    if not binomial:
        return math.exp((math.lgamma(most + 1.0) - math.lgamma(fewest)) / span) / size

    # (n-1 choose a) p^a q^(n-1-a) at a = fewest - 1 and at most.
    def log_choose(a: float) -> float:
        return -math.lgamma(a + 1.0) - math.lgamma(size - a)

    log_odds = (log_choose(fewest - 1.0) - log_choose(most)) / span
    return 1.0 / (1.0 + math.exp(-log_odds))


# ---------------------------------------------------------------------------------------------------
# Sizes


def lower_limit_size(
    chart: CountChart,
    level: float,
    *,
    sigma_multiple: float | None = None,
    false_alarm_probability: float | None = None,
) -> LowerLimitSize:
    """The least whole sample whose lower limit lies above 0, so that a sample without any signals.

    With a multiple k: n > k²(1 - p)/p, or more than k²/u units, decided exactly. With a probability: the
    least n at which a sample without any is as seldom as half of it. Arguments as for
    :func:`characteristics`. Raises UnusableParameter ``target-not-met`` beyond a million pieces or units.
    Source: [montgomery-2013], section 7.2.1.
    """
    binomial = _checked(chart, level, "level")
    basis = limit_basis(sigma_multiple=sigma_multiple, false_alarm_probability=false_alarm_probability)
    p = _as_written(level)
    if basis.sigma_multiple is not None:
        square = _as_written(basis.sigma_multiple) ** 2
        size = math.floor(square * ((1 - p) if binomial else 1) / p) + 1
    else:
        rate = -math.log1p(-level) if binomial else level
        size = max(math.ceil(-math.log(basis.tail) / rate - 1e-6), 1)
        while not _none_is_rare(binomial, level, size, basis.tail):
            size += 1
    if size > LARGEST_SIZE:
        raise UnusableParameter.of(
            "target-not-met",
            f"At this level a lower limit above 0 needs {size} {'pieces' if binomial else 'units'} in a sample, "
            f"more than {LARGEST_SIZE}; a chart of the number between events suits better.",
            "level",
        )
    return LowerLimitSize(
        chart=chart,
        level=level,
        size=size,
        limits=_limits(chart, level, size, basis),
        probability_of_none=math.exp(size * math.log1p(-level)) if binomial else math.exp(-level * size),
    )


def _none_is_rare(binomial: bool, level: float, size: int, tail: float) -> bool:
    """Whether P(X = 0) ≤ tail; exactly where it could matter (a half to a whole power, say)."""
    log_none = size * math.log1p(-level) if binomial else -level * size
    apart = log_none - math.log(tail)
    if abs(apart) > 1e-9 * abs(log_none) or not binomial or size > _EXACT_POWERS:
        return apart <= 0.0
    return (1 - _as_written(level)) ** size <= _as_written(2.0 * tail) / 2


def detection_size(
    chart: CountChart,
    level: float,
    shifted_level: float,
    power: float,
    *,
    sigma_multiple: float | None = None,
    false_alarm_probability: float | None = None,
) -> DetectionSize:
    """The least whole sample that signals at ``shifted_level`` with at least the power asked, exactly.

    power: strictly between 0 and 1; other arguments as for :func:`characteristics`. Every size from 1 on is
    tried, up to 50 000 (5 000 with probability limits). Beside it the formula by the normal approximation,
    n = ((k√v₀ + z√v₁)/δ)² with v the variance of one piece or unit at each level and Φ(z) the power (at one
    half, [duncan-1986]'s n = (k/δ)²p(1 - p)). Raises UnusableParameter ``target-not-met``, or an argument
    out of its range.
    """
    binomial = _checked(chart, level, "level")
    _checked(chart, shifted_level, "shifted_level")
    if not 0.0 < power < 1.0:
        raise UnusableParameter.of(
            "power-out-of-range", f"The power must lie between 0 and 1; {power!r} does not.", "power"
        )
    if shifted_level == level:
        raise UnusableParameter.of(
            "no-shift", "The level to detect must differ from the one in control.", "shifted_level"
        )
    basis = limit_basis(sigma_multiple=sigma_multiple, false_alarm_probability=false_alarm_probability)
    by_formula = _formula(binomial, level, shifted_level, power, basis.multiple)
    by_sigma = basis.sigma_multiple is not None
    cap = MOST_SIZES_TRIED if by_sigma else MOST_SIZES_TRIED_WITH_PROBABILITIES
    cap = min(cap, max(int(LARGEST_MEAN / max(level, shifted_level)), 1))
    if by_formula > 4 * cap:
        # Even where the normal law is wrong by far, it is not so by four times at such sizes.
        raise UnusableParameter.of("target-not-met", _too_large(by_formula, cap, binomial), "shifted_level")

    def tried(first: int, last: int) -> Floats:
        sizes = np.arange(float(first), last + 1.0)
        fewest, most = _counts(binomial, level, sizes, basis)
        below, above = _tails(binomial, shifted_level, sizes, fewest, most)
        return np.minimum(below + above, 1.0)

    powers = np.empty(0)
    last, found = 0, None
    while found is None:
        if last >= cap:
            raise UnusableParameter.of("target-not-met", _too_large(by_formula, cap, binomial), "power")
        until = min(max(2 * last, 256), cap)
        powers = np.concatenate((powers, tried(last + 1, until)))
        met = powers[last:] >= power
        if bool(met.any()):
            found = last + int(np.argmax(met)) + 1
        last = until
    until = min(2 * max(found, min(by_formula, cap)) + 100, cap)
    if until > last:
        powers = np.concatenate((powers, tried(last + 1, until)))
    short = np.flatnonzero(powers < power)
    holds = int(short[-1]) + 2 if short.size else 1
    limits = _limits(chart, level, found, basis)
    return DetectionSize(
        chart=chart,
        level=level,
        shifted_level=shifted_level,
        wanted_power=power,
        size=found,
        power=float(powers[found - 1]),
        false_alarm_probability=_signals(binomial, level, level, found, basis),
        limits=limits,
        size_from_which_it_holds=holds if holds <= len(powers) else None,
        largest_size_tried=len(powers),
        formula=FormulaSize(
            size=by_formula,
            power=_signals(binomial, level, shifted_level, by_formula, basis)
            if by_formula <= LARGEST_SIZE
            else None,
            false_alarm_probability=(
                _signals(binomial, level, level, by_formula, basis) if by_formula <= LARGEST_SIZE else None
            ),
        ),
    )


def _signals(binomial: bool, level: float, at: float, size: int, basis: LimitBasis) -> float:
    sizes = np.array([float(size)])
    fewest, most = _counts(binomial, level, sizes, basis)
    below, above = _tails(binomial, at, sizes, fewest, most)
    return min(float(below[0] + above[0]), 1.0)


def _formula(binomial: bool, level: float, shifted: float, power: float, multiple: float) -> int:
    variances = [one * (1.0 - one) if binomial else one for one in (level, shifted)]
    reach = multiple * math.sqrt(variances[0]) + float(scipy.special.ndtri(power)) * math.sqrt(variances[1])
    size = (max(reach, 0.0) / (shifted - level)) ** 2
    # Rounding must not lift a whole number to the next.
    return max(math.ceil(min(size * (1.0 - 1e-12), 1e15)), 1)


def _too_large(by_formula: int, cap: int, binomial: bool) -> str:
    what = "pieces" if binomial else "units"
    return (
        f"No sample of up to {cap} {what} detects this with the power asked; by the normal approximation it "
        f"needs about {by_formula}."
    )


# ---------------------------------------------------------------------------------------------------
# Ranges


def _check_range(value: float, low: float, high: float, *where: str | int) -> None:
    if not low <= value <= high:
        raise UnusableParameter.of(
            "out-of-range", f"{where[0]} must be from {low:g} to {high:g}; it is {value:.15g}.", *where
        )


def _checked(chart: str, level: float, *where: str | int) -> bool:
    """Whether the chart's law is binomial, its level being checked."""
    if chart not in CHARTS:
        raise UnusableParameter.of(
            "unknown-chart", f"Charts of counts are p, np, c and u; not {chart!r}.", "chart"
        )
    binomial = chart in ("p", "np")
    if binomial and not SMALLEST_LEVEL <= level <= 1.0 - SMALLEST_LEVEL:
        raise UnusableParameter.of(
            "level-out-of-range",
            f"A proportion must lie between 0 and 1 (by 1e-9 or more); {level:g} does not.",
            *where,
        )
    if not binomial:
        _check_range(level, SMALLEST_LEVEL, LARGEST_MEAN, *where)
    return binomial


def _check_size(size: float, binomial: bool, level: float) -> None:
    if binomial and size != math.floor(size):
        raise UnusableParameter.of(
            "size-out-of-range", f"A sample of pieces is a whole number of them, not {size:g}.", "size"
        )
    _check_range(size, 1.0 if binomial else 1e-6, LARGEST_SIZE, "size")
    if size * level > LARGEST_MEAN:
        raise UnusableParameter.of(
            "size-out-of-range",
            f"A sample may hold up to {LARGEST_MEAN:g} nonconformities on average.",
            "size",
        )
