"""Residuals of autoregressive models against plain least squares, published fits and simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy

from assignable.spc.charts import residual
from assignable.spc.charts.common import Exclusion
from assignable.spc.charts.residual import KnownModel, ResidualOptions
from assignable.spc.data import Individuals
from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.rules import PUBLISHED

# Level of Lake Huron in feet, 1875 to 1972 (Brockwell & Davis 1987; bundled with pydataset 0.2.0).
# fmt: off
HURON = np.array(
    [
        580.38, 581.86, 580.97, 580.80, 579.79, 580.39, 580.42, 580.82, 581.40, 581.32, 581.44, 581.68, 581.17,
        580.53, 580.01, 579.91, 579.14, 579.16, 579.55, 579.67, 578.44, 578.24, 579.10, 579.09, 579.35, 578.82,
        579.32, 579.01, 579.00, 579.80, 579.83, 579.72, 579.89, 580.01, 579.37, 578.69, 578.19, 578.67, 579.55,
        578.92, 578.09, 579.37, 580.13, 580.14, 579.51, 579.24, 578.66, 578.86, 578.05, 577.79, 576.75, 576.75,
        577.82, 578.64, 580.58, 579.48, 577.38, 576.90, 576.94, 576.24, 576.84, 576.85, 576.90, 577.79, 578.18,
        577.51, 577.23, 578.42, 579.61, 579.05, 579.26, 579.22, 579.38, 579.10, 577.95, 578.12, 579.75, 580.85,
        580.41, 579.96, 579.61, 578.76, 578.18, 577.21, 577.13, 579.10, 578.25, 577.91, 576.89, 575.96, 576.80,
        577.68, 578.38, 578.52, 579.74, 579.31, 579.89, 579.96,
    ]
)
# fmt: on


def plain(values: np.ndarray, p: int) -> tuple[float, np.ndarray, float, int]:
    """Mean, coefficients, sigma and windows by an ordinary regression, window by window."""
    rows, targets = [], []
    for t in range(p, len(values)):
        window = values[t - p : t + 1]
        if not np.isnan(window).any():
            rows.append([1.0, *(values[t - lag] - 570.0 for lag in range(1, p + 1))])
            targets.append(values[t] - 570.0)
    matrix, target = np.array(rows), np.array(targets)
    beta = np.linalg.solve(matrix.T @ matrix, matrix.T @ target)
    left = target - matrix @ beta
    sigma = math.sqrt(float(left @ left) / (len(target) - p - 1))
    return 570.0 + beta[0] / (1 - beta[1:].sum()), beta[1:], sigma, len(target)


@pytest.mark.parametrize("order", [0, 1, 2, 4])
def test_lake_huron_by_plain_least_squares(order: int) -> None:
    found = residual.fit(Individuals(HURON), ResidualOptions(order=order)).limits
    mean, coefficients, sigma, windows = plain(HURON, order)
    assert found.mean == pytest.approx(mean, rel=1e-10)
    assert found.coefficients == pytest.approx(coefficients.tolist(), rel=1e-7)
    assert found.sigma == pytest.approx(sigma, rel=1e-9)
    assert found.degrees_of_freedom == windows - order - 1


def test_lake_huron_as_published() -> None:
    # Brockwell & Davis, Introduction to Time Series and Forecasting (from memory): by maximum likelihood,
    # X_t = 1.0441 X_{t-1} - .2503 X_{t-2} + Z_t for the levels less their mean, variance .4789. Conditional least
    # squares differ from it in the second digit.
    found = residual.fit(Individuals(HURON), ResidualOptions()).limits
    assert found.order == 2
    assert found.coefficients == pytest.approx((1.0441, -0.2503), abs=0.03)
    assert found.sigma**2 == pytest.approx(0.4789, abs=0.03)


def test_orders_by_plain_criterion() -> None:
    largest = 5
    fitted = residual.fit(Individuals(HURON), ResidualOptions(largest_order=largest))
    assert fitted.diagnostics is not None
    tried = fitted.diagnostics.orders
    assert [one.order for one in tried] == list(range(largest + 1))
    w = len(HURON) - largest
    for one in tried:
        # The same windows for every order: those that leave room for the largest.
        _, _, sigma, windows = plain(HURON[largest - one.order :], one.order)
        assert windows == w
        squares, k = sigma**2 * (w - one.order - 1), one.order + 2
        expected = w * math.log(squares / w) + 2 * k + 2 * k * (k + 1) / (w - k - 1)
        assert one.aicc == pytest.approx(expected, rel=1e-9)


def test_gaps_and_exclusions_end_windows() -> None:
    values = HURON.copy()
    values[[20, 50, 51]] = np.nan
    found = residual.fit(Individuals(values), ResidualOptions(order=2))
    mean, coefficients, sigma, windows = plain(values, 2)
    assert found.limits.mean == pytest.approx(mean, rel=1e-10)
    assert found.limits.coefficients == pytest.approx(coefficients.tolist(), rel=1e-7)
    assert found.limits.sigma == pytest.approx(sigma, rel=1e-9)
    assert found.baseline is not None
    panel = found.baseline.panels.residual
    assert len(panel.index) == windows
    assert not {0, 1, 20, 21, 22, 50, 51, 52, 53} & set(panel.index.tolist())

    wild = HURON.copy()
    wild[20] += 50.0
    excluded = residual.fit(
        Individuals(wild), ResidualOptions(order=2, exclude=(Exclusion(20, "gauge read wrong"),))
    )
    gap = HURON.copy()
    gap[20] = np.nan
    assert excluded.limits.sigma == pytest.approx(
        residual.fit(Individuals(gap), ResidualOptions(order=2)).limits.sigma, rel=1e-12
    )
    assert excluded.baseline is not None
    # Plotted, and so are the values it spoils; none of them signals.
    assert {20, 21, 22} <= set(excluded.baseline.panels.residual.index.tolist())
    assert not {20, 21, 22} & {signal.index for signal in excluded.baseline.signals}


def test_residuals_one_by_one() -> None:
    coefficients, mean = (0.6, -0.2, 0.1), 3.0
    values = np.random.default_rng(5).normal(3.0, 1.0, 40)
    values[13] = np.nan
    found = residual.residuals(values, mean, coefficients)
    for t in range(40):
        past = [values[t - lag] if t >= lag else np.nan for lag in (1, 2, 3)]
        expected = values[t] - mean - sum(c * (x - mean) for c, x in zip(coefficients, past, strict=True))
        assert found[t] == pytest.approx(expected, rel=1e-12, abs=1e-12, nan_ok=True)


@pytest.mark.parametrize("coefficients", [(), (0.7,), (-0.9,), (1.0441, -0.2503), (0.5, -0.3, 0.2, 0.1)])
def test_process_deviation_by_its_impulse_response(coefficients: tuple[float, ...]) -> None:
    impulse = np.zeros(2000)
    impulse[0] = 1.0
    response = scipy.signal.lfilter([1.0], [1.0, *(-c for c in coefficients)], impulse)
    assert residual.process_deviation(coefficients) == pytest.approx(
        math.sqrt(float(response @ response)), rel=1e-10
    )
    roots = np.roots([1.0, *(-c for c in coefficients)])
    assert residual.largest_root(coefficients) == pytest.approx(
        float(np.abs(roots).max()) if len(roots) else 0.0, rel=1e-10
    )


def test_false_alarms_by_simulation() -> None:
    rng = np.random.default_rng(17)
    points = 200_000
    values = 50 + scipy.signal.lfilter([2.0], [1.0, -0.5, -0.3], rng.standard_normal(points))
    limits = residual.fit(None, ResidualOptions(known=KnownModel(50.0, (0.5, 0.3), 2.0))).limits
    judged = residual.judge(limits, Individuals(values), None)
    chance = 2 * float(scipy.special.ndtr(-3.0))
    assert abs(judged.signals_found - chance * points) < 4 * math.sqrt(chance * points)
    assert limits.process_sigma == pytest.approx(float(values[1000:].std()), rel=0.02)


@pytest.mark.parametrize("coefficients", [(0.7,), (0.5, 0.2)])
def test_run_length_after_a_shift_by_simulation(coefficients: tuple[float, ...]) -> None:
    rng = np.random.default_rng(23)
    runs, length, quiet = 4000, 500, 40
    noise = rng.standard_normal((runs, quiet + length))
    values = scipy.signal.lfilter([1.0], [1.0, *(-c for c in coefficients)], noise, axis=1)
    values[:, quiet:] += 3.0
    found = values[:, quiet:].copy()
    for lag, coefficient in enumerate(coefficients, 1):
        found -= coefficient * values[:, quiet - lag : quiet + length - lag]
    out = np.abs(found) > 3.0
    assert out.any(axis=1).mean() > 0.998
    at = np.where(out.any(axis=1), out.argmax(axis=1) + 1, length)
    fitted = residual.fit(None, ResidualOptions(known=KnownModel(0.0, coefficients, 1.0)))
    stated = {one.shift: one.arl for one in fitted.performance.shifts}[3.0]
    assert stated is not None
    assert abs(float(at.mean()) - stated) < 4 * float(at.std()) / math.sqrt(runs)


def test_without_dependence_it_is_the_chart_of_deviations() -> None:
    values = np.random.default_rng(2).normal(10.0, 1.0, 200)
    fitted = residual.fit(Individuals(values), ResidualOptions())
    assert fitted.limits.order == 0
    assert fitted.limits.mean == pytest.approx(values.mean(), rel=1e-12)
    assert fitted.limits.sigma == pytest.approx(values.std(ddof=1), rel=1e-12)
    assert "no-dependence" in [caution.code for caution in fitted.cautions]


def test_forecast_of_the_next_value() -> None:
    fitted = residual.fit(
        Individuals(HURON), ResidualOptions(order=2, rules=PUBLISHED["western-electric-1956"].rules)
    )
    assert fitted.baseline is not None
    ahead = fitted.baseline.details
    assert isinstance(ahead, residual.NextValue)
    limits = fitted.limits
    a, b = limits.coefficients
    assert ahead.forecast == pytest.approx(
        limits.mean + a * (HURON[-1] - limits.mean) + b * (HURON[-2] - limits.mean), rel=1e-12
    )
    assert ahead.upper - ahead.lower == pytest.approx(6 * limits.sigma, rel=1e-9)
    just_out = np.array([HURON[-2], HURON[-1], ahead.upper + 0.01])
    just_in = np.array([HURON[-2], HURON[-1], ahead.upper - 0.01])
    assert residual.judge(limits, Individuals(just_out), None).signals_found == 1
    assert residual.judge(limits, Individuals(just_in), None).signals_found == 0


def test_refusals() -> None:
    rng = np.random.default_rng(1)
    with pytest.raises(UnusableData) as unstable:
        residual.fit(
            Individuals(np.exp(0.1 * np.arange(60)) + 0.01 * rng.standard_normal(60)),
            ResidualOptions(order=1),
        )
    assert unstable.value.faults[0].code == "not-stationary"
    with pytest.raises(UnusableData) as few:
        residual.fit(Individuals(HURON[:12]), ResidualOptions(order=2))
    assert few.value.faults[0].code == "too-few-values"
    assert "13 runs" in few.value.faults[0].detail
    assert "15 values" in few.value.faults[0].detail
    assert residual.fit(Individuals(HURON[:15]), ResidualOptions(order=2)).limits.order == 2
    with pytest.raises(UnusableData) as fewer:
        residual.fit(Individuals(HURON[:12]), ResidualOptions())
    assert "12 pairs" in fewer.value.faults[0].detail
    residual.fit(Individuals(HURON[:13]), ResidualOptions())
    for constant in (np.full(40, 7.0), np.tile([1.0, 2.0], 20)):
        with pytest.raises(UnusableData) as still:
            residual.fit(Individuals(constant), ResidualOptions())
        assert still.value.faults[0].code == "no-variation"
    with pytest.raises(UnusableParameter) as known:
        residual.fit(None, ResidualOptions(known=KnownModel(0.0, (0.6, 0.5), 1.0)))
    assert known.value.faults[0].code == "not-stationary"
    with pytest.raises(UnusableParameter) as nothing:
        residual.fit(None, ResidualOptions())
    assert nothing.value.faults[0].code == "data-missing"
