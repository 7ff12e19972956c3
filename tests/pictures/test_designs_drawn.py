"""The picture of the plan of least cost, held against the cost itself."""

from __future__ import annotations

import math
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest

from assignable.spc.design.economic import ProcessEconomics, cost_per_hour
from contract import served
from pictures.drawn import SVG, along, parsed, picture, places, texts, up, vertices, words

NEAR, BAND = "#c3d2de", "#e2eaf0"


def drawn(body: dict[str, Any]) -> tuple[ElementTree.Element, dict[str, Any], ProcessEconomics]:
    design = served.answer_of("designEconomic", body)["design"]
    return parsed(picture("drawEconomicDesign", body)), design, ProcessEconomics(**body["process"])


def region(root: ElementTree.Element, fill: str) -> list[tuple[float, float]]:
    (path,) = [one for one in root.iter(f"{SVG}path") if one.get("fill") == fill and one.get("fill-rule")]
    return vertices(path)


def frame(root: ElementTree.Element) -> tuple[float, float, float, float]:
    """Left, right, top and bottom of the surface."""
    path = next(one for one in root.iter(f"{SVG}path") if "V" in one.get("d", "") and "H" in one.get("d", ""))
    (left, top), d = vertices(path)[0], path.get("d", "")
    return left, float(d.partition("H")[2]), top, float(d.partition("V")[2].partition("H")[0])


def scales(root: ElementTree.Element) -> tuple[Any, Any]:
    left, _, top, bottom = frame(root)
    return along(root, bottom + 17, log=True), up(root, left - 7, (top - 1, bottom + 5))


@pytest.mark.parametrize("name", ["designs-economic", "designs-economic-duncan"])
def test_the_regions_are_those_of_the_cost(name: str) -> None:
    body = served.example(name)
    root, design, economics = drawn(body)
    hours, multiple = scales(root)
    left, right, top, bottom = frame(root)
    for fill, rise in ((NEAR, 0.01), (BAND, 0.05)):
        edge = [
            (x, y)
            for x, y in region(root, fill)
            if left + 0.2 < x < right - 0.2 and top + 0.2 < y < bottom - 0.2
        ]
        assert len(edge) > 30
        found = [
            float(cost_per_hour(economics, design["best"]["size"], hours(x), multiple(y))) for x, y in edge
        ]
        assert np.abs(np.array(found) / design["best"]["cost_per_hour"] - 1 - rise).max() < 0.002


def test_the_best_and_the_present_plan_stand_where_they_are() -> None:
    body = served.example("designs-economic")
    root, design, _ = drawn(body)
    hours, multiple = scales(root)
    _, _, top, bottom = frame(root)
    ((x, y),) = [at for at in places(root, "dot") if top < at[1] < bottom]
    assert hours(x) == pytest.approx(design["best"]["interval_hours"], rel=0.01)
    assert multiple(y) == pytest.approx(design["best"]["multiple"], abs=0.01)
    ((x, y),) = [at for at in places(root, "open") if top < at[1] < bottom]
    assert (hours(x), multiple(y)) == pytest.approx((2.0, 3.0), rel=0.01)
    assert {"least: 17.54", "present: 18.79, n = 5"} <= set(words(root))


def test_where_a_requirement_is_not_met_is_shaded_along_its_edge() -> None:
    body = served.example("designs-economic")
    root, design, economics = drawn(body)
    hours, multiple = scales(root)
    left, right, top, bottom = frame(root)
    (path,) = [one for one in root.iter(f"{SVG}path") if one.get("fill-opacity")]
    edge = [(x, y) for x, y in vertices(path) if left + 1 < x < right - 1 and top + 1 < y < bottom - 1]
    assert edge
    size = design["best"]["size"]
    for x, y in edge:
        k = multiple(y)
        power = 0.5 * math.erfc((k - economics.shift * math.sqrt(size)) / math.sqrt(2))
        arl0 = 1 / math.erfc(k / math.sqrt(2))
        # Fewer than 370 samples between false alarms, or a signal later than two hours.
        nearest = min(abs(math.log(370 / arl0)), abs(math.log(hours(x) / power / 2)))
        assert nearest < 0.03, (hours(x), k)
    body.pop("requirements")
    assert not [one for one in drawn(body)[0].iter(f"{SVG}path") if one.get("fill-opacity")]


@pytest.mark.parametrize("name", ["designs-economic", "designs-economic-duncan", "designs-economic-rules"])
def test_each_size_stands_at_its_cost(name: str) -> None:
    root, design, _ = drawn(served.example(name))
    (start,) = [y for text, _, y in texts(root) if text.startswith("Least cost an hour by sample size")]
    top, bottom = start + 14, start + 144
    size, cost = along(root, bottom + 17), up(root, 53, (top - 1, bottom + 5))
    known = {one["size"]: one["cost_per_hour"] for one in design["by_size"]}
    dots = [at for at in places(root, "dot") if top <= at[1] <= bottom]
    assert len(dots) >= min(len(known), 8)
    for x, y in dots:
        at = round(size(x))
        assert size(x) == pytest.approx(at, abs=0.05)
        assert cost(y) == pytest.approx(known[at], rel=0.005)


def test_held_limits_give_a_curve_of_the_cost_along_the_interval() -> None:
    body = served.example("designs-economic")
    body["requirements"] = {"sigma_multiple": 3, "shortest_interval_hours": 1.5}
    root, design, economics = drawn(body)
    hours, cost = scales(root)
    bottom = frame(root)[3]
    curve = [
        at
        for path in root.iter(f"{SVG}path")
        if path.get("stroke-width") == "1.3"
        for at in vertices(path)
        if at[1] <= bottom
    ]
    assert len(curve) > 25
    size = design["best"]["size"]
    for x, y in curve:
        assert cost(y) == pytest.approx(float(cost_per_hour(economics, size, hours(x), 3.0)), rel=0.005)
    (barred,) = [
        one for one in root.iter(f"{SVG}rect") if one.get("fill-opacity") and float(one.get("height", 0)) > 20
    ]
    edge = float(barred.get("x", 0)) + float(barred.get("width", 0))
    # The shading ends within a step of the grid.
    assert hours(edge) == pytest.approx(1.5, rel=0.05)


def test_further_rules_enter_the_curve() -> None:
    body = served.example("designs-economic-rules")
    root, design, economics = drawn(body)
    hours, cost = scales(root)
    best = design["best"]
    _, _, top, bottom = frame(root)
    ((x, y),) = [at for at in places(root, "dot") if top < at[1] < bottom]
    assert hours(x) == pytest.approx(best["interval_hours"], rel=0.01)
    assert cost(y) == pytest.approx(best["cost_per_hour"], rel=0.005)
    # With the limits alone the same plan would cost something else.
    alone = float(cost_per_hour(economics, best["size"], best["interval_hours"], best["multiple"]))
    assert abs(alone / best["cost_per_hour"] - 1) > 0.005


def test_a_present_plan_far_off_does_not_hide_the_rest() -> None:
    body = served.example("designs-economic-duncan")
    body["present"] = {"size": 2, "interval_hours": 5000, "sigma_multiple": 3}
    root, design, _ = drawn(body)
    left, right, _, _ = frame(root)
    x, _ = np.array(region(root, BAND)).T
    assert np.ptp(x) > 0.1 * (right - left)
    assert any("with the present plan" in text for text in words(root))
    assert design["present"]["interval_hours"] == 5000
