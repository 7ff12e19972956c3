"""Charts of subgroups: ``xbar-r`` and ``xbar-s`` (methods: [shewhart-1931], [iso-7870-2], [astm-e2587]).

Subgroups may differ in size and pieces may be missing: limits then follow each subgroup's own size. A
subgroup with one value has a point on the mean panel and none on the spread panel; one with none is a
gap that keeps its place.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Annotated, Any, Generic, Literal, TypeAlias, TypeVar

import numpy as np

from .. import cautions as caution
from .. import diagnostics, factors
from ..baseline import change_points, estimation, joint, screening
from ..bounds import MULTIPLE, POSITIVE, PROBABILITY, SIGMA, SIZE
from ..cautions import Caution
from ..data import Booleans, Floats, Integers, Subgroups, SubgroupStatistics, SubgroupSummary
from ..errors import Fault, UnusableData, UnusableParameter
from ..rules import Rule, Tail, watched
from ..sigma import within
from .common import (
    AT_THREE_SIGMA,
    NO_STANDARDS,
    Baseline,
    BaselineRecord,
    Exclusion,
    Fit,
    Judgement,
    LimitBasis,
    Panel,
    PanelLimits,
    Plot,
    Standards,
    Watched,
    baseline_alone,
    exclusion_mask,
    standards_alone,
    too_many_signals,
    watch,
)
from .lines import Spread, SpreadLines, spread_lines
from .price import mean_performance
from .registry import Chart

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class MeanRange(Generic[T]):
    """The panels of an ``xbar-r`` chart."""

    mean: Annotated[T, "Means of the subgroups."]
    range: Annotated[T, "Ranges within the subgroups."]


@dataclass(frozen=True, slots=True)
class MeanSd(Generic[T]):
    """The panels of an ``xbar-s`` chart."""

    mean: Annotated[T, "Means of the subgroups."]
    sd: Annotated[T, "Standard deviations within the subgroups."]


P = TypeVar("P")
Q = TypeVar("Q")
_PANELS = {"range": MeanRange, "sd": MeanSd}


@dataclass(frozen=True, slots=True)
class SubgroupOptions:
    """How the limits of a chart of subgroups are to be computed."""

    sigma_estimator: str
    basis: LimitBasis = AT_THREE_SIGMA
    rules: tuple[Rule, ...] = ()
    standards: Standards = NO_STANDARDS
    subgroup_size: int | None = None
    exclude: tuple[Exclusion, ...] = ()
    guarantee: estimation.Guarantee | None = None
    joint_false_alarm_probability: float | None = None
    screening: screening.Screening | None = None


@dataclass(frozen=True, slots=True)
class SubgroupLimits(Generic[P]):
    """The frozen parameters of a chart of subgroups."""

    centre: Annotated[float, "Centre line of the means, in the unit of the characteristic."]
    sigma: Annotated[float, "Within-subgroup standard deviation, in the unit of the characteristic.", SIGMA]
    sigma_estimator: Annotated[str, "How sigma was estimated; `given` where it was a standard."]
    degrees_of_freedom: Annotated[
        float | None, "Effective degrees of freedom of sigma; null where it was a standard.", POSITIVE
    ]
    subgroup_size: Annotated[
        int | None,
        "The commonest size, which the panels' limits are for; the limits of a subgroup of another size follow "
        "its own. Null where no subgroup holds two values.",
        SIZE,
    ]
    limit_basis: Annotated[Literal["sigma", "probability"], "How the limits were placed."]
    sigma_multiple: Annotated[
        float | None, "Limits lie this many sigma out; null under `probability`.", MULTIPLE
    ]
    false_alarm_probability: Annotated[
        float | None, "Of each panel and point; null under `sigma`.", PROBABILITY
    ]
    panels: Annotated[P, "The lines of each panel."]
    rules: Annotated[tuple[Rule, ...], "The rules in force, the limit first."]
    baseline: Annotated[
        BaselineRecord | None, "What the limits were computed from; null for standards alone."
    ]

    @property
    def basis(self) -> LimitBasis:
        """How far out the limits lie."""
        return LimitBasis(self.limit_basis, self.sigma_multiple, self.false_alarm_probability)


@dataclass(frozen=True, slots=True)
class SubgroupCarry:
    """What judging needs to remember of the subgroups before."""

    points: Annotated[int, "Subgroups judged so far under these limits."]
    mean: Annotated[Tail, "The last points of the mean panel, for the run rules."]


NEW = SubgroupCarry(0, Tail())


@dataclass(frozen=True, slots=True, eq=False)
class SubgroupDiagnostics:
    """What the baseline itself shows."""

    autocorrelation: Annotated[
        diagnostics.Autocorrelation | None, "Of the subgroup means in time order; null where too few."
    ]
    normality: Annotated[
        diagnostics.Normality | None,
        "Of the single values; null where only summaries were given, or too few.",
    ]
    resolution: Annotated[
        diagnostics.Resolution | None, "Of the measurement; null where only summaries were given."
    ]
    spread_stability: Annotated[
        diagnostics.SpreadStability | None, "Equal variances within the subgroups; null where not computable."
    ]
    change_point: Annotated[
        change_points.ChangePoint | None, "A lasting step within the baseline; null for fewer than 8 points."
    ] = None


@dataclass(frozen=True, slots=True, eq=False)
class SubgroupStudy(SubgroupDiagnostics):
    """What the baseline itself shows, and how it was judged."""

    judged_by: Annotated[
        joint.JointLimits | None,
        "The joint limits that judged the baseline, where asked for; null where its own frozen limits and "
        "rules did.",
    ] = None
    screening: Annotated[
        screening.Screened | None, "What automatic screening did; null where not asked for."
    ] = None


@dataclass(frozen=True, slots=True)
class _Known:
    """Centre and sigma, given or from the subgroups ``used``, of which ``filled`` hold ``total`` values."""

    used: SubgroupStatistics
    filled: int
    total: int
    mean: float
    sigma: float
    estimator: str
    freedom: float | None


SubgroupFit: TypeAlias = Fit[SubgroupLimits[P], Q, SubgroupStudy]


SubgroupJudgement: TypeAlias = Judgement[Q, SubgroupCarry]


def subgroup_plots(
    statistics: SubgroupStatistics, spread: Spread, centre: float, sigma: float, basis: LimitBasis
) -> tuple[Plot, Plot]:
    """The mean panel and the spread panel of some subgroups under given parameters."""
    values = statistics.range if spread == "range" else statistics.sd
    assert values is not None
    size, multiple = statistics.common_size, basis.multiple

    if size is not None and size > 1:
        return _plots_of_one_size(size, statistics.mean, values, spread, centre, sigma, basis)

    def lines(n: int) -> SpreadLines:
        return spread_lines(spread, n, basis.sigma_multiple, basis.tail)

    sizes = statistics.size
    of_mean: Floats = sigma / np.sqrt(np.maximum(sizes, 1))

    def by_size(line: str) -> Floats:
        def one(n: int) -> float:
            found = getattr(lines(n), line)
            return 0.0 if found is None else float(found)

        return factors.of_sizes(one, sizes) * sigma

    return (
        Plot(statistics.mean, centre, of_mean, centre - multiple * of_mean, centre + multiple * of_mean),
        Plot(values, by_size("centre"), by_size("sd"), by_size("lower"), by_size("upper"), floor=0.0),
    )


def _plots_of_one_size(
    size: int, means: Floats, spreads: Floats, spread: Spread, centre: float, sigma: float, basis: LimitBasis
) -> tuple[Plot, Plot]:
    of_mean = sigma / math.sqrt(size)
    reach = basis.multiple * of_mean
    at = spread_lines(spread, size, basis.sigma_multiple, basis.tail)
    return (
        Plot(means, centre, of_mean, centre - reach, centre + reach),
        Plot(
            spreads,
            at.centre * sigma,
            at.sd * sigma,
            None if at.lower is None else at.lower * sigma,
            at.upper * sigma,
            floor=0.0,
        ),
    )


_NO_POINTS: Floats = np.empty(0)


def _frozen_lines(size: int | None, spread: Spread, centre: float, sigma: float, basis: LimitBasis) -> object:
    """The panels of the limits document."""
    if size is None:
        following = PanelLimits(None, None, None)
        return _PANELS[spread](PanelLimits(centre, None, None), following)
    plots = _plots_of_one_size(size, _NO_POINTS, _NO_POINTS, spread, centre, sigma, basis)
    return _PANELS[spread](plots[0].limits(), plots[1].limits())


def _check(options: SubgroupOptions, statistics: SubgroupStatistics | None, spread: Spread) -> None:
    given = options.standards
    if statistics is None:
        faults = standards_alone(given, options.exclude)
        faults += baseline_alone(options.guarantee, options.joint_false_alarm_probability, options.screening)
        if options.subgroup_size is None:
            faults.append(
                Fault(
                    "size-missing",
                    "Without baseline data the subgroup size must be given.",
                    ("subgroup_size",),
                )
            )
        if faults:
            raise UnusableParameter(*faults)
        return
    if options.subgroup_size is not None:
        raise UnusableParameter.of(
            "size-with-data",
            "The subgroup size comes from the data; give it only without data.",
            "subgroup_size",
        )
    values = statistics.range if spread == "range" else statistics.sd
    if values is None:
        wanted, kept = ("ranges", "sds") if spread == "range" else ("sds", "ranges")
        raise UnusableData.of(
            "spread-missing",
            f"This chart plots {wanted}, and the summary gives {kept}; give `{wanted}`, or use the other chart.",
            "data",
            kept,
        )


def fit(data: Subgroups | SubgroupSummary | None, options: SubgroupOptions, *, spread: Spread) -> SubgroupFit:
    """Limits of an ``xbar-r`` (spread ``range``) or ``xbar-s`` (spread ``sd``) chart.

    Centre ``Σnᵢx̄ᵢ/N``; mean limits ``centre ± k·σ̂/√nᵢ``; range ``d2σ̂ ± k·d3σ̂``, deviation
    ``c4σ̂ ± k·σ̂√(1−c4²)``; or equal-tail limits of the exact distributions. A lower spread limit that
    is not positive does not exist. Standards given replace the estimates.

    A guarantee sets the multiple. A joint false-alarm probability widens the limits (and replaces the rules)
    by which the baseline itself is judged and screened, and leaves the frozen limits as they are.

    Raises UnusableData for data without at least two subgroups, or without variation;
    UnusableParameter for options that do not fit the data. Source: [iso-7870-2], [astm-e2587];
    probability limits from the distributions of the normal, of the range and of the deviation.
    """
    statistics = None if data is None else data.statistics()
    _check(options, statistics, spread)
    rules = watched(options.rules)
    given, basis = options.standards, options.basis
    if statistics is None:
        assert given.mean is not None
        assert given.sigma is not None
        assert options.subgroup_size is not None
        limits = _limits(options, spread, given.mean, given.sigma, None, options.subgroup_size, rules, None)
        performance = mean_performance(rules, basis, float(options.subgroup_size), spread)
        return Fit(limits, None, None, performance, ())

    kept = exclusion_mask(len(statistics.size), options.exclude)
    screened = None
    if options.screening is not None:
        present = statistics.size > 0
        kept, left_out, screened = screening.screen(
            present if kept is None else present & kept,
            functools.partial(_beyond, statistics, spread, options),
            options.screening,
        )
        options = replace(options, exclude=(*options.exclude, *left_out))
    known = _estimate(statistics, kept, options)
    if options.guarantee is not None:
        basis = _guaranteed(known, options)
        options = replace(options, basis=basis)
    used, filled, total = known.used, known.filled, known.total
    size = used.usual_size
    record = BaselineRecord(filled, total, options.exclude)
    limits = _limits(
        options, spread, known.mean, known.sigma, known.freedom, size, rules, record, known.estimator
    )

    plots, judged_by = _judged(statistics, spread, known, basis, options)
    seen, _ = _watch(plots, spread, rules if judged_by is None else watched(()), None, kept)
    panels = _PANELS[spread](plots[0].panel(), plots[1].panel())
    baseline = Baseline(seen.verdict, panels, seen.signals, seen.found)
    typical = float(size) if size is not None else total / filled
    found = diagnose(data, used, kept)
    study = SubgroupStudy(
        found.autocorrelation,
        found.normality,
        found.resolution,
        found.spread_stability,
        found.change_point,
        judged_by,
        screened,
    )
    delivered = estimation.performance(
        filled,
        known.freedom,
        basis.multiple,
        centre_known=given.mean is not None,
        guarantee=options.guarantee,
    )
    performance = replace(mean_performance(rules, basis, typical, spread), estimated=delivered)
    return Fit(
        limits,
        baseline,
        study,
        performance,
        _cautions(study, used, filled, spread, limits, seen, plots[0]),
    )


def _estimate(statistics: SubgroupStatistics, kept: Booleans | None, options: SubgroupOptions) -> _Known:
    """Centre and sigma of the subgroups kept; raises UnusableData where there are too few."""
    given = options.standards
    used = statistics if kept is None else statistics.keep(kept)
    filled = int(np.count_nonzero(used.size))
    if not filled:
        raise UnusableData.of("empty", "Every value is missing or excluded.", "data")
    if filled < 2 and (given.mean is None or given.sigma is None):
        raise UnusableData.of(
            "too-few-subgroups",
            "Limits need at least two subgroups with values, and 20 to 25 to deserve trust; there is one.",
            "data",
        )
    total = int(used.size.sum())
    mean = given.mean if given.mean is not None else grand_mean(used, total)
    if given.sigma is not None:
        return _Known(used, filled, total, mean, given.sigma, "given", None)
    found = within(used, options.sigma_estimator)
    return _Known(used, filled, total, mean, found.sigma, found.estimator, found.degrees_of_freedom)


def _guaranteed(known: _Known, options: SubgroupOptions) -> LimitBasis:
    assert options.guarantee is not None
    multiple = estimation.multiple_of(
        options.guarantee, known.filled, known.freedom, centre_known=options.standards.mean is not None
    )
    return LimitBasis("sigma", multiple, None)


def _judged(
    statistics: SubgroupStatistics,
    spread: Spread,
    known: _Known,
    basis: LimitBasis,
    options: SubgroupOptions,
) -> tuple[tuple[Plot, Plot], joint.JointLimits | None]:
    """The panels under the limits that judge the baseline: the joint ones where they are asked for."""
    probability = options.joint_false_alarm_probability
    if probability is None:
        return subgroup_plots(statistics, spread, known.mean, known.sigma, basis), None
    size = min(max(round(known.total / known.filled), factors.SMALLEST_SIZE), factors.LARGEST_SIZE)
    limits = joint.of_subgroups(probability, known.filled, size, known.freedom, spread, known.estimator)
    means, _ = subgroup_plots(
        statistics, spread, known.mean, known.sigma, LimitBasis("sigma", limits.sigma_multiple)
    )
    _, spreads = subgroup_plots(
        statistics,
        spread,
        known.mean,
        known.sigma,
        LimitBasis("probability", None, 2.0 * limits.spread_tail_probability),
    )
    return (means, replace(spreads, lower=None)), limits


def _beyond(
    statistics: SubgroupStatistics, spread: Spread, options: SubgroupOptions, kept: Booleans
) -> Booleans:
    """(m,) subgroups beyond the limits that those kept give, on either panel."""
    known = _estimate(statistics, kept, options)
    basis = options.basis if options.guarantee is None else _guaranteed(known, options)
    plots, _ = _judged(statistics, spread, known, basis, options)
    return plots[0].beyond() | plots[1].beyond()


def grand_mean(used: SubgroupStatistics, total: int) -> float:
    """The mean of all ``total`` values; a second pass restores the digits that the first one lost."""
    weights, mean, m = used.size, used.mean, len(used.size)
    if total == m * int(weights[0]) == m * int(weights.max()):
        first = float(np.add.reduce(mean)) / m
        return first + float(np.add.reduce(mean - first)) / m
    mean = np.where(weights > 0, mean, 0.0)
    first = float(weights @ mean) / total
    return first + float(weights @ np.where(weights > 0, mean - first, 0.0)) / total


def _limits(
    options: SubgroupOptions,
    spread: Spread,
    centre: float,
    sigma: float,
    freedom: float | None,
    size: int | None,
    rules: tuple[Rule, ...],
    record: BaselineRecord | None,
    estimator: str = "given",
) -> SubgroupLimits:
    if not math.isfinite(sigma) or sigma <= 0 or not math.isfinite(centre):
        raise UnusableData.of("out-of-scale", "The spread of the values cannot be represented.", "data")
    basis = options.basis
    return SubgroupLimits(
        centre,
        sigma,
        estimator,
        freedom,
        size,
        basis.limit_basis,
        basis.sigma_multiple,
        basis.false_alarm_probability,
        _frozen_lines(size, spread, centre, sigma, basis),
        rules,
        record,
    )


def _watch(
    plots: tuple[Plot, Plot],
    spread: Spread,
    rules: tuple[Rule, ...],
    tail: Tail | None,
    kept: Booleans | None,
) -> tuple[Watched, Tail]:
    """Run rules watch the means; the spread panel is watched by its limits alone, being skewed."""
    means, after = watch("mean", plots[0], rules, tail=tail, kept=kept)
    spreads, _ = watch(spread, plots[1], kept=kept)
    return means.with_(spreads), after


def diagnose(
    data: Subgroups | SubgroupSummary | None, used: SubgroupStatistics, kept: Booleans | None
) -> SubgroupDiagnostics:
    """What a baseline of subgroups shows; ``used`` has the subgroups not ``kept`` turned into gaps."""
    values = data.values if isinstance(data, Subgroups) else None
    if values is not None and kept is not None:
        values = np.where(kept[:, None], values, np.nan)
    return SubgroupDiagnostics(
        diagnostics.autocorrelation(used.mean),
        None if values is None else diagnostics.normality(values),
        None if values is None else diagnostics.resolution(values, used),
        diagnostics.spread_stability(used),
        change_points.of_subgroups(used),
    )


def _cautions(
    found: SubgroupStudy,
    used: SubgroupStatistics,
    filled: int,
    spread: Spread,
    limits: SubgroupLimits,
    seen: Watched,
    means: Plot,
) -> tuple[Caution, ...]:
    far = np.abs(used.mean - means.centre) > limits.basis.multiple * means.sigma
    typical = float(used.size.sum()) / max(filled, 1)
    return caution.collect(
        caution.few_subgroups(filled),
        caution.large_subgroups(used),
        None if used.common_size else caution.single_value_subgroups(used),
        caution.range_inefficient(used) if limits.sigma_estimator in ("mean-range", "median-range") else None,
        caution.autocorrelated(found.autocorrelation),
        caution.not_normal(found.normality),
        # Summaries have no resolution, and say nothing of normality either.
        caution.normality_untested(int(used.size.sum()))
        if found.resolution and not found.normality
        else None,
        caution.coarse_resolution(found.resolution),
        caution.unstable_spread(found.spread_stability),
        change_points.caution_of_level(found.change_point),
        change_points.caution_of_spread(found.change_point),
        caution.varies_between(
            used.mean, int(np.count_nonzero(far)), typical, limits.sigma, limits.degrees_of_freedom
        ),
        screening.caution(found.screening),
        *too_many_signals(seen),
    )


def judge(
    limits: SubgroupLimits, data: Subgroups | SubgroupSummary, carry: SubgroupCarry | None, *, spread: Spread
) -> SubgroupJudgement:
    """New subgroups under frozen limits: points, signals, and the carry for the next call.

    The limits at a subgroup follow its own size. Judging in one call or in any split with the carry
    passed on gives identical signals. Raises UnusableData where the data lacks the spread plotted.
    """
    statistics = data.statistics()
    _check(SubgroupOptions("", standards=Standards(limits.centre, limits.sigma)), statistics, spread)
    before = carry or NEW
    plots = subgroup_plots(statistics, spread, limits.centre, limits.sigma, limits.basis)
    seen, tail = _watch(plots, spread, limits.rules, before.mean, None)
    return Judgement(
        seen.verdict,
        _PANELS[spread](plots[0].panel(), plots[1].panel()),
        seen.signals,
        seen.found,
        SubgroupCarry(before.points + len(statistics.size), tail),
        (*size_cautions(limits.subgroup_size, statistics.size), *too_many_signals(seen)),
    )


def size_cautions(frozen: int | None, sizes: Integers) -> tuple[Caution, ...]:
    """The caution that subgroups are not of the size the limits were set for, where that is so."""
    if frozen is None:
        return ()
    other = (sizes != frozen) & (sizes > 0)
    if not bool(other.any()):
        return ()
    at = int(other.argmax())
    return (
        Caution(
            "size-differs",
            f"{int(other.sum())} subgroups hold another number of values than the {frozen} the limits were "
            f"set for (the first is subgroup {at}); their limits follow their own size.",
            ("data",),
            "iso-7870-2",
        ),
    )


def _chart(
    name: str, title: str, purpose: str, beware: str, spread: Spread, panels: Callable[[Any], Any]
) -> Chart:
    return Chart(
        name=name,
        title=title,
        purpose=purpose,
        takes="Rational subgroups of 2 to 1000 values, of one size or of several; or their means, spreads and sizes.",
        beware=beware,
        panels=("mean", spread),
        references=("shewhart-1931", "iso-7870-2", "astm-e2587"),
        fit=functools.partial(fit, spread=spread),
        judge=functools.partial(judge, spread=spread),
        limits=SubgroupLimits[panels(PanelLimits)],  # type: ignore[misc]
        plotted=panels(Panel),
        carry=SubgroupCarry,
        diagnostics=SubgroupStudy,
    )


CHARTS = (
    _chart(
        "xbar-r",
        "Means and ranges",
        "Watches the level of a measured characteristic by subgroup means, and its spread by ranges.",
        "Ranges waste information in subgroups of more than 10 values: use xbar-s there.",
        "range",
        lambda of: MeanRange[of],  # type: ignore[valid-type]
    ),
    _chart(
        "xbar-s",
        "Means and standard deviations",
        "Watches the level of a measured characteristic by subgroup means, and its spread by standard deviations.",
        "Small spreads in subgroups of fewer than 6 values cannot signal below: there is no lower limit there.",
        "sd",
        lambda of: MeanSd[of],  # type: ignore[valid-type]
    ),
)
