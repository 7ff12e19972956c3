"""``explain``: every calculation tells its steps, each of which comes out as it says, and as the answer has it."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import pytest

from assignable.spc.charts import CHARTS
from contract import served

CALCULATIONS = [
    (operation_id, name)
    for operation_id, name in served.examples()
    if served.operations()[operation_id].provenance is not None
    and served.operations()[operation_id].method == "POST"
]
ARITHMETIC = {
    **{name: found for name, found in vars(math).items() if callable(found)},
    "pi": math.pi,
    "abs": abs,
    "max": max,
    "min": min,
    "round": round,
}
FEWEST = 3


def at(answer: Any, pointer: str) -> Any:
    found = answer
    for step in served.steps_of(pointer):
        found = found[int(step)] if isinstance(found, list) else found[step]
    return found


def checked(answer: dict[str, Any]) -> int:
    """How many steps come out, by Python's own arithmetic; fails where one does not."""
    worked = 0
    for step in answer["steps"]:
        given = {one["name"]: one["value"] for one in step["values"]}
        if step["result"] is None:
            assert step["where"] is None, step
            continue
        names = compile(step["formula"], "formula", "eval").co_names
        assert set(given) == set(names) - set(ARITHMETIC), step
        result = eval(step["formula"], {"__builtins__": {}}, {**ARITHMETIC, **given})
        assert result == pytest.approx(step["result"], rel=1e-12, abs=1e-300), step
        worked += 1
        if step["where"] is not None:
            told = at(answer, step["where"])
            assert told is not None, step
            size = max([abs(value) for value in given.values()], default=0.0)
            assert told == pytest.approx(step["result"], rel=1e-9, abs=1e-14 * min(size, 1e6)), step
    return worked


@pytest.mark.parametrize(("operation_id", "name"), CALCULATIONS)
def test_every_calculation_tells_its_steps(operation_id: str, name: str) -> None:
    request = {**served.example(name), "explain": True}
    answer = served.answer_of(operation_id, request)
    if name == "charts-recommendation":  # from a description alone: rules, and no arithmetic
        assert answer["steps"]
        return
    assert checked(answer) >= FEWEST
    assert any(step["where"] is not None for step in answer["steps"])
    for step in answer["steps"]:
        assert step["what"][0].isupper()


def test_steps_are_told_where_they_are_asked_for() -> None:
    request = served.example("xbar-r-limits")
    assert "steps" not in served.answer_of("fitXbarRLimits", request)
    assert "steps" not in served.answer_of("fitXbarRLimits", {**request, "explain": False})
    asked = served.answer_of("fitXbarRLimits", {**request, "explain": True})
    plain = served.answer_of("fitXbarRLimits", request)
    assert {**asked, "provenance": None} == {**plain, "steps": asked["steps"], "provenance": None}
    served.problem_of(
        served.call("fitXbarRLimits", {**request, "explain": "yes"}), {**request, "explain": "yes"}
    )


def test_the_contract_tells_of_it() -> None:
    for operation_id, _ in CALCULATIONS:
        assert "explain" in served.request_schema(operation_id)["properties"], operation_id
        (answer,) = served.alternatives(
            served.described(operation_id)["responses"]["200"]["content"]["application/json"]["schema"]
        )
        assert "steps" in answer["properties"], operation_id
        assert "steps" not in answer["required"]


# Carries --------------------------------------------------------------------------------------------


def cut(data: dict[str, Any], start: int, stop: int) -> dict[str, Any]:
    points = max(len(member) for member in data.values() if isinstance(member, list))
    return {
        member: value[start:stop] if isinstance(value, list) and len(value) == points else value
        for member, value in data.items()
    }


@pytest.mark.parametrize("name", list(CHARTS))
@pytest.mark.parametrize("last", [1, 4])
def test_a_judgement_that_continues(name: str, last: int) -> None:
    """The recursions of the steps start where the carry left off."""
    data, judge = served.example(f"{name}-limits")["data"], f"judge{CHARTS[name].stem}"
    limits = served.answer_of(f"fit{CHARTS[name].stem}Limits", served.example(f"{name}-limits"))["limits"]
    first = served.answer_of(judge, {"limits": limits, "data": cut(data, 0, 6)})
    request = {"limits": limits, "data": cut(data, 6, 6 + last), "carry": first["carry"], "explain": True}
    assert checked(served.answer_of(judge, request)) >= FEWEST


# Options --------------------------------------------------------------------------------------------

PROBABILITY = {"limit_basis": "probability", "false_alarm_probability": 0.01, "sigma_multiple": None}
SIGMA = {"limit_basis": "sigma", "sigma_multiple": 2.2, "false_alarm_probability": None}
RULES = {"rules": {"published": "western-electric-1956"}}
EXCLUDED = {"exclude": [{"index": 2, "reason": "torn belt"}, {"index": 0, "reason": "start"}]}
WITH_BASIS = (
    *("xbar-r", "xbar-s", "individuals", "p", "np", "c", "u", "g"),
    *("between-within", "short-run", "trend", "residual"),
)
COUNTS = {"law": "poisson", "mean": 14, "size": 1}
OPTIONS: list[tuple[str, str, dict[str, Any]]] = [
    *((f"fit{CHARTS[name].stem}Limits", f"{name}-limits", PROBABILITY) for name in WITH_BASIS),
    *((f"fit{CHARTS[name].stem}Limits", f"{name}-limits", {**SIGMA, **RULES}) for name in WITH_BASIS),
    *((f"fit{CHARTS[name].stem}Limits", f"{name}-limits", EXCLUDED) for name in CHARTS),
    *(
        ("fitXbarRLimits", "xbar-r-limits", {"sigma_estimator": one})
        for one in ("mean-range", "mean-sd", "pooled-sd", "median-range")
    ),
    ("fitXbarRLimits", "xbar-r-limits", {"joint_false_alarm_probability": 0.05}),
    ("fitXbarRLimits", "xbar-r-limits", {"guarantee": {"in_control_arl": 370}, "sigma_multiple": None}),
    ("fitXbarRLimits", "xbar-r-limits", {"standards": {"mean": 2.5, "sigma": 0.01}}),
    (
        "fitXbarRLimits",
        "xbar-r-limits",
        {"data": None, "standards": {"mean": 2.5, "sigma": 0.01}, "subgroup_size": 4, "exclude": None},
    ),
    ("fitIndividualsLimits", "individuals-limits", {"joint_false_alarm_probability": 0.05}),
    ("fitIndividualsLimits", "individuals-limits", {"sigma_estimator": "median-moving-range"}),
    *(
        ("fitIndividualsLimits", "individuals-limits-skewed", {"distribution": one})
        for one in ("lognormal", "weibull", "gamma", "box-cox")
    ),
    (
        "fitEwmaLimits",
        "ewma-limits",
        {"smoothing": 0.2, "limit": 2.8, "limit_variance": "asymptotic", "detect": None},
    ),
    (
        "fitCusumLimits",
        "cusum-limits",
        {"reference": 0.5, "decision": 3.0, "head_start": 0.5, "after_signal": "restart", "detect": None},
    ),
    (
        "fitCusumLimits",
        "cusum-limits",
        {"reference": 0.2, "decision": 1.0, "after_signal": "restart", "spread": True, "detect": None},
    ),
    ("fitMewmaLimits", "mewma-limits", {"limit_covariance": "time-varying"}),
    ("fitTSquaredLimits", "t-squared-limits", {"covariance_estimator": "sample"}),
    ("fitTSquaredLimits", "t-squared-limits", {"covariance_estimator": "successive-differences"}),
    ("fitGLimits", "g-limits", {"estimator": "unbiased"}),
    ("fitTLimits", "t-limits", {"distribution": "weibull"}),
    ("fitTLimits", "t-limits", {"distribution": "exponential"}),
    ("fitShortRunLimits", "short-run-limits", {"scale": "deviation", "centre_line": "mean"}),
    ("fitTrendLimits", "trend-limits", {"sigma_from": "residual-moving-range"}),
    *(("fitResidualLimits", "residual-limits", {"order": one}) for one in (0, 1, 3)),
    ("fitBetweenWithinLimits", "between-within-limits", {"within_statistic": "sd", "sigma_estimator": None}),
    ("fitAcceptanceLimits", "acceptance-limits", {"specification": {"upper": 2.7}}),
    ("fitAcceptanceLimits", "acceptance-limits", {"within_statistic": "sd", "sigma_estimator": None}),
    ("assessMeasurements", "capability-measurements", {"short_run": True}),
    ("assessMeasurements", "capability-measurements", {"specification": {"upper": 2.6}, "short_run": True}),
    ("assessMeasurements", "capability-measurements", {"distribution": "empirical"}),
    ("assessMeasurements", "capability-chosen-distribution", {"distribution": "weibull"}),
    (
        "assessMeasurements",
        "capability-measurements",
        {"data": None, "summary": {"mean": 2.5, "count": 50, "total_sd": 0.02}, "sigma_estimator": None},
    ),
    ("assessAttributes", "capability-attributes", {"kind": "nonconformities"}),
    ("assessConformance", "capability-conformance", {"process": None, "use_process": False}),
    *(
        (
            "computeToleranceInterval",
            "tolerance-interval",
            {"sides": one, "coverage": 0.9, "confidence": 0.9, **how},
        )
        for one in ("two-sided", "lower", "upper")
        for how in ({"method": "normal-exact"}, {"method": "non-parametric"})
    ),
    (
        "computeToleranceInterval",
        "tolerance-interval",
        {"method": "normal-howe-1969", "sides": "two-sided", "coverage": 0.9, "confidence": 0.9},
    ),
    ("analyseCrossedStudy", "measurement-studies-crossed", {"pooling_alpha": 0}),
    ("analyseCrossedStudy", "measurement-studies-crossed", {"pooling_alpha": 1}),
    ("analyseCrossedStudy", "measurement-studies-crossed", {"specification": {"upper": 1000.0}}),
    ("computeRunLength", "designs-run-length", {"shewhart": {"sides": "upper", "sigma_multiple": 2.5}}),
    ("computeRunLength", "designs-run-length", {"shewhart": {}, "scales": [1.0, 1.2, 1.5]}),
    ("computeRunLength", "designs-run-length", {"shewhart": {"rules": {"published": "nelson-1984"}}}),
    ("computeRunLength", "designs-run-length-counts", {"counts": COUNTS}),
    ("computeRunLength", "designs-run-length-counts", {"counts": {**COUNTS, **RULES}}),
    ("computeRunLength", "designs-run-length-ewma", {"ewma": {"smoothing": 1, "limit": 2.8}}),
    (
        "computeRunLength",
        "designs-run-length-cusum",
        {"cusum": {"reference": 0.5, "decision": 4, "head_start": 2.0}},
    ),
    (
        "computeRunLength",
        "designs-run-length-cusum",
        {"cusum": {"reference": 0.25, "decision": 4, "sides": "upper"}},
    ),
    ("designAttributes", "designs-attributes", {"false_alarm_probability": 0.01}),
    ("designSubgroups", "designs-subgroups", RULES),
]


@pytest.mark.parametrize(("operation_id", "name", "options"), OPTIONS)
def test_steps_follow_the_options(operation_id: str, name: str, options: dict[str, Any]) -> None:
    request = {**served.example(name), **options, "explain": True}
    request = {member: value for member, value in request.items() if value is not None}
    assert checked(served.answer_of(operation_id, request)) >= FEWEST


def test_subgroups_of_several_sizes() -> None:
    for estimator in ("mean-range", "mean-sd", "pooled-sd", "median-range"):
        request = {**served.example("xbar-s-limits"), "sigma_estimator": estimator, "explain": True}
        rows = request["data"]["values"]
        rows[3], rows[5], rows[-1] = rows[3][:3], [None] * len(rows[5]), rows[-1][:2]
        answer = served.answer_of("fitXbarSLimits", request)
        assert checked(answer) >= FEWEST
        assert any(
            "several sizes" in step["what"] or estimator in ("pooled-sd", "median-range")
            for step in answer["steps"]
        )


def test_a_point_that_signals_is_the_one_that_is_shown() -> None:
    request = served.example("xbar-r-signals")
    answer = served.answer_of("judgeXbarR", {**request, "explain": True})
    first = answer["signals"][0]["index"]
    assert any(f"subgroup {first} (the first with a signal)" in step["what"] for step in answer["steps"])


# What is hard to calculate with ---------------------------------------------------------------------


def _changed(value: Any, change: Callable[[list[Any]], list[Any]]) -> Any:
    """A request with every list of numbers changed, documents left as they are."""
    if isinstance(value, dict):
        kept = ("limits", "carry", "rules")
        return {key: one if key in kept else _changed(one, change) for key, one in value.items()}
    if not isinstance(value, list):
        return value
    numbers = all(
        one is None or (isinstance(one, int | float) and not isinstance(one, bool)) for one in value
    )
    return change(value) if numbers else [_changed(one, change) for one in value]


def _huge(values: list[Any]) -> list[Any]:
    return [one * 1e290 if isinstance(one, float) else one for one in values]


def _tiny(values: list[Any]) -> list[Any]:
    return [one * 1e-150 if isinstance(one, float) else one for one in values]


def _gaps(values: list[Any]) -> list[Any]:
    return [None if at % 5 == 3 else one for at, one in enumerate(values)]


@pytest.mark.parametrize("change", [_huge, _tiny, _gaps])
def test_no_steps_stand_in_the_way_of_an_answer(change: Callable[[list[Any]], list[Any]]) -> None:
    answered = 0
    for operation_id, name in CALCULATIONS:
        if "/designs/" in served.operations()[operation_id].path:
            continue
        request = _changed(served.example(name), change)
        plain, asked = (served.call(operation_id, {**request, "explain": one}) for one in (False, True))
        assert plain.status_code == asked.status_code, (operation_id, name, asked.get_data(as_text=True))
        answered += plain.status_code == 200
    assert answered > 10
