"""Which steps are those of which chart."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import cache, partial
from importlib import import_module
from types import MappingProxyType
from typing import Any

from .steps import Step

Steps = tuple[Step, ...]

_HOMES: Mapping[str, tuple[str, str, str]] = MappingProxyType(
    {
        "xbar-r": ("subgroups", "fit", "judge"),
        "xbar-s": ("subgroups", "fit", "judge"),
        "individuals": ("individuals", "fit", "judge"),
        **dict.fromkeys(("p", "np", "c", "u", "p-prime", "u-prime"), ("counts", "fit", "judge")),
        "g": ("rare", "fit_opportunities", "judge_opportunities"),
        "t": ("rare", "fit_times", "judge_times"),
        "ewma": ("memory", "fit_ewma", "judge_ewma"),
        "cusum": ("memory", "fit_cusum", "judge_cusum"),
        "moving-average": ("memory", "fit_moving_average", "judge_moving_average"),
        "t-squared": ("multivariate", "fit_t_squared", "judge_t_squared"),
        "mewma": ("multivariate", "fit_mewma", "judge_mewma"),
        "between-within": ("structured", "fit_between_within", "judge_between_within"),
        "short-run": ("structured", "fit_short_run", "judge_short_run"),
        "trend": ("structured", "fit_trend", "judge_trend"),
        "residual": ("structured", "fit_residual", "judge_residual"),
        "acceptance": ("structured", "fit_acceptance", "judge_acceptance"),
    }
)
"""The module of each chart's steps, and the names of the functions of a fit and of a judgement."""

_SPREADS = {"xbar-r": "range", "xbar-s": "sd"}


@cache
def _functions(name: str) -> tuple[Callable[..., Steps], Callable[..., Steps]]:
    module, fit, judge = _HOMES[name]
    home = import_module(f"{__package__}.{module}")
    found = getattr(home, fit), getattr(home, judge)
    if module == "subgroups":
        return partial(found[0], spread=_SPREADS[name]), partial(found[1], spread=_SPREADS[name])
    if module == "counts":
        return partial(found[0], chart=name), partial(found[1], chart=name)
    return found


def of_fit(name: str, data: Any, options: Any, result: Any) -> Steps:
    """The steps of a fit of the chart of this name: from the baseline to the limits, and those of one point."""
    return _functions(name)[0](data, options, result)


def of_judgement(name: str, limits: Any, data: Any, carry: Any, result: Any) -> Steps:
    """The steps of one point under frozen limits."""
    return _functions(name)[1](limits, data, carry, result)
