"""Curves of chart design: run lengths by shift, operating characteristics, plans side by side."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..spc.design.subgroups import Comparison, OperatingCharacteristics
from . import scale, svg
from .svg import BAND, EDGE, INK, LEFT, RIGHT, SOFT, Paper
from .text import counted, cut, minus, width, wrap

_SMALL = 11.0
_LOW, _HIGH = LEFT + 56, RIGHT - 24
KINDS = {
    "shewhart": "Chart judged point by point",
    "ewma": "Chart of exponentially weighted moving averages",
    "cusum": "Chart of cumulative sums",
    "moving_average": "Chart of moving averages",
    "mewma": "Chart of weighted averages of several variables",
    "counts": "Chart of counts",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class RunLengthAt:
    """The run length at one shift (and scale), or at one factor on the mean of counts.

    arl: points until the signal on average; ``None`` where it is beyond what is told. percentiles: pairs of
    probability and points.
    """

    shift: float | None
    scale: float | None
    factor: float | None
    arl: float | None
    percentiles: tuple[tuple[float, int | None], ...]


def run_lengths(kind: str, found: Sequence[RunLengthAt]) -> str:
    """Run lengths on a logarithmic scale, the spread between percentiles behind their average."""
    paper = Paper()
    along, places, names = _along(kind, found)
    order = sorted(range(len(found)), key=lambda at: places[at])
    found = [found[at] for at in order]
    places, names = [places[at] for at in order], [names[at] for at in order]
    title = "Run length: points until the signal"
    paper.text(LEFT, 30, title, size=16, bold=True)
    what = f"{KINDS[kind]} · {along}"
    paper.text(LEFT, 50, cut(what, 12, RIGHT - LEFT), colour=SOFT)
    shown = [at for at, one in enumerate(found) if one.arl is not None or _band_of(one) is not None]
    if not shown:
        y = paper.lines(LEFT, 76, ["No run length here is within what can be told."])
        return paper.finish(y, title, f"{title}. {what}. None can be told.")

    top, bottom = 74.0, 324.0
    numbers = [one.arl for one in found if one.arl is not None]
    numbers += [float(edge) for one in found if (band := _band_of(one)) is not None for edge in band]
    low = 10.0 ** math.floor(math.log10(max(min(numbers), 1.0)) + 1e-9)
    high = max(max(numbers) * 1.25, low * 10)
    to_y = scale.Logarithmic(low, high, bottom, top)
    spread = max(places) - min(places)
    to_x = scale.Linear(min(places), max(places) if spread > 1e-9 else min(places) + 1, _LOW + 16, _HIGH - 24)

    def y_of(number: float) -> float:
        return to_y(max(number, low))

    _frame(paper, top, bottom)
    for power in scale.powers(low, high):
        paper.line(_LOW - 4, to_y(power), _LOW, to_y(power), stroke=EDGE, width=0.8)
        paper.text(_LOW - 7, to_y(power) + 4, _short(power), size=_SMALL, anchor="end", colour=SOFT)
    _band(paper, found, places, to_x, y_of)
    known = [(to_x(x), y_of(one.arl)) for x, one in zip(places, found, strict=True) if one.arl is not None]
    if known:
        paper.path("M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in known), stroke=SOFT, width=1.2)
        paper.add(svg.dots(known, 2.7))
    _values(paper, found, places, to_x, y_of, top)
    _under(paper, places, names, to_x, bottom)
    paper.text(_LOW, bottom + 34, along, size=_SMALL, colour=SOFT)
    y = _run_length_key(paper, found, bottom + 58)
    told = []
    for name, one in zip(names, found, strict=True):
        average = (
            "an average beyond what is told" if one.arl is None else f"{_short(one.arl)} points on average"
        )
        rest = ", ".join(
            f"{100 * share:g} % within {points:,}" for share, points in one.percentiles if points is not None
        )
        told.append(f"At {name}: {average}{'; ' + rest if rest else ''}.")
    return paper.finish(y + 12, title, " ".join((f"{title}. {what}.", *told)))


def _along(kind: str, found: Sequence[RunLengthAt]) -> tuple[str, list[float], list[str]]:
    """What lies along the axis, where each run length stands on it, and what it is called there."""
    if any(one.factor is not None for one in found):
        factors = [one.factor or 1.0 for one in found]
        return "factor on the mean", factors, [f"{one:g}" for one in factors]
    shifts, scales = [one.shift or 0.0 for one in found], [one.scale or 1.0 for one in found]
    if len(set(scales)) == 1:
        words = "shift of the mean, in sigma" if kind != "mewma" else "shift, as a distance in sigma"
        if scales[0] != 1:
            words += f", the spread being {scales[0]:g} times as large"
        return words, shifts, [minus(f"{one:g}") for one in shifts]
    if len(set(shifts)) == 1:
        words = "factor on the spread"
        if shifts[0] != 0:
            words += f", the mean being shifted by {minus(f'{shifts[0]:g}')} sigma"
        return words, scales, [f"{one:g}" for one in scales]
    names = [f"{minus(f'{a:g}')} · {b:g}" for a, b in zip(shifts, scales, strict=True)]
    return "shift in sigma · factor on the spread", [float(at) for at in range(len(found))], names


def _band_of(one: RunLengthAt) -> tuple[int, int] | None:
    """The lowest and the highest percentile, where there are two."""
    points = [points for _, points in one.percentiles if points is not None]
    return (min(points), max(points)) if len(points) > 1 else None


def _median(one: RunLengthAt) -> int | None:
    return next((points for share, points in one.percentiles if share == 0.5), None)


def _band(
    paper: Paper, found: Sequence[RunLengthAt], places: Sequence[float], to_x: scale.Linear, y_of: object
) -> None:
    assert callable(y_of)
    banded = [
        (to_x(x), y_of(band[0]), y_of(band[1]))
        for x, one in zip(places, found, strict=True)
        if (band := _band_of(one)) is not None
    ]
    if len(banded) > 1:
        over = "L".join(f"{x:.1f} {high:.1f}" for x, _, high in banded)
        under = "L".join(f"{x:.1f} {low:.1f}" for x, low, _ in reversed(banded))
        paper.path(f"M{over}L{under}z", fill=BAND, width=0)
        edge = "L".join(f"{x:.1f} {low:.1f}" for x, low, _ in banded)
        paper.path(f"M{over}M{edge}", stroke=EDGE, width=1)
    for x, low, high in banded if len(banded) == 1 else ():
        paper.path(
            f"M{x - 6:.1f} {low:.1f}h12M{x - 6:.1f} {high:.1f}h12M{x:.1f} {low:.1f}V{high:.1f}", stroke=EDGE
        )
    medians = [
        (to_x(x), y_of(median))
        for x, one in zip(places, found, strict=True)
        if (median := _median(one)) is not None
    ]
    if len(medians) > 1:
        paper.path(
            "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in medians),
            stroke=SOFT,
            width=0.8,
            more=' stroke-dasharray="5 4"',
        )


def _values(
    paper: Paper,
    found: Sequence[RunLengthAt],
    places: Sequence[float],
    to_x: scale.Linear,
    y_of: object,
    top: float,
) -> None:
    """Each average beside its point, where there is room."""
    assert callable(y_of)
    last = -1e9
    for x, one in zip(places, found, strict=True):
        if one.arl is None:
            continue
        text, here = _short(one.arl), to_x(x) + 7
        if here < last + 6:
            continue
        last = here + width(text, 12)
        paper.text(min(here, RIGHT - width(text, 12)), max(y_of(one.arl) - 6, top + 10), text)


def _run_length_key(paper: Paper, found: Sequence[RunLengthAt], y: float) -> float:
    shares = sorted({share for one in found for share, points in one.percentiles if points is not None})
    entries = [("average", "average")]
    if len(shares) > 1:
        entries.append(("band", f"from the {100 * shares[0]:g} % to the {100 * shares[-1]:g} % point"))
    if 0.5 in shares:
        entries.append(("median", "median"))
    x = LEFT
    for sign, words in entries:
        if sign == "band":
            paper.rect(x, y - 9, 17, 10, fill=BAND, more=f' stroke="{EDGE}" stroke-width="0.8"')
        elif sign == "median":
            paper.line(x, y - 4, x + 18, y - 4, stroke=SOFT, width=0.8, more=' stroke-dasharray="5 4"')
        else:
            paper.line(x, y - 4, x + 18, y - 4, stroke=SOFT, width=1.2)
            paper.add(svg.dots([(x + 9, y - 4)], 2.7))
        paper.text(x + 23, y, words, size=_SMALL, colour=SOFT)
        x += 37 + width(words, _SMALL)
    return y


def _frame(paper: Paper, top: float, bottom: float) -> None:
    paper.path(f"M{_LOW:.1f} {top:.1f}V{bottom:.1f}H{_HIGH:.1f}", stroke=EDGE, width=0.8)


def _under(
    paper: Paper, places: Sequence[float], names: Sequence[str], to_x: scale.Linear, bottom: float
) -> None:
    """What each place is called, where there is room."""
    last = -1e9
    for place, name in zip(places, names, strict=True):
        x, half = to_x(place), width(name, _SMALL) / 2
        paper.line(x, bottom, x, bottom + 4, stroke=EDGE, width=0.8)
        if x - half < last + 6:
            continue
        last = x + half
        paper.text(x, bottom + 17, name, size=_SMALL, anchor="middle", colour=SOFT)


def _short(number: float) -> str:
    """About three figures."""
    if number >= 1e6:
        return f"{number:.2e}".replace("e+0", "e").replace("e+", "e")
    return f"{number:,.0f}" if number >= 100 else f"{number:.3g}"


# Operating characteristics --------------------------------------------------------------------------


def operating(
    shift: float,
    plan: OperatingCharacteristics | None,
    present: OperatingCharacteristics | None,
    comparison: Comparison | None,
) -> str:
    """The probability that the first sample after a shift tells nothing; plans in the order of their time."""
    paper = Paper()
    curves = [
        (name, one, style)
        for name, one, style in (("plan", plan, ""), ("present", present, ' stroke-dasharray="6 3.5"'))
        if one is not None
    ]
    title = "Operating characteristics of a mean chart" if curves else "Plans by their time to signal"
    paper.text(LEFT, 30, title, size=16, bold=True)
    told: list[str] = [f"{title}."]
    y = 30.0
    if curves:
        y = _curves(paper, shift, curves, told)
    if comparison is not None:
        y = _ranked(paper, comparison, y + (36 if curves else 20), told)
    return paper.finish(y + 14, title, " ".join(told))


def _plan_words(one: OperatingCharacteristics) -> str:
    return f"n = {one.size}, every {one.interval_hours:.3g} h, limits at {one.multiple:.3g} sigma"


def _curves(
    paper: Paper, shift: float, curves: Sequence[tuple[str, OperatingCharacteristics, str]], told: list[str]
) -> float:
    paper.text(LEFT, 50, "Probability that the first sample after a shift gives no signal", colour=SOFT)
    top, bottom = 74.0, 294.0
    reach = np.concatenate([one.shifts for _, one, _ in curves])
    low, high = min(0.0, float(reach.min())), max(float(reach.max()), shift)
    to_x = scale.Linear(low, high if high - low > 1e-9 else low + 1, _LOW, _HIGH)
    to_y = scale.Linear(0.0, 1.0, bottom, top)
    _frame(paper, top, bottom)
    for share in (0.0, 0.25, 0.5, 0.75, 1.0):
        paper.line(_LOW - 4, to_y(share), _LOW, to_y(share), stroke=EDGE, width=0.8)
        paper.text(_LOW - 7, to_y(share) + 4, f"{share:g}", size=_SMALL, anchor="end", colour=SOFT)
    ticks = scale.ticks(to_x.low, to_x.high, 8)
    _under(paper, ticks, [minus(f"{tick:g}") for tick in ticks], to_x, bottom)
    paper.text(_LOW, bottom + 34, "shift of the mean, in sigma of single values", size=_SMALL, colour=SOFT)
    asked = to_x(shift)
    paper.line(asked, top, asked, bottom, stroke=SOFT, width=0.8, more=' stroke-dasharray="1.5 3.5"')
    words = f"to detect: {shift:g}"
    side = "end" if asked + width(words, _SMALL) + 8 > _HIGH else "start"
    paper.text(asked + (5 if side == "start" else -5), top + 10, words, size=_SMALL, anchor=side, colour=SOFT)
    y = bottom + 36
    for name, one, style in curves:
        at, quiet = one.shifts, one.beta
        if low == 0 and not (at == 0).any():
            at, quiet = np.append(at, 0.0), np.append(quiet, 1 - one.false_alarm_probability)
        order = np.argsort(at)
        at, quiet = at[order], quiet[order]
        places = list(zip(to_x(at).tolist(), to_y(quiet).tolist(), strict=True))
        paper.path("M" + "L".join(f"{x:.1f} {h:.1f}" for x, h in places), stroke=INK, width=1.3, more=style)
        paper.add(svg.dots(places, 2.5) if not style else svg.open_points(places, 2.8))
        y += 20
        paper.line(LEFT, y - 4, LEFT + 30, y - 4, stroke=INK, width=1.3, more=style)
        paper.add((svg.dots if not style else svg.open_points)([(LEFT + 15, y - 4)], 2.8))
        label = "Plan found" if name == "plan" else "Present plan"
        alarm = f"a false alarm every {_short(one.in_control_ats_hours)} h on average"
        lines = wrap(f"{label}: {_plan_words(one)}; {alarm}", 12, RIGHT - LEFT - 40)
        y = paper.lines(LEFT + 40, y, lines) - 16
        told.append(
            f"{label}: {_plan_words(one)}; {alarm}. No signal at the first sample: "
            + ", ".join(
                f"{missed:.3g} at {minus(f'{shifted:g}')} sigma"
                for shifted, missed in zip(at.tolist(), quiet.tolist(), strict=True)
            )
            + "."
        )
    return y


def _ranked(paper: Paper, comparison: Comparison, y: float, told: list[str]) -> float:
    """Plans as bars of their average time to signal, the quickest first."""
    random = comparison.shift_moment == "random"
    heading = f"Candidates: average hours to the signal after a shift of {comparison.shift:g} sigma"
    paper.text(LEFT, y, heading, colour=SOFT)
    plans = comparison.plans[:20]
    hours = [one.ats_random_hours if random else one.ats_hours for one in plans]
    names = [
        f"{place + 1}.  n = {one.size}, every {one.interval_hours:.3g} h, {one.multiple:.3g} sigma"
        for place, one in enumerate(plans)
    ]
    start = LEFT + max(width(name, 12) for name in names) + 12
    to_x = scale.Linear(0.0, max(hours), start, RIGHT - 70)
    told.append(heading + ":")
    for name, many in zip(names, hours, strict=True):
        y += 22
        paper.text(LEFT, y, name)
        paper.rect(
            start, y - 11, to_x(many) - start, 14, fill=BAND, more=f' stroke="{EDGE}" stroke-width="0.8"'
        )
        paper.text(to_x(many) + 6, y, f"{many:.3g} h")
        told.append(f"{name.replace('  ', ' ')}: {many:.3g} h.")
    if len(comparison.plans) > len(plans):
        y += 20
        paper.text(LEFT, y, f"And {counted(len(comparison.plans) - len(plans), 'slower plan')}.", colour=SOFT)
    if not comparison.equal_rate:
        y += 20
        paper.text(
            LEFT, y, "The plans measure unequally many pieces an hour: unlike is compared.", colour=SOFT
        )
    return y
