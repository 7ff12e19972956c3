"""Shapes of chart design requests and answers."""

from __future__ import annotations

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
from ...spc.runlength import memory
from .. import fields as f
from . import derive
from .common import CAUTIONS, PROVENANCE, CautionAnswer, RulesRequest

HOURS = {"least": 1e-6, "most": 1e6}
MOST_PLANS = 100
USUAL_SHIFTS = (0.25, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0)


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
        RulesRequest,
        metadata={
            "description": "Run rules, for the operating characteristics of a plan; `plan` and `comparison` go by the "
            "limits alone, and a caution says so."
        },
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
        metadata={"description": "The plan that achieves what `detect` asks, by its limits alone."},
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
        metadata={"description": "The candidates by their limits alone, the quickest first."},
    )
    cautions = f.ObjectList(CautionAnswer, **CAUTIONS)
    provenance = PROVENANCE


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
        metadata={
            "description": "Which standard deviation of the EWMA the limit multiplies. With `time-varying` the "
            "smoothing is 0.01 or more, 0.02 beyond 1,000 and 0.05 beyond a million points between false alarms."
        },
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
