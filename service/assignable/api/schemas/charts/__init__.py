"""Requests of the charts: a module here for each chart module of ``spc``, under the same name."""

from __future__ import annotations

from collections.abc import Mapping
from importlib import import_module
from types import MappingProxyType

from ....spc.charts import MODULES
from .common import ChartRequest

REQUESTS: Mapping[str, ChartRequest] = MappingProxyType(
    {
        name: request
        for module in MODULES
        for name, request in import_module(f"{__name__}.{module}").REQUESTS.items()
    }
)
"""By the name of the chart."""

__all__ = ["REQUESTS", "ChartRequest"]
