"""Capability of counts against print, other exact methods, and simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy
import scipy.stats

from assignable.spc.capability.attributes import garwood, study
from assignable.spc.errors import UnusableData
from contract import served


@pytest.mark.parametrize(
    ("events", "lower", "upper"),
    # Garwood 1936 and every table of Poisson limits since, 95 %: from memory.
    [(0, 0.0, 3.689), (1, 0.0253, 5.572), (5, 1.623, 11.668), (10, 4.795, 18.390)],
)
def test_published_poisson_limits(events: int, lower: float, upper: float) -> None:
    assert garwood(events, 0.95) == pytest.approx((lower, upper), abs=6e-4)


def test_limits_leave_half_the_risk_on_each_side() -> None:
    lower, upper = garwood(7, 0.9)
    assert scipy.stats.poisson.sf(6, lower) == pytest.approx(0.05)
    assert scipy.stats.poisson.cdf(7, upper) == pytest.approx(0.05)


def test_orange_juice_cans() -> None:
    # Montgomery, table 7.1: partly checked in print. Two of 30 samples are outside p-chart limits.
    counts = [
        12,
        15,
        8,
        10,
        4,
        7,
        16,
        9,
        14,
        10,
        5,
        6,
        17,
        12,
        22,
        8,
        10,
        5,
        13,
        11,
        20,
        18,
        24,
        15,
        9,
        12,
        7,
        13,
        9,
        6,
    ]
    found = study(np.array(counts, dtype=float), np.full(30, 50.0), "nonconforming-units")
    assert round(found.capability.rate.value, 4) == 0.2313
    assert found.status == "provisional"
    interval = scipy.stats.binomtest(347, 1500).proportion_ci(0.95, method="exact")
    rate = found.capability.rate
    assert (rate.lower, rate.upper) == pytest.approx((interval.low, interval.high), rel=1e-9)
    one = scipy.stats.binomtest(347, 1500, alternative="less").proportion_ci(0.95, method="exact")
    assert rate.upper_bound == pytest.approx(one.high, rel=1e-9)


def test_circuit_boards() -> None:
    # Montgomery & Runger, example 16-5: 160 nonconformities on 100 boards, ū = 1.6, in control. Partly from memory.
    counts = [6, 4, 8, 10, 9, 12, 16, 2, 3, 10, 9, 15, 8, 10, 8, 2, 7, 1, 7, 13]
    found = study(np.array(counts, dtype=float), np.full(20, 5.0), "nonconformities")
    assert found.capability.rate.value == 1.6
    assert found.status == "established"
    assert found.capability.nonconforming_ppm == pytest.approx(1e6 * (1.0 - math.exp(-1.6)))


def test_the_equivalent_index() -> None:
    # One in 740.8 beyond one limit is three sigma: an index of 1.
    found = study(np.array([135.0, 135.0]), np.array([100_000.0, 100_000.0]), "nonconforming-units")
    index = found.capability.index
    assert index.value == pytest.approx(1.0, abs=1e-4)
    assert index.upper is not None
    assert index.lower < index.lower_bound < 1.0 < index.upper
    assert 1e6 * scipy.special.ndtr(-3.0 * index.lower) == pytest.approx(1e6 * found.capability.rate.upper)


def test_no_event_has_a_bound_and_no_index() -> None:
    found = study(np.zeros(25), np.full(25, 120.0), "nonconforming-units")
    # The rule of three: 3/n, or exactly 1 - 0.05^(1/n).
    assert found.capability.rate.upper_bound == pytest.approx(1.0 - 0.05 ** (1.0 / 3000.0))
    assert found.capability.index.value is None
    assert found.capability.index.lower_bound == pytest.approx(
        -scipy.stats.norm.ppf(found.capability.rate.upper_bound) / 3.0
    )
    assert found.status == "not-assessed"
    assert [one.code for one in found.cautions] == ["few-samples"]


@pytest.mark.parametrize("kind", ["nonconforming-units", "nonconformities"])
def test_coverage_is_at_least_nominal(kind: str) -> None:
    random = np.random.Generator(np.random.PCG64(1))
    hits = 0
    for _ in range(300):
        counts = (
            random.binomial(100, 0.02, 10) if kind == "nonconforming-units" else random.poisson(2.0, 10)
        ).astype(float)
        rate = study(counts, np.full(10, 100.0), kind).capability.rate  # type: ignore[arg-type]
        hits += rate.lower <= 0.02 <= rate.upper
    assert hits / 300 >= 0.95 - 4 * math.sqrt(0.95 * 0.05 / 300)


@pytest.mark.parametrize(
    ("counts", "inspected", "kind", "code", "where"),
    [
        ([math.nan], [10.0], "nonconforming-units", "empty", ("data", "counts")),
        ([1.0, 11.0], [10.0, 10.0], "nonconforming-units", "count-too-large", ("data", "counts", 1)),
        ([1.0, 1.0], [10.0, 9.5], "nonconforming-units", "fraction-of-a-unit", ("data", "inspected", 1)),
        ([1.0, 1.0], [10.0, math.nan], "nonconformities", "no-size", ("data", "inspected", 1)),
    ],
)
def test_impossible_counts(
    counts: list[float], inspected: list[float], kind: str, code: str, where: tuple[str | int, ...]
) -> None:
    with pytest.raises(UnusableData) as error:
        study(np.array(counts), np.array(inspected), kind)  # type: ignore[arg-type]
    assert (error.value.faults[0].code, error.value.faults[0].where) == (code, where)


def test_over_http() -> None:
    sent = served.example("capability-attributes")
    first = served.answer_of("assessAttributes", sent)
    sent["data"]["inspected"] = [sent["data"]["inspected"]] * len(sent["data"]["counts"])
    second = served.answer_of("assessAttributes", sent)
    assert first["capability"] == second["capability"]
    sent["data"]["inspected"].pop()
    problem = served.call("assessAttributes", sent).json
    assert problem is not None
    assert problem["errors"][0]["pointer"] == "#/data/inspected"
