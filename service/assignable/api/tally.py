"""What came to light about a request on its road, for whoever counts and logs: how much, never what."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np

from .problems import Problem

TALLY = "assignable.tally"  # the environ's key
OTHER = "other"  # the operation of what is none: pages, unknown paths, requests that cannot be read

_MEASURED = frozenset(
    ("values", "individuals", "counts", "intervals", "results", "earlier", "means", "ratings")
)
"""The names under which requests hold what was measured or counted."""
_DOCUMENTS = frozenset(("limits", "carry"))


class Tally:
    """One calculation: how many values it was of, which cautions it gave, or the problem it ended in."""

    __slots__ = ("cautions", "problem", "values")

    def __init__(self) -> None:
        self.values = 0
        self.cautions: Iterable[str] = ()
        self.problem: Problem | None = None

    def computed(self, loaded: Any, result: Any) -> None:
        """Takes down what a view was given, and what it made of it."""
        self.values = measured_in(loaded)
        if type(result) is dict and (found := result.get("cautions")):
            self.cautions = [caution["code"] for caution in found]


def measured_in(loaded: Any) -> int:
    """How many values a loaded request holds, missing pieces included; arrays are asked, not walked."""
    count = 0
    for name, member in loaded.items():
        kind = type(member)
        if name in _MEASURED and kind is not dict:
            count += member.size if kind is np.ndarray else len(member) if kind is list else 0
        elif name in _DOCUMENTS:
            continue  # of the past, and where any chart's will do, of any shape
        elif kind is dict:
            count += measured_in(member)
        elif kind is list and member and type(member[0]) is dict:
            for each in member:
                count += measured_in(each)
    return count
