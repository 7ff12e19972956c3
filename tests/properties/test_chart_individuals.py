"""What stays, whatever the data: the chart of single values."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import hypothesis.strategies as st
import numpy as np
import pytest
from hypothesis import assume, given, settings

from assignable.spc.charts import CHARTS
from assignable.spc.charts.common import LimitBasis
from assignable.spc.charts.individuals import IndividualsOptions
from assignable.spc.data import Individuals
from assignable.spc.rules import PUBLISHED

QUIET = settings(derandomize=True, deadline=None, max_examples=60)
RULES = PUBLISHED["nelson-1984"].rules
CHART = CHARTS["individuals"]
ESTIMATORS = st.sampled_from(["mean-moving-range", "median-moving-range"])
SPANS = st.integers(2, 4)


@st.composite
def series(draw: Any) -> np.ndarray:
    """Whole numbers, so that a shift by whole numbers is exact; some with gaps."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    values = np.rint(rng.normal(500.0, 20.0, draw(st.integers(12, 60))))
    values[rng.random(len(values)) < draw(st.sampled_from([0.0, 0.1]))] = np.nan
    present = ~np.isnan(values)
    runs = np.convolve(present, np.ones(4, dtype=int), "valid")
    assume((runs == 4).any())
    return values


def fit(values: np.ndarray, **options: Any) -> Any:
    return CHART.fit(Individuals(values), IndividualsOptions(**options))


def told(signals: Any, start: int = 0) -> list[tuple[Any, ...]]:
    return [
        (one.rule, one.panel, one.index + start, one.side, tuple(at + start for at in one.points))
        for one in signals
    ]


@QUIET
@given(
    values=series(), shift=st.integers(-400, 400), power=st.integers(-6, 6), estimator=ESTIMATORS, span=SPANS
)
def test_shift_and_scale(values: np.ndarray, shift: int, power: int, estimator: Any, span: int) -> None:
    unit = 2.0**power
    options: dict[str, Any] = {"sigma_estimator": estimator, "span": span, "rules": RULES}
    plain, moved = fit(values, **options), fit((values + shift) * unit, **options)
    assert moved.limits.centre == pytest.approx(
        (plain.limits.centre + shift) * unit, rel=1e-12, abs=1e-9 * unit
    )
    assert moved.limits.sigma == pytest.approx(plain.limits.sigma * unit, rel=1e-12)
    assert moved.limits.panels.moving_range.upper == pytest.approx(
        plain.limits.panels.moving_range.upper * unit, rel=1e-12
    )
    assert told(moved.baseline.signals) == told(plain.baseline.signals)


@QUIET
@given(values=series(), estimator=ESTIMATORS, span=SPANS)
def test_limits_know_no_direction_of_time(values: np.ndarray, estimator: Any, span: int) -> None:
    plain = fit(values, sigma_estimator=estimator, span=span).limits
    turned = fit(values[::-1].copy(), sigma_estimator=estimator, span=span).limits
    assert turned.centre == pytest.approx(plain.centre, rel=1e-14)
    assert turned.sigma == pytest.approx(plain.sigma, rel=1e-13)
    assert turned.baseline == plain.baseline


@QUIET
@given(values=series(), seed=st.integers(0, 2**32 - 1))
def test_the_centre_knows_no_order(values: np.ndarray, seed: int) -> None:
    turned = np.random.default_rng(seed).permutation(values)
    assume((np.convolve(~np.isnan(turned), np.ones(4, dtype=int), "valid") == 4).any())
    assert fit(turned).limits.centre == pytest.approx(fit(values).limits.centre, rel=1e-14)


@QUIET
@given(values=series(), cuts=st.lists(st.integers(1, 59), max_size=6), span=SPANS)
def test_any_split_gives_the_same_signals(values: np.ndarray, cuts: list[int], span: int) -> None:
    limits = fit(values, rules=RULES, span=span, basis=LimitBasis("sigma", 1.5, None)).limits
    whole = CHART.judge(limits, Individuals(values), None)
    edges = sorted({0, len(values), *(cut for cut in cuts if cut < len(values))})
    carry, signals, ranges = None, [], []
    for start, stop in pairwise(edges):
        part = CHART.judge(limits, Individuals(values[start:stop]), carry)
        carry = part.carry
        signals += told(part.signals, start)
        ranges += part.panels.moving_range.value.tolist()
    assert signals == told(whole.signals)
    assert ranges == whole.panels.moving_range.value.tolist()
    assert carry == whole.carry


@QUIET
@given(values=series(), estimator=ESTIMATORS, span=SPANS)
def test_limits_fed_back_find_the_baselines_own_signals(
    values: np.ndarray, estimator: Any, span: int
) -> None:
    basis = LimitBasis("sigma", 1.5, None)
    found = fit(values, sigma_estimator=estimator, span=span, rules=RULES, basis=basis)
    again = CHART.judge(found.limits, Individuals(values), None)
    assert told(again.signals) == told(found.baseline.signals)
    assert again.verdict == found.baseline.verdict
    for name in ("value", "moving_range"):
        one, other = getattr(found.baseline.panels, name), getattr(again.panels, name)
        for member in ("index", "value", "centre", "lower", "upper"):
            assert getattr(other, member).tolist() == getattr(one, member).tolist()
