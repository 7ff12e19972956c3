"""Conformance under measurement uncertainty against published rules, bivariate integrals and simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy
import scipy.stats

from assignable.spc.capability.specification import Specification
from assignable.spc.capability.uncertainty import (
    ProcessDistribution,
    acceptance_limits,
    conformance,
    global_risks,
    product_capability,
    product_distribution,
)
from assignable.spc.errors import UnusableParameter
from contract import served


def test_one_sided_guard_bands() -> None:
    # ISO 14253-1:2017: a guard band of 1.65 u for a probability of conformance of 95 %; JCGM 106:2012, 8.3.2: with
    # w = 2u the risk is at most 2.3 %. From memory.
    found = acceptance_limits(0.1, Specification(None, 10.0), 0.05)
    assert found is not None
    assert found.guard_upper == pytest.approx(0.1645, abs=5e-4)
    assert 1.0 - conformance(
        10.0 - 0.2, 0.1, Specification(None, 10.0)
    ).conformance_probability == pytest.approx(0.0228, abs=1e-4)
    assert found.lower is None


def test_probability_at_the_limit_is_a_half() -> None:
    assert conformance(10.0, 0.1, Specification(None, 10.0)).conformance_probability == pytest.approx(0.5)
    one = conformance(9.7, 0.2, Specification(9.0, 10.0))
    assert one.conformance_probability == pytest.approx(
        scipy.stats.norm.cdf(10.0, 9.7, 0.2) - scipy.stats.norm.cdf(9.0, 9.7, 0.2), rel=1e-12
    )


def test_verdicts() -> None:
    spec = Specification(9.0, 10.0)
    assert [conformance(y, 0.1, spec).verdict for y in (9.5, 9.95, 10.1, 10.3)] == [
        "conforming",
        "undecided",
        "undecided",
        "nonconforming",
    ]


def test_two_limits_share_the_risk() -> None:
    spec = Specification(9.0, 10.0)
    found = acceptance_limits(0.28, spec, 0.08)
    assert found is not None
    assert found.upper is not None
    assert 1.0 - conformance(found.upper, 0.28, spec).conformance_probability == pytest.approx(0.08, rel=1e-9)
    assert found.guard_lower == pytest.approx(found.guard_upper)
    assert acceptance_limits(0.5, spec, 0.05) is None


def test_prior_knowledge_by_weighted_draws() -> None:
    spec, process = Specification(9.0, 10.0), ProcessDistribution(9.4, 0.25)
    random = np.random.Generator(np.random.PCG64(1))
    x = process.mean + process.sd * random.standard_normal(400_000)
    weight = scipy.stats.norm.pdf(9.95, x, 0.1)
    expected = float(weight[(x >= 9.0) & (x <= 10.0)].sum() / weight.sum())
    found = conformance(9.95, 0.1, spec, process=process)
    assert found.conformance_probability == pytest.approx(expected, abs=4e-3)
    limits = acceptance_limits(0.1, spec, 0.05, process=process)
    assert limits is not None
    assert limits.upper is not None
    assert 1.0 - conformance(
        limits.upper, 0.1, spec, process=process
    ).conformance_probability == pytest.approx(0.05)


def test_global_risks_against_the_bivariate_normal() -> None:
    u, process, spec = 0.1, ProcessDistribution(9.6, 0.25), Specification(None, 10.0)
    found = global_risks(u, spec, None, 9.9, process)
    # True and measured value are bivariate normal.
    both = scipy.stats.multivariate_normal(
        [9.6, 9.6], [[0.0625, 0.0625], [0.0625, 0.0725]], abseps=1e-12, releps=1e-12
    )
    accepted = scipy.stats.norm.cdf(9.9, 9.6, math.sqrt(0.0725))
    inside = both.cdf([10.0, 9.9])
    conforming = scipy.stats.norm.cdf(10.0, 9.6, 0.25)
    assert found.accepted == pytest.approx(accepted, abs=1e-12)
    assert found.consumer == pytest.approx(accepted - inside, abs=1e-8)
    assert found.producer == pytest.approx(conforming - inside, abs=1e-8)
    assert found.nonconforming == pytest.approx(1.0 - conforming, abs=1e-12)


@pytest.mark.parametrize("u", [1e-5, 0.003, 0.1, 2.0])
def test_global_risks_add_up(u: float) -> None:
    process, spec = ProcessDistribution(9.4, 0.25), Specification(9.0, 10.0)
    found = global_risks(u, spec, 9.05, 9.95, process)
    # Accepted = conforming - producer's + consumer's.
    balance = (1.0 - found.nonconforming) - found.producer + found.consumer
    assert found.accepted == pytest.approx(balance, abs=found.accuracy)
    if u == 1e-5:
        sharp = scipy.stats.norm.cdf([9.0, 9.05, 9.95, 10.0], 9.4, 0.25)
        assert found.producer == pytest.approx(sharp[1] - sharp[0] + sharp[3] - sharp[2], abs=1e-6)
        assert found.consumer < 1e-12


def test_global_risks_by_simulation() -> None:
    process, spec = ProcessDistribution(9.4, 0.25), Specification(9.0, 10.0)
    found = global_risks(0.1, spec, 9.1, 9.9, process)
    random = np.random.Generator(np.random.PCG64(2))
    x = 9.4 + 0.25 * random.standard_normal(400_000)
    y = x + 0.1 * random.standard_normal(400_000)
    accepted, conforms = (y >= 9.1) & (y <= 9.9), (x >= 9.0) & (x <= 10.0)
    for share, seen in ((found.consumer, accepted & ~conforms), (found.producer, ~accepted & conforms)):
        assert float(seen.mean()) == pytest.approx(share, abs=4 * math.sqrt(share / 400_000))


def test_the_products_own_capability() -> None:
    # 0.5² = 0.4² + 0.3².
    found = product_capability(10.0, 0.5, 0.3, Specification(8.8, 11.2), count=50)
    assert found.product_sd == pytest.approx(0.4, rel=1e-12)
    assert (found.observed_pp, found.product_pp) == pytest.approx((0.8, 1.0))
    assert found.measurement_share == pytest.approx(0.36)
    assert found.product_sd_lower is not None
    assert found.product_sd_upper is not None
    assert found.product_sd_lower < 0.4 < found.product_sd_upper
    with pytest.raises(UnusableParameter, match="nothing is left"):
        product_distribution(10.0, 0.3, 0.3)


def test_its_interval_by_simulation() -> None:
    random = np.random.Generator(np.random.PCG64(4))
    hits = 0
    for sd in np.sqrt(0.25 * random.chisquare(39, 2000) / 39):
        found = product_capability(10.0, float(sd), 0.2, Specification(8.0, 12.0), count=40)
        assert found.product_sd_lower is not None
        assert found.product_sd_upper is not None
        hits += found.product_sd_lower <= math.sqrt(0.25 - 0.04) <= found.product_sd_upper
    assert hits / 2000 == pytest.approx(0.95, abs=0.02)


def test_over_http() -> None:
    sent = served.example("capability-conformance")
    answer = served.answer_of("assessConformance", sent)
    assert answer["results"][0]["verdict"] == "conforming"
    assert answer["plan"]["consumer"] < answer["plan"]["nonconforming"]
    alone = {name: sent[name] for name in ("specification", "standard_uncertainty", "results")}
    assert served.answer_of("assessConformance", alone)["plan"] is None
    too_coarse = {**alone, "standard_uncertainty": 0.2, "consumer_risk": 0.01}
    told = served.answer_of("assessConformance", too_coarse)
    assert told["acceptance_limits"] is None
    assert "no-acceptance-zone" in {one["code"] for one in told["cautions"]}
    for wrong, pointer in (
        ({**sent, "standard_uncertainty": 0.02}, "#/process/sd"),
        ({**alone, "acceptance": {"lower": 2.46}}, "#/process"),
        ({**sent, "acceptance": {}}, "#/acceptance"),
        ({**sent, "acceptance": {"lower": 3, "upper": 2}}, "#/acceptance/lower"),
    ):
        problem = served.call("assessConformance", wrong)
        assert problem.status_code == 422
        assert problem.json is not None
        assert problem.json["errors"][0]["pointer"] == pointer
