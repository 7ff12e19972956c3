"""Shapes of the designs of charts of counts, of baselines, and of charts side by side."""

from __future__ import annotations

from typing import Any

from ...spc.design import attributes, baseline, comparison
from ...spc.factors import LARGEST_SIZE
from ...spc.runlength import estimated
from .. import fields as f
from . import derive
from .common import PROVENANCE

MOST_LEVELS = 100
_LEVEL: dict[str, Any] = {"least": attributes.SMALLEST_LEVEL, "most": attributes.LARGEST_MEAN}


class CountDetectRequest(f.RequestShape):
    """The worsening, or the improvement, that a sample is to find."""

    shifted_level = f.StrictNumber(
        required=True,
        **_LEVEL,
        metadata={
            "description": "The level to find: proportion nonconforming (`p`, `np`) or nonconformities a unit."
        },
    )
    power = f.StrictNumber(
        above=0,
        below=1,
        load_default=0.5,
        metadata={
            "description": "Least probability that the first sample at that level signals; one half unless given."
        },
    )


class AttributeDesignRequest(f.RequestShape):
    """The design of a chart of counts: how many to inspect, and what the chart then finds."""

    chart = f.Choice(
        *attributes.CHARTS,
        required=True,
        metadata={
            "description": "`p`, `np`: nonconforming pieces of those inspected. `c`, `u`: nonconformities, of which a "
            "unit may have several."
        },
    )
    level = f.StrictNumber(
        required=True,
        **_LEVEL,
        metadata={
            "description": "In control: proportion nonconforming (0.02 is 2 %), or nonconformities a unit."
        },
    )
    size = f.StrictNumber(
        least=1e-6,
        most=attributes.LARGEST_SIZE,
        metadata={
            "description": "Pieces (`p`, `np`; a whole number) or units (`c`, `u`) that you inspect a sample: asks "
            "what that sample finds."
        },
    )
    detect = f.Object(
        CountDetectRequest, metadata={"description": "Asks for the least sample that finds this level."}
    )
    lower_limit_size = f.StrictBoolean(
        load_default=False,
        metadata={
            "description": "Asks for the least sample whose lower limit a count can lie below, so that an improvement "
            "can signal."
        },
    )
    levels = f.NumberList(
        **_LEVEL,
        max_items=MOST_LEVELS,
        metadata={
            "description": "Levels for the operating characteristics; half to five times `level` unless given."
        },
    )
    sigma_multiple = f.StrictNumber(
        least=attributes.SMALLEST_MULTIPLE,
        most=attributes.LARGEST_MULTIPLE,
        metadata={"description": "Limits lie this many sigma of the count out; 3 unless given. Or else:"},
    )
    false_alarm_probability = f.StrictNumber(
        least=attributes.SMALLEST_ALARM,
        most=attributes.LARGEST_ALARM,
        metadata={"description": "Limits at exact equal tails of this probability, both together."},
    )


class AttributeDesignAnswer(f.AnswerShape):
    """What was asked for, else null."""

    detection = f.Object(
        derive.answer(attributes.DetectionSize),
        required=True,
        allow_none=True,
        metadata={"description": "The least sample that finds the level of `detect`, exactly."},
    )
    lower_limit = f.Object(
        derive.answer(attributes.LowerLimitSize),
        required=True,
        allow_none=True,
        metadata={"description": "The least sample with a lower limit that works."},
    )
    characteristics = f.Object(
        derive.answer(attributes.CountCharacteristics),
        required=True,
        metadata={
            "description": "What the sample of `size` finds; where it was not given, the sample that was found."
        },
    )
    provenance = PROVENANCE


class BaselineTableRequest(f.RequestShape):
    """Baselines to be set side by side: every number of subgroups with every size."""

    subgroups = f.IntegerList(
        required=True,
        least=estimated.FEWEST_SUBGROUPS,
        most=estimated.MOST_SUBGROUPS,
        max_items=50,
        metadata={"description": f"Numbers of subgroups; at most {baseline.MOST_CELLS} cells in all."},
    )
    sizes = f.IntegerList(
        required=True,
        least=1,
        most=LARGEST_SIZE,
        max_items=50,
        metadata={"description": "Sizes of a subgroup; 1, for single values, stands alone."},
    )


class BaselineDesignRequest(f.RequestShape):
    """A baseline, taken or planned: how far its limits can be trusted."""

    subgroups = f.StrictInteger(
        required=True,
        least=estimated.FEWEST_SUBGROUPS,
        most=estimated.MOST_SUBGROUPS,
        metadata={"description": "Subgroups in the baseline; values, for a chart of single values."},
    )
    size = f.StrictInteger(
        required=True,
        least=1,
        most=LARGEST_SIZE,
        metadata={"description": "Values in a subgroup; 1 for a chart of single values."},
    )
    sigma_estimator = f.Choice(
        *estimated.ESTIMATORS,
        metadata={
            "description": "How sigma is estimated: `mean-range` unless given, of single values `mean-moving-range`."
        },
    )
    sigma_multiple = f.StrictNumber(
        least=estimated.SMALLEST_MULTIPLE,
        most=estimated.LARGEST_MULTIPLE,
        load_default=3.0,
        metadata={"description": "Limits lie this many sigma of the plotted statistic out; 3 unless given."},
    )
    in_control_arl = f.StrictNumber(
        least=estimated.SHORTEST_ARL,
        most=estimated.LONGEST_ARL,
        metadata={
            "description": "Points between false alarms to be guaranteed; what the limits promise with parameters "
            "known unless given."
        },
    )
    confidence = f.StrictNumber(
        least=0.5,
        most=0.999,
        load_default=0.9,
        metadata={
            "description": "Share of all baselines for which the guarantee is to hold; 0.9 unless given."
        },
    )
    share_of_nominal = f.StrictNumber(
        least=0.05,
        most=baseline.LARGEST_SHARE,
        load_default=0.8,
        metadata={
            "description": "A baseline is enough when it keeps this share of the promised run length; 0.8 unless given."
        },
    )
    risk = f.StrictNumber(
        least=0.001,
        most=baseline.LARGEST_RISK,
        load_default=0.1,
        metadata={"description": "Probability allowed of a baseline that keeps less; 0.1 unless given."},
    )
    percentiles = f.NumberList(
        least=0.001,
        most=0.999,
        max_items=estimated.MOST_PERCENTILES,
        metadata={"description": "Percentiles of the run length over baselines, as probabilities."},
    )
    table = f.Object(
        BaselineTableRequest, metadata={"description": "Asks for a table of baselines of other sizes."}
    )


class BaselineDesignAnswer(f.AnswerShape):
    """How far the limits can be trusted, and the table where it was asked for."""

    assessment = f.Object(
        derive.answer(baseline.BaselineDesign),
        required=True,
        metadata={"description": "Of the baseline of that size."},
    )
    table = f.Object(
        derive.answer(baseline.BaselineTable),
        required=True,
        allow_none=True,
        metadata={"description": "Baselines of other sizes; null unless asked for."},
    )
    provenance = PROVENANCE


class ComparisonRequest(f.RequestShape):
    """One process, the shift that matters, and the charts to set side by side for it."""

    shift = f.StrictNumber(
        required=True,
        least=0.02,
        most=10,
        metadata={
            "description": "The shift of the mean that matters, in standard deviations of single pieces; times the "
            "root of the sample's size it is 0.25 to 10."
        },
    )
    pieces_per_hour = f.StrictNumber(
        required=True,
        least=1e-6,
        most=1e6,
        metadata={"description": "Pieces an hour that are measured, alike for every chart."},
    )
    hours_between_false_alarms = f.StrictNumber(
        required=True,
        least=1e-5,
        most=1e12,
        metadata={
            "description": "Average hours between false alarms, alike for every chart: 20 to 3000 samples."
        },
    )
    sizes = f.IntegerList(
        least=1,
        most=comparison.LARGEST_SIZE,
        max_items=comparison.MOST_SIZES,
        metadata={
            "description": "Sizes of sample to try, each as often as the pieces an hour allow; 1 and 5 unless given."
        },
    )
    charts = f.ChoiceList(
        *comparison.KINDS,
        metadata={
            "description": "The charts to compare; all unless given. `mean-with-rules`: the rules of Western "
            "Electric (1956), widened to the same false-alarm rate."
        },
    )


class ComparisonAnswer(f.AnswerShape):
    """The charts, the quickest first, and which to take."""

    comparison = f.Object(
        derive.answer(comparison.ChartComparison),
        required=True,
        metadata={"description": "At equal false-alarm rate and equal effort."},
    )
    provenance = PROVENANCE
