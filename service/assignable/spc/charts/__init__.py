"""The charts there are.

Adding one: a module here with ``fit``, ``judge`` and ``CHARTS``; a module of the same name beside the
shapes of the requests; its examples and its published cases. Its name below is all the joining.
"""

from __future__ import annotations

from collections.abc import Mapping
from importlib import import_module
from types import MappingProxyType

from .registry import Chart

MODULES = ("subgroups", "individuals", "attributes")
"""The modules, in the order in which their charts are listed."""

CHARTS: Mapping[str, Chart] = MappingProxyType(
    {chart.name: chart for module in MODULES for chart in import_module(f"{__name__}.{module}").CHARTS}
)
"""Every chart by its name."""

__all__ = ["CHARTS", "MODULES", "Chart"]
