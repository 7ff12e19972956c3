"""Properties of the charts of structured processes: splits, shifts and scales, gaps."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.spc.capability.specification import Specification
from assignable.spc.charts import acceptance, between_within, residual, short_run, trend
from assignable.spc.charts.acceptance import AcceptanceOptions, AcceptancePlan
from assignable.spc.charts.between_within import BetweenWithinOptions
from assignable.spc.charts.residual import ResidualOptions
from assignable.spc.charts.short_run import PartData, PartTarget, ShortRunOptions
from assignable.spc.charts.trend import AdjustmentLimits, TrendData, TrendOptions
from assignable.spc.data import Individuals, Subgroups
from assignable.spc.rules import PUBLISHED

QUICK = settings(derandomize=True, deadline=None, max_examples=25)
RULES = PUBLISHED["nelson-1984"].rules
POINTS = 40
NAMES = ["A", "B", "C", "A"] * (POINTS // 4)
PARTS = tuple(PartTarget(name, target) for name, target in (("A", 1.0), ("B", -2.0), ("C", 4.0)))
Slice = Callable[[np.ndarray, int, int], Any]


def values(seed: int, *, subgroups: bool) -> np.ndarray:
    """Points with gaps and a shift, that depend a little on each other."""
    rng = np.random.default_rng(seed)
    level = np.convolve(rng.normal(0.0, 1.0, POINTS + 1), [1.0, 0.5], "valid")
    level[POINTS // 2 :] += 2.5
    found = level[:, None] + rng.normal(0.0, 1.0, (POINTS, 4)) if subgroups else level
    found[rng.random(POINTS) < 0.08] = np.nan
    if subgroups:
        found[rng.random((POINTS, 4)) < 0.05] = np.nan
    return found


def individuals(rows: np.ndarray, first: int, last: int) -> Individuals:
    return Individuals(rows[first:last])


def rows_of(rows: np.ndarray, first: int, last: int) -> Subgroups:
    return Subgroups(rows[first:last])


def fitted(chart: str, rows: np.ndarray) -> tuple[Any, Any, Slice]:
    """The limits on some rows, the verb that judges by them, and how rows become data."""
    kind: Slice = individuals if rows.ndim == 1 else rows_of
    whole = kind(rows, 0, len(rows))
    if chart == "between-within":
        return between_within.fit(whole, BetweenWithinOptions(rules=RULES)).limits, between_within.judge, kind
    if chart == "short-run":
        data = PartData(whole, NAMES)
        limits = short_run.fit(data, ShortRunOptions(PARTS, "standardised", rules=RULES)).limits
        return limits, short_run.judge, lambda r, a, b: PartData(kind(r, a, b), NAMES[a:b])
    if chart == "trend":
        limits_ = trend.fit(
            TrendData(whole), TrendOptions(rules=RULES, adjustment=AdjustmentLimits(-90.0, 90.0))
        ).limits
        return limits_, trend.judge, lambda r, a, b: TrendData(kind(r, a, b))
    if chart == "residual":
        found = residual.fit(Individuals(rows), ResidualOptions(order=2, rules=RULES))
        return found.limits, residual.judge, kind
    options = AcceptanceOptions(Specification(-9.0, 9.0), AcceptancePlan(0.001, 0.05, 0.05, 0.1))
    return acceptance.fit(whole, options).limits, acceptance.judge, kind


CASES = [
    ("between-within", True),
    ("short-run", False),
    ("short-run", True),
    ("trend", False),
    ("trend", True),
    ("residual", False),
    ("acceptance", True),
]


@pytest.mark.parametrize(("chart", "subgroups"), CASES)
@given(seed=st.integers(0, 500), cuts=st.sets(st.integers(1, POINTS - 1), max_size=6))
@QUICK
def test_any_split_gives_the_same_signals(chart: str, subgroups: bool, seed: int, cuts: set[int]) -> None:
    limits, judge, take = fitted(chart, values(seed, subgroups=subgroups))
    new = values(seed + 1000, subgroups=subgroups)
    whole = judge(limits, take(new, 0, POINTS), None)
    told = []
    carry = None
    ends = [*sorted(cuts), POINTS]
    for first, last in zip([0, *ends], ends, strict=False):
        part = judge(limits, take(new, first, last), carry)
        carry = part.carry
        for signal in part.signals:
            told.append((signal.panel, signal.rule, signal.index + first, signal.side, len(signal.points)))
    expected = [
        (signal.panel, signal.rule, signal.index, signal.side, len(signal.points)) for signal in whole.signals
    ]
    assert sorted(told, key=str) == sorted(expected, key=str)
    assert carry == whole.carry


@pytest.mark.parametrize(
    ("chart", "subgroups"), [case for case in CASES if case[0] in ("between-within", "trend", "residual")]
)
@given(
    seed=st.integers(0, 500),
    shift=st.sampled_from([0.0, 1e4, -3.7]),
    scale=st.sampled_from([1.0, 1e-6, 250.0]),
)
@QUICK
def test_limits_follow_shift_and_scale(
    chart: str, subgroups: bool, seed: int, shift: float, scale: float
) -> None:
    rows = values(seed, subgroups=subgroups)
    plain, judge, take = fitted(chart, rows)
    moved, _, _ = fitted(chart, scale * (rows + shift))
    size = scale * (abs(shift) + 1.0)
    first = judge(plain, take(rows, 0, POINTS), None)
    second = judge(moved, take(scale * (rows + shift), 0, POINTS), None)
    if chart == "residual":
        assert moved.coefficients == pytest.approx(plain.coefficients, rel=1e-6, abs=1e-8)
        assert moved.mean == pytest.approx(scale * (plain.mean + shift), abs=1e-8 * size)
        assert moved.sigma == pytest.approx(scale * plain.sigma, rel=1e-7)
        assert second.panels.residual.value == pytest.approx(
            scale * first.panels.residual.value, abs=1e-7 * size
        )
        return
    panel = "mean" if chart == "between-within" else "level"
    ours, theirs = getattr(first.panels, panel), getattr(second.panels, panel)
    for line in ("value", "centre", "lower", "upper"):
        assert getattr(theirs, line) == pytest.approx(scale * (getattr(ours, line) + shift), abs=1e-8 * size)


@given(seed=st.integers(0, 500), move=st.sampled_from([1.0, -50.0, 1e3]))
@QUICK
def test_targets_that_move_with_their_parts_change_nothing(seed: int, move: float) -> None:
    rows = values(seed, subgroups=True)
    moves = np.array([move if name == "B" else 0.0 for name in NAMES])
    moved = tuple(PartTarget(p.name, p.target + (move if p.name == "B" else 0.0)) for p in PARTS)
    one = short_run.fit(PartData(Subgroups(rows), NAMES), ShortRunOptions(PARTS))
    other = short_run.fit(PartData(Subgroups(rows + moves[:, None]), NAMES), ShortRunOptions(moved))
    assert other.limits.sigma == pytest.approx(one.limits.sigma, rel=1e-9)
    assert one.baseline is not None
    assert other.baseline is not None
    assert other.baseline.panels.level.value == pytest.approx(one.baseline.panels.level.value, abs=1e-9)


@given(seed=st.integers(0, 500), scale=st.sampled_from([1e-4, 3.0, 1e5]))
@QUICK
def test_acceptance_limits_scale_with_the_specification(seed: int, scale: float) -> None:
    rows = values(seed, subgroups=True)
    plan = AcceptancePlan(0.001, 0.05, 0.05, 0.1)
    one = acceptance.fit(Subgroups(rows), AcceptanceOptions(Specification(-9.0, 9.0), plan)).limits
    other = acceptance.fit(
        Subgroups(scale * rows), AcceptanceOptions(Specification(-9.0 * scale, 9.0 * scale), plan)
    ).limits
    assert other.sample_size == one.sample_size
    assert one.upper is not None
    assert other.upper is not None
    assert other.upper.control_limit == pytest.approx(scale * one.upper.control_limit, rel=1e-9)
    assert other.consumer_risk == pytest.approx(one.consumer_risk, rel=1e-9)
