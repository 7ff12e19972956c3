"""Design of a chart of means: how many pieces, how often, and what that detects.

The mean and sigma of the process are taken as known, values as independent and normal; a shift is one of
the mean, in process sigma, with sigma unchanged. A point signals when it lies beyond the limits at
``multiple`` standard deviations of the mean; with rules, the first of them counts.

Two conventions for the time to signal, by the moment at which the shift comes (``ShiftMoment``):

* ``after-sample``: just after a sample was taken, the worst moment: ATS = h·ARL [montgomery-2013].
* ``random``: at a moment uniform over the interval, on average half an interval before the next sample:
  ATS = h·(ARL - 1/2) [reynolds-1988].
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from ..cautions import Caution
from ..data import Booleans, Floats
from ..errors import UnusableParameter
from ..rules import Rule
from ..runlength.of_rules import shewhart_law
from ..runlength.survival import MOST_OPERATIONS, Allowance

ShiftMoment: TypeAlias = Literal["after-sample", "random"]

LARGEST_SIZE = 1000
MOST_SHIFTS = 1000
MOST_SHIFTS_WITH_RULES = 50
MOST_PLANS = 1000
LARGEST_SHIFT = 100.0
SMALLEST_SHIFT = 0.01
SMALLEST_MULTIPLE = 0.1
LARGEST_MULTIPLE = 8.0
_SHORTEST_HOURS = 1e-6
_LONGEST_HOURS = 1e6
_SAME_RATE = 1e-3


RULES_LEFT_OUT = Caution(
    "rules-not-in-plan",
    "The plan was sought, and the candidates ranked, by the limits alone; the run rules are in the operating "
    "characteristics, which show how much sooner they find a shift and how many more false alarms they give.",
    ("rules",),
    "champ-woodall-1987",
)


@dataclass(frozen=True, slots=True)
class SamplingPlan:
    """``size`` pieces every ``interval_hours``, with limits at ``multiple`` sigma of their mean."""

    size: int
    interval_hours: float
    multiple: float = 3.0

    @property
    def pieces_per_hour(self) -> float:
        """What the plan costs in pieces measured."""
        return self.size / self.interval_hours


@dataclass(frozen=True, slots=True, eq=False)
class OperatingCharacteristics:
    """What one sampling plan detects, shift by shift; arrays (k,) in the order of ``shifts``."""

    size: Annotated[int, "Pieces in a sample."]
    interval_hours: Annotated[float, "Hours from one sample to the next."]
    multiple: Annotated[float, "Limits lie this many sigma of the mean out."]
    pieces_per_hour: Annotated[float, "What the plan costs in pieces measured."]
    false_alarm_probability: Annotated[float, "Of a signal at one sample while nothing has shifted."]
    in_control_arl: Annotated[float, "Samples between false alarms, on average."]
    in_control_sd_run_length: Annotated[float, "Standard deviation of the samples between false alarms."]
    in_control_ats_hours: Annotated[float, "Hours between false alarms, on average."]
    false_alarms_per_1000_hours: Annotated[float, "Of a chart that starts afresh after each signal."]
    shifts: Annotated[Floats, "Shifts of the mean, in standard deviations of single values."]
    beta: Annotated[Floats, "Probability that the first sample after each shift gives no signal."]
    power: Annotated[Floats, "Probability that it gives one."]
    arl: Annotated[Floats, "Samples until the signal on average, that sample included."]
    sd_run_length: Annotated[Floats, "Standard deviation of that number of samples."]
    ats_hours: Annotated[Floats, "Average hours to the signal, for a shift just after a sample."]
    ats_random_hours: Annotated[Floats, "Average hours to the signal, for a shift at a random moment."]
    method: Annotated[str, "How the run lengths were computed."]


@dataclass(frozen=True, slots=True)
class PlanPerformance:
    """A sampling plan, and what it does for one shift."""

    size: Annotated[int, "Pieces in a sample."]
    interval_hours: Annotated[float, "Hours from one sample to the next."]
    multiple: Annotated[float, "Limits lie this many sigma of the mean out."]
    pieces_per_hour: Annotated[float, "What the plan costs in pieces measured."]
    false_alarm_probability: Annotated[float, "Of a signal at one sample while nothing has shifted."]
    in_control_arl: Annotated[float, "Samples between false alarms, on average."]
    false_alarms_per_1000_hours: Annotated[float, "Of a chart that starts afresh after each signal."]
    shift: Annotated[float, "Shift of the mean to detect, in standard deviations of single values."]
    power: Annotated[float, "Probability that the first sample after the shift signals."]
    arl: Annotated[float, "Samples until the signal on average, that sample included."]
    sd_run_length: Annotated[float, "Standard deviation of that number of samples."]
    ats_hours: Annotated[float, "Average hours to the signal, for a shift just after a sample."]
    ats_random_hours: Annotated[float, "Average hours to the signal, for a shift at a random moment."]


@dataclass(frozen=True, slots=True)
class Comparison:
    """Plans in the order of their average time to signal, the quickest first."""

    shift: Annotated[float, "Shift of the mean to detect, in standard deviations of single values."]
    shift_moment: Annotated[
        ShiftMoment, "When the shift happens: just after a sample, or at a random moment between two."
    ]
    equal_rate: Annotated[
        bool,
        "Whether all plans measure equally many pieces an hour, within one in a thousand; else unlike is compared.",
    ]
    ranking: Annotated[tuple[int, ...], "Positions in the list of plans as given, from 0."]
    plans: Annotated[tuple[PlanPerformance, ...], "The plans in that order."]


# ---------------------------------------------------------------------------------------------------
# Probabilities


def _power(size: Floats | float, multiple: float, shift: Floats | float) -> Floats:
    """P(a mean of ``size`` lies beyond the limits); each tail by itself, so small ones keep their digits."""
    distance = np.abs(shift) * np.sqrt(size)
    tails: Floats = scipy.special.ndtr(distance - multiple) + scipy.special.ndtr(-distance - multiple)
    return np.minimum(tails, 1.0)


def _no_signal(size: float, multiple: float, shifts: Floats) -> Floats:
    distance = np.abs(shifts) * math.sqrt(size)
    # The narrower of two tails less the narrower still: nothing cancels for large shifts.
    between: Floats = scipy.special.ndtr(multiple - distance) - scipy.special.ndtr(-multiple - distance)
    return between


def oc_curve(size: int, multiple: float, shifts: Floats) -> Floats:
    """Probability β that one sample's mean lies within the limits, for each shift: (k,) in, (k,) out.

    size: 1 to 1000 pieces; multiple: of the limits, 0.1 to 8; shifts: in process sigma, at most 1000 of
    them, each within ±100. β = Φ(L - δ√n) - Φ(-L - δ√n), exact.
    Raises UnusableParameter: an argument out of its range. Source: [montgomery-2013], section 6.2.6.
    """
    _check_size(size)
    _check_multiple(multiple)
    return _no_signal(float(size), multiple, _checked_shifts(shifts, MOST_SHIFTS))


def operating_characteristics(
    size: int,
    interval_hours: float,
    multiple: float,
    shifts: Floats,
    rules: Sequence[Rule] | None = None,
) -> OperatingCharacteristics:
    """What a sampling plan detects, for each shift, and how often it calls out for nothing.

    Arguments as for :func:`oc_curve`; interval_hours: between samples, 1e-6 to 1e6. rules: further rules,
    with which at most 50 shifts are taken, since each needs a Markov chain of its own; the run length is
    then from a chart without history at the shift. beta and power are of the first sample's own limits.
    Raises UnusableParameter: an argument out of its range, ``too-much-work``, or what ``runlength.shewhart`` raises.
    Source: [montgomery-2013], sections 6.2.6 and 6.2.7; [champ-woodall-1987] with rules.
    """
    _check_size(size)
    _check_multiple(multiple)
    _check_hours(interval_hours, "interval_hours")
    shifts = _checked_shifts(shifts, MOST_SHIFTS if rules is None else MOST_SHIFTS_WITH_RULES)
    beta = _no_signal(float(size), multiple, shifts)
    power = _power(float(size), multiple, shifts)
    alarm = false_alarm_probability(multiple)
    if rules is None:
        arl, spread = 1.0 / power, np.sqrt(beta) / power
        in_control, in_control_spread = 1.0 / alarm, math.sqrt(1.0 - alarm) / alarm
        method = "geometric"
    else:
        given = tuple(rules)
        root = math.sqrt(size)
        # Half of what a request may take: two plans are described at most.
        allowance = Allowance(1 + len(shifts), "shifts", 0.5 * MOST_OPERATIONS)
        found = []
        for shift in (0.0, *shifts.tolist()):
            law = shewhart_law(given, lower=-multiple, upper=multiple, shift=shift * root)
            found.append(law.run_length())
            allowance.take(law.operations)
        arl = np.array([one.arl for one in found[1:]])
        spread = np.array([one.sd for one in found[1:]])
        in_control, in_control_spread = found[0].arl, found[0].sd
        method = found[0].method
    return OperatingCharacteristics(
        size=size,
        interval_hours=interval_hours,
        multiple=multiple,
        pieces_per_hour=size / interval_hours,
        false_alarm_probability=alarm,
        in_control_arl=in_control,
        in_control_sd_run_length=in_control_spread,
        in_control_ats_hours=in_control * interval_hours,
        false_alarms_per_1000_hours=1000.0 / (in_control * interval_hours),
        shifts=shifts,
        beta=beta,
        power=power,
        arl=arl,
        sd_run_length=spread,
        ats_hours=interval_hours * arl,
        ats_random_hours=interval_hours * (arl - 0.5),
        method=method,
    )


def false_alarm_probability(multiple: float) -> float:
    """P(a point lies beyond limits at ``multiple`` sigma) with nothing changed: 2Φ(-L)."""
    return 2.0 * float(scipy.special.ndtr(-multiple))


def limit_multiple(
    *,
    multiple: float | None = None,
    in_control_arl: float | None = None,
    false_alarm_probability: float | None = None,
) -> float:
    """The multiple of the limits, from at most one of three ways to say it; 3 when none is given.

    in_control_arl: average samples between false alarms, 1/α, above 1.09 and below 8e14;
    false_alarm_probability: α per sample, both tails together.
    Raises UnusableParameter ``limits-twice`` or ``multiple-out-of-range``.
    """
    given = {
        "multiple": multiple,
        "in_control_arl": in_control_arl,
        "false_alarm_probability": false_alarm_probability,
    }
    names = [name for name, value in given.items() if value is not None]
    if len(names) > 1:
        raise UnusableParameter.of(
            "limits-twice", f"State the limits in one way only; {' and '.join(names)} were given.", names[1]
        )
    if not names:
        return 3.0
    if multiple is not None:
        _check_multiple(multiple)
        return multiple
    alarm = false_alarm_probability if in_control_arl is None else 1.0 / max(in_control_arl, 1e-300)
    assert alarm is not None
    least, most = _alarm_range()
    if not least <= alarm <= most:
        span = (
            f"{1 / most:.4g} to {1 / least:.4g}"
            if in_control_arl is not None
            else f"{least:.4g} to {most:.4g}"
        )
        what = "in-control run length" if in_control_arl is not None else "probability of a false alarm"
        raise UnusableParameter.of(
            "multiple-out-of-range", f"The {what} must be {span} to give usable limits.", names[0]
        )
    return -float(scipy.special.ndtri(0.5 * alarm))


@lru_cache(maxsize=1)
def _alarm_range() -> tuple[float, float]:
    return false_alarm_probability(LARGEST_MULTIPLE), false_alarm_probability(SMALLEST_MULTIPLE)


# ---------------------------------------------------------------------------------------------------
# Choosing


def smallest_size(shift: float, power: float, multiple: float = 3.0) -> int:
    """The least sample size whose first sample after the shift signals with at least the power asked.

    shift: in process sigma, 0.01 to 100 either way; power: strictly between 0 and 1. Exact: every size up
    to 1000 is tried. Raises UnusableParameter ``target-not-met`` (it says what 1000 pieces reach), or an
    argument out of its range.
    """
    _check_shift(shift)
    _check_power(power)
    _check_multiple(multiple)
    found = _power(_sizes(), multiple, shift)
    return _first(found >= power, _power_not_met(shift, power, float(found[-1])), "power")


def plan(
    shift: float,
    *,
    power: float | None = None,
    ats_hours: float | None = None,
    shift_moment: ShiftMoment = "after-sample",
    multiple: float | None = None,
    in_control_arl: float | None = None,
    false_alarm_probability: float | None = None,
    interval_hours: float | None = None,
    hourly_pieces: float | None = None,
) -> PlanPerformance:
    """A sampling plan that detects ``shift`` (in process sigma) as asked.

    Asked: power on the first sample, an average time to signal of at most ats_hours (by the convention
    shift_moment), or both. Limits: see :func:`limit_multiple`. The interval:

    * interval_hours given: the least size that meets what was asked; hourly_pieces then is a bound.
    * hourly_pieces alone: all of them are used, h = n/hourly_pieces, and of the sizes that meet what was
      asked the one with the shortest time to signal is taken.
    * neither, with ats_hours: the size and interval that measure the fewest pieces an hour.

    Sizes of 1 to 1000, all tried. Raises UnusableParameter ``nothing-asked``, ``interval-missing``,
    ``target-not-met`` (it says what can be reached), ``too-many-pieces``, or an argument out of its range.
    """
    _check_shift(shift)
    _check_moment(shift_moment)
    reach = limit_multiple(
        multiple=multiple, in_control_arl=in_control_arl, false_alarm_probability=false_alarm_probability
    )
    if power is None and ats_hours is None:
        raise UnusableParameter.of(
            "nothing-asked", "State the power on the first sample, the time to signal, or both.", "power"
        )
    if power is not None:
        _check_power(power)
    for hours, name in ((ats_hours, "ats_hours"), (interval_hours, "interval_hours")):
        if hours is not None:
            _check_hours(hours, name)
    if hourly_pieces is not None and not 1e-6 <= hourly_pieces <= 1e6:
        raise UnusableParameter.of(
            "rate-out-of-range", "The pieces an hour must be 1e-6 to 1e6.", "hourly_pieces"
        )
    sizes = _sizes()
    powers = _power(sizes, reach, shift)
    if power is not None and not powers[-1] >= power:
        raise UnusableParameter.of("target-not-met", _power_not_met(shift, power, float(powers[-1])), "power")
    enough = powers >= (power or 0.0)
    # The average time to signal in intervals.
    wait = 1.0 / powers - (0.5 if shift_moment == "random" else 0.0)
    if interval_hours is not None:
        chosen, hours = _at_interval(interval_hours, enough, wait, ats_hours), interval_hours
    elif hourly_pieces is not None:
        chosen = _at_rate(hourly_pieces, enough, wait, ats_hours)
        hours = chosen / hourly_pieces
    elif ats_hours is not None:
        chosen = 1 + int(np.argmin(np.where(enough, sizes * wait, np.inf)))
        hours = ats_hours / float(wait[chosen - 1])
    else:
        raise UnusableParameter.of(
            "interval-missing",
            "Power alone sets the size and not the interval: state interval_hours, hourly_pieces or "
            "ats_hours.",
            "interval_hours",
        )
    _check_hours(hours, "interval_hours")
    if hourly_pieces is not None and chosen > hourly_pieces * hours * (1.0 + 1e-12):
        raise UnusableParameter.of(
            "too-many-pieces",
            f"What was asked needs {chosen} pieces every {hours:g} hours, {chosen / hours:.4g} an hour, "
            f"and {hourly_pieces:g} are allowed.",
            "hourly_pieces",
        )
    return _performance(SamplingPlan(chosen, hours, reach), shift)


def _at_interval(interval_hours: float, enough: Booleans, wait: Floats, ats_hours: float | None) -> int:
    if ats_hours is not None:
        times = interval_hours * wait
        enough = enough & (times <= ats_hours * (1.0 + 1e-12))
        detail = (
            f"With a sample every {interval_hours:g} hours the average time to signal is "
            f"{float(times[-1]):.6g} hours at the least, for sizes up to {LARGEST_SIZE}; "
            f"{ats_hours:g} was asked."
        )
        return _first(enough, detail, "ats_hours")
    return 1 + int(np.argmax(enough))


def _at_rate(hourly_pieces: float, enough: Booleans, wait: Floats, ats_hours: float | None) -> int:
    times = np.where(enough, _sizes() * wait / hourly_pieces, np.inf)
    best = int(np.argmin(times))
    if ats_hours is not None and not times[best] <= ats_hours * (1.0 + 1e-12):
        raise UnusableParameter.of(
            "target-not-met",
            f"With {hourly_pieces:g} pieces an hour the average time to signal is "
            f"{float(times[best]):.6g} hours at the least, more than {ats_hours:g}.",
            "ats_hours",
        )
    return best + 1


def plans_at_rate(
    sizes: Sequence[int], hourly_pieces: float, multiple: float = 3.0
) -> tuple[SamplingPlan, ...]:
    """Plans of the given sizes, each measuring ``hourly_pieces`` an hour: small often, large seldom.

    Raises UnusableParameter ``rate-out-of-range``; :func:`compare` checks the plans themselves.
    """
    if not 1e-6 <= hourly_pieces <= 1e6:
        raise UnusableParameter.of(
            "rate-out-of-range", "The pieces an hour must be 1e-6 to 1e6.", "hourly_pieces"
        )
    return tuple(SamplingPlan(size, size / hourly_pieces, multiple) for size in sizes)


def compare(
    plans: Sequence[SamplingPlan], shift: float, *, shift_moment: ShiftMoment = "after-sample"
) -> Comparison:
    """Plans ranked by their average time to signal ``shift`` (process sigma), the quickest first.

    1 to 1000 plans; of two equally quick, the one given first. Plans with different pieces an hour are
    compared too, and ``equal_rate`` says so. Raises UnusableParameter: an argument out of its range.
    """
    _check_shift(shift)
    _check_moment(shift_moment)
    if not 1 <= len(plans) <= MOST_PLANS:
        raise UnusableParameter.of(
            "plans-out-of-range",
            f"1 to {MOST_PLANS} plans can be compared; {len(plans)} were given.",
            "plans",
        )
    for index, one in enumerate(plans):
        _check_size(one.size, "plans", index)
        _check_multiple(one.multiple, "plans", index)
        _check_hours(one.interval_hours, "plans", index, "interval_hours")
    found = [_performance(one, shift) for one in plans]
    times = [one.ats_hours if shift_moment == "after-sample" else one.ats_random_hours for one in found]
    ranking = tuple(sorted(range(len(found)), key=times.__getitem__))
    rates = [one.pieces_per_hour for one in found]
    return Comparison(
        shift,
        shift_moment,
        max(rates) <= min(rates) * (1.0 + _SAME_RATE),
        ranking,
        tuple(found[index] for index in ranking),
    )


def _performance(one: SamplingPlan, shift: float) -> PlanPerformance:
    power = float(_power(float(one.size), one.multiple, shift))
    beta = float(_no_signal(float(one.size), one.multiple, np.array([shift]))[0])
    alarm = false_alarm_probability(one.multiple)
    arl, h = 1.0 / power, one.interval_hours
    return PlanPerformance(
        size=one.size,
        interval_hours=h,
        multiple=one.multiple,
        pieces_per_hour=one.pieces_per_hour,
        false_alarm_probability=alarm,
        in_control_arl=1.0 / alarm,
        false_alarms_per_1000_hours=1000.0 * alarm / h,
        shift=shift,
        power=power,
        arl=arl,
        sd_run_length=math.sqrt(beta) / power,
        ats_hours=h * arl,
        ats_random_hours=h * (arl - 0.5),
    )


@lru_cache(maxsize=1)
def _sizes() -> Floats:
    return np.arange(1.0, LARGEST_SIZE + 1.0)


def _first(met: Booleans, detail: str, where: str) -> int:
    index = int(np.argmax(met))
    if not met[index]:
        raise UnusableParameter.of("target-not-met", detail, where)
    return index + 1


def _power_not_met(shift: float, power: float, reached: float) -> str:
    return (
        f"Even {LARGEST_SIZE} pieces detect a shift of {shift:g} sigma on the first sample with a "
        f"probability of {reached:.4g} only; {power:g} was asked."
    )


# ---------------------------------------------------------------------------------------------------
# Ranges


def _check_size(size: int, *where: str | int) -> None:
    if not 1 <= size <= LARGEST_SIZE:
        raise UnusableParameter.of(
            "size-out-of-range", f"A sample has 1 to {LARGEST_SIZE} pieces, not {size}.", *where, "size"
        )


def _check_multiple(multiple: float, *where: str | int) -> None:
    if not SMALLEST_MULTIPLE <= multiple <= LARGEST_MULTIPLE:
        raise UnusableParameter.of(
            "multiple-out-of-range",
            f"The multiple of the limits must be {SMALLEST_MULTIPLE:g} to {LARGEST_MULTIPLE:g}; "
            f"{multiple!r} is not usable.",
            *where,
            "multiple",
        )


def _check_hours(hours: float, *where: str | int) -> None:
    if not _SHORTEST_HOURS <= hours <= _LONGEST_HOURS:
        raise UnusableParameter.of(
            "hours-out-of-range",
            f"A time must be {_SHORTEST_HOURS:g} to {_LONGEST_HOURS:g} hours; {hours!r} is not usable.",
            *where,
        )


def _check_shift(shift: float) -> None:
    if not SMALLEST_SHIFT <= abs(shift) <= LARGEST_SHIFT:
        raise UnusableParameter.of(
            "shift-out-of-range",
            f"The shift to detect must be {SMALLEST_SHIFT:g} to {LARGEST_SHIFT:g} sigma, up or down; "
            f"{shift!r} is not usable.",
            "shift",
        )


def _check_power(power: float) -> None:
    if not 0.0 < power < 1.0:
        raise UnusableParameter.of(
            "power-out-of-range", f"The power must lie between 0 and 1; {power!r} does not.", "power"
        )


def _check_moment(shift_moment: str) -> None:
    if shift_moment not in ("after-sample", "random"):
        raise UnusableParameter.of(
            "unknown-moment",
            f"A shift comes at one of these moments: after-sample, random; not at {shift_moment!r}.",
            "shift_moment",
        )


def _checked_shifts(shifts: Floats, most: int) -> Floats:
    shifts = np.asarray(shifts, dtype=np.float64)
    if shifts.ndim != 1 or not 1 <= shifts.size <= most:
        raise UnusableParameter.of(
            "shifts-out-of-range", f"Give 1 to {most} shifts; {shifts.size} were given.", "shifts"
        )
    wrong = ~(np.abs(shifts) <= LARGEST_SHIFT)
    if wrong.any():
        raise UnusableParameter.of(
            "shift-out-of-range",
            f"Each shift must lie within {LARGEST_SHIFT:g} sigma of zero.",
            "shifts",
            int(np.argmax(wrong)),
        )
    return shifts
