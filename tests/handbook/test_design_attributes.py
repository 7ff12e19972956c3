"""Design of charts of counts against published tables, exact arithmetic and sums of probabilities."""

from __future__ import annotations

import math
import time
from fractions import Fraction

import numpy as np
import pytest

from assignable.spc.design.attributes import (
    CountChart,
    _counts,
    characteristics,
    detection_size,
    limit_basis,
    lower_limit_size,
)
from assignable.spc.errors import UnusableParameter


def _law(binomial: bool, level: float, size: float, most: int) -> list[float]:
    """Probabilities of 0 … most, term by term."""
    if binomial:
        n = int(size)
        return [math.comb(n, x) * level**x * (1 - level) ** (n - x) for x in range(min(most, n) + 1)]
    mean = level * size
    return [math.exp(x * math.log(mean) - mean - math.lgamma(x + 1)) for x in range(most + 1)]


def test_operating_characteristic_of_a_p_chart() -> None:
    # Montgomery, Introduction to SQC, table 7.5 (n 50, limits .0303 and .3697): from memory, recomputed.
    p = [0.01, 0.03, 0.05, 0.10, 0.15, 0.20, 0.25, 0.30, 0.35, 0.40, 0.45, 0.50, 0.55]
    beta = [
        0.0894,
        0.4447,
        0.7206,
        0.9662,
        0.997,
        0.9973,
        0.9713,
        0.8594,
        0.6216,
        0.3356,
        0.1273,
        0.0325,
        0.0053,
    ]
    found = characteristics("p", 0.2, 50, p)
    assert (round(found.limits.lower or 0, 4), round(found.limits.upper or 0, 4)) == (0.0303, 0.3697)
    assert (found.limits.lower_count, found.limits.upper_count) == (2, 18)
    assert [round(one.no_signal_probability, 4) for one in found.levels] == beta
    np_chart = characteristics("np", 0.2, 50, p)
    assert np_chart.levels == found.levels
    assert np_chart.limits.upper == pytest.approx(50 * (found.limits.upper or 0))


def test_operating_characteristic_of_a_c_chart() -> None:
    # Montgomery, table 7.12 (limits 6.48 and 33.22): from memory, recomputed.
    c = [1, 3, 5, 7, 10, 15, 20, 25, 30, 33, 35, 40, 45]
    beta = [0, 0.034, 0.238, 0.55, 0.87, 0.992, 0.997, 0.95, 0.744, 0.546, 0.41, 0.151, 0.038]
    found = characteristics("c", 19.85, 1, c)
    assert (found.limits.lower_count, found.limits.upper_count) == (7, 33)
    assert [round(one.no_signal_probability, 3) for one in found.levels] == beta


def test_sizes_in_the_textbook() -> None:
    # Montgomery, 7.2.1: p .05 with 3 sigma needs n > 171, and p .01 to find .05 with an even chance needs 56 by
    # the formula (55.7): from memory.
    assert lower_limit_size("p", 0.05).size == 172
    found = detection_size("p", 0.01, 0.05, 0.5)
    assert found.formula.size == 56
    # The least exact one is 54; of the sizes from 1 on, by sums of the binomial law.
    power = {}
    for n in range(40, 120):
        most = math.floor(n * 0.01 + 3 * math.sqrt(n * 0.0099))
        power[n] = 1 - math.fsum(_law(True, 0.05, n, most))
    assert found.size == min(n for n in power if power[n] >= 0.5) == 54
    assert found.power == pytest.approx(power[54], rel=1e-12)
    assert found.formula.power == pytest.approx(power[56], rel=1e-12)
    assert found.size_from_which_it_holds == max(n for n in power if power[n] < 0.5) + 1


@pytest.mark.parametrize("binomial", [True, False])
def test_limits_that_fall_on_a_whole_number(binomial: bool) -> None:
    # Levels and multiples as written: a tenth is a tenth. By exact comparison of squares, count by count.
    hits = 0
    for level in (0.1, 0.2, 0.5, 0.36, 0.9, 0.04, 0.02, 0.3):
        for k in (3.0, 2.5, 1.5, 3.3, 0.3, 0.7):
            sizes = np.arange(1.0, 260.0)
            fewest, most = _counts(binomial, level, sizes, limit_basis(sigma_multiple=k))
            p, square = Fraction(str(level)), Fraction(str(k)) ** 2
            for index in range(0, 259, 1):
                n = index + 1
                middle = p * n
                spread = square * middle * ((1 - p) if binomial else 1)

                def above(x: int, middle: Fraction = middle, spread: Fraction = spread) -> bool:
                    return x > middle and (x - middle) ** 2 > spread

                def below(x: int, middle: Fraction = middle, spread: Fraction = spread) -> bool:
                    return x < middle and (middle - x) ** 2 > spread

                low, high = int(fewest[index]), int(most[index])
                assert not below(low)
                assert low == 0 or below(low - 1)
                assert not above(high)
                assert above(high + 1) or (binomial and high == n)
                root = math.isqrt(int(spread)) if spread.denominator == 1 else -1
                hits += root >= 0 and root * root == spread and middle.denominator == 1
    assert hits > 20


def test_a_count_on_the_limit_is_within() -> None:
    # n 100, p a tenth: limits at exactly 1 and 19. One on the limit is no signal; in doubles, 1 could be.
    found = characteristics("np", 0.1, 100, [0.1])
    assert (found.limits.lower_count, found.limits.upper_count) == (1, 19)
    law = _law(True, 0.1, 100, 19)
    assert found.in_control.no_signal_probability == pytest.approx(math.fsum(law[1:]), rel=1e-12)
    # A mean of 9 with 3 sigma: the lower limit is 0 itself, and none at all is no signal. Above 9 it is one.
    assert characteristics("c", 9.0, 1, [9.0]).limits.lower is None
    assert lower_limit_size("c", 9.0).size == 2
    assert lower_limit_size("c", 9.0001).size == 1
    assert lower_limit_size("u", 0.1).size == 91
    # n > 9·.9/.1 = 81 exactly; 1 - p as a double would let 81 through or not by accident.
    assert lower_limit_size("p", 0.1).size == 82


@pytest.mark.parametrize("chart", ["p", "u"])
@pytest.mark.parametrize("level", [0.01, 0.037, 0.1, 0.25, 0.4])
@pytest.mark.parametrize("k", [2.0, 3.0, 3.5])
def test_the_least_size_with_a_lower_limit(chart: CountChart, level: float, k: float) -> None:
    found = lower_limit_size(chart, level, sigma_multiple=k)
    assert found.limits.lower_count is not None
    assert found.limits.lower_count >= 1
    if found.size > 1:
        assert characteristics(chart, level, found.size - 1, [level], sigma_multiple=k).limits.lower is None
    law = _law(chart == "p", level, found.size, 0)
    assert found.probability_of_none == pytest.approx(law[0], rel=1e-12)


def test_the_least_size_with_a_probability_limit() -> None:
    # (1/2)^10 is exactly half of 1/512: met with equality, and decided so.
    found = lower_limit_size("p", 0.5, false_alarm_probability=2**-9)
    assert found.size == 10
    assert lower_limit_size("p", 0.5, false_alarm_probability=0.00195).size == 11
    for level in (0.02, 0.3):
        found = lower_limit_size("p", level, false_alarm_probability=0.0027)
        assert (1 - level) ** found.size <= 0.00135 < (1 - level) ** (found.size - 1)
        assert found.limits.lower_count is not None
    found = lower_limit_size("c", 2.0, false_alarm_probability=0.0027)
    assert math.exp(-2 * found.size) <= 0.00135 < math.exp(-2 * (found.size - 1))


@pytest.mark.parametrize(
    ("chart", "level", "shifted", "power"),
    [
        ("p", 0.1, 0.2, 0.8),
        ("p", 0.1, 0.03, 0.9),
        ("np", 0.3, 0.45, 0.5),
        ("u", 2.0, 3.0, 0.9),
        ("c", 5.0, 2.0, 0.7),
        ("u", 0.5, 0.6, 0.3),
    ],
)
@pytest.mark.parametrize("alarm", [None, 0.01])
def test_detection_by_sums(
    chart: CountChart, level: float, shifted: float, power: float, alarm: float | None
) -> None:
    found = detection_size(chart, level, shifted, power, false_alarm_probability=alarm)
    binomial = chart in ("p", "np")
    for n in {1, found.size // 2 or 1, max(found.size - 1, 1), found.size}:
        at = characteristics(chart, level, n, [shifted], false_alarm_probability=alarm)
        low = at.limits.lower_count or 0
        high = n if binomial and at.limits.upper_count is None else at.limits.upper_count
        assert high is not None
        beta = math.fsum(_law(binomial, shifted, n, high)[low:])
        assert at.levels[0].no_signal_probability == pytest.approx(beta, rel=1e-10)
        assert at.levels[0].power == pytest.approx(1 - beta, abs=1e-12)
        if n < found.size:
            assert at.levels[0].power < power
        else:
            assert at.levels[0].power == pytest.approx(found.power, rel=1e-12)
            assert found.power >= power
        if alarm is not None:
            inside = _law(binomial, level, n, high)
            # No more than half of it beyond either limit; and one count tighter would be more.
            assert math.fsum(inside[:low]) <= alarm / 2 < math.fsum(inside[: low + 1]) + 1e-15
            assert 1 - math.fsum(inside) <= alarm / 2 + 1e-12
    holds = found.size_from_which_it_holds
    assert holds is not None
    assert holds >= found.size


def test_run_lengths_and_the_level_they_are_longest_at() -> None:
    found = characteristics("p", 0.05, 200, [0.05, 0.08])
    for one in found.levels:
        assert one.arl == pytest.approx(1 / one.power, rel=1e-14)
        assert one.sd_run_length == pytest.approx(math.sqrt(one.no_signal_probability) / one.power, rel=1e-12)
        assert one.power == pytest.approx(one.signal_below_probability + one.signal_above_probability)
    for chart, level, size in (("p", 0.05, 200), ("np", 0.2, 50), ("c", 19.85, 1), ("u", 4.0, 3.5)):
        whole = characteristics(chart, level, size, [level])  # type: ignore[arg-type]
        near = [whole.least_favourable_level * factor for factor in (0.5, 0.97, 1.03, 1.3)]
        others = characteristics(chart, level, size, near).levels  # type: ignore[arg-type]
        assert whole.longest_arl is not None
        for one in others:
            assert one.arl is not None
            assert one.arl < whole.longest_arl
    # One limit alone: the fewer there are, the longer it runs.
    assert characteristics("c", 2.0, 1, [2.0]).longest_arl is None


def test_refusals() -> None:
    for call, where in (
        (lambda: characteristics("p", 0.1, 10.5, [0.1]), ("size",)),
        (lambda: characteristics("p", 1.0, 10, [0.1]), ("level",)),
        (lambda: characteristics("p", 0.1, 10, [0.1, 1.5]), ("levels", 1)),
        (lambda: characteristics("p", 0.1, 10, []), ("levels",)),
        (lambda: characteristics("u", 1e6, 1e5, [1.0]), ("size",)),
        (lambda: characteristics("z", 0.1, 10, [0.1]), ("chart",)),  # type: ignore[arg-type]
        (lambda: lower_limit_size("p", 1e-8), ("level",)),
        (lambda: lower_limit_size("p", 0.1, sigma_multiple=math.nan), ("sigma_multiple",)),
        (
            lambda: lower_limit_size("p", 0.1, sigma_multiple=3.0, false_alarm_probability=0.01),
            ("false_alarm_probability",),
        ),
        (lambda: detection_size("p", 0.1, 0.1, 0.5), ("shifted_level",)),
        (lambda: detection_size("p", 0.1, 0.2, 1.0), ("power",)),
        (lambda: detection_size("p", 0.01, 0.0100001, 0.5), ("shifted_level",)),
        (lambda: detection_size("p", 0.0005, 0.00075, 0.9), ("power",)),
    ):
        with pytest.raises(UnusableParameter) as caught:
            call()
        assert caught.value.faults[0].where == where


def test_it_is_quick() -> None:
    detection_size("p", 0.1, 0.2, 0.5)
    begun = time.process_time()
    with pytest.raises(UnusableParameter, match="by the normal approximation"):
        detection_size("p", 0.0005, 0.00075, 0.9)
    with pytest.raises(UnusableParameter, match="by the normal approximation"):
        detection_size("p", 0.005, 0.0075, 0.9, false_alarm_probability=0.0027)
    assert time.process_time() - begun < 2.0


@pytest.mark.parametrize("chart", ["p", "u"])
def test_limits_without_a_whole_number_between_them(chart: CountChart) -> None:
    size = lower_limit_size(chart, 4e-6, sigma_multiple=0.1).size
    found = characteristics(chart, 4e-6, size, [4e-6, 0.1], sigma_multiple=0.1)
    assert (found.limits.lower_count, found.limits.upper_count) == (1, 0)
    assert [one.power for one in found.levels] == [1.0, 1.0]
    assert found.longest_arl == 1.0
