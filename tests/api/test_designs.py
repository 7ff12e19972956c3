"""The designs over HTTP: what is asked comes back, what cannot be is refused where it was written, and no legal
request takes long."""

from __future__ import annotations

import json
import math
import time
from typing import Any

import pytest

from assignable.api import problems
from assignable.spc.design import economic
from contract import served

Json = dict[str, Any]

LONG = {
    "own": [
        {"form": "zone", "points": 20, "window": 20, "distance": 0},
        {"form": "trend", "points": 20, "window": 20},
        {"form": "alternation", "points": 25, "window": 25},
        {"form": "stratification", "points": 25, "window": 25, "distance": 1},
    ]
}
ZONES = {
    "own": [
        {"form": "zone", "points": 3, "window": 8, "distance": 1.5},
        {"form": "zone", "points": 2, "window": 8, "distance": 2},
        {"form": "zone", "points": 8, "window": 8, "distance": 0},
    ]
}
NELSON = {"published": "nelson-1984"}
MANY = [0.04 * at for at in range(50)]


def run_lengths(body: Json) -> list[Json]:
    return served.answer_of("computeRunLength", body)["run_lengths"]


def refused(operation_id: str, body: Json) -> list[tuple[str, str, str]]:
    found = served.call(operation_id, body)
    assert found.status_code == 422, found.get_data(as_text=True)
    return [(one["pointer"], one["code"], one["detail"]) for one in json.loads(found.data)["errors"]]


def costs(**changed: float) -> Json:
    return {**served.example("designs-economic-duncan")["process"], **changed}


# Run lengths ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "chart",
    [
        {"shewhart": {"rules": {"published": "western-electric-1956"}}},
        {"shewhart": {"rules": NELSON}},
        {"shewhart": {"sides": "upper"}},
        {"ewma": {"smoothing": 0.2, "limit": 2.8}},
        {"ewma": {"smoothing": 0.2, "limit": 2.8, "limits": "time-varying"}},
        {"cusum": {"reference": 0.5, "decision": 4}},
        {"moving_average": {"span": 3}},
        {"mewma": {"variables": 3, "smoothing": 0.2, "in_control_arl": 200}},
        {"mewma": {"variables": 2, "smoothing": 0.3, "limit": 10, "limits": "time-varying"}},
        {"counts": {"law": "poisson", "mean": 4, "size": 1, "rules": NELSON}},
        {"counts": {"law": "binomial", "mean": 0.05, "size": 120}},
    ],
)
def test_every_kind_of_chart_tells_the_same_things(chart: Json) -> None:
    at = "factors" if "counts" in chart else "shifts"
    levels = [1, 1.5, 3] if "counts" in chart else [0, 1, 3]
    found = run_lengths({**chart, at: levels, "interval_hours": 0.5, "within_points": [1, 5, 50, 5000]})
    assert [one["factor" if "counts" in chart else "shift"] for one in found] == levels
    for one in found:
        assert one["arl"] >= 1
        assert one["sd"] >= 0
        assert one["ats_hours"] == pytest.approx(0.5 * one["arl"])
        steady = one["steady_state_arl"]
        assert steady is not None
        assert one["steady_state_ats_hours"] == pytest.approx(0.5 * (steady - 0.5))
        reached = [each["probability"] for each in one["within"]]
        assert reached == sorted(reached)
        assert reached[-1] > 0.6
        by = {each["probability"]: each["points"] for each in one["percentiles"]}
        assert list(by.values()) == sorted(by.values())
        assert one["method"]
        assert one["accuracy"]
    assert found[0]["arl"] > found[1]["arl"] > found[2]["arl"]
    assert found[0]["steady_state_arl"] > found[1]["steady_state_arl"] > found[2]["steady_state_arl"]
    # In control the start soon does not matter; no window is full, nor any average settled, at once.
    assert found[0]["steady_state_arl"] == pytest.approx(found[0]["arl"], rel=0.12)


def test_probabilities_agree_with_percentiles() -> None:
    for chart in (
        {"moving_average": {"span": 2}},
        {"mewma": {"variables": 4, "smoothing": 0.1, "limit": 12.73}},
    ):
        (one,) = run_lengths({**chart, "shifts": [0.5]})
        points = [each["points"] for each in one["percentiles"]]
        asked = sorted({*points, *(each - 1 for each in points)})
        (again,) = run_lengths({**chart, "shifts": [0.5], "within_points": asked})
        by = {each["points"]: each["probability"] for each in again["within"]}
        for each in one["percentiles"]:
            assert by[each["points"] - 1] < each["probability"] <= by[each["points"]] + 1e-9


def test_a_far_shift_signals_at_once() -> None:
    for chart in (
        {"shewhart": {"rules": NELSON}},
        {"ewma": {"smoothing": 1, "limit": 3}},
        {"cusum": {"reference": 0.5, "decision": 4}},
        {"moving_average": {"span": 2}},
        {"mewma": {"variables": 3, "smoothing": 0.5, "limit": 12}},
    ):
        (one,) = run_lengths({**chart, "shifts": [10]})
        assert one["arl"] == pytest.approx(1.0, abs=1e-3)
        assert one["steady_state_arl"] >= 1.0


def test_a_change_of_sigma_is_told_by_its_scale() -> None:
    (one,) = run_lengths({"shewhart": {}, "shifts": [0], "scales": [1.5]})
    assert one["arl"] == pytest.approx(1 / math.erfc(2 / math.sqrt(2)))
    (one,) = run_lengths({"shewhart": {"subgroup_size": 4}, "shifts": [1]})
    assert one["arl"] == pytest.approx(2 / (math.erfc(1 / math.sqrt(2)) + math.erfc(5 / math.sqrt(2))))


# Designs --------------------------------------------------------------------------------------------


def test_a_sample_of_counts_that_was_found_is_described() -> None:
    body = {"chart": "p", "level": 0.01, "detect": {"shifted_level": 0.05}}
    found = served.answer_of("designAttributes", body)
    assert found["lower_limit"] is None
    # The textbook's formula: (3/0.04)^2 (0.01)(0.99) = 55.7; Montgomery 2013, section 7.2.1 (from memory).
    assert found["detection"]["formula"]["size"] == 56
    assert found["characteristics"]["limits"]["size"] == found["detection"]["size"]
    assert found["detection"]["power"] >= 0.5
    given = served.answer_of("designAttributes", {**body, "size": 50})
    assert given["characteristics"]["limits"]["size"] == 50


def test_every_parameter_of_the_economic_model_is_in_the_contract() -> None:
    shape = served.document()["components"]["schemas"]["ProcessEconomicsRequest"]["properties"]
    assert set(shape) == set(economic.ProcessEconomics.__dataclass_fields__)
    found = served.answer_of("designEconomic", served.example("designs-economic"))["design"]
    assert {one["parameter"] for one in found["sensitivities"]} <= set(shape)
    assert sum(found["best"]["parts"].values()) == pytest.approx(found["best"]["cost_per_hour"])


def test_sampling_that_is_never_worth_while_is_said_to_be() -> None:
    body = {"process": costs(cost_per_hour_out_of_control=0.5, cost_per_sample=1000)}
    found = served.answer_of("designEconomic", body)["design"]
    assert found["worth_while"] is False
    assert "not worth while" in found["conclusion"]
    assert found["cost_per_hour_without_chart"] == 0.5


def test_a_comparison_recommends_one_of_its_charts() -> None:
    body = {**served.example("designs-comparison"), "charts": ["ewma", "mean"], "sizes": [5]}
    found = served.answer_of("compareDesigns", body)["comparison"]
    assert {one["chart"] for one in found["candidates"]} == {"ewma", "mean"}
    assert found["recommendation"]
    assert found["reasons"]


# What is refused, and where -------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("operation_id", "body", "pointer", "code"),
    [
        ("computeRunLength", {"shewhart": {}, "ewma": {"smoothing": 0.1, "limit": 3}}, "#/ewma", "one-chart"),
        ("computeRunLength", {"shewhart": {}, "factors": [2]}, "#/factors", "not-for-this-chart"),
        (
            "computeRunLength",
            {"counts": {"law": "poisson", "mean": 1, "size": 1}, "shifts": [1]},
            "#/shifts",
            "not-for-this-chart",
        ),
        (
            "computeRunLength",
            {"counts": {"law": "binomial", "mean": 0.4, "size": 20}, "factors": [1, 3]},
            "#/factors/1",
            "proportion-above-one",
        ),
        ("computeRunLength", {"shewhart": {}, "shifts": [1], "scales": [1, 2]}, "#/scales", "unequal-length"),
        (
            "computeRunLength",
            {"cusum": {"reference": 0.5, "decision": 4, "head_start": 4}},
            "#/cusum/head_start",
            "",
        ),
        ("computeRunLength", {"ewma": {"smoothing": 0.1, "limit": 2.7, "start": 3}}, "#/ewma/start", ""),
        (
            "computeRunLength",
            {"moving_average": {"span": 3, "subgroup_size": 100}, "shifts": [0, 2]},
            "#/shifts/1",
            "out-of-range",
        ),
        (
            "computeRunLength",
            {"mewma": {"variables": 3, "smoothing": 0.1}},
            "#/mewma/limit",
            "one-limit",
        ),
        (
            "computeRunLength",
            {"mewma": {"variables": 3, "smoothing": 0.1, "limit": 12}, "shifts": [0, -1]},
            "#/shifts/1",
            "negative-distance",
        ),
        (
            "computeRunLength",
            {
                "shewhart": {
                    "rules": {
                        "own": [{"form": "zone", "points": 4, "window": 12, "distance": 1}] * 1
                        + [
                            {"form": "zone", "points": 3, "window": 10, "distance": 1.5},
                            {"form": "zone", "points": 2, "window": 9, "distance": 2},
                        ]
                    }
                }
            },
            "#/shewhart/rules",
            "too-many-states",
        ),
        ("computeRunLength", {"shewhart": {"rules": NELSON}, "shifts": MANY}, "#/shifts", "too-much-work"),
        (
            "computeRunLength",
            {"ewma": {"smoothing": 0.005, "limit": 6, "limits": "time-varying"}, "scales": [0.5]},
            "#/ewma/smoothing",
            "too-much-work",
        ),
        (
            "computeRunLength",
            {"mewma": {"variables": 50, "smoothing": 0.03, "in_control_arl": 1e6}},
            "#/mewma/smoothing",
            "too-much-work",
        ),
        (
            "computeRunLength",
            {"shewhart": {"sigma_multiple": 10}, "shifts": [0]},
            "#/shewhart/sigma_multiple",
            "run-length-beyond-reach",
        ),
        (
            "computeRunLength",
            {"moving_average": {"span": 2, "sigma_multiple": 10}},
            "#/moving_average/sigma_multiple",
            "run-length-beyond-reach",
        ),
        (
            "computeRunLength",
            {"counts": {"law": "poisson", "mean": 100, "size": 1, "sigma_multiple": 10}},
            "#/counts/sigma_multiple",
            "run-length-beyond-reach",
        ),
        (
            "computeRunLength",
            {"mewma": {"variables": 2, "smoothing": 0.5, "limit": 900}},
            "#/mewma/limit",
            "not-settled",
        ),
        ("computeRunLength", {"ewma": {"smoothing": 0.5, "limit": 10}}, "#/ewma/limit", ""),
        ("designSubgroups", {"shift": 1}, "#/detect", "nothing-asked"),
        (
            "designSubgroups",
            {"shift": 0.05, "detect": {"power": 0.9, "sigma_multiple": 3}},
            "#/detect/power",
            "target-not-met",
        ),
        ("designEwma", {"in_control_arl": 370}, "#/shift", "nothing-asked"),
        ("designEwma", {"in_control_arl": 2, "smoothing": 0.5, "sides": "upper"}, "", ""),
        (
            "designEwma",
            {"in_control_arl": 370, "smoothing": 0.006, "limits": "time-varying"},
            "#/smoothing",
            "too-much-work",
        ),
        ("designCusum", {"in_control_arl": 1e5, "reference": 0}, "#/reference", "no-such-design"),
        (
            "designCusum",
            {"in_control_arl": 370, "shift": 1, "head_start_fraction": 0.9},
            "#/head_start_fraction",
            "out-of-range",
        ),
        ("designAttributes", {"chart": "p", "level": 0.1}, "#/size", "nothing-asked"),
        ("designAttributes", {"chart": "p", "level": 1.5, "size": 10}, "#/level", "level-out-of-range"),
        ("designAttributes", {"chart": "p", "level": 0.1, "size": 10.5}, "#/size", "size-out-of-range"),
        (
            "designAttributes",
            {"chart": "p", "level": 0.1, "size": 10, "levels": [0.1, 2]},
            "#/levels/1",
            "level-out-of-range",
        ),
        (
            "designAttributes",
            {"chart": "np", "level": 0.1, "detect": {"shifted_level": 0.1}},
            "#/detect/shifted_level",
            "no-shift",
        ),
        (
            "designAttributes",
            {"chart": "np", "level": 0.1, "detect": {"shifted_level": 0.10001, "power": 0.9}},
            "#/detect/shifted_level",
            "target-not-met",
        ),
        (
            "designAttributes",
            {"chart": "p", "level": 1e-6, "lower_limit_size": True},
            "#/level",
            "target-not-met",
        ),
        (
            "designAttributes",
            {"chart": "p", "level": 0.1, "size": 50, "sigma_multiple": 3, "false_alarm_probability": 0.01},
            "#/false_alarm_probability",
            "limits-twice",
        ),
        (
            "designBaseline",
            {"subgroups": 25, "size": 1, "sigma_estimator": "mean-range"},
            "#/sigma_estimator",
            "",
        ),
        (
            "designBaseline",
            {"subgroups": 25, "size": 5, "sigma_multiple": 6},
            "#/sigma_multiple",
            "arl-out-of-range",
        ),
        (
            "designBaseline",
            {"subgroups": 25, "size": 5, "table": {"subgroups": list(range(20, 60)), "sizes": [2, 3, 4, 5]}},
            "#/table/subgroups",
            "table-out-of-range",
        ),
        ("designEconomic", {"process": costs(shift=0)}, "#/process/shift", "out-of-range"),
        (
            "designEconomic",
            {"process": costs(cost_per_hour_in_control=100)},
            "#/process/cost_per_hour_out_of_control",
            "shift-costs-nothing",
        ),
        (
            "designEconomic",
            {
                "process": costs(),
                "requirements": {
                    "smallest_in_control_arl": 1e6,
                    "longest_ats_hours": 1e-4,
                    "shortest_hours_between_false_alarms": 1e7,
                },
            },
            "#/requirements",
            "requirements-not-met",
        ),
        (
            "designEconomic",
            {"process": costs(), "requirements": {"smallest_size": 5, "largest_size": 4}},
            "#/requirements/largest_size",
            "bounds-out-of-order",
        ),
        ("designEconomic", {"process": costs(), "rules": NELSON}, "#/rules", "rules-on-order"),
        (
            "designEconomic",
            {"process": costs(), "rules": ZONES},
            "#/requirements/largest_size",
            "too-much-work",
        ),
        (
            "compareDesigns",
            {"shift": 1, "pieces_per_hour": 5, "hours_between_false_alarms": 1e6},
            "#/hours_between_false_alarms",
            "false-alarms-out-of-range",
        ),
        (
            "compareDesigns",
            {"shift": 0.03, "pieces_per_hour": 5, "hours_between_false_alarms": 100},
            "#/shift",
            "shift-out-of-range",
        ),
        (
            "compareDesigns",
            {"shift": 1, "pieces_per_hour": 5, "hours_between_false_alarms": 100, "sizes": [5, 5]},
            "#/sizes",
            "sizes-out-of-range",
        ),
        (
            "compareDesigns",
            {"shift": 1, "pieces_per_hour": 5, "hours_between_false_alarms": 100, "charts": ["mean", "mean"]},
            "#/charts",
            "kinds-out-of-range",
        ),
    ],
)
def test_refusals(operation_id: str, body: Json, pointer: str, code: str) -> None:
    found = refused(operation_id, body)
    assert not pointer or pointer in [one[0] for one in found], found
    assert not code or code in [one[1] for one in found], found
    assert all(one[2].endswith(".") for one in found)


def test_all_faults_of_the_economics_are_told_at_once() -> None:
    found = served.call("designEconomic", {"process": costs(false_alarm_cost=-1, repair_cost=1e15)})
    told = json.loads(found.data)
    assert told["type"].endswith(problems.CONTRACT_VIOLATION.code)
    assert [one["pointer"] for one in told["errors"]] == [
        "#/process/false_alarm_cost",
        "#/process/repair_cost",
    ]


# Work -----------------------------------------------------------------------------------------------

DEAREST: dict[str, tuple[str, Json]] = {
    "rules on zones and order": ("computeRunLength", {"shewhart": {"rules": LONG}, "shifts": MANY}),
    "rules on zones": ("computeRunLength", {"shewhart": {"rules": ZONES}, "shifts": MANY}),
    "ewma": (
        "computeRunLength",
        {
            "ewma": {"smoothing": 0.02, "limit": 4, "limits": "time-varying"},
            "shifts": MANY,
            "within_points": [1_000_000] * 50,
        },
    ),
    "cusum": (
        "computeRunLength",
        {
            "cusum": {"reference": 0, "decision": 50},
            "shifts": MANY,
            "scales": [0.5 + 0.01 * at for at in range(50)],
            "within_points": list(range(999_951, 1_000_001)),
        },
    ),
    "moving average": ("computeRunLength", {"moving_average": {"span": 4}, "shifts": MANY}),
    "several variables": (
        "computeRunLength",
        {
            "mewma": {
                "variables": 3,
                "smoothing": 0.1,
                "in_control_arl": 1000,
                "limits": "time-varying",
            },
            "shifts": MANY,
        },
    ),
    "fifty variables": (
        "computeRunLength",
        {"mewma": {"variables": 50, "smoothing": 0.06, "in_control_arl": 370}, "shifts": MANY},
    ),
    "counts": (
        "computeRunLength",
        {
            "counts": {"law": "binomial", "mean": 0.3, "size": 200, "rules": LONG},
            "factors": [1 + 0.002 * at for at in range(50)],
        },
    ),
    "plans with rules": (
        "designSubgroups",
        {
            "shift": 0.5,
            "detect": {"power": 0.9, "hourly_pieces": 10},
            "present": {"size": 5, "interval_hours": 1, "sigma_multiple": 3.1},
            "candidates": [{"size": at + 1, "interval_hours": 1} for at in range(100)],
            "rules": NELSON,
        },
    ),
    "optimal ewma": (
        "designEwma",
        {
            "in_control_arl": 1e9,
            "shift": 0.05,
            "smoothing": 0.05,
            "shifts": MANY[:40],
            "limits": "time-varying",
        },
    ),
    "optimal ewma, growing limits": (
        "designEwma",
        {"in_control_arl": 1e6, "shift": 0.05, "shifts": MANY[:40], "limits": "time-varying"},
    ),
    "optimal cusum": (
        "designCusum",
        {
            "in_control_arl": 1e9,
            "shift": 0.05,
            "shifts": MANY[:40],
            "state": "steady-state",
            "head_start_fraction": 0.5,
        },
    ),
    "attributes": (
        "designAttributes",
        {
            "chart": "p",
            "level": 0.01,
            "false_alarm_probability": 0.0027,
            "detect": {"shifted_level": 0.017, "power": 0.9},
            "lower_limit_size": True,
            "levels": [0.0005 * (at + 1) for at in range(100)],
        },
    ),
    "baseline": (
        "designBaseline",
        {
            "subgroups": 1_000_000,
            "size": 2,
            "risk": 0.001,
            "share_of_nominal": 0.99,
            "percentiles": [0.001 + 0.05 * at for at in range(20)],
            "table": {"subgroups": [2 + 7000 * at for at in range(50)], "sizes": [2, 3, 1000]},
        },
    ),
    "economic": (
        "designEconomic",
        {
            "process": costs(),
            "requirements": {"largest_size": 4, "longest_ats_hours": 5},
            "present": {"size": 5, "interval_hours": 1},
            "rules": ZONES,
        },
    ),
    "comparison": (
        "compareDesigns",
        {"shift": 0.25, "pieces_per_hour": 1, "hours_between_false_alarms": 3000, "sizes": [1, 2, 3]},
    ),
}


@pytest.mark.parametrize("name", DEAREST)
def test_no_legal_request_takes_long(name: str) -> None:
    operation_id, body = DEAREST[name]
    served.call(operation_id, served.example(served.operations()[operation_id].examples[0]))
    start = time.thread_time()
    found = served.call(operation_id, body)
    spent = time.thread_time() - start
    assert found.status_code in (200, 422)
    if found.status_code == 422:
        assert json.loads(found.data)["errors"][0]["code"] in ("too-much-work", "not-settled")
    # Two seconds are what is promised of one processor; a busy one is given leave.
    assert spent < 4.0, spent
