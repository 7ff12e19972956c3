"""Means as single values with the spread within, against a published analysis, transcriptions and simulation."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
import scipy

from assignable.spc.charts import between_within, individuals, subgroups
from assignable.spc.charts.between_within import BetweenWithinOptions, KnownComponents
from assignable.spc.charts.common import Exclusion
from assignable.spc.charts.individuals import IndividualsOptions
from assignable.spc.charts.lines import beyond_spread_lines
from assignable.spc.charts.subgroups import SubgroupOptions
from assignable.spc.components import components
from assignable.spc.data import Individuals, Subgroups, SubgroupSummary
from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.factors import c4, d2
from assignable.spc.sigma import SigmaEstimate

# Yield of dyestuff by batch (Davies 1947; bundled with pydataset 0.2.0), batches A to F.
DYESTUFF = np.array(
    [
        [1545, 1440, 1440, 1520, 1580],
        [1540, 1555, 1490, 1560, 1495],
        [1595, 1550, 1605, 1510, 1560],
        [1445, 1440, 1595, 1465, 1545],
        [1595, 1630, 1515, 1635, 1625],
        [1520, 1455, 1450, 1480, 1445],
    ],
    dtype=float,
)


def test_dyestuff() -> None:
    found = between_within.fit(
        Subgroups(DYESTUFF), BetweenWithinOptions(within_statistic="sd", sigma_estimator="pooled-sd")
    )
    limits = found.limits
    # The analysis of variance of these data (from memory, as in many books): mean 1527.5, within 2451.25; between
    # 1764.05 from the mean square of batches. Sigma within is here divided by c4 of its 24 degrees of freedom.
    assert limits.centre == pytest.approx(1527.5, rel=1e-12)
    assert (limits.sigma_within * c4(25)) ** 2 == pytest.approx(2451.25, rel=1e-12)
    assert DYESTUFF.mean(axis=1).var(ddof=1) - 2451.25 / 5 == pytest.approx(1764.05, rel=1e-9)
    means = [1505.0, 1528.0, 1564.0, 1498.0, 1600.0, 1470.0]
    ranges = [abs(b - a) for a, b in pairwise(means)]
    of_means = sum(ranges) / 5 / 1.1283791670955126
    assert limits.sigma_of_means == pytest.approx(of_means, rel=1e-12)
    assert limits.panels.mean.upper == pytest.approx(1527.5 + 3 * of_means, rel=1e-12)
    assert found.diagnostics is not None
    parts = found.diagnostics.components
    assert parts is not None
    between = of_means**2 - limits.sigma_within**2 / 5
    assert parts.between == pytest.approx(between, rel=1e-10)
    assert parts.between_share + parts.within_share == pytest.approx(1.0, rel=1e-14)
    assert parts.between_share == pytest.approx(between / (between + limits.sigma_within**2), rel=1e-10)


def test_the_panels_are_those_of_the_charts_they_join() -> None:
    rng = np.random.default_rng(4)
    values = rng.normal(0, 1, (30, 1)) + rng.normal(0, 0.5, (30, 4))
    values[7] = np.nan
    found = between_within.fit(Subgroups(values), BetweenWithinOptions(exclude=(Exclusion(3, "test"),)))
    alone = individuals.fit(
        Individuals(values.mean(axis=1)), IndividualsOptions(exclude=(Exclusion(3, "test"),))
    )
    inside = subgroups.fit(
        Subgroups(values), SubgroupOptions("mean-range", exclude=(Exclusion(3, "test"),)), spread="range"
    )
    assert found.baseline is not None
    assert alone.baseline is not None
    assert inside.baseline is not None
    for ours, theirs in (
        (found.baseline.panels.mean, alone.baseline.panels.value),
        (found.baseline.panels.moving_range, alone.baseline.panels.moving_range),
        (found.baseline.panels.within, inside.baseline.panels.range),
    ):
        assert ours.index.tolist() == theirs.index.tolist()
        for line in ("value", "centre", "lower", "upper"):
            assert getattr(ours, line) == pytest.approx(getattr(theirs, line), rel=1e-9, abs=1e-12)


def test_a_component_below_zero_is_shown_and_set_to_zero() -> None:
    values = np.tile([-1.0, 0.0, 1.0], (20, 1)) + np.array([0.01, -0.01] * 10)[:, None]
    found = between_within.fit(Subgroups(values), BetweenWithinOptions())
    assert found.diagnostics is not None
    parts = found.diagnostics.components
    assert parts is not None
    assert parts.between_as_computed < 0
    assert parts.between == 0.0
    assert parts.between_share == 0.0
    assert found.limits.sigma_between == 0.0
    assert "nothing-between" in [caution.code for caution in found.cautions]


def test_sizes_that_differ_enter_by_their_harmonic_mean() -> None:
    rng = np.random.default_rng(6)
    values = rng.normal(0, 1, (40, 1)) + rng.normal(0, 1.0, (40, 6))
    for row, size in zip(values, rng.integers(2, 7, 40), strict=True):
        row[size:] = np.nan
    found = between_within.fit(Subgroups(values), BetweenWithinOptions())
    sizes = (~np.isnan(values)).sum(axis=1)
    assert found.diagnostics is not None
    parts = found.diagnostics.components
    assert parts is not None
    noise = found.limits.sigma_within**2 * float((1.0 / sizes).mean())
    assert parts.between_as_computed == pytest.approx(found.limits.sigma_of_means**2 - noise, rel=1e-9)
    assert "sizes-differ" in [caution.code for caution in found.cautions]


def test_components_by_simulation() -> None:
    rng = np.random.default_rng(14)
    values = rng.normal(0, 2.0, (20_000, 1)) + rng.normal(0, 1.0, (20_000, 4))
    found = between_within.fit(Subgroups(values), BetweenWithinOptions())
    # Relative standard error of a mean moving range: about 0.76/sqrt(m) with its overlap (Cryer & Ryan 1990).
    assert found.limits.sigma_of_means == pytest.approx(math.sqrt(4.25), rel=4 * 0.91 / math.sqrt(20_000))
    assert found.diagnostics is not None
    assert found.diagnostics.components is not None
    assert found.diagnostics.components.between_share == pytest.approx(0.8, abs=0.02)


def test_p_values_are_even_where_nothing_differs() -> None:
    rng = np.random.default_rng(15)
    p = []
    for values in rng.standard_normal((1500, 25, 5)):
        means = values.mean(axis=1)
        sigma = float(np.abs(np.diff(means)).mean()) / d2(2)
        pooled = math.sqrt(float(values.var(axis=1, ddof=1).mean())) / c4(101)
        # The effective degrees of freedom of 24 moving ranges of two, as the estimator states them.
        p.append(components(SigmaEstimate(sigma, 14.947, ""), SigmaEstimate(pooled, 100.0, ""), 5.0).p_value)
    for level in (0.01, 0.05, 0.2):
        rate = float(np.mean(np.array(p) < level))
        # Approximate: a moving range is no mean square, so a fifth of the level is allowed beside chance.
        assert abs(rate - level) < 4 * math.sqrt(level * (1 - level) / 1500) + 0.2 * level


def test_false_alarms_by_simulation() -> None:
    rng = np.random.default_rng(16)
    points = 60_000
    values = 5 + rng.normal(0, 2.0, (points, 1)) + rng.normal(0, 1.0, (points, 3))
    options = BetweenWithinOptions(standards=KnownComponents(5.0, 1.0, 2.0), subgroup_size=3)
    limits = between_within.fit(None, options).limits
    assert limits.sigma_of_means == pytest.approx(math.sqrt(4 + 1 / 3), rel=1e-14)
    judged = between_within.judge(limits, Subgroups(values), None)
    for panel, chance in (
        (judged.panels.mean, 2 * float(scipy.special.ndtr(-3.0))),
        (judged.panels.within, beyond_spread_lines("range", 3, 3.0, 0.0)),
    ):
        alarms = int(np.count_nonzero((panel.value > panel.upper) | (panel.value < panel.lower)))
        assert abs(alarms - chance * points) < 4 * math.sqrt(chance * points)


def test_the_caution_that_leads_here() -> None:
    rng = np.random.default_rng(18)
    noise = rng.normal(0, 1.0, (25, 5))

    def told(level: np.ndarray) -> bool:
        found = subgroups.fit(
            Subgroups(level[:, None] + noise), SubgroupOptions("mean-range"), spread="range"
        )
        return "varies-between-subgroups" in [caution.code for caution in found.cautions]

    assert told(rng.normal(0, 1.5, 25))
    assert not told(np.zeros(25))
    # A lasting step puts as many means outside, and is another thing.
    assert not told(np.where(np.arange(25) < 12, 0.0, 4.0))


def test_refusals() -> None:
    def fault(data: Subgroups | SubgroupSummary | None, options: BetweenWithinOptions) -> str:
        with pytest.raises((UnusableData, UnusableParameter)) as found:
            between_within.fit(data, options)
        return found.value.faults[0].code

    assert fault(None, BetweenWithinOptions()) == "data-missing"
    assert fault(Subgroups(np.ones((1, 3))), BetweenWithinOptions()) == "too-few-subgroups"
    assert fault(Subgroups(np.ones((5, 3))), BetweenWithinOptions()) == "no-variation"
    assert fault(Subgroups(DYESTUFF), BetweenWithinOptions(subgroup_size=5)) == "size-with-data"
    apart = np.array([[1.0, 2.0], [np.nan, np.nan], [3.0, 5.0]])
    assert fault(Subgroups(apart), BetweenWithinOptions()) == "no-spread-information"
    summary = SubgroupSummary(np.ones(3), np.array([4, 4, 4]), sds=np.ones(3))
    assert fault(summary, BetweenWithinOptions()) == "spread-missing"
