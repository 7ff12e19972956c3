"""Charts of dispersed counts: the formula by hand, computed values, open data, and their refusals."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from scipy import stats

from assignable.spc.charts import attributes as a
from assignable.spc.charts import dispersed as d
from assignable.spc.charts.common import Exclusion, LimitBasis
from assignable.spc.data import Counts
from assignable.spc.errors import SpcError, UnusableData, UnusableParameter
from assignable.spc.rules import PUBLISHED

D2 = 2.0 / math.sqrt(math.pi)  # E|X - Y| of two standard normals; the paper rounds it to 1.128

JUICE = [
    *(12, 15, 8, 10, 4, 7, 16, 9, 14, 10, 5, 6, 17, 12, 22),
    *(8, 10, 5, 13, 11, 20, 18, 24, 15, 9, 12, 7, 13, 9, 6),
]
CIRCUITS = [
    *(21, 24, 16, 12, 15, 5, 28, 20, 31, 25, 20, 24, 16, 19, 10, 17, 13, 22, 18, 39, 30, 24, 16),
    *(19, 17, 15),
]
# Purchase orders with an error, of those of each week: Montgomery ISQC table 7.2 (from memory, recomputed:
# 234 of 2450).
ORDERS = [12, 8, 6, 9, 10, 12, 11, 16, 10, 6, 20, 15, 9, 8, 6, 8, 10, 7, 5, 8, 5, 8, 10, 6, 9]
OF = [
    *(100, 80, 80, 100, 110, 110, 100, 100, 90, 90, 110, 120, 120, 120, 110, 80, 80, 80, 90, 100, 100),
    *(100, 100, 90, 90),
]
# statsmodels 0.15.0, data set "cancer" (open data): the 40 largest of 301 counties, cases and population.
CASES = [
    *(79, 63, 90, 92, 60, 63, 63, 75, 70, 90, 111, 103, 117, 118, 40, 83, 90, 97, 92, 104, 96, 142),
    *(105, 145, 160, 127, 169, 104, 179, 152, 163, 167, 302, 246, 236, 250, 267, 244, 248, 360),
]
POPULATION = [
    *(22811, 23245, 23258, 24296, 24351, 24692, 24896, 25275, 25405, 25715, 26245, 26408, 26691),
    *(28024, 28270, 28477, 29254, 29422, 30125, 30538, 34109, 35112, 35876, 36307, 39023, 40756),
    *(42997, 47672, 49126, 53464, 56529, 59634, 60161, 62398, 62652, 62931, 63476, 66676, 74005),
    88456,
]
# statsmodels 0.15.0, data set "star98" (open data): the first 30 districts, pupils above the national median
# in mathematics, and pupils tested.
ABOVE = [
    *(452, 144, 337, 395, 8, 1348, 477, 565, 205, 469, 784, 209, 195, 206, 136, 694, 204, 31, 601),
    *(64, 51, 220, 151, 36, 15, 5, 541, 86, 142, 1365),
]
PUPILS = [
    *(807, 184, 571, 573, 65, 2247, 1364, 912, 525, 1067, 3016, 235, 556, 688, 252, 925, 377, 69),
    *(1092, 115, 139, 449, 309, 116, 81, 66, 1259, 190, 322, 2394),
]


def data(counts: list[float], sizes: float | list[float]) -> Counts:
    x = np.array(counts, dtype=np.float64)
    return Counts(x, np.broadcast_to(np.array(sizes, dtype=np.float64), x.shape))


def fit(
    chart: d.DispersedChart, counts: list[float], sizes: float | list[float], **options: object
) -> d.DispersedFit:
    return d.fit(data(counts, sizes), d.DispersedOptions(**options), chart=chart)  # type: ignore[arg-type]


def by_hand(counts: list[float], sizes: list[float], *, binomial: bool) -> tuple[float, float]:
    """Mean and sigma_z, one number at a time."""
    mean = math.fsum(counts) / math.fsum(sizes)
    z = [
        (x / n - mean) / math.sqrt((mean * (1 - mean) if binomial else mean) / n)
        for x, n in zip(counts, sizes, strict=True)
    ]
    ranges = [abs(after - before) for before, after in pairwise(z)]
    return mean, math.fsum(ranges) / len(ranges) / D2


def codes(found: d.DispersedFit) -> set[str]:
    return {caution.code for caution in found.cautions}


def code(caught: pytest.ExceptionInfo[SpcError]) -> str:
    return caught.value.faults[0].code


def test_juice_cans() -> None:
    # Computed from the definition with d2 = 1.128 as in the paper (not published): sigma_z 1.660867,
    # UCL .528472, LCL -.065805.
    found = fit("p-prime", JUICE, 50)
    assert found.limits.sigma_z * D2 / 1.128 == pytest.approx(1.660867, abs=5e-7)
    at = found.limits.panels.proportion
    far = (at.upper - at.centre) * D2 / 1.128
    assert at.centre + far == pytest.approx(0.528472, abs=5e-7)
    assert at.centre - far == pytest.approx(-0.065805, abs=5e-7)
    assert at.lower is None  # a limit below 0 is none
    assert found.baseline is not None
    assert found.baseline.signals == ()  # 15 and 23 signal on the p chart
    assert "not-dispersed" not in codes(found)


def test_purchase_orders() -> None:
    # Computed from the definition with d2 = 1.128 (not published): p .0955102, sigma_z .965674, UCL at
    # n = 100 .180659.
    found = fit("p-prime", ORDERS, OF)
    assert found.limits.mean == pytest.approx(0.0955102, abs=5e-8)
    scaled = found.limits.sigma_z * D2 / 1.128
    assert scaled == pytest.approx(0.965674, abs=5e-7)
    assert found.baseline is not None
    upper = float(found.baseline.panels.proportion.upper[0])
    assert 0.0955102 + (upper - found.limits.mean) * D2 / 1.128 == pytest.approx(0.180659, abs=5e-7)
    # The dispersion test does not reject: back to the plain chart.
    assert "not-dispersed" in codes(found)
    caution = next(each for each in found.cautions if each.code == "not-dispersed")
    assert "`p` chart" in caution.sentence


@pytest.mark.parametrize(
    ("chart", "counts", "sizes"),
    [
        ("p-prime", JUICE, [50] * 30),
        ("p-prime", ORDERS, OF),
        ("p-prime", ABOVE, PUPILS),
        ("u-prime", CIRCUITS, [1] * 26),
        ("u-prime", CASES, POPULATION),
    ],
)
def test_against_the_definition(chart: d.DispersedChart, counts: list[float], sizes: list[float]) -> None:
    found = fit(chart, counts, sizes)
    mean, sigma_z = by_hand(counts, sizes, binomial=chart == "p-prime")
    assert found.limits.mean == pytest.approx(mean, rel=1e-14)
    assert found.limits.sigma_z == pytest.approx(sigma_z, rel=1e-12)
    assert found.baseline is not None
    panel = getattr(found.baseline.panels, "proportion" if chart == "p-prime" else "rate")
    for at, n in enumerate(sizes):
        far = 3 * sigma_z * math.sqrt((mean * (1 - mean) if chart == "p-prime" else mean) / n)
        top = 1.0 if chart == "p-prime" else math.inf
        assert panel.upper[at] == pytest.approx(min(mean + far, top), rel=1e-12)
        assert panel.lower[at] == pytest.approx(max(mean - far, 0.0), rel=1e-12)
    beyond = [
        at
        for at, n in enumerate(sizes)
        if counts[at] / n > panel.upper[at] or counts[at] / n < panel.lower[at]
    ]
    assert [signal.index for signal in found.baseline.signals] == beyond


def test_open_data_is_dispersed() -> None:
    # Both sets flood the plain chart and not the primed one.
    schools = fit("p-prime", ABOVE, PUPILS)
    plain = a.fit(data(ABOVE, PUPILS), a.AttributeOptions(), chart="p")
    assert schools.limits.sigma_z > 5
    assert plain.baseline is not None
    assert schools.baseline is not None
    assert len(plain.baseline.signals) > 15 > len(schools.baseline.signals)
    assert "overdispersed" in {caution.code for caution in plain.cautions}
    deaths = fit("u-prime", CASES, POPULATION)
    assert deaths.limits.sigma_z > 1.2
    assert not codes(deaths) & {"not-dispersed", "underdispersed"}


def test_under_dispersion_narrows_the_limits() -> None:
    counts = [20, 21, 19, 20, 22, 20, 19, 21, 20, 18, 20, 21, 20, 19, 20, 21, 20, 20, 19, 21, 20, 19, 21, 20]
    found = fit("u-prime", counts, 1)
    plain = a.fit(data(counts, 1), a.AttributeOptions(), chart="u")
    assert found.limits.sigma_z < 0.4
    assert found.limits.panels.rate.upper < plain.limits.panels.rate.upper
    assert found.limits.panels.rate.lower > plain.limits.panels.rate.lower
    assert "underdispersed" in codes(found)
    judged = d.judge(found.limits, data([26], 1), None, chart="u-prime")
    assert judged.verdict == "signal"
    assert a.judge(plain.limits, data([26], 1), None, chart="u").verdict == "in-control"


def test_a_sigma_z_of_one_is_the_plain_chart() -> None:
    for chart, plain, counts, sizes in (
        ("p-prime", "p", ORDERS, OF),
        ("u-prime", "u", CIRCUITS, 1),
    ):
        rules = PUBLISHED["western-electric-1956"].rules
        ours = fit(chart, counts, sizes, sigma_z=1.0, rules=rules)  # type: ignore[arg-type]
        theirs = a.fit(data(counts, sizes), a.AttributeOptions(rules=rules), chart=plain)  # type: ignore[arg-type]
        assert ours.baseline is not None
        assert theirs.baseline is not None
        assert ours.baseline.signals == theirs.baseline.signals
        for line in ("value", "lower", "upper"):
            one = getattr(getattr(ours.baseline.panels, ours.baseline.panels.__slots__[0]), line)
            other = getattr(getattr(theirs.baseline.panels, theirs.baseline.panels.__slots__[0]), line)
            assert one.tolist() == other.tolist()


def test_standards_given() -> None:
    given = fit("p-prime", JUICE, 50, mean=0.2, sigma_z=1.5)
    assert (given.limits.mean_source, given.limits.sigma_z_source) == ("given", "given")
    assert given.limits.degrees_of_freedom is None
    far = 3 * 1.5 * math.sqrt(0.2 * 0.8 / 50)
    assert given.limits.panels.proportion.upper == pytest.approx(0.2 + far, rel=1e-15)
    alone = d.fit(None, d.DispersedOptions(mean=0.2, sigma_z=1.5, sample_size=50.0), chart="p-prime")
    assert alone.limits.panels == given.limits.panels
    assert alone.performance == given.performance
    # One alone leaves the other to be estimated, about the mean that is given.
    half = fit("p-prime", JUICE, 50, mean=0.2)
    z = (np.array(JUICE) / 50 - 0.2) / math.sqrt(0.2 * 0.8 / 50)
    assert half.limits.sigma_z == pytest.approx(np.abs(np.diff(z)).mean() / D2, rel=1e-12)


def test_judging_uses_what_is_frozen() -> None:
    limits = fit("p-prime", ABOVE, PUPILS).limits
    new = data([5.0, 600.0, 900.0], [4000.0, 1000.0, 1000.0])
    judged = d.judge(limits, new, None, chart="p-prime")
    for at, n in enumerate((4000.0, 1000.0, 1000.0)):
        far = 3 * limits.sigma_z * math.sqrt(limits.mean * (1 - limits.mean) / n)
        assert judged.panels.proportion.upper[at] == pytest.approx(min(limits.mean + far, 1.0), rel=1e-13)
    assert [signal.index for signal in judged.signals] == [0, 2]


def test_gaps_and_exclusions_break_the_moving_range() -> None:
    # Without 15 and 23 no difference to their neighbours counts.
    left_out = (Exclusion(14, "batch"), Exclusion(22, "operator"))
    found = fit("p-prime", JUICE, 50, exclude=left_out)
    kept = [x for at, x in enumerate(JUICE) if at not in (14, 22)]
    mean = sum(kept) / (50 * len(kept))
    z = [(x / 50 - mean) / math.sqrt(mean * (1 - mean) / 50) for x in JUICE]
    pairs = [at for at in range(29) if not {at, at + 1} & {14, 22}]
    expected = sum(abs(z[at + 1] - z[at]) for at in pairs) / len(pairs) / D2
    assert found.limits.sigma_z == pytest.approx(expected, rel=1e-12)


def test_performance_is_that_of_the_scaled_statistic() -> None:
    found = fit("u-prime", CIRCUITS, 1)
    mean, sigma_z = found.limits.mean, found.limits.sigma_z
    assert "taken as normal" in found.performance.method
    lower = -3.0 if found.limits.panels.rate.lower is not None else -math.inf
    for factor, arl in [
        (1.0, found.performance.in_control_arl),
        *((shift.shift, shift.arl) for shift in found.performance.shifts),
    ]:
        shift, scale = (factor - 1) * math.sqrt(mean) / sigma_z, math.sqrt(factor)
        beyond = stats.norm.sf((3 - shift) / scale) + stats.norm.cdf((lower - shift) / scale)
        assert arl == pytest.approx(1 / beyond, rel=1e-9)


@pytest.mark.parametrize(
    ("chart", "counts", "sizes", "expected"),
    [
        ("p-prime", [5, 5, 5, 5], [50, 50, 50, 50], "no-variation"),
        ("p-prime", [1, 2, 3, 7], [10, 20, 30, 70], "no-variation"),  # but for rounding
        ("u-prime", [3, math.nan, 4, math.nan], [1, 1, 1, 1], "no-spread-information"),
        ("u-prime", [0, 0, 0], [1, 1, 1], "no-events"),
        ("p-prime", [6, 5], [5, 5], "count-above-inspected"),
        ("p-prime", [math.nan, math.nan], [5, 5], "empty"),
        ("u-prime", [3], [1], "too-few-samples"),
    ],
)
def test_data_refused(
    chart: d.DispersedChart, counts: list[float], sizes: list[float], expected: str
) -> None:
    with pytest.raises(UnusableData) as caught:
        fit(chart, counts, sizes)
    assert code(caught) == expected


def test_options_refused() -> None:
    with pytest.raises(UnusableParameter) as caught:
        d.fit(None, d.DispersedOptions(), chart="p-prime")
    assert [fault.where for fault in caught.value.faults] == [
        ("standards", "proportion"),
        ("standards", "sigma_z"),
    ]
    with pytest.raises(UnusableParameter) as caught:
        fit("u-prime", CIRCUITS, 1, sample_size=2.0)
    assert code(caught) == "size-with-data"


def test_impossible_limits_cost_nothing() -> None:
    # Limits so wide that no proportion is beyond them: no price, and no failure.
    found = d.fit(None, d.DispersedOptions(mean=0.5, sigma_z=9.0, sample_size=20.0), chart="p-prime")
    assert (found.limits.panels.proportion.lower, found.limits.panels.proportion.upper) == (None, None)
    assert found.performance.in_control_arl is None
    assert found.performance.method.startswith("not computed")
    assert LimitBasis().sigma_multiple == found.limits.sigma_multiple
