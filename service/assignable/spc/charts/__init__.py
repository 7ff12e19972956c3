"""The charts there are.

Adding one: a module here with ``fit``, ``judge`` and ``CHARTS``; a module of the same name beside the
shapes of the requests; its examples and its published cases. Its line below is all the joining.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from functools import cache
from importlib import import_module
from types import MappingProxyType

from .registry import Chart

MODULES: Mapping[str, tuple[str, ...]] = MappingProxyType(
    {
        "subgroups": ("xbar-r", "xbar-s"),
        "individuals": ("individuals",),
        "attributes": ("p", "np", "c", "u"),
        "dispersed": ("p-prime", "u-prime"),
        "rare": ("g", "t"),
        "ewma": ("ewma",),
        "cusum": ("cusum",),
        "moving_average": ("moving-average",),
        "multivariate": ("t-squared",),
        "mewma": ("mewma",),
        "between_within": ("between-within",),
        "short_run": ("short-run",),
        "trend": ("trend",),
        "residual": ("residual",),
        "acceptance": ("acceptance",),
    }
)
"""The charts of each module, in the order in which they are listed."""


class _Charts(Mapping[str, Chart]):
    """Every chart by its name; its module is loaded when the chart is first asked for."""

    def __getitem__(self, name: str) -> Chart:
        return _charts_of(_MODULE_OF[name])[name]

    def __contains__(self, name: object) -> bool:
        return name in _MODULE_OF

    def __iter__(self) -> Iterator[str]:
        return iter(_MODULE_OF)

    def __len__(self) -> int:
        return len(_MODULE_OF)


_MODULE_OF = {name: module for module, names in MODULES.items() for name in names}


@cache
def _charts_of(module: str) -> dict[str, Chart]:
    charts = {chart.name: chart for chart in import_module(f"{__name__}.{module}").CHARTS}
    if tuple(charts) != MODULES[module]:
        raise ValueError(f"the module {module} holds other charts than it is listed with")
    return charts


CHARTS: Mapping[str, Chart] = _Charts()
"""Every chart by its name."""

__all__ = ["CHARTS", "MODULES", "Chart"]
