"""Tolerance intervals against print, an integral of another kind, and simulation."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest
import scipy
import scipy.stats

from assignable.spc.capability.tolerance import (
    ToleranceInterval,
    howe_factor,
    nonparametric_interval,
    nonparametric_size,
    normal_factor,
    normal_interval,
    normal_size,
)
from assignable.spc.errors import UnusableData, UnusableParameter
from contract import served


def test_handbook_factors() -> None:
    # NIST/SEMATECH e-Handbook 7.2.6.3, checked in print. Its two-sided 2.217 is Howe's approximation; the exact
    # factor is 2.22283.
    assert howe_factor(43, 0.90, 0.99) == pytest.approx(2.217, abs=5e-4)
    assert normal_factor(43, 0.90, 0.99, True) == pytest.approx(2.22283, abs=1e-5)
    assert normal_factor(43, 0.90, 0.99, False) == pytest.approx(1.874, abs=5e-4)
    assert normal_factor(43, 0.90, 0.99, False) * math.sqrt(43) == pytest.approx(12.28834, abs=1e-4)
    assert normal_factor(6, 0.90, 0.99, False) == pytest.approx(4.4111, abs=5e-5)


@pytest.mark.parametrize(
    ("count", "factor"),
    # ISO 16269-6:2014, two-sided, coverage and confidence 0.95: from memory.
    [(2, 36.519), (3, 9.789), (10, 3.394), (100, 2.234)],
)
def test_exact_two_sided_factors(count: int, factor: float) -> None:
    assert normal_factor(count, 0.95, 0.95, True) == pytest.approx(factor, abs=1.1e-3)


@pytest.mark.parametrize(("count", "coverage", "confidence"), [(5, 0.9, 0.95), (30, 0.99, 0.9)])
def test_the_integral_equation_by_another_quadrature(count: int, coverage: float, confidence: float) -> None:
    k = normal_factor(count, coverage, confidence, True)
    freedom = count - 1

    def inner(z: mpmath.mpf) -> mpmath.mpf:
        r = mpmath.findroot(lambda r: mpmath.ncdf(z + r) - mpmath.ncdf(z - r) - coverage, z + 1.5)
        tail = mpmath.gammainc(freedom / 2, freedom * r * r / (2 * k * k), mpmath.inf, regularized=True)
        return tail * mpmath.npdf(z, 0, 1 / mpmath.sqrt(count))

    with mpmath.workdps(15):
        held = 2 * mpmath.quad(inner, [0, 0.3, 1, 8 / math.sqrt(count) + 1], maxdegree=4)
    assert float(held) == pytest.approx(confidence, abs=1e-7)


def test_one_sided_factors_against_scipy() -> None:
    for count, coverage, confidence in ((5, 0.9, 0.95), (50, 0.99, 0.99), (12, 0.5, 0.9)):
        delta = math.sqrt(count) * scipy.stats.norm.ppf(coverage)
        expected = scipy.stats.nct.ppf(confidence, count - 1, delta) / math.sqrt(count)
        assert normal_factor(count, coverage, confidence, False) == pytest.approx(expected, rel=1e-8)


def test_many_values_leave_the_quantile() -> None:
    assert normal_factor(1_000_000, 0.95, 0.5, True) == pytest.approx(1.959964, abs=1e-5)
    assert normal_factor(1_000_000, 0.95, 0.5, False) == pytest.approx(1.644854, abs=1e-5)


@pytest.mark.parametrize("sides", ["two-sided", "upper"])
def test_normal_coverage_by_simulation(sides: str) -> None:
    random = np.random.Generator(np.random.PCG64(6))
    x = random.standard_normal((40_000, 8))
    k = normal_factor(8, 0.9, 0.95, sides == "two-sided")
    mean, sd = x.mean(axis=1), x.std(axis=1, ddof=1)
    held = scipy.special.ndtr(mean + k * sd)
    if sides == "two-sided":
        held = held - scipy.special.ndtr(mean - k * sd)
    assert float((held >= 0.9).mean()) == pytest.approx(0.95, abs=4 * math.sqrt(0.95 * 0.05 / 40_000))


def test_wilks_sample_sizes() -> None:
    # Wilks 1941 and every table since: from memory.
    for coverage, confidence, both, one in (
        (0.90, 0.95, 46, 29),
        (0.95, 0.95, 93, 59),
        (0.99, 0.95, 473, 299),
        (0.95, 0.99, 130, 90),
    ):
        assert nonparametric_size(coverage=coverage, confidence=confidence).count == both
        assert nonparametric_size(coverage=coverage, confidence=confidence, sides="lower").count == one


def test_order_statistics() -> None:
    x = np.random.Generator(np.random.PCG64(3)).permutation(np.arange(1.0, 301.0))
    found = nonparametric_interval(x, coverage=0.9, confidence=0.95)
    assert found.lower_rank is not None
    assert (found.lower, found.upper) == (found.lower_rank, 301 - found.lower_rank)

    def held(left_out: int) -> float:
        # The coverage is beta, which is a binomial tail: fewer than so many fall outside.
        return float(scipy.stats.binom.sf(left_out - 1, 300, 0.1))

    assert found.achieved_confidence == pytest.approx(held(2 * found.lower_rank), abs=1e-12)
    assert held(2 * found.lower_rank) >= 0.95 > held(2 * found.lower_rank + 2)
    bound = nonparametric_interval(x, coverage=0.9, confidence=0.95, sides="upper")
    assert bound.lower is None
    assert bound.upper_rank is not None
    assert held(301 - bound.upper_rank) >= 0.95 > held(302 - bound.upper_rank)
    with pytest.raises(UnusableData, match="93 values"):
        nonparametric_interval(x[:92], coverage=0.95, confidence=0.95)
    assert nonparametric_interval(x[:93], coverage=0.95, confidence=0.95).lower_rank == 1


@pytest.mark.parametrize("sides", ["two-sided", "lower"])
def test_normal_sample_size(sides: str) -> None:
    found = normal_size(coverage=0.9, confidence=0.95, excess_coverage=0.97, excess_risk=0.1, sides=sides)  # type: ignore[arg-type]
    assert found.factor is not None
    assert found.excess_probability is not None
    random = np.random.Generator(np.random.PCG64(9))
    n, reps = found.count, 20_000
    mean = random.standard_normal(reps) / math.sqrt(n)
    sd = np.sqrt(random.chisquare(n - 1, reps) / (n - 1))
    held = scipy.special.ndtr(mean + found.factor * sd)
    if sides == "two-sided":
        held = held - scipy.special.ndtr(mean - found.factor * sd)
    assert float((held > 0.97).mean()) == pytest.approx(found.excess_probability, abs=0.0086)
    assert float((held >= 0.9).mean()) == pytest.approx(0.95, abs=0.0062)
    assert found.excess_probability <= 0.1
    with pytest.raises(UnusableParameter):
        normal_size(coverage=0.9, confidence=0.95, excess_coverage=0.9, excess_risk=0.1)


def test_howe_tells_its_true_confidence() -> None:
    found = normal_interval(43, 0.0, 1.0, coverage=0.9, confidence=0.99, method="normal-howe-1969")
    assert isinstance(found, ToleranceInterval)
    assert 0.985 < found.achieved_confidence < 0.99
    with pytest.raises(UnusableParameter):
        normal_interval(43, 0.0, 1.0, coverage=0.9, confidence=0.99, sides="upper", method="normal-howe-1969")


def test_over_http() -> None:
    sent = served.example("tolerance-interval")
    answer = served.answer_of("computeToleranceInterval", sent)["interval"]
    values = np.array(sent["data"]["values"])
    summary = {"mean": values.mean(), "sd": values.std(ddof=1), "count": values.size}
    asked = {**{name: value for name, value in sent.items() if name != "data"}, "summary": summary}
    other = served.answer_of("computeToleranceInterval", asked)["interval"]
    assert (other["lower"], other["upper"]) == pytest.approx((answer["lower"], answer["upper"]), rel=1e-12)
    for wrong, pointer in (
        ({**asked, "data": sent["data"]}, "#/summary"),
        ({**asked, "method": "non-parametric"}, "#/method"),
        ({"coverage": 0.9, "sample_size": {}}, "#/sample_size"),
        (
            {"coverage": 0.9, "sample_size": {"excess_coverage": 0.8, "excess_risk": 0.1}},
            "#/sample_size/excess_coverage",
        ),
        ({"coverage": 0.9}, "#/data"),
    ):
        problem = served.call("computeToleranceInterval", wrong)
        assert problem.status_code == 422
        assert problem.json is not None
        assert problem.json["errors"][0]["pointer"] == pointer
