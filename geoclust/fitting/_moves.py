"""Compiled moves on the cluster centres: birth, death, displacement, split, merge.

The state is a set of centres C in the widened study area D, with the scale s
of the offspring kernel k and, optionally, a background. Given C, points are
Poisson on W with intensity mu (eta + sum_c k(x - c)); eta is the background
in units of the mean offspring. Memberships are summed over, so a move needs
no assignment to agree with.

Two targets share the code. With parameters known, a centre costs the factor
rho exp(-mu share(c)). With parameters unknown, rho and mu have Gamma priors
and are integrated out: rho leaves Gamma(N + a) / (|D| + b)^(N + a), mu leaves
(S + eta |W| + b')^-(n + a'), S the sum of shares. The chain then runs on
centres, scale and background alone, and the two intensities, drawn afterwards,
no longer hold it back.

A kernel with a heavy tail is cut nowhere, and clusters whose centre lies outside D count by their
mean: at each point, `far` times the number of centres, far being the share of the kernel outside D
over |D|. With known parameters that number is its mean, rho |D|.

Every move is reversible on its own (Green 1995, Biometrika 82: 711-732; Geyer
& Møller 1994, Scandinavian Journal of Statistics 21: 359-373).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from geoclust.area._edges import is_inside
from geoclust.fitting._kernels import add_shapes, draw_offset, kernel_peak, kernel_shape, kernel_width
from geoclust.fitting._table import blend_levels, share_at


class Data(NamedTuple):
    """Points sorted by cell (local coordinates), and the regions they live in."""

    x: np.ndarray  # (n,)
    y: np.ndarray
    first: np.ndarray  # (cells + 1,)
    left: float
    bottom: float
    cell: float
    columns: int
    rows: int
    wide: object  # EdgeGrid of the widened study area, shifted to the same origin
    wide_cells: np.ndarray  # cells of it to draw uniform points from
    wide_area: float
    area: float
    far: np.ndarray  # (levels, n) or nothing: per centre, density from outside D at tabulated scales


class Target(NamedTuple):
    """What is sampled: known parameters, or priors of unknown ones."""

    kernel: int
    reach: float  # kernel is cut off beyond this many scales
    known: bool  # the two intensities
    free_scale: bool
    rho: float  # known intensities
    mu: float
    rho_shape: float  # Gamma priors otherwise: shape and rate
    rho_rate: float
    mu_shape: float
    mu_rate: float
    log_scale_mean: float
    log_scale_sd: float
    with_background: bool
    background_mean: float  # exponential prior of eta
    uniform_share: float  # of births proposed anywhere rather than near points


class Work(NamedTuple):
    """Room for one move at a time."""

    rows: np.ndarray  # (2,) int, centres that go
    cells: np.ndarray  # (4,) int, first and last column and row of cells touched
    fresh: np.ndarray  # (n,) new densities of the points in those cells, in order
    density: np.ndarray  # (n,) densities under another scale
    share: np.ndarray  # (room,) shares under another scale
    far: np.ndarray  # (n,) far density under another scale
    owner: np.ndarray  # (n,) int32, memberships


class State(NamedTuple):
    """The chain: arrays that the moves change in place."""

    centres: np.ndarray  # (room, 2)
    share: np.ndarray  # (room,)
    density: np.ndarray  # (n,) eta + sum of kernels at each point, relative to the kernel's peak
    far: np.ndarray  # (n,) density from outside D that each centre stands for, relative to the peak
    number: np.ndarray  # (1,) int, centres in use
    scalars: np.ndarray  # (3,) scale, eta, sum of shares
    tried: np.ndarray  # (moves,) int
    taken: np.ndarray


SCALE, ETA, EXPOSURE = 0, 1, 2
BIRTH, DEATH, SHIFT, SPLIT, MERGE, RESCALE, BACKGROUND = 0, 1, 2, 3, 4, 5, 6
# split offsets are drawn with this standard deviation in kernel widths, and cut at three of them
SPLIT_SD = 0.9
SPLIT_CUT = 3.0


@njit(nogil=True, cache=True, inline="always")
def span(low, high, cell, count):
    """First and last cell that [low, high] touches, kept in the grid."""
    return max(int(np.floor(low / cell)), 0), min(int(np.floor(high / cell)), count - 1)


@njit(nogil=True, cache=True)
def recompute(data, target, state, scale, density, share, far, table):
    """Densities at all points and shares of all centres from scratch; returns the sum of shares."""
    peak = kernel_peak(target.kernel, scale)
    density[:] = state.scalars[ETA] / peak
    if data.far.size > 0:
        far[:] = 0.0
        blend_levels(table, scale, data.far, 1.0 / peak, far)
        density += far * (target.rho * data.wide_area if target.known else state.number[0])
    reach = target.reach * scale
    per = 1.0 / (scale * scale)
    most = target.reach * target.reach
    exposure = 0.0
    for c in range(state.number[0]):
        cx, cy = state.centres[c, 0], state.centres[c, 1]
        share[c] = share_at(table, cx, cy, scale)
        exposure += share[c]
        i0, i1 = span(cx - reach - data.left, cx + reach - data.left, data.cell, data.columns)
        j0, j1 = span(cy - reach - data.bottom, cy + reach - data.bottom, data.cell, data.rows)
        if i0 > i1:
            continue
        for j in range(j0, j1 + 1):
            a, b = data.first[j * data.columns + i0], data.first[j * data.columns + i1 + 1]
            add_shapes(target.kernel, data.x[a:b], data.y[a:b], cx, cy, per, most, 1.0, density[a:b])
    return exposure


@njit(nogil=True, cache=True)
def density_afresh(data, target, state, k, skip_a, skip_b, come, ax, ay, bx, by):
    """New density at one point from scratch: subtraction would lose its digits."""
    scale = state.scalars[SCALE]
    per = 1.0 / (scale * scale)
    most = target.reach * target.reach
    x, y = data.x[k], data.y[k]
    total = state.scalars[ETA] / kernel_peak(target.kernel, scale)
    if data.far.size > 0:
        rest = state.number[0] - (1 if skip_a >= 0 else 0) - (1 if skip_b >= 0 else 0) + come
        total += state.far[k] * (target.rho * data.wide_area if target.known else rest)
    for c in range(state.number[0]):
        if c != skip_a and c != skip_b:
            dx, dy = x - state.centres[c, 0], y - state.centres[c, 1]
            total += kernel_shape(target.kernel, (dx * dx + dy * dy) * per, most)
    if come > 0:
        total += kernel_shape(target.kernel, ((x - ax) ** 2 + (y - ay) ** 2) * per, most)
    if come > 1:
        total += kernel_shape(target.kernel, ((x - bx) ** 2 + (y - by) ** 2) * per, most)
    return total


@njit(nogil=True, cache=True)
def exchange(data, target, state, gone, come, ax, ay, bx, by, work):
    """Densities if `gone` centres gave way to `come` new ones.

    The centres that go are rows work.rows[0] and work.rows[1] (as many as `gone`); the new
    places are (ax, ay) and (bx, by), as many as `come`. Leaves the cells touched in
    work.cells and the new densities of their points, in order, in work.fresh.

    Returns
    -------
    change, kernels
        Change of the log likelihood, -inf if a point would be left without a centre; for
        one centre that goes or comes alone, the sum of its kernel over the points.
    """
    scale = state.scalars[SCALE]
    reach = target.reach * scale
    per = 1.0 / (scale * scale)
    most = target.reach * target.reach
    skip_a, skip_b = -1, -1
    x0, x1, y0, y1 = np.inf, -np.inf, np.inf, -np.inf
    px, py, qx, qy = 0.0, 0.0, 0.0, 0.0
    if gone > 0:
        skip_a = work.rows[0]
        px, py = state.centres[skip_a, 0], state.centres[skip_a, 1]
        x0, x1, y0, y1 = px, px, py, py
    if gone > 1:
        skip_b = work.rows[1]
        qx, qy = state.centres[skip_b, 0], state.centres[skip_b, 1]
        x0, x1, y0, y1 = min(x0, qx), max(x1, qx), min(y0, qy), max(y1, qy)
    if come > 0:
        x0, x1, y0, y1 = min(x0, ax), max(x1, ax), min(y0, ay), max(y1, ay)
    if come > 1:
        x0, x1, y0, y1 = min(x0, bx), max(x1, bx), min(y0, by), max(y1, by)
    i0, i1 = span(x0 - reach - data.left, x1 + reach - data.left, data.cell, data.columns)
    j0, j1 = span(y0 - reach - data.bottom, y1 + reach - data.bottom, data.cell, data.rows)
    work.cells[0], work.cells[1], work.cells[2], work.cells[3] = i0, i1, j0, j1
    if i0 > i1:
        return 0.0, 0.0
    # two passes: kernels in bulk, then ratios
    fresh = work.fresh
    at = 0
    for j in range(j0, j1 + 1):
        a, b = data.first[j * data.columns + i0], data.first[j * data.columns + i1 + 1]
        x, y, part = data.x[a:b], data.y[a:b], fresh[at : at + b - a]
        part[:] = 0.0
        if gone > 0:
            add_shapes(target.kernel, x, y, px, py, per, most, -1.0, part)
        if gone > 1:
            add_shapes(target.kernel, x, y, qx, qy, per, most, -1.0, part)
        if come > 0:
            add_shapes(target.kernel, x, y, ax, ay, per, most, 1.0, part)
        if come > 1:
            add_shapes(target.kernel, x, y, bx, by, per, most, 1.0, part)
        at += b - a
    log_ratio, over, under, kernels = 0.0, 1.0, 1.0, 0.0
    stand = 0.0 if target.known else float(come - gone)
    at = 0
    for j in range(j0, j1 + 1):
        a, b = data.first[j * data.columns + i0], data.first[j * data.columns + i1 + 1]
        old, far, part = state.density[a:b], state.far[a:b], fresh[at : at + b - a]
        for k in range(b - a):
            before = old[k]
            more = part[k]
            kernels += more
            after = before + (more + stand * far[k])
            if gone > 0 and after < 1e-4 * before:
                after = density_afresh(data, target, state, a + k, skip_a, skip_b, come, ax, ay, bx, by)
                if after <= 0.0:
                    return -np.inf, 0.0
            part[k] = after
            over *= after
            under *= before
            if over < 1e-100 or under < 1e-100 or over > 1e100 or under > 1e100:
                log_ratio += np.log(over / under)
                over, under = 1.0, 1.0
        at += b - a
    return log_ratio + np.log(over / under), abs(kernels) * kernel_peak(target.kernel, scale)


@njit(nogil=True, cache=True)
def prior_ratio(data, target, state, more, exposure):
    """Log factor of the target for `more` additional centres and a new sum of shares."""
    old = state.scalars[EXPOSURE]
    if target.known:
        return more * np.log(target.rho) - target.mu * (exposure - old)
    number = state.number[0]
    out = 0.0
    if more > 0:
        out = np.log(number + target.rho_shape) - np.log(data.wide_area + target.rho_rate)
    elif more < 0:
        out = np.log(data.wide_area + target.rho_rate) - np.log(number - 1 + target.rho_shape)
    background = state.scalars[ETA] * data.area
    power = data.x.size + target.mu_shape
    return out - power * np.log(
        (exposure + background + target.mu_rate) / (old + background + target.mu_rate)
    )


@njit(nogil=True, cache=True, inline="always")
def birth_density(data, target, near_sum):
    """Density of proposing a birth: anywhere in D, or an offset from a point.

    `near_sum` is the sum of the kernel round the place over all points.
    """
    if data.x.size == 0:
        return 1.0 / data.wide_area
    near = near_sum / data.x.size
    return target.uniform_share / data.wide_area + (1.0 - target.uniform_share) * near


@njit(nogil=True, cache=True)
def take(data, state, work, exposure):
    """Accept: write the new densities and the sum of shares."""
    at = 0
    for j in range(work.cells[2], work.cells[3] + 1):
        if work.cells[0] > work.cells[1]:
            break
        a = data.first[j * data.columns + work.cells[0]]
        b = data.first[j * data.columns + work.cells[1] + 1]
        state.density[a:b] = work.fresh[at : at + b - a]
        at += b - a
    state.scalars[EXPOSURE] = exposure


@njit(nogil=True, cache=True)
def remove_centre(state, c):
    """Drop a centre; the last one takes its row."""
    last = state.number[0] - 1
    state.centres[c, 0], state.centres[c, 1] = state.centres[last, 0], state.centres[last, 1]
    state.share[c] = state.share[last]
    state.number[0] = last


@njit(nogil=True, cache=True)
def add_centre(state, x, y, share):
    last = state.number[0]
    state.centres[last, 0], state.centres[last, 1] = x, y
    state.share[last] = share
    state.number[0] = last + 1


@njit(nogil=True, cache=True)
def try_birth(data, target, table, state, work, rng):
    state.tried[BIRTH] += 1
    scale = state.scalars[SCALE]
    if data.x.size == 0 or rng.random() < target.uniform_share:
        while True:
            c = data.wide_cells[int(rng.random() * data.wide_cells.size)]
            x = data.wide.left + (c % data.wide.columns + rng.random()) * data.wide.cell
            y = data.wide.bottom + (c // data.wide.columns + rng.random()) * data.wide.cell
            if is_inside(data.wide, x, y):
                break
    else:
        k = int(rng.random() * data.x.size)
        dx, dy = draw_offset(target.kernel, scale, rng)
        x, y = data.x[k] + dx, data.y[k] + dy
        if dx * dx + dy * dy > (target.reach * scale) ** 2 or not is_inside(data.wide, x, y):
            return
    change, gained = exchange(data, target, state, 0, 1, x, y, 0.0, 0.0, work)
    share = share_at(table, x, y, scale)
    exposure = state.scalars[EXPOSURE] + share
    log_a = change + prior_ratio(data, target, state, 1, exposure)
    log_a -= np.log((state.number[0] + 1) * birth_density(data, target, gained))
    if np.log(rng.random()) < log_a:
        take(data, state, work, exposure)
        add_centre(state, x, y, share)
        state.taken[BIRTH] += 1


@njit(nogil=True, cache=True)
def try_death(data, target, state, work, rng):
    state.tried[DEATH] += 1
    number = state.number[0]
    if number == 0:
        return
    c = int(rng.random() * number)
    work.rows[0] = c
    change, lost = exchange(data, target, state, 1, 0, 0.0, 0.0, 0.0, 0.0, work)
    if change == -np.inf:
        return
    exposure = state.scalars[EXPOSURE] - state.share[c]
    log_a = change + prior_ratio(data, target, state, -1, exposure)
    log_a += np.log(number * birth_density(data, target, lost))
    if np.log(rng.random()) < log_a:
        take(data, state, work, exposure)
        remove_centre(state, c)
        state.taken[DEATH] += 1


@njit(nogil=True, cache=True)
def try_shift(data, target, table, state, work, rng):
    state.tried[SHIFT] += 1
    number = state.number[0]
    if number == 0:
        return
    scale = state.scalars[SCALE]
    c = int(rng.random() * number)
    # small steps for centres of many points, large ones for the others
    size = kernel_width(target.kernel, scale) * (0.35 if rng.random() < 0.5 else 1.0)
    x = state.centres[c, 0] + size * rng.standard_normal()
    y = state.centres[c, 1] + size * rng.standard_normal()
    if not is_inside(data.wide, x, y):
        return
    work.rows[0] = c
    change, _ = exchange(data, target, state, 1, 1, x, y, 0.0, 0.0, work)
    if change == -np.inf:
        return
    share = share_at(table, x, y, scale)
    exposure = state.scalars[EXPOSURE] - state.share[c] + share
    if np.log(rng.random()) < change + prior_ratio(data, target, state, 0, exposure):
        take(data, state, work, exposure)
        state.centres[c, 0], state.centres[c, 1] = x, y
        state.share[c] = share
        state.taken[SHIFT] += 1


@njit(nogil=True, cache=True)
def partners(state, x, y, skip_a, skip_b, limit):
    """Number of centres within the squared distance `limit` of a place, two left out."""
    count = 0
    for c in range(state.number[0]):
        dx, dy = state.centres[c, 0] - x, state.centres[c, 1] - y
        if dx * dx + dy * dy <= limit and c != skip_a and c != skip_b:
            count += 1
    return count


@njit(nogil=True, cache=True)
def split_density(dx, dy, sd):
    """Density of the half offset of a split, cut at SPLIT_CUT standard deviations."""
    z = (dx * dx + dy * dy) / (sd * sd)
    mass = 1.0 - np.exp(-0.5 * SPLIT_CUT * SPLIT_CUT)
    return np.exp(-0.5 * z) / (2.0 * np.pi * sd * sd * mass)


@njit(nogil=True, cache=True)
def try_split(data, target, table, state, work, rng):
    state.tried[SPLIT] += 1
    number = state.number[0]
    if number == 0:
        return
    scale = state.scalars[SCALE]
    sd = SPLIT_SD * kernel_width(target.kernel, scale)
    a = int(rng.random() * number)
    while True:
        dx, dy = sd * rng.standard_normal(), sd * rng.standard_normal()
        if dx * dx + dy * dy <= (SPLIT_CUT * sd) ** 2:
            break
    ax, ay = state.centres[a, 0] + dx, state.centres[a, 1] + dy
    bx, by = state.centres[a, 0] - dx, state.centres[a, 1] - dy
    if not (is_inside(data.wide, ax, ay) and is_inside(data.wide, bx, by)):
        return
    work.rows[0] = a
    change, _ = exchange(data, target, state, 1, 2, ax, ay, bx, by, work)
    if change == -np.inf:
        return
    share_0 = share_at(table, ax, ay, scale)
    share_1 = share_at(table, bx, by, scale)
    exposure = state.scalars[EXPOSURE] - state.share[a] + share_0 + share_1
    limit = (2.0 * SPLIT_CUT * sd) ** 2
    # partners that a merge from the new state could choose, the twin included
    n_0 = partners(state, ax, ay, a, -1, limit) + 1
    n_1 = partners(state, bx, by, a, -1, limit) + 1
    back = (1.0 / n_0 + 1.0 / n_1) / (number + 1)
    # offset and its opposite give the same pair; four is the Jacobian of (a, d) -> (a + d, a - d)
    forth = 2.0 * split_density(dx, dy, sd) / number / 4.0
    log_a = change + prior_ratio(data, target, state, 1, exposure) + np.log(back / forth)
    if np.log(rng.random()) < log_a:
        take(data, state, work, exposure)
        state.centres[a, 0], state.centres[a, 1] = ax, ay
        state.share[a] = share_0
        add_centre(state, bx, by, share_1)
        state.taken[SPLIT] += 1


@njit(nogil=True, cache=True)
def try_merge(data, target, table, state, work, rng):
    state.tried[MERGE] += 1
    number = state.number[0]
    if number < 2:
        return
    scale = state.scalars[SCALE]
    sd = SPLIT_SD * kernel_width(target.kernel, scale)
    limit = (2.0 * SPLIT_CUT * sd) ** 2
    a = int(rng.random() * number)
    ax, ay = state.centres[a, 0], state.centres[a, 1]
    n_a = partners(state, ax, ay, a, -1, limit)
    if n_a == 0:
        return
    pick = int(rng.random() * n_a)
    b = -1
    for c in range(number):
        dx, dy = state.centres[c, 0] - ax, state.centres[c, 1] - ay
        if dx * dx + dy * dy <= limit and c != a:
            if pick == 0:
                b = c
                break
            pick -= 1
    bx, by = state.centres[b, 0], state.centres[b, 1]
    x, y = 0.5 * (ax + bx), 0.5 * (ay + by)
    if not is_inside(data.wide, x, y):
        return
    work.rows[0], work.rows[1] = a, b
    change, _ = exchange(data, target, state, 2, 1, x, y, 0.0, 0.0, work)
    if change == -np.inf:
        return
    share = share_at(table, x, y, scale)
    exposure = state.scalars[EXPOSURE] - state.share[a] - state.share[b] + share
    n_b = partners(state, bx, by, b, -1, limit)
    forth = (1.0 / n_a + 1.0 / n_b) / number
    back = 2.0 * split_density(0.5 * (ax - bx), 0.5 * (ay - by), sd) / (number - 1) / 4.0
    log_a = change + prior_ratio(data, target, state, -1, exposure) + np.log(back / forth)
    if np.log(rng.random()) < log_a:
        take(data, state, work, exposure)
        state.centres[a, 0], state.centres[a, 1] = x, y
        state.share[a] = share
        remove_centre(state, b)
        state.taken[MERGE] += 1
