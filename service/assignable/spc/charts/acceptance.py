"""Limits placed from the specification: ``acceptance`` ([iso-7870-3], [freund-1957]).

Where a process is far better than its specification and its level may wander, the mean of n is not asked
whether it has moved, but whether the process still makes an acceptable fraction outside. Two levels and two
risks fix both n and the limits: at the acceptable level (APL) a sample is rejected with probability α at
most, at the rejectable level (RPL) it is accepted with probability β at most.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass, replace
from typing import Annotated, Generic, Literal, TypeAlias, TypeVar

import numpy as np
import scipy

from .. import cautions as caution
from .. import diagnostics
from ..bounds import MULTIPLE, POSITIVE, SIGMA
from ..capability.specification import Specification
from ..cautions import Caution
from ..data import Booleans, Floats, Subgroups, SubgroupStatistics, SubgroupSummary
from ..errors import Fault, UnusableData, UnusableParameter
from ..factors import LARGEST_SIZE
from ..sigma import within
from .common import (
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
    ShiftPerformance,
    Watched,
    exclusion_mask,
    too_many_signals,
    watch,
)
from .lines import Spread, beyond_spread_lines
from .price import SHIFTS
from .registry import Chart
from .subgroups import size_cautions, subgroup_plots

T = TypeVar("T")
LARGE_SAMPLE = 25
_STEPS = (-2, -1, 0, 1, 2, 3, 4, 5, 6)
_FARTHEST = 1e15
# Stands in a panel on the side that has no limit: no number of a request lies beyond it.
_NO_LIMIT = 1e300


@dataclass(frozen=True, slots=True)
class AcceptancePanels(Generic[T]):
    """The panels of an ``acceptance`` chart."""

    mean: Annotated[T, "Means of the subgroups, with acceptance control limits."]
    within: Annotated[T, "Ranges or standard deviations within the subgroups, as `within_statistic` says."]


@dataclass(frozen=True, slots=True)
class AcceptancePlan:
    """What is acceptable and what is not, with the risks of a wrong answer; each between 0 and 0.5."""

    acceptable_fraction: Annotated[float, "Fraction nonconforming at the acceptable process level, p₁."]
    rejectable_fraction: Annotated[float, "Fraction nonconforming at the rejectable process level, p₂."]
    producer_risk: Annotated[float, "Risk of rejecting at the acceptable level, α."]
    consumer_risk: Annotated[float, "Risk of accepting at the rejectable level, β."]


@dataclass(frozen=True, slots=True)
class AcceptanceOptions:
    """How the limits are to be placed. sample_size: n where it is fixed, α then being held and β following."""

    specification: Specification
    plan: AcceptancePlan
    sample_size: int | None = None
    within_statistic: Spread = "range"
    sigma_estimator: str | None = None
    sigma: float | None = None
    sigma_multiple: float = 3.0
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True)
class SideLevels:
    """The levels of one side of the specification, in the unit of the characteristic."""

    specification_limit: Annotated[float, "The specification limit."]
    acceptable_level: Annotated[float, "Acceptable process level, APL: the mean at which p₁ lies outside."]
    rejectable_level: Annotated[float, "Rejectable process level, RPL: the mean at which p₂ lies outside."]
    control_limit: Annotated[float, "Acceptance control limit for means of n."]


@dataclass(frozen=True, slots=True)
class OperatingPoint:
    """A point of the operating characteristic."""

    mean: Annotated[float, "Process level, in the unit of the characteristic."]
    fraction_nonconforming: Annotated[float, "Fraction of pieces outside the specification at that level."]
    acceptance_probability: Annotated[float, "Probability that the mean of n lies within the limits."]


@dataclass(frozen=True, slots=True)
class AcceptanceLimits:
    """The frozen parameters of an ``acceptance`` chart."""

    sample_size: Annotated[int, "n, the values of a subgroup that the limits and risks are for.", POSITIVE]
    exact_sample_size: Annotated[float, "The n, not whole, at which both risks would be met exactly."]
    lower: Annotated[SideLevels | None, "Levels at the lower specification limit; null where there is none."]
    upper: Annotated[SideLevels | None, "Levels at the upper specification limit; null where there is none."]
    plan: Annotated[AcceptancePlan, "What was asked."]
    producer_risk: Annotated[
        float, "Risk of rejecting at the acceptable level with this n, both limits counted."
    ]
    consumer_risk: Annotated[float, "Risk of accepting at the rejectable level with this n."]
    operating_characteristic: Annotated[
        tuple[OperatingPoint, ...],
        "From inside the acceptable level to beyond the rejectable one, at the upper limit, or the lower where it is "
        "the only one; between two limits the other side mirrors it.",
    ]
    sigma: Annotated[float, "Within-subgroup standard deviation, in the unit of the characteristic.", SIGMA]
    sigma_estimator: Annotated[str, "How sigma was estimated; `given` where it was a standard."]
    degrees_of_freedom: Annotated[
        float | None, "Effective degrees of freedom of sigma; null where it was a standard.", POSITIVE
    ]
    within_statistic: Annotated[Literal["range", "sd"], "What the panel of the spread within plots."]
    sigma_multiple: Annotated[
        float, "The limits of the spread lie this many of its standard deviations out.", MULTIPLE
    ]
    panels: Annotated[AcceptancePanels[PanelLimits], "The lines of each panel, for n."]
    baseline: Annotated[BaselineRecord | None, "What sigma was computed from; null for a standard alone."]


@dataclass(frozen=True, slots=True)
class AcceptanceCarry:
    """What judging needs to remember: each subgroup is judged alone."""

    points: Annotated[int, "Subgroups judged so far under these limits."]


@dataclass(frozen=True, slots=True, eq=False)
class AcceptanceDiagnostics:
    """What the baseline itself shows of the variation within, which the chart stands on."""

    normality: Annotated[
        diagnostics.Normality | None,
        "Of the values less their subgroup's mean; null where only summaries were given, or with fewer than 3 values a "
        "subgroup.",
    ]
    resolution: Annotated[
        diagnostics.Resolution | None, "Of the measurement; null where only summaries were given."
    ]
    spread_stability: Annotated[
        diagnostics.SpreadStability | None, "Equal variances within the subgroups; null where not computable."
    ]


AcceptanceFit: TypeAlias = Fit[AcceptanceLimits, AcceptancePanels[Panel], AcceptanceDiagnostics]


AcceptanceJudgement: TypeAlias = Judgement[AcceptancePanels[Panel], AcceptanceCarry]


@functools.lru_cache(1024)
def deviate(probability: float) -> float:
    """The standard normal quantile with ``probability`` above it."""
    return -float(scipy.special.ndtri(probability))


def exact_size(plan: AcceptancePlan) -> float:
    """``((z_α + z_β)/(z_p1 − z_p2))²``, not whole. Source: [freund-1957]; [iso-7870-3].

    Raises UnusableParameter where the rejectable fraction is not above the acceptable one.
    """
    between = deviate(plan.acceptable_fraction) - deviate(plan.rejectable_fraction)
    if not between > 0.0:
        raise UnusableParameter.of(
            "fractions-out-of-order",
            f"The rejectable fraction, {plan.rejectable_fraction:g}, must be above the acceptable one, "
            f"{plan.acceptable_fraction:g}.",
            "rejectable_fraction",
        )
    return ((deviate(plan.producer_risk) + deviate(plan.consumer_risk)) / between) ** 2


def _lines(
    specification: Specification, plan: AcceptancePlan, sigma: float, sizes: Floats | float
) -> tuple[float | Floats | None, float | Floats | None]:
    """Acceptance control limits ``APL ± z_α σ/√n`` for means of some sizes; ``None`` on a side without limit."""
    apart = (deviate(plan.acceptable_fraction) - deviate(plan.producer_risk) / np.sqrt(sizes)) * sigma
    if not isinstance(apart, np.ndarray):
        apart = float(apart)
    lower, upper = specification.lower, specification.upper
    return (None if lower is None else lower + apart), (None if upper is None else upper - apart)


def _side(
    limit: float | None, sign: float, plan: AcceptancePlan, sigma: float, size: int
) -> SideLevels | None:
    if limit is None:
        return None
    z1, z2 = deviate(plan.acceptable_fraction), deviate(plan.rejectable_fraction)
    inner = z1 - deviate(plan.producer_risk) / math.sqrt(size)
    return SideLevels(
        limit, limit - sign * z1 * sigma, limit - sign * z2 * sigma, limit - sign * inner * sigma
    )


def _inside(mean: float, lower: float | None, upper: float | None, sigma: float) -> float:
    below = -math.inf if lower is None else (lower - mean) / sigma
    above = math.inf if upper is None else (upper - mean) / sigma
    if below > 0.0:
        below, above = -above, -below
    return float(scipy.special.ndtr(above)) - float(scipy.special.ndtr(below))


def _outside(mean: float, lower: float | None, upper: float | None, sigma: float) -> float:
    """The same of lying outside, which loses no digits where it is small."""
    found = 0.0
    if lower is not None:
        found += float(scipy.special.ndtr((lower - mean) / sigma))
    if upper is not None:
        found += float(scipy.special.ndtr((mean - upper) / sigma))
    return found


def fit(data: Subgroups | SubgroupSummary | None, options: AcceptanceOptions) -> AcceptanceFit:
    """n and acceptance control limits from a specification and two risks; sigma known, or from a baseline.

    ``APL = U − z_p1 σ``, ``RPL = U − z_p2 σ``, ``n = ((z_α + z_β)/(z_p1 − z_p2))²`` rounded up,
    ``ACL = APL + z_α σ/√n``, and mirrored at a lower limit: α is held, and β falls below what was asked. With a
    fixed n, α is held too.

    Raises UnusableParameter for fractions out of order, or without a sigma; UnusableData where no process level
    meets both specification limits at p₁, or for no variation. Source: [iso-7870-3], [freund-1957].
    """
    exact = exact_size(options.plan)
    size = options.sample_size or max(math.ceil(exact * (1.0 - 1e-12)), 1)
    if size > LARGEST_SIZE:
        raise UnusableParameter.of(
            "sample-too-large",
            f"These levels and risks need {exact:.6g} values in a subgroup, and at most {LARGEST_SIZE} are taken. Set "
            "the two fractions farther apart, or accept larger risks.",
            "rejectable_fraction",
        )
    if data is None:
        faults = []
        if options.sigma is None:
            faults.append(
                Fault("data-missing", "Without baseline data sigma must be given.", ("standards", "sigma"))
            )
        if options.exclude:
            faults.append(
                Fault("no-such-point", "There is no baseline to exclude points from.", ("exclude",))
            )
        if faults:
            raise UnusableParameter(*faults)
        assert options.sigma is not None
        limits = _limits(options, exact, size, options.sigma, "given", None, None)
        return Fit(limits, None, None, _performance(limits), _plan_cautions(limits))
    statistics = data.statistics()
    _check_spread(statistics, options.within_statistic)
    kept = exclusion_mask(len(statistics.size), options.exclude)
    used = statistics if kept is None else statistics.keep(kept)
    filled = int(np.count_nonzero(used.size))
    if not filled:
        raise UnusableData.of("empty", "Every value is missing or excluded.", "data")
    if options.sigma is not None:
        sigma, estimator, freedom = options.sigma, "given", None
    else:
        usual = "mean-range" if options.within_statistic == "range" else "mean-sd"
        found = within(used, options.sigma_estimator or usual)
        sigma, estimator, freedom = found.sigma, found.estimator, found.degrees_of_freedom
    record = BaselineRecord(filled, int(used.size.sum()), options.exclude)
    limits = _limits(options, exact, size, sigma, estimator, freedom, record)
    plots = _plots(statistics, limits)
    seen = _watch(plots, kept)
    shown = _diagnose(data, used, kept)
    return Fit(
        limits,
        Baseline(
            seen.verdict, AcceptancePanels(plots[0].panel(), plots[1].panel()), seen.signals, seen.found
        ),
        shown,
        _performance(limits),
        caution.collect(
            *_plan_cautions(limits),
            caution.few_subgroups(filled),
            caution.range_inefficient(used) if estimator in ("mean-range", "median-range") else None,
            caution.not_normal(shown.normality),
            caution.coarse_resolution(shown.resolution),
            caution.unstable_spread(shown.spread_stability),
            *size_cautions(size, statistics.size),
            *too_many_signals(seen),
        ),
    )


def _limits(
    options: AcceptanceOptions,
    exact: float,
    size: int,
    sigma: float,
    estimator: str,
    freedom: float | None,
    record: BaselineRecord | None,
) -> AcceptanceLimits:
    plan, specification = options.plan, options.specification
    lower = _side(specification.lower, -1.0, plan, sigma, size)
    upper = _side(specification.upper, 1.0, plan, sigma, size)
    if lower is not None and upper is not None and lower.acceptable_level > upper.acceptable_level:
        width = (upper.specification_limit - lower.specification_limit) / sigma
        raise UnusableData.of(
            "specification-too-narrow",
            f"The specification is {width:.3g} sigma wide, and {2.0 * deviate(plan.acceptable_fraction):.3g} are "
            f"needed for a level at which no more than {plan.acceptable_fraction:g} lies outside each limit. Use a "
            "chart that keeps the level on target, or reduce the variation within.",
            "specification",
        )
    side = upper or lower
    assert side is not None
    of_mean = sigma / math.sqrt(size)
    low = None if lower is None else lower.control_limit
    high = None if upper is None else upper.control_limit
    step = 0.25 * (side.rejectable_level - side.acceptable_level)
    levels = [side.acceptable_level + each * step for each in _STEPS]
    curve = tuple(
        OperatingPoint(
            level,
            _outside(level, specification.lower, specification.upper, sigma),
            _inside(level, low, high, of_mean),
        )
        for level in levels
    )
    plain = AcceptanceLimits(
        size,
        exact,
        lower,
        upper,
        plan,
        _outside(side.acceptable_level, low, high, of_mean),
        _inside(side.rejectable_level, low, high, of_mean),
        curve,
        sigma,
        estimator,
        freedom,
        options.within_statistic,
        options.sigma_multiple,
        AcceptancePanels(FOLLOWING, FOLLOWING),
        record,
    )
    some = np.full(1, np.nan)
    plots = _plots(SubgroupStatistics(np.array([size]), some, some, some), plain)
    mean = PanelLimits(_centre(plain), low, high)
    panels = AcceptancePanels(mean, plots[1].limits() if size > 1 else FOLLOWING)
    if not all(math.isfinite(level) for level in levels):
        raise UnusableData.of("out-of-scale", "The limits cannot be represented.", "data")
    return replace(plain, panels=panels)


def _centre(limits: AcceptanceLimits) -> float:
    """Midway between the limits; the acceptable level where there is one limit."""
    if limits.lower is not None and limits.upper is not None:
        return 0.5 * limits.lower.control_limit + 0.5 * limits.upper.control_limit
    side = limits.upper or limits.lower
    assert side is not None
    return side.acceptable_level


def _plots(statistics: SubgroupStatistics, limits: AcceptanceLimits) -> tuple[Plot, Plot]:
    """Means against limits for their own size, and the spread within."""
    centre, sigma = _centre(limits), limits.sigma
    basis = LimitBasis("sigma", limits.sigma_multiple, None)
    _, inside = subgroup_plots(statistics, limits.within_statistic, centre, sigma, basis)
    common = statistics.common_size
    sizes: Floats | float = (
        np.maximum(statistics.size, 1).astype(np.float64) if common is None else float(common)
    )
    specification = Specification(
        None if limits.lower is None else limits.lower.specification_limit,
        None if limits.upper is None else limits.upper.specification_limit,
    )
    lower, upper = _lines(specification, limits.plan, sigma, sizes)
    of_mean = sigma / np.sqrt(sizes)
    return Plot(statistics.mean, centre, of_mean, lower, upper, -_NO_LIMIT, _NO_LIMIT), inside


def _watch(plots: tuple[Plot, Plot], kept: Booleans | None) -> Watched:
    """Both panels by their limits alone: the level may wander, so runs of means say nothing."""
    means, _ = watch("mean", plots[0], kept=kept)
    inside, _ = watch("within", plots[1], kept=kept)
    return means.with_(inside)


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


def _diagnose(
    data: Subgroups | SubgroupSummary, used: SubgroupStatistics, kept: Booleans | None
) -> AcceptanceDiagnostics:
    values = data.values if isinstance(data, Subgroups) else None
    normal = resolution = None
    if values is not None:
        if kept is not None:
            values = np.where(kept[:, None], values, np.nan)
        resolution = diagnostics.resolution(values, used)
        enough = used.size > 2
        if bool(enough.any()):
            # Deviations from a subgroup's own mean vary less than the values, by (n − 1)/n.
            scale = np.sqrt(used.size / np.maximum(used.size - 1.0, 1.0))
            inside = (values - used.mean[:, None]) * scale[:, None]
            normal = diagnostics.normality(inside[enough])
    return AcceptanceDiagnostics(normal, resolution, diagnostics.spread_stability(used))


def _plan_cautions(limits: AcceptanceLimits) -> tuple[Caution, ...]:
    found = []
    if limits.consumer_risk > limits.plan.consumer_risk * (1.0 + 1e-9):
        found.append(
            Caution(
                "consumer-risk-not-held",
                f"With {limits.sample_size} values a subgroup a process at the rejectable level is accepted with "
                f"probability {limits.consumer_risk:.3g}, where {limits.plan.consumer_risk:g} was asked; "
                f"{math.ceil(limits.exact_sample_size * (1.0 - 1e-12))} values would hold both risks.",
                ("sample_size",),
                "iso-7870-3",
            )
        )
    if limits.sample_size > LARGE_SAMPLE:
        found.append(
            Caution(
                "large-sample",
                f"The two levels lie so close that {limits.sample_size} values are needed in a subgroup. Set the "
                "fractions farther apart, or accept larger risks.",
                ("rejectable_fraction",),
                caution.COMMON_PRACTICE,
            )
        )
    return tuple(found)


def _performance(limits: AcceptanceLimits) -> Performance:
    """Run lengths from the acceptable level outwards, were sigma known exactly: each mean is judged alone."""
    side = limits.upper or limits.lower
    assert side is not None
    outward = 1.0 if limits.upper is not None else -1.0
    low = None if limits.lower is None else limits.lower.control_limit
    high = None if limits.upper is None else limits.upper.control_limit
    of_mean = limits.sigma / math.sqrt(limits.sample_size)

    def arl(shift: float) -> float | None:
        chance = _outside(side.acceptable_level + outward * shift * limits.sigma, low, high, of_mean)
        return 1.0 / chance if chance * _FARTHEST > 1.0 else None

    beyond = None
    if limits.sample_size > 1:
        beyond = beyond_spread_lines(limits.within_statistic, limits.sample_size, limits.sigma_multiple, 0.0)
    return Performance(
        "mean",
        arl(0.0),
        beyond,
        tuple(ShiftPerformance(shift, arl(shift)) for shift in SHIFTS),
        "standard deviations of a single value beyond the acceptable process level",
        float(limits.sample_size),
        "exact, each mean judged alone; in control means at the acceptable process level",
    )


def judge(
    limits: AcceptanceLimits, data: Subgroups | SubgroupSummary, carry: AcceptanceCarry | None
) -> AcceptanceJudgement:
    """New subgroups against acceptance control limits.

    The limits of a subgroup of another size follow its own, α being held; β is then another. Each subgroup is
    judged alone. Raises UnusableData where the data lacks the spread plotted.
    """
    statistics = data.statistics()
    _check_spread(statistics, limits.within_statistic)
    plots = _plots(statistics, limits)
    seen = _watch(plots, None)
    return Judgement(
        seen.verdict,
        AcceptancePanels(plots[0].panel(), plots[1].panel()),
        seen.signals,
        seen.found,
        AcceptanceCarry((0 if carry is None else carry.points) + len(statistics.size)),
        (*size_cautions(limits.sample_size, statistics.size), *too_many_signals(seen)),
    )


CHARTS = (
    Chart(
        name="acceptance",
        title="Means against acceptance limits",
        purpose="Watches a process far better than its specification, whose level may wander: limits come from the "
        "specification, with the risks of both wrong answers stated.",
        takes="A specification, two fractions and two risks; subgroups, or a known sigma.",
        beware="The level is not kept on target, and run rules say nothing here; the spread within must be in control.",
        panels=("mean", "within"),
        references=("iso-7870-3", "freund-1957"),
        fit=fit,
        judge=judge,
        limits=AcceptanceLimits,
        plotted=AcceptancePanels[Panel],
        carry=AcceptanceCarry,
        diagnostics=AcceptanceDiagnostics,
    ),
)
