"""Measurement studies as callers post them: columns in, names out, and what cannot be analysed."""

from __future__ import annotations

import random
from time import process_time
from typing import Any

import orjson
import pytest

from assignable.api import problems
from contract import served

CROSSED, NESTED = "analyseCrossedStudy", "analyseNestedStudy"
SORTED, BIAS = "analyseAgreementStudy", "analyseBiasStudy"


def gauge(operation_id: str = CROSSED) -> dict[str, Any]:
    name = {CROSSED: "crossed", NESTED: "nested", SORTED: "attributes", BIAS: "bias"}[operation_id]
    return served.example(f"measurement-studies-{name}")


def faults(operation_id: str, body: Any, kind: Any = problems.NOT_COMPUTABLE) -> list[tuple[str, str]]:
    found = served.problem_of(served.call(operation_id, body), body, kind)
    return [(entry["code"], entry["pointer"]) for entry in found["errors"]]


def details(operation_id: str, body: Any) -> str:
    found = served.problem_of(served.call(operation_id, body), body, problems.NOT_COMPUTABLE)
    return " ".join(entry["detail"] for entry in found["errors"])


def columns(*rows: tuple[str, str, float | None]) -> dict[str, Any]:
    parts, appraisers, values = zip(*rows, strict=True)
    return {"data": {"parts": list(parts), "appraisers": list(appraisers), "values": list(values)}}


# Columns --------------------------------------------------------------------------------------------


def test_rows_in_any_order_give_the_same_components() -> None:
    body = gauge()
    rows = list(zip(*body["data"].values(), strict=True))
    random.Random(5).shuffle(rows)
    mixed = {**body, "data": dict(zip(body["data"], map(list, zip(*rows, strict=True)), strict=True))}
    one, other = served.answer_of(CROSSED, body), served.answer_of(CROSSED, mixed)
    assert one["components"]["gauge"]["sd"] == pytest.approx(other["components"]["gauge"]["sd"], rel=1e-12)
    means = dict(zip(one["parts"], one["part_means"], strict=True))
    assert dict(zip(other["parts"], other["part_means"], strict=True)) == pytest.approx(means)


def test_names_come_back_with_their_own_figures() -> None:
    body = columns(
        ("P1", "Ines", 1.0), ("P1", "Tomas", 2.0), ("P2", "Ines", 5.0),
        ("P2", "Tomas", 7.0), ("P2", "Tomas", 7.5), ("P1", "Ines", 1.5),
        ("P2", "Ines", 6.0), ("P1", "Tomas", 2.0),
    )  # fmt: skip
    answer = served.answer_of(CROSSED, body)
    assert (answer["parts"], answer["appraisers"], answer["trials"]) == (["P1", "P2"], ["Ines", "Tomas"], 2)
    assert answer["part_means"] == pytest.approx([1.625, 6.375])
    assert answer["appraiser_means"] == pytest.approx([3.375, 4.625])
    assert answer["cells"]["parts"] == ["P1", "P1", "P2", "P2"]
    assert answer["cells"]["appraisers"] == ["Ines", "Tomas", "Ines", "Tomas"]
    assert answer["cells"]["means"] == pytest.approx([1.25, 2.0, 5.5, 7.25])
    assert answer["cells"]["ranges"] == pytest.approx([0.5, 0.0, 1.0, 0.5])


def test_a_null_row_beyond_a_full_table_is_no_loss() -> None:
    body = gauge()
    full = served.answer_of(CROSSED, body)
    for name, value in (("parts", "C-01"), ("appraisers", "Ines"), ("values", None)):
        body["data"][name].append(value)
    assert served.answer_of(CROSSED, body)["components"] == full["components"]


def test_a_specification_with_one_limit_looks_at_the_room_to_it() -> None:
    body = {**gauge(), "specification": {"upper": 2.65}}
    answer = served.answer_of(CROSSED, body)
    gauge_sd = answer["components"]["gauge"]["sd"]
    expected = 100 * 3 * gauge_sd / (2.65 - answer["grand_mean"])
    assert answer["components"]["gauge"]["share_of_tolerance_percent"] == pytest.approx(expected)
    assert answer["capability"]["index"] == "cpu"
    beyond = served.answer_of(CROSSED, {**gauge(), "specification": {"upper": 2.0}})
    assert "mean-beyond-limit" in [caution["code"] for caution in beyond["cautions"]]
    assert beyond["components"]["gauge"]["share_of_tolerance_percent"] is None


def test_parts_of_one_name_under_two_appraisers_are_told() -> None:
    body = gauge(NESTED)
    half = len(body["data"]["parts"]) // 2
    body["data"]["parts"][half:] = body["data"]["parts"][:half]
    answer = served.answer_of(NESTED, body)
    assert answer["cautions"][0]["code"] == "shared-part-names"
    assert answer["components"] == served.answer_of(NESTED, gauge(NESTED))["components"]


def test_ratings_come_back_by_name() -> None:
    answer = served.answer_of(SORTED, gauge(SORTED))
    assert answer["categories"] == ["good", "cracked"]
    assert [one["appraiser"] for one in answer["by_appraiser"]] == answer["appraisers"] == ["Ines", "Tomas"]
    assert [(pair["first"], pair["second"]) for pair in answer["pairs"]] == [("Ines", "Tomas")]
    assert [row["category"] for row in answer["pairs"][0]["cohen"]["table"]] == answer["categories"]
    assert answer["by_appraiser"][0]["misses"]["opportunities"] == 10


# What cannot be analysed ----------------------------------------------------------------------------


def test_a_missing_measurement_is_named() -> None:
    body = gauge()
    body["data"]["values"][9] = None
    assert faults(CROSSED, body) == [("missing-measurement", "#/data/values/9")]
    assert "part C-02 by Tomas" in details(CROSSED, body)


def test_a_missing_row_is_named() -> None:
    body = gauge()
    for column in body["data"].values():
        del column[9]
    assert faults(CROSSED, body) == [("unbalanced", "#/data/values/32")]
    assert "Part C-02 by Tomas has 1 value where most have 2" in details(CROSSED, body)


def test_an_empty_cell_is_named() -> None:
    body = columns(("P1", "A", 1.0), ("P1", "B", 1.1), ("P2", "A", 2.0))
    assert faults(CROSSED, body) == [("unbalanced", "#/data/values")]
    assert "Part P2 by B has 0 values" in details(CROSSED, body)


def test_a_part_that_was_never_measured_is_named() -> None:
    body = gauge()
    body["data"]["values"] = [
        None if part == "C-03" else value
        for part, value in zip(body["data"]["parts"], body["data"]["values"], strict=True)
    ]
    assert {code for code, _ in faults(CROSSED, body)} == {"missing-measurement"}
    assert "part C-03 by Yara" in details(CROSSED, body)


def test_parts_of_their_own_are_no_crossed_study() -> None:
    assert faults(CROSSED, gauge(NESTED)) == [("nested", "#/data/appraisers")]


def test_one_trial_is_the_additive_analysis_when_crossed() -> None:
    body = gauge()
    body["data"] = {name: column[:24] for name, column in body["data"].items()}
    answer = served.answer_of(CROSSED, body)
    assert (answer["trials"], answer["model"]) == (1, "without-interaction")
    assert answer["table_with_interaction"] is None
    assert [caution["code"] for caution in answer["cautions"]] == ["interaction-not-estimable"]


def test_one_appraiser_is_the_one_way_analysis() -> None:
    body = gauge()
    body["data"]["appraisers"] = ["Ines"] * len(body["data"]["values"])
    answer = served.answer_of(CROSSED, body)
    assert (answer["model"], answer["components"]["reproducibility"]) == ("one-appraiser", None)
    assert answer["cautions"][0]["code"] == "one-appraiser"


def test_constant_measurements_say_so() -> None:
    body = gauge()
    body["data"]["values"] = [2.5] * len(body["data"]["values"])
    answer = served.answer_of(CROSSED, body)
    assert answer["chart"] is None
    assert "no-variation" in [caution["code"] for caution in answer["cautions"]]


LONE = [("P1", "A", 1.0), ("P1", "A", 1.1)]
ONCE = [("P1", "A", 1.0), ("P2", "A", 1.1), ("P3", "A", 1.3)]


@pytest.mark.parametrize(
    ("operation_id", "body", "expected"),
    [
        (CROSSED, columns(*LONE), [("too-few-parts", "#/data/values")]),
        (CROSSED, columns(*ONCE), [("nothing-repeated", "#/data/values")]),
        (CROSSED, columns(("P1", "A", None), ("P2", "A", None)), [("empty", "#/data/values")]),
        (NESTED, columns(*ONCE), [("nothing-repeated", "#/data/values")]),
        (NESTED, columns(*LONE), [("too-few-parts", "#/data/values")]),
        (
            NESTED,
            columns(*LONE, ("P2", "A", 1.0), ("P2", "A", 1.2), ("P3", "B", 1.0), ("P3", "B", 1.2)),
            [("unbalanced", "#/data/appraisers/4")],
        ),
        (NESTED, columns(*LONE, ("P2", "A", 1.0)), [("unbalanced", "#/data/values/2")]),
        (
            CROSSED,
            {"data": {"parts": ["P1"], "appraisers": ["A", "B", "C"], "values": [1.0, 2.0]}},
            [("unequal-length", "#/data/parts"), ("unequal-length", "#/data/appraisers")],
        ),
        (
            CROSSED,
            {**columns(*LONE), "specification": {"lower": 2.0, "upper": 1.0}},
            [("limits-crossed", "#/specification/lower")],
        ),
    ],
)
def test_a_study_that_cannot_be_analysed(
    operation_id: str, body: Any, expected: list[tuple[str, str]]
) -> None:
    assert faults(operation_id, body) == expected


def test_a_process_no_wider_than_the_gauge_is_refused() -> None:
    assert faults(CROSSED, {**gauge(), "process_sd": 1e-6}) == [("process-below-gauge", "#/process_sd")]


def sorting(**changed: Any) -> dict[str, Any]:
    return {**gauge(SORTED), **changed}


def ratings(**column: list[str]) -> dict[str, Any]:
    return {**gauge(SORTED)["data"], **column}


@pytest.mark.parametrize(
    ("body", "code", "pointer"),
    [
        ({"data": ratings(ratings=["good"] * 48)}, "one-category", "#/data/ratings"),
        (sorting(categories=["good", "broken"]), "unknown-category", None),
        (sorting(nonconforming="broken"), "unknown-category", "#/nonconforming"),
        (sorting(categories=["good", "cracked", "good"]), "repeated-category", "#/categories"),
        (sorting(categories=["good", "cracked", "dull"]), "does-not-apply", "#/nonconforming"),
        (sorting(reference={"items": ["F-01"], "ratings": ["good"]}), "no-reference", "#/reference/items"),
        (
            sorting(reference={"items": ["F-01", "F-01"], "ratings": ["good", "good"]}),
            "repeated-item",
            "#/reference/items/1",
        ),
        (
            sorting(reference={"items": ["F-01", "F-02"], "ratings": ["good"]}),
            "unequal-length",
            "#/reference/ratings",
        ),
        (
            {
                "data": {
                    "items": ["F-01"] * 2,
                    "appraisers": ["Ines", "Tomas"],
                    "ratings": ["good", "cracked"],
                }
            },
            "too-few-items",
            "#/data/ratings",
        ),
        (
            {"data": {"items": ["F-01", "F-02"], "appraisers": ["Ines"] * 2, "ratings": ["good", "cracked"]}},
            "nothing-repeated",
            "#/data/ratings",
        ),
        (
            {"data": {"items": ["1", "1", "2"], "appraisers": ["A"] * 3, "ratings": ["g", "g", "c"]}},
            "unbalanced",
            "#/data/ratings/2",
        ),
    ],
)
def test_ratings_that_cannot_be_analysed(body: Any, code: str, pointer: str | None) -> None:
    found = faults(SORTED, body)
    assert found[0][0] == code
    assert pointer is None or found[0][1] == pointer


def test_one_category_with_others_named_is_told_and_not_refused() -> None:
    body = sorting(data=ratings(ratings=["good"] * 48))
    answer = served.answer_of(SORTED, body)
    assert answer["overall"]["kappa"] is None
    assert "one-category" in [caution["code"] for caution in answer["cautions"]]


def test_nan_is_not_json() -> None:
    body = b'{"data": {"levels": [{"reference": 1.0, "values": [NaN]}]}}'
    answer = (
        served.app()
        .test_client()
        .post(served.operations()[BIAS].path, data=body, content_type="application/json")
    )
    assert answer.status_code == 400


def test_a_missing_bias_measurement_is_left_out_by_the_caller() -> None:
    body = {"data": {"levels": [{"reference": 1.0, "values": [1.0, None]}]}}
    assert faults(BIAS, body, problems.CONTRACT_VIOLATION) == [("null", "#/data/levels/0/values/1")]


def test_one_measurement_a_level_leaves_no_test() -> None:
    answer = served.answer_of(BIAS, {"data": {"levels": [{"reference": 1.0, "values": [1.25]}]}})
    assert answer["levels"][0]["bias"] == 0.25
    assert answer["levels"][0]["part"] is None
    assert [caution["code"] for caution in answer["cautions"]] == ["one-reference", "nothing-repeated"]


# Bounds ---------------------------------------------------------------------------------------------


def test_more_parts_than_a_study_takes_are_refused() -> None:
    rows = [(f"P{i}", "A", float(i % 7)) for i in range(1001)]
    assert faults(CROSSED, columns(*rows)) == [("too-many-parts", "#/data/parts")]


def worst(operation_id: str) -> dict[str, Any]:
    chance = random.Random(3)
    parts = [f"P{i}" for i in range(1000) for _ in range(100)]
    appraisers = [f"A{i}" for _ in range(1000) for i in range(100)]
    if operation_id == SORTED:
        categories = [f"K{i}" for i in range(20)]
        return {
            "data": {
                "items": parts,
                "appraisers": appraisers,
                "ratings": chance.choices(categories, k=100_000),
            },
            "reference": {"items": parts[::100], "ratings": chance.choices(categories, k=1000)},
        }
    if operation_id == BIAS:
        levels = [
            {"reference": i + 0.5, "values": [i + chance.random() for _ in range(500)]} for i in range(200)
        ]
        return {"data": {"levels": levels}}
    values = [chance.gauss(2.5, 0.1) for _ in range(100_000)]
    return {"data": {"parts": parts, "appraisers": appraisers, "values": values}}


@pytest.mark.parametrize("operation_id", [CROSSED, SORTED, BIAS])
def test_the_largest_study_is_bounded(operation_id: str) -> None:
    body = orjson.dumps(worst(operation_id))
    operation = served.operations()[operation_id]
    started = process_time()
    operation.execute(body)
    assert process_time() - started < 4.0
