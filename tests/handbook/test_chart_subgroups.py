"""Charts of subgroups against published examples, and against a plain transcription of their formulas."""

from __future__ import annotations

import math
from functools import cache
from typing import Any

import numpy as np
import pytest
import scipy.integrate
import scipy.optimize
import scipy.stats

from assignable.spc.charts import CHARTS
from assignable.spc.charts.common import Exclusion, LimitBasis, Standards
from assignable.spc.charts.subgroups import SubgroupOptions
from assignable.spc.data import Subgroups, SubgroupSummary
from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.rules import PUBLISHED

# Flow width of a hard-bake process, 25 subgroups of 5: Montgomery, Introduction to Statistical Quality
# Control, table 6.1. Checked in print.
FLOW = np.array(
    [
        [1.3235, 1.4128, 1.6744, 1.4573, 1.6914],
        [1.4314, 1.3592, 1.6075, 1.4666, 1.6109],
        [1.4284, 1.4871, 1.4932, 1.4324, 1.5674],
        [1.5028, 1.6352, 1.3841, 1.2831, 1.5507],
        [1.5604, 1.2735, 1.5265, 1.4363, 1.6441],
        [1.5955, 1.5451, 1.3574, 1.3281, 1.4198],
        [1.6274, 1.5064, 1.8366, 1.4177, 1.5144],
        [1.4190, 1.4303, 1.6637, 1.6067, 1.5519],
        [1.3884, 1.7277, 1.5355, 1.5176, 1.3688],
        [1.4039, 1.6697, 1.5089, 1.4627, 1.5220],
        [1.4158, 1.7667, 1.4278, 1.5928, 1.4181],
        [1.5821, 1.3355, 1.5777, 1.3908, 1.7559],
        [1.2856, 1.4106, 1.4447, 1.6398, 1.1928],
        [1.4951, 1.4036, 1.5893, 1.6458, 1.4969],
        [1.3589, 1.2863, 1.5996, 1.2497, 1.5471],
        [1.5747, 1.5301, 1.5171, 1.1839, 1.8662],
        [1.3680, 1.7269, 1.3957, 1.5014, 1.4449],
        [1.4163, 1.3864, 1.3057, 1.6210, 1.5573],
        [1.5796, 1.4185, 1.6541, 1.5116, 1.7247],
        [1.7106, 1.4412, 1.2361, 1.3820, 1.7601],
        [1.4371, 1.5051, 1.3485, 1.5670, 1.4880],
        [1.4738, 1.5936, 1.6583, 1.4973, 1.4720],
        [1.5917, 1.4333, 1.5551, 1.5295, 1.6866],
        [1.6399, 1.5243, 1.5705, 1.5563, 1.5530],
        [1.5797, 1.3663, 1.6240, 1.3732, 1.6887],
    ]
)

# Means of 20 subgroups of 5 of the colour of a rubber product: Dunn, Process Improvement Using Data
# (CC BY-SA). Checked in print.
RUBBER = (245, 239, 239, 241, 241, 241, 238, 238, 236, 248, 233, 236, 246, 253, 227, 231, 237, 228, 239, 240)

# Michelson's speed of light of 1879, km/s less 299000, five series of twenty (public domain; in many
# packages as `morley`). Copied from memory; mean 852.4 and the series' means are checked below.
LIGHT = np.array(
    [
        [
            850,
            740,
            900,
            1070,
            930,
            850,
            950,
            980,
            980,
            880,
            1000,
            980,
            930,
            650,
            760,
            810,
            1000,
            1000,
            960,
            960,
        ],
        [960, 940, 960, 940, 880, 800, 850, 880, 900, 840, 830, 790, 810, 880, 880, 830, 800, 790, 760, 800],
        [880, 880, 880, 860, 720, 720, 620, 860, 970, 950, 880, 910, 850, 870, 840, 840, 850, 840, 840, 840],
        [890, 810, 810, 820, 800, 770, 760, 740, 750, 760, 910, 920, 890, 860, 880, 720, 840, 850, 850, 780],
        [890, 840, 780, 810, 760, 810, 790, 810, 820, 850, 870, 870, 810, 740, 810, 940, 950, 800, 810, 870],
    ],
    dtype=float,
)

NAN = float("nan")


def fit(chart: str, data: Any, estimator: str | None = None, **options: Any) -> Any:
    usual = "mean-range" if chart == "xbar-r" else "mean-sd"
    return CHARTS[chart].fit(data, SubgroupOptions(estimator or usual, **options))


# The factors once more, by other means: the distribution of the range by one integral, its moments by Simpson.


def range_cdf(w: Any, n: int) -> Any:
    x = np.linspace(-9.0, 9.0, 3001)
    inside = scipy.stats.norm.cdf(x + np.atleast_1d(w)[:, None]) - scipy.stats.norm.cdf(x)
    return n * scipy.integrate.trapezoid(scipy.stats.norm.pdf(x) * inside ** (n - 1), x, axis=1)


@cache
def d2_d3(n: int) -> tuple[float, float]:
    w = np.linspace(0.0, 14.0, 1401)
    above = 1.0 - range_cdf(w, n)
    mean = float(scipy.integrate.simpson(above, x=w))
    square = float(scipy.integrate.simpson(2.0 * w * above, x=w))
    return mean, math.sqrt(square - mean * mean)


def c4(n: float) -> float:
    return math.sqrt(2.0 / (n - 1.0)) * math.exp(math.lgamma(n / 2.0) - math.lgamma((n - 1.0) / 2.0))


def range_quantile(p: float, n: int) -> float:
    return float(scipy.optimize.brentq(lambda w: float(range_cdf(w, n)[0]) - p, 0.0, 14.0, xtol=1e-12))


def transcribed(rows: list[np.ndarray], estimator: str) -> tuple[float, float]:
    """Centre and sigma, row by row as the formulas stand."""
    centre = sum(row.sum() for row in rows) / sum(map(len, rows))
    wide = [row for row in rows if len(row) > 1]
    if estimator == "mean-range":
        f = [(d2_d3(len(row))[0] / d2_d3(len(row))[1]) ** 2 for row in wide]
        each = [np.ptp(row) / d2_d3(len(row))[0] for row in wide]
        return centre, sum(a * b for a, b in zip(f, each, strict=True)) / sum(f)
    if estimator == "mean-sd":
        h = [c4(len(row)) ** 2 / (1.0 - c4(len(row)) ** 2) for row in wide]
        each = [row.std(ddof=1) / c4(len(row)) for row in wide]
        return centre, sum(a * b for a, b in zip(h, each, strict=True)) / sum(h)
    if estimator == "pooled-sd":
        freedom = sum(len(row) - 1 for row in wide)
        square = sum((len(row) - 1) * row.var(ddof=1) for row in wide) / freedom
        return centre, math.sqrt(square) / c4(freedom + 1.0)
    assert estimator == "median-range"
    return centre, float(np.median([np.ptp(row) / range_quantile(0.5, len(row)) for row in wide]))


# Published values -----------------------------------------------------------------------------------


def test_flow_width() -> None:
    # Montgomery, example 6.1, checked in print: A2 = 0.577 and D4 = 2.114 give the last digit away.
    found = fit("xbar-r", Subgroups(FLOW), rules=PUBLISHED["western-electric-1956"].rules)
    limits = found.limits
    assert limits.centre == pytest.approx(1.5056, abs=5e-5)
    assert limits.panels.range.centre == pytest.approx(0.32521, abs=5e-6)
    assert limits.sigma == pytest.approx(0.1398, abs=5e-5)
    assert limits.panels.mean.upper == pytest.approx(1.69325, abs=1e-4)
    assert limits.panels.mean.lower == pytest.approx(1.31795, abs=1e-4)
    assert limits.panels.range.upper == pytest.approx(0.68749, abs=2e-4)
    assert limits.panels.range.lower is None
    assert limits.subgroup_size == 5
    assert found.baseline.panels.mean.value.sum() == pytest.approx(37.6400, abs=5e-4)
    assert found.baseline.panels.range.value.sum() == pytest.approx(8.1302, abs=5e-5)
    assert found.baseline.verdict == "in-control"


def test_rubber_colour() -> None:
    # Dunn, as printed: limits to a digit after the point, a_n = 0.94; the point of 253 lies outside.
    means = np.array(RUBBER, dtype=float)
    found = fit("xbar-s", SubgroupSummary(means, np.full(20, 5), sds=np.full(20, 9.28)))
    assert found.limits.centre == pytest.approx(238.8, abs=1e-9)
    assert found.limits.panels.mean.lower == pytest.approx(225.6, abs=0.06)
    assert found.limits.panels.mean.upper == pytest.approx(252.0, abs=0.06)
    assert [(one.index, one.rule, one.side) for one in found.baseline.signals] == [(13, "limit", "above")]
    without = (Exclusion(13, "found"),)
    found = fit("xbar-s", SubgroupSummary(means, np.full(20, 5), sds=np.full(20, 9.68)), exclude=without)
    assert found.limits.centre == pytest.approx(238.0, abs=0.06)
    assert found.limits.panels.mean.lower == pytest.approx(224, abs=0.3)
    assert found.limits.panels.mean.upper == pytest.approx(252, abs=0.2)


def test_means_of_four() -> None:
    # Dunn, as printed to whole numbers.
    found = fit("xbar-s", SubgroupSummary(np.full(2, 714.0), np.full(2, 4), sds=np.full(2, 98.0)))
    assert found.limits.sigma == pytest.approx(106.4, abs=0.05)
    assert found.limits.panels.mean.upper == pytest.approx(874, abs=0.5)
    assert found.limits.panels.mean.lower == pytest.approx(554, abs=0.5)


# Independent calculation ----------------------------------------------------------------------------


def test_the_speed_of_light() -> None:
    assert LIGHT.mean() == pytest.approx(852.4)  # Stigler 1977, from memory
    assert LIGHT.mean(axis=1).tolist() == pytest.approx([909.0, 856.0, 845.0, 820.5, 831.5])
    for chart, estimator in (("xbar-s", "mean-sd"), ("xbar-s", "pooled-sd"), ("xbar-r", "mean-range")):
        found = fit(chart, Subgroups(LIGHT), estimator)
        centre, sigma = transcribed(list(LIGHT), estimator)
        assert found.limits.centre == pytest.approx(centre, rel=1e-13)
        assert found.limits.sigma == pytest.approx(sigma, rel=1e-8)
        reach = 3.0 * sigma / math.sqrt(20)
        outside = np.flatnonzero(np.abs(LIGHT.mean(axis=1) - centre) > reach).tolist()
        assert [one.index for one in found.baseline.signals if one.panel == "mean"] == outside == [0]


RAGGED = [
    np.array(row)
    for row in (
        [10.1, 9.7, 10.4],
        [9.9, 10.6],
        [10.0, 10.3, 9.5, 9.9, 10.2],
        [10.7],
        [9.6, 9.8, 10.1, 10.9],
        [],
        [10.2, 10.0, 9.4],
        [9.8, 10.5, 10.1, 9.7, 10.3, 10.0, 9.9],
    )
]
TABLE = np.full((8, 7), NAN)
for _at, _row in enumerate(RAGGED):
    TABLE[_at, : len(_row)] = _row
TABLE[2, [0, 6]] = TABLE[2, [6, 0]]  # a missing piece may stand anywhere


@pytest.mark.parametrize("estimator", ["mean-range", "mean-sd", "pooled-sd", "median-range"])
@pytest.mark.parametrize(("chart", "panel"), [("xbar-r", "range"), ("xbar-s", "sd")])
def test_unequal_sizes(chart: str, panel: str, estimator: str) -> None:
    found = fit(chart, Subgroups(TABLE), estimator)
    centre, sigma = transcribed([row for row in RAGGED if len(row)], estimator)
    assert found.limits.centre == pytest.approx(centre, rel=1e-13)
    assert found.limits.sigma == pytest.approx(sigma, rel=1e-8)
    assert found.limits.sigma_estimator == estimator
    assert (found.limits.baseline.points, found.limits.baseline.values) == (7, sum(map(len, RAGGED)))
    mean, spread = found.baseline.panels.mean, getattr(found.baseline.panels, panel)
    assert mean.index.tolist() == [0, 1, 2, 3, 4, 6, 7]
    assert spread.index.tolist() == [0, 1, 2, 4, 6, 7]
    for at, point in enumerate(mean.index):
        row = RAGGED[point]
        reach = 3.0 * sigma / math.sqrt(len(row))
        assert mean.value[at] == pytest.approx(row.mean(), rel=1e-14)
        assert mean.centre[at] == found.limits.centre
        assert mean.lower[at] == pytest.approx(centre - reach, rel=1e-8)
        assert mean.upper[at] == pytest.approx(centre + reach, rel=1e-8)
    for at, point in enumerate(spread.index):
        row = RAGGED[point]
        if panel == "range":
            middle, deviation, value = *d2_d3(len(row)), np.ptp(row)
        else:
            middle, deviation = c4(len(row)), math.sqrt(1.0 - c4(len(row)) ** 2)
            value = row.std(ddof=1)
        assert spread.value[at] == pytest.approx(value, rel=1e-13)
        assert spread.centre[at] == pytest.approx(middle * sigma, rel=1e-8)
        assert spread.upper[at] == pytest.approx((middle + 3.0 * deviation) * sigma, rel=1e-7)
        assert spread.lower[at] == pytest.approx(
            max(middle - 3.0 * deviation, 0.0) * sigma, rel=1e-5, abs=1e-12
        )


@pytest.mark.parametrize("n", [2, 5, 8])
def test_probability_limits(n: int) -> None:
    alarm = 0.004
    basis = LimitBasis("probability", None, alarm)
    rng = np.random.default_rng(n)
    data = Subgroups(rng.normal(50.0, 2.0, (20, n)))
    for chart, panel in (("xbar-r", "range"), ("xbar-s", "sd")):
        limits = fit(chart, data, basis=basis).limits
        out = scipy.stats.norm.isf(alarm / 2.0) * limits.sigma / math.sqrt(n)
        assert limits.panels.mean.lower == pytest.approx(limits.centre - out, rel=1e-12)
        assert limits.panels.mean.upper == pytest.approx(limits.centre + out, rel=1e-12)
        lines = getattr(limits.panels, panel)
        if panel == "range":
            lower, upper = range_quantile(alarm / 2.0, n), range_quantile(1.0 - alarm / 2.0, n)
        else:
            chi = scipy.stats.chi2(n - 1)
            lower, upper = (math.sqrt(float(chi.ppf(p)) / (n - 1)) for p in (alarm / 2.0, 1.0 - alarm / 2.0))
        assert lines.lower == pytest.approx(lower * limits.sigma, rel=1e-6)
        assert lines.upper == pytest.approx(upper * limits.sigma, rel=1e-7)


def test_standards_given() -> None:
    known = Standards(mean=1.5, sigma=0.14)
    found = fit("xbar-r", Subgroups(FLOW), standards=known)
    limits = found.limits
    assert (limits.centre, limits.sigma, limits.sigma_estimator) == (1.5, 0.14, "given")
    assert limits.degrees_of_freedom is None
    assert limits.panels.mean.upper == pytest.approx(1.5 + 3.0 * 0.14 / math.sqrt(5.0), rel=1e-14)
    d2, d3 = d2_d3(5)
    assert limits.panels.range.upper == pytest.approx((d2 + 3.0 * d3) * 0.14, rel=1e-8)
    alone = fit("xbar-r", None, standards=known, subgroup_size=5)
    assert alone.baseline is None
    assert alone.diagnostics is None
    assert alone.limits.panels == limits.panels
    assert alone.limits.baseline is None
    half = fit("xbar-r", Subgroups(FLOW), standards=Standards(mean=1.5)).limits
    assert half.centre == 1.5
    assert half.sigma == fit("xbar-r", Subgroups(FLOW)).limits.sigma
    for wrong in (Standards(), Standards(mean=1.5)):
        with pytest.raises((UnusableParameter, UnusableData)):
            fit("xbar-r", None, standards=wrong, subgroup_size=5)


def test_a_summary_gives_what_the_values_give() -> None:
    sizes = np.sum(~np.isnan(TABLE), axis=1)
    statistics = Subgroups(TABLE).statistics()
    for chart, panel, spread in (("xbar-r", "range", "ranges"), ("xbar-s", "sd", "sds")):
        summary = SubgroupSummary(statistics.mean, sizes, **{spread: getattr(statistics, panel)})
        of_values, of_summary = fit(chart, Subgroups(TABLE)), fit(chart, summary)
        assert of_summary.limits == of_values.limits
        for name in ("mean", panel):
            one, other = (getattr(found.baseline.panels, name) for found in (of_values, of_summary))
            for member in ("index", "value", "centre", "lower", "upper"):
                assert getattr(one, member).tolist() == getattr(other, member).tolist()
    with pytest.raises((UnusableParameter, UnusableData)):
        fit("xbar-s", SubgroupSummary(statistics.mean, sizes, ranges=statistics.range))


def test_excluded_subgroups_stay_plotted_and_count_for_nothing() -> None:
    shifted = FLOW.copy()
    shifted[7] += 3.0
    plain = fit("xbar-r", Subgroups(np.delete(shifted, 7, axis=0)))
    found = fit("xbar-r", Subgroups(shifted), exclude=(Exclusion(7, "thermocouple fault"),))
    assert found.limits.centre == plain.limits.centre
    assert found.limits.sigma == pytest.approx(plain.limits.sigma, rel=1e-15)
    assert found.limits.baseline.points == 24
    assert found.limits.baseline.excluded == (Exclusion(7, "thermocouple fault"),)
    assert 7 in found.baseline.panels.mean.index
    assert found.baseline.panels.mean.value[7] > found.baseline.panels.mean.upper[7]
    assert found.baseline.verdict == "in-control"
    for wrong in ((Exclusion(25, "x"),), (Exclusion(3, "x"), Exclusion(3, "y"))):
        with pytest.raises(UnusableParameter):
            fit("xbar-r", Subgroups(FLOW), exclude=wrong)


def test_lower_limits_nothing_can_cross_do_not_exist() -> None:
    rng = np.random.default_rng(3)
    # The smallest sizes with a positive D3 and B3: 7 and 6 (ISO 7870-2, from memory).
    for chart, panel, first in (("xbar-r", "range", 7), ("xbar-s", "sd", 6)):
        for n in range(2, 11):
            found = fit(chart, Subgroups(rng.normal(size=(5, n))))
            lower = getattr(found.limits.panels, panel).lower
            plotted = getattr(found.baseline.panels, panel).lower
            if n < first:
                assert lower is None
                assert not plotted.any()
            else:
                assert lower > 0.0
                assert (plotted == lower).all()


def test_a_gap_keeps_its_place_and_ends_a_run() -> None:
    rules = PUBLISHED["western-electric-1956"].rules
    known = Standards(mean=0.0, sigma=1.0)
    high = np.full((9, 4), 0.2)
    signals = fit("xbar-r", Subgroups(high), standards=known, rules=rules).baseline.signals
    assert [one.index for one in signals if one.rule != "limit" and one.form == "zone"] == [7, 8]
    high[3] = NAN
    found = fit("xbar-r", Subgroups(high), standards=known, rules=rules).baseline
    assert found.panels.mean.index.tolist() == [0, 1, 2, 4, 5, 6, 7, 8]
    assert found.signals == ()


@pytest.mark.parametrize(
    ("values", "code"),
    [
        ([[1.0, 2.0]], None),
        ([[NAN, NAN], [NAN, NAN]], None),
        ([[1.0, NAN], [2.0, NAN], [3.0, NAN]], None),
        ([[2.0, 2.0], [3.0, 3.0]], "no-variation"),
    ],
)
def test_data_without_limits(values: list[list[float]], code: str | None) -> None:
    for chart in ("xbar-r", "xbar-s"):
        with pytest.raises(UnusableData) as caught:
            fit(chart, Subgroups(np.array(values)))
        assert code is None or {fault.code for fault in caught.value.faults} == {code}
        assert all(fault.where[0] == "data" for fault in caught.value.faults)
