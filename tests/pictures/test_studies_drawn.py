"""Pictures of measurement studies, held against the measurements and the answers."""

from __future__ import annotations

from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest
import scipy

from contract import served
from pictures.drawn import SVG, along, number, parsed, picture, places, texts, up, vertices, words

BAND = "#e2eaf0"


def row(root: ElementTree.Element, name: str) -> float:
    """The height of a row's line, from its name."""
    (y,) = [y for text, x, y in texts(root) if text == name and x < 60]
    return y


def dots_at(root: ElementTree.Element, y: float, within: float = 0.2) -> list[float]:
    return [x for x, at in places(root, "dot") if abs(at - y) < within]


# Components -------------------------------------------------------------------------------------------


NAMED = {
    "measurement system": "gauge",
    "repeatability": "repeatability",
    "appraisers": "appraiser",
    "parts": "part",
    "all together": "total",
}


@pytest.mark.parametrize(
    ("operation", "source", "example"),
    [
        ("drawCrossedStudy", "analyseCrossedStudy", "measurement-studies-crossed"),
        ("drawNestedStudy", "analyseNestedStudy", "measurement-studies-nested"),
    ],
)
def test_each_component_stands_at_its_standard_deviation(operation: str, source: str, example: str) -> None:
    body = served.example(example)
    answer, root = served.answer_of(source, body), parsed(picture(operation, body))
    sd = along(root, row(root, "all together") + 22)
    told = root.find(f"{SVG}desc")
    assert told is not None
    for name, component in NAMED.items():
        known = answer["components"][component]
        y = row(root, name)
        (x,) = dots_at(root, y - 4)
        assert sd(x) == pytest.approx(known["sd"], abs=0.01 * answer["components"]["total"]["sd"])
        written = f"{known['sd']:.3g} ({known['sd_lower']:.3g} to {known['sd_upper']:.3g})"
        (beside,) = [text for text, _, at in texts(root) if at == y and text.startswith(written)]
        assert f"{known['share_of_tolerance_percent']:.3g} %" in beside
        assert written in (told.text or "")
        # The intervals reach to their ends, or are arrows at the end of the scale.
        ends = [one for one in root.iter(f"{SVG}path") if f" {y - 4:.1f}H" in one.get("d", "")]
        reached = [
            (float(one.get("d", "").partition("H")[2].partition("m")[0]), one.get("d", "")) for one in ends
        ]
        assert len(reached) == 2
        assert sd(reached[0][0]) == pytest.approx(
            known["sd_lower"], abs=0.01 * answer["components"]["total"]["sd"]
        )
        if reached[1][1].endswith("v8"):
            assert sd(reached[1][0]) == pytest.approx(
                known["sd_upper"], abs=0.01 * answer["components"]["total"]["sd"]
            )
        else:
            assert known["sd_upper"] > sd(reached[1][0])


def test_lanes_show_every_measurement_against_its_part() -> None:
    body = served.example("measurement-studies-crossed")
    data = body["data"]
    root = parsed(picture("drawCrossedStudy", body))
    values = np.array(data["values"])
    parts, appraisers = np.array(data["parts"]), np.array(data["appraisers"])
    means = {name: values[parts == name].mean() for name in set(data["parts"])}
    order = sorted(means, key=lambda name: means[name])
    assert [text for text, _, _ in texts(root) if text in means] == order
    at = {text: x for text, x, _ in texts(root) if text in means}
    assert list(at.values()) == sorted(at.values())
    for appraiser in sorted(set(data["appraisers"])):
        y = row(root, appraiser)
        top, bottom = y + 6, y + 68
        scale = _lane_scale(root, top, bottom)
        dots = sorted(at for at in places(root, "dot") if top <= at[1] <= bottom)
        own = appraisers == appraiser
        assert len(dots) == own.sum()
        expected = [value - means[name] for name in order for value in values[own & (parts == name)]]
        assert np.abs(np.array([scale(y) for _, y in dots]) - expected).max() < 2e-4
        (line,) = [
            path
            for path in root.iter(f"{SVG}path")
            if path.get("stroke-width") == "1.3"
            and path.get("d", "").count("L") == len(order) - 1
            and top <= vertices(path)[0][1] <= bottom
        ]
        cells = [values[own & (parts == name)].mean() - means[name] for name in order]
        assert np.abs(np.array([scale(y) for _, y in vertices(line)]) - cells).max() < 2e-4
        # The band is two standard deviations of repeatability either way.
        (band,) = [
            one
            for one in root.iter(f"{SVG}rect")
            if one.get("fill") == BAND
            and float(one.get("width", 0)) > 300
            and top <= float(one.get("y", 0)) <= bottom
        ]
        sd = served.answer_of("analyseCrossedStudy", body)["components"]["repeatability"]["sd"]
        assert scale(float(band.get("y", 0))) == pytest.approx(2 * sd, abs=2e-4)


def _lane_scale(root: ElementTree.Element, top: float, bottom: float) -> Any:
    found = [
        (y - 4, known)
        for text, x, y in texts(root)
        if x > 540 and top < y < bottom + 6 and (known := number(text)) is not None
    ]
    (high, most), (low, least) = min(found), max(found)
    return lambda y: most + (y - high) * (least - most) / (low - high)


def test_repeatability_of_each_appraiser_is_told() -> None:
    body = served.example("measurement-studies-crossed")
    data = body["data"]
    answer = served.answer_of("analyseCrossedStudy", body)
    shown = " ".join(words(parsed(picture("drawCrossedStudy", body))))
    values, parts, appraisers = (np.array(data[name]) for name in ("values", "parts", "appraisers"))
    for name, told in zip(answer["appraisers"], answer["repeatability_by_appraiser"], strict=True):
        own = [values[(appraisers == name) & (parts == part)] for part in answer["parts"]]
        df = sum(len(one) - 1 for one in own)
        squares = sum(((one - one.mean()) ** 2).sum() for one in own)
        low, high = (np.sqrt(squares / scipy.stats.chi2.ppf(share, df)) for share in (0.975, 0.025))
        assert told["degrees_of_freedom"] == df
        assert (told["sd"], told["lower"], told["upper"]) == pytest.approx((np.sqrt(squares / df), low, high))
        assert f"repeats to {told['sd']:.3g} ({told['lower']:.3g} to {told['upper']:.3g})" in shown


def test_a_nested_study_shows_the_measurements_themselves() -> None:
    body = served.example("measurement-studies-nested")
    data, root = body["data"], parsed(picture("drawNestedStudy", body))
    values, parts = np.array(data["values"]), np.array(data["parts"])
    lanes = ("laboratory day", "laboratory night")
    found = []
    for name in lanes:
        top = row(root, name) + 6
        found += [at[1] - top for at in sorted(places(root, "dot")) if top <= at[1] <= top + 62]
    expected = [value for part in dict.fromkeys(data["parts"]) for value in values[parts == part]]
    slope, start = np.polyfit(expected, found, 1)
    assert slope < 0
    assert np.abs(slope * np.array(expected) + start - found).max() < 0.2
    assert set(data["parts"]) <= set(words(root))


def test_one_trial_one_appraiser_and_many_appraisers() -> None:
    rng = np.random.default_rng(11)
    for trials, people in ((1, 3), (3, 1), (2, 12)):
        cells = [
            (f"P{p}", f"operator {a}", p + rng.normal())
            for p in range(5)
            for a in range(people)
            for _ in range(trials)
        ]
        part, who, value = zip(*cells, strict=True)
        body = {"data": {"parts": list(part), "appraisers": list(who), "values": list(value)}}
        found = words(parsed(picture("drawCrossedStudy", body)))
        assert len([text for text in found if text.startswith("operator ")]) == min(people, 8)
        assert any("Drawn: the 8 of 12 appraisers" in text for text in found) == (people == 12)
        assert any("repeats to" in text for text in found) == (trials > 1)
        assert any("The gauge makes" in text for text in found)


def test_a_study_without_any_spread_is_drawn() -> None:
    cells = [(f"P{p}", f"a{a}") for p in range(3) for a in range(2) for _ in range(2)]
    part, who = zip(*cells, strict=True)
    body = {"data": {"parts": list(part), "appraisers": list(who), "values": [5.0] * 12}}
    text = picture("drawCrossedStudy", body)
    assert "Nothing varies here" in text
    assert "nan" not in text.lower()


# Agreement --------------------------------------------------------------------------------------------


def test_each_share_stands_at_its_percent() -> None:
    body = served.example("measurement-studies-attributes")
    answer, root = (
        served.answer_of("analyseAgreementStudy", body),
        parsed(picture("drawAgreementStudy", body)),
    )
    questions = {
        "Sorts an item alike every time": [one["repeated"] for one in answer["by_appraiser"]],
        "All appraisers alike every time": [answer["between"]],
        "Agrees with the reference every time": [
            answer["all_matched"],
            *(one["matched"] for one in answer["by_appraiser"]),
        ],
        "Lets an item through that should be rejected": [one["misses"] for one in answer["by_appraiser"]],
        "Rejects an item that is good": [one["false_alarms"] for one in answer["by_appraiser"]],
    }
    for question, shares in questions.items():
        y = row(root, question)
        percent = along(root, y + 19 * len(shares) + 22)
        for share in shares:
            y += 19
            (x,) = dots_at(root, y - 4)
            assert percent(x) == pytest.approx(100 * share["proportion"], abs=0.4)
            (beside,) = [text for text, x, at in texts(root) if abs(at - y) < 0.1 and x > 600]
            assert beside.endswith(f"{share['count']} of {share['opportunities']}")


def test_the_items_to_look_at_again_are_named() -> None:
    body = served.example("measurement-studies-attributes")
    right = dict(zip(body["reference"]["items"], body["reference"]["ratings"], strict=True))
    data = body["data"]
    wrong = sorted(
        {item for item, rating in zip(data["items"], data["ratings"], strict=True) if rating != right[item]}
    )
    shown = " ".join(words(parsed(picture("drawAgreementStudy", body))))
    assert (
        f"Look again at {len(wrong)} items not rated alike and right every time: {', '.join(wrong)}." in shown
    )
    data["ratings"] = [right[item] for item in data["items"]]
    shown = " ".join(words(parsed(picture("drawAgreementStudy", body))))
    assert "Every item was rated alike and right by all, every time." in shown


# Bias -------------------------------------------------------------------------------------------------


def test_bias_its_line_and_its_band_stand_where_they_are() -> None:
    body = served.example("measurement-studies-bias")
    answer, root = served.answer_of("analyseBiasStudy", body), parsed(picture("drawBiasStudy", body))
    (foot,) = [y for text, _, y in texts(root) if text.startswith("reference value; up the side")]
    reference = along(root, foot - 17)
    bias = up(root, 558, (80, foot - 20))
    # Every measurement is a small dot to the left of its part.
    small = [
        at
        for path in root.iter(f"{SVG}path")
        if path.get("stroke-linecap") == "round" and path.get("stroke-width") == "2.8"
        for at in vertices(path)
        if at[1] < foot - 34
    ]
    expected = sorted(value - one["reference"] for one in body["data"]["levels"] for value in one["values"])
    assert sorted(bias(y) for _, y in small) == pytest.approx(expected, abs=1e-4)
    big = [
        at
        for path in root.iter(f"{SVG}path")
        if path.get("stroke-linecap") == "round" and path.get("stroke-width") == "6.4"
        for at in vertices(path)
        if at[1] < foot - 34
    ]
    for (x, y), level in zip(sorted(big), answer["levels"], strict=True):
        assert reference(x) == pytest.approx(level["reference"], abs=0.005)
        assert bias(y) == pytest.approx(level["bias"], abs=5e-5)
    off = [one for one in answer["levels"] if one["lower"] > 0 or one["upper"] < 0]
    rings = [at for at in places(root, "ring") if at[1] < foot - 34]
    assert len(rings) == len(off)
    # The band against the answer's own bounds at the levels.
    (band,) = [path for path in root.iter(f"{SVG}path") if path.get("fill") == BAND]
    edge = vertices(band)
    half = len(edge) // 2
    line = answer["linearity"]
    for at, low, high in zip(
        [one["reference"] for one in answer["levels"]],
        line["fitted_lower"],
        line["fitted_upper"],
        strict=True,
    ):
        over, under = edge[:half], edge[half:]
        nearest = [min(side, key=lambda one: abs(reference(one[0]) - at)) for side in (over, under)]
        assert [bias(y) for _, y in nearest] == pytest.approx([high, low], abs=1e-4)


def test_one_reference_part_has_no_line() -> None:
    body = {"data": {"levels": [{"reference": 5.0, "values": [5.01, 4.99, 5.0, 5.02]}]}}
    root = parsed(picture("drawBiasStudy", body))
    assert not [path for path in root.iter(f"{SVG}path") if path.get("fill") == BAND]
    assert any(text.startswith("Bias differs from zero at 0 of 1 reference part.") for text in words(root))
