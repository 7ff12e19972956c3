"""Charts of a drifting level against certified regressions, plain transcriptions and simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy

from assignable.spc.charts import trend
from assignable.spc.charts.common import Exclusion
from assignable.spc.charts.trend import AdjustmentLimits, TrendData, TrendOptions
from assignable.spc.data import Individuals, Subgroups
from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.factors import d2
from assignable.spc.rules import Rule

# NIST StRD linear regression, Norris (data from memory; they reproduce the certified values to all digits compared).
# fmt: off
NORRIS = np.array(
    [
        (0.1, 0.2), (338.8, 337.4), (118.1, 118.2), (888.0, 884.6), (9.2, 10.1), (228.1, 226.5), (668.5, 666.3),
        (998.5, 996.3), (449.1, 448.6), (778.9, 777.0), (559.2, 558.2), (0.3, 0.4), (0.1, 0.6), (778.1, 775.5),
        (668.8, 666.9), (339.3, 338.0), (448.9, 447.5), (10.8, 11.6), (557.7, 556.0), (228.3, 228.1),
        (998.0, 995.8), (888.8, 887.6), (119.6, 120.2), (0.3, 0.3), (0.6, 0.3), (557.6, 556.8), (339.3, 339.1),
        (888.0, 887.2), (998.5, 999.0), (778.9, 779.0), (10.2, 11.1), (117.6, 118.3), (228.9, 229.2),
        (668.4, 669.1), (449.2, 448.9), (0.2, 0.5),
    ]
)
# Annual flow of the Nile at Aswan, 1871 to 1900 (Cobb 1978; bundled with statsmodels 0.15.0).
NILE = np.array(
    [
        1120, 1160, 963, 1210, 1160, 1160, 813, 1230, 1370, 1140, 995, 935, 1110, 994, 1020, 960, 1180, 799, 958,
        1140, 1100, 1210, 1150, 1250, 1260, 1220, 1030, 1100, 774, 840,
    ],
    dtype=float,
)
# fmt: on


def test_norris_certified() -> None:
    # Certified values of NIST StRD Norris (from memory): intercept -0.262323073774029, slope 1.00211681802045,
    # residual standard deviation 0.884796396144373, standard deviation of the slope 0.429796848199937E-03,
    # R-squared 0.999993745883712.
    best = trend.fit(TrendData(Individuals(NORRIS[:, 0]), NORRIS[:, 1]), TrendOptions())
    assert best.limits.line.slope == pytest.approx(1.00211681802045, rel=1e-12)
    assert best.limits.line.intercept == pytest.approx(-0.262323073774029, rel=1e-10)
    assert best.limits.sigma == pytest.approx(0.884796396144373, rel=1e-11)
    assert best.diagnostics.slope_standard_error == pytest.approx(0.429796848199937e-03, rel=1e-11)
    assert best.diagnostics.r_squared == pytest.approx(0.999993745883712, rel=1e-13)


def plain(y: np.ndarray, x: np.ndarray, w: np.ndarray) -> tuple[float, float, float]:
    """Intercept, slope and residual deviation by the normal equations."""
    matrix = np.column_stack((np.ones(len(x)), x))
    beta = np.linalg.solve(matrix.T @ (w[:, None] * matrix), matrix.T @ (w * y))
    left = y - matrix @ beta
    return float(beta[0]), float(beta[1]), math.sqrt(float(w @ left**2) / (len(x) - 2))


def test_nile_by_plain_regression() -> None:
    found = trend.fit(TrendData(Individuals(NILE)), TrendOptions())
    a, b, s = plain(NILE, np.arange(30.0), np.ones(30))
    limits = found.limits
    assert (limits.line.intercept, limits.line.slope, limits.sigma) == pytest.approx((a, b, s), rel=1e-10)
    panel = found.baseline.panels.level
    assert panel.centre == pytest.approx(a + b * np.arange(30.0), rel=1e-12)
    assert panel.upper - panel.centre == pytest.approx(np.full(30, 3 * s), rel=1e-10)
    left = NILE - a - b * np.arange(30.0)
    ranges = np.abs(np.diff(left))
    assert found.baseline.panels.spread.value == pytest.approx(ranges, rel=1e-9)
    moving = trend.fit(TrendData(Individuals(NILE)), TrendOptions("residual-moving-range"))
    assert moving.limits.sigma == pytest.approx(float(ranges.mean()) / d2(2), rel=1e-10)
    assert "no-trend" in [caution.code for caution in found.cautions]


def test_subgroups_of_several_sizes() -> None:
    rng = np.random.default_rng(9)
    x = np.sort(rng.uniform(0, 100, 20))
    values = 5 + 0.02 * x[:, None] + rng.normal(0, 0.1, (20, 4))
    values[3, 2:] = np.nan
    values[8, 1:] = np.nan
    values[11] = np.nan
    values[14] += 3.0
    for source in ("residual-sd", "within-subgroup"):
        options = TrendOptions(source, exclude=(Exclusion(14, "wrong tool"),))  # type: ignore[arg-type]
        found = trend.fit(TrendData(Subgroups(values), x), options)
        kept = [i for i in range(20) if i not in (11, 14)]
        rows = [values[i][~np.isnan(values[i])] for i in kept]
        w = np.array([float(len(row)) for row in rows])
        a, b, s = plain(np.array([row.mean() for row in rows]), x[kept], w)
        assert found.limits.line.slope == pytest.approx(b, rel=1e-9)
        assert found.limits.line.intercept == pytest.approx(a, rel=1e-9)
        if source == "residual-sd":
            assert found.limits.sigma == pytest.approx(s, rel=1e-9)
        level = found.baseline.panels.level
        assert level.index.tolist() == [i for i in range(20) if i != 11]
        at = level.index.tolist().index(3)
        assert level.upper[at] == pytest.approx(
            a + b * x[3] + 3 * found.limits.sigma / math.sqrt(2), rel=1e-9
        )
        assert all(signal.index != 14 for signal in found.baseline.signals)


def test_fieller_by_solving_for_its_ends() -> None:
    rng = np.random.default_rng(4)
    y = 10 + 0.05 * np.arange(25) + rng.normal(0, 0.1, 25)
    found = trend.fit(TrendData(Individuals(y)), TrendOptions(adjustment=AdjustmentLimits(9.0, 13.0)))
    plan = found.limits.adjustment
    assert plan is not None
    a, b, s = plain(y, np.arange(25.0), np.ones(25))
    assert plan.side == "upper"
    assert plan.position == pytest.approx((13.0 - a) / b, rel=1e-10)
    t = float(scipy.stats.t.ppf(0.975, 23))
    middle, spread = 12.0, float(((np.arange(25) - 12.0) ** 2).sum())

    def off(at: float) -> float:
        half = t * s * math.sqrt(1 / 25 + (at - middle) ** 2 / spread)
        return (13.0 - a - b * at) ** 2 - half**2

    assert plan.position is not None
    low = scipy.optimize.brentq(off, 12.0, plan.position, xtol=1e-12)
    high = scipy.optimize.brentq(off, plan.position, 10 * plan.position, xtol=1e-12)
    assert (plan.earliest, plan.latest) == pytest.approx((low, high), rel=1e-9)
    ahead = found.baseline.details
    assert isinstance(ahead, trend.Ahead)
    assert ahead.remaining == pytest.approx(plan.position - 24, rel=1e-12)


def test_the_interval_covers_as_stated() -> None:
    rng = np.random.default_rng(31)
    runs, inside = 3000, 0
    x = np.arange(15.0)
    options = TrendOptions(adjustment=AdjustmentLimits(lower=0.0), confidence=0.9)
    for noise in rng.standard_normal((runs, 15)):
        line = trend.fit_line(x, 6.0 - 0.3 * x + noise * 0.5, np.ones(15))
        left = 6.0 - 0.3 * x + noise * 0.5 - line.at(x)
        plan = trend.meets(line, 0.0, "lower", math.sqrt(float(left @ left) / 13), 13.0, options.confidence)
        assert plan.earliest is not None
        assert plan.latest is not None
        inside += plan.earliest <= 20.0 <= plan.latest
    assert abs(inside / runs - 0.9) < 4 * math.sqrt(0.9 * 0.1 / runs)


def test_limits_that_are_not_ahead() -> None:
    rng = np.random.default_rng(4)
    y = 10 + 0.05 * np.arange(25) + rng.normal(0, 0.1, 25)
    below = trend.fit(TrendData(Individuals(y)), TrendOptions(adjustment=AdjustmentLimits(lower=9.0)))
    assert below.limits.adjustment is not None
    assert below.limits.adjustment.position is None
    assert "adjustment-not-ahead" in [caution.code for caution in below.cautions]
    flat = trend.fit(
        TrendData(Individuals(rng.normal(10, 1, 25))), TrendOptions(adjustment=AdjustmentLimits(0.0, 20.0))
    )
    assert flat.limits.adjustment is not None
    assert flat.limits.adjustment.position is not None
    assert flat.limits.adjustment.earliest is None
    assert {"no-trend", "slope-uncertain"} <= {caution.code for caution in flat.cautions}


def test_judging_goes_on_after_the_baseline_or_starts_anew() -> None:
    rng = np.random.default_rng(8)
    y = 10 + 0.05 * np.arange(40) + rng.normal(0, 0.1, 40)
    limits = trend.fit(
        TrendData(Individuals(y[:25])), TrendOptions(adjustment=AdjustmentLimits(upper=11.5))
    ).limits
    after = trend.judge(limits, TrendData(Individuals(y[25:])), None)
    assert after.panels.level.centre == pytest.approx(
        limits.line.intercept + limits.line.slope * np.arange(25.0, 40.0), rel=1e-12
    )
    assert "adjustment-due" in [caution.code for caution in after.cautions]
    assert after.carry.position == 39.0
    anew = trend.judge(limits, TrendData(Individuals(y[:5]), start=0), None)
    assert anew.panels.level.centre[0] == pytest.approx(limits.line.intercept, rel=1e-12)
    with pytest.raises(UnusableData) as both:
        trend.judge(limits, TrendData(Individuals(y[:5]), start=0), after.carry)
    assert both.value.faults[0].code == "start-with-carry"
    with pytest.raises(UnusableData) as positions:
        trend.judge(limits, TrendData(Individuals(y[:5]), np.arange(5.0)), None)
    assert positions.value.faults[0].code == "positions-not-used"
    far = trend.judge(limits, TrendData(Individuals(y[:5]), start=100), None)
    assert "extrapolated" in [caution.code for caution in far.cautions]


def test_rules_watch_the_distance_from_the_line() -> None:
    rng = np.random.default_rng(2)
    y = 10 + 1.0 * np.arange(30) + rng.normal(0, 0.1, 30)
    found = trend.fit(
        TrendData(Individuals(y)), TrendOptions(rules=(Rule("trend", 6, 6), Rule("zone", 8, 8, 0.0)))
    )
    # The values rise at every step; their distances from the line do not.
    assert not [signal for signal in found.baseline.signals if signal.panel == "level"]


def test_a_bend_is_told() -> None:
    rng = np.random.default_rng(2)
    x = np.arange(30.0)
    y = 10 + 0.2 * x + 0.01 * x**2 + rng.normal(0, 0.1, 30)
    found = trend.fit(TrendData(Individuals(y)), TrendOptions())
    matrix = np.column_stack((np.ones(30), x, x**2))
    beta, rest, *_ = np.linalg.lstsq(matrix, y, rcond=None)
    error = math.sqrt(float(rest[0]) / 27 * float(np.linalg.inv(matrix.T @ matrix)[2, 2]))
    p = 2 * float(scipy.special.stdtr(27, -abs(float(beta[2]) / error)))
    assert found.diagnostics.curvature_p_value == pytest.approx(p, rel=1e-4)
    assert "curved" in [caution.code for caution in found.cautions]


def test_false_alarms_by_simulation() -> None:
    rng = np.random.default_rng(12)
    points = 100_000
    y = 3 - 1e-4 * np.arange(2 * points) + rng.normal(0, 2.0, 2 * points)
    limits = trend.fit(TrendData(Individuals(y[:points])), TrendOptions()).limits
    judged = trend.judge(limits, TrendData(Individuals(y[points:])), None)
    told = judged.panels.level
    alarms = int(np.count_nonzero((told.value > told.upper) | (told.value < told.lower)))
    chance = 2 * float(scipy.special.ndtr(-3.0))
    assert abs(alarms - chance * points) < 4 * math.sqrt(chance * points)


def test_refusals() -> None:
    def code(data: TrendData | None, **options: object) -> str:
        with pytest.raises((UnusableData, UnusableParameter)) as found:
            trend.fit(data, TrendOptions(**options))  # type: ignore[arg-type]
        return found.value.faults[0].code

    y = np.array([1.0, 2.2, 2.9, 4.1])
    assert code(None) == "data-missing"
    assert code(TrendData(Individuals(y[:2]))) == "too-few-points"
    assert code(TrendData(Individuals(y), np.ones(4))) == "one-position"
    assert code(TrendData(Individuals(y), np.arange(3.0))) == "unequal-length"
    assert code(TrendData(Individuals(0.1 * np.arange(9)))) == "no-variation"
    assert code(TrendData(Individuals(y)), sigma_from="within-subgroup") == "estimator-of-other-data"
    assert code(TrendData(Individuals(y)), adjustment=AdjustmentLimits(2.0, 1.0)) == "limits-out-of-order"
    assert code(TrendData(Individuals(y), start=4)) == "start-of-baseline"
    limits = trend.fit(TrendData(Individuals(y), np.arange(4.0)), TrendOptions()).limits
    with pytest.raises(UnusableData) as missing:
        trend.judge(limits, TrendData(Individuals(y)), None)
    assert missing.value.faults[0].code == "positions-missing"
    with pytest.raises(UnusableData) as form:
        trend.judge(limits, TrendData(Subgroups(np.ones((2, 3))), np.arange(2.0)), None)
    assert form.value.faults[0].code == "form-differs"
