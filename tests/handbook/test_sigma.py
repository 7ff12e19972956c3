"""Estimators of sigma: by hand, against certified values, and their degrees of freedom by simulation."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from scipy import stats

from assignable.spc import factors as f
from assignable.spc import sigma as s
from assignable.spc.data import Subgroups, SubgroupStatistics, SubgroupSummary
from assignable.spc.errors import SpcError, UnusableData, UnusableParameter

# Wall thicknesses of the invented filter plant, mm; a piece missing in two of the cars.
UNEQUAL = Subgroups(
    np.array(
        [
            [2.51, 2.49, np.nan, 2.50, 2.52],
            [2.48, 2.50, 2.51, 2.49, 2.50],
            [2.53, np.nan, np.nan, np.nan, 2.49],
            [np.nan, np.nan, 2.50, np.nan, np.nan],
            [np.nan] * 5,
        ]
    )
)


def code(caught: pytest.ExceptionInfo[SpcError]) -> str:
    return caught.value.faults[0].code


def test_equal_sizes_are_the_ordinary_quotients() -> None:
    rng = np.random.default_rng(1)
    values = rng.normal(2.5, 0.02, (25, 5))
    statistics = Subgroups(values).statistics()
    ranges, sds = np.ptp(values, axis=1), values.std(axis=1, ddof=1)
    assert s.within(statistics, "mean-range").sigma == pytest.approx(ranges.mean() / f.d2(5), rel=1e-13)
    assert s.within(statistics, "mean-sd").sigma == pytest.approx(sds.mean() / f.c4(5), rel=1e-12)
    pooled = math.sqrt((sds**2).mean()) / f.c4(101)
    assert s.within(statistics, "pooled-sd").sigma == pytest.approx(pooled, rel=1e-12)
    assert s.within(statistics, "pooled-sd").degrees_of_freedom == 100
    median = float(np.median(ranges)) / f.range_median(5)
    assert s.within(statistics, "median-range").sigma == pytest.approx(median, rel=1e-13)


def test_unequal_sizes_by_hand() -> None:
    statistics = UNEQUAL.statistics()
    rows = [(4, 0.03), (5, 0.03), (2, 0.04)]
    weight = [(f.d2(n) / f.d3(n)) ** 2 for n, _ in rows]
    by_hand = sum(w * r / f.d2(n) for w, (n, r) in zip(weight, rows, strict=True)) / sum(weight)
    found = s.within(statistics, "mean-range")
    assert found.sigma == pytest.approx(by_hand, rel=1e-12)
    assert 1 / f.c4_of_freedom(found.degrees_of_freedom) ** 2 - 1 == pytest.approx(1 / sum(weight), rel=1e-11)
    squares = 0.0005 + 0.00052 + 0.0008  # Σ(x - x̄)² of the three cars
    pooled = s.within(statistics, "pooled-sd")
    assert pooled.degrees_of_freedom == 8
    assert pooled.sigma == pytest.approx(math.sqrt(squares / 8) / f.c4(9), rel=1e-9)
    scaled = sorted(r / f.range_median(n) for n, r in rows)
    assert s.within(statistics, "median-range").sigma == pytest.approx(scaled[1], rel=1e-12)
    sds = [(4, math.sqrt(0.0005 / 3)), (5, math.sqrt(0.00052 / 4)), (2, math.sqrt(0.0008))]
    weight = [f.c4(n) ** 2 / (1 - f.c4(n) ** 2) for n, _ in sds]
    by_hand = sum(w * x / f.c4(n) for w, (n, x) in zip(weight, sds, strict=True)) / sum(weight)
    assert s.within(statistics, "mean-sd").sigma == pytest.approx(by_hand, rel=1e-9)


def test_published_degrees_of_freedom_of_a_range() -> None:
    # Equivalent degrees of freedom of one range of 5: 3.83 (Patnaik 1950; tables of d2*; from memory).
    one = Subgroups(np.array([[1.0, 2, 3, 4, 5]])).statistics()
    assert s.within(one, "mean-range").degrees_of_freedom == pytest.approx(3.83, abs=0.006)
    # Two values: the range is √2 S, so exactly one degree of freedom, by every estimator.
    pair = Subgroups(np.array([[1.0, 2.0]])).statistics()
    for estimator in s.WITHIN:
        assert s.within(pair, estimator).degrees_of_freedom == pytest.approx(1.0, rel=1e-10)


@pytest.mark.parametrize("freedom", [1.0, 1.7, 4.0, 30.0, 1e3, 1e6])
def test_freedom_inverts_the_relative_variance(freedom: float) -> None:
    variance = math.expm1(-2.0 * f.log_c4_of_freedom(freedom))
    assert s.freedom_of_relative_variance(variance) == pytest.approx(freedom, rel=1e-9)


def test_estimators_are_unbiased_with_the_stated_variance() -> None:
    # Simulated: mean within 4 standard errors of 1, variance within 4 of that of a chi with ν.
    rng = np.random.default_rng(11)
    runs = 6000
    z = rng.standard_normal((runs, 10, 4))
    ranges, sds = np.ptp(z, axis=2), z.std(axis=2, ddof=1)
    one = Subgroups(z[0]).statistics()
    simulated = {
        "mean-range": ranges.mean(axis=1) / f.d2(4),
        "mean-sd": sds.mean(axis=1) / f.c4(4),
        "pooled-sd": np.sqrt((sds**2).mean(axis=1)) / f.c4(31),
    }
    for estimator, values in simulated.items():
        variance = 1 / f.c4_of_freedom(s.within(one, estimator).degrees_of_freedom) ** 2 - 1
        assert abs(values.mean() - 1) < 4 * math.sqrt(variance / runs), estimator
        assert values.var() == pytest.approx(variance, rel=4 * math.sqrt(2.2 / runs)), estimator
    # The median's is stated as approximate: an asymptotic one, here within a tenth.
    median = np.median(ranges, axis=1)
    freedom = s.freedom_of_relative_variance(float(median.var() / median.mean() ** 2))
    assert s.within(one, "median-range").degrees_of_freedom == pytest.approx(freedom, rel=0.1)


def test_covariance_of_overlapping_ranges() -> None:
    # Span 2, in closed form: E|Z1-Z2||Z2-Z3| - 4/π = (2√3 - 4)/π + 1/3.
    closed = (2 * math.sqrt(3) - 4) / math.pi + 1 / 3
    assert s._range_covariances(2)[1] == pytest.approx(closed, rel=1e-12)
    # Three values with one shared behave for the two ranges of 3 as the definition simulated says.
    rng = np.random.default_rng(4)
    z = rng.standard_normal((60_000, 5))
    for lag in (1, 2):
        a, b = np.ptp(z[:, :3], axis=1), np.ptp(z[:, lag : lag + 3], axis=1)
        product = (a - a.mean()) * (b - b.mean())
        error = product.std() / math.sqrt(len(z))
        assert abs(product.mean() - s._range_covariances(3)[lag]) < 4 * error


def test_variance_of_mean_moving_ranges() -> None:
    rng = np.random.default_rng(5)
    runs, m = 12_000, 20
    z = rng.standard_normal((runs, m))
    for span in (2, 4):
        windows = np.lib.stride_tricks.sliding_window_view(z, span, axis=1)
        means = np.ptp(windows, axis=2).mean(axis=1) / f.d2(span)
        found = s.moving_range(z[0], span=span)
        variance = 1 / f.c4_of_freedom(found.degrees_of_freedom) ** 2 - 1
        assert abs(means.mean() - 1) < 4 * math.sqrt(variance / runs)
        assert means.var() == pytest.approx(variance, rel=4 * math.sqrt(2.5 / runs))
    # For a long series the moving range keeps 0.605 of the information (Cryer & Ryan 1990: var
    # 0.826 σ²/m against 0.5 σ²/m; from memory).
    long = s.moving_range(rng.standard_normal(100_000))
    assert long.degrees_of_freedom / 100_000 == pytest.approx(0.5 / 0.826, abs=0.001)


def test_median_moving_range_is_approximately_as_stated() -> None:
    rng = np.random.default_rng(6)
    z = rng.standard_normal((6000, 30))
    medians = np.median(np.abs(np.diff(z, axis=1)), axis=1)
    freedom = s.freedom_of_relative_variance(float(medians.var() / medians.mean() ** 2))
    found = s.moving_range(z[0], statistic="median")
    assert found.estimator == "median-moving-range"
    assert found.degrees_of_freedom == pytest.approx(freedom, rel=0.1)
    assert found.sigma == pytest.approx(float(medians[0]) / f.range_median(2), rel=1e-12)


def test_moving_ranges_stop_at_gaps() -> None:
    values = np.array([5.0, 7.0, np.nan, 4.0, 1.0, 2.0])
    assert s.moving_ranges(values).tolist()[1] == 2
    assert np.isnan(s.moving_ranges(values)).tolist() == [True, False, True, True, False, False]
    assert np.isnan(s.moving_ranges(values, 3)).tolist() == [True] * 5 + [False]
    assert s.moving_ranges(values, 3)[-1] == 3
    assert s.moving_range(values).sigma == pytest.approx((2 + 3 + 1) / 3 / f.d2(2))
    # Three ranges, of which two overlap: Var = (3 γ0 + 2 γ1)/9.
    own, shared = s._range_covariances(2)
    variance = (3 * own + 2 * shared) / 9 / f.d2(2) ** 2
    freedom = s.moving_range(values).degrees_of_freedom
    assert 1 / f.c4_of_freedom(freedom) ** 2 - 1 == pytest.approx(variance, rel=1e-11)
    # Three ranges of four values without a gap overlap more, and so tell less.
    gapless = s.moving_range(np.array([5.0, 7.0, 4.0, 2.0]))
    assert s.moving_range(values).degrees_of_freedom > gapless.degrees_of_freedom
    assert np.isnan(s.moving_ranges(values[:2], 5)).all()


@pytest.mark.parametrize("span", [2, 3, 4, 5, 7, 8, 13])
def test_moving_ranges_of_any_span(span: int) -> None:
    values = np.random.default_rng(span).standard_normal(40)
    expected = [np.ptp(values[i - span + 1 : i + 1]) for i in range(span - 1, 40)]
    found = s.moving_ranges(values, span)
    assert np.isnan(found[: span - 1]).all()
    assert found[span - 1 :].tolist() == pytest.approx(expected, rel=1e-15)


def test_handbook_individuals() -> None:
    # NIST/SEMATECH e-Handbook 6.3.2.2 (checked in print): flow rates, mean moving range 1.8778.
    flow = np.array([49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1])
    assert s.moving_range(flow).sigma * f.d2(2) == pytest.approx(1.8778, abs=5e-5)


def certified() -> list[tuple[str, list[str], float, float]]:
    """NIST StRD univariate data (from memory; each reproduces its certified values, which confirms it)."""
    # fmt: off
    last = (
        180, 170, 180, 190, 180, 170, 150, 140, 150, 150, 170, 180, 180, 190, 190, 210, 200,
        160, 140, 130, 130, 150, 150, 160, 150, 140, 130, 140, 150, 140, 150, 160, 150, 160,
        190, 200, 200, 210, 220, 230, 240, 250, 270, 260, 260, 260, 270, 260, 250, 240,
    )
    # fmt: on
    mavro = [f"2.00{x}" for x in last]
    return [
        ("NumAcc1", ["10000001", "10000003", "10000002"], 1.0, 1e-15),
        ("NumAcc2", ["1.2", *["1.1", "1.3"] * 500], 0.1, 1e-14),
        # The data themselves, read as doubles, differ from the decimals: 9 and 8 digits are all they hold.
        ("NumAcc3", ["1000000.2", *["1000000.1", "1000000.3"] * 500], 0.1, 1e-9),
        ("NumAcc4", ["10000000.2", *["10000000.1", "10000000.3"] * 500], 0.1, 1e-8),
        ("Mavro", mavro, 0.000429123454003053, 1e-12),
    ]


@pytest.mark.parametrize(("name", "data", "sd", "digits"), certified())
def test_certified_deviations(name: str, data: list[str], sd: float, digits: float) -> None:
    values = np.array([float(x) for x in data])
    found = s.overall(values)
    assert found.sigma == pytest.approx(sd, rel=digits), name
    assert found.degrees_of_freedom == len(values) - 1
    # Of the doubles as they are, exactly: nothing is lost in the calculation itself.
    exact = [Fraction(x) for x in values.tolist()]
    mean = sum(exact) / len(exact)
    square = sum((x - mean) ** 2 for x in exact) / (len(exact) - 1)
    assert found.sigma == pytest.approx(math.sqrt(square), rel=2e-15), name


def test_overall_from_statistics_agrees_with_the_values() -> None:
    statistics = UNEQUAL.statistics()
    direct = s.overall(UNEQUAL.values)
    found = s.overall_from_statistics(statistics)
    assert found is not None
    assert found.sigma == pytest.approx(direct.sigma, rel=1e-10)
    assert found.degrees_of_freedom == direct.degrees_of_freedom == 11
    ranges_only = SubgroupSummary(np.array([1.0, 2.0]), np.array([5, 5]), np.array([1.0, 2.0])).statistics()
    assert s.overall_from_statistics(ranges_only) is None


def test_pooled_deviation_of_many_is_not_biased_away() -> None:
    statistics = SubgroupSummary(np.zeros(100_000), np.full(100_000, 8), sds=np.ones(100_000)).statistics()
    assert s.within(statistics, "pooled-sd").sigma == pytest.approx(1 + 1 / (4 * 700_000), rel=1e-12)


def test_degrees_of_freedom_serve_a_confidence_interval() -> None:
    # What they are for: a 90 % interval for sigma by chi-square holds it in 90 % of baselines.
    rng = np.random.default_rng(8)
    z = rng.standard_normal((8000, 20))
    sigma = np.abs(np.diff(z, axis=1)).mean(axis=1) / f.d2(2)
    freedom = s.moving_range(z[0]).degrees_of_freedom
    shrunk = sigma * f.c4_of_freedom(freedom)
    low, high = stats.chi2.ppf((0.05, 0.95), freedom)
    held = (shrunk * math.sqrt(freedom / high) < 1) & (shrunk * math.sqrt(freedom / low) > 1)
    assert held.mean() == pytest.approx(0.9, abs=0.02)


def statistics(rows: list[list[float]]) -> SubgroupStatistics:
    return Subgroups(np.array(rows)).statistics()


@pytest.mark.parametrize("estimator", s.WITHIN)
def test_what_cannot_be_estimated_is_refused(estimator: str) -> None:
    with pytest.raises(UnusableData) as caught:
        s.within(statistics([[1.0], [2.0]]), estimator)
    assert code(caught) == "no-spread-information"
    for rows in ([[1.0, 1.0], [2.0, 2.0]], [[1e300, 1e300]] * 3, [[0.1, 0.1, 0.1]] * 3):
        with pytest.raises(UnusableData) as caught:
            s.within(statistics(rows), estimator)
        assert code(caught) == "no-variation"
        assert caught.value.faults[0].where == ("data",)
    for rows in (
        [[1e300, -1e300], [3e299, 1e300]],
        [[1e-300, 2e-300], [1e-300, 3e-300]],
        [[5e-324, 0.0], [0.0, 0.0]],
    ):
        with pytest.raises(UnusableData) as caught:
            s.within(statistics(rows), estimator)
        assert code(caught) == "out-of-scale"


def test_options_that_do_not_fit_are_refused() -> None:
    ranges = SubgroupSummary(np.zeros(3), np.full(3, 5), ranges=np.ones(3)).statistics()
    sds = SubgroupSummary(np.zeros(3), np.full(3, 5), sds=np.ones(3)).statistics()
    for given, estimator, wanted in (
        (ranges, "mean-sd", "estimator-needs-deviations"),
        (ranges, "pooled-sd", "estimator-needs-deviations"),
        (sds, "mean-range", "estimator-needs-ranges"),
        (sds, "median-range", "estimator-needs-ranges"),
        (sds, "mode-range", "unknown-estimator"),
    ):
        with pytest.raises(UnusableParameter) as caught:
            s.within(given, estimator)
        assert code(caught) == wanted
        assert caught.value.faults[0].where == ("sigma_estimator",)
    for span in (0, 1, 101):
        with pytest.raises(UnusableParameter) as caught:
            s.moving_range(np.arange(5.0), span=span)
        assert code(caught) == "span-out-of-range"


def test_median_of_ranges_that_are_mostly_zero() -> None:
    mostly = statistics([[1.0, 1.0], [2.0, 2.0], [1.0, 2.0]])
    assert s.within(mostly, "mean-range").sigma > 0
    with pytest.raises(UnusableData, match="half of the subgroups") as caught:
        s.within(mostly, "median-range")
    assert code(caught) == "no-variation"


def test_single_values_that_cannot_be_estimated_are_refused() -> None:
    for values, wanted in (
        ([1.0], "no-spread-information"),
        ([1.0, np.nan, 2.0], "no-spread-information"),
        ([3.0, 3.0, 3.0], "no-variation"),
        ([1e300, -1e300], "out-of-scale"),
        ([1e-310, 2e-310], "out-of-scale"),
    ):
        with pytest.raises(UnusableData) as caught:
            s.moving_range(np.array(values))
        assert code(caught) == wanted
        if wanted != "no-spread-information" or len(values) == 1:
            with pytest.raises(UnusableData) as caught:
                s.overall(np.array(values))
            assert code(caught) == wanted
    with pytest.raises(UnusableData):
        s.moving_range(np.array([1.0, 1.0, 1.0, 2.0]), statistic="median")
