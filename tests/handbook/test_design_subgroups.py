"""Design of charts of means against published run lengths, quadrature and simulation."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest

from assignable.spc.design.subgroups import (
    SamplingPlan,
    compare,
    false_alarm_probability,
    limit_multiple,
    oc_curve,
    operating_characteristics,
    plan,
    plans_at_rate,
    smallest_size,
)
from assignable.spc.errors import UnusableParameter
from assignable.spc.rules import PUBLISHED


def test_run_lengths_of_single_values_and_fours() -> None:
    # Montgomery & Runger, Applied Statistics and Probability for Engineers, 3rd ed., table 16-6:
    # checked in print, one decimal.
    shifts = np.array([0.0, 0.5, 1.0, 1.5, 2.0, 3.0])
    single = operating_characteristics(1, 1.0, 3.0, shifts)
    four = operating_characteristics(4, 1.0, 3.0, shifts)
    assert np.round(single.arl, 1).tolist() == [370.4, 155.2, 43.9, 15.0, 6.3, 2.0]
    assert np.round(four.arl, 1).tolist() == [370.4, 43.9, 6.3, 2.0, 1.2, 1.0]


def test_beta_of_fours() -> None:
    # K. Dunn, Process Improvement Using Data (open book), chapter on process monitoring: checked in print.
    # Both limits count: the upper term alone would give .9938 at 0.25.
    beta = oc_curve(4, 3.0, np.array([0.25, 0.5, 0.75, 1.0, 1.5, 2.0]))
    assert np.round(beta, 4).tolist() == [0.9936, 0.9772, 0.9332, 0.8413, 0.5, 0.1587]


def test_beta_of_fives() -> None:
    # Montgomery, Introduction to Statistical Quality Control, 6.2.6: from memory, .0708 with z rounded to
    # -1.47; exact .070492.
    beta = float(oc_curve(5, 3.0, np.array([2.0]))[0])
    assert beta == pytest.approx(0.0708, abs=5e-4)
    assert beta == pytest.approx(0.070492, abs=5e-7)


def test_in_control_run_length_of_three_sigma() -> None:
    # 370.398 is 1/(2Φ(-3)), computed from the definition.
    found = operating_characteristics(7, 0.5, 3.0, np.array([1.0]))
    assert found.in_control_arl == pytest.approx(370.398347344959, rel=1e-13)
    assert found.in_control_ats_hours == pytest.approx(0.5 * found.in_control_arl)
    # Two samples an hour: 2000 in 1000 hours.
    assert found.false_alarms_per_1000_hours == pytest.approx(2000 * 0.0026997960632602, rel=1e-12)


def test_all_western_electric_rules() -> None:
    # Champ & Woodall 1987, table 1: 91.75 in control with all four rules (checked in print).
    rules = PUBLISHED["western-electric-1956"].rules
    found = operating_characteristics(4, 1.0, 3.0, np.array([0.5]), rules)
    assert found.in_control_arl == pytest.approx(91.75, abs=0.005)
    assert found.arl[0] < operating_characteristics(4, 1.0, 3.0, np.array([0.5])).arl[0]


def test_one_limit_by_the_chain_is_the_geometric_law() -> None:
    shifts = np.array([0.0, 0.4, -1.0, 2.5])
    plain = operating_characteristics(5, 2.0, 2.7, shifts)
    chain = operating_characteristics(5, 2.0, 2.7, shifts, [])
    assert np.allclose(plain.arl, chain.arl, rtol=1e-9)
    assert np.allclose(plain.sd_run_length, chain.sd_run_length, rtol=1e-7)


@pytest.mark.parametrize(("size", "multiple", "shift"), [(1, 3.0, 0.3), (5, 2.5, 1.1), (12, 3.2, 2.0)])
def test_beta_by_quadrature(size: int, multiple: float, shift: float) -> None:
    with mpmath.workdps(30):
        middle = shift * mpmath.sqrt(size)
        expected = mpmath.quad(lambda x: mpmath.npdf(x, middle, 1), [-multiple, 0, multiple])
    assert float(oc_curve(size, multiple, np.array([shift]))[0]) == pytest.approx(float(expected), rel=1e-12)


def test_small_probabilities_keep_their_digits() -> None:
    # 25 pieces, 4 sigma: β = Φ(3 - 20), which 1 - power would lose.
    with mpmath.workdps(60):
        expected = float(mpmath.ncdf(-17) - mpmath.ncdf(-23))
    assert float(oc_curve(25, 3.0, np.array([4.0]))[0]) == pytest.approx(expected, rel=1e-10)


def test_time_to_signal_by_simulation() -> None:
    # Means of four drawn value by value, the shift at a uniform moment of the interval; both conventions
    # within four standard errors.
    rng = np.random.default_rng(20260301)
    runs, longest, hours, shift = 4000, 60, 0.75, 1.0
    means = rng.standard_normal((runs, longest, 4)).mean(axis=2) + shift
    beyond = np.abs(means) > 3.0 / math.sqrt(4)
    assert beyond.any(axis=1).mean() > 0.999  # What is cut off cannot decide.
    length = np.where(beyond.any(axis=1), beyond.argmax(axis=1) + 1, longest)
    found = operating_characteristics(4, hours, 3.0, np.array([shift]))
    for times, expected in (
        (hours * length, found.ats_hours[0]),
        (hours * (length - rng.random(runs)), found.ats_random_hours[0]),
    ):
        error = times.std() / math.sqrt(runs)
        assert abs(times.mean() - expected) < 4 * error + 0.001 * expected
    assert length.std() == pytest.approx(found.sd_run_length[0], rel=0.08)


def test_more_pieces_and_larger_shifts_detect_sooner() -> None:
    shifts = np.linspace(0.0, 4.0, 200)
    before = None
    for size in (1, 2, 3, 5, 9, 20):
        found = operating_characteristics(size, 1.0, 3.0, shifts)
        assert (np.diff(found.power) >= 0).all()
        assert (np.diff(found.arl) <= 0).all()
        assert np.allclose(found.beta + found.power, 1.0, atol=1e-15)
        assert np.array_equal(found.arl, operating_characteristics(size, 1.0, 3.0, -shifts).arl)
        if before is not None:
            assert (found.power >= before).all()
        before = found.power


@pytest.mark.parametrize(
    ("shift", "power", "multiple"), [(1.0, 0.9, 3.0), (0.5, 0.8, 2.5), (-1.5, 0.95, 3.09), (3.0, 0.4, 3.0)]
)
def test_smallest_size_is_the_first_that_suffices(shift: float, power: float, multiple: float) -> None:
    size = smallest_size(shift, power, multiple)

    def reached(n: int) -> float:
        return 1.0 - float(oc_curve(n, multiple, np.array([shift]))[0])

    assert reached(size) >= power
    assert size == 1 or reached(size - 1) < power
    # The approximation n = ((z_power + L)/shift)² leaves out the far tail, here of no account.
    approximate = (float(mpmath.sqrt(2) * mpmath.erfinv(2 * power - 1)) + multiple) ** 2 / shift**2
    assert size == max(math.ceil(approximate), 1)


def test_limits_said_in_three_ways() -> None:
    assert limit_multiple() == 3.0
    assert limit_multiple(multiple=2.7) == 2.7
    assert limit_multiple(in_control_arl=370.398347344959) == pytest.approx(3.0, abs=1e-12)
    # ISO 7870-2's probability limits: 3.09 sigma for 0.001 on each side.
    assert limit_multiple(false_alarm_probability=0.002) == pytest.approx(3.0902, abs=5e-5)
    assert false_alarm_probability(limit_multiple(false_alarm_probability=0.01)) == pytest.approx(0.01)


def test_plan_for_power_at_an_interval() -> None:
    found = plan(1.0, power=0.9, interval_hours=2.0)
    assert found.size == smallest_size(1.0, 0.9) == 19
    assert found.interval_hours == 2.0
    assert found.power >= 0.9
    assert found.pieces_per_hour == 9.5


def test_plan_at_a_rate_is_the_quickest_of_all_sizes() -> None:
    found = plan(0.8, ats_hours=4.0, hourly_pieces=10.0, shift_moment="random")
    ranked = compare(plans_at_rate(range(1, 101), 10.0), 0.8, shift_moment="random")
    assert ranked.equal_rate
    assert ranked.plans[0] == found
    times = [one.ats_random_hours for one in ranked.plans]
    assert times == sorted(times)
    assert ranked.ranking[0] == found.size - 1
    assert found.ats_random_hours <= 4.0


@pytest.mark.parametrize("moment", ["after-sample", "random"])
def test_plan_with_the_fewest_pieces(moment: str) -> None:
    found = plan(1.2, ats_hours=3.0, in_control_arl=500.0, shift_moment=moment)  # type: ignore[arg-type]
    reached = found.ats_hours if moment == "after-sample" else found.ats_random_hours
    assert reached == pytest.approx(3.0, rel=1e-12)
    assert found.in_control_arl == pytest.approx(500.0, rel=1e-12)
    for size in range(1, 60):
        part = operating_characteristics(size, 1.0, found.multiple, np.array([1.2]))
        wait = float(part.ats_hours[0] if moment == "after-sample" else part.ats_random_hours[0])
        assert size / (3.0 / wait) >= found.pieces_per_hour * (1 - 1e-12)


def test_power_and_time_together() -> None:
    found = plan(1.0, power=0.95, ats_hours=2.0)
    assert found.size >= smallest_size(1.0, 0.95)
    assert found.ats_hours == pytest.approx(2.0)


def test_plans_of_different_rates_are_said_to_be() -> None:
    ranked = compare([SamplingPlan(4, 1.0), SamplingPlan(9, 1.0)], 1.0)
    assert not ranked.equal_rate
    assert ranked.ranking == (1, 0)


def _code(error: pytest.ExceptionInfo[UnusableParameter]) -> tuple[str, tuple[str | int, ...]]:
    return error.value.faults[0].code, error.value.faults[0].where


def test_what_cannot_be_met_is_refused_with_the_bound() -> None:
    with pytest.raises(UnusableParameter, match="1000 pieces") as error:
        smallest_size(0.05, 0.9)
    assert _code(error) == ("target-not-met", ("power",))
    with pytest.raises(UnusableParameter, match="hours at the least") as error:
        plan(1.0, ats_hours=0.5, interval_hours=1.0)
    assert _code(error) == ("target-not-met", ("ats_hours",))
    with pytest.raises(UnusableParameter, match="hours at the least") as error:
        plan(1.0, ats_hours=0.5, hourly_pieces=5.0)
    assert _code(error) == ("target-not-met", ("ats_hours",))
    with pytest.raises(UnusableParameter) as error:
        plan(1.0, power=0.9, interval_hours=1.0, hourly_pieces=5.0)
    assert _code(error) == ("too-many-pieces", ("hourly_pieces",))


@pytest.mark.parametrize(
    ("call", "code", "where"),
    [
        (lambda: oc_curve(0, 3.0, np.array([1.0])), "size-out-of-range", ("size",)),
        (lambda: oc_curve(1001, 3.0, np.array([1.0])), "size-out-of-range", ("size",)),
        (lambda: oc_curve(5, 0.0, np.array([1.0])), "multiple-out-of-range", ("multiple",)),
        (lambda: oc_curve(5, math.nan, np.array([1.0])), "multiple-out-of-range", ("multiple",)),
        (lambda: oc_curve(5, 3.0, np.zeros(1001)), "shifts-out-of-range", ("shifts",)),
        (lambda: oc_curve(5, 3.0, np.array([])), "shifts-out-of-range", ("shifts",)),
        (lambda: oc_curve(5, 3.0, np.array([1.0, math.nan])), "shift-out-of-range", ("shifts", 1)),
        (
            lambda: operating_characteristics(5, 0.0, 3.0, np.array([1.0])),
            "hours-out-of-range",
            ("interval_hours",),
        ),
        (
            lambda: operating_characteristics(5, 1.0, 3.0, np.zeros(51), []),
            "shifts-out-of-range",
            ("shifts",),
        ),
        (lambda: smallest_size(0.0, 0.9), "shift-out-of-range", ("shift",)),
        (lambda: smallest_size(1.0, 1.0), "power-out-of-range", ("power",)),
        (lambda: plan(1.0), "nothing-asked", ("power",)),
        (lambda: plan(1.0, power=0.9), "interval-missing", ("interval_hours",)),
        (lambda: plan(1.0, power=0.9, hourly_pieces=0.0), "rate-out-of-range", ("hourly_pieces",)),
        (lambda: limit_multiple(multiple=3.0, in_control_arl=370.0), "limits-twice", ("in_control_arl",)),
        (lambda: limit_multiple(in_control_arl=1.0), "multiple-out-of-range", ("in_control_arl",)),
        (lambda: limit_multiple(in_control_arl=math.nan), "multiple-out-of-range", ("in_control_arl",)),
        (lambda: compare([], 1.0), "plans-out-of-range", ("plans",)),
        (
            lambda: compare([SamplingPlan(4, 1.0), SamplingPlan(0, 1.0)], 1.0),
            "size-out-of-range",
            ("plans", 1, "size"),
        ),
    ],
)
def test_arguments_out_of_range(call, code, where) -> None:  # type: ignore[no-untyped-def]
    with pytest.raises(UnusableParameter) as error:
        call()
    assert _code(error) == (code, where)
