"""Shapes that several operations share."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from typing import Any
from urllib.parse import quote

import marshmallow as ma

from ...spc.cautions import Caution
from ...spc.errors import Fault, SpcError, UnusableParameter, Where
from ...spc.rules import FARTHEST_DISTANCE, LONGEST_WINDOW, MOST_RULES, PUBLISHED, Rule, Signal
from .. import fields as f
from ..contract import Provenance
from . import derive


class Characteristic(f.RequestShape):
    """What was measured. It is kept in the limits document and changes no number."""

    name = f.StrictString(metadata={"description": "Name of the characteristic."})
    unit = f.StrictString(max_length=40, metadata={"description": "Unit of the values, as it is written."})


class AsItIs(f.RequestShape):
    """An object that is not closed here and loads as it came: its frame is checked now, all of it later."""

    class Meta:
        unknown = ma.INCLUDE

    def load(self, data: Any, **kwargs: Any) -> Any:
        known = self.load_fields
        super().load({name: data[name] for name in known if name in data} if type(data) is dict else data)
        return data


class CautionAnswer(f.AnswerShape):
    """Something a qualified person should know about the answer. It changes no number."""

    code = f.StrictString(required=True, metadata={"description": "Stable; for programs."})
    sentence = f.StrictString(required=True, metadata={"description": "What was found, and what to do."})
    pointer = f.StrictString(
        required=True,
        metadata={"description": "The place in the request it is about: a JSON Pointer fragment."},
    )
    reference = f.StrictString(
        required=True,
        metadata={"description": "Key of the source in `GET /v1/methods`, or `common practice`."},
    )


class SignalAnswer(derive.answer(Signal)):  # type: ignore[misc]
    """A rule that is met: at which point, and what it says."""

    id = f.StrictString(
        allow_none=True, required=True, metadata={"description": "Your name for the point, if any."}
    )
    time = f.StrictString(
        allow_none=True, required=True, metadata={"description": "Its time, if you gave one."}
    )


def cautions(found: Iterable[Caution]) -> list[dict[str, str]]:
    """Cautions as answers tell them."""
    return [
        {
            "code": caution.code,
            "sentence": caution.sentence,
            "pointer": "#" + "".join(f"/{quote(str(step))}" for step in caution.where),
            "reference": caution.reference,
        }
        for caution in found
    ]


CAUTIONS: dict[str, Any] = {
    "required": True,
    "metadata": {"description": "What a qualified person should know about this answer; often empty."},
}
PROVENANCE = f.Object(Provenance, required=True, metadata={"description": "What computed this answer."})


@contextmanager
def located(**places: Where) -> Iterator[None]:
    """Puts faults where the caller wrote what they are about: an argument's name becomes its place."""
    try:
        yield
    except SpcError as error:
        raise type(error)(
            *(
                Fault(
                    fault.code,
                    fault.detail,
                    (*places.get(str(fault.where[0]), fault.where[:1]), *fault.where[1:])
                    if fault.where
                    else (),
                )
                for fault in error.faults
            )
        ) from error


class RuleRequest(f.RequestShape):
    """A rule of one of the five forms."""

    form = f.Choice(
        "zone",
        "mixture",
        "stratification",
        "trend",
        "alternation",
        required=True,
        metadata={
            "description": "`zone`: points of the last window beyond a distance on one side. `mixture`: the same "
            "on either side. `stratification`: all within a distance. `trend`: steadily rising or falling. "
            "`alternation`: alternately up and down."
        },
    )
    points = f.StrictInteger(
        required=True,
        least=1,
        most=LONGEST_WINDOW,
        metadata={"description": "Points that must show it; the window itself but for `zone` and `mixture`."},
    )
    window = f.StrictInteger(
        required=True, least=1, most=LONGEST_WINDOW, metadata={"description": "Points looked at."}
    )
    distance = f.StrictNumber(
        load_default=None,
        allow_none=True,
        least=0,
        most=FARTHEST_DISTANCE,
        metadata={
            "description": "In standard deviations of the plotted statistic: beyond it for `zone` and `mixture`, "
            "within it for `stratification`; none for `trend` and `alternation`."
        },
    )
    severity = f.Choice(
        "action",
        "warning",
        load_default="action",
        metadata={"description": "A `warning` is told and leaves the verdict as it is."},
    )


class RulesRequest(f.RequestShape):
    """The rules to watch. The control limits are always watched."""

    published = f.Choice(
        *PUBLISHED, metadata={"description": "A published set, by author and year; see `GET /v1/rules`."}
    )
    own = f.ObjectList(
        RuleRequest, max_items=MOST_RULES, metadata={"description": "Rules of your own, besides."}
    )


def rules_of(loaded: dict[str, Any] | None, *place: str) -> tuple[Rule, ...]:
    """The rules asked for at ``place`` (``rules``). Raises UnusableParameter with the place of each fault."""
    place = place or ("rules",)
    if not loaded:
        return ()
    rules: list[Rule] = []
    if "published" in loaded:
        rules.extend(PUBLISHED[loaded["published"]].rules)
    faults: list[Fault] = []
    for at, one in enumerate(loaded.get("own", ())):
        try:
            rules.append(Rule(**one))
        except SpcError as error:
            faults.extend(
                Fault(fault.code, fault.detail, (*place, "own", at, *fault.where)) for fault in error.faults
            )
    if len(rules) > MOST_RULES and not faults:
        faults.append(
            Fault("too-many-rules", f"At most {MOST_RULES} rules are watched at once.", (*place, "own"))
        )
    if faults:
        raise UnusableParameter(*faults)
    return tuple(rules)


class ExclusionRequest(f.RequestShape):
    """A baseline point to leave out of the estimates. It stays in the record with its reason."""

    index = f.StrictInteger(
        required=True, least=0, metadata={"description": "Position of the point in the data, from 0."}
    )
    reason = f.StrictString(
        required=True, min_length=1, metadata={"description": "The assignable cause that was found."}
    )


def check_labels(loaded: dict[str, Any], points: int) -> list[Fault]:
    """The faults of ids or times that are not as many as the points."""
    return [
        Fault(
            "unequal-length",
            f"There are {len(loaded[name])} {name} for {points} points; give one for each.",
            ("data", name),
        )
        for name in ("ids", "times")
        if name in loaded and len(loaded[name]) != points
    ]


IDS: dict[str, Any] = {
    "metadata": {"description": "Your name for each point; comes back with the points and signals."}
}
TIMES: dict[str, Any] = {
    "metadata": {"description": "When each point was made (RFC 3339); comes back likewise."}
}


def labels_of(loaded: dict[str, Any]) -> dict[str, Sequence[str]]:
    """The ids and times that were given, as answers return them."""
    return {name: loaded[name] for name in ("ids", "times") if name in loaded}
