"""Wiring of the operations: whatever chart is in the registry goes the whole road, over HTTP."""

from __future__ import annotations

import base64
import json
import math
from collections.abc import Iterator
from hashlib import sha256
from itertools import pairwise
from typing import Any

import orjson
import pytest

from assignable.api import problems
from assignable.spc.charts import CHARTS, Chart
from assignable.spc.factors import factors
from assignable.spc.methods import METHODS
from assignable.spc.references import REFERENCES
from assignable.spc.rules import PUBLISHED
from contract import served

EVERY_CHART = pytest.mark.parametrize("name", list(CHARTS))
GETS = [name for name, operation in served.operations().items() if operation.method == "GET"]


def fit_id(chart: Chart) -> str:
    return f"fit{chart.stem}Limits"


def judge_id(chart: Chart) -> str:
    return f"judge{chart.stem}"


def fitted(name: str) -> dict[str, Any]:
    chart = CHARTS[name]
    return served.answer_of(fit_id(chart), served.example(f"{name}-limits"))


def judging(name: str) -> dict[str, Any]:
    """A request to judge: the limits of the chart's example, and the data of its other example."""
    return {"limits": fitted(name)["limits"], "data": served.example(f"{name}-signals")["data"]}


def points_of(data: dict[str, Any]) -> int:
    return max(len(member) for member in data.values() if isinstance(member, list))


def cut(data: dict[str, Any], start: int, stop: int) -> dict[str, Any]:
    """Some successive points of the data."""
    points = points_of(data)
    return {
        member: value[start:stop] if isinstance(value, list) and len(value) == points else value
        for member, value in data.items()
    }


def leaves(value: Any, path: tuple[str | int, ...] = ()) -> Iterator[tuple[tuple[str | int, ...], Any]]:
    if isinstance(value, dict):
        for member, inner in value.items():
            yield from leaves(inner, (*path, member))
    elif isinstance(value, list):
        for at, inner in enumerate(value):
            yield from leaves(inner, (*path, at))
    else:
        yield path, value


def edited(value: Any) -> Any:
    """As little another value as can be, of the same kind where there is one."""
    if isinstance(value, bool):
        return not value
    if isinstance(value, int):
        return value + 1
    if isinstance(value, float):
        return math.nextafter(value, math.inf)
    if isinstance(value, str):
        return value[:-1] + ("x" if value[-1:] != "x" else "y")
    return 1.5


# The road of every chart ----------------------------------------------------------------------------


@EVERY_CHART
def test_from_limits_to_signals_to_the_next_signals(name: str) -> None:
    chart = CHARTS[name]
    limits = fitted(name)
    assert limits["limits"]["chart"] == name
    assert limits["limits"]["digest"].startswith("sha-256:")
    assert set(limits["limits"]["panels"]) <= set(chart.panels)
    request = judging(name)
    first = served.answer_of(judge_id(chart), request)
    assert set(first["panels"]) == set(chart.panels)
    assert first["signals_found"] >= len(first["signals"])
    assert first["carry"]["limits"] == limits["limits"]["digest"]
    assert (first["verdict"] == "signal") == any(one["severity"] == "action" for one in first["signals"])
    second = served.answer_of(judge_id(chart), {**request, "carry": first["carry"]})
    assert second["carry"]["limits"] == limits["limits"]["digest"]
    assert second["carry"]["digest"] != first["carry"]["digest"]


@EVERY_CHART
def test_the_example_to_judge_holds_the_limits_that_the_other_gives(name: str) -> None:
    kept = served.example(f"{name}-signals")["limits"]
    assert kept == fitted(name)["limits"]


def test_examples_show_signals() -> None:
    signalling = [
        name
        for name in CHARTS
        if served.answer_of(judge_id(CHARTS[name]), served.example(f"{name}-signals"))["signals"]
    ]
    assert len(signalling) >= 0.8 * len(CHARTS)


@EVERY_CHART
def test_any_split_with_the_carry_gives_the_same(name: str) -> None:
    chart, limits = CHARTS[name], fitted(name)["limits"]
    data = served.example(f"{name}-limits")["data"]
    whole = served.answer_of(judge_id(chart), {"limits": limits, "data": data})
    for sizes in ((1, 2, 7, 6), (5,), (12, 1)):
        edges = [0, *[sum(sizes[: at + 1]) for at in range(len(sizes))], points_of(data)]
        carry, signals, plotted = None, [], {panel: [] for panel in whole["panels"]}
        for start, stop in pairwise(edges):
            part = {"limits": limits, "data": cut(data, start, stop), "carry": carry}
            answer = served.answer_of(judge_id(chart), part)
            carry = answer["carry"]
            signals += [
                {**one, "index": one["index"] + start, "points": [at + start for at in one["points"]]}
                for one in answer["signals"]
            ]
            for panel, found in answer["panels"].items():
                plotted[panel] += found["value"]
        assert signals == whole["signals"], sizes
        assert carry == whole["carry"], sizes
        for panel, found in whole["panels"].items():
            assert plotted[panel] == found["value"], (sizes, panel)


@EVERY_CHART
def test_limits_of_every_other_chart_are_refused(name: str) -> None:
    chart, request = CHARTS[name], judging(name)
    for other in CHARTS:
        if other == name:
            continue
        sent = {**request, "limits": served.example(f"{other}-signals")["limits"]}
        found = served.problem_of(served.call(judge_id(chart), sent), sent, problems.DOCUMENT_MISMATCH)
        assert served.pointers(found) == ["#/limits/chart"]
        assert served.codes(found) == {"limits-of-another-chart"}
        assert other in found["detail"]
        assert name in found["detail"]


@EVERY_CHART
def test_an_edit_anywhere_in_the_limits_is_refused(name: str) -> None:
    chart, request = CHARTS[name], judging(name)
    for path, value in leaves(request["limits"]):
        sent = served.put(request, ("limits", *path), edited(value))
        found = served.problem_of(served.call(judge_id(chart), sent), sent)
        assert found["type"] in ("/problems/document-mismatch", "/problems/contract-violation"), path
        assert all(pointer.startswith("#/limits") for pointer in served.pointers(found)), path
        if isinstance(value, float):
            assert served.codes(found) == {"digest-mismatch"}, path
    lacking = {member: value for member, value in request["limits"].items() if member != "digest"}
    sent = {**request, "limits": lacking}
    found = served.problem_of(served.call(judge_id(chart), sent), sent, problems.CONTRACT_VIOLATION)
    assert served.pointers(found) == ["#/limits/digest"]


@EVERY_CHART
def test_a_carry_of_other_limits_or_edited_is_refused(name: str) -> None:
    chart, request = CHARTS[name], judging(name)
    carry = served.answer_of(judge_id(chart), request)["carry"]
    body = served.example(f"{name}-limits")
    renamed = served.put(body, ("characteristic", "name"), "another characteristic")
    other = served.answer_of(fit_id(chart), renamed)["limits"]
    sent = {**request, "limits": other, "carry": carry}
    found = served.problem_of(served.call(judge_id(chart), sent), sent, problems.DOCUMENT_MISMATCH)
    assert served.codes(found) == {"carry-of-other-limits"}
    assert served.pointers(found) == ["#/carry/limits"]
    for path, value in leaves(carry):
        sent = served.put({**request, "carry": carry}, ("carry", *path), edited(value))
        found = served.problem_of(served.call(judge_id(chart), sent), sent)
        assert all(pointer.startswith("#/carry") for pointer in served.pointers(found)), path
        assert served.codes(found) & {
            "carry-edited",
            "carry-of-other-limits",
            "unknown-choice",
            "not-text",
            "not-a-number",
        }, path


@EVERY_CHART
def test_ids_and_times_come_back(name: str) -> None:
    chart, limits = CHARTS[name], fitted(name)["limits"]
    data = dict(served.example(f"{name}-limits")["data"])
    points = points_of(data)
    data["ids"] = [f"car {at}" for at in range(points)]
    data["times"] = [f"2026-03-02T06:{at % 60:02}:00Z" for at in range(points)]
    answer = served.answer_of(judge_id(chart), {"limits": limits, "data": data})
    assert answer["ids"] == data["ids"]
    assert answer["times"] == data["times"]
    fit = served.answer_of(fit_id(chart), {**served.example(f"{name}-limits"), "data": data})
    for signals in (answer["signals"], fit["baseline"]["signals"]):
        for one in signals:
            assert one["id"] == data["ids"][one["index"]]
            assert one["time"] == data["times"][one["index"]]
    assert fit["baseline"]["ids"] == data["ids"]


@EVERY_CHART
def test_limits_survive_whatever_keeps_them(name: str) -> None:
    """Other order of members, other white space, whole numbers without a point: the same document."""

    def turned(value: Any) -> Any:
        if isinstance(value, dict):
            return {member: turned(value[member]) for member in reversed(value)}
        if isinstance(value, list):
            return [turned(inner) for inner in value]
        if isinstance(value, float) and value.is_integer() and abs(value) < 2**53:
            return int(value)
        return value

    chart, request = CHARTS[name], judging(name)
    plain = served.answer_of(judge_id(chart), request)
    carry = plain["carry"]
    for kept in (
        json.dumps(request["limits"], indent=4, sort_keys=True).encode(),
        json.dumps(turned(request["limits"]), separators=(" , ", " :\t")).encode(),
    ):
        body = b'{"data": %s, "limits": %s}' % (orjson.dumps(request["data"]), kept)
        answer = served.answer_of(judge_id(chart), body)
        del answer["provenance"]
        assert answer == {member: value for member, value in plain.items() if member != "provenance"}
        again = served.call(judge_id(chart), {**request, "carry": turned(carry)})
        assert again.status_code == 200, again.get_data(as_text=True)


# The road of every operation ------------------------------------------------------------------------


@pytest.mark.parametrize(("operation_id", "name"), served.examples())
def test_the_same_request_gives_the_same_bytes(operation_id: str, name: str) -> None:
    body = orjson.dumps(served.example(name))
    first, second = served.call(operation_id, body), served.call(operation_id, body)
    assert first.status_code == 200
    assert first.data == second.data
    assert first.headers["Cache-Control"] == "no-store"
    digest = base64.b64encode(sha256(first.data).digest()).decode()
    assert first.headers["Content-Digest"] == f"sha-256=:{digest}:"


@pytest.mark.parametrize(
    ("operation_id", "name"),
    [(found, name) for found, name in served.examples() if served.operations()[found].provenance],
)
def test_the_provenance_is_of_the_body(operation_id: str, name: str) -> None:
    if served.operations()[operation_id].provenance is None:
        pytest.skip("a picture says nothing of itself in JSON")
    body = json.dumps(served.example(name), indent=1).encode()
    provenance = served.answer_of(operation_id, body)["provenance"]
    assert provenance["request_digest"] == "sha-256:" + sha256(body).hexdigest()
    assert provenance["method"] == served.operations()[operation_id].provenance


@pytest.mark.parametrize("operation_id", GETS)
def test_a_get_has_a_tag_and_is_not_sent_again(operation_id: str) -> None:
    operation = served.operations()[operation_id]
    query = {"size": 5} if operation.query is not None else {}
    client = served.app().test_client()
    answer = client.get(operation.path, query_string=query)
    assert answer.status_code == 200
    if operation.cache_seconds is None:
        assert answer.headers["Cache-Control"] == "no-store"
        assert "ETag" not in answer.headers
        return
    tag = answer.headers["ETag"]
    assert tag.startswith('"')
    again = client.get(operation.path, query_string=query, headers={"If-None-Match": tag})
    assert (again.status_code, again.data) == (304, b"")
    assert (
        client.get(operation.path, query_string=query, headers={"If-None-Match": '"x"'}).data == answer.data
    )


# Registry, routes and listings ----------------------------------------------------------------------


def test_routes_follow_the_registry() -> None:
    served.contract().operations  # noqa: B018 - they are bound when first asked for
    bound = {operation.path for operation in served.operations().values()}
    of_charts = {path for path in bound if path.startswith("/v1/charts/")}
    assert {f"/v1/charts/{name}/{verb}" for name in CHARTS for verb in ("limits", "signals")} <= of_charts
    assert {path.split("/")[3] for path in of_charts if path.count("/") == 4} == set(CHARTS)
    assert set(served.document()["paths"]) == bound


def test_an_unknown_chart_is_not_found() -> None:
    found = served.problem_of(served.post("/v1/charts/xbar-q/limits", {}), {}, problems.NOT_FOUND)
    assert found["detail"]


def test_the_charts_are_listed() -> None:
    listed = json.loads(served.app().test_client().get("/v1/charts").data)["charts"]
    assert [one["name"] for one in listed] == list(CHARTS)
    bound = {operation.path for operation in served.operations().values()}
    for one in listed:
        assert {one["limits"], one["signals"]} <= bound
        assert set(one["references"]) <= set(REFERENCES)
        assert one["panels"] == list(CHARTS[one["name"]].panels)


def test_the_factors() -> None:
    client = served.app().test_client()
    answer = json.loads(client.get("/v1/factors?size=5&sigma_multiple=2.5").data)
    expected = factors(5, 2.5)
    for member, value in answer.items():
        assert value == getattr(expected, member)
    for query, code in (
        ("", "required"),
        ("size=1", "too-small"),
        ("size=1001", "too-large"),
        ("size=5.5", "not-an-integer"),
        ("size=five", "not-an-integer"),
        ("size=5&size=6", "repeated-parameter"),
        ("size=5&sigma_multiple=0", "too-small"),
        ("size=5&sigma_multiple=NaN", "not-a-number"),
        ("size=5&sise=5", "unknown-field"),
    ):
        found = served.problem_of(client.get(f"/v1/factors?{query}"), {}, problems.CONTRACT_VIOLATION)
        assert code in served.codes(found), query
        assert all("parameter" in entry for entry in found["errors"]), query


def test_rules_and_methods_are_told() -> None:
    client = served.app().test_client()
    rules = json.loads(client.get("/v1/rules").data)
    assert [one["name"] for one in rules["sets"]] == list(PUBLISHED)
    for one in rules["sets"]:
        assert one["reference"] in REFERENCES
        assert [rule["code"] for rule in one["rules"]] == [rule.code for rule in PUBLISHED[one["name"]].rules]
    methods = json.loads(client.get("/v1/methods").data)
    assert len(methods["methods"]) == len(METHODS)
    assert [one["key"] for one in methods["references"]] == list(REFERENCES)
