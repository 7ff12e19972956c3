"""The run length of rules on zones: an absorbing Markov chain, followed exactly.

[brook-evans-1972], [champ-woodall-1987]
"""

from __future__ import annotations

import numpy as np

from ..data import Floats
from .automaton import Automaton
from .survival import Decay, follow

METHOD = "Markov chain (Brook & Evans 1972; Champ & Woodall 1987)"


def chain_law(automaton: Automaton, probability: Floats, beyond: float, *, memory: int) -> Decay:
    """The law of the run length of an automaton whose letters come independently.

    probability: (letters,) of each letter; beyond: of a point that signals at once; memory: the
    longest window.
    """
    n = automaton.states
    letters = len(probability)
    target = automaton.follow.ravel()
    mass: Floats = np.zeros(n)
    mass[0] = 1.0

    def advance() -> tuple[float, float]:
        nonlocal mass
        alive = float(mass.sum())
        reached = np.bincount(target, np.multiply.outer(mass, probability).ravel(), n + 1).astype(
            np.float64, copy=False
        )
        mass = reached[:n]
        return beyond * alive + float(reached[n]), float(mass.sum())

    return follow(advance, memory=memory, work=4 * n * letters, method=METHOD)
