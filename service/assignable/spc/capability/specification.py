"""The specification: what the drawing or the monograph asks of a characteristic."""

from __future__ import annotations

import math
from dataclasses import dataclass

from ..errors import Fault, UnusableParameter


@dataclass(frozen=True, slots=True)
class Specification:
    """Limits and target of one characteristic, in the characteristic's own unit.

    lower, upper: a value equal to a limit conforms; ``None`` for the side that has no limit, one at the
    least being given. target: the value aimed at, or ``None``; it lies strictly between the limits given.
    Raises UnusableParameter, with all faults at once: ``not-finite``, ``no-limit``, ``limits-crossed``,
    ``target-outside``.
    """

    lower: float | None = None
    upper: float | None = None
    target: float | None = None

    def __post_init__(self) -> None:
        faults = [
            Fault("not-finite", f"The {name} must be a finite number.", ("specification", field))
            for name, field, value in (
                ("lower limit", "lower", self.lower),
                ("upper limit", "upper", self.upper),
                ("target", "target", self.target),
            )
            if value is not None and not math.isfinite(value)
        ]
        if not faults:
            faults = self._faults()
        if faults:
            raise UnusableParameter(*faults)

    def _faults(self) -> list[Fault]:
        lower, upper, target = self.lower, self.upper, self.target
        if lower is None and upper is None:
            detail = "The specification needs a lower limit, an upper limit, or both."
            return [Fault("no-limit", detail, ("specification",))]
        if lower is not None and upper is not None and not lower < upper:
            detail = f"The lower limit, {lower:g}, must be below the upper limit, {upper:g}."
            return [Fault("limits-crossed", detail, ("specification", "lower"))]
        if target is None:
            return []
        if lower is not None and target <= lower:
            detail = f"The target, {target:g}, must be above the lower limit, {lower:g}."
            return [Fault("target-outside", detail, ("specification", "target"))]
        if upper is not None and target >= upper:
            detail = f"The target, {target:g}, must be below the upper limit, {upper:g}."
            return [Fault("target-outside", detail, ("specification", "target"))]
        return []

    @property
    def two_sided(self) -> bool:
        """Whether both limits are given."""
        return self.lower is not None and self.upper is not None
