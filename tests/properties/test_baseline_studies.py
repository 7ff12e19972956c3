"""What joint limits, screening and guarantees must not depend on, and that they never break."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.spc.baseline.estimation import Guarantee
from assignable.spc.baseline.screening import Screening
from assignable.spc.charts import individuals, subgroups
from assignable.spc.charts.lines import Spread
from assignable.spc.data import Individuals, Subgroups
from assignable.spc.errors import SpcError

seeds = st.integers(0, 2**32 - 1)
few = settings(max_examples=30, derandomize=True, deadline=None)


def _spoilt(seed: int, shape: tuple[int, ...]) -> np.ndarray:
    rng = np.random.default_rng(seed)
    x = rng.standard_normal(shape)
    x[rng.integers(0, shape[0], 2)] += rng.normal(0.0, 8.0, 2).reshape(2, *[1] * (len(shape) - 1))
    return x


@few
@given(seeds, st.integers(12, 50), st.sampled_from([1e-120, 0.01, 3.0, 1e120]))
def test_unit_and_origin_change_no_decision(seed: int, m: int, scale: float) -> None:
    x = _spoilt(seed, (m, 4))
    options = subgroups.SubgroupOptions(
        "mean-range",
        joint_false_alarm_probability=0.05,
        screening=Screening(4),
        guarantee=Guarantee(200.0, 0.8),
    )
    one = subgroups.fit(Subgroups(x), options, spread="range")
    other = subgroups.fit(Subgroups(scale * (x + 2.0)), options, spread="range")
    assert one.limits.baseline == other.limits.baseline
    assert one.diagnostics is not None
    assert other.diagnostics is not None
    assert one.diagnostics.judged_by == other.diagnostics.judged_by
    assert one.diagnostics.screening == other.diagnostics.screening
    assert one.limits.sigma_multiple == other.limits.sigma_multiple
    assert other.limits.sigma == pytest.approx(scale * one.limits.sigma, rel=1e-9)
    assert one.performance.estimated == other.performance.estimated


@few
@given(seeds, st.integers(12, 60), st.sampled_from([1e-120, 0.01, 3.0, 1e120]))
def test_the_same_of_single_values(seed: int, m: int, scale: float) -> None:
    x = _spoilt(seed, (m,))
    options = individuals.IndividualsOptions(
        joint_false_alarm_probability=0.1, screening=Screening(4), guarantee=Guarantee(200.0, 0.8)
    )
    one = individuals.fit(Individuals(x), options)
    other = individuals.fit(Individuals(scale * (x + 2.0)), options)
    assert one.limits.baseline == other.limits.baseline
    assert one.diagnostics is not None
    assert other.diagnostics is not None
    assert one.diagnostics.judged_by == other.diagnostics.judged_by
    assert one.diagnostics.screening == other.diagnostics.screening
    assert one.limits.sigma_multiple == other.limits.sigma_multiple


@settings(max_examples=60, derandomize=True, deadline=None)
@given(
    seeds,
    st.integers(1, 12),
    st.integers(1, 6),
    st.sampled_from(["mean-range", "mean-sd", "pooled-sd", "median-range"]),
    st.sampled_from(["range", "sd"]),
    st.floats(1e-6, 0.5),
)
def test_small_and_gappy_baselines_get_limits_or_a_reason(
    seed: int, m: int, n: int, estimator: str, spread: Spread, probability: float
) -> None:
    rng = np.random.default_rng(seed)
    rows = np.round(rng.standard_normal((m, n)) * 2, 1)
    rows[rng.random((m, n)) < 0.2] = np.nan
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for joint in (None, probability):
            for guarantee in (None, Guarantee(370.0, 0.95)):
                try:
                    found = subgroups.fit(
                        Subgroups(rows),
                        subgroups.SubgroupOptions(
                            estimator,
                            joint_false_alarm_probability=joint,
                            screening=Screening(3),
                            guarantee=guarantee,
                        ),
                        spread=spread,
                    )
                except SpcError:
                    continue
                assert np.isfinite(found.limits.sigma)
                assert found.limits.sigma_multiple is not None
                assert np.isfinite(found.limits.sigma_multiple)


@few
@given(seeds, st.floats(0.001, 0.3))
def test_a_smaller_probability_gives_wider_limits(seed: int, probability: float) -> None:
    x = Individuals(np.random.default_rng(seed).standard_normal(30))
    told = [
        individuals.fit(x, individuals.IndividualsOptions(joint_false_alarm_probability=alpha)).diagnostics
        for alpha in (probability, probability / 2)
    ]
    wide, wider = (one.judged_by for one in told if one is not None)
    assert wide is not None
    assert wider is not None
    assert wider.sigma_multiple > wide.sigma_multiple
    assert wider.spread_tail_probability < wide.spread_tail_probability
