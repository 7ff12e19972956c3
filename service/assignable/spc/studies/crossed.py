"""Crossed measurement study: every appraiser measures every part, several times."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated, Literal

import numpy as np

from ..cautions import Caution
from ..data import Floats
from ..errors import UnusableData, UnusableParameter
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
    Source,
    anova_row,
    assemble,
    complete,
    noted,
    rounding_sum_of_squares,
    terms,
    total_row,
)

StudyModel = Literal["with-interaction", "without-interaction", "one-appraiser"]


_NOT_ESTIMABLE = noted(
    "interaction-not-estimable",
    "Each appraiser measured each part once, so the interaction of part and appraiser cannot be told from "
    "repeatability and is contained in it.",
)


def _pooled(p_value: float | None, alpha: float | None) -> Caution:
    why = (
        "neither shows any variation."
        if p_value is None
        else f"its p-value, {p_value:.3g}, is above {alpha:g}."
    )
    return noted(
        "interaction-pooled",
        f"The interaction of part and appraiser was pooled into repeatability: {why}",
    )


@dataclass(frozen=True, slots=True, eq=False)
class CrossedStudy:
    """The analysis of a crossed study.

    part_means (parts,), appraiser_means (appraisers,), cell_means and cell_ranges (parts, appraisers):
    what pictures of the study show.
    """

    parts: Annotated[int, "Number of parts."]
    appraisers: Annotated[int, "Number of appraisers."]
    trials: Annotated[int, "Measurements of each part by each appraiser."]
    grand_mean: Annotated[float, "Mean of all measurements."]
    model: Annotated[StudyModel, "The model the components come from."]
    pooling_alpha: Annotated[
        float | None,
        "The interaction is pooled where its p-value is above this; null where it is always kept.",
    ]
    interaction_p_value: Annotated[
        float | None,
        "Of the F test of the interaction; null where the design cannot estimate it, and where neither it nor "
        "repeatability shows variation.",
    ]
    interaction_pooled: Annotated[bool, "Whether the interaction was pooled into repeatability."]
    table: Annotated[tuple[AnovaRow, ...], "The analysis of variance used."]
    table_with_interaction: Annotated[
        tuple[AnovaRow, ...] | None,
        "The one with the interaction kept; null where the design cannot estimate it (one trial, one appraiser).",
    ]
    confidence: Annotated[float, "Of each interval by itself."]
    spread_multiple: Annotated[float, "Standard deviations that make up a spread."]
    components: Annotated[GaugeComponents, "The components of the variation."]
    discrimination: Annotated[GaugeDiscrimination, "How finely the gauge tells parts apart."]
    capability: Annotated[GaugeOnCapability, "What the gauge does to a capability index."]
    chart: Annotated[
        GaugeOnChart | None, "What the gauge does to a chart of means; null where nothing varies at all."
    ]
    part_means: Annotated[Floats, "Mean of each part."]
    appraiser_means: Annotated[Floats, "Mean of each appraiser."]
    repeatability_by_appraiser: Annotated[
        tuple[OwnRepeatability, ...],
        "How each appraiser repeats their own measurements, in their order; empty with one trial.",
    ]
    cell_means: Floats
    cell_ranges: Floats
    cautions: tuple[Caution, ...]


def crossed(
    measurements: Floats,
    *,
    tolerance: float | OneSidedTolerance | None = None,
    spread_multiple: float = 6.0,
    pooling_alpha: float | None = 0.05,
    process_sd: float | None = None,
    confidence: float = 0.95,
    chart_shift: float = 1.0,
    chart_subgroup_size: int = 5,
) -> CrossedStudy:
    """Balanced two-way random analysis of variance of a gauge study, with components and intervals.

    measurements: (parts, appraisers, trials), no cell missing.
    tolerance: width of the specification in the unit of measurement, or its only limit.
    spread_multiple: standard deviations that make up a spread (6; 5.15 in older practice).
    pooling_alpha: the interaction is pooled into repeatability when its p-value exceeds this; ``None``
        keeps it always.
    process_sd: standard deviation seen in production (gauge included); shares, categories and effects
        then refer to it and not to the parts of the study.
    chart_shift, chart_subgroup_size: the case the effect on a chart of means is stated for; the shift
        in product sigmas.

    One trial: the interaction cannot be told from repeatability, and the model without it is used. One
    appraiser: one-way analysis, the gauge being repeatability alone. Sums of squares that the rounding
    of the measurements could have made count as zero.

    Raises :class:`UnusableData` (missing cells, each one named; fewer than two parts; nothing repeated)
    and :class:`UnusableParameter`. Sources: [aiag-msa-2010] ch. III B for the analysis and the number of
    distinct categories, [burdick-borror-montgomery-2005] ch. 3 for the intervals.
    """
    asked = terms(
        tolerance=tolerance,
        spread_multiple=spread_multiple,
        process_sd=process_sd,
        confidence=confidence,
        chart_shift=chart_shift,
        chart_subgroup_size=chart_subgroup_size,
    )
    if pooling_alpha is not None and not 0 <= pooling_alpha <= 1:
        raise UnusableParameter.of(
            "out-of-range",
            "The p-value above which the interaction is pooled lies between 0 and 1.",
            "pooling_alpha",
        )
    complete(measurements, axes="part, appraiser, trial")
    p, o, r = measurements.shape
    if p < 2:
        raise UnusableData.of(
            "too-few-parts",
            "A study of the gauge needs at least two parts; ten are usual.",
            "data",
            "values",
        )
    if o * r < 2:
        raise UnusableData.of(
            "nothing-repeated",
            "Each part was measured once by one appraiser, which says nothing about the gauge.",
            "data",
            "values",
        )
    centre = float(measurements.mean())
    x = measurements - centre
    # The second pass restores the digits that the mean of large values lost.
    lost = float(x.mean())
    x = x - lost
    grand_mean = centre + lost
    cells = x.mean(axis=2)
    part_means, appraiser_means = cells.mean(axis=1), cells.mean(axis=0)
    interaction = cells - part_means[:, None] - appraiser_means
    largest = float(np.abs(measurements).max())
    floor = rounding_sum_of_squares(measurements.size, largest)

    def square(values: Floats, copies: int) -> float:
        total = copies * float(np.sum(values**2))
        return total if total > floor else 0.0

    ss_part, df_part = square(part_means, o * r), p - 1
    ss_appraiser, df_appraiser = square(appraiser_means, p * r), o - 1
    ss_interaction, df_interaction = square(interaction, r), (p - 1) * (o - 1)
    ss_error, df_error = square(x - cells[:, :, None], 1), p * o * (r - 1)

    def additive(ss_rest: float, df_rest: int) -> tuple[tuple[AnovaRow, ...], Model]:
        """Everything but the main effects is repeatability."""
        ms_rest = ss_rest / df_rest
        part = anova_row("part", ss_part, df_part, "repeatability", ms_rest, df_rest)
        rest = anova_row("repeatability", ss_rest, df_rest, None, 0.0, 0)
        if o == 1:
            return (part, rest, total_row((part, rest))), Model(
                np.array([ss_part / df_part, ms_rest]),
                (df_part, df_rest),
                largest,
                (0.0, 1.0),
                (1 / r, -1 / r),
            )
        appraiser = anova_row("appraiser", ss_appraiser, df_appraiser, "repeatability", ms_rest, df_rest)
        rows = (part, appraiser, rest)
        return (*rows, total_row(rows)), Model(
            np.array([ss_part / df_part, ss_appraiser / df_appraiser, ms_rest]),
            (df_part, df_appraiser, df_rest),
            largest,
            (0.0, 0.0, 1.0),
            (1 / (o * r), 0.0, -1 / (o * r)),
            (0.0, 1 / (p * r), -1 / (p * r)),
        )

    def interactive() -> tuple[tuple[AnovaRow, ...], Model]:
        between, within = ss_interaction / df_interaction, ss_error / df_error
        against: tuple[Source, float, int] = ("part-by-appraiser", between, df_interaction)
        rows = (
            anova_row("part", ss_part, df_part, *against),
            anova_row("appraiser", ss_appraiser, df_appraiser, *against),
            anova_row("part-by-appraiser", ss_interaction, df_interaction, "repeatability", within, df_error),
            anova_row("repeatability", ss_error, df_error, None, 0.0, 0),
        )
        return (*rows, total_row(rows)), Model(
            np.array([ss_part / df_part, ss_appraiser / df_appraiser, between, within]),
            (df_part, df_appraiser, df_interaction, df_error),
            largest,
            (0.0, 0.0, 0.0, 1.0),
            (1 / (o * r), 0.0, -1 / (o * r), 0.0),
            (0.0, 1 / (p * r), -1 / (p * r), 0.0),
            (0.0, 0.0, 1 / r, -1 / r),
        )

    notes: list[Caution] = []
    full: tuple[AnovaRow, ...] | None = None
    p_interaction: float | None = None
    pooled = False
    name: StudyModel = "without-interaction"
    if o == 1:
        name = "one-appraiser"
        notes.append(ONE_APPRAISER)
        table, model = additive(ss_error, df_error)
    elif r == 1:
        notes.append(_NOT_ESTIMABLE)
        table, model = additive(ss_interaction, df_interaction)
    else:
        full, model = interactive()
        p_interaction = full[2].p_value
        pooled = pooling_alpha is not None and (p_interaction is None or p_interaction > pooling_alpha)
        if pooled:
            notes.append(_pooled(p_interaction, pooling_alpha))
            table, model = additive(ss_interaction + ss_error, df_interaction + df_error)
        else:
            name, table = "with-interaction", full

    made = assemble(model, asked, grand_mean)
    return CrossedStudy(
        p,
        o,
        r,
        grand_mean,
        name,
        pooling_alpha,
        p_interaction,
        pooled,
        table,
        full,
        confidence,
        spread_multiple,
        made.components,
        made.discrimination,
        made.capability,
        made.chart,
        part_means + grand_mean,
        appraiser_means + grand_mean,
        by_appraiser(measurements.swapaxes(0, 1), confidence),
        cells + grand_mean,
        np.ptp(measurements, axis=2),
        (*notes, *made.cautions),
    )
