"""Compiled look-ups in the table of kernel shares: quintic over place, cubic over log scale.

A heavy tail makes shares vary everywhere, so they are not tabulated but summed up over the
boundary when they are asked for; only thinning, if there is any, and what centres outside the
widened study area add, come from a table.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from geoclust.area._cauchy import Chains, cauchy_share

# of a share, per chain of edges taken together, some tens of them
SHARE_TOLERANCE = 1e-6


class ShareTable(NamedTuple):
    """Share of a kernel that falls in the study area, tabulated over place and log scale."""

    values: np.ndarray  # (total,) levels one after the other, row by row
    start: np.ndarray  # (levels,) where each level begins
    left: np.ndarray  # (levels,)
    bottom: np.ndarray
    step: np.ndarray
    columns: np.ndarray
    rows: np.ndarray
    log_scale: float  # of level 0
    log_step: float
    most: float  # no share is larger: 1, or more where offspring are thinned relative to the mean
    chains: Chains  # the boundary, for a heavy tail; otherwise empty
    far: np.ndarray  # (levels, 1) per centre, share of points from outside the widened study area


@njit(nogil=True, cache=True, inline="always")
def cubic(t):
    """Weights of four equally spaced nodes -1, 0, 1, 2 at position t."""
    return (
        -t * (t - 1.0) * (t - 2.0) / 6.0,
        (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0,
        -(t + 1.0) * t * (t - 2.0) / 2.0,
        (t + 1.0) * t * (t - 1.0) / 6.0,
    )


@njit(nogil=True, cache=True)
def level_share(table, level, x, y):
    """Share at one tabulated scale."""
    step = table.step[level]
    columns, rows = table.columns[level], table.rows[level]
    u = (x - table.left[level]) / step
    v = (y - table.bottom[level]) / step
    i = min(max(int(np.floor(u)), 1), columns - 3)
    j = min(max(int(np.floor(v)), 1), rows - 3)
    values = table.values
    row = table.start[level] + (j - 1) * columns + i - 1
    # away from the boundary the share is flat
    corner = values[row]
    if (corner == 0.0 or corner == 1.0) and (
        values[row + 3] == corner
        and values[row + 3 * columns] == corner
        and values[row + 3 * columns + 3] == corner
    ):
        return corner
    w0, w1, w2, w3 = cubic(u - i)
    v0, v1, v2, v3 = cubic(v - j)
    p0 = w0 * values[row] + w1 * values[row + 1] + w2 * values[row + 2] + w3 * values[row + 3]
    row += columns
    p1 = w0 * values[row] + w1 * values[row + 1] + w2 * values[row + 2] + w3 * values[row + 3]
    row += columns
    p2 = w0 * values[row] + w1 * values[row + 1] + w2 * values[row + 2] + w3 * values[row + 3]
    row += columns
    p3 = w0 * values[row] + w1 * values[row + 1] + w2 * values[row + 2] + w3 * values[row + 3]
    return min(max(v0 * p0 + v1 * p1 + v2 * p2 + v3 * p3, 0.0), table.most)


@njit(nogil=True, cache=True)
def blend_levels(table, scale, values, factor, out):
    """Add `factor` times the values (levels, n) at one scale to `out`, cubic over the log scale."""
    if table.start.size == 1:
        out += factor * values[0]
        return
    t = (np.log(scale) - table.log_scale) / table.log_step
    base = min(max(int(np.floor(t)), 1), table.start.size - 3)
    w0, w1, w2, w3 = cubic(t - base)
    out += factor * (
        w0 * values[base - 1] + w1 * values[base] + w2 * values[base + 1] + w3 * values[base + 2]
    )


@njit(nogil=True, cache=True)
def share_at(table, x, y, scale):
    """Share of the kernel round (x, y) that falls in the study area, and of what it stands for outside."""
    if table.chains.after.size == 0:
        return tabulated(table, x, y, scale)
    total = np.zeros(1)
    blend_levels(table, scale, table.far, 1.0, total)
    share = cauchy_share(table.chains, x, y, scale, SHARE_TOLERANCE)
    # the table holds the mean thinning then
    return total[0] + (share if table.values.size == 0 else share * tabulated(table, x, y, scale))


@njit(nogil=True, cache=True)
def sum_of_shares(table, centres, scale):
    """Sum of the shares of centres (n, 2)."""
    total = 0.0
    for k in range(centres.shape[0]):
        total += share_at(table, centres[k, 0], centres[k, 1], scale)
    return total


@njit(nogil=True, cache=True)
def tabulated(table, x, y, scale):
    """Value of the table at a place and a scale."""
    levels = table.start.size
    if levels == 1:
        return level_share(table, 0, x, y)
    t = (np.log(scale) - table.log_scale) / table.log_step
    base = min(max(int(np.floor(t)), 1), levels - 3)
    # levels of a place deep inside or far outside agree: one look is enough
    widest = level_share(table, min(base + 2, levels - 1), x, y)
    if widest == 0.0 or widest == 1.0:
        return widest
    w0, w1, w2, w3 = cubic(t - base)
    total = (
        w0 * level_share(table, base - 1, x, y)
        + w1 * level_share(table, base, x, y)
        + w2 * level_share(table, base + 1, x, y)
        + w3 * widest
    )
    return min(max(total, 0.0), table.most)
