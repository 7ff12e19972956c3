"""Diagnostics of a baseline, tests of normality and the cautions they lead to."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from assignable.spc import cautions as c
from assignable.spc import diagnostics as d
from assignable.spc import factors as f
from assignable.spc import normality as t
from assignable.spc.data import Subgroups, SubgroupSummary
from assignable.spc.errors import UnusableData

# Weights of 11 men: Shapiro & Wilk 1965, Biometrika 52, p. 606 (checked in print).
WEIGHTS = np.array([148.0, 154, 158, 160, 161, 162, 166, 170, 182, 195, 236])


def within_errors(share: float, expected: float, runs: int) -> bool:
    return abs(share - expected) < 4 * math.sqrt(expected * (1 - expected) / runs)


def test_weights_of_men() -> None:
    w, p = t.shapiro_wilk(WEIGHTS)
    assert w == pytest.approx(0.79, abs=0.005)  # printed W = 0.79 (checked in print)
    assert w == pytest.approx(0.7888146948, abs=1e-9)  # recomputed
    assert p == pytest.approx(0.0067038, abs=5e-8)  # recomputed
    # 0.946771879598887294… from the definition with mpmath at 30 digits.
    assert t.anderson_darling(WEIGHTS).statistic == pytest.approx(0.946771879598887294, rel=1e-13)
    adjusted = 0.946771879598887294 * (1 + 0.75 / 11 + 2.25 / 121)
    assert t.anderson_darling(WEIGHTS).adjusted == pytest.approx(adjusted, rel=1e-13)
    # 0.752 adjusted is the 5 % point, 1.035 the 1 % point (Stephens 1974; from memory).
    assert t._stephens(0.752) == pytest.approx(0.05, abs=0.0005)
    assert t._stephens(1.035) == pytest.approx(0.01, abs=0.0002)
    assert t._stephens(0.631) == pytest.approx(0.10, abs=0.001)


@pytest.mark.parametrize("n", [3, 4, 5, 6, 7, 11, 12, 50, 125, 2000, 5000])
def test_against_a_general_library(n: int) -> None:
    rng = np.random.default_rng(n)
    for values in (rng.standard_normal(n), rng.exponential(size=n), rng.integers(0, 9, n).astype(float)):
        w, p = t.shapiro_wilk(values)
        reference = stats.shapiro(values)
        assert w == pytest.approx(reference.statistic, abs=1e-8)
        assert p == pytest.approx(reference.pvalue, abs=2e-6)
        scores = (np.sort(values) - values.mean()) / values.std(ddof=1)
        i = np.arange(1, n + 1)
        logs = stats.norm.logcdf(scores) + stats.norm.logsf(scores[::-1])
        by_definition = -n - float((2 * i - 1) @ logs) / n
        assert t.anderson_darling(values).statistic == pytest.approx(by_definition, rel=1e-9, abs=1e-10)


@pytest.mark.parametrize("n", [8, 25, 125])
def test_p_values_of_normality_hold_their_promise(n: int) -> None:
    runs = 2500
    z = np.random.default_rng(n).standard_normal((runs, n))
    found = [d.normality(row) for row in z]
    for level in (0.01, 0.05, 0.5):
        ad = np.mean([x is not None and x.anderson_darling.p_value < level for x in found])
        sw = np.mean([x is not None and x.shapiro_wilk.p_value < level for x in found])
        # Fitted formulas: a tenth of the level is theirs, besides the errors of the simulation.
        slack = 4 * math.sqrt(level * (1 - level) / runs) + 0.1 * level
        assert abs(ad - level) < slack
        assert abs(sw - level) < slack


def test_p_value_formulas_join_and_fall() -> None:
    grid = np.linspace(0.01, 200.0, 40_001)
    p = np.array([t._stephens(float(a)) for a in grid])
    assert ((p >= 0) & (p <= 1)).all()
    assert (np.diff(p) <= 1e-3).all()


def test_normality_is_blind_to_unit_order_and_gaps() -> None:
    values = np.random.default_rng(2).normal(2.5, 0.02, (25, 5))
    plain = d.normality(values)
    assert plain is not None
    holed = np.append(values.reshape(-1)[::-1] * 1e-200, [np.nan, np.nan])
    moved = d.normality(holed)
    assert moved is not None
    assert moved.anderson_darling.statistic == pytest.approx(plain.anderson_darling.statistic, rel=1e-9)
    assert moved.shapiro_wilk.statistic == pytest.approx(plain.shapiro_wilk.statistic, rel=1e-12)
    assert plain.values_tested == plain.distinct_values == 125


def test_normality_of_many_and_of_few() -> None:
    many = d.normality(np.random.default_rng(3).standard_normal(20_000))
    assert many is not None
    assert many.values_tested == 5000
    assert d.normality(np.arange(7.0)) is None
    assert d.normality(np.full(50, 2.5)) is None
    assert d.normality(np.full((5, 4), np.nan)) is None
    for scale in (1e300, 1e-310):
        assert d.normality(np.random.default_rng(4).standard_normal(30) * scale) is not None
    with pytest.raises(UnusableData):
        t.shapiro_wilk(np.arange(5001.0))
    with pytest.raises(UnusableData):
        t.anderson_darling(np.array([1.0, 2.0]))
    with pytest.raises(UnusableData):
        t.anderson_darling(np.ones(9))


def test_autocorrelation_by_definition() -> None:
    x = np.random.default_rng(6).standard_normal(30).cumsum()
    found = d.autocorrelation(x)
    assert found is not None
    z = x - x.mean()
    r = [float(z[k:] @ z[:-k]) / float(z @ z) for k in range(1, 8)]
    q = 30 * 32 * sum(r[k - 1] ** 2 / (30 - k) for k in range(1, 8))
    assert found.lags == 7
    assert found.lag1 == pytest.approx(r[0], rel=1e-12)
    assert found.ljung_box == pytest.approx(q, rel=1e-12)
    assert found.p_value == pytest.approx(stats.chi2.sf(q, 7), rel=1e-10)
    caution = c.autocorrelated(found)
    assert caution is not None
    assert caution.code == "autocorrelated"
    assert f"{found.lag1:.2f}" in caution.sentence


def test_autocorrelation_with_gaps() -> None:
    x = np.array([1.0, 3, np.nan, 2, 5, 4, np.nan, np.nan, 6, 2, 3, 1])
    found = d.autocorrelation(x)
    assert found is not None
    z = np.where(np.isnan(x), 0.0, x - np.nanmean(x))
    r1, r2 = (float(z[k:] @ z[:-k]) / float(z @ z) for k in (1, 2))
    there = ~np.isnan(x)
    n1, n2 = (int((there[k:] & there[:-k]).sum()) for k in (1, 2))
    assert found.lags == 2
    assert found.lag1 == pytest.approx(r1, rel=1e-12)
    assert found.ljung_box == pytest.approx(9 * 11 * (r1**2 / n1 + r2**2 / n2), rel=1e-12)
    # A gap is not closed: dropping it changes the lags.
    closed = d.autocorrelation(x[there])
    assert closed is not None
    assert closed.lag1 != pytest.approx(found.lag1, abs=1e-3)


def test_autocorrelation_of_nothing() -> None:
    assert d.autocorrelation(np.arange(7.0)) is None
    assert d.autocorrelation(np.full(20, 10000000.1)) is None
    assert d.autocorrelation(np.full(20, np.nan)) is None
    alternate = np.where(np.arange(20) % 2 == 0, np.arange(20.0), np.nan)
    found = d.autocorrelation(alternate)
    assert found is not None
    assert found.lags == 1  # of lags 1 and 2 only the second has pairs


def test_autocorrelation_and_bartlett_hold_their_level() -> None:
    runs = 2000
    rng = np.random.default_rng(7)
    series = [d.autocorrelation(x) for x in rng.standard_normal((runs, 100))]
    hits = np.mean([x is not None and x.p_value < 0.05 for x in series])
    # Known to be somewhat liberal in short series.
    assert 0.035 < hits < 0.09
    stable = [d.spread_stability(Subgroups(x).statistics()) for x in rng.standard_normal((runs, 20, 5))]
    share = np.mean([x is not None and x.p_value < 0.05 for x in stable])
    assert within_errors(float(share), 0.05, runs)


def test_spread_stability_against_a_general_library() -> None:
    rng = np.random.default_rng(8)
    values = rng.normal(2.5, 0.02, (25, 5))
    found = d.spread_stability(Subgroups(values).statistics())
    reference = stats.bartlett(*values)
    assert found is not None
    assert found.statistic == pytest.approx(reference.statistic, rel=1e-9)
    assert found.p_value == pytest.approx(reference.pvalue, rel=1e-9)
    assert c.unstable_spread(found) is None
    values[3, 1] = values[7] = np.nan
    values[9, 1:] = np.nan
    found = d.spread_stability(Subgroups(values).statistics())
    rows = [row[~np.isnan(row)] for row in values]
    reference = stats.bartlett(*[row for row in rows if len(row) > 1])
    assert found is not None
    assert found.degrees_of_freedom == 22
    assert found.statistic == pytest.approx(reference.statistic, rel=1e-9)
    wild = rng.normal(0, np.where(np.arange(25) < 12, 1.0, 4.0)[:, None], (25, 5))
    caution = c.unstable_spread(d.spread_stability(Subgroups(wild).statistics()))
    assert caution is not None
    assert "25 subgroups" in caution.sentence


def test_spread_stability_where_it_cannot_be_had() -> None:
    ranges = SubgroupSummary(np.zeros(3), np.full(3, 5), ranges=np.ones(3)).statistics()
    assert d.spread_stability(ranges) is None
    assert d.spread_stability(Subgroups(np.array([[1.0, 2.0]])).statistics()) is None
    assert d.spread_stability(Subgroups(np.array([[1.0, 1.0], [1.0, 2.0]])).statistics()) is None
    assert d.spread_stability(Subgroups(np.full((3, 3), np.nan)).statistics()) is None


def test_resolution() -> None:
    rng = np.random.default_rng(9)
    fine = rng.normal(2.5, 0.02, (25, 5))
    for digits, coarse in ((2, False), (1, True)):
        values = np.round(fine, digits) if digits == 2 else np.round(fine / 0.05) * 0.05
        statistics = Subgroups(values).statistics()
        found = d.resolution(values, statistics)
        assert found is not None
        step = 0.01 if digits == 2 else 0.05
        assert found.smallest_step == step  # and not 0.00999999…
        assert statistics.range is not None
        upper = f.factors(5).D4 * statistics.range.mean()
        assert found.possible_range_values == math.floor(upper / step) + 1
        assert found.coarse is coarse
        assert (c.coarse_resolution(found) is not None) is coarse
    # With ten values there is a lower limit, below which a range is not within the limits.
    ten = np.round(rng.normal(0, 1, (25, 10)) / 0.25) * 0.25
    statistics = Subgroups(ten).statistics()
    found = d.resolution(ten, statistics)
    assert found is not None
    assert statistics.range is not None
    mean = statistics.range.mean()
    D3, D4 = f.factors(10).D3, f.factors(10).D4
    assert D3 is not None
    assert found.possible_range_values == math.floor(D4 * mean / 0.25) - math.ceil(D3 * mean / 0.25) + 1


def test_resolution_of_single_values() -> None:
    values = np.array([10000000.2, 10000000.1, 10000000.3, np.nan] * 5)
    found = d.resolution(values)
    assert found is not None
    assert found.smallest_step == pytest.approx(0.1)
    assert d.resolution(np.array([1.0, np.nan, 2.0])) is None
    assert d.resolution(np.full(9, 3.3)) is None
    assert d.resolution(np.full(9, np.nan)) is None
    # What arithmetic leaves between equal readings is no step.
    noisy = np.array([0.1 + 0.2, 0.3, 0.4, 0.3, 0.5, 0.4])
    found = d.resolution(noisy)
    assert found is not None
    assert found.smallest_step == 0.1


def test_dispersion_by_hand_and_against_a_general_library() -> None:
    cracked = np.array([8.0, 2, 11, np.nan, 5, 7, 1, 6])
    inspected = np.array([120.0, 120, 120, 120, 90, 120, 110, 0])
    found = d.dispersion(cracked, inspected, distribution="binomial")
    assert found is not None
    x, n = cracked[[0, 1, 2, 4, 5, 6]], inspected[[0, 1, 2, 4, 5, 6]]
    reference = stats.chi2_contingency(np.array([x, n - x]), correction=False)
    assert found.statistic == pytest.approx(reference.statistic, rel=1e-12)
    assert found.degrees_of_freedom == reference.dof == 5
    assert found.ratio == pytest.approx(reference.statistic / 5, rel=1e-12)
    assert found.p_value == pytest.approx(2 * reference.pvalue, rel=1e-10)
    holes = np.array([4.0, 9, 3, 5, 4])
    found = d.dispersion(holes, None, distribution="poisson")
    assert found is not None
    assert found.statistic == pytest.approx(4 * holes.var(ddof=1) / holes.mean(), rel=1e-12)


def test_dispersion_in_both_directions() -> None:
    rng = np.random.default_rng(12)
    n = np.full(30, 120.0)
    over = rng.binomial(120, rng.beta(2, 20, 30)).astype(float)
    caution = c.dispersed(d.dispersion(over, n, distribution="binomial"))
    assert caution is not None
    assert (caution.code, caution.reference) == ("overdispersed", "laney-2002")
    assert "`p-prime`" in caution.sentence
    under = np.array([10.0, 11] * 15)
    caution = c.dispersed(d.dispersion(under, None, distribution="poisson"))
    assert caution is not None
    assert caution.code == "underdispersed"
    assert "`u-prime`" in caution.sentence
    assert c.dispersed(d.dispersion(rng.poisson(9, 30).astype(float), None, distribution="poisson")) is None


def test_dispersion_holds_its_level() -> None:
    rng = np.random.default_rng(13)
    runs = 2000
    found = [d.dispersion(x, None, distribution="poisson") for x in rng.poisson(8, (runs, 25)).astype(float)]
    assert within_errors(float(np.mean([x is not None and x.p_value < 0.05 for x in found])), 0.05, runs)


def test_dispersion_where_it_cannot_be_had() -> None:
    for counts, inspected in (([0.0, 0.0], [5.0, 5.0]), ([5.0, 5.0], [5.0, 5.0]), ([3.0], [5.0])):
        assert d.dispersion(np.array(counts), np.array(inspected), distribution="binomial") is None
    assert d.dispersion(np.zeros(9), None, distribution="poisson") is None
    assert d.dispersion(np.full(9, np.nan), None, distribution="poisson") is None


def test_cautions_of_size_and_number() -> None:
    assert c.few_subgroups(20) is None
    caution = c.few_subgroups(1)
    assert caution is not None
    assert "1 subgroup;" in caution.sentence
    assert c.few_individuals(19) is not None
    assert c.few_samples(19) is not None
    twelve = Subgroups(np.random.default_rng(0).standard_normal((3, 12))).statistics()
    five = Subgroups(np.random.default_rng(0).standard_normal((3, 5))).statistics()
    for made in (c.large_subgroups, c.range_inefficient):
        assert made(five) is None
        caution = made(twelve)
        assert caution is not None
        assert "12 values" in caution.sentence
    caution = c.range_inefficient(twelve)
    assert caution is not None
    # Efficiency of the range of 12: 0.814 (Patnaik 1950; Dixon & Massey's table; from memory).
    assert "81 %" in caution.sentence
    assert c.collect(None, caution, None) == (caution,)
    assert c.normality_untested(8) is None
    assert c.normality_untested(7) is not None
    assert c.single_value_subgroups(five) is None
    assert c.single_value_subgroups(Subgroups(np.array([[1.0, np.nan], [1.0, 2.0]])).statistics()) is not None


def test_caution_of_normality_tells_rounding_from_skewness() -> None:
    rng = np.random.default_rng(14)
    skewed = c.not_normal(d.normality(rng.exponential(size=125)))
    rounded = c.not_normal(d.normality(np.round(rng.standard_normal(125))))
    assert skewed is not None
    assert rounded is not None
    assert "skewed by nature" in skewed.sentence
    assert "different readings" in rounded.sentence
    assert c.not_normal(d.normality(rng.standard_normal(125))) is None
    assert c.not_normal(None) is c.autocorrelated(None) is c.dispersed(None) is None
    assert c.coarse_resolution(None) is c.unstable_spread(None) is None
