"""Bad input, entry by entry: each is refused with a clear problem, or answered with finite numbers."""

from __future__ import annotations

import copy
import json
import math
import random
import re
from typing import Any
from xml.etree import ElementTree

import pytest

from assignable.api import answers, problems
from assignable.api.settings import Settings
from assignable.spc.charts import CHARTS
from contract import served

EVERY_CHART = pytest.mark.parametrize("name", list(CHARTS))
# Pictures take the requests of others; some stand for the ways of drawing.
DRAWN = ("XbarRLimits", "IndividualsSignals", "PLimits", "CusumLimits", "TrendLimits")
DRAWN_TOO = ("Measurements", "SubgroupDesign", "RunLength")
EXAMPLES = pytest.mark.parametrize(
    ("operation_id", "name"),
    [
        (found, name)
        for found, name in served.examples()
        if served.operations()[found].media_type != answers.SVG
        or found.removeprefix("draw") in (*DRAWN, *DRAWN_TOO)
    ],
)
XBAR = "/v1/charts/xbar-r/limits"
ROWS = [[2.51, 2.49, 2.50], [2.48, 2.50, 2.52], [2.50, 2.53, 2.49]]


def refused(
    path: str, body: Any, kind: problems.ProblemType = problems.NOT_COMPUTABLE, **headers: str
) -> dict[str, Any]:
    return served.problem_of(served.post(path, body, headers=headers), body, kind)


def endures(operation_id: str, body: Any) -> int:
    """An answer with finite numbers, or a clear problem whose pointers resolve; never anything else."""
    answer = served.call(operation_id, body)
    if answer.status_code == 200 and answer.content_type == answers.SVG:
        for element in ElementTree.fromstring(answer.data).iter():
            places = (
                str(value) for name, value in element.attrib.items() if name in ("d", "x", "y", "width")
            )
            assert not any(re.search("nan|inf|e", place) for place in places), element.attrib
    elif answer.status_code == 200:
        refuse_constants(answer.data)
    else:
        served.problem_of(answer, body)
    return answer.status_code


def refuse_constants(data: bytes) -> None:
    if data.startswith(b"<"):
        assert not re.search(rb"(?i)[\"\s>,](nan|-?inf(inity)?)[\"\s<,]", data)
        return

    def constant(text: str) -> None:
        raise AssertionError(text)

    json.loads(data, parse_constant=constant)


# Not JSON -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "text",
    [
        b"",
        b" ",
        b"{",
        b"values: 1",
        b'{"data": {"values": [[1, 2],]}}',
        b'{"sigma_multiple": NaN}',
        b'{"sigma_multiple": -Infinity}',
        b'{"sigma_multiple": 1, "sigma_multiple": 3}',
        b'{"data": {"values": [[1, 2]], "values": [[3, 4]]}}',
        b'{"sigma_multiple": .5}',
        b'{"sigma_multiple": 03}',
        b"\xef\xbb\xbf{}",
        b'{"characteristic": {"name": "\xff"}}',
        "{}".encode("utf-16"),
        b"{} {}",
        b"[" * 100_000,
        b"[" * 100_000 + b"]" * 100_000,
        b'{"data":' * 100_000 + b"1" + b"}" * 100_000,
    ],
    ids=lambda text: text[:24],
)
def test_what_is_not_json(text: bytes) -> None:
    found = refused(XBAR, text, problems.NOT_JSON)
    code = found["errors"][0]["code"]
    assert "(Line " in found["detail"] or code in ("empty-body", "not-utf-8", "byte-order-mark"), found


def test_a_number_too_large_for_any_computer() -> None:
    for text in (b"1e999", b"-1e999", b"1" * 400, b"1" * 5000):
        answer = served.post(XBAR, b'{"sigma_multiple": ' + text + b"}")
        found = served.problem_of(answer, {"sigma_multiple": 0})
        assert found["status"] in (400, 422)
        body = b'{"data": {"values": [[1, 2, ' + text + b"]]}}"
        found = served.problem_of(served.post(XBAR, body), {"data": {"values": [[1, 2, 3]]}})
        assert found["status"] in (400, 422)


def test_the_body_is_bounded() -> None:
    limit = Settings().max_body_bytes
    found = served.problem_of(served.post(XBAR, b" " * (limit + 1)), None, problems.CONTENT_TOO_LARGE)
    assert any(character.isdigit() for character in found["detail"])


@pytest.mark.parametrize("media_type", ["text/plain", "text/tab-separated-values", "application/xml", ""])
def test_the_media_type_is_json_or_csv(media_type: str) -> None:
    answer = served.post(XBAR, b"{}", content_type=media_type)
    found = served.problem_of(answer, {}, problems.UNSUPPORTED_MEDIA_TYPE)
    assert "application/json" in found["detail"]


@pytest.mark.parametrize("body", [[], [1], "text", 1, 1.5, True, None, [{}]])
def test_a_body_that_is_no_object(body: Any) -> None:
    answer = served.post(XBAR, json.dumps(body).encode())
    found = served.problem_of(answer, body, problems.CONTRACT_VIOLATION)
    assert served.codes(found) == {"not-an-object"}
    assert served.pointers(found) == ["#"]


# Numbers that are none ------------------------------------------------------------------------------


@pytest.mark.parametrize("wrong", ["2.5", "NaN", True, False, [2.5], {}, "１２"])
def test_numbers_are_numbers(wrong: Any) -> None:
    body = {"data": {"values": [[2.51, wrong], [2.48, 2.50]]}, "sigma_multiple": wrong}
    found = refused(XBAR, body, problems.CONTRACT_VIOLATION)
    assert set(served.pointers(found)) == {"#/data/values/0/1", "#/sigma_multiple"}
    assert served.codes(found) == {"not-a-number"}


def test_a_number_may_be_null_only_where_a_piece_may_be_missing() -> None:
    body = {"data": {"values": ROWS}, "sigma_multiple": None}
    assert served.pointers(refused(XBAR, body, problems.CONTRACT_VIOLATION)) == ["#/sigma_multiple"]


# Data that cannot carry a chart ---------------------------------------------------------------------


@pytest.mark.parametrize(
    ("path", "data", "pointer", "code"),
    [
        (XBAR, {"values": []}, "#/data/values", "too-few-items"),
        (XBAR, {"values": [[], []]}, "#/data/values", None),
        (XBAR, {"values": [[None, None], [None]]}, "#/data", None),
        (XBAR, {"values": [[1.0], [2.0]]}, "#/data", None),
        (XBAR, {"values": [[2.5, 2.5], [2.5, 2.5]]}, "#/data", "no-variation"),
        (XBAR, {}, "#/data", "data-missing"),
        (XBAR, {"values": ROWS, "means": [1]}, "#/data/means", "two-forms"),
        (XBAR, {"means": [1, 2], "sizes": 5}, "#/data", "one-spread"),
        (XBAR, {"means": [1, 2], "sizes": 5, "ranges": [1]}, "#/data/ranges", "unequal-length"),
        (XBAR, {"means": [1, 2], "sizes": 5, "ranges": [1, -1]}, "#/data/ranges/1", "too-small"),
        (XBAR, {"means": [1, 2], "sizes": 5, "ranges": [1, None]}, "#/data/ranges/1", "spread-missing"),
        (XBAR, {"means": [1, 2], "ranges": [1, 2]}, "#/data/sizes", "sizes-missing"),
        (XBAR, {"values": ROWS, "ids": ["a"]}, "#/data/ids", "unequal-length"),
        (XBAR, {"values": ROWS, "times": ["2026-03-02T06:00:00Z"]}, "#/data/times", "unequal-length"),
        (XBAR, {"values": ROWS, "times": ["yesterday"] * 3}, "#/data/times/0", "not-a-time"),
        (XBAR, {"values": ROWS, "times": ["2026-02-29T06:00:00Z"] * 3}, "#/data/times/0", "not-a-time"),
        ("/v1/charts/individuals/limits", {"values": []}, "#/data/values", "too-few-items"),
        ("/v1/charts/individuals/limits", {"values": [1]}, "#/data/values", None),
        ("/v1/charts/individuals/limits", {"values": [None, None]}, "#/data/values", None),
        ("/v1/charts/individuals/limits", {"values": [2.5] * 9}, "#/data", "no-variation"),
        ("/v1/charts/individuals/limits", {"values": [1, None, 2, None]}, "#/data", None),
        ("/v1/charts/p/limits", {"counts": [1], "inspected": [5, 5]}, "#/data/inspected", "unequal-length"),
        ("/v1/charts/p/limits", {"counts": [-1], "inspected": [5]}, "#/data/counts/0", "too-small"),
        ("/v1/charts/p/limits", {"counts": [1.5], "inspected": [5]}, "#/data/counts/0", "not-an-integer"),
        ("/v1/charts/p/limits", {"counts": [1, 6], "inspected": [5, 5]}, "#/data/counts/1", None),
        ("/v1/charts/p/limits", {"counts": [1, 6], "inspected": 5}, "#/data/counts/1", None),
        ("/v1/charts/p/limits", {"counts": [1], "inspected": [0]}, "#/data/inspected/0", "too-small"),
        ("/v1/charts/p/limits", {"counts": [0, 0], "inspected": 5}, "#/data/counts", None),
        ("/v1/charts/p/limits", {"counts": [5, 5], "inspected": 5}, "#/data/counts", None),
        ("/v1/charts/p/limits", {"counts": [None], "inspected": 5}, "#/data/counts", None),
        ("/v1/charts/np/limits", {"counts": [1, 2], "inspected": [5, 6]}, "#/data/inspected/1", None),
        ("/v1/charts/c/limits", {"counts": [1, 2], "inspected": [5, 6]}, "#/data/inspected/1", None),
        ("/v1/charts/c/limits", {"counts": [0, 0]}, "#/data/counts", None),
        ("/v1/charts/u/limits", {"counts": [1], "inspected": [0]}, "#/data/inspected/0", "too-small"),
        ("/v1/charts/u/limits", {"counts": [1], "inspected": [-1.5]}, "#/data/inspected/0", "too-small"),
    ],
)
def test_data_that_cannot_carry_a_chart(path: str, data: Any, pointer: str, code: str | None) -> None:
    body = {"data": data}
    found = served.problem_of(served.post(path, body), body)
    assert found["status"] == 422
    assert pointer in served.pointers(found), found
    assert code is None or code in served.codes(found), found


@EVERY_CHART
def test_empty_data_gaps_only_and_constant_data(name: str) -> None:
    """For every chart: never more than a problem, and never limits from data that hold nothing."""
    chart, example = CHARTS[name], served.example(f"{name}-limits")
    operation_id = f"fit{chart.stem}Limits"

    def everywhere(value: Any, member: str, leaf: Any) -> Any:
        if isinstance(value, list):
            return [everywhere(inner, member, leaf) for inner in value]
        return value if isinstance(value, str) else leaf

    emptied = {member: [] if isinstance(value, list) else value for member, value in example["data"].items()}
    for data in (
        {},
        emptied,
        {member: everywhere(value, member, None) for member, value in example["data"].items()},
    ):
        body = {**example, "data": data}
        assert endures(operation_id, body) == 422, data
    for leaf in (0, 1, 7, 0.1, 1e-300, 1e300):
        body = {**example, "data": {m: everywhere(v, m, leaf) for m, v in example["data"].items()}}
        endures(operation_id, body)


@EVERY_CHART
def test_one_point_of_a_baseline(name: str) -> None:
    chart, example = CHARTS[name], served.example(f"{name}-limits")
    longest = max(len(value) for value in example["data"].values() if isinstance(value, list))
    for points in (1, 2):
        data = {
            member: value[:points] if isinstance(value, list) and len(value) == longest else value
            for member, value in example["data"].items()
        }
        endures(f"fit{chart.stem}Limits", {**example, "data": data, "exclude": []})


def test_everything_excluded_or_nothing_to_exclude() -> None:
    every = [{"index": at, "reason": "thermocouple fault"} for at in range(3)]
    found = refused(XBAR, {"data": {"values": ROWS}, "exclude": every})
    assert found["errors"]
    for wrong in ([{"index": 3, "reason": "x"}], [every[0], every[0]]):
        found = refused(XBAR, {"data": {"values": ROWS}, "exclude": wrong})
        assert served.pointers(found)[0].startswith("#/exclude"), found
    for index in (-1, 0.5, "0"):
        body = {"data": {"values": ROWS}, "exclude": [{"index": index, "reason": "x"}]}
        assert served.pointers(refused(XBAR, body, problems.CONTRACT_VIOLATION)) == ["#/exclude/0/index"]


# Specifications, rules, fields, charts --------------------------------------------------------------


@pytest.mark.parametrize(
    ("specification", "pointer"),
    [
        ({"lower": 3.0, "upper": 2.0}, "#/specification"),
        ({"lower": 2.5, "upper": 2.5}, "#/specification"),
        ({}, "#/specification"),
        ({"lower": None, "upper": None}, "#/specification"),
        ({"target": 2.5}, "#/specification"),
        ({"lower": 2.0, "upper": 3.0, "target": 3.0}, "#/specification/target"),
        ({"lower": 2.0, "target": 1.0}, "#/specification/target"),
        ({"lower": "2.0"}, "#/specification/lower"),
        ({"lsl": 2.0}, "#/specification/lsl"),
    ],
)
def test_specifications_that_cannot_be_met(specification: dict[str, Any], pointer: str) -> None:
    body = {"data": {"values": ROWS}, "specification": specification}
    found = served.problem_of(served.post("/v1/capability/measurements", body), body)
    assert found["status"] == 422
    assert any(one.startswith(pointer) for one in served.pointers(found)), found


@pytest.mark.parametrize(
    ("rules", "pointer"),
    [
        ({"published": "western-electric-1965"}, "#/rules/published"),
        ({"published": 1956}, "#/rules/published"),
        ({"publish": "nelson-1984"}, "#/rules/publish"),
        ([], "#/rules"),
        ({"own": [{"form": "zones", "points": 2, "window": 3, "distance": 2}]}, "#/rules/own/0/form"),
        ({"own": [{"form": "zone", "points": 4, "window": 3, "distance": 2}]}, "#/rules/own/0/points"),
        ({"own": [{"form": "zone", "points": 2, "window": 3}]}, "#/rules/own/0/distance"),
        ({"own": [{"form": "trend", "points": 5, "window": 6}]}, "#/rules/own/0/points"),
        ({"own": [{"form": "trend", "points": 6, "window": 6, "distance": 1}]}, "#/rules/own/0/distance"),
        ({"own": [{"form": "zone", "points": 2, "window": 300, "distance": 2}]}, "#/rules/own/0/window"),
        ({"own": [{"points": 2, "window": 3, "distance": 2}]}, "#/rules/own/0/form"),
    ],
)
def test_rules_that_are_none(rules: Any, pointer: str) -> None:
    body = {"data": {"values": ROWS}, "rules": rules}
    found = served.problem_of(served.post(XBAR, body), body)
    assert found["status"] == 422
    assert pointer in served.pointers(found), found


def test_a_misspelt_field_is_told_with_the_nearest_name() -> None:
    body = {"data": {"values": ROWS}, "sigma_multipel": 2}
    found = refused(XBAR, body, problems.CONTRACT_VIOLATION)
    assert served.pointers(found) == ["#/sigma_multipel"]
    assert "sigma_multiple?" in found["detail"]


@EXAMPLES
def test_a_field_nobody_knows_is_refused_at_every_depth(operation_id: str, name: str) -> None:
    body = served.example(name)
    for path in list(served.nodes(body)):
        node = body
        for step in path:
            node = node[step]
        if isinstance(node, dict):
            sent = served.put(body, (*path, "no_such_field"), 1)
            found = served.problem_of(served.call(operation_id, sent), sent)
            assert found["status"] == 422, path
            known = served.pointer_of((*path, "no_such_field"))
            assert known in served.pointers(found) or path[:1] == ("limits",), (path, found)


def test_charts_and_paths_nobody_knows() -> None:
    client = served.app().test_client()
    for path in (
        "/v1/charts/pareto/limits",
        "/v1/charts/xbar-r",
        "/v1/",
        "/v2/charts",
        "/v1/charts/xbar-r/limits/",
    ):
        found = served.problem_of(client.post(path, json={}), {}, problems.NOT_FOUND)
        assert "Traceback" not in found["detail"]
    wrong = client.get(XBAR)
    found = served.problem_of(wrong, None, problems.METHOD_NOT_ALLOWED)
    assert "POST" in wrong.headers["Allow"]


def test_all_faults_are_told_at_once_and_their_number_is_bounded() -> None:
    rows = [["x"] * 5 for _ in range(100)]
    body = {"data": {"values": rows}, "sigma_multiple": -1, "unknown": 1, "rules": {"published": "x"}}
    found = refused(XBAR, body, problems.CONTRACT_VIOLATION)
    assert len(found["errors"]) == problems.MAX_ERRORS
    assert "503" in found["detail"]


# Sizes ----------------------------------------------------------------------------------------------


def test_sizes_a_chart_cannot_take() -> None:
    long = {"data": {"values": [[float(at) for at in range(1001)]] * 2}}
    assert served.pointers(refused(XBAR, long, problems.CONTRACT_VIOLATION))[0] == "#/data/values/0"
    summary = {"data": {"means": [1, 2], "sizes": [1001, 5], "ranges": [1, 1]}}
    assert served.pointers(refused(XBAR, summary, problems.CONTRACT_VIOLATION)) == ["#/data/sizes/0"]


# Subnormal and enormous values ----------------------------------------------------------------------

EXTREMES = (5e-324, 1e-310, 1e-300, 1e155, 1e300)
MIXTURES = (
    (1e300, -1e300),
    (1e300, 1e300, -1e300),
    (5e-324, 0.0),
    (5e-324, 1e300),
    (1e-300, 1e300, 1.0),
    (1e-310, 2e-310, 3e-310),
    (1e300, 9.99e299, 9.98e299),
    (1e16, 1e16 + 2, 1e16 + 4),
    (0.0, -0.0),
)


@pytest.mark.parametrize(
    ("operation_id", "name"),
    [
        (operation_id, name)
        for operation_id, name in served.examples()
        if served.operations()[operation_id].media_type == "application/json"
    ],
)
def test_subnormal_and_enormous_values(operation_id: str, name: str) -> None:
    """Every array of numbers of every example, filled with extremes and scaled by them; every number, too."""
    example = served.example(name)
    # Of a table, its first row and the whole; of a list, the whole.
    lists = [
        path
        for path in served.nodes(example)
        if _numbers_at(example, path) and path[0] != "limits" and (isinstance(path[-1], str) or path[-1] == 0)
    ]
    for path in lists:
        values = _at(example, path)
        for filling in (*((one,) for one in EXTREMES), *MIXTURES):
            sent = served.put(example, path, [filling[at % len(filling)] for at in range(len(values))])
            endures(operation_id, sent)
    tables = [path for path in served.nodes(example) if _table_at(example, path) and path[0] != "limits"]
    for path in (*tables, *lists):
        for factor in (1e-320, 1e-300, 1e-170, 1e150, 1e299, -1e299):
            endures(operation_id, served.put(example, path, _scaled(_at(example, path), factor)))
    for path in served.nodes(example):
        value = _at(example, path)
        if type(value) in (int, float) and path[0] not in ("limits", "carry") and len(path) < 4:
            for extreme in (5e-324, 1e-300, 1e300, 0, -1, -1e300, 2**53 - 1, 10**30):
                endures(operation_id, served.put(example, path, extreme))


@EVERY_CHART
def test_extreme_new_data_under_ordinary_limits(name: str) -> None:
    body = served.example(f"{name}-signals")
    for path in list(served.nodes(body["data"])):
        if _numbers_at(body["data"], path) or _table_at(body["data"], path):
            for factor in (0.0, 1e-320, 1e-300, 1e150, 1e299, -1e299):
                data = served.put(body["data"], path, _scaled(_at(body["data"], path), factor))
                endures(f"judge{CHARTS[name].stem}", {**body, "data": data})


def _at(body: Any, path: tuple[str | int, ...]) -> Any:
    for step in path:
        body = body[step]
    return body


def _numbers_at(body: Any, path: tuple[str | int, ...]) -> bool:
    value = _at(body, path)
    return (
        isinstance(value, list)
        and bool(value)
        and all(type(one) in (int, float, type(None)) for one in value)
    )


def _table_at(body: Any, path: tuple[str | int, ...]) -> bool:
    value = _at(body, path)
    return (
        isinstance(value, list) and bool(value) and all(_numbers_at(value, (at,)) for at in range(len(value)))
    )


def _scaled(value: Any, factor: float) -> Any:
    if isinstance(value, list):
        return [_scaled(inner, factor) for inner in value]
    if value is None:
        return None
    return max(-1e300, min(1e300, value * factor))


# Anything at all ------------------------------------------------------------------------------------

NASTY: tuple[Any, ...] = (
    None,
    True,
    0,
    -1,
    1,
    2,
    1e-300,
    5e-324,
    1e300,
    -1e300,
    1.5,
    10**19,
    2**63,
    10**40,
    "",
    "x",
    "1",
    "\ud800",
    "\u0000",
    "a/b~c",
    [],
    {},
    [[]],
    [None],
    [1, "x"],
    {"a/b~c d": 1},
    {"\ud800": 1},
    [1e300, -1e300, 5e-324],
    "2026-03-02T06:00:00Z",
)


def test_anything_anywhere_is_endured() -> None:
    """Any node of any example replaced by anything, or left out: no answer is the service's own fault."""
    chance = random.Random(20260302)
    seen: dict[int, int] = {}
    bodies = [(operation_id, served.example(name)) for operation_id, name in served.examples()]
    bodies = [(operation_id, body, list(served.nodes(body))[1:]) for operation_id, body in bodies]
    for _ in range(3000):
        operation_id, body, paths = chance.choice(bodies)
        sent = body
        for _ in range(chance.choice((1, 1, 1, 2, 3))):
            # Shallow places are fewer than the values of the data, and no less worth a try.
            depth = chance.randint(1, 5)
            path = chance.choice([one for one in paths if len(one) <= depth] or paths)
            try:
                sent = (
                    _without(sent, path)
                    if chance.random() < 0.2
                    else served.put(sent, path, chance.choice(NASTY))
                )
            except (KeyError, IndexError, TypeError):
                continue
        data = json.dumps(sent).encode()
        answer = served.call(operation_id, data)
        seen[answer.status_code] = seen.get(answer.status_code, 0) + 1
        if answer.status_code == 200:
            refuse_constants(answer.data)
        else:
            assert answer.status_code in (400, 422), (operation_id, sent, answer.get_data(as_text=True))
            served.problem_of(answer, sent)
    assert seen[200] > 100
    assert seen[422] > 1000


def _without(body: Any, path: tuple[str | int, ...]) -> Any:
    made = copy.deepcopy(body)
    del _at(made, path[:-1])[path[-1]]
    return made


def test_what_is_endured_is_finite() -> None:
    with pytest.raises(AssertionError):
        refuse_constants(b'{"arl": NaN}')
    assert math.isfinite(json.loads(b"1e300"))
