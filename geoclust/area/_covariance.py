"""Compiled loops for the set covariance: area of W and a shifted copy of it in common.

The boundary of the intersection is the part of each boundary that lies in the
other area. Along a ring, `inside` starts at 0 or 1 and changes by +1 or -1 at
every crossing, so the integral of (x dy - y dx)/2 over the part inside is
inside(start) * whole + sum over crossings of sign * (whole - prefix up to the
crossing): crossings may come in any order. Prefixes are summed once; shifting
a ring by h adds (h x displacement from the start)/2 to them.

Crossings are found by walking two hierarchies of boxes, that of W and the
same one shifted, side by side; leaves are runs of consecutive edges.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from geoclust.area._edges import is_inside

# edges in a leaf
LEAF = 6


class EdgeTree(NamedTuple):
    """Edges of all rings in the order of the leaves, and boxes over them (local coordinates)."""

    x0: np.ndarray  # (m,) start of each edge
    y0: np.ndarray
    x1: np.ndarray  # (m,) its end
    y1: np.ndarray
    ring: np.ndarray  # (m,) which ring it belongs to
    place: np.ndarray  # (m,) its place along the ring
    prefix: np.ndarray  # (m,) integral of (x dy - y dx)/2 from the start of the ring to that of the edge
    ring_x: np.ndarray  # (rings,) start of each ring
    ring_y: np.ndarray
    ring_whole: np.ndarray  # (rings,) integral over the whole ring
    box: np.ndarray  # (nodes, 4) smallest x, y, largest x, y
    low: np.ndarray  # (nodes,) leaves: first edge; others: left child
    high: np.ndarray  # (nodes,) leaves: one past the last edge; others: -1, the right child is low + 1


@njit(nogil=True, cache=True)
def cross(ax, ay, bx, by):
    return ax * by - ay * bx


@njit(nogil=True, cache=True, inline="always")
def apart(box, a, b, hx, hy):
    """1 if box a and the shifted box b have no point in common, else 0."""
    return int(
        (box[a, 0] > box[b, 2] + hx)
        | (box[b, 0] + hx > box[a, 2])
        | (box[a, 1] > box[b, 3] + hy)
        | (box[b, 1] + hy > box[a, 3])
    )


@njit(nogil=True, cache=True)
def common_area(tree, grid, hx, hy, stack, first_at, first_sign, balance):
    """Area of W and W + (hx, hy) in common, and whether the crossings of every ring balance.

    `stack` (s, 2), `first_at`, `first_sign` and `balance` (2 * rings,) are room to work in.
    """
    rings = tree.ring_x.size
    first_at[:] = np.inf
    balance[:] = 0
    total = 0.0
    depth = 0
    if apart(tree.box, 0, 0, hx, hy) == 0:
        stack[0, 0], stack[0, 1] = 0, 0
        depth = 1
    while depth > 0:
        depth -= 1
        a, b = stack[depth, 0], stack[depth, 1]
        leaf_a, leaf_b = tree.high[a] >= 0, tree.high[b] >= 0
        if not (leaf_a and leaf_b):
            a_low, a_high = (a, a) if leaf_a else (tree.low[a], tree.low[a] + 1)
            b_low, b_high = (b, b) if leaf_b else (tree.low[b], tree.low[b] + 1)
            for na in range(a_low, a_high + 1):
                for nb in range(b_low, b_high + 1):
                    # written, and kept only if the boxes meet: no branch to guess
                    stack[depth, 0], stack[depth, 1] = na, nb
                    depth += 1 - apart(tree.box, na, nb, hx, hy)
            continue
        west, south = tree.box[b, 0] + hx, tree.box[b, 1] + hy
        east, north = tree.box[b, 2] + hx, tree.box[b, 3] + hy
        for p in range(tree.low[a], tree.high[a]):
            px0, py0, px1, py1 = tree.x0[p], tree.y0[p], tree.x1[p], tree.y1[p]
            left, right = min(px0, px1), max(px0, px1)
            below, above = min(py0, py1), max(py0, py1)
            if left > east or right < west or below > north or above < south:
                continue
            ux, uy = px1 - px0, py1 - py0
            # the edges of a leaf follow each other: one's end is the next one's start
            first = tree.low[b]
            side1 = cross(ux, uy, tree.x0[first] + hx - px0, tree.y0[first] + hy - py0)
            for q in range(first, tree.high[b]):
                qx1, qy1 = tree.x1[q] + hx, tree.y1[q] + hy
                side0 = side1
                side1 = cross(ux, uy, qx1 - px0, qy1 - py0)
                if (side0 > 0.0) == (side1 > 0.0):
                    continue
                qx0, qy0 = tree.x0[q] + hx, tree.y0[q] + hy
                vx, vy = qx1 - qx0, qy1 - qy0
                end0 = cross(vx, vy, px0 - qx0, py0 - qy0)
                end1 = cross(vx, vy, px1 - qx0, py1 - qy0)
                if (end0 > 0.0) == (end1 > 0.0):
                    continue
                # p enters the shifted copy if it goes from the right of q to its left
                sign = 1 if end1 > 0.0 else -1
                s = end0 / (end0 - end1)
                t = side0 / (side0 - side1)
                # the same point on both rings
                x = px0 + s * ux
                y = py0 + s * uy
                rp, rq = tree.ring[p], tree.ring[q]
                upto_p = tree.prefix[p] + 0.5 * (px0 * y - py0 * x)
                bx, by = x - hx, y - hy
                upto_q = (
                    tree.prefix[q]
                    + 0.5 * (tree.x0[q] * by - tree.y0[q] * bx)
                    + 0.5 * (hx * (by - tree.ring_y[rq]) - hy * (bx - tree.ring_x[rq]))
                )
                total += sign * ((tree.ring_whole[rp] - upto_p) - (tree.ring_whole[rq] - upto_q))
                balance[rp] += sign
                balance[rings + rq] -= sign
                if tree.place[p] + s < first_at[rp]:
                    first_at[rp] = tree.place[p] + s
                    first_sign[rp] = sign
                if tree.place[q] + t < first_at[rings + rq]:
                    first_at[rings + rq] = tree.place[q] + t
                    first_sign[rings + rq] = -sign
    balanced = True
    for k in range(2 * rings):
        r = k if k < rings else k - rings
        if balance[k] != 0:
            balanced = False
        if first_at[k] < np.inf:
            inside = first_sign[k] < 0
        elif k < rings:
            inside = is_inside(grid, tree.ring_x[r] - hx, tree.ring_y[r] - hy)
        else:
            inside = is_inside(grid, tree.ring_x[r] + hx, tree.ring_y[r] + hy)
        if inside:
            total += tree.ring_whole[r]
    return total, balanced


@njit(nogil=True, cache=True)
def covariance(tree, grid, hx, hy, whole, hair, stack, first_at, first_sign, balance):
    """Set covariance at one shift; negative if no attempt had balanced crossings.

    Where edges or vertices of W and its copy fall on each other, crossings are
    undefined. A shift that is off by a hair in no particular direction has none of
    these, and changes the area by no more than the hair times the perimeter.
    """
    if hx < 0.0 or (hx == 0.0 and hy < 0.0):
        hx, hy = -hx, -hy
    if hx == 0.0 and hy == 0.0:
        return whole
    for attempt in range(12):
        turn = 0.7548776662466927 + 2.399963229728653 * attempt
        d = hair * 2.0**attempt
        found, balanced = common_area(
            tree, grid, hx + d * np.cos(turn), hy + d * np.sin(turn), stack, first_at, first_sign, balance
        )
        if balanced and -1e-8 * whole < found < whole * (1.0 + 1e-8):
            return min(max(found, 0.0), whole)
    return -1.0


@njit(nogil=True, cache=True)
def covariance_many(tree, grid, shifts, whole, hair, out):
    rings = tree.ring_x.size
    # deep enough for two hierarchies of halves over 2**60 edges
    stack = np.empty((512, 2), np.int64)
    first_at = np.empty(2 * rings)
    first_sign = np.empty(2 * rings, np.int64)
    balance = np.empty(2 * rings, np.int64)
    for k in range(shifts.shape[0]):
        out[k] = covariance(
            tree, grid, shifts[k, 0], shifts[k, 1], whole, hair, stack, first_at, first_sign, balance
        )


@njit(nogil=True, cache=True)
def fill_boxes(x0, y0, x1, y1, low, high, box):
    """Boxes of all nodes; children come after their parents."""
    for n in range(low.size - 1, -1, -1):
        if high[n] >= 0:
            box[n, 0] = box[n, 1] = np.inf
            box[n, 2] = box[n, 3] = -np.inf
            for k in range(low[n], high[n]):
                box[n, 0] = min(box[n, 0], min(x0[k], x1[k]))
                box[n, 1] = min(box[n, 1], min(y0[k], y1[k]))
                box[n, 2] = max(box[n, 2], max(x0[k], x1[k]))
                box[n, 3] = max(box[n, 3], max(y0[k], y1[k]))
        else:
            c = low[n]
            for side in range(2):
                box[n, side] = min(box[c, side], box[c + 1, side])
                box[n, 2 + side] = max(box[c, 2 + side], box[c + 1, 2 + side])


@njit(nogil=True, cache=True, inline="always")
def look_up(values, row_scale, column_scale, dx, dy, d):
    """Interpolate a table of shifts linearly at (dx, dy) of length d."""
    row = d * row_scale
    i = min(int(row), values.shape[0] - 2)
    s = row - i
    if values.shape[1] == 1:
        return (1.0 - s) * values[i, 0] + s * values[i + 1, 0]
    if dy < 0.0:
        dx, dy = -dx, -dy
    span = abs(dx) + dy
    if span == 0.0:
        return values[0, 0]
    turn = dy / span if dx >= 0.0 else 2.0 - dy / span
    column = turn * column_scale
    j = min(int(column), values.shape[1] - 2)
    t = column - j
    return (1.0 - s) * ((1.0 - t) * values[i, j] + t * values[i, j + 1]) + s * (
        (1.0 - t) * values[i + 1, j] + t * values[i + 1, j + 1]
    )


@njit(nogil=True, cache=True)
def look_up_many(values, row_scale, column_scale, shifts):
    out = np.empty(shifts.shape[0])
    for k in range(shifts.shape[0]):
        dx, dy = shifts[k, 0], shifts[k, 1]
        out[k] = look_up(values, row_scale, column_scale, dx, dy, np.sqrt(dx * dx + dy * dy))
    return out
