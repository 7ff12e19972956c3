"""What the requests of all charts share."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

from ....spc.baseline.estimation import Guarantee
from ....spc.baseline.screening import LARGEST_SHARE, MOST_ROUNDS, Screening
from ....spc.charts.common import Exclusion, LimitBasis
from ....spc.errors import UnusableParameter
from ... import fields as f
from ..common import Characteristic, ExclusionRequest, RulesRequest

USUAL_FALSE_ALARM = 0.0027
"""About what limits at three sigma give a normal statistic."""


@dataclass(frozen=True, slots=True)
class ChartRequest:
    """The shapes of a chart's requests, and how what they load becomes objects of ``spc``."""

    fit: type[f.RequestShape]
    data: type[f.RequestShape]
    read: Callable[[dict[str, Any]], Any]
    options: Callable[[dict[str, Any]], Any]


class AnyFitRequest(f.RequestShape):
    """What every fit takes."""

    characteristic = f.Object(Characteristic, metadata={"description": "What was measured."})
    excluded = f.ObjectList(
        ExclusionRequest,
        data_key="exclude",
        metadata={"description": "Baseline points with a known assignable cause."},
    )


class BaselineRequest(AnyFitRequest):
    """What every fit of a chart with run rules takes."""

    rules = f.Object(RulesRequest, metadata={"description": "Run rules; without them the limits alone."})


class FitRequest(BaselineRequest):
    """The same, with a choice of how the limits are placed."""

    limit_basis = f.Choice(
        "sigma",
        "probability",
        load_default="sigma",
        metadata={
            "description": "`sigma`: limits a multiple of the standard deviation out. `probability`: equal tails "
            "of the exact distribution."
        },
    )
    sigma_multiple = f.StrictNumber(
        above=0, most=10, metadata={"description": "How many sigma out the limits lie; 3 unless given."}
    )
    false_alarm_probability = f.StrictNumber(
        least=1e-12,
        most=0.5,
        metadata={
            "description": "Under `probability`: that a point in control lies outside, half beyond each limit; "
            f"{USUAL_FALSE_ALARM} unless given."
        },
    )


class GuaranteeRequest(f.RequestShape):
    """What limits are to hold in spite of being estimated."""

    in_control_arl = f.StrictNumber(
        required=True,
        least=2,
        most=1e8,
        metadata={
            "description": "Average number of points between false alarms beyond the limits, at least."
        },
    )
    confidence = f.StrictNumber(
        least=0.5,
        most=0.999,
        load_default=0.9,
        metadata={"description": "With this confidence over baselines; 0.9 unless given."},
    )


class ScreeningRequest(f.RequestShape):
    """Automatic screening of the baseline. It finds no causes, and stays in the record."""

    max_rounds = f.StrictInteger(
        required=True,
        least=1,
        most=MOST_ROUNDS,
        metadata={"description": "Rounds, in each of which the points beyond the limits are left out."},
    )
    reason = f.StrictString(
        min_length=1,
        max_length=120,
        metadata={"description": "Why that may be done; it stays with each point left out."},
    )
    largest_share = f.StrictNumber(
        above=0,
        most=LARGEST_SHARE,
        load_default=0.2,
        metadata={
            "description": "Of the points; a round that would go beyond it is not done. 0.2 unless given."
        },
    )


class StudyRequest(FitRequest):
    """The same, with what a baseline study may ask for."""

    guarantee = f.Object(
        GuaranteeRequest,
        metadata={
            "description": "Sets `sigma_multiple` so that limits of such a baseline hold this in-control average "
            "run length with this confidence; the answer's limits name the multiple. For the mean panel (or "
            "the single values) and its limits alone."
        },
    )
    joint_false_alarm_probability = f.StrictNumber(
        least=1e-6,
        most=0.5,
        metadata={
            "description": "Judges (and screens) the baseline by wider limits, so that any of its points in control "
            "lies beyond them with this probability, on either panel; run rules do not judge it then. The "
            "frozen limits stay as they are."
        },
    )
    screening = f.Object(
        ScreeningRequest,
        metadata={
            "description": "Leaves points beyond the baseline's limits out of the estimates, round by round."
        },
    )


def guarantee(loaded: dict[str, Any]) -> Guarantee | None:
    """The guarantee asked for. Raises UnusableParameter beside a choice of limits of the caller's own."""
    if "guarantee" not in loaded:
        return None
    if loaded["limit_basis"] != "sigma" or "sigma_multiple" in loaded:
        raise UnusableParameter.of(
            "not-with-guarantee",
            "The guarantee sets the multiple of the limits; leave sigma_multiple and limit_basis out.",
            "limit_basis" if loaded["limit_basis"] != "sigma" else "sigma_multiple",
        )
    return Guarantee(**loaded["guarantee"])


def screening(loaded: dict[str, Any]) -> Screening | None:
    """The screening asked for."""
    return Screening(**loaded["screening"]) if "screening" in loaded else None


def limit_basis(loaded: dict[str, Any]) -> LimitBasis:
    """How far out the limits are to lie. Raises UnusableParameter for a figure of the other basis."""
    multiple, probability = loaded.get("sigma_multiple"), loaded.get("false_alarm_probability")
    basis: Literal["sigma", "probability"] = loaded["limit_basis"]
    other = "false_alarm_probability" if basis == "sigma" else "sigma_multiple"
    if loaded.get(other) is not None:
        raise UnusableParameter.of(
            "not-of-this-basis",
            f"`{other}` has no meaning where limit_basis is `{basis}`; leave one of them out.",
            other,
        )
    if basis == "sigma":
        return LimitBasis("sigma", 3.0 if multiple is None else multiple, None)
    return LimitBasis("probability", None, USUAL_FALSE_ALARM if probability is None else probability)


def exclusions(loaded: dict[str, Any]) -> tuple[Exclusion, ...]:
    return tuple(Exclusion(**one) for one in loaded.get("excluded", ()))


class StandardsRequest(f.RequestShape):
    """Values known in advance; each replaces its estimate."""

    mean = f.StrictNumber(metadata={"description": "Process mean, in the unit of the characteristic."})
    sigma = f.StrictNumber(
        least=1e-300, metadata={"description": "Standard deviation of single values, in the same unit."}
    )
