"""Charts of counts that vary more, or less, than chance alone: ``p-prime`` and ``u-prime`` ([laney-2002]).

The points of a ``p`` or ``u`` chart, standardised, would have a standard deviation of 1 under the
binomial or Poisson law. Here it is estimated, from their moving ranges, as ``sigma_z``; the limits lie
that many times as far out. Limits rest on the normal approximation: probability limits are not offered,
since no exact law stands behind such counts.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Annotated, Any, Generic, Literal, TypeAlias, TypeVar

import numpy as np

from .. import cautions as caution
from .. import diagnostics, runlength
from ..bounds import MULTIPLE, POSITIVE, SIGMA
from ..cautions import Caution
from ..data import Counts, Floats
from ..errors import Fault, UnusableData, UnusableParameter
from ..rules import Rule, watched
from ..sigma import moving_range, moving_ranges
from .attributes import (
    NEW,
    SMALL_COUNT,
    AttributeCarry,
    AttributeDiagnostics,
    Proportions,
    Rates,
    baseline_sizes,
    events_and_total,
    is_binomial,
    plot_counts,
    sample_sizes,
)
from .common import (
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
    exclusion_mask,
    too_many_signals,
    watch,
)
from .counts import count_lines
from .price import FACTORS, after_shifts, priced
from .registry import Chart

P = TypeVar("P")
Q = TypeVar("Q")
DispersedChart = Literal["p-prime", "u-prime"]

_PANELS = {"p-prime": Proportions, "u-prime": Rates}
_PANEL_NAMES = {"p-prime": "proportion", "u-prime": "rate"}
_PLAIN = {"p-prime": "p", "u-prime": "u"}


@dataclass(frozen=True, slots=True)
class DispersedOptions:
    """How the limits of a chart of dispersed counts are to be computed.

    ``mean`` and ``sigma_z`` are known values that replace the estimates; ``sample_size`` the units or area
    of each sample, where there is no data.
    """

    sigma_multiple: float = 3.0
    rules: tuple[Rule, ...] = ()
    mean: float | None = None
    sigma_z: float | None = None
    sample_size: float | None = None
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True)
class DispersedLimits(Generic[P]):
    """The frozen parameters of a chart of dispersed counts."""

    mean: Annotated[
        float,
        "Proportion nonconforming (`p-prime`), or nonconformities per unit of area (`u-prime`): the mean the "
        "limits rest on.",
    ]
    mean_source: Annotated[Literal["estimated", "given"], "Whether the mean is an estimate or a standard."]
    sigma_z: Annotated[
        float,
        "Standard deviation of the standardised points: 1 where chance alone makes the counts vary, more under "
        "over-dispersion, less under under-dispersion.",
        SIGMA,
    ]
    sigma_z_source: Annotated[
        Literal["estimated", "given"], "Whether `sigma_z` is an estimate or a standard."
    ]
    degrees_of_freedom: Annotated[
        float | None, "Effective degrees of freedom of `sigma_z`; null where it was a standard.", POSITIVE
    ]
    sample_size: Annotated[
        float | None,
        "Units inspected, or area of opportunity, of every sample; null where the limits follow each "
        "sample's own.",
        POSITIVE,
    ]
    sigma_multiple: Annotated[
        float, "Limits lie this many times `sigma_z` times the binomial or Poisson deviation out.", MULTIPLE
    ]
    panels: Annotated[P, "The lines of the panel."]
    rules: Annotated[tuple[Rule, ...], "The rules in force, the limit first."]
    baseline: Annotated[
        BaselineRecord | None, "What the limits were computed from; null for standards alone."
    ]


DispersedFit: TypeAlias = Fit[DispersedLimits[P], Q, AttributeDiagnostics]


DispersedJudgement: TypeAlias = Judgement[Q, AttributeCarry]


def _basis(multiple: float, sigma_z: float) -> LimitBasis:
    """Limits that many plain deviations out."""
    return LimitBasis("sigma", multiple * sigma_z, None)


def _plot(
    chart: DispersedChart, counts: Floats, sizes: Floats, mean: float, multiple: float, sigma_z: float
) -> Plot:
    plot = plot_counts(chart, counts, sizes, mean, _basis(multiple, sigma_z))
    return replace(plot, sigma=plot.sigma * sigma_z)


def fit(data: Counts | None, options: DispersedOptions, *, chart: DispersedChart) -> DispersedFit:
    """Limits of a chart of dispersed counts from a baseline, or from standards.

    ``zᵢ = (pᵢ - p̄)/√(p̄(1 - p̄)/nᵢ)`` (``√(ū/aᵢ)`` for rates), ``σ_z = MR̄(z)/d2(2)``, limits
    ``p̄ ± k σ_z √(p̄(1 - p̄)/nᵢ)``, clipped to what is possible. A gap, and an excluded sample, breaks the
    moving range.

    Raises UnusableData for impossible counts, all zero or all nonconforming, without two neighbouring
    samples, or without variation; UnusableParameter for options that do not fit. Source: [laney-2002],
    with d2 exact where the paper rounds it to 1.128.
    """
    rules = watched(options.rules)
    panel, multiple = _PANEL_NAMES[chart], options.sigma_multiple
    binomial = is_binomial(chart)
    if data is None:
        return _from_standards(options, rules, chart)
    if options.sample_size is not None:
        raise UnusableParameter.of(
            "size-with-data", "The sample size comes from the data; give it only without data.", "sample_size"
        )
    sizes = baseline_sizes(chart, data)
    kept = exclusion_mask(len(data.counts), options.exclude)
    counts = data.counts if kept is None else np.where(kept, data.counts, np.nan)
    filled, events, total = events_and_total(counts, sizes, binomial, needed=options.mean is None)
    mean = events / total if options.mean is None else options.mean
    if options.sigma_z is not None:
        sigma_z, freedom = options.sigma_z, None
    else:
        sigma_z, freedom = _dispersion(chart, counts, sizes, mean)
    size = float(sizes[0]) if len(sizes) == 1 else None
    record = BaselineRecord(filled, filled, options.exclude)
    limits = _limits(chart, options, rules, mean, sigma_z, freedom, size, record)

    plot = _plot(chart, data.counts, sizes, mean, multiple, sigma_z)
    seen, _ = watch(panel, plot, rules, kept=kept)
    z = (plot.value - plot.centre) / plot.sigma
    found = AttributeDiagnostics(
        diagnostics.dispersion(
            counts,
            np.broadcast_to(sizes, counts.shape),
            distribution="binomial" if binomial else "poisson",
        ),
        diagnostics.autocorrelation(z if kept is None else np.where(kept, z, np.nan)),
    )
    typical = total / filled if filled else float(sizes.mean())
    return Fit(
        limits,
        Baseline(seen.verdict, _PANELS[chart](plot.panel()), seen.signals, seen.found),
        found,
        _performance(panel, rules, binomial, mean, typical if size is None else size, multiple, sigma_z),
        caution.collect(
            caution.few_samples(filled),
            _as_chance_has_it(chart, found.dispersion),
            caution.autocorrelated(found.autocorrelation),
            _skewed(mean * typical),
            *too_many_signals(seen),
        ),
    )


def _from_standards(
    options: DispersedOptions, rules: tuple[Rule, ...], chart: DispersedChart
) -> DispersedFit:
    binomial = is_binomial(chart)
    mean, sigma_z, size = options.mean, options.sigma_z, options.sample_size
    faults = [
        Fault(
            "data-missing",
            f"Without baseline data both standards must be given: the {name} and sigma_z.",
            ("standards", field),
        )
        for name in ("proportion" if binomial else "rate",)
        for field, value in ((name, mean), ("sigma_z", sigma_z))
        if value is None
    ]
    if options.exclude:
        faults.append(Fault("no-such-point", "There is no baseline to exclude points from.", ("exclude",)))
    if faults:
        raise UnusableParameter(*faults)
    assert mean is not None
    assert sigma_z is not None
    return Fit(
        _limits(chart, options, rules, mean, sigma_z, None, size, None),
        None,
        None,
        _performance(_PANEL_NAMES[chart], rules, binomial, mean, size, options.sigma_multiple, sigma_z),
        (),
    )


def _dispersion(chart: DispersedChart, counts: Floats, sizes: Floats, mean: float) -> tuple[float, float]:
    """``sigma_z`` with its effective degrees of freedom."""
    plain = plot_counts(chart, counts, sizes, mean, LimitBasis())
    z = (plain.value - plain.centre) / plain.sigma
    ranges = moving_ranges(z)
    # Proportions that are all equal leave a residue of rounding in their differences.
    residue = 1e-13 * float(np.max(mean / np.asarray(plain.sigma)))
    largest = float(np.fmax.reduce(ranges, initial=-1.0))
    if 0.0 <= largest <= residue:
        raise UnusableData.of(
            "no-variation",
            "No sample differs from the one before it, so there is no variation to set limits from; give "
            "`sigma_z` as a standard.",
            "data",
            "counts",
        )
    estimate = moving_range(z)
    return estimate.sigma, estimate.degrees_of_freedom


def _limits(
    chart: DispersedChart,
    options: DispersedOptions,
    rules: tuple[Rule, ...],
    mean: float,
    sigma_z: float,
    freedom: float | None,
    size: float | None,
    record: BaselineRecord | None,
) -> DispersedLimits:
    if size is None:
        lines = PanelLimits(mean, None, None)
    else:
        at = np.array([size])
        lines = _plot(chart, np.empty(0), at, mean, options.sigma_multiple, sigma_z).limits()
    return DispersedLimits(
        mean,
        "estimated" if options.mean is None else "given",
        sigma_z,
        "estimated" if options.sigma_z is None else "given",
        freedom,
        size,
        options.sigma_multiple,
        _PANELS[chart](lines),
        rules,
        record,
    )


def _as_chance_has_it(chart: DispersedChart, found: diagnostics.Dispersion | None) -> Caution | None:
    if found is None:
        return None
    plain, law = _PLAIN[chart], "binomial" if found.distribution == "binomial" else "Poisson"
    if found.p_value >= caution.SIGNIFICANCE:
        return Caution(
            "not-dispersed",
            f"The counts vary as the {law} distribution leads to (ratio {found.ratio:.3g}, p = "
            f"{found.p_value:.2g}). The `{plain}` chart is simpler and rests on exact laws; its limits need no "
            "estimate of the dispersion.",
            ("data", "counts"),
            "laney-2002",
        )
    if found.ratio < 1.0:
        return Caution(
            "underdispersed",
            f"The counts vary {found.ratio:.3g} times as much as the {law} distribution leads to, less than "
            "chance allows. The limits follow; find out first how such even counts come about: counts that "
            "are rounded, averaged, or copied from sample to sample are no evidence.",
            ("data", "counts"),
            "laney-2002",
        )
    return None


def _skewed(expected: float) -> Caution | None:
    if expected >= SMALL_COUNT:
        return None
    return Caution(
        "small-counts",
        f"A sample holds {expected:.3g} events on average; counts below {SMALL_COUNT} are skewed, and these "
        "limits and their run lengths rest on the normal approximation. Take larger samples.",
        ("data", "counts"),
        "common practice",
    )


@functools.lru_cache(1024)
def _performance(
    panel: str,
    rules: tuple[Rule, ...],
    binomial: bool,
    mean: float,
    size: float | None,
    multiple: float,
    sigma_z: float,
) -> Performance:
    """Run lengths of the scaled statistic taken as normal; ``sigma_z`` stays as it is under a shift."""
    unit = "factors on the proportion" if binomial else "factors on the rate"
    if size is None:
        return Performance(panel, None, None, (), unit, None, "not computed: the sample size is not known")
    lines = count_lines(binomial, mean, np.array([size]), _basis(multiple, sigma_z))
    centre, sd = float(lines.centre[0]), float(lines.sd[0])
    lower = -multiple if float(lines.lower[0]) > 0 else -math.inf
    upper = multiple if not binomial or float(lines.upper[0]) < size else math.inf

    def run_length(factor: float) -> runlength.RunLength:
        scale = math.sqrt(factor * (1.0 - factor * mean) / (1.0 - mean) if binomial else factor)
        # Beyond 1e6 sigma every point signals all the same.
        shift = min(max((factor - 1.0) * centre / (sd * sigma_z), -1e6), 1e6)
        return runlength.shewhart(rules, lower=lower, upper=upper, shift=shift, scale=scale)

    in_control, method = priced(lambda: run_length(1.0))
    possible = [factor for factor in FACTORS if not binomial or mean * factor < 1.0]
    if in_control is not None:
        method = f"{method}; the scaled statistic taken as normal"
    return Performance(panel, in_control, None, after_shifts(run_length, possible), unit, size, method)


def judge(
    limits: DispersedLimits, data: Counts, carry: AttributeCarry | None, *, chart: DispersedChart
) -> DispersedJudgement:
    """New samples under frozen limits: points, signals, and the carry for the next call.

    Mean and ``sigma_z`` are the frozen ones; limits follow each sample's own size. Raises UnusableData for
    counts the chart cannot take.
    """
    sizes = sample_sizes(chart, data)
    before = carry or NEW
    plot = _plot(chart, data.counts, sizes, limits.mean, limits.sigma_multiple, limits.sigma_z)
    seen, tail = watch(_PANEL_NAMES[chart], plot, limits.rules, tail=before.tail)
    return Judgement(
        seen.verdict,
        _PANELS[chart](plot.panel()),
        seen.signals,
        seen.found,
        AttributeCarry(before.points + len(data.counts), tail),
        too_many_signals(seen),
    )


def _chart(
    name: DispersedChart, title: str, purpose: str, takes: str, beware: str, panels: Callable[[Any], Any]
) -> Chart:
    return Chart(
        name=name,
        title=title,
        purpose=purpose,
        takes=takes,
        beware=beware,
        panels=(_PANEL_NAMES[name],),
        references=("laney-2002",),
        fit=functools.partial(fit, chart=name),
        judge=functools.partial(judge, chart=name),
        limits=DispersedLimits[panels(PanelLimits)],  # type: ignore[misc]
        plotted=panels(Panel),
        carry=AttributeCarry,
        diagnostics=AttributeDiagnostics,
    )


CHARTS = (
    _chart(
        "p-prime",
        "Proportion nonconforming, dispersed",
        "Watches the share of nonconforming units where it varies more, or less, than chance alone explains.",
        "Nonconforming units and units inspected, sample by sample.",
        "Where the counts vary as chance has it, the p chart is the better choice: heed the cautions.",
        lambda of: Proportions[of],  # type: ignore[valid-type]
    ),
    _chart(
        "u-prime",
        "Nonconformities per unit, dispersed",
        "Watches the rate of nonconformities where it varies more, or less, than chance alone explains.",
        "Counts and the area of opportunity of each sample.",
        "Where the counts vary as chance has it, the u chart is the better choice: heed the cautions.",
        lambda of: Rates[of],  # type: ignore[valid-type]
    ),
)
