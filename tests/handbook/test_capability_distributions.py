"""Distributions by maximum likelihood and their goodness of fit, against print, scipy.stats and simulation."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
import scipy
import scipy.stats

from assignable.spc.capability import goodness
from assignable.spc.capability.distributions import LAWS, NAMES, Fitted, Sample, fit, fit_law, split
from assignable.spc.capability.nonnormal import by_quantiles
from assignable.spc.capability.specification import Specification
from assignable.spc.capability.transforms import ALL_LAWS, TRANSFORMS
from assignable.spc.errors import UnusableData

NONE = np.empty(0)
OUTER = np.array([0.00135, 0.5, 0.99865])


def _random(seed: int) -> np.random.Generator:
    return np.random.Generator(np.random.PCG64(seed))


def _known(name: str, *theta: float) -> Fitted:
    """A distribution with parameters that are known."""
    return Fitted(LAWS[name], np.array(theta), 0.0, 1.0, 1, 1000, 0.0, None)


# ---------------------------------------------------------------------------------------------------
# Quantile indices of known distributions


@pytest.mark.parametrize(
    ("found", "limits", "quantiles", "pp", "ppu", "ppl"),
    [
        # Computed from the definition of ISO 22514-2, not published.
        (
            _known("exponential", 0.0),
            (0.0, 7.0),
            (0.0013509, 0.6931472, 6.6076507),
            1.059595,
            1.066337,
            1.001953,
        ),
        (
            _known("lognormal", 0.0, math.log(0.5)),
            (0.2, 5.0),
            (0.2231327, 1.0, 4.4816375),
            1.127156,
            1.148885,
            1.029777,
        ),
        (
            _known("weibull", 0.0, math.log(0.5)),
            (0.0, 3.0),
            (0.0367548, 0.8325546, 2.5705351),
            1.184002,
            1.247106,
            1.046186,
        ),
    ],
)
def test_indices_by_quantiles_of_known_distributions(
    found: Fitted,
    limits: tuple[float, float],
    quantiles: tuple[float, ...],
    pp: float,
    ppu: float,
    ppl: float,
) -> None:
    sample = Sample(np.array([0.5, 1.0, 2.0]), NONE)
    told = by_quantiles(found, sample, Specification(*limits), 0.95)
    assert [one.value for one in told.quantiles] == pytest.approx(quantiles, abs=6e-8)
    assert told.pp is not None
    assert told.ppu is not None
    assert told.ppl is not None
    assert (told.pp.value, told.ppu.value, told.ppl.value) == pytest.approx((pp, ppu, ppl), rel=2e-6)
    assert told.ppk.value == min(told.ppu.value, told.ppl.value)
    assert told.ppk.lower is None


# ---------------------------------------------------------------------------------------------------
# Maximum likelihood

_STATS = {
    "normal": (scipy.stats.norm, {}),
    "lognormal": (scipy.stats.lognorm, {"floc": 0}),
    "weibull": (scipy.stats.weibull_min, {"floc": 0}),
    "gamma": (scipy.stats.gamma, {"floc": 0}),
    "exponential": (scipy.stats.expon, {"floc": 0}),
    "half-normal": (scipy.stats.halfnorm, {"floc": 0}),
    "folded-normal": (scipy.stats.foldnorm, {"floc": 0}),
    "rayleigh": (scipy.stats.rayleigh, {"floc": 0}),
    "largest-extreme-value": (scipy.stats.gumbel_r, {}),
    "smallest-extreme-value": (scipy.stats.gumbel_l, {}),
    "lognormal-3": (scipy.stats.lognorm, {}),
}


@pytest.mark.parametrize("name", _STATS)
def test_likelihoods_and_quantiles_against_scipy(name: str) -> None:
    x = _random(7).gamma(3.0, 2.0, 200)
    found = fit(name, Sample(x, NONE))
    law, fixed = _STATS[name]
    parameters = law.fit(x, **fixed)
    assert found.log_likelihood >= law.logpdf(x, *parameters).sum() - 1e-6
    assert found.quantile(OUTER) == pytest.approx(law.ppf(OUTER, *parameters), rel=3e-3, abs=1e-4)
    below, above = found.tails(found.quantile(OUTER))
    assert below == pytest.approx(OUTER, rel=1e-9)
    assert above == pytest.approx(1.0 - OUTER, rel=1e-9)


@pytest.mark.parametrize("name", ALL_LAWS)
def test_a_fit_is_a_maximum_and_its_density_the_slope_of_its_distribution(name: str) -> None:
    z = _random(11).standard_normal(300)
    x = {"johnson-su": 9.0 + np.sinh(z), "johnson-sb": 1.0 + 2.0 / (1.0 + np.exp(0.5 - z))}.get(
        name, 1.0 + np.exp(0.5 * z)
    )
    if name in ("weibull-3", "folded-normal"):
        x = 1.0 + _random(3).weibull(2.0, 300) if name == "weibull-3" else np.abs(1.5 + z)
    found = fit_law(ALL_LAWS[name], Sample(x, NONE))
    own = found.direction * (x - found.shift) / found.unit
    best = float(found.law.log_density(own, found.theta).sum())
    assert found.covariance is not None
    for k, size in enumerate(np.sqrt(np.diag(found.covariance))):
        for sign in (-0.3, 0.3):
            theta = found.theta.copy()
            theta[k] += sign * size
            assert float(found.law.log_density(own, theta).sum()) < best
    at = np.quantile(own, [0.2, 0.5, 0.8])
    cdf = [np.exp(found.law.log_cdf(at + step, found.theta)) for step in (-1e-5, 1e-5)]
    assert np.exp(found.law.log_density(at, found.theta)) == pytest.approx((cdf[1] - cdf[0]) / 2e-5, rel=1e-4)


@pytest.mark.parametrize("name", [name for name in NAMES if LAWS[name].censored])
def test_values_below_a_limit_against_a_general_optimiser(name: str) -> None:
    x = (
        _random(5).gamma(4.0, 1.0, 150)
        if name != "folded-normal"
        else np.abs(3.0 + _random(5).standard_normal(150))
    )
    limit = float(np.quantile(x, 0.25))
    sample = Sample(x[x >= limit], np.full(int((x < limit).sum()), limit))
    found = fit(name, sample)
    law, fixed = _STATS[name]
    fully = law.fit(x, **fixed)
    free = [i for i in range(len(fully)) if not (fixed and i == len(fully) - 2)]

    def loss(values: np.ndarray) -> float:
        parameters = np.array(fully)
        parameters[free] = values
        if parameters[-1] <= 0.0:
            return 1e10
        total = law.logpdf(sample.values, *parameters).sum() + law.logcdf(sample.below, *parameters).sum()
        return float(-total) if np.isfinite(total) else 1e10

    done = scipy.optimize.minimize(
        loss,
        np.array(fully)[free],
        method="Nelder-Mead",
        options={"xatol": 1e-5, "fatol": 1e-7, "maxiter": 400},
    )
    assert found.log_likelihood == pytest.approx(-done.fun, abs=2e-5)


def test_a_limit_replaced_by_a_half_is_another_answer() -> None:
    x = _random(8).lognormal(0.0, 1.0, 4000)
    below = x < 1.0
    found = fit("lognormal", Sample(x[~below], np.full(int(below.sum()), 1.0)))
    told = {one.name: one.value for one in found.parameters}
    # Four standard errors of 4000 values, a little more for those below the limit.
    assert told["log-mean"] == pytest.approx(0.0, abs=0.09)
    assert told["log-sd"] == pytest.approx(1.0, abs=0.07)
    halved = np.where(below, 0.5, x)
    assert abs(float(np.log(halved).std()) - 1.0) > 0.07


@pytest.mark.parametrize("name", ALL_LAWS)
def test_units_change_nothing(name: str) -> None:
    z = _random(21).standard_normal(200)
    x = 9.0 + np.sinh(z) if name == "johnson-su" else 1.0 + 2.0 / (1.0 + np.exp(0.5 - z))
    if name in ("lognormal-3", "weibull-3", "johnson-sl"):
        x = 1.0 + np.exp(0.4 * z) if name != "weibull-3" else 1.0 + _random(3).weibull(2.0, 200)
    if name == "folded-normal":
        x = np.abs(1.5 + z)
    first = fit_law(ALL_LAWS[name], Sample(x, NONE))
    second = fit_law(ALL_LAWS[name], Sample(1e-6 * x, NONE))
    assert 1e6 * second.quantile(OUTER) == pytest.approx(first.quantile(OUTER), rel=1e-4)
    assert second.log_likelihood == pytest.approx(first.log_likelihood + 200 * math.log(1e6), abs=1e-3)


def test_a_half_line_starts_at_the_natural_bound_either_way() -> None:
    x = _random(4).weibull(1.7, 100)
    plain = fit("weibull", Sample(x, NONE))
    up = fit("weibull", Sample(5.0 + x, NONE, natural_lower=5.0))
    down = fit("weibull", Sample(5.0 - x, NONE, natural_upper=5.0))
    assert up.parameters[1].value == pytest.approx(plain.parameters[1].value, rel=1e-9)
    assert up.quantile(OUTER) - 5.0 == pytest.approx(plain.quantile(OUTER), rel=1e-6)
    assert 5.0 - down.quantile(OUTER)[::-1] == pytest.approx(plain.quantile(OUTER), rel=1e-6)
    assert down.tails(np.array([4.0]))[0] == pytest.approx(plain.tails(np.array([1.0]))[1], rel=1e-9)


# ---------------------------------------------------------------------------------------------------
# Goodness of fit


def _weights(name: str, *key: float) -> tuple[float, ...]:
    from assignable.spc.capability.distributions import _score_functions

    return goodness.eigenvalues(name, key, _score_functions(LAWS[name]))


@pytest.mark.parametrize(
    ("name", "key", "points"),
    [
        # D'Agostino & Stephens 1986, tables 4.7, 4.17 and 4.11: percentage points of the adjusted A²; from memory.
        ("normal", (0.0, 0.0), {0.631: 0.10, 0.752: 0.05, 0.873: 0.025, 1.035: 0.01}),
        ("smallest-extreme-value", (0.0, 0.0), {0.637: 0.10, 0.757: 0.05, 0.877: 0.025, 1.038: 0.01}),
        ("exponential", (0.0,), {1.062: 0.10, 1.321: 0.05, 1.591: 0.025, 1.959: 0.01}),
    ],
)
def test_the_limiting_law_against_published_points(
    name: str, key: tuple[float, ...], points: dict[float, float]
) -> None:
    weights = _weights(name, *key)
    for point, probability in points.items():
        assert goodness.tail(point, weights) == pytest.approx(probability, rel=0.03)


def test_without_parameters_the_law_is_anderson_and_darlings() -> None:
    # Anderson & Darling 1954: 2.492 at 0.05; Marsaglia & Marsaglia 2004: 3.8781 at 0.01. From memory.
    weights = tuple(1.0 / (j * (j + 1.0)) for j in range(1, 41))
    assert goodness.tail(2.492, weights) == pytest.approx(0.05, abs=3e-4)
    assert goodness.tail(3.8781, weights) == pytest.approx(0.01, abs=2e-5)


def test_the_inversion_against_simulation() -> None:
    weights = np.array(_weights("gamma", math.log(2.0), 0.0))
    draws = _random(2).standard_normal((200_000, 40)) ** 2 @ weights + 1.0 / 41.0
    for x in (0.3, 0.6, 1.0):
        share = float((draws > x).mean())
        error = 4.0 * math.sqrt(share * (1.0 - share) / draws.size)
        assert goodness.tail(x, tuple(weights.tolist())) == pytest.approx(share, abs=error + 1e-3)


@pytest.mark.parametrize(
    ("name", "draw"),
    [
        ("lognormal", lambda r, n: r.lognormal(0.0, 0.5, n)),
        ("weibull", lambda r, n: r.weibull(2.0, n)),
        ("gamma", lambda r, n: r.gamma(2.0, 1.0, n)),
        ("half-normal", lambda r, n: np.abs(r.standard_normal(n))),
        ("rayleigh", lambda r, n: r.weibull(2.0, n)),
        ("largest-extreme-value", lambda r, n: r.gumbel(size=n)),
        ("lognormal-3", lambda r, n: 3.0 + r.lognormal(0.0, 0.6, n)),
    ],
)
def test_p_values_are_right_for_fitted_parameters(
    name: str, draw: Callable[[np.random.Generator, int], np.ndarray]
) -> None:
    random = _random(31)
    p = []
    for _ in range(400):
        sample = Sample(draw(random, 40), NONE)
        tested = fit(name, sample).goodness(sample)
        assert tested is not None
        p.append(tested.p_value)
    for level in (0.05, 0.25):
        error = 4.0 * math.sqrt(level * (1.0 - level) / len(p))
        assert float((np.array(p) < level).mean()) == pytest.approx(level, abs=error)


def test_a_wrong_distribution_is_rejected() -> None:
    sample = Sample(_random(1).exponential(1.0, 200), NONE)
    tested = fit("normal", sample).goodness(sample)
    assert tested is not None
    assert tested.p_value < 1e-4


def test_the_normal_agrees_with_the_test_of_normality() -> None:
    from assignable.spc.normality import anderson_darling

    x = _random(12).standard_normal(60) + 0.3 * _random(13).exponential(1.0, 60)
    tested = fit("normal", Sample(x, NONE)).goodness(Sample(x, NONE))
    other = anderson_darling(x)
    assert tested is not None
    # One divides by n, the other by n - 1.
    assert tested.adjusted == pytest.approx(other.adjusted, abs=0.02)
    assert tested.p_value == pytest.approx(other.p_value, abs=0.03)


# ---------------------------------------------------------------------------------------------------
# What cannot be fitted


@pytest.mark.parametrize(
    ("name", "values", "below", "code"),
    [
        ("normal", [1.0] * 12, [], "no-variation"),
        ("normal", [1.0, 2.0, 3.0], [], "too-few-values"),
        ("normal", [], [0.5] * 12, "all-below-limits"),
        ("lognormal", [-1.0, *range(1, 12)], [], "outside-support"),
        ("weibull", [0.0, *range(1, 12)], [], "outside-support"),
        ("gamma", [*range(1, 12)], [0.0], "outside-support"),
        ("weibull-3", [*range(1, 12)], [0.5], "no-maximum"),
        ("normal", [1e200 * i for i in range(1, 12)], [], "too-large"),
    ],
)
def test_what_cannot_be_fitted(name: str, values: list[float], below: list[float], code: str) -> None:
    with pytest.raises(UnusableData) as error:
        fit(name, Sample(np.array(values, dtype=float), np.array(below, dtype=float)))
    assert error.value.faults[0].code == code


def test_values_and_limits_come_apart() -> None:
    nan = math.nan
    values, limits = split(np.array([1.0, nan, nan, 2.0]), np.array([nan, 0.5, nan, nan]))
    assert values.tolist() == [1.0, 2.0]
    assert limits.tolist() == [0.5]
    with pytest.raises(UnusableData) as error:
        split(np.array([1.0, 2.0]), np.array([nan, 0.5]))
    assert error.value.faults[0].where == ("data", "below", 1)
    with pytest.raises(UnusableData):
        split(np.array([1.0, 2.0]), np.array([nan]))


def test_transformations_find_what_made_the_values() -> None:
    z = _random(17).standard_normal(2000)
    power = fit_law(TRANSFORMS["box-cox"], Sample((2.0 + 0.3 * z) ** 2, NONE)).parameters[0].value
    assert power == pytest.approx(0.5, abs=0.2)
    su = fit_law(TRANSFORMS["johnson-su"], Sample(3.0 + 2.0 * np.sinh((z - 0.5) / 1.5), NONE))
    assert [one.value for one in su.parameters] == pytest.approx([0.5, 1.5, 3.0, 2.0], abs=0.45)
    sb = fit_law(TRANSFORMS["johnson-sb"], Sample(3.0 + 2.0 / (1.0 + np.exp(0.5 - z)), NONE))
    assert [one.value for one in sb.parameters] == pytest.approx([0.5, 1.0, 3.0, 5.0], abs=0.25)
    sl = fit_law(TRANSFORMS["johnson-sl"], Sample(4.0 - np.exp(0.5 * z), NONE))
    assert {one.name: one.value for one in sl.parameters}["threshold"] == pytest.approx(4.0, abs=0.15)


@pytest.mark.parametrize("name", ALL_LAWS)
def test_the_density_in_the_values_own_unit_is_the_slope_of_the_tail(name: str) -> None:
    rng = np.random.default_rng(21)
    values = 10.0 + rng.standard_t(4, 200) if name == "johnson-su" else rng.lognormal(1.0, 0.4, 200)
    found = fit_law(ALL_LAWS[name], Sample(values, NONE))
    x = np.linspace(*found.quantile(np.array([0.005, 0.995])), 200)
    step = 1e-5
    below, above = (found.tails(x + side)[0] for side in (-step, step))
    assert found.density(x) == pytest.approx((above - below) / (2 * step), rel=2e-4, abs=1e-7)
    assert np.isfinite(found.density(np.array([-1e300, -1.0, 0.0, 1e300]))).all()
