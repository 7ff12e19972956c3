"""EWMA, CUSUM and moving averages against published examples, plain transcriptions and other methods."""

from __future__ import annotations

import math
from dataclasses import replace

import mpmath
import numpy as np
import pytest

from assignable.spc import runlength
from assignable.spc.charts import CHARTS, cusum, ewma, moving_average
from assignable.spc.charts._memory import Detect, Source, designed
from assignable.spc.charts.common import Exclusion, Standards
from assignable.spc.charts.cusum import CusumOptions
from assignable.spc.charts.ewma import EwmaOptions
from assignable.spc.charts.moving_average import MovingAverageOptions
from assignable.spc.data import Individuals, Subgroups, SubgroupSummary
from assignable.spc.design import memory as design
from assignable.spc.errors import DocumentMismatch, SpcError, UnusableData, UnusableParameter
from assignable.spc.runlength import moving
from assignable.spc.sigma import moving_range

# Montgomery, Introduction to Statistical Quality Control, Table 9.1 (partly checked in print, rest from memory).
# fmt: off
MONTGOMERY = np.array(
    [
        9.45, 7.99, 9.29, 11.66, 12.16, 10.18, 8.04, 11.46, 9.2, 10.34, 9.03, 11.47, 10.51, 9.4, 10.08,
        9.37, 10.62, 10.31, 8.52, 10.84, 10.9, 9.33, 12.29, 11.5, 10.6, 11.08, 10.38, 11.62, 11.31, 10.52,
    ]
)
# Annual flow of the Nile at Aswan, 1871 to 1970 (Cobb 1978; bundled with statsmodels 0.15.0, public domain).
NILE = np.array(
    [
        1120, 1160, 963, 1210, 1160, 1160, 813, 1230, 1370, 1140, 995, 935, 1110, 994, 1020, 960, 1180, 799,
        958, 1140, 1100, 1210, 1150, 1250, 1260, 1220, 1030, 1100, 774, 840, 874, 694, 940, 833, 701, 916,
        692, 1020, 1050, 969, 831, 726, 456, 824, 702, 1120, 1100, 832, 764, 821, 768, 845, 864, 862, 698,
        845, 744, 796, 1040, 759, 781, 865, 845, 944, 984, 897, 822, 1010, 771, 676, 649, 846, 812, 742,
        801, 1040, 860, 874, 848, 890, 744, 749, 838, 1050, 918, 986, 797, 923, 975, 815, 1020, 906, 901,
        1170, 912, 746, 919, 718, 714, 740,
    ],
    dtype=float,
)
# fmt: on
KNOWN = Source(standards=Standards(10.0, 1.0))


def random_subgroups(seed: int, m: int = 60) -> np.ndarray:
    """Subgroups of 0 to 6 values around 20, shifted in the middle."""
    rng = np.random.default_rng(seed)
    values = rng.normal(20.0, 2.0, (m, 6))
    values[m // 3 : m // 2] += 2.0
    for row, size in zip(values, rng.integers(0, 7, m), strict=True):
        row[size:] = np.nan
    return values


# --- EWMA ---------------------------------------------------------------------------------------------


def test_ewma_of_the_nist_handbook() -> None:
    # NIST e-Handbook 6.3.2.4 (quoted second-hand): averages to 2 decimals; limits with asymptotic variance.
    values = [52.0, 47.0, 53.0, 49.3, 50.1, 47.0, 51.0, 50.1, 51.2, 50.5]
    values += [49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1]
    printed = [50.6, 49.52, 50.56, 50.18, 50.16, 49.21, 49.75, 49.85, 50.26, 50.33]
    printed += [50.11, 49.36, 49.52, 50.05, 49.38, 49.92, 50.73, 51.23, 51.94, 51.99]
    options = EwmaOptions(Source(standards=Standards(50.0, 2.0539)), 0.3, 3.0, "asymptotic")
    fit = ewma.fit(Individuals(np.array(values)), options)
    assert fit.baseline is not None
    panel = fit.baseline.panels.ewma
    np.testing.assert_allclose(panel.value, printed, atol=0.0051)
    # The page prints 47.4115, from the factor rounded to .4201; exact arithmetic gives 47.41157.
    np.testing.assert_allclose(panel.lower, 47.4115, atol=1e-4)
    np.testing.assert_allclose(panel.upper, 52.5884, atol=1e-4)
    assert fit.baseline.signals == ()
    assert fit.limits.panels.ewma.upper == pytest.approx(50.0 + 3 * 2.0539 * math.sqrt(0.3 / 1.7), rel=1e-14)


def test_ewma_of_montgomery() -> None:
    # Montgomery Table 9.10: first averages and limits (partly checked in print). The book's prose is
    # remembered as signalling at 28; the arithmetic signals at 29 and 30.
    fit = ewma.fit(Individuals(MONTGOMERY), EwmaOptions(KNOWN, 0.1, 2.7))
    assert fit.baseline is not None
    panel = fit.baseline.panels.ewma
    np.testing.assert_allclose(panel.value[:5], [9.945, 9.7495, 9.70355, 9.8992, 10.1253], atol=5.1e-5)
    np.testing.assert_allclose(panel.upper[:2], [10.27, 10.36], atol=0.0051)
    assert panel.upper[-1] == pytest.approx(10.62, abs=0.0051)
    assert panel.lower[-1] == pytest.approx(9.38, abs=0.0051)
    assert [signal.index for signal in fit.baseline.signals] == [28, 29]
    assert {signal.side for signal in fit.baseline.signals} == {"above"}


@pytest.mark.parametrize("variance", ["time-varying", "asymptotic"])
def test_ewma_transcribed(variance: ewma.Variance) -> None:
    values = random_subgroups(5)
    smoothing, limit, centre, sigma = 0.25, 2.4, 20.0, 2.0
    options = EwmaOptions(Source(standards=Standards(centre, sigma)), smoothing, limit, variance)
    fit = ewma.fit(Subgroups(values), options)
    z, v, told, signals = centre, 0.0, [], []
    for i, row in enumerate(values):
        present = [x for x in row if x == x]
        if not present:
            continue
        z = (1 - smoothing) * z + smoothing * sum(present) / len(present)
        v = (1 - smoothing) ** 2 * v + smoothing**2 * sigma**2 / len(present)
        used = v if variance == "time-varying" else smoothing / (2 - smoothing) * sigma**2 / len(present)
        far = limit * math.sqrt(used)
        told.append((i, z, centre - far, centre + far))
        if abs(z - centre) > far:
            signals.append((i, "above" if z > centre else "below"))
    assert fit.baseline is not None
    panel = fit.baseline.panels.ewma
    np.testing.assert_allclose(
        np.array(told).T, [panel.index, panel.value, panel.lower, panel.upper], rtol=1e-13
    )
    assert [(signal.index, signal.side) for signal in fit.baseline.signals] == signals
    assert len(signals) > 3
    assert len(told) < len(values)
    assert fit.limits.subgroup_size is None


def test_ewma_with_smoothing_one_is_the_chart_of_the_points() -> None:
    fit = ewma.fit(Individuals(MONTGOMERY), EwmaOptions(KNOWN, 1.0, 2.0))
    assert fit.baseline is not None
    np.testing.assert_allclose(fit.baseline.panels.ewma.value, MONTGOMERY, rtol=1e-15)
    assert fit.performance.in_control_arl == pytest.approx(1 / math.erfc(2 / math.sqrt(2)), rel=1e-12)


def test_ewma_performance() -> None:
    # Lucas & Saccucci 1990, lambda .10, L 2.814: 500, 31.3, 10.3, 6.1, 4.4, 2.9 (partly checked in print).
    fit = ewma.fit(None, EwmaOptions(Source(standards=Standards(0.0, 1.0)), 0.1, 2.814, "asymptotic"))
    assert fit.performance.in_control_arl == pytest.approx(500, abs=0.5)
    arls = [row.arl for row in fit.performance.shifts]
    np.testing.assert_allclose(arls, [31.3, 10.3, 6.1, 4.4, 2.9], atol=0.051)
    assert fit.baseline is None
    # In subgroups of four a shift of one sigma of a single value is two of the mean.
    of_four = ewma.fit(
        None, EwmaOptions(Source(standards=Standards(0.0, 1.0), subgroup_size=4), 0.1, 2.814, "asymptotic")
    )
    assert of_four.performance.shifts[1].arl == fit.performance.shifts[3].arl
    assert of_four.limits.panels.ewma.upper == pytest.approx(fit.limits.panels.ewma.upper / 2, rel=1e-14)


@pytest.mark.parametrize("variance", ["time-varying", "asymptotic"])
def test_ewma_designed(variance: ewma.Variance) -> None:
    # Crowder 1989 / Lucas & Saccucci 1990: to detect one sigma at 500 about lambda .13 to .15, L 2.87 (from memory).
    fit = ewma.fit(
        None,
        EwmaOptions(
            Source(standards=Standards(0.0, 1.0)), limit_variance=variance, detect=Detect(1.0, 500.0)
        ),
    )
    assert fit.performance.in_control_arl == pytest.approx(500.0, rel=1e-8)
    assert 0.12 < fit.limits.smoothing < 0.15
    assert fit.limits.limit == pytest.approx(2.87, abs=0.05)
    assert fit.limits.detect == Detect(1.0, 500.0)


# --- CUSUM --------------------------------------------------------------------------------------------


def test_cusum_of_the_nist_handbook() -> None:
    # NIST e-Handbook 6.3.2.3 (quoted second-hand): sums in the unit of the data, to 2 decimals.
    means = [324.925, 324.675, 324.725, 324.35, 325.35, 325.225, 324.125, 324.525, 325.225, 324.6]
    means += [324.625, 325.15, 328.325, 327.25, 327.825, 328.5, 326.675, 327.775, 326.875, 328.35]
    high = [0, 0, 0, 0, 0.03, 0, 0, 0, 0, 0, 0, 0, 3.01, 4.94, 7.45, 10.63, 11.99, 14.44, 16.0, 19.04]
    low = [0, 0.01, 0, 0.33, 0, 0, 0.56, 0.72, 0.17, 0.25, 0.31, 0, 0, 0, 0, 0, 0, 0, 0, 0]
    options = CusumOptions(Source(standards=Standards(325.0, 1.27)), 0.3175 / 0.635, 4.1959 / 0.635)
    fit = cusum.fit(SubgroupSummary(np.array(means), np.full(20, 4)), options)
    assert fit.baseline is not None
    # Halves are rounded either way on the page.
    np.testing.assert_allclose(fit.baseline.panels.upper.value * 0.635, high, atol=0.00501)
    np.testing.assert_allclose(fit.baseline.panels.lower.value * -0.635, low, atol=0.00501)
    assert [signal.index + 1 for signal in fit.baseline.signals] == [14, 15, 16, 17, 18, 19, 20]


def test_cusum_of_montgomery() -> None:
    # Montgomery Table 9.2 and Example 9.1 (partly checked in print, rest from memory): sums to 2 decimals, first
    # signal at 29 with N+ = 7, so the shift lies between 22 and 23; the new mean by his equation is 11.25.
    up = [
        0,
        0,
        0,
        1.16,
        2.82,
        2.5,
        0.04,
        1.0,
        0,
        0,
        0,
        0.97,
        0.98,
        0,
        0,
        0,
        0.12,
        0,
        0,
        0.34,
        0.74,
        0,
        1.79,
        2.79,
    ]
    up += [2.89, 3.47, 3.35, 4.47, 5.28, 5.3]
    down = [0.05, 1.56, 1.77, 0, 0, 0, 1.46, 0, 0.3, 0, 0.47, 0, 0, 0.1, 0, 0.13, 0, 0, 0.98, 0, 0, 0.17]
    fit = cusum.fit(Individuals(MONTGOMERY), CusumOptions(KNOWN, 0.5, 5.0))
    assert fit.baseline is not None
    np.testing.assert_allclose(fit.baseline.panels.upper.value, up, atol=1e-9)
    np.testing.assert_allclose(fit.baseline.panels.lower.value[:22], np.negative(down), atol=1e-9)
    first, second = fit.baseline.details.shifts  # type: ignore[attr-defined]
    assert (first.index + 1, first.points, first.since + 1) == (29, 7, 23)
    assert first.mean == pytest.approx(10 + 0.5 + 5.28 / 7, rel=1e-12)
    assert (second.index + 1, second.points) == (30, 8)
    assert "about 11.254 over the last 7 points" in fit.baseline.signals[0].sentence
    assert fit.performance.in_control_arl == pytest.approx(465, abs=0.5)
    # Montgomery & Runger Table 16-9 (checked in print): 38.0, 10.4, 5.75, 4.01, 2.57 at h = 5.
    np.testing.assert_allclose(
        [row.arl for row in fit.performance.shifts], [38.0, 10.4, 5.75, 4.01, 2.57], atol=0.051
    )


def transcribed(
    z: list[float | None], k: float, h: float, start: float, restart: bool
) -> tuple[list[tuple[int, float, float]], list[tuple[int, str, int, int, float]]]:
    """A two-sided CUSUM one point after the other; signals with (index, side, since, points, mean of z since)."""
    sums, told, signals = {1: start, -1: start}, [], []
    since: dict[int, list[int]] = {1: [], -1: []}
    for i, each in enumerate(z):
        if each is None:
            continue
        for side in (1, -1):
            sums[side] = max(0.0, sums[side] + side * each - k)
            since[side] = [*since[side], i] if sums[side] > 1e-10 else []
        told.append((i, sums[1], -sums[-1]))
        hits = [side for side in (1, -1) if sums[side] > h + 1e-10]
        for side in hits:
            taken = [z[j] for j in since[side]]
            signals.append(
                (i, "above" if side > 0 else "below", since[side][0], len(taken), sum(taken) / len(taken))
            )
        if hits and restart:
            sums, since = {1: start, -1: start}, {1: [], -1: []}
    return told, signals


@pytest.mark.parametrize("restart", [False, True])
@pytest.mark.parametrize("head_start", [0.0, 0.5])
@pytest.mark.parametrize("m", [40, 400])
def test_cusum_transcribed(m: int, head_start: float, restart: bool) -> None:
    values = random_subgroups(11, m)
    values[-4:] -= 6.0
    options = CusumOptions(
        Source(standards=Standards(20.0, 2.0)),
        0.4,
        3.0,
        head_start,
        after_signal="restart" if restart else "continue",
    )
    fit = cusum.fit(Subgroups(values), options)
    z: list[float | None] = []
    roots = []
    for row in values:
        present = [x for x in row if x == x]
        n = len(present)
        z.append((sum(present) / n - 20.0) * math.sqrt(n) / 2.0 if n else None)
        roots.append(math.sqrt(n))
    told, signals = transcribed(z, 0.4, 3.0, head_start * 3.0, restart)
    assert fit.baseline is not None
    panels, shifts = fit.baseline.panels, fit.baseline.details.shifts  # type: ignore[attr-defined]
    np.testing.assert_allclose(
        np.array(told).T, [panels.upper.index, panels.upper.value, panels.lower.value], rtol=1e-9, atol=1e-10
    )
    assert {side for _, side, *_ in signals} == {"above", "below"}
    assert len(shifts) == len(signals)
    for signal, shift, (i, side, since, points, mean_z) in zip(
        fit.baseline.signals, shifts, signals, strict=True
    ):
        assert (signal.index, signal.side, shift.since, shift.points) == (i, side, since, points)
        # The mean by weighted least squares: sum of z over sum of root n, of the points since the start.
        total = sum(roots[j] for j in range(since, i + 1))
        assert shift.mean == pytest.approx(20.0 + 2.0 * mean_z * points / total, rel=1e-9)
        assert shift.sigma is None
    assert min(signals)[0] < m // 2


def test_cusum_sums_equal_the_recursion_to_the_last_bit() -> None:
    rng = np.random.default_rng(3)
    for m in (1, 64, 65, 100, 1001, 20_000):
        for drift in (-0.5, 0.0, 0.02, 1.0, -3.0):
            for start in (0.0, 0.3, 40.0):
                steps = rng.standard_normal(m) + drift
                c, expected = start, []
                for step in steps.tolist():
                    c = max(c + step, 0.0)
                    expected.append(c)
                assert cusum.sums(steps, start).tolist() == expected


def test_cusum_head_start_is_no_part_of_the_estimate() -> None:
    # Two points at 3 sigma from a head start of 2.5 signal at once; the mean since is theirs.
    limits = cusum.fit(None, CusumOptions(KNOWN, 0.5, 5.0, 0.5)).limits
    seen = cusum.judge(limits, Individuals(np.array([13.0, 13.0])), None)
    assert [signal.index for signal in seen.signals] == [1]
    assert seen.panels.upper.value.tolist() == [5.0, 7.5]
    shift = seen.details.shifts[0]
    assert (shift.since, shift.points, shift.mean) == (0, 2, 13.0)


def test_cusum_designed() -> None:
    # Montgomery Table 9.3 (Hawkins 1993): k .25 .5 .75 1 1.25 1.5 need h 8.01 4.77 3.34 2.52 1.99 1.61 for a
    # two-sided in-control ARL of 370 (from memory).
    for k, h in ((0.25, 8.01), (0.5, 4.77), (0.75, 3.34), (1.0, 2.52), (1.25, 1.99), (1.5, 1.61)):
        assert design.cusum_decision(reference=k, in_control_arl=370.0) == pytest.approx(h, abs=0.0065)
    fit = cusum.fit(None, CusumOptions(KNOWN, detect=Detect(1.0, 370.0)))
    assert fit.limits.reference == pytest.approx(0.5, abs=0.02)
    assert fit.limits.decision == pytest.approx(4.77, abs=0.15)
    assert fit.performance.in_control_arl == pytest.approx(370.0, rel=1e-8)
    quick = cusum.fit(None, CusumOptions(KNOWN, head_start=0.5, detect=Detect(1.0, 370.0)))
    assert quick.limits.reference == fit.limits.reference
    assert quick.limits.decision > fit.limits.decision
    assert quick.performance.in_control_arl == pytest.approx(370.0, rel=1e-8)


def test_spread_score_of_a_single_value() -> None:
    # Hawkins 1981: (sqrt|z| - 0.822)/0.349 (from memory); the constants are moments of a chi-square.
    mean, sd = cusum._fourth_root(1.0)
    assert mean == pytest.approx(0.822, abs=5e-4)
    assert sd == pytest.approx(0.349, abs=5e-4)
    options = CusumOptions(KNOWN, 0.5, 5.0, spread=True)
    fit = cusum.fit(Individuals(MONTGOMERY), options)
    assert fit.baseline is not None
    t = [(math.sqrt(abs(x - 10.0)) - mean) / sd for x in MONTGOMERY]
    told, _ = transcribed(list(t), 0.5, 5.0, 0.0, False)
    panels = fit.baseline.panels
    assert panels.spread_upper is not None
    assert panels.spread_lower is not None
    np.testing.assert_allclose([row[1] for row in told], panels.spread_upper.value, rtol=1e-12, atol=1e-12)
    np.testing.assert_allclose([row[2] for row in told], panels.spread_lower.value, rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize("freedom", [1.0, 2.0, 4.0, 9.5, 99.0, 999.0, 20_000.0])
def test_fourth_root_of_chi_square(freedom: float) -> None:
    with mpmath.workdps(40):
        half = mpmath.mpf(freedom) / 2
        mean = 2 ** mpmath.mpf("0.25") * mpmath.gamma(half + 0.25) / mpmath.gamma(half)
        variance = mpmath.sqrt(2) * mpmath.gamma(half + 0.5) / mpmath.gamma(half) - mean**2
        expected = float(mean), float(mpmath.sqrt(variance))
    assert cusum._fourth_root(freedom) == pytest.approx(expected, rel=1e-4 if freedom > 1e4 else 1e-8)


def test_range_as_a_deviation() -> None:
    # For two values the range is root two times the standard deviation, exactly (Patnaik 1950 needs nothing).
    scale, freedom = cusum._of_range(2)
    assert scale == pytest.approx(math.sqrt(2.0), rel=1e-9)
    assert freedom == pytest.approx(1.0, rel=1e-6)
    # Patnaik 1950 gives 3.83 degrees of freedom and a scale of 2.48 for five values (from memory).
    scale, freedom = cusum._of_range(5)
    assert scale == pytest.approx(2.48, abs=0.006)
    assert freedom == pytest.approx(3.83, abs=0.02)


@pytest.mark.parametrize(("n", "single"), [(1, True), (2, False), (5, False)])
def test_spread_sums_signal_falsely_about_as_often(n: int, single: bool) -> None:
    # Simulated run length of the sums of spread against that of the sums of level (k 0.5, h 4: 168); the
    # transformation is approximate, and its right tail a little heavy for small n.
    rng = np.random.default_rng(8)
    values = rng.standard_normal((60_000, n))
    source = Source(standards=Standards(0.0, 1.0))
    options = CusumOptions(source, 0.5, 4.0, after_signal="restart", spread=True)
    fit = cusum.fit(Individuals(values[:, 0]) if single else Subgroups(values), options)
    assert fit.baseline is not None
    spread = {signal.index for signal in fit.baseline.signals if signal.panel.startswith("spread")}
    level = {signal.index for signal in fit.baseline.signals} - spread
    assert len(values) / len(level) == pytest.approx(167.7, rel=4 * 1.0 / math.sqrt(len(values) / 167.7))
    assert 0.75 < len(values) / len(spread) / 167.7 < 1.5


def test_spread_sums_find_a_larger_sigma() -> None:
    rng = np.random.default_rng(2)
    values = rng.standard_normal((60, 5))
    values[30:] *= 1.6
    options = CusumOptions(Source(standards=Standards(0.0, 1.0)), 0.5, 5.0, spread=True)
    fit = cusum.fit(Subgroups(values), options)
    assert fit.baseline is not None
    shifts = [
        shift
        for shift in fit.baseline.details.shifts
        if shift.panel == "spread_upper"  # type: ignore[attr-defined]
    ]
    assert 30 < shifts[0].index < 45
    last = shifts[-1]
    assert abs(last.since - 30) <= 3
    # With equal sizes the estimate is that whose fourth-root mean is the observed one.
    sds = values[last.since :].std(axis=1, ddof=1)
    c = mpmath.mpf(2) ** 0.25 * mpmath.gamma(2.25) / mpmath.gamma(2) / mpmath.sqrt(mpmath.sqrt(4))
    assert last.sigma == pytest.approx(float((np.sqrt(sds).mean() / c) ** 2), rel=1e-9)
    assert last.sigma == pytest.approx(1.6, rel=0.15)
    assert last.mean is None


def test_summary_of_ranges_and_of_deviations() -> None:
    rng = np.random.default_rng(4)
    values = rng.normal(5.0, 0.3, (25, 2))
    means = values.mean(axis=1)
    ranges = np.ptp(values, axis=1)
    sizes = np.full(25, 2)
    options = CusumOptions(Source(standards=Standards(5.0, 0.3)), 0.5, 3.0, spread=True)
    whole = cusum.fit(Subgroups(values), options)
    by_range = cusum.fit(SubgroupSummary(means, sizes, ranges), options)
    by_sd = cusum.fit(SubgroupSummary(means, sizes, None, values.std(axis=1, ddof=1)), options)
    for other in (by_range, by_sd):
        assert other.baseline is not None
        assert whole.baseline is not None
        assert other.baseline.panels.spread_upper is not None
        assert whole.baseline.panels.spread_upper is not None
        np.testing.assert_allclose(
            other.baseline.panels.spread_upper.value, whole.baseline.panels.spread_upper.value, atol=1e-6
        )
    with pytest.raises(UnusableData) as refused:
        cusum.fit(SubgroupSummary(means, sizes), options)
    assert refused.value.faults[0].code == "spread-missing"


# --- Moving averages ----------------------------------------------------------------------------------


def test_moving_average_transcribed() -> None:
    values = random_subgroups(21)
    options = MovingAverageOptions(Source(standards=Standards(20.0, 2.0)), 4, 2.2)
    fit = moving_average.fit(Subgroups(values), options)
    window: list[list[float]] = []
    told, signals = [], []
    for i, row in enumerate(values):
        present = [x for x in row if x == x]
        if not present:
            continue
        window = [*window, present][-4:]
        every = [x for one in window for x in one]
        average, far = sum(every) / len(every), 2.2 * 2.0 / math.sqrt(len(every))
        told.append((i, average, 20.0 - far, 20.0 + far))
        if abs(average - 20.0) > far:
            signals.append((i, "above" if average > 20.0 else "below"))
    assert fit.baseline is not None
    panel = fit.baseline.panels.average
    np.testing.assert_allclose(
        np.array(told).T, [panel.index, panel.value, panel.lower, panel.upper], rtol=1e-13
    )
    assert [(signal.index, signal.side) for signal in fit.baseline.signals] == signals
    assert len(signals) > 3


def test_moving_average_of_montgomery() -> None:
    # Montgomery, example of a moving average of span 5 on the data of Table 9.1: limits 10 +- 3/sqrt(5), that is
    # 11.34 and 8.66; 13, 12.12 and 11.73 above for the first three points; no signal (from memory).
    fit = moving_average.fit(Individuals(MONTGOMERY), MovingAverageOptions(KNOWN, 5))
    assert fit.limits.panels.average.upper == pytest.approx(11.34, abs=0.0051)
    assert fit.limits.panels.average.lower == pytest.approx(8.66, abs=0.0051)
    assert fit.baseline is not None
    np.testing.assert_allclose(fit.baseline.panels.average.upper[:3], [13, 12.12, 11.73], atol=0.0051)
    assert fit.baseline.verdict == "in-control"
    assert fit.performance.in_control_arl is None
    assert "between 370.4 points" in fit.performance.method
    assert "1852" in fit.performance.method


def test_moving_average_run_length_by_quadrature(monkeypatch: pytest.MonkeyPatch) -> None:
    # Span 2: P(N > 2) is a bivariate normal probability; by mpmath's own quadrature.
    k = 2.0
    edge = k * mpmath.sqrt(2)

    def inner(x: mpmath.mpf) -> mpmath.mpf:
        return mpmath.npdf(x) * (mpmath.ncdf(edge - x) - mpmath.ncdf(-edge - x))

    two = float(mpmath.quad(inner, [-k, 0, k]))
    one = math.erf(k / math.sqrt(2))
    seen = []
    original = moving.follow

    def spy(advance, **kwargs):  # type: ignore[no-untyped-def]
        def told() -> tuple[float, float]:
            signal, left = advance()
            seen.append((signal, left))
            return signal, left

        return original(told, **kwargs)

    monkeypatch.setattr(moving, "follow", spy)
    moving.moving_average_law.__wrapped__(span=2, limit=k)
    assert seen[0] == pytest.approx((1 - one, one), rel=1e-10)
    assert seen[1][1] == pytest.approx(two, rel=1e-10)
    assert seen[1][0] == pytest.approx(one - two, rel=1e-9)


@pytest.mark.parametrize("span", [2, 3, 4])
@pytest.mark.parametrize(("limit", "shift"), [(2.0, 0.0), (3.0, 1.0)])
def test_moving_average_run_length_by_simulation(span: int, limit: float, shift: float) -> None:
    rng = np.random.default_rng(7)
    reps = 20_000
    recent = np.zeros((span, reps))
    lengths = []
    point = 0
    while recent.shape[1]:
        recent[point % span] = rng.standard_normal(recent.shape[1]) + shift
        point += 1
        hit = np.abs(recent.sum(axis=0)) > limit * math.sqrt(min(point, span))
        lengths += [point] * int(hit.sum())
        recent = recent[:, ~hit]
    simulated = np.array(lengths)
    found = moving.moving_average(span=span, limit=limit, shift=shift)
    assert abs(simulated.mean() - found.arl) < 4 * simulated.std() / math.sqrt(reps)
    assert simulated.std() == pytest.approx(found.sd, rel=0.05)


def test_moving_average_run_length_lies_between_its_bounds() -> None:
    before = 370.39835
    for span in (2, 3, 4):
        arl = moving.moving_average(span=span, limit=3.0).arl
        low, high = moving.bounds(span, 3.0)
        assert low < before < arl < high
        before = arl
    assert moving.moving_average(span=2, limit=3.0).arl == pytest.approx(393.0863, rel=1e-5)


def test_moving_average_of_one_point_is_the_chart_of_the_points() -> None:
    fit = moving_average.fit(Individuals(MONTGOMERY), MovingAverageOptions(KNOWN, 1))
    assert fit.performance.in_control_arl == pytest.approx(runlength.shewhart().arl, rel=1e-12)
    assert fit.baseline is not None
    np.testing.assert_allclose(fit.baseline.panels.average.value, MONTGOMERY, rtol=1e-14)


# --- An open data set ---------------------------------------------------------------------------------


def test_the_nile_falls_after_1898() -> None:
    before, after = NILE[:28], NILE[28:]
    sigma = np.abs(np.diff(before)).mean() * math.sqrt(math.pi) / 2
    # The change point of least squares, an independent estimate: the last year of the old level.
    split = min(range(1, 100), key=lambda at: NILE[:at].var() * at + NILE[at:].var() * (100 - at))
    assert 1870 + split == 1898

    limits = cusum.fit(Individuals(before), CusumOptions(reference=0.5, decision=5.0)).limits
    assert limits.sigma == pytest.approx(sigma, rel=1e-12)
    assert limits.sigma == moving_range(before).sigma
    seen = cusum.judge(limits, Individuals(after), None)
    z = ((after - before.mean()) / sigma).tolist()
    told, signals = transcribed(z, 0.5, 5.0, 0.0, False)
    assert [(s.index, s.side) for s in seen.signals] == [(i, side) for i, side, *_ in signals]
    np.testing.assert_allclose(seen.panels.lower.value, [row[2] for row in told], rtol=1e-10, atol=1e-10)
    first = seen.details.shifts[0]
    assert 1899 + first.since == 1899
    assert 1899 + first.index <= 1905
    assert seen.signals[0].side == "below"
    assert first.mean == pytest.approx(after[: first.index + 1].mean(), rel=1e-12)

    smooth = ewma.fit(Individuals(before), EwmaOptions(smoothing=0.2, limit=2.86)).limits
    judged = ewma.judge(smooth, Individuals(after), None)
    level, variance, years = before.mean(), 0.0, []
    for year, flow in enumerate(after.tolist(), start=1899):
        level = 0.8 * level + 0.2 * flow
        variance = 0.64 * variance + 0.04 * sigma**2
        if abs(level - before.mean()) > 2.86 * math.sqrt(variance):
            years.append(year)
    assert [1899 + signal.index for signal in judged.signals] == years
    assert years[0] <= 1905
    average = moving_average.fit(Individuals(before), MovingAverageOptions(span=4)).limits
    found = moving_average.judge(average, Individuals(after), None).signals
    assert found[0].side == "below"
    assert 1899 + found[0].index <= 1905


# --- What they share ----------------------------------------------------------------------------------

FITS = {
    "ewma": lambda data, source: ewma.fit(data, EwmaOptions(source, 0.2, 2.9)),
    "cusum": lambda data, source: cusum.fit(data, CusumOptions(source, 0.5, 5.0)),
    "moving-average": lambda data, source: moving_average.fit(data, MovingAverageOptions(source)),
}


@pytest.mark.parametrize("name", list(FITS))
def test_excluded_points_count_for_nothing(name: str) -> None:
    values = MONTGOMERY.copy()
    values[4] = 25.0
    fit = FITS[name](Individuals(values), Source(exclude=(Exclusion(4, "wrong batch"),)))
    gap = values.copy()
    gap[4] = np.nan
    other = FITS[name](Individuals(gap), Source())
    assert fit.limits.centre == other.limits.centre
    assert fit.limits.sigma == other.limits.sigma
    assert fit.limits.baseline.points == 29
    assert fit.limits.baseline.excluded == (Exclusion(4, "wrong batch"),)
    for own in CHARTS[name].panels:
        one, two = getattr(fit.baseline.panels, own), getattr(other.baseline.panels, own)
        if one is not None:
            assert one.value.tolist() == two.value.tolist()
            assert 4 not in one.index.tolist()


@pytest.mark.parametrize("name", list(FITS))
def test_what_cannot_be_done_is_refused(name: str) -> None:
    def code(data: object, source: Source) -> tuple[str, tuple[str | int, ...]]:
        with pytest.raises(SpcError) as refused:
            FITS[name](data, source)
        return refused.value.faults[0].code, refused.value.faults[0].where

    rows = Subgroups(np.arange(12.0).reshape(4, 3) % 5)
    single = Individuals(np.array([1.0, 2.0, 3.0, 2.5]))
    assert code(None, Source()) == ("data-missing", ("standards", "mean"))
    assert code(single, Source("pooled-sd"))[0] == "estimator-of-other-data"
    assert code(rows, Source("mean-moving-range"))[0] == "estimator-of-other-data"
    assert code(single, Source(subgroup_size=3))[0] == "size-with-data"
    assert code(Individuals(np.array([1.0, np.nan])), Source())[0] == "too-few-points"
    assert code(Individuals(np.full(5, 2.0)), Source())[0] == "no-variation"
    assert code(single, Source(exclude=(Exclusion(9, "?"),)))[0] == "no-such-point"
    assert code(SubgroupSummary(np.arange(5.0), np.full(5, 3)), Source())[0] == "spread-missing"


def test_parameters_are_given_or_designed() -> None:
    for options in (EwmaOptions(KNOWN, 0.2), EwmaOptions(KNOWN, 0.2, 3.0, detect=Detect(1.0, 370.0))):
        with pytest.raises(UnusableParameter):
            ewma.fit(None, options)
    for chosen in (CusumOptions(KNOWN), CusumOptions(KNOWN, decision=4.0, detect=Detect(1.0, 370.0))):
        with pytest.raises(UnusableParameter):
            cusum.fit(None, chosen)
    large = replace(KNOWN, subgroup_size=100)
    with pytest.raises(UnusableParameter) as refused:
        cusum.fit(None, CusumOptions(large, detect=Detect(2.0, 370.0)))
    assert refused.value.faults[0].where == ("detect", "shift")
    # A limit that no EWMA has: the place is that of the request.
    with pytest.raises(UnusableParameter) as refused:
        designed(Detect(1.0, 1e9), 1.0, lambda _: design.ewma_limit(smoothing=1.0, in_control_arl=1e12))
    assert refused.value.faults[0].where == ("detect", "in_control_arl")


@pytest.mark.parametrize("name", list(FITS))
def test_gaps_alone_and_points_of_another_size(name: str) -> None:
    limits = FITS[name](Individuals(MONTGOMERY), Source()).limits
    chart = CHARTS[name]
    first = chart.judge(limits, Individuals(MONTGOMERY[:5]), None)
    empty = chart.judge(limits, Individuals(np.full(3, np.nan)), first.carry)
    assert empty.signals == ()
    assert empty.carry.points == 8
    after = chart.judge(limits, Individuals(MONTGOMERY[5:7]), empty.carry)
    without = chart.judge(limits, Individuals(MONTGOMERY[5:7]), first.carry)
    own = chart.panels[0]
    assert getattr(after.panels, own).value.tolist() == getattr(without.panels, own).value.tolist()
    other = chart.judge(limits, Subgroups(np.full((2, 3), 10.0)), None)
    assert [caution.code for caution in other.cautions] == ["size-differs"]


@pytest.mark.parametrize(
    ("name", "wrong"),
    [
        ("ewma", {"variance": -0.1}),
        ("cusum", {"upper": cusum.CusumSide(-1.0, 0, 0, 0.0, 0.0)}),
        ("moving-average", {"sizes": (1.0,)}),
        ("moving-average", {"sizes": (1.0, 0.0)}),
    ],
)
def test_a_carry_that_cannot_be_is_refused(name: str, wrong: dict[str, object]) -> None:
    limits = FITS[name](Individuals(MONTGOMERY), Source()).limits
    chart = CHARTS[name]
    carry = chart.judge(limits, Individuals(MONTGOMERY), None).carry
    with pytest.raises(DocumentMismatch) as refused:
        chart.judge(limits, Individuals(MONTGOMERY), replace(carry, **wrong))
    assert refused.value.faults[0].code == "carry-edited"


def test_wild_values_stay_finite() -> None:
    for options in (
        CusumOptions(KNOWN, 0.5, 5.0, spread=True),
        CusumOptions(KNOWN, 0.5, 5.0, 0.5, "restart"),
    ):
        limits = replace(cusum.fit(None, options).limits, sigma=1e-100)
        seen = cusum.judge(limits, Individuals(np.array([1e300, -1e300, 10.0, 1e300])), None)
        assert np.isfinite(seen.panels.upper.value).all()
        assert np.isfinite(seen.panels.lower.value).all()
        assert all(math.isfinite(shift.mean or shift.sigma or 0.0) for shift in seen.details.shifts)
