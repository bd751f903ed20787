"""Compiled search for the nearest point over a cell grid."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit


class CellPoints(NamedTuple):
    """Points in the order of their square cells (local coordinates)."""

    x: np.ndarray  # (n,)
    y: np.ndarray
    first: np.ndarray  # (cells + 1,) where the points of each cell begin
    left: float
    bottom: float
    cell: float
    columns: int
    rows: int


@njit(nogil=True, cache=True)
def nearest_distances(points, x, y, limit, itself, out):
    """Distance of each place to the nearest point, or `limit` if none is nearer.

    With `itself`, the places are the points in their order, and each one skips itself.
    """
    first, columns, rows, cell = points.first, points.columns, points.rows, points.cell
    for q in range(x.size):
        i = int(np.floor((x[q] - points.left) / cell))
        j = int(np.floor((y[q] - points.bottom) / cell))
        # a place outside the grid begins with the first ring that meets the grid
        ring = max(max(max(-i, i - columns + 1), max(-j, j - rows + 1)), 0)
        last = max(max(i, columns - 1 - i), max(j, rows - 1 - j))
        best = limit * limit
        while ring <= last:
            # points of this ring come no nearer than this
            nearest = (ring - 1.0) * cell
            if nearest > 0.0 and nearest * nearest >= best:
                break
            for jj in range(max(j - ring, 0), min(j + ring, rows - 1) + 1):
                if jj == j - ring or jj == j + ring:
                    k_low = first[jj * columns + min(max(i - ring, 0), columns - 1)]
                    k_high = first[jj * columns + min(max(i + ring, 0), columns - 1) + 1]
                    best = _nearest_in(points, k_low, k_high, x[q], y[q], q if itself else -1, best)
                else:
                    for side in range(2):
                        ii = i - ring if side == 0 else i + ring
                        if 0 <= ii < columns:
                            c = jj * columns + ii
                            best = _nearest_in(
                                points, first[c], first[c + 1], x[q], y[q], q if itself else -1, best
                            )
            ring += 1
        out[q] = np.sqrt(best)


@njit(nogil=True, cache=True)
def _nearest_in(points, k_low, k_high, px, py, skip, best):
    for k in range(k_low, k_high):
        dx, dy = points.x[k] - px, points.y[k] - py
        d2 = dx * dx + dy * dy
        if d2 < best and k != skip:
            best = d2
    return best
