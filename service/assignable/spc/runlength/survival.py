"""The law of a run length, from the mass that survives each point.

A process that forgets loses, in the long run, the same share of its survivors at every point. The
survivors are therefore followed point by point until that share stands still; from there on the
law is geometric, and its moments and percentiles are sums of what was followed and that tail.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ..data import Floats
from ..errors import UnusableParameter

PERCENTILES = (0.05, 0.25, 0.50, 0.75, 0.95)
SETTLED = 1e-12
"""The share lost stands still when it varies by less than this, relatively, over a whole memory."""

_GONE = 1e-30
_LONGEST_ARL = 1e100
_MOST_STEPS = 100_000
_MOST_WORK = 1_000_000_000


@dataclass(frozen=True, slots=True)
class RunLength:
    """Points until the first signal that calls for action, that point included.

    arl, sd: mean and standard deviation; percentiles: (probability, the fewest points within which
    a signal comes with at least that probability); method: how it was computed; accuracy: of the
    mean, relative, in words.
    """

    arl: float
    sd: float
    percentiles: tuple[tuple[float, int], ...]
    method: str
    accuracy: str


@dataclass(frozen=True, slots=True, eq=False)
class Decay:
    """survival: (T + 1,), the probability of no signal among the first t points, t = 0..T; hazard:
    of a signal at each point after T, given none before; method, accuracy: as in ``RunLength``;
    operations: about how many it took, some 2e9 of them a second.
    """

    survival: Floats
    hazard: float
    method: str
    accuracy: str
    operations: int = 0

    def run_length(self) -> RunLength:
        """Mean, standard deviation and percentiles.

        Raises ``UnusableParameter`` (``never-signals``) when the mean is beyond any use.
        """
        s, h = self.survival, self.hazard
        last = len(s) - 1
        left = float(s[-1])
        if left > 0.0 and h * _LONGEST_ARL < left:
            raise UnusableParameter.of(
                "never-signals", "With these limits and rules a signal practically never comes.", "rules"
            )
        arl = float(s[:-1].sum())
        # The variance is E[N(N - 1)] + E[N] - E[N]^2, and E[N(N - 1)] = 2 sum of t S(t).
        pairs = 2.0 * float(np.dot(np.arange(last), s[:-1]))
        if left > 0.0:
            arl += left / h
            pairs += 2.0 * left * (last / h + (1.0 - h) / h**2)
        sd = math.sqrt(max(pairs + arl - arl * arl, 0.0))
        return RunLength(
            arl, sd, tuple((q, self._percentile(q)) for q in PERCENTILES), self.method, self.accuracy
        )

    def _percentile(self, q: float) -> int:
        # A survival that equals 1 - q but for rounding has reached it.
        target = (1.0 - q) * (1.0 + 1e-12)
        s = self.survival
        if s[-1] <= target:
            return int(np.argmax(s <= target))
        if self.hazard >= 1.0:
            return len(s)
        return len(s) - 1 + math.ceil(math.log(target / float(s[-1])) / math.log1p(-self.hazard))

    def probability(self, points: Floats) -> Floats:
        """P(run length <= t) for an array of t, each rounded down to a whole number of points."""
        t = np.floor(np.maximum(points, 0.0))
        last = len(self.survival) - 1
        followed = self.survival[np.minimum(t, last).astype(np.int64)]
        beyond = np.maximum(t - last, 0.0)
        certain = self.hazard >= 1.0
        gone = (beyond > 0).astype(np.float64) if certain else -np.expm1(beyond * math.log1p(-self.hazard))
        # 1 - S + S * gone, without losing a small probability of an early signal.
        early = (1.0 - self.survival)[np.minimum(t, last).astype(np.int64)]
        probability: Floats = early + followed * gone
        return probability


def follow(
    advance: Callable[[], tuple[float, float]],
    *,
    memory: int,
    work: int,
    method: str,
    accuracy: str = "relative 1e-12",
) -> Decay:
    """Follow the survivors until the share lost stands still.

    advance: goes on by one point, gives the probability that the signal comes at it and the
    probability that none has come yet; memory: the points that a rule can look back on; work:
    operations of one step, which bounds the steps. When the cap is met first, the tail is taken
    from the last share, and the accuracy says how far it still varied.
    Raises ``UnusableParameter`` (``not-settled``) when it varied by more than 1e-6.
    """
    survival = [1.0]
    hazards: list[float] = []
    alive = 1.0
    span = max(memory, 4)
    most = min(_MOST_STEPS, max(_MOST_WORK // max(work, 1), 4 * span))
    varied = math.inf
    while len(hazards) < most:
        signal, left = advance()
        hazards.append(max(signal, 0.0) / alive)
        alive = left
        survival.append(alive)
        if alive < _GONE:
            return Decay(np.array(survival), 1.0, method, accuracy, work * len(hazards))
        if len(hazards) > span + 1:
            recent = hazards[-span:]
            high, low = max(recent), min(recent)
            if high - low <= SETTLED * high:
                return Decay(np.array(survival), hazards[-1], method, accuracy, work * len(hazards))
            varied = (high - low) / high
    if varied > 1e-6:
        raise UnusableParameter.of(
            "not-settled", "The run length of these rules takes longer to compute than is allowed.", "rules"
        )
    return Decay(np.array(survival), hazards[-1], method, f"relative {10 * varied:.0e}", work * len(hazards))


def settle(
    advance: Callable[[], tuple[float, float]], state: Callable[[], Floats], *, work: int
) -> Floats | None:
    """The law of the state after long operation without a signal, read-only; None where it does not settle.

    advance: as in :func:`follow`; state: the survivors' law as it stands. It has settled when a point
    moves it by less than 1e-12 in all, as a share of the survivors.
    """
    before: Floats | None = None
    for _ in range(min(_MOST_STEPS, max(_MOST_WORK // max(work, 1), 16))):
        _, alive = advance()
        if alive < _GONE:
            return None
        now = state() / alive
        if before is not None and float(np.abs(now - before).sum()) < SETTLED:
            now.flags.writeable = False
            return now
        before = now
    return None


MOST_OPERATIONS = 1_800_000_000
"""Operations that the run lengths of one request may take: about a second."""


class Allowance:
    """What a list of run lengths may still take.

    Counted in operations and not in seconds, so that the same request always fares alike.
    """

    __slots__ = ("_asked", "_done", "_left", "_where")

    def __init__(self, asked: int, where: str, most: float = MOST_OPERATIONS) -> None:
        self._left = float(most)
        self._done, self._asked, self._where = 0, asked, where

    def take(self, operations: float) -> None:
        """Takes note of one more. Raises ``UnusableParameter`` (``too-much-work``) when others are to come."""
        self._left -= operations
        self._done += 1
        if self._left < 0 and self._done < self._asked:
            raise UnusableParameter.of(
                "too-much-work",
                f"With this chart {self._done} of the {self._asked} {self._where} are as many as one request may "
                "compute; ask for the others in further requests.",
                self._where,
            )


def geometric(p: float) -> Decay:
    """The law when each point signals with probability p, whatever came before."""
    return Decay(np.ones(1), min(p, 1.0), "closed form (geometric)", "exact")
