"""Charts of rare events: exact quantiles, closed forms, open data, and their refusals."""

from __future__ import annotations

import math
import time

import numpy as np
import pytest
import scipy
from scipy import stats

from assignable.spc.charts import rare as r
from assignable.spc.charts.common import Exclusion, LimitBasis
from assignable.spc.data import Intervals
from assignable.spc.errors import SpcError, UnusableData, UnusableParameter
from assignable.spc.rules import PUBLISHED, Rule

# pydataset 0.2.0, data set "coal" (open data; Jarrett 1979): days between explosions in British coal mines
# with ten or more deaths, 1851 to 1962, from its dates in years. Two fell on one day.
COAL = [
    *(157, 123, 2, 124, 12, 4, 10, 216, 80, 12, 33, 66, 232, 826, 40, 12, 29, 190, 97, 65, 186, 23),
    *(92, 197, 431, 16, 154, 95, 25, 19, 78, 202, 36, 110, 276, 16, 88, 225, 53, 17, 538, 187, 34),
    *(101, 41, 139, 42, 1, 250, 80, 3, 324, 56, 31, 96, 70, 41, 93, 24, 91, 143, 16, 27, 144, 45),
    *(6, 208, 29, 112, 43, 193, 134, 420, 95, 125, 34, 127, 218, 2, 0, 378, 36, 15, 31, 215, 11),
    *(137, 4, 15, 72, 96, 124, 50, 120, 203, 176, 55, 93, 59, 315, 59, 61, 1, 13, 189, 345, 20, 81),
    *(286, 114, 108, 188, 233, 28, 22, 61, 78, 99, 326, 275, 54, 217, 113, 32, 388, 151, 361, 312),
    *(354, 307, 275, 78, 17, 1205, 644, 467, 871, 48, 123, 456, 498, 49, 131, 182, 255, 194, 224),
    *(566, 462, 228, 806, 517, 1643, 54, 326, 1312, 348, 745, 217, 120, 275, 20, 66, 292, 4, 368),
    *(307, 336, 19, 329, 330, 312, 536, 145, 75, 364, 37, 19, 156, 47, 129, 1630, 29, 217, 7, 18),
    *(1358, 2366, 952, 632),
]
EARLY, ZERO = 60, 79  # the first 60 intervals, to 1873, are the baseline; the 80th is the zero
# statsmodels 0.15.0, data set "strikes" (open data; Kennan 1985): days of strikes.
STRIKES = [
    *(7, 9, 13, 14, 26, 29, 52, 130, 9, 37, 41, 49, 52, 119, 3, 17, 19, 28, 72, 99, 104, 114, 152, 153),
    *(216, 15, 61, 98, 2, 25, 85, 3, 10, 1, 2, 2, 3, 3, 4, 8, 11, 22, 23, 27, 32, 33, 35, 43, 43, 44, 100),
    *(5, 49, 2, 12, 12, 21, 21, 27, 38, 42, 117),
]


def tails(probability: float) -> LimitBasis:
    return LimitBasis("probability", None, probability)


def intervals(values: list[float]) -> Intervals:
    return Intervals(np.array(values, dtype=np.float64))


def fit_g(values: list[float], **options: object) -> r.OpportunityFit:
    return r.fit_opportunities(intervals(values), r.OpportunityOptions(**options))  # type: ignore[arg-type]


def fit_t(values: list[float], **options: object) -> r.TimeFit:
    return r.fit_times(intervals(values), r.TimeOptions(**options))  # type: ignore[arg-type]


def codes(found: r.OpportunityFit | r.TimeFit) -> set[str]:
    return {caution.code for caution in found.cautions}


def code(caught: pytest.ExceptionInfo[SpcError]) -> str:
    return caught.value.faults[0].code


# ---------------------------------------------------------------------------------------------------
# g: opportunities between events


def test_limits_of_a_mean_of_24() -> None:
    # Kaminsky et al. 1992, formula from memory, recomputed: CL = g, UCL = g + 3 sqrt(g (g + 1)), no lower
    # limit; at g = 24 the upper one is 97.48469.
    found = fit_g([20, 28, 24, 24])
    at = found.limits.panels.interval
    assert at.centre == 24.0
    assert at.upper == pytest.approx(97.48469, abs=5e-6)
    assert at.lower is None
    assert found.limits.event_probability == pytest.approx(1 / 25, rel=1e-15)
    assert found.baseline is not None
    assert set(found.baseline.panels.interval.lower.tolist()) == {0.0}


def test_both_estimates_of_the_probability() -> None:
    values = [3.0, 0.0, 11.0, 7.0, 0.0]
    assert fit_g(values).limits.event_probability == 5 / 26
    unbiased = fit_g(values, estimator="unbiased").limits
    assert unbiased.event_probability == 4 / 25
    # Everything rests on the one estimate: the mean too.
    assert unbiased.mean == pytest.approx((1 - 4 / 25) / (4 / 25), rel=1e-15)


def test_the_unbiased_estimate_is_unbiased() -> None:
    # Sum over the law of the total itself, negative binomial.
    n, p = 6, 0.3
    total = np.arange(400)
    law = stats.nbinom.pmf(total, n, p)
    assert law.sum() == pytest.approx(1.0, abs=1e-12)
    unbiased, likely = 0.0, 0.0
    for sum_, weight in zip(total.tolist(), law.tolist(), strict=True):
        if sum_ == 0:  # refused: every opportunity an event; both estimates are 1
            unbiased += weight
            likely += weight
            continue
        values = [float(sum_), *[0.0] * (n - 1)]
        if weight > 1e-14:
            unbiased += weight * fit_g(values, estimator="unbiased").limits.event_probability
            likely += weight * fit_g(values).limits.event_probability
    assert unbiased == pytest.approx(p, abs=1e-10)
    assert likely > p + 0.02  # maximum likelihood overstates it


@pytest.mark.parametrize("p", [0.9, 0.3, 0.04, 0.001, 1e-4])
@pytest.mark.parametrize("alarm", [0.0027, 0.05, 1e-5, 0.5])
def test_probability_limits_by_brute_force(p: float, alarm: float) -> None:
    mean = (1 - p) / p
    lower, upper = r.opportunity_lines(mean, tails(alarm))
    y = np.arange(int(20 / p) + 20)
    law = stats.geom(p, loc=-1)
    assert upper == y[law.sf(y) <= alarm / 2][0]
    below = int(y[law.cdf(y - 1) <= alarm / 2][-1])
    assert lower == (below if below else None)


def test_a_limit_that_falls_on_a_whole_number() -> None:
    # With p = 1/2 the tails are powers of 1/2: P(Y > 9) = 2**-10 exactly, and 9 is the limit, not 10.
    assert r.opportunity_lines(1.0, tails(2.0**-9)) == (None, 9.0)
    # P(Y < 1) = p = 1/2 of 1: the largest count undercut with at most half of it.
    assert r.opportunity_lines(1.0, LimitBasis("probability", None, 0.999)) == (None, 1.0)


def test_where_the_count_starts() -> None:
    from_zero = fit_g([20, 28, 0, 24], basis=tails(0.01))
    from_one = fit_g([21, 29, 1, 25], basis=tails(0.01), starts_at=1)
    assert from_one.limits.event_probability == from_zero.limits.event_probability
    assert from_one.limits.mean == from_zero.limits.mean + 1
    one, zero = from_one.limits.panels.interval, from_zero.limits.panels.interval
    assert zero.upper is not None
    assert one.upper == zero.upper + 1
    assert from_one.baseline is not None
    assert set(from_one.baseline.panels.interval.lower.tolist()) == {1.0}
    with pytest.raises(UnusableData) as caught:
        fit_g([21, 0, 25], starts_at=1)
    assert (code(caught), caught.value.faults[0].where) == ("interval-too-small", ("data", "intervals", 1))
    with pytest.raises(UnusableData) as caught:
        r.judge_opportunities(from_one.limits, intervals([0]), None)
    assert code(caught) == "interval-too-small"


def test_zeros_are_values() -> None:
    # A probability small enough for a lower limit: two events in a row are then a signal.
    options = r.OpportunityOptions(tails(0.0027), event_probability=0.0005)
    limits = r.fit_opportunities(None, options).limits
    assert limits.panels.interval.lower == 2.0  # P(Y < 2) = .0009998 is below .00135, P(Y < 3) is not
    judged = r.judge_opportunities(limits, intervals([0, 2, 1500, 40000]), None)
    assert [(signal.index, signal.side) for signal in judged.signals] == [(0, "below"), (3, "above")]
    assert "events come faster" in judged.signals[0].sentence
    assert "more slowly" in judged.signals[1].sentence
    assert judged.carry.points == 4


@pytest.mark.parametrize("basis", [LimitBasis(), tails(0.0027), LimitBasis("sigma", 0.5, None)])
@pytest.mark.parametrize("p", [0.04, 0.0005, 1e-9])
def test_run_lengths_of_opportunities_in_closed_form(basis: LimitBasis, p: float) -> None:
    found = r.fit_opportunities(None, r.OpportunityOptions(basis, event_probability=p))
    at = found.limits.panels.interval
    for factor, arl in [
        (1.0, found.performance.in_control_arl),
        *((shift.shift, shift.arl) for shift in found.performance.shifts),
    ]:
        q = math.log1p(-p * factor)
        beyond = math.exp((math.floor(at.upper) + 1) * q)
        if at.lower is not None:
            beyond += -math.expm1(math.ceil(at.lower) * q)
        if 1 / beyond < 1e15:
            assert arl == pytest.approx(1 / beyond, rel=1e-8)
        else:
            assert arl is None


def test_run_lengths_with_rules_by_simulation() -> None:
    rules = PUBLISHED["western-electric-1956"].rules
    found = r.fit_opportunities(None, r.OpportunityOptions(tails(0.01), event_probability=0.02, rules=rules))
    rng = np.random.default_rng(3)
    assert found.performance.in_control_arl is not None
    lengths = []
    values = rng.geometric(0.02, (400, 300)) - 1.0
    for row in values:
        first = r.judge_opportunities(found.limits, Intervals(row), None).signals
        lengths.append(first[0].index + 1 if first else 300)
    mean, error = np.mean(lengths), np.std(lengths) / math.sqrt(len(lengths))
    assert abs(found.performance.in_control_arl - mean) < 4 * error


def test_rules_on_order_at_a_bounded_cost() -> None:
    r._opportunity_performance.cache_clear()
    rules = (Rule("trend", 6, 6),)
    start = time.process_time()
    rare = r.fit_opportunities(None, r.OpportunityOptions(event_probability=1e-9, rules=rules))
    assert time.process_time() - start < 1.0  # 0.02 in fact
    assert "ties neglected" in rare.performance.method
    # Under a continuous law a trend does not depend on the distribution: only the limit does.
    common = r.fit_opportunities(None, r.OpportunityOptions(event_probability=1e-5, rules=rules))
    assert common.performance.in_control_arl == pytest.approx(rare.performance.in_control_arl, rel=1e-3)


def test_the_dispersion_test_of_opportunities() -> None:
    rng = np.random.default_rng(8)
    rejected = ratios = 0.0
    for _ in range(400):
        found = fit_g((rng.geometric(0.02, 60) - 1.0).tolist()).diagnostics
        assert found is not None
        assert found.dispersion is not None
        rejected += found.dispersion.p_value < 0.05
        ratios += found.dispersion.ratio
    assert ratios / 400 == pytest.approx(1.0, abs=0.05)
    assert rejected / 400 < 0.08
    # Clusters: two rates in turn.
    mixed = np.concatenate((rng.geometric(0.2, 30), rng.geometric(0.005, 30))) - 1.0
    assert "not-geometric" in codes(fit_g(mixed.tolist()))


def test_cautions_of_opportunities() -> None:
    found = fit_g([20, 28, 24, 24])
    assert codes(found) == {"few-intervals", "no-lower-limit", "skewed"}
    assert "skewed" not in codes(fit_g([20, 28, 24, 24], basis=tails(0.0027)))


@pytest.mark.parametrize(
    ("values", "expected"),
    [([4], "too-few-intervals"), ([0, 0, 0], "no-variation"), ([math.nan, 3], "too-few-intervals")],
)
def test_opportunities_refused(values: list[float], expected: str) -> None:
    with pytest.raises(UnusableData) as caught:
        fit_g(values)
    assert code(caught) == expected


def test_options_of_opportunities_refused() -> None:
    with pytest.raises(UnusableParameter) as caught:
        r.fit_opportunities(None, r.OpportunityOptions(exclude=(Exclusion(0, "x"),)))
    assert [fault.code for fault in caught.value.faults] == ["data-missing", "no-such-point"]
    everything = tuple(Exclusion(at, "x") for at in range(2))
    given = r.OpportunityOptions(event_probability=0.1, exclude=everything)
    assert r.fit_opportunities(intervals([3, 4]), given).limits.mean == pytest.approx(9.0)


# ---------------------------------------------------------------------------------------------------
# t: time between events


@pytest.mark.parametrize("alarm", [0.0027, 0.01, 1e-9])
@pytest.mark.parametrize("shape", [0.3, 1.0, 2.5])
def test_limits_are_exact_tails(shape: float, alarm: float) -> None:
    lower, median, upper = r.time_lines(70.0, shape, alarm)
    law = stats.weibull_min(shape, scale=70.0)
    assert law.cdf(lower) == pytest.approx(alarm / 2, rel=1e-11)
    assert law.sf(upper) == pytest.approx(alarm / 2, rel=1e-11)
    assert law.cdf(median) == pytest.approx(0.5, rel=1e-13)


def test_exponential_limits_of_coal_mines() -> None:
    early = COAL[:EARLY]
    found = fit_t(early)
    mean = math.fsum(early) / EARLY
    at = found.limits.panels.interval
    assert found.limits.mean == pytest.approx(mean, rel=1e-14)
    assert (at.lower, at.centre, at.upper) == pytest.approx(
        (-mean * math.log(1 - 0.00135), mean * math.log(2), -mean * math.log(0.00135)), rel=1e-12
    )
    # The calmer mines of the 1890s on: long intervals, and the day of two explosions, all by hand.
    later = COAL[EARLY:]
    judged = r.judge_times(found.limits, intervals(later), None)
    beyond = [
        (at_, "above" if x > at.upper else "below")
        for at_, x in enumerate(later)
        if x > at.upper or x < at.lower
    ]
    assert [(signal.index, signal.side) for signal in judged.signals] == beyond
    assert (ZERO - EARLY, "below") in beyond
    assert sum(side == "above" for _, side in beyond) > 5


@pytest.mark.parametrize(
    "times", [COAL[:EARLY], COAL[EARLY + 20 :], STRIKES], ids=["early", "late", "strikes"]
)
def test_weibull_by_maximum_likelihood(times: list[float]) -> None:
    x = np.array(times, dtype=np.float64)
    found = fit_t(times, distribution="weibull").limits
    # An optimiser of the two-parameter likelihood that knows nothing of the score equation.
    best = scipy.optimize.minimize(
        lambda at: -stats.weibull_min.logpdf(x, math.exp(at[0]), scale=math.exp(at[1])).sum(),
        (0.0, math.log(x.mean())),
        method="Nelder-Mead",
        options={"xatol": 1e-11, "fatol": 1e-14, "maxiter": 2000},
    )
    assert found.shape == pytest.approx(math.exp(best.x[0]), rel=1e-6)
    assert found.scale == pytest.approx(math.exp(best.x[1]), rel=1e-6)
    # The likelihood is flat at its top, its slopes are not: both are 0 there.
    k, s, n = found.shape, found.scale, len(x)
    log = np.log(x / s)
    assert n / k + float((log * (1 - (x / s) ** k)).sum()) == pytest.approx(0.0, abs=1e-8 * n)
    assert float(((x / s) ** k).sum()) / n == pytest.approx(1.0, abs=1e-12)
    root = scipy.optimize.brentq(
        lambda at: float((x**at * np.log(x)).sum() / (x**at).sum()) - 1 / at - float(np.log(x).mean()),
        0.05,
        20.0,
        xtol=1e-14,
        rtol=1e-14,
    )
    assert k == pytest.approx(root, rel=1e-10)
    assert found.mean == pytest.approx(stats.weibull_min(k, scale=s).mean(), rel=1e-12)
    upper = found.panels.interval.upper
    assert stats.weibull_min(k, scale=s).sf(upper) == pytest.approx(0.00135, rel=1e-9)


def test_a_shape_that_is_given() -> None:
    x = np.array(STRIKES, dtype=np.float64)
    found = fit_t(STRIKES, distribution="weibull", shape=0.8).limits
    assert found.scale == pytest.approx(float((x**0.8).mean()) ** (1 / 0.8), rel=1e-13)
    assert (found.shape, found.shape_source) == (0.8, "given")
    both = fit_t(STRIKES, distribution="weibull", shape=0.8, mean=40.0).limits
    assert both.scale == pytest.approx(40.0 / math.gamma(1 + 1 / 0.8), rel=1e-13)
    one = fit_t(STRIKES, distribution="weibull", shape=1.0).limits
    assert one.panels == fit_t(STRIKES).limits.panels
    alone = r.fit_times(None, r.TimeOptions("weibull", mean=40.0, shape=0.8)).limits
    assert alone.panels == both.panels


def test_the_shape_follows_extreme_data() -> None:
    rng = np.random.default_rng(4)
    for shape in (0.06, 0.5, 3.0, 200.0):
        times = 1e-200 * rng.weibull(shape, 4000)
        found = r.weibull_shape(times)
        assert found == pytest.approx(shape, rel=5 * 0.78 / math.sqrt(4000))


def test_run_lengths_of_times_in_closed_form() -> None:
    for shape, alarm in ((1.0, 0.0027), (0.6, 0.01), (2.0, 0.0027)):
        options = r.TimeOptions("weibull", alarm, mean=50.0, shape=shape)
        found = r.fit_times(None, options).performance
        assert found.in_control_arl == pytest.approx(1 / alarm, rel=1e-11)
        for shift in found.shifts:
            factor = shift.shift**shape
            beyond = -math.expm1(factor * math.log1p(-alarm / 2)) + (alarm / 2) ** factor
            assert shift.arl == pytest.approx(1 / beyond, rel=1e-10)
    # Two-sided equal tails: at twice the exponential rate a signal comes no sooner than a false alarm.
    twice = r.fit_times(None, r.TimeOptions(mean=1.0)).performance.shifts[2]
    assert twice.shift == 2.0
    assert twice.arl == pytest.approx(1 / 0.0027, rel=1e-10)


@pytest.mark.parametrize("name", list(PUBLISHED))
def test_rules_watch_normal_scores(name: str) -> None:
    # In control the scores are normal, whatever the shape: the run length of the rules is the tabled one.
    published = {"shewhart-1931": 370.37, "western-electric-1956": 91.75, "nelson-1984": 73.48}
    alarm = 0.0026997960632601866
    for shape in (0.5, 1.0, 3.0):
        options = r.TimeOptions("weibull", alarm, PUBLISHED[name].rules, mean=9.0, shape=shape)
        assert r.fit_times(None, options).performance.in_control_arl == pytest.approx(
            published[name], rel=2e-4
        )


def test_run_length_with_rules_after_a_shift_by_simulation() -> None:
    rules = PUBLISHED["western-electric-1956"].rules
    found = r.fit_times(None, r.TimeOptions(rules=rules, mean=10.0))
    assert found.performance.shifts[2].shift == 2.0
    rng = np.random.default_rng(12)
    lengths = []
    for row in rng.exponential(5.0, (500, 200)):
        first = r.judge_times(found.limits, Intervals(row), None).signals
        lengths.append(first[0].index + 1 if first else 200)
    mean, error = np.mean(lengths), np.std(lengths) / math.sqrt(len(lengths))
    assert found.performance.shifts[2].arl is not None
    assert abs(found.performance.shifts[2].arl - mean) < 4 * error


def test_scores_keep_their_digits_in_both_tails() -> None:
    h = np.array([1e-250, 1e-12, 0.3, math.log(2), 0.7, 5.0, 600.0])
    z = r._scores(h, 1.0, 1.0)
    low = h < math.log(2)
    assert scipy.special.log_ndtr(z[low]) == pytest.approx(np.log(-np.expm1(-h[low])), rel=1e-12)
    assert scipy.special.log_ndtr(-z[~low]) == pytest.approx(-h[~low], rel=1e-12)
    assert r._scores(np.array([0.0, 1e300, math.nan]), 1e-5, 3.0)[:2].tolist() == [-40.0, 40.0]


def test_zero_times() -> None:
    with_zero = COAL[60:90]
    assert with_zero[ZERO - 60] == 0
    with pytest.raises(UnusableData) as caught:
        fit_t(with_zero, distribution="weibull")
    assert (code(caught), caught.value.faults[0].where) == ("zero-time", ("data", "intervals", ZERO - 60))
    for options in ({"distribution": "exponential"}, {"distribution": "weibull", "shape": 1.2}):
        found = fit_t(with_zero, **options)
        assert "zero-times" in codes(found)
        assert found.baseline is not None
        assert [signal.index for signal in found.baseline.signals] == [ZERO - 60]
    # Left out for a reason, it is no obstacle.
    fit_t(with_zero, distribution="weibull", exclude=(Exclusion(ZERO - 60, "one explosion, two mines"),))


def test_the_exponential_test() -> None:
    x = np.array(STRIKES, dtype=np.float64)
    found = fit_t(STRIKES).diagnostics
    assert found is not None
    assert found.exponential is not None
    k = fit_t(STRIKES, distribution="weibull").limits
    gain = (
        stats.weibull_min.logpdf(x, k.shape, scale=k.scale).sum()
        - stats.expon.logpdf(x, scale=x.mean()).sum()
    )
    assert found.exponential.statistic == pytest.approx(2 * gain, rel=1e-9)
    assert found.exponential.p_value == pytest.approx(stats.chi2.sf(2 * gain, 1), rel=1e-8)
    # All of the mines together: the rate changed, and the mixture is no exponential.
    together = [x for x in COAL if x > 0]
    assert "not-exponential" in codes(fit_t(together))
    assert "not-exponential" not in codes(fit_t(COAL[:EARLY]))
    assert "rounded-times" in codes(fit_t([1.0, 2.0, 1.0, 3.0, 1.0, 2.0] * 6))
    assert "few-intervals" in codes(fit_t(COAL[:10]))


@pytest.mark.parametrize(
    ("values", "options", "expected"),
    [
        ([4.0], {}, "too-few-intervals"),
        ([0.0, 0.0, 0.0], {}, "no-variation"),
        ([4.0, 4.0, 4.0], {"distribution": "weibull"}, "no-variation"),
        ([1e-300, 1.0, 1e300], {"distribution": "weibull"}, "out-of-scale"),
        ([math.nan, 3.0], {}, "too-few-intervals"),
    ],
)
def test_times_refused(values: list[float], options: dict[str, object], expected: str) -> None:
    with pytest.raises(UnusableData) as caught:
        fit_t(values, **options)
    assert code(caught) == expected


@pytest.mark.parametrize(
    ("options", "expected"),
    [
        (r.TimeOptions(), ["data-missing"]),
        (r.TimeOptions(mean=3.0, shape=2.0), ["not-of-this-distribution"]),
        (r.TimeOptions("weibull", mean=3.0), ["shape-missing"]),
        (r.TimeOptions(mean=3.0, exclude=(Exclusion(0, "x"),)), ["no-such-point"]),
    ],
)
def test_options_of_times_refused(options: r.TimeOptions, expected: list[str]) -> None:
    with pytest.raises(UnusableParameter) as caught:
        r.fit_times(None, options)
    assert [fault.code for fault in caught.value.faults] == expected


def test_gaps_end_runs() -> None:
    rules = (Rule("zone", 8, 8, 0.0),)
    limits = r.fit_times(None, r.TimeOptions(rules=rules, mean=10.0)).limits
    # The centre line is the median, 6.93: 6.9 is below it and 7 above.
    below = [6.9] * 8
    assert [s.index for s in r.judge_times(limits, intervals(below), None).signals] == [7]
    assert r.judge_times(limits, intervals([*below[:7], math.nan, 6.9]), None).signals == ()
    assert r.judge_times(limits, intervals([*below[:7], 7.0]), None).signals == ()


def test_extremes_neither_overflow_nor_warn() -> None:
    steep = r.fit_times(None, r.TimeOptions("weibull", mean=1.0, shape=1000.0)).performance
    assert [shift.arl for shift in steep.shifts] == [pytest.approx(1.0)] * 4
    found = fit_t([1e-300, 1.0, 1e300, 5.0, 1e100, 1e-100, 2.0, 3.0, 4.0]).diagnostics
    assert found is not None
    assert found.exponential is not None
    assert found.exponential.p_value < 1e-100
    huge = fit_g([9e15, 8e15, 0.0, 9e15], rules=PUBLISHED["western-electric-1956"].rules)
    assert huge.performance.in_control_arl is not None
    assert "taken as continuous" in huge.performance.method
