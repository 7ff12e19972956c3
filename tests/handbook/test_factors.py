"""Control chart factors against print, against exact digits, and against closed forms."""

# ruff: noqa: SIM300 (the factors' own capitals are no constants)

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest

from assignable.spc import factors as f
from assignable.spc.errors import UnusableParameter

# Textbook appendix table A.22, constants after ASTM STP 15D (checked in print); 3 decimals, c4 4 decimals.
# Print differs from exact values by one in the last digit in places (D4(3) = 2.574 for 2.57459, d3(19),
# D3(19), D4(19), D4(18)), so one unit in the last place is allowed throughout.
COLUMNS = ("A2", "A3", "c4", "B3", "B4", "B5", "B6", "mean_range", "range_sd", "D3", "D4")
PRINTED_2_21 = """
2 1.880 2.659 .7979 0 3.267 0 2.606 1.128 .853 0 3.267
3 1.023 1.954 .8862 0 2.568 0 2.276 1.693 .888 0 2.574
4 .729 1.628 .9213 0 2.266 0 2.088 2.059 .880 0 2.282
5 .577 1.427 .9400 0 2.089 0 1.964 2.326 .864 0 2.114
6 .483 1.287 .9515 .030 1.970 .029 1.874 2.534 .848 0 2.004
7 .419 1.182 .9594 .118 1.882 .113 1.806 2.704 .833 .076 1.924
8 .373 1.099 .9650 .185 1.815 .179 1.751 2.847 .820 .136 1.864
9 .337 1.032 .9693 .239 1.761 .232 1.707 2.970 .808 .184 1.816
10 .308 .975 .9727 .284 1.716 .276 1.669 3.078 .797 .223 1.777
11 .285 .927 .9754 .321 1.679 .313 1.637 3.173 .787 .256 1.744
12 .266 .886 .9776 .354 1.646 .346 1.610 3.258 .778 .283 1.717
13 .249 .850 .9794 .382 1.618 .374 1.585 3.336 .770 .307 1.693
14 .235 .817 .9810 .406 1.594 .399 1.563 3.407 .763 .328 1.672
15 .223 .789 .9823 .428 1.572 .421 1.544 3.472 .756 .347 1.653
16 .212 .763 .9835 .448 1.552 .440 1.526 3.532 .750 .363 1.637
17 .203 .739 .9845 .466 1.534 .458 1.511 3.588 .744 .378 1.622
18 .194 .718 .9854 .482 1.518 .475 1.496 3.640 .739 .391 1.608
19 .187 .698 .9862 .497 1.503 .490 1.483 3.689 .734 .403 1.597
20 .180 .680 .9869 .510 1.490 .504 1.470 3.735 .729 .415 1.585
21 .173 .663 .9876 .523 1.477 .516 1.459 3.778 .724 .425 1.575
"""


@pytest.mark.parametrize("line", PRINTED_2_21.strip().splitlines())
def test_printed_table_of_sizes_2_to_21(line: str) -> None:
    n, *cells = line.split()
    found = f.factors(int(n))
    for name, cell in zip(COLUMNS, cells, strict=True):
        value = getattr(found, name)
        if cell == "0":  # print gives 0 where no lower limit exists
            assert value is None, name
        else:
            unit = 0.5e-4 if name == "c4" else 0.5e-3
            assert value == pytest.approx(float(cell), abs=2.2 * unit), name


def test_printed_sizes_22_to_25() -> None:
    # Joglekar 2003, appendix G (checked in print); d3(23) is misprinted there as .1759 for .7159.
    columns = ("mean_range", "range_sd", "c4", "A2", "D3", "D4", "A3", "B3", "B4")
    table = {
        22: (3.819, 0.7199, 0.9882, 0.167, 0.434, 1.566, 0.647, 0.534, 1.466),
        23: (3.858, 0.7159, 0.9887, 0.162, 0.443, 1.557, 0.633, 0.545, 1.455),
        24: (3.895, 0.7121, 0.9892, 0.157, 0.451, 1.548, 0.619, 0.555, 1.445),
        25: (3.931, 0.7084, 0.9896, 0.153, 0.459, 1.541, 0.606, 0.565, 1.435),
    }
    for n, row in table.items():
        for name, cell in zip(columns, row, strict=True):
            fine = name in ("range_sd", "c4")
            assert getattr(f.factors(n), name) == pytest.approx(cell, abs=1e-4 if fine else 1.1e-3), (n, name)


def test_handbook_table_of_range_charts() -> None:
    # NIST/SEMATECH e-Handbook 6.3.2.1 (checked in print). It prints D4(5) = 2.115; exact is 2.114499.
    A2 = (1.880, 1.023, 0.729, 0.577, 0.483, 0.419, 0.373, 0.337, 0.308)
    D3 = (None, None, None, None, None, 0.076, 0.136, 0.184, 0.223)
    D4 = (3.267, 2.575, 2.282, 2.115, 2.004, 1.924, 1.864, 1.816, 1.777)
    for n, a2, low, high in zip(range(2, 11), A2, D3, D4, strict=True):
        found = f.factors(n)
        assert found.A2 == pytest.approx(a2, abs=0.00051)
        assert found.D4 == pytest.approx(high, abs=0.00051)
        assert (found.D3 is None) if low is None else found.D3 == pytest.approx(low, abs=0.00051)
    # The same page: efficiency of the range against the standard deviation; its .930 for n = 6 is .9330.
    for n, efficiency in {2: 1.0, 3: 0.992, 4: 0.975, 5: 0.955, 6: 0.933, 10: 0.850}.items():
        own = (f.relative_sd_of_sd(n) / f.c4(n) * f.d2(n) / f.d3(n)) ** 2
        assert own == pytest.approx(efficiency, abs=0.0006)


def test_other_printed_factors() -> None:
    # Montgomery, appendix VI: A, D2 (checked in print); E2 from a general primer (checked in print).
    for n, A, D2 in ((2, 2.121, 3.686), (3, 1.732, 4.358), (4, 1.5, 4.698)):
        assert f.factors(n).A == pytest.approx(A, abs=0.0005)
        assert f.factors(n).D2 == pytest.approx(D2, abs=0.0005)
        assert f.factors(n).D1 is None
    E2 = (2.659, 1.772, 1.457, 1.290, 1.184, 1.109, 1.054, 1.010, 0.975)
    for n, value in zip(range(2, 11), E2, strict=True):
        assert f.factors(n).E2 == pytest.approx(value, abs=0.0005)


def test_factors_of_measurement_studies() -> None:
    # K1 = 1/d2 and K3 = 1/√(d2² + d3²), the d2* of one range (from memory, recomputed).
    assert 1 / f.d2(2) == pytest.approx(0.8862, abs=5e-5)
    assert 1 / f.d2(3) == pytest.approx(0.5908, abs=5e-5)
    K3 = (0.7071, 0.5231, 0.4467, 0.4030, 0.3742, 0.3534, 0.3375, 0.3249, 0.3146)
    for n, value in zip(range(2, 11), K3, strict=True):
        assert 1 / math.hypot(f.d2(n), f.d3(n)) == pytest.approx(value, abs=6e-5)


# Computed from the definition with mpmath at 32 digits: d2 = 2∫₀(1 - Φⁿ - (1-Φ)ⁿ)dx by adaptive quadrature;
# d3² = ∫(w - d2)² f(w) dw, f(w) = n(n-1)∫φ(u-w/2)φ(u+w/2)(Φ(u+w/2)-Φ(u-w/2))ⁿ⁻² du, the inner integral by
# trapezoidal sums of step 1/8 (n ≤ 25) or 1/16.
EXACT = {
    2: (1.128379167095512573896159, 0.8525024664274217299837),
    3: (1.692568750643268860844238, 0.8883680040452042893994),
    5: (2.325928947281039225544536, 0.8640819410995040746169),
    10: (3.077505461670345712055064, 0.7970506735194112451981),
    25: (3.930629219507113161515215, 0.7084407658886550276174),
    100: (5.015187272883368745035988, 0.605179109487853781706),
    1000: (6.48287153826688172277732, 0.4967351857828871525799),
}


@pytest.mark.parametrize("n", EXACT)
def test_exact_digits_of_the_range(n: int) -> None:
    mean, deviation = EXACT[n]
    assert f.d2(n) == pytest.approx(mean, rel=2e-15)
    assert f.d3(n) == pytest.approx(deviation, rel=1e-14)


def test_closed_forms() -> None:
    assert f.d2(2) == pytest.approx(2 / math.sqrt(math.pi), rel=1e-15)
    assert f.d2(3) == pytest.approx(3 / math.sqrt(math.pi), rel=1e-15)
    assert f.d3(2) == pytest.approx(math.sqrt(2 - 4 / math.pi), rel=1e-15)
    assert f.c4(2) == pytest.approx(math.sqrt(2 / math.pi), rel=1e-15)
    # P(W ≤ w) = 2Φ(w/√2) - 1 for n = 2: the median is √2 Φ⁻¹(3/4).
    with mpmath.workdps(25):
        for q in (1e-7, 0.00135, 0.5, 0.99865, 1 - 1e-9):
            exact = 2 * mpmath.erfinv(mpmath.mpf(q))
            assert f.range_ppf(q, 2) == pytest.approx(float(exact), rel=1e-10)
        assert f.range_isf(1e-12, 2) == pytest.approx(
            float(2 * mpmath.erfinv(1 - mpmath.mpf("1e-12"))), rel=1e-10
        )
    assert f.range_median(2) == pytest.approx(0.9539, abs=5e-5)  # common practice
    assert f.sd_ppf(0.3, 3) == pytest.approx(math.sqrt(-math.log(0.7)), rel=1e-14)
    assert f.sd_isf(1e-9, 3) == pytest.approx(math.sqrt(-math.log(1e-9)), rel=1e-14)


@pytest.mark.parametrize("freedom", [1.0, 2.5, 49.9, 50.1, 999.0, 1e6, 1e12])
def test_c4_of_any_freedom(freedom: float) -> None:
    with mpmath.workdps(40):
        v = mpmath.mpf(freedom)
        exact = mpmath.sqrt(2 / v) * mpmath.exp(mpmath.loggamma((v + 1) / 2) - mpmath.loggamma(v / 2))
        assert f.c4_of_freedom(freedom) == pytest.approx(float(exact), rel=4e-15)
        assert f.log_c4_of_freedom(freedom) == pytest.approx(float(mpmath.log(exact)), rel=5e-13, abs=0)


def test_upper_five_percent_points_of_the_range() -> None:
    # Percentage points of the range: 2.772, 3.314, 3.633, 3.858 … 4.474 (Pearson & Hartley; from memory).
    for n, point in ((2, 2.772), (3, 3.314), (4, 3.633), (5, 3.858), (10, 4.474)):
        assert f.range_isf(0.05, n) == pytest.approx(point, abs=0.0006)


@pytest.mark.parametrize("n", [2, 3, 7, 30, 200, 1000])
def test_distribution_of_the_range_is_one_thing(n: int) -> None:
    w = np.linspace(0.05, 10.0, 80)
    low, high = f.range_cdf(w, n), f.range_sf(w, n)
    assert np.abs(low + high - 1.0).max() < 1e-12
    assert (np.diff(low) >= -1e-15).all()
    assert f.range_cdf(0.0, n) == 0.0
    assert f.range_sf(-1.0, n) == 1.0
    assert f.range_sf(100.0, n) == pytest.approx(0.0, abs=1e-60)
    points = [f.range_ppf(q, n) for q in (1e-6, 0.00135, 0.2, 0.5, 0.50001, 0.8, 0.99865)]
    assert points == sorted(points)
    for q, point in zip((1e-6, 0.00135, 0.2), points[:3], strict=True):
        assert f.range_cdf(point, n) == pytest.approx(q, rel=1e-9)
    # The mean by parts from the distribution.
    x, v = np.polynomial.legendre.leggauss(200)
    grid = 7.0 * (x + 1.0)
    assert 7.0 * float(v @ f.range_sf(grid, n)) == pytest.approx(f.d2(n), rel=1e-9)


def test_simulated_range() -> None:
    rng = np.random.default_rng(20260302)
    w = np.ptp(rng.standard_normal((40_000, 6)), axis=1)
    assert abs(w.mean() - f.d2(6)) < 4 * f.d3(6) / 200
    assert abs((w < f.range_ppf(0.9, 6)).mean() - 0.9) < 4 * math.sqrt(0.09 / 40_000)


def test_any_multiple() -> None:
    two, three = f.factors(7, 2.0), f.factors(7)
    assert two.A2 == pytest.approx(three.A2 * 2 / 3)
    assert two.D4 - 1 == pytest.approx((three.D4 - 1) * 2 / 3)
    assert f.factors(5, 2.0).D3 == pytest.approx(1 - 2 * f.d3(5) / f.d2(5))


def test_sizes_at_once() -> None:
    sizes = np.array([5, 0, 2, 1, 5, 9])
    found = f.d2_of(sizes)
    assert np.isnan(found[[1, 3]]).all()
    assert found[[0, 2, 4, 5]].tolist() == [f.d2(5), f.d2(2), f.d2(5), f.d2(9)]
    assert f.c4_of(np.full(4, 3)).tolist() == [f.c4(3)] * 4
    assert f.d3_of(np.array([2, 3])).tolist() == [f.d3(2), f.d3(3)]
    assert f.range_median_of(np.array([2, 1]))[0] == f.range_median(2)
    assert np.isnan(f.d2_of(np.array([1, 1]))).all()


@pytest.mark.parametrize("n", [0, 1, 1001])
def test_sizes_without_factors_are_refused(n: int) -> None:
    for call in (f.d2, f.d3, f.c4, f.factors, f.range_median):
        with pytest.raises(UnusableParameter) as caught:
            call(n)
        assert caught.value.faults[0].code == "size-out-of-range"
    if n > 1000:
        with pytest.raises(UnusableParameter):
            f.d2_of(np.array([5, n]))


@pytest.mark.parametrize("multiple", [0.0, -3.0, math.nan, math.inf])
def test_multiples_out_of_range_are_refused(multiple: float) -> None:
    with pytest.raises(UnusableParameter) as caught:
        f.factors(5, multiple)
    assert caught.value.faults[0].where == ("sigma_multiple",)
