"""The chart of single values against published examples, and against a plain transcription."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
import scipy.stats

from assignable.spc.charts import CHARTS
from assignable.spc.charts.common import Exclusion, LimitBasis, Standards
from assignable.spc.charts.individuals import IndividualsOptions
from assignable.spc.data import Individuals
from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.rules import PUBLISHED

NAN = float("nan")

# Flow of a process, ten batches: NIST/SEMATECH e-Handbook, 6.3.2.2. Quoted at second hand and recomputed.
FLOW = (49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1)

# Newcomb's passage times of light of 1882, 24800 ns and so many (public domain; in many packages as
# `newcomb`). Copied from memory; mean 26.21 and the two wild values are well known.
LIGHT = (
    *(28, 26, 33, 24, 34, -44, 27, 16, 40, -2, 29, 22, 24, 21, 25, 30, 23, 29, 31, 19, 24, 20),
    *(36, 32, 36, 28, 25, 21, 28, 29, 37, 25, 28, 26, 30, 32, 36, 26, 30, 22, 36, 23, 27, 27),
    *(28, 27, 31, 27, 26, 33, 26, 32, 32, 24, 39, 28, 24, 25, 32, 25, 29, 27, 28, 29, 16, 23),
)

D2_OF_TWO = 2.0 / math.sqrt(math.pi)
D3_OF_TWO = math.sqrt(2.0 - 4.0 / math.pi)
D2_OF_THREE = 3.0 / math.sqrt(math.pi)
D2_OF_FOUR = 2.05875074601  # ISO 7870-2 prints 2.059; more digits from memory


def fit(values: Any, **options: Any) -> Any:
    data = None if values is None else Individuals(np.array(values, dtype=float))
    return CHARTS["individuals"].fit(data, IndividualsOptions(**options))


def moving_ranges(values: Any, span: int = 2) -> list[float]:
    found = []
    for end in range(span, len(values) + 1):
        window = values[end - span : end]
        if not any(math.isnan(value) for value in window):
            found.append(max(window) - min(window))
    return found


# Published values -----------------------------------------------------------------------------------


def test_flow_of_ten_batches() -> None:
    # As printed, with d2 = 1.128: 1.8778/1.128 against 1.8778/1.128379 moves a limit by 0.0017.
    found = fit(FLOW, rules=PUBLISHED["western-electric-1956"].rules)
    assert found.limits.centre == pytest.approx(50.81, abs=5e-3)
    assert found.limits.panels.moving_range.centre == pytest.approx(1.8778, abs=5e-5)
    assert found.baseline.panels.moving_range.value.tolist() == pytest.approx(
        [2.0, 2.3, 1.4, 3.5, 3.4, 1.4, 0.2, 1.2, 1.5], abs=1e-12
    )
    assert found.limits.panels.value.upper == pytest.approx(55.8041, abs=2e-3)
    assert found.limits.panels.value.lower == pytest.approx(45.8159, abs=2e-3)
    # 3.267 times the mean moving range: the factor as ISO 7870-2 prints it.
    assert found.limits.panels.moving_range.upper == pytest.approx(3.267 * 1.8778, abs=1.5e-3)
    assert found.limits.panels.moving_range.lower is None
    assert found.baseline.verdict == "in-control"


# Independent calculation ----------------------------------------------------------------------------


def test_passage_times_of_light() -> None:
    assert np.mean(LIGHT) == pytest.approx(26.21, abs=5e-3)  # Stigler 1977, from memory
    found = fit(LIGHT)
    ranges = moving_ranges(LIGHT)
    sigma = sum(ranges) / len(ranges) / D2_OF_TWO
    centre = sum(LIGHT) / len(LIGHT)
    assert found.limits.centre == pytest.approx(centre, rel=1e-14)
    assert found.limits.sigma == pytest.approx(sigma, rel=1e-12)
    assert found.limits.panels.value.upper == pytest.approx(centre + 3.0 * sigma, rel=1e-12)
    assert found.limits.panels.value.lower == pytest.approx(centre - 3.0 * sigma, rel=1e-12)
    mean_range = D2_OF_TWO * sigma
    upper = mean_range + 3.0 * D3_OF_TWO * sigma
    assert found.limits.panels.moving_range.upper == pytest.approx(upper, rel=1e-10)
    outside = [at for at, value in enumerate(LIGHT) if abs(value - centre) > 3.0 * sigma]
    wild = [at + 1 for at, value in enumerate(ranges) if value > upper]
    signals = found.baseline.signals
    assert [one.index for one in signals if one.panel == "value"] == outside == [5, 9]
    assert [one.index for one in signals if one.panel == "moving_range"] == wild
    assert found.baseline.verdict == "signal"


def test_the_median_resists_wild_values() -> None:
    found = fit(LIGHT, sigma_estimator="median-moving-range")
    # Half of all ranges of two lie below √2 times the upper quartile.
    factor = math.sqrt(2.0) * scipy.stats.norm.ppf(0.75)
    assert factor == pytest.approx(0.9539, abs=5e-5)  # as the methods' own text prints it
    assert found.limits.sigma == pytest.approx(np.median(moving_ranges(LIGHT)) / factor, rel=1e-9)
    assert found.limits.sigma < 0.7 * fit(LIGHT).limits.sigma


@pytest.mark.parametrize(("span", "d2"), [(2, D2_OF_TWO), (3, D2_OF_THREE), (4, D2_OF_FOUR)])
def test_spans_and_gaps(span: int, d2: float) -> None:
    values = [*FLOW[:4], NAN, *FLOW[4:], NAN, 50.0]
    found = fit(values, span=span)
    ranges = moving_ranges(values, span)
    assert found.limits.sigma == pytest.approx(sum(ranges) / len(ranges) / d2, rel=1e-10)
    assert found.limits.centre == pytest.approx(np.nanmean(values), rel=1e-14)
    assert found.limits.span == span
    plotted = found.baseline.panels
    assert plotted.value.index.tolist() == [0, 1, 2, 3, 5, 6, 7, 8, 9, 10, 12]
    assert plotted.moving_range.value.tolist() == pytest.approx(ranges, rel=1e-14)
    ends = [at for at in range(span - 1, 13) if not np.isnan(values[at - span + 1 : at + 1]).any()]
    assert plotted.moving_range.index.tolist() == ends


def test_probability_limits() -> None:
    alarm = 0.0027
    limits = fit(FLOW, basis=LimitBasis("probability", None, alarm)).limits
    out = scipy.stats.norm.isf(alarm / 2.0) * limits.sigma
    assert limits.panels.value.upper == pytest.approx(limits.centre + out, rel=1e-12)
    # The range of two is the size of a normal deviate of standard deviation √2.
    low, high = (
        math.sqrt(2.0) * scipy.stats.norm.ppf(0.5 + 0.5 * p) for p in (alarm / 2.0, 1.0 - alarm / 2.0)
    )
    assert limits.panels.moving_range.lower == pytest.approx(low * limits.sigma, rel=1e-8)
    assert limits.panels.moving_range.upper == pytest.approx(high * limits.sigma, rel=1e-10)


def test_standards_given() -> None:
    known = Standards(mean=50.0, sigma=1.5)
    limits = fit(FLOW, standards=known).limits
    assert (limits.centre, limits.sigma, limits.sigma_estimator) == (50.0, 1.5, "given")
    assert limits.degrees_of_freedom is None
    assert (limits.panels.value.lower, limits.panels.value.upper) == (45.5, 54.5)
    alone = fit(None, standards=known)
    assert alone.baseline is None
    assert alone.limits.panels == limits.panels
    assert fit(FLOW, standards=Standards(sigma=1.5)).limits.centre == pytest.approx(50.81)
    for wrong in (Standards(), Standards(mean=1.0), Standards(sigma=1.0)):
        with pytest.raises((UnusableParameter, UnusableData)):
            fit(None, standards=wrong)


def test_an_excluded_value_stays_plotted_and_no_range_of_it_counts() -> None:
    values = [*FLOW[:5], 75.0, *FLOW[5:]]
    found = fit(values, exclude=(Exclusion(5, "blocked valve"),))
    left_out = [*FLOW[:5], NAN, *FLOW[5:]]
    plain = fit(left_out)
    assert found.limits.centre == pytest.approx(plain.limits.centre, rel=1e-15)
    assert found.limits.sigma == pytest.approx(plain.limits.sigma, rel=1e-15)
    assert found.limits.baseline.points == 10
    assert 5 in found.baseline.panels.value.index
    assert found.baseline.verdict == "in-control"


@pytest.mark.parametrize("values", [[1.0], [NAN, NAN], [2.5] * 9, [1.0, NAN, 2.0, NAN, 3.0]])
def test_data_without_limits(values: list[float]) -> None:
    with pytest.raises(UnusableData) as caught:
        fit(values)
    assert all(fault.where[0] == "data" for fault in caught.value.faults)
