"""Operations of chart design."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from ...spc.design import attributes, baseline, comparison, economic, subgroups
from ...spc.design import memory as designs
from ...spc.errors import UnusableParameter, Where
from ...spc.explain import designs as worked
from ...spc.explain.steps import Step
from ...spc.runlength.estimated import PERCENTILES
from ...spc.runlength.memory import SMALLEST_SMOOTHING
from .. import problems
from ..contract import Contract
from ..schemas.common import cautions, located, rules_of
from ..schemas.design_cases import (
    AttributeDesignAnswer,
    AttributeDesignRequest,
    BaselineDesignAnswer,
    BaselineDesignRequest,
    ComparisonAnswer,
    ComparisonRequest,
)
from ..schemas.designs import (
    USUAL_SHIFTS,
    CusumDesignAnswer,
    CusumDesignRequest,
    DetectRequest,
    EwmaDesignAnswer,
    EwmaDesignRequest,
    SubgroupDesignAnswer,
    SubgroupDesignRequest,
)
from ..schemas.economic import (
    EconomicDesignAnswer,
    EconomicDesignRequest,
    ProcessEconomicsRequest,
    requirements_of,
)
from .run_length import TAG, TAG_TEXT

USUAL_LEVELS = (0.5, 0.75, 1.0, 1.25, 1.5, 2.0, 2.5, 3.0, 4.0, 5.0)


def _plan(loaded: dict[str, Any]) -> subgroups.SamplingPlan:
    return subgroups.SamplingPlan(loaded["size"], loaded["interval_hours"], loaded["sigma_multiple"])


def design_subgroups(loaded: dict[str, Any]) -> dict[str, Any]:
    """The design of a mean chart."""
    if not any(name in loaded for name in ("detect", "present", "candidates")):
        raise UnusableParameter.of(
            "nothing-asked",
            "Ask for a plan with `detect`, or give a `present` plan or `candidates`.",
            "detect",
        )
    shift, moment = loaded["shift"], loaded["shift_moment"]
    rules = rules_of(loaded.get("rules")) or None
    shifts = loaded.get("shifts", np.array(USUAL_SHIFTS))

    def characteristics(plan: subgroups.SamplingPlan | subgroups.PlanPerformance) -> Any:
        return subgroups.operating_characteristics(
            plan.size, plan.interval_hours, plan.multiple, shifts, rules
        )

    plan = present = comparison = found = None
    if "detect" in loaded:
        asked = loaded["detect"]
        places: dict[str, Where] = {name: ("detect", name) for name in DetectRequest._declared_fields}
        with located(multiple=("detect", "sigma_multiple"), **places):
            plan = subgroups.plan(
                shift,
                power=asked.get("power"),
                ats_hours=asked.get("ats_hours"),
                shift_moment=moment,
                multiple=asked.get("sigma_multiple"),
                in_control_arl=asked.get("in_control_arl"),
                false_alarm_probability=asked.get("false_alarm_probability"),
                interval_hours=asked.get("interval_hours"),
                hourly_pieces=asked.get("hourly_pieces"),
            )
        found = characteristics(plan)
    if "present" in loaded:
        present = characteristics(_plan(loaded["present"]))
    if loaded.get("candidates"):
        comparison = subgroups.compare(
            [_plan(one) for one in loaded["candidates"]], shift, shift_moment=moment
        )
    return {
        "plan": plan,
        "characteristics": found,
        "present": present,
        "comparison": comparison,
        "cautions": cautions(
            () if rules is None or (plan is None and comparison is None) else (subgroups.RULES_LEFT_OUT,)
        ),
    }


def design_ewma(loaded: dict[str, Any]) -> dict[str, Any]:
    """The optimal EWMA for a shift, the limit for a smoothing, or both."""
    _asked(loaded, "smoothing")
    varying, two = loaded["limits"] == "time-varying", loaded["sides"] == "two"
    limit = best = None
    least = _smallest_smoothing(varying, loaded["in_control_arl"])
    if "smoothing" in loaded:
        if loaded["smoothing"] < least:
            raise UnusableParameter.of(
                "too-much-work",
                f"With time-varying limits and so few false alarms the smoothing constant must be {least:g} or more.",
                "smoothing",
            )
        limit = designs.ewma_limit(
            smoothing=loaded["smoothing"],
            in_control_arl=loaded["in_control_arl"],
            time_varying=varying,
            two_sided=two,
        )
    if "shift" in loaded:
        best = designs.optimal_ewma(
            shift=loaded["shift"],
            in_control_arl=loaded["in_control_arl"],
            state=loaded["state"],
            time_varying=varying,
            two_sided=two,
            interval_hours=loaded.get("interval_hours"),
            shifts=_table(loaded),
            smallest_smoothing=least,
        )
    return {"limit": limit, "optimal": best}


def _smallest_smoothing(varying: bool, in_control_arl: float) -> float:
    """Growing limits take the longer, the longer the memory and the rarer the false alarms."""
    if not varying:
        return SMALLEST_SMOOTHING
    return 0.01 if in_control_arl <= 1_000 else 0.02 if in_control_arl <= 1_000_000 else 0.05


def design_cusum(loaded: dict[str, Any]) -> dict[str, Any]:
    """The optimal CUSUM for a shift, the decision interval for a reference value, or both."""
    _asked(loaded, "reference")
    decision = best = None
    with located(head_start=("head_start_fraction",)):
        if "reference" in loaded:
            decision = designs.cusum_decision(
                reference=loaded["reference"],
                in_control_arl=loaded["in_control_arl"],
                sides=loaded["sides"],
                head_start_fraction=loaded["head_start_fraction"],
            )
        if "shift" in loaded:
            best = designs.optimal_cusum(
                shift=loaded["shift"],
                in_control_arl=loaded["in_control_arl"],
                sides=loaded["sides"],
                head_start_fraction=loaded["head_start_fraction"],
                state=loaded["state"],
                interval_hours=loaded.get("interval_hours"),
                shifts=_table(loaded),
            )
    return {"decision": decision, "optimal": best}


def _asked(loaded: dict[str, Any], parameter: str) -> None:
    if parameter not in loaded and "shift" not in loaded:
        raise UnusableParameter.of(
            "nothing-asked",
            f"Give the shift to find soonest, or a {parameter} of your own to complete.",
            "shift",
        )


def _table(loaded: dict[str, Any]) -> tuple[float, ...] | None:
    return tuple(loaded["shifts"].tolist()) if "shifts" in loaded else None


def design_attributes(loaded: dict[str, Any]) -> dict[str, Any]:
    """The design of a chart of counts."""
    if not (loaded["lower_limit_size"] or "size" in loaded or "detect" in loaded):
        raise UnusableParameter.of(
            "nothing-asked",
            "Give the size you inspect, or ask for one with `detect` or `lower_limit_size`.",
            "size",
        )
    chart, level = loaded["chart"], loaded["level"]
    limits = {name: loaded.get(name) for name in ("sigma_multiple", "false_alarm_probability")}
    detection = lower = None
    if "detect" in loaded:
        asked = loaded["detect"]
        with located(shifted_level=("detect", "shifted_level"), power=("detect", "power")):
            detection = attributes.detection_size(
                chart, level, asked["shifted_level"], asked["power"], **limits
            )
    if loaded["lower_limit_size"]:
        lower = attributes.lower_limit_size(chart, level, **limits)
    found = detection or lower
    size = loaded["size"] if "size" in loaded or found is None else float(found.size)
    levels = loaded["levels"].tolist() if "levels" in loaded else _usual_levels(chart, level, size)
    return {
        "detection": detection,
        "lower_limit": lower,
        "characteristics": attributes.characteristics(chart, level, size, levels, **limits),
    }


def _usual_levels(chart: str, level: float, size: float) -> list[float]:
    most = 1.0 - attributes.SMALLEST_LEVEL if chart in ("p", "np") else attributes.LARGEST_MEAN / size
    return [
        factor * level
        for factor in USUAL_LEVELS
        if attributes.SMALLEST_LEVEL <= factor * level <= most or factor == 1.0
    ]


def design_baseline(loaded: dict[str, Any]) -> dict[str, Any]:
    """How far limits from a baseline can be trusted."""
    estimator, multiple = loaded.get("sigma_estimator"), loaded["sigma_multiple"]
    percentiles = loaded.get("percentiles", np.array(PERCENTILES))
    # A run length that was not asked for is what the multiple promises.
    promised = "in_control_arl" if "in_control_arl" in loaded else "sigma_multiple"
    with located(estimator=("sigma_estimator",), multiple=("sigma_multiple",), in_control_arl=(promised,)):
        assessment = baseline.assess(
            loaded["subgroups"],
            loaded["size"],
            sigma_estimator=estimator,
            multiple=multiple,
            in_control_arl=loaded.get("in_control_arl"),
            confidence=loaded["confidence"],
            share_of_nominal=loaded["share_of_nominal"],
            risk=loaded["risk"],
            percentiles=percentiles.tolist(),
        )
    table = None
    if "table" in loaded:
        asked = loaded["table"]
        with located(
            subgroups=("table", "subgroups"),
            sizes=("table", "sizes"),
            size=("table", "sizes"),
            estimator=("sigma_estimator",),
            multiple=("sigma_multiple",),
            in_control_arl=("sigma_multiple",),
        ):
            table = baseline.table(
                asked["subgroups"].tolist(),
                asked["sizes"].tolist(),
                sigma_estimator=estimator,
                multiple=multiple,
                risk=loaded["risk"],
                confidence=loaded["confidence"],
            )
    return {"assessment": assessment, "table": table}


def design_economic(loaded: dict[str, Any]) -> dict[str, Any]:
    """The sampling plan of least cost."""
    rules = rules_of(loaded.get("rules")) or None
    names: dict[str, Where] = {name: ("process", name) for name in ProcessEconomicsRequest._declared_fields}
    with located(**names):
        found = economic.design(
            economic.ProcessEconomics(**loaded["process"]),
            requirements=requirements_of(loaded),
            present=_plan(loaded["present"]) if "present" in loaded else None,
            rules=rules,
        )
    return {"design": found}


def compare_designs(loaded: dict[str, Any]) -> dict[str, Any]:
    """Charts side by side for one shift."""
    with located(kinds=("charts",)):
        found = comparison.compare(
            loaded["shift"],
            pieces_per_hour=loaded["pieces_per_hour"],
            hours_between_false_alarms=loaded["hours_between_false_alarms"],
            sizes=tuple(loaded["sizes"].tolist()) if "sizes" in loaded else (1, 5),
            kinds=tuple(loaded.get("charts", comparison.KINDS)),
        )
    return {"comparison": found}


def explain_subgroups(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of a plan."""
    rules = rules_of(loaded.get("rules")) or None
    return worked.of_subgroups(answer["plan"], answer["present"], answer["comparison"], rules)


def explain_ewma(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of an EWMA."""
    return worked.of_ewma_design(
        loaded.get("smoothing"),
        answer["limit"],
        loaded["in_control_arl"],
        loaded["sides"] == "two",
        answer["optimal"],
        loaded.get("interval_hours"),
    )


def explain_cusum(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of a CUSUM."""
    return worked.of_cusum_design(
        loaded.get("reference"),
        answer["decision"],
        loaded["in_control_arl"],
        loaded["head_start_fraction"],
        loaded["sides"] == "two",
        answer["optimal"],
        loaded.get("interval_hours"),
    )


def explain_attributes(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of a chart of counts."""
    basis = attributes.limit_basis(
        sigma_multiple=loaded.get("sigma_multiple"),
        false_alarm_probability=loaded.get("false_alarm_probability"),
    )
    return worked.of_attributes(answer["characteristics"], answer["detection"], basis)


def explain_baseline(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of a baseline."""
    return worked.of_baseline(answer["assessment"], answer["table"])


def explain_economic(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of a cost."""
    rules = bool(rules_of(loaded.get("rules")))
    return worked.of_economic(economic.ProcessEconomics(**loaded["process"]), answer["design"], rules=rules)


def explain_comparison(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of the quickest chart."""
    return worked.of_comparison(answer["comparison"])


def register(contract: Contract) -> None:
    """Binds the operations of chart design."""
    contract.tag(TAG, TAG_TEXT)
    contract.operation(
        "POST",
        "/v1/designs/subgroups",
        operation_id="designSubgroups",
        tag=TAG,
        summary="Design of a mean chart",
        description="Size and interval for a shift to detect at a required power or time to signal; operating "
        "characteristics of a plan; candidate plans ranked by their time to signal. Parameters are taken as "
        "known. Sources: montgomery-2013, champ-woodall-1987 with rules.",
        request=SubgroupDesignRequest(),
        response=SubgroupDesignAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="designs-subgroups",
        provenance="mean-chart-design",
        explain=explain_subgroups,
    )(design_subgroups)
    contract.operation(
        "POST",
        "/v1/designs/ewma",
        operation_id="designEwma",
        tag=TAG,
        summary="Design of an EWMA chart",
        description="The smoothing and limit that find a shift soonest at a stated in-control run length, with run "
        "lengths by shift, how flat the optimum is, and the Shewhart chart at the same false-alarm rate beside it; "
        "or the limit for a smoothing of your own. Sources: crowder-1989, lucas-saccucci-1990.",
        request=EwmaDesignRequest(),
        response=EwmaDesignAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="designs-ewma",
        provenance="ewma-design",
        explain=explain_ewma,
    )(design_ewma)
    contract.operation(
        "POST",
        "/v1/designs/cusum",
        operation_id="designCusum",
        tag=TAG,
        summary="Design of a CUSUM chart",
        description="The reference value and decision interval that find a shift soonest at a stated in-control run "
        "length, with run lengths by shift, how flat the optimum is, and the Shewhart chart at the same false-alarm "
        "rate beside it; or the decision interval for a reference value of your own. Sources: page-1954, vance-1986, "
        "moustakides-1986.",
        request=CusumDesignRequest(),
        response=CusumDesignAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="designs-cusum",
        provenance="cusum-design",
        explain=explain_cusum,
    )(design_cusum)
    contract.operation(
        "POST",
        "/v1/designs/attributes",
        operation_id="designAttributes",
        tag=TAG,
        summary="Design of a chart of counts",
        description="How many to inspect: the least sample whose lower limit works, the least sample that finds a "
        "stated level with a stated power (exact, beside what the usual formula says and what that really gives); and "
        "the exact operating characteristics and run lengths of a sample, its limits decided on whole counts in exact "
        "arithmetic. Sources: montgomery-2013, duncan-1986.",
        request=AttributeDesignRequest(),
        response=AttributeDesignAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example=("designs-attributes", "designs-attributes-plan"),
        provenance="count-chart-design",
        explain=explain_attributes,
    )(design_attributes)
    contract.operation(
        "POST",
        "/v1/designs/baseline",
        operation_id="designBaseline",
        tag=TAG,
        summary="Trust in the limits of a baseline",
        description="Limits from a baseline are estimates, and so is the false-alarm rate they give. States what the "
        "in-control run length is likely to be over the baselines that might have been taken, how many subgroups keep "
        "it near what the limits promise, and the wider limits that guarantee it with a stated confidence. Sources: "
        "jensen-2006, gandy-kvaloy-2013, goedhart-2017, jardim-2020.",
        request=BaselineDesignRequest(),
        response=BaselineDesignAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example=("designs-baseline", "designs-baseline-table"),
        provenance="baseline-design",
        explain=explain_baseline,
    )(design_baseline)
    contract.operation(
        "POST",
        "/v1/designs/economic",
        operation_id="designEconomic",
        tag=TAG,
        summary="Sampling plan of least cost",
        description="Size, interval and limits of a mean chart that cost least an hour, by the model of Lorenzen and "
        "Vance with all its parameters (Duncan's is the one in which production always goes on), within statistical "
        "requirements where there are any; the cost of your present plan, of having no chart, and around the optimum; "
        "what each part costs, and which parameter matters most. Where sampling is never worth while the answer says "
        "so. Sources: lorenzen-vance-1986, duncan-1956, saniga-1989.",
        request=EconomicDesignRequest(),
        response=EconomicDesignAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example=("designs-economic", "designs-economic-duncan", "designs-economic-rules"),
        provenance="economic-design",
        explain=explain_economic,
    )(design_economic)
    contract.operation(
        "POST",
        "/v1/designs/comparison",
        operation_id="compareDesigns",
        tag=TAG,
        summary="Charts side by side for one shift",
        description="For one process and the shift that matters: a chart of means, the same with run rules, an EWMA "
        "and a CUSUM, each the best of its kind, by their time to signal at the same false-alarm rate and the same "
        "pieces measured an hour, with a plain recommendation. Sources: champ-woodall-1987, lucas-saccucci-1990, "
        "reynolds-1988.",
        request=ComparisonRequest(),
        response=ComparisonAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="designs-comparison",
        provenance="chart-comparison",
        explain=explain_comparison,
    )(compare_designs)
