"""What a chart tells of itself, from which routes, contract pages, listing and tests follow."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True, slots=True)
class Chart:
    """A chart: what it is for, its two verbs, and the types of what they take and give.

    fit: ``(data | None, options) -> fit``, with ``limits``, ``baseline``, ``diagnostics``,
    ``performance`` and ``cautions``. judge: ``(limits, data, carry | None) -> judgement``, with
    ``verdict``, ``panels``, ``signals``, ``signals_found``, ``carry`` and ``cautions``.

    details: the dataclass of what this chart tells besides, where it does; its baseline and its
    judgement then have a member ``details`` (the object, or ``None``).
    """

    name: str
    title: str
    purpose: str
    takes: str
    beware: str
    panels: tuple[str, ...]
    references: tuple[str, ...]
    fit: Callable[[Any, Any], Any]
    judge: Callable[[Any, Any, Any], Any]
    limits: Any
    plotted: Any
    carry: Any
    diagnostics: Any
    details: Any = None

    @property
    def stem(self) -> str:
        """The name in camel case, as operation ids and schema names need it: ``XbarR``."""
        return stem_of(self.name)


def stem_of(name: str) -> str:
    """The name of a chart in camel case."""
    return "".join(part.capitalize() for part in name.split("-"))
