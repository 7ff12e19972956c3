"""Variance components of balanced random models: what the measurement studies have in common.

Every component here is a linear combination of independent mean squares, ``γ = Σ c_q θ_q`` with
``ν_q S_q² / θ_q`` chi-square. Estimates put ``S_q²`` for ``θ_q`` and may be negative; both they and
the values set to zero are reported.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Annotated, Literal

import numpy as np
import scipy

from ..cautions import Caution
from ..data import Floats
from ..errors import Fault, UnusableData, UnusableParameter

# A few hundred sentences help nobody; the edge stops at the same number.
_MOST_FAULTS = 100
# Beyond these the fourth powers in the intervals leave the range of double precision.
_LARGEST = 1e60
_SMALLEST_SPREAD = 1e-60
# The rule of the AIAG manual counts with 1.41 where the derivation says √2.
_CATEGORIES_RULE = 1.41


Source = Literal["part", "appraiser", "part-by-appraiser", "repeatability", "total"]


def noted(code: str, sentence: str, *, reference: str = "aiag-msa-2010") -> Caution:
    """A caution about the measurements of a study."""
    return Caution(code, sentence, ("data",), reference)


@dataclass(frozen=True, slots=True)
class OneSidedTolerance:
    """A specification with one limit only: its value in the unit of measurement, and its side."""

    limit: float
    side: Literal["lower", "upper"]


@dataclass(frozen=True, slots=True)
class AnovaRow:
    """One source of variation in an analysis of variance."""

    source: Annotated[Source, "What varies."]
    sum_of_squares: Annotated[float, "In squared units of the measurements."]
    degrees_of_freedom: Annotated[int, "Of the sum of squares."]
    mean_square: Annotated[float | None, "Sum of squares over degrees of freedom; null in the total row."]
    tested_against: Annotated[
        Source | None, "The source whose mean square divides in the F test; null in rows without a test."
    ]
    f_ratio: Annotated[
        float | None, "Null in rows without a test, and where the mean square that divides is zero."
    ]
    p_value: Annotated[
        float | None,
        "Upper tail of F; 0 where only the mean square that divides is zero, null where both are, and in rows "
        "without a test.",
    ]


@dataclass(frozen=True, slots=True)
class VarianceComponent:
    """One component of the variation, with everything said about it."""

    estimate: Annotated[
        float, "As the analysis of variance gives it, in squared units; negative where chance makes it so."
    ]
    variance: Annotated[
        float,
        "The estimate with negative components as zero; a sum adds the parts so treated. Squared units.",
    ]
    variance_lower: Annotated[float, "Lower confidence bound of the variance, not below zero; squared units."]
    variance_upper: Annotated[float, "Upper confidence bound of the variance, not below zero; squared units."]
    sd: Annotated[float, "Standard deviation: the root of the variance, in the unit of the measurements."]
    sd_lower: Annotated[float, "Its lower confidence bound."]
    sd_upper: Annotated[float, "Its upper confidence bound."]
    variance_share_percent: Annotated[
        float | None, "Share of the total variance, in percent; null where nothing varies at all."
    ]
    spread: Annotated[
        float, "The spread multiple times the standard deviation, in the unit of the measurements."
    ]
    sd_share_percent: Annotated[
        float | None,
        "Standard deviation over the total standard deviation, in percent; these do not add up to 100. Null where "
        "nothing varies at all.",
    ]
    share_of_tolerance_percent: Annotated[
        float | None,
        "That spread over the width of the specification, in percent; with one limit, half of it over the "
        "distance from the mean to that limit. Null without a specification, or with the mean beyond its only limit.",
    ]


@dataclass(frozen=True, slots=True)
class GaugeComponents:
    """The components of a gauge study; null for one that the design or the model has not got.

    gauge = repeatability + reproducibility; reproducibility = appraiser + part_by_appraiser;
    total = gauge + part.
    """

    repeatability: Annotated[VarianceComponent, "The same appraiser measuring the same part again."]
    appraiser: Annotated[VarianceComponent | None, "Differences between appraisers."]
    part_by_appraiser: Annotated[
        VarianceComponent | None, "Differences between appraisers that depend on the part."
    ]
    reproducibility: Annotated[VarianceComponent | None, "Appraiser and interaction together."]
    gauge: Annotated[VarianceComponent, "The measurement system: repeatability and reproducibility together."]
    part: Annotated[VarianceComponent, "True differences between the parts of the study."]
    total: Annotated[VarianceComponent, "Gauge and part together."]


@dataclass(frozen=True, slots=True)
class GaugeDiscrimination:
    """How finely the gauge tells parts apart.

    Bounds are null where the design has none in closed form, and with the basis ``process``.
    """

    basis: Annotated[
        Literal["study", "process"],
        "Whose spread of parts: the study's own, or that of the process standard deviation given.",
    ]
    distinct_categories: Annotated[
        int | None,
        "1.41 times part over gauge standard deviation, cut to a whole number; null where the gauge shows no "
        "variation.",
    ]
    distinct_categories_ratio: Annotated[float | None, "The root of 2 times that ratio, not cut."]
    distinct_categories_ratio_lower: Annotated[float | None, "Lower confidence bound of the ratio."]
    distinct_categories_ratio_upper: Annotated[float | None, "Upper confidence bound of the ratio."]
    gauge_variance_share_percent: Annotated[float | None, "Gauge variance over total variance, in percent."]
    gauge_variance_share_percent_lower: Annotated[float | None, "Its lower confidence bound."]
    gauge_variance_share_percent_upper: Annotated[float | None, "Its upper confidence bound."]
    part_variance_share_percent: Annotated[
        float | None, "Its complement to 100: the intraclass correlation, in percent."
    ]
    part_variance_share_percent_lower: Annotated[float | None, "Its lower confidence bound."]
    part_variance_share_percent_upper: Annotated[float | None, "Its upper confidence bound."]


@dataclass(frozen=True, slots=True)
class GaugeOnCapability:
    """What the gauge does to a capability index.

    Null where a variance that divides is zero, or the mean is beyond the only limit.
    """

    index: Annotated[
        Literal["cp", "cpu", "cpl"] | None,
        "`cp`, or with one limit `cpu` or `cpl` from the mean of the study; null without a specification.",
    ]
    observed_index: Annotated[float | None, "With the variance of part and gauge together."]
    true_index: Annotated[float | None, "With the variance of the parts alone."]
    ratio: Annotated[
        float | None, "Observed over true: the root of part over total variance; needs no specification."
    ]


@dataclass(frozen=True, slots=True)
class GaugeOnChart:
    """What the gauge does to a three-sigma chart of means, each piece measured once.

    The gauge's errors count as independent from piece to piece, and the limits as made with them in.
    """

    shift_factor: Annotated[float, "A shift of one product sigma looks like this many observed sigmas."]
    shift: Annotated[float, "The shift looked at, in product sigmas."]
    subgroup_size: Annotated[int, "Pieces in a subgroup."]
    arl_perfect_gauge: Annotated[
        float, "Average number of subgroups to the first point beyond a limit, were the gauge perfect."
    ]
    arl_with_gauge: Annotated[float, "The same with this gauge."]
    subgroup_size_factor: Annotated[
        float | None,
        "How many times larger a subgroup restores the lost power; null where the parts show no variation.",
    ]


# -- what is asked -----------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Terms:
    """The options the studies share, validated by :func:`terms`."""

    tolerance: float | OneSidedTolerance | None
    spread_multiple: float
    process_sd: float | None
    confidence: float
    chart_shift: float
    chart_subgroup_size: int


def confidence_faults(confidence: float) -> list[Fault]:
    """What is wrong with a confidence level, if anything."""
    # Nearer to 1 the tails are the rounding of the level, and the bounds with them.
    if 0 < confidence <= 0.999999:
        return []
    detail = "The confidence level must lie between 0 and 0.999999; 0.95 is usual."
    return [Fault("out-of-range", detail, ("confidence",))]


def terms(
    *,
    tolerance: float | OneSidedTolerance | None,
    spread_multiple: float,
    process_sd: float | None,
    confidence: float,
    chart_shift: float,
    chart_subgroup_size: int,
) -> Terms:
    """The shared options, or :class:`UnusableParameter` with a fault for each that is out of range."""
    faults: list[Fault] = []

    def positive(value: float, name: str, what: str) -> None:
        if not (0 < value < _LARGEST):
            faults.append(Fault("out-of-range", f"{what} must be greater than zero.", (name,)))

    if isinstance(tolerance, OneSidedTolerance):
        if not abs(tolerance.limit) < _LARGEST:
            detail = "The specification limit must be a finite number."
            faults.append(Fault("out-of-range", detail, ("specification", tolerance.side)))
    elif tolerance is not None:
        positive(tolerance, "specification", "The width of the tolerance")
    positive(spread_multiple, "spread_multiple", "The spread multiple")
    if process_sd is not None:
        positive(process_sd, "process_sd", "The standard deviation of the process")
    positive(chart_shift, "chart_shift", "The shift of the process")
    if chart_subgroup_size < 1:
        faults.append(Fault("out-of-range", "A subgroup has at least one piece.", ("chart_subgroup_size",)))
    faults += confidence_faults(confidence)
    if faults:
        raise UnusableParameter(*faults)
    return Terms(tolerance, spread_multiple, process_sd, confidence, chart_shift, chart_subgroup_size)


def complete(measurements: Floats, *, axes: str) -> None:
    """Refuse a table that is not a full one of usable numbers, naming each missing cell.

    measurements: (a, b, c); axes: how a reader calls them, for the sentences.
    Raises :class:`UnusableData`.
    """
    if measurements.ndim != 3 or measurements.size == 0:
        raise UnusableData.of(
            "empty", f"The measurements must form a full table of {axes}.", "data", "values"
        )
    bad = np.argwhere(~np.isfinite(measurements))
    if bad.size:
        raise UnusableData(
            *(
                Fault(
                    "missing-measurement",
                    f"The measurement at {axes} {i + 1}, {j + 1}, {k + 1} is missing; this analysis needs "
                    "every cell filled. Measure it again, or leave that part out of the study.",
                    ("data", "values", i, j, k),
                )
                for i, j, k in bad[:_MOST_FAULTS].tolist()
            )
        )
    spread = float(measurements.max() - measurements.min())
    if float(np.abs(measurements).max()) > _LARGEST or 0 < spread < _SMALLEST_SPREAD:
        raise UnusableData.of(
            "out-of-range",
            "The measurements are too large, or differ too little, for their squares to be computed; "
            "use another unit.",
            "data",
            "values",
        )


def rounding_sum_of_squares(count: int, largest: float) -> float:
    """The sum of squares below which a difference is the rounding of the numbers sent, not variation."""
    return count * (4.0 * float(np.finfo(np.float64).eps) * largest) ** 2


# -- distributions -----------------------------------------------------------------------------------


def f_upper_quantile(tail: float, df1: int, df2: int) -> float:
    """The value F(df1, df2) exceeds with probability ``tail``."""
    beta = scipy.special.betainccinv(df1 / 2, df2 / 2, tail)
    # Both ends of the beta variate by their own inverse: 1 - beta loses its digits near 1.
    rest = scipy.special.betaincinv(df2 / 2, df1 / 2, tail)
    return float(beta / rest * (df2 / df1))


def anova_row(
    source: Source, square: float, df: int, against: Source | None, denominator: float, denominator_df: int
) -> AnovaRow:
    """A row with its F test against a denominator mean square; ``against`` is ``None`` for no test."""
    mean_square = square / df
    f_ratio = p_value = None
    if against is not None:
        if denominator > 0:
            f_ratio = mean_square / denominator
            if math.isinf(f_ratio):
                f_ratio, p_value = None, 0.0
            else:
                p_value = float(scipy.special.fdtrc(df, denominator_df, f_ratio))
        elif mean_square > 0:
            p_value = 0.0
    return AnovaRow(source, square, df, mean_square, against, f_ratio, p_value)


def total_row(rows: Sequence[AnovaRow]) -> AnovaRow:
    """The row of sums."""
    return AnovaRow(
        "total",
        sum(row.sum_of_squares for row in rows),
        sum(row.degrees_of_freedom for row in rows),
        None,
        None,
        None,
        None,
    )


# -- intervals ---------------------------------------------------------------------------------------


def _lower_bound(
    coefficients: Sequence[float], mean_squares: Floats, df: Sequence[int], tail: float
) -> Floats:
    """The lower bound of [ting-1990]; with positive coefficients alone that of [graybill-wang-1980]."""
    up = [q for q, c in enumerate(coefficients) if c > 0]
    down = [q for q, c in enumerate(coefficients) if c < 0]
    size = {q: abs(coefficients[q]) * mean_squares[q] for q in (*up, *down)}
    G = {q: 1 - df[q] / (2 * scipy.special.gammainccinv(df[q] / 2, tail)) for q in up}
    H = {q: df[q] / (2 * scipy.special.gammaincinv(df[q] / 2, tail)) - 1 for q in down}
    square = np.zeros(mean_squares.shape[1:])
    for q in up:
        square = square + (G[q] * size[q]) ** 2
    for r in down:
        square = square + (H[r] * size[r]) ** 2
        for q in up:
            F = f_upper_quantile(tail, df[q], df[r])
            square = square + ((F - 1) ** 2 - (G[q] * F) ** 2 - H[r] ** 2) / F * size[q] * size[r]
    if down and len(up) > 1:
        for i, q in enumerate(up):
            for t in up[i + 1 :]:
                both = df[q] + df[t]
                g = 1 - both / (2 * scipy.special.gammainccinv(both / 2, tail))
                cross = (
                    g**2 * both**2 / (df[q] * df[t]) - G[q] ** 2 * df[q] / df[t] - G[t] ** 2 * df[t] / df[q]
                ) / (len(up) - 1)
                square = square + cross * size[q] * size[t]
    estimate = combination(coefficients, mean_squares)
    return np.asarray(estimate - np.sqrt(np.maximum(square, 0.0)))


def combination(coefficients: Sequence[float], mean_squares: Floats) -> Floats:
    """``Σ c_q S_q²`` for mean squares (q, ...); shape (...)."""
    return np.asarray(np.tensordot(np.asarray(coefficients), mean_squares, axes=1))


def combination_interval(
    coefficients: Sequence[float], mean_squares: Floats, df: Sequence[int], confidence: float
) -> tuple[Floats, Floats]:
    """Modified large-sample interval of ``Σ c_q θ_q``, each bound at (1 - confidence)/2.

    coefficients: (q,), of either sign, zero to leave one out; mean_squares: (q, ...), df: (q,).
    Returns the bounds, shape (...), which may be negative. Exact (chi-square) for a single mean square.
    [burdick-borror-montgomery-2005] ch. 3 and app. B; [graybill-wang-1980] for sums, [ting-1990] for
    combinations with negative coefficients.
    """
    tail = (1 - confidence) / 2
    lower = _lower_bound(coefficients, mean_squares, df, tail)
    # The upper bound of γ is the lower bound of -γ, mirrored.
    upper = -_lower_bound([-c for c in coefficients], mean_squares, df, tail)
    return lower, upper


def ratio_interval(
    denominator: Sequence[float],
    mean_squares: Floats,
    df: Sequence[int],
    confidence: float,
    *,
    first: int,
    second: int,
    scale: float,
) -> tuple[Floats, Floats]:
    """Interval of ``scale (θ_first - θ_second) / Σ d_q θ_q``, all ``d_q`` at least zero.

    mean_squares: (q, ...); the denominator must not vanish. Returns the bounds, shape (...), not below
    zero. Exact when one mean square makes up the denominator and is the second.
    [burdick-borror-montgomery-2003], after [leiva-graybill-1986].
    """
    bounds = []
    for tail in ((1 - confidence) / 2, (1 + confidence) / 2):
        F = [f_upper_quantile(tail, df[first], df[q]) if q != first else 1.0 for q in range(len(df))]
        bottom = combination([d * f for d, f in zip(denominator, F, strict=True)], mean_squares)
        top = mean_squares[first] - F[second] * mean_squares[second]
        bounds.append(np.maximum(scale * top / bottom, 0.0))
    return bounds[0], bounds[1]


ONE_APPRAISER = noted(
    "one-appraiser",
    "One appraiser took part, so reproducibility is unknown and the gauge variation is repeatability alone.",
)

# -- assembly ----------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class Model:
    """A fitted balanced random model.

    mean_squares: (q,); df: (q,); largest: the largest measurement in size. Of each component, the
    coefficients over the mean squares; ``None`` for one the model has not got.
    """

    mean_squares: Floats
    df: tuple[int, ...]
    largest: float
    repeatability: tuple[float, ...]
    part: tuple[float, ...]
    appraiser: tuple[float, ...] | None = None
    part_by_appraiser: tuple[float, ...] | None = None

    def added(self, *names: tuple[float, ...] | None) -> tuple[float, ...]:
        """The coefficients of a sum of components."""
        present = [name for name in names if name is not None]
        # Sums such as 1/r - 1/(or) - 1/(pr) must not turn into a negative of the last digit.
        return tuple(0.0 if abs(c) < 1e-14 else c for c in map(math.fsum, zip(*present, strict=True)))


@dataclass(frozen=True, slots=True)
class Assembled:
    """What :func:`assemble` makes of a model."""

    components: GaugeComponents
    discrimination: GaugeDiscrimination
    capability: GaugeOnCapability
    chart: GaugeOnChart | None
    cautions: tuple[Caution, ...]


def _estimate(coefficients: Sequence[float], model: Model) -> float:
    """The combination, zero where equal mean squares leave only the rounding of their difference.

    Rounding comes from the measurements as sent, whose last digit may be large beside their spread, and
    from the arithmetic.
    """
    estimate = float(combination(coefficients, model.mean_squares))
    added = float(combination([abs(c) for c in coefficients], model.mean_squares))
    eps = float(np.finfo(np.float64).eps)
    noise = 64 * eps * added + 16 * eps * model.largest * math.sqrt(added)
    return estimate if abs(estimate) > noise else 0.0


def _part_over_gauge(model: Model, confidence: float) -> tuple[float, float] | None:
    """Bounds of part over gauge variance, where the gauge is a sum of mean squares and not all zero."""
    gauge = model.added(model.repeatability, model.appraiser, model.part_by_appraiser)
    if min(gauge) < 0 or float(combination(gauge, model.mean_squares)) <= 0:
        return None
    first = next(q for q, c in enumerate(model.part) if c > 0)
    second = next(q for q, c in enumerate(model.part) if c < 0)
    lower, upper = ratio_interval(
        gauge, model.mean_squares, model.df, confidence, first=first, second=second, scale=model.part[first]
    )
    return float(lower), float(upper)


def assemble(model: Model, asked: Terms, grand_mean: float) -> Assembled:
    """Components with intervals and shares, and what they mean for categories, capability and charts.

    Raises :class:`UnusableParameter` when the process standard deviation given is not larger than the
    gauge's.
    """
    notes: list[Caution] = []
    own = {
        "repeatability": model.repeatability,
        "appraiser": model.appraiser,
        "part_by_appraiser": model.part_by_appraiser,
        "part": model.part,
    }
    estimates = {name: _estimate(c, model) for name, c in own.items() if c is not None}
    values = {name: max(estimate, 0.0) for name, estimate in estimates.items()}
    for name, estimate in estimates.items():
        if estimate < 0:
            notes.append(
                noted(
                    "negative-component",
                    f"The estimated variance of {name.replace('_', ' ')} is negative ({estimate:.6g}); it "
                    "counts as zero. This happens by chance when the component is small.",
                )
            )
    gauge_variance = (
        values["repeatability"] + values.get("appraiser", 0.0) + values.get("part_by_appraiser", 0.0)
    )
    if asked.process_sd is None:
        part_variance = values["part"]
        total_variance = gauge_variance + part_variance
    else:
        total_variance = asked.process_sd**2
        part_variance = total_variance - gauge_variance
        if part_variance <= 0:
            raise UnusableParameter.of(
                "process-below-gauge",
                f"The standard deviation of the process, {asked.process_sd:g}, is not larger than that of "
                f"the gauge in this study, {math.sqrt(gauge_variance):.6g}. It must be the one seen in "
                "production, which includes the gauge.",
                "process_sd",
            )
    distance = _distance(asked.tolerance, grand_mean, notes)

    def component(*names: str) -> VarianceComponent:
        coefficients = model.added(*(own[name] for name in names))
        estimate = _estimate(coefficients, model)
        variance = sum(values.get(name, 0.0) for name in names)
        low, high = combination_interval(coefficients, model.mean_squares, model.df, asked.confidence)
        lower, upper = max(float(low), 0.0), max(float(high), 0.0)
        if len(names) > 1:
            # A sum is never smaller than what it adds; this only ever widens an interval.
            for name in names:
                if (single := own[name]) is not None:
                    _, high = combination_interval(single, model.mean_squares, model.df, asked.confidence)
                    upper = max(upper, float(high))
        sd = math.sqrt(variance)
        return VarianceComponent(
            estimate,
            variance,
            lower,
            upper,
            sd,
            math.sqrt(lower),
            math.sqrt(upper),
            100 * variance / total_variance if total_variance > 0 else None,
            asked.spread_multiple * sd,
            100 * math.sqrt(variance / total_variance) if total_variance > 0 else None,
            None if distance is None else 100 * asked.spread_multiple * sd / distance,
        )

    several = model.appraiser is not None
    components = GaugeComponents(
        component("repeatability"),
        component("appraiser") if several else None,
        component("part_by_appraiser") if model.part_by_appraiser is not None else None,
        component("appraiser", "part_by_appraiser") if several else None,
        component("repeatability", "appraiser", "part_by_appraiser"),
        component("part"),
        component("repeatability", "appraiser", "part_by_appraiser", "part"),
    )
    if total_variance == 0:
        notes.append(
            noted("no-variation", "All measurements are equal, so no share of the variation can be stated.")
        )
    elif gauge_variance == 0:
        notes.append(
            noted(
                "no-gauge-variation",
                "Repeated measurements agree to the last digit; check the resolution of the gauge, and that "
                "the values were measured and not copied.",
            )
        )
    return Assembled(
        components,
        _discrimination(
            part_variance, gauge_variance, total_variance, asked, _part_over_gauge(model, asked.confidence)
        ),
        _capability(part_variance, total_variance, asked, distance),
        _chart(part_variance, total_variance, asked),
        tuple(notes),
    )


def _distance(
    tolerance: float | OneSidedTolerance | None, grand_mean: float, notes: list[Caution]
) -> float | None:
    """The width of the tolerance, or twice the room between the mean and the only limit."""
    if not isinstance(tolerance, OneSidedTolerance):
        return tolerance
    room = tolerance.limit - grand_mean if tolerance.side == "upper" else grand_mean - tolerance.limit
    if room > 0:
        return 2 * room
    notes.append(
        noted(
            "mean-beyond-limit",
            f"The mean of the measurements, {grand_mean:.6g}, is not inside the {tolerance.side} limit "
            f"{tolerance.limit:g}, so there is no tolerance to take a share of.",
        )
    )
    return None


def _discrimination(
    part: float, gauge: float, total: float, asked: Terms, ratio: tuple[float, float] | None
) -> GaugeDiscrimination:
    lower, upper = ratio if ratio is not None and asked.process_sd is None else (None, None)
    times = math.sqrt(part / gauge) if gauge > 0 else None
    return GaugeDiscrimination(
        "study" if asked.process_sd is None else "process",
        None if times is None else int(_CATEGORIES_RULE * times),
        None if times is None else math.sqrt(2) * times,
        None if lower is None else math.sqrt(2 * lower),
        None if upper is None else math.sqrt(2 * upper),
        100 * gauge / total if total > 0 else None,
        None if upper is None else 100 / (1 + upper),
        None if lower is None else 100 / (1 + lower),
        100 * part / total if total > 0 else None,
        None if lower is None else 100 * lower / (1 + lower),
        None if upper is None else 100 * upper / (1 + upper),
    )


def _capability(part: float, total: float, asked: Terms, distance: float | None) -> GaugeOnCapability:
    index: Literal["cp", "cpu", "cpl"] | None = None
    if isinstance(asked.tolerance, OneSidedTolerance):
        index = "cpu" if asked.tolerance.side == "upper" else "cpl"
    elif asked.tolerance is not None:
        index = "cp"
    return GaugeOnCapability(
        index,
        distance / (6 * math.sqrt(total)) if distance is not None and total > 0 else None,
        distance / (6 * math.sqrt(part)) if distance is not None and part > 0 else None,
        math.sqrt(part / total) if total > 0 else None,
    )


def _chart(part: float, total: float, asked: Terms) -> GaugeOnChart | None:
    if total == 0:
        return None
    factor = math.sqrt(part / total)

    def run_length(shift: float) -> float:
        away = shift * math.sqrt(asked.chart_subgroup_size)
        return float(1 / (scipy.special.ndtr(away - 3) + scipy.special.ndtr(-away - 3)))

    return GaugeOnChart(
        factor,
        asked.chart_shift,
        asked.chart_subgroup_size,
        run_length(asked.chart_shift),
        run_length(asked.chart_shift * factor),
        total / part if part > 0 else None,
    )
