"""Compiled move of the radius of discs and of all centres at once.

With centres fixed, the radius can shrink no further than to the point that lies furthest from its
centre, and grows no further than the number of points lets it: it moves by its hundredth part, while
the posterior is many times wider. So memberships are drawn first, as they are distributed given
everything else, and then radius and centres move together. Given its members, a centre lies where the
discs round them overlap; that region sits round the middle m of the smallest circle that holds the
members, of radius r, and is about as wide as R - r. An offset from m therefore grows or shrinks by
the same factor as R - r. That is a bijection for each pair of radii, its Jacobian the squared product
of the factors (Green 1995, Biometrika 82: 711-732); memberships are forgotten again.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from geoclust.area._edges import is_inside
from geoclust.fitting._kernels import kernel_peak
from geoclust.fitting._moves import EXPOSURE, RESCALE, SCALE, prior_ratio, recompute
from geoclust.fitting._table import share_at

# the room round the middle of the members counts as no narrower than this part of the radius
NARROWEST = 0.02


@njit(nogil=True, cache=True)
def circle_of_three(ax, ay, bx, by, cx, cy):
    """Middle and squared radius of the circle through three points, or of none if they are in line."""
    ux, uy, vx, vy = bx - ax, by - ay, cx - ax, cy - ay
    cross = 2.0 * (ux * vy - uy * vx)
    if cross == 0.0:
        return ax, ay, -1.0
    u2, v2 = ux * ux + uy * uy, vx * vx + vy * vy
    dx, dy = (vy * u2 - uy * v2) / cross, (ux * v2 - vx * u2) / cross
    return ax + dx, ay + dy, dx * dx + dy * dy


@njit(nogil=True, cache=True)
def smallest_circle(x, y):
    """Middle and radius of the smallest circle that holds all points.

    Point after point: one that lies outside the circle of those before lies on the circle of them all,
    and so do a second and a third.
    """
    mx, my, r2 = x[0], y[0], 0.0
    slack = 1.0 + 1e-12
    for i in range(1, x.size):
        if (x[i] - mx) ** 2 + (y[i] - my) ** 2 <= r2 * slack:
            continue
        mx, my, r2 = x[i], y[i], 0.0
        for j in range(i):
            if (x[j] - mx) ** 2 + (y[j] - my) ** 2 <= r2 * slack:
                continue
            mx, my = 0.5 * (x[i] + x[j]), 0.5 * (y[i] + y[j])
            r2 = (x[i] - mx) ** 2 + (y[i] - my) ** 2
            for k in range(j):
                if (x[k] - mx) ** 2 + (y[k] - my) ** 2 <= r2 * slack:
                    continue
                px, py, p2 = circle_of_three(x[i], y[i], x[j], y[j], x[k], y[k])
                if p2 >= 0.0:
                    mx, my, r2 = px, py, p2
    return mx, my, np.sqrt(r2)


@njit(nogil=True, cache=True)
def by_centre(owner, number):
    """Points in the order of their centre, and where those of each centre begin; background left out."""
    first = np.zeros(number + 1, np.int64)
    for c in owner:
        if c >= 0:
            first[c + 1] += 1
    for c in range(number):
        first[c + 1] += first[c]
    fill = first[:-1].copy()
    order = np.empty(first[number], np.int64)
    for k in range(owner.size):
        if owner[k] >= 0:
            order[fill[owner[k]]] = k
            fill[owner[k]] += 1
    return order, first


@njit(nogil=True, cache=True)
def try_radius(data, target, table, state, owner, step, rng):
    """Walk of the log radius, every centre moved with it; `owner` holds memberships just drawn."""
    state.tried[RESCALE] += 1
    old = state.scalars[SCALE]
    new = old * np.exp(step * rng.standard_normal())
    if table.start.size > 1:
        # the table bounds the prior
        t = (np.log(new) - table.log_scale) / table.log_step
        if t < 0.0 or t > table.start.size - 1:
            return
    number = state.number[0]
    order, first = by_centre(owner, number)
    moved = state.centres[:number].copy()
    per = 1.0 / (new * new)
    log_a, exposure = 0.0, 0.0
    for c in range(number):
        members = order[first[c] : first[c + 1]]
        if members.size > 0:
            x, y = data.x[members], data.y[members]
            mx, my, r = smallest_circle(x, y)
            factor = max(new - r, NARROWEST * new) / max(old - r, NARROWEST * old)
            moved[c, 0] = mx + factor * (moved[c, 0] - mx)
            moved[c, 1] = my + factor * (moved[c, 1] - my)
            for k in range(x.size):
                dx, dy = x[k] - moved[c, 0], y[k] - moved[c, 1]
                if (dx * dx + dy * dy) * per > 1.0:
                    return
            if not is_inside(data.wide, moved[c, 0], moved[c, 1]):
                return
            log_a += 2.0 * np.log(factor)
        exposure += share_at(table, moved[c, 0], moved[c, 1], new)
    # each member has the density of its disc; background points keep theirs
    log_a += order.size * np.log(kernel_peak(target.kernel, new) / kernel_peak(target.kernel, old))
    z_new = (np.log(new) - target.log_scale_mean) / target.log_scale_sd
    z_old = (np.log(old) - target.log_scale_mean) / target.log_scale_sd
    log_a += 0.5 * (z_old * z_old - z_new * z_new)
    log_a += prior_ratio(data, target, state, 0, exposure)
    if np.log(rng.random()) < log_a:
        state.centres[:number] = moved
        state.scalars[SCALE] = new
        state.scalars[EXPOSURE] = recompute(
            data, target, state, new, state.density, state.share, state.far, table
        )
        state.taken[RESCALE] += 1
