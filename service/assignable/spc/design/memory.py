"""Designs of EWMA and CUSUM charts: limits for a stated in-control run length, and the best charts.

Everything is in sigma units of the plotted statistic, with the in-control mean and sigma known; the run
lengths are those of :mod:`assignable.spc.runlength.memory`. The in-control average run length a design
is held to is the zero-state one (from the start of the chart, head start included) in every case.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, Literal

import scipy

from assignable.spc.errors import UnusableParameter
from assignable.spc.runlength import memory as run

State = Literal["zero-state", "steady-state"]
Limits = Literal["asymptotic", "time-varying"]
Bound = Literal["lowest", "highest"]

LOWEST_ARL, HIGHEST_ARL = 2.0, 1e9
SMALLEST_SHIFT = 0.05
MOST_SHIFTS = 40

# Searches: relative agreement of the run length with its target; of log λ or k with the optimum, which
# is flat there, so that the run length itself is at its least to about the square of this.
_TARGET_AGREEMENT = 1e-11
_OPTIMUM_WIDTH = 2e-5
_ROUNDS = 60
_SMALLEST_SHARE = 0.25
_NEIGHBOURS = (0.5, 0.8, 1.25, 2.0)
_TABLE = (0.5, 0.75, 1.0, 1.5, 2.0, 3.0)


@dataclass(frozen=True, slots=True)
class MemoryPerformance:
    """What a chart does at one shift.

    ``ats_hours``: for zero-state, ``arl`` intervals [montgomery-2013]; for steady-state, ``steady_state_arl - ½``
    intervals, the shift falling anywhere between two points [reynolds-1988].
    """

    shift: Annotated[float, "Shift of the mean, in standard deviations of the plotted statistic."]
    arl: Annotated[float, "Points until the signal on average, for a shift that is there from the start."]
    sd: Annotated[float, "Standard deviation of that number of points."]
    steady_state_arl: Annotated[
        float | None,
        "The same average for a shift that comes once the chart has run for long; null where not asked.",
    ]
    ats_hours: Annotated[
        float | None,
        "Average hours to the signal in the state asked; null without an interval or a run length.",
    ]


@dataclass(frozen=True, slots=True)
class EwmaNeighbour:
    """An EWMA with another smoothing constant at the same in-control run length."""

    smoothing: Annotated[float, "Its smoothing constant, lambda."]
    limit: Annotated[float, "Its limits, in the kind that was asked."]
    arl: Annotated[float, "Average run length at the shift to detect."]
    excess: Annotated[float, "That over the optimum's, less 1."]


@dataclass(frozen=True, slots=True)
class CusumNeighbour:
    """A CUSUM with another reference value at the same in-control run length."""

    reference: Annotated[float, "Its reference value k, in sigma."]
    decision: Annotated[float, "Its decision interval h, in sigma."]
    arl: Annotated[float, "Average run length at the shift to detect."]
    excess: Annotated[float, "That over the optimum's, less 1."]


@dataclass(frozen=True, slots=True)
class EwmaDesign:
    """The EWMA that finds the shift soonest at the in-control run length asked."""

    smoothing: Annotated[float, "Weight of the latest point, lambda."]
    at_bound: Annotated[
        Bound | None,
        "Which end of the range of lambda the least was at, so that it is no optimum of its own; else null.",
    ]
    limit: Annotated[float, "Where the limits lie, of the kind that `limits` says."]
    limits: Annotated[
        Limits, "Whether they follow the statistic's own growing standard deviation or its last one."
    ]
    two_sided: Annotated[bool, "Whether both directions are watched."]
    state: Annotated[
        State, "Whether the shift is there from the start or comes once the chart has run for long."
    ]
    shift: Annotated[float, "Shift to detect, in standard deviations of the plotted statistic."]
    in_control_arl: Annotated[float, "Points between false alarms, on average."]
    arl: Annotated[float, "Points until the signal at that shift on average, in the state asked."]
    out_of_control: Annotated[tuple[MemoryPerformance, ...], "What it does at each shift asked."]
    neighbours: Annotated[
        tuple[EwmaNeighbour, ...], "What other choices at the same in-control run length would cost."
    ]
    shewhart_limit: Annotated[
        float, "Limits of the chart without memory that has the same in-control run length, in sigma."
    ]
    shewhart: Annotated[tuple[MemoryPerformance, ...], "What that chart does at the same shifts."]


@dataclass(frozen=True, slots=True)
class CusumDesign:
    """The CUSUM that finds the shift soonest at the in-control run length asked.

    ``at_bound``: ``lowest`` is the least k sought, or where h reaches 50.
    """

    reference: Annotated[float, "Reference value k, in sigma."]
    at_bound: Annotated[
        Bound | None,
        "Which end of the range of k the least was at, so that it is no optimum of its own; else null.",
    ]
    decision: Annotated[float, "Decision interval h, in sigma."]
    head_start: Annotated[float, "Where the sums start, in sigma."]
    sides: Annotated[run.Sides, "Which directions are watched."]
    state: Annotated[
        State, "Whether the shift is there from the start or comes once the chart has run for long."
    ]
    shift: Annotated[float, "Shift to detect, in standard deviations of the plotted statistic."]
    in_control_arl: Annotated[float, "Points between false alarms, on average."]
    arl: Annotated[float, "Points until the signal at that shift on average, in the state asked."]
    out_of_control: Annotated[tuple[MemoryPerformance, ...], "What it does at each shift asked."]
    neighbours: Annotated[
        tuple[CusumNeighbour, ...], "What other choices at the same in-control run length would cost."
    ]
    shewhart_limit: Annotated[
        float, "Limits of the chart without memory that has the same in-control run length, in sigma."
    ]
    shewhart: Annotated[tuple[MemoryPerformance, ...], "What that chart does at the same shifts."]


# --- searches -----------------------------------------------------------------------------------------


def _solve(log_ratio: Callable[[float], float], start: float, low: float, high: float) -> float | None:
    """Where an increasing ``log_ratio`` is zero in [low, high]: secant steps kept in a bracket, or None."""
    x = min(max(start, low), high)
    below, above = low, high
    before: tuple[float, float] | None = None
    for _ in range(_ROUNDS):
        value = log_ratio(x)
        if abs(value) < _TARGET_AGREEMENT:
            return x
        if (value < 0.0 and x >= high) or (value > 0.0 and x <= low):
            return None
        if value < 0.0:
            below = x
        else:
            above = x
        step = x + math.copysign(0.02 * x + 1e-4, -value)
        if before is not None:
            slope = (value - before[1]) / (x - before[0])
            step = x - value / slope if slope > 0.0 else 0.5 * (below + above)
        before = (x, value)
        if not below < step < above:
            # A bound not yet tried is tried itself, so that a target beyond it is noticed.
            untried = (step >= above == high) or (step <= below == low)
            step = min(max(step, low), high) if untried else 0.5 * (below + above)
        if step == x:
            return x if abs(value) < 10.0 * _TARGET_AGREEMENT else None
        x = step
    return None


def _or_none(cost: Callable[[float], float]) -> Callable[[float], float]:
    """``cost``, infinite where no chart has the in-control run length asked for."""

    def guarded(at: float) -> float:
        try:
            return cost(at)
        except UnusableParameter:
            return math.inf

    return guarded


def _least(
    cost: Callable[[float], float], guess: float, step: float, low: float, high: float
) -> tuple[float, float]:
    """The minimum of ``cost`` nearest downhill from ``guess`` in [low, high]: a walk, then golden section.

    From an infinite cost the walk first goes up, then down, to where it is finite.
    """
    cost = _or_none(cost)
    middle = min(max(guess, low), high)
    at = cost(middle)
    aim = step
    while math.isinf(at):
        if middle == high:
            aim = -step
        elif middle == low and aim < 0.0:
            break
        middle = min(max(middle + aim, low), high)
        at = cost(middle)
    if math.isinf(at):
        raise UnusableParameter.of(
            "no-such-design",
            "No chart of this kind has the in-control average run length asked for.",
            "in_control_arl",
        )
    left, right = max(middle - step, low), min(middle + step, high)
    at_left = cost(left) if left < middle else math.inf
    at_right = cost(right) if right > middle else math.inf
    while at_left < at:
        right, middle, at = middle, left, at_left
        left = max(middle - step, low)
        at_left = cost(left) if left < middle else math.inf
    while at_right < at:
        left, middle, at = middle, right, at_right
        right = min(middle + step, high)
        at_right = cost(right) if right > middle else math.inf
    if middle in (low, high):
        inward = middle + _OPTIMUM_WIDTH * (1.0 if middle == low else -1.0)
        if cost(inward) >= at:
            return middle, at
    golden = 0.5 * (3.0 - math.sqrt(5.0))
    while right - left > _OPTIMUM_WIDTH:
        wider_left = middle - left > right - middle
        probe = middle - golden * (middle - left) if wider_left else middle + golden * (right - middle)
        value = cost(probe)
        if value < at:
            if wider_left:
                right = middle
            else:
                left = middle
            middle, at = probe, value
        elif wider_left:
            left = probe
        else:
            right = probe
    return middle, at


def _extrapolated(known: dict[float, float], at: float) -> float | None:
    """A starting value at ``at``: the line, in logs, through the two nearest known; None if none is near."""
    nearest = sorted(known, key=lambda x: abs(math.log(x / at)))[:2]
    if not nearest or abs(math.log(nearest[0] / at)) > 0.5:
        return None
    first = nearest[0]
    if len(nearest) == 1:
        return known[first]
    second = nearest[1]
    slope = math.log(known[second] / known[first]) / math.log(second / first)
    return known[first] * math.exp(slope * math.log(at / first))


# --- parameters ---------------------------------------------------------------------------------------


def _within(value: float, name: str, low: float, high: float) -> float:
    number = float(value)
    if not low <= number <= high:
        raise UnusableParameter.of(
            "out-of-range", f"{name} must be from {low:g} to {high:g}; it is {number:.15g}.", name
        )
    return number


def _target(in_control_arl: float) -> float:
    return _within(in_control_arl, "in_control_arl", LOWEST_ARL, HIGHEST_ARL)


def _checked_state(state: State) -> None:
    if state not in ("zero-state", "steady-state"):
        raise UnusableParameter.of("out-of-range", "state must be zero-state or steady-state.", "state")


def _checked_table(shift: float, shifts: tuple[float, ...] | None) -> tuple[float, ...]:
    if shifts is None:
        return tuple(sorted({0.0, *(min(factor * shift, run.LARGEST_SHIFT) for factor in _TABLE)}))
    if len(shifts) > MOST_SHIFTS:
        raise UnusableParameter.of(
            "out-of-range", f"shifts may hold at most {MOST_SHIFTS} values; it holds {len(shifts)}.", "shifts"
        )
    for index, value in enumerate(shifts):
        if not -run.LARGEST_SHIFT <= value <= run.LARGEST_SHIFT:
            raise UnusableParameter.of(
                "out-of-range",
                f"Each of shifts must be from {-run.LARGEST_SHIFT:g} to {run.LARGEST_SHIFT:g}; one is {value:g}.",
                "shifts",
                index,
            )
    return tuple(float(value) for value in shifts)


def _checked_interval(interval_hours: float | None) -> float | None:
    if interval_hours is None:
        return None
    if not 0.0 < interval_hours < math.inf:
        raise UnusableParameter.of(
            "out-of-range", "interval_hours must be a time greater than 0.", "interval_hours"
        )
    return float(interval_hours)


def _performance(
    shift: float, length: run.MemoryRunLength, state: State, interval_hours: float | None
) -> MemoryPerformance:
    points: float | None = length.arl
    if state == "steady-state":
        points = None if length.steady_state_arl is None else length.steady_state_arl - 0.5
    hours = None if points is None or interval_hours is None else points * interval_hours
    return MemoryPerformance(shift, length.arl, length.sd, length.steady_state_arl, hours)


def _reachable(
    shifts: tuple[float, ...], length: Callable[[float], run.MemoryRunLength]
) -> list[tuple[float, run.MemoryRunLength]]:
    """The table's rows, without the shifts at which the chart practically never signals."""
    rows = []
    for shift in shifts:
        try:
            rows.append((shift, length(shift)))
        except UnusableParameter as fault:
            if fault.faults[0].code != "run-length-beyond-reach":
                raise
    return rows


def _shewhart(
    target: float, two_sided: bool, shifts: tuple[float, ...], state: State, interval_hours: float | None
) -> tuple[float, tuple[MemoryPerformance, ...]]:
    limit = -float(scipy.special.ndtri((0.5 if two_sided else 1.0) / target))

    def length(shift: float) -> run.MemoryRunLength:
        return run.ewma(smoothing=1.0, limit=limit, shift=shift, two_sided=two_sided)

    if not two_sided and limit <= 0.0:
        return limit, ()
    return limit, tuple(
        _performance(shift, found, state, interval_hours) for shift, found in _reachable(shifts, length)
    )


# --- EWMA ---------------------------------------------------------------------------------------------


def _ewma_limit(
    smoothing: float, target: float, time_varying: bool, two_sided: bool, start: float | None = None
) -> float:
    shewhart = -float(scipy.special.ndtri((0.5 if two_sided else 1.0) / target))
    if smoothing == 1.0 and shewhart > 0.0:
        return shewhart
    log_target = math.log(target)
    mean = run._ewma_growing_mean if time_varying else run._ewma_mean

    def log_ratio(limit: float) -> float:
        chart = run._Ewma(smoothing, limit, 0.0, 1.0, two_sided, 0.0)
        try:
            return math.log(mean(chart)) - log_target
        except UnusableParameter:
            return math.log(run.LONGEST_ARL) - log_target

    if start is None:
        # The EWMA's own limit is below the single point's, the more so the longer its memory.
        start = max(shewhart * (1.0 - 0.35 * (1.0 - smoothing) ** 8), 0.1)
        if time_varying:
            start = _ewma_limit(smoothing, target, False, two_sided)
    found = _solve(log_ratio, start, 1e-3, run.LARGEST_LIMIT)
    if found is None:
        raise UnusableParameter.of(
            "no-such-design",
            f"No limit from 0.001 to {run.LARGEST_LIMIT:g} gives an in-control average run length of {target:g} "
            f"with a smoothing constant of {smoothing:g}.",
            "in_control_arl",
        )
    return found


@lru_cache(maxsize=512)
def ewma_limit(
    *, smoothing: float, in_control_arl: float, time_varying: bool = False, two_sided: bool = True
) -> float:
    """The limit L at which an EWMA has the stated in-control ARL, to 1e-10 of the ARL.

    ``smoothing``: 0.005 to 1; ``in_control_arl``: points, 2 to 1e9. With ``time_varying`` the limit
    multiplies the exact standard deviation of each point, otherwise the asymptotic one: two different
    numbers. Raises :class:`UnusableParameter` outside these ranges, or where no limit up to 6 does it.
    Source: run lengths after [crowder-1987]; tables of such limits in [lucas-saccucci-1990].
    """
    smoothing = _within(smoothing, "smoothing", run.SMALLEST_SMOOTHING, 1.0)
    return _ewma_limit(smoothing, _target(in_control_arl), time_varying, two_sided)


@lru_cache(maxsize=128)
def optimal_ewma(
    *,
    shift: float,
    in_control_arl: float,
    state: State = "zero-state",
    time_varying: bool = False,
    two_sided: bool = True,
    interval_hours: float | None = None,
    shifts: tuple[float, ...] | None = None,
    smallest_smoothing: float = run.SMALLEST_SMOOTHING,
) -> EwmaDesign:
    """The EWMA with the least ARL at ``shift`` for a stated in-control ARL [crowder-1989], [lucas-saccucci-1990].

    ``shift``: sigma units of the plotted statistic, 0.05 to 10; ``state`` says which ARL at the shift is
    made least, from the start of the chart or from steady state; ``shifts`` are the rows of the table
    (multiples of the design shift unless given). λ is sought from ``smallest_smoothing`` (0.005 or more) to
    1. Time-varying limits with zero-state reward ever smaller λ, the in-control ARL then being an average
    of very early and very late false alarms: ``at_bound`` tells. Raises :class:`UnusableParameter` outside
    these ranges.
    """
    shift = _within(shift, "shift", SMALLEST_SHIFT, run.LARGEST_SHIFT)
    target = _target(in_control_arl)
    smallest = _within(smallest_smoothing, "smallest_smoothing", run.SMALLEST_SMOOTHING, 1.0)
    _checked_state(state)
    interval_hours = _checked_interval(interval_hours)
    table = _checked_table(shift, shifts)
    limits: dict[float, float] = {}

    def limit_for(smoothing: float) -> float:
        if smoothing not in limits:
            start = _extrapolated(limits, smoothing)
            limits[smoothing] = _ewma_limit(smoothing, target, time_varying, two_sided, start)
        return limits[smoothing]

    def arl(smoothing: float) -> float:
        chart = run._Ewma(smoothing, limit_for(smoothing), shift, 1.0, two_sided, 0.0)
        if state == "steady-state":
            return run._steady_ewma_mean(chart)
        return run._ewma_growing_mean(chart) if time_varying else run._ewma_mean(chart)

    def cost(log_smoothing: float) -> float:
        return arl(min(max(math.exp(log_smoothing), smallest), 1.0))

    lowest = math.log(smallest)
    guess = math.log(0.15) + 1.4 * math.log(shift) - 0.2 * math.log(target / 500.0)
    log_best, least = _least(
        cost, guess, 0.8 if time_varying and state == "zero-state" else 0.35, lowest, 0.0
    )
    at_bound: Bound | None = "lowest" if log_best == lowest else "highest" if log_best == 0.0 else None
    best = {"lowest": smallest, "highest": 1.0, None: math.exp(log_best)}[at_bound]
    limit = limit_for(best)

    def length(at: float) -> run.MemoryRunLength:
        return run.ewma(smoothing=best, limit=limit, shift=at, two_sided=two_sided, time_varying=time_varying)

    neighbours = []
    for factor in _NEIGHBOURS:
        smoothing = factor * best
        if smallest <= smoothing <= 1.0 and math.isfinite(found := _or_none(arl)(smoothing)):
            neighbours.append(EwmaNeighbour(smoothing, limit_for(smoothing), found, found / least - 1.0))
    shewhart_limit, shewhart = _shewhart(target, two_sided, table, state, interval_hours)
    return EwmaDesign(
        smoothing=best,
        at_bound=at_bound,
        limit=limit,
        limits="time-varying" if time_varying else "asymptotic",
        two_sided=two_sided,
        state=state,
        shift=shift,
        in_control_arl=length(0.0).arl,
        arl=least,
        out_of_control=tuple(
            _performance(at, found, state, interval_hours) for at, found in _reachable(table, length)
        ),
        neighbours=tuple(neighbours),
        shewhart_limit=shewhart_limit,
        shewhart=shewhart,
    )


# --- CUSUM --------------------------------------------------------------------------------------------


def _siegmund_decision(reference: float, one_sided_arl: float) -> float:
    """Starting value: the decision interval by Siegmund's approximation of the ARL [siegmund-1985]."""
    if reference < 0.02:
        return max(math.sqrt(one_sided_arl) - 1.166, 0.1)
    goal = math.log(2.0 * reference * reference * one_sided_arl + 1.0)
    width = goal
    for _ in range(4):
        width = math.log(math.exp(goal) + width)
    return max(width / (2.0 * reference) - 1.166, 0.05)


def _cusum_decision(
    reference: float, target: float, sides: run.Sides, fraction: float, start: float | None = None
) -> float:
    log_target = math.log(target)
    # In control the two directions are alike.
    direction: run.Sides = "two" if sides == "two" else "upper"

    def log_ratio(decision: float) -> float:
        try:
            mean = run._cusum_mean(reference, decision, 0.0, direction, fraction * decision)
        except UnusableParameter:
            return math.log(run.LONGEST_ARL) - log_target
        return math.log(mean) - log_target

    if start is None:
        start = _siegmund_decision(reference, target * (2.0 if sides == "two" else 1.0))
    found = _solve(log_ratio, start, 1e-6, run.LARGEST_DECISION)
    if found is None:
        at_least = 1.0 / ((2.0 if sides == "two" else 1.0) * float(scipy.special.ndtr(-reference)))
        detail = (
            f"With a reference value of {reference:g} every chart has an in-control average run length of "
            f"{at_least:.6g} or more; {target:g} needs a smaller one."
            if at_least >= target
            else f"An in-control average run length of {target:g} with a reference value of {reference:g} needs "
            f"a decision interval above {run.LARGEST_DECISION:g}; choose a larger reference value."
        )
        raise UnusableParameter.of("no-such-design", detail, "reference")
    return found


def _checked_sides(sides: run.Sides, head_start_fraction: float) -> float:
    if sides not in ("two", "upper", "lower"):
        raise UnusableParameter.of("out-of-range", "sides must be two, upper or lower.", "sides")
    highest = 0.5 if sides == "two" else 0.95
    return _within(head_start_fraction, "head_start_fraction", 0.0, highest)


@lru_cache(maxsize=512)
def cusum_decision(
    *, reference: float, in_control_arl: float, sides: run.Sides = "two", head_start_fraction: float = 0.0
) -> float:
    """The decision interval h at which a CUSUM has the stated in-control ARL, to 1e-10 of the ARL.

    ``reference``: k, 0 to 5 sigma; ``in_control_arl``: points, 2 to 1e9, of the chart as a whole;
    ``head_start_fraction``: head start over h (0 to 0.5 with two sides, to 0.95 with one). Raises
    :class:`UnusableParameter` outside these ranges, or where no h up to 50 does it.
    """
    reference = _within(reference, "reference", 0.0, run.LARGEST_REFERENCE)
    fraction = _checked_sides(sides, head_start_fraction)
    return _cusum_decision(reference, _target(in_control_arl), sides, fraction)


@lru_cache(maxsize=128)
def optimal_cusum(
    *,
    shift: float,
    in_control_arl: float,
    sides: run.Sides = "two",
    head_start_fraction: float = 0.0,
    state: State = "zero-state",
    interval_hours: float | None = None,
    shifts: tuple[float, ...] | None = None,
    smallest_reference: float | None = None,
) -> CusumDesign:
    """The CUSUM with the least ARL at ``shift`` for a stated in-control ARL.

    ``shift``: its size in sigma units of the plotted statistic, 0.05 to 10 (downwards for the lower side);
    the table's ``shifts`` carry their own sign. ``state`` as for :func:`optimal_ewma`. From zero and with
    one side the answer is k = shift/2 exactly [moustakides-1986]; with two sides, a head start or from
    steady state it is near that. k is sought from ``smallest_reference`` up (shift/4 unless given; 0.001 or
    more): two sides with a much smaller k need far longer than their in-control ARL to reach the conditional
    steady state, so that its ARL says nothing there. Raises :class:`UnusableParameter` outside these ranges.
    """
    shift = _within(shift, "shift", SMALLEST_SHIFT, run.LARGEST_SHIFT)
    target = _target(in_control_arl)
    fraction = _checked_sides(sides, head_start_fraction)
    _checked_state(state)
    interval_hours = _checked_interval(interval_hours)
    table = _checked_table(shift, shifts)
    toward = -shift if sides == "lower" else shift
    if shifts is None and sides == "lower":
        table = tuple(0.0 - at for at in table)
    decisions: dict[float, float] = {}

    def decision_for(reference: float) -> float:
        if reference not in decisions:
            start = _extrapolated(decisions, reference)
            decisions[reference] = _cusum_decision(reference, target, sides, fraction, start)
        return decisions[reference]

    def arl(reference: float) -> float:
        decision = decision_for(reference)
        if state == "steady-state":
            return run._steady_cusum_mean(reference, decision, toward, sides)
        return run._cusum_mean(reference, decision, toward, sides, fraction * decision)

    # Beyond the highest reference value even a decision interval of zero runs too long in control.
    highest = -float(scipy.special.ndtri(1.0 / (target * (2.0 if sides == "two" else 1.0))))
    highest = min(highest - 1e-3 * abs(highest) - 1e-4, run.LARGEST_REFERENCE)
    lowest = min(_SMALLEST_SHARE * shift, 0.5 * highest)
    if smallest_reference is not None:
        lowest = _within(smallest_reference, "smallest_reference", 1e-3, run.LARGEST_REFERENCE)
    if highest <= max(lowest, 0.0):
        raise UnusableParameter.of(
            "no-such-design",
            f"An in-control average run length of {target:g} is too short for a CUSUM with these sides and a "
            f"reference value of {max(lowest, 0.0):g} or more.",
            "in_control_arl",
        )
    best, least = _least(arl, 0.5 * shift, max(0.1 * shift, 0.02), lowest, highest)
    decision = decision_for(best)
    at_bound: Bound | None = None
    if best <= lowest or decision > 0.999 * run.LARGEST_DECISION:
        at_bound = "lowest"
    elif best >= highest:
        at_bound = "highest"

    def length(at: float) -> run.MemoryRunLength:
        return run.cusum(
            reference=best, decision=decision, shift=at, sides=sides, head_start=fraction * decision
        )

    neighbours = []
    for factor in _NEIGHBOURS:
        reference = factor * best
        if lowest <= reference <= highest and math.isfinite(found := _or_none(arl)(reference)):
            neighbours.append(CusumNeighbour(reference, decision_for(reference), found, found / least - 1.0))
    shewhart_limit, shewhart = _shewhart(
        target,
        sides == "two",
        tuple(0.0 - at for at in table) if sides == "lower" else table,
        state,
        interval_hours,
    )
    return CusumDesign(
        reference=best,
        at_bound=at_bound,
        decision=decision,
        head_start=fraction * decision,
        sides=sides,
        state=state,
        shift=shift,
        in_control_arl=length(0.0).arl,
        arl=least,
        out_of_control=tuple(
            _performance(at, found, state, interval_hours) for at, found in _reachable(table, length)
        ),
        neighbours=tuple(neighbours),
        shewhart_limit=shewhart_limit,
        shewhart=shewhart,
    )
