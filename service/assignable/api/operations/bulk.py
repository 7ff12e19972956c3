"""Many requests in one: any operation a line, and new data of many characteristics under their limits."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from functools import cache, partial
from itertools import chain
from typing import Any

import orjson

from ...documents.limits import carry_document
from ...documents.seal import Seals
from ...spc.charts import CHARTS, Chart
from ...spc.errors import SpcError
from .. import answers, problems
from .. import fields as f
from ..bodies import NDJSON
from ..contract import Contract, Lines, Operation
from ..problems import CONTRACT_VIOLATION, DOCUMENT_MISMATCH, NOT_COMPUTABLE, Entry, Problem
from ..schemas import bulk as shapes
from ..schemas.charts import ChartRequest, request_of
from ..schemas.common import cautions, labels_of
from ..streams import Call, Line
from ..tally import OTHER, Tally, measured_in
from .charts import VERDICT_NOTE, carried, documents_of, judgement, labelled

TAG = "Bulk"
MOST_OPEN = 10_000
MOST_LIMITS_BYTES = 64 * 1024 * 1024
MOST_TOGETHER = 4_096  # points judged in one calculation

# What no line can ask for: the streams themselves, and what is for whoever runs the service.
_IDS = ("answerLines", "judgeLines", "getMetrics")
_READING = (
    "Answers begin to come when the request is whole, or when there are 8 MiB of them: a client that sends more "
    "reads while it sends."
)


# ---------------------------------------------------------------------------------------------------
# Any operation


_BULK_LINE = shapes.BulkLine()


@dataclass(slots=True)
class AnyLines:
    """Each line by itself."""

    contract: Contract
    call: Call

    def answer(self, block: list[Line]) -> Iterator[bytes]:
        """The answers, a line at a time."""
        for line in block:
            yield self._answered(line)

    def close(self) -> Iterator[bytes]:
        """Nothing is left to be told."""
        return iter(())

    def _answered(self, line: Line) -> bytes:
        named: dict[str, Any] = {"line": line.number, "id": None}
        root, operation_id, tally = "#", OTHER, Tally()
        try:
            asked = _BULK_LINE.load(line.parsed())
            named["id"] = asked["id"]
            operation = self._operation(asked["operation"])
            root, operation_id = "#/body", operation.operation_id
            written = operation.answer_to(asked["body"], line.text, tally)
        except Exception as error:
            return self.call.refused(named, error, root, operation_id)
        self.call.counted(operation_id, tally, 1)
        if operation.media_type == answers.JSON:
            return self.call.told(named, b"answer", written)
        return self.call.told(named, b"picture", orjson.dumps(written.decode()))

    def _operation(self, operation_id: str) -> Operation:
        found = None if operation_id in _IDS else self.contract.find(operation_id)
        if found is not None:
            return found
        near = get_close_matches(operation_id, self.contract.operations, n=1, cutoff=0.5)
        hint = f" Did you mean {near[0]}?" if near and near[0] not in _IDS else ""
        detail = f"There is no operation of this id that a line can ask for.{hint}"
        raise Problem(CONTRACT_VIOLATION, detail, errors=(Entry("unknown-operation", detail, "#/operation"),))


# ---------------------------------------------------------------------------------------------------
# New data of many characteristics


@dataclass(slots=True)
class Series:
    """A characteristic that a stream has opened: what judges its data, and how far it has come."""

    chart: Chart
    takes: ChartRequest
    shape: f.RequestShape
    digest: str
    limits: Any
    carry: Any

    def carry_written(self) -> bytes:
        """The carry so far, as the caller keeps it; null where there is none."""
        if self.carry is None:
            return b"null"
        return orjson.dumps(carry_document(self.chart.name, self.digest, self.carry))


@dataclass(slots=True)
class Brought:
    """A line's data, waiting to be judged; ``at`` is the place of its answer in the block."""

    at: int
    number: int
    data: dict[str, Any]
    points: int | None
    """How many there are, where that shows in the data: then it may be judged together with others."""


@cache
def _opening_of(name: str, seals: Seals) -> f.RequestShape:
    """The line that opens a characteristic on the chart of this name."""
    documents = documents_of(name, seals)
    members = {"limits": documents.limits, "carry": documents.carry}
    made: f.RequestShape = type("SeriesOpening", (shapes.SeriesOpening,), members)()
    return made


@cache
def _data_of(name: str) -> f.RequestShape:
    """The line that brings data of a characteristic on the chart of this name."""
    member = f.Object(request_of(name).data, required=True)
    made: f.RequestShape = type("SeriesData", (shapes.SeriesData,), {"data": member})()
    return made


_OPENING = shapes.SeriesOpening()
_DATA = shapes.SeriesData()


class SeriesLines:
    """Data of many characteristics, each judged where its last line left off.

    A judgement in one call, or in any split with the carry passed on, gives the same signals: so the lines of
    a characteristic that stand in one block are judged together, and where one of them cannot be, in halves,
    down to the one that cannot.
    """

    def __init__(self, seals: Seals, call: Call) -> None:
        self._seals = seals
        self._call = call
        self._open: dict[str, Series] = {}
        self._weight = 0

    def answer(self, block: list[Line]) -> Iterator[bytes]:
        """The answers of a block, once all of it is judged."""
        told: list[bytes] = [b""] * len(block)
        waiting: dict[str, list[Brought]] = {}
        for at, line in enumerate(block):
            name: str | None = None
            try:
                asked = line.parsed()
                name = _name_in(asked)
                if type(asked) is not dict or "data" not in asked:
                    told[at] = self._opened(line, asked)
                    continue
                brought, returned = self._brought(at, line, asked)
                together = waiting.setdefault(name, [])
                together.append(brought)
                if returned or len(together) >= MOST_TOGETHER:
                    self._judge(name, waiting.pop(name), told, returned=returned)
                    yield b""
            except Exception as error:
                told[at] = self._call.refused({"line": line.number, "characteristic": name}, error)
        for name, together in waiting.items():
            self._judge(name, together, told)
            yield b""
        yield from told

    def close(self) -> Iterator[bytes]:
        """The carry of each characteristic."""
        for name, series in self._open.items():
            yield orjson.dumps({"characteristic": name})[:-1] + b',"carry":' + series.carry_written() + b"}\n"

    def _opened(self, line: Line, asked: Any) -> bytes:
        named = asked.get("limits") if type(asked) is dict else None
        chart = named.get("chart") if type(named) is dict else None
        shape = _opening_of(chart, self._seals) if type(chart) is str and chart in CHARTS else _OPENING
        loaded = _loaded(shape, asked)
        name = loaded["characteristic"]
        found = CHARTS[chart]  # type: ignore[index]
        carry = carried(found, loaded)
        if name in self._open:
            detail = (
                "The characteristic is open already, and goes on as it was; in one stream it is opened once."
            )
            raise Problem(NOT_COMPUTABLE, detail, errors=(Entry("already-open", detail, "#/characteristic"),))
        self._weight += len(line.text)
        if len(self._open) >= MOST_OPEN or self._weight > MOST_LIMITS_BYTES:
            detail = (
                f"A stream keeps at most {MOST_OPEN} characteristics open, and {MOST_LIMITS_BYTES} bytes of their "
                "limits; begin another stream for the rest."
            )
            raise Problem(
                NOT_COMPUTABLE, detail, errors=(Entry("too-many-open", detail, "#/characteristic"),)
            )
        digest, limits = loaded["limits"]
        self._open[name] = Series(found, request_of(found.name), _data_of(found.name), digest, limits, carry)
        self._call.tally.answered += 1
        self._call.counted("judgeLines", Tally(), 1)
        told = {"line": line.number, "characteristic": name, "status": 200, "opened": found.name}
        return orjson.dumps(told) + b"\n"

    def _brought(self, at: int, line: Line, asked: Any) -> tuple[Brought, bool]:
        loaded = _DATA.load(asked)
        if loaded["characteristic"] not in self._open:
            detail = "No line before this one has opened the characteristic with its limits."
            raise Problem(NOT_COMPUTABLE, detail, errors=(Entry("not-opened", detail, "#/characteristic"),))
        return Brought(at, line.number, asked["data"], _points_in(asked["data"])), loaded["return_carry"]

    def _judge(self, name: str, lines: list[Brought], told: list[bytes], *, returned: bool = False) -> None:
        """Judges lines of one characteristic in order; the last one's answer has the carry where it is wanted."""
        series = self._open[name]
        last = lines[-1]
        for together in _alike(lines, alone=series.chart.details is not None):
            self._judge_together(name, series, together, told, last if returned else None)

    def _judge_together(
        self, name: str, series: Series, lines: Sequence[Brought], told: list[bytes], returned: Brought | None
    ) -> None:
        alone = len(lines) == 1
        data = lines[0].data if alone else _joined(lines)
        try:
            loaded = _loaded(series.shape, {"characteristic": name, "data": data})["data"]
            found = judgement(series.chart, series.limits, series.takes.read(loaded), series.carry)
        except Exception as error:
            if alone:
                if isinstance(error, SpcError):
                    error = problems.placed(error, {"data": data})
                told[lines[0].at] = self._call.refused(
                    {"line": lines[0].number, "characteristic": name},
                    error,
                    operation=f"judge{series.chart.stem}",
                )
                return
            found = None
        if not alone and (found is None or found.cautions or found.signals_found > len(found.signals)):
            half = len(lines) // 2
            self._judge_together(name, series, lines[:half], told, returned)
            self._judge_together(name, series, lines[half:], told, returned)
            return
        series.carry = found.carry
        tally = Tally()
        tally.values = measured_in(loaded)
        tally.cautions = [caution.code for caution in found.cautions]
        self._call.counted(f"judge{series.chart.stem}", tally, len(lines))
        self._tell(name, series, lines, found, labels_of(loaded), told, returned)

    def _tell(
        self,
        name: str,
        series: Series,
        lines: Sequence[Brought],
        found: Any,
        labels: Mapping[str, Sequence[str]],
        told: list[bytes],
        returned: Brought | None,
    ) -> None:
        self._call.tally.answered += len(lines)
        middle = b',"characteristic":' + orjson.dumps(name) + b',"status":200,"verdict":"'
        quiet = middle + _QUIET
        if not found.signals and not found.cautions and series.chart.details is None:
            for line in lines:
                told[line.at] = b'{"line":%d%s' % (line.number, quiet)
        else:
            signals = _by_line(labelled(found.signals, labels), lines)
            for line, own in zip(lines, signals, strict=True):
                acting = any(signal["severity"] == "action" for signal in own)
                members = {
                    "signals": own,
                    "signals_found": found.signals_found if len(lines) == 1 else len(own),
                    "cautions": cautions(found.cautions),
                }
                if series.chart.details is not None:
                    members["details"] = found.details
                verdict = b'signal",' if acting else b'in-control",'
                told[line.at] = (
                    b'{"line":%d' % line.number + middle + verdict + answers.dumps(members)[1:] + b"\n"
                )
        if returned is lines[-1]:
            told[returned.at] = told[returned.at][:-2] + b',"carry":' + series.carry_written() + b"}\n"


_QUIET = b'in-control","signals":[],"signals_found":0,"cautions":[]}\n'


def _name_in(asked: Any) -> Any:
    """The characteristic a line names, as far as it does; only for the answer to a line that is refused."""
    name = asked.get("characteristic") if type(asked) is dict else None
    return name.encode("utf-8", "replace").decode() if type(name) is str and len(name) <= f.MAX_TEXT else None


def _loaded(shape: f.RequestShape, asked: Any) -> dict[str, Any]:
    try:
        loaded: dict[str, Any] = shape.load(asked)
    except SpcError as error:
        raise problems.placed(error, asked) from error
    return loaded


def _points_in(data: Mapping[str, Any]) -> int | None:
    """The length that all lists of the data have in common, if they have one."""
    lengths = {len(value) for value in data.values() if type(value) is list}
    return (lengths.pop() or None) if len(lengths) == 1 else None


def _alike(lines: Sequence[Brought], *, alone: bool) -> Iterator[Sequence[Brought]]:
    """Runs of lines whose data can be joined: the same members, rows as long, the same single values."""
    begin = 0
    before = None
    for at, line in enumerate(lines):
        kind = None if alone or line.points is None else _kind_of(line.data)
        if at and (kind is None or kind != before):
            yield lines[begin:at]
            begin = at
        before = kind
    yield lines[begin:]


def _kind_of(data: Mapping[str, Any]) -> tuple[Any, ...]:
    return tuple(
        (name, len(value[0]) if value and type(value[0]) is list else -1)
        if type(value) is list
        else (name, type(value), value if type(value) in (int, float, str, bool) else id(value))
        for name, value in data.items()
    )


def _joined(lines: Sequence[Brought]) -> dict[str, Any]:
    return {
        name: list(chain.from_iterable(line.data[name] for line in lines)) if type(value) is list else value
        for name, value in lines[0].data.items()
    }


def _by_line(signals: list[dict[str, Any]], lines: Sequence[Brought]) -> Iterator[list[dict[str, Any]]]:
    """The signals of each line, with positions in its own data."""
    if len(lines) == 1:
        yield signals
        return
    first, at = 0, 0
    for line in lines:
        assert line.points is not None
        own = []
        while at < len(signals) and signals[at]["index"] < first + line.points:
            signal = signals[at]
            own.append(
                {
                    **signal,
                    "index": signal["index"] - first,
                    "points": [point - first for point in signal["points"]],
                }
            )
            at += 1
        yield own
        first += line.points


# ---------------------------------------------------------------------------------------------------
# Routes


def register(contract: Contract) -> None:
    """Binds both streams."""
    contract.tag(TAG, "Many requests in one call, as lines of JSON, answered line by line in their order.")
    contract.operation(
        "POST",
        "/v1/bulk",
        operation_id="answerLines",
        tag=TAG,
        summary="Any operations, one a line",
        description="Newline-delimited JSON both ways: each line asks for one operation by its id, and is answered "
        "by a line with the same number, in order; a line that fails harms no other. The last line is a summary: an "
        f"answer without it was cut off. {_READING} Blank lines are passed over.",
        response=None,
        lines=Lines((shapes.BulkLine,), (shapes.BulkAnswer, shapes.BulkSummary), "bulk"),
        media_type=NDJSON,
    )(partial(AnyLines, contract))
    contract.operation(
        "POST",
        "/v1/bulk/signals",
        operation_id="judgeLines",
        tag=TAG,
        summary="New data of many characteristics, one judgement a line",
        description="The fast way for the commonest load. A line with `limits` (and the `carry` kept with them) opens "
        "a characteristic under a name of yours; every line with `data` is then judged where the last one of its name "
        "left off, and answered with its signals, the plotted points aside. A line that cannot be judged is answered "
        "with its problem and leaves the carry as it was. At the end come the carry of each characteristic, to be "
        f"kept, and a summary: an answer without it was cut off. {_READING} {VERDICT_NOTE}",
        response=None,
        lines=Lines(
            (shapes.SeriesOpening, shapes.SeriesData),
            (shapes.SeriesOpened, shapes.SeriesJudged, shapes.SeriesCarry, shapes.BulkSummary),
            "bulk-signals",
        ),
        media_type=NDJSON,
        problems=(NOT_COMPUTABLE, DOCUMENT_MISMATCH),
    )(partial(SeriesLines, contract.seals))
