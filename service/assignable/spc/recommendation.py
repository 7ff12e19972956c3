"""Which chart to use: from a description of the data, from a sample of it, or from both.

What decides, in this order: what the data is; how many characteristics it has; what the process does by
nature (follows its specification, drifts, depends on its own past, changes its part, differs between
subgroups); how small a shift matters; and the size of the samples. The choices are common practice and the
sources of the charts' own pages [iso-7870-1]; a sample is looked at with the diagnostics that every fit states, at a
significance of 0.01.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from . import diagnostics
from .baseline import change_points
from .charts import CHARTS
from .components import components
from .data import Counts, Floats, Intervals, Subgroups, SubgroupStatistics, Vectors
from .errors import UnusableData, UnusableParameter
from .sigma import moving_range, within

SIGNIFICANCE = 0.01
RARE = 1.0
"""Average events in a sample below which most samples hold none."""
NEARLY_CONTINUOUS = 5.0
LARGE_FOR_RANGES = 5
LEAST_DISPERSION = 1.2
"""A ratio of variation this near to 1, or its inverse, does not spoil limits."""
LEAST_BETWEEN = 2.0
"""Means that vary less than this many times what the spread within explains do not spoil limits."""

Kind: TypeAlias = Literal[
    "measurements",
    "nonconforming-units",
    "nonconformities",
    "opportunities-between-events",
    "time-between-events",
]
Dispersion: TypeAlias = Literal["by-chance", "more", "less"]


@dataclass(frozen=True, slots=True)
class Description:
    """What is known of the data; each flag false where it is not known."""

    kind: Annotated[Kind, "What is recorded."]
    variables: Annotated[int, "Characteristics measured on each piece and watched together."] = 1
    subgroup_size: Annotated[int, "Measurements in a subgroup; 1 for single values."] = 1
    sizes_vary: Annotated[bool, "Whether subgroups, samples or areas differ in size."] = False
    events_per_sample: Annotated[
        float | None, "Average count of a sample: rate times size; null where it is not known."
    ] = None
    dispersion: Annotated[
        Dispersion,
        "Whether counts vary as chance has it, or more, or less (batches, seasons, mixed streams).",
    ] = "by-chance"
    depends_on_neighbours: Annotated[bool, "Whether points depend on those before them in time."] = False
    drifts: Annotated[bool, "Whether the level drifts by nature: tool wear, a bath used up."] = False
    differs_between_subgroups: Annotated[
        bool, "Whether subgroups differ by nature: loads, cavities, reels."
    ] = False
    short_runs: Annotated[bool, "Whether many part numbers with targets of their own come in short runs."] = (
        False
    )
    small_shifts: Annotated[bool, "Whether shifts of less than about 1.5 sigma of a point matter."] = False
    within_specification: Annotated[
        bool, "Whether the level may move freely as long as product meets a wide specification."
    ] = False
    not_normal: Annotated[
        bool, "Whether measurements are skewed, or otherwise far from normal, by nature."
    ] = False


@dataclass(frozen=True, slots=True)
class Alternative:
    """Another chart that would do."""

    chart: Annotated[str, "Its name in `GET /v1/charts`."]
    when: Annotated[str, "When it is the better choice."]


@dataclass(frozen=True, slots=True)
class Recommendation:
    """The chart to use."""

    chart: Annotated[str, "Its name in `GET /v1/charts`."]
    title: Annotated[str, "In words."]
    why: Annotated[str, "Two sentences: what the data is, and why this chart answers to it."]
    alternatives: Annotated[tuple[Alternative, ...], "What else would do, and when."]
    beware: Annotated[tuple[str, ...], "What to look out for with this chart and this data."]


@dataclass(frozen=True, slots=True)
class Drift:
    """A straight line through the points in time order."""

    slope: Annotated[float, "Per point, in the unit of the data."]
    explained: Annotated[float, "Share of the points' variation that the line explains."]
    p_value: Annotated[
        float, "Probability of as steep a line without drift, were points independent and normal."
    ]


@dataclass(frozen=True, slots=True)
class BetweenSubgroups:
    """Differences of successive subgroup means, against the spread within subgroups."""

    ratio: Annotated[float, "Ratio of the variances; 1 where subgroups do not differ."]
    p_value: Annotated[float, "Probability of as large a ratio where subgroups do not differ."]


@dataclass(frozen=True, slots=True)
class Evidence:
    """What the sample shows; each null where it does not apply, or the sample is too small for it."""

    points: Annotated[int, "Points that hold data."]
    change_point: Annotated[change_points.ChangePoint | None, "A lasting step within the sample."]
    drift: Annotated[Drift | None, "A straight line through the points."]
    autocorrelation: Annotated[
        diagnostics.Autocorrelation | None,
        "Of the points in time order, a significant step or a drift taken out first.",
    ]
    normality: Annotated[diagnostics.Normality | None, "Of the single values."]
    between_subgroups: Annotated[BetweenSubgroups | None, "Of subgroups of two measurements or more."]
    dispersion: Annotated[diagnostics.Dispersion | None, "Of counts."]


# ---------------------------------------------------------------------------------------------------
# From a description


def recommend(about: Description) -> Recommendation:
    """The chart for data like this. Raises UnusableParameter for a description that contradicts itself."""
    _check(about)
    if about.kind == "measurements":
        return _for_measurements(about)
    if about.kind in ("nonconforming-units", "nonconformities"):
        return _for_counts(about)
    return _for_intervals(about)


def _check(about: Description) -> None:
    measured = about.kind == "measurements"
    for name, given in (
        ("variables", about.variables > 1),
        ("subgroup_size", about.subgroup_size > 1),
        ("differs_between_subgroups", about.differs_between_subgroups),
        ("within_specification", about.within_specification),
        ("drifts", about.drifts),
        ("short_runs", about.short_runs),
        ("not_normal", about.not_normal),
    ):
        if given and not measured:
            raise UnusableParameter.of(
                "not-of-this-kind",
                f"`{name}` speaks of measurements, and the data are counts.",
                "description",
                name,
            )
    counted = about.kind in ("nonconforming-units", "nonconformities")
    for name, given in (
        ("events_per_sample", about.events_per_sample is not None),
        ("dispersion", about.dispersion != "by-chance"),
    ):
        if given and not counted:
            raise UnusableParameter.of(
                "not-of-this-kind",
                f"`{name}` speaks of counts in samples, and the data are none.",
                "description",
                name,
            )
    if about.differs_between_subgroups and about.subgroup_size < 2:
        raise UnusableParameter.of(
            "no-subgroups",
            "Only subgroups of two measurements or more can differ from each other.",
            "description",
            "differs_between_subgroups",
        )


def _told(
    choices: Sequence[str],
    data: str,
    reason: str,
    alternatives: Sequence[tuple[str, str]],
    beware: Sequence[str],
) -> Recommendation:
    """The first of the choices that this service has; the alternatives likewise."""
    name = next(choice for choice in choices if choice in CHARTS)
    chart = CHARTS[name]
    return Recommendation(
        name,
        chart.title,
        f"The data are {data[0].lower()}{data[1:]} {reason}",
        tuple(Alternative(other, when) for other, when in alternatives if other in CHARTS and other != name),
        (*beware, chart.beware),
    )


_STEP_FIRST = "Twenty to 25 points or more are needed before limits deserve trust."
_DEPENDENT = (
    "Points that depend on those before them give a chart of independent points false alarms at another rate "
    "than stated: sample less often, or watch the residuals of a model."
)


def _for_measurements(about: Description) -> Recommendation:
    single = about.subgroup_size == 1
    size = "Single values" if single else f"Subgroups of {about.subgroup_size}"
    beware = [_STEP_FIRST]
    plain = _plain(about)
    if about.depends_on_neighbours and (about.variables > 1 or about.within_specification or about.drifts):
        beware.append(_DEPENDENT)
    if about.variables > 1:
        many = f"Pieces with {about.variables} characteristics that are watched together."
        watch_each = (plain, "if the characteristics are unrelated, one chart for each")
        if about.small_shifts:
            return _told(
                ("mewma", "t-squared"),
                many,
                "Weighted averages of all of them find small lasting shifts, whatever the direction.",
                [
                    ("t-squared", "if only large shifts matter, or a signal must be traced to a variable"),
                    watch_each,
                ],
                beware,
            )
        return _told(
            ("t-squared",),
            many,
            "One distance keeps the false alarms of all together at one rate, sees what breaks their correlation, "
            "and tells which of them a signal comes from.",
            [("mewma", "if small lasting shifts matter"), watch_each],
            beware,
        )
    if about.within_specification:
        return _told(
            ("acceptance", plain),
            f"{size} of a process whose level may move freely within a wide specification.",
            "Limits placed from the specification let harmless changes pass and signal before product is lost, with "
            "both risks stated.",
            [(plain, "if the process is to be held where it is, and improved")],
            [
                *beware,
                "The spread must be stable, and small against the specification: watch it beside this chart.",
            ],
        )
    if about.drifts:
        return _told(
            ("trend", plain),
            f"{size} of a level that drifts by nature.",
            "Limits parallel to the drift judge what it does not explain, and the line foretells when to adjust.",
            [
                ("residual", "if the level wanders rather than drifts in one direction"),
                ("acceptance", "if only the limits of the specification matter"),
            ],
            beware,
        )
    if about.depends_on_neighbours:
        return _told(
            ("residual", plain),
            f"{size} in which points depend on those before them.",
            "A model of that dependence foretells each point, and what it missed is independent and can be judged.",
            [
                (plain, "if sampling less often makes points independent"),
                ("ewma", "to follow the level itself, with limits that are then only a guide"),
            ],
            [
                *beware,
                *([] if single else ["Put the means of the subgroups on it."]),
                "About 50 to 100 points are needed to fit the model.",
            ],
        )
    if about.short_runs:
        return _told(
            ("short-run", plain),
            f"{size} of many part numbers made in short runs.",
            "Each point is set against its own part's target, so that one chart follows the process through all parts.",
            [(plain, "for a part that runs long enough for limits of its own")],
            beware,
        )
    if about.differs_between_subgroups:
        return _told(
            ("between-within", "individuals"),
            f"{size} that differ from each other by nature.",
            "The spread within a subgroup says too little about how means vary, so their own moving range sets the "
            "limits, and the spread within has a panel of its own.",
            [
                ("individuals", "of the means, if the spread within does not matter"),
                (plain, "once the differences between subgroups are removed"),
            ],
            [*beware, "Reducing the differences between subgroups is often the larger gain."],
        )
    if about.small_shifts:
        return _told(
            ("ewma", "cusum", plain),
            f"{size}, of which small lasting shifts matter.",
            "Averages that remember earlier points find a small shift many points sooner than limits on each point do.",
            [
                (
                    "cusum",
                    "to learn when the shift began and how large it is, or to be quickest at one size of shift",
                ),
                ("moving-average", "if the average of the last few points is what people understand"),
                (plain, "beside it, for large sudden shifts"),
            ],
            beware,
        )
    if single:
        if about.not_normal:
            return _told(
                ("individuals",),
                "Single values that are not normal by nature.",
                "Set `distribution`: limits then come from a distribution fitted to them, chosen openly, and alarm "
                "falsely as often as stated.",
                [
                    ("ewma", "its averages with a small weight are near normal whatever the values are"),
                    ("t", "if the values are times between events"),
                ],
                [*beware, "Shifts, mixed streams and outliers look like skewness: rule them out first."],
            )
        return _told(
            ("individuals",),
            "Single values, one at a time.",
            "Each value is judged by the spread of successive differences, which lasting shifts hardly widen.",
            [
                ("ewma", "if small lasting shifts matter"),
                ("cusum", "likewise, with the start of a shift told"),
            ],
            [*beware, "It depends on normal values more than charts of means do."],
        )
    if plain == "xbar-r":
        return _told(
            ("xbar-r",),
            f"{size} measurements of one size.",
            "Means tell of the level and ranges of the spread, both easily understood, and ranges of so few values "
            "lose hardly any information.",
            [("xbar-s", "equally good; standard deviations use all the values"), *_FOR_SMALL],
            [*beware, "Values of a subgroup must be made under the same conditions."],
        )
    return _told(
        ("xbar-s",),
        f"{size} measurements{' that vary in size' if about.sizes_vary else ''}.",
        "Means tell of the level and standard deviations of the spread, without the information that ranges lose in "
        "larger subgroups, and limits follow each subgroup's size.",
        [("xbar-r", "if people work it out by hand"), *_FOR_SMALL],
        [*beware, "Values of a subgroup must be made under the same conditions."],
    )


_FOR_SMALL = (
    ("ewma", "if small lasting shifts matter"),
    ("between-within", "if subgroups differ from each other by nature"),
)


def _plain(about: Description) -> str:
    """The chart of independent points for measurements of this size."""
    if about.subgroup_size == 1:
        return "individuals"
    return "xbar-s" if about.subgroup_size > LARGE_FOR_RANGES or about.sizes_vary else "xbar-r"


def _for_counts(about: Description) -> Recommendation:
    units = about.kind == "nonconforming-units"
    what = "Nonconforming units" if units else "Nonconformities"
    room = "sample sizes" if units else "areas"
    law = "binomial" if units else "Poisson"
    beware = [_STEP_FIRST]
    if about.depends_on_neighbours:
        beware.append(_DEPENDENT)
    if about.small_shifts:
        beware.append(
            "Run rules find small lasting changes sooner than the limits alone; see `performance` of the fit."
        )
    average = about.events_per_sample
    plain = ("p" if about.sizes_vary else "np") if units else ("u" if about.sizes_vary else "c")
    if average is not None and average < RARE:
        chart, other = ("g", "t") if units else ("t", "g")
        between = "units between two nonconforming ones" if units else "time, or area, between two of them"
        return _told(
            (chart, plain),
            f"{what} so rare that a sample holds {average:.3g} on average, and most samples none.",
            "What comes between two events tells of their rate without waiting for samples to fill: record the "
            f"{between}.",
            [
                (
                    other,
                    "if "
                    + ("the time between events is" if units else "units between events are")
                    + " recorded",
                ),
                (plain, "if samples can be made so large that they hold five or more"),
            ],
            beware,
        )
    if about.dispersion != "by-chance":
        primed = "p-prime" if units else "u-prime"
        return _told(
            (primed, plain),
            f"{what} that vary {about.dispersion} than the {law} distribution leads to.",
            "Limits that follow the variation there is from sample to sample hold their false alarms, where limits by "
            f"chance alone would be too {'narrow' if about.dispersion == 'more' else 'wide'}.",
            [
                (plain, "if the cause of the extra variation is found and removed"),
                ("individuals", "of the rates, if samples are all of one size"),
            ],
            [
                *beware,
                "Look for the reason of that variation: mixed streams, or seasons."
                if about.dispersion == "more"
                else "Counts more even than chance are often not counted independently, or corrected.",
            ],
        )
    if average is not None and average < NEARLY_CONTINUOUS:
        beware.append(
            f"With {average:.3g} a sample on average there is no lower limit, or a poor one: larger samples show "
            "improvements too."
        )
    primed = "p-prime" if units else "u-prime"
    beyond = (primed, "if the counts vary more than chance has it, as they often do in large samples")
    if about.sizes_vary:
        return _told(
            (plain,),
            f"{what} in samples of which the {room} vary.",
            "Shares can be compared where counts cannot, and the limits follow each sample's size."
            if units
            else "Rates can be compared where counts cannot, and the limits follow each sample's area.",
            [beyond],
            beware,
        )
    return _told(
        (plain,),
        f"{what} in samples of one {'size' if units else 'area'}.",
        "The count itself is plotted, which needs no division and is understood at once.",
        [("p" if units else "u", f"if {room} come to vary"), beyond],
        beware,
    )


def _for_intervals(about: Description) -> Recommendation:
    beware = [_STEP_FIRST]
    if about.depends_on_neighbours:
        beware.append(_DEPENDENT)
    if about.kind == "opportunities-between-events":
        return _told(
            ("g",),
            "Opportunities counted from one event to the next.",
            "Their geometric distribution is skewed by nature, and the limits follow it.",
            [
                ("t", "if time, rather than opportunities, lies between events"),
                ("p", "if events become so frequent that samples hold several"),
            ],
            beware,
        )
    return _told(
        ("t",),
        "Times from one event to the next.",
        "Their exponential or Weibull distribution is skewed by nature, and the limits follow it.",
        [
            ("g", "if opportunities, rather than time, are counted"),
            ("u", "if events become so frequent that a period holds several"),
        ],
        beware,
    )


# ---------------------------------------------------------------------------------------------------
# From a sample


def describe(
    sample: Subgroups | Vectors | Counts | Intervals, about: Description
) -> tuple[Description, Evidence]:
    """What a sample shows, added to what is known of it already; nothing known is taken back.

    ``Subgroups`` of one column are single values. Raises UnusableData for a sample without data.
    """
    if isinstance(sample, Subgroups):
        return _of_measurements(sample, about)
    if isinstance(sample, Vectors):
        return _of_vectors(sample, about)
    if isinstance(sample, Counts):
        return _of_counts(sample, about)
    return _of_intervals(sample, about)


def of_sample(
    sample: Subgroups | Vectors | Counts | Intervals, about: Description
) -> tuple[Recommendation, Description, Evidence]:
    """The chart for a sample, what it was taken to be, and what it shows."""
    found, evidence = describe(sample, about)
    told = recommend(found)
    beware = []
    step = None if evidence.change_point is None else evidence.change_point.mean
    if step is not None and step.p_value < SIGNIFICANCE and not found.drifts:
        beware.append(
            f"The level of the sample seems to have changed at point {step.index}: a baseline must not span that."
        )
    if found.not_normal and told.chart != "individuals":
        beware.append(
            "The values do not look normal: capability and limits of single values suppose that they are."
        )
    if found.differs_between_subgroups and told.chart != "between-within":
        beware.append(
            "Subgroups differ more than the spread within them explains: see the `between-within` chart."
        )
    return replace(told, beware=(*beware, *told.beware)), found, evidence


def _of_measurements(sample: Subgroups, about: Description) -> tuple[Description, Evidence]:
    statistics = sample.statistics()
    sizes = statistics.size[statistics.size > 0]
    if not len(sizes):
        raise UnusableData.of("empty", "Every value of the sample is missing.", "sample")
    size = max(round(float(sizes.mean())), 1)
    step = (
        change_points.of_values(sample.values[:, 0]) if size == 1 else change_points.of_subgroups(statistics)
    )
    evidence = _evidence(statistics.mean, step)
    between = _between(statistics, size)
    evidence = replace(evidence, normality=diagnostics.normality(sample.values), between_subgroups=between)
    drifts = _drifts(evidence)
    normal = evidence.normality
    found = replace(
        about,
        subgroup_size=size,
        sizes_vary=about.sizes_vary or int(sizes.min()) != int(sizes.max()),
        drifts=about.drifts or drifts,
        depends_on_neighbours=about.depends_on_neighbours or _depends(evidence),
        differs_between_subgroups=about.differs_between_subgroups or (_differ(between) and not drifts),
        not_normal=about.not_normal
        or (
            normal is not None
            and normal.anderson_darling.p_value < SIGNIFICANCE
            and not drifts
            and not _stepped(evidence)
        ),
    )
    return found, evidence


def _of_vectors(sample: Vectors, about: Description) -> tuple[Description, Evidence]:
    present = sample.present()
    points = np.where(present[:, None], sample.means(), np.nan)
    if not present.any():
        raise UnusableData.of("empty", "Every point of the sample lacks a value.", "sample")
    found = [_evidence(np.ascontiguousarray(column), change_points.of_values(column)) for column in points.T]
    worst = min(found, key=lambda one: 1.0 if one.autocorrelation is None else one.autocorrelation.p_value)
    told = replace(
        about,
        variables=len(sample.names),
        subgroup_size=sample.subgroup_size,
        # One test for each variable: the level is shared among them.
        depends_on_neighbours=about.depends_on_neighbours or _depends(worst, SIGNIFICANCE / len(found)),
    )
    return told, worst


def _of_counts(sample: Counts, about: Description) -> tuple[Description, Evidence]:
    counts, inspected = sample.counts, sample.inspected
    present = counts == counts
    if not present.any():
        raise UnusableData.of("empty", "Every count of the sample is missing.", "sample")
    if about.kind == "nonconforming-units":
        if inspected is None:
            raise UnusableData.of(
                "inspected-missing", "Nonconforming units need the units inspected.", "sample", "inspected"
            )
        above = np.flatnonzero(counts > inspected)
        if len(above):
            raise UnusableData.of(
                "more-than-inspected",
                "More units are nonconforming than were inspected.",
                "sample",
                "counts",
                int(above[0]),
            )
    law: Literal["binomial", "poisson"] = "binomial" if about.kind == "nonconforming-units" else "poisson"
    spread = diagnostics.dispersion(counts, inspected, distribution=law)
    rates = counts if inspected is None else counts / np.where(inspected > 0, inspected, np.nan)
    evidence = replace(_evidence(rates, change_points.of_values(rates)), dispersion=spread)
    dispersion = about.dispersion
    if dispersion == "by-chance" and spread is not None and spread.p_value < SIGNIFICANCE:
        if spread.ratio > LEAST_DISPERSION:
            dispersion = "more"
        elif spread.ratio < 1.0 / LEAST_DISPERSION:
            dispersion = "less"
    vary = False
    if inspected is not None:
        areas = inspected[present]
        vary = bool((areas != areas[0]).any())
    average = about.events_per_sample
    return (
        replace(
            about,
            sizes_vary=about.sizes_vary or vary,
            events_per_sample=float(counts[present].mean()) if average is None else average,
            dispersion=dispersion,
            depends_on_neighbours=about.depends_on_neighbours or _depends(evidence),
        ),
        evidence,
    )


def _of_intervals(sample: Intervals, about: Description) -> tuple[Description, Evidence]:
    # Intervals are skewed: their fourth root is nearly normal where they are exponential.
    roots = np.sqrt(np.sqrt(sample.values))
    if not (roots == roots).any():
        raise UnusableData.of("empty", "Every interval of the sample is missing.", "sample")
    evidence = replace(_evidence(roots, None), drift=None)
    return (
        replace(about, depends_on_neighbours=about.depends_on_neighbours or _depends(evidence)),
        evidence,
    )


def _evidence(points: Floats, step: change_points.ChangePoint | None) -> Evidence:
    drift, rest = _line(points)
    mean = None if step is None else step.mean
    filled = int(np.count_nonzero(points == points))
    if drift is not None and _steep(drift, mean, filled):
        points = rest
    elif mean is not None and mean.p_value < SIGNIFICANCE:
        points = points - np.where(np.arange(len(points)) < mean.index, mean.before, mean.after)
    return Evidence(filled, step, drift, diagnostics.autocorrelation(points), None, None, None)


def _line(points: Floats) -> tuple[Drift | None, Floats]:
    """The straight line of least squares, and what it leaves; ``None`` for fewer than 8 points."""
    at = (points == points).nonzero()[0]
    n = len(at)
    if n < diagnostics.FEWEST_VALUES:
        return None, points
    x = at - at.mean()
    first = points[at[0]]
    y = points[at] - first
    y = y - y.mean()
    scale = float(np.abs(y).max())
    if not 0.0 < scale < math.inf:
        return None, points
    y = y / scale
    slope = float(x @ y) / float(x @ x)
    explained = min(slope * slope * float(x @ x) / float(y @ y), 1.0)
    rest = np.full(len(points), np.nan)
    rest[at] = y - slope * x
    left = max(1.0 - explained, 1e-300)
    p = 2.0 * float(scipy.special.stdtr(n - 2, -math.sqrt(explained * (n - 2) / left)))
    return Drift(slope * scale, explained, p), rest


def _steep(drift: Drift, step: change_points.BaselineStep | None, points: int) -> bool:
    """A line that explains half of the variation, and more than a step does."""
    if drift.p_value >= SIGNIFICANCE or drift.explained < 0.5:
        return False
    return step is None or drift.explained > -math.expm1(-step.statistic / points)


def _differ(between: BetweenSubgroups | None) -> bool:
    return between is not None and between.p_value < SIGNIFICANCE and between.ratio > LEAST_BETWEEN


def _drifts(evidence: Evidence) -> bool:
    step = None if evidence.change_point is None else evidence.change_point.mean
    return evidence.drift is not None and _steep(evidence.drift, step, evidence.points)


def _stepped(evidence: Evidence) -> bool:
    step = None if evidence.change_point is None else evidence.change_point.mean
    return step is not None and step.p_value < SIGNIFICANCE


def _depends(evidence: Evidence, level: float = SIGNIFICANCE) -> bool:
    return evidence.autocorrelation is not None and evidence.autocorrelation.p_value < level


def _between(statistics: SubgroupStatistics, size: int) -> BetweenSubgroups | None:
    if size < 2:
        return None
    try:
        found = components(moving_range(statistics.mean), within(statistics, "pooled-sd"), float(size))
    except UnusableData:
        return None
    return BetweenSubgroups(found.ratio, found.p_value)
