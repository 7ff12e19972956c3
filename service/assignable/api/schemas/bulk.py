"""The lines of bulk requests and of their answers."""

from __future__ import annotations

from .. import fields as f
from ..contract import ProblemDetails
from .common import CAUTIONS, AsItIs, CautionAnswer, SignalAnswer
from .release import AnyCarry, AnyCarryDocument, AnyLimitsDocument

_NUMBER = f.StrictInteger(
    required=True, metadata={"description": "Number of the line that is answered, from 1."}
)
_STATUS = f.StrictInteger(
    required=True,
    metadata={"description": "200, or the status of the problem: as a request by itself would have it."},
)
_PROBLEM = f.Object(
    ProblemDetails,
    metadata={"description": "Where the status is not 200. Its pointers lead into the line."},
)
_CHARACTERISTIC = {
    "description": "Your name for the characteristic within this stream, such as the key of its record."
}


class OperationRequest(AsItIs):
    """The request of an operation, whichever it is: its members are those of that operation's own."""


class OperationAnswer(f.AnswerShape):
    """The answer of an operation, whichever it is: its members are those of that operation's own."""


class ChartData(AsItIs):
    """New data of a chart, whichever it is: its members are those of that chart's own `data`."""


class ChartDetails(f.AnswerShape):
    """What a chart tells besides: its members are those of that chart's own `details`."""


class BulkLine(f.RequestShape):
    """A line asked: one request of any other operation."""

    operation = f.StrictString(
        required=True, metadata={"description": "The operation's id, such as `judgeXbarR`."}
    )
    id = f.StrictString(
        metadata={"description": "Your name for the line; it comes back with the answer."},
        load_default=None,
        allow_none=True,
    )
    body = f.Object(
        OperationRequest,
        load_default=None,
        allow_none=True,
        metadata={
            "description": "The operation's own request; of an operation by GET the parameters of its query, if any."
        },
    )


class BulkAnswer(f.AnswerShape):
    """A line answered."""

    line = _NUMBER
    id = f.StrictString(
        required=True, allow_none=True, metadata={"description": "Your name for the line, if any."}
    )
    status = _STATUS
    answer = f.Object(
        OperationAnswer,
        metadata={
            "description": "Where the status is 200. A picture is a text instead. The request's digest is of the line."
        },
    )
    problem = _PROBLEM


class BulkSummary(f.AnswerShape):
    """The last line: without it the answer was cut off."""

    done = f.StrictBoolean(
        required=True,
        metadata={"description": "Whether all lines were read; false where the body broke off."},
    )
    lines = f.StrictInteger(required=True, metadata={"description": "Lines read, blank ones aside."})
    answered = f.StrictInteger(required=True, metadata={"description": "Lines answered with status 200."})
    problems = f.StrictInteger(required=True, metadata={"description": "Lines answered with a problem."})
    problem = f.Object(
        ProblemDetails, metadata={"description": "Why the body could not be read on, where done is false."}
    )


class SeriesOpening(f.RequestShape):
    """A line asked that opens a characteristic: its limits, and the carry it goes on from."""

    characteristic = f.StrictString(required=True, min_length=1, metadata=_CHARACTERISTIC)
    limits = f.Object(
        AnyLimitsDocument,
        required=True,
        metadata={"description": "The limits document, exactly as received; of any chart."},
    )
    carry = f.Object(
        AnyCarryDocument,
        allow_none=True,
        load_default=None,
        metadata={"description": "As it came with the last answer; null or absent to start afresh."},
    )


class SeriesData(f.RequestShape):
    """A line asked that brings new data of a characteristic opened before."""

    characteristic = f.StrictString(required=True, min_length=1, metadata=_CHARACTERISTIC)
    data = f.Object(
        ChartData,
        required=True,
        metadata={"description": "The new data, in the shape of the chart's own operation for signals."},
    )
    return_carry = f.StrictBoolean(
        load_default=False,
        metadata={
            "description": "True answers the carry after this line; each is told at the end in any case."
        },
    )


class SeriesOpened(f.AnswerShape):
    """A line answered: the characteristic is open."""

    line = _NUMBER
    characteristic = f.StrictString(required=True, metadata=_CHARACTERISTIC)
    status = _STATUS
    opened = f.StrictString(metadata={"description": "The chart that judges its data."})
    problem = _PROBLEM


class SeriesJudged(f.AnswerShape):
    """A line answered: the judgement of its data."""

    line = _NUMBER
    characteristic = f.StrictString(required=True, allow_none=True, metadata=_CHARACTERISTIC)
    status = _STATUS
    verdict = f.Choice(
        "in-control", "signal", metadata={"description": "`signal` where any signal asks for action."}
    )
    signals = f.ObjectList(
        SignalAnswer,
        metadata={"description": "In the order of the points; indices are positions in this line's data."},
    )
    signals_found = f.StrictInteger(
        metadata={"description": "How many signals there are; the first 10000 are told."}
    )
    cautions = f.ObjectList(CautionAnswer, metadata=CAUTIONS["metadata"])
    details = f.Object(
        ChartDetails,
        allow_none=True,
        metadata={"description": "What some charts tell besides, as in their own answers."},
    )
    carry = f.Object(AnyCarry, metadata={"description": "Where the line asked for it."})
    problem = _PROBLEM


class SeriesCarry(f.AnswerShape):
    """A line at the end for each characteristic: what its next call needs to remember."""

    characteristic = f.StrictString(required=True, metadata=_CHARACTERISTIC)
    carry = f.Object(
        AnyCarry,
        required=True,
        allow_none=True,
        metadata={
            "description": "Send it with the next data; null where no data was judged and none was given."
        },
    )
