"""Compiled loops for the share of an isotropic Gaussian that falls in the study area.

With h the distance of the centre to the line of an edge and t the position
along it, the mass in W is (1/2 pi) times the sum over edges of the integral
of h (1 - exp(-(h^2 + t^2) / 2 s^2)) / (h^2 + t^2) dt. The same sum without
the exponential is the winding number; taken off, only edges within a few
sigma are left. This equals the closed form in Owen's T function (Owen 1956,
Annals of Mathematical Statistics 27: 1075-1090), but the integrand is entire
in t, so a few Gauss-Legendre nodes reach full precision without a special
function in the loop.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from geoclust.area._edges import REFERENCE_X, REFERENCE_Y, is_inside

# exp(-REACH**2 / 2) is below 1e-16
REACH = 8.6
# panels no longer than two sigma: twelve nodes are exact to rounding there
_nodes, _weights = np.polynomial.legendre.leggauss(12)
NODES = tuple(float(v) for v in _nodes)
WEIGHTS = tuple(float(v) for v in _weights)
# and five do for panels up to half a sigma, which is what a ragged boundary is made of
_nodes, _weights = np.polynomial.legendre.leggauss(5)
SHORT_NODES = tuple(float(v) for v in _nodes)
SHORT_WEIGHTS = tuple(float(v) for v in _weights)


@njit(nogil=True, cache=True, inline="always")
def entire(d2, sigma):
    """(1 - exp(-z)) / z at z = d2 / 2 sigma², without cancellation."""
    z = d2 / (2.0 * sigma * sigma)
    return -np.expm1(-z) / z if z > 1e-300 else 1.0


@njit(nogil=True, cache=True)
def piece_deficit(ax, ay, bx, by, sigma, reach):
    """Mass of the wedge under one piece that lies beyond it, in turns (coordinates from the centre)."""
    ux, uy = bx - ax, by - ay
    length = np.sqrt(ux * ux + uy * uy)
    if length == 0.0:
        return 0.0
    ux /= length
    uy /= length
    # measured from the nearer end: beside a vertex, the angle hangs on the last digits
    if bx * bx + by * by < ax * ax + ay * ay:
        h = bx * uy - by * ux
        tb = bx * ux + by * uy
        ta = tb - length
    else:
        h = ax * uy - ay * ux
        ta = ax * ux + ay * uy
        tb = ta + length
    if abs(h) >= reach:
        return 0.0
    span = np.sqrt(reach * reach - h * h)
    t0, t1 = max(ta, -span), min(tb, span)
    if t1 <= t0:
        return 0.0
    panels = int(np.ceil((t1 - t0) / (2.0 * sigma)))
    step = (t1 - t0) / panels
    within = 0.0
    if step <= 0.5 * sigma:
        middle = t0 + 0.5 * step
        for q in range(5):
            t = middle + 0.5 * step * SHORT_NODES[q]
            within += SHORT_WEIGHTS[q] * entire(h * h + t * t, sigma)
    else:
        for p in range(panels):
            middle = t0 + (p + 0.5) * step
            for q in range(12):
                t = middle + 0.5 * step * NODES[q]
                within += WEIGHTS[q] * entire(h * h + t * t, sigma)
    within *= 0.5 * step * h / (2.0 * sigma * sigma)
    # the angle under which the clipped piece is seen
    turn = np.arctan2(h * (t1 - t0), h * h + t0 * t1)
    return (turn - within) / (2.0 * np.pi)


@njit(nogil=True, cache=True)
def gaussian_share(grid, cx, cy, sigma, cut):
    """Mass in W of the Gaussian with standard deviation `sigma` per axis round (cx, cy).

    Nothing is looked at beyond `cut` sigmas: REACH of them leave nothing out, fewer
    leave out at most exp(-cut²/2).
    """
    most = cut * sigma
    reach = most + 0.5 * grid.cell
    i_low = max(int(np.floor((cx - reach - grid.left) / grid.cell)), 0)
    i_high = min(int(np.floor((cx + reach - grid.left) / grid.cell)), grid.columns - 1)
    j_low = max(int(np.floor((cy - reach - grid.bottom) / grid.cell)), 0)
    j_high = min(int(np.floor((cy + reach - grid.bottom) / grid.cell)), grid.rows - 1)
    inside = 1.0 if is_inside(grid, cx, cy) else 0.0
    if i_low > i_high:
        return inside
    deficit, met = 0.0, False
    # on a vertex the angles of its two edges are undefined: a step of a hair tells them
    for step in range(3):
        hair = step * (1e-13 * sigma + 4e-16 * (abs(cx) + abs(cy)))
        px, py = cx + hair * REFERENCE_X, cy + hair * REFERENCE_Y
        deficit, met, on_vertex = 0.0, False, False
        for j in range(j_low, j_high + 1):
            base = j * grid.columns
            for k in range(grid.first[base + i_low], grid.first[base + i_high + 1]):
                ax, ay = grid.x0[k] - px, grid.y0[k] - py
                if ax == 0.0 and ay == 0.0:
                    on_vertex = True
                more = piece_deficit(ax, ay, grid.x1[k] - px, grid.y1[k] - py, sigma, most)
                met = met or more != 0.0
                deficit += more
        if not on_vertex:
            break
    share = inside - deficit
    if not met:
        return inside
    # close to an edge, rounding may put the centre on either side of it, a whole turn apart
    share -= np.floor(share)
    if 1e-6 < share < 1.0 - 1e-6:
        return share
    # nearly nothing or nearly all of the mass: points at the scale of sigma tell which
    votes = 0
    for k in range(5):
        t, d = 1.0 + 2.4 * k, sigma * (0.4 + 0.3 * k)
        if is_inside(grid, cx + d * np.cos(t), cy + d * np.sin(t)):
            votes += 1
    if votes >= 3:
        return share if share > 0.5 else 1.0
    return share if share < 0.5 else 0.0


@njit(nogil=True, cache=True)
def gaussian_many(grid, centres, sigma, cut, out):
    for k in range(centres.shape[0]):
        out[k] = gaussian_share(grid, centres[k, 0], centres[k, 1], sigma[k], cut)
