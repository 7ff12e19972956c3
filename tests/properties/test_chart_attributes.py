"""What holds for every chart of counts and of rare events: splits, frozen limits fed back, order."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.spc.charts import CHARTS
from assignable.spc.charts.attributes import AttributeOptions
from assignable.spc.charts.common import AT_THREE_SIGMA, Exclusion, LimitBasis
from assignable.spc.charts.dispersed import DispersedOptions
from assignable.spc.charts.rare import OpportunityOptions, TimeOptions
from assignable.spc.data import Counts, Intervals
from assignable.spc.rules import PUBLISHED

SETTINGS = settings(derandomize=True, deadline=None, max_examples=20)
RULES = PUBLISHED["western-electric-1956"].rules
ALL = ("p", "np", "c", "u", "p-prime", "u-prime", "g", "t")
ONE_SIZE = ("np", "c")


def options(chart: str, **more: Any) -> Any:
    if chart in ("p-prime", "u-prime"):
        more.pop("basis", None)
        return DispersedOptions(rules=RULES, **more)
    if chart == "g":
        return OpportunityOptions(rules=RULES, **more)
    if chart == "t":
        more.pop("basis", None)
        return TimeOptions(rules=RULES, **more)
    return AttributeOptions(rules=RULES, **more)


def cut(data: Any, start: int, end: int) -> Any:
    if isinstance(data, Intervals):
        return Intervals(data.values[start:end])
    return Counts(data.counts[start:end], None if data.inspected is None else data.inspected[start:end])


def reordered(data: Any, order: np.ndarray) -> Any:
    if isinstance(data, Intervals):
        return Intervals(data.values[order])
    return Counts(data.counts[order], None if data.inspected is None else data.inspected[order])


def made(chart: str, seed: int, m: int, *, gaps: float = 0.08, drift: float = 1.0) -> Any:
    """Data of a chart, from a process that changes by ``drift``."""
    rng = np.random.default_rng(seed)
    factor = np.where(np.arange(m) < m // 2, 1.0, drift)
    if chart == "g":
        values = rng.geometric(np.minimum(0.05 * factor, 0.9), m) - 1.0
    elif chart == "t":
        values = rng.exponential(30.0 / factor, m)
    else:
        sizes = np.full(m, 80.0) if chart in ONE_SIZE else rng.integers(40, 200, m).astype(np.float64)
        if chart in ("p", "np", "p-prime"):
            values = rng.binomial(sizes.astype(int), np.minimum(0.1 * factor, 0.9)).astype(np.float64)
        else:
            values = rng.poisson(0.1 * sizes * factor).astype(np.float64)
    values = np.where(rng.random(m) < gaps, np.nan, values)
    if np.count_nonzero(values == values) < 3:
        values[:3] = (3.0, 4.0, 5.0)
    if chart in ("g", "t"):
        return Intervals(values)
    return Counts(values, sizes)


def told(signals: Any, offset: int = 0) -> list[Any]:
    return [
        replace(
            signal,
            index=signal.index + offset,
            points=tuple(point + offset for point in signal.points),
        )
        for signal in signals
    ]


@pytest.mark.parametrize("chart", ALL)
@given(seed=st.integers(0, 2**32 - 1), cuts=st.lists(st.integers(1, 59), max_size=20))
@SETTINGS
def test_any_split_gives_the_same_signals(chart: str, seed: int, cuts: list[int]) -> None:
    limits = CHARTS[chart].fit(made(chart, 5, 40, gaps=0.0), options(chart)).limits
    data = made(chart, seed, 60, drift=1.6, gaps=0.3)
    whole = CHARTS[chart].judge(limits, data, None)
    carry, found, plotted = None, [], []
    edges = [0, *sorted(set(cuts)), 60]
    for start, end in pairwise(edges):
        piece = CHARTS[chart].judge(limits, cut(data, start, end), carry)
        carry = piece.carry
        found += told(piece.signals, start)
        panel = getattr(piece.panels, piece.panels.__slots__[0])
        plotted += panel.value.tolist()
    assert found == list(whole.signals)
    assert carry == whole.carry
    assert plotted == getattr(whole.panels, whole.panels.__slots__[0]).value.tolist()


@pytest.mark.parametrize("chart", ALL)
@given(seed=st.integers(0, 2**32 - 1), probability=st.booleans())
@SETTINGS
def test_limits_fed_back_find_the_signals_of_their_baseline(chart: str, seed: int, probability: bool) -> None:
    data = made(chart, seed, 40, drift=2.0)
    basis = LimitBasis("probability", None, 0.02) if probability else AT_THREE_SIGMA
    found = CHARTS[chart].fit(data, options(chart, basis=basis))
    judged = CHARTS[chart].judge(found.limits, data, None)
    assert judged.signals == found.baseline.signals
    assert judged.verdict == found.baseline.verdict
    panel = found.baseline.panels.__slots__[0]
    for line in ("index", "value", "centre", "lower", "upper"):
        ours = getattr(getattr(found.baseline.panels, panel), line)
        theirs = getattr(getattr(judged.panels, panel), line)
        assert ours.tolist() == theirs.tolist()


@pytest.mark.parametrize("chart", ALL)
@given(seed=st.integers(0, 2**32 - 1))
@SETTINGS
def test_the_mean_does_not_depend_on_the_order(chart: str, seed: int) -> None:
    data = made(chart, seed, 30)
    order = np.random.default_rng(seed).permutation(30)
    one = CHARTS[chart].fit(data, options(chart)).limits
    other = CHARTS[chart].fit(reordered(data, order), options(chart)).limits
    assert other.mean == pytest.approx(one.mean, rel=1e-13)
    if chart in ("p-prime", "u-prime"):
        assert other.sigma_z != one.sigma_z  # moving ranges do


@pytest.mark.parametrize("chart", ALL)
@given(seed=st.integers(0, 2**32 - 1), at=st.integers(0, 29))
@SETTINGS
def test_an_excluded_point_counts_as_a_gap(chart: str, seed: int, at: int) -> None:
    data = made(chart, seed, 30, gaps=0.0)
    values = np.array(data.values if chart in ("g", "t") else data.counts)
    values[at] = np.nan
    without = Intervals(values) if chart in ("g", "t") else Counts(values, data.inspected)
    left_out = CHARTS[chart].fit(data, options(chart, exclude=(Exclusion(at, "known cause"),)))
    missing = CHARTS[chart].fit(without, options(chart))
    assert replace(left_out.limits, baseline=None) == replace(missing.limits, baseline=None)
    for each in left_out.diagnostics.__slots__:
        assert getattr(left_out.diagnostics, each) == getattr(missing.diagnostics, each)
    assert left_out.baseline.signals == missing.baseline.signals


@given(seed=st.integers(0, 2**32 - 1), power=st.integers(-60, 60))
@SETTINGS
def test_times_in_another_unit(seed: int, power: int) -> None:
    data = made("t", seed, 30)
    unit = 2.0**power
    for distribution in ("exponential", "weibull"):
        ours = TimeOptions(distribution, rules=RULES)  # type: ignore[arg-type]
        one = CHARTS["t"].fit(data, ours)
        other = CHARTS["t"].fit(Intervals(data.values * unit), ours)
        assert other.limits.mean == pytest.approx(one.limits.mean * unit, rel=1e-12)
        assert other.limits.shape == pytest.approx(one.limits.shape, rel=1e-11)
        assert other.baseline.signals == one.baseline.signals
        assert math.isclose(
            other.limits.panels.interval.upper, one.limits.panels.interval.upper * unit, rel_tol=1e-11
        )


@given(seed=st.integers(0, 2**32 - 1))
@SETTINGS
def test_the_start_of_the_count_shifts_everything(seed: int) -> None:
    data = made("g", seed, 30)
    for basis in (AT_THREE_SIGMA, LimitBasis("probability", None, 0.02)):
        one = CHARTS["g"].fit(data, OpportunityOptions(basis, rules=RULES))
        other = CHARTS["g"].fit(
            Intervals(data.values + 1), OpportunityOptions(basis, starts_at=1, rules=RULES)
        )
        assert other.limits.mean == pytest.approx(one.limits.mean + 1, rel=1e-14)
        assert other.limits.event_probability == one.limits.event_probability
        assert other.limits.panels.interval.upper == pytest.approx(
            one.limits.panels.interval.upper + 1, rel=1e-13
        )
        assert other.performance.in_control_arl == pytest.approx(one.performance.in_control_arl, rel=1e-9)
        assert other.baseline.signals == one.baseline.signals
