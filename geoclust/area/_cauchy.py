"""Compiled loops for the share of a Cauchy kernel that falls in the study area.

Looked at from the height omega above its centre, the kernel omega / (2 pi (r² + omega²)^(3/2)) is the
solid angle that a piece of ground fills, in hemispheres. The share of the study area is therefore the
solid angle of a polygon: a sum over edges of signed triangles with the foot of the height, each in
closed form (Van Oosterom & Strackee 1983, IEEE Transactions on Biomedical Engineering 30: 125-126).
Half of the sum lies in [0, pi], so it is the argument of one product of complex numbers. Nothing is
singular: a centre may lie on an edge or a vertex.

The tail is so long that every edge counts. Chains of edges far from the centre are therefore taken
together: their chord by the same closed form, and what lies between chain and chord by its area and
its first and second moments, where the terms left out are provably below a tolerance. The derivatives
of (r² + omega²)^(-3/2) are bounded by Gegenbauer's polynomials: the third term of the expansion by ten
times the third moment over the sixth power of the distance.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

# columns of a chain: its ends, middle, area between chain and chord, moments about the middle, radius
# squared, bound of the third absolute moment
AX, AY, BX, BY, MX, MY, AREA, FX, FY, FXX, FXY, FYY, REACH2, THIRD = range(14)
# of a chain not wider than half of its distance: all terms from the third on over the third alone
LATER_TERMS = 3.5
# factors between two times that the product is brought back to length one
RENORM = 64


class Chains(NamedTuple):
    """The boundary as a hierarchy of chains of edges, in preorder.

    Rings that lie together form groups, halved again and again down to a ring, and rings chains of
    edges, halved down to an edge. A group has no chord: both its ends are its middle.
    """

    form: np.ndarray  # (nodes, 14)
    after: np.ndarray  # (nodes,) int, the next chain that is no part of this one; a leaf is one edge


@njit(nogil=True, cache=True)
def describe(starts, ends, first, last, whole, out):
    """Fill one row: the chain of edges first ... last - 1 of one ring, or of whole rings."""
    ax, ay, bx, by = starts[first, 0], starts[first, 1], ends[last - 1, 0], ends[last - 1, 1]
    x0, x1, y0, y1 = ax, ax, ay, ay
    for k in range(first, last):
        x0, x1 = min(x0, ends[k, 0]), max(x1, ends[k, 0])
        y0, y1 = min(y0, ends[k, 1]), max(y1, ends[k, 1])
    mx, my = 0.5 * (x0 + x1), 0.5 * (y0 + y1)
    if whole:
        ax, ay, bx, by = mx, my, mx, my
    out[:] = 0.0
    out[AX], out[AY], out[BX], out[BY], out[MX], out[MY] = ax, ay, bx, by, mx, my
    # whole rings close by themselves; a chain is closed along its chord
    for k in range(first, last if whole else last + 1):
        if k < last:
            px, py, qx, qy = starts[k, 0] - mx, starts[k, 1] - my, ends[k, 0] - mx, ends[k, 1] - my
        else:
            px, py, qx, qy = bx - mx, by - my, ax - mx, ay - my
        cross = px * qy - py * qx
        out[AREA] += cross / 2.0
        out[FX] += (px + qx) * cross / 6.0
        out[FY] += (py + qy) * cross / 6.0
        out[FXX] += (px * px + px * qx + qx * qx) * cross / 12.0
        out[FYY] += (py * py + py * qy + qy * qy) * cross / 12.0
        out[FXY] += (px * qy + 2.0 * px * py + 2.0 * qx * qy + qx * py) * cross / 24.0
        furthest = max(px * px + py * py, qx * qx + qy * qy)
        out[REACH2] = max(out[REACH2], furthest)
        # the third moment of a triangle about its corner, no smaller than it can be
        out[THIRD] += abs(cross) / 2.0 * 0.4 * furthest * np.sqrt(furthest)


@njit(nogil=True, cache=True)
def neighbours_in_a_row(middles):
    """Order of rings in which each half, each quarter, ... lies together: cut across the longer side."""
    order = np.arange(middles.shape[0])
    first, last, count = np.empty(128, np.int64), np.empty(128, np.int64), 1
    first[0], last[0] = 0, order.size
    while count > 0:
        count -= 1
        a, b = first[count], last[count]
        if b - a < 3:
            continue
        x, y = middles[order[a:b], 0], middles[order[a:b], 1]
        along = x if x.max() - x.min() > y.max() - y.min() else y
        order[a:b] = order[a:b][np.argsort(along)]
        middle = (a + b) // 2
        first[count], last[count] = middle, b
        first[count + 1], last[count + 1] = a, middle
        count += 2
    return order


@njit(nogil=True, cache=True)
def chain_tree(starts, ends, ring_sizes):
    """Build the hierarchy over all rings, given the starts and ends of their edges in order."""
    rings = ring_sizes.size
    begin = np.zeros(rings + 1, np.int64)
    middles = np.empty((rings, 2))
    for r in range(rings):
        begin[r + 1] = begin[r] + ring_sizes[r]
        for d in range(2):
            at = starts[begin[r] : begin[r + 1], d]
            middles[r, d] = 0.5 * (at.min() + at.max())
    # edges ring by ring, in the order in which rings are grouped
    x, y, place = np.empty_like(starts), np.empty_like(ends), np.zeros(rings + 1, np.int64)
    order = neighbours_in_a_row(middles)
    for k in range(rings):
        r = order[k]
        place[k + 1] = place[k] + ring_sizes[r]
        x[place[k] : place[k + 1]] = starts[begin[r] : begin[r + 1]]
        y[place[k] : place[k + 1]] = ends[begin[r] : begin[r + 1]]
    # a binary tree over m edges has 2 m - 1 nodes
    form = np.empty((2 * starts.shape[0] - 1, 14))
    after = np.empty(form.shape[0], np.int64)
    first, last, count = np.empty(128, np.int64), np.empty(128, np.int64), 1
    # rings are told from edges by their sign: -1 - ring
    first[0], last[0] = -1, -1 - rings
    node = 0
    while count > 0:
        count -= 1
        a, b = first[count], last[count]
        if a < 0:
            p, q = -1 - a, -1 - b
            if q - p == 1:
                a, b = place[p], place[q]
            else:
                describe(x, y, place[p], place[q], True, form[node])
                after[node] = node + 2 * (place[q] - place[p]) - 1
                middle = -1 - (p + q) // 2
        if a >= 0:
            describe(x, y, a, b, False, form[node])
            after[node] = node + 2 * (b - a) - 1
            middle = (a + b) // 2
        if after[node] > node + 1:
            first[count], last[count] = middle, b
            first[count + 1], last[count + 1] = a, middle
            count += 2
        node += 1
    return Chains(form, after)


@njit(nogil=True, cache=True)
def cauchy_share(chains, cx, cy, omega, tolerance):
    """Share in W of the Cauchy kernel with scale `omega` round (cx, cy).

    The error is at most `tolerance` times the number of chains taken together, some tens; with
    a tolerance of 0 every edge is taken on its own.
    """
    form, after = chains.form, chains.after
    w2 = omega * omega
    re, im, factors = 1.0, 0.0, 0
    between = 0.0
    node = 0
    while node < after.size:
        c = form[node]
        if after[node] > node + 1:
            mx, my = c[MX] - cx, c[MY] - cy
            d2 = mx * mx + my * my + w2
            if d2 < 4.0 * c[REACH2] or (
                LATER_TERMS * 10.0 / (2.0 * np.pi) * omega * c[THIRD] > tolerance * d2 * d2 * d2
            ):
                node += 1
                continue
            kernel = omega / (2.0 * np.pi * d2 * np.sqrt(d2))
            first = mx * c[FX] + my * c[FY]
            second = mx * mx * c[FXX] + 2.0 * mx * my * c[FXY] + my * my * c[FYY]
            between += kernel * (
                c[AREA] - 3.0 * first / d2 + 7.5 * second / (d2 * d2) - 1.5 * (c[FXX] + c[FYY]) / d2
            )
        ax, ay, bx, by = c[AX] - cx, c[AY] - cy, c[BX] - cx, c[BY] - cy
        a = np.sqrt(ax * ax + ay * ay + w2)
        b = np.sqrt(bx * bx + by * by + w2)
        over = ax * by - ay * bx
        under = a * b + ax * bx + ay * by + w2 + omega * (a + b)
        re, im = re * under - im * over, re * over + im * under
        size = 1.0 / (under + abs(over))
        re *= size
        im *= size
        factors += 1
        if factors == RENORM:
            size = 1.0 / np.sqrt(re * re + im * im)
            re *= size
            im *= size
            factors = 0
        node = after[node]
    share = np.arctan2(im, re) / np.pi + between
    # the argument leaves a whole turn open, two hemispheres
    if share < -0.5:
        share += 2.0
    return min(max(share, 0.0), 1.0)


@njit(nogil=True, cache=True)
def cauchy_many(chains, centres, omega, tolerance, out):
    for k in range(centres.shape[0]):
        out[k] = cauchy_share(chains, centres[k, 0], centres[k, 1], omega, tolerance)
