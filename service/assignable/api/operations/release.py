"""Release checks: one batch, many characteristics."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, fields
from functools import cache, partial
from itertools import islice
from typing import Any

import numpy as np
from marshmallow import ValidationError

from ...documents.limits import carry_document, check_carry
from ...documents.seal import Seals
from ...spc import release
from ...spc.cautions import COMMON_PRACTICE, Caution
from ...spc.charts import CHARTS
from ...spc.data import Floats
from ...spc.errors import DocumentMismatch, Fault, SpcError, UnusableData, UnusableParameter, Where
from ...spc.explain import release as worked
from ...spc.explain.steps import Step
from ...spc.words import ordinal
from .. import fields as f
from .. import problems
from ..contract import Contract
from ..schemas.charts import ChartRequest, request_of
from ..schemas.common import cautions
from ..schemas.release import (
    DISPOSITION,
    NOTE,
    ReleaseCheckAnswer,
    ReleaseCheckRequest,
    below_of,
    characteristic_of,
)
from .charts import documents_of

TAG = "Release"
MOST_POINTS = 2_000  # judged in one request, whatever the rules of their charts

_FIGURES = tuple(entry.name for entry in fields(release.Figures))


def check(seals: Seals, loaded: dict[str, Any]) -> dict[str, Any]:
    """A batch against its specifications and its own charts."""
    posted = loaded["characteristics"]
    _refuse_too_much(posted)
    errors: list[SpcError] = []
    checked: list[release.Checked] = []
    told: list[dict[str, Any]] = []
    found: list[Caution] = list(_repeated(posted))
    for position, one in enumerate(posted):
        place: Where = ("characteristics", position)
        try:
            with _placed(place):
                trend = _Trend.of(one, seals)
                result = release.check(characteristic_of(one, None if trend is None else trend.judged))
        except SpcError as error:
            errors.append(error)
            if sum(len(each.faults) for each in errors) >= problems.MAX_ERRORS:
                break  # more would be read and not be told
            continue
        checked.append(result)
        told.append(_told(result, trend, place))
        if trend is not None:
            found.extend(
                Caution(each.code, each.sentence, (*place, *each.where), each.reference)
                for each in trend.cautions
            )
    if errors:
        raise type(errors[0])(*(fault for error in errors for fault in error.faults))
    return {
        "batch": loaded.get("batch"),
        "disposition": release.disposition(checked),
        "note": NOTE,
        "characteristics": told,
        "cautions": cautions(found),
    }


def _repeated(posted: list[dict[str, Any]]) -> Iterator[Caution]:
    """Characteristics under a name that was there before."""
    first: dict[str, int] = {}
    for position, one in enumerate(posted):
        name = one["name"]
        if first.setdefault(name, position) != position:
            yield Caution(
                "repeated-name",
                f"There are two characteristics named {name}, the {ordinal(first[name] + 1)} and the "
                f"{ordinal(position + 1)}: make sure that both are meant.",
                ("characteristics", position, "name"),
                COMMON_PRACTICE,
            )


def _told(result: release.Checked, trend: _Trend | None, place: Where) -> dict[str, Any]:
    return {
        "disposition": result.disposition,
        "reasons": [
            {
                "code": reason.code,
                "sentence": reason.sentence,
                "pointer": problems.pointer((*place, *reason.where)),
                "severity": reason.severity,
                "entries": reason.entries,
            }
            for reason in result.reasons
        ],
        **{name: getattr(result.figures, name) for name in _FIGURES},
        "trend": None if trend is None else trend.answer,
    }


def _refuse_too_much(posted: list[dict[str, Any]]) -> None:
    results = sum(one["results"].size for one in posted)
    if results > release.MOST_RESULTS:
        raise UnusableData.of(
            "too-many-values",
            f"These characteristics have room for {results} results; at most {release.MOST_RESULTS} are taken.",
            "characteristics",
        )
    points = sum(_most_points(one) for one in posted if "trend" in one)
    if points > MOST_POINTS:
        raise UnusableData.of(
            "too-many-points",
            f"The charts of these characteristics would judge {points} points; at most {MOST_POINTS} are judged in one "
            "request. Make fewer points by `point`, or send them to the operation of the chart.",
            "characteristics",
        )


def _most_points(one: Mapping[str, Any]) -> int:
    """How many points the chart of a characteristic is to judge."""
    asked, results = one["trend"], one["results"]
    point = asked.get("point") or _taking(asked["limits"]["chart"]).usual
    return int(results.size) if point == "each" else len(release.groups(results))


@contextmanager
def _placed(place: Where) -> Iterator[None]:
    """Puts faults below this place."""
    try:
        yield
    except SpcError as error:
        raise type(error)(
            *(Fault(fault.code, fault.detail, (*place, *fault.where)) for fault in error.faults)
        ) from error


# ---------------------------------------------------------------------------------------------------
# The characteristic's own chart


_SINGLE = ("values", "individuals", "counts", "intervals")
"""Names under which charts take single numbers."""

# Members of `trend`, those of a chart's data that they become, and the charts they are for.
_BESIDES = (
    ("inspected", "inspected", "a chart of counts"),
    ("positions", "positions", "a trend chart"),
    ("part_name", "part_names", "a short-run chart"),
)


@dataclass(frozen=True, slots=True)
class _Taking:
    """What a chart takes, as far as the results of one characteristic can give it."""

    request: ChartRequest
    shape: f.RequestShape
    single: str | None
    subgroups: bool
    usual: str | None

    def takes(self, member: str) -> bool:
        """Whether its data has this member."""
        return member in self.shape.load_fields


@cache
def _taking(name: str) -> _Taking:
    request = request_of(name)
    shape = request.data()
    known = shape.load_fields
    values = known.get("values")
    tables = isinstance(values, f.NumberTable)
    single: str | None = next(
        (each for each in ("individuals", "counts", "intervals") if each in known), None
    )
    if single is None and isinstance(values, f.NumberList):
        single = "values"
    usual = "each" if single in ("counts", "intervals") else "average" if not tables else None
    if tables and single is None:
        usual = "subgroup"
    return _Taking(request, shape, single, tables, usual)


@dataclass(frozen=True, slots=True)
class _Trend:
    """What the chart said, as the check and as the answer need it."""

    judged: release.Judged
    answer: dict[str, Any]
    cautions: tuple[Caution, ...]

    @staticmethod
    def of(posted: Mapping[str, Any], seals: Seals) -> _Trend | None:
        """The batch as the next point or points of its own chart.

        Raises DocumentMismatch for documents that were edited or do not belong together; UnusableParameter and
        UnusableData for results that this chart cannot take.
        """
        if "trend" not in posted:
            return None
        asked = posted["trend"]
        name = asked["limits"]["chart"]
        taking = _taking(name)
        if taking.takes("variables"):
            raise UnusableParameter.of(
                "several-variables",
                f"The {name} chart is of several characteristics at once; judge them by its own operation.",
                "trend",
                "limits",
                "chart",
            )
        with _placed(("trend",)):
            digest, limits, carry = _opened(name, asked, seals)
        size = getattr(limits, "subgroup_size", 1) or 2
        point = asked.get("point") or taking.usual or ("subgroup" if size > 1 else "average")
        data, points, left_out = _points(name, taking, point, posted)
        with _mapped():
            result = CHARTS[name].judge(limits, taking.request.read(data), carry)
        return _Trend(
            release.Judged(name, result.signals, result.signals_found, left_out),
            {
                "chart": name,
                "point": point,
                "points": points,
                "verdict": result.verdict,
                "signals": result.signals,
                "signals_found": result.signals_found,
                "carry": carry_document(name, digest, result.carry),
            },
            (
                *_of_another(posted, asked["limits"]["characteristic"]),
                *(
                    Caution(each.code, each.sentence, _mapped_to(each.where), each.reference)
                    for each in result.cautions
                ),
            ),
        )


def _of_another(posted: Mapping[str, Any], known: Mapping[str, str]) -> Iterator[Caution]:
    """Limits whose document names another characteristic, or another unit."""
    for member in ("name", "unit"):
        here, there = posted.get(member), known.get(member)
        if here is not None and there is not None and here != there:
            yield Caution(
                "limits-of-another-characteristic",
                f"The limits state the {member} {there}, and the batch {here}: make sure that they belong together.",
                ("trend", "limits", "characteristic", member),
                COMMON_PRACTICE,
            )


def _opened(name: str, asked: Mapping[str, Any], seals: Seals) -> tuple[str, Any, Any]:
    """Digest and object of the limits, and the object of the carry."""
    documents = documents_of(name, seals)
    with _as_documents("limits"):
        digest, limits = documents.limits._deserialize(asked["limits"], None, None)
    posted = asked["carry"]
    if posted is None:
        return digest, limits, None
    if posted["chart"] != name:
        check_carry(name, digest, posted)
    with _as_documents("carry"):
        document, carry = documents.carry._deserialize(posted, None, None)
    check_carry(name, digest, document)
    return digest, limits, carry


@contextmanager
def _as_documents(member: str) -> Iterator[None]:
    """A document without the shape of its chart's was not received so."""
    try:
        yield
    except ValidationError as error:
        raise DocumentMismatch(*islice(_faults({member: error.messages}), problems.MAX_ERRORS)) from error


def _faults(messages: object, path: Where = ()) -> Iterator[Fault]:
    """Nested messages of a shape as faults."""
    if isinstance(messages, Mapping):
        for step, inner in messages.items():
            yield from _faults(inner, path if step == problems.HERE else (*path, step))
    elif isinstance(messages, list):
        for text in messages:
            yield Fault(getattr(text, "code", "invalid"), str(text), path)


def _points(
    name: str, taking: _Taking, point: str, posted: Mapping[str, Any]
) -> tuple[dict[str, Any], int, int]:
    """The data of the chart, how many points there are, and how many were left out as below detection."""
    results, below = posted["results"], below_of(posted)
    if (point == "subgroup" and not taking.subgroups) or (point != "subgroup" and taking.single is None):
        kinds = "single values" if taking.single else "subgroups"
        raise UnusableParameter.of(
            "point-of-another-kind", f"The {name} chart takes {kinds}; choose `point` so.", "trend", "point"
        )
    asked = posted["trend"]
    for member, taken, what in _BESIDES:
        if member in asked and not taking.takes(taken):
            raise UnusableParameter.of(
                "not-of-this-chart", f"`{member}` is for {what}; leave it out.", "trend", member
            )
    rows = release.groups(results)
    cut = frozenset(below if point == "each" else (index // rows.shape[1] for index in below))
    if point == "subgroup":
        table = _nulls(np.array(rows), cut)
        data: dict[str, Any] = {"values": table}
    elif point == "each":
        data = {taking.single or "": _nulls(results.reshape(-1), frozenset())}
    else:
        data = {taking.single or "": list(release.group_averages(results, below))}
    points = len(next(iter(data.values())))
    if "inspected" in asked:
        data["inspected"] = asked["inspected"]
    if "positions" in asked:
        data["positions"] = asked["positions"].tolist()
    if taking.takes("part_names"):
        if "part_name" not in asked:
            raise UnusableParameter.of(
                "part-missing", "A short-run chart needs to know which part this is.", "trend", "part_name"
            )
        data["part_names"] = [asked["part_name"]] * points
    try:
        return taking.shape.load(data), points, len(cut)
    except ValidationError as error:
        raise UnusableData(
            *(
                Fault(fault.code, fault.detail, _result_of(fault.where, point, results))
                for fault in _faults(error.messages)
            )
        ) from error


def _nulls(values: Floats, cut: frozenset[int]) -> list[Any]:
    """Numbers as a request has them, null for NaN; entries of ``cut`` are gaps as a whole."""
    return [
        [None if x != x or at in cut else x for x in entry]
        if type(entry) is list
        else None
        if entry != entry
        else entry
        for at, entry in enumerate(values.tolist())
    ]


def _result_of(where: Where, point: str, results: Floats) -> Where:
    """Where the caller wrote what a fault of the chart's data is about."""
    if point == "each" and len(where) == 2 and isinstance(where[1], int) and where[0] in _SINGLE:
        return release.place(results, where[1])
    return _mapped_to(("data", *where))


@contextmanager
def _mapped() -> Iterator[None]:
    """Puts faults of a judgement where the caller of a release check wrote what they are about."""
    try:
        yield
    except SpcError as error:
        raise type(error)(
            *(Fault(fault.code, fault.detail, _mapped_to(fault.where)) for fault in error.faults)
        ) from error


def _mapped_to(where: Where) -> Where:
    for member, taken, _ in _BESIDES:
        if where[:2] == ("data", taken):
            return ("trend", member, *(where[2:] if member == "positions" else ()))
    if where[:1] == ("data",):
        return ("results",)
    return ("trend", *where)


def explain(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of each characteristic against its specification; its chart's are told by the chart."""
    return worked.of_check(
        [
            (characteristic, release.check(characteristic).figures)
            for characteristic in (characteristic_of(one, None) for one in loaded["characteristics"])
        ]
    )


def register(contract: Contract) -> None:
    """Binds the release check."""
    contract.tag(TAG, "What speaks for and against releasing a batch.")
    contract.operation(
        "POST",
        "/v1/release-checks",
        operation_id="checkRelease",
        tag=TAG,
        summary="One batch against its specifications and its own limits",
        description="Each characteristic of a batch: its results, or the averages of their replicates, rounded where a "
        "rule is stated, against the specification; within the acceptance limits where measurement uncertainty is "
        "stated; and the batch as the next point of the characteristic's own chart, where its limits document is given "
        "(the carry comes back, to be sent with the next batch). The answer is one disposition, with the reasons of "
        f"each characteristic in the order a reviewer reads them. {DISPOSITION} Arithmetic is exact on the numbers as "
        "written; a guard band is compared with unrounded values. A result below its detection limit conforms to an "
        "upper limit that the detection limit does not exceed, and is a gap on the chart. "
        f"{NOTE} Sources: astm-e29, iso-80000-1, jcgm-106, iso-14253-1.",
        request=ReleaseCheckRequest(),
        response=ReleaseCheckAnswer(),
        problems=(problems.NOT_COMPUTABLE, problems.DOCUMENT_MISMATCH),
        example="release-checks",
        provenance="release-check",
        explain=explain,
    )(partial(check, contract.seals))
