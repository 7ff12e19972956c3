"""What no estimator of sigma may depend on, and what it must follow."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.spc import sigma as s
from assignable.spc.data import Subgroups

SETTINGS = settings(derandomize=True, deadline=None, max_examples=25)


@st.composite
def subgroups(draw: st.DrawFn) -> np.ndarray:
    m, n = draw(st.integers(2, 12)), draw(st.integers(2, 9))
    values = np.random.default_rng(draw(st.integers(0, 2**32 - 1))).standard_normal((m, n))
    if draw(st.booleans()):
        values[draw(st.integers(0, m - 1)), : draw(st.integers(1, n))] = np.nan
    return values


def all_of(values: np.ndarray) -> dict[str, s.SigmaEstimate]:
    statistics = Subgroups(values).statistics()
    found = {estimator: s.within(statistics, estimator) for estimator in s.WITHIN}
    found["overall"] = s.overall(values)
    from_statistics = s.overall_from_statistics(statistics)
    assert from_statistics is not None
    found["from-statistics"] = from_statistics
    return found


def series_of(values: np.ndarray) -> dict[str, s.SigmaEstimate]:
    flat = values.reshape(-1)
    return {
        "mean": s.moving_range(flat),
        "median": s.moving_range(flat, statistic="median"),
    }


@SETTINGS
@given(subgroups(), st.floats(-1e3, 1e3), st.floats(1e-6, 1e6))
def test_shift_and_scale(values: np.ndarray, shift: float, scale: float) -> None:
    for estimates in (all_of, series_of):
        plain, moved = estimates(values), estimates(values * scale + shift * scale)
        for name, estimate in plain.items():
            assert moved[name].sigma == pytest.approx(estimate.sigma * scale, rel=1e-9), name
            assert moved[name].degrees_of_freedom == estimate.degrees_of_freedom, name


@SETTINGS
@given(subgroups(), st.integers(0, 1000))
def test_order_of_subgroups_and_of_their_values(values: np.ndarray, seed: int) -> None:
    rng = np.random.default_rng(seed)
    other = rng.permuted(rng.permutation(values), axis=1)
    plain, moved = all_of(values), all_of(other)
    for name, estimate in plain.items():
        assert moved[name].sigma == pytest.approx(estimate.sigma, rel=1e-12), name
        assert moved[name].degrees_of_freedom == pytest.approx(estimate.degrees_of_freedom, rel=1e-12), name


@SETTINGS
@given(subgroups())
def test_empty_and_single_subgroups_change_nothing_within(values: np.ndarray) -> None:
    rows = np.full((2, values.shape[1]), np.nan)
    rows[1, 0] = 77.0
    with_gaps = np.vstack([rows[:1], values, rows[1:]])
    plain, moved = Subgroups(values).statistics(), Subgroups(with_gaps).statistics()
    for estimator in s.WITHIN:
        a, b = s.within(plain, estimator), s.within(moved, estimator)
        assert b.sigma == pytest.approx(a.sigma, rel=1e-12)
        assert b.degrees_of_freedom == pytest.approx(a.degrees_of_freedom, rel=1e-12)


@SETTINGS
@given(subgroups())
def test_a_moving_range_reads_the_same_backwards(values: np.ndarray) -> None:
    forward, backward = series_of(values), series_of(values[::-1, ::-1])
    for name, estimate in forward.items():
        assert backward[name].sigma == pytest.approx(estimate.sigma, rel=1e-12)
        assert backward[name].degrees_of_freedom == pytest.approx(estimate.degrees_of_freedom, rel=1e-12)
