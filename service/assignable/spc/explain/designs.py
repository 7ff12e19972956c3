"""Worked steps of chart designs and run lengths.

What a hand calculator can follow is written out: limits alone have a run length in closed form. Of chains and
integral equations the steps state what they are made of, and the equation that the run length solves.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import scipy

from ..charts.common import LimitBasis
from ..charts.counts import count_cdf, count_lines, count_sf
from ..design.attributes import CountCharacteristics, CountLimits, DetectionSize
from ..design.baseline import BaselineDesign, BaselineTable
from ..design.comparison import ChartComparison
from ..design.economic import EconomicDesign, PricedPlan, ProcessEconomics
from ..design.memory import CusumDesign, EwmaDesign, MemoryPerformance
from ..design.subgroups import Comparison, OperatingCharacteristics, PlanPerformance
from ..rules import Rule
from ..runlength.of_rules import _acting, _model, _regions
from .steps import Pad, Step, Value

_BEYOND = "erfc((k - d) / sqrt(2)) / 2 + erfc((k + d) / sqrt(2)) / 2"


def _given_arl(pad: Pad, what: str, arl: float, where: str | None) -> None:
    pad.work(f"{what}: the solution of that equation", "arl", where, arl=(arl, "by solving it numerically"))


# Run lengths ----------------------------------------------------------------------------------------


def of_rules(
    pad: Pad,
    rules: Sequence[Rule],
    lower: float,
    upper: float,
    shift: float,
    scale: float,
    arl: float,
    sd: float,
    at: str,
) -> None:
    """The run length of a normal statistic under limits and run rules, with ``shift`` in its own sigma."""
    ends: dict[str, Value] = {"d": shift, "scale": scale}
    terms = []
    if math.isfinite(lower):
        terms.append("erfc((d - lower) / scale / sqrt(2)) / 2")
        ends["lower"] = lower
    if math.isfinite(upper):
        terms.append("erfc((upper - d) / scale / sqrt(2)) / 2")
        ends["upper"] = upper
    p = pad.work(
        "Probability of a point beyond the limits, which lie so many sigma from the centre; d is the shift of a "
        "plotted point in its own sigma",
        " + ".join(terms),
        None,
        **ends,
    )
    acting = _acting(rules)
    cuts, z = _regions(acting, lower, upper)
    model = _model(acting, z)
    if model is None and len(acting) == 1:
        pad.work("Average run length", "1 / p", f"{at}/arl", p=p)
        pad.work("Standard deviation of the run length", "sqrt(1 - p) / p", f"{at}/sd", p=p)
        return
    low, high = (cuts[:-1] + 0.0).tolist(), (cuts[1:] + 0.0).tolist()
    for one, other in list(zip(low, high, strict=True))[:8]:
        values: dict[str, Value] = {"d": shift, "scale": scale}
        parts = []
        if math.isfinite(other):
            parts.append("erfc((d - high) / scale / sqrt(2)) / 2")
            values["high"] = other
        else:
            parts.append("1")
        if math.isfinite(one):
            parts.append("erfc((d - low) / scale / sqrt(2)) / 2")
            values["low"] = one
        pad.work(
            f"Probability of a point in the region from {one:g} to {other:g} sigma",
            " - ".join(parts),
            None,
            **values,
        )
    if model is None:
        pad.work(
            "Average run length: a point signals, or not, by itself",
            "arl",
            f"{at}/arl",
            arl=(arl, "1 over the probability of the regions that signal"),
        )
        return
    pad.state(
        "The run rules together remember of the points before as much as there are states; Q holds the probabilities "
        "of passing from one to another without a signal, each that of the region which leads there; the average run "
        "length of each state solves a linear system, the fresh start being the first"
        + ("" if model.order is None else "; rules on the order of points make it an integral equation"),
        "(I - Q) * arl = 1",
        states=model.automaton.states,
        sd=sd,
    )
    _given_arl(pad, "Average run length", arl, f"{at}/arl")


def of_ewma(
    pad: Pad, smoothing: float, limit: float, shift: float, scale: float, arl: float, at: str
) -> None:
    """The run length of an EWMA, from its centre."""
    h = pad.work(
        "Limit of the settled average, in sigma of a point",
        "limit * sqrt(smoothing / (2 - smoothing))",
        None,
        limit=limit,
        smoothing=smoothing,
    )
    pad.work(
        "Probability that the first average lies beyond settled limits, from a start at the centre",
        "erfc((h / smoothing - d) / scale / sqrt(2)) / 2 + erfc((h / smoothing + d) / scale / sqrt(2)) / 2",
        None,
        h=h,
        smoothing=smoothing,
        d=shift,
        scale=scale,
    )
    pad.state(
        "An average u is followed by v with the density of a point at (v - (1 - smoothing) u) / smoothing; the average "
        "run length from each u within the limits solves an integral equation",
        "arl(u) = 1 + integral over v of density((v - (1 - smoothing) * u) / smoothing) / smoothing * arl(v)",
        smoothing=smoothing,
        h=h,
    )
    _given_arl(pad, "Average run length", arl, at)


def of_cusum(
    pad: Pad,
    reference: float,
    decision: float,
    shift: float,
    scale: float,
    arl: float,
    sides: tuple[float, float] | None,
    at: str,
) -> None:
    """The run length of a CUSUM; ``sides`` where both are watched without a head start: that of each by itself."""
    pad.work(
        "Probability that the first point takes the upper sum beyond the decision interval, from 0",
        "erfc((decision + reference - d) / scale / sqrt(2)) / 2",
        None,
        decision=decision,
        reference=reference,
        d=shift,
        scale=scale,
    )
    pad.work(
        "Probability that the first point leaves the upper sum at 0",
        "erfc((d - reference) / scale / sqrt(2)) / 2",
        None,
        d=shift,
        reference=reference,
        scale=scale,
    )
    drift = (reference - shift) / scale**2
    if abs(drift) > 1e-6 and abs(drift) * decision < 50.0:
        pad.work(
            "Average run length of the upper sum by the usual approximation, for comparison",
            "(exp(2 * f * b) - 2 * f * b - 1) / (2 * (f * scale)**2)",
            None,
            f=(drift, "(reference - d) / scale**2"),
            b=(decision + 1.166 * scale, "decision + 1.166 * scale"),
            scale=scale,
        )
    pad.state(
        "A sum u is followed by max(0, u + z - reference); the average run length from each u below the decision "
        "interval solves an integral equation",
        "arl(u) = 1 + P(z <= reference - u) * arl(0) + integral over v of density(v + reference - u) * arl(v)",
        reference=reference,
        decision=decision,
    )
    if sides is None:
        _given_arl(pad, "Average run length", arl, at)
        return
    pad.work(
        "Average run length of both sums, from those of each by itself",
        "1 / (1 / upper + 1 / lower)",
        at,
        upper=(sides[0], "solution of the equation for the upper sum"),
        lower=(sides[1], "and for the lower one"),
    )


def of_moving_average(pad: Pad, span: int, k: float, shift: float, scale: float, arl: float, at: str) -> None:
    """The run length of moving averages."""
    pad.work("Limits of a full window, in sigma of a point", "k / sqrt(span)", None, k=k, span=span)
    p = pad.work(
        "Probability that one average of a full window lies beyond its limits",
        "erfc((k - d * sqrt(span)) / scale / sqrt(2)) / 2 + erfc((k + d * sqrt(span)) / scale / sqrt(2)) / 2",
        None,
        k=k,
        d=shift,
        span=span,
        scale=scale,
    )
    pad.work("Average run length were every average independent, a bound for comparison", "1 / p", None, p=p)
    pad.state(
        "Averages that share points depend on each other: the density of the points still in the window is followed "
        "step by step, and what has left the limits is taken off",
        "arl = 1 + sum over t of P(no signal up to t)",
        span=span,
    )
    _given_arl(pad, "Average run length", arl, at)


def of_mewma(
    pad: Pad, variables: int, smoothing: float, limit: float | None, shift: float, arl: float, at: str
) -> None:
    """The run length of a multivariate EWMA."""
    factor = pad.work(
        "Factor on the squared distance of the smoothed vector, once settled",
        "(2 - smoothing) / smoothing",
        None,
        smoothing=smoothing,
    )
    pad.work(
        "Mean of the statistic in control, and with the shift once settled",
        "p + factor * d**2",
        None,
        p=variables,
        factor=factor,
        d=shift,
    )
    if limit is not None:
        pad.work(
            "Distance of the smoothed vector at the limit, in sigma of a point",
            "sqrt(limit / factor)",
            None,
            limit=limit,
            factor=factor,
        )
    else:
        pad.work("Standard deviation of the statistic in control", "sqrt(2 * p)", None, p=variables)
    pad.state(
        "The distance of the smoothed vector and its direction to the shift make a chain; the density of what has not "
        "signalled is followed step by step",
        "arl = 1 + sum over t of P(no signal up to t)",
        variables=variables,
    )
    _given_arl(pad, "Average run length", arl, at)


def of_counts(
    pad: Pad,
    binomial: bool,
    mean: float,
    size: float,
    factor: float,
    basis: LimitBasis,
    alone: bool,
    arl: float,
    at: str,
) -> None:
    """The run length of a chart of counts at ``factor`` times its mean."""
    at_ = np.array([size])
    lines = count_lines(binomial, mean, at_, basis)
    pad.work("Centre line of the counts", "n * mean", None, n=size, mean=mean)
    pad.work(
        "Their standard deviation",
        "sqrt(n * mean * (1 - mean))" if binomial else "sqrt(n * mean)",
        None,
        n=size,
        mean=mean,
    )
    lower, upper = float(lines.lower[0]), float(lines.upper[0])
    sigma = float(lines.sd[0])
    below = math.ceil(lower - 1e-9 * sigma) - 1.0 if lower > 0 else -1.0
    above = math.floor(upper + 1e-9 * sigma)
    law = "binomial" if binomial else "Poisson"
    under = 0.0
    if below >= 0:
        under = float(count_cdf(binomial, np.array([below]), mean * factor, at_)[0])
        _tail(pad, binomial, mean * factor, size, int(below), under)
    over = 0.0
    if not binomial or above < size:
        over = float(count_sf(binomial, np.array([float(above)]), mean * factor, at_)[0])
    p = pad.work(
        "Probability of a count beyond the limits",
        "below + above",
        None,
        below=(
            under,
            f"of {max(below, 0):g} or fewer, in the {law} law" if below >= 0 else "there is no lower limit",
        ),
        above=(over, f"of more than {above:g}, in the {law} law"),
    )
    if alone:
        pad.work("Average run length", "1 / p", at, p=p)
        return
    pad.state(
        "With run rules the run length is that of a Markov chain: its states are what the rules must remember, Q the "
        "probabilities of passing from one to another without a signal",
        "(I - Q) * arl = 1",
    )
    _given_arl(pad, "Average run length", arl, at)


def _tail(pad: Pad, binomial: bool, mean: float, size: float, most: int, told: float) -> None:
    """A lower tail of few terms."""
    if most > 12 or (binomial and size != int(size)):
        return
    if binomial:
        formula = " + ".join(
            f"comb({int(size)}, {i}) * mean**{i} * (1 - mean)**(n - {i})" for i in range(most + 1)
        )
    else:
        formula = (
            "exp(-n * mean) * ("
            + " + ".join(f"(n * mean)**{i} / gamma({i + 1})" for i in range(most + 1))
            + ")"
        )
    pad.work(f"Probability of {most} or fewer", formula, None, mean=mean, n=size)


def times(
    pad: Pad,
    at: str,
    arl: float,
    interval_hours: float | None,
    steady_state_arl: float | None,
    within: Sequence[tuple[int, float]],
    geometric: bool,
) -> None:
    """Times to signal, and the probability of a signal within so many points."""
    if interval_hours is not None:
        pad.work("Average time to signal", "hours * arl", f"{at}/ats_hours", hours=interval_hours, arl=arl)
        if steady_state_arl is not None:
            pad.work(
                "After long operation, for a shift at a random moment between two points",
                "hours * (arl - 1/2)",
                f"{at}/steady_state_ats_hours",
                hours=interval_hours,
                arl=(steady_state_arl, "average run length after long operation"),
            )
    if geometric:
        for place, (points, _) in enumerate(within):
            pad.work(
                f"Probability of a signal within {points} points",
                "-expm1(points * log1p(-1 / arl))",
                f"{at}/within/{place}/probability",
                points=points,
                arl=arl,
            )


# Mean charts ----------------------------------------------------------------------------------------


def of_subgroups(
    plan: PlanPerformance | None,
    present: OperatingCharacteristics | None,
    comparison: Comparison | None,
    rules: Sequence[Rule] | None,
) -> tuple[Step, ...]:
    """The steps of the plan found, of the present one, and of the best of those compared."""
    pad = Pad()
    if plan is not None:
        _plan(pad, "plan", plan, "#/plan")
    if present is not None:
        _present(pad, present, rules)
    if comparison is not None:
        _plan(pad, "quickest plan", comparison.plans[0], "#/comparison/plans/0")
    return pad.steps


def _plan(pad: Pad, what: str, one: PlanPerformance, at: str) -> None:
    k, n, h = one.multiple, one.size, one.interval_hours
    alarm = pad.work(
        f"False alarms of the {what}: probability of a mean beyond the limits, in control",
        "erfc(k / sqrt(2))",
        f"{at}/false_alarm_probability",
        k=k,
    )
    pad.work("Samples between false alarms", "1 / alarm", f"{at}/in_control_arl", alarm=alarm)
    d = pad.work("Shift in standard deviations of a mean", "abs(shift) * sqrt(n)", None, shift=one.shift, n=n)
    power = pad.work(
        "Power: probability of a signal at the first sample", f"min(1, {_BEYOND})", f"{at}/power", k=k, d=d
    )
    arl = pad.work("Average run length", "1 / power", f"{at}/arl", power=power)
    pad.work(
        "Its standard deviation",
        "sqrt(erfc((d - k) / sqrt(2)) / 2 - erfc((d + k) / sqrt(2)) / 2) / power",
        f"{at}/sd_run_length",
        d=d,
        k=k,
        power=power,
    )
    pad.work(
        "Average time to signal, for a shift just after a sample",
        "hours * arl",
        f"{at}/ats_hours",
        hours=h,
        arl=arl,
    )
    pad.work(
        "The same for a shift at a random moment",
        "hours * (arl - 1/2)",
        f"{at}/ats_random_hours",
        hours=h,
        arl=arl,
    )
    pad.work("Pieces an hour", "n / hours", f"{at}/pieces_per_hour", n=n, hours=h)


def _present(pad: Pad, one: OperatingCharacteristics, rules: Sequence[Rule] | None) -> None:
    at, k = "#/present", one.multiple
    alarm = pad.work(
        "False alarms of the present plan", "erfc(k / sqrt(2))", f"{at}/false_alarm_probability", k=k
    )
    pad.work(
        "Samples between false alarms" + (" of its limits alone" if rules else ""),
        "1 / alarm",
        None if rules else f"{at}/in_control_arl",
        alarm=alarm,
    )
    if not len(one.shifts):
        return
    last = len(one.shifts) - 1
    shift = float(one.shifts[last])
    d = pad.work(
        f"Shift of {shift:g} sigma in standard deviations of a mean",
        "abs(shift) * sqrt(n)",
        None,
        shift=shift,
        n=one.size,
    )
    power = pad.work("Power at it", f"min(1, {_BEYOND})", f"{at}/power/{last}", k=k, d=d)
    if not rules:
        pad.work("Average run length at it", "1 / power", f"{at}/arl/{last}", power=power)
    pad.work(
        "Average time to signal at it",
        "hours * arl",
        f"{at}/ats_hours/{last}",
        hours=one.interval_hours,
        arl=float(one.arl[last]),
    )


# Charts with memory ---------------------------------------------------------------------------------


def of_ewma_design(
    smoothing: float | None,
    limit: float | None,
    arl: float,
    two_sided: bool,
    optimal: EwmaDesign | None,
    interval_hours: float | None,
) -> tuple[Step, ...]:
    """The steps of the limit asked for, and of what surrounds the optimum."""
    pad = Pad()
    if smoothing is not None and limit is not None:
        _settled(pad, smoothing, limit)
        pad.state(
            "The limit is the one at which the average run length in control, the solution of an integral equation, is "
            "the one asked for",
            "arl(0) = asked",
            asked=arl,
        )
        pad.work(
            "Limit: the solution of that equation", "limit", "#/limit", limit=(limit, "found numerically")
        )
    if optimal is not None:
        _settled(pad, optimal.smoothing, optimal.limit)
        _beside(pad, optimal, two_sided, interval_hours)
    return pad.steps


def _settled(pad: Pad, smoothing: float, limit: float) -> None:
    share = pad.work(
        "Variance of the average once settled, as a share of that of a point",
        "smoothing / (2 - smoothing)",
        None,
        smoothing=smoothing,
    )
    pad.work(
        "Limits of the average once settled, in sigma of a point",
        "limit * sqrt(share)",
        None,
        limit=limit,
        share=share,
    )


def _beside(pad: Pad, found: EwmaDesign | CusumDesign, two_sided: bool, hours: float | None) -> None:
    """The chart without memory at the same rate, times to signal, and the first neighbour."""
    pad.state(
        "The run lengths of charts with memory solve an integral equation; the optimum is where that at the shift is "
        "least among charts with the in-control run length asked for",
        "arl(u) = 1 + integral over v of K(u, v) * arl(v)",
        in_control_arl=found.in_control_arl,
        arl=found.arl,
    )
    pad.work(
        "In-control run length of the chart without memory beside it",
        "1 / erfc(k / sqrt(2))" if two_sided else "2 / erfc(k / sqrt(2))",
        "#/optimal/in_control_arl",
        k=found.shewhart_limit,
    )
    if found.shewhart:
        one = found.shewhart[-1]
        last = len(found.shewhart) - 1
        tails = _BEYOND if two_sided else "erfc((k - d) / sqrt(2)) / 2"
        pad.work(
            f"Its average run length at a shift of {one.shift:g}",
            f"1 / ({tails})",
            f"#/optimal/shewhart/{last}/arl",
            k=found.shewhart_limit,
            d=one.shift,
        )
    if found.out_of_control and hours is not None:
        _time(pad, found.out_of_control[-1], found.state, hours, len(found.out_of_control) - 1)
    if found.neighbours:
        pad.work(
            "How much longer the first neighbour takes",
            "neighbour / optimum - 1",
            "#/optimal/neighbours/0/excess",
            neighbour=found.neighbours[0].arl,
            optimum=found.arl,
        )


def _time(pad: Pad, one: MemoryPerformance, state: str, hours: float, place: int) -> None:
    if one.ats_hours is None:
        return
    if state == "steady-state" and one.steady_state_arl is not None:
        pad.work(
            f"Average time to signal at a shift of {one.shift:g}, which comes at a random moment",
            "hours * (arl - 1/2)",
            f"#/optimal/out_of_control/{place}/ats_hours",
            hours=hours,
            arl=one.steady_state_arl,
        )
        return
    pad.work(
        f"Average time to signal at a shift of {one.shift:g}",
        "hours * arl",
        f"#/optimal/out_of_control/{place}/ats_hours",
        hours=hours,
        arl=one.arl,
    )


def of_cusum_design(
    reference: float | None,
    decision: float | None,
    arl: float,
    head_start: float,
    two_sided: bool,
    optimal: CusumDesign | None,
    interval_hours: float | None,
) -> tuple[Step, ...]:
    """The steps of the decision interval asked for, and of what surrounds the optimum."""
    pad = Pad()
    if reference is not None and decision is not None:
        pad.work(
            "Probability that the first point takes the upper sum beyond the decision interval, in control",
            "erfc((decision + reference) / sqrt(2)) / 2",
            None,
            decision=decision,
            reference=reference,
        )
        if head_start:
            pad.work(
                "Where the sums start", "fraction * decision", None, fraction=head_start, decision=decision
            )
        pad.state(
            "The decision interval is the one at which the average run length in control, the solution of an integral "
            "equation, is the one asked for",
            "arl(0) = asked",
            asked=arl,
        )
        pad.work(
            "Decision interval: the solution of that equation",
            "decision",
            "#/decision",
            decision=(decision, "found numerically"),
        )
        pad.work(
            "Shift for which this reference value is about the best",
            "2 * reference",
            None,
            reference=reference,
        )
    if optimal is not None:
        pad.work(
            "Reference value about which the best one lies: half the shift",
            "shift / 2",
            None,
            shift=optimal.shift,
        )
        pad.work(
            "Where the sums start",
            "fraction * decision",
            "#/optimal/head_start",
            fraction=head_start,
            decision=optimal.decision,
        )
        _beside(pad, optimal, two_sided, interval_hours)
    return pad.steps


# Charts of counts -----------------------------------------------------------------------------------


def of_attributes(
    found: CountCharacteristics, detection: DetectionSize | None, basis: LimitBasis
) -> tuple[Step, ...]:
    """The steps of the limits, of their risks, and of the size that the usual formula gives."""
    pad = Pad()
    limits = found.limits
    _count_limits(pad, limits, basis)
    one = found.in_control
    p = pad.work(
        "Probability of a false alarm",
        "min(1, below + above)",
        "#/characteristics/in_control/power",
        below=(one.signal_below_probability, "of a count below the lower limit, by the exact law"),
        above=(one.signal_above_probability, "of a count above the upper limit, by the exact law"),
    )
    if limits.lower_count is not None and limits.lower_count > 0:
        _tail(
            pad,
            limits.chart in ("p", "np"),
            limits.level,
            limits.size,
            limits.lower_count - 1,
            one.signal_below_probability,
        )
    if one.arl is not None:
        pad.work("Samples between false alarms", "1 / p", "#/characteristics/in_control/arl", p=p)
    if detection is not None:
        _formula_size(pad, detection, basis)
    return pad.steps


def _count_limits(pad: Pad, limits: CountLimits, basis: LimitBasis) -> None:
    at = "#/characteristics/limits"
    binomial, counts = limits.chart in ("p", "np"), limits.chart in ("np", "c")
    values: dict[str, Value] = {"level": limits.level, "n": limits.size}
    if counts:
        centre = pad.work("Centre line", "n * level", f"{at}/centre", **values)
    else:
        centre = pad.work("Centre line", "level", f"{at}/centre", level=limits.level)
    variance = "level * (1 - level)" if binomial else "level"
    sd = pad.work(
        "Standard deviation of what is plotted",
        f"sqrt(n * {variance})" if counts else f"sqrt({variance} / n)",
        None,
        **values,
    )
    if basis.sigma_multiple is None:
        return
    for sign, name, line in (("-", "lower", limits.lower), ("+", "upper", limits.upper)):
        pad.work(
            f"{name.capitalize()} limit" + ("" if line is not None else ": none, as no count lies beyond it"),
            f"centre {sign} k * sd",
            f"{at}/{name}" if line is not None else None,
            centre=centre,
            k=basis.sigma_multiple,
            sd=sd,
        )


def _formula_size(pad: Pad, found: DetectionSize, basis: LimitBasis) -> None:
    binomial = found.chart in ("p", "np")
    variance = [v * (1.0 - v) if binomial else v for v in (found.level, found.shifted_level)]
    z = float(scipy.special.ndtri(found.wanted_power))
    pad.work(
        "Size by the usual formula, before it is rounded up",
        "(max(0, k * sqrt(v0) + z * sqrt(v1)) / (shifted - level))**2",
        None,
        k=basis.multiple,
        v0=(variance[0], "variance of one piece or unit in control"),
        z=(z, f"normal quantile at the power, {found.wanted_power:g}"),
        v1=(variance[1], "variance of one piece or unit at the level to detect"),
        shifted=found.shifted_level,
        level=found.level,
    )
    pad.work(
        "The same rounded up",
        "max(1, ceil((max(0, k * sqrt(v0) + z * sqrt(v1)) / (shifted - level))**2))",
        "#/detection/formula/size",
        k=basis.multiple,
        v0=variance[0],
        z=z,
        v1=variance[1],
        shifted=found.shifted_level,
        level=found.level,
    )


# Baselines ------------------------------------------------------------------------------------------


def of_baseline(found: BaselineDesign, table: BaselineTable | None) -> tuple[Step, ...]:
    """The steps of the nominal run length, of a percentile and of the guarantee."""
    pad = Pad()
    at = "#/assessment"
    nominal = pad.work(
        "Nominal in-control average run length, were the limits those of a known process",
        "1 / erfc(k / sqrt(2))",
        f"{at}/conditional/nominal_arl",
        k=found.multiple,
    )
    if found.sigma_estimator == "pooled-sd":
        pad.work(
            "Degrees of freedom of sigma",
            "m * (n - 1)",
            f"{at}/knowledge/degrees_of_freedom",
            m=found.subgroups,
            n=found.size,
        )
    pad.state(
        "With centre off by d of its own standard deviation and sigma estimated at w times its value, the limits alarm "
        "with probability a; the percentiles are those of 1/a over the laws of d (normal) and w (chi over its mean)",
        "a = P(z > k * w - d / sqrt(m)) + P(z < -k * w - d / sqrt(m))",
        k=found.multiple,
        m=found.knowledge.means,
        freedom=found.knowledge.degrees_of_freedom,
    )
    for place, one in enumerate(found.conditional.percentiles[:1]):
        pad.work(
            f"False-alarm probability at the {100 * one.probability:g} % percentile",
            "1 / arl",
            f"{at}/conditional/percentiles/{place}/false_alarm_probability",
            arl=(one.arl, "by quadrature"),
        )
    wider = found.guarantee
    pad.work(
        "How much wider the guaranteed limits are",
        "guaranteed / k",
        f"{at}/guarantee/widening",
        guaranteed=wider.multiple,
        k=found.multiple,
    )
    if wider.shifts:
        cost = wider.shifts[-1]
        last = len(wider.shifts) - 1
        d = pad.work(
            f"A shift of {cost.shift:g} sigma in standard deviations of a mean",
            "shift * sqrt(n)",
            None,
            shift=cost.shift,
            n=found.size,
        )
        pad.work(
            "Average run length at it with the limits as they are",
            f"1 / ({_BEYOND})",
            f"{at}/guarantee/shifts/{last}/arl",
            k=found.multiple,
            d=d,
        )
        pad.work(
            "And with the wider ones",
            f"1 / ({_BEYOND})",
            f"{at}/guarantee/shifts/{last}/guaranteed_arl",
            k=wider.multiple,
            d=d,
        )
    if table is not None:
        pad.work(
            "Share of the nominal run length in the first cell of the table",
            "percentile / nominal",
            "#/table/cells/0/share_of_nominal",
            percentile=table.cells[0].percentile_arl,
            nominal=nominal,
        )
    return pad.steps


# Economics ------------------------------------------------------------------------------------------


def of_economic(e: ProcessEconomics, found: EconomicDesign, *, rules: bool) -> tuple[Step, ...]:
    """The cost of the best plan, part by part."""
    pad = Pad()
    _priced(pad, e, found.best, "#/design/best", rules=rules)
    if found.saving_per_hour is not None and found.present is not None:
        pad.work(
            "Saving over the plan in use",
            "present - best",
            "#/design/saving_per_hour",
            present=found.present.cost_per_hour,
            best=found.best.cost_per_hour,
        )
    return pad.steps


def _priced(pad: Pad, e: ProcessEconomics, plan: PricedPlan, at: str, *, rules: bool) -> None:
    n, h, k = plan.size, plan.interval_hours, plan.multiple
    arl0: float | None = plan.in_control_arl
    arl1: float | None = plan.out_of_control_arl
    if not rules:
        found0 = pad.work(
            "Samples between false alarms",
            "1 / erfc(k / sqrt(2))",
            None if arl0 is None else f"{at}/in_control_arl",
            k=k,
        )
        d = pad.work(
            "Shift in standard deviations of a mean", "abs(shift) * sqrt(n)", None, shift=e.shift, n=n
        )
        found1 = pad.work(
            "Samples from the shift to its signal",
            f"1 / min(1, {_BEYOND})",
            None if arl1 is None else f"{at}/out_of_control_arl",
            k=k,
            d=d,
        )
        arl0, arl1 = found0, found1
    if arl0 is None or arl1 is None:
        return
    x = pad.work(
        "Interval over the mean hours to a shift", "hours / mean", None, hours=h, mean=e.mean_hours_to_shift
    )
    s = pad.work("Samples while in control", "1 / expm1(x)", None, x=x)
    # Where x is small the difference loses digits that its series keeps.
    if x < 0.01:
        tau = pad.work(
            "Hours from the last sample before the shift to the shift, by its series",
            "mean * x * (1/2 - x * (1/12 - x**2 / 720))",
            None,
            mean=e.mean_hours_to_shift,
            x=x,
        )
    else:
        tau = pad.work(
            "Hours from the last sample before the shift to the shift",
            "mean - hours * s",
            None,
            mean=e.mean_hours_to_shift,
            hours=h,
            s=s,
        )
    alarms = pad.work(
        "False alarms in a cycle",
        "s / arl0",
        f"{at}/false_alarms_per_cycle",
        s=s,
        arl0=(arl0, "samples between false alarms"),
    )
    signal = pad.work(
        "Hours from the shift to its point on the chart",
        "n * piece + hours * arl1 - tau",
        None,
        n=n,
        piece=e.hours_per_piece,
        hours=h,
        arl1=(arl1, "samples from the shift to its signal"),
        tau=tau,
    )
    out = pad.work(
        "Hours out of control",
        "signal + find + repair",
        None if plan.hours_out_of_control is None else f"{at}/hours_out_of_control",
        signal=signal,
        find=e.hours_to_find_cause,
        repair=e.hours_to_repair,
    )
    lost = 0.0 if e.runs_while_searching else e.hours_to_search_false_alarm
    cycle = pad.work(
        "Hours of a cycle",
        "mean + lost * alarms + out",
        None if plan.cycle_hours is None else f"{at}/cycle_hours",
        mean=e.mean_hours_to_shift,
        lost=(lost, "hours that production stops for a false alarm"),
        alarms=alarms,
        out=out,
    )
    runs = pad.work(
        "Hours out of control while production runs",
        "signal + g1 * find + g2 * repair",
        None,
        signal=signal,
        g1=(float(e.runs_while_searching), "1 where production runs while a cause is searched for, else 0"),
        find=e.hours_to_find_cause,
        g2=(float(e.runs_while_repairing), "1 where it runs during the repair, else 0"),
        repair=e.hours_to_repair,
    )
    parts = f"{at}/parts"
    told: dict[str, Value] = {
        "in_control": pad.work(
            "Cost of quality an hour in control",
            "c0 * mean / cycle",
            f"{parts}/quality_in_control_per_hour",
            c0=e.cost_per_hour_in_control,
            mean=e.mean_hours_to_shift,
            cycle=cycle,
        ),
        "out_of_control": pad.work(
            "Out of control",
            "c1 * runs / cycle",
            f"{parts}/quality_out_of_control_per_hour",
            c1=e.cost_per_hour_out_of_control,
            runs=runs,
            cycle=cycle,
        ),
        "false_alarms": pad.work(
            "False alarms",
            "cost * alarms / cycle",
            f"{parts}/false_alarms_per_hour",
            cost=e.false_alarm_cost,
            alarms=alarms,
            cycle=cycle,
        ),
        "repairs": pad.work(
            "Repairs", "cost / cycle", f"{parts}/repairs_per_hour", cost=e.repair_cost, cycle=cycle
        ),
        "sampling": pad.work(
            "Sampling",
            "(a + b * n) / hours * (mean + runs) / cycle",
            f"{parts}/sampling_per_hour",
            a=e.cost_per_sample,
            b=e.cost_per_piece,
            n=n,
            hours=h,
            mean=e.mean_hours_to_shift,
            runs=runs,
            cycle=cycle,
        ),
    }
    pad.work("Cost an hour", " + ".join(told), f"{at}/cost_per_hour", **told)


# Charts side by side --------------------------------------------------------------------------------


def of_comparison(found: ChartComparison) -> tuple[Step, ...]:
    """The times of the quickest candidate, and of the recommended one beside it."""
    pad = Pad()
    for place in dict.fromkeys((0, found.recommended)):
        one = found.candidates[place]
        at = f"#/comparison/candidates/{place}"
        hours = pad.work(
            f"Interval of {'the quickest' if place == 0 else 'the recommended'} candidate ({one.chart})",
            "n / pieces_per_hour",
            f"{at}/interval_hours",
            n=one.size,
            pieces_per_hour=found.pieces_per_hour,
        )
        pad.work(
            "Hours between false alarms",
            "hours * arl",
            f"{at}/hours_between_false_alarms",
            hours=hours,
            arl=(one.in_control_arl, "in-control average run length, by the method of this chart"),
        )
        if one.chart == "mean" and one.multiple is not None:
            pad.work(
                "Its in-control average run length",
                "1 / erfc(k / sqrt(2))",
                f"{at}/in_control_arl",
                k=one.multiple,
            )
            pad.work(
                "And at the shift",
                f"1 / ({_BEYOND})",
                f"{at}/arl",
                k=one.multiple,
                d=(found.shift * math.sqrt(one.size), "shift times the root of the size"),
            )
        time = pad.work(
            "Average time from the shift, at a random moment, to the signal",
            "hours * (arl - 1/2)",
            f"{at}/ats_hours",
            hours=hours,
            arl=(one.steady_state_arl, "average run length after long operation"),
        )
        pad.work(
            "Share by which that is longer than for the quickest",
            "time / quickest - 1",
            f"{at}/slower_than_quickest",
            time=time,
            quickest=found.candidates[0].ats_hours,
        )
    return pad.steps
