"""Bias of a gauge along its range: against the reference, with the line and its band."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..spc.data import Floats
from ..spc.studies.bias import BiasStudy, band
from . import scale, svg, thin
from .svg import AMBER, BAND, EDGE, INK, LEFT, RIGHT, SOFT, Paper
from .text import Figures, clean, counted, cut, minus, width, wrap

_SMALL = 11.0
_LOW, _HIGH = LEFT + 6, RIGHT - 74
_ROW = 18.0
_MOST_ROWS = 24


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Biased:
    """What a picture of a bias study shows; values: those of each level, in the study's order."""

    name: str | None
    unit: str | None
    study: BiasStudy
    values: Sequence[Floats]
    cautions: Sequence[str] = ()


def draw(biased: Biased) -> str:
    """The picture of a bias study, as SVG."""
    paper, study = Paper(), biased.study
    name, unit = clean(biased.name or "") or "Bias of a gauge", clean(biased.unit or "")
    title = f"{name} ({unit})" if unit else name
    paper.text(LEFT, 30, cut(title, 16, RIGHT - LEFT), size=16, bold=True)
    count = sum(level.size for level in study.levels)
    what = (
        f"Bias of the gauge · {counted(len(study.levels), 'reference part')}, {counted(count, 'measurement')}"
    )
    paper.text(LEFT, 50, what, colour=SOFT)
    verdict = _verdict(study)
    y = 72.0
    for line in wrap(verdict, 13, RIGHT - LEFT):
        paper.text(LEFT, y, line, size=13, bold=True)
        y += 18
    told = [f"{title}. {what}. {verdict}"]
    y = _field(paper, biased, y + 10)
    y = _levels(paper, study, y + 26, told)
    if biased.cautions:
        note = f"{counted(len(biased.cautions), 'caution')} with this answer: {', '.join(biased.cautions)}."
        y = paper.lines(LEFT, y + 22, wrap(note, _SMALL, RIGHT - LEFT), size=_SMALL, colour=SOFT) - 15
    return paper.finish(y + 16, f"{title}: bias", " ".join(told))


def _apart(lower: float | None, upper: float | None) -> bool:
    """Whether an interval leaves out zero."""
    return lower is not None and upper is not None and (lower > 0 or upper < 0)


def _interval(estimate: float, lower: float | None, upper: float | None) -> str:
    low, high = ("…" if end is None else minus(f"{end:.3g}") for end in (lower, upper))
    return f"{minus(f'{estimate:.3g}')} ({low} to {high})"


def _verdict(study: BiasStudy) -> str:
    off = sum(_apart(level.lower, level.upper) for level in study.levels)
    judged = sum(level.lower is not None for level in study.levels)
    words = f"Bias differs from zero at {off} of {counted(judged, 'reference part')}" if judged else ""
    if not judged:
        words = (
            f"Mean bias {minus(f'{study.mean_bias:.3g}')}; no part was measured often enough for an interval"
        )
    if (line := study.linearity) is not None:
        slope = line.slope
        changes = "changes" if _apart(slope.lower, slope.upper) else "shows no change"
        words += f"; it {changes} along the range: {_interval(slope.estimate, slope.lower, slope.upper)} for each unit"
    return f"{words}."


def _field(paper: Paper, biased: Biased, top: float) -> float:
    """Every measurement less its reference, the levels' means with intervals, the line, its band, and zero."""
    study = biased.study
    bottom = top + 230
    at = np.array([level.reference for level in study.levels])
    low, high = float(at.min()), float(at.max())
    air = (high - low) * 0.06 or abs(low) * 0.05 or 1.0
    to_x = scale.Linear(low - air, high + air, _LOW, _HIGH)
    single = [values - level.reference for values, level in zip(biased.values, study.levels, strict=True)]
    ends = [0.0] + [float(edge) for each in single for edge in (each.min(), each.max())]
    ends += [end for level in study.levels for end in (level.lower, level.upper) if end is not None]
    ends = [end for end in ends if abs(end) < 1e300]
    spread = max(float(np.ptp(np.concatenate(single))), max(abs(one.bias) for one in study.levels))
    # An interval of two or three measurements may be so wide that it would hide everything else.
    ends = [min(max(end, -4 * spread), 4 * spread) for end in ends] if spread > 0 else ends
    found = None
    if study.linearity is not None:
        grid = np.linspace(low, high, 61)
        found = grid, *band(study, grid)
        ends += [float(found[2].min()), float(found[3].max())]
    to_y = scale.Linear(*scale.around(ends), bottom, top)
    figures = Figures(ends)
    if found is not None:
        grid, line, lower, upper = found
        x = to_x(grid).tolist()
        over, under, middle = (to_y(each).tolist() for each in (upper, lower, line))
        edge_over, edge_under = (
            "L".join(f"{a:.1f} {b:.1f}" for a, b in zip(x, each, strict=True)) for each in (over, under)
        )
        back = "L".join(f"{a:.1f} {b:.1f}" for a, b in zip(reversed(x), reversed(under), strict=True))
        paper.path(f"M{edge_over}L{back}z", fill=BAND, width=0)
        paper.path(f"M{edge_over}M{edge_under}", stroke=EDGE, width=1)
        paper.line(x[0], middle[0], x[-1], middle[-1], stroke=INK, width=1.3)
    zero = to_y(0.0)
    paper.line(_LOW, zero, _HIGH, zero, stroke=SOFT, width=0.8, more=' stroke-dasharray="5 4"')
    paper.text(_HIGH + 6, zero + 4, "0", size=_SMALL, colour=SOFT)
    for number, text in zip((ticks := scale.ticks(to_y.low, to_y.high, 6)), figures.even(ticks), strict=True):
        here = to_y(number)
        if abs(here - zero) > 12:
            paper.line(_HIGH, here, _HIGH + 4, here, stroke=EDGE, width=0.8)
            paper.text(_HIGH + 6, here + 4, text, size=_SMALL, colour=SOFT)
    wide = min(6.0, 0.25 * (_HIGH - _LOW) / len(study.levels))
    points = [
        (to_x(level.reference) - wide - 3, float(y))
        for level, each in zip(study.levels, single, strict=True)
        for y in to_y(each).tolist()
    ]
    if len(points) > 1500:
        x_all, y_all = np.array(points).T
        points = [points[each] for each in thin.apart(x_all, y_all, 2.0).tolist()]
    paper.add(svg.dots(points, 1.4))
    means, off = [], []
    for level in study.levels:
        here = to_x(level.reference), to_y(level.bias)
        if level.lower is not None and level.upper is not None:
            up, down = (min(max(to_y(end), top), bottom) for end in (level.upper, level.lower))
            paper.path(
                f"M{here[0]:.1f} {up:.1f}V{down:.1f}M{here[0] - 4:.1f} {up:.1f}h8M{here[0] - 4:.1f} {down:.1f}h8",
                stroke=SOFT,
                width=1.2,
            )
        means.append(here)
        if _apart(level.lower, level.upper):
            off.append(here)
    paper.add(svg.dots(means, 3.2))
    if off:
        paper.add(svg.rings(off))
    paper.path(
        f"M{_LOW:.1f} {bottom:.1f}H{_HIGH:.1f}M{_HIGH:.1f} {top:.1f}V{bottom:.1f}", stroke=EDGE, width=0.8
    )
    references = Figures(at.tolist())
    found_ticks = scale.ticks(to_x.low, to_x.high, 7)
    for number, text in zip(found_ticks, references.even(found_ticks), strict=True):
        here = to_x(number)
        paper.line(here, bottom, here, bottom + 4, stroke=EDGE, width=0.8)
        half = width(text, _SMALL) / 2
        if LEFT + half <= here <= RIGHT - half:
            paper.text(here, bottom + 17, text, size=_SMALL, anchor="middle", colour=SOFT)
    y = bottom + 34
    paper.text(_LOW, y, "reference value; up the side, measurement less reference", size=_SMALL, colour=SOFT)
    return _key(paper, study, y + 20, off=bool(off))


def _key(paper: Paper, study: BiasStudy, y: float, *, off: bool) -> float:
    x = LEFT
    confidence = f"{100 * study.confidence:g} %"
    entries = [("point", "one measurement"), ("mean", f"mean of a part, {confidence} interval")]
    if study.linearity is not None:
        entries.append(("band", f"line of bias, {confidence} band"))
    if off:
        entries.append(("off", "differs from zero"))
    for sign, words in entries:
        if x > LEFT and x + 23 + width(words, _SMALL) > RIGHT:
            x, y = LEFT, y + 17
        if sign == "band":
            paper.rect(x, y - 9, 17, 10, fill=BAND, more=f' stroke="{EDGE}" stroke-width="0.8"')
            paper.line(x, y - 4, x + 17, y - 4, stroke=INK, width=1.3)
        elif sign == "off":
            paper.path(f"M{x + 2:.1f} {y - 4:.1f}a6 6 0 1 0 12 0a6 6 0 1 0 -12 0z", stroke=AMBER, width=1.9)
        else:
            paper.add(svg.dots([(x + 8, y - 4)], 1.4 if sign == "point" else 3.2))
        paper.text(x + 23, y, words, size=_SMALL, colour=SOFT)
        x += 37 + width(words, _SMALL)
    return y


def _levels(paper: Paper, study: BiasStudy, y: float, told: list[str]) -> float:
    """Each part in figures."""
    shown = study.levels[:_MOST_ROWS]
    columns = LEFT + 8, LEFT + 190, LEFT + 300, RIGHT
    heads = "part", "reference", "measurements", f"bias ({100 * study.confidence:g} % interval)"
    for x, head in zip(columns, heads, strict=True):
        paper.text(x, y, head, size=_SMALL, anchor="end" if x == RIGHT else "start", colour=SOFT)
    for at, level in enumerate(shown):
        y += _ROW
        part = clean(level.part or "") or f"part {at + 1}"
        interval = _interval(level.bias, level.lower, level.upper)
        written = part, minus(f"{level.reference:.6g}"), f"{level.size:,}"
        for x, text in zip(columns[:-1], written, strict=False):
            paper.text(x, y, cut(text, 12, 170))
        paper.text(RIGHT, y, interval, anchor="end", bold=_apart(level.lower, level.upper))
        told.append(f"{part}, reference {written[1]}: bias {interval}.")
    if more := len(study.levels) - len(shown):
        y += _ROW
        paper.text(LEFT + 8, y, f"And {counted(more, 'part')} more, drawn above.", colour=SOFT)
    return y
