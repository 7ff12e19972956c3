"""What charts of either single values or subgroups share, once their level is set against a line of its own.

The level panel holds single values or subgroup means; the spread panel moving ranges of two, or ranges
within the subgroups. What is plotted is first made comparable (less a target, less a line), so that one
centre and one sigma hold for all.
"""

from __future__ import annotations

import functools
from dataclasses import dataclass, replace
from typing import Annotated, Generic, Literal, TypeVar

import numpy as np

from ..data import Booleans, Floats, Individuals, Subgroups, SubgroupStatistics, SubgroupSummary
from ..errors import UnusableData
from ..rules import Rule, Tail
from ..sigma import moving_ranges
from .common import FOLLOWING, LimitBasis, Panel, PanelLimits, Performance, Plot, Watched, watch
from .individuals import individual_plots, since_gap
from .price import mean_performance
from .subgroups import subgroup_plots

T = TypeVar("T")
Data = Subgroups | SubgroupSummary | Individuals
Form = Literal["individuals", "subgroups"]
SPAN = 2
"""Successive values in a moving range."""


@dataclass(frozen=True, slots=True)
class LevelSpread(Generic[T]):
    """A panel of the level and one of the spread."""

    level: Annotated[T, "Single values or subgroup means, as the chart plots them."]
    spread: Annotated[T, "Moving ranges of single values, or ranges within the subgroups."]


@dataclass(frozen=True, slots=True)
class LevelCarry:
    """What judging needs to remember of the points before."""

    points: Annotated[int, "Points judged so far under these limits."]
    level: Annotated[Tail, "The last points of the level panel, for the run rules."]
    recent: Annotated[tuple[float, ...], "The last value since a gap, for the next moving range."]


NEW = LevelCarry(0, Tail(), ())


def form_of(data: Data) -> Form:
    """Whether points are single values or subgroups."""
    return "individuals" if isinstance(data, Individuals) else "subgroups"


def points_of(data: Data) -> SubgroupStatistics:
    """The points; single values are subgroups of one. Raises UnusableData for subgroups without ranges."""
    if isinstance(data, Individuals):
        values = data.values
        return SubgroupStatistics((values == values).astype(np.int64), values, None, None)
    found = data.statistics()
    if found.range is None:
        raise UnusableData.of(
            "spread-missing", "This chart plots ranges; give `ranges` with the means.", "data", "ranges"
        )
    return found


def check_form(frozen: Form, data: Data) -> None:
    """Raises UnusableData where points are not of the form the limits were set for."""
    found = form_of(data)
    if found != frozen:
        names = {"individuals": "single values", "subgroups": "subgroups"}
        raise UnusableData.of(
            "form-differs",
            f"The limits are for {names[frozen]}, and these data are {names[found]}.",
            "data",
        )


def moving_of(level: Floats, recent: tuple[float, ...]) -> tuple[Floats, tuple[float, ...]]:
    """Moving ranges of levels that follow ``recent`` ones, and what the next call needs of them."""
    series = np.concatenate((recent, level)) if recent else level
    return moving_ranges(series, SPAN)[len(recent) :], since_gap(series, SPAN - 1)


def level_plots(
    points: SubgroupStatistics, form: Form, centre: float, sigma: float, basis: LimitBasis
) -> tuple[Plot, Plot]:
    """The panels of comparable points; ``points.range`` holds moving ranges where they are single values."""
    if form == "individuals":
        assert points.range is not None
        return individual_plots(points.mean, points.range, centre, sigma, SPAN, basis)
    return subgroup_plots(points, "range", centre, sigma, basis)


def watch_levels(
    plots: tuple[Plot, Plot], rules: tuple[Rule, ...], tail: Tail | None, kept: Booleans | None, form: Form
) -> tuple[Watched, Tail]:
    """Run rules watch the level; the spread is watched by its limits alone, being skewed."""
    levels, after = watch("level", plots[0], rules, tail=tail, kept=kept)
    spreads, _ = watch("spread", plots[1], kept=kept if form == "subgroups" else None)
    return levels.with_(spreads), after


def panels_of(plots: tuple[Plot, Plot]) -> LevelSpread[Panel]:
    """The panels of the answer."""
    return LevelSpread(plots[0].panel(), plots[1].panel())


def level_lines(
    form: Form, size: int | None, centre: float, sigma: float, basis: LimitBasis
) -> LevelSpread[PanelLimits]:
    """The frozen lines, for subgroups of ``size``."""
    if form == "subgroups" and size is None:
        return LevelSpread(FOLLOWING, FOLLOWING)
    some = np.full(1, np.nan)
    level, spread = level_plots(
        SubgroupStatistics(np.array([size or 1]), some, some, None), form, centre, sigma, basis
    )
    return LevelSpread(level.limits(), spread.limits())


@functools.lru_cache(256)
def level_performance(rules: tuple[Rule, ...], basis: LimitBasis, form: Form, typical: float) -> Performance:
    """Run lengths of the level, were the parameters known exactly."""
    found = mean_performance(rules, basis, typical, "range" if form == "subgroups" else None)
    return replace(found, panel="level")
