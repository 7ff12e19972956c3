"""What a step within a baseline must not depend on."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.spc.baseline import change_points
from assignable.spc.data import Subgroups

seeds = st.integers(0, 2**32 - 1)
few = settings(max_examples=25, derandomize=True, deadline=None)


def _same(
    a: change_points.BaselineStep | None, b: change_points.BaselineStep | None, scale: float, shift: float
) -> None:
    assert a is not None
    assert b is not None
    assert a.index == b.index
    assert b.before == pytest.approx(scale * a.before + shift, rel=1e-6, abs=1e-9 * scale)
    assert b.after == pytest.approx(scale * a.after + shift, rel=1e-6, abs=1e-9 * scale)
    assert b.statistic == pytest.approx(a.statistic, rel=1e-6, abs=1e-9)
    assert b.p_value == pytest.approx(a.p_value, rel=1e-6)


@few
@given(seeds, st.integers(12, 80), st.sampled_from([1e-250, 1e-3, 7.0, 1e250]))
def test_unit_and_origin_change_nothing(seed: int, m: int, scale: float) -> None:
    x = np.random.default_rng(seed).standard_normal(m)
    one, other = change_points.of_values(x), change_points.of_values(scale * (x + 3.0))
    assert one is not None
    assert other is not None
    _same(one.mean, other.mean, scale, 3.0 * scale)
    _same(one.variance, other.variance, scale, 0.0)


@few
@given(seeds, st.integers(12, 60))
def test_gaps_keep_their_place_and_change_no_figure(seed: int, m: int) -> None:
    rng = np.random.default_rng(seed)
    rows = rng.standard_normal((m, 4))
    holes = np.sort(rng.integers(0, m, 3))
    gappy = np.insert(rows, holes, np.nan, axis=0)
    one = change_points.of_subgroups(Subgroups(rows).statistics())
    other = change_points.of_subgroups(Subgroups(gappy).statistics())
    assert one is not None
    assert other is not None
    for a, b in ((one.mean, other.mean), (one.variance, other.variance)):
        assert a is not None
        assert b is not None
        assert b.index == a.index + int((holes <= a.index).sum())
        assert (b.statistic, b.p_value) == pytest.approx((a.statistic, a.p_value), rel=1e-9)


@few
@given(seeds, st.integers(12, 60))
def test_time_reversed_finds_the_same_step(seed: int, m: int) -> None:
    x = np.random.default_rng(seed).standard_normal(m)
    one, other = change_points.of_values(x), change_points.of_values(x[::-1])
    assert one is not None
    assert other is not None
    for a, b in ((one.mean, other.mean), (one.variance, other.variance)):
        assert a is not None
        assert b is not None
        assert (b.index, b.before, b.after) == pytest.approx(
            (m - a.index, a.after, a.before), rel=1e-9, abs=1e-12
        )
        assert b.p_value == pytest.approx(a.p_value, rel=1e-9)
