"""Rules compiled to one finite automaton over the regions that their lines cut.

A point is read as a letter: the region it falls in. Each rule (each side of it) keeps the few past
letters that can still matter to it; their product, reachable states only, is the automaton. Its
transitions do not depend on the probabilities of the regions, so one compilation serves every shift.
Method: Champ & Woodall 1987 [champ-woodall-1987].
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from ..data import Booleans, Floats, Integers
from ..errors import UnusableParameter
from ..rules import TOLERANCE, Rule

MOST_STATES = 60_000
_MOST_STATES_OF_ONE = 10_000
_MOST_EDGES = 500_000
_RADIX = 2**62


@dataclass(frozen=True, slots=True)
class Watch:
    """One side of a rule: k of the last m letters among those ``marked``, the last one included."""

    k: int
    m: int
    marked: tuple[bool, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Automaton:
    """follow: (n, letters) int, the state after a letter, or n when that letter signals.

    State 0 is the fresh start.
    """

    follow: Integers

    @property
    def states(self) -> int:
        return len(self.follow)


def too_many_states() -> UnusableParameter:
    error = UnusableParameter.of(
        "too-many-states",
        "The run length of these rules needs more states than this service computes; "
        "use fewer rules or shorter windows.",
        "rules",
    )
    assert isinstance(error, UnusableParameter)
    return error


def watches(rules: Sequence[Rule], z: Floats) -> tuple[Watch, ...]:
    """What the zone, mixture and stratification rules watch for, letter by letter.

    z: (letters,) a value in each letter's region, in sigma. The limit and the rules on order are
    passed over. A watch that another one always forestalls is left out.
    """
    found: list[Watch] = []

    def add(rule: Rule, marked: Booleans) -> None:
        if not marked.any():
            return
        new = Watch(rule.points, rule.window, tuple(marked.tolist()))
        if any(_forestalls(old, new) for old in found):
            return
        found[:] = [old for old in found if not _forestalls(new, old)]
        found.append(new)

    for rule in rules:
        if rule.is_limit or rule.distance is None:
            continue
        edge = rule.distance + TOLERANCE
        if rule.form == "zone":
            add(rule, z > edge)
            add(rule, z < -edge)
        elif rule.form == "mixture":
            add(rule, np.abs(z) > edge)
        else:
            add(rule, np.abs(z) <= edge)
    return tuple(found)


def _forestalls(one: Watch, other: Watch) -> bool:
    """Whether ``one`` has signalled whenever ``other`` signals."""
    if one.k > other.k or any(b and not a for a, b in zip(one.marked, other.marked, strict=True)):
        return False
    return one.m >= other.m or (one.k == one.m and other.k == other.m)


@lru_cache(maxsize=512)
def _memory(k: int, m: int) -> tuple[tuple[int, ...], tuple[int, ...]]:
    """The states of k of m: the state after an unmarked and after a marked letter, -1 for a signal.

    A state is the ages of the marked letters that can still be part of a signal, as bits.
    """
    number = {0: 0}
    queue = [0]
    calm: list[int] = []
    marked: list[int] = []
    window = (1 << (m - 1)) - 1
    for bits in queue:
        for letter, row in ((0, calm), (1, marked)):
            if letter and bits.bit_count() + 1 >= k:
                row.append(-1)
                continue
            after = ((bits << 1) | letter) & window
            # The oldest marked letter is of use only if every letter until it leaves could
            # complete a signal; the younger ones are judged only once it is not.
            while after:
                age = after.bit_length()
                if after.bit_count() + m - age >= k:
                    break
                after ^= 1 << (age - 1)
            if after not in number:
                number[after] = len(queue)
                queue.append(after)
                if len(queue) > _MOST_STATES_OF_ONE:
                    raise too_many_states()
            row.append(number[after])
    return tuple(calm), tuple(marked)


@lru_cache(maxsize=128)
def compile_watches(watched: tuple[Watch, ...], letters: int) -> Automaton:
    """The automaton that signals when any of the watches does.

    Raises ``UnusableParameter`` (``too-many-states``) before it grows past ``MOST_STATES``.
    """
    parts: list[Integers] = []
    for watch in watched:
        calm, marked = (np.array(each, dtype=np.int64) for each in _memory(watch.k, watch.m))
        parts.append(np.where(np.array(watch.marked)[None, :], marked[:, None], calm[:, None]))
    whole = np.zeros((1, letters), dtype=np.int64)
    at = 0
    while at < len(parts):
        # As many parts at once as fit the digits of one integer.
        group, size = [whole], len(whole)
        while at < len(parts) and size * len(parts[at]) < _RADIX:
            group.append(parts[at])
            size *= len(parts[at])
            at += 1
        whole = _product(group)
    whole = np.where(whole < 0, len(whole), whole)
    whole.flags.writeable = False
    return Automaton(whole)


def _product(parts: list[Integers]) -> Integers:
    """The reachable product of automata over the same letters; -1 signals, state 0 starts."""
    radix = [1]
    for part in parts[:-1]:
        radix.append(radix[-1] * len(part))
    weighted = [part * scale for part, scale in zip(parts, radix, strict=True)]

    def after(codes: Integers) -> Integers:
        total: Integers | None = None
        dead: Booleans | None = None
        rest = codes
        for part, scaled in zip(parts, weighted, strict=True):
            rest, digit = np.divmod(rest, len(part))
            step = scaled[digit]
            total = step if total is None else total + step
            dead = step < 0 if dead is None else dead | (step < 0)
        assert total is not None
        assert dead is not None
        total[dead] = -1
        return total

    most = min(MOST_STATES, _MOST_EDGES // parts[0].shape[1])
    return explore(np.zeros(1, dtype=np.int64), after, most=most)[1]


def explore(
    start: Integers, after: Callable[[Integers], Integers], *, most: int
) -> tuple[Integers, Integers]:
    """What can be reached, in layers of equally many letters.

    start: distinct codes; after: gives the codes that follow, (n, k) for n codes, negative for
    what is no state. Returns the codes reached (the start first), and (n, k) what follows each as
    places among them, negatives kept. Raises ``UnusableParameter`` past ``most`` codes.
    """
    front = start
    known = np.sort(start)
    layers, rows = [front], [after(front)]
    while len(front):
        reached = np.unique(rows[-1])
        reached = reached[np.searchsorted(reached, 0) :]
        place = np.minimum(np.searchsorted(known, reached), len(known) - 1)
        front = reached[known[place] != reached]
        if len(front):
            if len(known) + len(front) > most:
                raise too_many_states()
            known = np.sort(np.concatenate((known, front)), kind="stable")
            layers.append(front)
            rows.append(after(front))
    codes = np.concatenate(layers)
    order = np.argsort(codes)
    table = np.concatenate(rows)
    place = np.minimum(np.searchsorted(codes, table, sorter=order), len(codes) - 1)
    return codes, np.where(table < 0, table, order[place])
