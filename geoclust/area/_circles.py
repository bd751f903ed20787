"""Compiled loops for the share of a circle that lies inside the study area.

A boundary vertex is *near* if it lies strictly within the radius of the
centre. An edge with one near end crosses the circle once, one with two far
ends twice or never, one with two near ends never; since neighbouring edges
share their vertices, entries and exits balance whatever the rounding. Where
an edge leaves the disc an inside arc begins (counter-clockwise, interior on
the left of edges), where it enters one ends. The inside length is therefore
the argument of the product of the unit vectors of entries and of the
conjugates of those of exits: no sorting.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from geoclust.area._edges import is_inside

TWO_PI = 2.0 * np.pi
# below this angle the argument cannot tell an empty circle from a full one
HAIR = 1e-9
ASIDE = (float(np.cos(1.0)), float(np.sin(1.0)))


@njit(nogil=True, cache=True, inline="always")
def cross_piece(ax, ay, bx, by, r2, re, im):
    """Multiply (re, im) by the crossings of one piece; coordinates relative to the centre.

    Vectors are left at length `r`; the caller divides, or only takes the argument.
    Returns the product and the number of crossings.
    """
    near_a = ax * ax + ay * ay < r2
    near_b = bx * bx + by * by < r2
    if near_a and near_b:
        return re, im, 0
    ux, uy = bx - ax, by - ay
    length2 = ux * ux + uy * uy
    along = -(ax * ux + ay * uy)  # position of the foot, in units of the squared length
    if not near_a and not near_b and (along <= 0.0 or along >= length2):
        return re, im, 0
    cross = ax * uy - ay * ux
    # squared half chord times length2; negative if the line misses the circle
    chord2 = r2 * length2 - cross * cross
    if chord2 <= 0.0:
        if near_a == near_b:
            return re, im, 0
        chord2 = 0.0
    chord = np.sqrt(chord2)
    # foot of the centre on the line, times length2: cross * (uy, -ux)
    fx, fy = cross * uy, -cross * ux
    crossings = 0
    scale = 1.0 / (length2 * np.sqrt(r2))
    if not near_a:  # enters
        zx, zy = (fx - chord * ux) * scale, (fy - chord * uy) * scale
        re, im = re * zx - im * zy, re * zy + im * zx
        crossings += 1
    if not near_b:  # leaves
        zx, zy = (fx + chord * ux) * scale, -(fy + chord * uy) * scale
        re, im = re * zx - im * zy, re * zy + im * zx
        crossings += 1
    return re, im, crossings


@njit(nogil=True, cache=True)
def share_from_product(grid, cx, cy, r, re, im, crossings):
    """Turn the product of crossings into a share of the circle."""
    if crossings == 0:
        # all of it is on one side; a point in no round direction, so that it is not where a
        # circle of round numbers touches an edge
        return 1.0 if is_inside(grid, cx + r * ASIDE[0], cy + r * ASIDE[1]) else 0.0
    angle = np.arctan2(im, re)
    if abs(angle) > HAIR:
        return angle / TWO_PI if angle > 0.0 else 1.0 + angle / TWO_PI
    # arcs too short to tell: by far the greater part of the circle is on one side, so
    # points of it decide
    votes = 0
    for k in range(3):
        t = 1.0 + 2.0 * k
        if is_inside(grid, cx + r * np.cos(t), cy + r * np.sin(t)):
            votes += 1
    if votes >= 2:
        return 1.0 + min(angle, 0.0) / TWO_PI
    return max(angle, 0.0) / TWO_PI


@njit(nogil=True, cache=True)
def circle_share(grid, cx, cy, r):
    """Share of the circle of radius `r` round (cx, cy) that lies in W."""
    if r <= 0.0:
        return 1.0 if is_inside(grid, cx, cy) else 0.0
    i = int(np.floor((cx - grid.left) / grid.cell))
    j = int(np.floor((cy - grid.bottom) / grid.cell))
    if 0 <= i < grid.columns and 0 <= j < grid.rows:
        home = j * grid.columns + i
        # pieces reach half a cell beyond the cell they are filed under
        if r < (grid.gap[home] - 1.5) * grid.cell:
            return 1.0 if grid.inside[home] else 0.0
    r2 = r * r
    half = 0.5 * grid.cell * (1.0 + 1e-12)
    outer = r + half
    inner = r - half
    re, im, crossings = 1.0, 0.0, 0
    j_low = max(int(np.floor((cy - outer - grid.bottom) / grid.cell)), 0)
    j_high = min(int(np.floor((cy + outer - grid.bottom) / grid.cell)), grid.rows - 1)
    for j in range(j_low, j_high + 1):
        below = grid.bottom + j * grid.cell - cy
        above = below + grid.cell
        nearest = 0.0
        if below > 0.0:
            nearest = below
        elif above < 0.0:
            nearest = -above
        furthest = max(abs(below), abs(above))
        wide2 = outer * outer - nearest * nearest
        if wide2 < 0.0:
            continue
        wide = np.sqrt(wide2)
        i_low = max(int(np.floor((cx - wide - grid.left) / grid.cell)), 0)
        i_high = min(int(np.floor((cx + wide - grid.left) / grid.cell)), grid.columns - 1)
        if i_low > i_high:
            continue
        # columns i_skip .. i_next - 1 lie so deep in the disc that no piece filed there crosses
        i_skip, i_next = i_high + 1, i_high + 1
        if inner > furthest:
            deep = np.sqrt(inner * inner - furthest * furthest)
            a = max(int(np.ceil((cx - deep - grid.left) / grid.cell)), i_low)
            b = min(int(np.floor((cx + deep - grid.left) / grid.cell)), i_high + 1)
            if b > a:
                i_skip, i_next = a, b
        base = j * grid.columns
        for side in range(2):
            if side == 0:
                k_low, k_high = grid.first[base + i_low], grid.first[base + i_skip]
            else:
                k_low, k_high = grid.first[base + i_next], grid.first[base + i_high + 1]
            for k in range(k_low, k_high):
                re, im, more = cross_piece(
                    grid.x0[k] - cx, grid.y0[k] - cy, grid.x1[k] - cx, grid.y1[k] - cy, r2, re, im
                )
                crossings += more
    return share_from_product(grid, cx, cy, r, re, im, crossings)


@njit(nogil=True, cache=True)
def share_many(grid, centres, radii, out):
    for k in range(radii.size):
        out[k] = circle_share(grid, centres[k, 0], centres[k, 1], radii[k])


@njit(nogil=True, cache=True)
def count_meeting(grid, centres, r):
    """Number of circles of radius `r` with a point in W: a crossing, or else one point inside."""
    r2 = r * r
    half = 0.5 * grid.cell
    count = 0
    for c in range(centres.shape[0]):
        cx, cy = centres[c, 0], centres[c, 1]
        j_low = max(int(np.floor((cy - r - half - grid.bottom) / grid.cell)), 0)
        j_high = min(int(np.floor((cy + r + half - grid.bottom) / grid.cell)), grid.rows - 1)
        met = is_inside(grid, cx + r, cy)
        j = j_low
        while j <= j_high and not met:
            # two arms of the circle in this row of cells, each as a range of columns
            below = grid.bottom + j * grid.cell - half - cy
            above = below + 2.0 * half + grid.cell
            nearest = max(max(below, -above), 0.0)
            furthest = max(abs(below), abs(above))
            wide = np.sqrt(max(r2 - nearest * nearest, 0.0)) + half
            deep = np.sqrt(max(r2 - furthest * furthest, 0.0)) - half
            for arm in range(2):
                if arm == 0:
                    x_low, x_high = cx - wide, cx - max(deep, -wide)
                else:
                    x_low, x_high = cx + max(deep, -wide), cx + wide
                i_low = max(int(np.floor((x_low - grid.left) / grid.cell)), 0)
                i_high = min(int(np.floor((x_high - grid.left) / grid.cell)), grid.columns - 1)
                if i_low > i_high or met:
                    continue
                base = j * grid.columns
                for k in range(grid.first[base + i_low], grid.first[base + i_high + 1]):
                    _, _, crossings = cross_piece(
                        grid.x0[k] - cx, grid.y0[k] - cy, grid.x1[k] - cx, grid.y1[k] - cy, r2, 1.0, 0.0
                    )
                    if crossings > 0:
                        met = True
                        break
            j += 1
        if met:
            count += 1
    return count
