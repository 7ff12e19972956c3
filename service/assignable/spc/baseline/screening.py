"""Automatic screening of a baseline: points beyond its limits are left out round by round, within bounds.

No statistic can tell an assignable cause: screening only keeps what is far out from spoiling the estimates
until the causes are found. So it is never done unasked, it is bounded, and it stays in the record.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Annotated, Literal

import numpy as np

from ..cautions import COMMON_PRACTICE, Caution
from ..charts.common import Exclusion
from ..data import Booleans

MOST_ROUNDS = 10
LARGEST_SHARE = 0.5
MOST_POINTS = 1000


@dataclass(frozen=True, slots=True)
class Screening:
    """How far screening may go."""

    max_rounds: int
    reason: str | None = None
    largest_share: float = 0.2


@dataclass(frozen=True, slots=True)
class ScreeningRound:
    """One round of it."""

    round: Annotated[int, "From 1."]
    left_out: Annotated[int, "Points beyond the limits of this round, left out in it."]


@dataclass(frozen=True, slots=True)
class Screened:
    """What automatic screening did."""

    rounds: Annotated[tuple[ScreeningRound, ...], "The rounds in which points were left out."]
    left_out: Annotated[int, "Points left out in all."]
    still_beyond: Annotated[int, "Points beyond the limits at the end that were kept, for the bounds' sake."]
    stopped_because: Annotated[
        Literal["none-beyond", "rounds", "share"],
        "`none-beyond`: no point was beyond the limits any more. `rounds`: as many as were allowed. `share`: "
        "the next round would have left out more points than allowed.",
    ]


def screen(
    kept: Booleans, beyond: Callable[[Booleans], Booleans], plan: Screening
) -> tuple[Booleans, tuple[Exclusion, ...], Screened]:
    """Leaves points out of the estimates, each with its round as its reason.

    kept: (m,) points there are and not excluded for a stated reason. beyond: those of them, (m,), that lie
    beyond the limits which the points kept give. At most ``largest_share`` of them is left out, and at
    most 1000 points. Returns what is kept at the end, the exclusions, and what was done.
    """
    most = min(int(plan.largest_share * int(np.count_nonzero(kept))), MOST_POINTS)
    why = "" if plan.reason is None else f": {plan.reason}"
    exclusions: list[Exclusion] = []
    rounds: list[ScreeningRound] = []
    left = 0
    while True:
        out = (beyond(kept) & kept).nonzero()[0]
        if not len(out):
            stopped: Literal["none-beyond", "rounds", "share"] = "none-beyond"
            break
        if len(rounds) == plan.max_rounds:
            stopped = "rounds"
            break
        if left + len(out) > most:
            stopped = "share"
            break
        left += len(out)
        kept = kept.copy()
        kept[out] = False
        rounds.append(ScreeningRound(len(rounds) + 1, len(out)))
        exclusions += [
            Exclusion(at, f"screened automatically in round {len(rounds)}{why}") for at in out.tolist()
        ]
    return kept, tuple(exclusions), Screened(tuple(rounds), left, len(out), stopped)


def caution(found: Screened | None) -> Caution | None:
    """Points left out without a cause, or a bound that was met."""
    if found is None or not (found.left_out or found.still_beyond):
        return None
    done = (
        f"{found.left_out} point{'s were' if found.left_out != 1 else ' was'} left out automatically in "
        f"{len(found.rounds)} round{'s'[: len(found.rounds) != 1]}."
        if found.left_out
        else "No point was left out automatically."
    )
    if found.stopped_because == "share":
        done += f" The next {found.still_beyond} would have been more than allowed, so they were kept."
    elif found.stopped_because == "rounds":
        done += (
            f" {found.still_beyond} more lie beyond the limits that resulted, after the last round allowed."
        )
    return Caution(
        "screened-automatically",
        f"{done} Screening finds no causes: find and remove the cause of each such point, or take it back in; "
        "until then the limits may be too narrow for the process as it is.",
        ("screening",),
        COMMON_PRACTICE,
    )
