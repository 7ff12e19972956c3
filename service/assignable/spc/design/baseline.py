"""How large a baseline must be before its limits deserve trust, and what to do with a smaller one.

Once a baseline is taken its limits stay, and so does the in-control average run length they happen to
give: the conditional one, which a second baseline of the same process would have made another. This module
states its distribution for a baseline of a given size, the number of subgroups that keeps it near nominal,
and the wider limits that guarantee it with a stated confidence. The numerics are those of
:mod:`assignable.spc.runlength.estimated`; the values are taken as independent, normal and in control.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Annotated, Literal

import scipy

from ..errors import UnusableParameter
from ..runlength import estimated
from ..runlength.estimated import BaselineKnowledge, ConditionalRunLength, SigmaEstimator

SHIFTS = (0.5, 1.0, 1.5, 2.0, 3.0)
TABLE_SUBGROUPS = (10, 20, 25, 30, 50, 75, 100, 200, 300, 500, 1000)
TABLE_SIZES = (3, 4, 5, 8, 10)
MOST_CELLS = 150
LARGEST_SHARE = 0.99
LARGEST_RISK = 0.4

_FOR_MEANS: SigmaEstimator = "mean-range"
_FOR_INDIVIDUALS: SigmaEstimator = "mean-moving-range"


@dataclass(frozen=True, slots=True)
class ShiftCost:
    """What the wider limits cost: the time to find a shift, centre and sigma known."""

    shift: Annotated[float, "Shift of the mean, in process sigma."]
    arl: Annotated[float, "Average run length with the limits as they are."]
    guaranteed_arl: Annotated[float, "Average run length with the wider limits."]


@dataclass(frozen=True, slots=True)
class GuaranteedLimits:
    """Limits that hold the in-control average run length with a stated confidence, whatever the baseline drew."""

    multiple: Annotated[float, "The limit multiple of the estimated sigma that does so."]
    in_control_arl: Annotated[float, "The average run length held to."]
    confidence: Annotated[float, "Share of baselines whose limits give at least that run length."]
    confidence_as_is: Annotated[float, "The same share with the limits as they are."]
    widening: Annotated[float, "How much wider the limits become: the ratio of the two multiples."]
    shifts: Annotated[tuple[ShiftCost, ...], "What that costs when there is a shift to find."]


@dataclass(frozen=True, slots=True)
class SufficientBaseline:
    """The smallest baseline whose limits can be trusted as asked."""

    subgroups: Annotated[int, "Subgroups (values, for a chart of single values)."]
    values: Annotated[int, "Values in all."]
    share_of_nominal: Annotated[float, "Share of the nominal average run length that is to be kept."]
    risk: Annotated[float, "Probability of a baseline that keeps less: the percentile that is held to it."]
    arl: Annotated[float, "The average run length at that percentile with this many subgroups."]
    nominal_arl: Annotated[float, "The nominal average run length."]


@dataclass(frozen=True, slots=True)
class BaselineCell:
    """One size of baseline in the table."""

    subgroups: Annotated[int, "Subgroups in the baseline."]
    size: Annotated[int, "Values in a subgroup."]
    percentile_arl: Annotated[float, "The average run length at the stated percentile."]
    share_of_nominal: Annotated[float, "The same over the nominal one."]
    probability_below_half_nominal: Annotated[
        float, "Share of baselines whose average run length is less than half the nominal."
    ]
    guaranteed_multiple: Annotated[float, "The limit multiple that guarantees the nominal run length."]


@dataclass(frozen=True, slots=True)
class BaselineTable:
    """Baselines of many sizes side by side."""

    multiple: Annotated[float, "Limits at this many standard deviations."]
    nominal_arl: Annotated[float, "Average run length were the centre and sigma known."]
    sigma_estimator: Annotated[
        Literal["mean-range", "mean-sd", "pooled-sd", "mean-moving-range"], "Estimator of sigma."
    ]
    risk: Annotated[float, "The percentile that is shown."]
    confidence: Annotated[float, "The confidence of the guaranteed multiples."]
    cells: Annotated[tuple[BaselineCell, ...], "By size of subgroup, then by subgroups, as asked."]


@dataclass(frozen=True, slots=True)
class BaselineDesign:
    """How far limits from one baseline can be trusted."""

    subgroups: Annotated[int, "Subgroups in the baseline (values, for a chart of single values)."]
    size: Annotated[int, "Values in a subgroup; 1 for a chart of single values."]
    sigma_estimator: Annotated[
        Literal["mean-range", "mean-sd", "pooled-sd", "mean-moving-range"], "Estimator of sigma."
    ]
    multiple: Annotated[float, "Limits at this many standard deviations."]
    knowledge: Annotated[BaselineKnowledge, "How well such a baseline knows its centre and sigma."]
    conditional: Annotated[
        ConditionalRunLength,
        "The in-control average run length over the baselines that might have been taken.",
    ]
    guarantee: Annotated[GuaranteedLimits, "Wider limits that hold the run length with a stated confidence."]
    enough: Annotated[
        SufficientBaseline | None,
        "The smallest baseline that can be trusted as asked; null if a million subgroups are not.",
    ]
    trusted: Annotated[bool, "Whether this baseline is as large as that."]
    conclusion: Annotated[str, "The answer in plain sentences."]
    method: Annotated[str, "How it was computed, and what is approximate in it."]


def assess(
    subgroups: int,
    size: int,
    *,
    sigma_estimator: SigmaEstimator | None = None,
    multiple: float = 3.0,
    in_control_arl: float | None = None,
    confidence: float = 0.9,
    share_of_nominal: float = 0.8,
    risk: float = 0.1,
    percentiles: Sequence[float] = estimated.PERCENTILES,
) -> BaselineDesign:
    """How far limits from ``subgroups`` subgroups of ``size`` values (1: single values) can be trusted.

    sigma_estimator: ``mean-range`` unless given, for single values ``mean-moving-range``; multiple: of the
    limits, 0.5 to 6; in_control_arl: to guarantee with ``confidence``, the nominal one of the multiple
    unless given; share_of_nominal, risk: as for :func:`enough`; percentiles: up to 20, 0.001 to 0.999.
    Raises UnusableParameter: an argument out of its range, or ``no-such-multiple``.
    Source: [jensen-2006]; [gandy-kvaloy-2013], [goedhart-2017], [jardim-2020] for the guarantee.
    """
    estimator = _estimator(size, sigma_estimator)
    knows = estimated.baseline(subgroups, size, estimator)
    conditional = estimated.conditional(knows, multiple, tuple(percentiles))
    target = conditional.nominal_arl if in_control_arl is None else in_control_arl
    wider = estimated.guaranteed_multiple(knows, target, confidence)
    root = math.sqrt(size)
    guarantee = GuaranteedLimits(
        multiple=wider,
        in_control_arl=target,
        confidence=confidence,
        confidence_as_is=1.0 - estimated.probability_shorter(knows, multiple, target),
        widening=wider / multiple,
        shifts=tuple(
            ShiftCost(shift, _arl(shift * root, multiple), _arl(shift * root, wider))
            for shift in SHIFTS
            # A run length beyond any use is left out.
            if shift * root > wider - 7.0
        ),
    )
    try:
        least = enough(
            size,
            sigma_estimator=estimator,
            multiple=multiple,
            share_of_nominal=share_of_nominal,
            risk=risk,
        )
    except UnusableParameter as fault:
        if fault.faults[0].code != "target-not-met":
            raise
        least = None
    trusted = least is not None and subgroups >= least.subgroups
    return BaselineDesign(
        subgroups=subgroups,
        size=size,
        sigma_estimator=estimator,
        multiple=multiple,
        knowledge=knows,
        conditional=conditional,
        guarantee=guarantee,
        enough=least,
        trusted=trusted,
        conclusion=_conclusion(
            subgroups, size, multiple, conditional, guarantee, least, share_of_nominal, risk
        ),
        method="Integral over the error of the centre of the law of sigma (quadrature, about ten digits). Sigma: "
        + (
            "exact chi distribution."
            if knows.exact
            else "a chi distribution with the exact mean and variance of the estimator, an approximation of its shape."
        ),
    )


def enough(
    size: int,
    *,
    sigma_estimator: SigmaEstimator | None = None,
    multiple: float = 3.0,
    share_of_nominal: float = 0.8,
    risk: float = 0.1,
) -> SufficientBaseline:
    """The fewest subgroups with P(conditional in-control ARL < share · nominal ARL) ≤ risk.

    share_of_nominal: 0.05 to 0.99; risk: 0.001 to 0.4. Every number up to 64 is tried, then bisection, the
    probability falling from there on. Raises UnusableParameter outside these ranges, or ``target-not-met``
    where a million subgroups are not enough.
    """
    estimator = _estimator(size, sigma_estimator)
    for value, low, high, name in (
        (share_of_nominal, 0.05, LARGEST_SHARE, "share_of_nominal"),
        (risk, 0.001, LARGEST_RISK, "risk"),
    ):
        if not low <= value <= high:
            raise UnusableParameter.of(
                "out-of-range", f"{name} must be from {low:g} to {high:g}; it is {value:.15g}.", name
            )
    nominal = _arl(0.0, multiple)
    goal = share_of_nominal * nominal

    def too_few(subgroups: int) -> bool:
        # A run length below 1 there is not.
        return (
            goal > 1.0
            and estimated.probability_shorter(estimated.baseline(subgroups, size, estimator), multiple, goal)
            > risk
        )

    start = estimated.FEWEST_SUBGROUPS
    found = next((m for m in range(start, 65) if not too_few(m)), None)
    if found is None:
        low, high = 64, 128
        while too_few(high):
            low, high = high, 2 * high
            if high > estimated.MOST_SUBGROUPS:
                raise UnusableParameter.of(
                    "target-not-met",
                    f"Even {low} subgroups leave a risk above {risk:g} of an average run length below "
                    f"{share_of_nominal:g} of the nominal one; ask for a smaller share.",
                    "share_of_nominal",
                )
        while high - low > 1:
            middle = (low + high) // 2
            low, high = (middle, high) if too_few(middle) else (low, middle)
        found = high
    knows = estimated.baseline(found, size, estimator)
    at = estimated.percentile(knows, multiple, risk)
    return SufficientBaseline(found, found * size, share_of_nominal, risk, at, nominal)


def table(
    subgroups: Sequence[int] = TABLE_SUBGROUPS,
    sizes: Sequence[int] = TABLE_SIZES,
    *,
    sigma_estimator: SigmaEstimator | None = None,
    multiple: float = 3.0,
    risk: float = 0.1,
    confidence: float = 0.9,
) -> BaselineTable:
    """Baselines of every number of subgroups with every size (all of them 1, or none): at most 150 cells.

    Raises UnusableParameter: too many cells, or an argument out of its range.
    """
    if not 1 <= len(subgroups) * len(sizes) <= MOST_CELLS:
        raise UnusableParameter.of(
            "table-out-of-range",
            f"The table has 1 to {MOST_CELLS} cells; {len(subgroups) * len(sizes)} were asked.",
            "subgroups",
        )
    if not 0.001 <= risk <= 0.999:
        raise UnusableParameter.of(
            "out-of-range", f"risk must be from 0.001 to 0.999; it is {risk:g}.", "risk"
        )
    estimator = _estimator(sizes[0], sigma_estimator)
    nominal = _arl(0.0, multiple)
    cells = []
    for size in sizes:
        for number in subgroups:
            knows = estimated.baseline(number, size, estimator)
            at = estimated.percentile(knows, multiple, risk)
            cells.append(
                BaselineCell(
                    subgroups=number,
                    size=size,
                    percentile_arl=at,
                    share_of_nominal=at / nominal,
                    probability_below_half_nominal=estimated.probability_shorter(
                        knows, multiple, max(0.5 * nominal, 1.0 + 1e-12)
                    ),
                    guaranteed_multiple=estimated.guaranteed_multiple(knows, nominal, confidence),
                )
            )
    return BaselineTable(multiple, nominal, estimator, risk, confidence, tuple(cells))


def _estimator(size: int, given: SigmaEstimator | None) -> SigmaEstimator:
    if given is not None:
        return given
    return _FOR_INDIVIDUALS if size == 1 else _FOR_MEANS


def _arl(distance: float, multiple: float) -> float:
    if not multiple >= estimated.SMALLEST_MULTIPLE:
        raise UnusableParameter.of(
            "multiple-out-of-range",
            f"The multiple of the limits must be {estimated.SMALLEST_MULTIPLE:g} to {estimated.LARGEST_MULTIPLE:g}; "
            f"{multiple!r} is not usable.",
            "multiple",
        )
    return 1.0 / float(scipy.special.ndtr(distance - multiple) + scipy.special.ndtr(-distance - multiple))


def _conclusion(
    subgroups: int,
    size: int,
    multiple: float,
    conditional: ConditionalRunLength,
    guarantee: GuaranteedLimits,
    least: SufficientBaseline | None,
    share: float,
    risk: float,
) -> str:
    what = "values" if size == 1 else f"subgroups of {size}"
    text = (
        f"Limits at {multiple:g} sigma from {subgroups} {what} give fewer than half of the nominal "
        f"{conditional.nominal_arl:.4g} points between false alarms in "
        f"{100 * conditional.probability_below_half_nominal:.3g} % of baselines. "
    )
    if least is None:
        text += f"No baseline of practical size keeps {share:g} of the nominal with a risk of {risk:g}. "
    elif subgroups >= least.subgroups:
        text += f"That is enough to keep {share:g} of the nominal with a risk of at most {risk:g}. "
    else:
        text += f"To keep {share:g} of the nominal with a risk of at most {risk:g}, {least.subgroups} are needed. "
    return text + (
        f"Limits at {guarantee.multiple:.4g} sigma guarantee {guarantee.in_control_arl:.4g} points in "
        f"{100 * guarantee.confidence:.4g} % of baselines."
    )
