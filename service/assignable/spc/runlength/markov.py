"""The run length of rules on zones: an absorbing Markov chain, followed exactly.

[brook-evans-1972], [champ-woodall-1987]
"""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache

import numpy as np

from ..data import Floats
from .automaton import Automaton
from .survival import Decay, follow, settle

_NEAR, _FAR = 16_384, 4
METHOD = "Markov chain (Brook & Evans 1972; Champ & Woodall 1987)"


class _Walk:
    """The survivors' law over the states, point by point."""

    __slots__ = ("_beyond", "_probability", "_target", "mass")

    def __init__(self, automaton: Automaton, probability: Floats, beyond: float, mass: Floats) -> None:
        self._target = automaton.follow.ravel()
        self._probability, self._beyond, self.mass = probability, beyond, mass

    def __call__(self) -> tuple[float, float]:
        n = len(self.mass)
        alive = float(self.mass.sum())
        reached = np.bincount(
            self._target, np.multiply.outer(self.mass, self._probability).ravel(), n + 1
        ).astype(np.float64, copy=False)
        self.mass = reached[:n]
        return self._beyond * alive + float(reached[n]), float(self.mass.sum())


def _fresh(automaton: Automaton) -> Floats:
    mass: Floats = np.zeros(automaton.states)
    mass[0] = 1.0
    return mass


def _work(automaton: Automaton, letters: int) -> int:
    return 6 * automaton.states * letters


@lru_cache(maxsize=8)
def _calm(automaton: Automaton, probability: tuple[float, ...]) -> Floats | None:
    """The law over the states after long operation without a signal; None where it does not settle."""
    walk = _Walk(automaton, np.array(probability), 0.0, _fresh(automaton))

    def state() -> Floats:
        return walk.mass

    return settle(walk, state, work=_work(automaton, len(probability)))


def chain_law(automaton: Automaton, probability: Floats, beyond: float, *, memory: int) -> Decay:
    """The law of the run length of an automaton whose letters come independently.

    probability: (letters,) of each letter; beyond: of a point that signals at once; memory: the
    longest window.
    """
    walk = _Walk(automaton, probability, beyond, _fresh(automaton))
    return _charged(
        follow(walk, memory=memory, work=_work(automaton, len(probability)), method=METHOD), automaton
    )


def _charged(found: Decay, automaton: Automaton) -> Decay:
    """The law with its operations as they are felt: a table that no near memory holds is slow to walk."""
    if automaton.follow.size <= _NEAR:
        return found
    return replace(found, operations=_FAR * found.operations)


def steady_chain_law(
    automaton: Automaton, calm: Floats, probability: Floats, beyond: float, *, memory: int
) -> Decay | None:
    """The same from where long operation with the probabilities ``calm``, without a signal, has led.

    None where that state does not settle within the steps allowed.
    """
    start = _calm(automaton, tuple(calm.tolist()))
    if start is None:
        return None
    walk = _Walk(automaton, probability, beyond, start)
    return _charged(
        follow(walk, memory=memory, work=_work(automaton, len(probability)), method=METHOD), automaton
    )
