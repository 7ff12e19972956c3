"""What limits from an estimated centre and sigma really deliver, and the multiple that guarantees it.

Once set, limits have the in-control average run length that their baseline happens to give; over the
baselines that might have been drawn it has a distribution ([jensen-2006]; see ``runlength.estimated``).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated

from ..errors import Fault, UnusableParameter
from ..runlength import estimated

# As good as known: the largest that the numerics take.
_KNOWN_CENTRE, _KNOWN_SIGMA = 1e9, 1e12
_TENTH = 0.1
LARGEST_MULTIPLE = 100.0
"""Limits farther out watch nothing."""


@dataclass(frozen=True, slots=True)
class Guarantee:
    """An in-control average run length that limits are to have, with this confidence over baselines."""

    in_control_arl: Annotated[float, "Average number of points between false alarms, at least."]
    confidence: Annotated[float, "Share of baselines whose limits hold it."]


@dataclass(frozen=True, slots=True)
class EstimatedPerformance:
    """What such a baseline delivers: the in-control average run length of the limits alone, over baselines."""

    arl_mean: Annotated[float | None, "Mean; null where it is infinite, as it is for small baselines."]
    arl_sd: Annotated[
        float | None, "Standard deviation; null where it is infinite, as it is for small baselines."
    ]
    arl_tenth_percentile: Annotated[
        float, "One baseline in ten gives limits with a shorter average run length than this."
    ]
    arl_known: Annotated[float, "The average run length if centre and sigma were known exactly."]
    probability_below_known: Annotated[float, "Share of baselines whose limits give a shorter one."]
    guarantee: Annotated[
        Guarantee | None, "What the multiple was chosen to guarantee; null where it was not asked."
    ]


def performance(
    points: int, freedom: float | None, multiple: float, *, centre_known: bool, guarantee: Guarantee | None
) -> EstimatedPerformance | None:
    """Of limits ``multiple`` sigma out, from ``points`` and a sigma of ``freedom``; ``None`` where it is known.

    Points and degrees of freedom enter with three digits, for which it is kept once computed. ``None`` as
    well where nothing was estimated, or for a multiple outside 0.5 to 6.
    """
    if (centre_known and freedom is None) or not (
        estimated.SMALLEST_MULTIPLE <= multiple <= estimated.LARGEST_MULTIPLE
    ):
        return None
    return _performance(
        _KNOWN_CENTRE if centre_known else _three_digits(points),
        _KNOWN_SIGMA if freedom is None else max(_three_digits(freedom), 0.1),
        multiple,
        guarantee,
    )


@lru_cache(4096)
def _three_digits(value: float) -> float:
    return float(f"{value:.3g}")


@lru_cache(4096)
def _performance(
    means: float, freedom: float, multiple: float, guarantee: Guarantee | None
) -> EstimatedPerformance:
    found = estimated.conditional(estimated.known(means, freedom), multiple, (_TENTH,))
    return EstimatedPerformance(
        found.mean_arl,
        found.sd_arl,
        found.percentiles[0].arl,
        found.nominal_arl,
        found.probability_below_nominal,
        guarantee,
    )


def multiple_of(guarantee: Guarantee, points: int, freedom: float | None, *, centre_known: bool) -> float:
    """The multiple at which the average run length is as guaranteed, ``points`` and ``freedom`` as above.

    Raises UnusableParameter where nothing was estimated, or no multiple up to 100 does.
    """
    if centre_known and freedom is None:
        raise UnusableParameter.of(
            "nothing-estimated",
            "With the mean and sigma both given there is nothing to guard against; leave the guarantee out.",
            "guarantee",
        )
    known_by = estimated.known(
        _KNOWN_CENTRE if centre_known else float(points),
        _KNOWN_SIGMA if freedom is None else max(freedom, 0.1),
    )
    try:
        found = estimated.guaranteed_multiple(known_by, guarantee.in_control_arl, guarantee.confidence)
    except UnusableParameter as error:
        raise UnusableParameter(
            *(Fault(fault.code, fault.detail, ("guarantee", *fault.where)) for fault in error.faults)
        ) from None
    if found > LARGEST_MULTIPLE:
        raise UnusableParameter.of(
            "no-such-multiple",
            f"The baseline is too small: the guarantee would need limits {found:.3g} sigma out. Give more data, or "
            "ask for less.",
            "guarantee",
        )
    return found
