"""Bias and linearity: repeated measurements of parts whose true values are known.

Stability, bias over time, is judged by an ordinary control chart of one reference part, not here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Annotated

import numpy as np
import scipy

from ..cautions import Caution
from ..data import Floats
from ..errors import Fault, UnusableData, UnusableParameter
from .variance_components import confidence_faults, noted

# Beyond these a square leaves the range of double precision.
_LARGEST = 1e140
_SMALLEST_SPREAD = 1e-140


@dataclass(frozen=True, slots=True, eq=False)
class ReferenceLevel:
    """A reference part: its reference value, measurements (k,) of it in the same unit, and its name if any."""

    reference: float
    values: Floats
    part: str | None = None


@dataclass(frozen=True, slots=True)
class LevelBias:
    """Bias at one reference value: mean of the measurements less the reference, with its t interval."""

    part: Annotated[str | None, "Name of the reference part, where one was given."]
    reference: Annotated[float, "Its reference value."]
    size: Annotated[int, "Measurements of it."]
    mean: Annotated[float, "Their mean."]
    bias: Annotated[float, "Mean less reference, in the unit of the measurements."]
    sd: Annotated[
        float | None,
        "Standard deviation of the measurements; with one measurement null, as what follows from it.",
    ]
    standard_error: Annotated[float | None, "Of the bias."]
    degrees_of_freedom: Annotated[int, "Measurements less one."]
    lower: Annotated[float | None, "Lower confidence bound of the bias."]
    upper: Annotated[float | None, "Upper confidence bound of the bias."]
    t: Annotated[float | None, "Bias over its standard error; null without spread."]
    p_value: Annotated[
        float | None,
        "Two-sided test of no bias; without spread 0, or null where the bias is zero too.",
    ]


@dataclass(frozen=True, slots=True)
class LineCoefficient:
    """A coefficient of the line with its t interval and two-sided test of zero."""

    estimate: Annotated[float, "By least squares."]
    standard_error: Annotated[float, "Of the estimate."]
    lower: Annotated[float, "Lower confidence bound."]
    upper: Annotated[float, "Upper confidence bound."]
    t: Annotated[float | None, "Estimate over standard error; null where the points lie exactly on a line."]
    p_value: Annotated[
        float | None,
        "Two-sided test of zero; with points exactly on a line 0, or null where the estimate is zero too.",
    ]


@dataclass(frozen=True, slots=True, eq=False)
class BiasLinearity:
    """Least-squares line of the individual biases on the reference value.

    A gauge without linearity error has zero inside the band throughout.
    """

    slope: Annotated[LineCoefficient, "Bias gained for each unit of reference."]
    intercept: Annotated[LineCoefficient, "Bias of the line at reference zero."]
    r_squared: Annotated[
        float | None, "Share of the biases' variation that the line explains; null where all are equal."
    ]
    residual_sd: Annotated[float, "Standard deviation about the line."]
    degrees_of_freedom: Annotated[int, "Of it: measurements less two."]
    fitted: Annotated[Floats, "The line at each level, in their order."]
    fitted_lower: Annotated[Floats, "Its pointwise lower confidence bound."]
    fitted_upper: Annotated[Floats, "Its pointwise upper confidence bound."]
    lack_of_fit_f: Annotated[
        float | None,
        "F test of a straight line against one mean a reference value; null without three different reference "
        "values and repeated measurements with spread.",
    ]
    lack_of_fit_p_value: Annotated[float | None, "Its upper tail; null where F is."]


@dataclass(frozen=True, slots=True)
class BiasStudy:
    """The analysis of a bias study."""

    confidence: Annotated[float, "Of each interval by itself."]
    levels: Annotated[tuple[LevelBias, ...], "Each reference part, in the order given."]
    mean_bias: Annotated[float, "Over all measurements."]
    repeatability_sd: Annotated[
        float | None, "Pooled standard deviation within levels; null where nothing was repeated."
    ]
    repeatability_degrees_of_freedom: Annotated[int, "Of it."]
    linearity: Annotated[
        BiasLinearity | None, "Null with one reference value, or with two measurements in all."
    ]
    cautions: tuple[Caution, ...]


def bias(levels: tuple[ReferenceLevel, ...], *, confidence: float = 0.95) -> BiasStudy:
    """Bias at each reference value, and how it changes along the range of the gauge.

    Raises :class:`UnusableData` (no levels, a level without measurements, missing numbers) and
    :class:`UnusableParameter`. Source: [aiag-msa-2010] ch. III B; [iso-22514-7-2021].
    """
    if wrong := confidence_faults(confidence):
        raise UnusableParameter(*wrong)
    _check(levels)
    notes: list[Caution] = []
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
            noted("one-reference", "There is one reference value only, so linearity cannot be judged.")
        )
    elif count < 3:
        notes.append(noted("too-few-measurements", "Two measurements leave nothing to judge a line with."))
    else:
        linearity = _line(references, biases, sizes, within, df, confidence)
    if df == 0:
        notes.append(
            noted(
                "nothing-repeated",
                "No part was measured more than once, so repeatability is unknown and no bias can be tested.",
            )
        )
    elif within == 0:
        notes.append(
            noted(
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


def band(study: BiasStudy, references: Floats) -> tuple[Floats, Floats, Floats]:
    """The line of bias (k,) at references (k,) along the range, and its pointwise confidence bounds.

    Raises ValueError for a study without a line.
    """
    line = study.linearity
    if line is None:
        raise ValueError("This study has no line of bias.")
    sizes = np.array([level.size for level in study.levels], dtype=np.float64)
    at = np.array([level.reference for level in study.levels])
    count = float(sizes.sum())
    centre = float(sizes @ at) / count
    sxx = float(sizes @ (at - centre) ** 2)
    x = references - centre
    fitted = study.mean_bias + line.slope.estimate * x
    error = line.residual_sd * np.sqrt(1 / count + x**2 / sxx)
    reach = _t_quantile(line.degrees_of_freedom, study.confidence) * error
    return fitted, fitted - reach, fitted + reach


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
        return LevelBias(
            level.part, level.reference, size, mean, shift, None, None, 0, None, None, None, None
        )
    sd = float(np.std(deviations, ddof=1)) if spread > 0 else 0.0
    error = sd / math.sqrt(size)
    reach = _t_quantile(size - 1, confidence) * error
    t, p_value = _t_test(shift, error, size - 1)
    return LevelBias(
        level.part,
        level.reference,
        size,
        mean,
        shift,
        sd,
        error,
        size - 1,
        shift - reach,
        shift + reach,
        t,
        p_value,
    )


def _line(
    references: Floats, biases: Floats, sizes: Floats, within: float, within_df: int, confidence: float
) -> BiasLinearity:
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
    return BiasLinearity(
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
