"""Nested measurement study: each appraiser has parts of their own, as when measuring destroys them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated

import numpy as np

from ..cautions import Caution
from ..data import Floats
from ..errors import UnusableData
from .repeatability import OwnRepeatability, by_appraiser
from .variance_components import (
    ONE_APPRAISER,
    AnovaRow,
    GaugeComponents,
    GaugeDiscrimination,
    GaugeOnCapability,
    GaugeOnChart,
    Model,
    OneSidedTolerance,
    anova_row,
    assemble,
    complete,
    rounding_sum_of_squares,
    terms,
    total_row,
)


@dataclass(frozen=True, slots=True, eq=False)
class NestedStudy:
    """The analysis of a nested study.

    Of the components, ``appraiser`` and ``reproducibility`` are one and the same, null with one appraiser;
    there is no interaction.

    appraiser_means (appraisers,), part_means and part_ranges (appraisers, parts).
    """

    appraisers: Annotated[int, "Number of appraisers."]
    parts: Annotated[int, "Number of parts of each appraiser."]
    trials: Annotated[int, "Measurements of each part."]
    grand_mean: Annotated[float, "Mean of all measurements."]
    table: Annotated[tuple[AnovaRow, ...], "The analysis of variance."]
    confidence: Annotated[float, "Of each interval by itself."]
    spread_multiple: Annotated[float, "Standard deviations that make up a spread."]
    components: Annotated[GaugeComponents, "The components of the variation."]
    discrimination: Annotated[GaugeDiscrimination, "How finely the gauge tells parts apart."]
    capability: Annotated[GaugeOnCapability, "What the gauge does to a capability index."]
    chart: Annotated[
        GaugeOnChart | None, "What the gauge does to a chart of means; null where nothing varies at all."
    ]
    appraiser_means: Annotated[Floats, "Mean of each appraiser."]
    repeatability_by_appraiser: Annotated[
        tuple[OwnRepeatability, ...],
        "How each appraiser repeats their own measurements, in their order; empty with one trial.",
    ]
    part_means: Floats
    part_ranges: Floats
    cautions: tuple[Caution, ...]


def nested(
    measurements: Floats,
    *,
    tolerance: float | OneSidedTolerance | None = None,
    spread_multiple: float = 6.0,
    process_sd: float | None = None,
    confidence: float = 0.95,
    chart_shift: float = 1.0,
    chart_subgroup_size: int = 5,
) -> NestedStudy:
    """Balanced two-stage nested random analysis of variance, with components and intervals.

    measurements: (appraisers, parts within appraiser, trials), no cell missing. In a destructive study
    a "part" is a batch so uniform that its pieces may stand for repeated trials; what differs between
    them counts as repeatability. Options as in :func:`~assignable.spc.studies.crossed.crossed`.

    One appraiser: one-way analysis. Bounds of the shares exist with one appraiser only.

    Raises :class:`UnusableData` (missing cells, each one named; fewer than two parts an appraiser, or
    one trial, with which part and gauge cannot be told apart) and :class:`UnusableParameter`. Sources:
    [searle-casella-mcculloch-1992] ch. 4, [burdick-borror-montgomery-2005].
    """
    asked = terms(
        tolerance=tolerance,
        spread_multiple=spread_multiple,
        process_sd=process_sd,
        confidence=confidence,
        chart_shift=chart_shift,
        chart_subgroup_size=chart_subgroup_size,
    )
    complete(measurements, axes="appraiser, part, trial")
    a, b, r = measurements.shape
    if b < 2:
        raise UnusableData.of(
            "too-few-parts",
            "Each appraiser needs at least two parts, or parts and appraisers cannot be told apart.",
            "data",
            "values",
        )
    if r < 2:
        raise UnusableData.of(
            "nothing-repeated",
            "Each part was measured once, so the spread of the parts and of the gauge cannot be told apart.",
            "data",
            "values",
        )
    centre = float(measurements.mean())
    x = measurements - centre
    # The second pass restores the digits that the mean of large values lost.
    lost = float(x.mean())
    x = x - lost
    grand_mean = centre + lost
    parts = x.mean(axis=2)
    appraisers = parts.mean(axis=1)
    largest = float(np.abs(measurements).max())
    floor = rounding_sum_of_squares(measurements.size, largest)

    def square(values: Floats, copies: int) -> float:
        total = copies * float(np.sum(values**2))
        return total if total > floor else 0.0

    ss_appraiser = square(appraisers, b * r)
    ss_part = square(parts - appraisers[:, None], r)
    ss_error = square(x - parts[:, :, None], 1)
    df_appraiser, df_part, df_error = a - 1, a * (b - 1), a * b * (r - 1)
    ms_part, ms_error = ss_part / df_part, ss_error / df_error
    rows: tuple[AnovaRow, ...] = (
        anova_row("part", ss_part, df_part, "repeatability", ms_error, df_error),
        anova_row("repeatability", ss_error, df_error, None, 0.0, 0),
    )
    notes: list[Caution] = []
    if a == 1:
        notes.append(ONE_APPRAISER)
        model = Model(
            np.array([ms_part, ms_error]), (df_part, df_error), largest, (0.0, 1.0), (1 / r, -1 / r)
        )
    else:
        rows = (anova_row("appraiser", ss_appraiser, df_appraiser, "part", ms_part, df_part), *rows)
        model = Model(
            np.array([ss_appraiser / df_appraiser, ms_part, ms_error]),
            (df_appraiser, df_part, df_error),
            largest,
            (0.0, 0.0, 1.0),
            (0.0, 1 / r, -1 / r),
            (1 / (b * r), -1 / (b * r), 0.0),
        )
    made = assemble(model, asked, grand_mean)
    return NestedStudy(
        a,
        b,
        r,
        grand_mean,
        (*rows, total_row(rows)),
        confidence,
        spread_multiple,
        made.components,
        made.discrimination,
        made.capability,
        made.chart,
        appraisers + grand_mean,
        by_appraiser(measurements, confidence),
        parts + grand_mean,
        np.ptp(measurements, axis=2),
        (*notes, *made.cautions),
    )
