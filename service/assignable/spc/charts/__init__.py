"""The charts there are. Adding one: a module with ``fit`` and ``judge``, and an entry in its ``CHARTS``."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

from . import attributes, individuals, subgroups
from .registry import Chart

CHARTS: Mapping[str, Chart] = MappingProxyType(
    {chart.name: chart for module in (subgroups, individuals, attributes) for chart in module.CHARTS}
)
"""Every chart by its name, in the order in which they are listed."""

__all__ = ["CHARTS", "Chart"]
