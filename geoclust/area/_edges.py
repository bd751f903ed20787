"""Compiled loops over the edges of a study area: grid, inside test, distance.

Edges are cut into pieces no longer than a grid cell, and every piece is filed
under the cell that holds its midpoint. A piece then reaches at most half a
cell beyond the midpoint in any direction, so a query only has to widen its
range of cells by that much, and no piece is ever met twice.

Coordinates are metres from a local origin: differences of large northings
would otherwise lose digits.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

# The reference point of a cell sits at these fractions of its sides. They are
# irrational (golden ratio and square root of two), so that no vertex of a
# polygon drawn on round coordinates falls on a line through a reference point.
REFERENCE_X = 0.6180339887498949
REFERENCE_Y = 0.4142135623730951
# more steps than any grid is wide
FAR_CELLS = 1 << 20


class EdgeGrid(NamedTuple):
    """Pieces of the boundary, sorted by grid cell; interior on their left."""

    x0: np.ndarray  # (m,) start of each piece
    y0: np.ndarray
    x1: np.ndarray  # (m,) end of each piece
    y1: np.ndarray
    first: np.ndarray  # (cells + 1,) where the pieces of each cell begin
    inside: np.ndarray  # (cells,) is the reference point of the cell in W
    quiet: np.ndarray  # (cells,) no piece in the cell or in its eight neighbours
    gap: np.ndarray  # (cells,) steps, king's moves, to the nearest cell with a piece
    left: float
    bottom: float
    cell: float
    columns: int
    rows: int


@njit(nogil=True, cache=True)
def cut_pieces(x0, y0, x1, y1, longest):
    """Cut edges into equal pieces not longer than `longest`."""
    total = 0
    for k in range(x0.size):
        total += max(1, int(np.ceil(np.hypot(x1[k] - x0[k], y1[k] - y0[k]) / longest)))
    out = np.empty((4, total))
    at = 0
    for k in range(x0.size):
        pieces = max(1, int(np.ceil(np.hypot(x1[k] - x0[k], y1[k] - y0[k]) / longest)))
        px, py = x0[k], y0[k]
        for p in range(1, pieces + 1):
            if p == pieces:
                qx, qy = x1[k], y1[k]
            else:
                share = p / pieces
                qx = x0[k] + share * (x1[k] - x0[k])
                qy = y0[k] + share * (y1[k] - y0[k])
            out[0, at], out[1, at], out[2, at], out[3, at] = px, py, qx, qy
            at += 1
            px, py = qx, qy
    return out


@njit(nogil=True, cache=True)
def file_pieces(pieces, left, bottom, cell, columns, rows):
    """Sort pieces by the cell of their midpoint; return order and cell starts."""
    count = pieces.shape[1]
    where = np.empty(count, np.int64)
    first = np.zeros(columns * rows + 1, np.int64)
    for k in range(count):
        i = int((0.5 * (pieces[0, k] + pieces[2, k]) - left) / cell)
        j = int((0.5 * (pieces[1, k] + pieces[3, k]) - bottom) / cell)
        i = min(max(i, 0), columns - 1)
        j = min(max(j, 0), rows - 1)
        where[k] = j * columns + i
        first[where[k] + 1] += 1
    for c in range(columns * rows):
        first[c + 1] += first[c]
    fill = first[:-1].copy()
    order = np.empty(count, np.int64)
    for k in range(count):
        order[fill[where[k]]] = k
        fill[where[k]] += 1
    return order, first


@njit(nogil=True, cache=True)
def mark_cells(pieces, first, left, bottom, cell, columns, rows):
    """Tell for each cell whether its reference point is in W, whether it is quiet, and its gap."""
    turns = np.zeros((rows, columns + 1), np.int32)
    for k in range(pieces.shape[1]):
        ax, ay, bx, by = pieces[0, k], pieces[1, k], pieces[2, k], pieces[3, k]
        if ay == by:
            continue
        low, high = min(ay, by), max(ay, by)
        j = max(int(np.floor((low - bottom) / cell - REFERENCE_Y)), 0)
        while j < rows:
            y = bottom + (j + REFERENCE_Y) * cell
            if y >= high:
                break
            if y >= low:
                x = ax + (y - ay) * (bx - ax) / (by - ay)
                i = int(np.ceil((x - left) / cell - REFERENCE_X))
                # an upward edge has the interior on its left: crossing it to the right leaves W
                turns[j, min(max(i, 0), columns)] += 1 if by < ay else -1
            j += 1
    inside = np.zeros(columns * rows, np.bool_)
    gap = np.empty((rows, columns), np.int32)
    for j in range(rows):
        winding = 0
        for i in range(columns):
            winding += turns[j, i]
            c = j * columns + i
            inside[c] = winding > 0
            # a sweep from the south-west, then one from the north-east
            nearest = 0 if first[c + 1] > first[c] else FAR_CELLS
            if j > 0:
                for ii in range(max(i - 1, 0), min(i + 2, columns)):
                    nearest = min(nearest, gap[j - 1, ii] + 1)
            if i > 0:
                nearest = min(nearest, gap[j, i - 1] + 1)
            gap[j, i] = nearest
    for j in range(rows - 1, -1, -1):
        for i in range(columns - 1, -1, -1):
            nearest = gap[j, i]
            if j < rows - 1:
                for ii in range(max(i - 1, 0), min(i + 2, columns)):
                    nearest = min(nearest, gap[j + 1, ii] + 1)
            if i < columns - 1:
                nearest = min(nearest, gap[j, i + 1] + 1)
            gap[j, i] = nearest
    flat = gap.reshape(columns * rows)
    return inside, flat > 1, flat


@njit(nogil=True, cache=True)
def is_inside(grid, px, py):
    """Tell whether a point lies in W, from the cell's reference point along an L-shaped path."""
    u = (px - grid.left) / grid.cell
    v = (py - grid.bottom) / grid.cell
    if u < 0.0 or v < 0.0 or u >= grid.columns or v >= grid.rows:
        return False
    i = int(u)
    j = int(v)
    home = j * grid.columns + i
    if grid.quiet[home]:
        return grid.inside[home]
    cx = grid.left + (i + REFERENCE_X) * grid.cell
    cy = grid.bottom + (j + REFERENCE_Y) * grid.cell
    odd = False
    for jj in range(max(j - 1, 0), min(j + 2, grid.rows)):
        a = grid.first[jj * grid.columns + max(i - 1, 0)]
        b = grid.first[jj * grid.columns + min(i + 1, grid.columns - 1) + 1]
        for k in range(a, b):
            ax, ay, bx, by = grid.x0[k], grid.y0[k], grid.x1[k], grid.y1[k]
            if (ay <= py) != (by <= py):
                x = ax + (py - ay) * (bx - ax) / (by - ay)
                if (x <= px) != (x <= cx):
                    odd = not odd
            if (ax <= cx) != (bx <= cx):
                y = ay + (cx - ax) * (by - ay) / (bx - ax)
                if (y <= py) != (y <= cy):
                    odd = not odd
    return grid.inside[home] != odd


@njit(nogil=True, cache=True)
def squared_distance_to_piece(px, py, ax, ay, bx, by):
    """Squared distance of a point to a straight piece."""
    dx, dy = bx - ax, by - ay
    length2 = dx * dx + dy * dy
    t = 0.0
    if length2 > 0.0:
        t = min(max(((px - ax) * dx + (py - ay) * dy) / length2, 0.0), 1.0)
    ex, ey = ax + t * dx - px, ay + t * dy - py
    return ex * ex + ey * ey


@njit(nogil=True, cache=True)
def distance_to_edges(grid, px, py, limit):
    """Distance of a point to the boundary, or `limit` if it is further away."""
    i = int(np.floor((px - grid.left) / grid.cell))
    j = int(np.floor((py - grid.bottom) / grid.cell))
    ring = max(max(-i, i - grid.columns + 1), max(-j, j - grid.rows + 1))
    ring = max(ring, 0)
    last = max(max(i, grid.columns - 1 - i), max(j, grid.rows - 1 - j))
    best = limit * limit
    while ring <= last:
        # pieces filed in this ring come no nearer than this
        nearest = (ring - 1.5) * grid.cell
        if nearest > 0.0 and nearest * nearest >= best:
            break
        for jj in range(max(j - ring, 0), min(j + ring, grid.rows - 1) + 1):
            whole = jj == j - ring or jj == j + ring
            step = 1 if whole or ring == 0 else 2 * ring
            ii = i - ring
            while ii <= i + ring:
                if 0 <= ii < grid.columns:
                    c = jj * grid.columns + ii
                    for k in range(grid.first[c], grid.first[c + 1]):
                        d2 = squared_distance_to_piece(px, py, grid.x0[k], grid.y0[k], grid.x1[k], grid.y1[k])
                        if d2 < best:
                            best = d2
                elif step == 1 and ii < 0:
                    ii = -1
                ii += step
        ring += 1
    return np.sqrt(best)


@njit(nogil=True, cache=True)
def inside_many(grid, xy, out):
    for k in range(xy.shape[0]):
        out[k] = is_inside(grid, xy[k, 0], xy[k, 1])


@njit(nogil=True, cache=True)
def distance_many(grid, xy, limit, out):
    for k in range(xy.shape[0]):
        out[k] = distance_to_edges(grid, xy[k, 0], xy[k, 1], limit)


@njit(nogil=True, cache=True)
def live_cells(grid):
    """Cells that may hold a part of W: all but the quiet ones outside."""
    count = 0
    for c in range(grid.quiet.size):
        if grid.inside[c] or not grid.quiet[c]:
            count += 1
    out = np.empty(count, np.int64)
    count = 0
    for c in range(grid.quiet.size):
        if grid.inside[c] or not grid.quiet[c]:
            out[count] = c
            count += 1
    return out


@njit(nogil=True, cache=True)
def fill_uniform(grid, cells, rng, out):
    """Draw uniform points of W: a live cell, a point in it, kept if it is inside."""
    k = 0
    while k < out.shape[0]:
        c = cells[int(rng.random() * cells.size)]
        x = grid.left + (c % grid.columns + rng.random()) * grid.cell
        y = grid.bottom + (c // grid.columns + rng.random()) * grid.cell
        if grid.quiet[c] or is_inside(grid, x, y):
            out[k, 0] = x
            out[k, 1] = y
            k += 1
