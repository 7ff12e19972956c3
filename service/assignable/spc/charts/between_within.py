"""Subgroups whose means vary by nature: ``between-within`` ([iso-7870-2], [astm-e2587], [wheeler-chambers-1992]).

Where the pieces of a subgroup share a kiln car, a mould or a reel, they are more alike than pieces of
two subgroups, and limits from the variation within are far too tight for the means. Here the means are
single values with limits from their own successive differences; the spread within keeps its own panel.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass, replace
from typing import Annotated, Generic, Literal, TypeAlias, TypeVar

import numpy as np

from .. import cautions as caution
from .. import diagnostics
from ..bounds import MULTIPLE, POSITIVE, PROBABILITY, SIZE
from ..cautions import Caution
from ..components import VarianceComponents, components
from ..data import Booleans, Floats, Integers, Subgroups, SubgroupStatistics, SubgroupSummary
from ..errors import Fault, UnusableData, UnusableParameter
from ..rules import Rule, Tail, watched
from ..sigma import SigmaEstimate, moving_range, moving_ranges, within
from .common import (
    AT_THREE_SIGMA,
    FOLLOWING,
    Baseline,
    BaselineRecord,
    Exclusion,
    Fit,
    Judgement,
    LimitBasis,
    Panel,
    PanelLimits,
    Performance,
    Plot,
    Watched,
    exclusion_mask,
    too_many_signals,
    watch,
)
from .individuals import individual_plots, mean_of_values, since_gap
from .lines import Spread, beyond_spread_lines
from .price import mean_performance
from .registry import Chart
from .subgroups import subgroup_plots

T = TypeVar("T")
NOTHING_BETWEEN = 0.05
"""Means whose variation has a larger p-value than this may as well vary by what is within."""


@dataclass(frozen=True, slots=True)
class BetweenWithinPanels(Generic[T]):
    """The panels of a ``between-within`` chart."""

    mean: Annotated[T, "Means of the subgroups, as single values."]
    moving_range: Annotated[T, "Ranges of successive means."]
    within: Annotated[T, "Ranges or standard deviations within the subgroups, as `within_statistic` says."]


@dataclass(frozen=True, slots=True)
class KnownComponents:
    """Values known in advance, which replace the estimates."""

    mean: float | None = None
    sigma_within: float | None = None
    sigma_between: float | None = None


NOTHING_KNOWN = KnownComponents()


@dataclass(frozen=True, slots=True)
class BetweenWithinOptions:
    """How the limits are to be computed. sigma_estimator: ``None`` for the usual one of the statistic."""

    within_statistic: Spread = "range"
    sigma_estimator: str | None = None
    means_estimator: Literal["mean-moving-range", "median-moving-range"] = "mean-moving-range"
    span: int = 2
    basis: LimitBasis = AT_THREE_SIGMA
    rules: tuple[Rule, ...] = ()
    standards: KnownComponents = NOTHING_KNOWN
    subgroup_size: int | None = None
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True)
class BetweenWithinLimits:
    """The frozen parameters of a ``between-within`` chart."""

    centre: Annotated[float, "Centre line of the means, in the unit of the characteristic."]
    sigma_of_means: Annotated[
        float, "Standard deviation of subgroup means; the limits of the means rest on it."
    ]
    sigma_between: Annotated[
        float,
        "Standard deviation between subgroups; 0 where the means vary no more than values within explain.",
    ]
    sigma_within: Annotated[float, "Within-subgroup standard deviation, in the unit of the characteristic."]
    means_estimator: Annotated[
        str, "How the deviation of means was estimated; `given` where it was a standard."
    ]
    sigma_estimator: Annotated[str, "How sigma within was estimated; `given` where it was a standard."]
    degrees_of_freedom_of_means: Annotated[
        float | None, "Effective degrees of freedom of the deviation of means; null where it was a standard."
    ]
    degrees_of_freedom: Annotated[
        float | None, "Effective degrees of freedom of sigma within; null where it was a standard.", POSITIVE
    ]
    span: Annotated[int, "How many successive means a moving range spans.", SIZE]
    within_statistic: Annotated[Literal["range", "sd"], "What the panel of the spread within plots."]
    subgroup_size: Annotated[
        int | None,
        "The commonest size, which the lines within are for; those of a subgroup of another size follow its own. "
        "Null where no subgroup holds two values.",
        SIZE,
    ]
    limit_basis: Annotated[Literal["sigma", "probability"], "How the limits were placed."]
    sigma_multiple: Annotated[
        float | None, "Limits lie this many sigma out; null under `probability`.", MULTIPLE
    ]
    false_alarm_probability: Annotated[
        float | None, "Of each panel and point; null under `sigma`.", PROBABILITY
    ]
    panels: Annotated[BetweenWithinPanels[PanelLimits], "The lines of each panel."]
    rules: Annotated[tuple[Rule, ...], "The rules in force, the limit first."]
    baseline: Annotated[
        BaselineRecord | None, "What the limits were computed from; null for standards alone."
    ]

    @property
    def basis(self) -> LimitBasis:
        """How far out the limits lie."""
        return LimitBasis(self.limit_basis, self.sigma_multiple, self.false_alarm_probability)


@dataclass(frozen=True, slots=True)
class BetweenWithinCarry:
    """What judging needs to remember of the subgroups before."""

    points: Annotated[int, "Subgroups judged so far under these limits."]
    mean: Annotated[Tail, "The last points of the mean panel, for the run rules."]
    recent: Annotated[tuple[float, ...], "The last means since a gap, for the next moving range."]


NEW = BetweenWithinCarry(0, Tail(), ())


@dataclass(frozen=True, slots=True, eq=False)
class BetweenWithinDiagnostics:
    """What the baseline itself shows."""

    components: Annotated[
        VarianceComponents | None,
        "Variance between and within subgroups; null where no two successive means are there.",
    ]
    autocorrelation: Annotated[
        diagnostics.Autocorrelation | None, "Of the subgroup means in time order; null where too few."
    ]
    normality: Annotated[diagnostics.Normality | None, "Of the subgroup means; null where too few."]
    resolution: Annotated[
        diagnostics.Resolution | None, "Of the measurement; null where only summaries were given."
    ]
    spread_stability: Annotated[
        diagnostics.SpreadStability | None, "Equal variances within the subgroups; null where not computable."
    ]


BetweenWithinFit: TypeAlias = Fit[BetweenWithinLimits, BetweenWithinPanels[Panel], BetweenWithinDiagnostics]


BetweenWithinJudgement: TypeAlias = Judgement[BetweenWithinPanels[Panel], BetweenWithinCarry]


Plots = tuple[Plot, Plot, Plot]


def _plots(statistics: SubgroupStatistics, ranges: Floats, limits: BetweenWithinLimits) -> Plots:
    basis = limits.basis
    inside = subgroup_plots(statistics, limits.within_statistic, limits.centre, limits.sigma_within, basis)[1]
    means, moving = individual_plots(
        statistics.mean, ranges, limits.centre, limits.sigma_of_means, limits.span, basis
    )
    return means, moving, inside


def _watch(
    plots: Plots, limits: BetweenWithinLimits, tail: Tail | None, kept: Booleans | None
) -> tuple[Watched, Tail]:
    """Run rules watch the means; both panels of spread are watched by their limits alone, being skewed."""
    means, after = watch("mean", plots[0], limits.rules, tail=tail, kept=kept)
    moving, _ = watch("moving_range", plots[1])
    inside, _ = watch("within", plots[2], kept=kept)
    return means.with_(moving).with_(inside), after


def _panels(plots: Plots) -> BetweenWithinPanels[Panel]:
    return BetweenWithinPanels(plots[0].panel(), plots[1].panel(), plots[2].panel())


def _check_spread(statistics: SubgroupStatistics, wanted: Spread) -> None:
    if (statistics.range if wanted == "range" else statistics.sd) is None:
        plotted, kept = ("ranges", "sds") if wanted == "range" else ("sds", "ranges")
        raise UnusableData.of(
            "spread-missing",
            f"The panel within plots {plotted}, and the summary gives {kept}; give `{plotted}`, or choose the "
            "other `within_statistic`.",
            "data",
            kept,
        )


def fit(data: Subgroups | SubgroupSummary | None, options: BetweenWithinOptions) -> BetweenWithinFit:
    """Limits of a ``between-within`` chart from a baseline, or from known components.

    Means: mean of the means ± k·σ_x̄, ``σ_x̄ = MR̄/d2(w)`` over moving ranges of the means. Components:
    ``σ_b² = σ_x̄² − σ_w²/n``, set to 0 where it comes out below (``diagnostics`` shows it as it comes); where
    sizes differ n is their harmonic mean. A known ``sigma_between`` gives ``σ_x̄² = σ_b² + σ_w²/n`` instead.

    Raises UnusableData for fewer than two subgroups, no two successive means, or no variation;
    UnusableParameter for options that do not fit. Source: [iso-7870-2], [wheeler-chambers-1992].
    """
    rules = watched(options.rules)
    known, basis = options.standards, options.basis
    if data is None:
        return _from_standards(options, rules)
    if options.subgroup_size is not None:
        raise UnusableParameter.of(
            "size-with-data",
            "The subgroup size comes from the data; give it only without data.",
            "subgroup_size",
        )
    statistics = data.statistics()
    _check_spread(statistics, options.within_statistic)
    kept = exclusion_mask(len(statistics.size), options.exclude)
    used = statistics if kept is None else statistics.keep(kept)
    sizes = used.size[used.size > 0]
    filled = len(sizes)
    if filled < 2:
        raise UnusableData.of(
            "too-few-subgroups",
            f"Limits need at least two subgroups with values, and 20 to 25 to deserve trust; there "
            f"{'is one' if filled else 'are none'}.",
            "data",
        )
    size = filled / float((1.0 / sizes).sum())
    centre = known.mean if known.mean is not None else mean_of_values(used.mean, filled)
    inside: SigmaEstimate | float
    if known.sigma_within is not None:
        inside = known.sigma_within
        sigma_within, estimator, freedom = known.sigma_within, "given", None
    else:
        usual = "mean-range" if options.within_statistic == "range" else "mean-sd"
        inside = within(used, options.sigma_estimator or usual)
        sigma_within, estimator, freedom = inside.sigma, inside.estimator, inside.degrees_of_freedom
    statistic: Literal["mean", "median"] = (
        "median" if options.means_estimator.startswith("median") else "mean"
    )
    ranges = moving_ranges(used.mean, options.span)
    found = None
    if known.sigma_between is not None:
        sigma_between = known.sigma_between
        of_means = math.hypot(sigma_between, sigma_within / math.sqrt(size))
        means_estimator, means_freedom = "given", None
        if bool((ranges > 0).any()) and statistic == "mean":
            found = components(moving_range(used.mean, span=options.span), inside, size)
    else:
        means = moving_range(used.mean, span=options.span, statistic=statistic)
        found = components(means, inside, size)
        sigma_between, of_means = math.sqrt(found.between), means.sigma
        means_estimator, means_freedom = means.estimator, means.degrees_of_freedom
    limits = BetweenWithinLimits(
        centre,
        of_means,
        sigma_between,
        sigma_within,
        means_estimator,
        estimator,
        means_freedom,
        freedom,
        options.span,
        options.within_statistic,
        used.usual_size,
        basis.limit_basis,
        basis.sigma_multiple,
        basis.false_alarm_probability,
        BetweenWithinPanels(FOLLOWING, FOLLOWING, FOLLOWING),
        rules,
        BaselineRecord(filled, int(sizes.sum()), options.exclude),
    )
    limits = _with_lines(limits)
    plots = _plots(statistics, ranges, limits)
    seen, _ = _watch(plots, limits, None, kept)
    values = data.values if isinstance(data, Subgroups) else None
    if values is not None and kept is not None:
        values = np.where(kept[:, None], values, np.nan)
    shown = BetweenWithinDiagnostics(
        found,
        diagnostics.autocorrelation(used.mean),
        diagnostics.normality(used.mean),
        None if values is None else diagnostics.resolution(values, used),
        diagnostics.spread_stability(used),
    )
    return Fit(
        limits,
        Baseline(seen.verdict, _panels(plots), seen.signals, seen.found),
        shown,
        _performance(rules, basis, used.usual_size, options.within_statistic),
        caution.collect(
            caution.few_subgroups(filled),
            caution.range_inefficient(used) if estimator in ("mean-range", "median-range") else None,
            _sizes_differ(used.common_size),
            _nothing_between(found),
            caution.autocorrelated(shown.autocorrelation),
            caution.not_normal(shown.normality),
            caution.coarse_resolution(shown.resolution),
            caution.unstable_spread(shown.spread_stability),
            *too_many_signals(seen),
        ),
    )


def _from_standards(options: BetweenWithinOptions, rules: tuple[Rule, ...]) -> BetweenWithinFit:
    known, basis = options.standards, options.basis
    faults = [
        Fault(
            "data-missing",
            "Without baseline data all standards must be given: mean, sigma_within and sigma_between.",
            ("standards", name),
        )
        for name in ("mean", "sigma_within", "sigma_between")
        if getattr(known, name) is None
    ]
    if options.subgroup_size is None:
        faults.append(
            Fault(
                "size-missing", "Without baseline data the subgroup size must be given.", ("subgroup_size",)
            )
        )
    if options.exclude:
        faults.append(Fault("no-such-point", "There is no baseline to exclude points from.", ("exclude",)))
    if faults:
        raise UnusableParameter(*faults)
    assert known.mean is not None
    assert known.sigma_within is not None
    assert known.sigma_between is not None
    assert options.subgroup_size is not None
    limits = BetweenWithinLimits(
        known.mean,
        math.hypot(known.sigma_between, known.sigma_within / math.sqrt(options.subgroup_size)),
        known.sigma_between,
        known.sigma_within,
        "given",
        "given",
        None,
        None,
        options.span,
        options.within_statistic,
        options.subgroup_size,
        basis.limit_basis,
        basis.sigma_multiple,
        basis.false_alarm_probability,
        BetweenWithinPanels(FOLLOWING, FOLLOWING, FOLLOWING),
        rules,
        None,
    )
    performance = _performance(rules, basis, options.subgroup_size, options.within_statistic)
    return Fit(_with_lines(limits), None, None, performance, ())


def _with_lines(limits: BetweenWithinLimits) -> BetweenWithinLimits:
    if not (math.isfinite(limits.centre) and 0 < limits.sigma_of_means < math.inf):
        raise UnusableData.of("out-of-scale", "The spread of the means cannot be represented.", "data")
    nothing, size = np.empty(0), limits.subgroup_size
    sizes = np.zeros(0, dtype=np.int64) if size is None else np.array([size])
    some = np.full(len(sizes), np.nan)
    means, moving, inside = _plots(SubgroupStatistics(sizes, some, some, some), nothing, limits)
    lines = BetweenWithinPanels(
        means.limits(), moving.limits(), FOLLOWING if size is None else inside.limits()
    )
    return replace(limits, panels=lines)


def judge(
    limits: BetweenWithinLimits, data: Subgroups | SubgroupSummary, carry: BetweenWithinCarry | None
) -> BetweenWithinJudgement:
    """New subgroups under frozen limits: points, signals, and the carry for the next call.

    Limits within follow each subgroup's own size; those of the means do not. Judging in one call or in any
    split with the carry passed on gives identical signals. Raises UnusableData where the data lacks the spread
    plotted.
    """
    statistics = data.statistics()
    _check_spread(statistics, limits.within_statistic)
    before = carry or NEW
    recent = before.recent
    series = np.concatenate((recent, statistics.mean)) if recent else statistics.mean
    ranges = moving_ranges(series, limits.span)[len(recent) :]
    plots = _plots(statistics, ranges, limits)
    seen, tail = _watch(plots, limits, before.mean, None)
    return Judgement(
        seen.verdict,
        _panels(plots),
        seen.signals,
        seen.found,
        BetweenWithinCarry(before.points + len(statistics.size), tail, since_gap(series, limits.span - 1)),
        (*_other_sizes(limits.subgroup_size, statistics.size), *too_many_signals(seen)),
    )


@functools.lru_cache(256)
def _performance(rules: tuple[Rule, ...], basis: LimitBasis, size: int | None, spread: Spread) -> Performance:
    """Run lengths of the means as single values."""
    beyond = None
    if size is not None and size > 1:
        beyond = beyond_spread_lines(spread, size, basis.sigma_multiple, basis.tail)
    return replace(
        mean_performance(rules, basis, 1.0, None),
        panel="mean",
        spread_false_alarm_probability=beyond,
        shift_unit="standard deviations of a subgroup mean, variation between subgroups included",
        subgroup_size=None if size is None else float(size),
    )


def _sizes_differ(size: int | None) -> Caution | None:
    if size is not None:
        return None
    return Caution(
        "sizes-differ",
        "Subgroups differ in size, so their means do not all vary alike: the limits of the means are those of "
        "an average subgroup, and the components rest on the harmonic mean of the sizes.",
        ("data",),
        caution.COMMON_PRACTICE,
    )


def _nothing_between(found: VarianceComponents | None) -> Caution | None:
    if found is None or found.p_value < NOTHING_BETWEEN:
        return None
    return Caution(
        "nothing-between",
        "The means vary no more than the values within the subgroups explain (ratio of variances "
        f"{found.ratio:.2f}, p = {found.p_value:.2g}). The `xbar-r` or `xbar-s` chart then has the better founded "
        "limits, and finds shifts sooner.",
        ("data",),
        "iso-7870-2",
    )


def _other_sizes(frozen: int | None, sizes: Integers) -> tuple[Caution, ...]:
    if frozen is None:
        return ()
    other = (sizes != frozen) & (sizes > 0)
    if not bool(other.any()):
        return ()
    return (
        Caution(
            "size-differs",
            f"{int(other.sum())} subgroups hold another number of values than the {frozen} the limits were set "
            f"for (the first is subgroup {int(other.argmax())}). Their limits within follow their own size; those "
            "of the means do not.",
            ("data",),
            "iso-7870-2",
        ),
    )


CHARTS = (
    Chart(
        name="between-within",
        title="Means as single values, with the spread within",
        purpose="Watches subgroups whose level differs by nature from one to the next (kiln cars, cavities, reels), "
        "and states how much of the variation lies between and within them.",
        takes="Rational subgroups of 2 to 1000 values; or their means, spreads and sizes.",
        beware="Where nothing differs between subgroups the xbar charts have the better founded limits.",
        panels=("mean", "moving_range", "within"),
        references=("iso-7870-2", "astm-e2587", "wheeler-chambers-1992"),
        fit=fit,
        judge=judge,
        limits=BetweenWithinLimits,
        plotted=BetweenWithinPanels[Panel],
        carry=BetweenWithinCarry,
        diagnostics=BetweenWithinDiagnostics,
    ),
)
