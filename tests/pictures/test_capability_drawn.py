"""The fitted distribution under a capability study, held against its density."""

from __future__ import annotations

from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest
import scipy

from contract import served
from pictures.drawn import AMBER, SVG, along, parsed, picture, texts, vertices, words

BAND = "#e2eaf0"


def foot(root: ElementTree.Element) -> float:
    (y,) = [y for text, _, y in texts(root) if text.startswith(("median ", "mean "))]
    return y - 19


def curve(root: ElementTree.Element) -> np.ndarray:
    (path,) = [
        one
        for one in root.iter(f"{SVG}path")
        if one.get("stroke-width") == "1.3"
        and one.get("d", "").count("L") > 100
        and not one.get("stroke-dasharray")
    ]
    return np.array(vertices(path))


def bars(root: ElementTree.Element) -> list[tuple[float, float, float]]:
    """Left edge, width and height of each."""
    bottom = foot(root)
    return [
        (float(one.get("x", 0)), float(one.get("width", 0)), float(one.get("height", 0)))
        for one in root.iter(f"{SVG}rect")
        if one.get("fill") == BAND
        and float(one.get("y", 0)) + float(one.get("height", 0)) == pytest.approx(bottom, abs=0.2)
    ]


def body_of(values: Any, distribution: str, **specification: float) -> dict[str, Any]:
    return {
        "data": {"values": np.round(values, 6).tolist()},
        "specification": specification,
        "distribution": distribution,
    }


@pytest.mark.parametrize(
    "name", ["lognormal", "weibull", "gamma", "normal", "box-cox", "largest-extreme-value"]
)
def test_the_curve_is_the_density_on_the_scale_of_the_bars(name: str) -> None:
    values = np.random.default_rng(5).lognormal(0.3, 0.25, 400)
    body = body_of(values, name, upper=4.0)
    answer, found = served.answer_of("assessMeasurements", body), served.call("drawMeasurements", body)
    root = parsed(found.get_data(as_text=True))
    bottom = foot(root)
    value = along(root, bottom + 17)
    drawn = curve(root)
    shown = bars(root)
    # A bar's height over its count: the same for all, and the curve's unit with the width of a bar.
    high = sum(height for _, _, height in shown) / len(values)
    width = value(shown[0][0] + shown[0][1]) - value(shown[0][0])
    x = np.array([value(each) for each in drawn[:, 0]])
    density = (bottom - drawn[:, 1]) / (high * width * len(values))
    assert float(scipy.integrate.trapezoid(density, x)) == pytest.approx(1.0, abs=0.01)
    quantiles = answer["quantiles"]
    if quantiles is not None:
        # The median that the answer tells is the curve's.
        below = scipy.integrate.cumulative_trapezoid(density, x, initial=0)
        assert np.interp(quantiles["quantiles"][1]["value"], x, below) == pytest.approx(0.5, abs=0.01)
    fitted = {
        "lognormal": lambda: scipy.stats.lognorm(*scipy.stats.lognorm.fit(values, floc=0)),
        "normal": lambda: scipy.stats.norm(values.mean(), values.std(ddof=1)),
        "gamma": lambda: scipy.stats.gamma(*scipy.stats.gamma.fit(values, floc=0)),
    }.get(name)
    if fitted is not None:
        assert np.abs(density - fitted().pdf(x)).max() < 0.02


def test_the_tail_beyond_the_specification_is_filled() -> None:
    values = np.random.default_rng(6).lognormal(0.0, 0.5, 300)
    root = parsed(picture("drawMeasurements", body_of(values, "lognormal", upper=2.0)))
    (tail,) = [one for one in root.iter(f"{SVG}path") if one.get("fill") == AMBER]
    value = along(root, foot(root) + 17)
    assert min(value(x) for x, _ in vertices(tail)) == pytest.approx(2.0, abs=0.02)
    far = parsed(picture("drawMeasurements", body_of(values, "lognormal", upper=40.0)))
    assert not [one for one in far.iter(f"{SVG}path") if one.get("fill") == AMBER]


def test_a_density_without_bound_leaves_the_paper_at_the_top() -> None:
    values = np.random.default_rng(7).gamma(0.4, 2.0, 300) + 1e-4
    root = parsed(picture("drawMeasurements", body_of(values, "gamma", upper=20.0)))
    drawn = curve(root)
    assert drawn[:, 1].min() >= foot(root) - 191
    assert np.isfinite(drawn).all()


def test_without_a_distribution_the_picture_says_why_there_is_no_curve() -> None:
    values = np.random.default_rng(8).exponential(1.0, 2000)
    found = words(parsed(picture("drawMeasurements", body_of(values, "empirical", upper=15.0))))
    assert any(text.startswith("No curve: the quantiles are the values' own") for text in found)


def test_values_below_a_limit_are_in_the_curve_alone() -> None:
    body = served.example("capability-below-limits")
    root = parsed(picture("drawMeasurements", body))
    known = sum(value is not None for value in body["data"]["values"])
    count = served.answer_of("assessMeasurements", body)["quantiles"]["count"]
    missing = count - known
    assert missing > 0
    assert f"{missing} values below a limit of detection are in the curve and in no bar." in words(root)
    bottom, drawn = foot(root), curve(root)
    ((left, wide, _), *_) = bars(root)
    high = sum(height for _, _, height in bars(root)) / known
    area = float(scipy.integrate.trapezoid(bottom - drawn[:, 1], drawn[:, 0])) / wide / high
    assert area == pytest.approx(count, rel=0.03)
    assert left > 0
