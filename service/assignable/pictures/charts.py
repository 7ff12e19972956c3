"""Control charts: the band between the limits, the points, and each signal with its sentence."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, fields
from functools import cache
from itertools import chain
from typing import Any, Literal, get_origin, get_type_hints

import numpy as np

from ..spc.charts import Chart
from ..spc.charts.common import PanelLimits
from ..spc.data import Booleans, Floats, Integers
from ..spc.rules import Signal
from . import axis, scale, svg
from .svg import AMBER, BAND, EDGE, INK, LEFT, RIGHT, SOFT, Paper
from .text import Figures, clean, counted, cut, escape, width, wrap
from .thin import apart, thin

MOST_TITLED = 200  # points of signals that tell their sentence when pointed at
MOST_SENTENCES = 6  # under one panel
MOST_NAMED = 6  # points of signals whose name stands beside them
MOST_RINGS = 500  # on one series; beyond it marks at the foot tell where signals are
LARGEST_STEP = 72.0  # pixels between points
SLOPING = (("trend", "level"),)  # whose limits run on between the points; others hold at each of them
_AROUND_NOUGHT = {"upper": "lower", "spread_upper": "spread_lower"}
_TOGETHER = {
    "upper": "Sums of deviations above and below the centre, in sigma",
    "spread_upper": "The same for a growing and a shrinking spread",
}
_SMALL = 11.0
_LINE = 16.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Charted:
    """What a picture of a chart shows.

    panels: the result's panels, ``None`` where limits came from standards alone. frozen: the lines of the limits
    document, by panel. new: whether these points were judged by limits frozen before. excluded: positions left
    out of the estimates. cautions: their codes.
    """

    chart: Chart
    name: str | None
    unit: str | None
    new: bool
    panels: Any
    frozen: Mapping[str, PanelLimits]
    verdict: str | None
    signals: Sequence[Signal] = ()
    signals_found: int = 0
    ids: Sequence[str] | None = None
    times: Sequence[str] | None = None
    excluded: Sequence[int] = ()
    cautions: Sequence[str] = ()

    @property
    def names(self) -> axis.Names:
        """What its points are called."""
        return axis.Names(self.ids, self.times)


@dataclass(frozen=True, slots=True, eq=False)
class Series:
    """One statistic's points with their lines; ``lower`` or ``upper`` is ``None`` where no such limit exists."""

    name: str
    index: Integers
    value: Floats
    centre: Floats
    lower: Floats | None
    upper: Floats | None

    def beyond(self) -> Booleans:
        """(m,) bool: strictly beyond a limit."""
        above = False if self.upper is None else self.value > self.upper
        below = False if self.lower is None else self.value < self.lower
        return np.broadcast_to(np.logical_or(above, below), self.value.shape)


@dataclass(frozen=True, slots=True, eq=False)
class Frame:
    """One panel on the paper: its heading, its series, the lines of its band, and how numbers are written."""

    heading: str
    series: tuple[Series, ...]
    floor: float | None
    scale: scale.Linear
    figures: Figures
    sloping: bool


@dataclass(frozen=True, slots=True, eq=False)
class Sheet:
    """The paper with what is common to all panels on it: the axis along them, and what is marked."""

    paper: Paper
    charted: Charted
    x0: float
    x1: float
    step: float
    along: axis.Labels
    by_panel: Mapping[str, Sequence[Signal]]
    excluded: Integers

    @property
    def start(self) -> float:
        """Where the first point stands."""
        return self.x0 + 8

    def signals_of(self, frame: Frame) -> list[Signal]:
        """The signals of all series of a panel."""
        return [signal for one in frame.series for signal in self.by_panel.get(one.name, ())]


@dataclass(frozen=True, slots=True, eq=False)
class Drawn:
    """A series as it is drawn: where its points stand, which are drawn, and which take part in signals."""

    series: Series
    x: Floats
    kept: Integers
    action: Booleans
    warning: Booleans

    @property
    def crowded(self) -> bool:
        """Whether too many points take part in signals for a ring around each."""
        return int(np.count_nonzero(self.action)) + int(np.count_nonzero(self.warning)) > MOST_RINGS


@cache
def _headings(plotted: Any) -> Mapping[str, str]:
    """What each panel shows, from its own description."""
    hints = get_type_hints(get_origin(plotted) or plotted, include_extras=True)
    # The first sentence, without what only a reader of the contract can look up.
    return {name: hint.__metadata__[0].split(".")[0].split(", as `")[0] for name, hint in hints.items()}


def panels_of(result: Any) -> Iterable[tuple[str, Any]]:
    """The panels of a result by name, those it does not have left out."""
    for field in fields(result):
        panel = getattr(result, field.name)
        if panel is not None:
            yield field.name, panel


def draw(charted: Charted) -> str:
    """The picture of a chart, as SVG."""
    paper = Paper()
    count = _count(charted)
    frames = _frames(charted)
    title = _subject(charted)
    y = 30.0
    paper.text(LEFT, y, cut(title, 16, RIGHT - LEFT), size=16, bold=True)
    y += 20
    paper.text(LEFT, y, _what(charted, count), colour=SOFT)
    y += 22
    verdict = _verdict(charted, count)
    if verdict:
        if charted.verdict == "signal":
            place = [(LEFT + 7, y - 4)]
            paper.add(svg.diamonds(place, 3.6) + svg.rings(place, size=6.2))
            paper.text(LEFT + 20, y, verdict, size=13, bold=True)
        else:
            paper.text(LEFT, y, verdict, size=13, bold=True)
        y += 12
    told = [f"{title}. {_what(charted, count)}. {verdict}".strip()]
    if not frames:
        y = paper.lines(LEFT, y + 12, ["The limits follow each point's own size; there is no point to draw."])
        return paper.finish(y, title, told[0])

    x0 = 20 + max((width(text, _SMALL) for frame in frames for _, text in _ticks(frame)), default=40.0)
    x1 = (
        RIGHT
        - 6
        - max((width(text, 12) for frame in frames for _, text, _ in _line_labels(frame)), default=0.0)
    )
    x0, x1 = min(x0, 150.0), max(x1, RIGHT - 150.0)
    step = (x1 - x0 - 16) / max(count - 1, 1)
    if not any(frame.sloping for frame in frames):
        step = min(step, LARGEST_STEP)
    along = axis.labels(count, step, charted.ids, charted.times) if count else axis.Labels((), "")
    by_panel: dict[str, list[Signal]] = {}
    for signal in charted.signals:
        by_panel.setdefault(signal.panel, []).append(signal)
    excluded = np.asarray(charted.excluded, dtype=np.int64)
    sheet = Sheet(paper, charted, x0, x1, step, along, by_panel, excluded)
    crowded = False
    for frame in frames:
        y += 22
        paper.text(LEFT, y, cut(frame.heading, 12, RIGHT - LEFT), colour=SOFT)
        top = y + 8
        y = top + _height(frame, charted)
        crowded |= _panel(sheet, frame, top, y)
        y = _axis_text(sheet, y) if frame is frames[-1] else y + 4
        y = _sentences(sheet, sheet.signals_of(frame), y)
        told.append(_told(frame, sheet.signals_of(frame), charted))
    for note in _notes(charted, frames):
        y = paper.lines(LEFT, y + _LINE, wrap(note, _SMALL, RIGHT - LEFT), size=_SMALL, colour=SOFT) - 15
    y = _key(sheet, frames, y + 22, crowded=crowded)
    return paper.finish(y + 12, f"{title}: {charted.chart.title.lower()}", " ".join(told))


# What it is -----------------------------------------------------------------------------------------


def _subject(charted: Charted) -> str:
    name = clean(charted.name or "") or charted.chart.title
    unit = clean(charted.unit or "")
    return f"{name} ({unit})" if unit else name


def _count(charted: Charted) -> int:
    for labels in (charted.ids, charted.times):
        if labels is not None:
            return len(labels)
    if charted.panels is None:
        return 0
    last = [int(panel.index[-1]) for _, panel in panels_of(charted.panels) if len(panel.index)]
    return max(last, default=-1) + 1


def _what(charted: Charted, count: int) -> str:
    if charted.panels is None:
        return f"{charted.chart.title} · limits from standards, no data"
    what = "judged by frozen limits" if charted.new else "baseline under its own limits"
    return f"{charted.chart.title} · {counted(count, 'point')}, {what}"


def _verdict(charted: Charted, count: int) -> str:
    if charted.verdict is None:
        return ""
    found = charted.signals_found
    if charted.verdict == "signal":
        first = charted.names(charted.signals[0].index)
        one = f"Signal at {first}" if found == 1 else f"{found:,} signals, the first at {first}"
        return cut(f"{one}.", 13, RIGHT - LEFT - 20)
    if found:
        return f"In control, with {counted(found, 'warning')}."
    return "In control: the point gives no signal." if count == 1 else "In control: no point gives a signal."


def _frames(charted: Charted) -> list[Frame]:
    headings = _headings(charted.chart.plotted)
    if charted.panels is None:
        found = [
            (name, _lines_alone(name, lines))
            for name, lines in charted.frozen.items()
            if not (lines.centre is None and lines.lower is None and lines.upper is None)
        ]
    else:
        found = [
            (name, _series(name, panel, charted.frozen.get(name)))
            for name, panel in panels_of(charted.panels)
        ]
    all_series = dict(found)
    frames = []
    for name, series in all_series.items():
        if name in _AROUND_NOUGHT.values() and charted.chart.name == "cusum":
            continue
        pair: tuple[Series, ...] = (series,)
        heading = headings.get(name, name)
        if charted.chart.name == "cusum":
            pair = (series, all_series[_AROUND_NOUGHT[name]])
            heading = _TOGETHER[name]
        frames.append(_frame(heading, pair, (charted.chart.name, name) in SLOPING))
    return frames


def _series(name: str, panel: Any, frozen: PanelLimits | None) -> Series:
    """The panel with its natural bounds taken for what they are: no limits."""
    lower, upper = panel.lower, panel.upper
    given = frozen is not None and (frozen.lower is not None or frozen.upper is not None)
    no_lower = frozen is not None and given and frozen.lower is None
    no_upper = frozen is not None and given and frozen.upper is None
    if not given and len(lower):
        no_lower = bool((lower == 0).all()) and bool((panel.value >= 0).all())
        no_upper = bool((upper == 0).all() or (upper == 1).all()) and bool((panel.value <= upper).all())
    if len(lower):
        no_lower = no_lower or not np.isfinite(lower).all()
        no_upper = no_upper or not np.isfinite(upper).all()
    return Series(
        name, panel.index, panel.value, panel.centre, None if no_lower else lower, None if no_upper else upper
    )


def _lines_alone(name: str, lines: PanelLimits) -> Series:
    """A panel without points, whose lines are seen as if at one."""

    def line(at: float | None) -> Floats | None:
        return None if at is None else np.array([at])

    nothing = np.empty(0, dtype=np.int64)
    centre = line(lines.centre)
    return Series(
        name,
        nothing,
        np.empty(0),
        np.full(1, np.nan) if centre is None else centre,
        line(lines.lower),
        line(lines.upper),
    )


def _frame(heading: str, series: tuple[Series, ...], sloping: bool) -> Frame:
    ends = [
        end
        for one in series
        for line in (one.value, one.centre, one.lower, one.upper)
        if line is not None and len(line)
        for end in ((float(line[0]),) if line.strides == (0,) else (float(line.min()), float(line.max())))
    ]
    lowest = [one for one in series if one.lower is None]
    floor = 0.0 if lowest and min(ends, default=0.0) >= 0 and len(series) == 1 else None
    low, high = scale.around(ends, floor=floor)
    lines = [
        float(line[-1])
        for one in series
        for line in (one.centre, one.lower, one.upper)
        if line is not None and len(line)
    ]
    spread = max(lines) / 2 - min(lines) / 2 if len(lines) > 1 else 0.0
    return Frame(
        heading, series, floor, scale.Linear(low, high, 1.0, 0.0), Figures(lines or ends, 2 * spread), sloping
    )


# The panel ------------------------------------------------------------------------------------------


def _height(frame: Frame, charted: Charted) -> float:
    series = len(charted.frozen)
    if series == len(frame.series):
        return 230.0
    first = frame.series[0].name == charted.chart.panels[0]
    return 180.0 if first or len(frame.series) > 1 else 125.0


def _ticks(frame: Frame) -> list[tuple[float, str]]:
    found = scale.ticks(frame.scale.low, frame.scale.high, 5)
    return list(zip(found, frame.figures.even(found), strict=True))


Role = Literal["upper", "centre", "lower"]


def _line_labels(frame: Frame) -> list[tuple[float, str, Role]]:
    """The lines of a panel where they end at the right: number, text, which."""
    found: list[tuple[float, str, Role]] = []
    for at, one in enumerate(frame.series):
        roles: tuple[tuple[Role, Floats | None], ...] = (("upper", one.upper), ("lower", one.lower))
        for role, line in (*roles, ("centre", one.centre if at == 0 else None)):
            if line is not None and len(line) and np.isfinite(line[-1]):
                found.append((float(line[-1]), frame.figures(float(line[-1])), role))
    return found


def _panel(sheet: Sheet, frame: Frame, top: float, bottom: float) -> bool:
    """Draws a panel; returns whether it is crowded with signals."""
    paper, x0 = sheet.paper, sheet.x0
    to_y = scale.Linear(frame.scale.low, frame.scale.high, bottom, top)
    drawn = [_drawn(sheet, one) for one in frame.series]
    _band(sheet, frame, drawn, to_y)
    for at, text in _ticks(frame):
        here = to_y(at)
        paper.text(x0 - 7, here + 4, text, size=_SMALL, anchor="end", colour=SOFT)
        paper.line(x0 - 4, here, x0, here, stroke=EDGE, width=0.8)
    paper.path(f"M{x0:.1f} {top:.1f}V{bottom:.1f}H{sheet.x1:.1f}", stroke=EDGE, width=0.8)
    marks = "".join(f"M{sheet.start + at * sheet.step:.1f} {bottom:.1f}v4" for at, _ in sheet.along.at)
    if marks:
        paper.path(marks, stroke=EDGE, width=0.8)
    _label_lines(paper, frame, to_y, sheet.x1)
    for one in drawn:
        if len(one.kept):
            _points(sheet, frame, one, to_y)
    return any(one.crowded for one in drawn)


def _drawn(sheet: Sheet, one: Series) -> Drawn:
    signals = sheet.by_panel.get(one.name, ())
    action, warning = (_taking_part(signals, one.index, severity) for severity in ("action", "warning"))
    x = np.asarray(sheet.start + one.index * sheet.step, dtype=np.float64)
    keep = one.beyond() | action | warning
    if len(sheet.excluded):
        keep |= np.isin(one.index, sheet.excluded)
    return Drawn(one, x, thin(x, one.value, keep), action, warning & ~action)


def _taking_part(signals: Sequence[Signal], index: Integers, severity: str) -> Booleans:
    """(m,) bool: which points take part in signals of this severity."""
    part = np.zeros(len(index), dtype=bool)
    named = np.fromiter(
        chain.from_iterable((*one.points, one.index) for one in signals if one.severity == severity),
        dtype=np.int64,
    )
    if len(named) and len(index):
        at = np.minimum(np.searchsorted(index, named), len(index) - 1)
        part[at[index[at] == named]] = True
    return part


def _band(sheet: Sheet, frame: Frame, drawn: Sequence[Drawn], to_y: scale.Linear) -> None:
    """The region in control, its edges where there are limits, and the centre."""
    paper, x0, x1, top, bottom = sheet.paper, sheet.x0, sheet.x1, to_y.end, to_y.start
    first, x, kept = drawn[0].series, drawn[0].x, drawn[0].kept
    upper, lower = first.upper, drawn[-1].series.lower
    constant = all(
        line is None or len(line) == 0 or line.strides == (0,) or bool((line == line[0]).all())
        for line in (upper, lower, first.centre)
    )
    if constant or len(kept) < 2:
        cuts, pick = [x0, x1], np.zeros(1, dtype=np.int64)
        if len(first.centre) == 0:
            return
    else:
        lines = [line for line in (upper, lower, first.centre) if line is not None]
        changed = np.zeros(len(kept) - 1, dtype=bool)
        for line in lines:
            changed |= np.diff(line[kept]) != 0
        if frame.sloping:
            changed[:] = True
        after = np.flatnonzero(changed)
        pick = kept[np.concatenate(([0], after + 1))]
        middle = (x[kept[after]] + x[kept[after + 1]]) / 2
        cuts = [x0, *middle.tolist(), x1]

    def course(line: Floats, backwards: bool = False) -> str:
        heights = to_y(line[pick])
        places: Iterable[tuple[float, float]]
        if frame.sloping and len(pick) > 1:
            slope = [
                (h2 - h1) / (b - a)
                for a, b, h1, h2 in (
                    (x[pick[0]], x[pick[1]], heights[0], heights[1]),
                    (x[pick[-2]], x[pick[-1]], heights[-2], heights[-1]),
                )
            ]
            places = [
                (x0, heights[0] - slope[0] * (x[pick[0]] - x0)),
                *zip(x[pick].tolist(), heights.tolist(), strict=True),
                (x1, heights[-1] + slope[1] * (x1 - x[pick[-1]])),
            ]
        else:
            places = [
                place
                for at, high in enumerate(heights.tolist())
                for place in ((cuts[at], high), (cuts[at + 1], high))
            ]
        flat = [each for place in (list(reversed(list(places))) if backwards else places) for each in place]
        return ("L%.1f %.1f" * (len(flat) // 2) % tuple(flat))[1:]

    if upper is not None or lower is not None:
        over = f"{x0:.1f} {top:.1f}L{x1:.1f} {top:.1f}" if upper is None else course(upper)
        under = f"{x1:.1f} {bottom:.1f}L{x0:.1f} {bottom:.1f}" if lower is None else course(lower, True)
        paper.path(f"M{over}L{under}z", fill=BAND, width=0)
        edges = "".join(f"M{course(line)}" for line in (upper, lower) if line is not None)
        paper.path(edges, stroke=EDGE, width=1)
    if np.isfinite(first.centre[pick]).all():
        paper.path(f"M{course(first.centre)}", stroke=SOFT, width=0.8, more=' stroke-dasharray="5 4"')


def _label_lines(paper: Paper, frame: Frame, to_y: scale.Linear, x1: float) -> None:
    """The values of limits and centre, directly at the right edge, none over another."""
    labels = sorted((float(to_y(number)), text, role) for number, text, role in _line_labels(frame))
    places: list[float] = []
    for wished, _, _ in labels:
        places.append(max(wished, places[-1] + 13) if places else max(wished, to_y.end + 4))
    for at in range(len(places) - 1, -1, -1):
        most = to_y.start if at == len(places) - 1 else places[at + 1] - 13
        places[at] = min(places[at], most)
    for place, (_, text, role) in zip(places, labels, strict=True):
        paper.text(x1 + 6, place + 4, text, colour=SOFT if role == "centre" else INK)


def _points(sheet: Sheet, frame: Frame, drawn: Drawn, to_y: scale.Linear) -> None:
    """The line, the points on it, and their marks."""
    paper, step, one, kept = sheet.paper, sheet.step, drawn.series, drawn.kept
    signals = sheet.by_panel.get(one.name, ())
    y = to_y(one.value[kept])
    at_x, index = drawn.x[kept], one.index[kept]
    # A gap breaks the line, where it can be seen.
    missing = np.diff(one.index, prepend=one.index[0] - 1) - 1
    gaps = np.diff(np.cumsum(missing)[kept]) * step > min(0.5 * step, 1.5)
    letters = np.where(np.concatenate(([True], gaps)), "M", "L").tolist()
    flat = list(chain.from_iterable(zip(letters, at_x.tolist(), y.tolist(), strict=True)))
    paper.path(
        "%s%.1f %.1f" * len(kept) % tuple(flat),
        stroke=SOFT,
        width=1 if step > 3 else 0.7,
        more=' stroke-linejoin="round"',
    )

    left_out = np.isin(index, sheet.excluded)
    action, warning = drawn.action[kept], drawn.warning[kept]
    outside = one.beyond()[kept]
    beyond = outside & ~left_out
    size = 2.7 if step >= 9 else 2.1 if step >= 5.5 else 1.5 if step >= 3 else 0.0

    def places(which: Booleans, cell: float = 0.0) -> list[tuple[float, float]]:
        found = np.flatnonzero(which)
        if cell and len(found) > MOST_TITLED:
            found = found[apart(at_x[found], y[found], cell)]
        return list(zip(at_x[found].tolist(), y[found].tolist(), strict=True))

    if size:
        # With gaps or not: a point between two gaps has no line, and must be seen.
        paper.add(svg.dots(places(~beyond & ~left_out), size))
    else:
        lonely = np.concatenate(([True], gaps)) & np.concatenate((gaps, [True]))
        seen = lonely if drawn.crowded else lonely | action | warning
        if bool((seen & ~beyond).any()):
            paper.add(svg.dots(places(seen & ~beyond, 1.0), 1.3))
    if (left_out & ~outside).any():
        paper.add(svg.open_points(places(left_out & ~outside, 1.0)))
    if (left_out & outside).any():
        paper.add(svg.diamonds(places(left_out & outside, 1.0), 4.2, filled=False))
    big, ring, line = (4.6, 7.4, 1.9) if step >= 9 else (3.8, 6.0, 1.7) if step >= 4 else (2.4, 2.8, 1.0)
    if drawn.crowded:
        # So many rings would hide the points: rings for those beyond a limit, the others told at the foot.
        columns = np.unique(np.floor(at_x[action | warning])).tolist()
        foot = ("M%.1f %.1fv-7" * len(columns)) % tuple(
            chain.from_iterable((at, to_y.start - 1) for at in columns)
        )
        paper.path(foot, stroke=AMBER, width=1.1)
        action, warning = action & beyond, warning & beyond
        signals = ()
    titled = _titles(signals, one, frame, sheet.charted.names) if signals else {}
    alone = np.isin(index, np.fromiter(titled, dtype=np.int64, count=len(titled)))
    rest = ~alone
    if bool((beyond & rest).any()):
        paper.add(svg.diamonds(places(beyond & rest, big / 1.5), big))
    for part, broken in ((action, False), (warning, True)):
        if bool((part & rest).any()):
            paper.add(svg.rings(places(part & rest, ring / 1.5), warning=broken, size=ring, line=line))
    for at in np.flatnonzero(alone).tolist():
        place = [(float(at_x[at]), float(y[at]))]
        shapes = svg.diamonds(place, big) if beyond[at] else ""
        shapes += svg.rings(place, warning=not action[at], size=ring, line=line)
        paper.add(f"<g><title>{escape(titled[int(index[at])])}</title>{shapes}</g>")
    _names(sheet, signals, dict(zip(index.tolist(), zip(at_x, y, strict=True), strict=True)), to_y.end)


def _titles(signals: Sequence[Signal], one: Series, frame: Frame, names: axis.Names) -> dict[int, str]:
    """What the points that signals are given on say when pointed at."""
    said: dict[int, list[str]] = {}
    for signal in signals:
        if len(said) >= MOST_TITLED and signal.index not in said:
            break
        said.setdefault(signal.index, []).append(signal.sentence)
    at = np.searchsorted(one.index, np.fromiter(said, dtype=np.int64, count=len(said)))
    titles = {}
    for position, (index, sentences) in zip(at.tolist(), said.items(), strict=True):
        value = frame.figures(float(one.value[position])) if position < len(one.value) else ""
        titles[index] = f"{names(index)}: {value}. {' '.join(sentences)}"
    return titles


def _names(
    sheet: Sheet, signals: Sequence[Signal], places: Mapping[int, tuple[float, float]], top: float
) -> None:
    """The names of the points that signals are given on, beside them, where they are few."""
    given = sorted({signal.index: signal.side for signal in signals}.items())
    if len(given) > MOST_NAMED:
        return
    last, names = {True: -1e9, False: -1e9}, sheet.charted.names
    for at, side in given:
        if at not in places:
            continue
        x, y = (float(place) for place in places[at])
        text = cut(names(at), _SMALL, 90)
        half = width(text, _SMALL) / 2
        above = side != "below" and y - top > 22
        x = min(max(x, sheet.x0 + half + 2), sheet.x1 - half - 2)
        if x - half < last[above] + 4:
            continue
        last[above] = x + half
        sheet.paper.text(
            x, y + (-12 if above else 20), text, size=_SMALL, anchor="middle", colour=AMBER, halo=True
        )


# Words ----------------------------------------------------------------------------------------------


def _axis_text(sheet: Sheet, bottom: float) -> float:
    paper, along = sheet.paper, sheet.along
    y = bottom + 17
    for at, text in along.at:
        x = sheet.start + at * sheet.step
        half = width(text, axis.SIZE) / 2
        paper.text(
            min(max(x, LEFT + half), RIGHT - half), y, text, size=axis.SIZE, anchor="middle", colour=SOFT
        )
    if along.caption:
        y += 15
        paper.text(sheet.x0, y, along.caption, size=axis.SIZE, colour=SOFT)
    return y + 8


def _grouped(found: Sequence[Signal]) -> list[tuple[Signal, list[int]]]:
    """Equal sentences once, each with its points."""
    groups: dict[tuple[str, str], tuple[Signal, list[int]]] = {}
    for signal in found:
        groups.setdefault((signal.sentence, signal.severity), (signal, []))[1].append(signal.index)
    return list(groups.values())


def _sentences(sheet: Sheet, found: Sequence[Signal], y: float) -> float:
    paper, groups, names = sheet.paper, _grouped(found), sheet.charted.names
    for signal, points in groups[:MOST_SENTENCES]:
        place = [(LEFT + 7, y + 10)]
        sign = svg.diamonds(place, 3.2) if signal.rule == "limit" else svg.dots(place, 1.9)
        paper.add(sign + svg.rings(place, warning=signal.severity == "warning", size=5.4))
        words = names.listed(points)
        start = f"Warning, {words}" if signal.severity == "warning" else words
        written = f"{start}: {signal.sentence}"
        y = paper.lines(LEFT + 20, y + 14, wrap(written, 12, RIGHT - LEFT - 20)) - 12
    left = sum(len(points) for _, points in groups[MOST_SENTENCES:])
    if left:
        y = (
            paper.lines(
                LEFT + 20, y + 14, [f"And {counted(left, 'more signal')}: the answer in numbers tells each."]
            )
            - 12
        )
    return y + (4 if groups else 0)


def _told(frame: Frame, found: Sequence[Signal], charted: Charted) -> str:
    """A panel in words, with its numbers."""
    words = [f"{frame.heading}:"]
    for number, text, role in _line_labels(frame):
        del number
        words.append({"upper": "upper limit", "lower": "lower limit", "centre": "centre"}[role] + f" {text},")
    values = [one.value for one in frame.series if len(one.value)]
    if values:
        low, high = min(float(v.min()) for v in values), max(float(v.max()) for v in values)
        words.append(f"values from {frame.figures(low)} to {frame.figures(high)}.")
    else:
        words[-1] = words[-1].rstrip(",") + "."
    for signal, points in _grouped(found)[:20]:
        words.append(f"{charted.names.listed(points)}: {signal.sentence}")
    return " ".join(words)


def _notes(charted: Charted, frames: Sequence[Frame]) -> Iterable[str]:
    """What the reader must know to read the band aright."""
    for frame in frames:
        for one in frame.series:
            frozen = charted.frozen.get(one.name)
            lines = [line for line in (one.upper, one.lower) if line is not None and len(line)]
            if any(line.strides != (0,) and bool((line != line[0]).any()) for line in lines):
                if not frame.sloping:
                    yield "The limits differ from point to point; the values at the right are those of the last."
                break
            if charted.new or frozen is None or not len(one.value):
                continue
            differing = [
                f"{role} {frame.figures(at)}"
                for role, at, line in (("upper", frozen.upper, one.upper), ("lower", frozen.lower, one.lower))
                if at is not None and line is not None and abs(at - float(line[-1])) > 1e-9 * abs(at)
            ]
            if differing:
                yield (
                    f"This baseline is judged by limits of its own; the frozen limits for new points: "
                    f"{', '.join(differing)}."
                )
        else:
            continue
        break
    if charted.cautions:
        many = len(charted.cautions)
        yield f"{counted(many, 'caution')} with this answer: {', '.join(dict.fromkeys(charted.cautions))}."


def _key(sheet: Sheet, frames: Sequence[Frame], y: float, *, crowded: bool) -> float:
    """The signs that occur, each with its meaning."""
    paper, signals = sheet.paper, sheet.charted.signals
    beyond = any(bool(one.beyond().any()) for frame in frames for one in frame.series if len(one.value))
    entries = [("band", "between the limits"), ("centre", "centre")]
    if any(signal.severity == "action" for signal in signals):
        entries.append(("ring", "part of a signal"))
    if any(signal.severity == "warning" for signal in signals):
        entries.append(("warning", "part of a warning"))
    if crowded:
        entries.append(("foot", "signals here"))
    if beyond:
        entries.append(("diamond", "beyond a limit"))
    if len(sheet.excluded):
        entries.append(("open", "left out of the estimates"))
    x = LEFT
    for sign, words in entries:
        wide = 24 + width(words, _SMALL) + 14
        if x > LEFT and x + wide > RIGHT:
            x, y = LEFT, y + 17
        place = [(x + 8, y - 4)]
        if sign == "band":
            paper.rect(x, y - 9, 17, 10, fill=BAND, more=f' stroke="{EDGE}" stroke-width="0.8"')
        elif sign == "centre":
            paper.line(x, y - 4, x + 18, y - 4, stroke=SOFT, width=0.8, more=' stroke-dasharray="5 4"')
        elif sign == "diamond":
            paper.add(svg.diamonds(place, 4))
        elif sign == "foot":
            paper.path(f"M{x + 4:.1f} {y:.1f}v-8m4 8v-8m4 8v-8", stroke=AMBER, width=1.1)
        elif sign == "open":
            paper.add(svg.open_points(place))
        else:
            paper.add(svg.dots(place, 1.9) + svg.rings(place, warning=sign == "warning", size=5.6))
        paper.text(x + 23, y, words, size=_SMALL, colour=SOFT)
        x += wide
    return y
