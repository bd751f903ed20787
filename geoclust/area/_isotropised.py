"""Compiled loops for the isotropised set covariance.

The mean over directions of the set covariance is

    |W| - (1/2 pi) sum over ordered pairs of edges of n_i . n_j J_ij(r),
    J_ij(r) = double integral over both edges of ln(r / |x - y|) where |x - y| < r.

Over two edges that are not parallel, x - y runs once over a parallelogram, so
J is an integral over a parallelogram cut by a disc, which Green's theorem in
polar coordinates reduces to its four sides: all in elementary functions. Over
parallel edges x - y runs along a line, with a weight that is piecewise
linear, and second antiderivatives do the same.

A pair of edges counts in three ways: not at all at radii below its distance,
by its exact integral at the few radii between its smallest and its largest
distance, and beyond these through n_i . n_j l_i l_j ln r and the integral of
ln |x - y|, which are summed once. Far from each other the latter is taken by
four Gauss-Legendre nodes a pair of edges.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from geoclust.area._edges import squared_distance_to_piece

# edges at an angle below this are taken as parallel (the change is of its order times
# a third power of their length)
PARALLEL = 1e-7
# beyond this many lengths, four nodes give the integral of the logarithm to 1e-8
FAR = 12.0
NODE = 0.5 / np.sqrt(3.0)


@njit(nogil=True, cache=True)
def side_log(ax, ay, bx, by):
    """Integral of ln|z| over the triangle from the origin to the side a-b, counter-clockwise positive."""
    ux, uy = bx - ax, by - ay
    length = np.sqrt(ux * ux + uy * uy)
    if length == 0.0:
        return 0.0
    cross = ax * by - ay * bx
    if cross == 0.0:
        return 0.0
    h = cross / length
    ta = (ax * ux + ay * uy) / length
    tb = (bx * ux + by * uy) / length
    # int (rho^2/2) (ln rho - 1/2) d theta with rho^2 = h^2 + t^2, d theta = h dt / rho^2
    turn = np.arctan2(cross, ax * bx + ay * by)
    moment = 0.0
    a2 = ax * ax + ay * ay
    b2 = bx * bx + by * by
    if b2 > 0.0:
        moment += 0.5 * tb * np.log(b2)
    if a2 > 0.0:
        moment -= 0.5 * ta * np.log(a2)
    moment += h * turn - (tb - ta)
    return 0.5 * h * moment - 0.25 * h * (tb - ta)


@njit(nogil=True, cache=True)
def side_within(ax, ay, bx, by, r):
    """Integral of ln(r/|z|) over the part within r of the triangle from the origin to a side."""
    ux, uy = bx - ax, by - ay
    length = np.sqrt(ux * ux + uy * uy)
    cross = ax * by - ay * bx
    if length == 0.0 or cross == 0.0:
        return 0.0
    h = cross / length
    r2 = r * r
    whole = np.arctan2(cross, ax * bx + ay * by)
    if h * h >= r2:
        return 0.25 * r2 * whole
    ta = (ax * ux + ay * uy) / length
    tb = (bx * ux + by * uy) / length
    span = np.sqrt(r2 - h * h)
    t0, t1 = max(ta, -span), min(tb, span)
    if t1 <= t0:
        return 0.25 * r2 * whole
    a2, b2 = h * h + t0 * t0, h * h + t1 * t1
    if t0 == ta and t1 == tb:
        turn = whole
    else:
        turn = np.arctan2(h * (t1 - t0), h * h + t0 * t1)
    # int (rho^2/2) (ln(r/rho) + 1/2) d theta over the part of the side within r
    moment = 0.0
    if b2 > 0.0:
        moment += 0.5 * t1 * np.log(b2 / r2)
    if a2 > 0.0:
        moment -= 0.5 * t0 * np.log(a2 / r2)
    moment += h * turn - (t1 - t0)
    return -0.5 * h * moment + 0.25 * h * (t1 - t0) + 0.25 * r2 * (whole - turn)


@njit(nogil=True, cache=True, inline="always")
def log_ratio(a, b):
    """ln(a / b), by its series where the two are close."""
    z = (a - b) / (a + b)
    if abs(z) > 0.03:
        return np.log(a / b)
    y = z * z
    return 2.0 * z * (1.0 + y * (1.0 / 3.0 + y * (0.2 + y * (1.0 / 7.0 + y / 9.0))))


@njit(nogil=True, cache=True)
def far_side_within(ax, ay, bx, by, r):
    """`side_within` without the sector of radius r, for a shape that does not hold the origin.

    The sectors of all sides then cancel, and sides beyond r need nothing at all.
    """
    ux, uy = bx - ax, by - ay
    length2 = ux * ux + uy * uy
    cross = ax * by - ay * bx
    r2 = r * r
    if length2 == 0.0 or cross * cross >= r2 * length2:
        return 0.0
    length = np.sqrt(length2)
    h = cross / length
    ta = (ax * ux + ay * uy) / length
    span = np.sqrt(r2 - h * h)
    t0, t1 = max(ta, -span), min(ta + length, span)
    if t1 <= t0:
        return 0.0
    x, y = h * (t1 - t0), h * h + t0 * t1
    z = x / y if y > 0.0 else 1.0
    if abs(z) > 0.05:
        turn = np.arctan2(x, y)
    else:
        w = z * z
        turn = z * (1.0 - w * (1.0 / 3.0 - w * (0.2 - w * (1.0 / 7.0 - w / 9.0))))
    moment = (
        0.5 * (t1 * log_ratio(h * h + t1 * t1, r2) - t0 * log_ratio(h * h + t0 * t0, r2))
        + h * turn
        - (t1 - t0)
    )
    return -0.5 * h * moment + 0.25 * h * (t1 - t0) - 0.25 * r2 * turn


@njit(nogil=True, cache=True)
def line_second(w, h, r2):
    """Second antiderivative in w of ln(r / sqrt(h^2 + w^2)), zero with its slope at w = 0."""
    d2 = h * h + w * w
    if d2 == 0.0:
        return 0.0
    value = 0.25 * (w * w - h * h) * np.log(r2 / d2) + 0.75 * w * w
    if h != 0.0:
        value -= h * w * np.arctan(w / h)
        value += 0.25 * h * h * np.log(r2 / (h * h))
    return value


@njit(nogil=True, cache=True)
def line_first(w, h, r2):
    """Antiderivative in w of ln(r / sqrt(h^2 + w^2)), zero at w = 0."""
    d2 = h * h + w * w
    if d2 == 0.0:
        return 0.0
    value = 0.5 * w * np.log(r2 / d2) + w
    if h != 0.0:
        value -= h * np.arctan(w / h)
    return value


@njit(nogil=True, cache=True)
def ramp(w, knot, h, span, r2):
    """Integral over v from -span to w of (v - knot)_+ ln(r / sqrt(h^2 + v^2)), w at most span."""
    low, high = max(knot, -span), min(w, span)
    if high <= low:
        return 0.0
    # by parts: [(v - knot) F] - [G]
    return (
        (high - knot) * line_first(high, h, r2)
        - (low - knot) * line_first(low, h, r2)
        - line_second(high, h, r2)
        + line_second(low, h, r2)
    )


@njit(nogil=True, cache=True)
def parallel_pair(ax0, ay0, ax1, ay1, bx0, by0, bx1, by1, r):
    """J for two parallel edges; the second may run either way."""
    ux, uy = ax1 - ax0, ay1 - ay0
    length = np.sqrt(ux * ux + uy * uy)
    ux /= length
    uy /= length
    mx, my = 0.5 * (bx0 + bx1) - ax0, 0.5 * (by0 + by1) - ay0
    h = abs(mx * uy - my * ux)
    if h >= r:
        return 0.0
    middle = mx * ux + my * uy
    other = np.sqrt((bx1 - bx0) * (bx1 - bx0) + (by1 - by0) * (by1 - by0))
    # the difference of positions runs from low to high with a trapezoid as its weight
    low, high = middle - 0.5 * other - length, middle + 0.5 * other
    short = min(length, other)
    span = np.sqrt(r * r - h * h)
    r2 = r * r
    return (
        ramp(high, low, h, span, r2)
        - ramp(high, low + short, h, span, r2)
        - ramp(high, high - short, h, span, r2)
    )


@njit(nogil=True, cache=True)
def slanted_pair(ax0, ay0, ax1, ay1, bx0, by0, bx1, by1, sine, r, apart):
    """J over the product of lengths, for edges with cross product `sine`; integral of ln if r is zero.

    `apart` tells that the edges are far from each other.
    """
    # corners of all differences, in an order that is counter-clockwise if sine < 0
    x00, y00 = ax0 - bx0, ay0 - by0
    x10, y10 = ax1 - bx0, ay1 - by0
    x11, y11 = ax1 - bx1, ay1 - by1
    x01, y01 = ax0 - bx1, ay0 - by1
    if apart and r > 0.0:
        total = (
            far_side_within(x00, y00, x10, y10, r)
            + far_side_within(x10, y10, x11, y11, r)
            + far_side_within(x11, y11, x01, y01, r)
            + far_side_within(x01, y01, x00, y00, r)
        )
    elif r > 0.0:
        total = (
            side_within(x00, y00, x10, y10, r)
            + side_within(x10, y10, x11, y11, r)
            + side_within(x11, y11, x01, y01, r)
            + side_within(x01, y01, x00, y00, r)
        )
    else:
        total = (
            side_log(x00, y00, x10, y10)
            + side_log(x10, y10, x11, y11)
            + side_log(x11, y11, x01, y01)
            + side_log(x01, y01, x00, y00)
        )
    # a d s - b d t sweeps the parallelogram against the clock if a x b < 0
    return -total / sine


@njit(nogil=True, cache=True)
def add_pair(ax0, ay0, ax1, ay1, bx0, by0, bx1, by1, factor, radii, hint, exact, flat, logs):
    """Add one pair of edges to the sums; returns its first radius, the next pair's `hint`.

    `exact[k]` collects n.n J at radius k, `flat[k]` and `logs[k]` collect n.n l l and
    the integral of n.n ln|x - y| from radius k on.
    """
    ux, uy = ax1 - ax0, ay1 - ay0
    vx, vy = bx1 - bx0, by1 - by0
    # normals are edges turned by a quarter: the same dot product, l l included
    dot = ux * vx + uy * vy
    la, lb = np.sqrt(ux * ux + uy * uy), np.sqrt(vx * vx + vy * vy)
    normal = factor * dot / (la * lb)
    largest = 0.0
    corner = np.inf
    for k in range(4):
        ex = (ax1 if k & 1 else ax0) - (bx1 if k & 2 else bx0)
        ey = (ay1 if k & 1 else ay0) - (by1 if k & 2 else by0)
        d2 = ex * ex + ey * ey
        largest = max(largest, d2)
        corner = min(corner, d2)
    smallest = corner
    if corner < 16.0 * (la + lb) * (la + lb):
        # far from each other the nearest corners are near enough to the nearest points
        smallest = min(
            min(
                squared_distance_to_piece(ax0, ay0, bx0, by0, bx1, by1),
                squared_distance_to_piece(ax1, ay1, bx0, by0, bx1, by1),
            ),
            min(
                squared_distance_to_piece(bx0, by0, ax0, ay0, ax1, ay1),
                squared_distance_to_piece(bx1, by1, ax0, ay0, ax1, ay1),
            ),
        )
        near = np.sqrt(smallest)
    else:
        near = np.sqrt(smallest) - 0.125 * (la + lb)
    far = np.sqrt(largest)
    k = hint
    while k > 0 and radii[k - 1] >= near:
        k -= 1
    while k < radii.size and radii[k] < near:
        k += 1
    begin = k
    if k == radii.size:
        return begin
    sine = ux * vy - uy * vx
    parallel = abs(sine) < PARALLEL * la * lb
    slanted = factor * dot
    apart = corner > FAR * FAR * max(la, lb) * max(la, lb)
    while k < radii.size and radii[k] < far:
        if parallel:
            exact[k] += normal * parallel_pair(ax0, ay0, ax1, ay1, bx0, by0, bx1, by1, radii[k])
        else:
            exact[k] += slanted * slanted_pair(ax0, ay0, ax1, ay1, bx0, by0, bx1, by1, sine, radii[k], apart)
        k += 1
    if k == radii.size:
        return begin
    flat[k] += factor * dot
    if apart:
        # two nodes on either edge: the logarithm of a product of four distances
        px, py = 0.5 * (ax0 + ax1 - bx0 - bx1), 0.5 * (ay0 + ay1 - by0 - by1)
        ux, uy, vx, vy = NODE * ux, NODE * uy, NODE * vx, NODE * vy
        product = (
            ((px + ux + vx) ** 2 + (py + uy + vy) ** 2)
            * ((px + ux - vx) ** 2 + (py + uy - vy) ** 2)
            * ((px - ux + vx) ** 2 + (py - uy + vy) ** 2)
            * ((px - ux - vx) ** 2 + (py - uy - vy) ** 2)
        )
        logs[k] += factor * dot * 0.125 * np.log(product)
    elif parallel:
        # at a radius that holds them all
        whole = parallel_pair(ax0, ay0, ax1, ay1, bx0, by0, bx1, by1, 2.0 * far)
        logs[k] += normal * (la * lb * np.log(2.0 * far) - whole)
    else:
        logs[k] += slanted * slanted_pair(ax0, ay0, ax1, ay1, bx0, by0, bx1, by1, sine, 0.0, apart)
    return begin


@njit(nogil=True, cache=True)
def add_run_pairs(tree, leaves, low, high, radii, out):
    """Add all pairs of edges whose first leaf is one of `leaves[low:high]`; `out` is (3, radii).

    Each unordered pair once, twofold; an edge with itself once.
    """
    exact, flat, logs = out[0], out[1], out[2]
    reach = radii[-1]
    hint = 0
    stack = np.empty(256, np.int64)
    for m in range(low, high):
        a = leaves[m]
        stack[0] = 0
        depth = 1
        while depth > 0:
            depth -= 1
            b = stack[depth]
            dx = max(max(tree.box[b, 0] - tree.box[a, 2], tree.box[a, 0] - tree.box[b, 2]), 0.0)
            dy = max(max(tree.box[b, 1] - tree.box[a, 3], tree.box[a, 1] - tree.box[b, 3]), 0.0)
            if dx * dx + dy * dy >= reach * reach:
                continue
            if tree.high[b] < 0:
                stack[depth], stack[depth + 1] = tree.low[b], tree.low[b] + 1
                depth += 2
                continue
            if tree.low[b] < tree.low[a]:
                continue
            for p in range(tree.low[a], tree.high[a]):
                start = p if a == b else tree.low[b]
                for q in range(start, tree.high[b]):
                    hint = add_pair(
                        tree.x0[p], tree.y0[p], tree.x1[p], tree.y1[p],
                        tree.x0[q], tree.y0[q], tree.x1[q], tree.y1[q],
                        1.0 if p == q else 2.0, radii, hint, exact, flat, logs,
                    )  # fmt: skip
