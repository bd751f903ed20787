"""Compiled pair sums over a cell grid: one pass, no stored pairs.

Points are sorted by square cells of a third of the largest distance, row by
row, so the neighbours of a point lie in a few contiguous runs. Every unordered
pair is met once. A pair adds w/d, w and w d to the distance class it falls
in; as an Epanechnikov kernel is a quadratic in the distance, these three
moments give the kernel sums of g exactly at every radius, whatever the
bandwidth, and the second alone gives K.

Sums go to one table per block of rows, and blocks are added in order, so the
result has the same bits for any number of threads.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from geoclust.area._circles import cross_piece, share_from_product

# cells per largest distance
FINE = 3
# rings of distance under which the pieces about a point are filed, if there are more than a few
RINGS = 128
FEW = 24


class SortedPoints(NamedTuple):
    """Points in the order of their cells (local coordinates)."""

    x: np.ndarray  # (n,)
    y: np.ndarray
    weight: np.ndarray  # (n,) factor of each point, or (0,) if all are one
    lead: np.ndarray  # (n,) one half for first points, zero for others, or (0,) if all are first points
    depth: np.ndarray  # (n,) distance to the boundary, capped at the largest distance; (0,) if unused
    first: np.ndarray  # (cells + 1,)
    columns: int
    rows: int


class Classes(NamedTuple):
    """Distance classes: edge k closes class k, the last edge is the largest distance."""

    squared: np.ndarray  # (c,) squared edges, increasing
    guess: np.ndarray  # (t,) first class that may hold a distance of this table cell
    scale: float  # table cells per metre


@njit(nogil=True, cache=True)
def cell_order(x, y, left, bottom, cell, columns, rows):
    """Counting sort of points by cell, row by row."""
    n = x.size
    where = np.empty(n, np.int32)
    first = np.zeros(columns * rows + 1, np.int32)
    for k in range(n):
        i = min(max(int((x[k] - left) / cell), 0), columns - 1)
        j = min(max(int((y[k] - bottom) / cell), 0), rows - 1)
        where[k] = j * columns + i
        first[where[k] + 1] += 1
    for c in range(columns * rows):
        first[c + 1] += first[c]
    fill = first[:-1].copy()
    order = np.empty(n, np.int32)
    for k in range(n):
        order[fill[where[k]]] = k
        fill[where[k]] += 1
    return order, first


@njit(nogil=True, cache=True)
def cell_of(first, point):
    """The cell that holds a point, by its place in the order of cells."""
    return np.searchsorted(first, point, side="right") - 1


@njit(nogil=True, cache=True)
def guess_table(squared, size):
    """For each of `size` equal steps of distance, the first class that may hold it."""
    largest = np.sqrt(squared[-1])
    guess = np.empty(size + 2, np.int32)
    c = 0
    for t in range(size + 2):
        # one step back, as the square root and the product may round
        low = max(t - 1, 0) / size * largest
        while c < squared.size - 1 and squared[c] < low * low:
            c += 1
        guess[t] = c
    return guess


@njit(nogil=True, cache=True)
def deep_cells(occupied, columns, rows, reach):
    """Cells of the edge grid with no occupied cell within `reach` cells (square neighbourhood)."""
    # two passes, along rows and then along columns
    along = np.zeros((rows, columns), np.bool_)
    for j in range(rows):
        last = -10 * reach - 10
        for i in range(columns):
            if occupied[j * columns + i]:
                last = i
            along[j, i] = i - last <= reach
        last = columns + 10 * reach + 10
        for i in range(columns - 1, -1, -1):
            if occupied[j * columns + i]:
                last = i
            along[j, i] = along[j, i] or last - i <= reach
    deep = np.ones(columns * rows, np.bool_)
    for i in range(columns):
        last = -10 * reach - 10
        for j in range(rows):
            if along[j, i]:
                last = j
            deep[j * columns + i] = j - last > reach
        last = rows + 10 * reach + 10
        for j in range(rows - 1, -1, -1):
            if along[j, i]:
                last = j
            deep[j * columns + i] = deep[j * columns + i] and last - j > reach
    return deep


@njit(nogil=True, cache=True)
def add_pairs(points, classes, low, high, out):
    """Add the weights of all unordered pairs whose first point is one of `low` to `high`, twice.

    `out` is (classes, 3): sums of w/d, w and w d. Coincident pairs are counted
    in w alone: their distance is zero.
    """
    x, y, weight, first, columns = points.x, points.y, points.weight, points.first, points.columns
    weighted = weight.size > 0
    led = points.lead.size > 0
    last = classes.squared[-1]
    # squared distances of a run of candidates, and which of them are near enough
    near_d2 = np.empty(1024)
    near_k = np.empty(1024, np.int64)
    for c in range(cell_of(first, low), first.size - 1):
        if first[c] >= high:
            break
        j = c // columns
        i = c - j * columns
        for a in range(max(first[c], low), min(first[c + 1], high)):
            ax, ay = x[a], y[a]
            for up in range(FINE + 1):
                jj = j + up
                if jj >= points.rows:
                    break
                if up == 0:
                    run = a + 1
                else:
                    run = first[jj * columns + max(i - FINE, 0)]
                end = first[jj * columns + min(i + FINE, columns - 1) + 1]
                while run < end:
                    stop = min(end, run + 1024)
                    found = 0
                    for b in range(run, stop):
                        dx = x[b] - ax
                        dy = y[b] - ay
                        d2 = dx * dx + dy * dy
                        near_d2[found] = d2
                        near_k[found] = b
                        found += 1 if d2 <= last else 0
                    for h in range(found):
                        d2 = near_d2[h]
                        d = np.sqrt(d2)
                        w = 2.0
                        if weighted:
                            w *= weight[a] * weight[near_k[h]]
                        if led:
                            w *= points.lead[a] + points.lead[near_k[h]]
                        k = classes.guess[int(d * classes.scale)]
                        while d2 > classes.squared[k]:
                            k += 1
                        if d2 > 0.0:
                            out[k, 0] += w / d
                        out[k, 1] += w
                        out[k, 2] += w * d
                    run = stop


@njit(nogil=True, cache=True)
def distance_capped(grid, px, py, limit):
    """Distance to the boundary, capped; scans the few cells within `limit`."""
    reach = limit + 0.5 * grid.cell
    i_low = max(int(np.floor((px - reach - grid.left) / grid.cell)), 0)
    i_high = min(int(np.floor((px + reach - grid.left) / grid.cell)), grid.columns - 1)
    j_low = max(int(np.floor((py - reach - grid.bottom) / grid.cell)), 0)
    j_high = min(int(np.floor((py + reach - grid.bottom) / grid.cell)), grid.rows - 1)
    best = limit * limit
    for j in range(j_low, j_high + 1):
        base = j * grid.columns
        for k in range(grid.first[base + i_low], grid.first[base + max(i_high, i_low - 1) + 1]):
            ax, ay = grid.x0[k] - px, grid.y0[k] - py
            dx, dy = grid.x1[k] - px - ax, grid.y1[k] - py - ay
            t = min(max(-(ax * dx + ay * dy) / (dx * dx + dy * dy), 0.0), 1.0)
            ex, ey = ax + t * dx, ay + t * dy
            d2 = ex * ex + ey * ey
            if d2 < best:
                best = d2
    return np.sqrt(best)


@njit(nogil=True, cache=True)
def fill_depths(grid, deep, x, y, limit, out):
    """Distance of points to the boundary, capped at `limit`."""
    for k in range(x.size):
        i = int((x[k] - grid.left) / grid.cell)
        j = int((y[k] - grid.bottom) / grid.cell)
        if 0 <= i < grid.columns and 0 <= j < grid.rows and deep[j * grid.columns + i]:
            out[k] = limit
        else:
            out[k] = distance_capped(grid, x[k], y[k], limit)


@njit(nogil=True, cache=True)
def pieces_about(grid, cx, cy, reach, pieces, spans):
    """List the pieces within `reach` of a centre, relative to it, and their nearest and furthest distances.

    Returns how many there are and both lists, longer ones if they were too short.
    """
    found = 0
    wide = reach + 0.5 * grid.cell
    i_low = max(int(np.floor((cx - wide - grid.left) / grid.cell)), 0)
    i_high = min(int(np.floor((cx + wide - grid.left) / grid.cell)), grid.columns - 1)
    j_low = max(int(np.floor((cy - wide - grid.bottom) / grid.cell)), 0)
    j_high = min(int(np.floor((cy + wide - grid.bottom) / grid.cell)), grid.rows - 1)
    for j in range(j_low, j_high + 1):
        base = j * grid.columns
        k_low, k_high = grid.first[base + i_low], grid.first[base + i_high + 1]
        if found + k_high - k_low > pieces.shape[0]:
            more = np.empty((2 * (found + k_high - k_low), 4))
            more[:found] = pieces[:found]
            pieces = more
            wider = np.empty((more.shape[0], 2))
            wider[:found] = spans[:found]
            spans = wider
        for k in range(k_low, k_high):
            ax, ay = grid.x0[k] - cx, grid.y0[k] - cy
            bx, by = grid.x1[k] - cx, grid.y1[k] - cy
            ux, uy = bx - ax, by - ay
            t = min(max(-(ax * ux + ay * uy) / (ux * ux + uy * uy), 0.0), 1.0)
            px, py = ax + t * ux, ay + t * uy
            near2 = px * px + py * py
            if near2 < reach * reach:
                pieces[found, 0], pieces[found, 1] = ax, ay
                pieces[found, 2], pieces[found, 3] = bx, by
                spans[found, 0] = near2
                spans[found, 1] = max(ax * ax + ay * ay, bx * bx + by * by)
                found += 1
    return found, pieces, spans


@njit(nogil=True, cache=True)
def file_by_distance(spans, found, scale, first, filed):
    """File pieces under the rings of distance that they reach into; returns the list, grown if need be.

    A circle then only meets the pieces of its own ring. Limits are widened by far
    more than rounding, so that no piece with ends on both sides of a circle is missed.
    """
    rings = first.size - 1
    first[:] = 0
    for k in range(found):
        low = min(int(np.sqrt(spans[k, 0]) * scale * (1.0 - 1e-9)), rings - 1)
        high = min(int(np.sqrt(spans[k, 1]) * scale * (1.0 + 1e-9)), rings - 1)
        # kept for the second pass
        spans[k, 0], spans[k, 1] = low, high
        for ring in range(low, high + 1):
            first[ring] += 1
    # first[ring] ends each ring, until filling it from the back makes it the beginning
    for ring in range(1, rings):
        first[ring] += first[ring - 1]
    total = first[rings - 1]
    first[rings] = total
    if total > filed.size:
        filed = np.empty(2 * total, np.int64)
    for k in range(found - 1, -1, -1):
        for ring in range(int(spans[k, 0]), int(spans[k, 1]) + 1):
            first[ring] -= 1
            filed[first[ring]] = k
    return filed


@njit(nogil=True, cache=True)
def add_isotropic_excess(points, grid, classes, low, high, out):
    """Add (1/share - 1) for every ordered pair whose first point is near the boundary."""
    x, y, weight, first, columns = points.x, points.y, points.weight, points.first, points.columns
    weighted = weight.size > 0
    led = points.lead.size > 0
    last = classes.squared[-1]
    largest = np.sqrt(last)
    pieces, spans = np.empty((256, 4)), np.empty((256, 2))
    ring_first, filed = np.zeros(RINGS + 1, np.int64), np.empty(1024, np.int64)
    scale = RINGS / largest
    for c in range(cell_of(first, low), first.size - 1):
        if first[c] >= high:
            break
        j = c // columns
        i = c - j * columns
        for a in range(max(first[c], low), min(first[c + 1], high)):
            if points.depth[a] >= largest or (led and points.lead[a] == 0.0):
                continue
            ax, ay = x[a], y[a]
            depth2 = points.depth[a] * points.depth[a]
            found, pieces, spans = pieces_about(grid, ax, ay, largest, pieces, spans)
            many = found > FEW
            if many:
                filed = file_by_distance(spans, found, scale, ring_first, filed)
            for jj in range(max(j - FINE, 0), min(j + FINE, points.rows - 1) + 1):
                run = first[jj * columns + max(i - FINE, 0)]
                end = first[jj * columns + min(i + FINE, columns - 1) + 1]
                for b in range(run, end):
                    dx, dy = x[b] - ax, y[b] - ay
                    d2 = dx * dx + dy * dy
                    if d2 > last or d2 <= depth2 or a == b:
                        continue
                    d = np.sqrt(d2)
                    re, im, crossings = 1.0, 0.0, 0
                    if many:
                        ring = min(int(d * scale), RINGS - 1)
                        k_low, k_high = ring_first[ring], ring_first[ring + 1]
                    else:
                        k_low, k_high = 0, found
                    for k in range(k_low, k_high):
                        p = filed[k] if many else k
                        re, im, more = cross_piece(
                            pieces[p, 0], pieces[p, 1], pieces[p, 2], pieces[p, 3], d2, re, im
                        )
                        crossings += more
                    share = share_from_product(grid, ax, ay, d, re, im, crossings)
                    if share <= 0.0:
                        # the neighbour lies on this circle and in W: only rounding brings us here
                        continue
                    w = 1.0 / share - 1.0
                    if weighted:
                        w *= weight[a] * weight[b]
                    k = classes.guess[int(d * classes.scale)]
                    while d2 > classes.squared[k]:
                        k += 1
                    if d2 > 0.0:
                        out[k, 0] += w / d
                    out[k, 1] += w
                    out[k, 2] += w * d
