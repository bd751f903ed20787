"""Compiled predictive densities of the points in a held-out tile, one draw after the other."""

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


@njit(nogil=True, cache=True)
def log_densities(kernel, reach, points, box, tile_area, rest, tile, shifts, centres, start, draws, rng, out):
    """Log density of the points of a tile for each draw, estimated without bias.

    Centres with points in the rest are known in a draw. Those without are, given the draw, a
    Poisson process of intensity rho exp(-mu s(c)), s the share of the rest; they are integrated out,
    together with the membership of the points, which is imputed point by point (Kong, Liu & Wong 1994).

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
    out
        (d,)
    """
    n = points.shape[0]
    weight = np.empty(n + 2)
    per_scale = NODES_DISC if kernel == DISC else NODES
    near = min(reach, FURTHEST)
    half = int(np.ceil(near * per_scale)) + 1
    side = 2 * half
    # of each new cluster: its nodes and the weight of a centre there, given its points so far
    node_x, node_y = np.empty((n + 1, side * side)), np.empty((n + 1, side * side))
    value = np.empty((n + 1, side * side))
    count, mass = np.empty(n + 1, np.int64), np.empty(n + 1)
    most = reach * reach
    for d in range(draws.shape[0]):
        scale, rho, mu, background = draws[d, 0], draws[d, 1], draws[d, 2], draws[d, 3]
        per = 1.0 / (scale * scale)
        peak = kernel_peak(kernel, scale)
        total = -background * tile_area
        for c in range(start[d], start[d + 1]):
            total -= mu * _share(tile, centres[c, 0], centres[c, 1], shifts[1], scale)
        total -= _unseen(box, reach * scale, scale, rho, mu, rest, tile, shifts, rng)
        clusters = 0
        for i in range(n):
            x, y = points[i, 0], points[i, 1]
            known = background
            for c in range(start[d], start[d + 1]):
                dx, dy = x - centres[c, 0], y - centres[c, 1]
                known += mu * peak * kernel_shape(kernel, (dx * dx + dy * dy) * per, most)
            weight[0] = known
            sum_of = known
            for b in range(clusters):
                joined = 0.0
                for k in range(count[b]):
                    dx, dy = x - node_x[b, k], y - node_y[b, k]
                    joined += value[b, k] * kernel_shape(kernel, (dx * dx + dy * dy) * per, most)
                weight[b + 1] = mu * peak * joined / mass[b]
                sum_of += weight[b + 1]
            # a cluster of its own, on a lattice round the point with a random offset
            new = clusters
            step = scale / per_scale
            left, bottom = x - (half - rng.random()) * step, y - (half - rng.random()) * step
            filled, alone = 0, 0.0
            for p in range(side):
                for q in range(side):
                    u, v = left + p * step, bottom + q * step
                    dx, dy = x - u, y - v
                    shape = kernel_shape(kernel, (dx * dx + dy * dy) * per, near * near)
                    if shape > 0.0:
                        seen = _share(rest, u, v, shifts[0], scale) + _share(tile, u, v, shifts[1], scale)
                        node_x[new, filled], node_y[new, filled] = u, v
                        value[new, filled] = shape * np.exp(-mu * seen)
                        alone += value[new, filled]
                        filled += 1
            count[new], mass[new] = filled, alone
            weight[new + 1] = rho * mu * peak * alone * step * step
            sum_of += weight[new + 1]
            total += np.log(sum_of)
            pick = rng.random() * sum_of
            chosen = 0
            while chosen < new + 1 and pick >= weight[chosen]:
                pick -= weight[chosen]
                chosen += 1
            if chosen == new + 1:
                clusters += 1
            elif chosen > 0:
                b = chosen - 1
                again = 0.0
                for k in range(count[b]):
                    dx, dy = x - node_x[b, k], y - node_y[b, k]
                    value[b, k] *= kernel_shape(kernel, (dx * dx + dy * dy) * per, most)
                    again += value[b, k]
                mass[b] = again
        out[d] = total


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
