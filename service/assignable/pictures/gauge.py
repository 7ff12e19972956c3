"""A gauge study: how much of what is seen the gauge makes, and who or what makes it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..spc.data import Floats
from ..spc.studies.crossed import CrossedStudy
from ..spc.studies.nested import NestedStudy
from ..spc.studies.variance_components import VarianceComponent
from . import rows, scale, svg, thin
from .svg import BAND, EDGE, INK, LEFT, RIGHT, SOFT, Paper
from .text import Figures, clean, counted, cut, minus, width, wrap

_SMALL = 11.0
_LOW, _HIGH = LEFT + 6, RIGHT - 74
_LANE = 62.0
_MOST_LANES = 8
_DASHED = ' stroke-dasharray="5 4"'
_BAND = 2.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Gauged:
    """What a picture of a gauge study shows.

    measurements: (appraisers, parts, trials). parts: the names of each appraiser's parts in turn, the same ones
    in a crossed study.
    """

    name: str | None
    unit: str | None
    study: CrossedStudy | NestedStudy
    appraisers: Sequence[str]
    parts: Sequence[Sequence[str]]
    measurements: Floats
    cautions: Sequence[str] = ()

    @property
    def shared(self) -> bool:
        """Whether all appraisers measured the same parts."""
        return isinstance(self.study, CrossedStudy)


def draw(gauged: Gauged) -> str:
    """The picture of a gauge study, as SVG."""
    paper = Paper()
    o, p, r = gauged.measurements.shape
    name, unit = clean(gauged.name or "") or "Gauge study", clean(gauged.unit or "")
    title = f"{name} ({unit})" if unit else name
    paper.text(LEFT, 30, cut(title, 16, RIGHT - LEFT), size=16, bold=True)
    each = "" if gauged.shared else " each"
    what = (
        f"{'Crossed' if gauged.shared else 'Nested'} gauge study · {counted(o, 'appraiser')}, "
        f"{counted(p, 'part')}{each}, measured {'once' if r == 1 else 'twice' if r == 2 else f'{r} times'}"
    )
    paper.text(LEFT, 50, cut(what, 12, RIGHT - LEFT), colour=SOFT)
    verdict = _verdict(gauged)
    y = 72.0
    for line in wrap(verdict, 13, RIGHT - LEFT):
        paper.text(LEFT, y, line, size=13, bold=True)
        y += 18
    told = [f"{title}. {what}. {verdict}"]
    y = _components(paper, gauged, y + 8, told)
    y = _lanes(paper, gauged, y + 22, told)
    if gauged.cautions:
        note = f"{counted(len(gauged.cautions), 'caution')} with this answer: {', '.join(gauged.cautions)}."
        y = paper.lines(LEFT, y + 22, wrap(note, _SMALL, RIGHT - LEFT), size=_SMALL, colour=SOFT) - 14
    return paper.finish(y + 16, f"{title}: gauge study", " ".join(told))


def _percent(number: float) -> str:
    return f"{number:.3g} %" if abs(number) < 1000 else f"{number:,.0f} %"


def _verdict(gauged: Gauged) -> str:
    """What the gauge costs of the specification, and how finely it sorts."""
    gauge, found = gauged.study.components.gauge, gauged.study.discrimination
    if (share := gauge.share_of_tolerance_percent) is not None:
        words = f"The gauge takes {_percent(share)} of the specification"
        if gauge.sd > 0:
            low, high = (_percent(share * (end / gauge.sd)) for end in (gauge.sd_lower, gauge.sd_upper))
            words += f" ({low.removesuffix(' %')} to {high})"
    elif gauge.sd_share_percent is not None:
        words = f"The gauge makes {_percent(gauge.sd_share_percent)} of the spread seen"
    else:
        return "Nothing varies here: neither the parts nor the gauge."
    many, ratio = found.distinct_categories, found.distinct_categories_ratio
    if many is None or ratio is None:
        return f"{words}; it shows no variation of its own."
    words += f"; it tells {counted(many, 'category', 'categories')} of such parts apart"
    least, most = found.distinct_categories_ratio_lower, found.distinct_categories_ratio_upper
    interval = "" if least is None or most is None else f", {least:.3g} to {most:.3g}"
    return f"{words} (ratio {ratio:.3g}{interval})."


# Where the spread comes from ------------------------------------------------------------------------


def _components(paper: Paper, gauged: Gauged, y: float, told: list[str]) -> float:
    found = gauged.study.components
    listed: list[tuple[str, VarianceComponent | None, int]] = [
        ("measurement system", found.gauge, 0),
        ("repeatability", found.repeatability, 1),
        ("appraisers", found.appraiser, 1),
        ("part by appraiser", found.part_by_appraiser, 1),
        ("parts", found.part, 0),
        ("all together", found.total, 0),
    ]
    shown = [(name, one, indent) for name, one, indent in listed if one is not None]
    of = "specification" if found.gauge.share_of_tolerance_percent is not None else None
    confidence = f"{100 * gauged.study.confidence:g} %"
    paper.text(
        LEFT, y, f"Where the spread comes from: standard deviations with {confidence} intervals", colour=SOFT
    )
    if of is not None:
        y += 16
        words = f"last column: share of the {of}"
        paper.text(RIGHT, y, words, size=_SMALL, anchor="end", colour=SOFT)
    largest = max(one.sd for _, one, _ in shown)
    ends = max(one.sd_upper for _, one, _ in shown)
    most = min(ends, 2.2 * largest) if largest > 0 else ends
    to_x = scale.Linear(0.0, most if most > 0 else 1.0, LEFT + 150, RIGHT - 236)
    drawn = []
    for name, one, indent in shown:
        written = f"{one.sd:.3g} ({one.sd_lower:.3g} to {one.sd_upper:.3g})"
        share = one.share_of_tolerance_percent
        last = f" · {_percent(share)}" if of is not None and share is not None else ""
        drawn.append(rows.Row(name, one.sd, one.sd_lower, one.sd_upper, written + last, indent))
        told.append(
            f"{name.capitalize()} {written}{f', {_percent(share)} of the {of}' if last and share is not None else ''}."
        )
    return rows.draw(paper, drawn, y - 4, to_x)


# What each appraiser found --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class _Lane:
    """One appraiser: places along the parts, and their measurements (parts, trials) and means (parts,)."""

    appraiser: int
    values: Floats
    means: Floats
    order: Sequence[int]


def _lanes(paper: Paper, gauged: Gauged, y: float, told: list[str]) -> float:
    x = gauged.measurements
    o, p, _ = x.shape
    by_part = x.mean(axis=2)
    offsets = by_part.mean(axis=1) - gauged.study.grand_mean
    if gauged.shared:
        of_part = by_part.mean(axis=0)
        ranked = np.argsort(of_part, kind="stable")
        values, means = x - of_part[:, None], by_part - of_part
        heading = "What each appraiser found: measurement less the mean of that part by all"
    else:
        ranked = np.arange(p)
        values, means = x, by_part
        heading = "What each appraiser found, part by part"
    chosen = sorted(np.argsort(-np.abs(offsets), kind="stable")[:_MOST_LANES].tolist())
    paper.text(LEFT, y, heading, colour=SOFT)
    sd = gauged.study.components.repeatability.sd
    edges = [-_BAND * sd, _BAND * sd]
    if not gauged.shared:
        edges = [float(means.min()) - _BAND * sd, float(means.max()) + _BAND * sd]
    low, high = scale.around([float(values.min()), float(values.max()), *edges])
    figures = Figures([low, high, *edges])
    step = (_HIGH - _LOW) / p
    places = _LOW + step * (np.arange(p) + 0.5)
    for at in chosen:
        order = ranked.tolist()
        lane = _Lane(at, values[at][ranked], means[at][ranked], order)
        y = _lane(paper, gauged, lane, float(offsets[at]), (low, high), figures, places, y + 22, told)
        if not gauged.shared:
            y = _under(paper, [gauged.parts[at][each] for each in order], places, y)
    if gauged.shared:
        y = _under(paper, [gauged.parts[0][each] for each in ranked.tolist()], places, y)
    y += 14
    band = f"{_BAND:g} standard deviations of repeatability either way"
    paper.rect(LEFT, y - 9, 17, 10, fill=BAND, more=f' stroke="{EDGE}" stroke-width="0.8"')
    paper.text(LEFT + 23, y, band, size=_SMALL, colour=SOFT)
    start = LEFT + 37 + width(band, _SMALL)
    paper.line(start, y - 4, start + 18, y - 4, stroke=INK, width=1.3)
    paper.text(start + 23, y, "mean of the measurements of a part", size=_SMALL, colour=SOFT)
    notes = []
    if gauged.shared:
        notes.append("Parts in the order of their means.")
    if o > len(chosen):
        notes.append(f"Drawn: the {len(chosen)} of {o} appraisers farthest from the mean of all.")
    notes += _interaction(gauged.study)
    if notes:
        y = (
            paper.lines(LEFT, y + 18, wrap(" ".join(notes), _SMALL, RIGHT - LEFT), size=_SMALL, colour=SOFT)
            - 15
        )
        told.append(" ".join(notes))
    return y


def _interaction(study: CrossedStudy | NestedStudy) -> list[str]:
    """Whether appraisers differ from part to part."""
    if not isinstance(study, CrossedStudy) or study.interaction_p_value is None:
        return []
    words = f"Appraisers differing from part to part (interaction): p = {study.interaction_p_value:.3g}"
    return [f"{words}{', counted as repeatability' if study.interaction_pooled else ''}."]


def _lane(
    paper: Paper,
    gauged: Gauged,
    lane: _Lane,
    offset: float,
    ends: tuple[float, float],
    figures: Figures,
    places: Floats,
    y: float,
    told: list[str],
) -> float:
    """One appraiser's measurements; returns where the lane ends."""
    name = clean(gauged.appraisers[lane.appraiser]) or f"appraiser {lane.appraiser + 1}"
    facts = (
        f"mean {'+' if offset > 0 else ''}{minus(f'{offset:.3g}')} against all"
        if len(gauged.appraisers) > 1
        else ""
    )
    if gauged.study.repeatability_by_appraiser:
        own = gauged.study.repeatability_by_appraiser[lane.appraiser]
        facts += f"{', ' if facts else ''}repeats to {own.sd:.3g} ({own.lower:.3g} to {own.upper:.3g})"
    paper.text(LEFT, y, cut(name, 12, RIGHT - LEFT - width(facts, _SMALL) - 12))
    paper.text(RIGHT, y, facts, size=_SMALL, anchor="end", colour=SOFT)
    told.append(f"{name}: {facts}." if facts else f"{name}.")
    top, bottom = y + 6, y + 6 + _LANE
    to_y = scale.Linear(*ends, bottom, top)
    sd = gauged.study.components.repeatability.sd
    heights = to_y(lane.means)
    half = min(0.4 * (places[1] - places[0] if len(places) > 1 else 60.0), 16.0)
    if gauged.shared:
        _band(paper, to_y, figures, sd)
        flat = "L".join(f"{a:.1f} {b:.1f}" for a, b in zip(places.tolist(), heights.tolist(), strict=True))
        paper.path(f"M{flat}", stroke=INK, width=1.3)
    else:
        reach = abs(to_y(_BAND * sd) - to_y(0.0))
        bands = (
            (a - half, max(b - reach, top), min(b + reach, bottom))
            for a, b in zip(places.tolist(), heights.tolist(), strict=True)
        )
        boxes = "".join(
            f"M{x:.1f} {high:.1f}h{2 * half:.1f}V{low:.1f}h{-2 * half:.1f}z" for x, high, low in bands
        )
        paper.path(boxes, fill=BAND, width=0)
        dashes = "".join(
            f"M{a - half:.1f} {b:.1f}h{2 * half:.1f}"
            for a, b in zip(places.tolist(), heights.tolist(), strict=True)
        )
        paper.path(dashes, stroke=INK, width=1.3)
        middle = to_y(float(lane.means.mean()))
        paper.line(_LOW, middle, _HIGH, middle, stroke=SOFT, width=0.8, more=_DASHED)
        paper.text(_HIGH + 6, middle + 4, figures(float(lane.means.mean())), size=_SMALL, colour=SOFT)
    trials = lane.values.shape[1]
    spread = np.linspace(-0.5, 0.5, trials) * min(half, 8.0) if trials > 1 else np.zeros(1)
    all_x, all_y = (places[:, None] + spread).ravel(), to_y(lane.values).ravel()
    kept = thin.apart(all_x, all_y, 2.5) if all_x.size > 1500 else np.arange(all_x.size)
    paper.add(svg.dots(list(zip(all_x[kept].tolist(), all_y[kept].tolist(), strict=True)), 2.0))
    return bottom


def _band(paper: Paper, to_y: scale.Linear, figures: Figures, sd: float) -> None:
    """What repeatability alone would give, about the mean of the part by all."""
    low, high = to_y(-_BAND * sd), to_y(_BAND * sd)
    if sd > 0:
        paper.rect(_LOW, high, _HIGH - _LOW, low - high, fill=BAND)
        paper.path(
            f"M{_LOW:.1f} {low:.1f}H{_HIGH:.1f}M{_LOW:.1f} {high:.1f}H{_HIGH:.1f}", stroke=EDGE, width=1
        )
    zero = to_y(0.0)
    paper.line(_LOW, zero, _HIGH, zero, stroke=SOFT, width=0.8, more=_DASHED)
    paper.text(_HIGH + 6, zero + 4, "0", size=_SMALL, colour=SOFT)
    if low - zero > 11:
        for at, number in ((high, _BAND * sd), (low, -_BAND * sd)):
            paper.text(_HIGH + 6, at + 4, figures(number), size=_SMALL, colour=SOFT)


def _under(paper: Paper, names: Sequence[str], places: Floats, y: float) -> float:
    """Names of the parts, where there is room; a part farther on where there is none."""
    shown = [cut(clean(name), _SMALL, 92.0) for name in names]
    last = -1e9
    for x, name in zip(places.tolist(), shown, strict=True):
        half = width(name, _SMALL) / 2
        paper.line(x, y, x, y + 3, stroke=EDGE, width=0.8)
        left = max(x - half, LEFT)
        if left < last + 6:
            continue
        last = left + 2 * half
        paper.text(left, y + 15, name, size=_SMALL, colour=SOFT)
    return y + 18
