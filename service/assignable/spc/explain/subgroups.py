"""Worked steps of the charts of subgroups."""

from __future__ import annotations

import numpy as np

from ..charts.common import LimitBasis
from ..charts.lines import Spread
from ..charts.subgroups import SubgroupFit, SubgroupJudgement, SubgroupLimits, SubgroupOptions
from ..data import Subgroups, SubgroupStatistics, SubgroupSummary
from .pieces import (
    grand_mean_steps,
    multiple,
    normal_price_steps,
    place_of,
    shown_point,
    spread_steps,
    two_lines,
    which,
    within_steps,
)
from .steps import Pad, Step

Data = Subgroups | SubgroupSummary


def used_statistics(data: Data, excluded: tuple[int, ...]) -> SubgroupStatistics:
    """The subgroups that the estimates rest on."""
    statistics = data.statistics()
    if not excluded:
        return statistics
    kept = np.ones(len(statistics.size), dtype=bool)
    kept[list(excluded)] = False
    return statistics.keep(kept)


def fit(data: Data | None, options: SubgroupOptions, result: SubgroupFit, spread: Spread) -> tuple[Step, ...]:
    """The steps from a baseline to the limits, and those of one subgroup."""
    pad, limits = Pad(), result.limits
    record = limits.baseline
    if data is not None and record is not None:
        used = used_statistics(data, tuple(one.index for one in record.excluded))
        if options.standards.mean is None:
            grand_mean_steps(pad, used, "#/limits/centre")
        if options.standards.sigma is None:
            within_steps(pad, used, limits.sigma_estimator, "#/limits/sigma")
    k = multiple(pad, limits.basis)
    size = limits.subgroup_size
    if size is not None:
        two_lines(
            pad,
            f"of the means of {size}",
            ("#/limits/panels/mean/lower", "#/limits/panels/mean/upper"),
            k,
            limits.centre,
            limits.sigma,
            size,
        )
        at = f"#/limits/panels/{spread}"
        name = "ranges" if spread == "range" else "standard deviations"
        spread_steps(
            pad,
            f"of the {name} of {size}",
            spread,
            size,
            limits.basis,
            limits.sigma,
            (f"{at}/centre", f"{at}/lower", f"{at}/upper"),
        )
    judged_by = None if result.diagnostics is None else result.diagnostics.judged_by
    if data is not None and result.baseline is not None:
        if judged_by is None:
            bases = limits.basis, limits.basis
        else:
            bases = (
                LimitBasis("sigma", judged_by.sigma_multiple),
                LimitBasis("probability", None, 2.0 * judged_by.spread_tail_probability),
            )
        _point(
            pad,
            data,
            limits,
            result.baseline,
            "#/baseline/panels",
            spread,
            bases,
            joint=judged_by is not None,
        )
    normal_price_steps(pad, limits.rules, k, result.performance)
    return pad.steps


def judge(
    limits: SubgroupLimits, data: Data, carry: object, result: SubgroupJudgement, spread: Spread
) -> tuple[Step, ...]:
    """The steps from one subgroup's values to its points and limits."""
    pad = Pad()
    _point(pad, data, limits, result, "#/panels", spread, (limits.basis, limits.basis))
    if not pad.steps:
        frozen_only(pad, limits)
    return pad.steps


def frozen_only(pad: Pad, limits: SubgroupLimits) -> None:
    """Where there is no point to show: the lines that stand."""
    k = multiple(pad, limits.basis)
    two_lines(pad, "of a single value's mean", (None, None), k, limits.centre, limits.sigma)


def row_of(data: Data, index: int) -> np.ndarray | None:
    """The values of a subgroup, where they were given."""
    if not isinstance(data, Subgroups):
        return None
    row = data.values[index]
    return row[row == row]


def _point(
    pad: Pad,
    data: Data,
    limits: SubgroupLimits,
    judged: object,
    at: str,
    spread: Spread,
    bases: tuple[LimitBasis, LimitBasis],
    *,
    joint: bool = False,
) -> None:
    panels, signals = judged.panels, judged.signals  # type: ignore[attr-defined]
    found = shown_point(signals, panels.mean)
    if found is None:
        return
    index, place = found
    name = which(index, signals, "subgroup")
    statistics, row = data.statistics(), row_of(data, index)
    size = int(statistics.size[index])
    mean = float(statistics.mean[index])
    if row is not None:
        mean = pad.mean(f"Mean of {name}", row, f"{at}/mean/value/{place}")
    besides = ", by the joint limits that judge the baseline" if joint else ""
    k = bases[0].multiple
    two_lines(
        pad,
        f"of the mean of {name}, of {size} values{besides}",
        (f"{at}/mean/lower/{place}", f"{at}/mean/upper/{place}"),
        k,
        limits.centre,
        limits.sigma,
        size,
    )
    pad.work(
        "Distance of its mean from the centre line, in standard deviations of a mean, as the run rules see it",
        "(mean - centre) / (sigma / sqrt(n))",
        None,
        mean=mean,
        centre=limits.centre,
        sigma=limits.sigma,
        n=size,
    )
    panel = getattr(panels, spread)
    there = place_of(panel, index)
    if there is None:
        return
    if row is not None:
        if spread == "range":
            pad.range(f"Range of {name}", row, f"{at}/range/value/{there}")
        else:
            pad.deviation(f"Standard deviation of {name}", row, mean, f"{at}/sd/value/{there}")
    spread_steps(
        pad,
        f"of its {'range' if spread == 'range' else 'standard deviation'}{besides}",
        spread,
        size,
        bases[1],
        limits.sigma,
        (
            f"{at}/{spread}/centre/{there}",
            None if joint else f"{at}/{spread}/lower/{there}",
            f"{at}/{spread}/upper/{there}",
        ),
        natural=True,
    )
