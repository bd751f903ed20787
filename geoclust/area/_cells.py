"""Compiled loop for the exact area of the study area in every cell of a raster grid."""

from __future__ import annotations

import numpy as np
from numba import njit

# shares below this are what rounding leaves of sums over edges: the cell lies outside
ROUNDING = 1e-12


@njit(nogil=True, cache=True)
def cell_cover(x0, y0, x1, y1, columns, rows):
    """Area of W in each unit cell of a grid, edges given in units of cells.

    Each edge is cut at the grid lines. A piece that rises by dy in column i
    changes, in its row, the covered area of every cell to its right by dy and
    of its own cell by dy times the part to the right of the piece: one prefix
    sum per row collects it (Green's theorem, cell by cell).
    """
    own = np.zeros((rows, columns))
    right = np.zeros((rows, columns + 1))
    for k in range(x0.size):
        ax, ay, bx, by = x0[k], y0[k], x1[k], y1[k]
        if ay == by:
            continue
        low, high = max(min(ay, by), 0.0), min(max(ay, by), float(rows))
        if high <= low:
            continue
        sign = -1.0 if by > ay else 1.0  # interior on the left: a rising edge closes W to its right
        slope = (bx - ax) / (by - ay)
        j = int(low)
        y = low
        while y < high and j < rows:
            y_next = min(float(j + 1), high)
            xa = ax + (y - ay) * slope
            xb = ax + (y_next - ay) * slope
            left, far = min(xa, xb), max(xa, xb)
            rise = y_next - y
            run = far - left
            # part left of the grid: all cells of the row are to its right
            if far <= 0.0:
                right[j, 0] += sign * rise
            elif left < columns:
                if left < 0.0:
                    right[j, 0] += sign * rise * (-left / run)
                    i = 0
                    x = 0.0
                else:
                    i = int(left)
                    x = left
                end = min(far, float(columns))
                if run == 0.0:
                    own[j, i] += sign * rise * (i + 1 - x)
                    right[j, i + 1] += sign * rise
                else:
                    while x < end and i < columns:
                        x_next = min(float(i + 1), end)
                        part = rise * (x_next - x) / run
                        own[j, i] += sign * part * (i + 1 - 0.5 * (x + x_next))
                        right[j, i + 1] += sign * part
                        x = x_next
                        i += 1
            y = y_next
            j += 1
    for j in range(rows):
        total = 0.0
        for i in range(columns):
            total += right[j, i]
            cover = own[j, i] + total
            own[j, i] = min(cover, 1.0) if cover > ROUNDING else 0.0
    return own
