"""The run length by seeded simulation, through ``rules.detect`` itself: the check, not the method."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from ..data import Floats
from ..errors import UnusableParameter
from ..rules import LIMIT, Rule, Track, detect, longest_window, watched

Draw = Callable[[np.random.Generator, tuple[int, int]], Floats]


@dataclass(frozen=True, slots=True)
class SimulatedRunLength:
    """arl: mean; standard_error: of that mean; sd: standard deviation of the run length."""

    arl: float
    standard_error: float
    sd: float
    replicates: int
    seed: int


def _normal(generator: np.random.Generator, shape: tuple[int, int]) -> Floats:
    return generator.standard_normal(shape)


def simulate(
    rules: Sequence[Rule] = (LIMIT,),
    *,
    draw: Draw = _normal,
    centre: float = 0.0,
    sigma: float = 1.0,
    lower: float = -3.0,
    upper: float = 3.0,
    replicates: int = 10_000,
    seed: int = 1,
    block: int = 128,
    most: int = 100_000,
) -> SimulatedRunLength:
    """The mean points to the first signal that calls for action, over independent fresh starts.

    draw: values of a given shape, independent, from a generator (standard normal unless given);
    centre, sigma, lower, upper: of the chart, in the unit of the values; block: points judged at
    once; most: the longest run followed.
    Raises ``UnusableParameter`` (``run-too-long``) when a run passes ``most`` points.
    """
    in_force = tuple(rule for rule in watched(rules) if rule.severity == "action")
    generator = np.random.default_rng(seed)
    lengths = np.zeros(replicates, dtype=np.int64)
    running = np.arange(replicates)
    before = longest_window(in_force) - 1
    # Each run is a row: a gap, which parts it from the run before, then what its windows still
    # see of the last block, then new points.
    kept = np.full((replicates, before), np.nan)
    done = 0
    while len(running):
        if done >= most:
            raise UnusableParameter.of(
                "run-too-long", f"A simulated run is longer than {most} points.", "rules"
            )
        new = draw(generator, (len(running), block))
        rows = np.concatenate((np.full((len(running), 1), np.nan), kept, new), axis=1)
        width = rows.shape[1]
        value = rows.ravel()
        hits = detect(in_force, Track(value, (value - centre) / sigma, sigma, lower, upper)).index
        row, place = np.divmod(hits, width)
        fresh = place > before
        row, place = row[fresh], place[fresh]
        ended, first = np.unique(row, return_index=True)
        lengths[running[ended]] = done + place[first] - before
        left = np.ones(len(running), dtype=bool)
        left[ended] = False
        kept = rows[left, width - before :] if before else kept[left]
        running = running[left]
        done += block
    sd = float(lengths.std(ddof=1))
    return SimulatedRunLength(float(lengths.mean()), sd / math.sqrt(replicates), sd, replicates, seed)
