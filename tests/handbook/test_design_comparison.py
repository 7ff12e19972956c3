"""Charts side by side: equal rates, run lengths from their own modules, and a simulated chart with rules."""

from __future__ import annotations

import math
import time

import numpy as np
import pytest
from scipy.special import ndtr

from assignable.spc.design.comparison import (
    SIMPLER_IF_WITHIN,
    ChartCandidate,
    _rules_at,
    _scaled_rules,
    _steady_with_rules,
    compare,
)
from assignable.spc.errors import UnusableParameter
from assignable.spc.rules import PUBLISHED
from assignable.spc.runlength import memory, shewhart


@pytest.fixture(scope="module")
def one_sigma() -> tuple[ChartCandidate, ...]:
    return compare(1.0, pieces_per_hour=5.0, hours_between_false_alarms=370.0).candidates


def test_false_alarms_and_effort_are_alike(one_sigma: tuple[ChartCandidate, ...]) -> None:
    assert len(one_sigma) == 8
    for one in one_sigma:
        assert one.hours_between_false_alarms == pytest.approx(370.0, rel=1e-8)
        assert one.in_control_arl * one.interval_hours == pytest.approx(370.0, rel=1e-8)
        assert one.size / one.interval_hours == pytest.approx(5.0, rel=1e-14)
        assert one.ats_hours == pytest.approx(one.interval_hours * (one.steady_state_arl - 0.5), rel=1e-14)
    times = [one.ats_hours for one in one_sigma]
    assert times == sorted(times)
    assert [one.slower_than_quickest for one in one_sigma] == pytest.approx([t / times[0] - 1 for t in times])


def test_run_lengths_are_those_of_the_charts(one_sigma: tuple[ChartCandidate, ...]) -> None:
    for one in one_sigma:
        d = math.sqrt(one.size)
        for at in (1.0, *(other.shift for other in one.other_shifts)):
            x = at * d
            if one.chart == "mean":
                assert one.multiple is not None
                expected = 1 / float(ndtr(x - one.multiple) + ndtr(-x - one.multiple))
            elif one.chart == "ewma":
                assert one.smoothing is not None
                assert one.limit is not None
                found = memory.ewma(smoothing=one.smoothing, limit=one.limit, shift=x)
                assert found.steady_state_arl is not None
                expected = found.steady_state_arl
            elif one.chart == "cusum":
                assert one.reference is not None
                assert one.decision is not None
                both = memory.cusum(reference=one.reference, decision=one.decision, shift=x)
                assert both.steady_state_arl is not None
                expected = both.steady_state_arl
            else:
                continue
            row = next(other for other in one.other_shifts if other.shift == at)
            assert row.steady_state_arl == pytest.approx(expected, rel=1e-9)
    assert {one.chart for one in one_sigma} == {"mean", "mean-with-rules", "ewma", "cusum"}


def test_lucas_and_saccucci() -> None:
    # Lucas & Saccucci (1990): at an in-control run length near 500 and a shift of 1 sigma, the best EWMA needs
    # about 10 samples and the chart of single values about 54 (1/α of 3.09 sigma): from memory.
    found = compare(
        1.0, pieces_per_hour=1.0, hours_between_false_alarms=500.0, sizes=(1,), kinds=("mean", "ewma")
    )
    by_kind = {one.chart: one for one in found.candidates}
    assert by_kind["ewma"].arl == pytest.approx(10.1, abs=0.3)
    assert by_kind["mean"].arl == pytest.approx(54.6, abs=0.2)


@pytest.mark.parametrize("target", [20.0, 92.0, 127.0, 128.0, 370.0, 3000.0])
def test_widened_rules_meet_the_rate(target: float) -> None:
    scale, run = _scaled_rules(target)
    assert shewhart(_rules_at(scale, run), lower=-3 * scale, upper=3 * scale).arl == pytest.approx(
        target, rel=1e-9
    )
    assert 2**run - 1 >= 2 * target


def test_the_published_rules_are_those_at_their_own_places() -> None:
    # 91.75, Champ & Woodall (1987): checked in print.
    assert _rules_at(1.0, 8) == PUBLISHED["western-electric-1956"].rules
    scale, run = _scaled_rules(91.75077312834865)
    assert (scale, run) == (pytest.approx(1.0, abs=1e-9), 8)


def _signals(history: np.ndarray, scale: float, run: int) -> np.ndarray:
    """Whether the last of the points (paths, run) signals, written out from the rules' words."""
    last = history[:, -1]
    found = np.abs(last) > 3 * scale
    for side in (1.0, -1.0):
        z = side * history
        found |= (z[:, -1] > 2 * scale) & ((z[:, -3:] > 2 * scale).sum(axis=1) >= 2)
        found |= (z[:, -1] > scale) & ((z[:, -5:] > scale).sum(axis=1) >= 4)
        found |= (z[:, -run:] > 0).all(axis=1)
    return found


@pytest.mark.parametrize(("shift", "target"), [(0.5, 92.0), (1.0, 370.0), (2.0, 370.0)])
def test_steady_state_with_rules_by_simulation(shift: float, target: float) -> None:
    scale, run = _scaled_rules(target)
    rng = np.random.default_rng(1956)
    paths = 40_000
    # Zeros are on neither side and beyond nothing: a chart without history.
    history = np.zeros((paths, run))
    for _ in range(60):
        history = np.column_stack((history[:, 1:], rng.standard_normal(len(history))))
        history = history[~_signals(history, scale, run)]
    lengths = np.zeros(len(history))
    alive = np.arange(len(history))
    step = 0
    while len(alive):
        step += 1
        history = np.column_stack((history[:, 1:], rng.standard_normal(len(alive)) + shift))
        signalled = _signals(history, scale, run)
        lengths[alive[signalled]] = step
        alive, history = alive[~signalled], history[~signalled]
    (expected,) = _steady_with_rules(_rules_at(scale, run), 3 * scale, (shift,))
    assert abs(lengths.mean() - expected) < 4 * lengths.std() / math.sqrt(len(lengths))


def test_steady_state_without_a_shift_is_geometric() -> None:
    # The conditional law that stands still loses the same share at each point, so its mean is 1/share; the
    # start without history adds to that a little.
    scale, run = _scaled_rules(370.0)
    rules = _rules_at(scale, run)
    (steady,) = _steady_with_rules(rules, 3 * scale, (0.0,))
    fresh = shewhart(rules, lower=-3 * scale, upper=3 * scale)
    # An exponential tail: the standard deviation of the fresh chart's run length is that of the tail, all but.
    assert math.sqrt(1 - 1 / steady) * steady == pytest.approx(fresh.sd, rel=1e-3)
    assert fresh.arl - 10 < steady < fresh.arl


def test_recommendations() -> None:
    # A large shift: the plain chart is as good as any, and is taken.
    large = compare(2.0, pieces_per_hour=5.0, hours_between_false_alarms=370.0, sizes=(5,))
    taken = large.candidates[large.recommended]
    assert taken.chart == "mean"
    assert taken.slower_than_quickest <= SIMPLER_IF_WITHIN
    assert taken.description in large.recommendation
    # A small one: only memory finds it soon.
    small = compare(-0.5, pieces_per_hour=5.0, hours_between_false_alarms=370.0, sizes=(5,))
    taken = small.candidates[small.recommended]
    assert small.shift == 0.5
    assert taken.chart in ("ewma", "cusum")
    plain = next(one for one in small.candidates if one.chart == "mean")
    assert plain.ats_hours > 3 * taken.ats_hours
    assert any("without memory needs" in reason for reason in small.reasons)
    assert all(reason.endswith(".") for reason in (*small.reasons, *large.reasons, small.recommendation))
    alone = compare(1.0, pieces_per_hour=5.0, hours_between_false_alarms=370.0, sizes=(5,), kinds=("mean",))
    assert alone.recommended == 0
    assert len(alone.reasons) == 1


def test_refusals() -> None:
    for call, where in (
        (lambda: compare(1.0, pieces_per_hour=0.0, hours_between_false_alarms=370), ("pieces_per_hour",)),
        (lambda: compare(0.1, pieces_per_hour=5.0, hours_between_false_alarms=370), ("shift",)),
        (lambda: compare(math.nan, pieces_per_hour=5.0, hours_between_false_alarms=370), ("shift",)),
        (
            lambda: compare(1.0, pieces_per_hour=5.0, hours_between_false_alarms=1e6),
            ("hours_between_false_alarms",),
        ),
        (lambda: compare(1.0, pieces_per_hour=5.0, hours_between_false_alarms=370, sizes=()), ("sizes",)),
        (lambda: compare(1.0, pieces_per_hour=5.0, hours_between_false_alarms=370, sizes=(5, 5)), ("sizes",)),
        (
            lambda: compare(1.0, pieces_per_hour=5.0, hours_between_false_alarms=370, sizes=(5, 0)),
            ("sizes", 1),
        ),
        (lambda: compare(1.0, pieces_per_hour=5.0, hours_between_false_alarms=370, kinds=()), ("kinds",)),
    ):
        with pytest.raises(UnusableParameter) as caught:
            call()
        assert caught.value.faults[0].where == where


def test_it_is_quick() -> None:
    compare(1.0, pieces_per_hour=5.0, hours_between_false_alarms=370.0)
    begun = time.process_time()
    compare(1.1, pieces_per_hour=5.0, hours_between_false_alarms=371.0)
    assert time.process_time() - begun < 1.0
