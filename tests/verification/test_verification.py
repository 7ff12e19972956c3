"""The published cases: every one agrees here, and one that does not is noticed by all that tell of it."""

from __future__ import annotations

import json
from dataclasses import replace
from functools import cache
from html.parser import HTMLParser
from pathlib import Path
from time import process_time
from typing import Any

import pytest

from assignable.api.operations.verification import executor
from assignable.cli import main
from assignable.spc.charts import CHARTS
from assignable.verification import runner
from assignable.verification.page import page
from contract import served

CASES = {case.id: case for case in runner.cases()}


@cache
def answer_to(operation_id: str, body: bytes) -> bytes:
    return executor(served.contract())(operation_id, body)


def verified(*cases: runner.Case) -> runner.Verification:
    return runner.run(answer_to, cases)


def tampered(case: runner.Case, **changed: Any) -> runner.Case:
    return replace(case, checks=(replace(case.checks[0], **changed), *case.checks[1:]))


# Every case -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", CASES)
def test_a_case_agrees(name: str) -> None:
    (found,) = verified(CASES[name]).cases
    assert found.problem is None
    assert [check for check in found.checks if not check.passed] == []


@pytest.mark.parametrize("name", CASES)
def test_a_case_can_fail(name: str) -> None:
    """Each check by itself, moved by three roundings (or by a part in a million, where there is none)."""
    case = CASES[name]
    moved = tuple(
        replace(
            check,
            expected=tuple(one + max(3 * check.rounding, 1e-6 * abs(one), 1e-6) for one in check.expected)
            or (0.0,),
        )
        for check in case.checks
    )
    (found,) = verified(replace(case, checks=moved)).cases
    assert not found.passed
    assert not any(check.passed for check in found.checks)


def test_the_cases_are_many_and_of_every_group() -> None:
    assert len(CASES) >= 30
    operations = {case.operation_id for case in CASES.values()}
    assert {f"fit{CHARTS[name].stem}Limits" for name in ("xbar-r", "xbar-s", "individuals")} <= operations
    for name in ("p", "np", "c", "u", "g", "ewma", "cusum", "moving-average", "t-squared", "mewma"):
        assert f"fit{CHARTS[name].stem}Limits" in operations
    assert {"getFactors", "computeRunLength", "assessMeasurements", "designEconomic"} <= operations
    assert "computeToleranceInterval" in operations
    assert {"analyseCrossedStudy", "analyseNestedStudy", "analyseAgreementStudy", "analyseBiasStudy"} <= (
        operations
    )
    assert operations <= set(served.operations())


def test_a_case_says_where_it_is_from() -> None:
    for case in CASES.values():
        assert len(case.source) > 10, case.id
        assert case.trust in runner.MEANING, case.id
        assert all(check.what.strip() for check in case.checks), case.id
        assert all(check.rounding >= 0 for check in case.checks), case.id
        assert len({check.pointer for check in case.checks}) == len(case.checks), case.id


def test_it_takes_less_than_ten_seconds() -> None:
    started = process_time()
    assert runner.run(executor(served.contract())).passed
    assert process_time() - started < 10


# What is noticed ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "changed",
    [
        {"expected": (2.0,)},
        {"expected": (1.88, 1.88)},
        {"expected": ()},
        {"pointer": "/nowhere"},
        {"pointer": "/A2/0"},
        {"pointer": "/"},
        {"pointer": ""},
    ],
)
def test_a_tampered_check_fails_its_case_alone(changed: dict[str, Any]) -> None:
    first, second = CASES["factors-size-02"], CASES["factors-size-03"]
    found = verified(tampered(first, **changed), second)
    assert not found.passed
    assert (found.cases_run, found.cases_failed) == (2, 1)
    assert [check.passed for check in found.cases[0].checks] == [False] + [True] * (len(first.checks) - 1)
    assert found.cases[1].passed


def test_a_pointer_to_nowhere_is_not_the_null_that_was_expected() -> None:
    case = CASES["factors-size-02"]
    none = next(check for check in case.checks if check.expected == ())
    lost = replace(case, checks=(replace(none, pointer="/nowhere"),))
    assert not verified(lost).passed
    assert verified(replace(case, checks=(none,))).passed


def test_a_refused_request_fails_its_case_and_no_other() -> None:
    refused = replace(CASES["factors-size-02"], request='{"size":1}')
    found = verified(refused, CASES["factors-size-03"])
    assert [case.passed for case in found.cases] == [False, True]
    assert found.cases[0].problem
    assert found.cases[0].checks[0].difference is None


def test_nothing_verified_is_no_verification() -> None:
    assert not verified().passed


def test_the_edge_of_a_rounding() -> None:
    def answering(value: float) -> runner.Verification:
        check = runner.Check("A figure", "/x", (0.125,), 0.005, None)
        case = runner.Case("x", "X", "Nowhere", "from-memory", "x", "{}", (check,))
        return runner.run(lambda *_: json.dumps({"x": value}).encode(), (case,))

    assert answering(0.13).passed
    assert answering(0.12).passed
    assert not answering(0.13001).passed
    assert not answering(True).passed


@pytest.mark.parametrize(
    "spoilt",
    [
        {"trust": "hearsay"},
        {"id": "another"},
        {"checks": []},
        {"checks": [{"what": "x", "pointer": "x", "expected": 1, "rounding": 0}]},
        {"checks": [{"what": "x", "pointer": "/x", "expected": "1", "rounding": 0}]},
        {"checks": [{"what": "x", "pointer": "/x", "expected": 1}]},
        {"checks": [{"what": "x", "pointer": "/x", "expected": 1, "rounding": 0, "nite": "x"}]},
        {"more": 1},
    ],
)
def test_a_file_that_is_no_case_is_refused(spoilt: dict[str, Any]) -> None:
    good = {
        "id": "x",
        "title": "X",
        "source": "Nowhere at all",
        "trust": "from-memory",
        "operation_id": "getFactors",
        "request": {"size": 2},
        "checks": [{"what": "A2", "pointer": "/A2", "expected": 1.88, "rounding": 0.005}],
    }
    assert runner._read("x", json.dumps(good).encode()).checks[0].expected == (1.88,)
    with pytest.raises(runner.BadCase):
        runner._read("x", json.dumps({**good, **spoilt}).encode())


# What is told ---------------------------------------------------------------------------------------


def test_the_service_answers_it_and_computes_it_once(monkeypatch: pytest.MonkeyPatch) -> None:
    client = served.app().test_client()
    first = client.get("/v1/verification")
    monkeypatch.setattr(runner, "run", lambda *_: pytest.fail("computed again"))
    again = client.get("/v1/verification")
    assert first.status_code == again.status_code == 200
    assert first.data == again.data
    assert first.headers["Cache-Control"] == "public, max-age=0"
    tag = first.headers["ETag"]
    assert client.get("/v1/verification", headers={"If-None-Match": tag}).status_code == 304
    answer = json.loads(first.data)
    assert answer["passed"] is True
    assert answer["cases_run"] == len(answer["cases"]) == len(CASES)
    assert answer["checks_run"] == sum(len(case["checks"]) for case in answer["cases"])
    assert answer["provenance"]["version"]
    for case in answer["cases"]:
        assert json.loads(case["request"])


class _Page(HTMLParser):
    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.loaded: list[str] = []
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.loaded += [value or "" for name, value in attrs if name in ("src", "href", "style")]


def test_the_page_is_served_under_the_strict_policy() -> None:
    client = served.app().test_client()
    found = client.get("/verification")
    assert found.status_code == 200
    policy = found.headers["Content-Security-Policy"]
    assert policy.startswith("default-src 'none'")
    assert "unsafe" not in policy
    assert "script-src" not in policy
    shown = _Page(found.get_data(as_text=True))
    assert not {"script", "style", "iframe"} & set(shown.tags)
    (sheet,) = [link for link in shown.loaded if link != "data:,"]
    styled = client.get(f"/{sheet}")
    assert styled.status_code == 200
    assert b"@media print" in styled.data


def test_the_page_stands_alone_and_escapes() -> None:
    case = replace(CASES["factors-size-02"], title="<b>&", request='{"size":1,"</pre>":0}')
    text = page(verified(case), "1.0<")
    shown = _Page(text)
    assert [link for link in shown.loaded if link != "data:,"] == []
    assert not {"script", "b", "link-x"} & set(shown.tags)
    assert "&lt;b&gt;&amp;" in text
    assert "1 of 1 published cases differ" in text
    assert "DIFFERS" in text


def test_the_command_prints_every_case(capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    file = tmp_path / "verification.html"
    assert main(["verify", "--html", str(file)]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert len(lines) == len(CASES) + 1
    assert all(line.startswith("agrees ") for line in lines[:-1])
    assert lines[-1].startswith(f"{len(CASES)} of {len(CASES)} published cases agree")
    assert file.read_text(encoding="utf-8").startswith("<!doctype html>")


def test_the_command_fails_where_a_figure_differs(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    bad, good = tampered(CASES["factors-size-02"], expected=(2.0,)), CASES["factors-size-03"]
    monkeypatch.setattr(runner, "cases", lambda: (bad, good))
    assert main(["verify"]) == 1
    told = capsys.readouterr().out
    assert "DIFFERS  factors-size-02" in told
    assert "(/A2): published 2, obtained 1.87997" in told
    assert "agrees   factors-size-03" in told
    assert main(["verify", "--json"]) == 1
    answer = json.loads(capsys.readouterr().out)
    assert (answer["passed"], answer["cases_failed"]) == (False, 1)
    assert list(answer)[-1] == "provenance"


def test_a_page_that_cannot_be_written_is_said(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    monkeypatch.setattr(runner, "cases", lambda: (CASES["factors-size-02"],))
    assert main(["verify", "--html", str(tmp_path / "no" / "page.html")]) == 2
    assert "cannot be written" in capsys.readouterr().err
