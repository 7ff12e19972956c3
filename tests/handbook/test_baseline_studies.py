"""Joint limits, screening, and what estimated limits deliver: seeded simulation, limiting cases, the record."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.special
import scipy.stats

from assignable.spc import factors
from assignable.spc.baseline import estimation, joint, screening
from assignable.spc.charts import individuals, subgroups
from assignable.spc.charts.common import Exclusion, LimitBasis, Standards
from assignable.spc.data import Individuals, Subgroups, SubgroupSummary
from assignable.spc.errors import UnusableParameter
from assignable.spc.sigma import moving_range, within

# ---------------------------------------------------------------------------------------------------
# Joint limits


@pytest.mark.parametrize("m", [5, 25, 300])
def test_with_sigma_known_points_share_the_probability(m: int) -> None:
    found = joint.of_subgroups(0.05, m, 5, None, "sd", "given")
    each = 0.95 ** (0.5 / m)
    assert found.sigma_multiple == pytest.approx(
        math.sqrt((m - 1) / m) * float(scipy.special.ndtri(0.5 + 0.5 * each)), rel=1e-9
    )
    assert found.spread_tail_probability == pytest.approx(1.0 - each, rel=1e-6)


@pytest.mark.parametrize(
    ("m", "n", "spread", "estimator"),
    [
        (10, 5, "range", "mean-range"),
        (25, 2, "range", "mean-range"),
        (25, 5, "sd", "mean-sd"),
        (10, 3, "sd", "pooled-sd"),
    ],
)
def test_a_quiet_baseline_of_subgroups_signals_as_often_as_stated(
    m: int, n: int, spread: str, estimator: str
) -> None:
    alpha, runs = 0.05, 20_000
    x = np.random.default_rng(20).standard_normal((runs, m, n))
    freedom = within(Subgroups(x[0]).statistics(), estimator).degrees_of_freedom
    limits = joint.of_subgroups(alpha, m, n, freedom, spread, estimator)  # type: ignore[arg-type]
    ranges, sds = np.ptp(x, axis=2), x.std(axis=2, ddof=1)
    if estimator == "mean-range":
        sigma = ranges.mean(axis=1) / factors.d2(n)
    elif estimator == "mean-sd":
        sigma = sds.mean(axis=1) / factors.c4(n)
    else:
        sigma = np.sqrt((sds**2).mean(axis=1)) / factors.c4(m * (n - 1) + 1)
    means = x.mean(axis=2)
    far = (
        np.abs(means - means.mean(axis=1, keepdims=True)) * math.sqrt(n)
        > limits.sigma_multiple * sigma[:, None]
    )
    isf = factors.range_isf if spread == "range" else factors.sd_isf
    wide = (ranges if spread == "range" else sds) > isf(limits.spread_tail_probability, n) * sigma[:, None]
    share = float((far | wide).any(axis=1).mean())
    assert abs(share - alpha) < 0.1 * alpha + 4 * math.sqrt(alpha * (1 - alpha) / runs)
    # Each panel has its half.
    for panel in (far, wide):
        assert float(panel.any(axis=1).mean()) == pytest.approx(0.0253, abs=0.0055)


@pytest.mark.parametrize("m", [25, 100])
@pytest.mark.parametrize("resistant", [False, True])
def test_a_quiet_baseline_of_single_values_signals_no_more_often_than_stated(m: int, resistant: bool) -> None:
    alpha, runs = 0.05, 20_000
    x = np.random.default_rng(21).standard_normal((runs, m))
    ranges = np.abs(np.diff(x, axis=1))
    freedom = moving_range(x[0], statistic="median" if resistant else "mean").degrees_of_freedom
    limits = joint.of_values(alpha, m, 2, freedom, resistant=resistant)
    middle = np.median(ranges, axis=1) / factors.range_median(2)
    sigma = middle if resistant else ranges.mean(axis=1) / factors.d2(2)
    far = np.abs(x - x.mean(axis=1, keepdims=True)) > limits.sigma_multiple * sigma[:, None]
    wide = ranges > factors.range_isf(limits.spread_tail_probability, 2) * sigma[:, None]
    share = float((far.any(axis=1) | wide.any(axis=1)).mean())
    assert (0.2 if resistant else 0.6) * alpha < share < alpha + 4 * math.sqrt(alpha * (1 - alpha) / runs)


def test_joint_limits_judge_the_baseline_and_leave_the_frozen_ones() -> None:
    rows = np.random.default_rng(3).normal(2.5, 0.01, (25, 5))
    rows[9] += 2.5 + 0.0160 - rows[9].mean()  # beyond three sigma, within the joint limits
    plain = subgroups.fit(Subgroups(rows), subgroups.SubgroupOptions("mean-range"), spread="range")
    wide = subgroups.fit(
        Subgroups(rows),
        subgroups.SubgroupOptions("mean-range", joint_false_alarm_probability=0.05),
        spread="range",
    )
    assert plain.limits == wide.limits
    assert plain.baseline is not None
    assert wide.baseline is not None
    assert (plain.baseline.verdict, wide.baseline.verdict) == ("signal", "in-control")
    assert wide.diagnostics is not None
    assert wide.diagnostics.judged_by is not None
    limits = wide.diagnostics.judged_by
    centre, sigma = wide.limits.centre, wide.limits.sigma
    assert wide.baseline.panels.mean.upper[0] == pytest.approx(
        centre + limits.sigma_multiple * sigma / math.sqrt(5), rel=1e-12
    )
    assert wide.baseline.panels.range.upper[0] == pytest.approx(
        factors.range_isf(limits.spread_tail_probability, 5) * sigma, rel=1e-9
    )
    assert set(wide.baseline.panels.range.lower.tolist()) == {0.0}


def test_joint_limits_need_three_points() -> None:
    with pytest.raises(UnusableParameter):
        joint.of_subgroups(0.05, 2, 5, 8.0, "range", "mean-range")
    with pytest.raises(UnusableParameter):
        joint.of_values(0.05, 3, 2, 2.0, resistant=False)


# ---------------------------------------------------------------------------------------------------
# Screening


def _spoilt() -> np.ndarray:
    x = np.random.default_rng(8).normal(300.0, 4.0, 60)
    x[10], x[30], x[45] = 420.0, 330.0, 318.5
    return x


def test_screening_goes_round_by_round_and_stays_in_the_record() -> None:
    options = individuals.IndividualsOptions(
        sigma_estimator="mean-moving-range",
        exclude=(Exclusion(5, "wrong nozzle"),),
        screening=screening.Screening(5, "start-up"),
    )
    found = individuals.fit(Individuals(_spoilt()), options)
    assert found.diagnostics is not None
    report = found.diagnostics.screening
    assert report is not None
    assert report.stopped_because == "none-beyond"
    assert report.still_beyond == 0
    assert report.left_out == sum(one.left_out for one in report.rounds) >= 2
    assert len(report.rounds) >= 2
    assert found.limits.baseline is not None
    stated, *screened = found.limits.baseline.excluded
    assert stated == Exclusion(5, "wrong nozzle")
    assert screened[0] == Exclusion(10, "screened automatically in round 1: start-up")
    assert len(screened) == report.left_out
    # By hand: the same limits from the same points left out for stated reasons.
    by_hand = individuals.fit(
        Individuals(_spoilt()),
        individuals.IndividualsOptions(
            exclude=tuple(Exclusion(one.index, "x") for one in (stated, *screened))
        ),
    )
    assert (by_hand.limits.centre, by_hand.limits.sigma) == (found.limits.centre, found.limits.sigma)
    assert found.baseline is not None
    assert len(found.baseline.panels.value.index) == 60
    assert not {signal.index for signal in found.baseline.signals if signal.panel == "value"}
    assert "screened-automatically" in {caution.code for caution in found.cautions}


def test_screening_is_bounded() -> None:
    x = _spoilt()
    one_round = individuals.fit(
        Individuals(x), individuals.IndividualsOptions(screening=screening.Screening(1))
    )
    assert one_round.diagnostics is not None
    report = one_round.diagnostics.screening
    assert report is not None
    assert report.stopped_because == "rounds"
    assert report.still_beyond > 0
    rows = np.random.default_rng(1).normal(0.0, 1.0, (30, 4)) + 4.0 * np.arange(30)[:, None]
    found = subgroups.fit(
        Subgroups(rows),
        subgroups.SubgroupOptions("mean-range", screening=screening.Screening(10)),
        spread="range",
    )
    assert found.diagnostics is not None
    drift = found.diagnostics.screening
    assert drift is not None
    assert drift.stopped_because == "share"
    assert drift.left_out <= 6
    assert found.limits.baseline is not None
    assert found.limits.baseline.points == 30 - drift.left_out
    assert any("more than allowed" in caution.sentence for caution in found.cautions)


def test_a_quiet_baseline_is_left_alone() -> None:
    rows = np.random.default_rng(2).normal(0.0, 1.0, (25, 4))
    options = subgroups.SubgroupOptions(
        "mean-range", screening=screening.Screening(3), joint_false_alarm_probability=0.01
    )
    found = subgroups.fit(Subgroups(rows), options, spread="range")
    plain = subgroups.fit(Subgroups(rows), subgroups.SubgroupOptions("mean-range"), spread="range")
    assert found.limits == plain.limits
    assert found.diagnostics is not None
    assert found.diagnostics.screening == screening.Screened((), 0, 0, "none-beyond")
    assert "screened-automatically" not in {caution.code for caution in found.cautions}


def test_screening_looks_at_the_spread_too() -> None:
    rows = np.random.default_rng(2).normal(0.0, 1.0, (25, 4))
    rows[6] = [-5.0, 5.0, -5.0, 5.0]
    for kind, chart in (("range", "mean-range"), ("sd", "mean-sd")):
        data: Subgroups | SubgroupSummary = Subgroups(rows)
        found = subgroups.fit(
            data,
            subgroups.SubgroupOptions(chart, screening=screening.Screening(1)),
            spread=kind,  # type: ignore[arg-type]
        )
        assert found.limits.baseline is not None
        assert [one.index for one in found.limits.baseline.excluded] == [6]


# ---------------------------------------------------------------------------------------------------
# What estimates deliver


def test_estimated_performance_is_that_of_simulated_baselines() -> None:
    m, n, runs = 20, 4, 20_000
    rng = np.random.default_rng(31)
    centre = rng.standard_normal(runs) / math.sqrt(m)
    freedom = m * (n - 1)
    ratio = np.sqrt(rng.chisquare(freedom, runs) / freedom) / factors.c4(freedom + 1)
    beyond = scipy.stats.norm.sf(3 * ratio - centre) + scipy.stats.norm.cdf(-3 * ratio - centre)
    arl = np.sort(1.0 / beyond)
    rows = rng.normal(10.0, 2.0, (m, n))
    found = subgroups.fit(Subgroups(rows), subgroups.SubgroupOptions("pooled-sd"), spread="sd")
    delivered = found.performance.estimated
    assert delivered is not None
    assert delivered.arl_mean is not None
    assert abs(delivered.arl_mean - arl.mean()) < 4 * arl.std() / math.sqrt(runs)
    # Order statistics four standard errors either side of the tenth percentile.
    spread = 4 * math.sqrt(runs * 0.09)
    low, high = arl[int(runs / 10 - spread)], arl[int(runs / 10 + spread)]
    assert low < delivered.arl_tenth_percentile < high
    assert delivered.arl_known == pytest.approx(370.398, abs=0.001)
    share = float((arl < 370.398).mean())
    assert abs(delivered.probability_below_known - share) < 4 * math.sqrt(0.25 / runs)


@pytest.mark.parametrize("confidence", [0.9])
def test_a_guarantee_holds_its_run_length(confidence: float) -> None:
    rows = np.random.default_rng(4).normal(0.0, 1.0, (25, 5))
    asked = estimation.Guarantee(370.0, confidence)
    found = subgroups.fit(
        Subgroups(rows), subgroups.SubgroupOptions("mean-range", guarantee=asked), spread="range"
    )
    assert found.limits.limit_basis == "sigma"
    assert found.limits.sigma_multiple is not None
    assert 3.0 < found.limits.sigma_multiple < 4.0
    delivered = found.performance.estimated
    assert delivered is not None
    assert delivered.guarantee == asked
    # Three digits of the degrees of freedom are what separates the two.
    assert delivered.arl_tenth_percentile == pytest.approx(370.0, rel=0.01)
    assert found.limits.panels.mean.upper == pytest.approx(
        found.limits.centre + found.limits.sigma_multiple * found.limits.sigma / math.sqrt(5), rel=1e-12
    )


def test_with_more_data_the_guarantee_costs_less() -> None:
    multiples = [
        estimation.multiple_of(estimation.Guarantee(370.4, 0.9), m, 0.62 * m, centre_known=False)
        for m in (20, 100, 1000, 100_000)
    ]
    assert multiples == sorted(multiples, reverse=True)
    assert multiples[-1] == pytest.approx(3.0, abs=0.02)


def test_a_guarantee_no_baseline_so_small_can_give() -> None:
    with pytest.raises(UnusableParameter) as error:
        estimation.multiple_of(estimation.Guarantee(370.0, 0.99), 2, 1.0, centre_known=False)
    assert error.value.faults[0].code == "no-such-multiple"
    assert error.value.faults[0].where[0] == "guarantee"


def test_what_is_known_is_not_estimated() -> None:
    x = Individuals(np.random.default_rng(0).normal(0.0, 1.0, 30))
    both = individuals.fit(x, individuals.IndividualsOptions(standards=Standards(0.0, 1.0)))
    assert both.performance.estimated is None
    centre = individuals.fit(x, individuals.IndividualsOptions(standards=Standards(None, 1.0)))
    assert centre.performance.estimated is not None
    # Only the centre moves: E[1/p] by quadrature over its normal error.
    z, w = np.polynomial.hermite_e.hermegauss(80)
    shift = z / math.sqrt(30)
    p = scipy.stats.norm.sf(3 - shift) + scipy.stats.norm.cdf(-3 - shift)
    assert centre.performance.estimated.arl_mean == pytest.approx(float((w / p).sum() / w.sum()), rel=1e-5)
    with pytest.raises(UnusableParameter) as error:
        individuals.fit(
            x,
            individuals.IndividualsOptions(
                standards=Standards(0.0, 1.0), guarantee=estimation.Guarantee(370.0, 0.9)
            ),
        )
    assert error.value.faults[0].where == ("guarantee",)
    with pytest.raises(UnusableParameter) as error:
        subgroups.fit(
            None,
            subgroups.SubgroupOptions(
                "mean-range",
                LimitBasis(),
                standards=Standards(0.0, 1.0),
                subgroup_size=5,
                joint_false_alarm_probability=0.1,
                screening=screening.Screening(1),
            ),
            spread="range",
        )
    assert [fault.where for fault in error.value.faults] == [
        ("joint_false_alarm_probability",),
        ("screening",),
    ]
