"""Designs of EWMA and CUSUM charts: published designs, known optima, and that an optimum is one."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
import scipy

from assignable.spc.design.memory import (
    cusum_decision,
    ewma_limit,
    optimal_cusum,
    optimal_ewma,
)
from assignable.spc.errors import UnusableParameter
from assignable.spc.runlength.memory import cusum, ewma

# --- limits for a stated in-control run length ------------------------------------------------------------


def test_ewma_limits_of_lucas_and_saccucci() -> None:
    # Lucas & Saccucci 1990 (Montgomery Table 9.11), in-control ARL of about 500: L partly checked in print,
    # rest from memory. Their ARLs are 499.3 to 499.96 at these three decimals, hence the tolerance.
    published = {0.4: 3.054, 0.25: 2.998, 0.2: 2.962, 0.1: 2.814, 0.05: 2.615}
    published |= {0.75: 3.087, 0.5: 3.071, 0.3: 3.023, 0.03: 2.437}
    for smoothing, limit in published.items():
        assert ewma_limit(smoothing=smoothing, in_control_arl=500) == pytest.approx(limit, abs=1.1e-3)


def test_cusum_decisions_of_hawkins() -> None:
    # Hawkins 1993 (Montgomery Table 9.4): k and h for a two-sided ARL of 370; from memory.
    published = {0.25: 8.01, 0.5: 4.77, 0.75: 3.34, 1.0: 2.52, 1.25: 1.99, 1.5: 1.61}
    for reference, decision in published.items():
        assert cusum_decision(reference=reference, in_control_arl=370) == pytest.approx(decision, abs=6e-3)


@pytest.mark.parametrize("target", [2.5, 50.0, 370.4, 1e5, 1e9])
@pytest.mark.parametrize("smoothing", [0.005, 0.08, 0.5, 1.0])
def test_ewma_limit_meets_its_target(target: float, smoothing: float) -> None:
    limit = ewma_limit(smoothing=smoothing, in_control_arl=target)
    assert ewma(smoothing=smoothing, limit=limit).arl == pytest.approx(target, rel=1e-9)
    if target < 10:  # with one limit above the centre even the shortest of these run longer
        return
    one_sided = ewma_limit(smoothing=smoothing, in_control_arl=target, two_sided=False)
    found = ewma(smoothing=smoothing, limit=one_sided, two_sided=False)
    assert found.arl == pytest.approx(target, rel=1e-9)


@pytest.mark.parametrize("smoothing", [0.02, 0.1, 0.6])
def test_time_varying_limits_are_another_number(smoothing: float) -> None:
    asymptotic = ewma_limit(smoothing=smoothing, in_control_arl=400)
    growing = ewma_limit(smoothing=smoothing, in_control_arl=400, time_varying=True)
    assert growing > asymptotic
    assert ewma(smoothing=smoothing, limit=growing, time_varying=True).arl == pytest.approx(400, rel=1e-9)


@pytest.mark.parametrize(
    ("reference", "target", "sides", "fraction"),
    [
        (0.5, 500.0, "two", 0.0),
        (0.5, 500.0, "two", 0.5),
        (0.25, 1e6, "upper", 0.25),
        (2.0, 370.0, "lower", 0.9),
        (0.0, 1000.0, "two", 0.0),
        (0.01, 200.0, "upper", 0.0),
        (1.0, 3.2, "two", 0.0),
        (0.5, 1e9, "two", 0.5),
    ],
)
def test_cusum_decision_meets_its_target(
    reference: float, target: float, sides: str, fraction: float
) -> None:
    decision = cusum_decision(
        reference=reference, in_control_arl=target, sides=sides, head_start_fraction=fraction
    )
    found = cusum(reference=reference, decision=decision, sides=sides, head_start=fraction * decision)
    assert found.arl == pytest.approx(target, rel=1e-9)


# --- optima -----------------------------------------------------------------------------------------------


def test_optimal_ewma_of_lucas_and_saccucci() -> None:
    # Lucas & Saccucci 1990, optimal schemes at an in-control ARL of 500; Crowder 1989 for the method: from
    # memory, and only to the two decimals remembered.
    design = optimal_ewma(shift=1.0, in_control_arl=500)
    assert design.smoothing == pytest.approx(0.13, abs=0.01)
    assert design.limit == pytest.approx(2.88, abs=0.01)
    assert design.arl == pytest.approx(10.2, abs=0.05)


@pytest.mark.parametrize("shift", [0.3, 1.0, 1.7])
def test_one_sided_cusum_is_best_at_half_the_shift(shift: float) -> None:
    # Moustakides 1986: of all rules with this in-control ARL, the CUSUM with k = shift/2 has the least worst-case
    # delay, which from zero is its ARL. The slope of the ARL in k there must be nothing beside its curvature.
    for sides, toward in (("upper", shift), ("lower", -shift)):
        design = optimal_cusum(shift=shift, in_control_arl=370, sides=sides)
        assert design.reference == pytest.approx(shift / 2, rel=2e-3)
        arls = []
        for k in (0.45 * shift, 0.5 * shift, 0.55 * shift):
            h = cusum_decision(reference=k, in_control_arl=370, sides=sides)
            arls.append(cusum(reference=k, decision=h, shift=toward, sides=sides).arl)
        vertex = 0.05 * shift * (arls[0] - arls[2]) / (2 * (arls[0] - 2 * arls[1] + arls[2]))
        assert abs(vertex) < 0.01 * shift
        assert design.arl == pytest.approx(arls[1], rel=1e-9)
        assert design.arl < min(arls[0], arls[2])


@pytest.mark.parametrize("shift", [0.25, 0.5, 1.0, 2.0, 3.0])
@pytest.mark.parametrize("state", ["zero-state", "steady-state"])
@pytest.mark.parametrize("time_varying", [False, True])
def test_no_ewma_is_better_than_the_optimum(shift: float, state: str, time_varying: bool) -> None:
    smallest = 0.05 if time_varying else 0.005
    design = optimal_ewma(
        shift=shift,
        in_control_arl=370,
        state=state,
        time_varying=time_varying,
        smallest_smoothing=smallest,
        shifts=(0.0, shift),
    )
    assert design.in_control_arl == pytest.approx(370, rel=1e-9)
    assert design.limits == ("time-varying" if time_varying else "asymptotic")
    for smoothing in (*np.geomspace(smallest, 1.0, 9), 0.99 * design.smoothing, 1.01 * design.smoothing):
        if smallest <= smoothing <= 1.0:
            limit = ewma_limit(smoothing=smoothing, in_control_arl=370, time_varying=time_varying)
            other = ewma(smoothing=smoothing, limit=limit, shift=shift, time_varying=time_varying)
            arl = other.arl if state == "zero-state" else other.steady_state_arl
            assert arl >= design.arl * (1 - 1e-9)
    assert all(neighbour.excess >= 0 for neighbour in design.neighbours)
    row = design.out_of_control[1]
    assert design.arl == pytest.approx(row.arl if state == "zero-state" else row.steady_state_arl, rel=1e-9)


@pytest.mark.parametrize("shift", [0.25, 1.0, 3.0])
@pytest.mark.parametrize("state", ["zero-state", "steady-state"])
@pytest.mark.parametrize("fraction", [0.0, 0.5])
def test_no_cusum_is_better_than_the_optimum(shift: float, state: str, fraction: float) -> None:
    design = optimal_cusum(shift=shift, in_control_arl=370, state=state, head_start_fraction=fraction)
    assert design.in_control_arl == pytest.approx(370, rel=1e-9)
    for reference in (*np.linspace(0.25 * shift, 2.7, 9), 0.99 * design.reference, 1.01 * design.reference):
        if reference < 0.25 * shift:
            continue
        decision = cusum_decision(reference=reference, in_control_arl=370, head_start_fraction=fraction)
        other = cusum(reference=reference, decision=decision, shift=shift, head_start=fraction * decision)
        arl = other.arl if state == "zero-state" else other.steady_state_arl
        assert arl >= design.arl * (1 - 1e-9)


def test_time_varying_limits_from_zero_have_no_optimum_of_their_own() -> None:
    design = optimal_ewma(shift=1.0, in_control_arl=370, time_varying=True, smallest_smoothing=0.03)
    assert (design.at_bound, design.smoothing) == ("lowest", 0.03)
    assert optimal_ewma(shift=1.0, in_control_arl=370).at_bound is None
    assert optimal_ewma(shift=8.0, in_control_arl=370).at_bound == "highest"


def test_comparison_with_single_points_and_hours() -> None:
    design = optimal_ewma(shift=1.0, in_control_arl=370.4, interval_hours=0.5, shifts=(0.0, 1.0, 3.0))
    assert design.shewhart_limit == pytest.approx(3.0, abs=1e-4)
    p = scipy.special.ndtr(1 - design.shewhart_limit) + scipy.special.ndtr(-1 - design.shewhart_limit)
    assert design.shewhart[1].arl == pytest.approx(1 / p, rel=1e-12)
    assert design.shewhart[0].arl == pytest.approx(370.4, rel=1e-12)
    assert design.out_of_control[1].ats_hours == pytest.approx(0.5 * design.arl, rel=1e-12)
    steady = optimal_ewma(
        shift=1.0, in_control_arl=370.4, state="steady-state", interval_hours=0.5, shifts=(1.0,)
    )
    assert steady.out_of_control[0].ats_hours == pytest.approx(0.5 * (steady.arl - 0.5), rel=1e-9)


@pytest.mark.parametrize("sides", ["two", "upper", "lower"])
def test_designs_hold_finite_numbers_alone(sides: str) -> None:
    for shift, target in ((0.05, 5.0), (0.05, 1e6), (10.0, 5.0), (10.0, 1e9), (1.0, 100.0)):
        design = optimal_cusum(shift=shift, in_control_arl=target, sides=sides, interval_hours=1.0)
        for table in (design.out_of_control, design.shewhart, design.neighbours):
            for row in table:
                assert all(v is None or math.isfinite(v) for v in dataclasses.astuple(row))
        design2 = optimal_ewma(shift=shift, in_control_arl=target, two_sided=sides == "two")
        for table2 in (design2.out_of_control, design2.shewhart, design2.neighbours):
            for row2 in table2:
                assert all(v is None or math.isfinite(v) for v in dataclasses.astuple(row2))


@pytest.mark.parametrize(
    ("call", "where", "code"),
    [
        (lambda: ewma_limit(smoothing=0.2, in_control_arl=1.5), "in_control_arl", "out-of-range"),
        (lambda: ewma_limit(smoothing=0.2, in_control_arl=2e9), "in_control_arl", "out-of-range"),
        (
            lambda: ewma_limit(smoothing=0.005, in_control_arl=2.5, two_sided=False),
            "in_control_arl",
            "no-such-design",
        ),
        (lambda: ewma_limit(smoothing=0.001, in_control_arl=500), "smoothing", "out-of-range"),
        (lambda: cusum_decision(reference=0, in_control_arl=1e6), "reference", "no-such-design"),
        (lambda: cusum_decision(reference=4, in_control_arl=500), "reference", "no-such-design"),
        (
            lambda: cusum_decision(reference=0.5, in_control_arl=500, head_start_fraction=0.6),
            "head_start_fraction",
            "out-of-range",
        ),
        (lambda: optimal_ewma(shift=0.01, in_control_arl=500), "shift", "out-of-range"),
        (lambda: optimal_ewma(shift=1, in_control_arl=500, shifts=(11.0,)), "shifts", "out-of-range"),
        (lambda: optimal_ewma(shift=1, in_control_arl=500, state="soon"), "state", "out-of-range"),
        (
            lambda: optimal_cusum(shift=1, in_control_arl=500, interval_hours=0.0),
            "interval_hours",
            "out-of-range",
        ),
        (lambda: optimal_cusum(shift=math.nan, in_control_arl=500), "shift", "out-of-range"),
    ],
)
def test_refusals_name_the_parameter(call: object, where: str, code: str) -> None:
    assert callable(call)
    with pytest.raises(UnusableParameter) as caught:
        call()
    fault = caught.value.faults[0]
    assert (fault.where[0], fault.code) == (where, code)
