"""The operation of run lengths."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np

from ...spc.charts.counts import count_law, count_lines
from ...spc.charts.lattice import run_law, steady_run_law
from ...spc.errors import UnusableParameter, Where
from ...spc.explain import designs as worked
from ...spc.explain.steps import Pad, Step
from ...spc.rules import Rule
from ...spc.runlength import memory, mewma, moving, of_rules
from ...spc.runlength.survival import MOST_OPERATIONS, Allowance, Decay, RunLength
from .. import problems
from ..contract import Contract
from ..schemas.common import located, rules_of
from ..schemas.run_length import RunLengthRequest, RunLengthsAnswer, count_basis, one_chart, shifts_of

TAG = "Chart design"
TAG_TEXT = "How many pieces, how often, which limits, and what they cost in false alarms."
USUAL_FACTORS = (1.0, 0.5, 1.5, 2.0, 3.0)
_MOST_POINTS = 14.0  # times the memory of a smoothed vector: until its law stands still
_MOST_FOR_STEADY = MOST_OPERATIONS // 8


@dataclass(frozen=True, slots=True)
class _Found:
    """The run length at one shift, and about how many operations it took."""

    run: RunLength | memory.MemoryRunLength
    within: Iterable[float]
    steady_state_arl: float | None
    operations: float


_At: TypeAlias = Callable[[float, float], _Found]


def run_length(loaded: dict[str, Any]) -> dict[str, Any]:
    """Run lengths of a chart with known parameters."""
    kind = one_chart(loaded)
    within = tuple(loaded.get("within_points", np.empty(0, dtype=np.int64)).tolist())
    hours = loaded.get("interval_hours")
    chart = loaded[kind]
    if kind == "counts":
        return {"run_lengths": _of_counts(loaded, chart, within, hours)}
    if "factors" in loaded:
        raise UnusableParameter.of("not-for-this-chart", "Factors are for charts of counts.", "factors")
    shifts = shifts_of(loaded)
    at = _ROADS[kind](loaded, chart, within, len(shifts))
    root = math.sqrt(chart["subgroup_size"])
    allowance = Allowance(len(shifts), "shifts" if "shifts" in loaded else "scales")
    told = []
    for index, (shift, scale) in enumerate(shifts):
        places: dict[str, Where] = {name: (kind, name) for name in chart}
        # What does not settle is told of the rules; where there are none it is the limits, as what never signals.
        places["limits"] = (kind, _LIMITS[kind])
        places["rules"] = (kind, "rules") if kind == "shewhart" else places["limits"]
        with located(shift=("shifts", index), scale=("scales", index), **places):
            found = at(shift * root, scale)
        told.append(_told(found, within, hours, shift=shift, scale=scale))
        allowance.take(found.operations)
    return {"run_lengths": told}


def _told(found: _Found, within: Sequence[int], hours: float | None, **at: float | None) -> dict[str, Any]:
    run, steady = found.run, found.steady_state_arl
    return {
        "shift": at.get("shift"),
        "scale": at.get("scale"),
        "factor": at.get("factor"),
        "arl": run.arl,
        "sd": run.sd,
        "percentiles": [{"probability": q, "points": points} for q, points in run.percentiles],
        "within": [
            {"points": points, "probability": p} for points, p in zip(within, found.within, strict=True)
        ],
        "steady_state_arl": steady,
        "ats_hours": None if hours is None else hours * run.arl,
        "steady_state_ats_hours": None if hours is None or steady is None else hours * (steady - 0.5),
        "method": run.method,
        "accuracy": run.accuracy,
    }


def _of_law(law: Decay, within: tuple[int, ...], steady: Callable[[], float | None]) -> _Found:
    """Told by a law; the steady state as well, where that does not take long."""
    run = law.run_length()
    if run.arl > memory.LONGEST_ARL:
        raise UnusableParameter.of(
            "run-length-beyond-reach",
            f"The average run length is beyond {memory.LONGEST_ARL:g} points: in practice this chart never signals "
            "here, and no figure is given.",
            "limits",
        )
    reached = law.probability(np.array(within, dtype=np.float64)).tolist()
    slow = law.operations > _MOST_FOR_STEADY
    return _Found(run, reached, None if slow else steady(), law.operations * (1 if slow else 2))


def _shewhart(loaded: dict[str, Any], chart: dict[str, Any], within: tuple[int, ...], _: int) -> _At:
    rules = rules_of(chart.get("rules"), "shewhart", "rules")
    reach = chart["sigma_multiple"]
    lower = -reach if chart["sides"] != "upper" else -math.inf
    upper = reach if chart["sides"] != "lower" else math.inf

    def at(shift: float, scale: float) -> _Found:
        law = of_rules.shewhart_law(rules, lower=lower, upper=upper, shift=shift, scale=scale)
        return _of_law(
            law,
            within,
            lambda: of_rules.steady_state_arl(rules, lower=lower, upper=upper, shift=shift, scale=scale),
        )

    return at


def _ewma(loaded: dict[str, Any], chart: dict[str, Any], within: tuple[int, ...], _: int) -> _At:
    def at(shift: float, scale: float) -> _Found:
        given = {
            "smoothing": chart["smoothing"],
            "limit": chart["limit"],
            "scale": scale,
            "two_sided": chart["sides"] == "two",
            "time_varying": chart["limits"] == "time-varying",
        }
        operations = memory.ewma_work(**given) * (2 if within else 1)
        if operations > 2 * MOST_OPERATIONS:
            raise UnusableParameter.of(
                "too-much-work",
                "With so small a smoothing constant, and limits so far out, the run length under time-varying limits "
                "takes longer than is allowed; take a larger one, or asymptotic limits.",
                "smoothing",
            )
        given |= {"shift": shift, "start": chart["start"]}
        run = memory.ewma(**given)
        reached = memory.ewma_signalled_by(points=within, **given) if within else ()
        return _Found(run, reached, run.steady_state_arl, operations)

    return at


def _cusum(loaded: dict[str, Any], chart: dict[str, Any], within: tuple[int, ...], _: int) -> _At:
    def at(shift: float, scale: float) -> _Found:
        given = {"reference": chart["reference"], "decision": chart["decision"], "scale": scale}
        operations = memory.cusum_work(**given) * (2 if within else 1)
        given |= {"shift": shift, "sides": chart["sides"], "head_start": chart["head_start"]}
        run = memory.cusum(**given)
        reached = memory.cusum_signalled_by(points=within, **given) if within else ()
        return _Found(run, reached, run.steady_state_arl, operations)

    return at


def _moving_average(loaded: dict[str, Any], chart: dict[str, Any], within: tuple[int, ...], _: int) -> _At:
    def at(shift: float, scale: float) -> _Found:
        given = {"span": chart["span"], "limit": chart["sigma_multiple"], "shift": shift, "scale": scale}
        found = _of_law(moving.moving_average_law(**given), within, lambda: moving.steady_state_arl(**given))
        # The weights of a step take more than the steps themselves.
        return _Found(found.run, found.within, found.steady_state_arl, 28 * found.operations)

    return at


def _mewma(loaded: dict[str, Any], chart: dict[str, Any], within: tuple[int, ...], asked: int) -> _At:
    if "scales" in loaded:
        raise UnusableParameter.of(
            "not-for-this-chart", "Several variables are told by shifts of their mean alone.", "scales"
        )
    for index, shift in enumerate(loaded.get("shifts", np.empty(0)).tolist()):
        if shift < 0:
            raise UnusableParameter.of(
                "negative-distance",
                "A shift of several variables is a distance, and not negative.",
                "shifts",
                index,
            )
    p, smoothing, exact = chart["variables"], chart["smoothing"], chart["limits"] == "time-varying"
    if ("limit" in chart) == ("in_control_arl" in chart):
        raise UnusableParameter.of(
            "one-limit",
            "Give the limit, or the in-control run length that it follows from.",
            "mewma",
            "limit",
        )

    def check(limit: float) -> float:
        kernel = (350.0 + 6.0 * p + 30.0 * max(p - 10, 0)) * mewma.work(smoothing, limit, exact=exact)
        kernel += _MOST_POINTS / smoothing * mewma.step_work(smoothing, limit)
        if kernel > MOST_OPERATIONS:
            raise UnusableParameter.of(
                "too-much-work",
                "With so small a smoothing constant, and a limit so far out, the run length takes longer than is "
                "allowed; take a larger smoothing constant, or asymptotic limits.",
                "mewma",
                "smoothing",
            )
        return kernel

    limit = chart.get("limit")
    if limit is None:
        with located(**{name: ("mewma", name) for name in chart}):
            # Far from what one shift takes, and near enough to what the chart will be.
            check(mewma.limit_for(p, smoothing, chart["in_control_arl"]))
            limit = mewma.limit_for(p, smoothing, chart["in_control_arl"], exact=exact)
    kernel = check(limit)

    def at(shift: float, scale: float) -> _Found:
        try:
            law = mewma.mewma_law(p, smoothing, limit, shift, exact=exact)
        except UnusableParameter as error:
            if error.faults[0].code != "not-settled":
                raise
            raise UnusableParameter.of(
                "not-settled",
                "With this limit the chart signals too seldom, or settles too slowly, for its run length to be "
                "computed.",
                "limits",
            ) from error
        found = _of_law(law, within, lambda: mewma.steady_state_arl(p, smoothing, limit, shift))
        return _Found(
            found.run, found.within, found.steady_state_arl, found.operations + kernel / max(asked, 1)
        )

    return at


_LIMITS = {
    "shewhart": "sigma_multiple",
    "ewma": "limit",
    "cusum": "decision",
    "moving_average": "sigma_multiple",
    "mewma": "limit",
}
_ROADS = {
    "shewhart": _shewhart,
    "ewma": _ewma,
    "cusum": _cusum,
    "moving_average": _moving_average,
    "mewma": _mewma,
}


def _of_counts(
    loaded: dict[str, Any], chart: dict[str, Any], within: tuple[int, ...], hours: float | None
) -> list[dict[str, Any]]:
    for name in ("shifts", "scales"):
        if name in loaded:
            raise UnusableParameter.of(
                "not-for-this-chart", "Counts shift by factors on their mean; give `factors`.", name
            )
    binomial, mean, size = chart["law"] == "binomial", chart["mean"], chart["size"]
    if binomial and not (mean < 1 and size == int(size)):
        raise UnusableParameter.of(
            "not-binomial",
            "A binomial chart needs a proportion below 1 and a whole number of units.",
            "counts",
            "mean" if mean >= 1 else "size",
        )
    rules = rules_of(chart.get("rules"), "counts", "rules")
    lines = count_lines(binomial, mean, np.array([float(size)]), count_basis(chart))
    drawn = {
        "centre": float(lines.centre[0]),
        "sigma": float(lines.sd[0]),
        "lower": float(lines.lower[0]),
        "upper": float(lines.upper[0]),
    }
    calm = count_law(binomial, mean, float(size))
    factors = loaded.get("factors", np.array(USUAL_FACTORS)).tolist()
    if "factors" not in loaded and binomial:
        factors = [factor for factor in factors if mean * factor < 1]
    allowance = Allowance(len(factors), "factors")
    told = []
    for at, factor in enumerate(factors):
        if binomial and mean * factor >= 1:
            raise UnusableParameter.of(
                "proportion-above-one", f"{factor:g} times {mean:g} is no proportion below 1.", "factors", at
            )
        shifted = count_law(binomial, mean * factor, float(size))

        def steady(shifted: Any = shifted) -> float | None:
            law = steady_run_law(rules, shifted, calm, **drawn)
            return None if law is None else law.run_length().arl

        with located(rules=("counts", "rules"), limits=("counts", "sigma_multiple")):
            law = run_law(rules, shifted, **drawn)
            found = _of_law(law, within, steady)
        told.append(_told(found, within, hours, factor=factor))
        allowance.take(found.operations)
    return told


def explain(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of the last run length asked for."""
    pad, kind = Pad(), one_chart(loaded)
    chart, place = loaded[kind], len(answer["run_lengths"]) - 1
    told, at = answer["run_lengths"][place], f"#/run_lengths/{place}"
    rules = rules_of(chart.get("rules"), kind, "rules")
    arl, geometric = told["arl"], kind in ("shewhart", "counts") and not rules
    if kind == "counts":
        given = chart["law"] == "binomial", chart["mean"], float(chart["size"]), told["factor"]
        worked.of_counts(pad, *given, count_basis(chart), not rules, arl, f"{at}/arl")
    else:
        _explain(pad, kind, chart, rules, told, at)
    within = [(one["points"], one["probability"]) for one in told["within"]]
    worked.times(pad, at, arl, loaded.get("interval_hours"), told["steady_state_arl"], within, geometric)
    return pad.steps


def _explain(
    pad: Pad, kind: str, chart: dict[str, Any], rules: tuple[Rule, ...], told: Mapping[str, Any], at: str
) -> None:
    shift, scale, arl = told["shift"] * math.sqrt(chart["subgroup_size"]), told["scale"], told["arl"]
    if kind == "shewhart":
        reach, sides = chart["sigma_multiple"], chart["sides"]
        lower, upper = -reach if sides != "upper" else -math.inf, reach if sides != "lower" else math.inf
        worked.of_rules(pad, rules, lower, upper, shift, scale, arl, told["sd"], at)
    elif kind == "ewma":
        worked.of_ewma(pad, chart["smoothing"], chart["limit"], shift, scale, arl, f"{at}/arl")
    elif kind == "cusum":
        each = None
        if chart["sides"] == "two" and not chart["head_start"]:
            given = {"reference": chart["reference"], "decision": chart["decision"], "scale": scale}
            upper, lower = (
                memory.cusum(sides="upper", shift=sign * shift, **given).arl for sign in (1.0, -1.0)
            )
            each = upper, lower
        worked.of_cusum(pad, chart["reference"], chart["decision"], shift, scale, arl, each, f"{at}/arl")
    elif kind == "moving_average":
        worked.of_moving_average(pad, chart["span"], chart["sigma_multiple"], shift, scale, arl, f"{at}/arl")
    else:
        worked.of_mewma(
            pad, chart["variables"], chart["smoothing"], chart.get("limit"), shift, arl, f"{at}/arl"
        )


def register(contract: Contract) -> None:
    """Binds the operation of run lengths."""
    contract.tag(TAG, TAG_TEXT)
    contract.operation(
        "POST",
        "/v1/designs/run-length",
        operation_id="computeRunLength",
        tag=TAG,
        summary="Run lengths of a chart",
        description="Average, standard deviation and percentiles of the number of points until the first signal, from "
        "a fresh start and after long operation, the probability of a signal within so many points, and times to "
        "signal, shift by shift. With any mix of rules: exact by a Markov chain for rules on zones, by a spectral "
        "method with rules on order; EWMA and CUSUM charts by Nystrom's method; moving averages and several variables "
        "by following the survivors on a grid; counts exactly. Sources: brook-evans-1972, champ-woodall-1987, "
        "crowder-1987, vance-1986, rigdon-1995, runger-prabhu-1996.",
        request=RunLengthRequest(),
        response=RunLengthsAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example=(
            "designs-run-length",
            "designs-run-length-ewma",
            "designs-run-length-cusum",
            "designs-run-length-moving-average",
            "designs-run-length-mewma",
            "designs-run-length-counts",
        ),
        provenance="run-length",
        explain=explain,
    )(run_length)
