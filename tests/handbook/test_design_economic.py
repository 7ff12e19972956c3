"""Economic design against published examples, its sources' formulas written out again, search and simulation."""

from __future__ import annotations

import math
import time
from dataclasses import astuple, replace

import mpmath
import numpy as np
import pytest
from scipy.special import ndtr

from assignable.spc.design.economic import (
    PricedPlan,
    ProcessEconomics,
    Requirements,
    cost_per_hour,
    cost_without_chart,
    design,
    duncan,
    neighbourhood,
)
from assignable.spc.design.subgroups import SamplingPlan
from assignable.spc.errors import UnusableParameter
from assignable.spc.rules import LIMIT, PUBLISHED, Rule
from assignable.spc.runlength import shewhart

GLASS = duncan(
    mean_hours_to_shift=20.0,
    shift=2.0,
    loss_per_hour_out_of_control=100.0,
    false_alarm_cost=50.0,
    cost_of_finding_cause=25.0,
    cost_per_sample=1.0,
    cost_per_piece=0.1,
    hours_per_piece=0.0167,
    hours_to_find_cause=1.0,
)
# The foundry example of Lorenzen & Vance (1986): parameters from memory.
CASTING = ProcessEconomics(
    mean_hours_to_shift=50.0,
    shift=0.86,
    cost_per_hour_in_control=114.24,
    cost_per_hour_out_of_control=949.20,
    false_alarm_cost=977.40,
    repair_cost=977.40,
    cost_per_sample=0.0,
    cost_per_piece=4.22,
    hours_per_piece=1.0 / 12.0,
    hours_to_search_false_alarm=1.0 / 12.0,
    hours_to_find_cause=1.0 / 12.0,
    hours_to_repair=0.75,
    runs_while_searching=True,
    runs_while_repairing=False,
)
STOPS = replace(CASTING, runs_while_searching=False, cost_per_sample=3.0, hours_to_search_false_alarm=0.6)


def _phi(z: float) -> mpmath.mpf:
    return mpmath.erfc(-mpmath.mpf(z) / mpmath.sqrt(2)) / 2


def _duncan(n: int, h: float, k: float) -> float:
    """Duncan's hourly loss-cost with GLASS's figures, as in Montgomery, Introduction to SQC, eq. of E(L)."""
    a1, a2, a3, a3_false, a4, lam, delta, g, big_d = 1, 0.1, 25, 50, 100, 0.05, 2, 0.0167, 1
    alpha = 2 * _phi(-k)
    power = _phi(delta * math.sqrt(n) - k) + _phi(-delta * math.sqrt(n) - k)
    x = mpmath.mpf(lam) * h
    tau = (1 - (1 + x) * mpmath.exp(-x)) / (lam * (1 - mpmath.exp(-x)))
    out = h / power - tau + g * n + big_d
    cycle = 1 / mpmath.mpf(lam) + out
    false_alarms = alpha * mpmath.exp(-x) / (1 - mpmath.exp(-x))
    return float((a1 + a2 * n) / mpmath.mpf(h) + (a4 * out + a3 + a3_false * false_alarms) / cycle)


def _lorenzen_vance(e: ProcessEconomics, n: int, h: float, k: float) -> float:
    """Their equation of the cost per hour, written out again."""
    lam, g1, g2 = (
        1 / mpmath.mpf(e.mean_hours_to_shift),
        int(e.runs_while_searching),
        int(e.runs_while_repairing),
    )
    arl1 = 1 / (2 * _phi(-k))
    d = e.shift * math.sqrt(n)
    arl2 = 1 / (1 - _phi(k - d) + _phi(-k - d))
    decay = mpmath.exp(-lam * h)
    s = decay / (1 - decay)
    tau = (1 - (1 + lam * h) * decay) / (lam * (1 - decay))
    t0, t1, t2 = e.hours_to_search_false_alarm, e.hours_to_find_cause, e.hours_to_repair
    base = -tau + n * e.hours_per_piece + h * arl2
    time_ = 1 / lam + (1 - g1) * s * t0 / arl1 + base + t1 + t2
    running = base + g1 * t1 + g2 * t2
    cost = (
        e.cost_per_hour_in_control / lam
        + e.cost_per_hour_out_of_control * running
        + s * e.false_alarm_cost / arl1
        + e.repair_cost
    )
    sampling = (e.cost_per_sample + e.cost_per_piece * n) / mpmath.mpf(h) * (1 / lam + running)
    return float((cost + sampling) / time_)


PLANS = [(1, 0.01, 1.5), (2, 0.3, 2.0), (5, 0.76, 2.99), (5, 8.0, 3.0), (12, 60.0, 3.4), (30, 900.0, 4.5)]


@pytest.mark.parametrize(("n", "h", "k"), PLANS)
def test_duncan_is_a_special_case(n: int, h: float, k: float) -> None:
    assert float(cost_per_hour(GLASS, n, h, k)) == pytest.approx(_duncan(n, h, k), rel=1e-11)


@pytest.mark.parametrize("searching", [True, False])
@pytest.mark.parametrize("repairing", [True, False])
def test_the_full_model_written_out_again(searching: bool, repairing: bool) -> None:
    e = replace(STOPS, runs_while_searching=searching, runs_while_repairing=repairing)
    n, h, k = (np.array(column, dtype=float) for column in zip(*PLANS, strict=True))
    expected = [_lorenzen_vance(e, *plan) for plan in PLANS]
    assert cost_per_hour(e, n, h, k) == pytest.approx(expected, rel=1e-11)


def test_a_simulated_process() -> None:
    # Cycles drawn one by one: shift, samples before it, false alarms among them, samples to the signal.
    e, n, h, k = STOPS, 4, 1.7, 2.2
    rng = np.random.default_rng(20261201)
    cycles = 400_000
    shift_at = rng.exponential(e.mean_hours_to_shift, cycles)
    before = np.floor(shift_at / h)
    false_alarms = rng.binomial(before.astype(np.int64), float(2 * _phi(-k)))
    d = e.shift * math.sqrt(n)
    samples = rng.geometric(float(_phi(d - k) + _phi(-d - k)), cycles)
    signalled = (before + samples) * h + n * e.hours_per_piece
    produced = signalled  # neither search nor repair produces
    hours = (
        produced + false_alarms * e.hours_to_search_false_alarm + e.hours_to_find_cause + e.hours_to_repair
    )
    cost = (
        e.cost_per_hour_in_control * shift_at
        + e.cost_per_hour_out_of_control * (signalled - shift_at)
        + e.false_alarm_cost * false_alarms
        + e.repair_cost
        + (e.cost_per_sample + e.cost_per_piece * n) * produced / h
    )
    ratio = cost.sum() / hours.sum()
    error = float(np.std(cost - ratio * hours)) / math.sqrt(cycles) / float(hours.mean())
    assert abs(float(cost_per_hour(e, n, h, k)) - ratio) < 4 * error
    assert error < 0.001 * ratio


def test_the_glass_bottles() -> None:
    # Montgomery, Introduction to SQC, economic design of the mean chart: n 5, k 2.99, h 0.76, 10.38 an hour,
    # alpha .0028, power .9308. From memory. The cost at that plan agrees to its rounding; the true optimum
    # has a slightly longer interval, as the book's search approximates it.
    assert round(float(cost_per_hour(GLASS, 5, 0.76, 2.99)), 2) == 10.38
    best = design(GLASS, present=SamplingPlan(5, 0.76, 2.99))
    assert best.best.size == 5
    assert best.best.multiple == pytest.approx(2.99, abs=0.01)
    assert best.best.interval_hours == pytest.approx(0.76, abs=0.06)
    assert best.best.cost_per_hour == pytest.approx(10.367, abs=5e-4)
    assert best.saving_per_hour == pytest.approx(0.009, abs=5e-4)
    assert best.present is not None
    assert best.present.out_of_control_arl is not None
    assert round(1 / best.present.out_of_control_arl, 4) == 0.9308


def test_the_first_of_duncans_examples() -> None:
    # Duncan (1956), example 1, exact optimum as given by Goel, Jain & Wu (1968): n 5, h 1.41, k 3.08,
    # loss-cost 401.28 for 100 hours. From memory.
    e = replace(
        GLASS,
        mean_hours_to_shift=100.0,
        cost_per_sample=0.5,
        hours_per_piece=0.05,
        hours_to_find_cause=2.0,
    )
    best = design(e).best
    assert (best.size, round(best.interval_hours, 2), round(best.multiple, 2)) == (5, 1.41, 3.08)
    assert round(100 * best.cost_per_hour, 2) == 401.28


@pytest.mark.parametrize(
    "e",
    [
        GLASS,
        CASTING,
        STOPS,
        replace(GLASS, shift=0.4),
        replace(GLASS, shift=4.0, cost_per_sample=0.01),
        replace(CASTING, mean_hours_to_shift=2000.0, cost_per_sample=40.0),
        replace(CASTING, false_alarm_cost=0.0),
        replace(GLASS, cost_per_hour_out_of_control=1e6),
    ],
)
def test_no_plan_of_a_brute_search_is_cheaper(e: ProcessEconomics) -> None:
    found = design(e).best
    n = np.arange(1.0, 101.0)[:, None, None]
    h = np.geomspace(1e-5 * e.mean_hours_to_shift, 20 * e.mean_hours_to_shift, 90)[None, :, None]
    k = np.linspace(0.1, 6.0, 90)[None, None, :]
    costs = cost_per_hour(e, n, h, k)
    assert float(costs.min()) >= found.cost_per_hour * (1 - 1e-12)
    # And close by, at a distance that the grid above cannot see.
    rng = np.random.default_rng(3)
    near_h = found.interval_hours * np.exp(rng.normal(0, 0.01, 5000))
    near_k = np.clip(found.multiple + rng.normal(0, 0.01, 5000), 0.1, 6.0)
    near = cost_per_hour(e, found.size, near_h, near_k)
    assert float(near.min()) >= found.cost_per_hour * (1 - 1e-12)
    # The brute search itself comes near, so that it could have found a fault.
    assert float(costs.min()) <= found.cost_per_hour * 1.02


@pytest.mark.parametrize(
    "r",
    [
        Requirements(smallest_in_control_arl=370.4),
        Requirements(longest_ats_hours=1.5),
        Requirements(smallest_in_control_arl=500.0, longest_ats_hours=2.5),
        Requirements(shortest_hours_between_false_alarms=400.0, longest_ats_hours=3.0),
        Requirements(
            smallest_size=3, largest_size=6, shortest_interval_hours=0.5, longest_interval_hours=1.0
        ),
        Requirements(multiple=3.0, longest_ats_hours=2.5),
    ],
)
def test_requirements_are_met_at_the_least_cost(r: Requirements) -> None:
    found = design(CASTING, requirements=r)
    best = found.best
    n = np.arange(float(r.smallest_size), r.largest_size + 1.0)[:, None, None]
    h = np.geomspace(r.shortest_interval_hours or 0.02, r.longest_interval_hours or 60.0, 100)[None, :, None]
    k = np.linspace(1.5, 4.5, 91)[None, None, :] if r.multiple is None else np.full((1, 1, 1), r.multiple)
    d = CASTING.shift * np.sqrt(n)
    arl0, arl1 = 0.5 / ndtr(-k), 1 / (ndtr(d - k) + ndtr(-d - k))
    allowed = (arl0 >= (r.smallest_in_control_arl or 0.0)) & (h * arl1 <= (r.longest_ats_hours or math.inf))
    allowed = allowed & (h * arl0 >= (r.shortest_hours_between_false_alarms or 0.0))
    costs = np.where(allowed, cost_per_hour(CASTING, n, h, k), np.inf)
    assert float(costs.min()) >= best.cost_per_hour * (1 - 1e-9)
    assert float(costs.min()) <= best.cost_per_hour * 1.02
    slack = 1 + 1e-9
    assert best.in_control_arl is not None
    assert best.ats_hours is not None
    assert best.in_control_arl * slack >= (r.smallest_in_control_arl or 0.0)
    assert best.ats_hours <= (r.longest_ats_hours or math.inf) * slack
    assert best.in_control_arl * best.interval_hours * slack >= (r.shortest_hours_between_false_alarms or 0.0)
    assert found.price_of_requirements_per_hour is not None
    assert found.price_of_requirements_per_hour > 0
    assert found.at_bounds


def test_sampling_that_is_never_worth_while() -> None:
    dear = replace(CASTING, cost_per_hour_out_of_control=115.0, cost_per_piece=400.0)
    found = design(dear)
    assert not found.worth_while
    assert found.cost_per_hour_without_chart == 115.0
    assert "not worth while" in found.conclusion
    assert "115" in found.conclusion
    # With ever longer intervals the model itself tends to what the process costs out of control.
    assert float(cost_per_hour(dear, 5, 1e8, 3.0)) == pytest.approx(115.0, rel=1e-4)
    assert design(CASTING).worth_while


def test_a_shift_that_customers_notice() -> None:
    e = replace(CASTING, hours_until_noticed_without_chart=10.0)
    # 1/λ at C0; 10 + T1 hours at C1 (the repair stops production); W; over all the hours.
    expected = (114.24 * 50 + 949.20 * (10 + 1 / 12) + 977.40) / (50 + 10 + 1 / 12 + 0.75)
    assert cost_without_chart(e) == pytest.approx(expected, rel=1e-14)
    assert cost_without_chart(CASTING) == 949.20
    # Noticed at once, no chart can pay.
    assert not design(replace(e, hours_until_noticed_without_chart=0.0)).worth_while


def _parts(plan: PricedPlan) -> float:
    return math.fsum(astuple(plan.parts))


def test_parts_ranges_and_surface() -> None:
    found = design(STOPS, present=SamplingPlan(5, 1.0, 3.0))
    best = found.best
    assert _parts(best) == pytest.approx(best.cost_per_hour, rel=1e-14)
    assert found.present is not None
    assert _parts(found.present) == pytest.approx(found.present.cost_per_hour, rel=1e-14)
    assert found.present.cost_per_hour == pytest.approx(_lorenzen_vance(STOPS, 5, 1.0, 3.0), rel=1e-12)
    assert best.cycle_hours is not None
    assert best.parts.repairs_per_hour == pytest.approx(977.40 / best.cycle_hours, rel=1e-14)
    for flat in found.flatness:
        most = best.cost_per_hour * (1 + flat.rise)
        for h in (flat.shortest_interval_hours, flat.longest_interval_hours):
            assert h is not None
            assert float(cost_per_hour(STOPS, best.size, h, best.multiple)) == pytest.approx(most, rel=1e-7)
        for k in (flat.smallest_multiple, flat.largest_multiple):
            assert k is not None
            assert float(cost_per_hour(STOPS, best.size, best.interval_hours, k)) == pytest.approx(
                most, rel=1e-7
            )
        costs = {one.size: one.cost_per_hour for one in found.by_size}
        assert costs[flat.smallest_size] <= most < costs[flat.smallest_size - 1]
        assert costs[flat.largest_size] <= most < costs[flat.largest_size + 1]
    assert [flat.rise for flat in found.flatness] == [0.01, 0.05]
    assert found.surface is not None
    for row in found.surface.rows:
        again = cost_per_hour(STOPS, best.size, np.array(found.surface.interval_hours), row.multiple)
        assert row.cost_per_hour == pytest.approx(again.tolist(), rel=1e-14)


def test_the_neighbourhood_is_the_cost_and_knows_what_is_required() -> None:
    r = Requirements(smallest_in_control_arl=370.0, longest_ats_hours=2.0, longest_interval_hours=3.0)
    present = SamplingPlan(5, 2.0, 3.0)
    found = design(CASTING, requirements=r, present=present)
    around = neighbourhood(CASTING, found, requirements=r)
    h, k = around.interval_hours[None, :], around.multiples[:, None]
    assert around.cost_per_hour == pytest.approx(cost_per_hour(CASTING, around.size, h, k), rel=1e-12)
    power = ndtr(CASTING.shift * math.sqrt(around.size) - k) + ndtr(
        -CASTING.shift * math.sqrt(around.size) - k
    )
    met = (0.5 / ndtr(-k) >= 370.0) & (h / power <= 2.0) & (h <= 3.0)
    assert met.any()
    assert not met.all()
    assert ((around.shortfall <= 0) == met).all()
    # The plan found is the cheapest there of those that meet what is required, and near one of the grid.
    assert float(around.cost_per_hour[met].min()) >= found.best.cost_per_hour * (1 - 1e-6)
    assert around.interval_hours[0] <= 2.0 <= around.interval_hours[-1]
    free = neighbourhood(CASTING, design(CASTING))
    assert (free.shortfall < 0).all()
    held = neighbourhood(CASTING, design(CASTING, rules=[LIMIT]), rules=[LIMIT])
    assert held.cost_per_hour.shape[0] == 1
    assert float(held.cost_per_hour.min()) == pytest.approx(
        design(CASTING, rules=[LIMIT]).best.cost_per_hour, rel=1e-4
    )


def test_sensitivities() -> None:
    found = design(STOPS)
    best = found.best
    by_name = {one.parameter: one for one in found.sensitivities}
    # The cost is linear in these, so that the elasticity is their share of it.
    for name, part in (
        ("cost_per_hour_in_control", best.parts.quality_in_control_per_hour),
        ("cost_per_hour_out_of_control", best.parts.quality_out_of_control_per_hour),
        ("false_alarm_cost", best.parts.false_alarms_per_hour),
        ("repair_cost", best.parts.repairs_per_hour),
    ):
        assert by_name[name].elasticity == pytest.approx(part / best.cost_per_hour, rel=1e-6)
        assert by_name[name].cost_per_hour_if_tenth_more == pytest.approx(
            best.cost_per_hour + 0.1 * part, rel=1e-12
        )
    more = replace(STOPS, shift=1.1 * STOPS.shift)
    assert by_name["shift"].cost_per_hour_if_tenth_more == pytest.approx(
        _lorenzen_vance(more, best.size, best.interval_hours, best.multiple), rel=1e-11
    )
    sizes = [abs(one.elasticity) for one in found.sensitivities]
    assert sizes == sorted(sizes, reverse=True)
    # Money has no unit: elasticities to costs, with all of them scaled together, are 1.
    assert math.fsum(one.elasticity for name, one in by_name.items() if "cost" in name) == pytest.approx(1.0)
    # Nor has time: money an hour falls as the inverse of the unit of time, with the plan in that unit too;
    # the plan is at its optimum, so it need not be scaled (envelope).
    times = math.fsum(one.elasticity for name, one in by_name.items() if "hours" in name)
    rates = math.fsum(
        by_name[name].elasticity for name in ("cost_per_hour_in_control", "cost_per_hour_out_of_control")
    )
    assert times - rates == pytest.approx(-1.0, abs=1e-5)


def test_further_rules() -> None:
    alone = design(CASTING, rules=(LIMIT,), requirements=Requirements(multiple=2.7, largest_size=40))
    plain = design(CASTING, requirements=Requirements(multiple=2.7, largest_size=40))
    assert alone.best.size == plain.best.size
    assert alone.best.cost_per_hour == pytest.approx(plain.best.cost_per_hour, rel=1e-12)
    rules = PUBLISHED["western-electric-1956"].rules
    found = design(CASTING, rules=rules)
    best = found.best
    assert best.multiple == 3.0
    assert best.in_control_arl == pytest.approx(91.75, abs=0.005)
    assert best.out_of_control_arl == pytest.approx(
        shewhart(rules, shift=CASTING.shift * math.sqrt(best.size)).arl, rel=1e-12
    )
    assert found.surface is None
    assert found.flatness[0].smallest_multiple is None
    # Each size's best is the least along its interval.
    for one in found.by_size[::5]:
        close = [replace(one, interval_hours=one.interval_hours * factor) for factor in (0.97, 1.03)]
        for other in close:
            priced = design(
                CASTING,
                rules=rules,
                requirements=Requirements(smallest_size=1, largest_size=1),
                present=SamplingPlan(other.size, other.interval_hours, 3.0),
            ).present
            assert priced is not None
            assert priced.cost_per_hour > one.cost_per_hour


def test_refusals() -> None:
    with pytest.raises(UnusableParameter) as caught:
        design(replace(GLASS, shift=0.0, repair_cost=-1.0, cost_per_piece=math.nan))
    assert [fault.where for fault in caught.value.faults] == [
        ("shift",),
        ("repair_cost",),
        ("cost_per_piece",),
    ]
    with pytest.raises(UnusableParameter, match="must cost more than one in control"):
        design(replace(GLASS, cost_per_hour_in_control=100.0))
    with pytest.raises(UnusableParameter, match=r"1 hours at the least, and 0\.1 was asked"):
        design(GLASS, requirements=Requirements(longest_ats_hours=0.1, shortest_interval_hours=1.0))
    with pytest.raises(UnusableParameter, match="allow a longer interval"):
        design(
            GLASS,
            requirements=Requirements(
                shortest_hours_between_false_alarms=1e5, longest_interval_hours=1.0, multiple=3.0
            ),
        )
    with pytest.raises(UnusableParameter, match=r"is 370\.398, less than the 500 required"):
        design(GLASS, requirements=Requirements(smallest_in_control_arl=500, multiple=3.0))
    with pytest.raises(UnusableParameter, match="must not lie below"):
        design(GLASS, requirements=Requirements(smallest_size=4, largest_size=3))
    with pytest.raises(UnusableParameter, match="order of points"):
        design(GLASS, rules=(LIMIT, Rule("trend", 6, 6)))
    with pytest.raises(UnusableParameter, match="sizes can be tried; 100 were asked"):
        design(GLASS, rules=(LIMIT, Rule("zone", 8, 12, 1.0), Rule("zone", 2, 3, 2.0)))
    with pytest.raises(UnusableParameter, match="At most 1000000 plans"):
        cost_per_hour(GLASS, 5, np.ones((2000, 1)), np.ones(2000))


def test_it_is_quick() -> None:
    design(CASTING)
    begun = time.process_time()
    design(
        CASTING,
        requirements=Requirements(smallest_in_control_arl=371.0, longest_ats_hours=5.0),
        present=SamplingPlan(5, 1.0),
    )
    assert time.process_time() - begun < 0.5
