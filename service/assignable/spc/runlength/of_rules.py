"""The run length of a chart with known parameters under any set of rules.

Points are independent; the run length counts them up to the first signal whose rule calls for
action (a warning does not stop the process), from a fresh start with windows still partial.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import scipy

from ..data import Booleans, Floats
from ..errors import UnusableParameter
from ..rules import LIMIT, TOLERANCE, Rule, longest_window, watched
from .automaton import Automaton, Watch, compile_watches, watches
from .integral import Order, lattice_law, order_law, steady_lattice_law, steady_order_law
from .markov import chain_law, steady_chain_law
from .quadrature import gauss_legendre
from .survival import Decay, RunLength, geometric

_FAR = 9.0
_CARRY_NODES = 40


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


def shewhart_law(
    rules: Sequence[Rule] = (LIMIT,),
    *,
    lower: float = -3.0,
    upper: float = 3.0,
    shift: float = 0.0,
    scale: float = 1.0,
) -> Decay:
    """The law behind ``shewhart``."""
    return _normal_law(tuple(rules), float(lower), float(upper), float(shift), float(scale))


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


@dataclass(frozen=True, slots=True, eq=False)
class _Model:
    """What a set of rules remembers: kept: (regions,) those in which a point does not signal at once."""

    kept: Booleans
    automaton: Automaton
    order: Order | None
    memory: int


def _model(acting: tuple[Rule, ...], z: Floats) -> _Model | None:
    """The model of rules for a continuous statistic with ``z`` in its regions; None where each point is alone."""
    if len(acting) == 1:
        return None
    kept = ~_once(acting, z)
    z = z[kept]
    seen = tuple(watch for watch in watches(acting, z) if watch.k > 1) if len(z) else ()
    order = Order.of(acting)
    if not seen and order is None:
        return None
    return _Model(kept, compile_watches(seen, len(z)), order, longest_window(acting))


def _region_law(acting: tuple[Rule, ...], z: Floats, probability: Floats, outside: float) -> Decay:
    """The law for a continuous statistic with ``probability`` in each region, and ``outside`` the limits."""
    model = _model(acting, z)
    if model is None:
        return geometric(float(outside + probability[_once(acting, z)].sum()))
    beyond = float(outside + probability[~model.kept].sum())
    probability = probability[model.kept]
    if model.order is None:
        return chain_law(model.automaton, probability, beyond, memory=model.memory)
    return order_law(model.automaton, model.order, probability, beyond, memory=model.memory)


def steady_state_arl(
    rules: Sequence[Rule] = (LIMIT,),
    *,
    lower: float = -3.0,
    upper: float = 3.0,
    shift: float = 0.0,
    scale: float = 1.0,
) -> float | None:
    """The mean number of points from a shift to the signal, after long operation in control without a signal.

    The arguments are those of ``shewhart``. The windows, and with rules on order the last point, are followed
    in control until their conditional law stands still to 1e-12, and from there after the shift: exact for
    rules on zones, to a relative 1e-8 with rules on order. None where that law does not settle within the
    steps allowed. Raises as ``shewhart``. [champ-woodall-1987]
    """
    return _steady(tuple(rules), float(lower), float(upper), float(shift), float(scale))


@lru_cache(maxsize=1024)
def _steady(rules: tuple[Rule, ...], lower: float, upper: float, shift: float, scale: float) -> float | None:
    _check(lower, upper, shift, scale)
    acting = _acting(rules)
    cuts, z = _regions(acting, lower, upper)
    model = _model(acting, z)
    if model is None:
        return _shewhart(rules, lower, upper, shift, scale).arl
    at = (cuts - shift) / scale
    probability = _between(at[:-1], at[1:])
    beyond = float(scipy.special.ndtr(np.array([at[0], -at[-1]])).sum() + probability[~model.kept].sum())
    calm, probability = _between(cuts[:-1], cuts[1:])[model.kept], probability[model.kept]
    if model.order is None:
        law = steady_chain_law(model.automaton, calm, probability, beyond, memory=model.memory)
    else:
        low, high = cuts[:-1][model.kept], cuts[1:][model.kept]

        def carry(terms: int) -> Floats:
            return np.array(
                [
                    _carried(a, b, shift, scale, terms)
                    for a, b in zip(low.tolist(), high.tolist(), strict=True)
                ]
            )

        law = steady_order_law(
            model.automaton, model.order, calm, probability, beyond, carry=carry, memory=model.memory
        )
    return None if law is None else law.run_length().arl


def _carried(low: float, high: float, shift: float, scale: float, terms: int) -> Floats:
    """(terms, terms): Legendre coefficients in the distribution function of a standard normal point within
    (low, high), to those in that of one with this shift and scale; by quadrature over the point itself.
    """
    low, high = max(low, -_FAR), min(high, _FAR)
    identity = np.eye(terms)
    if low >= high or (shift == 0.0 and scale == 1.0):
        return identity
    # Where the new density is narrow, its own width is what must be resolved.
    marks = [shift + step * scale for step in (-8.0, -4.0, -2.0, 0.0, 2.0, 4.0, 8.0)]
    edges = np.array([low, *(mark for mark in marks if low < mark < high), high])
    unit, weight = gauss_legendre(_CARRY_NODES)
    half = 0.5 * np.diff(edges)
    x = (0.5 * (edges[:-1] + edges[1:])[:, None] + half[:, None] * unit).ravel()
    mass = (half[:, None] * weight).ravel() * np.exp(-0.5 * x * x) / math.sqrt(2.0 * math.pi)

    def place(shift: float, scale: float) -> Floats:
        a, b = (low - shift) / scale, (high - shift) / scale
        whole = float(_between(np.array([a]), np.array([b]))[0])
        # Of a region that nothing can fall into any more, the place within does not matter.
        if whole < 1e-290:
            return np.full(len(x), 0.5)
        at = (x - shift) / scale
        return np.clip(_between(np.full(len(x), a), at) / whole, 0.0, 1.0)

    total = float(mass.sum())
    if total <= 0.0:
        return identity
    degree = np.arange(terms)
    old = np.polynomial.legendre.legvander(2.0 * place(0.0, 1.0) - 1.0, terms - 1)
    new = np.polynomial.legendre.legvander(2.0 * place(shift, scale) - 1.0, terms - 1)
    carried: Floats = (old * (mass / total)[:, None]).T @ new * (2.0 * degree + 1.0)
    return carried


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
    law = _discrete(rules, support, None, probability, centre, sigma, lower, upper)
    assert law is not None
    return law


def steady_discrete_law(
    rules: Sequence[Rule],
    *,
    support: Floats,
    calm: Floats,
    probability: Floats,
    centre: float,
    sigma: float,
    lower: float = -math.inf,
    upper: float = math.inf,
) -> Decay | None:
    """The same from where long operation with the probabilities ``calm`` (s,), without a signal, has led.

    None where that state does not settle within the steps allowed.
    """
    return _discrete(rules, support, calm, probability, centre, sigma, lower, upper)


def _discrete(
    rules: Sequence[Rule],
    support: Floats,
    calm: Floats | None,
    probability: Floats,
    centre: float,
    sigma: float,
    lower: float,
    upper: float,
) -> Decay | None:
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
    before = None if calm is None else calm[~alone]
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

    def by_letter(each: Floats) -> Floats:
        return np.bincount(letter, each, len(first)).astype(np.float64)

    if order is None:
        if before is None:
            return chain_law(automaton, by_letter(p), beyond, memory=memory)
        return steady_chain_law(automaton, by_letter(before), by_letter(p), beyond, memory=memory)
    ties = np.diff(x) <= slack
    if bool(ties.any()):
        raise UnusableParameter.of(
            "not-a-distribution",
            "The values lie too close together, against sigma, to be told apart.",
            "support",
        )
    if before is None:
        return lattice_law(automaton, order, p, letter, beyond, memory=memory)
    return steady_lattice_law(automaton, order, before, p, letter, beyond, memory=memory)
