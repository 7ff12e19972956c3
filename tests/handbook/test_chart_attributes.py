"""Charts of counts against published examples, exact tails, and their refusals.

Trust of a published value: "in print" was checked on paper, "second-hand" was quoted and recomputed,
"from memory" is remembered and recomputed.
"""

from __future__ import annotations

import math
import time

import numpy as np
import pytest
from scipy import stats

from assignable.spc import runlength
from assignable.spc.charts import attributes as a
from assignable.spc.charts import lattice, price
from assignable.spc.charts.common import Exclusion, Fit, LimitBasis, PanelLimits
from assignable.spc.charts.counts import count_law, count_lines
from assignable.spc.data import Counts
from assignable.spc.errors import SpcError, UnusableData, UnusableParameter
from assignable.spc.rules import LIMIT, PUBLISHED, Rule

WAFERS = [16, 14, 28, 16, 12, 20, 10, 12, 10, 17, 19, 17, 14, 16, 15, 13, 14, 16, 11, 20, 11, 19, 16, 31, 13]
JUICE = [
    *(12, 15, 8, 10, 4, 7, 16, 9, 14, 10, 5, 6, 17, 12, 22),
    *(8, 10, 5, 13, 11, 20, 18, 24, 15, 9, 12, 7, 13, 9, 6),
]
CHIPS = [
    *(0.24, 0.3, 0.16, 0.2, 0.08, 0.14, 0.32, 0.18, 0.28, 0.2, 0.1, 0.12, 0.34, 0.24, 0.44),
    *(0.16, 0.2, 0.1, 0.26, 0.22, 0.4, 0.36, 0.48, 0.3, 0.18, 0.24, 0.14, 0.26, 0.18, 0.12),
]
SUBSTRATES = [44, 48, 32, 50, 29, 31, 46, 52, 44, 48, 36, 52, 35, 41, 42, 30, 46, 38, 26, 30]
BOARDS = [6, 4, 8, 10, 9, 12, 16, 2, 3, 10, 9, 15, 8, 10, 8, 2, 7, 1, 7, 13]
CIRCUITS = [
    *(21, 24, 16, 12, 15, 5, 28, 20, 31, 25, 20, 24, 16, 19, 10, 17, 13, 22, 18, 39, 30, 24, 16),
    *(19, 17, 15),
]
COMPUTERS = [10, 12, 8, 14, 10, 16, 11, 7, 10, 15, 9, 5, 7, 11, 12, 6, 8, 10, 7, 5]
TAILS = LimitBasis("probability", None, 0.0027)


def counts(values: list[float], inspected: float | list[float] | None = None) -> Counts:
    x = np.array(values, dtype=np.float64)
    if inspected is None:
        return Counts(x)
    return Counts(x, np.broadcast_to(np.array(inspected, dtype=np.float64), x.shape))


def fit(
    chart: a.AttributeChart,
    values: list[float],
    inspected: float | list[float] | None = None,
    **options: object,
) -> a.AttributeFit:
    return a.fit(counts(values, inspected), a.AttributeOptions(**options), chart=chart)  # type: ignore[arg-type]


def lines(found: a.AttributeFit) -> PanelLimits:
    panels = found.limits.panels
    return getattr(panels, panels.__slots__[0])


def hits(found: a.AttributeFit | a.AttributeJudgement) -> list[int]:
    baseline = found.baseline if isinstance(found, Fit) else found
    assert baseline is not None
    return [signal.index for signal in baseline.signals]


def codes(found: a.AttributeFit) -> set[str]:
    return {caution.code for caution in found.cautions}


def code(caught: pytest.ExceptionInfo[SpcError]) -> str:
    return caught.value.faults[0].code


# ---------------------------------------------------------------------------------------------------
# Published examples


def test_c_chart_of_wafers() -> None:
    # NIST e-Handbook 6.3.3.1, second-hand: CL 16, UCL 28, LCL 4. Point 3 equals the UCL and is no signal.
    found = fit("c", WAFERS)
    assert lines(found) == PanelLimits(16.0, 4.0, 28.0)
    assert hits(found) == [23]
    assert found.baseline is not None
    assert found.baseline.verdict == "signal"


def test_p_chart_of_wafers() -> None:
    # NIST e-Handbook 6.3.3.2, second-hand: .2313, LCL .0524, signals 15 and 23. Its UCL .4103 comes from
    # rounded intermediates; exact arithmetic gives .41024.
    found = fit("p", [round(50 * fraction) for fraction in CHIPS], 50)
    at = lines(found)
    assert at.centre == pytest.approx(0.2313, abs=5e-5)
    assert at.lower == pytest.approx(0.0524, abs=5e-5)
    assert at.upper == pytest.approx(0.410239, abs=5e-7)
    assert at.upper == pytest.approx(0.4103, abs=1e-4)
    assert hits(found) == [14, 22]


def test_p_chart_of_juice_cans() -> None:
    # Montgomery ISQC example 7.1, partly in print: p .2313, limits .0524 and .4102; without 15 and 23
    # p .215, limits .0407 and .3893, then point 21 is beyond.
    found = fit("p", JUICE, 50)
    at = lines(found)
    assert sum(JUICE) == 347
    assert (at.centre, at.lower, at.upper) == pytest.approx((0.2313, 0.0524, 0.4102), abs=5e-5)
    assert hits(found) == [14, 22]
    revised = fit("p", JUICE, 50, exclude=(Exclusion(14, "new batch"), Exclusion(22, "new operator")))
    at = lines(revised)
    assert (at.centre, at.lower, at.upper) == pytest.approx((0.215, 0.040703, 0.389297), abs=5e-7)
    assert hits(revised) == [20]
    # The excluded points stay plotted, and the record holds the reasons.
    assert revised.baseline is not None
    assert len(revised.baseline.panels.proportion.index) == 30
    assert revised.limits.baseline is not None
    assert revised.limits.baseline.points == 28
    assert [each.reason for each in revised.limits.baseline.excluded] == ["new batch", "new operator"]
    # The same on the np chart, in counts.
    numbers = fit("np", JUICE, 50)
    assert lines(numbers).upper == pytest.approx(50 * 0.410239, abs=1e-4)
    assert hits(numbers) == [14, 22]


def test_p_chart_of_substrates() -> None:
    # Montgomery & Runger example 16-4, partly in print: .40, .55, .25, no signal.
    found = fit("p", SUBSTRATES, 100)
    at = lines(found)
    assert (at.centre, at.lower, at.upper) == pytest.approx((0.4, 0.25, 0.55), abs=5e-3)
    assert at.centre == pytest.approx(0.4, abs=1e-15)
    assert hits(found) == []


def test_u_chart_of_boards() -> None:
    # Montgomery & Runger example 16-5, partly in print: 1.6, 3.3, 0. A limit at 0 is none.
    found = fit("u", BOARDS, 5)
    at = lines(found)
    assert at.centre == 1.6
    assert at.upper == pytest.approx(3.29706, abs=5e-6)
    assert at.lower is None
    assert hits(found) == []
    assert found.baseline is not None
    assert set(found.baseline.panels.rate.lower.tolist()) == {0.0}


def test_c_chart_of_circuits() -> None:
    # Montgomery ISQC example 7.3, partly in print: 19.85, 33.22, 6.48 (its limits start from the rounded
    # mean; exact 33.2109 and 6.4814); without 6 and 20: 19.67, 32.97, 6.36.
    found = fit("c", CIRCUITS)
    at = lines(found)
    assert sum(CIRCUITS) == 516
    assert at.centre == pytest.approx(19.85, abs=5e-3)
    assert at.upper == pytest.approx(33.2109, abs=5e-5)
    assert at.upper == pytest.approx(33.22, abs=1e-2)
    assert at.lower == pytest.approx(6.4814, abs=5e-5)
    assert hits(found) == [5, 19]
    revised = fit("c", CIRCUITS, exclude=(Exclusion(5, "misread"), Exclusion(19, "heater")))
    at = lines(revised)
    assert (at.centre, at.upper, at.lower) == pytest.approx((19.67, 32.97, 6.36), abs=5e-3)


def test_u_chart_of_computers() -> None:
    # Montgomery ISQC, earlier editions, table 7.10, from memory: 1.93, 3.79, .07.
    at = lines(fit("u", COMPUTERS, 5))
    assert (at.centre, at.upper, at.lower) == pytest.approx((1.93, 3.79, 0.07), abs=5e-3)


def test_oc_of_a_p_chart() -> None:
    # Montgomery ISQC table 7.5 (p chart, n = 50, limits .0303 and .3697), from memory.
    published = {
        0.01: 0.0894,
        0.03: 0.4447,
        0.05: 0.7206,
        0.1: 0.9662,
        0.15: 0.997,
        0.2: 0.9973,
        0.25: 0.9713,
        0.3: 0.8594,
        0.35: 0.6216,
        0.4: 0.3356,
        0.45: 0.1273,
        0.5: 0.0325,
        0.55: 0.0053,
    }
    for p, beta in published.items():
        law = count_law(True, p, 50.0)
        found = lattice.run_law(
            (LIMIT,), law, centre=10.0, sigma=math.sqrt(8.0), lower=50 * 0.0303, upper=50 * 0.3697
        )
        assert 1.0 - 1.0 / found.run_length().arl == pytest.approx(beta, abs=6e-5)


def test_oc_of_a_c_chart() -> None:
    # Montgomery ISQC table 7.12 (c chart, limits 6.48 and 33.22), from memory; it prints .001 at c = 1,
    # where exact arithmetic gives 0.00008.
    published = {
        3: 0.034,
        5: 0.238,
        7: 0.55,
        10: 0.87,
        15: 0.992,
        20: 0.997,
        25: 0.95,
        30: 0.744,
        33: 0.546,
        35: 0.41,
        40: 0.151,
        45: 0.038,
    }
    for mean, beta in published.items():
        law = count_law(False, float(mean), 1.0)
        found = lattice.run_law((LIMIT,), law, centre=19.85, sigma=math.sqrt(19.85), lower=6.48, upper=33.22)
        assert 1.0 - 1.0 / found.run_length().arl == pytest.approx(beta, abs=6e-4)


# ---------------------------------------------------------------------------------------------------
# Exact limits


@pytest.mark.parametrize("mean", [0.004, 0.05, 0.3, 0.7, 0.995])
@pytest.mark.parametrize("tail", [0.00135, 0.025, 1e-6])
def test_binomial_limits_by_brute_force(mean: float, tail: float) -> None:
    sizes = np.array([1.0, 7.0, 50.0, 400.0])
    found = count_lines(True, mean, sizes, LimitBasis("probability", None, 2 * tail))
    for at, n in enumerate(sizes.astype(int).tolist()):
        law = stats.binom(n, mean)
        x = np.arange(n + 1)
        upper = int(x[law.sf(x) <= tail][0])  # the smallest that is exceeded seldom enough
        lower = int(x[law.cdf(x - 1) <= tail][-1])  # the largest that is undercut seldom enough
        assert found.upper[at] == upper
        assert found.lower[at] == lower


@pytest.mark.parametrize("mean", [0.01, 0.9, 4.0, 30.5, 5000.0])
@pytest.mark.parametrize("tail", [0.00135, 0.025, 1e-6])
def test_poisson_limits_by_brute_force(mean: float, tail: float) -> None:
    found = count_lines(False, mean, np.array([1.0]), LimitBasis("probability", None, 2 * tail))
    x = np.arange(int(mean + 12 * math.sqrt(mean) + 60))
    law = stats.poisson(mean)
    assert found.upper[0] == x[law.sf(x) <= tail][0]
    assert found.lower[0] == x[law.cdf(x - 1) <= tail][-1]


def test_probability_limits_end_a_search_beyond_whole_doubles() -> None:
    found = count_lines(False, 1e12, np.array([1e15]), TAILS)
    assert (found.upper[0] - 1e27) / math.sqrt(1e27) == pytest.approx(3.0, rel=0.01)
    assert (found.lower[0] - 1e27) / math.sqrt(1e27) == pytest.approx(-3.0, rel=0.01)


def test_limits_follow_each_size() -> None:
    sizes = [100.0, 200.0, 100.0, 400.0]
    found = fit("p", [5.0, 12.0, 4.0, 19.0], sizes)
    assert found.limits.panels.proportion == PanelLimits(0.05, None, None)
    assert found.limits.sample_size is None
    assert found.baseline is not None
    panel = found.baseline.panels.proportion
    # Never the mean of the ratios, which is .0494.
    assert panel.centre.tolist() == [0.05] * 4
    for at, n in enumerate(sizes):
        far = 3 * math.sqrt(0.05 * 0.95 / n)
        assert panel.upper[at] == pytest.approx(0.05 + far, rel=1e-14)
        assert panel.lower[at] == pytest.approx(max(0.05 - far, 0.0), rel=1e-14)


def test_an_upper_limit_nothing_can_cross_is_none() -> None:
    found = fit("np", [9.0, 10.0, 9.0, 10.0, 8.0], 10)
    assert lines(found).upper is None
    assert found.baseline is not None
    assert set(found.baseline.panels.count.upper.tolist()) == {10.0}
    assert hits(found) == []


# ---------------------------------------------------------------------------------------------------
# Gaps, exclusions, standards


def test_gaps_keep_their_place() -> None:
    values = [float("nan"), *map(float, WAFERS[:10]), float("nan"), *map(float, WAFERS[10:])]
    found = fit("c", values)
    assert lines(found) == PanelLimits(16.0, 4.0, 28.0)
    assert hits(found) == [25]
    assert found.baseline is not None
    assert found.baseline.panels.count.index.tolist() == [*range(1, 11), *range(12, 27)]
    # A gap is a gap whatever its size says.
    sizes = [float("nan"), *[50.0] * 30]
    assert lines(fit("np", [float("nan"), *map(float, JUICE)], sizes)).centre == pytest.approx(347 / 30)


@pytest.mark.parametrize("chart", ["p", "np", "c", "u"])
def test_a_gap_alone_can_be_judged(chart: a.AttributeChart) -> None:
    limits = fit(chart, JUICE, 50).limits
    before = a.judge(limits, counts([12.0], 50), None, chart=chart).carry
    judged = a.judge(limits, counts([math.nan], math.nan), before, chart=chart)
    assert (judged.verdict, judged.carry.points, judged.carry.tail.z) == ("in-control", 2, ())


def test_a_gap_ends_a_run() -> None:
    rules = (Rule("zone", 8, 8, 0.0),)
    low = [1.0] * 7
    around = [5.0, 5.0, 5.0, 5.0]
    assert hits(fit("c", [*low, 1.0, *around], rules=rules)) == [7]
    assert hits(fit("c", [*low, float("nan"), 1.0, *around], rules=rules)) == []


def test_standards_given() -> None:
    found = fit("p", JUICE, 50, standard=0.2)
    at = lines(found)
    assert at.centre == 0.2
    assert at.upper == pytest.approx(0.2 + 3 * math.sqrt(0.2 * 0.8 / 50), rel=1e-15)
    assert found.limits.mean_source == "given"
    alone = a.fit(None, a.AttributeOptions(standard=0.2, sample_size=50.0), chart="p")
    assert lines(alone) == at
    assert (alone.baseline, alone.diagnostics, alone.limits.baseline) == (None, None, None)
    assert alone.performance == found.performance
    # Without a size the limits follow each sample's own.
    free = a.fit(None, a.AttributeOptions(standard=0.2), chart="p")
    assert lines(free) == PanelLimits(0.2, None, None)
    assert free.performance.in_control_arl is None
    judged = a.judge(free.limits, counts([25.0], 50), None, chart="p")
    assert hits(judged) == [0]
    # All zero is no obstacle to a standard; neither is a baseline that is excluded as a whole.
    assert lines(fit("c", [0.0, 0.0, 0.0], standard=4.0)).upper == 10.0
    everything = (Exclusion(0, "start"), Exclusion(1, "start"))
    assert lines(fit("c", [3.0, 4.0], standard=4.0, exclude=everything)).upper == 10.0


def test_judging_uses_what_is_frozen() -> None:
    limits = fit("u", BOARDS, 5).limits
    judged = a.judge(limits, counts([17.0, 16.0, 33.0], [5.0, 5.0, 20.0]), None, chart="u")
    assert hits(judged) == [0]
    assert judged.panels.rate.upper[2] == pytest.approx(1.6 + 3 * math.sqrt(1.6 / 20), rel=1e-15)
    assert judged.carry.points == 3
    # An area given once with the limits need not be told again on a c chart.
    area = a.fit(counts([10.0, 12.0, 9.0], 2.0), a.AttributeOptions(), chart="c")
    again = a.judge(area.limits, counts([11.0]), None, chart="c")
    assert again.panels.count.centre.tolist() == [pytest.approx(31 / 3)]


@pytest.mark.parametrize(
    ("chart", "values", "inspected", "expected", "where"),
    [
        ("np", [1.0, 2.0], [50.0, 60.0], "size-varies", ("data", "inspected", 1)),
        ("c", [1.0, 2.0], [1.0, 2.0], "size-varies", ("data", "inspected", 1)),
        ("p", [1.0, 51.0], 50.0, "count-above-inspected", ("data", "counts", 1)),
        ("p", [1.0, 2.0], [50.0, 0.0], "nothing-inspected", ("data", "inspected", 1)),
        ("u", [1.0, 2.0], [math.nan, 1.0], "nothing-inspected", ("data", "inspected", 0)),
        ("p", [1.0, 2.0], None, "inspected-missing", ("data", "inspected")),
        ("c", [0.0, 0.0], None, "no-events", ("data", "counts")),
        ("p", [5.0, 5.0], 5.0, "all-nonconforming", ("data", "counts")),
        ("c", [math.nan, math.nan], None, "empty", ("data", "counts")),
        ("c", [4.0, math.nan], None, "too-few-samples", ("data", "counts")),
    ],
)
def test_data_refused(
    chart: a.AttributeChart,
    values: list[float],
    inspected: float | list[float] | None,
    expected: str,
    where: tuple[str | int, ...],
) -> None:
    with pytest.raises(UnusableData) as caught:
        fit(chart, values, inspected)
    assert code(caught) == expected
    assert caught.value.faults[0].where == where


def test_refusals_name_the_chart_to_use() -> None:
    with pytest.raises(UnusableData, match="Use the p chart"):
        fit("np", [1.0, 2.0], [50.0, 60.0])
    with pytest.raises(UnusableData, match="Use the u chart"):
        fit("c", [1.0, 2.0], [1.0, 2.0])
    limits = fit("np", JUICE, 50).limits
    with pytest.raises(UnusableData, match="Use the p chart") as caught:
        a.judge(limits, counts([1.0], 60), None, chart="np")
    assert code(caught) == "size-differs"


@pytest.mark.parametrize(
    ("options", "expected"),
    [
        (a.AttributeOptions(), ["data-missing", "size-missing"]),
        (a.AttributeOptions(standard=2.0), ["size-missing"]),
        (
            a.AttributeOptions(standard=2.0, sample_size=1.0, exclude=(Exclusion(0, "x"),)),
            ["no-such-point"],
        ),
    ],
)
def test_options_refused_without_data(options: a.AttributeOptions, expected: list[str]) -> None:
    with pytest.raises(UnusableParameter) as caught:
        a.fit(None, options, chart="c")
    assert [fault.code for fault in caught.value.faults] == expected


def test_options_refused_with_data() -> None:
    with pytest.raises(UnusableParameter) as caught:
        fit("p", JUICE, 50, sample_size=50.0)
    assert code(caught) == "size-with-data"
    with pytest.raises(UnusableParameter) as caught:
        fit("p", JUICE, 50, exclude=(Exclusion(30, "x"), Exclusion(2, "x"), Exclusion(2, "y")))
    assert [fault.code for fault in caught.value.faults] == ["no-such-point", "excluded-twice"]


# ---------------------------------------------------------------------------------------------------
# Cautions and diagnostics


def test_cautions() -> None:
    assert "overdispersed" in codes(fit("p", JUICE, 50))
    found = fit("p", JUICE, 50)
    assert found.diagnostics is not None
    assert found.diagnostics.dispersion is not None
    assert found.diagnostics.dispersion.ratio > 1.5
    even = fit("c", [16.0, 16.0, 17.0, 16.0, 15.0] * 6)
    assert "underdispersed" in codes(even)
    assert "few-samples" in codes(fit("c", WAFERS[:10]))
    assert "small-counts" in codes(fit("c", [1.0, 0.0, 2.0, 1.0] * 6))
    assert "small-counts" not in codes(fit("c", [1.0, 0.0, 2.0, 1.0] * 6, basis=TAILS))
    assert not codes(fit("c", WAFERS)) & {"small-counts", "few-samples", "underdispersed"}


# ---------------------------------------------------------------------------------------------------
# What it costs and buys


def test_run_lengths_are_exact() -> None:
    found = fit("c", WAFERS).performance
    beyond = stats.poisson.cdf(3, 16) + stats.poisson.sf(28, 16)
    assert found.in_control_arl == pytest.approx(1 / beyond, rel=1e-11)
    for shift in found.shifts:
        mean = 16 * shift.shift
        beyond = stats.poisson.cdf(3, mean) + stats.poisson.sf(28, mean)
        assert shift.arl == pytest.approx(1 / beyond, rel=1e-10)
    found = fit("np", JUICE, 50, basis=TAILS).performance
    law = stats.binom(50, 347 / 1500)
    at = lines(fit("np", JUICE, 50, basis=TAILS))
    assert at.lower is not None
    assert at.upper is not None
    beyond = law.cdf(at.lower - 1) + law.sf(at.upper)
    assert beyond <= 0.0027
    assert found.in_control_arl == pytest.approx(1 / beyond, rel=1e-11)


@pytest.mark.parametrize("name", ["shewhart-1931", "western-electric-1956", "nelson-1984"])
@pytest.mark.parametrize("mean", [0.7, 5.0, 100.0])
def test_gathered_counts_lose_nothing(name: str, mean: float) -> None:
    rules = PUBLISHED[name].rules
    x = np.arange(int(mean + 15 * math.sqrt(mean) + 40), dtype=np.float64)
    p = stats.poisson.pmf(x, mean)
    sd = math.sqrt(mean)
    at = {"centre": mean, "sigma": sd, "lower": max(mean - 3 * sd, 0.0), "upper": mean + 3 * sd}
    whole = runlength.discrete(rules, support=x, probability=p / p.sum(), **at)
    found = lattice.run_law(rules, count_law(False, mean, 1.0), **at).run_length()
    assert found.arl == pytest.approx(whole.arl, rel=1e-10)
    assert found.sd == pytest.approx(whole.sd, rel=1e-9)
    assert found.method == whole.method


def test_lines_that_fall_on_counts() -> None:
    # Lines at 1, 2, 3 sigma from 100 are the counts 70 to 130: none of them is beyond its line.
    rules = PUBLISHED["western-electric-1956"].rules
    x = np.arange(300.0)
    p = stats.poisson.pmf(x, 100)
    at = {"centre": 100.0, "sigma": 10.0, "lower": 70.0, "upper": 130.0}
    whole = runlength.discrete(rules, support=x, probability=p / p.sum(), **at)
    assert lattice.run_law(rules, count_law(False, 100.0, 1.0), **at).run_length().arl == pytest.approx(
        whole.arl, rel=1e-10
    )


def test_large_counts_become_normal_ones() -> None:
    for name in PUBLISHED:
        rules = PUBLISHED[name].rules
        normal = runlength.shewhart(rules).arl
        for mean, near in ((1e11, 1e-5), (1e15, 1e-6), (1e27, 0.01)):
            found = price.count_performance("count", rules, False, mean, 1.0, LimitBasis())
            assert found.in_control_arl == pytest.approx(normal, rel=near)
            assert [shift.arl for shift in found.shifts] == [1.0] * 4


def test_ties_neglected_are_said_and_few() -> None:
    # A c chart of mean 2000 with a rule on order, against the lattice itself.
    rules = (Rule("trend", 6, 6),)
    sd = math.sqrt(2000.0)
    at = {"centre": 2000.0, "sigma": sd, "lower": 2000 - 3 * sd, "upper": 2000 + 3 * sd}
    x = np.arange(1500.0, 2501.0)
    p = stats.poisson.pmf(x, 2000)
    whole = runlength.discrete(rules, support=x, probability=p / p.sum(), **at)
    found = lattice.run_law(rules, count_law(False, 2000.0, 1.0), **at).run_length()
    assert "ties neglected" in found.method
    assert found.arl == pytest.approx(whole.arl, rel=0.05)
    assert found.arl < whole.arl


def test_a_fit_never_fails_for_its_price() -> None:
    far = LimitBasis("sigma", 10.0, None)
    # No count reaches the limits at 10 sigma: 5 units, of which 30 % are nonconforming.
    found = fit("np", [1.0, 2.0, 1.0, 2.0], 5, basis=far)
    assert lines(found) == PanelLimits(1.5, None, None)
    assert found.performance.in_control_arl is None
    assert found.performance.method.startswith("not computed: ")
    assert all(shift.arl is None for shift in found.performance.shifts)
    # More states than are computed: many long windows at once.
    rules = tuple(Rule("zone", 10 + i, 40 + i, 0.1 * (i + 1)) for i in range(8))
    found = fit("c", WAFERS, rules=rules)
    assert found.performance.method.startswith("not computed: ")
    mean = price.mean_performance(rules, LimitBasis(), 5.0, "range")
    assert mean.in_control_arl is None
    assert mean.spread_false_alarm_probability is not None
    assert mean.method.startswith("not computed: ")


def test_the_price_of_huge_counts_is_small() -> None:
    big = Counts(np.array([1e15, 1.00000001e15] * 12).round(), np.full(24, 1.0))
    for basis in (LimitBasis(), TAILS):
        price.count_performance.cache_clear()
        start = time.process_time()
        found = a.fit(big, a.AttributeOptions(basis, PUBLISHED["western-electric-1956"].rules), chart="c")
        assert time.process_time() - start < 0.5  # 0.005 in fact; an array of the counts took seconds
        assert found.performance.in_control_arl == pytest.approx(91.75, rel=1e-3)
