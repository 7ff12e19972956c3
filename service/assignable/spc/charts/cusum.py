"""Cumulative sums: ``cusum`` ([page-1954], [iso-7870-4]), two-sided and tabular.

Points are standardised, each by its own size: ``zᵢ = (x̄ᵢ − centre) √nᵢ / σ``. Then ``C⁺ᵢ = max(0, C⁺ᵢ₋₁ + zᵢ − k)``
and ``C⁻ᵢ = max(0, C⁻ᵢ₋₁ − zᵢ − k)``, from 0 or from a head start [lucas-crosier-1982]; beyond the decision
interval h a sum signals. The lower sum is plotted downwards, as ``−C⁻``. At a gap the sums hold and nothing is
plotted. After a signal the sums go on, unless both are to restart from the head start.

Sums of spread run likewise, with the same k and h, on the fourth root of ``ν Sᵢ²/σ²`` standardised by its
exact mean and deviation [hawkins-wixley-1986]; for a single value that is ``(√|z| − 0.822)/0.349``
[hawkins-1981]. Ranges stand for deviations by their equivalent degrees of freedom [patnaik-1950].
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass
from typing import Annotated, Generic, Literal, TypeAlias, TypeVar

import numpy as np

from .. import factors
from ..bounds import NOT_NEGATIVE, POSITIVE
from ..data import Booleans, Floats, Individuals, Integers, SubgroupStatistics
from ..design import memory as design
from ..errors import UnusableData
from ..rules import TOLERANCE, Signal
from ..runlength import memory as runlength
from ..sigma import freedom_of_relative_variance
from ._memory import (
    FROM_DATA,
    Data,
    Detect,
    Parameters,
    Source,
    check_carry,
    check_given,
    designed,
    establish,
    points_of,
    present,
    price,
)
from .common import (
    MOST_SIGNALS,
    Baseline,
    Fit,
    Judgement,
    Panel,
    PanelLimits,
    Performance,
    Watched,
    too_many_signals,
)
from .registry import Chart
from .subgroups import SubgroupDiagnostics, size_cautions

T = TypeVar("T")
AfterSignal = Literal["continue", "restart"]
Direction = Literal[1, -1]

# No sum of points this far out comes near the largest double.
_FARTHEST = 1e200
# Up to here a plain loop outruns the blocks.
_FEW = 64


@dataclass(frozen=True, slots=True)
class CusumPanels(Generic[T]):
    """The panels of a ``cusum`` chart."""

    upper: Annotated[T, "Sums of what points exceed the centre by, the reference value taken off."]
    lower: Annotated[T, "Sums of what points fall short of the centre by, counted downwards."]
    spread_upper: Annotated[T | None, "The same for a growing spread; null where it is not watched."]
    spread_lower: Annotated[T | None, "The same for a shrinking spread; null where it is not watched."]


@dataclass(frozen=True, slots=True)
class CusumOptions:
    """How a CUSUM chart is to be set up: by reference and decision, or by what to detect.

    head_start: as a fraction of the decision interval.
    """

    source: Source = FROM_DATA
    reference: float | None = None
    decision: float | None = None
    head_start: float = 0.0
    after_signal: AfterSignal = "continue"
    spread: bool = False
    detect: Detect | None = None


@dataclass(frozen=True, slots=True)
class CusumLimits(Parameters):
    """The frozen parameters of a CUSUM chart."""

    reference: Annotated[float, "Reference value k, in standard deviations of a point.", NOT_NEGATIVE]
    decision: Annotated[float, "Decision interval h, in standard deviations of a point.", POSITIVE]
    head_start: Annotated[float, "Where the sums start, as a fraction of the decision interval."]
    after_signal: Annotated[
        AfterSignal,
        "`continue`: the sums go on after a signal. `restart`: both sums of the pair start again, head start included.",
    ]
    spread: Annotated[bool, "Whether sums of spread are watched besides."]
    detect: Annotated[Detect | None, "What the chart was designed for; null where its parameters were given."]
    panels: Annotated[CusumPanels[PanelLimits], "The lines of each panel."]


@dataclass(frozen=True, slots=True)
class CusumSide:
    """One sum, and what it has summed since it last was zero."""

    sum: Annotated[float, "The sum, in standard deviations of a point."]
    points: Annotated[int, "Points summed since it last was zero."]
    reach: Annotated[int, "How many places back, gaps included, the first of them lies."]
    weight: Annotated[float, "Sum of their weights, for the estimate of the shift."]
    head_start: Annotated[float, "What of the sum is the head start."]


@dataclass(frozen=True, slots=True)
class CusumCarry:
    """What judging needs to remember of the points before."""

    points: Annotated[int, "Points judged so far under these limits."]
    upper: Annotated[CusumSide, "The upper sum."]
    lower: Annotated[CusumSide, "The lower sum."]
    spread_upper: Annotated[CusumSide | None, "The upper sum of spread; null where it is not watched."]
    spread_lower: Annotated[CusumSide | None, "The lower sum of spread; null where it is not watched."]


@dataclass(frozen=True, slots=True)
class ShiftEstimate:
    """When the change behind a signal seems to have begun, and where the process seems to be since."""

    panel: Annotated[str, "The panel of the signal."]
    index: Annotated[int, "The point of the signal."]
    since: Annotated[
        int, "First point after the sum was last zero; below 0 in earlier calls, −1 the last before this one."
    ]
    points: Annotated[int, "Points from there to the signal, gaps not counted."]
    mean: Annotated[float | None, "Estimated mean since; null on the spread panels."]
    sigma: Annotated[float | None, "Estimated standard deviation since; null but on the spread panels."]


@dataclass(frozen=True, slots=True)
class CusumDetails:
    """What the signals of a CUSUM tell of the shift."""

    shifts: Annotated[tuple[ShiftEstimate, ...], "One for each signal told, in the same order."]


CusumFit: TypeAlias = Fit[CusumLimits, CusumPanels[Panel], SubgroupDiagnostics]


CusumJudgement: TypeAlias = Judgement[CusumPanels[Panel], CusumCarry]


def fit(data: Data | None, options: CusumOptions) -> CusumFit:
    """A CUSUM chart, from a baseline or from standards; the standard mean is the target.

    With ``detect`` the reference value is the one that finds the shift soonest at the stated in-control
    average run length (near half the shift, [moustakides-1986]), and the decision interval the one that
    gives this run length, head start included. Sums of spread add false alarms of their own to it.

    Raises UnusableData for fewer than two points, no variation, or no spread where it is to be watched;
    UnusableParameter for options that do not fit. Source: [page-1954], [montgomery-2013], chapter 9.
    """
    found = establish(data, options.source)
    reference, decision = _design(options, found.typical)
    upper, lower = PanelLimits(0.0, None, decision), PanelLimits(0.0, -decision, None)
    spreads = (upper, lower) if options.spread else (None, None)
    limits = CusumLimits(
        *found.parameters.row,
        reference,
        decision,
        options.head_start,
        options.after_signal,
        options.spread,
        options.detect,
        CusumPanels(upper, lower, *spreads),
    )
    performance = _performance(
        reference, decision, options.head_start * decision, options.spread, found.typical
    )
    if found.points is None:
        return Fit(limits, None, None, performance, ())
    seen, panels, details, _ = _walk(found.points, isinstance(data, Individuals), limits, None)
    return Fit(
        limits,
        Baseline(seen.verdict, panels, seen.signals, seen.found, details),
        found.diagnostics,
        performance,
        (*found.cautions, *too_many_signals(seen)),
    )


def _design(options: CusumOptions, typical: float) -> tuple[float, float]:
    detect = options.detect
    check_given(detect, ("reference", options.reference), ("decision", options.decision))
    if detect is None:
        assert options.reference is not None
        assert options.decision is not None
        return options.reference, options.decision
    target, fraction = detect.in_control_arl, options.head_start

    def best(shift: float) -> tuple[float, float]:
        found = design.optimal_cusum(shift=shift, in_control_arl=target, shifts=())
        if not fraction:
            return found.reference, found.decision
        return found.reference, design.cusum_decision(
            reference=found.reference, in_control_arl=target, head_start_fraction=fraction
        )

    return designed(detect, typical, best)


@functools.lru_cache(1024)
def _performance(
    reference: float, decision: float, head_start: float, spread: bool, typical: float
) -> Performance:
    def run_length(shift: float) -> runlength.MemoryRunLength:
        return runlength.cusum(reference=reference, decision=decision, shift=shift, head_start=head_start)

    besides = " The sums of spread signal falsely about as often, besides." if spread else ""
    return price("upper and lower", run_length, typical, besides)


# ---------------------------------------------------------------------------------------------------
# Scores


@functools.lru_cache(4096)
def _fourth_root(freedom: float) -> tuple[float, float]:
    """Mean and standard deviation of the fourth root of a chi-square."""
    half = 0.5 * freedom
    lgamma = math.lgamma
    mean = 2.0**0.25 * math.exp(lgamma(half + 0.25) - lgamma(half))
    if freedom > 1e4:
        # Here the difference of the two moments has lost its digits; the delta method has not.
        return mean, mean / math.sqrt(8.0 * freedom)
    square = math.sqrt(2.0) * math.exp(lgamma(half + 0.5) - lgamma(half))
    return mean, math.sqrt(square - mean * mean)


@functools.lru_cache(4096)
def _of_range(n: int) -> tuple[float, float]:
    """Scale and degrees of freedom of the deviation that a range of ``n`` stands for: ``R ≈ scale · S``."""
    freedom = freedom_of_relative_variance((factors.d3(n) / factors.d2(n)) ** 2)
    return factors.d2(n) / factors.c4_of_freedom(freedom), freedom


def _scores(points: SubgroupStatistics, limits: CusumLimits) -> tuple[Floats, Floats, Booleans | None]:
    """Standardised points, their weights ``√n``, and where they are."""
    mean, size, there = present(points)
    root = np.sqrt(size)
    with np.errstate(over="ignore"):
        z = (mean - limits.centre) * (root / limits.sigma)
    return np.clip(z, -_FARTHEST, _FARTHEST), root, there


def _spread_scores(
    points: SubgroupStatistics, single: bool, limits: CusumLimits
) -> tuple[Floats, Floats, Booleans | None]:
    """Standardised fourth roots of the spread, their mean in their own deviation, and where they are."""
    if single:
        z, _, there = _scores(points, limits)
        mean, sd = _fourth_root(1.0)
        return (np.sqrt(np.abs(z)) - mean) / sd, np.full(len(z), mean / sd), there
    spread = points.range if points.sd is None else points.sd
    if spread is None:
        raise UnusableData.of(
            "spread-missing",
            "This chart watches the spread too: give `ranges` or `sds` with the means.",
            "data",
        )
    there = points.size > 1
    spread, sizes = spread[there], points.size[there]
    by_range = points.sd is None

    def scale(n: int) -> float:
        return _of_range(n)[0] if by_range else 1.0

    def freedom(n: int) -> float:
        return _of_range(n)[1] if by_range else n - 1.0

    def of(line: int) -> Floats:
        return factors.of_sizes(lambda n: _fourth_root(freedom(n))[line], sizes)

    if not len(spread):
        return spread, spread, there
    expected, deviation = of(0), of(1)
    with np.errstate(over="ignore"):
        ratio = spread / (limits.sigma * factors.of_sizes(scale, sizes))
    root = np.sqrt(np.minimum(ratio, _FARTHEST)) * factors.of_sizes(lambda n: freedom(n) ** 0.25, sizes)
    return (root - expected) / deviation, expected / deviation, there


# ---------------------------------------------------------------------------------------------------
# Sums


def sums(steps: Floats, start: float) -> Floats:
    """``cᵢ = max(0, cᵢ₋₁ + stepsᵢ)`` from ``start`` ≥ 0, to the same bits as one step after the other.

    Blocks run side by side from zero, which no sum that comes into them falls below. A sum that comes in
    runs on until it is zero, and from there on is the block's own.
    """
    m = len(steps)
    if m <= _FEW:
        c, walked = start, []
        for step in steps.tolist():
            c = max(c + step, 0.0)
            walked.append(c)
        return np.array(walked)
    blocks = math.isqrt(m)
    length = -(-m // blocks)
    padded = np.zeros(blocks * length)
    padded[:m] = steps
    rows = padded.reshape(blocks, length)
    columns = np.ascontiguousarray(rows.T)
    side_by_side = np.empty_like(columns)
    c_all = np.zeros(blocks)
    for step_all, into in zip(columns, side_by_side, strict=True):
        np.add(c_all, step_all, out=into)
        np.maximum(into, 0.0, out=into)
        c_all = into
    result = np.ascontiguousarray(side_by_side.T)
    carried = start
    for row, block in zip(rows, result, strict=True):
        if carried > 0.0:
            alone = np.add.accumulate(np.concatenate(([carried], row)))[1:]
            below = alone <= 0.0
            ends = int(below.argmax()) if below[below.argmax()] else length
            block[:ends] = alone[:ends]
        carried = float(block[-1])
    return result.reshape(-1)[:m]


def _restarting(
    z: Floats, limits: CusumLimits, upper: float, lower: float
) -> tuple[Floats, Floats, Booleans]:
    """Both sums where each signal restarts them, and where it did; each step needs the last."""
    k, edge = limits.reference, limits.decision + TOLERANCE
    fresh = limits.head_start * limits.decision
    uppers, lowers, ended = [], [], []
    for each in z.tolist():
        upper = max(upper + (each - k), 0.0)
        lower = max(lower + (-each - k), 0.0)
        uppers.append(upper)
        lowers.append(lower)
        signal = upper > edge or lower > edge
        ended.append(signal)
        if signal:
            upper = lower = fresh
    return np.array(uppers), np.array(lowers), np.array(ended, dtype=bool)


@dataclass(frozen=True, slots=True, eq=False)
class _Run:
    """What one sum did: its values at the points that are there, their places and weights, its runs."""

    direction: Direction
    values: Floats
    at: Integers
    weights: Floats
    restarts: Booleans | None
    before: CusumSide
    fresh: float

    def ended(self) -> Integers:
        """Where a run ends: at zero, or with a restart."""
        zero = self.values <= TOLERANCE
        return (zero if self.restarts is None else zero | self.restarts).nonzero()[0]

    def after(self, places: int) -> CusumSide:
        """The state after the last of ``places`` places."""
        ended, count, before = self.ended(), len(self.values), self.before
        if not count:
            reach = before.reach + places if before.points else 0
            return CusumSide(before.sum, before.points, reach, before.weight, before.head_start)
        last = int(ended[-1]) if len(ended) else -1
        if last == count - 1:
            if self.restarts is not None and self.restarts[-1]:
                return CusumSide(self.fresh, 0, 0, 0.0, self.fresh)
            return CusumSide(float(self.values[-1]), 0, 0, 0.0, 0.0)
        points, reach, weight, credit = self._since(last)
        return CusumSide(
            float(self.values[-1]),
            points + count - 1 - last,
            places + reach,
            float(self._weights(last, weight, count)[-1]),
            credit,
        )

    def _since(self, end: int) -> tuple[int, int, float, float]:
        """Of the run that follows the end of another: earlier points, minus the place of its first, weight, credit."""
        before = self.before
        if end < 0:
            reach = before.reach if before.points else -int(self.at[0])
            return before.points, reach, before.weight, before.head_start
        restarted = self.restarts is not None and bool(self.restarts[end])
        return 0, -int(self.at[end + 1]), 0.0, self.fresh if restarted else 0.0

    def _weights(self, end: int, before: float, stop: int) -> Floats:
        """Running weight of a run after ``end``, one point after the other, so that no split changes it."""
        own = self.weights[end + 1 : stop]
        return np.add.accumulate(np.concatenate(([before], own)))[1:] if before else np.add.accumulate(own)

    def shifts(self, hits: Integers, reference: float) -> list[tuple[int, int, float]]:
        """For each signal: the place of the first point since zero, how many since, the mean score over weight.

        With equal weights w the last is ``±(k + C/N)/w`` [montgomery-2013].
        """
        ended = self.ended()
        position = np.searchsorted(ended, hits)
        ends = np.where(position > 0, ended[np.maximum(position, 1) - 1], -1) if len(ended) else hits * 0 - 1
        told = []
        end, stops = -2, hits.tolist()
        running: Floats = self.weights
        for j, own_end in zip(stops, ends.tolist(), strict=True):
            if own_end != end:
                end = own_end
                points, reach, weight, credit = self._since(end)
                last = stops[int(np.searchsorted(ends, end, side="right")) - 1]
                running = self._weights(end, weight, last + 1)
            n = points + j - end
            total = float(self.values[j]) - credit + n * reference
            told.append((-reach, n, self.direction * total / float(running[j - end - 1])))
        return told


def _pair(
    scores: tuple[Floats, Floats, Booleans | None],
    limits: CusumLimits,
    upper: CusumSide,
    lower: CusumSide,
) -> tuple[_Run, _Run]:
    z, weights, there = scores
    at = np.arange(len(z)) if there is None else there.nonzero()[0]
    restarts = None
    if limits.after_signal == "restart":
        rising, falling, restarts = _restarting(z, limits, upper.sum, lower.sum)
    else:
        rising = sums(z - limits.reference, upper.sum)
        falling = sums(-z - limits.reference, lower.sum)
    fresh = limits.head_start * limits.decision
    return (
        _Run(1, rising, at, weights, restarts, upper, fresh),
        _Run(-1, falling, at, weights, restarts, lower, fresh),
    )


def _panel(run: _Run, decision: float) -> Panel:
    shape = run.at.shape
    zero, edge = np.broadcast_to(0.0, shape), np.broadcast_to(run.direction * decision, shape)
    if run.direction > 0:
        return Panel(run.at, run.values, zero, zero, edge)
    return Panel(run.at, 0.0 - run.values, zero, edge, zero)


def _figure(value: float, sigma: float) -> str:
    """A value with the digits that a hundredth of sigma calls for."""
    digits = math.ceil(math.log10(max(abs(value) / sigma, 1.0))) + 3
    return f"{value:.{min(digits, 15)}g}"


def _told(
    name: str, run: _Run, limits: CusumLimits, spread: bool
) -> tuple[list[tuple[Signal, ShiftEstimate]], int]:
    """The signals of one sum with what they tell of the shift, and how many there are."""
    hits = (run.values > limits.decision + TOLERANCE).nonzero()[0]
    if not len(hits):
        return [], 0
    up, told = run.direction > 0, hits[:MOST_SIGNALS]
    where: Literal["above", "below"] = "above" if up else "below"
    moved = f"{'upper' if up else 'lower'} sum{' of spread' if spread else ''}"
    seems = f"the {'standard deviation' if spread else 'mean'} seems to have {'risen' if up else 'fallen'} to about"
    pairs = []
    for j, (since, points, mean_score) in zip(told.tolist(), run.shifts(told, limits.reference), strict=True):
        index = int(run.at[j])
        if spread:
            mean, sigma = None, limits.sigma * max(1.0 + mean_score, 0.0) ** 2
            figure = _figure(sigma, limits.sigma)
        else:
            mean, sigma = limits.centre + limits.sigma * mean_score, None
            figure = _figure(mean, limits.sigma)
        over = f"over the last {points} points" if points > 1 else "at this point"
        sentence = f"The {moved} lies beyond the decision interval: {seems} {figure} {over}."
        pairs.append(
            (
                Signal("limit", "zone", name, index, where, (index,), "action", sentence),
                ShiftEstimate(name, index, since, points, mean, sigma),
            )
        )
    return pairs, len(hits)


def _walk(
    points: SubgroupStatistics, single: bool, limits: CusumLimits, carry: CusumCarry | None
) -> tuple[Watched, CusumPanels[Panel], CusumDetails, CusumCarry]:
    """Sums, signals, what they tell, and the carry."""
    fresh = limits.head_start * limits.decision
    new = CusumSide(fresh, 0, 0, 0.0, fresh)
    places = len(points.size)
    pairs = [_pair(_scores(points, limits), limits, *((carry.upper, carry.lower) if carry else (new, new)))]
    if limits.spread:
        started = (carry.spread_upper or new, carry.spread_lower or new) if carry else (new, new)
        pairs.append(_pair(_spread_scores(points, single, limits), limits, *started))
    runs = [run for pair in pairs for run in pair]
    names = ("upper", "lower", "spread_upper", "spread_lower")
    told: list[tuple[Signal, ShiftEstimate]] = []
    found = 0
    for position, run in enumerate(runs):
        own, count = _told(names[position], run, limits, position > 1)
        told += own
        found += count
    told.sort(key=lambda one: one[0].index)
    del told[MOST_SIGNALS:]
    panels = [_panel(run, limits.decision) for run in runs]
    sides = [run.after(places) for run in runs]
    nothing = () if limits.spread else (None, None)
    return (
        Watched(tuple(signal for signal, _ in told), found),
        CusumPanels(*panels, *nothing),
        CusumDetails(tuple(shift for _, shift in told)),
        CusumCarry((carry.points if carry else 0) + places, *sides, *nothing),
    )


def judge(limits: CusumLimits, data: Data, carry: CusumCarry | None) -> CusumJudgement:
    """New points under frozen limits: sums, signals with the shift behind them, and the carry.

    Judging in one call or in any split with the carry passed on gives identical signals. Raises
    UnusableData for means without a spread, where it is watched; DocumentMismatch for a carry that cannot be.
    """
    if carry is not None:
        sides = (carry.upper, carry.lower, carry.spread_upper, carry.spread_lower)
        check_carry(
            all(
                side is None or min(side.sum, side.points, side.reach, side.weight, side.head_start) >= 0
                for side in sides
            )
        )
    points = points_of(data)
    seen, panels, details, after = _walk(points, isinstance(data, Individuals), limits, carry)
    return Judgement(
        seen.verdict,
        panels,
        seen.signals,
        seen.found,
        after,
        (*size_cautions(limits.subgroup_size, points.size), *too_many_signals(seen)),
        details,
    )


CHARTS = (
    Chart(
        name="cusum",
        title="Cumulative sums",
        purpose="Finds small lasting shifts of the level of a measured characteristic, and tells when they began "
        "and how large they are; on request of its spread too.",
        takes="Rational subgroups of one size or of several, their means and sizes, or single values.",
        beware="The target must be where the process can stay: sums of a process a little off target signal in the "
        "end. On single values the sums of spread see shifts of the level too.",
        panels=("upper", "lower", "spread_upper", "spread_lower"),
        references=("page-1954", "lucas-crosier-1982", "hawkins-1981", "iso-7870-4"),
        fit=fit,
        judge=judge,
        limits=CusumLimits,
        plotted=CusumPanels[Panel],
        carry=CusumCarry,
        diagnostics=SubgroupDiagnostics,
        details=CusumDetails,
    ),
)
