"""Bounds of the numbers in documents that callers send back, stated where the fields are."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Bound:
    """The range of a number: ``least`` and ``most`` belong to it, ``above`` and ``below`` do not."""

    least: float | None = None
    most: float | None = None
    above: float | None = None
    below: float | None = None


SIGMA = Bound(least=1e-300)
"""Of a standard deviation: a document with a smaller one cannot be computed with."""

PROBABILITY = Bound(above=0.0, below=1.0)
MULTIPLE = Bound(above=0.0, most=100.0)
SIZE = Bound(least=1)
POSITIVE = Bound(above=0.0)
NOT_NEGATIVE = Bound(least=0.0)
WEIGHT = Bound(above=0.0, most=1.0)
