"""The picture of a release check, held against the results and the answer."""

from __future__ import annotations

from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest

from contract import served
from pictures.drawn import SVG, parsed, picture, places, texts, words

INK, SOFT, BAND = "#1d2730", "#55636e", "#e2eaf0"
LOWER, UPPER = 134.0, 506.0


def strip(root: ElementTree.Element, name: str) -> float:
    """The height of a characteristic's axis."""
    (y,) = [y for text, x, y in texts(root) if x == 14 and text.startswith(name)]
    return y + 32


def at(root: ElementTree.Element, mark: str, y: float) -> list[float]:
    return sorted(x for x, height in places(root, mark) if abs(height - y) < 0.3)


def upright(root: ElementTree.Element, y: float, look: str | None) -> list[float]:
    """Where dark lines stand across an axis: whole ones of the specification, or broken ones by their pattern."""
    return sorted(
        float(path.get("d", "")[1:].split(" ")[0])
        for path in root.iter(f"{SVG}path")
        if f" {y - 12:.1f}L" in path.get("d", "")
        and path.get("stroke") == INK
        and path.get("stroke-dasharray") == look
    )


def test_results_limits_and_uncertainty_lie_on_one_scale() -> None:
    body = served.example("release-checks")
    answer, root = served.answer_of("checkRelease", body), parsed(picture("drawReleaseCheck", body))
    y = strip(root, "wall thickness")
    (posted,) = [one for one in body["characteristics"] if one["name"] == "wall thickness"]
    (told,) = [one for one in answer["characteristics"] if one["name"] == "wall thickness"]
    low, high = posted["specification"]["lower"], posted["specification"]["upper"]

    def place(number: float) -> float:
        return LOWER + (number - low) / (high - low) * (UPPER - LOWER)

    assert at(root, "dot", y) == pytest.approx(sorted(place(each) for each in posted["results"]), abs=0.1)
    assert upright(root, y, None) == pytest.approx([LOWER, UPPER], abs=0.1)
    limits = [told["acceptance"]["lower"], told["acceptance"]["upper"]]
    assert upright(root, y, "1.5 3.5") == pytest.approx([place(each) for each in limits], abs=0.1)
    # In doubt is the result that the answer names.
    doubtful = [posted["results"][entry] for entry in told["reasons"][0]["entries"]]
    assert at(root, "ring", y) == pytest.approx([place(each) for each in doubtful], abs=0.1)
    whiskers = [
        path.get("d", "")
        for path in root.iter(f"{SVG}path")
        if f" {y:.1f}H" in path.get("d", "") and "v8M" in path.get("d", "")
    ]
    assert len(whiskers) == len(posted["results"])
    reach = 2 * posted["uncertainty"]["standard"]
    left = sorted(float(d[1:].split(" ")[0]) for d in whiskers)
    assert left == pytest.approx(sorted(place(each - reach) for each in posted["results"]), abs=0.1)
    # Its own chart is one of averages, and the average stands on it.
    own = posted["trend"]["limits"]["panels"]["mean"]
    (band,) = [
        one for one in root.iter(f"{SVG}rect") if one.get("fill") == BAND and one.get("y") == f"{y - 8:.1f}"
    ]
    assert float(band.get("x", 0)) == pytest.approx(place(own["lower"]), abs=0.1)
    assert float(band.get("x", 0)) + float(band.get("width", 0)) == pytest.approx(
        place(own["upper"]), abs=0.2
    )
    (average,) = [
        d for path in root.iter(f"{SVG}path") if f" {y + 3:.1f}l4.5 8h-9z" in (d := path.get("d", ""))
    ]
    assert float(average[1:].split(" ")[0]) == pytest.approx(
        place(float(np.mean(posted["results"]))), abs=0.1
    )


def test_every_reason_and_disposition_is_told() -> None:
    body = served.example("release-checks")
    answer, root = served.answer_of("checkRelease", body), parsed(picture("drawReleaseCheck", body))
    shown = " ".join(" ".join(words(root)).split())
    description = root.find(f"{SVG}desc")
    assert description is not None
    for one in answer["characteristics"]:
        for reason in one["reasons"]:
            assert reason["sentence"] in shown
            assert reason["sentence"] in (description.text or "")
    assert "Needs review: wall thickness." in shown
    assert answer["note"] in shown
    assert shown.count("supports release") == 2


def test_a_result_below_detection_is_open_and_points_down() -> None:
    body = served.example("release-checks")
    root = parsed(picture("drawReleaseCheck", body))
    y = strip(root, "leachable lead")
    opened = at(root, "open", y)
    assert len(opened) == 2
    assert any(text == "2 below 2.00" for text in words(root))
    arrows = [d for path in root.iter(f"{SVG}path") if f" {y:.1f}h-26" in (d := path.get("d", ""))]
    assert [float(d[1:].split(" ")[0]) for d in arrows] == opened
    # From nothing to the only limit: 2 of 5, as far as the numbers go.
    assert opened == pytest.approx([LOWER + 2 / 5 * (UPPER - LOWER)] * 2, abs=0.1)


def one(name: str, results: list[Any], **more: Any) -> dict[str, Any]:
    return {"name": name, "results": results, "specification": {"lower": 9, "upper": 11}, **more}


def test_a_result_out_of_specification_is_a_diamond_and_one_far_off_is_told_at_the_edge() -> None:
    body = {"batch": "K-1", "characteristics": [one("mass", [10.0, 11.4, 40.0]), one("bore", [10.0])]}
    root = parsed(picture("drawReleaseCheck", body))
    y = strip(root, "mass")
    found = at(root, "diamond", y)
    assert found[0] == pytest.approx(LOWER + 1.2 * (UPPER - LOWER), abs=0.1)
    assert found[1] == 618.0
    assert "40.00 →" in words(root)
    assert at(root, "ring", y) == found
    assert any(text.startswith("Does not support release: mass.") for text in words(root))
    assert not at(root, "ring", strip(root, "bore"))


@pytest.mark.parametrize("limit", [{"lower": 9}, {"upper": 11}, {"lower": 0}, {"upper": 0}])
def test_one_limit_alone(limit: dict[str, float]) -> None:
    for results in ([10.0, 10.5], [0.0], [-3.0, 1e290], [limit.get("lower", limit.get("upper"))]):
        body = {"characteristics": [{"name": "moisture", "results": results, "specification": limit}]}
        root = parsed(picture("drawReleaseCheck", body))
        y = strip(root, "moisture")
        assert upright(root, y, None) == [LOWER if "lower" in limit else UPPER]
        drawn = sorted(at(root, "dot", y) + at(root, "diamond", y))
        assert len(drawn) == len(results)
        for x, result in zip(drawn, sorted(results), strict=True):
            (edge,) = limit.values()
            assert np.sign(round(x - (LOWER if "lower" in limit else UPPER), 1)) in (
                np.sign(result - edge),
                0,
            )


def test_of_very_many_characteristics_the_worst_are_drawn() -> None:
    rows = [one(f"length {at:03d}", [12.0 if at in (150, 199) else 10.0]) for at in range(200)]
    text = picture("drawReleaseCheck", {"characteristics": rows})
    shown = words(parsed(text))
    assert {"length 150", "length 199"} <= set(shown)
    assert sum(one.startswith("length ") for one in shown) == 60
    assert any("And 140 characteristics more" in one for one in shown)
    assert len(text) < 120_000


def test_hostile_names_are_text() -> None:
    body = {"batch": "<b>\u202e", "characteristics": [one('</text><script>"', [10.0], unit="]]>")]}
    root = parsed(picture("drawReleaseCheck", body))
    assert not any(element.tag == f"{SVG}script" for element in root.iter())
    assert "Release check of <b>" in words(root)
