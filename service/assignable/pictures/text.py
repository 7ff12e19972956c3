"""Text on a picture: what may stand in it, how wide it is, how numbers are written."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Sequence

from markupsafe import escape as _escape

_CONTROL = re.compile("[\x00-\x1f\x7f-\x9f\u2028\u2029\ud800-\udfff\ufffe\uffff]+")
_UNSEEN = re.compile("[\u00ad\u061c\u200b-\u200f\u202a-\u202e\u2060-\u206f\ufeff\ufff9-\ufffb]+")
_NARROW = frozenset("ijl.,:;'|! ()[]tfr")
_WIDE = frozenset("mwMW@%")


def clean(text: str) -> str:
    """A caller's text as one line: without control characters and without marks that turn the direction."""
    return " ".join(_UNSEEN.sub("", _CONTROL.sub(" ", text)).split())


def escape(text: str) -> str:
    """The text as it may stand in XML, between tags or in an attribute."""
    return str(_escape(text))


def width(text: str, size: float) -> float:
    """About how wide the text is, erring on the wide side: the viewer chooses the font."""
    units = 0.0
    for sign in text:
        if sign in _NARROW:
            units += 0.36
        elif sign in _WIDE or sign > "\u2e80":
            units += 1.0
        elif sign.isupper():
            units += 0.72
        else:
            units += 0.6
    return units * size


def cut(text: str, size: float, most: float) -> str:
    """The text, or as much of it as fits, with a sign that it was cut."""
    if width(text, size) <= most:
        return text
    while text and width(text + "…", size) > most:
        text = text[:-1]
    return text.rstrip() + "…"


def wrap(text: str, size: float, most: float) -> list[str]:
    """The text in lines that fit; a word longer than a line is cut."""
    lines: list[str] = []
    line = ""
    for word in text.split(" "):
        longer = f"{line} {word}" if line else word
        if line and width(longer, size) > most:
            lines.append(line)
            longer = word
        line = longer
    lines.append(line)
    return [cut(one, size, most) for one in lines]


class Figures:
    """How the numbers of one scale are written, so that two that differ on the paper differ in print."""

    __slots__ = ("_places", "_significant")

    def __init__(self, numbers: Iterable[float], spread: float | None = None) -> None:
        known = [number for number in numbers if math.isfinite(number)]
        largest = max((abs(number) for number in known), default=1.0)
        if not spread:
            spread = (max(known) - min(known)) if known else 0.0
        if not spread > 0:
            spread = largest or 1.0
        spread = min(max(spread, 1e-307), 1e308)
        self._places = max(0, 2 - math.floor(math.log10(spread)))
        self._significant: int | None = None
        if largest >= 1e7 or self._places > 7:
            over = math.floor(math.log10(largest)) - math.floor(math.log10(spread)) if largest > 0 else 0
            self._significant = min(17, max(0, over) + 3)

    def __call__(self, number: float) -> str:
        if self._significant is not None:
            return minus(f"{number:.{self._significant}g}")
        return minus(f"{number:.{self._places}f}")

    def even(self, numbers: Sequence[float]) -> list[str]:
        """Round numbers, as ticks are written: with as many places as the one that needs most."""
        if self._significant is not None:
            return [minus(f"{number:.{self._significant}g}") for number in numbers]
        written = [f"{number:.{self._places}f}".rstrip("0") for number in numbers]
        places = max((len(one.partition(".")[2]) for one in written), default=0)
        return [minus(f"{number:.{places}f}") for number in numbers]


def minus(written: str) -> str:
    """The number with a minus sign that is one, and none before nought; powers of ten without noughts."""
    if "e" in written:
        number, _, power = written.partition("e")
        return f"{minus(number)}e{minus(str(int(power)))}"
    if not written.startswith("-"):
        return written
    return written[1:] if not written.strip("-0.") else "\u2212" + written[1:]


def counted(number: int, one: str, many: str | None = None) -> str:
    """``1 point``, ``25 points``, ``200,000 points``."""
    return f"{number:,} {one if number == 1 else many or one + 's'}"
