"""Charts of counts: ``p``, ``np``, ``c`` and ``u`` ([shewhart-1931], [iso-7870-2], [astm-e2587]).

``p`` and ``np`` count nonconforming units among those inspected (binomial); ``c`` and ``u`` count
nonconformities over an area of opportunity (Poisson). ``p`` and ``u`` take samples of any size, with
limits that follow each; ``np`` and ``c`` plot the count itself and need one size.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Annotated, Any, Generic, Literal, TypeAlias, TypeVar

import numpy as np

from .. import cautions as caution
from .. import diagnostics
from ..bounds import MULTIPLE, POSITIVE, PROBABILITY
from ..cautions import Caution
from ..data import Counts, Floats
from ..errors import Fault, UnusableData, UnusableParameter
from ..rules import Rule, Tail, watched
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
    Plot,
    exclusion_mask,
    too_many_signals,
    watch,
)
from .counts import count_lines
from .price import count_performance
from .registry import Chart

MOST_SIZES = 10_000
"""Different sizes of sample whose exact limits one request takes: each is searched for by itself."""

T = TypeVar("T")
P = TypeVar("P")
Q = TypeVar("Q")
AttributeChart = Literal["p", "np", "c", "u"]
CountChart = Literal["p", "np", "c", "u", "p-prime", "u-prime"]


@dataclass(frozen=True, slots=True)
class Proportions(Generic[T]):
    """The panel of a ``p`` chart."""

    proportion: Annotated[T, "Nonconforming units over units inspected."]


@dataclass(frozen=True, slots=True)
class CountsPlotted(Generic[T]):
    """The panel of an ``np`` or ``c`` chart."""

    count: Annotated[T, "The counts."]


@dataclass(frozen=True, slots=True)
class Rates(Generic[T]):
    """The panel of a ``u`` chart."""

    rate: Annotated[T, "Nonconformities over the area of opportunity."]


SMALL_COUNT = 5
_PANELS = {"p": Proportions, "np": CountsPlotted, "c": CountsPlotted, "u": Rates}
PANEL_NAMES = {"p": "proportion", "np": "count", "c": "count", "u": "rate"}


@dataclass(frozen=True, slots=True)
class AttributeOptions:
    """How the limits of a chart of counts are to be computed.

    ``standard`` is the known proportion (``p``, ``np``) or rate per unit of area (``c``, ``u``);
    ``sample_size`` the units or area of each sample, where there is no data.
    """

    basis: LimitBasis = AT_THREE_SIGMA
    rules: tuple[Rule, ...] = ()
    standard: float | None = None
    sample_size: float | None = None
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True)
class AttributeLimits(Generic[P]):
    """The frozen parameters of a chart of counts."""

    mean: Annotated[
        float,
        "Proportion nonconforming (`p`, `np`), or nonconformities per unit of area (`c`, `u`): the mean the "
        "limits rest on.",
    ]
    mean_source: Annotated[Literal["estimated", "given"], "Whether the mean is an estimate or a standard."]
    sample_size: Annotated[
        float | None,
        "Units inspected, or area of opportunity, of every sample; null where the limits follow each "
        "sample's own.",
        POSITIVE,
    ]
    limit_basis: Annotated[Literal["sigma", "probability"], "How the limits were placed."]
    sigma_multiple: Annotated[
        float | None, "Limits lie this many sigma out; null under `probability`.", MULTIPLE
    ]
    false_alarm_probability: Annotated[
        float | None, "At most this, half beyond each limit; null under `sigma`.", PROBABILITY
    ]
    panels: Annotated[P, "The lines of the panel."]
    rules: Annotated[tuple[Rule, ...], "The rules in force, the limit first."]
    baseline: Annotated[
        BaselineRecord | None, "What the limits were computed from; null for a standard alone."
    ]

    @property
    def basis(self) -> LimitBasis:
        """How far out the limits lie."""
        return LimitBasis(self.limit_basis, self.sigma_multiple, self.false_alarm_probability)


@dataclass(frozen=True, slots=True)
class AttributeCarry:
    """What judging needs to remember of the samples before."""

    points: Annotated[int, "Samples judged so far under these limits."]
    tail: Annotated[Tail, "The last points, for the run rules."]


NEW = AttributeCarry(0, Tail())


@dataclass(frozen=True, slots=True, eq=False)
class AttributeDiagnostics:
    """What the baseline itself shows."""

    dispersion: Annotated[
        diagnostics.Dispersion | None,
        "Spread of the counts against what the binomial or Poisson law expects; null where not computable.",
    ]
    autocorrelation: Annotated[
        diagnostics.Autocorrelation | None, "Of the standardised points in time order; null where too few."
    ]


AttributeFit: TypeAlias = Fit[AttributeLimits[P], Q, AttributeDiagnostics]


AttributeJudgement: TypeAlias = Judgement[Q, AttributeCarry]


def is_binomial(chart: CountChart) -> bool:
    """Whether the chart counts units, of which no more can be nonconforming than were inspected."""
    return chart in ("p", "np", "p-prime")


def _plots_count(chart: CountChart) -> bool:
    return chart in ("np", "c")


def plot_counts(chart: CountChart, counts: Floats, sizes: Floats, mean: float, basis: LimitBasis) -> Plot:
    """The panel of some samples; ``sizes`` is (m,), or (1,) where it is one for all."""
    binomial = is_binomial(chart)
    if len(sizes) == 1:
        lines = count_lines(binomial, mean, sizes, basis)
        unit = 1.0 if _plots_count(chart) else float(sizes[0])
        lower, upper = float(lines.lower[0]), float(lines.upper[0])
        top = float(sizes[0]) if binomial else math.inf
        return Plot(
            counts / unit,
            # A ratio's centre is the mean to the last digit, whichever way a call is split.
            float(lines.centre[0]) if _plots_count(chart) else mean,
            float(lines.sd[0]) / unit,
            lower / unit if lower > 0 else None,
            upper / unit if upper < top else None,
            floor=0.0,
            ceiling=top / unit,
        )
    distinct, at = np.unique(sizes, return_inverse=True)
    if basis.sigma_multiple is None and len(distinct) > MOST_SIZES:
        raise UnusableData.of(
            "too-many-sizes",
            f"The samples have {len(distinct)} different sizes, and probability limits are computed for at most "
            f"{MOST_SIZES}, each by itself. Take limits by sigma, or round areas to fewer digits.",
            "data",
            "inspected",
        )
    lines = count_lines(binomial, mean, distinct, basis)
    return Plot(
        counts / sizes,
        mean,
        (lines.sd / distinct)[at],
        (lines.lower / distinct)[at],
        (lines.upper / distinct)[at],
        floor=0.0,
        ceiling=1.0 if binomial else math.inf,
    )


# ---------------------------------------------------------------------------------------------------
# Data


def sample_sizes(chart: CountChart, data: Counts) -> Floats:
    """Sizes (m,), or (1,) where all samples have one; raises UnusableData for what the chart cannot take.

    Where every sample is a gap the size is 1: it is that of no point.
    """
    counts, inspected = data.counts, data.inspected
    present = ~np.isnan(counts)
    if not bool(present.any()):
        return np.ones(1)
    if inspected is None:
        if chart != "c":
            raise UnusableData.of(
                "inspected-missing",
                f"A {chart} chart needs how much was inspected in each sample.",
                "data",
                "inspected",
            )
        return np.ones(1)
    inspected = np.where(present, inspected, np.nan)
    faults = []
    for at in np.flatnonzero(present & ~(inspected > 0))[:100].tolist():
        faults.append(
            Fault(
                "nothing-inspected",
                "What was inspected must be above 0; write null as the count of a sample that was not taken.",
                ("data", "inspected", at),
            )
        )
    if is_binomial(chart):
        for at in np.flatnonzero(counts > inspected)[:100].tolist():
            faults.append(
                Fault(
                    "count-above-inspected",
                    f"{counts[at]:.15g} nonconforming units among {inspected[at]:.15g} inspected is not possible.",
                    ("data", "counts", at),
                )
            )
    if faults:
        raise UnusableData(*faults)
    sizes = inspected[present]
    if bool((sizes == sizes[0]).all()):
        return sizes[:1]
    if _plots_count(chart):
        other = int(np.flatnonzero(present)[int((sizes != sizes[0]).argmax())])
        use = "p" if chart == "np" else "u"
        raise UnusableData.of(
            "size-varies",
            f"An {chart} chart needs samples of one size; sample {other} holds {inspected[other]:.15g} where the "
            f"first holds {sizes[0]:.15g}. Use the {use} chart."
            if chart == "np"
            else f"A c chart needs one area of opportunity; sample {other} has {inspected[other]:.15g} where the "
            f"first has {sizes[0]:g}. Use the {use} chart.",
            "data",
            "inspected",
            other,
        )
    return np.where(present, inspected, sizes[0])


def baseline_sizes(chart: CountChart, data: Counts) -> Floats:
    """The same for a baseline, which must hold a count."""
    if bool(np.isnan(data.counts).all()):
        raise UnusableData.of("empty", "Every count is missing.", "data", "counts")
    return sample_sizes(chart, data)


def events_and_total(
    counts: Floats, sizes: Floats, binomial: bool, *, needed: bool
) -> tuple[int, float, float]:
    """Samples counted, their events, and what was inspected in all; counts (m,), sizes (m,) or (1,).

    Where the mean is ``needed`` from them, raises UnusableData for fewer than two samples, no event, or
    every unit nonconforming.
    """
    present = ~np.isnan(counts)
    filled = int(np.count_nonzero(present))
    total = float(sizes[0]) * filled if len(sizes) == 1 else float(sizes[present].sum())
    events = float(counts[present].sum())
    if not needed:
        return filled, events, total
    if filled < 2:
        raise UnusableData.of(
            "too-few-samples",
            f"Limits need at least two samples, and 20 to 25 to deserve trust; there "
            f"{'is one' if filled else 'are none'}.",
            "data",
            "counts",
        )
    if events == 0:
        raise UnusableData.of(
            "no-events",
            "Every count is 0, so there is nothing to set limits from. Inspect more, give a standard, or "
            "record what was inspected between events instead.",
            "data",
            "counts",
        )
    if binomial and events == total:
        raise UnusableData.of(
            "all-nonconforming",
            "Every unit inspected is nonconforming, so there is nothing to set limits from.",
            "data",
            "counts",
        )
    return filled, events, total


def fit(data: Counts | None, options: AttributeOptions, *, chart: AttributeChart) -> AttributeFit:
    """Limits of a chart of counts from a baseline, or from a standard.

    ``p̄ = Σxᵢ/Σnᵢ``, ``ū = Σcᵢ/Σaᵢ`` (never the mean of the ratios); limits at each sample's own size.

    Raises UnusableData for counts that are impossible, that vary in size on ``np`` or ``c``, or that are
    all zero (or all nonconforming); UnusableParameter for options that do not fit. Source: [iso-7870-2].
    """
    rules = watched(options.rules)
    basis, binomial = options.basis, is_binomial(chart)
    if data is None:
        faults = []
        if options.standard is None:
            name = "proportion" if binomial else "rate"
            faults.append(
                Fault(
                    "data-missing",
                    f"Without baseline data the {name} must be given as a standard.",
                    ("standards", name),
                )
            )
        if options.sample_size is None and _plots_count(chart):
            faults.append(
                Fault(
                    "size-missing", "Without baseline data the sample size must be given.", ("sample_size",)
                )
            )
        if options.exclude:
            faults.append(
                Fault("no-such-point", "There is no baseline to exclude points from.", ("exclude",))
            )
        if faults:
            raise UnusableParameter(*faults)
        assert options.standard is not None
        limits = _limits(chart, options, rules, options.standard, "given", options.sample_size, None)
        size = options.sample_size
        return Fit(
            limits,
            None,
            None,
            count_performance(PANEL_NAMES[chart], rules, binomial, options.standard, size, basis),
            (),
        )
    if options.sample_size is not None:
        raise UnusableParameter.of(
            "size-with-data", "The sample size comes from the data; give it only without data.", "sample_size"
        )

    sizes = baseline_sizes(chart, data)
    kept = exclusion_mask(len(data.counts), options.exclude)
    counts = data.counts if kept is None else np.where(kept, data.counts, np.nan)
    filled, events, total = events_and_total(counts, sizes, binomial, needed=options.standard is None)
    mean = events / total if options.standard is None else options.standard
    size = float(sizes[0]) if len(sizes) == 1 else None
    record = BaselineRecord(filled, filled, options.exclude)
    source: Literal["estimated", "given"] = "estimated" if options.standard is None else "given"
    limits = _limits(chart, options, rules, mean, source, size, record)

    plot = plot_counts(chart, data.counts, sizes, mean, basis)
    seen, _ = watch(PANEL_NAMES[chart], plot, rules, kept=kept)
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
        count_performance(
            PANEL_NAMES[chart], rules, binomial, mean, size if size is not None else typical, basis
        ),
        caution.collect(
            caution.few_samples(filled),
            caution.dispersed(found.dispersion),
            caution.autocorrelated(found.autocorrelation),
            _small_counts(mean * typical, basis),
            *too_many_signals(seen),
        ),
    )


def _small_counts(expected: float, basis: LimitBasis) -> Caution | None:
    if basis.sigma_multiple is None or expected >= SMALL_COUNT:
        return None
    return Caution(
        "small-counts",
        f"A sample holds {expected:.3g} events on average; counts below {SMALL_COUNT} are skewed, so limits at "
        f"{basis.sigma_multiple:g} sigma alarm at another rate than usual (`performance` states it exactly) and "
        "there is no lower limit. Take larger samples, or use probability limits.",
        ("limit_basis",),
        "common practice",
    )


def _limits(
    chart: AttributeChart,
    options: AttributeOptions,
    rules: tuple[Rule, ...],
    mean: float,
    source: Literal["estimated", "given"],
    size: float | None,
    record: BaselineRecord | None,
) -> AttributeLimits:
    basis = options.basis
    if size is None:
        centre = mean if not _plots_count(chart) else None
        lines = PanelLimits(centre, None, None)
    else:
        lines = plot_counts(chart, np.empty(0), np.array([size]), mean, basis).limits()
    return AttributeLimits(
        mean,
        source,
        size,
        basis.limit_basis,
        basis.sigma_multiple,
        basis.false_alarm_probability,
        _PANELS[chart](lines),
        rules,
        record,
    )


def judge(
    limits: AttributeLimits, data: Counts, carry: AttributeCarry | None, *, chart: AttributeChart
) -> AttributeJudgement:
    """New samples under frozen limits: points, signals, and the carry for the next call.

    Limits of ``p`` and ``u`` follow each sample's own size. Raises UnusableData for counts the chart
    cannot take; a sample of another size than the frozen one on ``np`` or ``c`` is refused.
    """
    sizes = sample_sizes(chart, data)
    gaps = bool(np.isnan(data.counts).all())
    if _plots_count(chart) and not gaps and data.inspected is not None and sizes[0] != limits.sample_size:
        other = "p" if chart == "np" else "u"
        raise UnusableData.of(
            "size-differs",
            f"The limits are for samples of {limits.sample_size:.15g}; these hold {sizes[0]:.15g}. Use the "
            f"{other} chart where sizes vary.",
            "data",
            "inspected",
        )
    if _plots_count(chart) and (gaps or data.inspected is None):
        assert limits.sample_size is not None
        sizes = np.array([limits.sample_size])
    before = carry or NEW
    plot = plot_counts(chart, data.counts, sizes, limits.mean, limits.basis)
    seen, tail = watch(PANEL_NAMES[chart], plot, limits.rules, tail=before.tail)
    return Judgement(
        seen.verdict,
        _PANELS[chart](plot.panel()),
        seen.signals,
        seen.found,
        AttributeCarry(before.points + len(data.counts), tail),
        too_many_signals(seen),
    )


def _chart(
    name: AttributeChart, title: str, purpose: str, takes: str, beware: str, panels: Callable[[Any], Any]
) -> Chart:
    return Chart(
        name=name,
        title=title,
        purpose=purpose,
        takes=takes,
        beware=beware,
        panels=(PANEL_NAMES[name],),
        references=("shewhart-1931", "iso-7870-2", "astm-e2587"),
        fit=functools.partial(fit, chart=name),
        judge=functools.partial(judge, chart=name),
        limits=AttributeLimits[panels(PanelLimits)],  # type: ignore[misc]
        plotted=panels(Panel),
        carry=AttributeCarry,
        diagnostics=AttributeDiagnostics,
    )


CHARTS = (
    _chart(
        "p",
        "Proportion nonconforming",
        "Watches the share of nonconforming units in samples that may differ in size.",
        "Nonconforming units and units inspected, sample by sample.",
        "Large samples show more spread than the binomial law allows: heed the dispersion ratio.",
        lambda of: Proportions[of],  # type: ignore[valid-type]
    ),
    _chart(
        "np",
        "Number nonconforming",
        "Watches the number of nonconforming units in samples of one size.",
        "Nonconforming units among a constant number inspected.",
        "Samples of varying size belong on the p chart.",
        lambda of: CountsPlotted[of],  # type: ignore[valid-type]
    ),
    _chart(
        "c",
        "Number of nonconformities",
        "Watches the count of nonconformities over one constant area of opportunity.",
        "Counts over a constant area.",
        "Areas that vary belong on the u chart.",
        lambda of: CountsPlotted[of],  # type: ignore[valid-type]
    ),
    _chart(
        "u",
        "Nonconformities per unit",
        "Watches the rate of nonconformities over areas of opportunity that may differ.",
        "Counts and the area of opportunity of each sample.",
        "Large areas show more spread than the Poisson law allows: heed the dispersion ratio.",
        lambda of: Rates[of],  # type: ignore[valid-type]
    ),
)
