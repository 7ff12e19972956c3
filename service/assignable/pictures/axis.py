"""The one axis along all panels of a chart: names, times or positions of the points."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

from .text import clean, cut, width

SIZE = 11.0
_LONGEST = 92.0  # pixels of a label
_AIR = 14.0
_MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")
_TIME = re.compile(r"(\d{4})-(\d\d)-(\d\d)[Tt ](\d\d:\d\d)\S*?(Z|z|[+-]\d\d:\d\d)")


@dataclass(frozen=True, slots=True)
class Labels:
    """What is written under the axis: (position, text) pairs, and what they are."""

    at: tuple[tuple[int, str], ...]
    caption: str


def day(time: str, *, year: bool = True) -> str:
    """``2 Mar 2026``; what is no time is left as it is."""
    found = _TIME.match(time)
    if found is None:
        return clean(time)
    written = f"{int(found[3])} {_MONTHS[(int(found[2]) - 1) % 12]}"
    return f"{written} {found[1]}" if year else written


def moment(time: str) -> str:
    """``2 Mar 2026 06:30``."""
    found = _TIME.match(time)
    return clean(time) if found is None else f"{day(time)} {found[4]}"


class Names:
    """What points are called in sentences: by id, by time, or by position."""

    def __init__(self, ids: Sequence[str] | None, times: Sequence[str] | None) -> None:
        self._ids = ids
        self._times = times
        first, last = (times[0], times[-1]) if times else ("", "")
        self._one_day = day(first) == day(last)
        self._one_year = first[:4] == last[:4]

    def __call__(self, at: int) -> str:
        named = self._named(at)
        return f"point {at}" if named is None else named

    def _named(self, at: int) -> str | None:
        if self._ids is not None and (name := clean(self._ids[at])):
            return name
        if self._times is None:
            return None
        time = self._times[at]
        found = _TIME.match(time)
        if found is None:
            return clean(time)
        return found[4] if self._one_day else f"{day(time, year=not self._one_year)} {found[4]}"

    def listed(self, positions: Sequence[int], most: int = 8) -> str:
        """Points in a row; beyond ``most`` they are counted."""
        shown = positions if len(positions) <= most else positions[: most - 1]
        named = [self._named(at) for at in shown]
        words = ", ".join(str(at) if name is None else name for at, name in zip(shown, named, strict=True))
        if named[0] is None:
            words = f"point{'s' if len(positions) > 1 else ''} {words}"
        more = len(positions) - len(shown)
        return f"{words} and {more:,} more" if more else words


def labels(count: int, step: float, ids: Sequence[str] | None, times: Sequence[str] | None) -> Labels:
    """The labels of ``count`` points ``step`` pixels apart, as many as fit."""
    for every in _steps():
        positions = range(0, count, every)
        if len(positions) * (SIZE + _AIR) > count * step + 200 and every < count:
            continue
        texts, caption = _texts(positions, count, ids, times)
        if every >= count or max(width(text, SIZE) for text in texts) + _AIR <= every * step:
            break
    return Labels(tuple(zip(positions, texts, strict=True)), caption)


def _steps() -> Sequence[int]:
    return [times * 10**power for power in range(8) for times in (1, 2, 5)]


def _texts(
    positions: Sequence[int], count: int, ids: Sequence[str] | None, times: Sequence[str] | None
) -> tuple[list[str], str]:
    if times is not None:
        found = [_TIME.match(times[at]) for at in positions]
        first, last = times[0], times[count - 1]
        zones = {one[5].upper() for one in found if one is not None}
        zone = f" ({'UTC' if zones == {'Z'} else min(zones)})" if len(zones) == 1 else ""
        if any(one is None for one in found):
            return [cut(clean(times[at]), SIZE, _LONGEST) for at in positions], "times"
        if day(first) == day(last):
            return [one[4] for one in found if one is not None], f"{day(first)}{zone}"
        same_year = first[:4] == last[:4]
        days = [day(times[at], year=not same_year) for at in positions]
        if len(set(days)) < len(days):
            days = [f"{one} {seen[4]}" for one, seen in zip(days, found, strict=True) if seen is not None]
        return days, f"{moment(first)} to {moment(last)}{zone}"
    if ids is not None:
        return [cut(clean(ids[at]), SIZE, _LONGEST) for at in positions], ""
    return [str(at) for at in positions], "position in the data, from 0"
