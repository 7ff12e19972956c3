"""What the charts of several variables must not depend on."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.spc.charts import mewma, multivariate
from assignable.spc.data import Vectors

FEW = settings(derandomize=True, deadline=None, max_examples=15)
ESTIMATORS = ("sample", "successive-differences", "pooled")


def _data(seed: int, m: int, p: int, size: int = 1) -> Vectors:
    rng = np.random.default_rng(seed)
    mix = rng.standard_normal((p, p)) + 2 * np.eye(p)
    values = rng.standard_normal((m, size, p)) @ mix + rng.uniform(-50, 50, p)
    return Vectors(values if size > 1 else values[:, 0], tuple(f"v{i}" for i in range(p)))


def _statistics(data: Vectors, estimator: str) -> list[np.ndarray]:
    return [
        multivariate.fit(data, multivariate.TSquaredOptions(estimator)).baseline.panels.t_squared.value,
        mewma.fit(data, mewma.MewmaOptions(covariance_estimator=estimator)).baseline.panels.mewma.value,
    ]


@FEW
@given(st.integers(0, 10_000), st.integers(2, 6), st.sampled_from(ESTIMATORS))
def test_any_change_of_units_and_axes_leaves_distances(seed: int, p: int, estimator: str) -> None:
    data = _data(seed, 25, p, 3 if estimator == "pooled" else 1)
    rng = np.random.default_rng(seed + 1)
    # A well-conditioned map, in units that differ by orders of magnitude.
    turn, _ = np.linalg.qr(rng.standard_normal((p, p)))
    away = turn * 10.0 ** rng.integers(-6, 7, p)
    moved = Vectors(data.values @ away + away.sum(axis=0), data.names)
    for before, after in zip(_statistics(data, estimator), _statistics(moved, estimator), strict=True):
        np.testing.assert_allclose(after, before, rtol=1e-5, atol=1e-6)


@FEW
@given(st.integers(0, 10_000), st.integers(2, 6), st.sampled_from(ESTIMATORS))
def test_the_order_of_variables_does_not_matter(seed: int, p: int, estimator: str) -> None:
    data = _data(seed, 25, p, 3 if estimator == "pooled" else 1)
    order = np.random.default_rng(seed).permutation(p)
    moved = Vectors(data.values[..., order], tuple(data.names[i] for i in order))
    for before, after in zip(_statistics(data, estimator), _statistics(moved, estimator), strict=True):
        np.testing.assert_allclose(after, before, rtol=1e-9)


@FEW
@given(
    st.integers(0, 10_000),
    st.lists(st.integers(0, 200), max_size=6),
    st.sampled_from(("asymptotic", "time-varying")),
    st.sampled_from((1, 2)),
)
def test_any_split_of_the_data_gives_the_same_bits(
    seed: int, cuts: list[int], covariance: str, size: int
) -> None:
    data = _data(seed, 200, 5, size)
    fitted = mewma.fit(data, mewma.MewmaOptions(0.05, covariance, in_control_arl=50.0))
    values = data.values + 0.3
    flat = values.reshape(200, -1)
    flat[np.random.default_rng(seed).random(200) < 0.1, 0] = np.nan
    whole = mewma.judge(fitted.limits, Vectors(values, data.names), None)
    carry, told, seen = None, [], []
    edges = [0, *sorted(set(cuts) - {0, 200}), 200]
    for low, high in pairwise(edges):
        part = mewma.judge(fitted.limits, Vectors(values[low:high], data.names), carry)
        carry = part.carry
        told += [low + signal.index for signal in part.signals]
        seen += part.panels.mewma.value.tolist()
    assert seen == whole.panels.mewma.value.tolist()
    assert told == [signal.index for signal in whole.signals]
    assert carry == whole.carry


@pytest.mark.parametrize("p", [2, 5, 20, 50])
def test_a_point_is_the_same_alone_and_among_others(p: int) -> None:
    data = _data(p, 150, p)
    limits = multivariate.fit(data, multivariate.TSquaredOptions()).limits
    whole = multivariate.judge(limits, data, None).panels.t_squared.value
    alone = [
        multivariate.judge(limits, Vectors(row[None, :], data.names), None).panels.t_squared.value[0]
        for row in data.values
    ]
    assert alone == whole.tolist()
