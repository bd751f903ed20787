"""Compiled look-ups in the table of kernel shares: quintic over place, cubic over log scale."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit


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


@njit(nogil=True, cache=True, inline="always")
def cubic(t):
    """Weights of four equally spaced nodes -1, 0, 1, 2 at position t."""
    return (
        -t * (t - 1.0) * (t - 2.0) / 6.0,
        (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0,
        -(t + 1.0) * t * (t - 2.0) / 2.0,
        (t + 1.0) * t * (t - 1.0) / 6.0,
    )


@njit(nogil=True, cache=True, inline="always")
def quintic(t):
    """Weights of six equally spaced nodes -2 .. 3 at position t."""
    a, b, c, d, e, f = t + 2.0, t + 1.0, t, t - 1.0, t - 2.0, t - 3.0
    ab, ef, cd = a * b, e * f, c * d
    return (
        -b * cd * ef / 120.0,
        a * cd * ef / 24.0,
        -ab * d * ef / 12.0,
        ab * c * ef / 12.0,
        -ab * cd * f / 24.0,
        ab * cd * e / 120.0,
    )


@njit(nogil=True, cache=True)
def level_share(table, level, x, y):
    """Share at one tabulated scale."""
    step = table.step[level]
    columns, rows = table.columns[level], table.rows[level]
    u = (x - table.left[level]) / step
    v = (y - table.bottom[level]) / step
    i = min(max(int(np.floor(u)), 2), columns - 4)
    j = min(max(int(np.floor(v)), 2), rows - 4)
    values = table.values
    home = table.start[level] + j * columns + i
    # away from the boundary the share is flat
    corner = values[home]
    if (corner == 0.0 or corner == 1.0) and (
        values[home - 2 * columns - 2] == corner
        and values[home - 2 * columns + 3] == corner
        and values[home + 3 * columns - 2] == corner
        and values[home + 3 * columns + 3] == corner
    ):
        return corner
    w0, w1, w2, w3, w4, w5 = quintic(u - i)
    v0, v1, v2, v3, v4, v5 = quintic(v - j)
    total = 0.0
    row = home - 2 * columns - 2
    for q in range(6):
        part = (
            w0 * values[row] + w1 * values[row + 1] + w2 * values[row + 2]
            + w3 * values[row + 3] + w4 * values[row + 4] + w5 * values[row + 5]
        )  # fmt: skip
        if q == 0:
            total += v0 * part
        elif q == 1:
            total += v1 * part
        elif q == 2:
            total += v2 * part
        elif q == 3:
            total += v3 * part
        elif q == 4:
            total += v4 * part
        else:
            total += v5 * part
        row += columns
    return min(max(total, 0.0), table.most)


@njit(nogil=True, cache=True)
def share_at(table, x, y, scale):
    """Share of the kernel round (x, y) that falls in the study area."""
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
