"""The run length of a chart with known parameters under any set of rules.

Points are independent; the run length counts them up to the first signal whose rule calls for
action (a warning does not stop the process), from a fresh start with windows still partial.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from functools import lru_cache

import numpy as np
import scipy

from ..data import Booleans, Floats
from ..errors import UnusableParameter
from ..rules import LIMIT, TOLERANCE, Rule, longest_window, watched
from .automaton import Watch, compile_watches, watches
from .integral import Order, lattice_law, order_law
from .markov import chain_law
from .survival import Decay, RunLength, geometric


def _acting(rules: Sequence[Rule]) -> tuple[Rule, ...]:
    return tuple(rule for rule in watched(rules) if rule.severity == "action")


def shewhart(
    rules: Sequence[Rule] = (LIMIT,),
    *,
    lower: float = -3.0,
    upper: float = 3.0,
    shift: float = 0.0,
    scale: float = 1.0,
) -> RunLength:
    """The run length of a normal statistic.

    lower, upper: the control limits, from the centre line in sigma of the statistic, infinite where
    there is none; shift: of the mean, in the same unit; scale: the standard deviation over sigma.
    Exact for rules on zones; rules on order by a spectral method, see ``accuracy``.
    Raises ``UnusableParameter``: ``never-signals``, ``too-many-states``, or an argument out of range.
    [brook-evans-1972], [champ-woodall-1987]
    """
    return _shewhart(tuple(rules), float(lower), float(upper), float(shift), float(scale))


@lru_cache(maxsize=1024)
def _shewhart(rules: tuple[Rule, ...], lower: float, upper: float, shift: float, scale: float) -> RunLength:
    return _normal_law(rules, lower, upper, shift, scale).run_length()


def signal_probability(
    points: Floats,
    rules: Sequence[Rule] = (LIMIT,),
    *,
    lower: float = -3.0,
    upper: float = 3.0,
    shift: float = 0.0,
    scale: float = 1.0,
) -> Floats:
    """P(run length <= t) for an array of t; the other arguments are those of ``shewhart``."""
    law = _normal_law(tuple(rules), float(lower), float(upper), float(shift), float(scale))
    return law.probability(np.asarray(points, dtype=np.float64))


def _check(lower: float, upper: float, shift: float, scale: float) -> None:
    if math.isnan(lower) or math.isnan(upper) or lower >= upper:
        raise UnusableParameter.of(
            "limits-out-of-order", "The lower limit must lie below the upper limit.", "lower"
        )
    if not abs(shift) <= 1e6:
        raise UnusableParameter.of("shift-out-of-range", "A shift is -1e6 to 1e6 sigma.", "shift")
    if not 1e-6 <= scale <= 1e6:
        raise UnusableParameter.of(
            "scale-out-of-range", "The ratio of the standard deviations is 1e-6 to 1e6.", "scale"
        )


def _between(a: Floats, b: Floats) -> Floats:
    """Normal probability of (a, b), from the tail in which it loses no digits."""
    flip = a > 0
    low, high = np.where(flip, -b, a), np.where(flip, -a, b)
    between: Floats = scipy.special.ndtr(high) - scipy.special.ndtr(low)
    return between


def _once(rules: Sequence[Rule], z: Floats) -> Booleans:
    """Which values signal by a rule that needs one point only."""
    alone = np.zeros(len(z), dtype=bool)
    for watch in watches(rules, z):
        if watch.k == 1:
            alone |= np.array(watch.marked)
    return alone


@lru_cache(maxsize=1024)
def _normal_law(rules: tuple[Rule, ...], lower: float, upper: float, shift: float, scale: float) -> Decay:
    _check(lower, upper, shift, scale)
    acting = _acting(rules)
    cuts, z = _regions(acting, lower, upper)
    at = (cuts - shift) / scale
    outside = scipy.special.ndtr(np.array([at[0], -at[-1]]))
    return _region_law(acting, z, _between(at[:-1], at[1:]), float(outside.sum()))


def _regions(acting: tuple[Rule, ...], lower: float, upper: float) -> tuple[Floats, Floats]:
    """The lines that cut a statistic into regions, rising, the limits first and last; a value inside each."""
    lines = {sign * rule.distance for rule in acting[1:] if rule.distance is not None for sign in (-1.0, 1.0)}
    inner = sorted(line for line in lines if lower < line < upper)
    cuts = np.array([lower, *inner, upper])
    # Where a region has no end, any value beyond its one line.
    ends = np.clip(cuts, cuts[1] - 2.0, cuts[-2] + 2.0) if inner else np.clip(cuts, -1e9, 1e9)
    return cuts, (ends[1:] + ends[:-1]) / 2.0


def _region_law(acting: tuple[Rule, ...], z: Floats, probability: Floats, outside: float) -> Decay:
    """The law for a continuous statistic with ``probability`` in each region, and ``outside`` the limits."""
    if len(acting) == 1:
        return geometric(outside)
    alone = _once(acting, z)
    beyond = float(outside + probability[alone].sum())
    probability, z = probability[~alone], z[~alone]
    seen = tuple(watch for watch in watches(acting, z) if watch.k > 1) if len(z) else ()
    order = Order.of(acting)
    memory = longest_window(acting)
    if not seen and order is None:
        return geometric(beyond)
    automaton = compile_watches(seen, len(z))
    if order is None:
        return chain_law(automaton, probability, beyond, memory=memory)
    return order_law(automaton, order, probability, beyond, memory=memory)


def continuous_law(
    rules: Sequence[Rule] = (LIMIT,),
    *,
    between: Callable[[Floats], Floats],
    lower: float = -3.0,
    upper: float = 3.0,
) -> Decay:
    """The law of the run length of a continuous statistic of any distribution.

    between: (c + 1,) probabilities below the first of c rising lines, between each two, and above the
    last one, the lines (c,) in the unit in which the rules state their distance (``z`` of a ``Track``);
    lower, upper: the control limits in that unit, infinite where there is none.
    Raises ``UnusableParameter`` as ``shewhart``. [champ-woodall-1987]
    """
    _check(lower, upper, 0.0, 1.0)
    acting = _acting(rules)
    cuts, z = _regions(acting, lower, upper)
    probability = between(cuts)
    return _region_law(acting, z, probability[1:-1], float(probability[0] + probability[-1]))


def discrete(
    rules: Sequence[Rule] = (LIMIT,),
    *,
    support: Floats,
    probability: Floats,
    centre: float,
    sigma: float,
    lower: float = -math.inf,
    upper: float = math.inf,
) -> RunLength:
    """The run length of a statistic on a lattice (a count, or a proportion), exactly.

    support: (s,) the values it takes, rising; probability: (s,) of each, summing to 1; centre,
    sigma, lower, upper: of the chart, in the units of the support. Ties end a trend and an
    alternation, and a value on a line is not beyond it, as in ``rules.detect``.
    Raises ``UnusableParameter``: as ``shewhart``, and ``not-a-distribution``.
    """
    return discrete_law(
        rules, support=support, probability=probability, centre=centre, sigma=sigma, lower=lower, upper=upper
    ).run_length()


def discrete_law(
    rules: Sequence[Rule],
    *,
    support: Floats,
    probability: Floats,
    centre: float,
    sigma: float,
    lower: float = -math.inf,
    upper: float = math.inf,
) -> Decay:
    """The law behind ``discrete``, for probabilities of a signal within t points."""
    x = np.asarray(support, dtype=np.float64)
    p = np.asarray(probability, dtype=np.float64)
    if (
        x.shape != p.shape
        or x.ndim != 1
        or not len(x)
        or not bool((np.diff(x) > 0).all())
        or not bool((p >= 0).all())
        or not abs(float(p.sum()) - 1.0) < 1e-9
    ):
        raise UnusableParameter.of(
            "not-a-distribution", "The probabilities of rising values must be given, and sum to 1.", "support"
        )
    if not 0.0 < sigma < math.inf:
        raise UnusableParameter.of("sigma-out-of-range", "Sigma must be positive.", "sigma")
    acting = _acting(rules)
    z = (x - centre) / sigma
    slack = TOLERANCE * sigma
    alone = (x > upper + slack) | (x < lower - slack)
    alone |= _once(acting[1:], z)
    beyond = float(p[alone].sum())
    x, z, p = x[~alone], z[~alone], p[~alone]
    seen = tuple(watch for watch in watches(acting, z) if watch.k > 1) if len(z) else ()
    order = Order.of(acting)
    if not len(z) or (not seen and order is None):
        return geometric(beyond)
    marks = np.array([watch.marked for watch in seen], dtype=bool).reshape(len(seen), len(z))
    # Neighbours that no rule tells apart are one letter.
    opens = np.concatenate(([True], (marks[:, 1:] != marks[:, :-1]).any(axis=0)))
    first = np.flatnonzero(opens)
    letter = np.cumsum(opens) - 1
    folded = tuple(Watch(watch.k, watch.m, tuple(np.array(watch.marked)[first].tolist())) for watch in seen)
    automaton = compile_watches(folded, len(first))
    memory = longest_window(acting)
    if order is None:
        return chain_law(
            automaton, np.bincount(letter, p, len(first)).astype(np.float64), beyond, memory=memory
        )
    ties = np.diff(x) <= slack
    if bool(ties.any()):
        raise UnusableParameter.of(
            "not-a-distribution",
            "The values lie too close together, against sigma, to be told apart.",
            "support",
        )
    return lattice_law(automaton, order, p, letter, beyond, memory=memory)
