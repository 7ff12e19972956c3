"""Lines around the part of a surface that is at or below a level."""

from __future__ import annotations

import numpy as np
import pytest

from assignable.pictures.contours import Loop, region


def area(loop: Loop) -> float:
    """With its sign: positive where the inside lies on the left."""
    x, y = np.array(loop).T
    return float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y) / 2)


X, Y = np.linspace(-2, 2, 81), np.linspace(-1.5, 1.5, 61)
RADIUS = np.hypot(X[None, :], Y[:, None])


def test_a_circle() -> None:
    (loop,) = region(X, Y, RADIUS, 1.0)
    assert np.abs(np.hypot(*np.array(loop).T) - 1).max() < 2e-3
    assert area(loop) == pytest.approx(np.pi, rel=2e-3)


def test_a_ring_has_a_hole_that_turns_the_other_way() -> None:
    loops = region(X, Y, np.abs(RADIUS - 1), 0.25)
    assert sorted(np.sign(area(one)) for one in loops) == [-1, 1]
    assert sum(area(one) for one in loops) == pytest.approx(np.pi * (1.25**2 - 0.75**2), rel=5e-3)


def test_at_the_edge_of_the_grid_the_lines_follow_it() -> None:
    (loop,) = region(X, Y, RADIUS, 1.8)
    assert min(y for _, y in loop) == -1.5
    assert max(y for _, y in loop) == 1.5
    half = np.arccos(1.5 / 1.8)
    segment = 1.8**2 * (half - np.sin(2 * half) / 2)
    assert area(loop) == pytest.approx(np.pi * 1.8**2 - 2 * segment, rel=3e-3)


def test_all_or_nothing_below() -> None:
    (loop,) = region(X, Y, RADIUS, 9.0)
    assert area(loop) == pytest.approx(4 * 3)
    assert region(X, Y, RADIUS, -1.0) == []


def test_two_valleys_that_touch_at_a_corner_are_closed_lines() -> None:
    loops = region(np.arange(2.0), np.arange(2.0), np.array([[0.0, 1.0], [1.0, 0.0]]), 0.5)
    assert len(loops) == 2
    assert [area(one) for one in loops] == pytest.approx([0.125, 0.125])


def test_a_noisy_surface_gives_closed_lines_of_the_right_area() -> None:
    surface = np.random.default_rng(3).normal(size=(40, 50))
    loops = region(np.arange(50.0), np.arange(40.0), surface, 0.0)
    assert all(len(one) >= 3 for one in loops)
    share = sum(area(one) for one in loops) / (49 * 39)
    assert 0.4 < share < 0.6
