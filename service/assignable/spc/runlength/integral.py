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

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
import scipy

from ..data import Floats, Integers
from ..rules import Rule
from .automaton import Automaton, explore, too_many_states
from .survival import Decay, follow

METHOD = "Markov chain with the last value expanded in Legendre polynomials"
LATTICE_METHOD = "Markov chain with the last value"
TERMS = 8
"""Polynomials in each expansion, and as many more as a long trend needs: doubling them moves no
mean by more than 1e-11 of it."""

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
    n, regions = places.away.shape
    if terms is None:
        terms = max(TERMS, order.trend + 2)
    if n * terms > _MOST_UNKNOWNS:
        raise too_many_states()
    own = probability[places.region]
    # A fall is what a rise leaves of the mass: the two differ in sign, and in the mass itself.
    turn = _adder(places.rise, own, n) - _adder(places.fall, own, n)
    to = np.concatenate((places.away.ravel(), places.fall))
    rising_signal = np.flatnonzero(places.rise == n)
    falling_signal = np.flatnonzero(places.fall == n)
    density = np.zeros((n, terms))
    alive = 1.0
    started = False

    def advance() -> tuple[float, float]:
        nonlocal density, alive, started
        signal = beyond * alive
        if not started:
            started = True
            mass = np.bincount(places.first, probability, n + 2)
            density[:, 0] = mass[:n]
        else:
            held = density[:, 0]
            mass = np.bincount(
                to, np.concatenate((np.multiply.outer(held, probability).ravel(), held * own)), n + 2
            )
            risen = _integrate(density)
            signal += float(np.dot(risen[rising_signal, 0], own[rising_signal]))
            signal -= float(np.dot(risen[falling_signal, 0], own[falling_signal]))
            density = turn @ risen
            density[:, 0] += mass[:n]
        alive = float(density[:, 0].sum())
        return signal + float(mass[n]), alive

    work = n * (12 * terms + 8 * regions)
    law = follow(advance, memory=memory, work=work, method=METHOD, accuracy="relative 1e-11")
    # So rare a signal is the difference of masses that nearly cancel.
    return law if law.hazard > 1e-15 else replace(law, accuracy="relative 1e-6")


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
    places = _places(automaton, order)
    n, regions = places.away.shape
    sizes = np.bincount(region, minlength=regions)
    width = int(sizes.max())
    if n * width > _MOST_UNKNOWNS:
        raise too_many_states()
    each = np.zeros((regions, width))
    each[region, np.arange(len(region)) - (np.cumsum(sizes) - sizes)[region]] = probability
    entry = each[places.region]
    one = np.ones(n)
    rise, fall, tie = (_adder(to, one, n) for to in (places.rise, places.fall, places.tie))
    stops = [np.flatnonzero(to == n) for to in (places.rise, places.fall, places.tie)]
    to = places.away.ravel()
    total = each.sum(axis=1)
    held = np.zeros((n, width))
    alive = 1.0
    started = False

    def advance() -> tuple[float, float]:
        nonlocal held, alive, started
        signal = beyond * alive
        if not started:
            started = True
            come = np.bincount(places.first, np.ones(regions), n + 2)
            signal += float(total[places.first == n].sum())
            held = entry * come[:n, None]
        else:
            mass = held.sum(axis=1)
            # Weighted by the mass alone: what enters a place spreads as its region does.
            flow = np.multiply.outer(mass, np.ones(regions)).ravel()
            come = np.bincount(to, flow, n + 2)
            signal += float(((places.away == n) * total[None, :] * mass[:, None]).sum())
            below = np.cumsum(held, axis=1)
            steps = (below - held) * entry, (mass[:, None] - below) * entry, held * entry
            for step, stop in zip(steps, stops, strict=True):
                signal += float(step[stop].sum())
            held = rise @ steps[0] + fall @ steps[1] + tie @ steps[2] + entry * come[:n, None]
        alive = float(held.sum())
        return signal, alive

    work = n * (8 * width + 4 * regions)
    return follow(advance, memory=memory, work=work, method=LATTICE_METHOD)
