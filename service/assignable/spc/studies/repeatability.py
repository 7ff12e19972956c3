"""How well each appraiser repeats their own measurements."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated

import numpy as np
import scipy

from ..data import Floats
from .variance_components import rounding_sum_of_squares


@dataclass(frozen=True, slots=True)
class OwnRepeatability:
    """The spread of one appraiser's measurements of the same part."""

    sd: Annotated[float, "Standard deviation within parts, pooled, in the unit of the measurements."]
    lower: Annotated[float, "Its lower confidence bound."]
    upper: Annotated[float, "Its upper confidence bound."]
    degrees_of_freedom: Annotated[int, "Of it: parts times measurements less one of each."]


def by_appraiser(measurements: Floats, confidence: float) -> tuple[OwnRepeatability, ...]:
    """For each appraiser, from measurements (appraisers, parts, trials); none with one trial.

    The interval is that of a variance, by chi-squared [burdick-borror-montgomery-2005]. Squares that the
    rounding of the measurements could have made count as zero.
    """
    _, parts, trials = measurements.shape
    if trials < 2:
        return ()
    df = parts * (trials - 1)
    # The second pass restores the digits that the mean of large values lost.
    within = measurements - measurements.mean(axis=2, keepdims=True)
    within -= within.mean(axis=2, keepdims=True)
    squares = (within**2).sum(axis=(1, 2))
    floor = rounding_sum_of_squares(parts * trials, float(np.abs(measurements).max()))
    squares = np.where(squares > floor, squares, 0.0)
    tail = (1 - confidence) / 2
    high, low = (float(scipy.special.chdtri(df, share)) for share in (tail, 1 - tail))
    return tuple(
        OwnRepeatability(sd, lower, upper, df)
        for sd, lower, upper in zip(
            *(np.sqrt(squares / divisor).tolist() for divisor in (df, high, low)), strict=True
        )
    )
