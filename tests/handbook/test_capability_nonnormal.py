"""Capability by quantiles: coverage of its intervals, the choice of distribution, bounds, and the study over HTTP."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
import scipy
import scipy.stats

from assignable.spc.capability.distributions import Sample, fit
from assignable.spc.capability.indices import capability
from assignable.spc.capability.nonnormal import (
    EMPIRICAL,
    QuantileCapability,
    by_quantiles,
    choose,
    order_ranks,
)
from assignable.spc.capability.specification import Specification
from assignable.spc.capability.study import study
from assignable.spc.errors import SpcError, UnusableData, UnusableParameter
from contract import served

NONE = np.empty(0)
NAN = math.nan


def _random(seed: int) -> np.random.Generator:
    return np.random.Generator(np.random.PCG64(seed))


# ---------------------------------------------------------------------------------------------------
# Coverage


@pytest.mark.parametrize(
    ("name", "law", "limits", "count", "limit"),
    [
        ("lognormal", scipy.stats.lognorm(0.5), (0.2, 5.0), 50, None),
        ("weibull", scipy.stats.weibull_min(2.0), (0.02, 3.0), 50, None),
        ("gamma", scipy.stats.gamma(3.0), (0.1, 12.0), 100, None),
        ("largest-extreme-value", scipy.stats.gumbel_r(), (-2.5, 8.0), 100, None),
        ("exponential", scipy.stats.expon(), (None, 7.0), 50, None),
        ("half-normal", scipy.stats.halfnorm(), (None, 4.0), 50, None),
        # Some three in ten below the limit of detection.
        ("lognormal", scipy.stats.lognorm(0.5), (None, 5.0), 60, 0.8),
        ("normal", scipy.stats.norm(), (-4.0, 3.5), 60, -0.6),
    ],
)
def test_coverage_of_intervals(
    name: str, law: Any, limits: tuple[float | None, float], count: int, limit: float | None
) -> None:
    low, middle, high = law.ppf([0.00135, 0.5, 0.99865])
    lower, upper = limits
    sides = [(upper - middle) / (high - middle)]
    share = float(law.sf(upper))
    if lower is not None:
        sides.append((middle - lower) / (middle - low))
        share += float(law.cdf(lower))
    ppk, ppm = min(sides), 1e6 * share
    random, reps = _random(42), 400
    hits = np.zeros(4)
    for _ in range(reps):
        x = law.rvs(count, random_state=random)
        sample = Sample(x, NONE)
        if limit is not None:
            sample = Sample(x[x >= limit], np.full(int((x < limit).sum()), limit))
        found = by_quantiles(fit(name, sample), sample, Specification(lower, upper), 0.95)
        assert found.ppk.lower is not None
        assert found.ppk.upper is not None
        assert found.ppk.lower_bound is not None
        assert found.expected.total_lower_ppm is not None
        assert found.expected.total_upper_ppm is not None
        hits += [
            found.ppk.lower <= ppk <= found.ppk.upper,
            found.ppk.lower_bound <= ppk,
            found.expected.total_lower_ppm <= ppm <= found.expected.total_upper_ppm,
            found.pp is None
            or found.pp.lower is None
            or found.pp.upper is None
            or lower is None
            or found.pp.lower <= (upper - lower) / (high - low) <= found.pp.upper,
        ]
    # 0.92 to 0.98 for a nominal 0.95, with 400 trials' own standard error of 0.011.
    assert (hits[:3] / reps).min() >= 0.915
    assert hits[3] / reps >= 0.91
    assert hits[0] / reps <= 0.985


def test_empirical_intervals_cover() -> None:
    random, hits, reps = _random(5), 0, 200
    truth = (5.0 - math.log(2.0)) / (-math.log(0.00135) - math.log(2.0))
    for _ in range(reps):
        sample = Sample(random.exponential(1.0, 8000), NONE)
        found = by_quantiles(None, sample, Specification(None, 5.0), 0.95)
        assert found.ppk.lower is not None
        assert found.ppk.upper is not None
        hits += found.ppk.lower <= truth <= found.ppk.upper
    # Two quantiles at half the risk each cover more than asked.
    assert hits / reps >= 0.95


# ---------------------------------------------------------------------------------------------------
# Empirical quantiles


@pytest.mark.parametrize(("count", "p"), [(100, 0.5), (5000, 0.00135), (5000, 0.99865), (30, 0.1)])
def test_ranks_against_the_binomial(count: int, p: float) -> None:
    lower, upper = order_ranks(count, p, 0.95)
    binomial = scipy.stats.binom(count, p)
    if lower is not None:
        # The quantile is below the r-th value when fewer than r lie below it.
        assert binomial.cdf(lower - 1) <= 0.025 < binomial.cdf(lower)
    if upper is not None:
        assert binomial.sf(upper - 1) <= 0.025 < binomial.sf(upper - 2)


def test_few_values_bound_no_outer_quantile() -> None:
    found = by_quantiles(None, Sample(_random(1).normal(size=200), NONE), Specification(-5.0, 5.0), 0.95)
    assert found.distribution == EMPIRICAL
    assert found.quantiles[0].lower is None
    assert found.quantiles[0].upper is not None
    assert found.quantiles[1].lower is not None
    assert found.ppk.lower is None
    assert found.ppk.upper is not None
    # Not one of 1100 values would show a quantile of 0.00135 with 95 %: ln 0.025/ln 0.99865 = 2731.
    assert order_ranks(2730, 0.00135, 0.95)[0] is None
    assert order_ranks(2731, 0.00135, 0.95)[0] == 1


# ---------------------------------------------------------------------------------------------------
# Choice


@pytest.mark.parametrize(
    ("draw", "accepted"),
    [
        (lambda r: r.normal(5.0, 1.0, 200), {"normal"}),
        (lambda r: r.lognormal(0.0, 0.8, 200), {"lognormal", "lognormal-3"}),
        (lambda r: r.exponential(1.0, 200), {"exponential"}),
        (lambda r: r.weibull(2.0, 200), {"rayleigh", "weibull"}),
    ],
)
def test_auto_finds_what_made_the_values(
    draw: Callable[[np.random.Generator], np.ndarray], accepted: set[str]
) -> None:
    choice, _ = choose("auto", Sample(draw(_random(11)), NONE))
    assert choice.used in accepted
    criteria = [one.aicc for one in choice.candidates if one.aicc is not None]
    assert criteria == sorted(criteria)
    assert all((one.aicc is None) == (one.not_fitted is not None) for one in choice.candidates)
    assert choice.used in choice.reason


def test_auto_falls_back_to_the_values_themselves() -> None:
    random = _random(2)
    mixed = np.concatenate([random.normal(0.0, 1.0, 200), random.normal(12.0, 0.5, 120)])
    choice, found = choose("auto", Sample(mixed, NONE))
    assert found is None
    assert choice.used == EMPIRICAL
    assert "rejects" in choice.reason


def test_a_name_is_kept_whatever_the_evidence() -> None:
    x = _random(3).exponential(1.0, 300)
    found = study(x, Specification(None, 9.0), distribution="rayleigh")
    assert found.choice.used == "rayleigh"
    assert "distribution-rejected" in {one.code for one in found.cautions}
    assert "distribution-chosen" not in {one.code for one in found.cautions}


def test_the_criterion_against_its_formula() -> None:
    x = _random(4).normal(size=25)
    (one,) = choose("normal", Sample(x, NONE))[0].candidates
    logs = scipy.stats.norm.logpdf(x, x.mean(), x.std()).sum()
    assert one.aicc == pytest.approx(-2.0 * logs + 4.0 + 12.0 / 22.0, rel=1e-12)


# ---------------------------------------------------------------------------------------------------
# Natural bounds, and the normal case as it was


def test_a_limit_at_a_natural_bound_asks_for_nothing() -> None:
    x = _random(6).weibull(2.0, 100)
    bounded = study(x, Specification(0.0, 3.5, natural_lower=0.0), distribution="weibull").quantiles
    alone = study(x, Specification(None, 3.5), distribution="weibull").quantiles
    assert isinstance(bounded, QuantileCapability)
    assert bounded == alone
    assert bounded.pp is None
    normal = study(x, Specification(0.0, 3.5, natural_lower=0.0)).capability
    assert normal is not None
    assert normal.cp is None
    assert normal.ppk is not None
    assert normal.ppu is not None
    assert normal.ppk.value == normal.ppu.value


def test_the_normal_by_quantiles_is_nearly_the_usual_index() -> None:
    x = _random(7).normal(size=400)
    sample = Sample(x, NONE)
    ours = by_quantiles(fit("normal", sample), sample, Specification(-4.0, 3.5), 0.95)
    usual = capability(x, Specification(-4.0, 3.5))
    assert usual.ppk is not None
    assert ours.ppk.lower is not None
    # The divisors are n and n - 1.
    assert ours.ppk.value == pytest.approx(usual.ppk.value * math.sqrt(400 / 399), rel=2e-4)
    assert ours.ppk.lower == pytest.approx(usual.ppk.lower, rel=0.01)
    assert usual.expected_total is not None
    assert ours.expected.total_ppm == pytest.approx(usual.expected_total.total_ppm, rel=0.05)


@pytest.mark.parametrize(
    ("given", "code"),
    [
        ({"lower": 0.0, "natural_lower": 0.0}, "no-limit"),
        ({"lower": -1.0, "upper": 3.0, "natural_lower": 0.0}, "limit-beyond-bound"),
        ({"lower": 1.0, "upper": 3.0, "natural_upper": 2.0}, "limit-beyond-bound"),
        ({"lower": 1.0, "natural_lower": 3.0, "natural_upper": 2.0}, "bounds-crossed"),
        ({"upper": 3.0, "natural_lower": math.inf}, "not-finite"),
    ],
)
def test_impossible_bounds(given: dict[str, float], code: str) -> None:
    with pytest.raises(UnusableParameter) as error:
        Specification(**given)
    assert {fault.code for fault in error.value.faults} == {code}


def test_a_distribution_that_leaves_the_possible_is_told() -> None:
    x = _random(8).exponential(1.0, 100)
    found = study(x, Specification(None, 9.0, natural_lower=0.0))
    assert "beyond-natural-bound" in {one.code for one in found.cautions}
    with pytest.raises(UnusableData, match="natural bound"):
        study(-x, Specification(None, 9.0, natural_lower=0.0))


# ---------------------------------------------------------------------------------------------------
# The study


def test_results_below_a_limit() -> None:
    x = _random(9).lognormal(0.0, 0.6, 80)
    below = np.where(x < 0.7, 0.7, NAN)
    found = study(np.where(x < 0.7, NAN, x), Specification(None, 6.0), distribution="auto", below=below)
    assert found.status == "not-assessed"
    assert found.capability is None
    assert found.quantiles is not None
    assert found.quantiles.below_limits == int((x < 0.7).sum())
    assert found.quantiles.observed.inspected == 80
    assert {"below-limits", "distribution-chosen"} <= {one.code for one in found.cautions}
    assert all(one.goodness is None for one in found.choice.candidates)
    # A limit above the specification's leaves the result undecided, and one below a lower limit decides it.
    below[0], x[0] = 9.0, NAN
    told = study(
        np.where(below == below, NAN, x), Specification(0.75, 6.0), distribution="lognormal", below=below
    )
    assert told.quantiles is not None
    assert told.quantiles.observed.below == int((below == 0.7).sum()) + int((x[x == x] < 0.75).sum()) - int(
        (x[(x == x)] < 0.7).sum()
    )
    assert "nobody knows" in next(one.sentence for one in told.cautions if one.code == "below-limits")


def test_a_process_out_of_control_is_provisional() -> None:
    x = _random(10).weibull(2.0, 60)
    assert study(x, Specification(None, 6.0), distribution="weibull").status == "established"
    x[20] = 7.0
    wild = study(x, Specification(None, 9.0), distribution="weibull")
    assert wild.status == "provisional"
    assert wild.cautions[0].code == "not-in-control"
    x[20] = 1.0
    x[30:] += 1.5
    moved = study(x, Specification(None, 9.0), distribution="weibull")
    assert moved.status == "provisional"
    assert "lasting step of the level at point 30" in moved.cautions[0].sentence


@pytest.mark.parametrize("shape", [(100,), (25, 4)])
def test_a_process_in_control_is_seldom_provisional(shape: tuple[int, ...]) -> None:
    random, reps = _random(16), 200
    found = [study(random.normal(size=shape), Specification(-5.0, 5.0)).status for _ in range(reps)]
    # 5 % by the limits and 1 % by the search for a step, within four standard errors.
    assert found.count("provisional") / reps <= 0.06 + 4.0 * math.sqrt(0.06 * 0.94 / reps)


def test_skewed_values_are_charted_by_their_scores() -> None:
    # On a chart for normal values the long tail of these signals.
    x = _random(15).exponential(1.0, 300)
    assert study(x, Specification(None, 12.0), distribution="exponential").status == "established"
    assert study(x, Specification(None, 12.0)).status == "provisional"


@pytest.mark.parametrize(
    ("options", "code"),
    [
        ({"distribution": "weibull", "short_run": True}, "normal-only"),
        ({"distribution": "weibull", "sigma_estimator": "mean-moving-range"}, "normal-only"),
        ({"distribution": "empirical", "below": True}, "empirical-with-limits"),
        ({"distribution": "weibull", "confidence": 0.4}, "confidence-out-of-range"),
    ],
)
def test_what_does_not_go_together(options: dict[str, Any], code: str) -> None:
    x = _random(10).weibull(2.0, 50)
    if options.pop("below", False):
        x[0], options["below"] = NAN, np.array([0.1, *[NAN] * 49])
    with pytest.raises(SpcError) as error:
        study(x, Specification(None, 6.0), **options)
    assert error.value.faults[0].code == code


def test_over_http() -> None:
    answer = served.answer_of("assessMeasurements", served.example("capability-below-limits"))
    assert answer["capability"] is None
    assert answer["quantiles"]["below_limits"] > 5
    sent = served.example("capability-below-limits")
    sent["data"]["below"] = sent["data"]["below"][:-1]
    problem = served.call("assessMeasurements", sent).json
    assert problem is not None
    assert problem["errors"][0]["pointer"] == "#/data/below"
    chosen = served.answer_of("assessMeasurements", served.example("capability-chosen-distribution"))
    assert chosen["choice"]["asked"] == "auto"
    assert len(chosen["choice"]["candidates"]) == 12
    rows = served.example("capability-measurements")
    rows["distribution"] = "lognormal"
    assert served.answer_of("assessMeasurements", rows)["quantiles"]["distribution"] == "lognormal"
