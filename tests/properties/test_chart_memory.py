"""What no chart with memory may depend on: where the data is split, the unit, the sign."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.spc.charts import CHARTS, cusum, ewma, moving_average
from assignable.spc.charts._memory import Source
from assignable.spc.charts.common import Standards
from assignable.spc.charts.cusum import CusumOptions
from assignable.spc.charts.ewma import EwmaOptions
from assignable.spc.charts.moving_average import MovingAverageOptions
from assignable.spc.data import Individuals, Subgroups, SubgroupSummary

SETTINGS = settings(derandomize=True, deadline=None, max_examples=15)

FITS: dict[str, Callable[[Any, Source], Any]] = {
    "ewma": lambda data, source: ewma.fit(data, EwmaOptions(source, 0.15, 2.2)),
    "ewma-asymptotic": lambda data, source: ewma.fit(data, EwmaOptions(source, 0.4, 2.0, "asymptotic")),
    "cusum": lambda data, source: cusum.fit(data, CusumOptions(source, 0.3, 3.0, spread=True)),
    "cusum-head-start": lambda data, source: cusum.fit(data, CusumOptions(source, 0.5, 2.5, 0.5)),
    "cusum-restart": lambda data, source: cusum.fit(
        data, CusumOptions(source, 0.25, 2.0, 0.4, after_signal="restart", spread=True)
    ),
    "moving-average": lambda data, source: moving_average.fit(data, MovingAverageOptions(source, 5, 2.0)),
}


def chart_of(name: str) -> Any:
    return CHARTS["moving-average" if name == "moving-average" else name.split("-")[0]]


@dataclass(frozen=True)
class Case:
    """Subgroups with gaps, or single values; ``part`` cuts some rows out as a caller would post them."""

    values: np.ndarray
    form: str

    def part(self, start: int, stop: int) -> Any:
        rows = self.values[start:stop]
        if self.form == "singles":
            return Individuals(rows[:, 0])
        if self.form == "subgroups":
            return Subgroups(rows)
        statistics = Subgroups(rows).statistics()
        return SubgroupSummary(statistics.mean, statistics.size, statistics.range)

    @property
    def whole(self) -> Any:
        return self.part(0, len(self.values))


@st.composite
def cases(draw: st.DrawFn) -> Case:
    form = draw(st.sampled_from(["singles", "subgroups", "summary"]))
    m, n = draw(st.integers(3, 200)), 1 if form == "singles" else draw(st.integers(2, 7))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    values = rng.standard_normal((m, n)) + 1.5 * np.repeat(rng.standard_normal(5), -(-m // 5))[:m, None]
    values = np.round(values, draw(st.sampled_from([1, 12])))
    values[rng.random((m, n)) < draw(st.sampled_from([0.0, 0.1, 0.6]))] = np.nan
    return Case(values, form)


STANDARDS = Source(standards=Standards(0.1, 1.1))


@pytest.mark.parametrize("name", list(FITS))
@SETTINGS
@given(cases(), st.lists(st.integers(1, 60), max_size=60))
def test_a_split_anywhere_changes_no_signal(name: str, case: Case, lengths: list[int]) -> None:
    chart, limits = chart_of(name), FITS[name](None, STANDARDS).limits
    limits = replace(limits, subgroup_size=None)
    whole = chart.judge(limits, case.whole, None)
    start, carry, signals, values = 0, None, [], []
    shifts = []
    while start < len(case.values):
        length = lengths.pop() if lengths else len(case.values)
        part = chart.judge(limits, case.part(start, start + length), carry)
        signals += [
            replace(s, index=s.index + start, points=tuple(p + start for p in s.points)) for s in part.signals
        ]
        if part.details is not None:
            shifts += [replace(s, index=s.index + start, since=s.since + start) for s in part.details.shifts]
        values += [
            panel.value for panel in (getattr(part.panels, own) for own in chart.panels) if panel is not None
        ]
        carry, start = part.carry, start + length
    assert signals == list(whole.signals)
    assert carry.points == len(case.values)
    if whole.details is not None:
        for one, two in zip(shifts, whole.details.shifts, strict=True):
            assert (one.panel, one.index, one.since, one.points) == (
                two.panel,
                two.index,
                two.since,
                two.points,
            )
            assert (one.mean or one.sigma) == pytest.approx(two.mean or two.sigma, rel=1e-12)
    of_whole = [getattr(whole.panels, own) for own in chart.panels]
    of_whole = [panel.value for panel in of_whole if panel is not None]
    for at, expected in enumerate(of_whole):
        joined = np.concatenate(values[at :: len(of_whole)])
        if case.form == "singles":
            # Single values pass through the same arithmetic whatever the split: not a bit differs.
            assert joined.tolist() == expected.tolist()
        else:
            np.testing.assert_allclose(joined, expected, rtol=1e-9, atol=1e-12)


def signs(found: Any) -> list[tuple[str, int, str | None]]:
    return [(signal.panel, signal.index, signal.side) for signal in found.signals]


@pytest.mark.parametrize("name", list(FITS))
@SETTINGS
@given(cases(), st.floats(-1e3, 1e3), st.floats(1e-3, 1e6))
def test_shift_and_scale(name: str, case: Case, shift: float, scale: float) -> None:
    fit = FITS[name]
    plain = fit(case.whole, STANDARDS)
    moved = fit(
        Case(case.values * scale + shift * scale, case.form).whole,
        Source(standards=Standards((0.1 + shift) * scale, 1.1 * scale)),
    )
    assert plain.baseline is not None
    assert signs(plain.baseline) == signs(moved.baseline)
    level = "ewma" if "ewma" in name else "average" if name == "moving-average" else None
    if level is not None:
        one, two = getattr(plain.baseline.panels, level), getattr(moved.baseline.panels, level)
        for line in ("value", "lower", "upper"):
            np.testing.assert_allclose(
                getattr(two, line), (getattr(one, line) + shift) * scale, rtol=1e-9, atol=1e-9 * scale
            )
        return
    np.testing.assert_allclose(
        moved.baseline.panels.upper.value, plain.baseline.panels.upper.value, rtol=1e-6, atol=1e-8
    )
    for one, two in zip(plain.baseline.details.shifts, moved.baseline.details.shifts, strict=True):
        assert (one.since, one.points) == (two.since, two.points)
        if one.sigma is not None:
            assert two.sigma == pytest.approx(one.sigma * scale, rel=1e-6, abs=1e-6 * scale)
        else:
            assert two.mean == pytest.approx((one.mean + shift) * scale, rel=1e-6, abs=1e-6 * scale)


@pytest.mark.parametrize("name", list(FITS))
@SETTINGS
@given(cases())
def test_reflection_swaps_the_sides(name: str, case: Case) -> None:
    fit = FITS[name]
    plain = fit(case.whole, STANDARDS).baseline
    turned = fit(Case(-case.values, case.form).whole, Source(standards=Standards(-0.1, 1.1))).baseline
    other = {"above": "below", "below": "above", "upper": "lower", "lower": "upper"}
    expected = sorted(
        (panel, index, side)
        if panel.startswith("spread")
        else (other.get(panel, panel), index, other[str(side)])
        for panel, index, side in signs(plain)
    )
    assert sorted(signs(turned)) == expected
    if "cusum" in name:
        assert turned.panels.lower.value.tolist() == (0.0 - plain.panels.upper.value).tolist()


@pytest.mark.parametrize("name", list(FITS))
@SETTINGS
@given(cases())
def test_a_gap_adds_nothing_and_keeps_its_place(name: str, case: Case) -> None:
    fit = FITS[name]
    spaced = np.full((2 * len(case.values), case.values.shape[1]), np.nan)
    spaced[::2] = case.values
    plain, apart = fit(case.whole, STANDARDS).baseline, fit(Case(spaced, case.form).whole, STANDARDS).baseline
    assert signs(apart) == [(panel, 2 * index, side) for panel, index, side in signs(plain)]
    for own in chart_of(name).panels:
        one, two = getattr(plain.panels, own), getattr(apart.panels, own)
        if one is not None:
            np.testing.assert_allclose(one.value, two.value, rtol=1e-12, atol=1e-12)
            assert two.index.tolist() == (2 * one.index).tolist()


@SETTINGS
@given(cases())
def test_more_out_of_line_is_never_quieter(case: Case) -> None:
    """A larger decision interval signals at a subset of the points; so does a wider EWMA limit."""
    near, far = (
        {(s.panel, s.index) for s in cusum.fit(case.whole, CusumOptions(STANDARDS, 0.4, h)).baseline.signals}  # type: ignore[union-attr]
        for h in (2.0, 3.0)
    )
    assert far <= near
    near, far = (
        {s.index for s in ewma.fit(case.whole, EwmaOptions(STANDARDS, 0.3, limit)).baseline.signals}  # type: ignore[union-attr]
        for limit in (2.0, 3.0)
    )
    assert far <= near
