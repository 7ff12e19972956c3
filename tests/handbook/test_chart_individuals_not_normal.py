"""Single values with limits from a fitted distribution: quantiles, rates of false alarm, the choice, the record."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.integrate
import scipy.stats

from assignable.spc.baseline.estimation import Guarantee
from assignable.spc.baseline.screening import Screening
from assignable.spc.charts import nonnormal
from assignable.spc.charts.common import Exclusion, LimitBasis, Standards
from assignable.spc.charts.individuals import IndividualsCarry, IndividualsFit, IndividualsOptions, fit, judge
from assignable.spc.data import Individuals
from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.rules import PUBLISHED

TAIL = scipy.stats.norm.sf(3.0)


def _fit(x: np.ndarray, **options: object) -> IndividualsFit:
    return fit(Individuals(x), IndividualsOptions(**options))  # type: ignore[arg-type]


def test_lognormal_limits_are_those_of_the_logarithms() -> None:
    x = np.random.default_rng(1).lognormal(1.0, 0.5, 80)
    found = _fit(x, distribution="lognormal")
    logs = np.log(x)
    lines = found.limits.panels.value
    assert lines.centre == pytest.approx(math.exp(logs.mean()), rel=1e-9)
    assert lines.upper == pytest.approx(math.exp(logs.mean() + 3 * logs.std()), rel=1e-9)
    assert lines.lower == pytest.approx(math.exp(logs.mean() - 3 * logs.std()), rel=1e-9)


@pytest.mark.parametrize(
    ("name", "law"),
    [
        ("weibull", lambda x: scipy.stats.weibull_min(*scipy.stats.weibull_min.fit(x, floc=0))),
        ("gamma", lambda x: scipy.stats.gamma(*scipy.stats.gamma.fit(x, floc=0))),
        ("exponential", lambda x: scipy.stats.expon(0, x.mean())),
        ("rayleigh", lambda x: scipy.stats.rayleigh(0, math.sqrt((x**2).mean() / 2))),
        ("half-normal", lambda x: scipy.stats.halfnorm(0, math.sqrt((x**2).mean()))),
        ("largest-extreme-value", lambda x: scipy.stats.gumbel_r(*scipy.stats.gumbel_r.fit(x))),
        ("smallest-extreme-value", lambda x: scipy.stats.gumbel_l(*scipy.stats.gumbel_l.fit(x))),
    ],
)
def test_limits_are_the_quantiles_of_scipys_own_fit(name: str, law: object) -> None:
    x = np.random.default_rng(2).gamma(3.0, 2.0, 120)
    found = _fit(x, distribution=name)
    known = law(x)  # type: ignore[operator]
    lines = found.limits.panels.value
    assert lines.upper == pytest.approx(known.isf(TAIL), rel=2e-4)
    assert lines.lower == pytest.approx(known.ppf(TAIL), rel=2e-3)
    assert lines.centre == pytest.approx(known.median(), rel=2e-4)
    # The moving range exceeds its line as often as that of normal values does: by quadrature.
    upper = found.limits.panels.moving_range.upper
    inside = scipy.integrate.quad(
        lambda q: float(known.cdf(known.ppf(q) + upper) - known.cdf(known.ppf(q) - upper)), 0, 1, limit=200
    )[0]
    normal = 2.0 * scipy.stats.norm.sf(
        (2 / math.sqrt(math.pi) * (1 + 3 * math.sqrt(math.pi / 2 - 1))) / math.sqrt(2)
    )
    assert 1.0 - inside == pytest.approx(normal, rel=2e-3)
    draws = known.rvs(size=(200_000, 2), random_state=np.random.default_rng(3))
    ranges = np.abs(draws[:, 0] - draws[:, 1])
    assert abs(ranges.mean() - found.limits.panels.moving_range.centre) < 4 * ranges.std() / math.sqrt(
        200_000
    )


# Endurance of 23 deep-groove ball bearings, millions of revolutions (Lieblein & Zelen 1956): open data, from memory.
BEARINGS = """17.88 28.92 33.00 41.52 42.12 45.60 48.48 51.84 51.96 54.12 55.56 67.80 68.64 68.64 68.88 84.12 93.12
98.64 105.12 105.84 127.92 128.04 173.40"""


def test_ball_bearings() -> None:
    x = np.array(BEARINGS.split(), dtype=float)
    weibull = _fit(x, distribution="weibull").limits
    assert weibull.distribution is not None
    told = {one.name: one.value for one in weibull.distribution.parameters}
    # Shape 2.10, scale 81.9 (Thoman, Bain & Antle 1969; Lawless 2003; from memory).
    assert told["shape"] == pytest.approx(2.10, abs=0.005)
    assert told["scale"] == pytest.approx(81.9, abs=0.05)
    # By hand: the quantiles of that distribution.
    assert weibull.panels.value.upper == pytest.approx(
        told["scale"] * (-math.log(TAIL)) ** (1 / told["shape"]), rel=1e-9
    )
    lognormal = _fit(x, distribution="lognormal").limits
    assert lognormal.distribution is not None
    told = {one.name: one.value for one in lognormal.distribution.parameters}
    # Mean 4.15, deviation 0.522 of the logarithms (Lawless 2003; from memory).
    assert told["log-mean"] == pytest.approx(4.15, abs=0.005)
    assert told["log-sd"] == pytest.approx(0.522, abs=0.0005)
    chosen = _fit(x, distribution="auto")
    assert chosen.diagnostics is not None
    assert chosen.diagnostics.distribution is not None
    criteria = {one.distribution: one.aicc for one in chosen.diagnostics.distribution.candidates}
    # Log-likelihoods -113.691 (Weibull) and -113.128 (lognormal) (Lawless 2003; from memory).
    small = 4 + 12 / 20
    assert criteria["weibull"] == pytest.approx(2 * 113.691 + small, abs=0.002)
    assert criteria["lognormal"] == pytest.approx(2 * 113.128 + small, abs=0.005)


def test_probability_limits_and_longer_spans() -> None:
    x = np.random.default_rng(5).weibull(1.4, 90)
    found = _fit(x, distribution="weibull", basis=LimitBasis("probability", None, 0.01), span=4)
    shape, _, scale = scipy.stats.weibull_min.fit(x, floc=0)
    known = scipy.stats.weibull_min(shape, 0, scale)
    assert found.limits.panels.value.upper == pytest.approx(known.isf(0.005), rel=1e-4)
    draws = known.rvs(size=(200_000, 4), random_state=np.random.default_rng(6))
    ranges = np.ptp(draws, axis=1)
    lines = found.limits.panels.moving_range
    for share in ((ranges > lines.upper).mean(), (ranges < lines.lower).mean()):
        assert abs(share - 0.005) < 4 * math.sqrt(0.005 / 200_000)


def test_rules_look_at_normal_scores() -> None:
    """Rules of a lognormal chart signal where those of a normal chart of the logarithms do."""
    rng = np.random.default_rng(9)
    logs = rng.normal(0.0, 0.5, 300)
    logs[100:112] += 0.8
    rules = PUBLISHED["western-electric-1956"].rules
    skewed = _fit(np.exp(logs), distribution="lognormal", rules=rules)
    sd, mean = float(logs.std()), float(logs.mean())
    plain = fit(Individuals(logs), IndividualsOptions(rules=rules, standards=Standards(mean, sd)))
    assert skewed.baseline is not None
    assert plain.baseline is not None
    told = [(s.rule, s.index, s.side, s.points) for s in skewed.baseline.signals if s.panel == "value"]
    assert told == [(s.rule, s.index, s.side, s.points) for s in plain.baseline.signals if s.panel == "value"]
    assert told


def test_the_choice_is_open() -> None:
    x = np.random.default_rng(10).lognormal(0.0, 0.9, 150)
    found = _fit(x, distribution="auto")
    assert found.diagnostics is not None
    choice = found.diagnostics.distribution
    assert choice is not None
    assert choice.asked == "auto"
    assert choice.used == "lognormal"
    criteria = [one.aicc for one in choice.candidates if one.aicc is not None]
    assert criteria == sorted(criteria)
    assert len(criteria) >= 6
    lognormal = next(one for one in choice.candidates if one.distribution == "lognormal")
    logs = np.log(x)
    likelihood = scipy.stats.norm.logpdf(logs, logs.mean(), logs.std()).sum() - logs.sum()
    assert lognormal.log_likelihood == pytest.approx(likelihood, rel=1e-9)
    assert lognormal.aicc == pytest.approx(-2 * likelihood + 4 + 12 / 147, rel=1e-9)
    assert {caution.code for caution in found.cautions} >= {"limits-from-distribution"}
    assert "not-normal" not in {caution.code for caution in found.cautions}
    assert found.performance.in_control_arl == pytest.approx(370.4, abs=0.1)
    assert found.performance.estimated is None


def test_normal_values_keep_their_usual_limits() -> None:
    x = np.random.default_rng(11).normal(50.0, 2.0, 60)
    chosen, plain = _fit(x, distribution="auto"), _fit(x)
    assert chosen.limits == plain.limits
    assert chosen.limits.distribution is None
    assert chosen.diagnostics is not None
    assert chosen.diagnostics.distribution is not None
    assert chosen.diagnostics.distribution.used == "normal"


def test_what_does_not_fit_is_said() -> None:
    rng = np.random.default_rng(12)
    doubtful = _fit(np.concatenate((rng.normal(3, 0.1, 60), rng.normal(9, 0.1, 60))), distribution="gamma")
    assert "distribution-doubtful" in {caution.code for caution in doubtful.cautions}
    with pytest.raises(UnusableData):
        _fit(rng.normal(0.0, 1.0, 50), distribution="lognormal")
    with pytest.raises(UnusableData):
        _fit(rng.lognormal(0.0, 1.0, 9), distribution="auto")
    with pytest.raises(UnusableParameter) as error:
        fit(
            Individuals(rng.lognormal(0.0, 1.0, 50)),
            IndividualsOptions(
                distribution="gamma",
                standards=Standards(1.0, None),
                guarantee=Guarantee(370.0, 0.9),
                joint_false_alarm_probability=0.1,
            ),
        )
    assert {fault.where for fault in error.value.faults} == {
        ("standards", "mean"),
        ("guarantee",),
        ("joint_false_alarm_probability",),
    }
    with pytest.raises(UnusableParameter):
        fit(None, IndividualsOptions(distribution="gamma", standards=Standards(1.0, 1.0)))


def test_exclusions_and_screening_refit_the_distribution() -> None:
    x = np.random.default_rng(13).lognormal(0.0, 0.4, 70)
    x[33] = 60.0
    screened = _fit(x, distribution="lognormal", screening=Screening(3))
    assert screened.limits.baseline is not None
    excluded = screened.limits.baseline.excluded
    assert excluded[0] == Exclusion(33, "screened automatically in round 1")
    by_hand = _fit(x, distribution="lognormal", exclude=excluded)
    assert by_hand.limits == screened.limits
    logs = np.log(np.delete(x, [one.index for one in excluded]))
    assert by_hand.limits.panels.value.upper == pytest.approx(
        math.exp(logs.mean() + 3 * logs.std()), rel=1e-9
    )


@pytest.mark.parametrize("distribution", ["lognormal", "weibull", "box-cox"])
def test_any_split_of_judging_gives_the_same_signals(distribution: str) -> None:
    rng = np.random.default_rng(14)
    limits = _fit(
        rng.lognormal(0.0, 0.6, 100), distribution=distribution, rules=PUBLISHED["nelson-1984"].rules
    ).limits
    new = rng.lognormal(0.3, 0.7, 120)
    new[50] = np.nan
    whole = judge(limits, Individuals(new), None)
    assert whole.signals
    for cuts in ([1], [37, 51], [10, 20, 30, 90]):
        carry: IndividualsCarry | None = None
        told, start = [], 0
        for part in np.split(new, cuts):
            one = judge(limits, Individuals(part), carry)
            told += [(s.rule, s.panel, s.index + start, s.side) for s in one.signals]
            carry, start = one.carry, start + len(part)
        assert told == [(s.rule, s.panel, s.index, s.side) for s in whole.signals]
        assert carry == whole.carry


@pytest.mark.parametrize("scale", [1e-6, 250.0])
def test_the_unit_changes_nothing(scale: float) -> None:
    x = np.random.default_rng(15).gamma(2.0, 3.0, 90)
    for name in ("lognormal", "weibull", "gamma", "exponential", "largest-extreme-value"):
        one, other = _fit(x, distribution=name), _fit(scale * x, distribution=name)
        for a, b in (
            (one.limits.panels.value, other.limits.panels.value),
            (one.limits.panels.moving_range, other.limits.panels.moving_range),
        ):
            assert b.upper == pytest.approx(scale * a.upper, rel=1e-6)
            assert b.centre == pytest.approx(scale * a.centre, rel=1e-6)


def test_values_outside_the_support_signal() -> None:
    limits = _fit(np.random.default_rng(16).gamma(2.0, 3.0, 90), distribution="gamma").limits
    found = judge(limits, Individuals(np.array([5.0, -1.0, 0.0, 1e6])), None)
    assert {(s.index, s.side) for s in found.signals if s.panel == "value"} == {
        (1, "below"),
        (2, "below"),
        (3, "above"),
    }


def test_parameters_of_another_distribution_are_refused() -> None:
    frozen = nonnormal.FrozenDistribution("gamma", (), (1.0, 2.0, 3.0), 0.0, 1.0, 1)
    with pytest.raises(UnusableParameter):
        nonnormal.law_of(frozen)


def test_a_tail_to_the_left_is_the_mirror_of_one_to_the_right() -> None:
    # Invariance: mirrored values have mirrored limits, and the sides of their signals change places.
    x = np.random.default_rng(11).lognormal(0.0, 0.5, 80)
    right, left = (
        _fit(each, distribution="johnson-sl", rules=PUBLISHED["nelson-1984"].rules) for each in (x, 10.0 - x)
    )
    assert left.limits.distribution is not None
    assert left.limits.distribution.direction == -1
    assert left.limits.panels.value.upper == pytest.approx(10.0 - right.limits.panels.value.lower, rel=1e-6)
    assert left.limits.panels.value.lower == pytest.approx(10.0 - right.limits.panels.value.upper, rel=1e-6)
    new = np.array([1.0, 0.9, 6.0, 1.1, 0.2])
    one, other = (
        judge(right.limits, Individuals(new), None),
        judge(left.limits, Individuals(10.0 - new), None),
    )
    mirrored = {"above": "below", "below": "above", None: None}
    assert [(s.rule, s.index, mirrored[s.side]) for s in one.signals if s.panel == "value"] == [
        (s.rule, s.index, s.side) for s in other.signals if s.panel == "value"
    ]
    assert one.carry.value.z == pytest.approx([-z for z in other.carry.value.z], rel=1e-5)
