"""Requests of the charts: a module here for each chart module of ``spc``, under the same name."""

from __future__ import annotations

from importlib import import_module

from ....spc.charts import MODULES
from .common import ChartRequest


def request_of(chart: str) -> ChartRequest:
    """What the chart of this name takes."""
    module = next(module for module, names in MODULES.items() if chart in names)
    found: ChartRequest = import_module(f"{__name__}.{module}").REQUESTS[chart]
    return found


__all__ = ["ChartRequest", "request_of"]
