"""Where a surface on a grid lies at or below a level, as closed lines."""

from __future__ import annotations

import numpy as np

from ..spc.data import Floats

Loop = list[tuple[float, float]]

# A cell's corners, counter-clockwise from where its row and column begin, are 1, 2, 4 and 8; its edges are named
# after where they lie. For the corners that are inside: lines from edge to edge, the inside on their left.
_LINES: dict[int, tuple[tuple[str, str], ...]] = {
    1: (("S", "W"),),
    2: (("E", "S"),),
    3: (("E", "W"),),
    4: (("N", "E"),),
    5: (("S", "W"), ("N", "E")),
    6: (("N", "S"),),
    7: (("N", "W"),),
    8: (("W", "N"),),
    9: (("S", "N"),),
    10: (("E", "S"), ("W", "N")),
    11: (("E", "N"),),
    12: (("W", "E"),),
    13: (("S", "E"),),
    14: (("W", "S"),),
}


def region(x: Floats, y: Floats, surface: Floats, level: float) -> list[Loop]:
    """Closed lines around the part of the surface that is at or below the level.

    x: (m,), y: (k,) places of columns and rows; surface: (k, m), finite. Places are interpolated straight
    between neighbours; at the edge of the grid the lines follow it.
    """
    inside = np.pad(surface <= level, 1)
    wide = np.pad(surface, 1, mode="edge")
    x, y = np.pad(x, 1, mode="edge"), np.pad(y, 1, mode="edge")
    share_x = _share(wide[:, :-1], wide[:, 1:], level)
    share_y = _share(wide[:-1], wide[1:], level)
    along = x[:-1] + share_x * np.diff(x)
    across = y[:-1, None] + share_y * np.diff(y)[:, None]
    code = inside[:-1, :-1] + 2 * inside[:-1, 1:] + 4 * inside[1:, 1:] + 8 * inside[1:, :-1]
    rows, columns = np.nonzero((code > 0) & (code < 15))
    following: dict[tuple[int, int, bool], tuple[int, int, bool]] = {}
    for i, j, corners in zip(rows.tolist(), columns.tolist(), code[rows, columns].tolist(), strict=True):
        edges = {"S": (i, j, True), "N": (i + 1, j, True), "W": (i, j, False), "E": (i, j + 1, False)}
        for start, end in _LINES[corners]:
            following[edges[start]] = edges[end]
    loops = []
    while following:
        here = next(iter(following))
        loop: Loop = []
        while here in following:
            i, j, level_edge = here
            loop.append(
                (float(along[i, j]), float(y[i])) if level_edge else (float(x[j]), float(across[i, j]))
            )
            here = following.pop(here)
        loops.append(loop)
    return loops


def _share(low: Floats, high: Floats, level: float) -> Floats:
    """How far from one neighbour to the other the level is met; outside the grid, at its edge."""
    apart = high - low
    crossed = (low <= level) != (high <= level)
    share: Floats = np.where(crossed, (level - low) / np.where(crossed, apart, 1.0), 0.5)
    return share


def path(loops: list[Loop]) -> str:
    """The lines as one path, for an even-odd or a non-zero fill alike."""
    return "".join("M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in loop) + "z" for loop in loops)
