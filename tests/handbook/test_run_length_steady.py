"""Run lengths after long operation in control, and the laws of moving averages and smoothed vectors.

Second methods: dense eigenvectors of the same chain, the radial integral equation in control, the limiting
hazard; simulations within four standard errors; limiting cases.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
import scipy

from assignable.spc.charts.counts import count_law
from assignable.spc.charts.lattice import run_law, steady_run_law
from assignable.spc.rules import LIMIT, PUBLISHED, Rule, Track, detect
from assignable.spc.runlength import integral, mewma, moving, of_rules, shewhart, steady_state_arl
from assignable.spc.runlength.automaton import compile_watches, watches

WESTERN_ELECTRIC = PUBLISHED["western-electric-1956"].rules
NELSON = PUBLISHED["nelson-1984"].rules
ORDER = (LIMIT, Rule("trend", 5, 5), Rule("alternation", 8, 8), Rule("zone", 2, 3, 2.0))
CALM = 40  # points in control, more than any of these rules remembers


def simulated(
    rules: tuple[Rule, ...],
    draw: Callable[[np.random.Generator, tuple[int, int], bool], np.ndarray],
    *,
    centre: float = 0.0,
    sigma: float = 1.0,
    lower: float = -3.0,
    upper: float = 3.0,
    seed: int,
) -> tuple[float, float]:
    """Mean and standard error of the points from a shift to the signal, none having come before."""
    rng = np.random.default_rng(seed)
    rows, after = 6000, 300
    values = np.concatenate(
        (np.full((rows, 1), np.nan), draw(rng, (rows, CALM), False), draw(rng, (rows, after), True)), axis=1
    )
    flat = values.ravel()
    hits = detect(rules, Track(flat, (flat - centre) / sigma, sigma, lower, upper)).index
    row, place = np.divmod(np.unique(hits), values.shape[1])
    _, first = np.unique(row, return_index=True)
    place = place[first] - CALM
    lengths = place[place > 0]
    # A row without any signal would be missing here.
    assert len(first) == rows
    return float(lengths.mean()), float(lengths.std() / math.sqrt(len(lengths)))


# Rules on zones -------------------------------------------------------------------------------------


@pytest.mark.parametrize("shift", [0.0, 0.5, 1.0, 2.5])
def test_rules_on_zones_by_dense_eigenvectors(shift: float) -> None:
    cuts = np.array([-3.0, -2.0, -1.0, 0.0, 1.0, 2.0, 3.0])
    z = 0.5 * (cuts[1:] + cuts[:-1])
    seen = tuple(watch for watch in watches(WESTERN_ELECTRIC, z) if watch.k > 1)
    follow = compile_watches(seen, len(z)).follow
    n = len(follow)

    def dense(shift: float) -> np.ndarray:
        steps = np.zeros((n, n + 1))
        for letter, probability in enumerate(np.diff(scipy.special.ndtr(cuts - shift))):
            np.add.at(steps, (np.arange(n), follow[:, letter]), probability)
        return steps[:, :n]

    values, vectors = np.linalg.eig(dense(0.0).T)
    calm = np.real(vectors[:, np.argmax(values.real)])
    calm = calm / calm.sum()
    expected = float(calm @ np.linalg.solve(np.eye(n) - dense(shift), np.ones(n)))
    assert steady_state_arl(WESTERN_ELECTRIC, shift=shift) == pytest.approx(expected, rel=1e-10)


def test_limits_alone_remember_nothing() -> None:
    assert steady_state_arl(shift=1.0, scale=1.3) == shewhart(shift=1.0, scale=1.3).arl
    assert steady_state_arl(lower=-math.inf) == shewhart(lower=-math.inf).arl


# Rules on order -------------------------------------------------------------------------------------


@pytest.mark.parametrize("rules", [WESTERN_ELECTRIC, NELSON, ORDER])
def test_in_control_the_hazard_has_settled(rules: tuple[Rule, ...]) -> None:
    hazard = of_rules.shewhart_law(rules).hazard
    assert steady_state_arl(rules) == pytest.approx(1 / hazard, rel=1e-9)


@pytest.mark.parametrize("rules", [NELSON, ORDER])
@pytest.mark.parametrize(("shift", "scale"), [(1.0, 1.0), (0.5, 1.5), (0.0, 0.6)])
def test_rules_on_order_by_simulation(rules: tuple[Rule, ...], shift: float, scale: float) -> None:
    if rules is ORDER and scale < 1.0:
        scale = 2.0

    def draw(rng: np.random.Generator, shape: tuple[int, int], shifted: bool) -> np.ndarray:
        noise = rng.standard_normal(shape)
        return shift + scale * noise if shifted else noise

    mean, error = simulated(rules, draw, seed=1984)
    found = steady_state_arl(rules, shift=shift, scale=scale)
    assert found is not None
    assert abs(found - mean) < 4 * error
    # The start does matter: a fresh chart is another.
    assert abs(shewhart(rules, shift=shift, scale=scale).arl - found) > 1e-3


@pytest.mark.parametrize(("shift", "scale"), [(0.5, 1.0), (3.0, 1.0), (0.0, 0.5), (0.7, 0.1)])
def test_more_terms_change_nothing(monkeypatch: pytest.MonkeyPatch, shift: float, scale: float) -> None:
    found = of_rules._steady.__wrapped__(ORDER, -3.0, 3.0, shift, scale)
    monkeypatch.setattr(integral, "TERMS", 20)
    assert of_rules._steady.__wrapped__(ORDER, -3.0, 3.0, shift, scale) == pytest.approx(found, rel=1e-8)


# Counts ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("rules", [WESTERN_ELECTRIC, NELSON])
def test_counts_by_simulation(rules: tuple[Rule, ...]) -> None:
    # Pinholes a tray, 6 on average, then 8: ties and points on lines are common.
    sigma, upper = math.sqrt(6.0), 6 + 3 * math.sqrt(6.0)
    drawn = {"centre": 6.0, "sigma": sigma, "lower": -math.inf, "upper": upper}
    law = steady_run_law(rules, count_law(False, 8.0, 1.0), count_law(False, 6.0, 1.0), **drawn)
    assert law is not None

    def draw(rng: np.random.Generator, shape: tuple[int, int], shifted: bool) -> np.ndarray:
        return rng.poisson(8.0 if shifted else 6.0, shape).astype(float)

    mean, error = simulated(rules, draw, seed=1985, **drawn)
    assert abs(law.run_length().arl - mean) < 4 * error
    calm = count_law(False, 6.0, 1.0)
    settled = steady_run_law(rules, calm, calm, **drawn)
    assert settled is not None
    hazard = run_law(rules, calm, **drawn).hazard
    assert settled.run_length().arl == pytest.approx(1 / hazard, rel=1e-9)


# Moving averages ------------------------------------------------------------------------------------


@pytest.mark.parametrize("span", [2, 3, 4])
def test_moving_average_in_control_the_hazard_has_settled(span: int) -> None:
    hazard = moving.moving_average_law(span=span, limit=2.5).hazard
    assert moving.steady_state_arl(span=span, limit=2.5) == pytest.approx(1 / hazard, rel=1e-9)


@pytest.mark.parametrize(
    ("span", "limit", "shift", "scale"),
    [(2, 3.0, 0.0, 2.0), (3, 3.0, 1.0, 1.0), (3, 2.0, 0.5, 0.5), (4, 3.0, 1.5, 1.0)],
)
def test_moving_average_after_long_control_by_simulation(
    span: int, limit: float, shift: float, scale: float
) -> None:
    rng = np.random.default_rng(1967)
    window = list(rng.standard_normal((span - 1, 60_000)))
    edge = limit * math.sqrt(span)
    lengths: list[np.ndarray] = []
    for point in range(-30, 3000):
        size = window[0].size
        if not size:
            break
        new = rng.standard_normal(size)
        if point >= 0:
            new = shift + scale * new
        kept = np.abs(sum(window) + new) <= edge
        if point >= 0:
            lengths.append(np.full(int((~kept).sum()), point + 1))
        window = [each[kept] for each in (*window[1:], new)]
    found = np.concatenate(lengths)
    expected = moving.steady_state_arl(span=span, limit=limit, shift=shift, scale=scale)
    assert expected is not None
    assert abs(found.mean() - expected) < 4 * found.std() / math.sqrt(len(found))


def test_a_moving_average_of_wider_points_has_narrower_limits() -> None:
    scaled = moving.moving_average(span=3, limit=3.0, shift=0.4, scale=1.6)
    plain = moving.moving_average(span=3, limit=3.0 / 1.6, shift=0.4 / 1.6)
    assert scaled.arl == pytest.approx(plain.arl, rel=1e-10)
    assert scaled.sd == pytest.approx(plain.sd, rel=1e-10)


# Several variables ----------------------------------------------------------------------------------


@pytest.mark.parametrize(("p", "smoothing", "limit"), [(2, 0.1, 8.64), (4, 0.1, 12.73), (10, 0.3, 24.0)])
def test_the_law_of_several_variables_has_the_mean_of_the_equation(
    p: int, smoothing: float, limit: float
) -> None:
    # In control the radius alone is enough: another equation, on other nodes.
    law = mewma.mewma_law(p, smoothing, limit)
    assert law.run_length().arl == pytest.approx(mewma.in_control_arl(p, smoothing, limit), rel=1e-6)
    assert mewma.steady_state_arl(p, smoothing, limit) == pytest.approx(1 / law.hazard, rel=1e-6)
    for shift in (0.5, 2.0):
        mean = mewma.mewma_law(p, smoothing, limit, shift).run_length().arl
        assert mean == pytest.approx(mewma.arls(p, smoothing, limit, (shift,))[0], rel=1e-6)


def test_the_law_of_several_variables_under_growing_limits() -> None:
    for shift in (0.0, 1.5):
        mean = mewma.mewma_law(3, 0.2, 11.0, shift, exact=True).run_length().arl
        assert mean == pytest.approx(mewma.arls(3, 0.2, 11.0, (shift,), exact=True)[0], rel=1e-6)
    assert mewma.mewma_law(3, 0.2, 11.0, exact=True).run_length().arl == pytest.approx(
        mewma.in_control_arl(3, 0.2, 11.0, exact=True), rel=1e-5
    )


def test_several_variables_by_simulation() -> None:
    p, smoothing, limit, shift = 3, 0.15, 9.0, 1.2
    rng = np.random.default_rng(1992)
    paths, calm = 20_000, 60
    edge = limit * smoothing / (2 - smoothing)
    for delay, expected in (
        (0, mewma.mewma_law(p, smoothing, limit, shift).run_length().arl),
        (calm, mewma.steady_state_arl(p, smoothing, limit, shift)),
    ):
        state = np.zeros((paths, p))
        lengths = []
        for point in range(-delay, 2000):
            if not len(state):
                break
            new = rng.standard_normal(state.shape)
            if point >= 0:
                new[:, 0] += shift
            state = smoothing * new + (1 - smoothing) * state
            kept = (state**2).sum(axis=1) <= edge
            if point >= 0:
                lengths += [point + 1] * int((~kept).sum())
            state = state[kept]
        found = np.array(lengths)
        assert expected is not None
        assert abs(found.mean() - expected) < 4 * found.std() / math.sqrt(len(found))


def test_without_smoothing_several_variables_are_the_chi_square_law() -> None:
    law = mewma.mewma_law(2, 1.0, 10.6, 1.0)
    tail = mewma.chi_square_tail(10.6, 2, 1.0)
    assert law.run_length().arl == pytest.approx(1 / tail, rel=1e-12)
    near = mewma.mewma_law(2, 0.9999, 10.6, 1.0).run_length().arl
    assert near == pytest.approx(1 / tail, rel=2e-3)
    assert mewma.steady_state_arl(2, 1.0, 10.6, 1.0) == pytest.approx(1 / tail, rel=1e-12)
