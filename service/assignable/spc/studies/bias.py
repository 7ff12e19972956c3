"""Bias and linearity: repeated measurements of parts whose true values are known.

Stability, bias over time, is judged by an ordinary control chart of one reference part, not here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import scipy

from ..data import Floats
from ..errors import Fault, UnusableData, UnusableParameter
from .variance_components import StudyNote, confidence_faults

# Beyond these a square leaves the range of double precision.
_LARGEST = 1e140
_SMALLEST_SPREAD = 1e-140


@dataclass(frozen=True, slots=True, eq=False)
class ReferenceLevel:
    """A reference part: its reference value, and measurements (k,) of it in the same unit."""

    reference: float
    values: Floats


@dataclass(frozen=True, slots=True)
class LevelBias:
    """Bias at one reference value: mean of the measurements less the reference.

    sd: of the measurements; ``None`` with one measurement, as are standard_error, lower and upper.
    lower, upper: t interval of the bias, with degrees_of_freedom = size - 1.
    t, p_value: two-sided test of no bias; ``None`` with one measurement; with no spread at all t is
        ``None`` and the p-value 0, or ``None`` when the bias is zero too.
    """

    reference: float
    size: int
    mean: float
    bias: float
    sd: float | None
    standard_error: float | None
    degrees_of_freedom: int
    lower: float | None
    upper: float | None
    t: float | None
    p_value: float | None


@dataclass(frozen=True, slots=True)
class LineCoefficient:
    """A coefficient of the line with its t interval and two-sided test of zero.

    t and p_value as in :class:`LevelBias` when the points lie exactly on the line.
    """

    estimate: float
    standard_error: float
    lower: float
    upper: float
    t: float | None
    p_value: float | None


@dataclass(frozen=True, slots=True, eq=False)
class Linearity:
    """Least-squares line of the individual biases on the reference value.

    slope: bias gained for each unit of reference; intercept: at reference zero.
    r_squared: ``None`` when all biases are equal.
    residual_sd: with degrees_of_freedom = measurements - 2.
    fitted, fitted_lower, fitted_upper: (levels,) the line at each reference value, and its pointwise
        confidence band; a gauge without linearity error has zero inside the band throughout.
    lack_of_fit_f, lack_of_fit_p_value: test of a straight line against one mean a reference value;
        ``None`` without three different reference values and repeated measurements with spread.
    """

    slope: LineCoefficient
    intercept: LineCoefficient
    r_squared: float | None
    residual_sd: float
    degrees_of_freedom: int
    fitted: Floats
    fitted_lower: Floats
    fitted_upper: Floats
    lack_of_fit_f: float | None
    lack_of_fit_p_value: float | None


@dataclass(frozen=True, slots=True)
class BiasStudy:
    """The analysis of a bias study.

    mean_bias: over all measurements. repeatability_sd: pooled within levels, ``None`` when nothing is
    repeated. linearity: ``None`` with one reference value, or with two measurements in all.
    """

    confidence: float
    levels: tuple[LevelBias, ...]
    mean_bias: float
    repeatability_sd: float | None
    repeatability_degrees_of_freedom: int
    linearity: Linearity | None
    notes: tuple[StudyNote, ...]


def bias(levels: tuple[ReferenceLevel, ...], *, confidence: float = 0.95) -> BiasStudy:
    """Bias at each reference value, and how it changes along the range of the gauge.

    Raises :class:`UnusableData` (no levels, a level without measurements, missing numbers) and
    :class:`UnusableParameter`. Source: [aiag-msa-2010] ch. III B; [iso-22514-7-2021].
    """
    if wrong := confidence_faults(confidence):
        raise UnusableParameter(*wrong)
    _check(levels)
    notes: list[StudyNote] = []
    by_level = tuple(_level(level, confidence) for level in levels)
    df = sum(level.degrees_of_freedom for level in by_level)
    within = sum(level.degrees_of_freedom * (level.sd or 0.0) ** 2 for level in by_level)
    sizes = np.array([level.size for level in by_level])
    biases = np.array([level.bias for level in by_level])
    references = np.array([level.reference for level in by_level])
    count = int(sizes.sum())
    linearity = None
    if float(np.ptp(references)) < _SMALLEST_SPREAD:
        notes.append(
            StudyNote("one-reference", "There is one reference value only, so linearity cannot be judged.")
        )
    elif count < 3:
        notes.append(
            StudyNote("too-few-measurements", "Two measurements leave nothing to judge a line with.")
        )
    else:
        linearity = _line(references, biases, sizes, within, df, confidence)
    if df == 0:
        notes.append(
            StudyNote(
                "nothing-repeated",
                "No part was measured more than once, so repeatability is unknown and no bias can be tested.",
            )
        )
    elif within == 0:
        notes.append(
            StudyNote(
                "no-gauge-variation",
                "Repeated measurements agree to the last digit; check the resolution of the gauge.",
            )
        )
    return BiasStudy(
        confidence,
        by_level,
        float(sizes @ biases) / count,
        math.sqrt(within / df) if df > 0 else None,
        df,
        linearity,
        tuple(notes),
    )


def _check(levels: tuple[ReferenceLevel, ...]) -> None:
    if not levels:
        raise UnusableData.of("empty", "There are no reference values in the data.", "data", "levels")
    faults: list[Fault] = []
    missing = "missing-measurement"
    for i, level in enumerate(levels):
        if not abs(level.reference) <= _LARGEST:
            detail = "The reference value must be a finite number."
            faults.append(Fault("out-of-range", detail, ("data", "levels", i, "reference")))
        if level.values.ndim != 1 or level.values.size == 0:
            faults.append(
                Fault("empty", "This reference value has no measurements.", ("data", "levels", i, "values"))
            )
            continue
        faults += [
            Fault(missing, "This measurement is missing; leave it out.", ("data", "levels", i, "values", k))
            for (k,) in np.argwhere(~(np.abs(level.values) <= _LARGEST)).tolist()
        ]
    if faults:
        raise UnusableData(*faults[:100])


def _t_test(estimate: float, error: float, df: int) -> tuple[float | None, float | None]:
    if error > 0 and math.isfinite(t := estimate / error):
        return t, min(1.0, 2 * float(scipy.special.stdtr(df, -abs(t))))
    return None, (0.0 if estimate != 0 else None)


def _t_quantile(df: int, confidence: float) -> float:
    return -float(scipy.special.stdtrit(df, (1 - confidence) / 2))


def _level(level: ReferenceLevel, confidence: float) -> LevelBias:
    values, size = level.values, level.values.size
    # Deviations from the reference keep the digits that a mean of large values would lose.
    deviations = values - level.reference
    spread = float(np.ptp(values))
    shift = float(deviations[0]) if spread == 0 else float(deviations.mean())
    mean = level.reference + shift
    if size < 2:
        return LevelBias(level.reference, size, mean, shift, None, None, 0, None, None, None, None)
    sd = float(np.std(deviations, ddof=1)) if spread > 0 else 0.0
    error = sd / math.sqrt(size)
    reach = _t_quantile(size - 1, confidence) * error
    t, p_value = _t_test(shift, error, size - 1)
    return LevelBias(
        level.reference, size, mean, shift, sd, error, size - 1, shift - reach, shift + reach, t, p_value
    )


def _line(
    references: Floats, biases: Floats, sizes: Floats, within: float, within_df: int, confidence: float
) -> Linearity:
    """The line through the individual biases, from the levels' sizes, means and pooled squares."""
    count = int(sizes.sum())
    centre = float(sizes @ references) / count
    x = references - centre
    middle = float(sizes @ biases) / count
    y = biases - middle
    sxx = float(sizes @ (x * x))
    slope = float(sizes @ (x * y)) / sxx
    residual = y - slope * x
    # What the rounding of the numbers sent could have made is no departure from a line.
    largest = float(np.abs(references).max() + np.abs(biases).max())
    floor = count * (4 * float(np.finfo(np.float64).eps) * largest) ** 2
    between = float(sizes @ residual**2)
    between = between if between > floor else 0.0
    total = float(sizes @ y**2) + within
    df = count - 2
    square = (between + within) / df
    t_value = _t_quantile(df, confidence)
    intercept = middle - slope * centre

    def coefficient(estimate: float, variance: float) -> LineCoefficient:
        error = math.sqrt(square * variance)
        reach = t_value * error
        return LineCoefficient(
            estimate, error, estimate - reach, estimate + reach, *_t_test(estimate, error, df)
        )

    fitted = middle + slope * x
    reach = t_value * np.sqrt(square * (1 / count + x**2 / sxx))
    f_ratio = p_value = None
    distinct = np.unique(references)
    if distinct.size > 2:
        # Levels that share a reference value count together as repeated measurements of it.
        pure, pure_df = within, within_df
        for value in distinct:
            own = references == value
            if int(own.sum()) > 1:
                mean = float(sizes[own] @ biases[own]) / float(sizes[own].sum())
                pure += float(sizes[own] @ (biases[own] - mean) ** 2)
                pure_df += int(own.sum()) - 1
        if pure > 0:
            lack_df = int(distinct.size) - 2
            f_ratio = max(between + within - pure, 0.0) / lack_df / (pure / pure_df)
            p_value = float(scipy.special.fdtrc(lack_df, pure_df, f_ratio))
    return Linearity(
        coefficient(slope, 1 / sxx),
        coefficient(intercept, 1 / count + centre**2 / sxx),
        1 - (between + within) / total if total > floor else None,
        math.sqrt(square),
        df,
        fitted,
        fitted - reach,
        fitted + reach,
        f_ratio,
        p_value,
    )
