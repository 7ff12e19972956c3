"""What stays, whatever the data: charts of subgroups."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import hypothesis.strategies as st
import numpy as np
import pytest
from hypothesis import assume, given, settings

from assignable.spc.charts import CHARTS
from assignable.spc.charts.common import LimitBasis
from assignable.spc.charts.subgroups import SubgroupOptions
from assignable.spc.data import Subgroups
from assignable.spc.rules import PUBLISHED

QUIET = settings(derandomize=True, deadline=None, max_examples=40)
BOTH = pytest.mark.parametrize(("chart", "panel"), [("xbar-r", "range"), ("xbar-s", "sd")])
RULES = PUBLISHED["nelson-1984"].rules
ESTIMATORS = st.sampled_from(["mean-range", "mean-sd", "pooled-sd", "median-range"])
NAN = float("nan")


@st.composite
def tables(draw: Any) -> np.ndarray:
    """Whole numbers, so that a shift by whole numbers is exact; with missing pieces and gaps."""
    rows, columns = draw(st.integers(4, 25)), draw(st.integers(2, 7))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    table = np.rint(rng.normal(500.0, 20.0, (rows, columns)))
    table[rng.random((rows, columns)) < draw(st.sampled_from([0.0, 0.2]))] = NAN
    if draw(st.booleans()):
        table[rng.integers(rows)] = NAN
    kept = (~np.isnan(table)).sum(axis=1)
    spread = np.nanmax(np.where(np.isnan(table), -np.inf, table), axis=1) - np.nanmin(
        np.where(np.isnan(table), np.inf, table), axis=1
    )
    assume((kept > 1).sum() >= 3)
    assume((np.where(kept > 1, spread, 0.0) > 0).sum() > (kept > 1).sum() / 2)
    return table


def fit(chart: str, table: np.ndarray, estimator: str = "pooled-sd", **options: Any) -> Any:
    return CHARTS[chart].fit(Subgroups(table), SubgroupOptions(estimator, **options))


def told(signals: Any, start: int = 0) -> list[tuple[Any, ...]]:
    return [
        (one.rule, one.panel, one.index + start, one.side, tuple(at + start for at in one.points))
        for one in signals
    ]


@BOTH
@QUIET
@given(table=tables(), shift=st.integers(-400, 400), power=st.integers(-6, 6), estimator=ESTIMATORS)
def test_shift_and_scale(
    chart: str, panel: str, table: np.ndarray, shift: int, power: int, estimator: str
) -> None:
    """Another zero and another unit (here by powers of two, which are exact) move every line with the data."""
    unit = 2.0**power
    plain = fit(chart, table, estimator, rules=RULES)
    moved = fit(chart, (table + shift) * unit, estimator, rules=RULES)
    assert moved.limits.centre == pytest.approx(
        (plain.limits.centre + shift) * unit, rel=1e-12, abs=1e-9 * unit
    )
    assert moved.limits.sigma == pytest.approx(plain.limits.sigma * unit, rel=1e-11)
    one, other = getattr(plain.limits.panels, panel), getattr(moved.limits.panels, panel)
    assert other.upper == pytest.approx(one.upper * unit, rel=1e-11)
    assert (other.lower is None) == (one.lower is None)
    assert told(moved.baseline.signals) == told(plain.baseline.signals)


@BOTH
@QUIET
@given(table=tables(), seed=st.integers(0, 2**32 - 1), estimator=ESTIMATORS)
def test_pieces_of_a_subgroup_have_no_order(
    chart: str, panel: str, table: np.ndarray, seed: int, estimator: str
) -> None:
    plain = fit(chart, table, estimator)
    turned = fit(chart, np.random.default_rng(seed).permuted(table, axis=1), estimator)
    assert turned.limits.centre == pytest.approx(plain.limits.centre, rel=1e-14)
    assert turned.limits.sigma == pytest.approx(plain.limits.sigma, rel=1e-12)
    for name in ("mean", panel):
        one, other = getattr(plain.baseline.panels, name), getattr(turned.baseline.panels, name)
        assert other.value.tolist() == pytest.approx(one.value.tolist(), rel=1e-12)


@BOTH
@QUIET
@given(table=tables(), seed=st.integers(0, 2**32 - 1), estimator=ESTIMATORS)
def test_limits_know_no_order_of_subgroups(
    chart: str, panel: str, table: np.ndarray, seed: int, estimator: str
) -> None:
    plain = fit(chart, table, estimator).limits
    turned = fit(chart, np.random.default_rng(seed).permutation(table, axis=0), estimator).limits
    assert turned.centre == pytest.approx(plain.centre, rel=1e-14)
    assert turned.sigma == pytest.approx(plain.sigma, rel=1e-12)
    assert turned.baseline == plain.baseline


@BOTH
@QUIET
@given(table=tables(), cuts=st.lists(st.integers(1, 24), max_size=6), probability=st.booleans())
def test_any_split_gives_the_same_signals(
    chart: str, panel: str, table: np.ndarray, cuts: list[int], probability: bool
) -> None:
    basis = LimitBasis("probability", None, 0.05) if probability else LimitBasis("sigma", 1.5, None)
    limits = fit(chart, table, rules=RULES, basis=basis).limits
    judge = CHARTS[chart].judge
    whole = judge(limits, Subgroups(table), None)
    edges = sorted({0, len(table), *(cut for cut in cuts if cut < len(table))})
    carry, signals, values = None, [], []
    for start, stop in pairwise(edges):
        part = judge(limits, Subgroups(table[start:stop]), carry)
        carry = part.carry
        signals += told(part.signals, start)
        values += getattr(part.panels, panel).value.tolist()
    assert signals == told(whole.signals)
    assert values == getattr(whole.panels, panel).value.tolist()
    assert carry == whole.carry


@BOTH
@QUIET
@given(table=tables(), estimator=ESTIMATORS)
def test_limits_fed_back_find_the_baselines_own_signals(
    chart: str, panel: str, table: np.ndarray, estimator: str
) -> None:
    found = fit(chart, table, estimator, rules=RULES, basis=LimitBasis("sigma", 1.5, None))
    again = CHARTS[chart].judge(found.limits, Subgroups(table), None)
    assert told(again.signals) == told(found.baseline.signals)
    assert again.verdict == found.baseline.verdict
    for name in ("mean", panel):
        one, other = getattr(found.baseline.panels, name), getattr(again.panels, name)
        for member in ("index", "value", "centre", "lower", "upper"):
            assert getattr(other, member).tolist() == getattr(one, member).tolist()
