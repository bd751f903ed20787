"""Compiled predictive density of the points in a held-out tile, averaged over draws from the rest."""

from __future__ import annotations

import numpy as np
from numba import njit

from geoclust.fitting._kernels import DISC, kernel_peak, kernel_shape
from geoclust.fitting._table import tabulated

# nodes per scale of the lattice of new centres: the disc has a sharp rim
NODES, NODES_DISC = 1.5, 12.0
# how far from the first point of a new cluster its centre is looked for, in scales: 3e-4 lie further out
FURTHEST = 4.0
# nodes of the integral over centres that leave no point, at most
MOST_NODES = 800.0
# new clusters in one tile, at most
MOST_CLUSTERS = 24


@njit(nogil=True, cache=True)
def log_density(kernel, reach, points, box, tile_area, rest, tile, shifts, centres, start, draws, rng):
    """Log of the mean over draws of the density of the points of a tile.

    Centres with points in the rest are known in a draw. Those without are, given the draw, a
    Poisson process of intensity rho exp(-mu s(c)), s the share of the rest; they are integrated out.
    The membership of the points is imputed point by point (Kong, Liu & Wong 1994), draws
    with small weights giving way to copies of others as it goes on (Liu & Chen 1998). The mean
    itself, not its logarithm, is unbiased.

    Parameters
    ----------
    kernel, reach
        Code of the kernel, and its reach in scales.
    points
        (n, 2) of the tile; all coordinates are local to the survey.
    box
        Bounds of the tile.
    tile_area
        m².
    rest, tile
        Tables of the share of a kernel that falls in the rest and in the tile.
    shifts
        (2, 2) from the survey's local coordinates to those of the two tables.
    centres, start
        (m, 2) centres with points in the rest, draw by draw, and where each draw begins, (d + 1,).
    draws
        (d, 4) scale, parent intensity, mean offspring, background.
    rng
        Generator.
    """
    n, m = points.shape[0], draws.shape[0]
    room = max(min(n, MOST_CLUSTERS), 1)
    per_scale = NODES_DISC if kernel == DISC else NODES
    near = min(reach, FURTHEST)
    half = int(np.ceil(near * per_scale)) + 1
    side = 2 * half
    most = reach * reach
    # of each new cluster: the corner of its lattice, and the weight of a centre there given its points
    corner, value = np.zeros((m, room, 2)), np.zeros((m, room, side * side))
    mass, clusters = np.zeros((m, room)), np.zeros(m, np.int64)
    which, log_weight = np.arange(m), np.empty(m)
    weight, fresh = np.empty(room + 2), np.empty(side * side)
    for d in range(m):
        scale, rho, mu, background = draws[d, 0], draws[d, 1], draws[d, 2], draws[d, 3]
        log_weight[d] = -background * tile_area
        log_weight[d] -= _unseen(box, reach * scale, scale, rho, mu, rest, tile, shifts, rng)
        for c in range(start[d], start[d + 1]):
            log_weight[d] -= mu * _share(tile, centres[c, 0], centres[c, 1], shifts[1], scale)
    total = 0.0
    for i in range(n):
        x, y = points[i, 0], points[i, 1]
        for d in range(m):
            row = which[d]
            scale, rho, mu, background = draws[row, 0], draws[row, 1], draws[row, 2], draws[row, 3]
            per, step = 1.0 / (scale * scale), scale / per_scale
            peak = kernel_peak(kernel, scale)
            known = background
            for c in range(start[row], start[row + 1]):
                dx, dy = x - centres[c, 0], y - centres[c, 1]
                known += mu * peak * kernel_shape(kernel, (dx * dx + dy * dy) * per, most)
            weight[0] = known
            sum_of = known
            new = clusters[d]
            for b in range(new):
                joined = _joined(value[d, b], corner[d, b], side, step, x, y, kernel, per, most, False)
                weight[b + 1] = mu * peak * joined / mass[d, b]
                sum_of += weight[b + 1]
            alone = 0.0
            left, bottom = x - (half - rng.random()) * step, y - (half - rng.random()) * step
            if new < room:
                # a cluster of its own, on a lattice round the point with a random offset
                for p in range(side):
                    for q in range(side):
                        u, v = left + p * step, bottom + q * step
                        dx, dy = x - u, y - v
                        shape = kernel_shape(kernel, (dx * dx + dy * dy) * per, near * near)
                        if shape > 0.0:
                            seen = _share(rest, u, v, shifts[0], scale) + _share(tile, u, v, shifts[1], scale)
                            shape *= np.exp(-mu * seen)
                        fresh[p * side + q] = shape
                        alone += shape
            weight[new + 1] = rho * mu * peak * alone * step * step
            sum_of += weight[new + 1]
            log_weight[d] += np.log(sum_of)
            pick = rng.random() * sum_of
            chosen = 0
            while chosen < new + 1 and pick >= weight[chosen]:
                pick -= weight[chosen]
                chosen += 1
            if chosen == new + 1 and new < room:
                corner[d, new, 0], corner[d, new, 1] = left, bottom
                value[d, new] = fresh
                mass[d, new] = alone
                clusters[d] += 1
            elif 0 < chosen <= new:
                b = chosen - 1
                mass[d, b] = _joined(value[d, b], corner[d, b], side, step, x, y, kernel, per, most, True)
        top = log_weight.max()
        if top == -np.inf:
            return top
        relative = np.exp(log_weight - top)
        if i < n - 1 and relative.sum() ** 2 < 0.5 * m * (relative**2).sum():
            total += top + np.log(relative.mean())
            parents = _systematic(relative, rng)
            corner, value, mass = corner[parents], value[parents], mass[parents]
            clusters, which = clusters[parents], which[parents]
            log_weight[:] = 0.0
    top = log_weight.max()
    if top == -np.inf:
        return top
    return total + top + np.log(np.exp(log_weight - top).mean())


@njit(nogil=True, cache=True)
def _joined(value, corner, side, step, x, y, kernel, per, most, keep):
    """Weight of a new cluster with one more point; with `keep`, its nodes are weighted by it."""
    total = 0.0
    for p in range(side):
        dx = x - (corner[0] + p * step)
        for q in range(side):
            k = p * side + q
            if value[k] > 0.0:
                dy = y - (corner[1] + q * step)
                w = value[k] * kernel_shape(kernel, (dx * dx + dy * dy) * per, most)
                total += w
                if keep:
                    value[k] = w
    return total


@njit(nogil=True, cache=True)
def _systematic(relative, rng):
    """Rows in proportion to their weights, with one random number (systematic sampling)."""
    m = relative.size
    out = np.empty(m, np.int64)
    unit = relative.sum() / m
    reached, row = relative[0], 0
    at = rng.random() * unit
    for k in range(m):
        while reached < at and row < m - 1:
            row += 1
            reached += relative[row]
        out[k] = row
        at += unit
    return out


@njit(nogil=True, cache=True)
def _share(table, x, y, shift, scale):
    return tabulated(table, x + shift[0], y + shift[1], scale)


@njit(nogil=True, cache=True)
def _unseen(box, reach, scale, rho, mu, rest, tile, shifts, rng):
    """Expected number of centres without a point in the rest that have one in the tile."""
    width, height = box[2] - box[0] + 2.0 * reach, box[3] - box[1] + 2.0 * reach
    step = max(0.75 * scale, np.sqrt(width * height / MOST_NODES))
    left, bottom = box[0] - reach - step * rng.random(), box[1] - reach - step * rng.random()
    total = 0.0
    for p in range(int(width / step) + 2):
        for q in range(int(height / step) + 2):
            u, v = left + p * step, bottom + q * step
            inside = _share(tile, u, v, shifts[1], scale)
            if inside > 0.0:
                total -= np.exp(-mu * _share(rest, u, v, shifts[0], scale)) * np.expm1(-mu * inside)
    return rho * total * step * step
