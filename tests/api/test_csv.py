"""CSV bodies: the same answers as JSON gives, and faults told by row and column."""

from __future__ import annotations

import csv
import gzip
import io
import json
from time import process_time
from typing import Any
from urllib.parse import urlencode

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from werkzeug.test import TestResponse

from assignable.api import problems, strict_json
from assignable.api.answers import digest_of
from assignable.api.contract import examples_directory
from assignable.api.settings import Settings
from contract import served

XBAR = "fitXbarRLimits"
TABLED = {
    operation_id: operation
    for operation_id, operation in served.operations().items()
    if operation.tabled is not None
}
EXAMPLES = [
    (operation_id, name) for operation_id, operation in TABLED.items() for name, _, _ in operation.tables()
]


def written(query: dict[str, Any]) -> str:
    return urlencode(
        {name: value if isinstance(value, str) else json.dumps(value) for name, value in query.items()}
    )


def post(operation_id: str, body: str | bytes, query: Any = None, **kwargs: Any) -> TestResponse:
    data = body.encode() if isinstance(body, str) else body
    asked = query if isinstance(query, str) else written(query or {})
    return served.post(
        served.operations()[operation_id].path,
        data,
        **{"content_type": "text/csv", "query_string": asked, **kwargs},
    )


def refused(
    answer: TestResponse, kind: problems.ProblemType = problems.CONTRACT_VIOLATION
) -> list[dict[str, Any]]:
    """The faults of a problem of this kind, each with a place that CSV has."""
    assert answer.content_type == problems.MEDIA_TYPE, answer.get_data(as_text=True)
    members = json.loads(answer.data)
    assert members["type"] == kind.uri, members
    assert answer.status_code == kind.status
    for entry in members["errors"]:
        assert {"row", "column", "parameter", "pointer"} & entry.keys(), entry
        assert entry.get("pointer", "#") == "#" or "parameter" in entry
    return list(members["errors"])


def only(answer: TestResponse, kind: problems.ProblemType = problems.CONTRACT_VIOLATION) -> dict[str, Any]:
    (fault,) = refused(answer, kind)
    assert json.loads(answer.data)["detail"].startswith(fault["detail"])
    return fault


def place(fault: dict[str, Any]) -> tuple[str, int | None, str | None]:
    return fault["code"], fault.get("row"), fault.get("column")


def same(one: bytes, other: bytes) -> bool:
    """Whether two answers are the same but for the digest of their request."""
    if one[:1] != b"{":
        return one == other
    found = [json.loads(answer) for answer in (one, other)]
    digests = [answer["provenance"].pop("request_digest") for answer in found]
    return found[0] == found[1] and digests[0] != digests[1]


# The same answers -----------------------------------------------------------------------------------


def test_every_operation_of_one_table_takes_csv() -> None:
    fits = {name for name in served.operations() if name.startswith("fit") and name.endswith("Limits")}
    pictures = {f"draw{name.removeprefix('fit')}" for name in fits} | {"drawMeasurements"}
    others = {
        "assessMeasurements",
        "assessAttributes",
        "computeToleranceInterval",
        "analyseCrossedStudy",
        "analyseNestedStudy",
        "analyseAgreementStudy",
        "analyseBiasStudy",
    }
    assert set(TABLED) == fits | pictures | others
    assert {operation_id for operation_id, _ in EXAMPLES} == set(TABLED)
    tables = {file.name.removesuffix(".request.csv") for file in examples_directory().glob("*.request.csv")}
    queries = {file.name.removesuffix(".query.json") for file in examples_directory().glob("*.query.json")}
    assert {name for _, name in EXAMPLES} == tables
    assert queries <= tables


@pytest.mark.parametrize(("operation_id", "name"), EXAMPLES)
def test_an_example_is_answered_as_its_json_is(operation_id: str, name: str) -> None:
    operation = TABLED[operation_id]
    ((query, body),) = [(query, body) for found, query, body in operation.tables() if found == name]
    answer = post(operation_id, body, query)
    assert answer.status_code == 200, answer.get_data(as_text=True)
    assert answer.content_type.startswith(operation.media_type)
    expected = served.call(operation_id, served.example(name))
    assert same(answer.data, expected.data)


@pytest.mark.parametrize("operation_id", TABLED)
def test_the_contract_has_every_parameter(operation_id: str) -> None:
    tabled = TABLED[operation_id].tabled
    assert tabled is not None
    shape = served.document()["components"]["schemas"][f"{type(tabled.request).__name__}Query"]
    assert set(shape["properties"]) == {*tabled.parameters, "delimiter"}
    assert all(member["description"] for member in shape["properties"].values())
    (parameter,) = served.described(operation_id)["parameters"]
    assert parameter["required"] is False
    assert (parameter["style"], parameter["explode"]) == ("form", True)
    for example in parameter["examples"].values():
        assert set(example["value"]) <= set(shape["properties"])
    # Every column leads to a member of the data, and every member of the data to a column or a parameter.
    described = served.described(operation_id)["requestBody"]["content"]["text/csv"]["schema"]["description"]
    for member in tabled.data.load_fields:
        assert f"data.{member}`" in described or f"data.{member}" in tabled.parameters, member


# The dialect ----------------------------------------------------------------------------------------

CARS = "id,x1,x2,x3\nK-1,2.51,2.49,2.5\nK-2,2.5,,2.52\nK-3,2.47,2.5,-1e-3\n"
AS_JSON = {
    "ids": ["K-1", "K-2", "K-3"],
    "values": [[2.51, 2.49, 2.5], [2.5, None, 2.52], [2.47, 2.5, -0.001]],
}


@pytest.mark.parametrize(
    ("body", "query"),
    [
        (CARS, ""),
        (CARS.removesuffix("\n"), ""),
        ("\ufeff" + CARS, ""),
        (CARS.replace("\n", "\r\n"), ""),
        (CARS, "delimiter=comma"),
        (CARS.replace(",", ";"), "delimiter=semicolon"),
        (CARS.replace(",", "\t"), "delimiter=tab"),
        (CARS.replace("K-1", '"K-1"'), ""),
        (CARS.replace("2.51", '"2.51"'), ""),
        (CARS.replace("2.51", " 2.51 "), ""),
        (CARS.replace("id,", '"id",'), ""),
        ("time," + CARS.replace("\nK", "\n2026-03-02T06:00:00Z,K"), ""),
        ("x1,id,x2,x3\n2.51,K-1,2.49,2.5\n2.5,K-2,,2.52\n2.47,K-3,2.5,-1e-3\n", ""),
    ],
)
def test_what_the_dialect_takes(body: str, query: str) -> None:
    answer = post(XBAR, body, query)
    assert answer.status_code == 200, answer.get_data(as_text=True)
    data: dict[str, Any] = dict(AS_JSON)
    if body.startswith("time"):
        data["times"] = ["2026-03-02T06:00:00Z"] * 3
    assert same(answer.data, served.call(XBAR, {"data": data}).data)


def test_gzip_media_type_and_digest() -> None:
    plain = post(XBAR, CARS, "sigma_multiple=2.5")
    packed = post(
        XBAR, gzip.compress(CARS.encode()), "sigma_multiple=2.5", headers={"Content-Encoding": "gzip"}
    )
    named = post(XBAR, CARS, "sigma_multiple=2.5", content_type="Text/CSV; charset=UTF-8; header=present")
    assert plain.status_code == 200
    assert plain.data == packed.data == named.data
    provenance = json.loads(plain.data)["provenance"]
    assert provenance["request_digest"] == digest_of(b"sigma_multiple=2.5\n" + CARS.encode())
    broken = post(XBAR, b"x", headers={"Content-Encoding": "gzip"})
    assert json.loads(broken.data)["type"] == problems.NOT_CSV.uri


@pytest.mark.parametrize(
    "media_type", ["text/csv; charset=windows-1252", "text/csv; header=absent", "text/plain", ""]
)
def test_another_media_type_is_told_what_is_taken(media_type: str) -> None:
    answer = post(XBAR, CARS, content_type=media_type)
    assert answer.status_code == 415
    assert answer.headers["Accept-Post"] == "application/json, text/csv"


@pytest.mark.parametrize(
    "operation_id", ["judgeXbarR", "designSubgroups", "checkRelease", "drawXbarRSignals"]
)
def test_operations_without_one_table_take_json_alone(operation_id: str) -> None:
    answer = post(operation_id, CARS)
    assert answer.status_code == 415
    assert answer.headers["Accept-Post"] == "application/json"


NUMBERS = st.one_of(
    st.floats(-1e300, 1e300, allow_nan=False).map(repr),
    st.integers(-(10**25), 10**25).map(str),
    st.from_regex(r"-?(0|[1-9][0-9]{0,25})(\.[0-9]{1,25})?([eE][+-]?[0-9]{1,2})?", fullmatch=True),
).filter(lambda text: abs(float(text)) <= 1e300)
NAMES = st.text(st.characters(codec="utf-8", exclude_categories=("Cc", "Cs")), max_size=8)


@settings(max_examples=150, deadline=None, derandomize=True, database=None)
@given(
    st.integers(1, 4).flatmap(
        lambda across: st.lists(
            st.tuples(NAMES, st.lists(st.one_of(NUMBERS, st.just("")), min_size=across, max_size=across)),
            min_size=1,
            max_size=5,
        )
    ),
    st.sampled_from((",", ";", "\t")),
    st.sampled_from(("\n", "\r\n")),
    st.sampled_from((csv.QUOTE_MINIMAL, csv.QUOTE_ALL)),
    st.booleans(),
)
def test_a_table_becomes_the_document_that_json_is(
    rows: list[tuple[str, list[str]]], mark: str, end: str, quoting: Any, names_first: bool
) -> None:
    across = len(rows[0][1])
    out = io.StringIO()
    writer = csv.writer(out, delimiter=mark, lineterminator=end, quoting=quoting)
    header = [f"x{at}" for at in range(across)]
    writer.writerow(["id", *header] if names_first else [*header, "id"])
    for name, cells in rows:
        writer.writerow([name, *cells] if names_first else [*cells, name])
    tabled = TABLED[XBAR].tabled
    assert tabled is not None
    delimiter = {",": "comma", ";": "semicolon", "\t": "tab"}[mark]
    found, _ = tabled.loaded(out.getvalue().encode(), f"delimiter={delimiter}".encode())
    values = ",".join("[" + ",".join(cell or "null" for cell in cells) + "]" for _, cells in rows)
    expected = f'{{"data":{{"ids":{json.dumps([name for name, _ in rows])},"values":[{values}]}}}}'
    assert found == strict_json.loads(expected.encode())
    for row, (_, cells) in zip(found["data"]["values"], rows, strict=True):
        assert [type(cell) for cell in row] != [str]
        assert [None if cell is None else float(cell) for cell in row] == [
            float(cell) if cell else None for cell in cells
        ]


@settings(max_examples=300, deadline=None, derandomize=True, database=None)
@given(st.text('0123456789.,;-+eE"\n\r x<\u00e9', max_size=40), st.sampled_from(("", "delimiter=semicolon")))
def test_no_text_is_too_much(text: str, query: str) -> None:
    for operation_id, header in ((XBAR, "id,x1,x2\n"), ("assessMeasurements", "value\n"), (XBAR, "")):
        answer = post(operation_id, header + text, query)
        if answer.status_code != 200:
            refused(answer, problems.TYPES[json.loads(answer.data)["type"].removeprefix("/problems/")])
            assert answer.status_code in (400, 422)


# Faults ---------------------------------------------------------------------------------------------

H = "id,x1,x2\n"


@pytest.mark.parametrize(
    ("body", "query", "expected"),
    [
        # Decimal commas, however they come.
        (H + "a,2,51,2,49\n", "", ("decimal-comma", 2, "x1")),
        (H + 'a,"2,51",2.49\n', "", ("decimal-comma", 2, "x1")),
        ("id;x1;x2\na;1;1\nb;2.5;2,49\n", "delimiter=semicolon", ("decimal-comma", 3, "x2")),
        ("id\tx1\tx2\na\t-0,5e3\t2\n", "delimiter=tab", ("decimal-comma", 2, "x1")),
        ("x1\n2.5\n2,51\n", "", ("decimal-comma", 3, "x1")),
        # Another delimiter than the one that is stated.
        ("id;x1;x2\na;1;2\n", "", ("other-delimiter", 1, None)),
        ("id\tx1\na\t1\n", "", ("other-delimiter", 1, None)),
        ("id,x1\na,1\n", "delimiter=semicolon", ("other-delimiter", 1, None)),
        # Cells.
        (H + 'a,"1,234.5",1\n', "", ("thousands-separator", 2, "x1")),
        (H + 'a,"1.234,5",1\n', "", ("thousands-separator", 2, "x1")),
        (H + "a,1 234,1\n", "", ("thousands-separator", 2, "x1")),
        (H + "a,1'234,1\n", "", ("thousands-separator", 2, "x1")),
        (H + "a,1,1\nb,1,NaN\n", "", ("missing-as-text", 3, "x2")),
        (H + "a,1,n/a\n", "", ("missing-as-text", 2, "x2")),
        (H + "a,1,-\n", "", ("missing-as-text", 2, "x2")),
        (H + "a,1,null\nb,,1\n", "", ("missing-as-text", 2, "x2")),
        (H + "a,<0.5,1\n", "", ("beyond-limit", 2, "x1")),
        (H + "a,2.5 mm,1\n", "", ("unit-in-cell", 2, "x1")),
        (H + "a,5%,1\n", "", ("unit-in-cell", 2, "x1")),
        (H + "a,#DIV/0!,1\n", "", ("spreadsheet-error", 2, "x1")),
        (H + "a,+1,1\n", "", ("number-form", 2, "x1")),
        (H + "a,.5,1\n", "", ("number-form", 2, "x1")),
        (H + "a,5.,1\n", "", ("number-form", 2, "x1")),
        (H + "a,01,1\n", "", ("number-form", 2, "x1")),
        (H + "a,0x1F,1\n", "", ("number-form", 2, "x1")),
        (H + "a,1e400,1\n", "", ("number-form", 2, "x1")),
        (H + "a,\u22122.5,1\n", "", ("number-form", 2, "x1")),
        (H + "a,true,1\n", "", ("not-a-number", 2, "x1")),
        (H + "a,[1],1\n", "", ("not-a-number", 2, "x1")),
        (H + "a, ,1\n", "", ("blank-cell", 2, "x1")),
        (H + "a,1e301,1\n", "", ("too-large", 2, "x1")),
        # Rows and names.
        (H + "a,1\n", "", ("unequal-length", 2, None)),
        (H + "a,1,x,y\n", "", ("unequal-length", 2, None)),
        (H + "a,1,2\n\nb,1,2\n", "", ("empty-row", 3, None)),
        (H, "", ("no-rows", 1, None)),
        ("id,x1,x1\na,1,2\n", "", ("repeated-column", 1, "x1")),
        ("id,,x1\na,1,2\n", "", ("unnamed-column", 1, "2")),
        ("id,2.51\na,2.49\n", "", ("number-as-name", 1, "2.51")),
        ("ID,x1,x2\n1,1,2\n", "", ("unknown-column", 1, "ID")),
        ("batch,x1,x2\n1,1,2\n", "", ("unknown-column", 1, "batch")),
        ("value\n1\n2\n", "", ("unknown-column", 1, "value")),
        ("mean,range,other\n1,2,3\n", "data.sizes=5", ("unknown-column", 1, "other")),
        # What the shape, and the calculation, find afterwards.
        ("id,time,x1,x2\na,2026-03-02 06:00,1,2\n", "", ("not-a-time", 2, "time")),
        ("mean,range,size\n1,2,2\n3,-4,2\n", "", ("too-small", 3, "range")),
    ],
)
def test_a_fault_has_its_row_and_column(
    body: str, query: str, expected: tuple[str, int | None, str | None]
) -> None:
    assert place(only(post(XBAR, body, query))) == expected


@pytest.mark.parametrize(
    ("body", "row"),
    [
        (b"", None),
        (b" \n ", None),
        ("id,x1\na,1\n".encode("utf-16"), None),
        (b"id,x1\na,1\n\xff,2\n", 3),
        (b"id,x1\na\0,1\n", 2),
        (b"id,x1\ra,1\r", 1),
        (b'id,x1\na,1\n"b,2\nc,3\n', 3),
        (b'id,x1\n"a\nb",1\n', 2),
        (b'id,x1\n"a"b,1\n', 2),
    ],
)
def test_what_is_no_csv(body: bytes, row: int | None) -> None:
    assert only(post(XBAR, body), problems.NOT_CSV).get("row") == row


@pytest.mark.parametrize(
    ("operation_id", "body", "query", "expected"),
    [
        ("fitPLimits", "count\n1\n20\n", "data.inspected=10", ("count-above-inspected", 3, "count")),
        ("fitPLimits", "count,inspected\n1,10\n2.5,10\n", "", ("not-an-integer", 3, "count")),
        ("fitPLimits", "count,inspected\n1,10\n2,x\n", "", ("not-a-number", 3, "inspected")),
        ("fitPLimits", "count\n1\n", "", ("required", 1, "inspected")),
        (
            "fitTSquaredLimits",
            "a,b\n1,2\n2,3\n3,1\n",
            "data.subgroup_size=2",
            ("incomplete-subgroup", None, None),
        ),
        (
            "analyseCrossedStudy",
            "part,appraiser,value\n1,a,1\n1,b,\n2,a,1\n2,b,2\n",
            "",
            ("missing-measurement", 3, "value"),
        ),
        ("analyseBiasStudy", "part,reference,value\na,1,1\nb,2,\na,1,1.1\n", "", ("null", 3, "value")),
        ("analyseBiasStudy", "part,value\na,1\n", "", ("required", 1, "reference")),
        ("analyseBiasStudy", "part,reference,value\na,1,1\nb,x,2\n", "", ("not-a-number", 3, "reference")),
        (
            "analyseAgreementStudy",
            "item,appraiser,rating,reference\n1,a,ok,ok\n1,b,ok,no\n",
            "",
            ("two-references", 3, "reference"),
        ),
        (
            "assessMeasurements",
            "value,below\n1.2,\n,<0.5\n",
            "specification.upper=4",
            ("beyond-limit", 3, "below"),
        ),
        ("assessMeasurements", "value,x2\n1.2,1\n", "specification.upper=4", ("unknown-column", 1, "x2")),
        ("fitGLimits", "interval\n3\n0\n2\n", "starts_at=1", ("interval-too-small", 3, "interval")),
    ],
)
def test_what_the_calculation_finds_has_its_row_and_column(
    operation_id: str, body: str, query: str, expected: tuple[str, int | None, str | None]
) -> None:
    answer = post(operation_id, body, query)
    kind = problems.TYPES[json.loads(answer.data)["type"].removeprefix("/problems/")]
    assert kind in (problems.CONTRACT_VIOLATION, problems.NOT_COMPUTABLE)
    assert place(only(answer, kind)) == expected


def test_all_faults_are_told_at_once_and_counted_beyond_a_hundred() -> None:
    answer = post(XBAR, H + "a,1,x\nb,y,2\n" + "c,1,2\n" * 3, "sigma_multiple=0&sigma_estimator=none")
    assert {(*place(one), one.get("parameter")) for one in refused(answer)} == {
        ("not-a-number", 2, "x2", None),
        ("not-a-number", 3, "x1", None),
        ("too-small", None, None, "sigma_multiple"),
        ("unknown-choice", None, None, "sigma_estimator"),
    }
    for row in ("a,x,1\n", "a,1\n"):
        many = post(XBAR, H + row * 150)
        assert len(refused(many)) == problems.MAX_ERRORS
        assert "150 faults" in json.loads(many.data)["detail"]


# Options --------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("query", "parameter", "code"),
    [
        ("sigma_multiple=3&sigma_multiple=3", "sigma_multiple", "repeated-parameter"),
        ("sigma_multiple=2,5", "sigma_multiple", "not-a-number"),
        ("sigma_multiple=", "sigma_multiple", "not-a-number"),
        ("sigma_multiple=null", "sigma_multiple", "null"),
        ("sigma_multiplier=3", "sigma_multiplier", "unknown-parameter"),
        ("rules.published=none", "rules.published", "unknown-choice"),
        ("rules=nelson-1984", "rules", "unknown-parameter"),
        ("exclude=1", "exclude", "not-a-list"),
        ("exclude=[", "exclude", "not-json"),
        ('exclude=[{"index":0,"index":1,"reason":"x"}]', "exclude", "repeated-key"),
        ('exclude=[{"index":-1,"reason":"x"}]', "exclude", "too-small"),
        ("explain=yes", "explain", "not-a-boolean"),
        ("delimiter=pipe", "delimiter", "unknown-choice"),
        ("guarantee.confidence=0.9", "guarantee.in_control_arl", "required"),
        ("standards.sigma=0", "standards.sigma", "too-small"),
    ],
)
def test_parameters_are_read_as_strictly_as_a_body(query: str, parameter: str, code: str) -> None:
    fault = only(post(XBAR, CARS, query))
    assert (fault["parameter"], fault["code"]) == (parameter, code)


def test_a_fault_of_an_option_that_the_calculation_finds_names_its_parameter() -> None:
    fault = only(post(XBAR, CARS, 'exclude=[{"index":7,"reason":"x"}]'), problems.NOT_COMPUTABLE)
    assert (fault["parameter"], fault["pointer"]) == ("exclude", "#/0/index")
    fault = only(post(XBAR, CARS, "false_alarm_probability=0.01"), problems.NOT_COMPUTABLE)
    assert fault["parameter"] == "false_alarm_probability"
    fault = only(post(XBAR, "mean,range,size\n1,1,2\n2,1,2\n", "data.sizes=2"))
    assert (fault["parameter"], fault["code"]) == ("data.sizes", "given-twice")


def test_a_member_that_is_missing_altogether_is_told_by_its_parameters() -> None:
    fault = only(post("assessMeasurements", "value\n1\n2\n"))
    assert (fault["parameter"], fault["code"]) == ("specification", "required")
    assert "specification.lower" in fault["detail"]


def test_parameters_beside_json_are_refused() -> None:
    body = json.dumps({"data": AS_JSON}).encode()
    for query in ("sigma_multiple=3", "delimiter=semicolon", "anything=1"):
        fault = only(post(XBAR, body, query, content_type="application/json"), problems.NOT_COMPUTABLE)
        assert fault == {
            "parameter": query.partition("=")[0],
            "code": "only-with-csv",
            "detail": fault["detail"],
        }


def test_subgroups_of_vectors_are_named_in_each_of_their_rows() -> None:
    rows = [[1.0, 2.1], [1.2, 1.9], [0.8, 2.0], [1.1, 2.3], [0.9, 2.2], [1.3, 1.8], [1.0, 1.7], [1.1, 2.0]]
    body = "id,bore,length\n" + "".join(f"S-{at // 2},{row[0]},{row[1]}\n" for at, row in enumerate(rows))
    answer = post("fitTSquaredLimits", body, "data.subgroup_size=2")
    data = {
        "variables": ["bore", "length"],
        "values": rows,
        "subgroup_size": 2,
        "ids": ["S-0", "S-1", "S-2", "S-3"],
    }
    assert answer.status_code == 200, answer.get_data(as_text=True)
    assert same(answer.data, served.call("fitTSquaredLimits", {"data": data}).data)


# Bounds ---------------------------------------------------------------------------------------------

MOST = Settings().max_body_bytes - 100


@pytest.mark.parametrize(
    "body",
    [
        b"," * MOST,
        b"x" * MOST,
        ",".join(f"x{at}" for at in range(1_000_000)).encode() + b"\n1\n",
        b"id,x1,x2\n" + b"," * MOST,
        b"id,x1,x2\n" + b"\n" * MOST,
        b"id,x1,x2\n" + b"1,2,3,4\n" * 900_000,
        b'id,x1,x2\n"' + b"a" * MOST,
        b"id,x1,x2\n" + b'"\n",' * (MOST // 5),
        b"id,x1,x2\na,1," + b"0" * MOST + b"x",
        b"id,x1,x2\n" + b"a,x,y\n" * 190_000,
    ],
    ids=("marks", "name", "names", "row", "lines", "ragged", "quote", "quotes", "zeros", "texts"),
)
def test_a_hostile_table_is_refused_quickly(body: bytes) -> None:
    started = process_time()
    answer = post(XBAR, body)
    assert process_time() - started < 5
    assert answer.status_code in (400, 422)
    assert len(answer.data) < 40_000


def test_a_table_too_large_is_refused() -> None:
    answer = post(XBAR, b"x" * (MOST + 101))
    assert json.loads(answer.data)["type"] == problems.CONTENT_TOO_LARGE.uri


def test_a_large_table_takes_about_as_long_as_its_json() -> None:
    operation = TABLED[XBAR]
    assert operation.request is not None
    assert operation.tabled is not None
    rows = [[2.5 + (at % 97 + k) / 1000 for k in range(5)] for at in range(50_000)]
    table = "x1,x2,x3,x4,x5\n" + "".join(",".join(map(repr, row)) + "\n" for row in rows)
    body, sent = table.encode(), json.dumps({"data": {"values": rows}}).encode()

    def seconds(read: Any) -> float:
        best = 60.0
        for _ in range(3):
            started = process_time()
            operation.request.load(read())  # type: ignore[union-attr]
            best = min(best, process_time() - started)
        return best

    as_table = seconds(lambda: operation.tabled.loaded(body, b"")[0])  # type: ignore[union-attr]
    assert as_table < 3 * seconds(lambda: strict_json.loads(sent))


def test_the_page_to_read_tells_of_the_table() -> None:
    page = served.app().test_client().get(f"/docs/reading/{XBAR}").get_data(as_text=True)
    for text in ("Or a table", "rules.published", "K-0412,2026-03-02T06:00:00Z,2.49", "rows more"):
        assert text.replace("_", "_\u200b") in page, text
    assert "Or a table" not in served.app().test_client().get("/docs/reading/judgeXbarR").get_data(
        as_text=True
    )
