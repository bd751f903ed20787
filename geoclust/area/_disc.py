"""Compiled loop for the share of a disc that lies in the study area.

As for the Gaussian (`_gaussian`), the share is the winding number less what
lies beyond the edges: for the part of an edge inside the disc, the sector
under it less the triangle. Closed form, and only edges that reach into the
disc count.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from geoclust.area._edges import REFERENCE_X, REFERENCE_Y, is_inside


@njit(nogil=True, cache=True)
def piece_deficit(ax, ay, bx, by, radius):
    """Sector less triangle under the part of one piece inside the disc, as a share of the disc."""
    ux, uy = bx - ax, by - ay
    length = np.sqrt(ux * ux + uy * uy)
    ux /= length
    uy /= length
    h = ax * uy - ay * ux
    if abs(h) >= radius:
        return 0.0
    span = np.sqrt(radius * radius - h * h)
    ta = ax * ux + ay * uy
    t0, t1 = max(ta, -span), min(ta + length, span)
    if t1 <= t0:
        return 0.0
    turn = np.arctan2(h * (t1 - t0), h * h + t0 * t1)
    return (turn - h * (t1 - t0) / (radius * radius)) / (2.0 * np.pi)


@njit(nogil=True, cache=True)
def disc_share(grid, cx, cy, radius):
    """Share of the area of the disc round (cx, cy) that lies in W."""
    reach = radius + 0.5 * grid.cell
    i_low = max(int(np.floor((cx - reach - grid.left) / grid.cell)), 0)
    i_high = min(int(np.floor((cx + reach - grid.left) / grid.cell)), grid.columns - 1)
    j_low = max(int(np.floor((cy - reach - grid.bottom) / grid.cell)), 0)
    j_high = min(int(np.floor((cy + reach - grid.bottom) / grid.cell)), grid.rows - 1)
    share = 1.0 if is_inside(grid, cx, cy) else 0.0
    if i_low > i_high:
        return share
    deficit = 0.0
    # on a vertex the angles of its two edges are undefined: a step of a hair tells them
    for step in range(2):
        hair = step * (1e-12 * radius + 4e-16 * (abs(cx) + abs(cy)))
        px, py = cx + hair * REFERENCE_X, cy + hair * REFERENCE_Y
        deficit, on_vertex = 0.0, False
        for j in range(j_low, j_high + 1):
            base = j * grid.columns
            for k in range(grid.first[base + i_low], grid.first[base + i_high + 1]):
                ax, ay = grid.x0[k] - px, grid.y0[k] - py
                if ax == 0.0 and ay == 0.0:
                    on_vertex = True
                    break
                deficit += piece_deficit(ax, ay, grid.x1[k] - px, grid.y1[k] - py, radius)
        if not on_vertex:
            break
    share -= deficit
    # a centre exactly on an edge may be counted on either side of it, a whole turn apart
    if share < -1e-6:
        share += 1.0
    elif share > 1.0 + 1e-6:
        share -= 1.0
    return min(max(share, 0.0), 1.0)


@njit(nogil=True, cache=True)
def disc_many(grid, centres, radius, out):
    for k in range(centres.shape[0]):
        out[k] = disc_share(grid, centres[k, 0], centres[k, 1], radius)
