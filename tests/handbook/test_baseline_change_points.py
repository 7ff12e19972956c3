"""Steps within a baseline: published case, exact null distribution, brute force, seeded simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.stats

from assignable.spc.baseline import change_points
from assignable.spc.charts.individuals import IndividualsOptions
from assignable.spc.charts.individuals import fit as fit_individuals
from assignable.spc.charts.subgroups import SubgroupOptions
from assignable.spc.charts.subgroups import fit as fit_subgroups
from assignable.spc.data import Individuals, Subgroups, SubgroupSummary

# Annual flow of the Nile at Aswan, 1871-1970, 1e8 m3: open data (Cobb 1978); from memory, held to its
# published total mean 919.35.
NILE = """1120 1160 963 1210 1160 1160 813 1230 1370 1140 995 935 1110 994 1020 960 1180 799 958 1140 1100 1210
1150 1250 1260 1220 1030 1100 774 840 874 694 940 833 701 916 692 1020 1050 969 831 726 456 824 702 1120 1100
832 764 821 768 845 864 862 698 845 744 796 1040 759 781 865 845 944 984 897 822 1010 771 676 649 846 812 742
801 1040 860 874 848 890 744 749 838 1050 918 986 797 923 975 815 1020 906 901 1170 912 746 919 718 714 740"""
nile = np.array(NILE.split(), dtype=float)


def test_the_nile_steps_after_1898() -> None:
    assert nile.mean() == pytest.approx(919.35, abs=1e-9)
    found = change_points.of_values(nile)
    assert found is not None
    assert found.mean is not None
    # Cobb (1978): the change lies between 1898 and 1899 (from memory). Means 1097.75 and 849.97 (from memory).
    assert 1871 + found.mean.index == 1899
    assert found.mean.before == pytest.approx(1097.75, abs=0.005)
    assert found.mean.after == pytest.approx(849.97, abs=0.005)
    assert found.mean.p_value < 1e-8
    assert found.variance is not None
    assert found.variance.p_value > 0.01


def test_a_fit_cautions_of_a_step() -> None:
    found = fit_individuals(Individuals(nile), IndividualsOptions())
    assert found.diagnostics is not None
    assert found.diagnostics.change_point == change_points.of_values(nile)
    assert "shift-in-baseline" in {caution.code for caution in found.cautions}
    rows = np.random.default_rng(5).normal(2.5, 0.01, (30, 5))
    quiet = fit_subgroups(Subgroups(rows), SubgroupOptions("mean-range"), spread="range")
    assert not {c.code for c in quiet.cautions} & {"shift-in-baseline", "spread-shift-in-baseline"}
    rows[18:] = 2.5 + 3.0 * (rows[18:] - 2.5)
    loud = fit_subgroups(Subgroups(rows), SubgroupOptions("mean-range"), spread="range")
    assert "spread-shift-in-baseline" in {caution.code for caution in loud.cautions}
    assert loud.diagnostics is not None
    assert loud.diagnostics.change_point is not None
    step = loud.diagnostics.change_point.variance
    assert step is not None
    assert abs(step.index - 18) <= 1
    assert step.after / step.before == pytest.approx(3.0, rel=0.3)


def _log_likelihood(parts: list[np.ndarray], weights: list[np.ndarray]) -> float:
    """Of normal parts with a mean each and one variance over the weights."""
    total = sum(
        float((w * (x - np.average(x, weights=w)) ** 2).sum()) for x, w in zip(parts, weights, strict=True)
    )
    n = sum(map(len, parts))
    return -0.5 * n * math.log(total / n)


@pytest.mark.parametrize("m", [8, 23, 60])
def test_a_step_of_mean_is_the_best_of_all_splits(m: int) -> None:
    rng = np.random.default_rng(m)
    sizes = rng.integers(2, 7, m)
    rows = rng.normal(50.0, 3.0, (m, 6)) + np.where(np.arange(m) >= m // 3, 2.0, 0.0)[:, None]
    rows[np.arange(6) >= sizes[:, None]] = np.nan
    statistics = Subgroups(rows).statistics()
    found = change_points.of_subgroups(statistics)
    assert found is not None
    assert found.mean is not None
    x, w = statistics.mean, sizes / sizes.mean()
    alone = _log_likelihood([x], [w])
    ratios = {k: 2.0 * (_log_likelihood([x[:k], x[k:]], [w[:k], w[k:]]) - alone) for k in range(2, m - 1)}
    best = max(ratios, key=lambda k: ratios[k])
    assert found.mean.index == best
    assert found.mean.statistic == pytest.approx(ratios[best], rel=1e-9)
    assert found.mean.before == pytest.approx(np.average(x[:best], weights=w[:best]), rel=1e-12)
    assert found.mean.after == pytest.approx(np.average(x[best:], weights=w[best:]), rel=1e-12)


def test_a_step_of_spread_is_the_best_of_all_splits() -> None:
    rng = np.random.default_rng(4)
    x = rng.normal(0.0, 1.0, 40)
    x[25:] *= 2.5
    found = change_points.of_values(x)
    assert found is not None
    assert found.variance is not None
    ratios = {}
    for k in range(5, 36):
        a, b = k - 1, 39 - k
        one, two = x[:k].var(ddof=1), x[k:].var(ddof=1)
        pooled = (a * one + b * two) / (a + b)
        ratio = (a + b) * math.log(pooled) - a * math.log(one) - b * math.log(two)
        ratios[k] = (ratio / (1 + (1 / a + 1 / b - 1 / (a + b)) / 3), ratio)
    best = max(ratios, key=lambda k: ratios[k][0])
    assert found.variance.index == best
    assert found.variance.statistic == pytest.approx(ratios[best][1], rel=1e-9)
    assert found.variance.before == pytest.approx(x[:best].std(ddof=1), rel=1e-9)
    # Scipy's own F distribution: the p-value of this split alone is a lower bound of the search's.
    alone = 2.0 * min(
        scipy.stats.f.cdf((found.variance.before / found.variance.after) ** 2, best - 1, 39 - best),
        scipy.stats.f.sf((found.variance.before / found.variance.after) ** 2, best - 1, 39 - best),
    )
    assert alone < found.variance.p_value < 36 * alone


def _exact(z: float, m: int) -> float:
    """P(largest score beyond z), sigma known: the scores are a Markov chain, followed by Gauss-Legendre."""
    x, w = np.polynomial.legendre.leggauss(100)
    x, w = z * x, z * w
    density = np.exp(-0.5 * x * x) / math.sqrt(2.0 * math.pi)
    for k in range(2, m - 2):
        r = math.sqrt(k * (m - k - 1) / ((k + 1) * (m - k)))
        s = math.sqrt(1.0 - r * r)
        density = (
            np.exp(-0.5 * ((x[:, None] - r * x) / s) ** 2) / (s * math.sqrt(2 * math.pi)) @ (w * density)
        )
    return 1.0 - float(w @ density)


@pytest.mark.parametrize("m", [8, 12, 25, 60, 150, 400])
@pytest.mark.parametrize("z", [1.5, 2.0, 2.5, 3.0, 3.6])
def test_the_search_has_the_exact_distribution_where_sigma_is_known(m: int, z: float) -> None:
    single = math.erfc(z / math.sqrt(2.0))
    assert change_points._of_search(single, m, 2) == pytest.approx(_exact(z, m), rel=0.052)


def test_thinning_of_long_series_changes_little() -> None:
    # Every split taken one by one, beside the stretches that long series are summed in.
    m, single = 5000, 1e-4
    k = np.arange(2, m - 1, dtype=float)
    u = 0.5 * np.log(k / (m - k))
    z, du = -float(scipy.special.ndtri(single / 2)), np.diff(u)
    x = 0.5 * z * np.sqrt(2 * du)
    nu = (scipy.special.ndtr(x) - 0.5) / (
        x * (x * scipy.special.ndtr(x) + np.exp(-x * x / 2) / math.sqrt(2 * math.pi))
    )
    hazard = 2 * z * math.exp(-z * z / 2) / math.sqrt(2 * math.pi) * float(du @ nu)
    assert change_points._of_search(single, m, 2) == pytest.approx(
        -math.expm1(math.log1p(-single) - hazard * (1 + 2.29 * math.exp(-0.743 * z * z))), rel=2e-3
    )


@pytest.mark.parametrize("kind", ["values", "subgroups", "ranges"])
def test_p_values_are_honest(kind: str) -> None:
    """4000 quiet baselines of 20 points: each p-value is as frequent as it says, within 4 standard errors
    and the tenth that is promised."""
    rng = np.random.default_rng(11)
    runs, m = 4000, 20
    found = []
    for _ in range(runs):
        if kind == "values":
            found.append(change_points.of_values(rng.standard_normal(m)))
            continue
        statistics = Subgroups(rng.standard_normal((m, 4))).statistics()
        if kind == "ranges":
            statistics = SubgroupSummary(statistics.mean, statistics.size, statistics.range).statistics()
        found.append(change_points.of_subgroups(statistics))
    for steps in ([one.mean for one in found if one], [one.variance for one in found if one]):
        p = np.array([step.p_value for step in steps if step])
        assert len(p) == runs
        for level in (0.01, 0.05, 0.2, 0.5):
            error = 4.0 * math.sqrt(level * (1 - level) / runs) + 0.1 * level
            assert abs(float((p < level).mean()) - level) < error


def test_a_step_of_mean_is_no_step_of_spread() -> None:
    rng = np.random.default_rng(2)
    small = 0
    for _ in range(400):
        x = rng.standard_normal(30)
        x[12:] += 4.0
        found = change_points.of_values(x)
        assert found is not None
        assert found.mean is not None
        assert found.variance is not None
        assert abs(found.mean.index - 12) <= 3
        small += found.variance.p_value < 0.05
    assert small / 400 < 0.05 + 4 * math.sqrt(0.05 * 0.95 / 400)


@pytest.mark.filterwarnings("error")
def test_what_cannot_be_looked_at() -> None:
    assert change_points.of_values(np.arange(7.0)) is None
    assert change_points.of_values(np.full(20, 3.25)) is None
    two_levels = change_points.of_values(np.repeat([1.0, 2.0], 10))
    assert two_levels is not None
    assert two_levels.mean is not None
    assert (two_levels.mean.index, two_levels.mean.p_value) == (10, 0.0)
    assert two_levels.variance is None
    rows = np.zeros((12, 4))
    rows[:, 0] = np.arange(12)
    still = rows.copy()
    still[:6] = np.arange(6)[:, None]
    found = change_points.of_subgroups(Subgroups(still).statistics())
    assert found is not None
    lonely = change_points.of_subgroups(Subgroups(rows[:, :1]).statistics())
    assert lonely is not None
    assert lonely.variance is None
