"""The operations of the charts: all of them follow from the registry."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass
from functools import cache, lru_cache, partial
from typing import Any

import orjson

from ...documents.limits import carry_document, check_carry, check_limits, limits_document, written
from ...documents.seal import Seals
from ...spc.charts import CHARTS, Chart
from ...spc.charts.common import Performance
from ...spc.errors import DocumentMismatch, SpcError
from ...spc.explain import charts as worked
from ...spc.explain.steps import Step
from ...spc.rules import Signal
from .. import fields as f
from .. import problems
from ..contract import Contract, Provenance, examples_directory
from ..schemas import derive, quick
from ..schemas.charts import ChartRequest, request_of
from ..schemas.common import CAUTIONS, CautionAnswer, Characteristic, SignalAnswer, cautions, labels_of

TAG = "Charts"
PROVENANCE = f.Object(
    Provenance, required=True, metadata={"description": "What computed this answer, and of which request."}
)
LARGEST_KEPT = 16_384  # bytes of a limits document that is kept parsed

VERDICT_NOTE = (
    "The verdict informs a qualified person's decision and never replaces the site's approved procedure."
)


# ---------------------------------------------------------------------------------------------------
# Documents as callers send them back


class Seal(f.RequestShape):
    """A signature over the document."""

    key_id = f.StrictString(required=True, metadata={"description": "Which key made it."})
    jws = f.StrictString(required=True, max_length=2000, metadata={"description": "Detached JWS (RFC 7515)."})


class SealAnswer(f.AnswerShape):
    """A signature over the document."""

    key_id = f.StrictString(required=True, metadata={"description": "Which key made it."})
    jws = f.StrictString(required=True, metadata={"description": "Detached JWS (RFC 7515)."})


class CharacteristicAnswer(f.AnswerShape):
    """What was measured."""

    name = f.StrictString(metadata={"description": "Name of the characteristic."})
    unit = f.StrictString(metadata={"description": "Unit of the values, as it is written."})


def _envelope(chart: Chart, characteristic: type, seal: type, *, kept: bool) -> dict[str, Any]:
    digest = {"description": "SHA-256 of the document's canonical form (RFC 8785) without digest and seal."}
    return {
        "chart": f.Choice(
            chart.name, required=True, metadata={"description": "The chart these limits are of."}
        ),
        "format": f.StrictInteger(
            required=True,
            metadata={"description": "Format of the document."},
            **({"least": 1} if kept else {}),
        ),
        "characteristic": f.Object(
            characteristic, required=True, metadata={"description": "What was measured."}
        ),
        "digest": f.StrictString(required=True, metadata=digest),
        "seal": f.Object(
            seal,
            required=True,
            allow_none=True,
            metadata={"description": "Null where the service has no key."},
        ),
    }


def _carry_frame(chart: Chart) -> dict[str, Any]:
    return {
        "chart": f.Choice(chart.name, required=True, metadata={"description": "The chart it belongs to."}),
        "limits": f.StrictString(
            required=True, metadata={"description": "Digest of the limits it belongs to."}
        ),
        "digest": f.StrictString(
            required=True, metadata={"description": "SHA-256 over the rest of the carry."}
        ),
    }


def _extend(base: Any, name: str, text: str, members: Mapping[str, Any]) -> Any:
    """A named shape of these members."""
    return type(name, (base,), {**members, "Meta": derive.meta(base, text)})


class Kept(tuple[str, Any]):
    """The digest and the limits of a document; beside them, what they are of."""

    characteristic: Mapping[str, Any]

    @classmethod
    def of(cls, digest: str, limits: Any, characteristic: Mapping[str, Any]) -> Kept:
        made = cls((digest, limits))
        made.characteristic = characteristic
        return made


class LimitsField(f.Object):
    """A limits document, checked against its digest and its seal; documents seen lately are kept parsed."""

    def __init__(self, chart: Chart, shape: type[f.RequestShape], seals: Seals, **kwargs: Any) -> None:
        super().__init__(shape, **kwargs)

        self._chart = chart
        self._seals = seals
        self._opened = lru_cache(1024)(lambda blob: self._open(orjson.loads(blob)))

    def _deserialize(  # type: ignore[override]
        self, value: Any, attr: str | None, data: Any, **kwargs: Any
    ) -> tuple[str, Any]:
        named = value.get("chart") if type(value) is dict else None
        if type(named) is str and named in CHARTS and named != self._chart.name:
            check_limits(self._chart.name, value)
        try:
            blob = orjson.dumps(value)
        except TypeError:  # half a character, or an integer beyond 64 bits
            return self._open(value)
        return self._opened(blob) if len(blob) <= LARGEST_KEPT else self._open(value)

    def _open(self, document: Any) -> tuple[str, Any]:
        try:
            loaded = super()._deserialize(document, None, None)
        except SpcError:  # no document of ours holds what its own objects refuse
            check_limits(self._chart.name, document)
            raise
        check_limits(self._chart.name, document)
        self._seals.check(document)
        return Kept.of(document["digest"], loaded, document["characteristic"])


class CarryField(f.Object):
    """A carry as it came with the last answer; loads to the document and the object of ``spc``."""

    def __init__(self, chart: Chart, shape: type[f.RequestShape], **kwargs: Any) -> None:
        super().__init__(shape, **kwargs)
        self._quick = quick.reader(chart.carry, _carry_frame(chart))

    def _deserialize(  # type: ignore[override]
        self, value: Any, attr: str | None, data: Any, **kwargs: Any
    ) -> tuple[dict[str, Any], Any]:
        try:
            if self._quick is not None:
                with suppress(quick.Irregular):
                    return value, self._quick(value)
            return value, super()._deserialize(value, attr, data, **kwargs)
        except SpcError:
            check_carry(value.get("chart"), value.get("limits"), value)
            raise


@dataclass(frozen=True, slots=True)
class Documents:
    """What reads the documents of a chart, wherever they are sent."""

    limits: LimitsField
    carry: CarryField


@cache
def documents_of(name: str, seals: Seals) -> Documents:
    """The fields that read limits documents, under these seals, and carries of the chart of this name."""
    chart = CHARTS[name]
    kept = derive.document(
        chart.limits,
        f"{chart.stem}LimitsDocument",
        "A limits document exactly as it was received.",
        _envelope(chart, Characteristic, Seal, kept=True),
    )
    carry = derive.document(
        chart.carry, f"{chart.stem}CarryDocument", "A carry exactly as it was received.", _carry_frame(chart)
    )
    return Documents(
        LimitsField(
            chart,
            kept,
            seals,
            required=True,
            metadata={"description": "The limits document, exactly as received."},
        ),
        CarryField(
            chart,
            carry,
            allow_none=True,
            load_default=None,
            metadata={"description": "As it came with the last answer; null or absent to start afresh."},
        ),
    )


# ---------------------------------------------------------------------------------------------------
# Shapes


def _judged(chart: Chart, panels: type) -> dict[str, Any]:
    members = {
        "verdict": f.Choice(
            "in-control",
            "signal",
            required=True,
            metadata={"description": f"`signal` where any signal asks for action. {VERDICT_NOTE}"},
        ),
        "panels": f.Object(
            panels, required=True, metadata={"description": "The plotted points, panel by panel."}
        ),
        "signals": f.ObjectList(
            SignalAnswer, required=True, metadata={"description": "In the order of the points."}
        ),
        "signals_found": f.StrictInteger(
            required=True, metadata={"description": "How many signals there are; the first 10000 are told."}
        ),
        "ids": f.StringList(min_items=0, metadata={"description": "Your names for the points, where given."}),
        "times": f.StringList(min_items=0, metadata={"description": "Their times, where given."}),
    }
    if chart.details is not None:
        members["details"] = f.Object(
            derive.answer(chart.details),
            required=True,
            allow_none=True,
            metadata={"description": "What this chart tells besides; null where there is nothing to tell."},
        )
    return members


def _shapes(chart: Chart, takes: ChartRequest, seals: Seals) -> tuple[Any, Any, Any, Any]:
    """The shapes of both operations: fit request and answer, judge request and answer."""
    stem, documents = chart.stem, documents_of(chart.name, seals)
    limits_answer = derive.answer(
        chart.limits,
        f"{stem}Limits",
        "Frozen limits. Keep the document beside the characteristic, and send it back as it is.",
        _envelope(chart, CharacteristicAnswer, SealAnswer, kept=False),
    )
    panels = derive.answer(chart.plotted)
    baseline = _extend(
        f.AnswerShape, f"{stem}Baseline", "The baseline judged by its own limits.", _judged(chart, panels)
    )
    fit_answer = _extend(
        f.AnswerShape,
        f"{stem}LimitsAnswer",
        "Limits to freeze, with the evidence for them.",
        {
            "limits": f.Object(
                limits_answer, required=True, metadata={"description": "The limits document."}
            ),
            "baseline": f.Object(
                baseline,
                required=True,
                allow_none=True,
                metadata={"description": "Null where limits come from standards alone."},
            ),
            "diagnostics": f.Object(
                derive.answer(chart.diagnostics),
                required=True,
                allow_none=True,
                metadata={"description": "What the baseline shows about itself; null without one."},
            ),
            "performance": f.Object(
                derive.answer(Performance),
                required=True,
                metadata={"description": "What limits and rules cost and buy."},
            ),
            "cautions": f.ObjectList(CautionAnswer, **CAUTIONS),
            "provenance": PROVENANCE,
        },
    )
    carry_answer = derive.answer(
        chart.carry,
        f"{stem}Carry",
        "What the next call needs to remember. Send it back as it is, with the next data.",
        _carry_frame(chart),
    )
    judge_request = _extend(
        f.RequestShape,
        f"{stem}Judge",
        "New data under frozen limits.",
        {
            "limits": documents.limits,
            "data": f.Object(
                takes.data, required=True, metadata={"description": "The new data, in time order."}
            ),
            "carry": documents.carry,
        },
    )
    judge_answer = _extend(
        f.AnswerShape,
        f"{stem}SignalsAnswer",
        "New data judged by frozen limits.",
        {
            **_judged(chart, panels),
            "carry": f.Object(
                carry_answer, required=True, metadata={"description": "Send it with the next data."}
            ),
            "cautions": f.ObjectList(CautionAnswer, **CAUTIONS),
            "provenance": PROVENANCE,
        },
    )
    return takes.fit(), fit_answer(), judge_request(), judge_answer()


# ---------------------------------------------------------------------------------------------------
# Views


def labelled(found: Sequence[Signal], labels: Mapping[str, Sequence[str]]) -> list[dict[str, Any]]:
    """Signals with the caller's own name and time of their point."""
    ids, times = labels.get("ids"), labels.get("times")
    return [
        {
            "rule": signal.rule,
            "form": signal.form,
            "panel": signal.panel,
            "index": signal.index,
            "side": signal.side,
            "points": signal.points,
            "severity": signal.severity,
            "sentence": signal.sentence,
            "id": None if ids is None else ids[signal.index],
            "time": None if times is None else times[signal.index],
        }
        for signal in found
    ]


def besides(chart: Chart, judged: Any) -> dict[str, Any]:
    """What this chart alone tells."""
    return {} if chart.details is None else {"details": judged.details}


def fitted(chart: Chart, takes: ChartRequest, loaded: dict[str, Any]) -> Any:
    """The chart's own result of a fit."""
    posted = loaded.get("data")
    return chart.fit(None if posted is None else takes.read(posted), takes.options(loaded))


def carried(chart: Chart, loaded: dict[str, Any]) -> Any:
    """The carry that came with the limits it belongs to, if any. Raises DocumentMismatch."""
    if loaded["carry"] is None:
        return None
    document, carry = loaded["carry"]
    check_carry(chart.name, loaded["limits"][0], document)
    return carry


def judged(chart: Chart, takes: ChartRequest, loaded: dict[str, Any]) -> Any:
    """The chart's own judgement of new data."""
    carry = carried(chart, loaded)
    return judgement(chart, loaded["limits"][1], takes.read(loaded["data"]), carry)


def judgement(chart: Chart, limits: Any, data: Any, carry: Any) -> Any:
    """The same, of what is read already."""
    try:
        return chart.judge(limits, data, carry)
    except _ARITHMETIC as error:
        # Documents of ours never lead here; one made by hand, with a digest of its own, may.
        raise DocumentMismatch.of(
            "document-not-usable",
            "These limits, or this carry, hold numbers that the chart cannot be computed with. Send both exactly as "
            "they were received, or fit new limits.",
            "limits",
        ) from error


def fit(chart: Chart, takes: ChartRequest, seals: Seals, loaded: dict[str, Any]) -> dict[str, Any]:
    """Limits from a baseline, or from standards."""
    posted = loaded.get("data")
    result = fitted(chart, takes, loaded)
    baseline = result.baseline
    labels = {} if posted is None else labels_of(posted)
    return {
        "limits": written(
            seals.sealed(limits_document(chart.name, result.limits, loaded.get("characteristic")))
        ),
        "baseline": None
        if baseline is None
        else {
            "verdict": baseline.verdict,
            "panels": baseline.panels,
            "signals": labelled(baseline.signals, labels),
            "signals_found": baseline.signals_found,
            **labels,
            **besides(chart, baseline),
        },
        "diagnostics": result.diagnostics,
        "performance": result.performance,
        "cautions": cautions(result.cautions),
    }


def judge(chart: Chart, takes: ChartRequest, loaded: dict[str, Any]) -> dict[str, Any]:
    """New data under frozen limits."""
    digest, _ = loaded["limits"]
    result = judged(chart, takes, loaded)
    labels = labels_of(loaded["data"])
    return {
        "verdict": result.verdict,
        "panels": result.panels,
        "signals": labelled(result.signals, labels),
        "signals_found": result.signals_found,
        **labels,
        **besides(chart, result),
        "carry": written(carry_document(chart.name, digest, result.carry)),
        "cautions": cautions(result.cautions),
    }


def explain_fit(
    chart: Chart, takes: ChartRequest, loaded: dict[str, Any], answer: Mapping[str, Any]
) -> tuple[Step, ...]:
    """The worked steps of a fit."""
    posted = loaded.get("data")
    data, options = None if posted is None else takes.read(posted), takes.options(loaded)
    return worked.of_fit(chart.name, data, options, chart.fit(data, options))


def explain_judge(
    chart: Chart, takes: ChartRequest, loaded: dict[str, Any], answer: Mapping[str, Any]
) -> tuple[Step, ...]:
    """The worked steps of a judgement."""
    _, limits = loaded["limits"]
    carry = None if loaded["carry"] is None else loaded["carry"][1]
    return worked.of_judgement(
        chart.name, limits, takes.read(loaded["data"]), carry, judged(chart, takes, loaded)
    )


_ARITHMETIC = (ArithmeticError, ValueError, IndexError, KeyError, TypeError, AssertionError, RuntimeWarning)


# ---------------------------------------------------------------------------------------------------
# Routes


def _examples(stem: str) -> tuple[str, ...]:
    """The chart's example, and those of its options beside it."""
    more = examples_directory().glob(f"{stem}-*.request.json")
    return (stem, *sorted(path.name.removesuffix(".request.json") for path in more))


def register(contract: Contract) -> None:
    """Binds both operations of every chart in the registry."""
    contract.tag(TAG, "Limits from a baseline, and signals on new data under frozen limits. " + VERDICT_NOTE)
    for chart in CHARTS.values():
        takes = request_of(chart.name)
        fit_request, fit_answer, judge_request, judge_answer = _shapes(chart, takes, contract.seals)
        contract.operation(
            "POST",
            f"/v1/charts/{chart.name}/limits",
            operation_id=f"fit{chart.stem}Limits",
            tag=TAG,
            summary=f"Limits: {chart.title[0].lower()}{chart.title[1:]} ({chart.name})",
            description=f"{chart.purpose} Takes: {chart.takes} Beware: {chart.beware} The answer holds a limits "
            "document to freeze, the baseline judged by its own limits, diagnostics, the run lengths of the "
            f"rules chosen, and cautions. Sources: {', '.join(chart.references)}.",
            request=fit_request,
            response=fit_answer,
            problems=(problems.NOT_COMPUTABLE,),
            example=_examples(f"{chart.name}-limits"),
            links={
                f"judge{chart.stem}": {
                    "operationId": f"judge{chart.stem}",
                    "description": "The limits document goes, as it is, into the member `limits`.",
                    "x-request-body": {"limits": "$response.body#/limits"},
                }
            },
            provenance=chart.name,
            explain=partial(explain_fit, chart, takes),
        )(partial(fit, chart, takes, contract.seals))
        contract.operation(
            "POST",
            f"/v1/charts/{chart.name}/signals",
            operation_id=f"judge{chart.stem}",
            tag=TAG,
            summary=f"Signals: {chart.title[0].lower()}{chart.title[1:]} ({chart.name})",
            description="Judges new data by a limits document, continuing where the carry left off: judging in "
            "one call, or in any split with the carry passed on, gives the same signals. A signal's points "
            f"below 0 lie in earlier calls. {VERDICT_NOTE}",
            request=judge_request,
            response=judge_answer,
            problems=(problems.NOT_COMPUTABLE, problems.DOCUMENT_MISMATCH),
            example=_examples(f"{chart.name}-signals"),
            links={
                f"continue{chart.stem}": {
                    "operationId": f"judge{chart.stem}",
                    "description": "The carry goes, as it is, beside the next data under the same limits.",
                    "x-request-body": {"limits": "$request.body#/limits", "carry": "$response.body#/carry"},
                }
            },
            provenance=chart.name,
            explain=partial(explain_judge, chart, takes),
        )(partial(judge, chart, takes))
