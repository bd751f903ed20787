"""Compiled sums of Gaussian kernels over points in cells."""

from __future__ import annotations

import numpy as np
from numba import njit

# kernels are cut off at this many bandwidths, where they are 1.5e-8 of their height
REACH = 6.0


@njit(nogil=True, cache=True)
def gaussian_sums(points, weights, x, y, bandwidth, out):
    """For each place, the sum of weight times Gaussian density over the points near it."""
    first, columns, rows, cell = points.first, points.columns, points.rows, points.cell
    reach = REACH * bandwidth
    half = -0.5 / (bandwidth * bandwidth)
    norm = 1.0 / (2.0 * np.pi * bandwidth * bandwidth)
    for q in range(x.size):
        i_low = max(int(np.floor((x[q] - reach - points.left) / cell)), 0)
        i_high = min(int(np.floor((x[q] + reach - points.left) / cell)), columns - 1)
        j_low = max(int(np.floor((y[q] - reach - points.bottom) / cell)), 0)
        j_high = min(int(np.floor((y[q] + reach - points.bottom) / cell)), rows - 1)
        total = 0.0
        if i_low <= i_high:
            for j in range(j_low, j_high + 1):
                for k in range(first[j * columns + i_low], first[j * columns + i_high + 1]):
                    dx, dy = points.x[k] - x[q], points.y[k] - y[q]
                    d2 = dx * dx + dy * dy
                    if d2 <= reach * reach:
                        total += weights[k] * np.exp(half * d2)
        out[q] = norm * total
