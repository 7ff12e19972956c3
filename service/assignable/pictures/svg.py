"""The paper: elements one after the other, and the frame around them."""

from __future__ import annotations

from collections.abc import Sequence
from hashlib import sha256

from .text import escape

WIDTH = 640
LEFT = 14.0
RIGHT = WIDTH - 14.0

INK = "#1d2730"
SOFT = "#55636e"
BAND = "#e2eaf0"
EDGE = "#7c909e"
AMBER = "#b86200"

_OWN = "\x00"  # stands for the picture's own prefix until that is known; no text can hold it
_TEXT = 12.0


class Paper:
    """Elements in the order in which they are drawn."""

    def __init__(self) -> None:
        self.elements: list[str] = []

    def add(self, element: str) -> None:
        """An element as it stands."""
        self.elements.append(element)

    def text(
        self,
        x: float,
        y: float,
        words: str,
        *,
        size: float = _TEXT,
        anchor: str = "start",
        colour: str = INK,
        bold: bool = False,
        halo: bool = False,
    ) -> None:
        """A line of text; ``y`` is where it stands. A ``halo`` keeps it readable over lines."""
        more = "" if size == _TEXT else f' font-size="{size:g}"'
        more += "" if anchor == "start" else f' text-anchor="{anchor}"'
        more += "" if colour == INK else f' fill="{colour}"'
        more += ' font-weight="600"' if bold else ""
        more += ' stroke="#ffffff" stroke-width="3" paint-order="stroke"' if halo else ""
        self.elements.append(f'<text x="{x:.1f}" y="{y:.1f}"{more}>{escape(words)}</text>')

    def lines(
        self, x: float, y: float, lines: Sequence[str], *, size: float = _TEXT, colour: str = INK
    ) -> float:
        """Lines of text under each other; returns where the next would stand."""
        for line in lines:
            self.text(x, y, line, size=size, colour=colour)
            y += size + 4
        return y

    def path(
        self, d: str, *, stroke: str = INK, width: float = 1.0, fill: str = "none", more: str = ""
    ) -> None:
        """A path."""
        drawn = f' stroke="{stroke}" stroke-width="{width:g}"' if width else ""
        self.elements.append(f'<path d="{d}" fill="{fill}"{drawn}{more}/>')

    def line(
        self,
        x1: float,
        y1: float,
        x2: float,
        y2: float,
        *,
        stroke: str = INK,
        width: float = 1.0,
        more: str = "",
    ) -> None:
        """A straight line."""
        self.path(f"M{x1:.1f} {y1:.1f}L{x2:.1f} {y2:.1f}", stroke=stroke, width=width, more=more)

    def rect(self, x: float, y: float, wide: float, high: float, *, fill: str, more: str = "") -> None:
        """A filled rectangle."""
        self.elements.append(
            f'<rect x="{x:.1f}" y="{y:.1f}" width="{max(wide, 0):.1f}" height="{max(high, 0):.1f}" '
            f'fill="{fill}"{more}/>'
        )

    def own(self, name: str) -> str:
        """An id that no other picture on the page has."""
        return f"{_OWN}{name}"

    def finish(self, height: float, title: str, description: str) -> str:
        """The whole picture, named and told in words."""
        inner = (
            f'<title id="{_OWN}-title">{escape(title)}</title><desc id="{_OWN}-desc">{escape(description)}</desc>'
            f'<rect width="{WIDTH}" height="{height:.0f}" fill="#ffffff"/>{"".join(self.elements)}</svg>'
        )
        prefix = "p" + sha256(inner.encode()).hexdigest()[:12]
        head = (
            f'<svg xmlns="http://www.w3.org/2000/svg" role="img" '
            f'aria-labelledby="{_OWN}-title {_OWN}-desc" '
            f'viewBox="0 0 {WIDTH} {height:.0f}" width="{WIDTH}" height="{height:.0f}" '
            f'font-family="sans-serif" font-size="{_TEXT:g}" fill="{INK}">'
        )
        return (head + inner).replace(_OWN, prefix) + "\n"


# The signs of our charts ----------------------------------------------------------------------------


def dots(places: Sequence[tuple[float, float]], size: float) -> str:
    """Small dark points, as one path."""
    flat = [each for place in places for each in place]
    d = ("M%.1f %.1fh.01" * len(places)) % tuple(flat)
    return f'<path d="{d}" fill="none" stroke="{INK}" stroke-width="{2 * size:g}" stroke-linecap="round"/>'


def diamonds(places: Sequence[tuple[float, float]], size: float = 4.6, *, filled: bool = True) -> str:
    """Diamonds: beyond a limit; open ones are left out of the estimates too."""
    flat = [each for x, y in places for each in (x, y - size)]
    one = f"M%.1f %.1fl{size:g} {size:g}l{-size:g} {size:g}l{-size:g} {-size:g}z"
    look = f'fill="{INK}"' if filled else f'fill="#ffffff" stroke="{INK}" stroke-width="1.2"'
    return f'<path d="{(one * len(places)) % tuple(flat)}" {look}/>'


def rings(
    places: Sequence[tuple[float, float]], *, warning: bool = False, size: float = 7.4, line: float = 1.9
) -> str:
    """Amber rings: part of a signal; broken ones for a warning."""
    flat = [each for x, y in places for each in (x - size, y)]
    one = f"M%.1f %.1fa{size:g} {size:g} 0 1 0 {2 * size:g} 0a{size:g} {size:g} 0 1 0 {-2 * size:g} 0z"
    broken = ' stroke-dasharray="3 2.2"' if warning else ""
    d = (one * len(places)) % tuple(flat)
    return f'<path d="{d}" fill="none" stroke="{AMBER}" stroke-width="{line:g}"{broken}/>'


def open_points(places: Sequence[tuple[float, float]], size: float = 3.2) -> str:
    """Open points: left out of the estimates."""
    flat = [each for x, y in places for each in (x - size, y)]
    one = f"M%.1f %.1fa{size:g} {size:g} 0 1 0 {2 * size:g} 0a{size:g} {size:g} 0 1 0 {-2 * size:g} 0z"
    return f'<path d="{(one * len(places)) % tuple(flat)}" fill="#ffffff" stroke="{INK}" stroke-width="1.2"/>'
