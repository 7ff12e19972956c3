"""The pictures of the operations: what they show, held against the numbers."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest

from contract import served
from pictures.drawn import AMBER, PICTURES, SVG, parsed, picture, places, source_of, words

GOLDEN = Path(__file__).parent / "golden"
EXAMPLES = [(name, example) for name, found in PICTURES.items() for example in found.examples]
OF_CHARTS = [(name, example) for name, example in EXAMPLES if "/charts/" in PICTURES[name].path]


def judged_of(operation_id: str, body: Any) -> dict[str, Any]:
    answer = served.answer_of(source_of(operation_id).operation_id, body)
    return answer.get("baseline", answer)


# What every picture owes ------------------------------------------------------------------------------


@pytest.mark.parametrize(("operation_id", "name"), EXAMPLES)
def test_every_example_is_drawn(operation_id: str, name: str) -> None:
    found = served.call(operation_id, served.example(name))
    assert found.status_code == 200
    assert found.content_type == "image/svg+xml"
    assert found.headers["Content-Security-Policy"] == "default-src 'none'; style-src 'unsafe-inline'"
    assert found.headers["X-Content-Type-Options"] == "nosniff"
    assert found.headers["Cache-Control"] == "no-store"
    text = found.get_data(as_text=True)
    root = parsed(text)
    assert root.tag == f"{SVG}svg"
    assert root.get("role") == "img"
    wide, high = root.get("width"), root.get("height")
    assert root.get("viewBox") == f"0 0 {wide} {high}"
    by_id = {element.get("id"): element for element in root.iter() if element.get("id")}
    title, description = (by_id[one] for one in (root.get("aria-labelledby") or "").split())
    assert title.tag == f"{SVG}title"
    assert description.tag == f"{SVG}desc"
    assert (title.text or "").strip()
    assert re.search(r"\d", description.text or "")
    assert all(re.match(r"p[0-9a-f]{12}-", own or "") for own in by_id)
    # It stands by itself, and does nothing.
    tags = {element.tag.removeprefix(SVG) for element in root.iter()}
    assert tags <= {"svg", "title", "desc", "g", "path", "rect", "text"}
    for element in root.iter():
        assert not any(name.startswith("on") or "href" in name or name == "style" for name in element.attrib)
    assert "url(" not in text
    # All of it is on the paper.
    for element in root.iter(f"{SVG}text"):
        assert 0 <= float(element.get("x", -1)) <= float(wide or 0)
        assert 0 < float(element.get("y", -1)) < float(high or 0)
    assert not re.search(r"nan|inf[^oer]", re.sub(r"<(title|desc|text).*?</\1>", "", text))


@pytest.mark.parametrize(("operation_id", "name"), EXAMPLES[:: len(EXAMPLES) // 8])
def test_the_same_request_gives_the_same_bytes(operation_id: str, name: str) -> None:
    assert picture(operation_id, served.example(name)) == picture(operation_id, served.example(name))


def test_two_pictures_on_a_page_share_no_id() -> None:
    one, other = (
        set(re.findall(r' id="([^"]+)"', picture(name, served.example(example))))
        for name, example in (("drawXbarRLimits", "xbar-r-limits"), ("drawCLimits", "c-limits"))
    )
    assert one
    assert other
    assert not one & other


@pytest.mark.parametrize(
    ("operation_id", "name"),
    [
        ("drawXbarRSignals", "xbar-r-signals"),
        ("drawMeasurements", "capability-measurements"),
        ("drawSubgroupDesign", "designs-subgroups"),
        ("drawRunLength", "designs-run-length"),
        ("drawMeasurements", "capability-below-limits"),
        ("drawEconomicDesign", "designs-economic"),
        ("drawEconomicDesign", "designs-economic-rules"),
        ("drawCrossedStudy", "measurement-studies-crossed"),
        ("drawNestedStudy", "measurement-studies-nested"),
        ("drawAgreementStudy", "measurement-studies-attributes"),
        ("drawBiasStudy", "measurement-studies-bias"),
        ("drawReleaseCheck", "release-checks"),
    ],
)
def test_a_kind_of_picture_looks_as_it_was_approved(operation_id: str, name: str) -> None:
    """After a change that is meant, looked at and found good: write the file anew from the answer."""
    expected = (GOLDEN / f"{name}.svg").read_text()
    found = picture(operation_id, served.example(name))

    def plain(text: str) -> str:
        # Another processor may round a place or a digest another way.
        return re.sub(r"p[0-9a-f]{12}-", "", re.sub(r"(\d+)\.\d", r"\1", text))

    assert plain(found).split(">") == plain(expected).split(">")


# Charts: places against numbers -----------------------------------------------------------------------


def places_of_panel(
    root: ElementTree.Element, judged: dict[str, Any], name: str
) -> Iterator[tuple[float, float]]:
    """The places of a panel's points along its line."""
    lines = [
        path
        for path in root.iter(f"{SVG}path")
        if path.get("stroke-linejoin") == "round" and path.get("fill") == "none"
    ]
    at = list(judged["panels"]).index(name)
    for x, y in re.findall(r"[ML]([\d.-]+) ([\d.-]+)", lines[at].get("d", "")):
        yield float(x), float(y)


@pytest.mark.parametrize(("operation_id", "name"), OF_CHARTS)
def test_points_stand_where_their_numbers_say(operation_id: str, name: str) -> None:
    body = served.example(name)
    judged = judged_of(operation_id, body)
    root = parsed(picture(operation_id, body))
    judged["panels"] = {panel: drawn for panel, drawn in judged["panels"].items() if drawn is not None}
    for panel, drawn in judged["panels"].items():
        if not drawn["index"]:
            continue
        found = np.array(list(places_of_panel(root, judged, panel)))
        value, index = np.array(drawn["value"]), np.array(drawn["index"])
        assert len(found) == len(value)
        if np.ptp(value) > 0:
            # One straight scale takes all values to their places, within half a pixel.
            slope, offset = np.polyfit(value, found[:, 1], 1)
            assert slope < 0
            assert np.abs(slope * value + offset - found[:, 1]).max() < 0.5
        if len(index) > 1:
            step, start = np.polyfit(index, found[:, 0], 1)
            assert step > 0
            assert np.abs(step * index + start - found[:, 0]).max() < 0.5


@pytest.mark.parametrize(("operation_id", "name"), OF_CHARTS)
def test_every_signal_is_marked_and_told(operation_id: str, name: str) -> None:
    body = served.example(name)
    judged = judged_of(operation_id, body)
    text = picture(operation_id, body)
    root = parsed(text)
    rings = places(root, "ring")
    judged["panels"] = {panel: drawn for panel, drawn in judged["panels"].items() if drawn is not None}
    for signal in judged["signals"]:
        drawn = judged["panels"][signal["panel"]]
        along = list(places_of_panel(root, judged, signal["panel"]))
        for point in (*signal["points"], signal["index"]):
            if point in drawn["index"]:
                at = along[drawn["index"].index(point)]
                assert any(abs(x - at[0]) < 0.2 and abs(y - at[1]) < 0.2 for x, y in rings), (signal, at)
        told = " ".join(" ".join(words(root)).split())
        assert signal["sentence"][:40] in told or "the answer in numbers tells each" in told
        own = "".join(title.text or "" for title in root.iter(f"{SVG}title"))
        assert signal["sentence"] in own
    if not judged["signals"]:
        assert not rings
        assert "In control" in text


def test_a_point_beyond_a_limit_is_a_diamond_and_one_left_out_is_open() -> None:
    values = np.random.default_rng(4).normal(2.5, 0.01, (20, 5)).round(3)
    values[6] += 0.05
    values[12] += 0.05
    body = {"data": {"values": values.tolist()}, "exclude": [{"index": 12, "reason": "glaze"}]}
    judged = judged_of("drawXbarRLimits", body)
    root = parsed(picture("drawXbarRLimits", body))
    along = list(places_of_panel(root, judged, "mean"))
    beyond = [at for at in range(20) if not -0.03 < judged["panels"]["mean"]["value"][at] - 2.5 < 0.03]
    assert beyond == [6, 12]
    assert along[6] in places(root, "diamond")
    assert along[12] in places(root, "open diamond")
    assert along[12] not in places(root, "diamond")
    ranges = list(places_of_panel(root, judged, "range"))
    assert any(abs(x - ranges[12][0]) < 0.2 for x, _ in places(root, "open"))
    assert {"left out of the estimates", "beyond a limit", "part of a signal"} <= set(words(root))


def test_the_limits_are_labelled_with_their_values_at_the_right_edge() -> None:
    body = served.example("xbar-s-limits")
    limits = served.answer_of("fitXbarSLimits", body)["limits"]["panels"]
    root = parsed(picture("drawXbarSLimits", body))
    right = {
        element.text: float(element.get("y", 0))
        for element in root.iter(f"{SVG}text")
        if float(element.get("x", 0)) > 560
    }
    for panel in limits.values():
        for role in ("upper", "centre", "lower"):
            assert any(abs(float(text) - panel[role]) < 6e-5 for text in right if text), (role, panel)


def test_a_gap_breaks_the_line() -> None:
    values = [5.1, 4.9, 5.0, None, 5.2, 5.1, 4.8, 5.0]
    root = parsed(picture("drawIndividualsLimits", {"data": {"values": values}}))
    line = next(path.get("d", "") for path in root.iter(f"{SVG}path") if path.get("stroke-linejoin"))
    assert line.count("M") == 2
    assert line.count("M") + line.count("L") == 7


def test_limits_that_vary_are_steps_and_a_bound_nothing_crosses_is_no_line() -> None:
    body = {"data": {"counts": [3, 5, 4, 6, 2], "inspected": [50, 50, 100, 100, 50]}}
    root = parsed(picture("drawPLimits", body))
    edges = [
        p.get("d", "")
        for p in root.iter(f"{SVG}path")
        if p.get("stroke") == "#7c909e" and "L" in p.get("d", "")
    ]
    (steps,) = [d for d in edges if d.count("L") >= 5]
    assert steps.count("M") == 1  # the upper limit alone: no proportion lies below 0
    heights = [float(y) for _, y in re.findall(r"[ML]([\d.-]+) ([\d.-]+)", steps)]
    assert len(set(heights)) == 2
    assert any("differ from point to point" in text for text in words(root))


def test_the_lines_of_a_drifting_level_slope() -> None:
    text = picture("drawTrendLimits", served.example("trend-limits"))
    band = next(
        path.get("d", "") for path in parsed(text).iter(f"{SVG}path") if path.get("fill") == "#e2eaf0"
    )
    ys = [float(y) for _, y in re.findall(r"[ML]([\d.-]+) ([\d.-]+)", band)]
    assert len(set(ys)) > 20


def test_limits_from_standards_alone_are_drawn() -> None:
    text = picture("drawXbarRLimits", {"standards": {"mean": 2.5, "sigma": 0.01}, "subgroup_size": 5})
    assert {"2.5134", "2.4866", "2.5000"} <= set(words(parsed(text)))


def test_a_warning_is_told_apart_from_a_call_for_action() -> None:
    values = [5.0, 5.2, 4.9, 5.1, 5.3, 5.2, 5.25, 5.3, 4.8, 4.9, 4.7, 5.0]
    own = [{"form": "zone", "points": 3, "window": 3, "distance": 0, "severity": "warning"}]
    root = parsed(picture("drawIndividualsLimits", {"data": {"values": values}, "rules": {"own": own}}))
    assert any(text.startswith("Warning, ") for text in words(root))
    assert any(text.startswith("In control, with ") for text in words(root))
    broken = [path for path in root.iter(f"{SVG}path") if path.get("stroke") == AMBER]
    assert broken
    assert all(path.get("stroke-dasharray") for path in broken)


# Names and times --------------------------------------------------------------------------------------


def test_hostile_names_are_text() -> None:
    names = [f"</text><script>alert({at})</script>" for at in range(4)]
    names += ['"onload="x', "&amp;\u202egnp.exe", "  a\u200f\u2066b  ", "\ufeff"]
    body = {
        "characteristic": {"name": "<script>\u202e&\"'", "unit": "]]>"},
        "data": {"values": [1.0, 1.2, 0.9, 1.1, 1.0, 1.2, 0.9, 9.0], "ids": names},
    }
    text = picture("drawIndividualsLimits", body)
    root = parsed(text)
    assert not any(element.tag == f"{SVG}script" for element in root.iter())
    assert "<script>&\"' (]]>)" in words(root)
    assert not re.search(
        "[\u0000-\u0009\u000b-\u001f\u007f-\u009f\u200e\u200f\u202a-\u202e\u2066-\u2069]", text
    )
    assert any("point 7" in text for text in words(root))  # an id of nothing names no point


def test_times_are_short_and_the_caption_tells_the_day() -> None:
    values = np.random.default_rng(5).normal(5, 1, 30).tolist()
    day = {
        "values": values,
        "times": [f"2026-03-02T{at // 2:02d}:{30 * (at % 2):02d}:00+01:00" for at in range(30)],
    }
    found = words(parsed(picture("drawIndividualsLimits", {"data": day})))
    assert "2 Mar 2026 (+01:00)" in found
    assert "00:00" in found
    month = {"values": values, "times": [f"2026-03-{at + 1:02d}T06:00:00Z" for at in range(30)]}
    found = words(parsed(picture("drawIndividualsLimits", {"data": month})))
    assert "1 Mar" in found
    assert "1 Mar 2026 06:00 to 30 Mar 2026 06:00 (UTC)" in found


def test_names_along_the_axis_do_not_run_into_each_other() -> None:
    ids = [f"car-{at:05d}-of-the-long-kiln" for at in range(120)]
    values = np.random.default_rng(6).normal(5, 1, 120).tolist()
    root = parsed(picture("drawIndividualsLimits", {"data": {"values": values, "ids": ids}}))
    named = [element for element in root.iter(f"{SVG}text") if (element.text or "").startswith("car-")]
    foot = max(float(element.get("y", 0)) for element in named if element.get("text-anchor") == "middle")
    along = sorted(float(element.get("x", 0)) for element in named if float(element.get("y", 0)) == foot)
    assert len(along) >= 3
    assert min(np.diff(along)) > 70


# Long series ------------------------------------------------------------------------------------------


def test_thinning_keeps_every_extreme_and_every_signal() -> None:
    values = np.random.default_rng(7).normal(50, 1, 20_000)
    values[[500, 501, 13_333]] = 70, 71, 30
    values[8000:8009] = 50.4
    body = {"data": {"values": values.tolist()}, "rules": {"published": "western-electric-1956"}}
    judged = judged_of("drawIndividualsLimits", body)
    text = picture("drawIndividualsLimits", body)
    root = parsed(text)
    assert len(text) < 400_000
    along = np.array(list(places_of_panel(root, judged, "value")))
    assert len(along) < 6000
    marks = np.array(places(root, "diamond"))
    drawn = judged["panels"]["value"]
    upper, lower = drawn["upper"][0], drawn["lower"][0]
    x0, x1 = along[0, 0], along[-1, 0]
    slope = (along[:, 1].max() - along[:, 1].min()) / (values.min() - values.max())
    origin = along[:, 1].min() - slope * values.max()
    for at in np.flatnonzero((values > upper) | (values < lower)):
        x, y = x0 + at * (x1 - x0) / 19_999, origin + slope * values[at]
        # A mark stands there, or one that covers it.
        assert np.abs(marks - (x, y)).max(axis=1).min() < 2.5, at
    # Where signals are is told at the foot: a mark in each pixel's column that holds a part of one.
    foot = next(path.get("d", "") for path in root.iter(f"{SVG}path") if "v-7" in path.get("d", ""))
    columns = {int(float(x)) for x in re.findall(r"M([\d.]+) ", foot)}
    for signal in judged["signals"]:
        if signal["panel"] == "value":
            for point in signal["points"]:
                assert int(x0 + point * (x1 - x0) / 19_999 + 1e-6) in columns or (
                    int(x0 + point * (x1 - x0) / 19_999 - 1e-2) in columns
                ), point


# Other pictures ---------------------------------------------------------------------------------------


def test_capability_of_one_limit_of_a_summary_and_of_a_short_run() -> None:
    summary = {"mean": 10.0, "count": 60, "total_sd": 0.5}
    found = words(parsed(picture("drawMeasurements", {"summary": summary, "specification": {"upper": 11}})))
    assert any(text.startswith("Ppk 0.67") for text in found)
    assert any(text.startswith("upper 11") for text in found)
    assert not any(text.startswith("lower") for text in found)
    values = np.random.default_rng(8).normal(10, 0.5, 60).round(2).tolist()
    body = {"data": {"values": values}, "specification": {"lower": 9, "upper": 11}, "short_run": True}
    assert {"Cm", "Cmk", "Cpk", "Ppk"} <= set(words(parsed(picture("drawMeasurements", body))))


def test_the_bars_of_a_histogram_hold_all_values() -> None:
    body = served.example("capability-measurements")
    root = parsed(picture("drawMeasurements", body))
    bars = [
        one
        for one in root.iter(f"{SVG}rect")
        if one.get("fill") == "#e2eaf0" and float(one.get("y", 0)) < 310
    ]
    heights = np.array([float(bar.get("height", 0)) for bar in bars])
    values = np.array([each for row in body["data"]["values"] for each in row if each is not None])
    # Heights are counts on one scale: with the right one, all are whole and sum to the number of values.
    counts = heights / heights.sum() * len(values)
    assert np.abs(counts - counts.round()).max() < 0.15


def test_run_lengths_stand_on_a_logarithmic_scale() -> None:
    body = served.example("designs-run-length")
    lengths = [one["arl"] for one in served.answer_of("computeRunLength", body)["run_lengths"]]
    dots = [at for at in places(parsed(picture("drawRunLength", body)), "dot") if at[1] < 330]
    assert len(dots) == len(lengths)
    slope, offset = np.polyfit(np.log(lengths), [y for _, y in dots], 1)
    assert slope < 0
    assert np.abs(slope * np.log(lengths) + offset - [y for _, y in dots]).max() < 0.5


def test_plans_alone_are_ranked() -> None:
    body = {
        key: part
        for key, part in served.example("designs-subgroups").items()
        if key not in ("detect", "present")
    }
    found = words(parsed(picture("drawSubgroupDesign", body)))
    assert any(text.startswith("1. ") for text in found)


def test_a_request_that_cannot_be_computed_is_a_problem_as_ever() -> None:
    found = served.call("drawXbarRLimits", {"data": {"values": [[1, 1], [1, 1]]}})
    assert found.status_code == 422
    assert json.loads(found.data)["errors"]
