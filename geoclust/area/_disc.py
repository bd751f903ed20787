"""Compiled loop for the share of a disc that lies in the study area.

As for the Gaussian (`_gaussian`), the share is the winding number less what
lies beyond the edges: for the part of an edge inside the disc, the sector
under it less the triangle. Closed form, and only edges that reach into the
disc count.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from geoclust.area._edges import is_inside


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
    for j in range(j_low, j_high + 1):
        base = j * grid.columns
        for k in range(grid.first[base + i_low], grid.first[base + i_high + 1]):
            ax, ay = grid.x0[k] - cx, grid.y0[k] - cy
            ux, uy = grid.x1[k] - cx - ax, grid.y1[k] - cy - ay
            length = np.sqrt(ux * ux + uy * uy)
            ux /= length
            uy /= length
            h = ax * uy - ay * ux
            if abs(h) >= radius:
                continue
            span = np.sqrt(radius * radius - h * h)
            ta = ax * ux + ay * uy
            t0, t1 = max(ta, -span), min(ta + length, span)
            if t1 <= t0:
                continue
            turn = np.arctan2(h * (t1 - t0), h * h + t0 * t1)
            share -= (turn - h * (t1 - t0) / (radius * radius)) / (2.0 * np.pi)
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
