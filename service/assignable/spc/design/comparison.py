"""Charts of one process side by side: at the same false-alarm rate and the same effort, which finds a shift first.

Every candidate measures the same pieces an hour and gives a false alarm after the same hours on average. Only
then does the time to signal compare like with like: a chart that gives more false alarms, or measures more,
is quicker for that alone.

The time to signal is from a shift at a random moment of a long in-control operation without a signal:
interval · (steady-state ARL - 1/2), for every chart alike [reynolds-1988].
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, Literal, TypeAlias

import scipy

from ..errors import UnusableParameter
from ..rules import LIMIT, Rule
from ..runlength import shewhart, steady_state_arl
from ..runlength.estimated import rising_root
from .memory import optimal_cusum, optimal_ewma

ChartKind: TypeAlias = Literal["mean", "mean-with-rules", "ewma", "cusum"]

# In order of simplicity.
KINDS: tuple[ChartKind, ...] = ("mean", "mean-with-rules", "ewma", "cusum")
MOST_SIZES = 3
LARGEST_SIZE = 100
SMALLEST_DISTANCE, LARGEST_DISTANCE = 0.25, 10.0
SHORTEST_ARL, LONGEST_ARL = 20.0, 3_000.0
SIMPLER_IF_WITHIN = 0.1
"""A simpler chart is recommended when it takes at most this share longer than the quickest."""

_FACTORS = (0.5, 1.0, 1.5, 2.0, 3.0)
_SHORTEST_RUN, _LONGEST_RUN = 8, 20
_NARROWEST, _WIDEST = 0.4, 2.0


@dataclass(frozen=True, slots=True)
class TimeToSignal:
    """How soon a chart finds one shift."""

    shift: Annotated[float, "Shift of the mean, in process sigma."]
    steady_state_arl: Annotated[
        float, "Samples from the shift to the signal on average, after long operation."
    ]
    ats_hours: Annotated[
        float, "Hours from the shift to the signal on average, for a shift at a random moment."
    ]


@dataclass(frozen=True, slots=True)
class ChartCandidate:
    """One chart with its settings, and what it does."""

    chart: Annotated[Literal["mean", "mean-with-rules", "ewma", "cusum"], "The chart."]
    size: Annotated[int, "Pieces in a sample."]
    interval_hours: Annotated[float, "Hours between samples, for the pieces an hour that were stated."]
    multiple: Annotated[
        float | None, "Limits at this many standard deviations of the mean (`mean`, `mean-with-rules`)."
    ]
    rules: Annotated[tuple[str, ...], "The rules in force (`mean-with-rules`), by their codes."]
    smoothing: Annotated[float | None, "Smoothing constant (`ewma`)."]
    limit: Annotated[
        float | None, "Limits at this many asymptotic standard deviations of the statistic (`ewma`)."
    ]
    reference: Annotated[float | None, "Reference value in standard deviations of the mean (`cusum`)."]
    decision: Annotated[float | None, "Decision interval in standard deviations of the mean (`cusum`)."]
    in_control_arl: Annotated[float, "Samples between false alarms on average."]
    hours_between_false_alarms: Annotated[float, "The same in hours: alike for every candidate."]
    arl: Annotated[float, "Samples to the signal on average when the shift is there from the chart's start."]
    steady_state_arl: Annotated[
        float, "Samples from the shift to the signal on average, after long operation."
    ]
    ats_hours: Annotated[
        float, "Hours from the shift to the signal on average, for a shift at a random moment."
    ]
    slower_than_quickest: Annotated[float, "Share by which that is longer than for the quickest candidate."]
    other_shifts: Annotated[tuple[TimeToSignal, ...], "The same for smaller and larger shifts."]
    description: Annotated[str, "The chart and its settings in words."]


@dataclass(frozen=True, slots=True)
class ChartComparison:
    """Candidates in the order of their time to signal, and which to take."""

    shift: Annotated[float, "The shift that matters, in process sigma."]
    pieces_per_hour: Annotated[float, "Pieces measured an hour, alike for every candidate."]
    hours_between_false_alarms: Annotated[
        float, "Average hours between false alarms, alike for every candidate."
    ]
    candidates: Annotated[tuple[ChartCandidate, ...], "The candidates, the quickest first."]
    recommended: Annotated[int, "Position of the one recommended among them, from 0."]
    recommendation: Annotated[str, "What to take, in one sentence."]
    reasons: Annotated[tuple[str, ...], "Why, a sentence each."]


def compare(
    shift: float,
    *,
    pieces_per_hour: float,
    hours_between_false_alarms: float,
    sizes: Sequence[int] = (1, 5),
    kinds: Sequence[ChartKind] = KINDS,
) -> ChartComparison:
    """Charts of means set to the same false-alarm rate and the same effort, by their time to signal ``shift``.

    shift: in process sigma, either way; pieces_per_hour: 1e-6 to 1e6; sizes: up to 3 different sample sizes of
    1 to 100, each taken every size/pieces_per_hour hours, so that shift·√size is 0.25 to 10 and the samples
    between false alarms are 20 to 3000. EWMA and CUSUM are the best of their kind for the shift, in steady
    state; ``mean-with-rules`` has the rules of Western Electric (1956) with all lines at the same multiple
    of their places and the run as long as needed, so that it meets the rate.
    Raises UnusableParameter: an argument out of its range.
    Source: [champ-woodall-1987], [lucas-saccucci-1990] for comparisons at equal in-control run lengths.
    """
    shift = abs(shift)
    _check(shift, pieces_per_hour, hours_between_false_alarms, sizes, kinds)
    found = []
    for size in sizes:
        interval = size / pieces_per_hour
        for kind in kinds:
            found.append(_candidate(kind, shift, size, interval, hours_between_false_alarms / interval))
    simplicity = {kind: place for place, kind in enumerate(KINDS)}
    found.sort(key=lambda one: (one.ats_hours, simplicity[one.chart], one.size))
    quickest = found[0].ats_hours
    candidates = tuple(_with_slowness(one, one.ats_hours / quickest - 1.0) for one in found)
    near = [place for place, one in enumerate(candidates) if one.slower_than_quickest <= SIMPLER_IF_WITHIN]
    recommended = min(near, key=lambda place: (simplicity[candidates[place].chart], place))
    return ChartComparison(
        shift=shift,
        pieces_per_hour=pieces_per_hour,
        hours_between_false_alarms=hours_between_false_alarms,
        candidates=candidates,
        recommended=recommended,
        recommendation=_recommendation(shift, candidates[recommended]),
        reasons=_reasons(shift, candidates, recommended),
    )


def _with_slowness(one: ChartCandidate, share: float) -> ChartCandidate:
    values = {name: getattr(one, name) for name in ChartCandidate.__dataclass_fields__}
    return ChartCandidate(**{**values, "slower_than_quickest": max(share, 0.0)})


# ---------------------------------------------------------------------------------------------------
# Candidates


@dataclass(frozen=True, slots=True)
class _Setting:
    """A chart's settings and its run lengths at some distances (shift in sigma of the mean)."""

    description: str
    in_control_arl: float
    arl: float
    steady: tuple[float, ...]
    multiple: float | None = None
    rules: tuple[str, ...] = ()
    smoothing: float | None = None
    limit: float | None = None
    reference: float | None = None
    decision: float | None = None


def _candidate(kind: ChartKind, shift: float, size: int, interval: float, target: float) -> ChartCandidate:
    root = math.sqrt(size)
    shifts = tuple(shift * factor for factor in _FACTORS if shift * factor * root <= LARGEST_DISTANCE)
    distances = tuple(one * root for one in shifts)
    setting = _SETTINGS[kind](shift * root, distances, target)
    own = setting.steady[shifts.index(shift)]
    pieces = f"{size} piece{'s'[: size > 1]} every {interval:.4g} hours"
    return ChartCandidate(
        chart=kind,
        size=size,
        interval_hours=interval,
        multiple=setting.multiple,
        rules=setting.rules,
        smoothing=setting.smoothing,
        limit=setting.limit,
        reference=setting.reference,
        decision=setting.decision,
        in_control_arl=setting.in_control_arl,
        hours_between_false_alarms=setting.in_control_arl * interval,
        arl=setting.arl,
        steady_state_arl=own,
        ats_hours=interval * (own - 0.5),
        slower_than_quickest=0.0,
        other_shifts=tuple(
            TimeToSignal(one, steady, interval * (steady - 0.5))
            for one, steady in zip(shifts, setting.steady, strict=True)
        ),
        description=f"{setting.description}, {pieces}",
    )


def _mean(distance: float, distances: tuple[float, ...], target: float) -> _Setting:
    multiple = -float(scipy.special.ndtri(0.5 / target))

    def arl(at: float) -> float:
        return 1.0 / float(scipy.special.ndtr(at - multiple) + scipy.special.ndtr(-at - multiple))

    return _Setting(
        description=f"Chart of means with limits at {multiple:.4g} sigma",
        in_control_arl=arl(0.0),
        arl=arl(distance),
        steady=tuple(arl(at) for at in distances),
        multiple=multiple,
    )


def _rules_at(scale: float, run: int) -> tuple[Rule, ...]:
    return (LIMIT, Rule("zone", 2, 3, 2.0 * scale), Rule("zone", 4, 5, scale), Rule("zone", run, run, 0.0))


@lru_cache(maxsize=64)
def _scaled_rules(target: float) -> tuple[float, int]:
    """The multiple of the lines' places, and the run, at which the rules have the in-control ARL asked.

    A run on one side has no line to widen: alone it signals every 2^r - 1 points on average. It is lengthened
    from 8 until that is at least twice the target, and the lines make up the rest.
    """
    run = _SHORTEST_RUN
    while 2.0**run - 1.0 < 2.0 * target and run < _LONGEST_RUN:
        run += 1

    def miss(scale: float) -> float:
        return math.log(shewhart(_rules_at(scale, run), lower=-3.0 * scale, upper=3.0 * scale).arl / target)

    return rising_root(miss, _NARROWEST, _WIDEST, 1e-10), run


def _mean_with_rules(distance: float, distances: tuple[float, ...], target: float) -> _Setting:
    scale, run = _scaled_rules(target)
    rules, multiple = _rules_at(scale, run), 3.0 * scale
    return _Setting(
        description=f"Chart of means with the Western Electric (1956) rules, lines at {multiple:.4g}, "
        f"{2 * scale:.4g} and {scale:.4g} sigma and a run of {run}",
        in_control_arl=shewhart(rules, lower=-multiple, upper=multiple).arl,
        arl=shewhart(rules, lower=-multiple, upper=multiple, shift=distance).arl,
        steady=_steady_with_rules(rules, multiple, distances),
        multiple=multiple,
        rules=tuple(rule.code for rule in rules),
    )


def _steady_with_rules(
    rules: tuple[Rule, ...], multiple: float, distances: tuple[float, ...]
) -> tuple[float, ...]:
    """ARL at each distance after long in-control operation without a signal, exactly, for rules on zones."""
    found = (steady_state_arl(rules, lower=-multiple, upper=multiple, shift=at) for at in distances)
    return tuple(one for one in found if one is not None)


def _told(value: float | None, otherwise: float) -> float:
    return otherwise if value is None else value


def _ewma(distance: float, distances: tuple[float, ...], target: float) -> _Setting:
    best = optimal_ewma(shift=distance, in_control_arl=target, state="steady-state", shifts=distances)
    by_shift = {row.shift: _told(row.steady_state_arl, row.arl) for row in best.out_of_control}
    own = next(row for row in best.out_of_control if row.shift == distance)
    return _Setting(
        description=f"EWMA with smoothing constant {best.smoothing:.3g} and limits at {best.limit:.4g} of its sigma",
        in_control_arl=best.in_control_arl,
        arl=own.arl,
        steady=tuple(by_shift[at] for at in distances),
        smoothing=best.smoothing,
        limit=best.limit,
    )


def _cusum(distance: float, distances: tuple[float, ...], target: float) -> _Setting:
    best = optimal_cusum(shift=distance, in_control_arl=target, state="steady-state", shifts=distances)
    by_shift = {row.shift: _told(row.steady_state_arl, row.arl) for row in best.out_of_control}
    own = next(row for row in best.out_of_control if row.shift == distance)
    return _Setting(
        description=f"CUSUM with a reference value of {best.reference:.3g} and a decision interval of "
        f"{best.decision:.4g} sigma of the mean",
        in_control_arl=best.in_control_arl,
        arl=own.arl,
        steady=tuple(by_shift[at] for at in distances),
        reference=best.reference,
        decision=best.decision,
    )


_SETTINGS = {"mean": _mean, "mean-with-rules": _mean_with_rules, "ewma": _ewma, "cusum": _cusum}


# ---------------------------------------------------------------------------------------------------
# In words


def _recommendation(shift: float, one: ChartCandidate) -> str:
    return (
        f"{one.description}: it finds a shift of {shift:.4g} sigma {one.ats_hours:.3g} hours after it comes, on "
        "average."
    )


def _reasons(shift: float, candidates: tuple[ChartCandidate, ...], recommended: int) -> tuple[str, ...]:
    one, quickest, slowest = candidates[recommended], candidates[0], candidates[-1]
    reasons = []
    if recommended == 0:
        reasons.append("It is the quickest of the candidates at the same false-alarm rate and effort.")
    else:
        reasons.append(
            f"It takes {100 * one.slower_than_quickest:.2g} % longer than the quickest ({quickest.description}, "
            f"{quickest.ats_hours:.3g} hours) and is simpler to run and to explain, or as simple."
        )
    if len(candidates) > 1 and slowest is not one:
        reasons.append(
            f"The slowest ({slowest.description}) takes {slowest.ats_hours:.3g} hours, "
            f"{slowest.ats_hours / one.ats_hours:.3g} times as long."
        )
    plain = [other for other in candidates if other.chart == "mean"]
    if one.chart != "mean" and plain:
        reasons.append(
            f"The chart of means without memory needs {plain[0].ats_hours:.3g} hours for this shift; for one of "
            f"{plain[0].other_shifts[-1].shift:.3g} sigma it needs {plain[0].other_shifts[-1].ats_hours:.3g} and this "
            f"one {one.other_shifts[-1].ats_hours:.3g}."
            if plain[0].other_shifts[-1].shift == one.other_shifts[-1].shift
            else f"The chart of means without memory needs {plain[0].ats_hours:.3g} hours for this shift."
        )
    return tuple(reasons)


# ---------------------------------------------------------------------------------------------------
# Ranges


def _check(shift: float, rate: float, hours: float, sizes: Sequence[int], kinds: Sequence[str]) -> None:
    if not 1e-6 <= rate <= 1e6:
        raise UnusableParameter.of(
            "rate-out-of-range", "The pieces an hour must be 1e-6 to 1e6.", "pieces_per_hour"
        )
    if not 1 <= len(sizes) <= MOST_SIZES or len(set(sizes)) < len(sizes):
        raise UnusableParameter.of(
            "sizes-out-of-range", f"Give 1 to {MOST_SIZES} different sizes; {len(sizes)} were given.", "sizes"
        )
    if not kinds or len(set(kinds)) < len(kinds) or not set(kinds) <= set(KINDS):
        raise UnusableParameter.of(
            "kinds-out-of-range", f"The charts to compare are some of {', '.join(KINDS)}, each once.", "kinds"
        )
    for index, size in enumerate(sizes):
        if not 1 <= size <= LARGEST_SIZE:
            raise UnusableParameter.of(
                "size-out-of-range", f"A sample has 1 to {LARGEST_SIZE} pieces, not {size}.", "sizes", index
            )
        distance = shift * math.sqrt(size)
        if not SMALLEST_DISTANCE <= distance <= LARGEST_DISTANCE:
            raise UnusableParameter.of(
                "shift-out-of-range",
                f"With samples of {size} the shift must be {SMALLEST_DISTANCE / math.sqrt(size):.3g} to "
                f"{LARGEST_DISTANCE / math.sqrt(size):.3g} sigma; {shift:g} is not usable.",
                "shift",
            )
        target = hours * rate / size
        if not SHORTEST_ARL <= target <= LONGEST_ARL:
            raise UnusableParameter.of(
                "false-alarms-out-of-range",
                f"With samples of {size} every {size / rate:.4g} hours the hours between false alarms must be "
                f"{SHORTEST_ARL * size / rate:.6g} to {LONGEST_ARL * size / rate:.6g}; {hours:g} is not usable.",
                "hours_between_false_alarms",
            )
