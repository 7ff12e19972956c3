"""Many part numbers on one chart: ``short-run`` ([iso-7870-8]).

Each point is set against the target of its own part: as a deviation, where all parts vary alike, or
divided by the part's own sigma, where they do not.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy
from numpy.typing import NDArray

from .. import cautions as caution
from .. import diagnostics
from ..bounds import MULTIPLE, POSITIVE, PROBABILITY, SIGMA, SIZE
from ..cautions import Caution
from ..data import Booleans, Floats, Individuals, Integers, Subgroups, SubgroupStatistics
from ..errors import Fault, UnusableData, UnusableParameter
from ..rules import Rule, watched
from ..sigma import SigmaEstimate, moving_range, within
from ._levels import (
    NEW,
    SPAN,
    Data,
    Form,
    LevelCarry,
    LevelSpread,
    check_form,
    form_of,
    level_lines,
    level_performance,
    level_plots,
    moving_of,
    panels_of,
    points_of,
    watch_levels,
)
from .common import (
    AT_THREE_SIGMA,
    Baseline,
    BaselineRecord,
    Exclusion,
    Fit,
    Judgement,
    LimitBasis,
    Panel,
    PanelLimits,
    exclusion_mask,
    too_many_signals,
)
from .individuals import mean_of_values
from .registry import Chart
from .subgroups import grand_mean, size_cautions

Scale = Literal["deviation", "standardised"]
OF_EACH_PART = "of-each-part"
FEW_OF_A_PART = 10.0
MOST_NAMED = 100


@dataclass(frozen=True, slots=True)
class PartTarget:
    """A part number: its target, and its own sigma where that is known."""

    name: str
    target: float
    sigma: float | None = None


@dataclass(frozen=True, slots=True)
class ShortRunOptions:
    """How the limits are to be computed. sigma_estimator: ``None`` for the usual one of the data.

    sigma: the common one, where it is known (``deviation`` alone); form and subgroup_size: without data only.
    """

    parts: tuple[PartTarget, ...]
    scale: Scale = "deviation"
    centre_line: Literal["target", "mean"] = "target"
    sigma_estimator: str | None = None
    sigma: float | None = None
    basis: LimitBasis = AT_THREE_SIGMA
    rules: tuple[Rule, ...] = ()
    subgroup_size: int | None = None
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class PartData:
    """Points of several parts in the order they were made, with the part that each is of."""

    points: Data
    part_names: Sequence[str]


@dataclass(frozen=True, slots=True)
class Part:
    """A part number on the chart."""

    name: Annotated[str, "Its name, as the data have it."]
    target: Annotated[float, "Its target, in the unit of the characteristic."]
    sigma: Annotated[
        float | None, "Standard deviation of its single values; null where one sigma holds for all parts."
    ]
    degrees_of_freedom: Annotated[
        float | None, "Effective degrees of freedom of its sigma; null where it was given, or there is none."
    ]


@dataclass(frozen=True, slots=True)
class ShortRunLimits:
    """The frozen parameters of a ``short-run`` chart."""

    scale: Annotated[
        Scale,
        "`deviation`: from target, in the unit. `standardised`: the deviation over the part's sigma, no unit.",
        SIGMA,
    ]
    form: Annotated[Form, "Whether a point is a single value or a subgroup."]
    centre: Annotated[float, "Centre line of the level, in what the level is plotted in."]
    sigma: Annotated[float, "Standard deviation of a single plotted value; 1 where standardised.", SIGMA]
    sigma_estimator: Annotated[
        str, "How sigma was estimated; `given` where known, `of-each-part` where standardised."
    ]
    degrees_of_freedom: Annotated[
        float | None,
        "Effective degrees of freedom of the common sigma; null where given or of each part.",
        POSITIVE,
    ]
    parts: Annotated[tuple[Part, ...], "The parts that have a target."]
    subgroup_size: Annotated[
        int | None,
        "The commonest size, which the lines are for; null for single values, or where none holds two.",
        SIZE,
    ]
    limit_basis: Annotated[Literal["sigma", "probability"], "How the limits were placed."]
    sigma_multiple: Annotated[
        float | None, "Limits lie this many sigma out; null under `probability`.", MULTIPLE
    ]
    false_alarm_probability: Annotated[
        float | None, "Of each panel and point; null under `sigma`.", PROBABILITY
    ]
    panels: Annotated[LevelSpread[PanelLimits], "The lines of each panel."]
    rules: Annotated[tuple[Rule, ...], "The rules in force, the limit first."]
    baseline: Annotated[
        BaselineRecord | None, "What the limits were computed from; null for standards alone."
    ]

    @property
    def basis(self) -> LimitBasis:
        """How far out the limits lie."""
        return LimitBasis(self.limit_basis, self.sigma_multiple, self.false_alarm_probability)


@dataclass(frozen=True, slots=True)
class PartFound:
    """What the baseline shows of one part."""

    name: Annotated[str, "The part."]
    points: Annotated[int, "Its points in the baseline."]
    mean: Annotated[float | None, "Mean of its plotted level; null where it has no points."]
    standard_errors: Annotated[
        float | None, "That mean in its own standard errors from the target; null where it has no points."
    ]


@dataclass(frozen=True, slots=True, eq=False)
class ShortRunDiagnostics:
    """What the baseline itself shows."""

    parts: Annotated[tuple[PartFound, ...], "Part by part, in the order given."]
    equal_spread: Annotated[
        diagnostics.SpreadStability | None,
        "Bartlett's test that all parts vary alike in what is plotted; null where not computable.",
    ]
    autocorrelation: Annotated[
        diagnostics.Autocorrelation | None, "Of the level in time order; null where too few."
    ]
    normality: Annotated[
        diagnostics.Normality | None,
        "Of single values as plotted; null where only summaries were given, or too few.",
    ]


ShortRunFit: TypeAlias = Fit[ShortRunLimits, LevelSpread[Panel], ShortRunDiagnostics]


ShortRunJudgement: TypeAlias = Judgement[LevelSpread[Panel], LevelCarry]


def _places(parts: Sequence[Part | PartTarget], names: Sequence[str], points: int) -> Integers:
    """(m,) which part each point is of. Raises UnusableData naming parts without a target."""
    if len(names) != points:
        raise UnusableData.of(
            "unequal-length",
            f"There are {len(names)} part names for {points} points; give one for each.",
            "data",
            "part_names",
        )
    known = {part.name: at for at, part in enumerate(parts)}
    places = [known.get(name, -1) for name in names]
    if -1 in places:
        missing: dict[str, int] = {}
        for at, place in enumerate(places):
            if place < 0:
                missing.setdefault(names[at], at)
        raise UnusableData(
            *(
                Fault(
                    "part-without-target",
                    f"Part {name} has no target: name it among the parts that the limits are set for.",
                    ("data", "part_names", at),
                )
                for name, at in list(missing.items())[:MOST_NAMED]
            )
        )
    return np.array(places, dtype=np.int64)


def _comparable(points: SubgroupStatistics, places: Integers, parts: Sequence[Part]) -> SubgroupStatistics:
    """The points less their part's target, over its sigma where it has one."""
    target = np.array([part.target for part in parts])[places]
    level = points.mean - target
    if parts[0].sigma is None:
        return replace(points, mean=level)
    sigma = np.array([part.sigma for part in parts])[places]
    return SubgroupStatistics(
        points.size,
        level / sigma,
        None if points.range is None else points.range / sigma,
        None if points.sd is None else points.sd / sigma,
    )


def _check(options: ShortRunOptions, *, with_data: bool) -> None:
    faults = []
    seen: set[str] = set()
    standardised = options.scale == "standardised"
    if not options.parts:
        faults.append(Fault("no-parts", "Name at least one part with its target.", ("parts",)))
    for at, part in enumerate(options.parts):
        if part.name in seen:
            faults.append(
                Fault("part-named-twice", f"Part {part.name} is named twice.", ("parts", at, "name"))
            )
        seen.add(part.name)
        if part.sigma is not None and not standardised:
            faults.append(
                Fault(
                    "not-of-this-scale",
                    "Under `deviation` one sigma holds for all parts; a part's own has no meaning. Give it under "
                    "`standardised`.",
                    ("parts", at, "sigma"),
                )
            )
        elif part.sigma is None and standardised and not with_data:
            faults.append(
                Fault(
                    "data-missing",
                    f"Without baseline data each part's sigma must be given; that of part {part.name} is missing.",
                    ("parts", at, "sigma"),
                )
            )
    if options.sigma is not None and standardised:
        faults.append(
            Fault(
                "not-of-this-scale",
                "Under `standardised` each part has its own sigma; give it with the part.",
                ("standards", "sigma"),
            )
        )
    if with_data and options.subgroup_size is not None:
        faults.append(
            Fault(
                "size-with-data",
                "The subgroup size comes from the data; give it only without data.",
                ("subgroup_size",),
            )
        )
    if not with_data:
        if options.sigma is None and not standardised:
            faults.append(
                Fault("data-missing", "Without baseline data sigma must be given.", ("standards", "sigma"))
            )
        if options.centre_line == "mean":
            faults.append(
                Fault(
                    "data-missing", "Without baseline data the centre line is the target.", ("centre_line",)
                )
            )
        if options.exclude:
            faults.append(
                Fault("no-such-point", "There is no baseline to exclude points from.", ("exclude",))
            )
    if faults:
        raise UnusableParameter(*faults)


def _estimate(points: SubgroupStatistics, form: Form, estimator: str | None) -> SigmaEstimate:
    """Sigma of single values: from moving ranges, or from within the subgroups."""
    if form == "individuals":
        if estimator not in (None, "mean-moving-range", "median-moving-range"):
            raise UnusableParameter.of(
                "estimator-of-other-data",
                f"`{estimator}` is an estimator for subgroups; single values have `mean-moving-range` and "
                "`median-moving-range`.",
                "sigma_estimator",
            )
        statistic: Literal["mean", "median"] = "median" if estimator == "median-moving-range" else "mean"
        return moving_range(points.mean, span=SPAN, statistic=statistic)
    if estimator is not None and estimator.endswith("moving-range"):
        raise UnusableParameter.of(
            "estimator-of-other-data",
            f"`{estimator}` is an estimator for single values; subgroups have mean-range, mean-sd, pooled-sd and "
            "median-range.",
            "sigma_estimator",
        )
    return within(points, estimator or "mean-range")


def _part_sigmas(
    options: ShortRunOptions, used: SubgroupStatistics, places: Integers, form: Form
) -> tuple[Part, ...]:
    """Each part with its own sigma, given or from its own points in their order."""
    parts, faults = [], []
    for at, part in enumerate(options.parts):
        if part.sigma is not None:
            parts.append(Part(part.name, part.target, part.sigma, None))
            continue
        own = places == at
        mine = SubgroupStatistics(
            used.size[own],
            used.mean[own],
            None if used.range is None else used.range[own],
            None if used.sd is None else used.sd[own],
        )
        try:
            found = _estimate(mine, form, options.sigma_estimator)
        except UnusableData as error:
            faults.append(
                Fault(
                    "part-without-sigma",
                    f"Part {part.name} has no sigma of its own, and its points give none: {error}",
                    ("parts", at, "sigma"),
                )
            )
            continue
        parts.append(Part(part.name, part.target, found.sigma, found.degrees_of_freedom))
    if faults:
        raise UnusableData(*faults)
    return tuple(parts)


def fit(data: PartData | None, options: ShortRunOptions) -> ShortRunFit:
    """Limits of a ``short-run`` chart from a baseline of several parts, or from targets and sigmas.

    Level ``x̄ᵢ − Tᵢ``, or ``(x̄ᵢ − Tᵢ)/σᵢ``; centre 0, or their mean. One sigma from all parts together (moving
    ranges of deviations run on from part to part), or each part's own from its own points alone.

    Raises UnusableData naming a part without target, or without sigma where it needs one; for fewer than
    two points or no variation. UnusableParameter for options that do not fit. Source: [iso-7870-8].
    """
    _check(options, with_data=data is not None)
    rules, basis = watched(options.rules), options.basis
    standardised = options.scale == "standardised"
    if data is None:
        size = options.subgroup_size or 1
        form: Form = "subgroups" if size > 1 else "individuals"
        parts = tuple(Part(part.name, part.target, part.sigma, None) for part in options.parts)
        known = 1.0 if standardised else options.sigma
        assert known is not None
        estimator = OF_EACH_PART if standardised else "given"
        limits = _limits(options, form, 0.0, known, estimator, None, parts, size, rules, None)
        performance = level_performance(rules, basis, form, float(size))
        return Fit(limits, None, None, performance, ())

    form = form_of(data.points)
    points = points_of(data.points)
    places = _places(options.parts, data.part_names, len(points.size))
    kept = exclusion_mask(len(points.size), options.exclude)
    used = points if kept is None else points.keep(kept)
    filled, total = int(np.count_nonzero(used.size)), int(used.size.sum())
    if filled < 2:
        raise UnusableData.of(
            "too-few-points",
            f"Limits need at least two points, and 20 to 25 to deserve trust; there "
            f"{'is one' if filled else 'are none'}.",
            "data",
        )
    sigma, freedom = 1.0, None
    if standardised:
        parts = _part_sigmas(options, used, places, form)
        estimator = OF_EACH_PART
    else:
        parts = tuple(Part(part.name, part.target, None, None) for part in options.parts)
    compared = _comparable(used, places, parts)
    if not standardised:
        if options.sigma is not None:
            sigma, estimator = options.sigma, "given"
        else:
            found = _estimate(compared, form, options.sigma_estimator)
            sigma, estimator, freedom = found.sigma, found.estimator, found.degrees_of_freedom
    centre = 0.0
    if options.centre_line == "mean":
        centre = (
            mean_of_values(compared.mean, filled) if form == "individuals" else grand_mean(compared, total)
        )
    size_ = None if form == "individuals" else used.usual_size
    record = BaselineRecord(filled, total, options.exclude)
    limits = _limits(options, form, centre, sigma, estimator, freedom, parts, size_, rules, record)

    shown = compared if kept is None else _comparable(points, places, parts)
    if form == "individuals":
        shown = replace(shown, range=moving_of(compared.mean, ())[0])
    plots = level_plots(shown, form, centre, sigma, basis)
    seen, _ = watch_levels(plots, rules, None, kept, form)
    diagnosed = _diagnose(data, compared, places, parts, sigma, form, kept)
    return Fit(
        limits,
        Baseline(seen.verdict, panels_of(plots), seen.signals, seen.found),
        diagnosed,
        level_performance(rules, basis, form, total / filled),
        caution.collect(
            caution.few_individuals(filled) if form == "individuals" else caution.few_subgroups(filled),
            None if form == "individuals" else caution.range_inefficient(used),
            _uncertain_sigmas(parts),
            _off_target(diagnosed.parts, sigma),
            _unequal_spread(diagnosed.equal_spread, standardised),
            caution.autocorrelated(diagnosed.autocorrelation),
            caution.not_normal(diagnosed.normality),
            *too_many_signals(seen),
        ),
    )


def _limits(
    options: ShortRunOptions,
    form: Form,
    centre: float,
    sigma: float,
    estimator: str,
    freedom: float | None,
    parts: tuple[Part, ...],
    size: int | None,
    rules: tuple[Rule, ...],
    record: BaselineRecord | None,
) -> ShortRunLimits:
    if not (math.isfinite(centre) and 0 < sigma < math.inf):
        raise UnusableData.of("out-of-scale", "The spread of the values cannot be represented.", "data")
    basis = options.basis
    return ShortRunLimits(
        options.scale,
        form,
        centre,
        sigma,
        estimator,
        freedom,
        parts,
        None if form == "individuals" else size,
        basis.limit_basis,
        basis.sigma_multiple,
        basis.false_alarm_probability,
        level_lines(form, size, centre, sigma, basis),
        rules,
        record,
    )


def _diagnose(
    data: PartData,
    compared: SubgroupStatistics,
    places: Integers,
    parts: tuple[Part, ...],
    sigma: float,
    form: Form,
    kept: Booleans | None,
) -> ShortRunDiagnostics:
    count = len(parts)
    there = compared.size > 0
    at, size = places[there], compared.size[there].astype(np.float64)
    level = compared.mean[there]
    points = np.bincount(at, minlength=count)
    values = np.bincount(at, size, count)
    means = np.bincount(at, size * level, count) / np.maximum(values, 1.0)
    errors = means * np.sqrt(values) / sigma
    parts_found = tuple(
        PartFound(part.name, n, mean if n else None, error if n else None)
        for part, n, mean, error in zip(parts, points.tolist(), means.tolist(), errors.tolist(), strict=True)
    )
    equal = None
    if form == "individuals":
        equal = _equal_spread(points - 1, np.bincount(at, (level - means[at]) ** 2, count))
    elif compared.sd is not None:
        inside = compared.size[there] - 1
        sd = np.where(inside > 0, compared.sd[there], 0.0)
        equal = _equal_spread(
            np.bincount(at, inside, count).astype(np.int64), np.bincount(at, inside * sd**2, count)
        )
    return ShortRunDiagnostics(
        parts_found,
        equal,
        diagnostics.autocorrelation(compared.mean),
        diagnostics.normality(single)
        if (single := _single_values(data, places, parts, kept)) is not None
        else None,
    )


def _equal_spread(freedom: Integers, squares: NDArray) -> diagnostics.SpreadStability | None:
    """Bartlett's test over parts with ``freedom`` degrees of freedom and these sums of squares."""
    usable = freedom > 0
    freedom, squares = freedom[usable], squares[usable]
    nothing = np.zeros(len(freedom))
    return diagnostics.spread_stability(
        SubgroupStatistics(freedom + 1, nothing, None, np.sqrt(squares / freedom))
    )


def _single_values(
    data: PartData, places: Integers, parts: tuple[Part, ...], kept: Booleans | None
) -> Floats | None:
    """Single values as plotted."""
    if not isinstance(data.points, Individuals | Subgroups):
        return None
    values = data.points.values
    target = np.array([part.target for part in parts])[places]
    sigma = np.array([1.0 if part.sigma is None else part.sigma for part in parts])[places]
    if kept is not None:
        target = np.where(kept, target, np.nan)
    if values.ndim == 2:
        target, sigma = target[:, None], sigma[:, None]
    found: Floats = (values - target) / sigma
    return found


def _uncertain_sigmas(parts: tuple[Part, ...]) -> Caution | None:
    poor = [
        p.name for p in parts if p.degrees_of_freedom is not None and p.degrees_of_freedom < FEW_OF_A_PART
    ]
    if not poor:
        return None
    return Caution(
        "few-of-a-part",
        f"The sigma of {_named(poor)} rests on few points (fewer than {FEW_OF_A_PART:g} effective degrees of "
        "freedom), so its standardised points alarm falsely more often than stated. Give a known sigma, or use "
        "deviations where the parts vary alike.",
        ("parts",),
        "iso-7870-8",
    )


def _off_target(parts: tuple[PartFound, ...], sigma: float) -> Caution | None:
    measured = [part for part in parts if part.standard_errors is not None]
    far = caution.SIGNIFICANCE / max(len(measured), 1)
    off = [p.name for p in measured if 2.0 * scipy.special.ndtr(-abs(p.standard_errors or 0.0)) < far]
    if not off:
        return None
    return Caution(
        "part-off-target",
        f"The mean of {_named(off)} lies off its target by more than chance. Check the target, or find out why the "
        "process does not meet it; its points lean to one side, and run rules will say so.",
        ("parts",),
        "iso-7870-8",
    )


def _unequal_spread(found: diagnostics.SpreadStability | None, standardised: bool) -> Caution | None:
    if found is None or found.p_value >= caution.SIGNIFICANCE or standardised:
        return None
    return Caution(
        "parts-differ-in-spread",
        f"The parts do not vary alike (Bartlett's test over {found.degrees_of_freedom + 1} parts: "
        f"p = {found.p_value:.2g}), so one sigma is wrong for them. Use the scale `standardised`.",
        ("scale",),
        "bartlett-1937",
    )


def _named(names: Sequence[str]) -> str:
    shown = ", ".join(names[:3])
    return f"{'part' if len(names) == 1 else 'parts'} {shown}{' and others' if len(names) > 3 else ''}"


def judge(limits: ShortRunLimits, data: PartData, carry: LevelCarry | None) -> ShortRunJudgement:
    """New points under frozen limits: points, signals, and the carry for the next call.

    Judging in one call or in any split with the carry passed on gives identical signals. Raises
    UnusableData naming a part without target, or where the points are of another form.
    """
    check_form(limits.form, data.points)
    before = carry or NEW
    points = points_of(data.points)
    places = _places(limits.parts, data.part_names, len(points.size))
    compared = _comparable(points, places, limits.parts)
    recent: tuple[float, ...] = ()
    if limits.form == "individuals":
        ranges, recent = moving_of(compared.mean, before.recent)
        compared = replace(compared, range=ranges)
    plots = level_plots(compared, limits.form, limits.centre, limits.sigma, limits.basis)
    seen, tail = watch_levels(plots, limits.rules, before.level, None, limits.form)
    return Judgement(
        seen.verdict,
        panels_of(plots),
        seen.signals,
        seen.found,
        LevelCarry(before.points + len(points.size), tail, recent),
        (*size_cautions(limits.subgroup_size, points.size), *too_many_signals(seen)),
    )


CHARTS = (
    Chart(
        name="short-run",
        title="Many parts on one chart",
        purpose="Watches a process that makes many part numbers in short runs: each point is set against its own "
        "part's target, and its own sigma where the parts vary differently.",
        takes="Single values or subgroups in the order made, the part of each, and every part's target.",
        beware="A wrong target looks like a shift; deviations suppose that all parts vary alike.",
        panels=("level", "spread"),
        references=("iso-7870-8", "iso-7870-2"),
        fit=fit,
        judge=judge,
        limits=ShortRunLimits,
        plotted=LevelSpread[Panel],
        carry=LevelCarry,
        diagnostics=ShortRunDiagnostics,
    ),
)
