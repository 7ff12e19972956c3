"""Shapes of the economic design of a mean chart."""

from __future__ import annotations

from typing import Any

from ...spc.design import economic
from ...spc.design.economic import EconomicDesign, ProcessEconomics, Requirements
from .. import fields as f
from . import derive
from .common import PROVENANCE, RulesRequest
from .designs import HOURS, PlanRequest

_COST = {"least": 0.0, "most": economic.LARGEST_COST}
_TIME = {"least": 0.0, "most": economic.LONGEST_HOURS}


def _process(name: str) -> dict[str, str]:
    return derive.text_of(ProcessEconomics, name)


def _required(name: str) -> dict[str, str]:
    return derive.text_of(Requirements, name)


def _cost(name: str) -> f.StrictNumber:
    return f.StrictNumber(required=True, **_COST, metadata=_process(name))


def _hours(name: str) -> f.StrictNumber:
    return f.StrictNumber(load_default=0.0, **_TIME, metadata=_process(name))


class ProcessEconomicsRequest(f.RequestShape):
    """The process, what it costs and how long things take; all costs in one unit of money of your choice."""

    mean_hours_to_shift = f.StrictNumber(
        required=True,
        least=economic.SHORTEST_MEAN,
        most=economic.LONGEST_MEAN,
        metadata=_process("mean_hours_to_shift"),
    )
    shift = f.StrictNumber(
        required=True,
        least=-economic.LARGEST_SHIFT,
        most=economic.LARGEST_SHIFT,
        metadata=_process("shift"),
    )
    cost_per_hour_in_control = _cost("cost_per_hour_in_control")
    cost_per_hour_out_of_control = _cost("cost_per_hour_out_of_control")
    false_alarm_cost = _cost("false_alarm_cost")
    repair_cost = _cost("repair_cost")
    cost_per_sample = _cost("cost_per_sample")
    cost_per_piece = _cost("cost_per_piece")
    hours_per_piece = _hours("hours_per_piece")
    hours_to_search_false_alarm = _hours("hours_to_search_false_alarm")
    hours_to_find_cause = _hours("hours_to_find_cause")
    hours_to_repair = _hours("hours_to_repair")
    runs_while_searching = f.StrictBoolean(load_default=True, metadata=_process("runs_while_searching"))
    runs_while_repairing = f.StrictBoolean(load_default=True, metadata=_process("runs_while_repairing"))
    hours_until_noticed_without_chart = f.StrictNumber(
        allow_none=True,
        load_default=None,
        least=0.0,
        most=100.0 * economic.LONGEST_MEAN,
        metadata=_process("hours_until_noticed_without_chart"),
    )


class RequirementsRequest(f.RequestShape):
    """What the plan must keep to, whatever it costs."""

    smallest_in_control_arl = f.StrictNumber(
        least=1.1, most=1e8, metadata=_required("smallest_in_control_arl")
    )
    shortest_hours_between_false_alarms = f.StrictNumber(
        least=1e-6, most=1e12, metadata=_required("shortest_hours_between_false_alarms")
    )
    longest_ats_hours = f.StrictNumber(least=1e-6, most=1e12, metadata=_required("longest_ats_hours"))
    smallest_size = f.StrictInteger(
        least=1, most=economic.LARGEST_SIZE, load_default=1, metadata=_required("smallest_size")
    )
    largest_size = f.StrictInteger(
        least=1,
        most=economic.LARGEST_SIZE,
        load_default=economic.LARGEST_SIZE,
        metadata=_required("largest_size"),
    )
    shortest_interval_hours = f.StrictNumber(**HOURS, metadata=_required("shortest_interval_hours"))
    longest_interval_hours = f.StrictNumber(**HOURS, metadata=_required("longest_interval_hours"))
    sigma_multiple = f.StrictNumber(
        least=economic.SMALLEST_MULTIPLE, most=economic.LARGEST_MULTIPLE, metadata=_required("multiple")
    )


class EconomicDesignRequest(f.RequestShape):
    """What quality, sampling, alarms and repairs cost: asks for the sampling plan that costs least an hour."""

    process = f.Object(
        ProcessEconomicsRequest, required=True, metadata={"description": "The process and its costs."}
    )
    requirements = f.Object(
        RequirementsRequest, metadata={"description": "What the plan must keep to besides."}
    )
    present = f.Object(
        PlanRequest, metadata={"description": "Your present plan, to be priced beside the best."}
    )
    rules = f.Object(
        RulesRequest,
        metadata={
            "description": "Run rules that the chart is to have besides its limits, whose multiple is then held."
        },
    )


class EconomicDesignAnswer(f.AnswerShape):
    """The plan of least cost, and whether a chart pays at all."""

    design = f.Object(
        derive.answer(EconomicDesign),
        required=True,
        metadata={"description": "The best plan, what surrounds it, and the answer in plain sentences."},
    )
    provenance = PROVENANCE


def requirements_of(loaded: dict[str, Any]) -> Requirements | None:
    """The requirements asked for, if any."""
    if "requirements" not in loaded:
        return None
    given = dict(loaded["requirements"])
    multiple = given.pop("sigma_multiple", None)
    return Requirements(multiple=multiple, **given)
