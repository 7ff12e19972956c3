"""Streams of lines: each answered in its order, none harmed by another, and never cut off in silence."""

from __future__ import annotations

import gzip
import io
import json
import random
from collections.abc import Iterator
from typing import Any

import orjson
import pytest
from werkzeug.test import TestResponse

from assignable.api import bodies, problems, streams
from assignable.api.app import create_app
from assignable.api.operations import bulk
from assignable.api.settings import Settings
from assignable.spc.charts import CHARTS
from contract import served

NDJSON = "application/x-ndjson"
JUDGING = tuple((chart.name, f"judge{chart.stem}") for chart in CHARTS.values())


def lines_of(values: list[Any]) -> bytes:
    return b"".join(json.dumps(value).encode() + b"\n" for value in values)


def post(path: str, body: bytes, **kwargs: Any) -> TestResponse:
    return (
        served.app()
        .test_client()
        .post(path, data=body, **{"content_type": NDJSON, "buffered": True, **kwargs})
    )


def told(path: str, body: bytes, **kwargs: Any) -> tuple[list[dict[str, Any]], dict[str, Any]]:
    """The lines of an answer, and the summary."""
    answer = post(path, body, **kwargs)
    assert answer.status_code == 200, answer.get_data(as_text=True)
    assert answer.content_type == NDJSON
    assert answer.headers["Cache-Control"] == "no-store"
    *found, last = [orjson.loads(line) for line in answer.data.splitlines()]
    assert answer.data.endswith(b"\n")
    assert "done" in last
    return found, last


# Any operation, one a line -------------------------------------------------------------------------------


def without_provenance(answer: Any) -> Any:
    if isinstance(answer, dict):
        return {name: value for name, value in answer.items() if name != "provenance"}
    return answer


def test_every_example_is_answered_as_by_itself() -> None:
    asked = [
        {"operation": operation_id, "id": f"{operation_id} {name}", "body": served.example(name)}
        for operation_id, name in served.examples()
    ]
    found, summary = told("/v1/bulk", lines_of(asked))
    assert summary == {"done": True, "lines": len(asked), "answered": len(asked), "problems": 0}
    assert [one["line"] for one in found] == list(range(1, len(asked) + 1))
    for line, one in zip(asked, found, strict=True):
        assert one["id"] == line["id"]
        assert one["status"] == 200
        alone = served.call(line["operation"], line["body"])
        if "svg" in alone.content_type:
            assert one["picture"] == alone.get_data(as_text=True)
        else:
            expected = json.loads(alone.data)
            assert without_provenance(one["answer"]) == without_provenance(expected), line["operation"]


def test_the_digest_of_a_line_is_of_the_line() -> None:
    line = json.dumps({"operation": "fitCLimits", "body": served.example("c-limits")}).encode()
    (found,), _ = told("/v1/bulk", line)
    from hashlib import sha256

    assert found["answer"]["provenance"]["request_digest"] == "sha-256:" + sha256(line).hexdigest()


def test_operations_by_get_take_their_parameters() -> None:
    asked = [
        {"operation": "getFactors", "body": {"size": 5}},
        {"operation": "getFactors", "body": {"size": "5"}},
        {"operation": "listCharts"},
        {"operation": "getLiveness", "body": None},
    ]
    (five, text, charts, alive), _ = told("/v1/bulk", lines_of(asked))
    assert five["answer"]["mean_range"] == pytest.approx(2.3259289, abs=1e-7)
    assert text["status"] == 422
    assert text["problem"]["errors"][0]["pointer"] == "#/body/size"
    assert {chart["name"] for chart in charts["answer"]["charts"]} == set(CHARTS)
    assert alive["status"] == 200


GOOD = {"operation": "fitCLimits", "body": served.example("c-limits")}
BAD_LINES: dict[bytes, tuple[int, str, str]] = {
    b"{": (400, "not-json", "#"),
    b"\xff": (400, "not-utf-8", "#"),
    b'{"operation":"fitCLimits","operation":"fitCLimits"}': (400, "repeated-key", "#"),
    b"[]": (422, "not-an-object", "#"),
    b"{}": (422, "required", "#/operation"),
    b'{"operation":"fitCLimit"}': (422, "unknown-operation", "#/operation"),
    b'{"operation":"answerLines"}': (422, "unknown-operation", "#/operation"),
    b'{"operation":"judgeLines"}': (422, "unknown-operation", "#/operation"),
    b'{"operation":"fitCLimits","bodi":{}}': (422, "unknown-field", "#/bodi"),
    b'{"operation":"fitCLimits","body":[]}': (422, "not-an-object", "#/body"),
    b'{"operation":"fitCLimits"}': (422, "not-an-object", "#/body"),
    b'{"operation":"fitCLimits","body":{"data":{"counts":[1,-2,3]}}}': (
        422,
        "too-small",
        "#/body/data/counts/1",
    ),
    b'{"operation":"fitCLimits","body":{"data":{"counts":[0,0,0]}}}': (
        422,
        "no-events",
        "#/body/data/counts",
    ),
    b'{"operation":"fitCLimits","id":"\\ud800","body":{}}': (422, "forbidden-character", "#/id"),
}


@pytest.mark.parametrize("line", list(BAD_LINES), ids=repr)
def test_a_bad_line_is_told_and_harms_no_other(line: bytes) -> None:
    status, code, pointer = BAD_LINES[line]
    good = json.dumps(GOOD).encode()
    (before, bad, after), summary = told("/v1/bulk", good + b"\n" + line + b"\n" + good + b"\n")
    assert before["status"] == after["status"] == 200
    assert without_provenance(before["answer"]) == without_provenance(after["answer"])
    assert (bad["line"], bad["status"]) == (2, status)
    assert bad["problem"]["status"] == status
    assert code in {one["code"] for one in bad["problem"]["errors"]}, bad
    assert pointer in {one["pointer"] for one in bad["problem"]["errors"]}, bad
    assert summary == {"done": True, "lines": 3, "answered": 2, "problems": 1}


def test_an_unknown_operation_is_helped() -> None:
    (found,), _ = told("/v1/bulk", b'{"operation": "fitXbarRlimits"}')
    assert found["problem"]["detail"].endswith("Did you mean fitXbarRLimits? (At #/operation.)")


def test_a_fault_of_the_service_harms_only_its_line(monkeypatch: pytest.MonkeyPatch) -> None:
    def fails(*_: Any) -> None:
        raise RuntimeError("2.503 must not be told")

    monkeypatch.setattr(bulk.AnyLines, "_operation", fails)
    answer = post("/v1/bulk", lines_of([GOOD]))
    found, summary = (orjson.loads(line) for line in answer.data.splitlines())
    assert found["status"] == 500
    assert b"2.503" not in answer.data
    assert summary["problems"] == 1


@pytest.mark.parametrize("ending", [b"\n", b"\r\n", b"\n\n  \n"])
def test_blank_lines_and_both_line_ends(ending: bytes) -> None:
    good = json.dumps(GOOD).encode()
    found, summary = told("/v1/bulk", ending.join((good, good, good)))
    assert [one["status"] for one in found] == [200, 200, 200]
    assert found[1]["line"] == 1 + ending.count(b"\n")
    assert summary["lines"] == 3


def test_nothing_is_answered_by_a_summary() -> None:
    assert told("/v1/bulk", b"") == ([], {"done": True, "lines": 0, "answered": 0, "problems": 0})


def test_the_request_id_is_in_the_problems() -> None:
    (found,), _ = told("/v1/bulk", b"{", headers={"X-Request-ID": "night-7"})
    assert found["problem"]["request_id"] == "night-7"


# How a body of lines may fail ----------------------------------------------------------------------------


def test_gzip() -> None:
    asked = lines_of([GOOD] * 500)
    packed = gzip.compress(asked)
    plain, _ = told("/v1/bulk", asked)
    found, summary = told("/v1/bulk", packed, headers={"Content-Encoding": "gzip"})
    assert summary["lines"] == 500
    assert found == plain
    for spoilt in (packed[:-9], packed + b"more", packed + packed):
        found, summary = told("/v1/bulk", spoilt, headers={"Content-Encoding": "gzip"})
        assert summary["done"] is False
        assert summary["problem"]["type"] == "/problems/not-json"
        assert len(found) == summary["lines"] == summary["answered"]
    _, summary = told("/v1/bulk", asked, headers={"Content-Encoding": "gzip"})
    assert summary["problem"]["type"] == "/problems/not-json"


def test_pieces_do_not_matter() -> None:
    body = b'{"a":1}\n\n{"b":' + b"2" * 300 + b"}\r\n  \nlast"
    expected = [(1, b'{"a":1}'), (3, b'{"b":' + b"2" * 300 + b"}\r"), (5, b"last")]
    chance = random.Random(7)
    for _ in range(50):
        cuts = sorted(chance.sample(range(1, len(body)), 12))
        pieces = [body[a:b] for a, b in zip([0, *cuts], [*cuts, len(body)], strict=True)]
        found = [(line.number, line.text) for block in streams.blocks(pieces, 400) for line in block]
        assert found == expected


def test_gzip_pieces_do_not_matter() -> None:
    plain = bytes(500_000) + random.Random(3).randbytes(100_000)
    packed = gzip.compress(plain)
    for size in (1, 7, 1000, len(packed)):
        pieces = (packed[at : at + size] for at in range(0, len(packed), size))
        assert b"".join(bodies.inflated(pieces, len(plain))) == plain
    with pytest.raises(problems.Problem) as raised:
        list(bodies.inflated([packed], len(plain) - 1))
    assert raised.value.kind is problems.CONTENT_TOO_LARGE


SMALL = create_app(Settings(log="off", max_body_bytes=2000, max_stream_bytes=9000))


def small(body: Any, **kwargs: Any) -> TestResponse:
    return SMALL.test_client().post(
        "/v1/bulk", content_type=NDJSON, buffered=True, **{"data": body, **kwargs}
    )


def test_a_line_over_the_limit_ends_the_stream() -> None:
    good = lines_of([GOOD])
    answer = small(good + b" " * 2001 + b"\n" + good)
    first, summary = (orjson.loads(line) for line in answer.data.splitlines())
    assert first["status"] == 200
    assert summary["done"] is False
    assert summary["problem"]["status"] == 413
    assert "Line 2 " in summary["problem"]["detail"]


def test_a_body_over_the_limit_is_refused_before_or_told_at_the_end() -> None:
    good = lines_of([GOOD])
    body = good * (9000 // len(good) + 1)
    assert small(body).status_code == 413
    answer = small(
        b"",
        input_stream=io.BytesIO(body),
        environ_overrides={"wsgi.input_terminated": True, "CONTENT_LENGTH": ""},
    )
    *_, summary = (orjson.loads(line) for line in answer.data.splitlines())
    assert summary["done"] is False
    assert summary["problem"]["status"] == 413


def test_a_body_that_breaks_off_is_told() -> None:
    good = lines_of([GOOD])
    found, summary = told(
        "/v1/bulk", b"", input_stream=io.BytesIO(good), environ_overrides={"CONTENT_LENGTH": "9000"}
    )
    assert [one["status"] for one in found] == [200]
    assert summary["done"] is False
    assert summary["problem"]["type"] == "/problems/bad-request"


def test_other_media_types_are_refused() -> None:
    assert post("/v1/bulk", b"", content_type="application/json").status_code == 415
    refused = post("/v1/bulk", b"", content_type="application/json")
    assert refused.headers["Accept-Post"] == NDJSON
    assert post("/v1/bulk", b"", headers={"Accept": "application/json"}).status_code == 406
    assert post("/v1/bulk", b"", headers={"Content-Encoding": "br"}).status_code == 415


def test_streams_leave_threads_for_others() -> None:
    app = create_app(Settings(log="off", threads=4))
    good = lines_of([GOOD])
    begun = [
        app.test_client().post("/v1/bulk", data=good, content_type=NDJSON, buffered=False) for _ in range(2)
    ]
    refused = app.test_client().post("/v1/bulk", data=good, content_type=NDJSON)
    assert refused.status_code == 503
    assert refused.headers["Retry-After"] == "1"
    single = app.test_client().post("/v1/charts/c/limits", json=GOOD["body"])
    assert single.status_code == 200
    for answer in begun:
        answer.close()
    assert app.test_client().post("/v1/bulk", data=good, content_type=NDJSON).status_code == 200


def test_answers_leave_when_there_are_many(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(streams, "HELD_BYTES", 20_000)
    monkeypatch.setattr(streams, "BLOCK_BYTES", 1_000)
    monkeypatch.setattr(streams, "TURN_SECONDS", 0.0)
    read = 0

    def pieces() -> Iterator[bytes]:
        nonlocal read
        for _ in range(100):
            read += 1
            yield lines_of([GOOD])

    operation = served.contract().bound("answerLines")
    slots = streams.Slots(1, 0)
    answer = streams.stream(operation.view, streams.Call("x"), pieces(), slots, 10_000)
    first = next(answer)
    assert read < 100
    assert len(first) >= 20_000
    rest = b"".join(answer)
    assert read == 100
    *found, summary = (first + rest).splitlines()
    assert len(found) == 100
    assert orjson.loads(summary)["answered"] == 100


# New data of many characteristics -----------------------------------------------------------------------


def rows_of(data: dict[str, Any]) -> list[dict[str, Any]]:
    """The data, a point a piece."""
    of_points = {
        name: value for name, value in data.items() if isinstance(value, list) and name != "variables"
    }
    points = max(map(len, of_points.values()))
    return [
        {**data, **{name: value[at : at + 1] for name, value in of_points.items()}} for at in range(points)
    ]


def much(name: str) -> tuple[dict[str, Any], list[dict[str, Any]]]:
    """The limits of a chart's example, and many single points, some of them far out."""
    sent = served.example(f"{name}-signals")
    data = {key: value for key, value in sent["data"].items() if key not in ("ids", "times")}
    rows = rows_of(data)
    found = [{**row, "ids": [f"K-{turn}-{at}"]} for turn in range(9) for at, row in enumerate(rows)]
    return sent["limits"], found


@pytest.mark.parametrize(("name", "operation_id"), JUDGING, ids=[name for name, _ in JUDGING])
def test_lines_are_judged_as_single_calls_are(name: str, operation_id: str) -> None:
    limits, rows = much(name)
    asked: list[dict[str, Any]] = [{"characteristic": "one", "limits": limits}]
    for at, row in enumerate(rows):
        asked.append({"characteristic": "one", "data": row, "return_carry": at % 5 == 4})
    found, summary = told("/v1/bulk/signals", lines_of(asked))
    assert found.pop(0) == {"line": 1, "characteristic": "one", "status": 200, "opened": name}
    assert found.pop()["characteristic"] == "one"
    assert summary["done"] is True
    carry, refused, signals = None, 0, 0
    for at, (row, line) in enumerate(zip(rows, found, strict=True)):
        body = {"limits": limits, "data": row, "carry": carry}
        alone = served.call(operation_id, body)
        if alone.status_code != 200:
            refused += 1
            expected = json.loads(alone.data)
            assert line["status"] == alone.status_code
            assert line["problem"]["errors"] == expected["errors"]
            continue
        expected = json.loads(alone.data)
        assert line["line"] == at + 2
        for member in ("verdict", "signals", "signals_found", "cautions", "details"):
            assert close(line.get(member), expected.get(member)), (member, at)
        signals += len(line["signals"])
        carry = expected["carry"]
        assert ("carry" in line) is (at % 5 == 4)
        if "carry" in line:
            assert close(without_digest(line["carry"]), without_digest(carry))
    assert summary["problems"] == refused
    assert refused < len(rows)
    if refused == 0 and name != "acceptance":
        assert signals > 0


def without_digest(carry: dict[str, Any]) -> dict[str, Any]:
    return {name: value for name, value in carry.items() if name != "digest"}


def close(a: Any, b: Any) -> bool:
    """Equal but for the last digits: sums of arrays and of single points are rounded differently."""
    if isinstance(a, dict) and isinstance(b, dict):
        return a.keys() == b.keys() and all(close(a[name], b[name]) for name in a)
    if isinstance(a, list) and isinstance(b, list):
        return len(a) == len(b) and all(map(close, a, b))
    if isinstance(a, float) and isinstance(b, float):
        return a == pytest.approx(b, rel=1e-9, abs=1e-12)
    return bool(a == b)


def test_any_mixture_and_split_tells_the_same() -> None:
    chance = random.Random(11)
    names = ["xbar-r", "individuals", "p", "u", "ewma", "cusum", "t-squared", "g"]
    sources = {name: much(name) for name in names}
    opening = [{"characteristic": name, "limits": limits} for name, (limits, _) in sources.items()]

    def run(mixed: list[dict[str, Any]]) -> tuple[dict[str, list[Any]], dict[str, Any]]:
        found, _ = told("/v1/bulk/signals", lines_of([*opening, *mixed]))
        judged: dict[str, list[Any]] = {name: [] for name in names}
        for line in found[len(names) : -len(names)]:
            judged[line["characteristic"]].append({**line, "line": 0})
        return judged, {line["characteristic"]: line["carry"] for line in found[-len(names) :]}

    orderly = [{"characteristic": name, "data": row} for name, (_, rows) in sources.items() for row in rows]
    expected, carries = run(orderly)
    for _ in range(3):
        queues = {name: list(rows) for name, (_, rows) in sources.items()}
        mixed = []
        while queues:
            name = chance.choice(list(queues))
            mixed.append({"characteristic": name, "data": queues[name].pop(0)})
            if not queues[name]:
                del queues[name]
        judged, ended = run(mixed)
        assert close(judged, expected)
        assert all(close(without_digest(ended[name]), without_digest(carries[name])) for name in names)


def test_the_stream_goes_on_from_a_carry() -> None:
    limits, rows = much("xbar-r")
    whole = [
        {"characteristic": "w", "limits": limits},
        *({"characteristic": "w", "data": row} for row in rows),
    ]
    expected, _ = told("/v1/bulk/signals", lines_of(whole))
    first, _ = told("/v1/bulk/signals", lines_of(whole[:18]))
    carry = first[-1]["carry"]
    second, _ = told("/v1/bulk/signals", lines_of([{**whole[0], "carry": carry}, *whole[18:]]))
    again = [{**one, "line": 0} for one in (*first[1:-1], *second[1:-1])]
    assert close(again, [{**one, "line": 0} for one in expected[1:-1]])
    assert close(without_digest(second[-1]["carry"]), without_digest(expected[-1]["carry"]))


def test_a_line_that_cannot_be_judged_leaves_the_others_and_the_carry() -> None:
    limits, rows = much("xbar-r")
    opening = {"characteristic": "w", "limits": limits}
    good = [{"characteristic": "w", "data": row} for row in rows]
    spoilt = [*good]
    bad = [
        {"values": [[2.5, "2.5", 2.5, 2.5, 2.5]]},
        {"values": [[2.5, 2.5, 2.5, 2.5, 2.5]], "ids": ["a", "b"]},
        {"values": []},
        {"values": [[2.5, 2.5, 2.5, 2.5, 2.5]], "valeus": 1},
    ]
    for at, data in enumerate(bad):
        spoilt.insert(7 + 9 * at, {"characteristic": "w", "data": data})
    expected, _ = told("/v1/bulk/signals", lines_of([opening, *good]))
    found, summary = told("/v1/bulk/signals", lines_of([opening, *spoilt]))
    refused = [one for one in found if one.get("status") == 422]
    assert [one["line"] for one in refused] == [9 + 9 * at for at in range(4)]
    assert [one["problem"]["errors"][0]["pointer"] for one in refused] == [
        "#/data/values/0/1",
        "#/data/ids",
        "#/data/values",
        "#/data/valeus",
    ]
    kept = [{**one, "line": 0} for one in found if one.get("status") != 422]
    assert close(kept, [{**one, "line": 0} for one in expected])
    assert summary["problems"] == 4


def opening(name: str = "xbar-r", **members: Any) -> dict[str, Any]:
    return {"characteristic": "w", "limits": served.example(f"{name}-signals")["limits"], **members}


DATA = {"characteristic": "w", "data": {"values": [[2.5, 2.51, 2.49, 2.5, 2.5]]}}
OTHER_CARRY = {
    "chart": "xbar-r",
    "limits": "sha-256:" + "0" * 64,
    "points": 1,
    "mean": {"value": [], "z": [], "sigma": []},
    "digest": "sha-256:" + "0" * 64,
}
REFUSED_LINES: dict[str, tuple[list[Any], int, str, str]] = {
    "not opened": ([DATA], 1, "not-opened", "#/characteristic"),
    "opened twice": ([opening(), opening()], 2, "already-open", "#/characteristic"),
    "edited": (
        [opening(limits={**opening()["limits"], "centre": 2.6})],
        1,
        "digest-mismatch",
        "#/limits/digest",
    ),
    "of no chart": ([opening(limits={"chart": "xbar"})], 1, "unknown-choice", "#/limits/chart"),
    "no limits": ([{"characteristic": "w"}], 1, "required", "#/limits"),
    "not an object": ([[1]], 1, "not-an-object", "#"),
    "a number": ([1], 1, "not-an-object", "#"),
    "no name": ([{"data": DATA["data"]}], 1, "required", "#/characteristic"),
    "both": ([opening(data=DATA["data"])], 1, "unknown-field", "#/limits"),
    "carry of another": ([opening(carry=OTHER_CARRY)], 1, "carry-of-other-limits", "#/carry/limits"),
    "long name": ([{**DATA, "characteristic": "w" * 300}], 1, "too-long", "#/characteristic"),
}


@pytest.mark.parametrize("case", list(REFUSED_LINES))
def test_lines_that_are_refused(case: str) -> None:
    asked, at, code, pointer = REFUSED_LINES[case]
    found, summary = told("/v1/bulk/signals", lines_of(asked))
    refused = found[at - 1]
    assert refused["line"] == at
    assert code in {one["code"] for one in refused["problem"]["errors"]}, refused
    assert pointer in {one["pointer"] for one in refused["problem"]["errors"]}, refused
    assert summary["problems"] == 1


def test_opening_twice_changes_nothing() -> None:
    wider = served.example("xbar-r-signals")
    asked = [opening(), DATA, opening(limits=wider["limits"]), DATA]
    found, _ = told("/v1/bulk/signals", lines_of(asked))
    assert [one.get("status") for one in found] == [200, 200, 422, 200, None]
    assert found[-1]["carry"]["points"] == 2


def test_a_stream_keeps_no_more_open_than_it_may(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(bulk, "MOST_OPEN", 2)
    asked = [{**opening(), "characteristic": name} for name in "abc"]
    found, _ = told("/v1/bulk/signals", lines_of([*asked, {**DATA, "characteristic": "a"}]))
    assert [one.get("status") for one in found] == [200, 200, 422, 200, None, None]
    assert found[2]["problem"]["errors"][0]["code"] == "too-many-open"


def test_a_stream_without_data_tells_the_carry_it_was_given() -> None:
    (_, ended), _ = told("/v1/bulk/signals", lines_of([opening()]))
    assert ended == {"characteristic": "w", "carry": None}
    (_, _, ended), _ = told("/v1/bulk/signals", lines_of([opening(), DATA]))
    (_, again), _ = told("/v1/bulk/signals", lines_of([opening(carry=ended["carry"])]))
    assert again == ended


def test_carries_are_told_though_the_body_breaks_off() -> None:
    body = lines_of([opening(), DATA])
    found, summary = told(
        "/v1/bulk/signals",
        b"",
        input_stream=io.BytesIO(body),
        environ_overrides={"CONTENT_LENGTH": str(len(body) + 9)},
    )
    assert summary["done"] is False
    assert found[-1]["carry"]["points"] == 1


def test_waiting_requests_go_before_the_next_turn() -> None:
    import threading
    import time

    slots = streams.Slots(1, 5.0)
    order: list[str] = []

    def single() -> None:
        with slots:
            order.append("single")

    waiting = threading.Thread(target=single)
    with slots.in_turn():
        waiting.start()
        time.sleep(0.05)
    with slots.in_turn():
        order.append("next turn")
    waiting.join()
    assert order == ["single", "next turn"]
