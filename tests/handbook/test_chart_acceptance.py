"""Acceptance control charts against published figures, a plain transcription and simulation."""

from __future__ import annotations

import math
from statistics import NormalDist

import numpy as np
import pytest

from assignable.spc.capability.specification import Specification
from assignable.spc.charts import acceptance
from assignable.spc.charts.acceptance import AcceptanceLimits, AcceptanceOptions, AcceptancePlan
from assignable.spc.charts.common import Exclusion
from assignable.spc.data import Subgroups, SubgroupSummary
from assignable.spc.errors import UnusableData, UnusableParameter

NORMAL = NormalDist()
PLAN = AcceptancePlan(0.001, 0.05, 0.05, 0.1)


def limits(
    plan: AcceptancePlan, lower: float | None, upper: float | None, **more: object
) -> AcceptanceLimits:
    options = AcceptanceOptions(Specification(lower, upper), plan, sigma=1.0, **more)  # type: ignore[arg-type]
    return acceptance.fit(None, options).limits


def test_sample_size_of_a_textbook() -> None:
    # Montgomery, Introduction to Statistical Quality Control, section on acceptance control charts (from memory):
    # fractions .01 and .05, risks .00135 and .20 give n = ((3.00 + .84)/(2.33 - 1.645))^2 = 31.43, or 32.
    plan = AcceptancePlan(0.01, 0.05, 0.00135, 0.2)
    rounded = ((3.00 + 0.84) / (2.33 - 1.645)) ** 2
    assert rounded == pytest.approx(31.43, abs=0.005)
    found = limits(plan, None, 100.0)
    assert found.exact_sample_size == pytest.approx(31.43, abs=0.4)  # exact quantiles give 31.78
    assert found.sample_size == 32
    # His UCL = USL - (Z_delta - Z_alpha/sqrt(n)) sigma.
    assert found.upper is not None
    assert found.upper.control_limit == pytest.approx(100.0 - (2.326348 - 2.999977 / math.sqrt(32)), abs=1e-5)


@pytest.mark.parametrize(
    ("p1", "p2", "alpha", "beta"),
    [(0.001, 0.05, 0.05, 0.1), (0.01, 0.03, 0.05, 0.05), (1e-6, 0.4, 0.01, 0.1), (1e-4, 1e-3, 0.1, 0.2)],
)
def test_levels_and_risks_by_the_standard_library(p1: float, p2: float, alpha: float, beta: float) -> None:
    z1, z2 = NORMAL.inv_cdf(1 - p1), NORMAL.inv_cdf(1 - p2)
    za, zb = NORMAL.inv_cdf(1 - alpha), NORMAL.inv_cdf(1 - beta)
    found = limits(AcceptancePlan(p1, p2, alpha, beta), None, 50.0)
    n = math.ceil(((za + zb) / (z1 - z2)) ** 2)
    assert found.sample_size == n
    side = found.upper
    assert side is not None
    assert found.lower is None
    assert side.acceptable_level == pytest.approx(50 - z1, rel=1e-12)
    assert side.rejectable_level == pytest.approx(50 - z2, rel=1e-12)
    assert side.control_limit == pytest.approx(50 - z1 + za / math.sqrt(n), rel=1e-12)
    assert found.producer_risk == pytest.approx(alpha, rel=1e-9)
    assert found.consumer_risk == pytest.approx(
        NORMAL.cdf((side.control_limit - side.rejectable_level) * math.sqrt(n)), rel=1e-8
    )
    assert found.consumer_risk <= beta
    for point in found.operating_characteristic:
        assert point.fraction_nonconforming == pytest.approx(NORMAL.cdf(point.mean - 50), rel=1e-8)
        assert point.acceptance_probability == pytest.approx(
            NORMAL.cdf((side.control_limit - point.mean) * math.sqrt(n)), rel=1e-6, abs=1e-15
        )
    # One fewer would break the consumer's risk.
    if n > 1:
        fewer = limits(AcceptancePlan(p1, p2, alpha, beta), None, 50.0, sample_size=n - 1)
        assert fewer.consumer_risk > beta


def test_the_sides_mirror_each_other() -> None:
    both = limits(PLAN, -10.0, 10.0)
    upper, lower = limits(PLAN, None, 10.0), limits(PLAN, -10.0, None)
    assert both.upper == upper.upper
    assert both.lower == lower.lower
    assert both.lower is not None
    assert both.upper is not None
    assert both.lower.control_limit == -both.upper.control_limit
    assert both.panels.mean.centre == 0.0
    assert [p.acceptance_probability for p in upper.operating_characteristic] == pytest.approx(
        [p.acceptance_probability for p in lower.operating_characteristic], rel=1e-12
    )


def test_both_tails_count_where_the_levels_are_near() -> None:
    z1 = NORMAL.inv_cdf(1 - 0.001)
    near = limits(PLAN, -z1 - 0.01, z1 + 0.01)
    root = math.sqrt(near.sample_size)
    assert near.lower is not None
    assert near.upper is not None
    level = near.upper.acceptable_level
    inside = NORMAL.cdf((near.upper.control_limit - level) * root) - NORMAL.cdf(
        (near.lower.control_limit - level) * root
    )
    assert near.producer_risk == pytest.approx(1 - inside, rel=1e-9)
    assert near.producer_risk > 0.09  # both limits are as near


def test_a_side_without_limit_is_out_of_reach() -> None:
    values = np.array([[1.0, 2.0], [-1e200, -1e200], [5.0, 9.9]])
    options = AcceptanceOptions(Specification(None, 10.0), PLAN, sigma=1.0)
    found = acceptance.fit(Subgroups(values), options)
    assert found.limits.panels.mean.lower is None
    assert found.baseline is not None
    panel = found.baseline.panels.mean
    assert np.isfinite(panel.lower).all()
    assert not [signal for signal in found.baseline.signals if signal.side == "below"]
    single = acceptance.judge(found.limits, Subgroups(values[:, :1]), None)
    assert len(single.panels.within.index) == 0


def test_risks_by_simulation() -> None:
    rng = np.random.default_rng(57)
    found = limits(PLAN, -8.0, 8.0)
    assert found.upper is not None
    draws = 40_000
    for level, rejected in (
        (found.upper.acceptable_level, found.producer_risk),
        (found.upper.rejectable_level, 1 - found.consumer_risk),
    ):
        values = level + rng.standard_normal((draws, found.sample_size))
        judged = acceptance.judge(found, Subgroups(values), None)
        means = judged.panels.mean
        rate = float(np.mean((means.value > means.upper) | (means.value < means.lower)))
        assert abs(rate - rejected) < 4 * math.sqrt(rejected * (1 - rejected) / draws)


def test_baseline_estimates_sigma_and_judges_by_own_size() -> None:
    rng = np.random.default_rng(3)
    values = 146 + 0.2 * rng.standard_normal((30, 1)) + 0.1 * rng.standard_normal((30, 5))
    values[4, 3:] = np.nan
    values[7] = np.nan
    values[9] += 2.0
    options = AcceptanceOptions(
        Specification(145.0, 147.0),
        PLAN,
        sample_size=5,
        sigma_estimator="pooled-sd",
        exclude=(Exclusion(9, "test"),),
    )
    found = acceptance.fit(Subgroups(values), options)
    kept = [row[~np.isnan(row)] for i, row in enumerate(values) if i != 9]
    kept = [row for row in kept if len(row)]
    squares = sum(float(((row - row.mean()) ** 2).sum()) for row in kept)
    freedom = sum(len(row) - 1 for row in kept)
    c4 = math.sqrt(2 / freedom) * math.exp(math.lgamma((freedom + 1) / 2) - math.lgamma(freedom / 2))
    sigma = math.sqrt(squares / freedom) / c4
    assert found.limits.sigma == pytest.approx(sigma, rel=1e-10)
    assert found.baseline is not None
    mean = found.baseline.panels.mean
    assert 7 not in mean.index.tolist()
    assert 9 in mean.index.tolist()
    z1, za = NORMAL.inv_cdf(0.999), NORMAL.inv_cdf(0.95)
    at = mean.index.tolist().index(4)
    assert mean.upper[at] == pytest.approx(147 - (z1 - za / math.sqrt(3)) * sigma, rel=1e-12)
    assert mean.upper[0] == pytest.approx(147 - (z1 - za / math.sqrt(5)) * sigma, rel=1e-12)
    assert all(signal.index != 9 for signal in found.baseline.signals)
    assert "size-differs" in [caution.code for caution in found.cautions]


def test_run_lengths_are_those_of_single_means() -> None:
    options = AcceptanceOptions(Specification(None, 10.0), PLAN, sigma=2.0)
    fitted = acceptance.fit(None, options)
    assert fitted.performance.in_control_arl == pytest.approx(20.0, rel=1e-9)
    n, za = fitted.limits.sample_size, NORMAL.inv_cdf(0.95)
    for shift in fitted.performance.shifts:
        assert shift.arl == pytest.approx(1 / NORMAL.cdf(shift.shift * math.sqrt(n) - za), rel=1e-9)


def test_refusals() -> None:
    with pytest.raises(UnusableParameter) as order:
        limits(AcceptancePlan(0.05, 0.01, 0.05, 0.1), None, 1.0)
    assert order.value.faults[0].code == "fractions-out-of-order"
    with pytest.raises(UnusableData) as narrow:
        limits(PLAN, -3.0, 3.0)
    assert narrow.value.faults[0].code == "specification-too-narrow"
    with pytest.raises(UnusableParameter) as sigma:
        acceptance.fit(None, AcceptanceOptions(Specification(None, 1.0), PLAN))
    assert sigma.value.faults[0].where == ("standards", "sigma")
    with pytest.raises(UnusableParameter) as large:
        limits(AcceptancePlan(0.01, 0.0101, 0.05, 0.1), None, 1.0)
    assert large.value.faults[0].code == "sample-too-large"
    with pytest.raises(UnusableData) as spread:
        acceptance.judge(
            limits(PLAN, None, 9.0), SubgroupSummary(np.ones(2), np.array([5, 5]), sds=np.ones(2)), None
        )
    assert spread.value.faults[0].code == "spread-missing"


def test_a_fixed_size_says_what_it_costs() -> None:
    fitted = acceptance.fit(
        None, AcceptanceOptions(Specification(None, 10.0), PLAN, sigma=1.0, sample_size=2)
    )
    assert [caution.code for caution in fitted.cautions] == ["consumer-risk-not-held"]
    assert fitted.limits.producer_risk == pytest.approx(0.05, rel=1e-9)
