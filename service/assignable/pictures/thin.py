"""Long series on narrow paper: which points to draw."""

from __future__ import annotations

import numpy as np

from ..spc.data import Booleans, Floats, Integers


def thin(x: Floats, value: Floats, keep: Booleans) -> Integers:
    """Positions of the points to draw: of each pixel's column the first, last, lowest and highest, and ``keep``.

    x: (m,) places in pixels, rising; value: (m,); keep: (m,) bool. All points where they are few.
    """
    m = len(x)
    if m < 2 or m <= 2 * (x[-1] - x[0]):
        return np.arange(m)
    column = x.astype(np.int64)
    starts = np.flatnonzero(np.diff(column, prepend=column[0] - 1))
    lengths = np.diff(starts, append=m)
    drawn = keep.copy()
    drawn[starts] = True
    drawn[starts + lengths - 1] = True
    for extreme in (np.minimum, np.maximum):
        at = np.flatnonzero(value == np.repeat(extreme.reduceat(value, starts), lengths))
        # Of equal ones in a column, the first.
        drawn[at[np.flatnonzero(np.diff(column[at], prepend=column[0] - 1))]] = True
    return np.flatnonzero(drawn)


def apart(x: Floats, y: Floats, least: float) -> Integers:
    """Positions of one mark out of each cell of ``least`` by ``least`` pixels: the rest would cover it."""
    if len(x) < 2:
        return np.arange(len(x))
    cell = np.floor(x / least).astype(np.int64) * 100_000 + np.floor(y / least).astype(np.int64)
    return np.sort(np.unique(cell, return_index=True)[1])
