"""Estimates with their intervals, one a row, on one scale."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from . import scale, svg
from .svg import EDGE, LEFT, RIGHT, SOFT, Paper
from .text import clean, cut, width

HIGH = 19.0
_SMALL = 11.0


@dataclass(frozen=True, slots=True)
class Row:
    """An estimate, its interval where there is one, and the same as it is written.

    value: ``None`` where there is no estimate, and only words. indent: how deep it stands under the row above.
    """

    name: str
    value: float | None
    lower: float | None
    upper: float | None
    written: str
    indent: int = 0


def draw(
    paper: Paper,
    rows: Sequence[Row],
    y: float,
    to_x: scale.Linear,
    *,
    tick: str = "",
    marks: Sequence[float] = (),
) -> float:
    """Rows below ``y``, a scale under them; ends beyond the scale are arrows. Returns where they end.

    tick: what follows a number under the scale; marks: places of a dashed hairline through all rows.
    """
    top = y
    body = Paper()
    for row in rows:
        y += HIGH
        left = LEFT + 8 + 12 * row.indent
        body.text(left, y, cut(clean(row.name), 12, to_x.start - left - 8))
        written = row.written
        body.text(RIGHT, y, written, anchor="end")
        if row.value is None:
            continue
        at = to_x(min(max(row.value, to_x.low), to_x.high))
        for end, tip in ((row.lower, 1), (row.upper, -1)):
            if end is None:
                continue
            beyond = end < to_x.low or end > to_x.high
            here = to_x(min(max(end, to_x.low), to_x.high))
            sign = f"m{4 * tip} -4l{-4 * tip} 4l{4 * tip} 4" if beyond else "m0 -4v8"
            body.path(f"M{at:.1f} {y - 4:.1f}H{here:.1f}{sign}", stroke=SOFT, width=1.2)
        body.add(svg.dots([(at, y - 4)], 3))
    bottom = y + 6
    for mark in marks:
        if to_x.low <= mark <= to_x.high:
            here = to_x(mark)
            paper.line(here, top + 6, here, bottom, stroke=SOFT, width=0.8, more=' stroke-dasharray="5 4"')
    last = -1e9
    found = scale.ticks(to_x.low, to_x.high, 6)
    for number in found:
        here, text = to_x(number), f"{number:g}{tick}".replace("-", "\u2212")
        half = width(text, _SMALL) / 2
        paper.line(here, bottom, here, bottom + 4, stroke=EDGE, width=0.8)
        if here - half > last + 6:
            last = here + half
            paper.text(here, bottom + 16, text, size=_SMALL, anchor="middle", colour=SOFT)
    paper.line(to_x.start, bottom, to_x.end, bottom, stroke=EDGE, width=0.8)
    paper.add("".join(body.elements))
    return bottom + 22
