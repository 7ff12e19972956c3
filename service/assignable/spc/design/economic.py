"""Economic design of a chart of means: the sampling plan that costs least, after Lorenzen & Vance (1986).

A cycle runs from the start of production, in control, until a shift has come, been signalled, found and
mended. The time until a shift is exponential. With λ = 1/``mean_hours_to_shift``, samples of n every h
hours, and the run lengths ARL₀ in control and ARL₁ after the shift:

* τ = 1/λ - h/(e^{λh} - 1): hours from the last sample to the shift, given that one comes in the interval;
* s = 1/(e^{λh} - 1): samples while in control, so that s/ARL₀ false alarms come in a cycle;
* out of control: nE + h·ARL₁ - τ hours to the signal and its point on the chart, then T₁ to find, T₂ to mend;
* hours of a cycle: 1/λ + (1 - γ₁)·s·T₀/ARL₀ - τ + nE + h·ARL₁ + T₁ + T₂;
* cost of a cycle: C₀/λ + C₁(nE + h·ARL₁ - τ + γ₁T₁ + γ₂T₂) + sY/ARL₀ + W
  + (a + bn)/h · (1/λ - τ + nE + h·ARL₁ + γ₁T₁ + γ₂T₂).

The cost an hour is their ratio [lorenzen-vance-1986]. Duncan's model is the special case in which production
always goes on, :func:`duncan` [duncan-1956]. Costs are in whatever unit of money they are given in.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields, replace
from typing import Annotated

import numpy as np
import scipy

from ..data import Floats
from ..errors import Fault, UnusableParameter
from ..rules import Rule, watched
from ..runlength import shewhart
from ..runlength.automaton import compile_watches, watches
from .subgroups import SamplingPlan

LARGEST_SIZE = 100
SMALLEST_MULTIPLE, LARGEST_MULTIPLE = 0.1, 6.0
SMALLEST_SHIFT, LARGEST_SHIFT = 0.05, 20.0
LARGEST_COST = 1e12
LONGEST_HOURS = 1e6
SHORTEST_MEAN, LONGEST_MEAN = 1e-3, 1e8
MOST_PLANS = 1_000_000

# The search: intervals from this share of the mean time to a shift to that multiple of it, on a first grid
# of this many multiples and intervals; the windows of the zoom then halve until they are this narrow.
_SHORTEST, _LONGEST = 1e-5, 20.0
_GRID_MULTIPLES, _GRID_INTERVALS = 41, 49
_ZOOM = np.linspace(-1.0, 1.0, 7)
_ROUNDS = 30
_WITHIN = (0.01, 0.05)
_SURFACE = 15
# A picture is finer, and reaches no farther than this ratio of intervals.
_FINE = 61
_FARTHEST = 40.0
_NO_SHORTFALL = math.exp(-1.0)
_STEP = 1e-4
_ARL_BEYOND = 1e15
# States times regions times sizes of the chains that rules need: about a second.
_MOST_WORK = 2_000_000


# ---------------------------------------------------------------------------------------------------
# What is given


@dataclass(frozen=True, slots=True)
class ProcessEconomics:
    """The process, its costs and its times: the parameters of Lorenzen & Vance (1986)."""

    mean_hours_to_shift: Annotated[
        float, "Mean hours of production in control until the shift comes, 1/λ: 0.001 to 1e8."
    ]
    shift: Annotated[float, "The shift that comes, δ: of the mean, in process sigma, up or down; 0.05 to 20."]
    cost_per_hour_in_control: Annotated[
        float, "Cost of poor quality an hour while the process is in control, C₀."
    ]
    cost_per_hour_out_of_control: Annotated[
        float, "Cost of poor quality an hour after the shift, C₁; more than in control."
    ]
    false_alarm_cost: Annotated[
        float, "Cost of looking into one false alarm, Y, lost production included if it stops."
    ]
    repair_cost: Annotated[float, "Cost of finding the cause of a true signal and mending it, W."]
    cost_per_sample: Annotated[float, "Fixed cost of one sample, whatever its size, a."]
    cost_per_piece: Annotated[float, "Further cost of each piece sampled, b."]
    hours_per_piece: Annotated[
        float, "Hours to take, measure and chart one piece, E: they delay the signal by n times as much."
    ] = 0.0
    hours_to_search_false_alarm: Annotated[
        float, "Mean hours of search after a false alarm, T₀; matters only where production stops for it."
    ] = 0.0
    hours_to_find_cause: Annotated[float, "Mean hours to find the cause after a true signal, T₁."] = 0.0
    hours_to_repair: Annotated[float, "Mean hours to mend the cause once found, T₂."] = 0.0
    runs_while_searching: Annotated[bool, "Whether production goes on while a cause is searched for, γ₁."] = (
        True
    )
    runs_while_repairing: Annotated[bool, "Whether production goes on during the repair, γ₂."] = True
    hours_until_noticed_without_chart: Annotated[
        float | None,
        "Mean hours from a shift until it would be noticed without any chart (by the customer, say); null if "
        "it never would. No part of the model itself: it sets the cost that the chart has to beat.",
    ] = None


@dataclass(frozen=True, slots=True)
class Requirements:
    """Bounds on a plan, of statistics and of practice; null where there is none."""

    smallest_in_control_arl: Annotated[
        float | None, "Least average number of samples between false alarms."
    ] = None
    shortest_hours_between_false_alarms: Annotated[
        float | None, "Least average hours between false alarms, interval times in-control run length."
    ] = None
    longest_ats_hours: Annotated[
        float | None,
        "Most hours from a shift to its signal on average, for one just after a sample: interval times run length.",
    ] = None
    smallest_size: Annotated[int, "Fewest pieces in a sample."] = 1
    largest_size: Annotated[int, "Most pieces in a sample, up to 100."] = LARGEST_SIZE
    shortest_interval_hours: Annotated[float | None, "Shortest interval between samples."] = None
    longest_interval_hours: Annotated[float | None, "Longest interval between samples."] = None
    multiple: Annotated[
        float | None,
        "Limit multiple to hold; null to choose it. With further rules it is held, at 3 if null.",
    ] = None


# ---------------------------------------------------------------------------------------------------
# What is found


@dataclass(frozen=True, slots=True)
class CostBreakdown:
    """What the cost an hour of a plan is made of; the parts sum to it."""

    quality_in_control_per_hour: Annotated[float, "Poor quality made while in control."]
    quality_out_of_control_per_hour: Annotated[float, "Poor quality made after the shift."]
    false_alarms_per_hour: Annotated[float, "Looking into false alarms."]
    repairs_per_hour: Annotated[float, "Finding and mending true causes."]
    sampling_per_hour: Annotated[float, "Taking and measuring samples."]


@dataclass(frozen=True, slots=True)
class PricedPlan:
    """A sampling plan, what it costs and what it does."""

    size: Annotated[int, "Pieces in a sample."]
    interval_hours: Annotated[float, "Hours between samples."]
    multiple: Annotated[float, "Limits at this many standard deviations of the mean."]
    cost_per_hour: Annotated[float, "Expected cost an hour in the long run."]
    parts: Annotated[CostBreakdown, "What that cost is made of."]
    pieces_per_hour: Annotated[float, "Pieces measured an hour."]
    in_control_arl: Annotated[float | None, "Samples between false alarms on average; null beyond 1e15."]
    hours_between_false_alarms: Annotated[float | None, "The same in hours; null beyond 1e15 samples."]
    out_of_control_arl: Annotated[
        float | None, "Samples from the shift to its signal on average; null beyond 1e15."
    ]
    ats_hours: Annotated[
        float | None,
        "Hours from a shift just after a sample to its signal on average; null beyond 1e15 samples.",
    ]
    hours_out_of_control: Annotated[
        float | None,
        "Mean hours of a cycle from the shift until the cause is mended; null beyond 1e15 samples.",
    ]
    cycle_hours: Annotated[float | None, "Mean hours of a cycle; null beyond 1e15 samples."]
    false_alarms_per_cycle: Annotated[float, "False alarms in a cycle on average."]


@dataclass(frozen=True, slots=True)
class SizeOptimum:
    """The best interval and multiple for one sample size."""

    size: Annotated[int, "Pieces in a sample."]
    interval_hours: Annotated[float, "The best interval for it."]
    multiple: Annotated[float, "The best limit multiple for it."]
    cost_per_hour: Annotated[float, "Cost an hour with these."]


@dataclass(frozen=True, slots=True)
class Flatness:
    """How far each choice may move, the other two held, before the cost has risen by a stated share.

    The requirements are not looked at here; null where the cost stays within it to the end of the search.
    """

    rise: Annotated[float, "Share by which the cost may rise above the optimum (0.01 is 1 %)."]
    shortest_interval_hours: Annotated[float | None, "Shortest interval within it."]
    longest_interval_hours: Annotated[float | None, "Longest interval within it."]
    smallest_multiple: Annotated[float | None, "Smallest limit multiple within it; null too if it is held."]
    largest_multiple: Annotated[float | None, "Largest limit multiple within it; null too if it is held."]
    smallest_size: Annotated[
        int, "Smallest size within it, with the best interval and multiple for that size."
    ]
    largest_size: Annotated[int, "Largest size within it, with the best interval and multiple for that size."]


@dataclass(frozen=True, slots=True)
class SurfaceRow:
    """The cost along the intervals at one limit multiple."""

    multiple: Annotated[float, "The limit multiple."]
    cost_per_hour: Annotated[tuple[float, ...], "Cost an hour at each interval of the surface."]


@dataclass(frozen=True, slots=True)
class CostSurface:
    """The cost an hour around the optimum at its sample size, for a picture."""

    size: Annotated[int, "The sample size."]
    interval_hours: Annotated[tuple[float, ...], "The intervals."]
    rows: Annotated[tuple[SurfaceRow, ...], "A row for each limit multiple."]


@dataclass(frozen=True, slots=True)
class Sensitivity:
    """What one parameter does to the cost, the best plan held."""

    parameter: Annotated[str, "Its name in the request."]
    value: Annotated[float, "Its value."]
    elasticity: Annotated[float, "Percent that the cost changes for each percent of the parameter."]
    cost_per_hour_if_tenth_more: Annotated[float, "Cost an hour of the same plan were it 10 % larger."]


@dataclass(frozen=True, slots=True)
class EconomicDesign:
    """The plan of least cost, what surrounds it, and whether a chart pays at all."""

    best: Annotated[PricedPlan, "The plan of least cost an hour that meets the requirements."]
    worth_while: Annotated[bool, "Whether its cost is below that without a chart."]
    cost_per_hour_without_chart: Annotated[
        float, "Cost an hour without a chart: out of control for good, or until noticed otherwise."
    ]
    conclusion: Annotated[str, "The answer in plain sentences."]
    at_bounds: Annotated[
        tuple[str, ...], "Choices that ended at a bound, by name: the cost would still fall beyond it."
    ]
    without_requirements: Annotated[
        PricedPlan | None,
        "The plan of least cost were nothing required (with rules, sizes are kept to); null if nothing was.",
    ]
    price_of_requirements_per_hour: Annotated[
        float | None, "What the requirements cost an hour; null if nothing was required."
    ]
    present: Annotated[PricedPlan | None, "The plan in use now, priced; null if none was given."]
    saving_per_hour: Annotated[
        float | None, "Cost an hour of the plan in use less that of the best; null if none was given."
    ]
    by_size: Annotated[
        tuple[SizeOptimum, ...],
        "The best of each size around the optimum: ten either way, and all that cost up to 5 % more.",
    ]
    flatness: Annotated[tuple[Flatness, ...], "How flat the optimum is, for a rise of 1 % and of 5 %."]
    surface: Annotated[
        CostSurface | None, "The cost around the optimum; null where further rules hold the multiple."
    ]
    sensitivities: Annotated[tuple[Sensitivity, ...], "Every parameter, the one that matters most first."]
    method: Annotated[str, "How it was computed."]


@dataclass(frozen=True, slots=True, eq=False)
class Neighbourhood:
    """The cost an hour of plans around the best one, at its sample size.

    multiples: (k,), a single one where it is held; interval_hours: (m,), equal ratios apart; cost_per_hour:
    (k, m); shortfall: (k, m), the logarithm of how far the requirement missed most is missed, zero or below where
    all are met.
    """

    size: int
    multiples: Floats
    interval_hours: Floats
    cost_per_hour: Floats
    shortfall: Floats


# ---------------------------------------------------------------------------------------------------
# The cost


@dataclass(frozen=True, slots=True, eq=False)
class _Costs:
    """The parts of the cost of a cycle and its hours, each of one shape."""

    in_control: Floats
    out_of_control: Floats
    alarms: Floats
    repair: Floats
    sampling: Floats
    hours: Floats
    hours_out: Floats
    false_alarms: Floats

    @property
    def per_hour(self) -> Floats:
        total: Floats = (
            self.in_control + self.out_of_control + self.alarms + self.repair + self.sampling
        ) / self.hours
        return total


def _timing(mean_hours: float, interval: Floats) -> tuple[Floats, Floats]:
    """s and τ. Where λh is small τ comes from its series, which does not cancel."""
    x = interval / mean_hours
    samples = 1.0 / np.expm1(np.minimum(x, 700.0))
    series = x * (0.5 - x * (1.0 / 12.0 - x * x / 720.0))
    tau: Floats = np.where(x < 0.01, mean_hours * series, mean_hours - interval * samples)
    return samples, tau


def _cycle(e: ProcessEconomics, size: Floats, interval: Floats, arl0: Floats, arl1: Floats) -> _Costs:
    samples, tau = _timing(e.mean_hours_to_shift, interval)
    false_alarms = samples / arl0
    to_signal = size * e.hours_per_piece + interval * arl1 - tau
    searching, mending = e.hours_to_find_cause, e.hours_to_repair
    off = (
        to_signal
        + (searching if e.runs_while_searching else 0.0)
        + (mending if e.runs_while_repairing else 0.0)
    )
    lost = 0.0 if e.runs_while_searching else e.hours_to_search_false_alarm
    hours_out = to_signal + searching + mending
    zero = np.zeros_like(off)
    return _Costs(
        in_control=zero + e.cost_per_hour_in_control * e.mean_hours_to_shift,
        out_of_control=e.cost_per_hour_out_of_control * off,
        alarms=zero + e.false_alarm_cost * false_alarms,
        repair=zero + e.repair_cost,
        sampling=(e.cost_per_sample + e.cost_per_piece * size) / interval * (e.mean_hours_to_shift + off),
        hours=e.mean_hours_to_shift + lost * false_alarms + hours_out,
        hours_out=hours_out,
        false_alarms=zero + false_alarms,
    )


def _arl0(multiple: Floats) -> Floats:
    found: Floats = 0.5 / scipy.special.ndtr(-multiple)
    return found


def _arl1(size: Floats, multiple: Floats, shift: float) -> Floats:
    distance = abs(shift) * np.sqrt(size)
    power = scipy.special.ndtr(distance - multiple) + scipy.special.ndtr(-distance - multiple)
    found: Floats = 1.0 / np.minimum(power, 1.0)
    return found


def cost_per_hour(
    economics: ProcessEconomics, size: Floats | int, interval_hours: Floats | float, multiple: Floats | float
) -> Floats:
    """Expected cost an hour of sampling plans: arrays that broadcast in, one of their common shape out.

    size: 1 to 1000 pieces; interval_hours: 1e-9 to 1e9; multiple: of the limits, 0 to 8; at most a million
    plans. Only the limits signal. Raises UnusableParameter: an argument or a parameter out of its range.
    Source: [lorenzen-vance-1986], their equation of cost per unit of time.
    """
    _check_economics(economics)
    n, h, k = (np.asarray(value, dtype=np.float64) for value in (size, interval_hours, multiple))
    for value, low, high, name in (
        (n, 1.0, 1000.0, "size"),
        (h, 1e-9, 1e9, "interval_hours"),
        (k, 0.0, 8.0, "multiple"),
    ):
        if not bool(((value >= low) & (value <= high)).all()):
            raise UnusableParameter.of("out-of-range", f"{name} must be from {low:g} to {high:g}.", name)
    if math.prod(np.broadcast_shapes(n.shape, h.shape, k.shape)) > MOST_PLANS:
        raise UnusableParameter.of(
            "too-many-plans", f"At most {MOST_PLANS} plans are priced at once.", "interval_hours"
        )
    return _cycle(economics, n, h, _arl0(k), _arl1(n, k, economics.shift)).per_hour


def cost_without_chart(economics: ProcessEconomics) -> float:
    """Cost an hour without a chart.

    When a shift is never noticed otherwise, the process ends out of control: C₁, which is also the limit of
    the model for ever longer intervals. Otherwise cycles as the model has them, with the stated mean time
    in place of the time to a signal, and neither samples nor false alarms.
    """
    _check_economics(economics)
    e = economics
    if e.hours_until_noticed_without_chart is None:
        return e.cost_per_hour_out_of_control
    noticed, find, mend = e.hours_until_noticed_without_chart, e.hours_to_find_cause, e.hours_to_repair
    off = noticed + (find if e.runs_while_searching else 0.0) + (mend if e.runs_while_repairing else 0.0)
    cost = (
        e.cost_per_hour_in_control * e.mean_hours_to_shift
        + e.cost_per_hour_out_of_control * off
        + e.repair_cost
    )
    return cost / (e.mean_hours_to_shift + noticed + find + mend)


def duncan(
    *,
    mean_hours_to_shift: float,
    shift: float,
    loss_per_hour_out_of_control: float,
    false_alarm_cost: float,
    cost_of_finding_cause: float,
    cost_per_sample: float,
    cost_per_piece: float,
    hours_per_piece: float = 0.0,
    hours_to_find_cause: float = 0.0,
) -> ProcessEconomics:
    """Duncan's parameters as a special case: production always goes on, and costs count from income lost.

    loss_per_hour_out_of_control is M, false_alarm_cost T, cost_of_finding_cause W, cost_per_sample b,
    cost_per_piece c, hours_per_piece e, hours_to_find_cause D, 1/mean_hours_to_shift λ of [duncan-1956].
    The cost an hour is then his loss-cost exactly; the cost without a chart is M.
    """
    return ProcessEconomics(
        mean_hours_to_shift=mean_hours_to_shift,
        shift=shift,
        cost_per_hour_in_control=0.0,
        cost_per_hour_out_of_control=loss_per_hour_out_of_control,
        false_alarm_cost=false_alarm_cost,
        repair_cost=cost_of_finding_cause,
        cost_per_sample=cost_per_sample,
        cost_per_piece=cost_per_piece,
        hours_per_piece=hours_per_piece,
        hours_to_find_cause=hours_to_find_cause,
    )


# ---------------------------------------------------------------------------------------------------
# Run lengths by plan


@dataclass(frozen=True, slots=True, eq=False)
class _Laws:
    """Run lengths: by the closed form, or with rules from tables at the one multiple that is held."""

    shift: float
    rules: tuple[Rule, ...] | None
    held: float

    def in_control(self, multiple: Floats) -> Floats:
        if self.rules is None:
            return _arl0(multiple)
        return np.full(multiple.shape, self._chain(0.0))

    def after(self, size: Floats, multiple: Floats, shift: float | None = None) -> Floats:
        at = self.shift if shift is None else shift
        if self.rules is None:
            return _arl1(size, multiple, at)
        different, place = np.unique(size, return_inverse=True)
        found = np.array([self._chain(abs(at) * math.sqrt(one)) for one in different.tolist()])
        shape = np.broadcast_shapes(size.shape, multiple.shape)
        return np.broadcast_to(found[place.reshape(size.shape)], shape)

    def _chain(self, shift: float) -> float:
        assert self.rules is not None
        # Beyond nine standard deviations past the limit the first sample signals in double precision.
        near = min(shift, self.held + 9.0)
        return shewhart(self.rules, lower=-self.held, upper=self.held, shift=near).arl


# ---------------------------------------------------------------------------------------------------
# The search


@dataclass(frozen=True, slots=True, eq=False)
class _Best:
    """For each size, (s,) each: the best interval and multiple, and the cost; infinite where none is allowed."""

    size: Floats
    interval: Floats
    multiple: Floats
    cost: Floats
    shortest: float
    longest: float
    lowest: float


def _intervals(
    r: Requirements, laws: _Laws, size: Floats, multiple: Floats, ends: tuple[float, float]
) -> tuple[Floats, Floats, Floats, Floats]:
    """Bounds of the interval, and both run lengths, for sizes and multiples that broadcast."""
    arl0, arl1 = laws.in_control(multiple), laws.after(size, multiple)
    low = np.full(arl1.shape, ends[0])
    high = np.full(arl1.shape, ends[1])
    if r.shortest_hours_between_false_alarms is not None:
        low = np.maximum(low, r.shortest_hours_between_false_alarms / arl0)
    if r.longest_ats_hours is not None:
        high = np.minimum(high, r.longest_ats_hours / arl1)
    return low, high, arl0, arl1


def _search(e: ProcessEconomics, r: Requirements, laws: _Laws) -> _Best:
    """Least cost of every size: a grid over the whole range, then windows that halve around the least.

    The interval is searched between its own bounds at each size and multiple, so that every requirement is
    an edge of the rectangle. The window moves with the least value, and may leave where it began.
    """
    sizes = np.arange(float(r.smallest_size), r.largest_size + 1.0)
    shortest = r.shortest_interval_hours or _SHORTEST * e.mean_hours_to_shift
    longest = r.longest_interval_hours or max(_LONGEST * e.mean_hours_to_shift, shortest)
    shortest = min(shortest, longest)
    lowest, highest = SMALLEST_MULTIPLE, LARGEST_MULTIPLE
    if r.smallest_in_control_arl is not None:
        lowest = max(lowest, -float(scipy.special.ndtri(0.5 / r.smallest_in_control_arl)))
    held = r.multiple is not None or laws.rules is not None
    if held:
        lowest = highest = laws.held
    width = highest - lowest

    def priced(u: Floats, t: Floats) -> Floats:
        """Cost at shares (s, …) of the ranges of multiple and log interval."""
        n = sizes.reshape(-1, *([1] * (u.ndim - 1)))
        low, high, arl0, arl1 = _intervals(r, laws, n, lowest + width * u, (shortest, longest))
        allowed = low <= high
        low = np.minimum(low, high)
        h = low * (high / low) ** t
        return np.where(allowed, _cycle(e, n, h, arl0, arl1).per_hour, np.inf)

    count = 1 if held else _GRID_MULTIPLES
    u0 = np.linspace(0.0, 1.0, count)
    t0 = np.linspace(0.0, 1.0, _GRID_INTERVALS)
    coarse = priced(u0[None, :, None], t0[None, None, :]).reshape(len(sizes), -1)
    first = np.argmin(coarse, axis=1)
    cost = np.take_along_axis(coarse, first[:, None], axis=1)[:, 0]
    u, t = u0[first // _GRID_INTERVALS], t0[first % _GRID_INTERVALS]
    half_u, half_t = (0.0 if held else 1.5 / (count - 1)), 1.5 / (_GRID_INTERVALS - 1)
    steps_u = np.zeros(1) if held else _ZOOM
    for _ in range(_ROUNDS):
        near_u = np.clip(u[:, None, None] + half_u * steps_u[None, :, None], 0.0, 1.0)
        near_t = np.clip(t[:, None, None] + half_t * _ZOOM[None, None, :], 0.0, 1.0)
        found = priced(near_u, near_t).reshape(len(sizes), -1)
        at = np.argmin(found, axis=1)
        value = np.take_along_axis(found, at[:, None], axis=1)[:, 0]
        better = value < cost
        cost = np.where(better, value, cost)
        u = np.where(better, np.take_along_axis(near_u[:, :, 0], at[:, None] // len(_ZOOM), axis=1)[:, 0], u)
        t = np.where(better, np.take_along_axis(near_t[:, 0, :], at[:, None] % len(_ZOOM), axis=1)[:, 0], t)
        half_u, half_t = 0.5 * half_u, 0.5 * half_t
    multiple = lowest + width * u
    low, high, _, _ = _intervals(r, laws, sizes, multiple, (shortest, longest))
    low = np.minimum(low, high)
    return _Best(sizes, low * (high / low) ** t, multiple, cost, shortest, longest, lowest)


def _plan(e: ProcessEconomics, laws: _Laws, size: int, interval: float, multiple: float) -> PricedPlan:
    n, h, k = (np.array(float(value)) for value in (size, interval, multiple))
    arl0, arl1 = float(laws.in_control(k)), float(laws.after(n, k))
    c = _cycle(e, n, h, np.array(arl0), np.array(arl1))
    hours = float(c.hours)

    def told(value: float, arl: float) -> float | None:
        return value if arl < _ARL_BEYOND else None

    return PricedPlan(
        size=size,
        interval_hours=interval,
        multiple=multiple,
        cost_per_hour=float(c.per_hour),
        parts=CostBreakdown(
            float(c.in_control) / hours,
            float(c.out_of_control) / hours,
            float(c.alarms) / hours,
            float(c.repair) / hours,
            float(c.sampling) / hours,
        ),
        pieces_per_hour=size / interval,
        in_control_arl=told(arl0, arl0),
        hours_between_false_alarms=told(arl0 * interval, arl0),
        out_of_control_arl=told(arl1, arl1),
        ats_hours=told(arl1 * interval, arl1),
        hours_out_of_control=told(float(c.hours_out), arl1),
        cycle_hours=told(hours, arl1),
        false_alarms_per_cycle=float(c.false_alarms),
    )


# ---------------------------------------------------------------------------------------------------
# What surrounds the optimum


def _edge(cost: Callable[[Floats], Floats], inside: float, outside: float, most: float) -> float | None:
    """Where the cost first passes ``most`` on the way from inside to outside; None if it does not."""
    for step in range(6):
        points = np.linspace(inside, outside, 257 if step == 0 else 33)
        over = cost(points) > most
        if step == 0 and not bool(over.any()):
            return None
        at = max(int(np.argmax(over)), 1)
        inside, outside = float(points[at - 1]), float(points[at])
    return 0.5 * (inside + outside)


def _flatness(
    e: ProcessEconomics, laws: _Laws, plan: PricedPlan, found: _Best, rise: float, held: bool
) -> Flatness:
    n = np.array(float(plan.size))
    k, h = np.array(plan.multiple), np.array(plan.interval_hours)
    arl0, arl1 = laws.in_control(k), laws.after(n, k)
    # A cost below zero cannot be: the parts are none of them negative.
    most = plan.cost_per_hour * (1.0 + rise)

    def along_interval(log_interval: Floats) -> Floats:
        return _cycle(e, n, np.exp(log_interval), arl0, arl1).per_hour

    def along_multiple(multiple: Floats) -> Floats:
        return _cycle(e, n, h, laws.in_control(multiple), laws.after(n, multiple)).per_hour

    middle = math.log(plan.interval_hours)
    ends = (
        math.log(min(found.shortest, plan.interval_hours)),
        math.log(max(found.longest, plan.interval_hours)),
    )
    short, long = (_edge(along_interval, middle, end, most) for end in ends)
    low = high = None
    if not held:
        low, high = (
            _edge(along_multiple, plan.multiple, end, most) for end in (SMALLEST_MULTIPLE, LARGEST_MULTIPLE)
        )
    within = found.size[found.cost <= most]
    return Flatness(
        rise=rise,
        shortest_interval_hours=None if short is None else math.exp(short),
        longest_interval_hours=None if long is None else math.exp(long),
        smallest_multiple=low,
        largest_multiple=high,
        smallest_size=int(within[0]),
        largest_size=int(within[-1]),
    )


def _surface(e: ProcessEconomics, laws: _Laws, plan: PricedPlan) -> CostSurface:
    h = plan.interval_hours * np.geomspace(0.25, 4.0, _SURFACE)
    low = max(plan.multiple - 1.0, SMALLEST_MULTIPLE)
    k = np.linspace(low, plan.multiple + 1.0, _SURFACE)
    n = np.array(float(plan.size))
    column = k[:, None]
    costs = _cycle(e, n, h, laws.in_control(column), laws.after(n, column)).per_hour
    return CostSurface(
        plan.size,
        tuple(h.tolist()),
        tuple(SurfaceRow(one, tuple(row)) for one, row in zip(k.tolist(), costs.tolist(), strict=True)),
    )


def _sensitivities(e: ProcessEconomics, laws: _Laws, plan: PricedPlan) -> tuple[Sensitivity, ...]:
    n, k, h = np.array(float(plan.size)), np.array(plan.multiple), np.array(plan.interval_hours)
    arl0 = laws.in_control(k)
    base = laws.after(n, k)

    def cost(changed: ProcessEconomics, arl1: Floats) -> float:
        return float(_cycle(changed, n, h, arl0, arl1).per_hour)

    found = []
    for entry in fields(e):
        name = entry.name
        value = getattr(e, name)
        if isinstance(value, bool) or value is None or name == "hours_until_noticed_without_chart":
            continue
        costs = []
        for factor in (1.0 - _STEP, 1.0 + _STEP, 1.1):
            changed = replace(e, **{name: value * factor})
            costs.append(cost(changed, laws.after(n, k, changed.shift) if name == "shift" else base))
        less, more, tenth = costs
        elasticity = (
            (math.log(more) - math.log(less)) / (math.log1p(_STEP) - math.log1p(-_STEP)) if value else 0.0
        )
        found.append(Sensitivity(name, float(value), elasticity, tenth))
    return tuple(sorted(found, key=lambda one: -abs(one.elasticity)))


# ---------------------------------------------------------------------------------------------------
# The design


def design(
    economics: ProcessEconomics,
    *,
    requirements: Requirements | None = None,
    present: SamplingPlan | None = None,
    rules: Sequence[Rule] | None = None,
) -> EconomicDesign:
    """The sampling plan of least expected cost an hour, with what surrounds it.

    requirements: bounds on the plan (an economic-statistical design, [saniga-1989]); present: the plan in
    use, to be priced beside it; rules: further rules, with which the limit multiple is held at the one
    required (3 if none is) and run lengths are those of a chart without history at the shift.
    Every size is tried; interval and multiple to about 1e-7 of their values. Raises UnusableParameter: a
    parameter out of its range (all of them at once), or ``requirements-not-met``.
    Source: [lorenzen-vance-1986]; [duncan-1956] for the search.
    """
    _check_economics(economics)
    requirements = Requirements() if requirements is None else requirements
    _check_requirements(requirements)
    given = None if rules is None else tuple(rules)
    held_at = 3.0 if requirements.multiple is None else requirements.multiple
    laws = _Laws(economics.shift, given, held_at)
    held = requirements.multiple is not None or given is not None
    if given is not None:
        _check_rules(given, held_at, requirements.largest_size - requirements.smallest_size + 1)
    _check_held(requirements, laws, held)
    if present is not None:
        _check_present(present, laws)
    found = _search(economics, requirements, laws)
    best = int(np.argmin(found.cost))
    if not math.isfinite(found.cost[best]):
        raise UnusableParameter.of(
            "requirements-not-met", _not_met(requirements, laws, found), "requirements"
        )
    plan = _plan(
        economics, laws, int(found.size[best]), float(found.interval[best]), float(found.multiple[best])
    )
    free = None
    if requirements != Requirements(multiple=requirements.multiple):
        # With rules each size needs a chain: no more of them are tried than were asked.
        nothing = Requirements(
            multiple=requirements.multiple,
            smallest_size=1 if given is None else requirements.smallest_size,
            largest_size=LARGEST_SIZE if given is None else requirements.largest_size,
        )
        free_found = _search(economics, nothing, laws)
        at = int(np.argmin(free_found.cost))
        free = _plan(
            economics,
            laws,
            int(free_found.size[at]),
            float(free_found.interval[at]),
            float(free_found.multiple[at]),
        )
    now = None
    if present is not None:
        now = _plan(
            economics,
            laws if given is None else replace(laws, held=present.multiple),
            present.size,
            present.interval_hours,
            present.multiple,
        )
    without = cost_without_chart(economics)
    worth = plan.cost_per_hour < without
    bounds = _at_bounds(plan, requirements, found, held)
    near = np.flatnonzero(found.cost <= plan.cost_per_hour * (1.0 + max(_WITHIN)))
    low, high = max(min(best - 10, int(near[0]) - 1), 0), max(best + 11, int(near[-1]) + 2)
    return EconomicDesign(
        best=plan,
        worth_while=worth,
        cost_per_hour_without_chart=without,
        conclusion=_conclusion(plan, without, now, bounds),
        at_bounds=bounds,
        without_requirements=free,
        price_of_requirements_per_hour=None
        if free is None
        else max(plan.cost_per_hour - free.cost_per_hour, 0.0),
        present=now,
        saving_per_hour=None if now is None else now.cost_per_hour - plan.cost_per_hour,
        by_size=tuple(
            SizeOptimum(int(n), h, k, c)
            for n, h, k, c in zip(
                found.size[low:high].tolist(),
                found.interval[low:high].tolist(),
                found.multiple[low:high].tolist(),
                found.cost[low:high].tolist(),
                strict=True,
            )
            if math.isfinite(c)
        ),
        flatness=tuple(_flatness(economics, laws, plan, found, rise, held) for rise in _WITHIN),
        surface=None if given is not None else _surface(economics, laws, plan),
        sensitivities=_sensitivities(economics, laws, plan),
        method="Cost an hour of Lorenzen & Vance (1986), every sample size tried, interval and limit multiple by a "
        "grid over their ranges and a narrowing search; "
        + (
            "run lengths in closed form."
            if given is None
            else "run lengths of the rules by an exact Markov chain, limit multiple held."
        ),
    )


def neighbourhood(
    economics: ProcessEconomics,
    found: EconomicDesign,
    *,
    requirements: Requirements | None = None,
    rules: Sequence[Rule] | None = None,
) -> Neighbourhood:
    """The cost around the plan of least cost, finely enough to draw.

    found: what ``design`` found for the same economics, requirements and rules. A present plan near enough
    to be compared lies within; one far away does not stretch the region beyond what can be read.
    """
    r = Requirements() if requirements is None else requirements
    best, now = found.best, found.present
    held = r.multiple is not None or rules is not None
    laws = _Laws(economics.shift, None if rules is None else tuple(rules), best.multiple)
    ratio, reach = 4.0, 1.0
    if now is not None:
        apart = now.interval_hours / best.interval_hours
        ratio = min(max(ratio, 1.3 * max(apart, 1 / apart)), _FARTHEST)
        reach = min(max(reach, 1.1 * abs(now.multiple - best.multiple)), LARGEST_MULTIPLE)
    h = best.interval_hours * np.geomspace(1 / ratio, ratio, _FINE)
    low, high = max(best.multiple - reach, SMALLEST_MULTIPLE), min(best.multiple + reach, LARGEST_MULTIPLE)
    k = np.array([best.multiple]) if held else np.linspace(low, high, _FINE)
    n, column = np.array(float(best.size)), k[:, None]
    shortest, longest, arl0, arl1 = _intervals(r, laws, n, column, (0.0, math.inf))
    shortest = np.maximum(shortest, r.shortest_interval_hours or 0.0)
    longest = np.minimum(longest, r.longest_interval_hours or math.inf)
    shortfall = np.full((len(k), len(h)), -1.0)
    for missed in (shortest / h, h / longest, (r.smallest_in_control_arl or 0.0) / arl0):
        shortfall = np.maximum(shortfall, np.log(np.maximum(missed, _NO_SHORTFALL)))
    return Neighbourhood(best.size, k, h, _cycle(economics, n, h, arl0, arl1).per_hour, shortfall)


def _at_bounds(plan: PricedPlan, r: Requirements, found: _Best, held: bool) -> tuple[str, ...]:
    near = 1.0 + 1e-6
    reached = []
    if plan.size == int(found.size[0]) and plan.size > 1:
        reached.append("smallest-size")
    if plan.size == int(found.size[-1]):
        reached.append("largest-size")
    if plan.interval_hours <= found.shortest * near:
        reached.append("shortest-interval")
    if plan.interval_hours * near >= found.longest:
        reached.append("longest-interval")
    if not held and plan.multiple <= found.lowest * near:
        reached.append("smallest-multiple" if r.smallest_in_control_arl is None else "in-control-run-length")
    if not held and plan.multiple * near >= LARGEST_MULTIPLE:
        reached.append("largest-multiple")
    between, most = plan.hours_between_false_alarms, r.longest_ats_hours
    if r.shortest_hours_between_false_alarms is not None and (
        between is not None and between <= r.shortest_hours_between_false_alarms * near
    ):
        reached.append("hours-between-false-alarms")
    if most is not None and plan.ats_hours is not None and plan.ats_hours * near >= most:
        reached.append("time-to-signal")
    return tuple(reached)


def _conclusion(plan: PricedPlan, without: float, now: PricedPlan | None, bounds: tuple[str, ...]) -> str:
    if plan.cost_per_hour < without:
        text = (
            f"Measure {plan.size} piece{'s'[: plan.size > 1]} every {plan.interval_hours:.3g} hours with limits "
            f"at {plan.multiple:.3g} sigma: {plan.cost_per_hour:.6g} an hour, against {without:.6g} without a chart."
        )
    else:
        text = (
            f"No plan that meets the requirements costs less than the {without:.6g} an hour without a chart; the "
            f"best costs {plan.cost_per_hour:.6g}. By these figures sampling is not worth while."
        )
    if bounds:
        text += f" The best plan lies at a bound ({', '.join(bounds)})."
    if now is not None:
        more = now.cost_per_hour - plan.cost_per_hour
        way = "more" if more >= 0 else "less"
        text += f" The present plan costs {now.cost_per_hour:.6g} an hour, {abs(more):.4g} {way} than it."
    return text


# ---------------------------------------------------------------------------------------------------
# Ranges


_COSTS = (
    "cost_per_hour_in_control",
    "cost_per_hour_out_of_control",
    "false_alarm_cost",
    "repair_cost",
    "cost_per_sample",
    "cost_per_piece",
)
_HOURS = ("hours_per_piece", "hours_to_search_false_alarm", "hours_to_find_cause", "hours_to_repair")


def _check_economics(e: ProcessEconomics) -> None:
    faults = []

    def check(name: str, value: float, low: float, high: float) -> None:
        if not low <= value <= high:
            faults.append(
                Fault(
                    "out-of-range", f"{name} must be from {low:g} to {high:g}; it is {value:.15g}.", (name,)
                )
            )

    check("mean_hours_to_shift", e.mean_hours_to_shift, SHORTEST_MEAN, LONGEST_MEAN)
    if not SMALLEST_SHIFT <= abs(e.shift) <= LARGEST_SHIFT:
        faults.append(
            Fault(
                "out-of-range",
                f"shift must be {SMALLEST_SHIFT:g} to {LARGEST_SHIFT:g} process sigma, up or down; it is {e.shift:g}.",
                ("shift",),
            )
        )
    for name in _COSTS:
        check(name, getattr(e, name), 0.0, LARGEST_COST)
    for name in _HOURS:
        check(name, getattr(e, name), 0.0, LONGEST_HOURS)
    if e.hours_until_noticed_without_chart is not None:
        check(
            "hours_until_noticed_without_chart",
            e.hours_until_noticed_without_chart,
            0.0,
            100.0 * LONGEST_MEAN,
        )
    if not faults and not e.cost_per_hour_out_of_control > e.cost_per_hour_in_control:
        faults.append(
            Fault(
                "shift-costs-nothing",
                "An hour out of control must cost more than one in control; otherwise there is nothing for a "
                "chart to save.",
                ("cost_per_hour_out_of_control",),
            )
        )
    if faults:
        raise UnusableParameter(*faults)


def _check_requirements(r: Requirements) -> None:
    faults = []

    def check(name: str, value: float | None, low: float, high: float) -> None:
        if value is not None and not low <= value <= high:
            faults.append(
                Fault(
                    "out-of-range",
                    f"{name} must be from {low:g} to {high:g}; it is {value:.15g}.",
                    ("requirements", name),
                )
            )

    check("smallest_in_control_arl", r.smallest_in_control_arl, 1.1, 1e8)
    check("shortest_hours_between_false_alarms", r.shortest_hours_between_false_alarms, 1e-6, 1e12)
    check("longest_ats_hours", r.longest_ats_hours, 1e-6, 1e12)
    check("smallest_size", r.smallest_size, 1, LARGEST_SIZE)
    check("largest_size", r.largest_size, 1, LARGEST_SIZE)
    check("shortest_interval_hours", r.shortest_interval_hours, 1e-6, LONGEST_HOURS)
    check("longest_interval_hours", r.longest_interval_hours, 1e-6, LONGEST_HOURS)
    check("multiple", r.multiple, SMALLEST_MULTIPLE, LARGEST_MULTIPLE)
    for low, high, name in (
        (r.smallest_size, r.largest_size, "largest_size"),
        (r.shortest_interval_hours, r.longest_interval_hours, "longest_interval_hours"),
    ):
        if low is not None and high is not None and low > high:
            faults.append(
                Fault(
                    "bounds-out-of-order",
                    f"{name} must not lie below its counterpart.",
                    ("requirements", name),
                )
            )
    if faults:
        raise UnusableParameter(*faults)


def _check_rules(rules: tuple[Rule, ...], held: float, sizes: int) -> None:
    """Refuse rules whose chains, one for each size, would take too long."""
    acting = [rule for rule in watched(rules) if rule.severity == "action"]
    if any(rule.distance is None for rule in acting):
        raise UnusableParameter.of(
            "rules-on-order",
            "Rules on the order of points (trend, alternation) are not taken into an economic design.",
            "rules",
        )
    lines = {sign * rule.distance for rule in acting if rule.distance is not None for sign in (-1.0, 1.0)}
    cuts = np.array(sorted({-held, held} | {line for line in lines if abs(line) < held}))
    z = 0.5 * (cuts[1:] + cuts[:-1])
    seen = tuple(watch for watch in watches(tuple(acting), z) if watch.k > 1)
    work = compile_watches(seen, len(z)).states * len(z) if seen else 0
    if work * sizes > _MOST_WORK:
        raise UnusableParameter.of(
            "too-much-work",
            f"With these rules at most {max(_MOST_WORK // work, 0)} sizes can be tried; {sizes} were asked. Use fewer "
            "sizes, or simpler rules.",
            "requirements",
            "largest_size",
        )


def _check_held(r: Requirements, laws: _Laws, held: bool) -> None:
    if not held or r.smallest_in_control_arl is None:
        return
    arl = float(laws.in_control(np.array(laws.held)))
    if arl < r.smallest_in_control_arl * (1.0 - 1e-9):
        raise UnusableParameter.of(
            "requirements-not-met",
            f"With the limits held at {laws.held:g} sigma the in-control run length is {arl:.6g}, less than the "
            f"{r.smallest_in_control_arl:g} required.",
            "requirements",
            "smallest_in_control_arl",
        )


def _check_present(present: SamplingPlan, laws: _Laws) -> None:
    for name, value, low, high in (
        ("size", present.size, 1, 1000),
        ("interval_hours", present.interval_hours, 1e-6, LONGEST_HOURS),
        ("multiple", present.multiple, SMALLEST_MULTIPLE, 8.0),
    ):
        if not low <= value <= high:
            raise UnusableParameter.of(
                "out-of-range",
                f"{name} must be from {low:g} to {high:g}; it is {value:.15g}.",
                "present",
                name,
            )


def _not_met(r: Requirements, laws: _Laws, found: _Best) -> str:
    """What the tightest plan reaches, where no plan reaches what is required."""
    multiples = np.linspace(found.lowest, LARGEST_MULTIPLE, 200)
    if laws.rules is not None or r.multiple is not None:
        multiples = np.array([laws.held])
    sizes = found.size[:, None]
    low, _, _, arl1 = _intervals(
        replace(r, longest_ats_hours=None), laws, sizes, multiples[None, :], (found.shortest, found.longest)
    )
    times = np.where(low <= found.longest, low * arl1, np.inf)
    least = float(times.min())
    if not math.isfinite(least):
        return (
            "No interval up to the longest one keeps false alarms as rare as required; allow a longer interval or "
            "a larger limit multiple."
        )
    return (
        f"No plan meets all that is required: with the other requirements met, the average time to signal is "
        f"{least:.6g} hours at the least, and {r.longest_ats_hours:g} was asked."
    )
