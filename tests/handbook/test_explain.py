"""Worked steps: the arithmetic that formulas are written in, and values that print and other methods give."""

from __future__ import annotations

import math

import numpy as np
import pytest

from assignable.spc.capability.distributions import Sample, fit_law
from assignable.spc.capability.nonnormal import TAIL
from assignable.spc.capability.transforms import ALL_LAWS
from assignable.spc.charts import subgroups
from assignable.spc.data import Subgroups
from assignable.spc.explain import charts
from assignable.spc.explain.distributions import quantile_step
from assignable.spc.explain.steps import MOST_LISTED, Pad, Step, evaluate, total_of

# The arithmetic -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("formula", "expected"),
    [
        ("a + b * 2 - c / 4", 1 + 2 * 2 - 3 / 4),
        ("-a**2", -1.0),
        ("(b - c)**2 / (2 * a)", 0.5),
        ("sqrt(b) * exp(-c) + log(c)", math.sqrt(2) * math.exp(-3) + math.log(3)),
        ("max(a, b, c) - min(a, b)", 2.0),
        ("erfc(c / sqrt(2))", 0.0026997960632601866),  # 2(1 - Phi(3)), mpmath
        ("round(5/2) + floor(b) + ceil(c - 1/2)", 7.0),
        ("2 * pi * a", 2 * math.pi),
        ("1e6 * a", 1e6),
    ],
)
def test_formulas_are_plain_arithmetic(formula: str, expected: float) -> None:
    assert evaluate(formula, {"a": 1.0, "b": 2.0, "c": 3.0}) == pytest.approx(expected, rel=1e-15)


@pytest.mark.parametrize(
    "formula", ["1 / (a - a)", "sqrt(-a)", "log(0 * a)", "exp(1000 * a)", "(1e200 * a)**2"]
)
def test_what_is_no_number_is_none(formula: str) -> None:
    assert evaluate(formula, {"a": 1.0}) is None


@pytest.mark.parametrize("formula", ["a.real", "a[0]", "__import__('os')", "[a]", "(lambda: a)()", "open(a)"])
def test_nothing_but_arithmetic_is_evaluated(formula: str) -> None:
    with pytest.raises((TypeError, KeyError)):
        evaluate(formula, {"a": 1.0})


def test_a_number_that_cannot_be_told_is_told_as_none() -> None:
    pad = Pad()
    found = pad.work("Too much", "a * a", "#/nowhere", a=1e200)
    assert math.isnan(found)
    pad.work("And what follows from it", "a + 1", "#/nowhere", a=found)
    assert [(one.result, one.where) for one in pad.steps] == [(None, None), (None, None)]
    assert pad.steps[1].values[0].value is None
    assert total_of([1e308, 1e308]) == math.inf


def test_long_lists_are_told_by_their_sum() -> None:
    few, many = np.arange(1.0, MOST_LISTED + 1), np.arange(1.0, MOST_LISTED + 2)
    for values in (few, many):
        pad = Pad()
        mean = pad.mean("Mean", values)
        sd = pad.deviation("Deviation", values, mean)
        assert (mean, sd) == pytest.approx((values.mean(), values.std(ddof=1)), rel=1e-14)
        assert (len(pad.steps[0].values) == 2) == (len(values) > MOST_LISTED)
    pad = Pad()
    assert pad.median("Median", [3.0, np.nan, 1.0, 2.0, 10.0]) == 2.5
    assert pad.range("Range", [3.0, np.nan, 1.0]) == 2.0


# Against the factors in print -----------------------------------------------------------------------


def _by_what(steps: tuple[Step, ...], beginning: str) -> float:
    return next(one.result for one in steps if one.what.startswith(beginning) and one.result is not None)


def test_limits_by_hand_with_the_factors_of_the_tables() -> None:
    """A2 = 0.577 and D4 = 2.114 for n = 5, as every table has them (from memory), put in by hand."""
    rows = np.array([[4.0, 6.0, 5.0, 7.0, 3.0], [5.0, 5.0, 8.0, 6.0, 6.0], [3.0, 4.0, 6.0, 5.0, 7.0]])
    data, options = Subgroups(rows), subgroups.SubgroupOptions("mean-range")
    steps = charts.of_fit("xbar-r", data, options, subgroups.fit(data, options, spread="range"))
    grand, mean_range = rows.mean(), np.ptp(rows, axis=1).mean()
    assert _by_what(steps, "Centre line: mean of the 3") == pytest.approx(grand, rel=1e-14)
    assert _by_what(steps, "Mean of the 3 ranges") == pytest.approx(mean_range, rel=1e-14)
    assert _by_what(steps, "Upper limit of the means") == pytest.approx(
        grand + 0.577 * mean_range, abs=0.0005 * mean_range
    )
    assert _by_what(steps, "Upper limit of the ranges") == pytest.approx(
        2.114 * mean_range, abs=0.0005 * mean_range
    )
    assert _by_what(steps, "In-control average run length") == pytest.approx(370.4, abs=0.05)


# Quantiles of fitted distributions ------------------------------------------------------------------


def _skewed(seed: int, count: int = 200) -> np.ndarray:
    return np.random.default_rng(seed).gamma(3.0, 0.2, count) + 0.3


@pytest.mark.parametrize("name", list(ALL_LAWS))
@pytest.mark.parametrize("mirrored", [False, True])
def test_quantiles_in_closed_form_are_those_of_the_fit(name: str, mirrored: bool) -> None:
    """By an independent road: the formula's quantile, put into the distribution function of the fit."""
    if name == "johnson-su":  # for tails longer than a lognormal's
        values = np.sinh((np.random.default_rng(1).standard_normal(200) + 0.4) / 1.2) + 5.0
    else:
        values = _skewed(2)
    bounds: tuple[float | None, float | None] = (None, None)
    if mirrored and name in ("lognormal-3", "weibull-3"):
        pytest.skip("runs upwards from its threshold alone")
    if mirrored:
        values = 10.0 - values
        bounds = (None, 10.0)
    found = fit_law(ALL_LAWS[name], Sample(values, np.empty(0), *bounds))
    for p in (TAIL, 0.5, 1.0 - TAIL):
        q = 1.0 - p
        value = float(found.quantile(np.array([p]), np.array([q]))[0])
        pad = Pad()
        quantile_step(pad, "A quantile", name, found.parameters, p, q, value, None, bounds)
        (step,) = pad.steps
        assert step.result == pytest.approx(value, rel=1e-9)
        below, above = found.tails(np.array([step.result]))
        assert min(below[0], above[0]) == pytest.approx(min(p, q), rel=1e-5)
        if name != "folded-normal":  # which has none
            assert step.formula != "quantile", (name, found.parameters)
