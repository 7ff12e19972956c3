"""The run length of a statistic of whole numbers, at a cost that does not grow with the numbers.

Rules on zones tell whole numbers apart only where a line lies between them: all between two lines are
gathered into one. Rules on order compare each number with the one before; where the limits hold more
than ``MOST_ORDERED`` of them the statistic is taken as continuous, its zones exact and its ties neglected,
which makes run lengths about 5 % too short at that many, and less so beyond.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from ..data import Floats
from ..rules import TOLERANCE, Rule, watched
from ..runlength.of_rules import continuous_law, discrete_law, steady_discrete_law
from ..runlength.survival import Decay, geometric

MOST_ORDERED = 200
LARGEST_WHOLE = 1e12
"""Beyond it a double does not tell a number from its neighbours safely; the statistic is continuous then."""


@dataclass(frozen=True, slots=True)
class WholeLaw:
    """A distribution on whole numbers from ``least`` to ``most`` (infinite where there is no end).

    below, above: P(X ≤ x) and P(X > x) of an array of whole numbers; middle: a value about which the
    nearer tail changes over.
    """

    below: Callable[[Floats], Floats]
    above: Callable[[Floats], Floats]
    middle: float
    least: float = 0.0
    most: float = math.inf


def run_law(
    rules: Sequence[Rule], law: WholeLaw, *, centre: float, sigma: float, lower: float, upper: float
) -> Decay:
    """The law of the run length, under ``law``, of a chart with these lines.

    Exact unless its method says otherwise. Raises UnusableParameter as ``runlength.discrete``.
    Source: [champ-woodall-1987].
    """
    found = _run_law(rules, law, None, centre, sigma, lower, upper)
    assert found is not None
    return found


def steady_run_law(
    rules: Sequence[Rule],
    law: WholeLaw,
    calm: WholeLaw,
    *,
    centre: float,
    sigma: float,
    lower: float,
    upper: float,
) -> Decay | None:
    """The same from where long operation under ``calm`` without a signal has led.

    ``calm`` is of the same range. None where that does not settle, and where the numbers are so large that
    they are taken as continuous and rules look back.
    """
    return _run_law(rules, law, calm, centre, sigma, lower, upper)


def _run_law(
    rules: Sequence[Rule],
    law: WholeLaw,
    calm: WholeLaw | None,
    centre: float,
    sigma: float,
    lower: float,
    upper: float,
) -> Decay | None:
    if max(centre, law.middle) > LARGEST_WHOLE:
        if calm is not None:
            return None
        return _as_continuous(rules, law, centre, sigma, lower, upper, "taken as continuous", "relative 0.03")
    acting = tuple(rule for rule in watched(rules) if rule.severity == "action")
    if len(acting) == 1:
        return geometric(_outside(law, lower - TOLERANCE * sigma, upper + TOLERANCE * sigma))
    if any(rule.distance is None for rule in acting):
        least, most = max(lower, law.least), min(upper, law.most)
        if most - least > MOST_ORDERED:
            if calm is not None:
                return None
            return _as_continuous(rules, law, centre, sigma, lower, upper, "ties neglected", "relative 0.06")
        # Every number within the limits, and one beyond each for all that lie there.
        edges = np.arange(math.floor(least) - 1.0, math.ceil(most) + 2.0)
    else:
        far = [(rule.distance + TOLERANCE) * sigma for rule in acting[1:] if rule.distance is not None]
        lines = [lower - TOLERANCE * sigma, upper + TOLERANCE * sigma]
        lines += [centre + side * each for each in far for side in (-1.0, 1.0)]
        at = np.floor([line for line in lines if math.isfinite(line)])
        # A line may fall on a number, and rounding may move it: such numbers stand alone.
        edges = np.concatenate((at - 1.0, at, at + 1.0))
    support, probability = _gathered(law, edges)
    if calm is None:
        return discrete_law(
            rules,
            support=support,
            probability=probability,
            centre=centre,
            sigma=sigma,
            lower=lower,
            upper=upper,
        )
    return steady_discrete_law(
        rules,
        support=support,
        calm=_gathered(calm, edges)[1],
        probability=probability,
        centre=centre,
        sigma=sigma,
        lower=lower,
        upper=upper,
    )


def _outside(law: WholeLaw, lower: float, upper: float) -> float:
    """P(X < lower) + P(X > upper)."""
    outside = 0.0
    if lower > law.least:
        outside += float(law.below(np.array([math.ceil(lower) - 1.0]))[0])
    if upper < law.most:
        outside += float(law.above(np.array([math.floor(upper) + 0.0]))[0])
    return outside


def _gathered(law: WholeLaw, edges: Floats) -> tuple[Floats, Floats]:
    """The last number of each stretch that ends at an edge, and the probability of the stretch."""
    inner = np.unique(edges[(edges >= law.least) & (edges < law.most)])
    if not len(inner):
        return np.array([law.least]), np.ones(1)
    below = np.concatenate(([0.0], law.below(inner), [1.0]))
    above = np.concatenate(([1.0], law.above(inner), [0.0]))
    probability = np.where(
        np.append(inner, inner[-1] + 1.0) <= law.middle, below[1:] - below[:-1], above[:-1] - above[1:]
    )
    support = np.append(inner, min(inner[-1] + 1.0, law.most))
    return support, np.maximum(probability, 0.0)


def _as_continuous(
    rules: Sequence[Rule],
    law: WholeLaw,
    centre: float,
    sigma: float,
    lower: float,
    upper: float,
    taken: str,
    accuracy: str,
) -> Decay:
    def between(cuts: Floats) -> Floats:
        at = centre + cuts * sigma
        at[0], at[-1] = lower, upper
        slack = TOLERANCE * sigma
        # A number on a line is not beyond it.
        edges = np.where(at > centre, np.floor(at + slack), np.ceil(at - slack) - 1.0)
        known = np.clip(edges, law.least, law.most)
        below = np.where(edges < law.least, 0.0, law.below(known))
        above = np.where(edges < law.least, 1.0, law.above(known))
        below = np.concatenate(([0.0], np.where(edges >= law.most, 1.0, below), [1.0]))
        above = np.concatenate(([1.0], np.where(edges >= law.most, 0.0, above), [0.0]))
        nearer = np.append(edges, math.inf) <= law.middle
        return np.maximum(np.where(nearer, below[1:] - below[:-1], above[:-1] - above[1:]), 0.0)

    reach = [(line - centre) / sigma for line in (lower, upper)]
    found = continuous_law(rules, between=between, lower=reach[0], upper=reach[1])
    return replace(found, method=f"{found.method}; {taken}", accuracy=accuracy)
