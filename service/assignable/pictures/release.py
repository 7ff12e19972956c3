"""A release check at a glance: each characteristic against its specification, and what speaks against it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from ..spc.capability.specification import Specification
from ..spc.release import Compared, Disposition
from . import scale, svg
from .svg import BAND, EDGE, INK, LEFT, RIGHT, SOFT, Paper
from .text import Figures, clean, counted, cut, width, wrap

_SMALL = 11.0
_FROM, _TO = LEFT + 120, RIGHT - 120
"""Where every specification lies, whatever its unit."""
_EDGE_LOW, _EDGE_HIGH = LEFT + 8, RIGHT - 8
_MOST_ROWS = 60
_MOST_REASONS = 4
_MOST_WHISKERS = 6
_WHISKER = 2.0
_DOTTED = ' stroke-dasharray="1.5 3.5"'
_DASHED = ' stroke-dasharray="5 4"'
_WORDS: dict[Disposition, str] = {
    "supports-release": "supports release",
    "needs-review": "needs review",
    "does-not-support-release": "does not support release",
}
_RANK: tuple[Disposition, ...] = ("does-not-support-release", "needs-review", "supports-release")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Row:
    """One characteristic that was checked.

    specification: without limits that are natural bounds. acceptance: its acceptance limits, standard: the
    standard uncertainty of a value, where stated. own: the limits of its own chart where those are in its unit,
    of the values or of the ``averages`` then given. rounded: whether values were rounded to be compared.
    """

    name: str
    unit: str | None
    disposition: Disposition
    reasons: Sequence[str]
    present: int
    least_margin: float | None
    compared: Compared
    rounded: bool
    specification: Specification
    acceptance: tuple[float | None, float | None]
    standard: float | None
    own: tuple[float, float] | None
    averages: Sequence[float]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Released:
    """What a picture of a release check shows."""

    batch: str | None
    disposition: Disposition
    note: str
    rows: Sequence[Row]
    cautions: Sequence[str] = ()


def draw(released: Released) -> str:
    """The picture of a release check, as SVG."""
    paper = Paper()
    batch = clean(released.batch or "")
    title = f"Release check of {batch}" if batch else "Release check"
    paper.text(LEFT, 30, cut(title, 16, RIGHT - LEFT), size=16, bold=True)
    verdict = _verdict(released)
    y = 54.0
    left = LEFT + _sign(paper, LEFT, y, released.disposition)
    for line in wrap(verdict, 13, RIGHT - left):
        paper.text(left, y, line, size=13, bold=True)
        y += 18
    y = paper.lines(LEFT, y + 2, wrap(released.note, _SMALL, RIGHT - LEFT), size=_SMALL, colour=SOFT)
    told = [f"{title}. {verdict} {released.note}"]
    shown = list(released.rows)
    if len(shown) > _MOST_ROWS:
        order = sorted(range(len(shown)), key=lambda at: _RANK.index(shown[at].disposition))
        shown = [shown[at] for at in sorted(order[:_MOST_ROWS])]
    for row in shown:
        paper.line(LEFT, y, RIGHT, y, stroke=BAND, width=1)
        y = _row(paper, row, y, told)
    if more := len(released.rows) - len(shown):
        words = (
            f"And {counted(more, 'characteristic')} more, which speak less against release than those shown."
        )
        paper.text(LEFT, y + 14, words, colour=SOFT)
        told.append(words)
        y += 24
    paper.line(LEFT, y, RIGHT, y, stroke=BAND, width=1)
    y = _key(paper, shown, y + 20)
    if released.cautions:
        note = (
            f"{counted(len(released.cautions), 'caution')} with this answer: {', '.join(released.cautions)}."
        )
        y = paper.lines(LEFT, y + 20, wrap(note, _SMALL, RIGHT - LEFT), size=_SMALL, colour=SOFT) - 15
    return paper.finish(y + 16, title, " ".join(told))


def _verdict(released: Released) -> str:
    word = _WORDS[released.disposition]
    word = f"{word[0].upper()}{word[1:]}"
    count = len(released.rows)
    if released.disposition == "supports-release":
        if count == 1:
            return f"{word}: nothing here speaks against it."
        return f"{word}: nothing in {count} characteristics speaks against it."
    words = f"{word}: {_named(released.rows, released.disposition)}."
    if released.disposition == "does-not-support-release" and any(
        row.disposition == "needs-review" for row in released.rows
    ):
        words += f" To be reviewed: {_named(released.rows, 'needs-review')}."
    return words


def _named(rows: Sequence[Row], disposition: Disposition) -> str:
    names = [clean(row.name) for row in rows if row.disposition == disposition]
    more = len(names) - 3
    return ", ".join(names) if more <= 1 else f"{', '.join(names[:3])} and {more} more"


def _sign(paper: Paper, x: float, y: float, disposition: Disposition) -> float:
    """The sign of a disposition; returns how much room it takes."""
    place = [(x + 7, y - 4)]
    if disposition == "supports-release":
        return 0.0
    found = svg.rings(place, size=6.2)
    paper.add(found if disposition == "needs-review" else svg.diamonds(place, 3.6) + found)
    return 20.0


# A characteristic -----------------------------------------------------------------------------------


def _scale(row: Row) -> scale.Linear:
    """The specification between two fixed places; with one limit, what was found from the other."""
    lower, upper = row.specification.lower, row.specification.upper
    if lower is not None and upper is not None and lower < upper:
        return scale.Linear(lower, upper, _FROM, _TO)
    numbers = [*row.compared.unrounded.tolist(), *(row.own or ()), *row.averages]
    if row.specification.target is not None:
        numbers.append(row.specification.target)
    limit = upper if upper is not None else lower
    assert limit is not None
    if row.compared.below.size and min(numbers, default=0.0) >= 0:
        numbers.append(0.0)
    far = min([*numbers, limit]) if upper is not None else max([*numbers, limit])
    if not abs(limit / 2 - far / 2) > 1e-12 * abs(limit):
        reach = 0.1 * abs(limit) or 1.0
        far = limit - reach if upper is not None else limit + reach
    return scale.Linear(far, limit, _FROM, _TO) if upper is not None else scale.Linear(limit, far, _FROM, _TO)


def _row(paper: Paper, row: Row, y: float, told: list[str]) -> float:
    """A characteristic under ``y``; returns where it ends."""
    name, unit = clean(row.name) or "characteristic", clean(row.unit or "")
    word = _WORDS[row.disposition]
    wide = width(word, 12) + 4
    paper.text(
        LEFT, y + 18, cut(f"{name} ({unit})" if unit else name, 12, RIGHT - LEFT - wide - 40), bold=True
    )
    paper.text(RIGHT, y + 18, word, anchor="end", bold=row.disposition != "supports-release")
    _sign(paper, RIGHT - wide - 18, y + 18, row.disposition)
    to_x = _scale(row)
    figures = _figures(row, to_x)
    _strip(paper, row, to_x, figures, y + 50)
    y += 86 if row.compared.below.size or _off(row, to_x) else 76
    reasons = [clean(one) for one in row.reasons[:_MOST_REASONS]]
    if more := len(row.reasons) - len(reasons):
        reasons.append(f"And {counted(more, 'reason')} more, in the answer.")
    if not reasons:
        reasons = [_nothing(row, figures)]
    for reason in reasons:
        y = paper.lines(LEFT, y, wrap(reason, _SMALL, RIGHT - LEFT), size=_SMALL, colour=SOFT)
    spec = row.specification
    limits = " and ".join(
        f"{role} limit {figures(at)}"
        for role, at in (("lower", spec.lower), ("upper", spec.upper))
        if at is not None
    )
    told.append(f"{name}, {word}, {limits}: {' '.join(reasons)}")
    return y - 4


def _figures(row: Row, to_x: scale.Linear) -> Figures:
    spec = row.specification
    known = [at for at in (spec.lower, spec.upper, spec.target) if at is not None]
    return Figures([*known, *row.compared.unrounded.tolist()], to_x.high - to_x.low)


def _nothing(row: Row, figures: Figures) -> str:
    words = f"Nothing speaks against it: {counted(row.present, 'result')}"
    if row.compared.below.size:
        words += f", {row.compared.below.size:,} of them below detection"
    if row.least_margin is not None:
        words += f"; nearest to a limit by {figures(row.least_margin)}"
    return f"{words}."


def _strip(paper: Paper, row: Row, to_x: scale.Linear, figures: Figures, y: float) -> None:
    """The axis with its limits, what was found, and how sure it is."""
    spec = row.specification

    def place(number: float) -> float:
        return float(min(max(to_x(number), _EDGE_LOW), _EDGE_HIGH))

    if row.own is not None:
        left, right = place(row.own[0]), place(row.own[1])
        paper.rect(left, y - 8, right - left, 16, fill=BAND)
        edges = [
            f"M{at:.1f} {y - 8:.1f}v16"
            for at, number in ((left, row.own[0]), (right, row.own[1]))
            if abs(at - to_x(number)) < 0.1
        ]
        if edges:
            paper.path("".join(edges), stroke=EDGE, width=1)
    paper.line(_EDGE_LOW, y, _EDGE_HIGH, y, stroke=EDGE, width=0.8)
    for role, at in (("lower", spec.lower), ("upper", spec.upper)):
        if at is not None:
            x = to_x(at)
            paper.line(x, y - 12, x, y + 12, stroke=INK, width=1.8)
            paper.text(x, y - 16, f"{role} {figures(at)}", size=_SMALL, anchor="middle", colour=SOFT)
    if spec.target is not None:
        x = place(spec.target)
        paper.line(x, y - 12, x, y + 12, stroke=SOFT, width=0.8, more=_DASHED)
        paper.text(x, y - 16, f"target {figures(spec.target)}", size=_SMALL, anchor="middle", colour=SOFT)
    for limit in row.acceptance:
        if limit is not None:
            x = place(limit)
            paper.line(x, y - 12, x, y + 12, stroke=INK, width=1.2, more=_DOTTED)
    _results(paper, row, to_x, figures, y)
    if row.compared.below.size:
        bounds = sorted({row.compared.unrounded[at] for at in row.compared.below.tolist()})
        words = f"{row.compared.below.size:,} below {figures(float(bounds[-1]))}"
        x = min(max(place(float(bounds[-1])), _EDGE_LOW + width(words, _SMALL)), _EDGE_HIGH)
        paper.text(x, y + 19, words, size=_SMALL, anchor="end", colour=SOFT)


def _off(row: Row, to_x: scale.Linear) -> list[float]:
    """The farthest results beyond each end of the scale, where the sign stands at its edge."""
    below = set(row.compared.below.tolist())
    known = [value for at, value in enumerate(row.compared.unrounded.tolist()) if at not in below]
    if not known:
        return []
    return [value for value in {min(known), max(known)} if not _EDGE_LOW <= to_x(value) <= _EDGE_HIGH]


def _results(paper: Paper, row: Row, to_x: scale.Linear, figures: Figures, y: float) -> None:
    values = row.compared.unrounded.tolist()
    below = set(row.compared.below.tolist())
    known = [(at, value) for at, value in enumerate(values) if at not in below]
    spread = sorted(value for _, value in known)
    if row.standard:
        ends = spread if len(spread) <= _MOST_WHISKERS else [spread[0], spread[-1]]
        for value in ends:
            low, high = (
                min(max(to_x(value + side * _WHISKER * row.standard), _EDGE_LOW), _EDGE_HIGH)
                for side in (-1, 1)
            )
            paper.path(
                f"M{low:.1f} {y - 4:.1f}v8M{low:.1f} {y:.1f}H{high:.1f}M{high:.1f} {y - 4:.1f}v8",
                stroke=SOFT,
                width=1.2,
            )
    dots: list[tuple[float, float]] = []
    diamonds: list[tuple[float, float]] = []
    rings: list[tuple[float, float]] = []
    for at, value in known:
        x = to_x(value)
        here = (float(min(max(x, _EDGE_LOW), _EDGE_HIGH)), y)
        standing = row.compared.standing[at]
        (diamonds if standing == "out-of-specification" else dots).append(here)
        if standing != "conforms":
            rings.append(here)
    if row.averages:
        path = "".join(
            f"M{min(max(to_x(each), _EDGE_LOW), _EDGE_HIGH):.1f} {y + 3:.1f}l4.5 8h-9z"
            for each in row.averages
        )
        paper.path(path, fill=INK, width=0)
    for at in sorted(below):
        x = float(min(max(to_x(values[at]), _EDGE_LOW), _EDGE_HIGH))
        paper.path(f"M{x:.1f} {y:.1f}h-26m5 -4l-5 4l5 4", stroke=INK, width=1.2)
        paper.add(svg.open_points([(x, y)]))
        if row.compared.standing[at] != "conforms":
            rings.append((x, y))
    if dots:
        paper.add(svg.dots(dots, 2.9))
    if diamonds:
        paper.add(svg.diamonds(diamonds))
    for value in _off(row, to_x):
        if to_x(value) > _EDGE_HIGH:
            paper.text(RIGHT, y + 19, f"{figures(value)} →", size=_SMALL, anchor="end", colour=SOFT)
        else:
            paper.text(LEFT, y + 19, f"← {figures(value)}", size=_SMALL, colour=SOFT)
    if rings:
        paper.add(svg.rings(rings))


# The key --------------------------------------------------------------------------------------------


def _key(paper: Paper, rows: Sequence[Row], y: float) -> float:
    """What the signs mean, those that are there."""
    standings = {standing for row in rows for standing in row.compared.standing}
    rounded = any(row.rounded for row in rows)
    entries = [
        ("dot", "result, before rounding" if rounded else "result", True),
        ("ring", "in doubt", bool(standings & {"in-guard-band", "undecided"})),
        ("diamond", "out of specification", "out-of-specification" in standings),
        ("below", "below detection", any(row.compared.below.size for row in rows)),
        ("whisker", f"{_WHISKER:g} standard uncertainties either way", any(row.standard for row in rows)),
        ("limit", "specification limit", True),
        ("dotted", "acceptance limit", any(any(at is not None for at in row.acceptance) for row in rows)),
        ("band", "within the limits of its own chart", any(row.own is not None for row in rows)),
        ("average", "average on that chart", any(row.averages for row in rows)),
    ]
    x = LEFT
    for sign, words, there in entries:
        if not there:
            continue
        if x > LEFT and x + 23 + width(words, _SMALL) > RIGHT:
            x, y = LEFT, y + 17
        middle = (x + 8, y - 4)
        if sign == "band":
            paper.rect(x, y - 9, 17, 10, fill=BAND, more=f' stroke="{EDGE}" stroke-width="0.8"')
        elif sign in ("limit", "dotted"):
            look = _DOTTED if sign == "dotted" else ""
            paper.line(x + 8, y - 11, x + 8, y + 2, stroke=INK, width=1.2 if look else 1.8, more=look)
        elif sign == "whisker":
            paper.path(f"M{x:.1f} {y - 8:.1f}v8M{x:.1f} {y - 4:.1f}h17m0 -4v8", stroke=SOFT, width=1.2)
        elif sign == "average":
            paper.path(f"M{x + 8:.1f} {y - 8:.1f}l4.5 8h-9z", fill=INK, width=0)
        elif sign == "below":
            paper.path(f"M{x + 14:.1f} {y - 4:.1f}h-14m4 -4l-4 4l4 4", stroke=INK, width=1.2)
            paper.add(svg.open_points([(x + 14, y - 4)]))
        elif sign == "diamond":
            paper.add(svg.diamonds([middle]) + svg.rings([middle]))
        elif sign == "ring":
            paper.add(svg.dots([middle], 2.9) + svg.rings([middle]))
        else:
            paper.add(svg.dots([middle], 2.9))
        paper.text(x + 23, y, words, size=_SMALL, colour=SOFT)
        x += 37 + width(words, _SMALL)
    return y
