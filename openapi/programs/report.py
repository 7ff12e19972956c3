"""The page about a batch that a chemist reads and signs."""

from __future__ import annotations

import json
import os
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

SENTENCE = "A verdict informs a qualified person's decision and never replaces the site's approved procedure."


@dataclass(frozen=True)
class Entry:
    """A disposition in the trail: the results as they were written, the request as it was sent, and the answer."""

    number: int
    batch: str
    checked_at: str
    again: str | None
    disposition: str
    written: str
    request: str
    request_digest: str
    answer: str
    request_id: str


def report_of(entry: Entry) -> str:
    """An entry as a page to read and to sign."""
    written, request, answer = (json.loads(text) for text in (entry.written, entry.request, entry.answer))
    made = answer["provenance"]
    lines = [
        f"BATCH {entry.batch}: {entry.disposition.replace('-', ' ').upper()}",
        "",
        f"Entry {entry.number} of the trail, checked {entry.checked_at}",
        *([f"Checked again: {entry.again}"] if entry.again else []),
        "",
        answer["note"],
        SENTENCE,
    ]
    for asked, one in zip(request["characteristics"], answer["characteristics"], strict=True):
        unit = f", {one['unit']}" if one["unit"] else ""
        lines += ["", f"{one['name']}{unit}: {one['disposition'].replace('-', ' ')}"]
        facts = [
            ("specification", _range(asked["specification"])),
            ("results", "  ".join(text or "missing" for text in written[one["name"]])),
            ("compared", "  ".join(_compared(asked, one))),
            ("acceptance", _range(one["acceptance"] or {})),
        ]
        if one["trend"] is not None:
            limits = asked["trend"]["limits"]
            sealed = f"sealed by {limits['seal']['key_id']}" if limits["seal"] else "not sealed"
            facts += [("chart", f"{limits['chart']}, {one['trend']['verdict']}")]
            facts += [("limits", f"{limits['digest']}, {sealed}")]
        lines += [f"  {name:<14}{said}" for name, said in facts if said]
        lines += [f"  * {reason['severity']}: {reason['sentence']}" for reason in one["reasons"]]
    lines += ["", *(f"Caution: {one['sentence']} ({one['pointer']})" for one in answer["cautions"])]
    lines += [
        f"Computed by {made['service']} {made['version']}, contract {made['contract']}, method {made['method']}",
        f"Request {entry.request_digest}",
        f"Request id {entry.request_id}",
        "",
        "Decision:   [ ] released   [ ] rejected   [ ] to be investigated",
        "",
        "Name, date, signature: ____________________________________________",
    ]
    return "\n".join(lines) + "\n"


def _compared(asked: Mapping[str, Any], one: Mapping[str, Any]) -> Iterator[str]:
    """The values that met the specification, with the places they were rounded to."""
    places = max(0, asked["rounding"]["decimals"]) if "rounding" in asked else None
    for at, value in enumerate(one["compared"]["value"]):
        text = f"{value:.10g}" if places is None else f"{value:.{places}f}"
        yield f"<{text}" if at in one["compared"]["below"] else text


def _range(bounds: Mapping[str, Any]) -> str:
    lower, upper = bounds.get("lower"), bounds.get("upper")
    if lower is None or upper is None:
        return (
            "" if lower is upper else f"at least {lower:.10g}" if upper is None else f"at most {upper:.10g}"
        )
    return f"{lower:.10g} to {upper:.10g}"


def write_report(folder: Path, entry: Entry) -> Path:
    """Writes the page, in one step; whatever is there for this entry already is replaced by the same."""
    folder.mkdir(parents=True, exist_ok=True)
    file = folder / f"{entry.number:05d}-{re.sub(r'[^A-Za-z0-9.-]', '_', entry.batch)}.txt"
    unfinished = file.with_suffix(".part")
    unfinished.write_text(report_of(entry), encoding="utf-8")
    os.replace(unfinished, file)
    return file
