"""Crossed measurement studies against published analyses, least squares and simulation."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest

from assignable.spc.errors import SpcError, UnusableData, UnusableParameter
from assignable.spc.studies.crossed import CrossedStudy, crossed
from assignable.spc.studies.variance_components import (
    AnovaRow,
    OneSidedTolerance,
    combination_interval,
    f_upper_quantile,
    ratio_interval,
)


def _table(text: str) -> np.ndarray:
    return np.array(text.split(), dtype=float)


# AIAG Measurement Systems Analysis, 4th ed. (2010), ch. III B: three appraisers, three trials (a row each),
# ten parts. Partly checked in print, the rest from memory, recomputed.
_AIAG = np.moveaxis(
    _table("""
        0.29 -0.56 1.34 0.47 -0.80  0.02 0.59 -0.31 2.26 -1.36
        0.41 -0.68 1.17 0.50 -0.92 -0.11 0.75 -0.20 1.99 -1.25
        0.64 -0.58 1.27 0.64 -0.84 -0.21 0.66 -0.17 2.01 -1.31
        0.08 -0.47 1.19 0.01 -0.56 -0.20 0.47 -0.63 1.80 -1.68
        0.25 -1.22 0.94 1.03 -1.20  0.22 0.55  0.08 2.12 -1.62
        0.07 -0.68 1.34 0.20 -1.28  0.06 0.83 -0.34 2.19 -1.50
        0.04 -1.38 0.88 0.14 -1.46 -0.29 0.02 -0.46 1.77 -1.49
       -0.11 -1.13 1.09 0.20 -1.07 -0.67 0.01 -0.56 1.45 -1.77
       -0.15 -0.96 0.67 0.11 -1.45 -0.49 0.21 -0.49 1.87 -2.16
    """).reshape(3, 3, 10),
    2,
    0,
)

# Montgomery, Design and Analysis of Experiments: twenty parts, three operators, two measurements (a row a
# part). From memory, recomputed: the sums of squares printed come out to their last digit.
_PARTS_OPERATORS = _table("""
    21 20 20 20 19 21
    24 23 24 24 23 24
    20 21 19 21 20 22
    27 27 28 26 27 28
    19 18 19 18 18 21
    23 21 24 21 23 22
    22 21 22 24 22 20
    19 17 18 20 19 18
    24 23 25 23 24 24
    25 23 26 25 24 25
    21 20 20 20 21 20
    18 19 17 19 18 19
    23 25 25 25 25 25
    24 24 23 25 24 25
    29 30 30 28 31 30
    26 26 25 26 25 27
    20 20 19 20 20 20
    19 21 19 19 21 23
    25 26 25 24 25 25
    19 19 18 17 19 17
""").reshape(20, 3, 2)

# Davies (1954), Box & Tiao (1973): yield of dyestuff, six batches of five. From memory, recomputed.
_DYESTUFF = _table("""
    1545 1440 1440 1520 1580
    1540 1555 1490 1560 1495
    1595 1550 1605 1510 1560
    1445 1440 1595 1465 1545
    1595 1630 1515 1635 1625
    1520 1455 1450 1480 1445
""").reshape(6, 1, 5)

# NIST StRD, analysis of variance, SiRstv: resistivity of silicon by five instruments. From memory,
# recomputed: the certified values come out.
_SILICON = _table("""
    196.3052 196.1240 196.1890 196.2569 196.3403
    196.3042 196.3825 196.1669 196.3257 196.0422
    196.1303 196.2005 196.2889 196.0343 196.1811
    196.2795 196.1748 196.1494 196.1485 195.9885
    196.2119 196.1051 196.1850 196.0052 196.2090
""").reshape(5, 1, 5)

# NIST e-Handbook 2.6.1, probe 2362: averages of six days, for each of five wafers in each of two runs.
# Checked in print. (wafer, run, day)
_PROBE = _table("""
    95.1162 95.0569 95.0598 95.1487 95.0743 95.1010  95.1687 95.1564 95.1354 95.0422 95.1354 95.1075
    99.2939 99.3234 99.2748 99.3512 99.2350 99.3574  99.3408 99.3116 99.3241 99.2991 99.3049 99.2782
    96.0771 95.9976 96.0148 96.0397 96.0407 96.0445  96.0793 96.1115 96.0803 96.0411 96.0988 96.0482
    101.0471 101.0224 101.0702 101.0904 101.0626 101.0686
    101.1353 101.1201 101.0946 100.9977 101.0963 101.0300
    94.2437 94.2115 94.2348 94.2124 94.2214 94.1651  94.2052 94.2824 94.2396 94.2087 94.2937 94.2330
""").reshape(5, 2, 6)  # fmt: skip


def _row(table: tuple[AnovaRow, ...] | None, source: str) -> AnovaRow:
    assert table is not None
    return next(row for row in table if row.source == source)


def _projections(x: np.ndarray) -> dict[str, float]:
    """Sums of squares by least squares on dummy columns: nothing in common with means of cells."""
    p, o, _ = x.shape
    i, j, _ = (index.ravel() for index in np.indices(x.shape))
    one = np.ones((x.size, 1))
    part, appraiser = np.eye(p)[i], np.eye(o)[j]
    both = np.eye(p * o)[i * o + j]
    y = x.ravel()

    def left(*columns: np.ndarray) -> float:
        design = np.hstack(columns)
        fit, *_ = np.linalg.lstsq(design, y, rcond=None)
        return float(np.sum((y - design @ fit) ** 2))

    return {
        "part": left(one, appraiser) - left(one, appraiser, part),
        "appraiser": left(one, part) - left(one, appraiser, part),
        "part-by-appraiser": left(one, part, appraiser) - left(one, both),
        "repeatability": left(one, both),
        "total": left(one),
    }


class TestAiag:
    study = crossed(_AIAG)

    def test_table_with_interaction(self) -> None:
        expected = {  # printed to four decimals
            "part": (88.3619, 9),
            "appraiser": (3.1673, 2),
            "part-by-appraiser": (0.3590, 18),
            "repeatability": (2.7589, 60),
            "total": (94.6471, 89),
        }
        for source, (square, df) in expected.items():
            row = _row(self.study.table_with_interaction, source)
            assert row.sum_of_squares == pytest.approx(square, abs=6e-5)
            assert row.degrees_of_freedom == df
        assert _row(self.study.table_with_interaction, "part").mean_square == pytest.approx(9.81799, abs=6e-6)
        interaction = _row(self.study.table_with_interaction, "part-by-appraiser")
        assert interaction.f_ratio == pytest.approx(0.434, abs=5e-4)
        # Recomputed, unpooled: F of part 492.291, of appraiser 79.406.
        assert _row(self.study.table_with_interaction, "part").f_ratio == pytest.approx(492.291, abs=6e-4)
        assert _row(self.study.table_with_interaction, "appraiser").f_ratio == pytest.approx(79.406, abs=6e-4)

    def test_pooled_components(self) -> None:
        assert self.study.interaction_pooled
        assert self.study.model == "without-interaction"
        assert [note.code for note in self.study.cautions] == ["interaction-pooled"]
        found = self.study.components
        assert found.part_by_appraiser is None
        assert found.appraiser is not None
        # Printed to five decimals.
        assert found.repeatability.variance == pytest.approx(0.03997, abs=6e-6)
        assert found.appraiser.variance == pytest.approx(0.05146, abs=6e-6)
        assert found.part.variance == pytest.approx(1.08645, abs=6e-6)
        assert found.gauge.variance == pytest.approx(0.09143, abs=6e-6)
        assert found.total.variance == pytest.approx(1.17788, abs=6e-6)

    def test_shares_and_categories(self) -> None:
        found = self.study.components
        assert found.gauge.sd == pytest.approx(0.30237, abs=6e-6)
        assert found.part.sd == pytest.approx(1.04233, abs=6e-6)
        assert found.appraiser is not None
        for component, share in (
            (found.repeatability, 18.42),
            (found.appraiser, 20.90),
            (found.gauge, 27.86),
            (found.part, 96.04),
        ):
            assert component.sd_share_percent == pytest.approx(share, abs=6e-3)
        assert self.study.discrimination.distinct_categories == 4
        assert 1.41 * found.part.sd / found.gauge.sd == pytest.approx(4.86, abs=5e-3)

    def test_without_pooling(self) -> None:
        kept = crossed(_AIAG, pooling_alpha=None)
        assert kept.model == "with-interaction"
        assert kept.table == self.study.table_with_interaction
        assert kept.components.part_by_appraiser is not None
        # By definition: (0.0199435 - 0.0459822) / 3.
        assert kept.components.part_by_appraiser.estimate == pytest.approx(-0.00867959, abs=1e-8)
        assert kept.components.part_by_appraiser.variance == 0
        assert "negative-component" in [note.code for note in kept.cautions]


class TestPartsAndOperators:
    """Montgomery's study, in print with the interaction and after dropping it. From memory, recomputed."""

    study = crossed(_PARTS_OPERATORS, tolerance=55.0)

    def test_table(self) -> None:
        for source, square, f_ratio, p_value in (
            ("part", 1185.425, 87.65, 0.0),
            ("appraiser", 2.617, 1.84, 0.173),
            ("part-by-appraiser", 27.050, 0.72, 0.861),
            ("repeatability", 59.500, None, None),
            ("total", 1274.592, None, None),
        ):
            row = _row(self.study.table_with_interaction, source)
            assert row.sum_of_squares == pytest.approx(square, abs=6e-4)
            assert row.f_ratio == (None if f_ratio is None else pytest.approx(f_ratio, abs=6e-3))
            assert row.p_value == (None if p_value is None else pytest.approx(p_value, abs=6e-4))

    def test_components(self) -> None:
        kept = crossed(_PARTS_OPERATORS, pooling_alpha=None).components
        assert kept.part_by_appraiser is not None
        assert kept.appraiser is not None
        assert kept.part.estimate == pytest.approx(10.2798, abs=6e-5)
        assert kept.appraiser.estimate == pytest.approx(0.0149, abs=6e-5)
        assert kept.part_by_appraiser.estimate == pytest.approx(-0.1399, abs=6e-5)
        assert kept.repeatability.estimate == pytest.approx(0.9917, abs=6e-5)
        pooled = self.study.components
        assert pooled.appraiser is not None
        assert pooled.repeatability.estimate == pytest.approx(0.88, abs=5e-3)
        assert pooled.part.estimate == pytest.approx(10.25, abs=5e-3)
        assert pooled.appraiser.estimate == pytest.approx(0.0106, abs=5e-5)

    def test_tolerance(self) -> None:
        gauge = self.study.components.gauge
        assert gauge.share_of_tolerance_percent == pytest.approx(100 * 6 * gauge.sd / 55)
        total, part = self.study.components.total, self.study.components.part
        assert self.study.capability.observed_index == pytest.approx(55 / 6 / total.sd)
        assert self.study.capability.true_index == pytest.approx(55 / 6 / part.sd)
        # 1/Cp(observed)² = 1/Cp(true)² + (share of tolerance)²: variances add.
        share = 6 * gauge.sd / 55
        assert self.study.capability.observed_index is not None
        assert self.study.capability.true_index is not None
        assert self.study.capability.observed_index**-2 == pytest.approx(
            self.study.capability.true_index**-2 + share**2
        )


def test_one_operator() -> None:
    # Montgomery's gauge study of one operator (20 parts, 2 measurements; the first operator's columns). In
    # print from ranges: grand mean 22.3, mean range 1.0, gauge sd 1.0/1.128 = 0.887, P/T 0.097 (from memory).
    # The analysis of variance uses squares instead, so it agrees to a few hundredths only.
    study = crossed(_PARTS_OPERATORS[:, :1, :], tolerance=55.0)
    assert study.model == "one-appraiser"
    assert study.components.appraiser is None
    assert study.components.reproducibility is None
    assert study.grand_mean == pytest.approx(22.3)
    assert study.cell_ranges.mean() == pytest.approx(1.0)
    assert study.cell_ranges.mean() / 1.128 == pytest.approx(0.887, abs=5e-4)
    assert study.components.gauge.sd == pytest.approx(0.887, rel=0.03)
    assert study.components.gauge.share_of_tolerance_percent == pytest.approx(9.7, rel=0.03)
    # Exactly, from differences: sum of d²/2 over 20.
    differences = np.diff(_PARTS_OPERATORS[:, 0, :], axis=1)
    assert study.components.gauge.variance == pytest.approx(float((differences**2).mean()) / 2)


def test_dyestuff() -> None:
    study = crossed(_DYESTUFF)
    part, error = _row(study.table, "part"), _row(study.table, "repeatability")
    assert part.mean_square == pytest.approx(11271.5, abs=0.05)
    assert error.mean_square == pytest.approx(2451.25, abs=0.005)
    assert part.f_ratio == pytest.approx(4.60, abs=0.005)
    assert study.components.part.variance == pytest.approx(1764.05, abs=0.005)


def test_silicon_resistivity_to_ten_digits() -> None:
    table = crossed(_SILICON).table
    assert _row(table, "part").sum_of_squares == pytest.approx(5.11462616e-02, rel=1e-10)
    assert _row(table, "repeatability").sum_of_squares == pytest.approx(2.16636560e-01, rel=1e-10)
    assert _row(table, "part").f_ratio == pytest.approx(1.18046237440255, rel=1e-10)


@pytest.mark.parametrize(("base", "digits"), [(1.0, 12), (1e6, 8), (1e12, 2)])
def test_stiff_values(base: float, digits: int) -> None:
    # The design of NIST StRD SmLs (from memory): nine treatments of 21 around large constants; certified
    # F 21, sums of squares 1.68 and 1.80. Digits are what the decimals keep as doubles at that size.
    levels = np.array([0.4, 0.3, 0.5, 0.3, 0.5, 0.3, 0.5, 0.3, 0.5])
    pattern = np.array([0.0, *([-0.1, 0.1] * 10)])
    study = crossed((base + levels[:, None] + pattern)[:, None, :])
    assert _row(study.table, "part").f_ratio == pytest.approx(21.0, rel=10.0**-digits)
    assert _row(study.table, "part").sum_of_squares == pytest.approx(1.68, rel=10.0**-digits)
    assert _row(study.table, "repeatability").sum_of_squares == pytest.approx(1.80, rel=10.0**-digits)


def test_resistivity_probe() -> None:
    study = crossed(_PROBE, pooling_alpha=None)
    # Print: level 2 (days) pooled 0.03617 on 50 degrees of freedom; level 3 (runs) 0.0196 on 5.
    assert study.components.repeatability.sd == pytest.approx(0.03617, abs=6e-6)
    assert _row(study.table, "repeatability").degrees_of_freedom == 50
    runs = _row(study.table, "appraiser"), _row(study.table, "part-by-appraiser")
    square = sum(row.sum_of_squares for row in runs) / 6
    df = sum(row.degrees_of_freedom for row in runs)
    assert df == 5
    assert math.sqrt(square / df) == pytest.approx(0.0196, abs=6e-5)


class TestIndependently:
    @pytest.mark.parametrize("shape", [(10, 3, 3), (4, 2, 2), (7, 5, 2), (2, 2, 6)])
    def test_sums_of_squares_are_projections(self, shape: tuple[int, int, int]) -> None:
        rng = np.random.default_rng(20260302)
        x = (
            60
            + rng.normal(size=shape)
            + 3 * rng.normal(size=(shape[0], 1, 1))
            + rng.normal(size=(1, shape[1], 1))
        )
        study = crossed(x)
        for source, square in _projections(x).items():
            row = _row(study.table_with_interaction, source)
            assert row.sum_of_squares == pytest.approx(square, rel=1e-9)

    def test_one_trial_is_additive(self) -> None:
        rng = np.random.default_rng(7)
        x = rng.normal(size=(8, 3, 1))
        study = crossed(x)
        assert study.table_with_interaction is None
        assert study.interaction_p_value is None
        assert not study.interaction_pooled
        assert study.cautions[0].code == "interaction-not-estimable"
        assert _row(study.table, "repeatability").sum_of_squares == pytest.approx(
            _projections(x)["part-by-appraiser"], rel=1e-9
        )
        assert _row(study.table, "repeatability").degrees_of_freedom == 14

    @pytest.mark.parametrize(
        ("tail", "a", "b"), [(0.025, 9, 18), (0.975, 2, 60), (0.005, 1, 1), (0.995, 1, 4)]
    )
    def test_f_quantile(self, tail: float, a: int, b: int) -> None:
        x = f_upper_quantile(tail, a, b)
        above = mpmath.betainc(b / 2, a / 2, 0, b / (b + a * mpmath.mpf(x)), regularized=True)
        assert float(above) == pytest.approx(tail, rel=1e-10)

    def test_f_test(self) -> None:
        study = crossed(_PARTS_OPERATORS)
        f_ratio = mpmath.mpf(_row(study.table_with_interaction, "part").f_ratio)
        tail = mpmath.betainc(19, 19 / mpmath.mpf(2), 0, 38 / (38 + 19 * f_ratio), regularized=True)
        assert _row(study.table_with_interaction, "part").p_value == pytest.approx(float(tail), rel=1e-8)

    def test_repeatability_interval_is_chi_square(self) -> None:
        study = crossed(_PARTS_OPERATORS, pooling_alpha=None)
        found = study.components.repeatability
        for bound, probability in ((found.variance_lower, 0.975), (found.variance_upper, 0.025)):
            chi_square = 59.5 / bound
            below = mpmath.gammainc(30, 0, chi_square / 2, regularized=True)
            assert float(below) == pytest.approx(probability, rel=1e-9)

    @pytest.mark.parametrize(("a", "b"), [(9, 18), (2, 18), (19, 60)])
    def test_difference_is_bounded_by_zero_where_the_f_test_decides(self, a: int, b: int) -> None:
        # Ting et al. (1990) choose the cross term so that interval and F test agree on zero.
        coefficients = (1.0, -1.0)
        for bound, tail in ((0, 0.025), (1, 0.975)):
            squares = np.array([f_upper_quantile(tail, a, b), 1.0])
            assert combination_interval(coefficients, squares, (a, b), 0.95)[bound] == pytest.approx(
                0, abs=1e-9
            )

    def test_bounds_of_categories_and_shares_agree(self) -> None:
        found = crossed(_AIAG).discrimination
        for ratio, share in (
            (found.distinct_categories_ratio, found.gauge_variance_share_percent),
            (found.distinct_categories_ratio_lower, found.gauge_variance_share_percent_upper),
            (found.distinct_categories_ratio_upper, found.gauge_variance_share_percent_lower),
        ):
            assert ratio is not None
            assert share is not None
            assert ratio**2 == pytest.approx(2 * (100 / share - 1))

    def test_one_way_share_is_exact(self) -> None:
        # Searle, Casella & McCulloch (1992): F/F_tail - 1 over r bounds the ratio of the components exactly.
        study = crossed(_DYESTUFF)
        f_ratio = _row(study.table, "part").f_ratio
        assert f_ratio is not None
        lower = max((f_ratio / f_upper_quantile(0.025, 5, 24) - 1) / 5, 0)
        upper = (f_ratio / f_upper_quantile(0.975, 5, 24) - 1) / 5
        found = study.discrimination
        assert found.part_variance_share_percent_lower == pytest.approx(100 * lower / (1 + lower))
        assert found.part_variance_share_percent_upper == pytest.approx(100 * upper / (1 + upper))
        assert found.gauge_variance_share_percent_upper == pytest.approx(100 / (1 + lower))


def _simulated(rng: np.random.Generator, means: list[float], df: list[int], runs: int) -> np.ndarray:
    return np.array([m * rng.chisquare(v, runs) / v for m, v in zip(means, df, strict=True)])


@pytest.mark.parametrize(
    ("shape", "part", "appraiser", "interaction"),
    [
        ((10, 3, 3), 10.0, 0.5, 0.5),
        ((10, 3, 3), 1.0, 1.0, 1.0),
        ((20, 3, 2), 10.0, 5.0, 0.1),
        ((10, 6, 2), 10.0, 0.01, 0.01),
        ((10, 2, 2), 10.0, 0.5, 0.1),
    ],
)
def test_coverage(shape: tuple[int, int, int], part: float, appraiser: float, interaction: float) -> None:
    """Intervals cover at their level; a standard error is 0.0015 here.

    Three are conservative, as published: the sum of appraiser and interaction, the total, and most of all
    the ratio of part to gauge, which is exact only where one mean square makes up the gauge.
    """
    p, o, r = shape
    rng = np.random.default_rng(11)
    df = [p - 1, o - 1, (p - 1) * (o - 1), p * o * (r - 1)]
    within = 1 + r * interaction
    squares = _simulated(rng, [within + o * r * part, within + p * r * appraiser, within, 1.0], df, 20_000)
    gauge = (0.0, 1 / (p * r), (p - 1) / (p * r), (r - 1) / r)
    cases = {
        "repeatability": ((0, 0, 0, 1), 1.0, 0.944, 0.956),
        "interaction": ((0, 0, 1 / r, -1 / r), interaction, 0.944, 0.957),
        "appraiser": ((0, 1 / (p * r), -1 / (p * r), 0), appraiser, 0.944, 0.957),
        "part": ((1 / (o * r), 0, -1 / (o * r), 0), part, 0.944, 0.957),
        "reproducibility": (
            (0, 1 / (p * r), (p - 1) / (p * r), -1 / r),
            appraiser + interaction,
            0.944,
            0.983,
        ),
        "gauge": (gauge, appraiser + interaction + 1, 0.944, 0.966),
        "total": (
            (1 / (o * r), 1 / (p * r), (p * o - p - o) / (p * o * r), 1 - 1 / r),
            part + appraiser + interaction + 1,
            0.940,
            0.975,
        ),
    }
    for name, (coefficients, truth, least, most) in cases.items():
        lower, upper = combination_interval(coefficients, squares, df, 0.95)
        covered = float(np.mean((lower <= truth) & (upper >= truth)))
        assert least < covered < most, (name, covered)
    truth = part / (appraiser + interaction + 1)
    lower, upper = ratio_interval(gauge, squares, df, 0.95, first=0, second=2, scale=1 / (o * r))
    assert 0.95 < np.mean((lower <= truth) & (upper >= truth)) < 0.99


def test_study_covers_from_the_measurements_on() -> None:
    """The whole road, choice of model included: gauge and part variance within their intervals."""
    rng = np.random.default_rng(5)
    runs, hits = 600, np.zeros(2)
    for _ in range(runs):
        x = (
            2.5
            + rng.normal(0, 0.03, (10, 1, 1))
            + rng.normal(0, 0.01, (1, 3, 1))
            + rng.normal(0, 0.005, (10, 3, 1))
            + rng.normal(0, 0.01, (10, 3, 2))
        )
        found = crossed(x).components
        for k, (component, truth) in enumerate(((found.gauge, 2.25e-4), (found.part, 9e-4))):
            hits[k] += component.variance_lower <= truth <= component.variance_upper
    error = math.sqrt(0.95 * 0.05 / runs)
    assert np.all(np.abs(hits / runs - 0.95) < 4 * error)


class TestEffects:
    def test_chart_run_length(self) -> None:
        study = crossed(_AIAG, chart_shift=1.0, chart_subgroup_size=5)
        assert study.chart is not None
        # ARL 4.4953 of a three-sigma mean chart, n = 5, shift 1: computed from the definition with mpmath.
        away = mpmath.sqrt(5)
        perfect = 1 / (mpmath.ncdf(away - 3) + mpmath.ncdf(-away - 3))
        assert study.chart.arl_perfect_gauge == pytest.approx(float(perfect), rel=1e-12)
        share = study.components.part.variance / study.components.total.variance
        assert study.chart.shift_factor == pytest.approx(math.sqrt(share))
        away = mpmath.sqrt(5 * share)
        with_gauge = 1 / (mpmath.ncdf(away - 3) + mpmath.ncdf(-away - 3))
        assert study.chart.arl_with_gauge == pytest.approx(float(with_gauge), rel=1e-12)
        assert study.chart.arl_with_gauge > study.chart.arl_perfect_gauge
        assert study.chart.subgroup_size_factor == pytest.approx(1 / share)

    def test_process_sd_replaces_the_spread_of_the_parts(self) -> None:
        gauge = crossed(_AIAG).components.gauge
        study = crossed(_AIAG, process_sd=1.0)
        assert study.discrimination.basis == "process"
        assert study.components.gauge.sd_share_percent == pytest.approx(100 * gauge.sd)
        assert study.discrimination.distinct_categories_ratio == pytest.approx(
            math.sqrt(2 * (1 / gauge.variance - 1))
        )
        assert study.discrimination.distinct_categories_ratio_lower is None
        with pytest.raises(UnusableParameter) as caught:
            crossed(_AIAG, process_sd=0.3)
        assert caught.value.faults[0].code == "process-below-gauge"
        assert caught.value.faults[0].where == ("process_sd",)

    def test_one_sided(self) -> None:
        upper = crossed(_PARTS_OPERATORS, tolerance=OneSidedTolerance(40.0, "upper"))
        room = 40 - upper.grand_mean
        assert upper.components.gauge.share_of_tolerance_percent == pytest.approx(
            100 * 3 * upper.components.gauge.sd / room
        )
        assert upper.capability.index == "cpu"
        assert upper.capability.observed_index == pytest.approx(room / 3 / upper.components.total.sd)
        lower = crossed(_PARTS_OPERATORS, tolerance=OneSidedTolerance(5.0, "lower"))
        assert lower.capability.index == "cpl"
        assert lower.capability.observed_index == pytest.approx(
            (lower.grand_mean - 5) / 3 / lower.components.total.sd
        )
        beyond = crossed(_PARTS_OPERATORS, tolerance=OneSidedTolerance(20.0, "upper"))
        assert beyond.components.gauge.share_of_tolerance_percent is None
        assert beyond.capability.observed_index is None
        assert "mean-beyond-limit" in [note.code for note in beyond.cautions]

    def test_spread_multiple(self) -> None:
        old = crossed(_AIAG, spread_multiple=5.15).components.gauge
        assert old.spread == pytest.approx(5.15 * old.sd)
        assert old.sd_share_percent == crossed(_AIAG).components.gauge.sd_share_percent


class TestDegenerate:
    def test_no_variation_at_all(self) -> None:
        # 0.1 has no finite binary form: what rounding leaves must not pass for variation.
        study = crossed(np.full((5, 3, 2), 0.1), tolerance=1.0)
        assert study.components.total.variance == 0
        assert study.components.total.variance_share_percent is None
        assert study.components.gauge.sd_share_percent is None
        assert study.components.gauge.share_of_tolerance_percent == 0
        assert study.discrimination.distinct_categories is None
        assert study.discrimination.gauge_variance_share_percent is None
        assert study.capability.observed_index is None
        assert study.chart is None
        assert "no-variation" in [note.code for note in study.cautions]

    @pytest.mark.parametrize("shift", [0.0, 1e7])
    def test_gauge_without_variation(self, shift: float) -> None:
        x = np.broadcast_to(shift + np.arange(5.0)[:, None, None] / 10, (5, 3, 2)).copy()
        study = crossed(x)
        assert study.components.gauge.variance == 0
        assert study.components.gauge.variance_share_percent == 0
        assert study.components.part.variance_share_percent == 100
        assert study.discrimination.distinct_categories is None
        assert study.discrimination.distinct_categories_ratio_upper is None
        assert _row(study.table, "part").f_ratio is None
        assert _row(study.table, "part").p_value == 0
        assert "no-gauge-variation" in [note.code for note in study.cautions]

    def test_equal_trials_keep_the_interaction(self) -> None:
        rng = np.random.default_rng(3)
        study = crossed(np.repeat(rng.normal(size=(6, 3, 1)), 2, axis=2))
        assert study.interaction_p_value == 0
        assert study.model == "with-interaction"
        assert study.components.repeatability.variance == 0
        assert study.components.gauge.variance > 0

    def test_parts_all_alike(self) -> None:
        x = np.random.default_rng(8).normal(size=(1, 3, 4)).repeat(5, axis=0)
        study = crossed(x)
        assert study.components.part.variance == 0
        assert study.discrimination.distinct_categories == 0
        assert study.chart is not None
        assert study.chart.subgroup_size_factor is None
        assert study.chart.arl_with_gauge == pytest.approx(370.398, abs=1e-3)

    def test_missing_cells_are_each_named(self) -> None:
        x = _AIAG.copy()
        x[2, 1, 0] = x[9, 2, 2] = np.nan
        with pytest.raises(UnusableData) as caught:
            crossed(x)
        assert [fault.where for fault in caught.value.faults] == [
            ("data", "values", 2, 1, 0),
            ("data", "values", 9, 2, 2),
        ]
        assert {fault.code for fault in caught.value.faults} == {"missing-measurement"}

    @pytest.mark.parametrize(
        ("x", "code"),
        [
            (np.ones((1, 3, 2)), "too-few-parts"),
            (np.arange(5.0).reshape(5, 1, 1), "nothing-repeated"),
            (np.ones((3, 2)), "empty"),
            (np.ones((3, 0, 2)), "empty"),
            (np.full((3, 2, 2), 1e70), "out-of-range"),
        ],
    )
    def test_unusable(self, x: np.ndarray, code: str) -> None:
        with pytest.raises(UnusableData) as caught:
            crossed(x)
        assert caught.value.faults[0].code == code

    def test_options_out_of_range_are_all_named(self) -> None:
        with pytest.raises(UnusableParameter) as caught:
            crossed(
                _AIAG,
                tolerance=-1.0,
                spread_multiple=0.0,
                confidence=1.0,
                chart_subgroup_size=0,
                process_sd=0.0,
            )
        assert [fault.where[0] for fault in caught.value.faults] == [
            "specification",
            "spread_multiple",
            "process_sd",
            "chart_subgroup_size",
            "confidence",
        ]
        with pytest.raises(SpcError):
            crossed(_AIAG, pooling_alpha=1.5)

    def test_widest_confidence_stays_finite(self) -> None:
        study: CrossedStudy = crossed(_PARTS_OPERATORS[:, :2, :], confidence=0.999999)
        assert math.isfinite(study.components.total.variance_upper)
        assert study.discrimination.distinct_categories_ratio_upper is not None
        assert math.isfinite(study.discrimination.distinct_categories_ratio_upper)
