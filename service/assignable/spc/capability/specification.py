"""The specification: what the drawing or the monograph asks of a characteristic."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from ..errors import Fault, UnusableParameter


@dataclass(frozen=True, slots=True)
class Specification:
    """Limits and target of one characteristic, in the characteristic's own unit.

    lower, upper: a value equal to a limit conforms; ``None`` for the side that has no limit, one at the
    least being given. target: the value aimed at, or ``None``; it lies strictly between the limits given.
    natural_lower, natural_upper: bounds that no value can be beyond, such as 0 for a length; a limit there
    asks for nothing. Raises UnusableParameter, with all faults at once: ``not-finite``, ``no-limit``,
    ``limits-crossed``, ``target-outside``, ``bounds-crossed``, ``limit-beyond-bound``.
    """

    lower: float | None = None
    upper: float | None = None
    target: float | None = None
    natural_lower: float | None = None
    natural_upper: float | None = None

    def __post_init__(self) -> None:
        faults = [
            Fault("not-finite", f"The {name} must be a finite number.", ("specification", field))
            for name, field, value in (
                ("lower limit", "lower", self.lower),
                ("upper limit", "upper", self.upper),
                ("target", "target", self.target),
                ("natural lower bound", "natural_lower", self.natural_lower),
                ("natural upper bound", "natural_upper", self.natural_upper),
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
            detail = f"The lower limit, {lower:.15g}, must be below the upper limit, {upper:.15g}."
            return [Fault("limits-crossed", detail, ("specification", "lower"))]
        if faults := self._bound_faults():
            return faults
        if target is None:
            return []
        if lower is not None and target <= lower:
            detail = f"The target, {target:.15g}, must be above the lower limit, {lower:.15g}."
            return [Fault("target-outside", detail, ("specification", "target"))]
        if upper is not None and target >= upper:
            detail = f"The target, {target:.15g}, must be below the upper limit, {upper:.15g}."
            return [Fault("target-outside", detail, ("specification", "target"))]
        return []

    def _bound_faults(self) -> list[Fault]:
        least, most = self.natural_lower, self.natural_upper
        if least is None and most is None:
            return []
        if least is not None and most is not None and not least < most:
            detail = (
                f"The natural lower bound, {least:.15g}, must be below the natural upper bound, {most:.15g}."
            )
            return [Fault("bounds-crossed", detail, ("specification", "natural_lower"))]
        faults = []
        for name, limit in (("lower", self.lower), ("upper", self.upper)):
            if limit is None:
                continue
            if least is not None and (limit < least or (name == "upper" and limit == least)):
                detail = f"The {name} limit, {limit:.15g}, is beyond the natural lower bound, {least:.15g}."
                faults.append(Fault("limit-beyond-bound", detail, ("specification", name)))
            elif most is not None and (limit > most or (name == "lower" and limit == most)):
                detail = f"The {name} limit, {limit:.15g}, is beyond the natural upper bound, {most:.15g}."
                faults.append(Fault("limit-beyond-bound", detail, ("specification", name)))
        if not faults and self.effective_limits == (None, None):
            detail = (
                "The only limit is a natural bound, which every value meets; give a limit on the other side."
            )
            faults.append(Fault("no-limit", detail, ("specification",)))
        return faults

    @property
    def effective_limits(self) -> tuple[float | None, float | None]:
        """Lower and upper limit, without one that is a natural bound."""
        return (
            None if self.lower == self.natural_lower else self.lower,
            None if self.upper == self.natural_upper else self.upper,
        )

    @property
    def effective(self) -> Specification:
        """The same without a limit that is a natural bound, which no value can fail [iso-22514-2]."""
        lower, upper = self.effective_limits
        if (lower, upper) == (self.lower, self.upper):
            return self
        return replace(self, lower=lower, upper=upper)

    @property
    def two_sided(self) -> bool:
        """Whether both limits are given."""
        return self.lower is not None and self.upper is not None
