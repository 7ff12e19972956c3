"""Run lengths under estimated limits against tolerance factors, quadrature, simulated charts and their limits."""

from __future__ import annotations

import math
import time
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from scipy.special import ndtr

from assignable.spc.errors import UnusableParameter
from assignable.spc.factors import c4, c4_of_freedom, d2
from assignable.spc.runlength.estimated import (
    BaselineKnowledge,
    SigmaEstimator,
    _mean_alarm,
    _moments,
    baseline,
    conditional,
    guaranteed_multiple,
    known,
    percentile,
    probability_shorter,
)

NOMINAL = 370.39834734495922  # 1/(2Φ(-3)), from the definition


def _expected(power: int, m: float, freedom: float, k: float) -> float:
    """E[p^power] by the trapezoidal rule over the centre's error and the logarithm of sigma's."""
    c = math.sqrt(2 / freedom) * math.exp(math.lgamma((freedom + 1) / 2) - math.lgamma(freedom / 2))
    z = np.linspace(-9.0, 9.0, 1201)[:, None]
    log_w = np.linspace(math.log(0.02), math.log(6.0), 2401)
    y = freedom * c * c * np.exp(2 * log_w)
    log_density = math.log(2) + freedom / 2 * np.log(y / 2) - y / 2 - math.lgamma(freedom / 2)
    reach = k * np.exp(log_w)
    p = ndtr(z / math.sqrt(m) - reach) + ndtr(-z / math.sqrt(m) - reach)
    terms = p**power * np.exp(log_density - z * z / 2) / math.sqrt(2 * math.pi)
    return float(terms.sum()) * (18.0 / 1200) * (math.log(300.0) / 2400)


@pytest.mark.parametrize(
    ("n", "content", "confidence", "factor"),
    [
        # The guaranteed multiple of single values with the ordinary standard deviation is the factor of the
        # two-sided normal tolerance interval, but for c4. N = 43: exact factor 2.22283, computed elsewhere
        # from the definition (NIST handbook 7.2.6.3 prints Howe's approximation 2.217).
        (43, 0.90, 0.99, 2.22283),
        # ISO 16269-6 exact factors, from memory.
        (10, 0.95, 0.95, 3.3934),
        (2, 0.90, 0.90, 15.512),
    ],
)
def test_tolerance_factors(n: int, content: float, confidence: float, factor: float) -> None:
    multiple = guaranteed_multiple(known(n, n - 1), 1 / (1 - content), confidence)
    found = multiple / c4(n)
    digits = len(str(factor).split(".")[1])
    assert round(found, digits) == factor


@pytest.mark.parametrize(("m", "freedom", "k"), [(25, 100, 3.0), (8, 24, 3.0), (5, 12, 2.0)])
def test_moments_by_another_quadrature(m: int, freedom: int, k: float) -> None:
    mean, square, alarm, alarm_square = (_expected(power, m, freedom, k) for power in (-1, -2, 1, 2))
    found = conditional(known(m, freedom), k)
    assert found.mean_arl == pytest.approx(mean, rel=1e-9)
    assert found.sd_arl == pytest.approx(math.sqrt(square - mean**2), rel=1e-8)
    assert found.mean_false_alarm_probability == pytest.approx(alarm, rel=1e-9)
    assert found.sd_false_alarm_probability == pytest.approx(math.sqrt(alarm_square - alarm**2), rel=1e-9)


@pytest.mark.parametrize("m", [2.0, 25.0, 1e5])
@pytest.mark.parametrize("freedom", [1.0, 2.7, 9.5, 38.0, 90.8, 9999.0, 1e4, 4e6, 1e12])
def test_mean_false_alarm_is_students_t(m: float, freedom: float) -> None:
    # Two roads: the double integral, and the closed form.
    one = known(m, freedom)
    assert _moments(one, 3.0, 1) == pytest.approx(_mean_alarm(one, 3.0), rel=1e-9)


@pytest.mark.parametrize("m", [2.0, 30.0, 1e4])
@pytest.mark.parametrize("freedom", [3.0, 21.0, 400.0, 1e5])
def test_percentiles_and_guarantee_agree(m: float, freedom: float) -> None:
    one = known(m, freedom)
    for q in (0.05, 0.5, 0.9):
        assert probability_shorter(one, 3.0, percentile(one, 3.0, q)) == pytest.approx(q, rel=1e-8)
    multiple = guaranteed_multiple(one, 200.0, 0.9)
    if multiple < 6:
        assert probability_shorter(one, multiple, 200.0) == pytest.approx(0.1, rel=1e-8)


def test_where_mean_and_deviation_are_infinite() -> None:
    # Finite if and only if ν·c4² exceeds k², and 2k² for the deviation.
    for freedom in (5.0, 9.0, 10.0, 18.0, 19.0, 40.0):
        scale = freedom * c4_of_freedom(freedom) ** 2
        found = conditional(known(20, freedom), 3.0)
        assert (found.mean_arl is not None) == (scale > 9)
        assert (found.sd_arl is not None) == (scale > 18)


@pytest.mark.parametrize(
    ("m", "n", "estimator"),
    [
        (25, 5, "pooled-sd"),
        (10, 2, "pooled-sd"),
        (25, 5, "mean-range"),
        (10, 5, "mean-sd"),
        (100, 1, "mean-moving-range"),
    ],
)
def test_simulated_charts(m: int, n: int, estimator: SigmaEstimator) -> None:
    baselines = 20_000
    rng = np.random.default_rng(20261202)
    x = rng.standard_normal((baselines, m, n))
    centre = x.mean(axis=(1, 2)) * math.sqrt(n)
    if estimator == "mean-range":
        sigma = np.ptp(x, axis=2).mean(axis=1) / d2(n)
    elif estimator == "mean-sd":
        sigma = x.std(axis=2, ddof=1).mean(axis=1) / c4(n)
    elif estimator == "pooled-sd":
        sigma = np.sqrt(x.var(axis=2, ddof=1).mean(axis=1)) / c4_of_freedom(float(m * (n - 1)))
    else:
        sigma = np.abs(np.diff(x[:, :, 0], axis=1)).mean(axis=1) / d2(2)
    one = baseline(m, n, estimator)
    assert one.exact == (estimator == "pooled-sd")
    found = conditional(one, 3.0)

    def alarm(k: float) -> Any:
        return ndtr(centre - k * sigma) + ndtr(-centre - k * sigma)

    p = alarm(3.0)

    def near(share: float, stated: float) -> bool:
        return abs(share - stated) < 4 * math.sqrt(stated * (1 - stated) / baselines)

    for each in found.percentiles:
        assert near(float((1 / p < each.arl).mean()), each.probability)
    assert near(float((1 / p < NOMINAL).mean()), found.probability_below_nominal)
    assert near(float((1 / p < NOMINAL / 2).mean()), found.probability_below_half_nominal)
    assert abs(float(p.mean()) - found.mean_false_alarm_probability) < 4 * float(p.std()) / math.sqrt(
        baselines
    )
    assert near(float((1 / alarm(guaranteed_multiple(one, NOMINAL, 0.9)) >= NOMINAL).mean()), 0.9)


def test_a_large_baseline_is_as_good_as_knowing() -> None:
    found = conditional(known(1e9, 1e12), 3.0)
    assert found.nominal_arl == pytest.approx(NOMINAL, rel=1e-13)
    assert found.mean_arl == pytest.approx(NOMINAL, rel=1e-7)
    assert found.sd_arl == pytest.approx(0.0, abs=0.01)
    for each in found.percentiles:
        assert each.arl == pytest.approx(NOMINAL, rel=1e-4)
    assert guaranteed_multiple(known(1e9, 1e12), NOMINAL, 0.95) == pytest.approx(3.0, abs=1e-5)
    # The standard deviation falls with the root of the baseline: by the delta method k·φ(k)/Φ(-k) of that of W.
    many = conditional(baseline(100_000, 5, "pooled-sd"), 3.0)
    slope = 3 * math.exp(-4.5) / math.sqrt(2 * math.pi) / float(ndtr(-3.0))
    assert many.sd_arl == pytest.approx(NOMINAL * slope / math.sqrt(2 * 400_000), rel=1e-3)


def test_a_hundred_subgroups_of_five() -> None:
    # Quesenberry (1993): about 400/(n - 1) subgroups bring the unconditional run length near the nominal one.
    # From memory, a statement and no figure.
    assert conditional(baseline(100, 5, "pooled-sd"), 3.0).mean_arl == pytest.approx(NOMINAL, rel=0.05)
    assert conditional(baseline(20, 5, "pooled-sd"), 3.0).mean_arl != pytest.approx(NOMINAL, rel=0.15)


def test_larger_baselines_are_never_worse() -> None:
    for size, estimator in (
        (1, "mean-moving-range"),
        (2, "mean-range"),
        (5, "mean-range"),
        (10, "pooled-sd"),
    ):
        for goal in (0.3, 0.8, 0.95):
            shares = [
                probability_shorter(baseline(m, size, estimator), 3.0, goal * NOMINAL)  # type: ignore[arg-type]
                for m in (*range(6, 40), 64, 100, 300, 1000, 10_000)
            ]
            assert all(a >= b for a, b in pairwise(shares))


def test_effective_degrees_of_freedom() -> None:
    # Two values have one range, which is a chi with one degree of freedom whatever it is called.
    for estimator in ("mean-range", "mean-sd", "pooled-sd"):
        assert baseline(2, 2, estimator).degrees_of_freedom == pytest.approx(  # type: ignore[arg-type]
            2.0 if estimator == "pooled-sd" else baseline(2, 2, "mean-sd").degrees_of_freedom
        )
    assert baseline(2, 1, "mean-moving-range") == BaselineKnowledge(2.0, pytest.approx(1.0), True)
    # Patnaik (1950), as in tables of d2* and ν: 25 ranges of 5, from memory 90.8 or 91.
    assert baseline(25, 5, "mean-range").degrees_of_freedom == pytest.approx(90.8, abs=0.3)


def test_refusals() -> None:
    one = baseline(25, 5, "mean-range")
    for call, code in (
        (lambda: baseline(1, 5, "mean-range"), "subgroups-out-of-range"),
        (lambda: baseline(25, 1001, "mean-range"), "size-out-of-range"),
        (lambda: baseline(25, 1, "mean-range"), "estimator-does-not-fit"),
        (lambda: baseline(25, 5, "mean-moving-range"), "estimator-does-not-fit"),
        (lambda: conditional(one, 0.4), "multiple-out-of-range"),
        (lambda: conditional(one, 3.0, (0.1,) * 21), "percentiles-out-of-range"),
        (lambda: percentile(one, 3.0, 0.0), "percentiles-out-of-range"),
        (lambda: guaranteed_multiple(one, 1.0, 0.9), "arl-out-of-range"),
        (lambda: guaranteed_multiple(one, 370.0, 1.0), "confidence-out-of-range"),
        (lambda: guaranteed_multiple(known(1.0, 0.1), 1e8, 0.999), "no-such-multiple"),
        (lambda: probability_shorter(one, 3.0, 1.0), "arl-out-of-range"),
        (lambda: known(math.nan, 5.0), "out-of-range"),
    ):
        with pytest.raises(UnusableParameter) as caught:
            call()
        assert caught.value.faults[0].code == code


def test_the_guarantee_is_quick() -> None:
    guaranteed_multiple(baseline(25, 5, "mean-range"), 370.0, 0.9)
    begun = time.process_time()
    guaranteed_multiple(baseline(31, 7, "mean-range"), 371.0, 0.95)
    assert time.process_time() - begun < 0.2
