"""What came to light about a request on its road, for whoever counts and logs: how much, never what."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

from .problems import Problem

TALLY = "assignable.tally"  # the environ's key

_MEASURED = frozenset(
    ("values", "individuals", "counts", "intervals", "results", "earlier", "means", "ratings")
)
"""The names under which requests hold what was measured or counted."""


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
    """How many values a loaded request holds, missing pieces included; arrays are asked, not walked.

    Limits documents and carries are tuples by then, and are passed by.
    """
    count = 0
    for name, member in loaded.items():
        if name in _MEASURED:
            size = getattr(member, "size", None)
            count += len(member) if size is None else size
        elif type(member) is dict:
            count += measured_in(member)
        elif type(member) is list and member and type(member[0]) is dict:
            for each in member:
                count += measured_in(each)
    return count
