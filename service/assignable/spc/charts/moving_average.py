"""Moving averages: ``moving-average`` ([iso-7870-5], [montgomery-2013]).

Each point is the mean of all values of the last w points: ``Σnⱼx̄ⱼ/Σnⱼ``, with limits ``centre ± k σ/√Σnⱼ``. While
fewer than w points are there, it is the mean of those, with the wider limits that go with them. A gap adds
nothing: the window reaches over it, and nothing is plotted.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass
from typing import Annotated, Generic, TypeAlias, TypeVar

import numpy as np

from .. import runlength
from ..bounds import MULTIPLE, SIZE
from ..data import Floats, SubgroupStatistics
from ..errors import UnusableData
from ..rules import LIMIT
from ..runlength import moving
from ._memory import (
    FROM_DATA,
    SHIFT_UNIT,
    Data,
    Parameters,
    Source,
    check_carry,
    establish,
    points_of,
    present,
    price,
    scattered,
)
from .common import (
    Baseline,
    Fit,
    Judgement,
    Panel,
    PanelLimits,
    Performance,
    Plot,
    too_many_signals,
    watch,
)
from .registry import Chart
from .subgroups import SubgroupDiagnostics, size_cautions

T = TypeVar("T")

LONGEST_SPAN = 100
"""Points in a window, at most."""


@dataclass(frozen=True, slots=True)
class MovingAveragePanels(Generic[T]):
    """The panel of a ``moving-average`` chart."""

    average: Annotated[T, "Means of the values of the last points."]


@dataclass(frozen=True, slots=True)
class MovingAverageOptions:
    """How the limits of a chart of moving averages are to be computed."""

    source: Source = FROM_DATA
    span: int = 3
    sigma_multiple: float = 3.0


@dataclass(frozen=True, slots=True)
class MovingAverageLimits(Parameters):
    """The frozen parameters of a chart of moving averages."""

    span: Annotated[int, "Points in a full window.", SIZE]
    sigma_multiple: Annotated[float, "Limits lie this many standard deviations of the average out.", MULTIPLE]
    panels: Annotated[
        MovingAveragePanels[PanelLimits], "The lines of a full window; null where sizes differ."
    ]


@dataclass(frozen=True, slots=True)
class MovingAverageCarry:
    """What judging needs to remember of the points before."""

    points: Annotated[int, "Points judged so far under these limits."]
    deviations: Annotated[tuple[float, ...], "The last points that were there, less the centre line."]
    sizes: Annotated[tuple[float, ...], "How many values are behind each of them."]


NEW = MovingAverageCarry(0, (), ())


MovingAverageFit: TypeAlias = Fit[MovingAverageLimits, MovingAveragePanels[Panel], SubgroupDiagnostics]


MovingAverageJudgement: TypeAlias = Judgement[MovingAveragePanels[Panel], MovingAverageCarry]


def fit(data: Data | None, options: MovingAverageOptions) -> MovingAverageFit:
    """Limits of a chart of moving averages, from a baseline or from standards.

    Raises UnusableData for fewer than two points or no variation; UnusableParameter for options that do
    not fit. Source: [iso-7870-5]; [montgomery-2013], chapter 9.
    """
    found = establish(data, options.source)
    limits = _limits(found.parameters, options)
    performance = _performance(options.span, options.sigma_multiple, found.typical)
    if found.points is None:
        return Fit(limits, None, None, performance, ())
    plot, _ = _plot(found.points, limits, NEW)
    seen, _ = watch("average", plot)
    return Fit(
        limits,
        Baseline(seen.verdict, MovingAveragePanels(plot.panel()), seen.signals, seen.found),
        found.diagnostics,
        performance,
        (*found.cautions, *too_many_signals(seen)),
    )


def _limits(found: Parameters, options: MovingAverageOptions) -> MovingAverageLimits:
    lines = PanelLimits(found.centre, None, None)
    if found.subgroup_size is not None:
        far = options.sigma_multiple * found.sigma / math.sqrt(found.subgroup_size * options.span)
        lines = PanelLimits(found.centre, found.centre - far, found.centre + far)
        if not (math.isfinite(far) and far > 0):
            raise UnusableData.of("out-of-scale", "The spread of the values cannot be represented.", "data")
    return MovingAverageLimits(*found.row, options.span, options.sigma_multiple, MovingAveragePanels(lines))


@functools.lru_cache(1024)
def _performance(span: int, multiple: float, typical: float) -> Performance:
    """Run lengths of spans up to four; of longer ones what is certain of them, in words."""
    if span == 1:
        return price(
            "average",
            lambda shift: runlength.shewhart((LIMIT,), lower=-multiple, upper=multiple, shift=shift),
            typical,
        )
    if span <= moving.LONGEST_SPAN:
        return price(
            "average",
            lambda shift: moving.moving_average(span=span, limit=multiple, shift=shift),
            typical,
        )
    low, high = moving.bounds(span, multiple)
    why = (
        f"not computed: run lengths are, for spans up to {moving.LONGEST_SPAN}. In control the average lies "
        f"between {low:.4g} points (were the averages independent; Sidak 1967) and {high:.4g} (every {span}th "
        "average is)."
    )
    return Performance("average", None, None, (), SHIFT_UNIT, typical, why)


def _plot(
    points: SubgroupStatistics, limits: MovingAverageLimits, before: MovingAverageCarry
) -> tuple[Plot, MovingAverageCarry]:
    """The averages with their limits, and the carry after them.

    A window is summed from its oldest point on, wherever a split falls, so that no split changes a bit.
    """
    mean, size, there = present(points)
    span, earlier = limits.span, len(before.deviations)
    deviation = np.concatenate((before.deviations, mean - limits.centre))
    sizes = np.concatenate((before.sizes, size))
    total = _windows(deviation * sizes, span)[earlier:]
    counts = _windows(sizes, span)[earlier:]
    sigma = scattered(there, limits.sigma / np.sqrt(counts), limits.sigma)
    far = limits.sigma_multiple * sigma
    values = scattered(there, limits.centre + total / counts, np.nan)
    keep = max(0, len(deviation) - (span - 1))
    return (
        Plot(values, limits.centre, sigma, limits.centre - far, limits.centre + far),
        MovingAverageCarry(
            before.points + len(points.size), tuple(deviation[keep:].tolist()), tuple(sizes[keep:].tolist())
        ),
    )


def _windows(values: Floats, span: int) -> Floats:
    """Sums of each value and the span - 1 before it, as far as there are any."""
    m = len(values)
    padded = np.concatenate((np.zeros(span - 1), values))
    total = padded[:m].copy()
    for later in range(1, span):
        total += padded[later : later + m]
    return total


def judge(
    limits: MovingAverageLimits, data: Data, carry: MovingAverageCarry | None
) -> MovingAverageJudgement:
    """New points under frozen limits: averages, signals, and the carry for the next call.

    Judging in one call or in any split with the carry passed on gives identical signals. Raises
    DocumentMismatch for a carry that cannot be.
    """
    before = carry or NEW
    kept = len(before.sizes)
    check_carry(kept == len(before.deviations) and kept < limits.span and min(before.sizes, default=1) >= 1)
    points = points_of(data)
    plot, after = _plot(points, limits, before)
    seen, _ = watch("average", plot)
    return Judgement(
        seen.verdict,
        MovingAveragePanels(plot.panel()),
        seen.signals,
        seen.found,
        after,
        (*size_cautions(limits.subgroup_size, points.size), *too_many_signals(seen)),
    )


CHARTS = (
    Chart(
        name="moving-average",
        title="Moving averages",
        purpose="Finds lasting shifts of the level of a measured characteristic, and shows it with its chance "
        "variation smoothed away.",
        takes="Rational subgroups of one size or of several, their means and sizes, or single values.",
        beware="Averages share points with those before them, so run rules have no meaning here; weights that "
        "fade (`ewma`) find small shifts sooner.",
        panels=("average",),
        references=("iso-7870-5", "montgomery-2013"),
        fit=fit,
        judge=judge,
        limits=MovingAverageLimits,
        plotted=MovingAveragePanels[Panel],
        carry=MovingAverageCarry,
        diagnostics=SubgroupDiagnostics,
    ),
)
