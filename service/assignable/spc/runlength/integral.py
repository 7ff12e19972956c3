"""The run length of rules that look at the order of points too, without simulation.

A trend or an alternation compares each point with the one before it, so no finite chain holds its
state: the value of the last point belongs to it. Yet of that value only its place *within its
region* matters, since between regions the order is known. Read as the distribution function within
the region, u in (0, 1), the last point of a process that has not signalled has a density that does
not depend on the distribution of the points at all, only on the path of regions: entering a region
makes it uniform, and a rise or a fall within the region integrates it from below or from above. It
is expanded in Legendre polynomials, on which that integration is a matrix with two diagonals; the
coefficients fall faster than any geometric sequence. The chain over (zone state, region, order
state) with these coefficients is then followed like any other.

A statistic on a lattice keeps the probability of each of its values instead, and is exact.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
import scipy

from ..data import Floats, Integers
from ..rules import Rule
from .automaton import Automaton, explore, too_many_states
from .survival import Decay, follow, settle

METHOD = "Markov chain with the last value expanded in Legendre polynomials"
LATTICE_METHOD = "Markov chain with the last value"
TERMS = 8
"""Polynomials in each expansion, and as many more as a long trend needs: doubling them moves no
mean by more than 1e-11 of it."""

_LATTICE_COST = 30

MOST_PLACES = 100_000
_MOST_UNKNOWNS = 2_000_000
_MOST_EDGES = 1_000_000


@dataclass(frozen=True, slots=True)
class Order:
    """The shortest trend and alternation that call for action, in points; 0 where there is none."""

    trend: int
    alternation: int

    @classmethod
    def of(cls, rules: Sequence[Rule]) -> Order | None:
        """That of a list of rules, ``None`` without a rule on order."""
        trends = [rule.window for rule in rules if rule.form == "trend"]
        alternations = [rule.window for rule in rules if rule.form == "alternation"]
        if not trends and not alternations:
            return None
        return cls(min(trends, default=0), min(alternations, default=0))


@lru_cache(maxsize=64)
def _order_states(order: Order) -> tuple[Integers, Integers]:
    """The order state after a rise and after a fall, -1 for a signal; state 0 is no step yet, or a tie.

    A state is the way of the last step, how many steps in a row went that way, and how many
    reversals in a row ended with it; each kept only as far as a rule can still use it.
    """
    states: dict[tuple[int, int, int], int] = {(0, 0, 0): 0}
    queue = [(0, 0, 0)]
    table: dict[int, list[int]] = {1: [], -1: []}
    for way, run, turns in queue:
        for step in (1, -1):
            if way == step:
                after = (step, run + 1 if order.trend else 1, 0)
            else:
                after = (step, 1, turns + 1 if way and order.alternation else 0)
            if (order.trend and after[1] >= order.trend - 1) or (
                order.alternation and after[2] >= order.alternation - 2
            ):
                table[step].append(-1)
                continue
            if after not in states:
                states[after] = len(queue)
                queue.append(after)
            table[step].append(states[after])
    return np.array(table[1]), np.array(table[-1])


@dataclass(frozen=True, slots=True, eq=False)
class _Places:
    """Reachable (zone state, region, order state); the number of places stands for a signal.

    region: (n,) of each place; first: (regions,) the place after a first point in each region;
    away: (n, regions) the place after a point in another region, ``n + 1`` in a place's own;
    rise, fall, tie: (n,) the place after a point in the same region.
    """

    region: Integers
    first: Integers
    away: Integers
    rise: Integers
    fall: Integers
    tie: Integers


@lru_cache(maxsize=32)
def _places(automaton: Automaton, order: Order) -> _Places:
    n, regions = automaton.follow.shape
    up, down = _order_states(order)
    width = len(up)
    # A signal of the automaton, or on order, is the code -1.
    zone = np.where(automaton.follow == n, -1, automaton.follow)
    letters = np.arange(regions)

    def code(state: Integers, region: Integers, step: Integers) -> Integers:
        return np.where((state < 0) | (step < 0), -1, (state * regions + region) * width + step)

    def after(codes: Integers) -> Integers:
        rest, step = np.divmod(codes, width)
        state, region = np.divmod(rest, regions)
        ahead = zone[state]
        away = code(
            ahead,
            letters[None, :],
            np.where(letters[None, :] > region[:, None], up[step][:, None], down[step][:, None]),
        )
        own = (np.arange(len(codes)), region)
        away[own] = -2
        stay = ahead[own]
        return np.column_stack(
            (away, code(stay, region, up[step]), code(stay, region, down[step]), code(stay, region, 0 * step))
        )

    first = code(zone[0], letters, np.zeros(regions, dtype=np.int64))
    start = first[first >= 0]
    if not len(start):
        nowhere = np.empty(0, dtype=np.int64)
        return _Places(
            nowhere, np.zeros(regions, np.int64), nowhere.reshape(0, regions), nowhere, nowhere, nowhere
        )
    codes, table = explore(start, after, most=min(MOST_PLACES, _MOST_EDGES // regions))
    count = len(codes)
    table = np.where(table < 0, count - 1 - table, table)
    entered = np.full(regions, count, dtype=np.int64)
    entered[first >= 0] = np.arange(len(start))
    return _Places(
        (codes // width) % regions,
        entered,
        table[:, :regions],
        table[:, regions],
        table[:, regions + 1],
        table[:, regions + 2],
    )


def _adder(target: Integers, weight: Floats, n: int) -> scipy.sparse.csr_array:
    """(n, n): adds the row of each place, times its weight, to the row of its target."""
    kept = np.flatnonzero(target < n)
    return scipy.sparse.csr_array((weight[kept], (target[kept], kept)), shape=(n, n))


def _integrate(density: Floats) -> Floats:
    """The integral from 0 to u of each row of Legendre coefficients on (0, 1), cut to as many."""
    terms = density.shape[1]
    share = 0.5 / (2.0 * np.arange(terms) + 1.0)
    # A product with the two-diagonal matrix itself is many times slower at this shape.
    risen = np.empty_like(density)
    risen[:, 0] = 0.5 * density[:, 0]
    np.multiply(density[:, :-1], share[:-1], out=risen[:, 1:])
    risen[:, :-1] -= density[:, 1:] * share[1:]
    return risen


class _Walk:
    """The survivors, point by point: for each place the Legendre coefficients of the last point's density."""

    __slots__ = (
        "_beyond",
        "_falling",
        "_own",
        "_places",
        "_probability",
        "_rising",
        "_to",
        "_turn",
        "alive",
        "density",
        "started",
    )

    def __init__(self, places: _Places, probability: Floats, beyond: float, terms: int) -> None:
        n = len(places.region)
        own = probability[places.region]
        # A fall is what a rise leaves of the mass: the two differ in sign, and in the mass itself.
        self._turn = _adder(places.rise, own, n) - _adder(places.fall, own, n)
        self._to = np.concatenate((places.away.ravel(), places.fall))
        self._rising = np.flatnonzero(places.rise == n)
        self._falling = np.flatnonzero(places.fall == n)
        self._places, self._probability, self._own, self._beyond = places, probability, own, beyond
        self.density: Floats = np.zeros((n, terms))
        self.alive, self.started = 1.0, False

    def __call__(self) -> tuple[float, float]:
        n, probability, own = len(self._own), self._probability, self._own
        signal = self._beyond * self.alive
        if not self.started:
            self.started = True
            mass = np.bincount(self._places.first, probability, n + 2)
            self.density[:, 0] = mass[:n]
        else:
            held = self.density[:, 0]
            mass = np.bincount(
                self._to, np.concatenate((np.multiply.outer(held, probability).ravel(), held * own)), n + 2
            )
            risen = _integrate(self.density)
            signal += float(np.dot(risen[self._rising, 0], own[self._rising]))
            signal -= float(np.dot(risen[self._falling, 0], own[self._falling]))
            self.density = self._turn @ risen
            self.density[:, 0] += mass[:n]
        self.alive = float(self.density[:, 0].sum())
        return signal + float(mass[n]), self.alive


def _terms(places: _Places, order: Order, terms: int | None) -> int:
    if terms is None:
        terms = max(TERMS, order.trend + 2)
    if len(places.region) * terms > _MOST_UNKNOWNS:
        raise too_many_states()
    return terms


def _order_work(places: _Places, terms: int) -> int:
    n, regions = places.away.shape
    return n * (12 * terms + 8 * regions)


def _told(law: Decay) -> Decay:
    # So rare a signal is the difference of masses that nearly cancel.
    return law if law.hazard > 1e-15 else replace(law, accuracy="relative 1e-6")


def order_law(
    automaton: Automaton,
    order: Order,
    probability: Floats,
    beyond: float,
    *,
    memory: int,
    terms: int | None = None,
) -> Decay:
    """The law of the run length for a continuous statistic.

    probability: (regions,) of each region, in rising order of the statistic; beyond: of a point
    that signals at once; memory: the longest window; terms: of each expansion.
    Raises ``UnusableParameter`` (``too-many-states``).
    """
    places = _places(automaton, order)
    terms = _terms(places, order, terms)
    walk = _Walk(places, probability, beyond, terms)
    work = _order_work(places, terms)
    return _told(follow(walk, memory=memory, work=work, method=METHOD, accuracy="relative 1e-11"))


@lru_cache(maxsize=4)
def _calm(automaton: Automaton, order: Order, probability: tuple[float, ...], terms: int) -> Floats | None:
    places = _places(automaton, order)
    walk = _Walk(places, np.array(probability), 0.0, terms)

    def state() -> Floats:
        return walk.density

    return settle(walk, state, work=_order_work(places, terms))


def steady_order_law(
    automaton: Automaton,
    order: Order,
    calm: Floats,
    probability: Floats,
    beyond: float,
    *,
    carry: Callable[[int], Floats],
    memory: int,
    terms: int | None = None,
) -> Decay | None:
    """The same from where long operation with the probabilities ``calm``, without a signal, has led.

    carry: for so many terms, (regions, terms, terms): what takes the coefficients of a density that is read
    as the old distribution function to those read as the new one, by which all that follows is compared.
    None where that state does not settle within the steps allowed.
    """
    places = _places(automaton, order)
    terms = _terms(places, order, terms)
    start = _calm(automaton, order, tuple(calm.tolist()), terms)
    if start is None:
        return None
    walk = _Walk(places, probability, beyond, terms)
    walk.started = True
    matrices = carry(terms)
    walk.density = np.empty_like(start)
    for region, matrix in enumerate(matrices):
        here = np.flatnonzero(places.region == region)
        walk.density[here] = start[here] @ matrix
    work = _order_work(places, terms)
    return _told(follow(walk, memory=memory, work=work, method=METHOD, accuracy="relative 1e-8"))


class _LatticeWalk:
    """The survivors, point by point: for each place the probability of each value of the last point."""

    __slots__ = ("_beyond", "_entry", "_places", "_steps", "_stops", "_total", "alive", "held", "started")

    def __init__(self, places: _Places, probability: Floats, region: Integers, beyond: float) -> None:
        n, regions = places.away.shape
        sizes = np.bincount(region, minlength=regions)
        width = int(sizes.max())
        if n * width > _MOST_UNKNOWNS:
            raise too_many_states()
        each = np.zeros((regions, width))
        each[region, np.arange(len(region)) - (np.cumsum(sizes) - sizes)[region]] = probability
        one = np.ones(n)
        self._entry = each[places.region]
        self._steps = tuple(_adder(to, one, n) for to in (places.rise, places.fall, places.tie))
        self._stops = [np.flatnonzero(to == n) for to in (places.rise, places.fall, places.tie)]
        self._total = each.sum(axis=1)
        self._places, self._beyond = places, beyond
        self.held: Floats = np.zeros((n, width))
        self.alive, self.started = 1.0, False

    @property
    def work(self) -> int:
        """Operations of one step."""
        return len(self.held) * (_LATTICE_COST * self.held.shape[1] + 8 * len(self._total))

    def __call__(self) -> tuple[float, float]:
        n, regions = self._places.away.shape
        places, entry, total = self._places, self._entry, self._total
        signal = self._beyond * self.alive
        if not self.started:
            self.started = True
            come = np.bincount(places.first, np.ones(regions), n + 2)
            signal += float(total[places.first == n].sum())
            self.held = entry * come[:n, None]
        else:
            held = self.held
            mass = held.sum(axis=1)
            # Weighted by the mass alone: what enters a place spreads as its region does.
            flow = np.multiply.outer(mass, np.ones(regions)).ravel()
            come = np.bincount(places.away.ravel(), flow, n + 2)
            signal += float(((places.away == n) * total[None, :] * mass[:, None]).sum())
            below = np.cumsum(held, axis=1)
            steps = (below - held) * entry, (mass[:, None] - below) * entry, held * entry
            for step, stop in zip(steps, self._stops, strict=True):
                signal += float(step[stop].sum())
            rise, fall, tie = self._steps
            self.held = rise @ steps[0] + fall @ steps[1] + tie @ steps[2] + entry * come[:n, None]
        self.alive = float(self.held.sum())
        return signal, self.alive


def lattice_law(
    automaton: Automaton,
    order: Order,
    probability: Floats,
    region: Integers,
    beyond: float,
    *,
    memory: int,
) -> Decay:
    """The law of the run length for a statistic on a lattice.

    probability: (s,) of each value that does not signal at once, in rising order; region: (s,) the
    letter of each; beyond, memory: as in ``order_law``.
    Raises ``UnusableParameter`` (``too-many-states``).
    """
    walk = _LatticeWalk(_places(automaton, order), probability, region, beyond)
    return follow(walk, memory=memory, work=walk.work, method=LATTICE_METHOD)


@lru_cache(maxsize=4)
def _lattice_calm(
    automaton: Automaton, order: Order, probability: tuple[float, ...], region: tuple[int, ...]
) -> Floats | None:
    walk = _LatticeWalk(_places(automaton, order), np.array(probability), np.array(region), 0.0)

    def state() -> Floats:
        return walk.held

    return settle(walk, state, work=walk.work)


def steady_lattice_law(
    automaton: Automaton,
    order: Order,
    calm: Floats,
    probability: Floats,
    region: Integers,
    beyond: float,
    *,
    memory: int,
) -> Decay | None:
    """The same from where long operation with the probabilities ``calm``, without a signal, has led."""
    start = _lattice_calm(automaton, order, tuple(calm.tolist()), tuple(region.tolist()))
    if start is None:
        return None
    walk = _LatticeWalk(_places(automaton, order), probability, region, beyond)
    walk.held, walk.started = start, True
    return follow(walk, memory=memory, work=walk.work, method=LATTICE_METHOD)
