"""Worked steps of a recommendation: the evidence of the sample, where there is one."""

from __future__ import annotations

import numpy as np

from ..data import Counts, Floats, Intervals, Subgroups, Vectors
from ..recommendation import Evidence, Recommendation
from .pieces import moving_sigma_steps, within_steps
from .steps import MOST_LISTED, Pad, Step, Value, numbered, total_of


def of_choice(
    told: Recommendation, sample: Subgroups | Vectors | Counts | Intervals | None, evidence: Evidence | None
) -> tuple[Step, ...]:
    """What the sample shows, in figures, and the choice."""
    pad = Pad()
    if evidence is not None and sample is not None:
        _drift(pad, sample, evidence)
        _normality(pad, sample, evidence)
        _between(pad, sample, evidence)
        _dispersion(pad, evidence)
    pad.state(
        f"The choice, `{told.chart}`, is a matter of rules and not of arithmetic: {told.why}",
        "rules on the description, and on p-values below 0.01",
    )
    return pad.steps


def _drift(pad: Pad, sample: Subgroups | Vectors | Counts | Intervals, evidence: Evidence) -> None:
    drift = evidence.drift
    if drift is None or isinstance(sample, Vectors | Intervals):
        return
    points = _points(sample)
    at = np.flatnonzero(points == points)
    y = points[at]
    n = len(at)
    mean = pad.mean(f"Mean of the {n} points", y)
    position = float(at.mean())
    x = at - position
    away = y - mean
    sxx, syy = total_of(x * x), total_of(away * away)
    if n <= MOST_LISTED:
        names, given = numbered("y", y.tolist())
        places = {f"t{i}": float(place) for i, place in enumerate(at.tolist(), 1)}
        text = " + ".join(f"(t{i} - position) * ({name} - mean)" for i, name in enumerate(names, 1))
        sxy = pad.work(
            "Products of distances in time order from both means",
            text,
            None,
            **given,
            **places,
            position=position,
            mean=mean,
        )
    else:
        sxy = total_of(x * away)
    slope = pad.work(
        "Slope of the line of least squares, per point",
        "sum_ty / sum_tt",
        "#/evidence/drift/slope",
        sum_ty=(sxy, "sum of (place - mean place) times (point - mean)"),
        sum_tt=(sxx, "sum of (place - mean place)**2"),
    )
    explained = pad.work(
        "Share of the points' variation that it explains",
        "min(1, slope**2 * sum_tt / sum_yy)",
        "#/evidence/drift/explained",
        slope=slope,
        sum_tt=sxx,
        sum_yy=(syy, "sum of (point - mean)**2"),
    )
    if explained < 1.0:
        pad.work(
            f"Student's t of the slope, with {n - 2} degrees of freedom; the p-value is its two tails",
            "sqrt(explained * (n - 2) / (1 - explained))",
            None,
            explained=explained,
            n=n,
        )


def _points(sample: Subgroups | Counts) -> Floats:
    if isinstance(sample, Subgroups):
        return sample.statistics().mean
    if sample.inspected is None:
        return sample.counts
    found: Floats = sample.counts / np.where(sample.inspected > 0, sample.inspected, np.nan)
    return found


def _normality(pad: Pad, sample: Subgroups | Vectors | Counts | Intervals, evidence: Evidence) -> None:
    if evidence.normality is None or not isinstance(sample, Subgroups):
        return
    pad.work(
        "Anderson-Darling statistic, adjusted for the number of values",
        "statistic * (1 + 0.75 / n + 2.25 / n**2)",
        "#/evidence/normality/anderson_darling/adjusted",
        statistic=(evidence.normality.anderson_darling.statistic, "A squared of the values' normal scores"),
        n=int(np.count_nonzero(sample.values == sample.values)),
    )


def _between(pad: Pad, sample: Subgroups | Vectors | Counts | Intervals, evidence: Evidence) -> None:
    if evidence.between_subgroups is None or not isinstance(sample, Subgroups):
        return
    statistics = sample.statistics()
    size = max(round(float(statistics.size[statistics.size > 0].mean())), 1)
    of_means = moving_sigma_steps(pad, statistics.mean, 2, "mean-moving-range", None, "subgroup means")
    inside = within_steps(pad, statistics, "pooled-sd", None)
    values: dict[str, Value] = {"of_means": of_means, "within": inside, "n": size}
    pad.work(
        "Ratio of the variance of means to that which the spread within subgroups explains",
        "of_means**2 / (within**2 / n)",
        "#/evidence/between_subgroups/ratio",
        **values,
    )


def _dispersion(pad: Pad, evidence: Evidence) -> None:
    found = evidence.dispersion
    if found is not None:
        pad.work(
            "Variation of the counts over what their law leads to",
            "index / freedom",
            "#/evidence/dispersion/ratio",
            index=(found.statistic, "chi-square index of dispersion"),
            freedom=found.degrees_of_freedom,
        )
