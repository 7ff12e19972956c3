"""Capability indices against published examples, independent arithmetic and seeded simulation."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest
import scipy

from assignable.spc.capability.indices import (
    Capability,
    Index,
    NormalSummary,
    bissell_halfwidths,
    boyles_freedom,
    capability,
    chi_factors,
    cpmk_deviation,
    distance_limits,
    machine_capability,
)
from assignable.spc.capability.noncentral import noncentral_t_cdf, noncentrality
from assignable.spc.capability.nonconforming import clopper_pearson, total_area_cdf
from assignable.spc.capability.specification import Specification
from assignable.spc.data import Subgroups
from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.factors import c4_of_freedom
from assignable.spc.sigma import SigmaEstimate, overall, within

MANY = 10_000_000


def _value(index: Index | None) -> float:
    assert index is not None
    return index.value


def _known(mean: float, sigma: float, count: int = MANY) -> NormalSummary:
    """A summary in which mean and sigma are as good as known."""
    total = SigmaEstimate(sigma, count - 1.0, "overall-sd")
    return NormalSummary(mean, SigmaEstimate(sigma, count - 1.0, "pooled-sd"), total, count)


# ---------------------------------------------------------------------------------------------------
# Published examples


def test_handbook_example() -> None:
    # NIST/SEMATECH e-Handbook 6.1.6: quoted second-hand, recomputed.
    found = capability(_known(16.0, 2.0), Specification(8.0, 20.0))
    assert _value(found.cp) == 1.0
    assert round(_value(found.cpk), 4) == 0.6667
    assert round(_value(found.cpu), 4) == 0.6667
    assert round(_value(found.cpl), 4) == 1.3333
    assert round(_value(found.ppk), 4) == 0.6667


@pytest.mark.parametrize(
    ("cp", "ppm", "digits"), [(1.0, 2700, 0), (4 / 3, 63.3, 1), (5 / 3, 0.57, 2), (2.0, 0.00197, 5)]
)
def test_handbook_rejects(cp: float, ppm: float, digits: int) -> None:
    # The same page prints 0.27 %, 64 ppm, 0.6 ppm and 2 ppb for 1.00, 1.33, 1.66 and 2.00, which are 1, 4/3,
    # 5/3 and 2: quoted second-hand, recomputed.
    found = capability(_known(0.0, 1.0), Specification(-3 * cp, 3 * cp))
    assert found.expected_total is not None
    assert round(found.expected_total.total_ppm, digits) == ppm


def test_current_of_a_device() -> None:
    # Montgomery & Runger, 3rd ed., examples 15-3 and 16-3: checked in print.
    # 100 ± 10 mA, mean 107, sigma 1.5.
    found = capability(_known(107.0, 1.5), Specification(90.0, 110.0))
    assert round(_value(found.cpk), 2) == 0.67
    assert round(_value(found.cp), 2) == 2.22
    assert found.expected_total is not None
    assert found.expected_total.above_ppm == pytest.approx(22750.13, abs=0.01)
    assert round(found.expected_total.total_ppm / 1e6, 3) == 0.023


def test_interval_of_cp() -> None:
    # Montgomery, Introduction to Statistical Quality Control, example 8.4: from memory, recomputed.
    # Print rounds Cp to 2.29 before it multiplies, which gives 1.57 to 3.01.
    total = SigmaEstimate(1.75, 19.0, "overall-sd")
    found = capability(NormalSummary(50.0, None, total, 20), Specification(38.0, 62.0))
    assert found.cp is None
    assert found.cpk is None
    assert found.pp is not None
    assert found.pp.value == pytest.approx(2.285714, abs=5e-7)
    assert found.pp.lower == pytest.approx(1.56494, abs=1e-5)
    assert found.pp.upper == pytest.approx(3.00558, abs=5e-6)
    assert round(2.29 * found.pp.lower / found.pp.value, 2) == 1.57
    assert round(2.29 * found.pp.upper / found.pp.value, 2) == 3.01


def test_interval_of_cpk() -> None:
    # The same, example 8.5: from memory, recomputed. n = 20, Cpk 1.33: 0.88 to 1.78
    # (.88260 to 1.77740 with z rounded to 1.96).
    total = SigmaEstimate(1.0, 19.0, "overall-sd")
    found = capability(NormalSummary(0.0, None, total, 20), Specification(-3.99, 4.5))
    assert found.ppk is not None
    assert found.ppk.method == "bissell-1990"
    assert found.ppk.value == pytest.approx(1.33)
    assert found.ppk.lower == pytest.approx(0.88260, abs=1e-5)
    assert found.ppk.upper == pytest.approx(1.77740, abs=1e-5)


def test_two_processes_and_a_target() -> None:
    # The same book, 8.3, after Boyles and Pearn et al.: from memory, recomputed.
    specification = Specification(35.0, 65.0, 50.0)
    a = capability(_known(50.0, 5.0), specification)
    b = capability(_known(57.5, 2.5), specification)
    assert [round(_value(i), 4) for i in (a.pp, a.ppk, a.cpm, a.cpmk)] == [1.0, 1.0, 1.0, 1.0]
    assert [round(_value(i), 4) for i in (b.pp, b.ppk)] == [2.0, 1.0]
    assert _value(b.cpm) == pytest.approx(0.632456, abs=1e-6)
    assert _value(b.cpmk) == pytest.approx(0.316228, abs=1e-6)


def test_fallout_table() -> None:
    # The same book, table 8.2: from memory, recomputed; print rounds up (226627.35 is printed 226628).
    ratio = [0.25, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0, 1.1, 1.2, 1.3, 1.4, 1.5, 1.6]
    one = [226628, 66807, 35931, 17865, 8198, 3467, 1350, 484, 159, 48, 14, 4, 1]
    two = [453255, 133614, 71861, 35729, 16395, 6934, 2700, 967, 318, 96, 27, 7, 2]
    for pcr, single, double in zip(ratio, one, two, strict=True):
        upper = capability(_known(0.0, 1.0), Specification(upper=3 * pcr)).expected_total
        both = capability(_known(0.0, 1.0), Specification(-3 * pcr, 3 * pcr)).expected_total
        assert upper is not None
        assert both is not None
        assert abs(upper.total_ppm - single) < 1.0
        assert abs(both.total_ppm - double) < 1.0
    far = capability(_known(0.0, 1.0), Specification(-6.0, 6.0)).expected_total
    assert far is not None
    assert far.total_ppm == pytest.approx(0.0018, abs=2e-4)


def test_sizes_to_demonstrate_cp() -> None:
    # Kane 1986, as tabled by Montgomery (table 8.4): from memory, recomputed. The ratio of high to low Cp is
    # √(χ²(1-β)/χ²(α)). The other printed column, C/Cp(low), is √(χ²(1-α)/(n-1)) and is not the critical ratio
    # of an exact test of size α, which is √((n-1)/χ²(α)): at that ratio our lower bound equals Cp(low).
    sizes = [10, 20, 30, 40, 50, 60, 70, 80, 90, 100]
    tens = [1.88, 1.53, 1.41, 1.34, 1.30, 1.27, 1.25, 1.23, 1.21, 1.20]
    fives = [2.26, 1.73, 1.55, 1.46, 1.40, 1.36, 1.33, 1.30, 1.28, 1.26]
    exact = [1.469, 1.277, 1.211, 1.176, 1.154, 1.138, 1.126, 1.116, 1.109, 1.102]
    for n, ten, five, critical in zip(sizes, tens, fives, exact, strict=True):
        for risk, ratio in ((0.10, ten), (0.05, five)):
            low, high, _ = chi_factors(n - 1.0, 1.0 - 2 * risk)
            assert round(high / low, 2) == pytest.approx(ratio, abs=0.011)
        total = SigmaEstimate(1.0 / 6.0, n - 1.0, "overall-sd")
        found = capability(NormalSummary(0.0, None, total, n), Specification(-0.5, 0.5), confidence=0.9).pp
        assert found is not None
        assert 1.0 / found.lower_bound == pytest.approx(critical, abs=6e-4)


FLOW = np.array(
    # Montgomery, table 6.1, flow width of a hard-bake process: checked in print.
    [
        [1.3235, 1.4128, 1.6744, 1.4573, 1.6914], [1.4314, 1.3592, 1.6075, 1.4666, 1.6109],
        [1.4284, 1.4871, 1.4932, 1.4324, 1.5674], [1.5028, 1.6352, 1.3841, 1.2831, 1.5507],
        [1.5604, 1.2735, 1.5265, 1.4363, 1.6441], [1.5955, 1.5451, 1.3574, 1.3281, 1.4198],
        [1.6274, 1.5064, 1.8366, 1.4177, 1.5144], [1.4190, 1.4303, 1.6637, 1.6067, 1.5519],
        [1.3884, 1.7277, 1.5355, 1.5176, 1.3688], [1.4039, 1.6697, 1.5089, 1.4627, 1.5220],
        [1.4158, 1.7667, 1.4278, 1.5928, 1.4181], [1.5821, 1.3355, 1.5777, 1.3908, 1.7559],
        [1.2856, 1.4106, 1.4447, 1.6398, 1.1928], [1.4951, 1.4036, 1.5893, 1.6458, 1.4969],
        [1.3589, 1.2863, 1.5996, 1.2497, 1.5471], [1.5747, 1.5301, 1.5171, 1.1839, 1.8662],
        [1.3680, 1.7269, 1.3957, 1.5014, 1.4449], [1.4163, 1.3864, 1.3057, 1.6210, 1.5573],
        [1.5796, 1.4185, 1.6541, 1.5116, 1.7247], [1.7106, 1.4412, 1.2361, 1.3820, 1.7601],
        [1.4371, 1.5051, 1.3485, 1.5670, 1.4880], [1.4738, 1.5936, 1.6583, 1.4973, 1.4720],
        [1.5917, 1.4333, 1.5551, 1.5295, 1.6866], [1.6399, 1.5243, 1.5705, 1.5563, 1.5530],
        [1.5797, 1.3663, 1.6240, 1.3732, 1.6887],
    ]
)  # fmt: skip


def test_flow_width() -> None:
    # The same, example 6.1: specification 1.50 ± .50, sigma R̄/d2 = .1398, Cp 1.192: checked in print.
    estimate = within(Subgroups(FLOW).statistics(), "mean-range")
    found = capability(FLOW, Specification(1.0, 2.0), within=estimate)
    assert round(estimate.sigma, 4) == 0.1398
    assert round(_value(found.cp), 3) == 1.192
    assert found.mean == pytest.approx(1.5056, abs=5e-5)
    assert found.count == 125
    assert found.total == overall(FLOW)
    assert found.observed is not None
    assert (found.observed.below, found.observed.above, found.observed.total) == (0, 0, 0)


def test_open_book_examples() -> None:
    # K. Dunn, Process Improvement Using Data: checked in print. One limit of 35, sigma 0.8.
    one_sided = Specification(lower=35.0)
    assert _value(capability(_known(37.4, 0.8), one_sided).cpk) == pytest.approx(1.0)
    assert _value(capability(_known(38.12, 0.8), one_sided).cpk) == pytest.approx(1.3)
    # Cpk of 2 becomes 1.5 after a shift of 1.5 sigma: 3.4 ppm.
    shifted = capability(_known(1.5, 1.0), Specification(-6.0, 6.0))
    assert _value(shifted.cpk) == pytest.approx(1.5)
    assert shifted.expected_total is not None
    assert round(shifted.expected_total.total_ppm, 1) == 3.4


# ---------------------------------------------------------------------------------------------------
# Non-central t, by another road


@pytest.mark.parametrize(
    ("t", "freedom", "delta"),
    [(2.0, 3.0, 1.0), (30.0, 9.0, 25.0), (3.0, 19.0, -1.0), (-2.0, 24.0, -1.5), (7.0, 61.3, 6.5),
     (25.0, 124.0, 22.0), (4.0, 3.7, 2.0), (300.0, 1000.0, 290.0)],
)  # fmt: skip
def test_noncentral_t_by_quadrature(t: float, freedom: float, delta: float) -> None:
    with mpmath.workdps(25):
        half = mpmath.mpf(freedom) / 2
        constant = mpmath.log(2) + half * mpmath.log(half) - mpmath.loggamma(half)

        def integrand(w: mpmath.mpf) -> mpmath.mpf:
            return mpmath.ncdf(t * w - delta) * mpmath.exp(
                constant + (freedom - 1) * mpmath.log(w) - half * w * w
            )

        width = 1 / mpmath.sqrt(2 * freedom)
        cuts = [mpmath.mpf(10) ** -12, *(c for k in range(-8, 15, 2) if (c := 1 + k * width) > 0.01)]
        expected = float(mpmath.quad(integrand, [*cuts, cuts[-1] + 4]))
    found = float(noncentral_t_cdf(np.array([t]), freedom, np.array([delta]))[0])
    assert found == pytest.approx(expected, abs=2e-11)


def test_noncentral_t_against_a_series() -> None:
    # scipy's own series for it, where that is accurate (t not negative, δ not large).
    t = np.linspace(0.0, 12.0, 31)
    for freedom in (2.0, 5.0, 19.0, 96.5):
        for delta in (0.0, 0.7, 3.0, 8.0):
            ours = noncentral_t_cdf(t, freedom, np.full(31, delta))
            assert np.allclose(ours, scipy.special.nctdtr(freedom, delta, t), atol=2e-8)


def test_central_t_at_no_centrality() -> None:
    t = np.linspace(-5.0, 5.0, 41)
    for freedom in (1.0, 4.0, 30.0, 1e6):
        ours = noncentral_t_cdf(t, freedom, np.zeros(41))
        assert np.allclose(ours, scipy.special.stdtr(freedom, t), atol=2e-9)


@pytest.mark.parametrize("freedom", [0.7, 1.0, 4.0, 19.0, 96.7, 1e4, 1e6, 9e6])
def test_noncentrality_is_the_inverse(freedom: float) -> None:
    t = np.array([0.0, 0.01, 0.5, 3.0, 30.0, -3.0, 1e3, 1e6, 1e13])
    for probability in (5e-7, 0.025, 0.5, 0.95, 0.9999995):
        wanted = np.full(t.size, probability)
        found = noncentrality(t, freedom, wanted)
        assert np.isfinite(found).all()
        assert np.allclose(noncentral_t_cdf(t, freedom, found), wanted, rtol=1e-7, atol=1e-11)


def test_many_degrees_of_freedom_are_the_normal_case() -> None:
    found = noncentrality(np.array([2.0]), 1e7, np.array([0.975]))
    assert found[0] == pytest.approx(2.0 - scipy.special.ndtri(0.975), abs=1e-5)


def test_interval_of_a_one_sided_index() -> None:
    # The limits by their definition, on scipy's series and root finder: at either limit a sample would lie
    # this far out, or further, with a probability of 2.5 %.
    total = SigmaEstimate(1.0, 29.0, "overall-sd")
    found = capability(NormalSummary(0.0, None, total, 30), Specification(upper=4.0)).ppu
    assert found is not None
    t = 4.0 * math.sqrt(30)
    for limit, probability in ((found.lower, 0.975), (found.upper, 0.025), (found.lower_bound, 0.95)):
        root = scipy.optimize.brentq(
            lambda d, p=probability: scipy.special.nctdtr(29.0, d, t) - p, 1.0, 60.0, xtol=1e-12
        )
        assert limit == pytest.approx(root / (3 * math.sqrt(30)), rel=1e-7)
    assert found.method == "non-central-t"


def test_clopper_pearson() -> None:
    # By the definition: a binomial tail of 2.5 % at each limit; no event in 100 gives 1 - .025^(1/100).
    lower, upper = clopper_pearson(7, 120, 0.95)
    assert float(scipy.special.bdtrc(6, 120, lower)) == pytest.approx(0.025, rel=1e-9)
    assert float(scipy.special.bdtr(7, 120, upper)) == pytest.approx(0.025, rel=1e-9)
    lower, upper = clopper_pearson(0, 100, 0.95)
    assert lower == 0.0
    assert upper == pytest.approx(1 - 0.025**0.01, rel=1e-12)
    lower, upper = clopper_pearson(100, 100, 0.95)
    assert lower == pytest.approx(0.025**0.01, rel=1e-12)
    assert upper == 1.0


# ---------------------------------------------------------------------------------------------------
# Coverage, by seeded simulation: nominal 0.95

SAMPLES = 4000
# Four standard errors of a coverage of 0.95 from 4000 samples are 0.014.


def _samples(n: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    return rng.normal(0.0, 1 / math.sqrt(n), SAMPLES), np.sqrt(rng.chisquare(n - 1, SAMPLES) / (n - 1))


def _covered(lower: np.ndarray, upper: np.ndarray, true: float) -> float:
    return float(((lower <= true) & (true <= upper)).mean())


@pytest.mark.parametrize(("n", "cp"), [(10, 0.6), (30, 1.33), (125, 2.0)])
def test_coverage_of_one_sided_indices(n: int, cp: float) -> None:
    mean, sd = _samples(n, 11 + n)
    low, high, bound = distance_limits((3 * cp - mean) / sd, 1.0, n, n - 1.0, 0.95)
    assert 0.936 <= _covered(low, high, 3 * cp) <= 0.964
    assert 0.936 <= float((bound <= 3 * cp).mean()) <= 0.964


@pytest.mark.parametrize(("n", "shift"), [(30, 0.0), (30, 0.7), (125, 0.0), (125, 1.0)])
def test_coverage_of_cpk(n: int, shift: float) -> None:
    # Bissell's interval is asymptotic, and leaves out that the smaller of two is taken.
    mean, sd = _samples(n, 23 + n)
    cpk = np.minimum(4 + shift - mean, 4 - shift + mean) / (3 * sd)
    half = np.array([bissell_halfwidths(float(c), n, n - 1.0, 0.95)[0] for c in cpk[:2000]])
    assert 0.93 <= _covered(cpk[:2000] - half, cpk[:2000] + half, (4 - shift) / 3) <= 0.97


@pytest.mark.parametrize(("n", "offset"), [(20, 0.0), (30, 0.8), (100, 1.5)])
def test_coverage_of_target_indices(n: int, offset: float) -> None:
    mean, sd = _samples(n, 37 + n)
    unit = sd * math.sqrt((n - 1) / n)
    xi = (mean + offset) / unit
    tau = unit * np.hypot(1.0, xi)
    factors = np.array([chi_factors(boyles_freedom(float(x), n), 0.95) for x in xi[:2000]])
    cpm = 8 / (6 * tau[:2000])
    true_tau = math.hypot(1.0, offset)
    assert 0.93 <= _covered(cpm * factors[:, 0], cpm * factors[:, 1], 8 / (6 * true_tau)) <= 0.97
    # The limits are at -4 and 4 from the target, and the mean at `offset`.
    to_lower, to_upper = (mean + offset + 4) / unit, (4 - mean - offset) / unit
    cpmk = np.minimum(to_lower, to_upper) * unit / (3 * tau)
    half = 1.959964 * np.array(
        [
            cpmk_deviation(float(a), float(b), float(x), n)
            for a, b, x in zip(to_lower, to_upper, xi, strict=True)
        ]
    )
    assert 0.93 <= _covered(cpmk - half, cpmk + half, (4 - offset) / (3 * true_tau)) <= 0.97


@pytest.mark.parametrize(
    ("n", "lower", "upper"),
    [(10, -1.5, 4.5), (10, -3.0, 3.0), (30, -4.0, 4.0), (30, -3.0, 3.6), (125, -3.0, 3.0), (125, -5.0, 4.0)],
)
def test_coverage_of_expected_nonconforming(n: int, lower: float, upper: float) -> None:
    # The true area lies inside its limits exactly where its generalised distribution function lies in
    # 0.025 to 0.975, so no limit need be solved for. For a mean in the middle the errors lean to one side
    # (about 0.045 below the lower limit and 0.015 above the upper one for n = 10): with 4 values or 5 at
    # Cp of one half coverage falls to 0.91.
    mean, sd = _samples(n, 53 + n)
    true = scipy.special.ndtr(lower) + scipy.special.ndtr(-upper)
    probit = np.full(SAMPLES, scipy.special.ndtri(true))
    found = total_area_cdf(probit, (mean - lower) / sd, (upper - mean) / sd, n, n - 1.0)
    assert 0.926 <= float(((found >= 0.025) & (found <= 0.975)).mean()) <= 0.97
    # The one-sided upper bound holds the true area.
    assert 0.936 <= float((found <= 0.95).mean()) <= 0.985


@pytest.mark.parametrize("estimator", ["mean-range", "pooled-sd"])
def test_coverage_from_within_subgroups(estimator: str) -> None:
    rng = np.random.default_rng(71)
    cp, cpu = [], []
    for values in rng.standard_normal((1200, 10, 4)):
        estimate = within(Subgroups(values).statistics(), estimator)
        freedom = estimate.degrees_of_freedom
        scale = c4_of_freedom(freedom)
        low, high, _ = 4.0 / (3 * estimate.sigma) * chi_factors(freedom, 0.95) / scale
        cp.append(low <= 4 / 3 <= high)
        # P(T ≤ t) at the truth, between the tails exactly where the interval holds it.
        distance = (4.0 - values.mean()) / (estimate.sigma * scale)
        t = np.array([distance * math.sqrt(40)])
        cpu.append(float(noncentral_t_cdf(t, freedom, np.array([4.0 * math.sqrt(40)]))[0]))
    assert 0.925 <= np.mean(cp) <= 0.975
    assert 0.925 <= np.mean([0.025 <= p <= 0.975 for p in cpu]) <= 0.975


def test_limits_of_expected_nonconforming_by_brute_force() -> None:
    # The same generalised pivot, drawn instead of integrated: its quantiles are the limits, within the
    # noise of 400,000 draws (0.001 in probability, four standard errors at 2.5 %).
    rng = np.random.default_rng(97)
    n, a, b = 30, 3.0, 3.4
    w = np.sqrt(rng.chisquare(n - 1, 400_000) / (n - 1))
    z = rng.standard_normal(400_000) / math.sqrt(n)
    area = 1e6 * (scipy.special.ndtr(-a * w + z) + scipy.special.ndtr(-b * w - z))
    total = SigmaEstimate(1.0, n - 1.0, "overall-sd")
    found = capability(NormalSummary(0.0, None, total, n), Specification(-a, b)).expected_total
    assert found is not None
    assert abs((area <= found.total_lower_ppm).mean() - 0.025) < 0.001
    assert abs((area <= found.total_upper_ppm).mean() - 0.975) < 0.001
    assert abs((area <= found.total_upper_bound_ppm).mean() - 0.95) < 0.0014


def test_a_far_limit_changes_nothing() -> None:
    total = SigmaEstimate(1.0, 24.0, "overall-sd")
    summary = NormalSummary(0.0, None, total, 25)
    one = capability(summary, Specification(upper=3.0)).expected_total
    both = capability(summary, Specification(-20.0, 3.0)).expected_total
    assert one is not None
    assert both is not None
    assert one.method == "non-central-t"
    assert both.total_lower_ppm == pytest.approx(one.total_lower_ppm, rel=1e-6)
    assert both.total_upper_ppm == pytest.approx(one.total_upper_ppm, rel=1e-6)
    assert both.total_upper_bound_ppm == pytest.approx(one.total_upper_bound_ppm, rel=1e-6)


# ---------------------------------------------------------------------------------------------------
# What is given to what


def test_one_sided_specification_gives_what_it_can() -> None:
    found = capability(FLOW, Specification(upper=2.0, target=1.5))
    assert found.pp is None
    assert found.ppl is None
    assert found.cpm is None
    assert found.cpmk is None
    assert found.ppk == found.ppu
    assert found.cp is None  # no within-subgroup sigma was given
    assert found.expected_within is None
    assert found.observed is not None
    assert found.observed.below is None


def test_no_target_no_target_index() -> None:
    found = capability(FLOW, Specification(1.0, 2.0))
    assert found.cpm is None
    assert found.cpmk is None


def test_target_indices_by_their_definition() -> None:
    found = capability(FLOW, Specification(1.0, 2.0, 1.45))
    tau = math.sqrt(np.mean((FLOW - 1.45) ** 2))
    assert _value(found.cpm) == pytest.approx(1.0 / (6 * tau), rel=1e-12)
    assert _value(found.cpmk) == pytest.approx((2.0 - FLOW.mean()) / (3 * tau), rel=1e-12)


def test_machine_capability_is_performance_by_its_other_name() -> None:
    specification = Specification(1.0, 2.0)
    machine = machine_capability(FLOW[:10], specification)
    process = capability(FLOW[:10], specification)
    assert machine.cm == process.pp
    assert machine.cmk == process.ppk
    assert machine.expected == process.expected_total
    assert machine.observed == process.observed
    assert machine.count == 50


def test_values_on_a_limit_conform() -> None:
    values = np.array([1.0, 1.0, 2.0, 2.0, 0.9, 2.1, 2.2, np.nan, 1.5, 1.5])
    found = capability(values, Specification(1.0, 2.0)).observed
    assert found is not None
    assert (found.below, found.above, found.total, found.inspected) == (1, 2, 3, 9)
    assert found.total_ppm == pytest.approx(1e6 / 3)


def _finite(result: object) -> bool:
    if isinstance(result, float):
        return math.isfinite(result)
    fields = getattr(result, "__dataclass_fields__", {})
    return all(_finite(getattr(result, name)) for name in fields)


@pytest.mark.parametrize("count", [2, 5, 1000, MANY])
@pytest.mark.parametrize("confidence", [0.51, 0.95, 0.999999])
def test_extremes_stay_finite_and_in_order(count: int, confidence: float) -> None:
    for to_lower in (-1e11, -40.0, -0.1, 0.5, 3.0, 37.0, 1e3, 1e11):
        for to_upper in (-2.0, 0.5, 6.0, 20.0, 1e11):
            if to_lower + to_upper < 0.1:
                continue
            total = SigmaEstimate(1.0, count - 1.0, "overall-sd")
            summary = NormalSummary(0.0, SigmaEstimate(1.0, 0.6 * count, "mean-range"), total, count)
            middle = 0.5 * (to_upper - to_lower)
            found = capability(summary, Specification(-to_lower, to_upper, middle), confidence=confidence)
            assert isinstance(found, Capability)
            assert _finite(found)
            for expected in (found.expected_within, found.expected_total):
                assert expected is not None
                assert 0 <= expected.total_lower_ppm <= expected.total_ppm <= expected.total_upper_ppm <= 1e6
            if confidence > 0.6:
                for index in (found.cp, found.cpk, found.cpu, found.cpl, found.pp, found.ppk, found.cpm):
                    assert index is not None
                    assert index.lower <= index.value <= index.upper
                    assert index.lower <= index.lower_bound <= index.upper


def test_many_values_with_a_large_common_part() -> None:
    # The digits survive 1e7 and the interval closes on the value.
    values = 1e7 + np.tile([0.1, 0.2, 0.3, 0.2], 250_000)
    found = capability(values, Specification(1e7 - 0.1, 1e7 + 0.5))
    sigma = math.sqrt(0.005 * 1e6 / (1e6 - 1))
    assert _value(found.pp) == pytest.approx(0.6 / (6 * sigma), rel=1e-7)
    assert found.pp is not None
    assert found.pp.upper - found.pp.lower < 0.006


# ---------------------------------------------------------------------------------------------------
# What is refused


@pytest.mark.parametrize(
    ("limits", "code", "where"),
    [
        ((None, None, None), "no-limit", ("specification",)),
        ((None, None, 3.0), "no-limit", ("specification",)),
        ((2.0, 1.0, None), "limits-crossed", ("specification", "lower")),
        ((1.0, 1.0, None), "limits-crossed", ("specification", "lower")),
        ((1.0, 2.0, 2.0), "target-outside", ("specification", "target")),
        ((1.0, 2.0, 0.5), "target-outside", ("specification", "target")),
        ((None, 2.0, 3.0), "target-outside", ("specification", "target")),
        ((math.nan, 2.0, None), "not-finite", ("specification", "lower")),
        ((1.0, math.inf, None), "not-finite", ("specification", "upper")),
    ],
)
def test_specification_refused(
    limits: tuple[float | None, float | None, float | None], code: str, where: tuple[str, ...]
) -> None:
    with pytest.raises(UnusableParameter) as error:
        Specification(*limits)
    assert (error.value.faults[0].code, error.value.faults[0].where) == (code, where)


def test_all_faults_of_a_specification_at_once() -> None:
    with pytest.raises(UnusableParameter) as error:
        Specification(math.nan, math.inf, math.nan)
    assert [fault.where[-1] for fault in error.value.faults] == ["lower", "upper", "target"]


def test_no_variation_is_refused() -> None:
    with pytest.raises(UnusableData) as error:
        capability(np.full(20, 1.5), Specification(1.0, 2.0))
    assert error.value.faults[0].code == "no-variation"
    none = SigmaEstimate(0.0, 19.0, "overall-sd")
    with pytest.raises(UnusableData) as error:
        capability(NormalSummary(1.5, None, none, 20), Specification(1.0, 2.0))
    assert error.value.faults[0].code == "no-variation"


@pytest.mark.parametrize("confidence", [0.5, 0.0, 1.0, 1.5, -1.0, math.nan])
def test_confidence_out_of_range(confidence: float) -> None:
    with pytest.raises(UnusableParameter) as error:
        capability(FLOW, Specification(1.0, 2.0), confidence=confidence)
    assert error.value.faults[0].where == ("confidence",)


def test_unusable_summaries() -> None:
    good = SigmaEstimate(1.0, 19.0, "overall-sd")
    for summary, code in (
        (NormalSummary(0.0, None, None, 20), "no-sigma"),
        (NormalSummary(math.nan, None, good, 20), "not-finite"),
        (NormalSummary(0.0, None, good, 1), "count-out-of-range"),
        (NormalSummary(0.0, None, SigmaEstimate(math.inf, 19.0, ""), 20), "not-finite"),
        (NormalSummary(0.0, None, SigmaEstimate(1.0, 0.0, ""), 20), "degrees-of-freedom-out-of-range"),
    ):
        with pytest.raises(UnusableData) as error:
            capability(summary, Specification(-1.0, 1.0))
        assert error.value.faults[0].code == code
    with pytest.raises(UnusableData) as error:
        machine_capability(NormalSummary(0.0, good, None, 20), Specification(-1.0, 1.0))
    assert error.value.faults[0].code == "no-sigma"


def test_limits_of_another_unit() -> None:
    with pytest.raises(UnusableParameter) as error:
        capability(_known(0.0, 1.0), Specification(-1e300, 1e300))
    assert (error.value.faults[0].code, error.value.faults[0].where) == (
        "limits-too-far",
        ("specification", "lower"),
    )
