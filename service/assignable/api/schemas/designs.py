"""Shapes of chart design requests and answers."""

from __future__ import annotations

from typing import Any

import numpy as np

from ...spc.charts.common import LimitBasis
from ...spc.design.memory import (
    HIGHEST_ARL,
    LOWEST_ARL,
    MOST_SHIFTS,
    CusumDesign,
    EwmaDesign,
)
from ...spc.design.memory import SMALLEST_SHIFT as SMALLEST_MEMORY_SHIFT
from ...spc.design.subgroups import (
    LARGEST_MULTIPLE,
    LARGEST_SHIFT,
    LARGEST_SIZE,
    MOST_SHIFTS_WITH_RULES,
    SMALLEST_MULTIPLE,
    SMALLEST_SHIFT,
    Comparison,
    OperatingCharacteristics,
    PlanPerformance,
)
from ...spc.errors import UnusableParameter
from ...spc.runlength import memory
from .. import fields as f
from ..contract import Provenance
from . import derive
from .common import RulesRequest

HOURS = {"least": 1e-6, "most": 1e6}
MOST_PLANS = 100
MOST_RUN_LENGTHS = 50
USUAL_SHIFTS = (0.25, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0)
PROVENANCE = f.Object(Provenance, required=True, metadata={"description": "What computed this answer."})


class PlanRequest(f.RequestShape):
    """A sampling plan: so many pieces, so often, with limits so far out."""

    size = f.StrictInteger(
        required=True, least=1, most=LARGEST_SIZE, metadata={"description": "Pieces in a sample."}
    )
    interval_hours = f.StrictNumber(
        required=True, **HOURS, metadata={"description": "Hours from one sample to the next."}
    )
    sigma_multiple = f.StrictNumber(
        load_default=3.0,
        least=SMALLEST_MULTIPLE,
        most=LARGEST_MULTIPLE,
        metadata={"description": "Limits lie this many sigma of the mean out; 3 unless given."},
    )


class DetectRequest(f.RequestShape):
    """What a plan is to achieve: a power, a time to signal, or both."""

    power = f.StrictNumber(
        above=0,
        below=1,
        metadata={"description": "Least probability that the first sample after it signals."},
    )
    ats_hours = f.StrictNumber(**HOURS, metadata={"description": "Most average time to signal, in hours."})
    sigma_multiple = f.StrictNumber(
        least=SMALLEST_MULTIPLE,
        most=LARGEST_MULTIPLE,
        metadata={"description": "Where the limits lie; or else:"},
    )
    in_control_arl = f.StrictNumber(
        above=1, metadata={"description": "Samples between false alarms on average; or else:"}
    )
    false_alarm_probability = f.StrictNumber(
        above=0, below=1, metadata={"description": "Probability of a false alarm at each sample."}
    )
    interval_hours = f.StrictNumber(**HOURS, metadata={"description": "Hours between samples, where fixed."})
    hourly_pieces = f.StrictNumber(
        least=1e-6, most=1e6, metadata={"description": "Pieces an hour that can be measured."}
    )


class SubgroupDesignRequest(f.RequestShape):
    """The design of a mean chart: ask for a plan, evaluate yours, compare several."""

    shift = f.StrictNumber(
        required=True,
        least=SMALLEST_SHIFT,
        most=LARGEST_SHIFT,
        metadata={"description": "Shift of the mean to detect, in standard deviations of single values."},
    )
    shift_moment = f.Choice(
        "after-sample",
        "random",
        load_default="after-sample",
        metadata={
            "description": "When the shift happens: just after a sample (time to signal = ARL intervals), or at a "
            "random moment between two (half an interval less)."
        },
    )
    detect = f.Object(DetectRequest, metadata={"description": "Asks for a plan that achieves this."})
    present = f.Object(PlanRequest, metadata={"description": "Your present plan, to be evaluated."})
    candidates = f.ObjectList(
        PlanRequest,
        max_items=MOST_PLANS,
        metadata={"description": "Plans to be ranked by their time to signal."},
    )
    rules = f.Object(
        RulesRequest, metadata={"description": "Run rules, for the operating characteristics of a plan."}
    )
    shifts = f.NumberList(
        least=-LARGEST_SHIFT,
        most=LARGEST_SHIFT,
        max_items=MOST_SHIFTS_WITH_RULES,
        metadata={
            "description": "Shifts of the operating characteristics, in sigma; a usual set unless given."
        },
    )


class SubgroupDesignAnswer(f.AnswerShape):
    """A plan, operating characteristics, and a comparison: what was asked for, else null."""

    plan = f.Object(
        derive.answer(PlanPerformance),
        required=True,
        allow_none=True,
        metadata={"description": "The plan that achieves what `detect` asks."},
    )
    characteristics = f.Object(
        derive.answer(OperatingCharacteristics),
        required=True,
        allow_none=True,
        metadata={
            "description": "Of that plan: the operating characteristic curve and run lengths by shift."
        },
    )
    present = f.Object(
        derive.answer(OperatingCharacteristics),
        required=True,
        allow_none=True,
        metadata={"description": "The same for your present plan."},
    )
    comparison = f.Object(
        derive.answer(Comparison),
        required=True,
        allow_none=True,
        metadata={"description": "The candidates, the quickest first."},
    )
    provenance = PROVENANCE


# ---------------------------------------------------------------------------------------------------
# Run lengths


class ShewhartRequest(f.RequestShape):
    """A chart of a normal statistic judged point by point, with or without run rules."""

    sigma_multiple = f.StrictNumber(
        above=0,
        most=10,
        load_default=3.0,
        metadata={"description": "Both limits lie this many sigma of the statistic out; 3 unless given."},
    )
    sides = f.Choice(
        "two", "upper", "lower", load_default="two", metadata={"description": "Which limits there are."}
    )
    rules = f.Object(RulesRequest, metadata={"description": "Run rules; without them the limits alone."})
    subgroup_size = f.StrictInteger(
        least=1,
        most=LARGEST_SIZE,
        load_default=1,
        metadata={"description": "Values in each plotted mean; 1 unless given."},
    )


class CountChartRequest(f.RequestShape):
    """A chart of counts: binomial (p, np) or Poisson (c, u), computed exactly."""

    law = f.Choice("binomial", "poisson", required=True, metadata={"description": "What the counts follow."})
    mean = f.StrictNumber(
        required=True,
        above=0,
        most=1e9,
        metadata={"description": "In-control proportion, or rate per unit of area, the chart was set for."},
    )
    size = f.StrictNumber(
        required=True,
        above=0,
        most=1e9,
        metadata={"description": "Units inspected, or area, of each sample."},
    )
    sigma_multiple = f.StrictNumber(above=0, most=10, metadata={"description": "Limits this many sigma out."})
    false_alarm_probability = f.StrictNumber(
        least=1e-12, most=0.5, metadata={"description": "Instead: exact equal tails of this probability."}
    )
    rules = f.Object(RulesRequest, metadata={"description": "Run rules; without them the limits alone."})


class EwmaChartRequest(f.RequestShape):
    """An EWMA of a normal statistic."""

    smoothing = f.StrictNumber(
        required=True,
        least=memory.SMALLEST_SMOOTHING,
        most=1,
        metadata={"description": "Weight of the newest point (lambda)."},
    )
    limit = f.StrictNumber(
        required=True,
        above=0,
        most=memory.LARGEST_LIMIT,
        metadata={"description": "Limits lie this many standard deviations of the EWMA out (L)."},
    )
    limits = f.Choice(
        "asymptotic",
        "time-varying",
        load_default="asymptotic",
        metadata={
            "description": "Which standard deviation: the one in the long run, or the exact one of each point."
        },
    )
    sides = f.Choice("two", "upper", load_default="two", metadata={"description": "Which limits there are."})
    start = f.StrictNumber(
        least=-10,
        most=10,
        load_default=0.0,
        metadata={"description": "Head start, in sigma of the statistic."},
    )
    subgroup_size = f.StrictInteger(
        least=1,
        most=LARGEST_SIZE,
        load_default=1,
        metadata={"description": "Values in each plotted mean; 1 unless given."},
    )


class CusumChartRequest(f.RequestShape):
    """A tabular CUSUM of a normal statistic."""

    reference = f.StrictNumber(
        required=True,
        least=0,
        most=memory.LARGEST_REFERENCE,
        metadata={"description": "Reference value k, in sigma of the statistic."},
    )
    decision = f.StrictNumber(
        required=True,
        above=0,
        most=memory.LARGEST_DECISION,
        metadata={"description": "Decision interval h, in sigma of the statistic."},
    )
    sides = f.Choice(
        "two", "upper", "lower", load_default="two", metadata={"description": "Which sums there are."}
    )
    head_start = f.StrictNumber(
        least=0,
        most=memory.LARGEST_DECISION,
        load_default=0.0,
        metadata={"description": "Where the sums start, in sigma of the statistic; 0 unless given."},
    )
    subgroup_size = f.StrictInteger(
        least=1,
        most=LARGEST_SIZE,
        load_default=1,
        metadata={"description": "Values in each plotted mean; 1 unless given."},
    )


class RunLengthRequest(f.RequestShape):
    """A chart with known parameters, and the shifts for which its run length is asked."""

    shewhart = f.Object(ShewhartRequest, metadata={"description": "A chart of a normal statistic; or else:"})
    ewma = f.Object(EwmaChartRequest, metadata={"description": "An EWMA of it; or else:"})
    cusum = f.Object(CusumChartRequest, metadata={"description": "A CUSUM of it; or else:"})
    counts = f.Object(CountChartRequest, metadata={"description": "A chart of counts."})
    shifts = f.NumberList(
        least=-100,
        most=100,
        max_items=MOST_RUN_LENGTHS,
        metadata={
            "description": "Shifts of the mean, in standard deviations of single values; 0 is in control. Not for "
            "counts."
        },
    )
    scales = f.NumberList(
        above=0,
        most=100,
        max_items=MOST_RUN_LENGTHS,
        metadata={
            "description": "Factor on sigma that goes with each shift; 1 unless given. Not for counts."
        },
    )
    factors = f.NumberList(
        above=0,
        most=1000,
        max_items=MOST_RUN_LENGTHS,
        metadata={"description": "For counts: factors on the mean; 1 is in control."},
    )
    interval_hours = f.StrictNumber(
        **HOURS, metadata={"description": "Hours between points, for times to signal."}
    )
    within_points = f.IntegerList(
        least=1,
        most=1_000_000,
        max_items=50,
        metadata={
            "description": "Numbers of points for which the probability of a signal within them is asked."
        },
    )


class PercentileAnswer(f.AnswerShape):
    """A percentile of the run length."""

    probability = f.StrictNumber(required=True, metadata={"description": "Of a signal within these points."})
    points = f.StrictInteger(required=True, metadata={"description": "The fewest points that reach it."})


class WithinAnswer(f.AnswerShape):
    """The probability of a signal within so many points."""

    points = f.StrictInteger(required=True, metadata={"description": "So many points."})
    probability = f.StrictNumber(required=True, metadata={"description": "Of a signal within them."})


class RunLengthAnswer(f.AnswerShape):
    """The run length at one shift, from a fresh start to the first signal, that point included."""

    shift = f.StrictNumber(
        required=True, allow_none=True, metadata={"description": "In standard deviations of single values."}
    )
    scale = f.StrictNumber(required=True, allow_none=True, metadata={"description": "Factor on sigma."})
    factor = f.StrictNumber(
        required=True, allow_none=True, metadata={"description": "Factor on the mean count."}
    )
    arl = f.StrictNumber(required=True, metadata={"description": "Average run length, in points."})
    sd = f.StrictNumber(required=True, metadata={"description": "Standard deviation of the run length."})
    percentiles = f.ObjectList(
        PercentileAnswer, required=True, metadata={"description": "Of the run length."}
    )
    within = f.ObjectList(
        WithinAnswer, required=True, metadata={"description": "As asked by `within_points`."}
    )
    ats_hours = f.StrictNumber(
        required=True,
        allow_none=True,
        metadata={
            "description": "Average time to signal where an interval is given; the shift just after a point."
        },
    )
    method = f.StrictString(required=True, metadata={"description": "How it was computed."})
    accuracy = f.StrictString(required=True, metadata={"description": "How exact the mean is."})


class RunLengthsAnswer(f.AnswerShape):
    """Run lengths in the order of the shifts or factors."""

    run_lengths = f.ObjectList(RunLengthAnswer, required=True, metadata={"description": "One for each."})
    provenance = PROVENANCE


def one_chart(loaded: dict[str, Any], kinds: tuple[str, ...]) -> str:
    """Which of the kinds of chart was given. Raises UnusableParameter unless it is one."""
    given = [kind for kind in kinds if kind in loaded]
    if len(given) != 1:
        raise UnusableParameter.of(
            "one-chart", f"Give exactly one chart: {', '.join(kinds)}.", *(given[1:2] or kinds[:1])
        )
    return given[0]


def count_basis(loaded: dict[str, Any]) -> LimitBasis:
    """The limits of a chart of counts. Raises UnusableParameter when they are given twice."""
    multiple, probability = loaded.get("sigma_multiple"), loaded.get("false_alarm_probability")
    if probability is None:
        return LimitBasis("sigma", 3.0 if multiple is None else multiple, None)
    if multiple is not None:
        raise UnusableParameter.of(
            "limits-twice", "Place the limits by one of them only.", "counts", "false_alarm_probability"
        )
    return LimitBasis("probability", None, probability)


def shifts_of(loaded: dict[str, Any]) -> list[tuple[float, float]]:
    """Pairs of shift and scale. Raises UnusableParameter for lists of unequal length."""
    shifts = loaded.get("shifts")
    scales = loaded.get("scales")
    if shifts is None:
        shifts = np.zeros(1) if scales is None else np.zeros(len(scales))
        if scales is None:
            shifts = np.array((0.0, *USUAL_SHIFTS))
    if scales is None:
        scales = np.ones(len(shifts))
    if len(scales) != len(shifts):
        raise UnusableParameter.of(
            "unequal-length",
            f"There are {len(scales)} scales for {len(shifts)} shifts; give one each.",
            "scales",
        )
    return list(zip(shifts.tolist(), scales.tolist(), strict=True))


# ---------------------------------------------------------------------------------------------------
# Charts with memory


class _MemoryDesignRequest(f.RequestShape):
    in_control_arl = f.StrictNumber(
        required=True,
        least=LOWEST_ARL,
        most=HIGHEST_ARL,
        metadata={"description": "Points between false alarms on average, from the start of the chart."},
    )
    shift = f.StrictNumber(
        least=SMALLEST_MEMORY_SHIFT,
        most=memory.LARGEST_SHIFT,
        metadata={
            "description": "Shift to find soonest, in standard deviations of the plotted statistic; asks for the "
            "optimal chart."
        },
    )
    state = f.Choice(
        "zero-state",
        "steady-state",
        load_default="zero-state",
        metadata={"description": "Whether the shift is there from the start, or comes after long control."},
    )
    interval_hours = f.StrictNumber(
        **HOURS, metadata={"description": "Hours between points, for times to signal."}
    )
    shifts = f.NumberList(
        least=-memory.LARGEST_SHIFT,
        most=memory.LARGEST_SHIFT,
        max_items=MOST_SHIFTS,
        metadata={"description": "Shifts of the table of run lengths; multiples of `shift` unless given."},
    )


class EwmaDesignRequest(_MemoryDesignRequest):
    """An EWMA to be designed: the optimal one for a shift, or the limit for a smoothing you chose."""

    smoothing = f.StrictNumber(
        least=memory.SMALLEST_SMOOTHING,
        most=1,
        metadata={"description": "A weight you chose: asks for its limit alone."},
    )
    limits = f.Choice(
        "asymptotic",
        "time-varying",
        load_default="asymptotic",
        metadata={"description": "Which standard deviation of the EWMA the limit multiplies."},
    )
    sides = f.Choice("two", "upper", load_default="two", metadata={"description": "Which limits there are."})


class CusumDesignRequest(_MemoryDesignRequest):
    """A CUSUM to be designed: the optimal one for a shift, or the decision interval for your reference value."""

    reference = f.StrictNumber(
        least=0,
        most=memory.LARGEST_REFERENCE,
        metadata={"description": "A reference value you chose: asks for its decision interval alone."},
    )
    sides = f.Choice(
        "two", "upper", "lower", load_default="two", metadata={"description": "Which sums there are."}
    )
    head_start_fraction = f.StrictNumber(
        least=0,
        most=0.95,
        load_default=0.0,
        metadata={"description": "Head start over the decision interval; at most 0.5 with two sides."},
    )


class EwmaDesignAnswer(f.AnswerShape):
    """What was asked for, else null."""

    limit = f.StrictNumber(
        required=True, allow_none=True, metadata={"description": "L for the smoothing you chose."}
    )
    optimal = f.Object(
        derive.answer(EwmaDesign),
        required=True,
        allow_none=True,
        metadata={"description": "The EWMA that finds the shift soonest at that in-control run length."},
    )
    provenance = PROVENANCE


class CusumDesignAnswer(f.AnswerShape):
    """What was asked for, else null."""

    decision = f.StrictNumber(
        required=True, allow_none=True, metadata={"description": "h for the reference value you chose."}
    )
    optimal = f.Object(
        derive.answer(CusumDesign),
        required=True,
        allow_none=True,
        metadata={"description": "The CUSUM that finds the shift soonest at that in-control run length."},
    )
    provenance = PROVENANCE
