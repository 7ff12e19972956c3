"""From numbers to places on the paper."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True, slots=True)
class Linear:
    """Numbers from ``low`` to ``high`` on the paper from ``start`` to ``end``."""

    low: float
    high: float
    start: float
    end: float

    def __call__(self, number: Any) -> Any:
        """The place of a number, or of an array of them."""
        # Each part by itself: the difference of two numbers near the ends of the range overflows.
        share = (number / 2 - self.low / 2) / (self.high / 2 - self.low / 2)
        return self.start + share * (self.end - self.start)


@dataclass(frozen=True, slots=True)
class Logarithmic:
    """The same for positive numbers, equal ratios being equally far apart."""

    low: float
    high: float
    start: float
    end: float

    def __call__(self, number: float) -> float:
        share = math.log(number / self.low) / math.log(self.high / self.low)
        return self.start + share * (self.end - self.start)


def around(numbers: Iterable[float], *, floor: float | None = None) -> tuple[float, float]:
    """Ends of a scale that holds all numbers with some air; at a ``floor`` nothing lies beyond there is none."""
    known = [number for number in numbers if math.isfinite(number)]
    low, high = (min(known), max(known)) if known else (0.0, 1.0)
    grounded = floor is not None and low >= floor and low - floor <= (high / 2 - low / 2) * 2.4
    if grounded and floor is not None:
        low = floor
    air = 0.09 * (high / 2 - low / 2) * 2
    if not air > 0:
        air = 0.1 * abs(high) or 1.0
    return (low if grounded else low - air), high + air


def ticks(low: float, high: float, most: int) -> list[float]:
    """Round numbers between the ends, at most ``most``, at a step of 1, 2 or 5 of a power of ten."""
    span = high / most - low / most
    if not 1e-300 < span < 1e300:
        return []
    step = 10.0 ** math.floor(math.log10(span))
    for times in (1.0, 2.0, 5.0, 10.0):
        if step * times >= span * 0.999:
            step *= times
            break
    first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
    if last - first > 2 * most:
        return []
    return [number * step for number in range(first, last + 1)]


def powers(low: float, high: float) -> list[float]:
    """The powers of ten between the ends."""
    return [
        10.0**power
        for power in range(math.ceil(math.log10(low) - 1e-9), math.floor(math.log10(high) + 1e-9) + 1)
    ]
