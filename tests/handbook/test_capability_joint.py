"""Several characteristics of one product against closed forms, scipy.stats and simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy
import scipy.stats

from assignable.spc.capability.joint import _interval, _lattice, _outside_with_error, assess, outside_box
from assignable.spc.capability.specification import Specification
from assignable.spc.errors import SpcError
from contract import served


def _random(seed: int) -> np.random.Generator:
    return np.random.Generator(np.random.PCG64(seed))


@pytest.mark.parametrize("k", [2, 3, 5, 8])
def test_the_share_outside_against_scipy(k: int) -> None:
    random = _random(k)
    root = random.standard_normal((k, k + 1))
    covariance = root @ root.T
    sd = np.sqrt(np.diag(covariance))
    correlation = covariance / np.outer(sd, sd)
    lower, upper = -random.uniform(1.5, 3.0, k), random.uniform(1.5, 3.0, k)
    found, error = _outside_with_error(lower, upper, correlation)
    inside = scipy.stats.multivariate_normal.cdf(
        upper,
        mean=np.zeros(k),
        cov=correlation,
        lower_limit=lower,
        maxpts=200_000 * k,
        abseps=1e-6,
        releps=1e-6,
    )
    assert found == pytest.approx(1.0 - inside, abs=5.0 * error + 3e-5)


def test_equal_correlations_by_a_single_integral() -> None:
    # With one common part the rest are independent given it (Dunnett & Sobel 1955).
    k, rho, limit = 6, 0.5, 3.5
    nodes, weights = np.polynomial.hermite_e.hermegauss(80)
    centre = math.sqrt(rho) * nodes
    one = scipy.special.ndtr((limit - centre) / math.sqrt(1 - rho)) - scipy.special.ndtr(
        (-limit - centre) / math.sqrt(1 - rho)
    )
    exact = 1.0 - float((weights * one**k).sum() / weights.sum())
    correlation = np.full((k, k), rho)
    np.fill_diagonal(correlation, 1.0)
    found, error = _outside_with_error(np.full(k, -limit), np.full(k, limit), correlation)
    assert found == pytest.approx(exact, abs=5.0 * error)
    assert error < 0.02 * exact


def test_independent_characteristics_multiply() -> None:
    lower, upper = np.array([[-3.0, -2.0, -4.0]]), np.array([[3.0, 4.0, 4.5]])
    one = scipy.special.ndtr(upper) - scipy.special.ndtr(lower)
    found = outside_box(lower, upper, np.eye(3)[None], _lattice(64, 2, 1)[0])
    assert found[0] == pytest.approx(1.0 - one.prod(), rel=1e-9)


def test_its_parts_agree() -> None:
    z = _random(1).multivariate_normal(np.zeros(3), [[1, 0.6, 0.3], [0.6, 1, 0.4], [0.3, 0.4, 1]], 500)
    specifications = [Specification(-3.0, 3.0), Specification(None, 2.5), Specification(-4.0, 4.0)]
    found = assess(z, specifications)
    own = [one.nonconforming_ppm for one in found.characteristics]
    assert max(own) <= found.nonconforming_ppm <= sum(own)
    # Correlated failures overlap.
    assert found.nonconforming_ppm < found.independent_ppm
    for one in found.characteristics:
        assert one.alone_ppm <= one.nonconforming_ppm
    assert sum(one.share for one in found.characteristics) == pytest.approx(1.0)
    assert (
        found.total_lower_ppm < found.nonconforming_ppm < found.total_upper_bound_ppm < found.total_upper_ppm
    )
    assert found.index is not None
    assert 1e6 * scipy.special.ndtr(-3.0 * found.index) == pytest.approx(found.nonconforming_ppm)
    outside = (np.abs(z[:, 0]) > 3.0) | (z[:, 1] > 2.5) | (np.abs(z[:, 2]) > 4.0)
    assert found.observed == int(outside.sum())
    # Units and order change nothing but the numerical error.
    turned = assess(
        1000.0 * z[:, ::-1] + 5.0,
        [Specification(-3995.0, 4005.0), Specification(None, 2505.0), Specification(-2995.0, 3005.0)],
    )
    assert turned.nonconforming_ppm == pytest.approx(
        found.nonconforming_ppm, abs=6.0 * (found.standard_error_ppm + turned.standard_error_ppm) + 1e-6
    )


def test_coverage_of_its_interval() -> None:
    correlation = np.array([[1.0, 0.6], [0.6, 1.0]])
    lower, upper = np.array([-3.0, -2.5]), np.array([2.5, 1e12])
    truth = _outside_with_error(lower, upper, correlation)[0]
    random, reps, n = _random(3), 120, 60
    hits = bounds = 0
    for _ in range(reps):
        x = random.multivariate_normal(np.zeros(2), correlation, n)
        mean, sd = x.mean(axis=0), x.std(axis=0, ddof=1)
        ends = _interval((lower - mean) / sd, (upper - mean) / sd, np.corrcoef(x.T), n, 0.95)
        hits += ends[0] <= truth <= ends[1]
        bounds += truth <= ends[2]
    # A nominal 0.95, within four standard errors of 120 trials.
    assert hits / reps == pytest.approx(0.95, abs=4.0 * math.sqrt(0.95 * 0.05 / reps))
    assert bounds / reps == pytest.approx(0.95, abs=4.0 * math.sqrt(0.95 * 0.05 / reps))


def test_one_item_lacks_a_value() -> None:
    z = _random(4).standard_normal((50, 2))
    both = [Specification(-4.0, 4.0)] * 2
    gapped = np.vstack([z, [[math.nan, 1.0]]])
    assert assess(gapped, both) == assess(z, both)


@pytest.mark.parametrize(
    ("values", "code"),
    [
        (np.ones((5, 2)), "too-few-values"),
        (np.column_stack([np.arange(20.0), np.ones(20)]), "no-variation"),
        (np.column_stack([np.arange(20.0), 2.0 * np.arange(20.0)]), "collinear"),
        (np.ones((20, 3)), "unequal-length"),
        (1e200 * np.random.Generator(np.random.PCG64(1)).standard_normal((20, 2)), "too-large"),
    ],
)
def test_what_cannot_be_assessed(values: np.ndarray, code: str) -> None:
    with pytest.raises(SpcError) as error:
        assess(values, [Specification(-1.0, 1.0)] * 2)
    assert error.value.faults[0].code == code


def test_over_http() -> None:
    sent = served.example("capability-several")
    answer = served.answer_of("assessSeveral", sent)
    assert len(answer["joint"]["characteristics"]) == 3
    assert answer == served.answer_of("assessSeveral", sent)
    sent["characteristics"][1]["specification"] = {}
    problem = served.call("assessSeveral", sent).json
    assert problem is not None
    assert problem["errors"][0]["pointer"] == "#/characteristics/1/specification"
