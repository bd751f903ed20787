"""Compiled pair sums for edge weights that hang on the pair's shift, or on the centre's depth."""

from __future__ import annotations

import numpy as np
from numba import njit

from geoclust.area._covariance import covariance, look_up
from geoclust.curves._pairs import FINE, cell_of


@njit(nogil=True, cache=True)
def candidates(points, i, j):
    """Most partners that a point of cell (i, j) can have among those that come after it."""
    columns, first = points.columns, points.first
    most = 0
    for jj in range(j, min(j + FINE, points.rows - 1) + 1):
        left = i if jj == j else max(i - FINE, 0)
        most += first[jj * columns + min(i + FINE, columns - 1) + 1] - first[jj * columns + left]
    return most


@njit(nogil=True, cache=True)
def gather(points, a, i, j, last, near):
    """List the partners of point `a` of cell (i, j) that come after it and are near enough."""
    x, y, first, columns = points.x, points.y, points.first, points.columns
    ax, ay = x[a], y[a]
    found = 0
    for jj in range(j, min(j + FINE, points.rows - 1) + 1):
        run = a + 1 if jj == j else first[jj * columns + max(i - FINE, 0)]
        end = first[jj * columns + min(i + FINE, columns - 1) + 1]
        for b in range(run, end):
            dx, dy = x[b] - ax, y[b] - ay
            near[found] = b
            found += 1 if dx * dx + dy * dy <= last else 0
    return found


@njit(nogil=True, cache=True)
def pair_factor(points, a, b):
    """Product of the factors of both points, twice if both are first points."""
    factor = 2.0
    if points.weight.size > 0:
        factor *= points.weight[a] * points.weight[b]
    if points.lead.size > 0:
        factor *= points.lead[a] + points.lead[b]
    return factor


@njit(nogil=True, cache=True)
def add_shifted_pairs(points, classes, table, low_share, tree, grid, whole, hair, low, high, out):
    """Add pairs weighted by |W| over the set covariance of their shift.

    Read from the table, or computed exactly where the table is below `low_share`.
    """
    x, y, first, columns = points.x, points.y, points.first, points.columns
    last = classes.squared[-1]
    near = np.empty(256, np.int64)
    rings = tree.ring_x.size
    stack = np.empty((512, 2), np.int64)
    first_at = np.empty(2 * rings)
    first_sign = np.empty(2 * rings, np.int64)
    balance = np.empty(2 * rings, np.int64)
    for c in range(cell_of(first, low), first.size - 1):
        if first[c] >= high:
            break
        if first[c + 1] == first[c]:
            continue
        j = c // columns
        i = c - j * columns
        most = candidates(points, i, j) + 1
        if most > near.size:
            near = np.empty(2 * most, np.int64)
        for a in range(max(first[c], low), min(first[c + 1], high)):
            found = gather(points, a, i, j, last, near)
            for h in range(found):
                b = near[h]
                dx, dy = x[b] - x[a], y[b] - y[a]
                d2 = dx * dx + dy * dy
                d = np.sqrt(d2)
                share = look_up(table.values, table.row_scale, table.column_scale, dx, dy, d)
                if share < low_share:
                    exact = covariance(tree, grid, dx, dy, whole, hair, stack, first_at, first_sign, balance)
                    share = exact / whole if exact >= 0.0 else share
                if share <= 0.0:
                    # both points lie in W, so only rounding brings us here
                    continue
                w = pair_factor(points, a, b) / share
                k = classes.guess[int(d * classes.scale)]
                while d2 > classes.squared[k]:
                    k += 1
                if d2 > 0.0:
                    out[k, 0] += w / d
                out[k, 1] += w
                out[k, 2] += w * d


@njit(nogil=True, cache=True)
def add_deep_pairs(points, classes, limits, eroded, eroded_scale, low, high, out):
    """Add ordered pairs whose first point is no nearer to the boundary than to the second.

    `eroded` is a table of the share of W that is deeper than a distance. Columns of
    `out`: sums of w/d, w and w d with w divided by that share at d; and factors that
    make, summed up to a limit, the pairs below the limit whose first point is deeper
    than the limit.
    """
    x, y, first, columns = points.x, points.y, points.first, points.columns
    weighted = points.weight.size > 0
    led = points.lead.size > 0
    last = classes.squared[-1]
    near = np.empty(256, np.int64)
    for c in range(cell_of(first, low), first.size - 1):
        if first[c] >= high:
            break
        if first[c + 1] == first[c]:
            continue
        j = c // columns
        i = c - j * columns
        most = candidates(points, i, j) + 1
        if most > near.size:
            near = np.empty(2 * most, np.int64)
        for a in range(max(first[c], low), min(first[c + 1], high)):
            found = gather(points, a, i, j, last, near)
            for h in range(found):
                b = near[h]
                dx, dy = x[b] - x[a], y[b] - y[a]
                d2 = dx * dx + dy * dy
                d = np.sqrt(d2)
                if points.depth[a] < d and points.depth[b] < d:
                    continue
                share = look_up(eroded, eroded_scale, 0.0, dx, dy, d)
                if share <= 0.0:
                    # a point is that deep, so only rounding brings us here
                    continue
                factor = points.weight[a] * points.weight[b] if weighted else 1.0
                k = classes.guess[int(d * classes.scale)]
                while d2 > classes.squared[k]:
                    k += 1
                for side in range(2):
                    centre = a if side == 0 else b
                    depth = points.depth[centre]
                    if depth < d or (led and points.lead[centre] == 0.0):
                        continue
                    w = factor / share
                    if d2 > 0.0:
                        out[k, 0] += w / d
                    out[k, 1] += w
                    out[k, 2] += w * d
                    out[k, 3] += factor
                    until = np.searchsorted(limits, depth, side="right")
                    if until < limits.size:
                        out[until, 3] -= factor
