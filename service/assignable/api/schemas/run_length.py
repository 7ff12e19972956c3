"""Shapes of run lengths: a chart with known parameters, and shifts."""

from __future__ import annotations

from typing import Any

import numpy as np

from ...spc.charts.common import LimitBasis
from ...spc.charts.mewma import LARGEST_LIMIT as LARGEST_MEWMA_LIMIT
from ...spc.charts.vectors import MOST_VARIABLES
from ...spc.design.subgroups import LARGEST_SIZE
from ...spc.errors import UnusableParameter
from ...spc.runlength import memory, mewma, moving
from .. import fields as f
from .common import PROVENANCE, RulesRequest
from .designs import HOURS, USUAL_SHIFTS

MOST_RUN_LENGTHS = 50
KINDS = ("shewhart", "ewma", "cusum", "moving_average", "mewma", "counts")


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


class MovingAverageChartRequest(f.RequestShape):
    """A moving average of a normal statistic."""

    span = f.StrictInteger(
        required=True,
        least=2,
        most=moving.LONGEST_SPAN,
        metadata={"description": "Points in each average."},
    )
    sigma_multiple = f.StrictNumber(
        above=0,
        most=10,
        load_default=3.0,
        metadata={
            "description": "Limits lie this many standard deviations of each average out; 3 unless given."
        },
    )
    subgroup_size = f.StrictInteger(
        least=1,
        most=LARGEST_SIZE,
        load_default=1,
        metadata={"description": "Values in each plotted mean; 1 unless given."},
    )


class MewmaChartRequest(f.RequestShape):
    """An EWMA of several normal variables, its statistic a distance from the mean."""

    variables = f.StrictInteger(
        required=True,
        least=2,
        most=MOST_VARIABLES,
        metadata={"description": "Variables charted together."},
    )
    smoothing = f.StrictNumber(
        required=True,
        least=mewma.SMALLEST_SMOOTHING_EXACT,
        most=1,
        metadata={
            "description": "Weight of the newest point (lambda); with 1 it is the T-squared chart. With "
            f"`time-varying` limits at least {mewma.SMALLEST_SMOOTHING_EXACT_OF_MANY} for more than "
            f"{mewma.FEW_VARIABLES} variables."
        },
    )
    limit = f.StrictNumber(
        above=0,
        most=LARGEST_MEWMA_LIMIT,
        metadata={"description": "Limit of the statistic (h); or else:"},
    )
    in_control_arl = f.StrictNumber(
        least=mewma.SHORTEST_ARL,
        most=mewma.LONGEST_ARL,
        metadata={"description": "Points between false alarms, from which the limit follows."},
    )
    limits = f.Choice(
        "asymptotic",
        "time-varying",
        load_default="asymptotic",
        metadata={
            "description": "Which covariance of the smoothed vector: the one in the long run, or that of each point."
        },
    )
    subgroup_size = f.StrictInteger(
        least=1,
        most=LARGEST_SIZE,
        load_default=1,
        metadata={"description": "Pieces in each plotted mean vector; 1 unless given."},
    )


class RunLengthRequest(f.RequestShape):
    """A chart with known parameters, and the shifts for which its run length is asked."""

    shewhart = f.Object(ShewhartRequest, metadata={"description": "A chart of a normal statistic; or else:"})
    ewma = f.Object(EwmaChartRequest, metadata={"description": "An EWMA of it; or else:"})
    cusum = f.Object(CusumChartRequest, metadata={"description": "A CUSUM of it; or else:"})
    moving_average = f.Object(
        MovingAverageChartRequest, metadata={"description": "A moving average of it; or else:"}
    )
    mewma = f.Object(MewmaChartRequest, metadata={"description": "An EWMA of several variables; or else:"})
    counts = f.Object(CountChartRequest, metadata={"description": "A chart of counts."})
    shifts = f.NumberList(
        least=-100,
        most=100,
        max_items=MOST_RUN_LENGTHS,
        metadata={
            "description": "Shifts of the mean, in standard deviations of single values; 0 is in control. Of several "
            "variables, the distance of the mean vector in their own standard deviations and correlations "
            "(Mahalanobis). Not for counts."
        },
    )
    scales = f.NumberList(
        above=0,
        most=100,
        max_items=MOST_RUN_LENGTHS,
        metadata={
            "description": "Factor on sigma that goes with each shift; 1 unless given. Not for counts, nor for several "
            "variables."
        },
    )
    factors = f.NumberList(
        above=0,
        most=1000,
        max_items=MOST_RUN_LENGTHS,
        metadata={"description": "For counts: factors on the proportion or rate; 1 is in control."},
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
        required=True, allow_none=True, metadata={"description": "Factor on the proportion or rate."}
    )
    arl = f.StrictNumber(required=True, metadata={"description": "Average run length, in points."})
    sd = f.StrictNumber(required=True, metadata={"description": "Standard deviation of the run length."})
    percentiles = f.ObjectList(
        PercentileAnswer, required=True, metadata={"description": "Of the run length."}
    )
    within = f.ObjectList(
        WithinAnswer, required=True, metadata={"description": "As asked by `within_points`."}
    )
    steady_state_arl = f.StrictNumber(
        required=True,
        allow_none=True,
        metadata={
            "description": "Average points to the signal for a shift that comes after long operation in control "
            "without a signal; null where it is not computed."
        },
    )
    ats_hours = f.StrictNumber(
        required=True,
        allow_none=True,
        metadata={
            "description": "Average time to signal where an interval is given, for a shift that comes just after a "
            "point of a fresh chart: the interval times `arl`."
        },
    )
    steady_state_ats_hours = f.StrictNumber(
        required=True,
        allow_none=True,
        metadata={
            "description": "Average time to signal where an interval is given, for a shift at a random moment of long "
            "operation: the interval times (`steady_state_arl` - 1/2)."
        },
    )
    method = f.StrictString(
        required=True,
        metadata={"description": "How it was computed: the most exact way there is for this chart."},
    )
    accuracy = f.StrictString(required=True, metadata={"description": "How exact the mean is, relatively."})


class RunLengthsAnswer(f.AnswerShape):
    """Run lengths in the order of the shifts or factors."""

    run_lengths = f.ObjectList(RunLengthAnswer, required=True, metadata={"description": "One for each."})
    provenance = PROVENANCE


def one_chart(loaded: dict[str, Any]) -> str:
    """Which of the kinds of chart was given. Raises UnusableParameter unless it is one."""
    given = [kind for kind in KINDS if kind in loaded]
    if len(given) != 1:
        raise UnusableParameter.of(
            "one-chart", f"Give exactly one chart: {', '.join(KINDS)}.", *(given[1:2] or KINDS[:1])
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
