"""Worked steps of tolerance intervals."""

from __future__ import annotations

import math

import scipy

from ..capability.tolerance import ToleranceInterval, ToleranceSampleSize, howe_factor
from ..data import Floats
from .steps import Pad, Step, Value

_MOST_TERMS = 20


def of_interval(values: Floats | None, found: ToleranceInterval) -> tuple[Step, ...]:
    """The steps from values, or their summary, to the interval."""
    pad = Pad()
    if found.method == "non-parametric":
        assert values is not None
        _by_order(pad, values, found)
        return pad.steps
    assert found.mean is not None
    assert found.sd is not None
    assert found.factor is not None
    if values is not None:
        mean = pad.mean(f"Mean of the {found.count} values", values, "#/interval/mean")
        pad.deviation("Their standard deviation", values, mean, "#/interval/sd")
    _factor(
        pad,
        found.count,
        found.coverage,
        found.confidence,
        found.sides == "two-sided",
        found.factor,
        "#/interval/factor",
        howe=found.method == "normal-howe-1969",
    )
    for sign, name, end in (("-", "lower", found.lower), ("+", "upper", found.upper)):
        if end is not None:
            pad.work(
                f"{name.capitalize()} end",
                f"mean {sign} factor * sd",
                f"#/interval/{name}",
                mean=found.mean,
                factor=found.factor,
                sd=found.sd,
            )
    return pad.steps


def _factor(
    pad: Pad,
    count: int,
    coverage: float,
    confidence: float,
    two_sided: bool,
    factor: float,
    where: str,
    *,
    howe: bool,
) -> None:
    freedom = pad.work("Degrees of freedom", "n - 1", None, n=count)
    if two_sided:
        upper = 0.5 * (1.0 + coverage)
        chi = 2.0 * float(scipy.special.gammaincinv(0.5 * freedom, 1.0 - confidence))
        pad.work(
            "Factor by Howe's approximation" + ("" if howe else ", beside the exact one"),
            "z * sqrt(freedom * (1 + 1 / n) / chi)",
            where if howe else None,
            z=(float(scipy.special.ndtri(upper)), f"normal quantile at {upper:g}"),
            freedom=freedom,
            n=count,
            chi=(chi, f"quantile of chi-square at {1.0 - confidence:g} with {freedom:g} degrees of freedom"),
        )
        assert not howe or math.isclose(factor, howe_factor(count, coverage, confidence))
        if howe:
            return
        pad.state(
            "Exact factor: over all that the mean may be off, the probability that the interval holds the coverage is "
            "the confidence (Wald and Wolfowitz 1946); it solves this equation",
            "integral of density(y) * P(chi2 > freedom * r(y / sqrt(n))**2 / factor**2) = confidence",
            factor=factor,
        )
        pad.work("Exact factor", "factor", where, factor=(factor, "solution of that equation"))
        return
    z = float(scipy.special.ndtri(coverage))
    t = factor * math.sqrt(count)
    delta = pad.work(
        "Noncentrality",
        "z * sqrt(n)",
        None,
        z=(z, f"normal quantile at the coverage, {coverage:g}"),
        n=count,
    )
    pad.work(
        "Exact factor of one side",
        "t / sqrt(n)",
        where,
        t=(
            t,
            f"quantile at {confidence:g} of non-central t with {freedom:g} degrees of freedom and noncentrality "
            f"{delta:.9g}",
        ),
        n=count,
    )


def _by_order(pad: Pad, values: Floats, found: ToleranceInterval) -> None:
    ordered = sorted(values.tolist())
    left_out = 0
    for rank, name in ((found.lower_rank, "lower"), (found.upper_rank, "upper")):
        if rank is None:
            continue
        each = rank if name == "lower" else found.count + 1 - rank
        left_out += each
        if name == "upper":
            pad.work(
                "Rank of the upper end",
                "n + 1 - m",
                "#/interval/upper_rank",
                n=found.count,
                m=(each, "so many from the largest value"),
            )
        pad.work(
            f"{name.capitalize()} end: the value of rank {rank}",
            "value",
            f"#/interval/{name}",
            value=(ordered[rank - 1], f"of rank {rank} from the smallest"),
        )
    _held(pad, found.count, left_out, found.coverage, "#/interval/achieved_confidence")
    _held(pad, found.count, left_out + 1, found.coverage, None)


def _held(pad: Pad, count: int, left_out: int, coverage: float, where: str | None) -> None:
    """The confidence of an interval that leaves out so many at the ends."""
    if left_out > _MOST_TERMS:
        pad.state(
            f"Confidence where {left_out} are left out at the ends: a binomial tail",
            "P(no more than n - m of n values lie within a stretch that holds the coverage)",
            n=count,
            m=left_out,
            coverage=coverage,
        )
        return
    terms = " + ".join(
        f"comb({count}, {j}) * (1 - coverage)**{j} * coverage**(n - {j})" for j in range(left_out)
    )
    values: dict[str, Value] = {"coverage": coverage, "n": count}
    pad.work(
        f"Confidence with {count} values, {left_out} left out at the ends"
        + ("" if where else ", for comparison"),
        f"1 - ({terms})",
        where,
        **values,
    )


def of_sample_size(found: ToleranceSampleSize) -> tuple[Step, ...]:
    """The confidence with so many values, and with one fewer; of a normal interval its factor."""
    pad = Pad()
    if found.method == "non-parametric":
        left_out = 2 if found.sides == "two-sided" else 1
        pad.work("Share that may lie outside", "1 - coverage", None, coverage=found.coverage)
        _held(pad, found.count, left_out, found.coverage, "#/sample_size/achieved_confidence")
        if found.count > left_out:
            _held(pad, found.count - 1, left_out, found.coverage, None)
        return pad.steps
    assert found.factor is not None
    _factor(
        pad,
        found.count,
        found.coverage,
        found.confidence,
        found.sides == "two-sided",
        found.factor,
        "#/sample_size/factor",
        howe=False,
    )
    if found.excess_coverage is not None and found.excess_probability is not None:
        pad.state(
            "Probability that the interval holds more than the coverage to be exceeded seldom: the same equation with "
            "that coverage; no fewer values keep it within the risk",
            "P(interval holds more than excess_coverage)",
            excess_coverage=found.excess_coverage,
            excess_probability=found.excess_probability,
        )
    return pad.steps
