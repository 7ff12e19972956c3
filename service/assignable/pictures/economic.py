"""The sampling plan of least cost: how the cost lies around it, and what other sizes would cost."""

from __future__ import annotations

from itertools import pairwise

import numpy as np

from ..spc.data import Booleans, Floats
from ..spc.design.economic import EconomicDesign, Neighbourhood, PricedPlan, SizeOptimum
from . import contours, scale, svg
from .svg import BAND, EDGE, INK, LEFT, RIGHT, SOFT, Paper
from .text import clean, counted, cut, minus, width, wrap

_SMALL = 11.0
_LOW, _HIGH = LEFT + 46, RIGHT - 18
_NEAR = "#c3d2de"
_BARRED = ' fill-opacity="0.08"'
_HATCH = 7.0
_DASHED = ' stroke-dasharray="5 4"'
_DOTTED = ' stroke-dasharray="1.5 3.5"'
_FLAT = 0.05
_RISES = (0.1, 0.2, 0.5, 1.0)
_MOST_SIZES = 60
_MET = 1e-6  # a plan on the edge of a requirement meets it, whatever the last digit of the search


def draw(found: EconomicDesign, around: Neighbourhood) -> str:
    """The plan of least cost as SVG."""
    paper, best = Paper(), found.best
    title = "Sampling plan of least cost"
    paper.text(LEFT, 30, title, size=16, bold=True)
    what = _plan_words(best)
    paper.text(LEFT, 50, what, colour=SOFT)
    verdict = (
        f"{_money(best.cost_per_hour)} an hour; {_money(found.cost_per_hour_without_chart)} without a chart"
    )
    if found.present is not None:
        verdict += f"; {_money(found.present.cost_per_hour)} with the present plan"
    paper.text(LEFT, 72, cut(verdict, 13, RIGHT - LEFT), size=13, bold=True)
    y = 98.0
    told = [f"{title}: {what}.", f"{verdict}.", found.conclusion]
    above = _surface if len(around.multiples) > 1 else _along
    y = above(paper, found, around, y, told)
    y = _sizes(paper, found, y + 34, told)
    moved = [one for one in found.sensitivities if one.elasticity][:3]
    if moved:
        words = "What moves this cost most, for 1 % more of each: " + "; ".join(
            f"{one.parameter.replace('_', ' ')} {_signed(one.elasticity)} %" for one in moved
        )
        lines = wrap(f"{words}.", 12, RIGHT - LEFT)
        y = paper.lines(LEFT, y + 28, lines) - 16
        told.append(f"{words}.")
    return paper.finish(y + 14, title, clean(" ".join(told)))


def _plan_words(one: PricedPlan) -> str:
    return f"Samples of {one.size} every {one.interval_hours:.3g} h, limits at {one.multiple:.3g} sigma of the mean"


def _money(cost: float) -> str:
    if abs(cost) >= 1e7:
        return f"{cost:.3e}".replace("e+0", "e").replace("e+", "e")
    return minus(f"{cost:,.0f}" if abs(cost) >= 1000 else f"{cost:.4g}")


def _signed(number: float) -> str:
    written = minus(f"{number:.2f}")
    return written if number < 0 else f"+{written}"


def _percent(rise: float) -> str:
    return f"{100 * rise:g} %"


# The surface ----------------------------------------------------------------------------------------


def _surface(paper: Paper, found: EconomicDesign, around: Neighbourhood, y: float, told: list[str]) -> float:
    best = found.best
    heading = f"Cost an hour of samples of {around.size}: limits against the hours between samples"
    paper.text(LEFT, y, heading, colour=SOFT)
    top, bottom = y + 14, y + 254
    hours, multiples = around.interval_hours, around.multiples
    to_x = scale.Logarithmic(float(hours[0]), float(hours[-1]), _LOW, _HIGH)
    to_y = scale.Linear(float(multiples[0]), float(multiples[-1]), bottom, top)
    x, heights = np.array([to_x(each) for each in hours.tolist()]), to_y(multiples)
    cost, least = around.cost_per_hour, best.cost_per_hour
    labels = []
    for rise, tint in ((0.05, BAND), (0.01, _NEAR), *((rise, None) for rise in _RISES)):
        level = least * (1 + rise)
        loops = contours.region(x, heights, cost, level)
        if tint is not None:
            paper.path(contours.path(loops), fill=tint, stroke=EDGE, width=0.9, more=' fill-rule="evenodd"')
        elif loops:
            paper.path(_open(loops, top, bottom), stroke=EDGE, width=0.7)
        if place := _label_place(loops, top, bottom):
            labels.append((*place, f"{_money(level)} (+{_percent(rise)})"))
    barred = contours.region(x, heights, -around.shortfall, -_MET)
    if barred:
        look = f'{_BARRED}{_DOTTED} fill-rule="evenodd"'
        paper.path(contours.path(barred), stroke=INK, width=0.8, fill=INK, more=look)
        paper.path(_hatching(x, heights, around.shortfall), stroke=EDGE, width=0.5)
    paper.path(f"M{_LOW:.1f} {top:.1f}V{bottom:.1f}H{_HIGH:.1f}", stroke=EDGE, width=0.8)
    for number in scale.ticks(float(multiples[0]), float(multiples[-1]), 6):
        paper.line(_LOW - 4, to_y(number), _LOW, to_y(number), stroke=EDGE, width=0.8)
        paper.text(_LOW - 7, to_y(number) + 4, f"{number:g}", size=_SMALL, anchor="end", colour=SOFT)
    _hours_under(paper, to_x, bottom)
    at = to_x(best.interval_hours), to_y(best.multiple)
    marks = [(at, f"least: {_money(least)}", True)]
    now = found.present
    if (
        now is not None
        and hours[0] <= now.interval_hours <= hours[-1]
        and multiples[0] <= now.multiple <= multiples[-1]
    ):
        there = to_x(now.interval_hours), to_y(now.multiple)
        marks.append((there, f"present: {_money(now.cost_per_hour)}, n = {now.size}", False))
    taken: list[tuple[float, float, float]] = []
    for (mark_x, mark_y), words, filled in marks:
        paper.add((svg.dots if filled else svg.open_points)([(mark_x, mark_y)], 4.4))
        wide = width(words, 12)
        side = mark_x + 9 if mark_x + 9 + wide < _HIGH else mark_x - 9 - wide
        above = mark_y - 7 if all(abs(mark_y - 7 - other) > 14 for _, other, _ in taken) else mark_y + 17
        taken.append((side, above, wide))
        paper.text(side, above, words, halo=True)
    for place_x, place_y, words in labels:
        wide = width(words, _SMALL)
        left = min(max(place_x - wide / 2, _LOW + 4), _HIGH - wide)
        if all(
            abs(place_y - other) > 13 or left > start + one + 4 or left + wide + 4 < start
            for start, other, one in taken
        ):
            taken.append((left, place_y, wide))
            paper.text(left, place_y, words, size=_SMALL, colour=SOFT, halo=True)
    y = bottom + 36
    paper.text(
        _LOW, y, "hours between samples; up the side, limits in sigma of the mean", size=_SMALL, colour=SOFT
    )
    y = _key(paper, y + 20, barred=bool(barred))
    told.append(f"{heading}. {_flat_words(found)}")
    return paper.lines(LEFT, y + 20, wrap(_flat_words(found), 12, RIGHT - LEFT)) - 16


def _hatching(x: Floats, heights: Floats, shortfall: Floats) -> str:
    """Upright hairlines where a requirement is not met: on paper without colour, tints alone are alike."""
    columns = np.arange(x[0] + _HATCH / 2, x[-1], _HATCH)
    at = np.clip(np.searchsorted(x, columns) - 1, 0, len(x) - 2)
    share = (columns - x[at]) / (x[at + 1] - x[at])
    missed = shortfall[:, at] * (1 - share) + shortfall[:, at + 1] * share > _MET
    lines = []
    for column, rows in zip(columns.tolist(), missed.T, strict=True):
        for start, end in _runs(rows):
            lines.append(f"M{column:.1f} {heights[start]:.1f}V{heights[end - 1]:.1f}")
    return "".join(lines) or "M0 0"


def _runs(marked: Booleans) -> list[tuple[int, int]]:
    """First and past-the-last positions of each stretch that is marked."""
    ends = np.flatnonzero(np.diff(np.r_[False, marked, False].astype(int))).reshape(-1, 2)
    return [(start, end) for start, end in ends.tolist()]


def _swatch(paper: Paper, x: float, y: float, tint: str, *, barred: bool = False) -> None:
    more = f'{_BARRED if barred else ""} stroke="{EDGE}" stroke-width="0.8"'
    paper.rect(x, y - 9, 17, 10, fill=tint, more=more)
    if barred:
        paper.path(f"M{x + 5:.1f} {y - 9:.1f}v10m6 0v-10", stroke=EDGE, width=0.5)


def _open(loops: list[contours.Loop], top: float, bottom: float) -> str:
    """The same lines without the stretches along the edge of the paper's frame."""

    def edge(one: tuple[float, float], other: tuple[float, float]) -> bool:
        return any(
            abs(one[axis] - end) < 0.05 and abs(other[axis] - end) < 0.05
            for axis, end in ((0, _LOW), (0, _HIGH), (1, top), (1, bottom))
        )

    parts = []
    for loop in loops:
        closed = [*loop, loop[0]]
        pen = False
        for one, other in pairwise(closed):
            if edge(one, other):
                pen = False
                continue
            parts.append(
                f"L{other[0]:.1f} {other[1]:.1f}"
                if pen
                else f"M{one[0]:.1f} {one[1]:.1f}L{other[0]:.1f} {other[1]:.1f}"
            )
            pen = True
    return "".join(parts) or "M0 0"


def _label_place(loops: list[contours.Loop], top: float, bottom: float) -> tuple[float, float] | None:
    """Where the lines lie lowest on the paper, or highest, or farthest to a side, within the frame."""
    points = [
        (x, y) for loop in loops for x, y in loop if _LOW + 40 < x < _HIGH - 40 and top + 14 < y < bottom - 8
    ]
    if not points:
        return None
    x, y = max(points, key=lambda one: one[0])
    return x, y + 4


def _hours_under(paper: Paper, to_x: scale.Logarithmic, bottom: float) -> None:
    last = -1e9
    for power in scale.powers(to_x.low / 10, to_x.high):
        for times in (1, 2, 5):
            number = power * times
            if not to_x.low <= number <= to_x.high:
                continue
            x, text = to_x(number), f"{number:g}"
            half = width(text, _SMALL) / 2
            paper.line(x, bottom, x, bottom + 4, stroke=EDGE, width=0.8)
            if x - half > last + 6:
                last = x + half
                paper.text(x, bottom + 17, text, size=_SMALL, anchor="middle", colour=SOFT)


def _key(paper: Paper, y: float, *, barred: bool) -> float:
    x = LEFT
    entries = [(_NEAR, "at most 1 % more than the plan"), (BAND, "at most 5 % more")]
    if barred:
        entries.append((INK, "a requirement is not met"))
    for tint, words in entries:
        _swatch(paper, x, y, tint, barred=tint == INK)
        paper.text(x + 23, y, words, size=_SMALL, colour=SOFT)
        x += 37 + width(words, _SMALL)
    return y


def _flat_words(found: EconomicDesign) -> str:
    """How far each choice may move before it costs 5 % more."""
    flat = next((one for one in found.flatness if one.rise == _FLAT), None)
    if flat is None:
        return ""
    parts = []
    if flat.shortest_interval_hours is not None or flat.longest_interval_hours is not None:
        parts.append(_range(flat.shortest_interval_hours, flat.longest_interval_hours, " h"))
    if flat.smallest_multiple is not None or flat.largest_multiple is not None:
        parts.append(_range(flat.smallest_multiple, flat.largest_multiple, " sigma"))
    sizes = (
        f"samples of {flat.smallest_size} to {flat.largest_size}"
        if flat.largest_size > flat.smallest_size
        else f"samples of {flat.smallest_size} alone"
    )
    words = f"For 5 % more, one choice moved at a time: {', '.join((*parts, sizes))}."
    if found.price_of_requirements_per_hour:
        words += f" The requirements cost {_money(found.price_of_requirements_per_hour)} an hour."
    return words


def _range(low: float | None, high: float | None, unit: str) -> str:
    if low is None:
        return f"up to {high:.3g}{unit}"
    return f"from {low:.3g}{unit} up" if high is None else f"{low:.3g} to {high:.3g}{unit}"


# A held multiple --------------------------------------------------------------------------------------


def _along(paper: Paper, found: EconomicDesign, around: Neighbourhood, y: float, told: list[str]) -> float:
    """The cost along the interval, where the limits are held."""
    best, hours, cost = found.best, around.interval_hours, around.cost_per_hour[0]
    held = f"limits held at {best.multiple:.3g} sigma"
    heading = f"Cost an hour of samples of {around.size}, {held}: by the hours between samples"
    paper.text(LEFT, y, heading, colour=SOFT)
    top, bottom = y + 14, y + 204
    most = min(float(cost.max()), 2 * best.cost_per_hour) or 1.0
    least = best.cost_per_hour
    to_x = scale.Logarithmic(float(hours[0]), float(hours[-1]), _LOW, _HIGH)
    to_y = scale.Linear(least - 0.12 * max(most - least, 0.06 * least), most, bottom, top)
    _cost_band(paper, to_y, least)
    x = np.array([to_x(each) for each in hours.tolist()])
    _barred_columns(paper, x, around.shortfall[0] > _MET, top, bottom)
    shown = cost <= most
    for start, end in _runs(shown):
        places = zip(x[start:end].tolist(), to_y(cost[start:end]).tolist(), strict=True)
        paper.path("M" + "L".join(f"{a:.1f} {b:.1f}" for a, b in places), width=1.3)
    _cost_ticks(paper, to_y, top, bottom)
    _hours_under(paper, to_x, bottom)
    marks = [(best, f"least: {_money(least)}", True)]
    now = found.present
    if now is not None and hours[0] <= now.interval_hours <= hours[-1] and now.cost_per_hour <= most:
        marks.append((now, f"present: {_money(now.cost_per_hour)}, n = {now.size}", False))
    for one, words, filled in marks:
        at = to_x(one.interval_hours), to_y(one.cost_per_hour)
        paper.add((svg.dots if filled else svg.open_points)([at], 4.4))
        wide = width(words, 12)
        paper.text(at[0] + 9 if at[0] + 9 + wide < _HIGH else at[0] - 9 - wide, at[1] - 8, words, halo=True)
    y = bottom + 36
    paper.text(_LOW, y, "hours between samples; up the side, cost an hour", size=_SMALL, colour=SOFT)
    x_key = LEFT
    entries = [(BAND, "at most 5 % more than the plan")]
    if bool((around.shortfall > _MET).any()):
        entries.append((INK, "a requirement is not met"))
    for tint, words in entries:
        _swatch(paper, x_key, y + 20, tint, barred=tint == INK)
        paper.text(x_key + 23, y + 20, words, size=_SMALL, colour=SOFT)
        x_key += 37 + width(words, _SMALL)
    told.append(f"{heading}. {_flat_words(found)}")
    return paper.lines(LEFT, y + 40, wrap(_flat_words(found), 12, RIGHT - LEFT)) - 16


def _barred_columns(paper: Paper, x: Floats, barred: Booleans, top: float, bottom: float) -> None:
    """Where a requirement is not met."""
    for start, end in _runs(barred):
        left, right = float(x[start]), float(x[end - 1])
        paper.rect(left, top, right - left, bottom - top, fill=INK, more=_BARRED)
        lines = (
            f"M{column:.1f} {top:.1f}V{bottom:.1f}" for column in np.arange(left, right, _HATCH).tolist()
        )
        paper.path("".join(lines), stroke=EDGE, width=0.5)


def _cost_band(paper: Paper, to_y: scale.Linear, least: float) -> None:
    high, low = to_y(least * 1.05), to_y(least)
    paper.rect(_LOW, high, _HIGH - _LOW, low - high, fill=BAND)
    paper.line(_LOW, high, _HIGH, high, stroke=EDGE, width=0.9)


def _cost_ticks(paper: Paper, to_y: scale.Linear, top: float, bottom: float) -> None:
    paper.path(f"M{_LOW:.1f} {top:.1f}V{bottom:.1f}H{_HIGH:.1f}", stroke=EDGE, width=0.8)
    for number in scale.ticks(to_y.low, to_y.high, 5):
        paper.line(_LOW - 4, to_y(number), _LOW, to_y(number), stroke=EDGE, width=0.8)
        paper.text(_LOW - 7, to_y(number) + 4, _money(number), size=_SMALL, anchor="end", colour=SOFT)


# Sizes ------------------------------------------------------------------------------------------------


def _sizes(paper: Paper, found: EconomicDesign, y: float, told: list[str]) -> float:
    """The least cost of each sample size, whatever interval and limits suit it."""
    sizes: tuple[SizeOptimum, ...] = found.by_size
    if len(sizes) > _MOST_SIZES:
        middle = next(at for at, one in enumerate(sizes) if one.size == found.best.size)
        start = min(max(middle - _MOST_SIZES // 2, 0), len(sizes) - _MOST_SIZES)
        sizes = sizes[start : start + _MOST_SIZES]
    if len(sizes) < 2:
        return y - 34
    heading = "Least cost an hour by sample size, each with its own best interval and limits"
    paper.text(LEFT, y, heading, colour=SOFT)
    top, bottom = y + 14, y + 144
    least, now = found.best.cost_per_hour, found.present
    costs = [one.cost_per_hour for one in sizes]
    most = min(max(costs), 1.6 * least)
    first, last = sizes[0].size, sizes[-1].size
    beside = now if now is not None and now.cost_per_hour <= 2 * least else None
    if beside is not None:
        first, last, most = min(first, beside.size), max(last, beside.size), max(most, beside.cost_per_hour)
    air = 0.12 * max(most - least, 0.06 * least)
    to_y = scale.Linear(least - air, most + air, bottom, top)
    to_x = scale.Linear(first, last, _LOW + 14, _HIGH - 14)
    _cost_band(paper, to_y, least)
    _cost_ticks(paper, to_y, top, bottom)
    step = next(each for each in (1, 2, 5, 10, 20, 50) if (last - first) / each <= 24)
    for number in range(-(-first // step) * step, last + 1, step):
        x = to_x(number)
        paper.line(x, bottom, x, bottom + 4, stroke=EDGE, width=0.8)
        paper.text(x, bottom + 17, f"{number}", size=_SMALL, anchor="middle", colour=SOFT)
    shown = [(to_x(one.size), to_y(one.cost_per_hour)) for one in sizes if one.cost_per_hour <= most]
    others = [
        place
        for place, one in zip(shown, (one for one in sizes if one.cost_per_hour <= most), strict=True)
        if one.size != found.best.size
    ]
    paper.path("M" + "L".join(f"{a:.1f} {b:.1f}" for a, b in shown), stroke=SOFT, width=0.8)
    paper.add(svg.dots(others, 2.5))
    at = to_x(found.best.size), to_y(least)
    paper.add(svg.dots([at], 4.4))
    words = f"n = {found.best.size}: {_money(least)}"
    paper.text(
        min(max(at[0], _LOW + width(words, 12) / 2), _HIGH - width(words, 12) / 2),
        at[1] - 12,
        words,
        anchor="middle",
        halo=True,
    )
    if beside is not None:
        there = to_x(beside.size), to_y(beside.cost_per_hour)
        paper.add(svg.open_points([there], 4.4))
        words = f"present: {_money(beside.cost_per_hour)}"
        wide = width(words, 12)
        paper.text(
            there[0] + 9 if there[0] + 9 + wide < _HIGH else there[0] - 9 - wide,
            there[1] + 18,
            words,
            halo=True,
        )
    y = bottom + 34
    paper.text(
        _LOW,
        y,
        "pieces in a sample; up the side, cost an hour; band: at most 5 % more",
        size=_SMALL,
        colour=SOFT,
    )
    if hidden := len(found.by_size) - len(shown):
        y += 16
        words = f"Not drawn: {counted(hidden, 'size')} far off or far dearer."
        paper.text(_LOW, y, words, size=_SMALL, colour=SOFT)
    told.append(
        f"{heading}: " + ", ".join(f"{_money(one.cost_per_hour)} for {one.size}" for one in sizes) + "."
    )
    return y
