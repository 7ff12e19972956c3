"""Words for people, wherever sentences are made."""

from __future__ import annotations


def ordinal(number: int) -> str:
    """``1st``, ``2nd``, ``3rd``, ``4th``."""
    ending = "th" if 10 <= number % 100 <= 20 else {1: "st", 2: "nd", 3: "rd"}.get(number % 10, "th")
    return f"{number}{ending}"
