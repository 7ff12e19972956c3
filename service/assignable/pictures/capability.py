"""A capability study: the values against their specification, and the indices with their intervals."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np

from ..spc.capability.distributions import Fitted
from ..spc.capability.indices import Capability, Index, MachineCapability
from ..spc.capability.nonnormal import QuantileCapability, QuantileIndex
from ..spc.capability.specification import Specification
from ..spc.data import Floats
from . import scale, svg
from .svg import AMBER, BAND, EDGE, INK, LEFT, RIGHT, SOFT, Paper
from .text import Figures, clean, counted, cut, minus, width, wrap

_SMALL = 11.0
_PLOT = 210.0
_ROW = 19.0
_STATUS = {
    "established": "the values' own chart gives no signal.",
    "provisional": "provisional, for the values' own chart signals.",
    "not-assessed": "not assessed whether the process was in control.",
}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Studied:
    """What a picture of a capability study shows.

    values: of any shape, ``None`` where a summary was given. specification: without limits that are natural
    bounds. capability: where the normal distribution was used; else ``quantiles``, and ``fitted`` the distribution
    they are of, ``None`` where they are the values' own.
    """

    name: str | None
    unit: str | None
    values: Floats | None
    specification: Specification
    status: str
    capability: Capability | None
    quantiles: QuantileCapability | None
    machine: MachineCapability | None
    fitted: Fitted | None = None
    cautions: Sequence[str] = ()

    @property
    def indices(self) -> Capability | QuantileCapability:
        """Whichever of the two there is."""
        found = self.quantiles if self.capability is None else self.capability
        assert found is not None
        return found

    @property
    def centre(self) -> tuple[str, float]:
        """The middle of the values, and what it is."""
        if self.capability is not None:
            return "mean", self.capability.mean
        assert self.quantiles is not None
        return "median", self.quantiles.quantiles[1].value


def draw(studied: Studied) -> str:
    """The picture of a capability study, as SVG."""
    paper, found = Paper(), studied.indices
    name, unit = clean(studied.name or "") or "Capability of measurements", clean(studied.unit or "")
    title = f"{name} ({unit})" if unit else name
    paper.text(LEFT, 30, cut(title, 16, RIGHT - LEFT), size=16, bold=True)
    what = f"Against its specification · {counted(found.count, 'value')}"
    if studied.quantiles is not None:
        named = studied.quantiles.distribution
        what += ", by their own quantiles" if named == "empirical" else f", distribution {named}"
        if studied.quantiles.below_limits:
            what += f"; {studied.quantiles.below_limits:,} below a limit of detection"
    paper.text(LEFT, 50, what, colour=SOFT)
    verdict = _verdict(studied)
    paper.text(LEFT, 72, cut(verdict, 13, RIGHT - LEFT), size=13, bold=True)
    figures = _figures(studied)
    y = _distribution(paper, studied, figures, 98.0)
    y, told = _indices(paper, studied, y + 24)
    if studied.cautions:
        note = f"{counted(len(studied.cautions), 'caution')} with this answer: {', '.join(studied.cautions)}."
        y = paper.lines(LEFT, y + 8, wrap(note, _SMALL, RIGHT - LEFT), size=_SMALL, colour=SOFT) - 4
    spec = studied.specification
    words = [f"{title}. {what}. {verdict}"]
    words += [
        f"{role} {figures(at)}."
        for role, at in (
            ("Lower limit", spec.lower),
            ("Upper limit", spec.upper),
            ("Target", spec.target),
            (studied.centre[0].capitalize(), studied.centre[1]),
        )
        if at is not None
    ]
    words += _expected(found)
    return paper.finish(y + 10, f"{title}: capability", " ".join([*words, *told]))


def _verdict(studied: Studied) -> str:
    """The index to read first, and whether it can be trusted."""
    found = studied.indices
    for name, index in (("Cpk", getattr(found, "cpk", None)), ("Ppk", found.ppk)):
        if index is not None:
            return f"{name} {_interval(index)}; {_STATUS[studied.status]}"
    return _STATUS[studied.status].capitalize()


def _interval(index: Index | QuantileIndex) -> str:
    value, low, high = (
        "…" if number is None else minus(f"{number:.2f}")
        for number in (index.value, index.lower, index.upper)
    )
    return f"{value} ({low} to {high})"


def _spread(studied: Studied) -> tuple[float, float]:
    """From where to where nearly all of the product lies."""
    if studied.quantiles is not None:
        return studied.quantiles.quantiles[0].value, studied.quantiles.quantiles[-1].value
    assert studied.capability is not None
    sigma = studied.capability.total or studied.capability.within
    reach = 3 * sigma.sigma if sigma else 0.0
    return studied.capability.mean - reach, studied.capability.mean + reach


def _figures(studied: Studied) -> Figures:
    spec, (low, high) = studied.specification, _spread(studied)
    known = [at for at in (spec.lower, spec.upper, spec.target, studied.centre[1]) if at is not None]
    return Figures(known, high - low)


# The distribution -----------------------------------------------------------------------------------


def _bins(values: Floats) -> tuple[Floats, Floats]:
    """Counts (k,) and edges (k + 1,); a round width near that of Freedman and Diaconis, 40 at most."""
    low, high = float(values.min()), float(values.max())
    quarter = float(np.subtract(*np.percentile(values, [75, 25])))
    wide = 2 * quarter / len(values) ** (1 / 3)
    wide = max(wide, high / 40 - low / 40)
    if not wide > 0:
        half = 0.05 * abs(low) or 1.0
        return np.array([float(len(values))]), np.array([low - half, low + half])
    power = 10.0 ** math.floor(math.log10(wide))
    step = min((power * times for times in (1, 2, 5, 10)), key=lambda one: abs(math.log(one / wide)))
    # Half a step off, so that values that were read in such steps lie within a bin and not on its edge.
    first = math.floor(low / step + 0.5) - 0.5
    count = max(1, math.ceil(high / step - first + 1e-9))
    limits = np.asarray(step * (first + np.arange(count + 1)), dtype=np.float64)
    return np.histogram(values, limits)[0].astype(float), limits


def _distribution(paper: Paper, studied: Studied, figures: Figures, top: float) -> float:
    found, spec = studied.capability, studied.specification
    middle = studied.centre[1]
    bottom = top + _PLOT
    values = None if studied.values is None else studied.values[~np.isnan(studied.values)].ravel()
    curves = _curves(studied)
    spreads = (None, None) if found is None else (found.total, found.within)
    low, high = _spread(studied)
    widest = max((one.sigma for one in spreads if one is not None), default=0.0)
    ends = [min(low, middle - 3.6 * widest), max(high, middle + 3.6 * widest)]
    ends += [at for at in (spec.lower, spec.upper, spec.target) if at is not None]
    counts, edges = (None, None) if values is None else _bins(values)
    if edges is not None:
        ends += [float(edges[0]), float(edges[-1])]
    low, high = scale.around(ends)
    to_x = scale.Linear(low, high, LEFT + 6, RIGHT - 6)
    # The density's unit is values a bin, so that it lies over the bars.
    # Values below a limit of detection are in no bar, and in the distribution.
    unit = 1.0 if edges is None else float(studied.indices.count * (edges[1] - edges[0]))
    tallest = 0.0 if counts is None else float(counts.max())
    grid = np.linspace(low, high, 321)
    heights = [unit * one.density(grid) for one in curves]
    # Where a distribution begins its density may have no bound: there the curve leaves the paper.
    most = 1.6 * tallest if tallest else math.inf
    highest = max(
        [tallest, *(min(float(each[np.isfinite(each)].max(initial=0.0)), most) for each in heights)]
    )
    highest = highest or 1.0
    to_y = scale.Linear(0.0, highest * 1.08, bottom, top + 20)
    if counts is not None and edges is not None:
        for count, left, right in zip(counts.tolist(), to_x(edges[:-1]), to_x(edges[1:]), strict=True):
            if count:
                here = to_y(count)
                paper.rect(
                    left,
                    here,
                    right - left,
                    bottom - here,
                    fill=BAND,
                    more=f' stroke="{EDGE}" stroke-width="0.8"',
                )
    for one, each in zip(curves, heights, strict=True):
        y = to_y(np.minimum(each, highest * 1.08))
        flat = tuple(np.column_stack((to_x(grid), y)).ravel().tolist())
        paper.path("M" + ("L%.1f %.1f" * len(grid) % flat)[1:], stroke=INK, width=1.3, more=one.style)
    if curves:
        _tails(
            paper, spec, lambda x: np.minimum(unit * curves[0].density(x), highest * 1.08), to_x, to_y, bottom
        )
    paper.line(LEFT, bottom, RIGHT, bottom, stroke=EDGE, width=0.8)
    _marks(paper, studied, figures, to_x, top, bottom)
    _quantiles(paper, studied, to_x, top, bottom)
    x = LEFT
    y = bottom + 38
    entries = [("bar", "values")] if counts is not None else []
    entries += [(one.style, one.words) for one in curves]
    if curves:
        entries.append(("tail", "expected beyond the specification"))
    if studied.quantiles is not None:
        entries.append(("quantile", "0.135 %, 50 % and 99.865 % of the product, each with its interval"))
    for style, words in entries:
        if x > LEFT and x + 23 + width(words, _SMALL) > RIGHT:
            x, y = LEFT, y + 17
        if style == "quantile":
            paper.path(f"M{x + 8:.1f} {y - 11:.1f}v12M{x:.1f} {y - 2:.1f}h16", stroke=SOFT, width=1.2)
        elif style in ("bar", "tail"):
            fill = BAND if style == "bar" else AMBER
            paper.rect(x, y - 9, 17, 10, fill=fill, more=f' stroke="{EDGE}" stroke-width="0.8"')
        else:
            paper.line(x, y - 4, x + 18, y - 4, stroke=INK, width=1.3, more=style)
        paper.text(x + 23, y, words, size=_SMALL, colour=SOFT)
        x += 37 + width(words, _SMALL)
    for line in _not_drawn(studied):
        y += 17
        paper.text(LEFT, y, line, size=_SMALL, colour=SOFT)
    if words_of := _expected(studied.indices):
        y += 22
        paper.text(LEFT, y, cut(" ".join(words_of), 12, RIGHT - LEFT))
    return y


@dataclass(frozen=True, slots=True)
class _Curve:
    """A density drawn over the values: of x (k,) in their unit."""

    density: Callable[[Floats], Floats]
    style: str
    words: str


def _normal(mean: float, sigma: float, x: Floats) -> Floats:
    height: Floats = np.exp(-0.5 * ((x - mean) / sigma) ** 2) / (sigma * math.sqrt(2 * math.pi))
    return height


def _curves(studied: Studied) -> list[_Curve]:
    """The distributions that the figures rest on, the one whose tails count first."""
    found = studied.capability
    if found is None:
        return [] if studied.fitted is None else [_Curve(studied.fitted.density, "", _fitted_words(studied))]
    return [
        _Curve(partial(_normal, found.mean, one.sigma), style, words)
        for one, style, words in (
            (found.total, "", "normal, spread of all values"),
            (found.within, ' stroke-dasharray="5 4"', "normal, spread within subgroups"),
        )
        if one is not None and one.sigma > 0
    ]


def _fitted_words(studied: Studied) -> str:
    """The distribution with its parameters."""
    assert studied.quantiles is not None
    parts = ", ".join(f"{one.name} {minus(f'{one.value:.4g}')}" for one in studied.quantiles.parameters)
    return f"{studied.quantiles.distribution} ({parts})" if parts else studied.quantiles.distribution


def _not_drawn(studied: Studied) -> list[str]:
    """What a reader may miss, and why it is not there."""
    if studied.quantiles is None:
        return []
    words = []
    if studied.fitted is None:
        words.append("No curve: the quantiles are the values' own, and no distribution was fitted to them.")
    if below := studied.quantiles.below_limits:
        words.append(
            f"{counted(below, 'value')} below a limit of detection "
            f"{'is' if below == 1 else 'are'} in the curve and in no bar."
        )
    return words


def _tails(
    paper: Paper,
    spec: Specification,
    height: Callable[[Floats], Floats],
    to_x: scale.Linear,
    to_y: scale.Linear,
    bottom: float,
) -> None:
    """The part of the fitted density beyond the specification, filled."""
    for limit, end in ((spec.lower, to_x.low), (spec.upper, to_x.high)):
        if limit is None:
            continue
        grid = np.linspace(limit, end, 61)
        y = to_y(height(grid))
        if float(bottom - y.min()) < 0.05:
            continue
        flat = tuple(np.column_stack((to_x(grid), y)).ravel().tolist())
        paper.path(
            f"M{to_x(limit):.1f} {bottom:.1f}" + "L%.1f %.1f" * len(grid) % flat + f"V{bottom:.1f}z",
            fill=AMBER,
            width=0,
        )


def _marks(
    paper: Paper, studied: Studied, figures: Figures, to_x: scale.Linear, top: float, bottom: float
) -> None:
    """Specification lines named at the top, target and mean at the foot; the scale between them."""
    spec = studied.specification
    for role, at in (("lower", spec.lower), ("upper", spec.upper)):
        if at is None:
            continue
        x = to_x(at)
        paper.line(x, top + 16, x, bottom, stroke=INK, width=1.8)
        text = f"{role} {figures(at)}"
        half = width(text, 12) / 2
        paper.text(min(max(x, LEFT + half), RIGHT - half), top + 10, text, anchor="middle")
    for role, at in (("target", spec.target),):
        if at is not None:
            x = to_x(at)
            paper.line(x, top + 16, x, bottom, stroke=INK, width=1, more=' stroke-dasharray="1.5 3.5"')
            paper.text(x, top + 10, f"{role} {figures(at)}", anchor="middle")
    role, middle = studied.centre
    x = to_x(middle)
    paper.path(f"M{x:.1f} {bottom + 1:.1f}l4.5 7h-9z", fill=INK, width=0)
    words = f"{role} {figures(middle)}"
    half = width(words, 12) / 2 + 6
    paper.text(min(max(x, LEFT + half), RIGHT - half), bottom + 19, words, anchor="middle")
    found = scale.ticks(to_x.low, to_x.high, 6)
    for tick, text in zip(found, figures.even(found), strict=True):
        here = to_x(tick)
        reach = width(text, _SMALL) / 2
        if abs(here - x) > half + reach and LEFT + reach <= here <= RIGHT - reach:
            paper.line(here, bottom, here, bottom + 4, stroke=EDGE, width=0.8)
            paper.text(here, bottom + 17, text, size=_SMALL, anchor="middle", colour=SOFT)


def _quantiles(paper: Paper, studied: Studied, to_x: scale.Linear, top: float, bottom: float) -> None:
    """The quantiles that the indices rest on, with their intervals."""
    if studied.quantiles is None:
        return
    for one in studied.quantiles.quantiles:
        x = to_x(one.value)
        paper.line(x, top + 40, x, bottom, stroke=SOFT, width=1.2)
        low = x if one.lower is None else max(to_x(one.lower), LEFT)
        high = x if one.upper is None else min(to_x(one.upper), RIGHT)
        y = top + 48
        paper.path(f"M{low:.1f} {y:.1f}H{high:.1f}", stroke=SOFT, width=1.2)
        paper.text(x + 4, top + 37, f"{100 * one.probability:g} %", size=_SMALL, colour=SOFT, halo=True)


def _expected(found: Capability | QuantileCapability) -> list[str]:
    """Nonconforming product, expected and seen, in words."""
    words = []
    expected = (
        found.expected
        if isinstance(found, QuantileCapability)
        else found.expected_total or found.expected_within
    )
    if expected is not None:
        low, high = (
            "…" if at is None else _ppm(at) for at in (expected.total_lower_ppm, expected.total_upper_ppm)
        )
        words.append(f"Expected nonconforming: {_ppm(expected.total_ppm)} ppm ({low} to {high}).")
    if found.observed is not None:
        words.append(f"Observed: {found.observed.total:,} of {found.observed.inspected:,}.")
    return words


def _ppm(number: float) -> str:
    return f"{number:,.0f}" if number >= 100 else f"{number:.3g}" if number >= 1e-4 else "0"


# The indices ----------------------------------------------------------------------------------------


Row = tuple[str, Index | QuantileIndex]


def _groups(studied: Studied) -> list[tuple[str, list[Row]]]:
    found, machine = studied.indices, studied.machine
    overall = ("Pp", found.pp), ("Ppk", found.ppk), ("Ppl", found.ppl), ("Ppu", found.ppu)
    groups: list[tuple[str, tuple[tuple[str, Index | QuantileIndex | None], ...]]] = []
    if isinstance(found, Capability):
        within = ("Cp", found.cp), ("Cpk", found.cpk), ("Cpl", found.cpl), ("Cpu", found.cpu)
        target = ("Cpm", found.cpm), ("Cpmk", found.cpmk)
        groups = [
            ("spread within subgroups", within),
            ("spread of all values", overall),
            ("about the target", target),
        ]
    else:
        groups = [("spread between the quantiles", overall)]
    if machine is not None:
        groups.append(("short run of one machine", (("Cm", machine.cm), ("Cmk", machine.cmk))))
    shown = [(title, [(name, index) for name, index in rows if index is not None]) for title, rows in groups]
    return [group for group in shown if group[1]]


def _indices(paper: Paper, studied: Studied, y: float) -> tuple[float, list[str]]:
    """The indices as intervals on one scale; returns where they end, and the same in words."""
    groups = _groups(studied)
    rows = [index for _, members in groups for _, index in members]
    if not rows:
        return y, []
    confidence = f"{100 * studied.indices.confidence:g} %"
    paper.text(LEFT, y, f"Indices, each with its {confidence} interval", colour=SOFT)
    y += 8
    ends = [end for row in rows for end in (row.value, row.lower, row.upper) if end is not None]
    low, high = min(0.0, *ends), max(1.1, *ends)
    to_x = scale.Linear(low, high * 1.03, LEFT + 62, RIGHT - 150)
    top = y
    told = []
    body = Paper()
    for title, members in groups:
        y += _ROW
        body.text(LEFT, y, title, size=_SMALL, colour=SOFT)
        for name, index in members:
            y += _ROW
            written = _interval(index)
            body.text(LEFT + 8, y, name)
            at = to_x(index.value)
            for end in (index.lower, index.upper):
                if end is not None:
                    body.path(f"M{at:.1f} {y - 4:.1f}H{to_x(end):.1f}m0 -4v8", stroke=SOFT, width=1.2)
            body.add(svg.dots([(at, y - 4)], 3))
            body.text(RIGHT, y, written, anchor="end")
            told.append(f"{name} {written}.")
    bottom = y + 6
    one = to_x(1.0)
    for tick in scale.ticks(to_x.low, to_x.high, 8):
        x = to_x(tick)
        paper.line(x, bottom, x, bottom + 4, stroke=EDGE, width=0.8)
        paper.text(x, bottom + 16, f"{tick:g}", size=_SMALL, anchor="middle", colour=SOFT)
    paper.line(to_x.start, bottom, to_x.end, bottom, stroke=EDGE, width=0.8)
    paper.line(one, top + 8, one, bottom, stroke=SOFT, width=0.8, more=' stroke-dasharray="5 4"')
    paper.add("".join(body.elements))
    return bottom + 22, told
