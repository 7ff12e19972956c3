"""A stopped process on a quadrature grid: what the run length of a memory chart is made of.

A chart's statistic is a Markov process that lives between its limits until it signals. On the nodes
of a Gauss–Legendre rule its transition density becomes a matrix (Nyström), and the error falls faster
than any power of the number of nodes, because the normal density is smooth.

The mean run length solves ``(I − Q) L = 1``. Solved as it stands, a run length of 10¹² costs twelve
digits: the system is that near to singular. :class:`StoppedChain` therefore splits each path at its
visits to one *home* state (regeneration), and uses the exact tail probabilities of signalling instead
of what is missing from the rows of ``Q``. Every quantity is then a sum of positive terms, and holds
its relative accuracy however long the run length is.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
import scipy
from numpy.typing import NDArray

Array = NDArray[np.float64]

# Below this a probability of signalling between two visits home is treated as none at all.
_NEVER = 1e-290
# Squaring a transition matrix k times loses about 2^k roundings: 2^21 steps keep nine digits.
_DOUBLINGS = 21


@lru_cache(maxsize=512)
def gauss_legendre(count: int) -> tuple[Array, Array]:
    """Nodes (ascending) and weights of the Gauss–Legendre rule on (−1, 1), read-only.

    Newton's iteration on the three-term recurrence for all nodes at once: quadratic cost, where the
    eigenvalue method is cubic.
    """
    k = np.arange(1, count + 1)
    theta = np.pi * (4 * k - 1) / (4 * count + 2)
    x = (1 - (count - 1) / (8.0 * count**3)) * np.cos(theta)
    slope = np.ones_like(x)
    for _ in range(10):
        before, value = np.ones_like(x), x.copy()
        for degree in range(2, count + 1):
            before, value = value, ((2 * degree - 1) * x * value - (degree - 1) * before) / degree
        slope = count * (before - x * value) / (1 - x * x)
        step = value / slope
        x = x - step
        if float(np.abs(step).max()) < 1e-15:
            break
    weights = 2.0 / ((1 - x * x) * slope * slope)
    nodes = 0.5 * (x - x[::-1])[::-1]
    weights = 0.5 * (weights + weights[::-1])
    nodes.setflags(write=False)
    weights.setflags(write=False)
    return nodes, weights


class StoppedChain:
    """A Markov chain that ends with a signal, solved by regeneration at its home state (index 0).

    ``steps`` (n × n) holds the probabilities of moving between states without a signal, ``exits`` (n)
    those of a signal at the next point, computed on their own and never as what is missing from a row.
    Lengths are relative to the mean run length from home, ``1 / rate``, so that nothing overflows on a
    side of a chart that practically never signals. Regeneration: ``[asmussen-2003]``, chapter VI.
    """

    __slots__ = ("_lu", "_to_home", "exits", "mean", "rate", "short", "size", "steps", "toll")

    def __init__(self, steps: Array, exits: Array) -> None:
        self.steps, self.exits, self.size = steps, exits, len(exits)
        away = -steps[1:, 1:]
        away[np.diag_indices(self.size - 1)] += 1.0
        self._lu = scipy.linalg.lu_factor(away, overwrite_a=True, check_finite=False)
        right = np.empty((self.size - 1, 3), order="F")
        right[:, 0] = 1.0
        right[:, 1] = exits[1:]
        right[:, 2] = steps[1:, 0]
        wait, signal, to_home = self._solve(right).T
        row = steps[0, 1:]
        toll = float(exits[0] + row @ signal)
        self.toll = toll if toll > _NEVER else 0.0
        self.rate = self.toll / float(1.0 + row @ wait)
        self._to_home = to_home
        self.mean = np.concatenate(([1.0], wait * self.rate + to_home))
        # 1 − mean, kept on its own: on a side that hardly ever signals, all that differs from home.
        self.short = np.concatenate(([0.0], signal - wait * self.rate))

    def _solve(self, right: Array, transposed: bool = False) -> Array:
        solution: Array = scipy.linalg.lu_solve(self._lu, right, trans=int(transposed), check_finite=False)
        return solution

    def mean_from(self, row: Array) -> float:
        """Mean run length, relative to home's, when the first step follows ``row``."""
        return self.rate + float(row @ self.mean)

    def variances(self) -> Array:
        """Variance of the run length from each state, relative to the square of home's mean.

        By the law of total variance over the next step: ``V = Q V + g`` with ``g`` the variance of the
        mean still to come, which is a sum of squares and so free of cancellation.
        """
        change = (self.short + self.rate)[:, None] - self.short
        spread = (self.steps * np.square(change)).sum(axis=1) + self.exits * (self.mean - self.rate) ** 2
        part = self._solve(spread[1:])
        home = 1.0 if self.toll == 0.0 else float(spread[0] + self.steps[0, 1:] @ part) / self.toll
        return np.concatenate(([home], part + self._to_home * home))

    def variance_from(self, row: Array, exit_now: float, variances: Array) -> float:
        """Variance, relative as :meth:`variances`, when the first step follows ``row``."""
        later = float(row @ self.mean)
        return float(row @ (np.square(self.mean - later) + variances)) + exit_now * later**2

    def lags(self, home_variance: float) -> tuple[Array, float]:
        """First-order behaviour of the survival sums near 1: what two-sided second moments need.

        With ``G(x, z) = Σ zⁿ P(N > n | x)``, the ratio ``G(x, z) / G(home, z)`` is
        ``mean(x) + (1 − z) lag(x) + …``, and ``1 / G(home, z) = rate + (1 − z)(1 + excess) + …``.
        Returns ``(lag, excess)``.
        """
        excess = 0.5 * (home_variance - 1.0 - self.rate)
        lag = self._solve(self.short[1:] + (excess + self.rate))
        return np.concatenate(([0.0], lag)), excess

    def conditional_law(self, opposed: bool = False) -> Array:
        """Limiting law of the state, given that no signal has come (quasi-stationary distribution).

        ``opposed``: the same for either side of a symmetric two-sided pair, of which the other side's
        signals end the run too and find this side at home. Inverse iteration, or power iteration where
        signals are frequent, to a change of 1e-13 in the law; where 200 rounds do not reach that (the two
        slowest decays nearly alike, as with a reference value near zero), all eigenvalues are found.
        """
        law: Array = np.full(self.size, 1.0 / self.size)
        frequent = self.rate > 0.35 or self.toll == 0.0
        signal = self._solve(self.exits[1:]) if opposed else self._to_home
        for _ in range(200):
            if frequent:
                new = law @ self.steps
                if opposed:
                    new[0] -= float(law @ self.exits)
            else:
                if opposed:
                    home = float(law[0] + law[1:] @ (self._to_home - signal)) / (2.0 * self.toll)
                else:
                    home = float(law[0] + law[1:] @ self._to_home) / self.toll
                rest = self._solve(law[1:] + home * self.steps[0, 1:], transposed=True)
                new = np.concatenate(([home], rest))
            new /= new.sum()
            change = float(np.abs(new - law).max())
            law = new
            if change < 1e-13:
                return law
        matrix = self.steps.copy()
        if opposed:
            matrix[:, 0] -= self.exits
        values, vectors = np.linalg.eig(matrix.T)
        slowest = np.real(vectors[:, int(np.argmax(values.real))])
        return np.asarray(slowest / slowest.sum(), dtype=np.float64)

    def consistent_steps(self) -> Array:
        """``steps`` with each diagonal set so that row and exit add to one to the last rounding."""
        steps = self.steps.copy()
        index = np.diag_indices(self.size)
        steps[index] += 1.0 - self.exits - steps.sum(axis=1)
        return steps


class Ladder:
    """The powers ``M^(2^k)`` of a transition matrix, climbed and descended to read a run length's law.

    ``exits`` are the probabilities of a signal at the next point.
    """

    __slots__ = ("_powers", "_signals")

    def __init__(self, steps: Array, exits: Array) -> None:
        self._powers = [steps]
        self._signals = [exits]

    def _grow(self) -> None:
        top, signals = self._powers[-1], self._signals[-1]
        self._signals.append(signals + top @ signals)
        self._powers.append(top @ top)

    def signalled_by(self, point: int, row: Array, exit_now: float) -> float:
        """P(N ≤ point) for a path whose first point signals with ``exit_now`` or else follows ``row``."""
        total, law, left, rung = exit_now, row, point - 1, 0
        while left:
            if rung == len(self._powers):
                self._grow()
            if left & 1:
                total += float(law @ self._signals[rung])
                law = law @ self._powers[rung]
            left >>= 1
            rung += 1
        return min(max(total, 0.0), 1.0)

    def quantiles(
        self,
        levels: tuple[float, ...],
        row: Array,
        exit_now: float,
        tail: tuple[float, float],
    ) -> tuple[int, ...]:
        """Smallest n with P(N ≤ n) ≥ level, for each level (see :meth:`signalled_by` for the start).

        ``tail`` is ``(rate, weight)`` of the geometric law ``P(N > n) = weight (1 − rate)ⁿ`` that holds
        beyond the ladder's last rung.
        """
        top = 0
        while exit_now + float(row @ self._signals[top]) < max(levels) and top < _DOUBLINGS:
            top += 1
            if top == len(self._powers):
                self._grow()
        found = []
        for level in levels:
            if exit_now + float(row @ self._signals[top]) < level:
                rate, weight = tail
                found.append(max(1, math.ceil(math.log((1.0 - level) / weight) / math.log1p(-rate))))
                continue
            point, total, law = 1, exit_now, row
            if total >= level:
                found.append(1)
                continue
            for rung in range(top, -1, -1):
                reached = total + float(law @ self._signals[rung])
                if reached < level:
                    total, law, point = reached, law @ self._powers[rung], point + (1 << rung)
            found.append(point + 1)
        return tuple(found)
