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

Every move is reversible on its own (Green 1995, Biometrika 82: 711-732; Geyer
& Møller 1994, Scandinavian Journal of Statistics 21: 359-373).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from geoclust.area._edges import is_inside

GAUSSIAN, DISC, CAUCHY = 0, 1, 2


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


class ShareTable(NamedTuple):
    """Share of a kernel that falls in the study area, tabulated over place and log scale."""

    values: np.ndarray  # (total,) levels one after the other, row by row
    start: np.ndarray  # (levels,) where each level begins
    left: np.ndarray  # (levels,)
    bottom: np.ndarray
    step: np.ndarray
    columns: np.ndarray
    rows: np.ndarray
    log_scale: float  # of level 0
    log_step: float


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


class State(NamedTuple):
    """The chain: arrays that the moves change in place."""

    centres: np.ndarray  # (room, 2)
    share: np.ndarray  # (room,)
    density: np.ndarray  # (n,) eta + sum of kernels at each point
    number: np.ndarray  # (1,) int, centres in use
    scalars: np.ndarray  # (3,) scale, eta, sum of shares
    tried: np.ndarray  # (moves,) int
    taken: np.ndarray


SCALE, ETA, EXPOSURE = 0, 1, 2
BIRTH, DEATH, SHIFT, SPLIT, MERGE, RESCALE, BACKGROUND = 0, 1, 2, 3, 4, 5, 6
# split offsets are drawn with this standard deviation in scales, and cut at three of them
SPLIT_SD = 0.9
SPLIT_CUT = 3.0


@njit(nogil=True, cache=True, inline="always")
def kernel_value(kernel, d2, scale):
    """Density of an offspring at squared distance d2, per square metre."""
    z = d2 / (scale * scale)
    if kernel == GAUSSIAN:
        return np.exp(-0.5 * z) / (2.0 * np.pi * scale * scale)
    if kernel == DISC:
        return 1.0 / (np.pi * scale * scale) if z <= 1.0 else 0.0
    return (1.0 + z) ** -1.5 / (2.0 * np.pi * scale * scale)


@njit(nogil=True, cache=True)
def draw_offset(kernel, scale, rng):
    """Draw one offset from the kernel."""
    if kernel == GAUSSIAN:
        return scale * rng.standard_normal(), scale * rng.standard_normal()
    turn = 2.0 * np.pi * rng.random()
    u = rng.random()
    if kernel == DISC:
        r = scale * np.sqrt(u)
    else:
        r = scale * np.sqrt(1.0 / ((1.0 - u) * (1.0 - u)) - 1.0)
    return r * np.cos(turn), r * np.sin(turn)


@njit(nogil=True, cache=True)
def cubic(t, w):
    """Weights of four equally spaced nodes -1, 0, 1, 2 at position t in [0, 1]."""
    w[0] = -t * (t - 1.0) * (t - 2.0) / 6.0
    w[1] = (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0
    w[2] = -(t + 1.0) * t * (t - 2.0) / 2.0
    w[3] = (t + 1.0) * t * (t - 1.0) / 6.0


@njit(nogil=True, cache=True)
def quintic(t, w):
    """Weights of six equally spaced nodes -2 .. 3 at position t in [0, 1]."""
    a, b, c, d, e, f = t + 2.0, t + 1.0, t, t - 1.0, t - 2.0, t - 3.0
    w[0] = -b * c * d * e * f / 120.0
    w[1] = a * c * d * e * f / 24.0
    w[2] = -a * b * d * e * f / 12.0
    w[3] = a * b * c * e * f / 12.0
    w[4] = -a * b * c * d * f / 24.0
    w[5] = a * b * c * d * e / 120.0


@njit(nogil=True, cache=True)
def level_share(table, level, x, y):
    """Share at one tabulated scale, by quintic interpolation over place."""
    step = table.step[level]
    columns, rows = table.columns[level], table.rows[level]
    u = (x - table.left[level]) / step
    v = (y - table.bottom[level]) / step
    i = min(max(int(np.floor(u)), 2), columns - 4)
    j = min(max(int(np.floor(v)), 2), rows - 4)
    start = table.start[level]
    # away from the boundary the share is flat
    home = start + j * columns + i
    corner = table.values[home]
    if (corner == 0.0 or corner == 1.0) and (
        table.values[home - 2 * columns - 2] == corner
        and table.values[home - 2 * columns + 3] == corner
        and table.values[home + 3 * columns - 2] == corner
        and table.values[home + 3 * columns + 3] == corner
    ):
        return corner
    wu = np.empty(6)
    wv = np.empty(6)
    quintic(u - i, wu)
    quintic(v - j, wv)
    total = 0.0
    for q in range(6):
        row = home + (q - 2) * columns - 2
        part = 0.0
        for p in range(6):
            part += wu[p] * table.values[row + p]
        total += wv[q] * part
    return min(max(total, 0.0), 1.0)


@njit(nogil=True, cache=True)
def share_at(table, x, y, scale):
    """Share of the kernel round (x, y) that falls in the study area."""
    levels = table.start.size
    if levels == 1:
        return level_share(table, 0, x, y)
    t = (np.log(scale) - table.log_scale) / table.log_step
    base = min(max(int(np.floor(t)), 1), levels - 3)
    w = np.empty(4)
    cubic(t - base, w)
    total = 0.0
    for q in range(4):
        total += w[q] * level_share(table, base + q - 1, x, y)
    return min(max(total, 0.0), 1.0)


@njit(nogil=True, cache=True, inline="always")
def span(low, high, cell, count):
    """First and last cell that [low, high] touches, kept in the grid."""
    return max(int(np.floor(low / cell)), 0), min(int(np.floor(high / cell)), count - 1)


@njit(nogil=True, cache=True)
def recompute(data, target, state, scale, density, share, table):
    """Densities at all points and shares of all centres from scratch; returns the sum of shares."""
    density[:] = state.scalars[ETA]
    reach = target.reach * scale
    limit = reach * reach
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
            for k in range(data.first[j * data.columns + i0], data.first[j * data.columns + i1 + 1]):
                dx, dy = data.x[k] - cx, data.y[k] - cy
                d2 = dx * dx + dy * dy
                if d2 <= limit:
                    density[k] += kernel_value(target.kernel, d2, scale)
    return exposure


@njit(nogil=True, cache=True)
def density_without(data, target, state, k, skip_a, skip_b):
    """Density at one point from scratch, two centres left out: subtraction would lose all digits."""
    scale = state.scalars[SCALE]
    limit = (target.reach * scale) ** 2
    total = state.scalars[ETA]
    for c in range(state.number[0]):
        if c != skip_a and c != skip_b:
            dx, dy = data.x[k] - state.centres[c, 0], data.y[k] - state.centres[c, 1]
            d2 = dx * dx + dy * dy
            if d2 <= limit:
                total += kernel_value(target.kernel, d2, scale)
    return total


@njit(nogil=True, cache=True)
def exchange(data, target, state, minus, plus, near, fresh):
    """Densities if the centres `minus` (rows, -1 for none) gave way to the places `plus`.

    Fills `near` with the points affected and `fresh` with their new densities;
    returns their number and the change of the log likelihood, -inf if a point
    would be left without a centre.
    """
    scale = state.scalars[SCALE]
    reach = target.reach * scale
    limit = reach * reach
    x0, x1, y0, y1 = np.inf, -np.inf, np.inf, -np.inf
    for m in minus:
        if m >= 0:
            x0, x1 = min(x0, state.centres[m, 0]), max(x1, state.centres[m, 0])
            y0, y1 = min(y0, state.centres[m, 1]), max(y1, state.centres[m, 1])
    for p in range(plus.shape[0]):
        x0, x1 = min(x0, plus[p, 0]), max(x1, plus[p, 0])
        y0, y1 = min(y0, plus[p, 1]), max(y1, plus[p, 1])
    i0, i1 = span(x0 - reach - data.left, x1 + reach - data.left, data.cell, data.columns)
    j0, j1 = span(y0 - reach - data.bottom, y1 + reach - data.bottom, data.cell, data.rows)
    count = 0
    log_ratio = 0.0
    ratio = 1.0
    if i0 > i1:
        return 0, 0.0
    for j in range(j0, j1 + 1):
        for k in range(data.first[j * data.columns + i0], data.first[j * data.columns + i1 + 1]):
            lost, gained = 0.0, 0.0
            for m in minus:
                if m >= 0:
                    dx, dy = data.x[k] - state.centres[m, 0], data.y[k] - state.centres[m, 1]
                    d2 = dx * dx + dy * dy
                    if d2 <= limit:
                        lost += kernel_value(target.kernel, d2, scale)
            for p in range(plus.shape[0]):
                dx, dy = data.x[k] - plus[p, 0], data.y[k] - plus[p, 1]
                d2 = dx * dx + dy * dy
                if d2 <= limit:
                    gained += kernel_value(target.kernel, d2, scale)
            if lost == 0.0 and gained == 0.0:
                continue
            before = state.density[k]
            rest = before - lost
            if lost > 0.0 and rest < 1e-6 * before:
                rest = density_without(data, target, state, k, minus[0], minus[1])
            after = rest + gained
            if after <= 0.0:
                return 0, -np.inf
            near[count] = k
            fresh[count] = after
            count += 1
            ratio *= after / before
            if ratio > 1e100 or ratio < 1e-100:
                log_ratio += np.log(ratio)
                ratio = 1.0
    return count, log_ratio + np.log(ratio)


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


@njit(nogil=True, cache=True)
def birth_density(data, target, state, x, y):
    """Density of proposing a birth at (x, y): anywhere in D, or an offset from a point."""
    scale = state.scalars[SCALE]
    reach = target.reach * scale
    limit = reach * reach
    i0, i1 = span(x - reach - data.left, x + reach - data.left, data.cell, data.columns)
    j0, j1 = span(y - reach - data.bottom, y + reach - data.bottom, data.cell, data.rows)
    total = 0.0
    if i0 <= i1:
        for j in range(j0, j1 + 1):
            for k in range(data.first[j * data.columns + i0], data.first[j * data.columns + i1 + 1]):
                dx, dy = data.x[k] - x, data.y[k] - y
                d2 = dx * dx + dy * dy
                if d2 <= limit:
                    total += kernel_value(target.kernel, d2, scale)
    share = target.uniform_share
    near = (1.0 - share) * total / data.x.size if data.x.size > 0 else 0.0
    return share / data.wide_area + near


@njit(nogil=True, cache=True)
def take(state, near, fresh, count, exposure):
    """Accept: write the new densities and the sum of shares."""
    for q in range(count):
        state.density[near[q]] = fresh[q]
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
def try_birth(data, target, table, state, near, fresh, rng):
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
    plus = np.empty((1, 2))
    plus[0, 0], plus[0, 1] = x, y
    count, change = exchange(data, target, state, (-1, -1), plus, near, fresh)
    share = share_at(table, x, y, scale)
    exposure = state.scalars[EXPOSURE] + share
    log_a = change + prior_ratio(data, target, state, 1, exposure)
    log_a -= np.log((state.number[0] + 1) * birth_density(data, target, state, x, y))
    if np.log(rng.random()) < log_a:
        take(state, near, fresh, count, exposure)
        add_centre(state, x, y, share)
        state.taken[BIRTH] += 1


@njit(nogil=True, cache=True)
def try_death(data, target, state, near, fresh, rng):
    state.tried[DEATH] += 1
    number = state.number[0]
    if number == 0:
        return
    c = int(rng.random() * number)
    count, change = exchange(data, target, state, (c, -1), np.empty((0, 2)), near, fresh)
    if change == -np.inf:
        return
    exposure = state.scalars[EXPOSURE] - state.share[c]
    log_a = change + prior_ratio(data, target, state, -1, exposure)
    x, y = state.centres[c, 0], state.centres[c, 1]
    log_a += np.log(number * birth_density(data, target, state, x, y))
    if np.log(rng.random()) < log_a:
        take(state, near, fresh, count, exposure)
        remove_centre(state, c)
        state.taken[DEATH] += 1


@njit(nogil=True, cache=True)
def try_shift(data, target, table, state, near, fresh, rng):
    state.tried[SHIFT] += 1
    number = state.number[0]
    if number == 0:
        return
    scale = state.scalars[SCALE]
    c = int(rng.random() * number)
    # small steps for centres of many points, large ones for the others
    size = scale * (0.35 if rng.random() < 0.5 else 1.0)
    x = state.centres[c, 0] + size * rng.standard_normal()
    y = state.centres[c, 1] + size * rng.standard_normal()
    if not is_inside(data.wide, x, y):
        return
    plus = np.empty((1, 2))
    plus[0, 0], plus[0, 1] = x, y
    count, change = exchange(data, target, state, (c, -1), plus, near, fresh)
    if change == -np.inf:
        return
    share = share_at(table, x, y, scale)
    exposure = state.scalars[EXPOSURE] - state.share[c] + share
    if np.log(rng.random()) < change + prior_ratio(data, target, state, 0, exposure):
        take(state, near, fresh, count, exposure)
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
def split_density(dx, dy, scale):
    """Density of the half offset of a split, cut at SPLIT_CUT standard deviations."""
    sd = SPLIT_SD * scale
    z = (dx * dx + dy * dy) / (sd * sd)
    mass = 1.0 - np.exp(-0.5 * SPLIT_CUT * SPLIT_CUT)
    return np.exp(-0.5 * z) / (2.0 * np.pi * sd * sd * mass)


@njit(nogil=True, cache=True)
def try_split(data, target, table, state, near, fresh, rng):
    state.tried[SPLIT] += 1
    number = state.number[0]
    if number == 0:
        return
    scale = state.scalars[SCALE]
    sd = SPLIT_SD * scale
    a = int(rng.random() * number)
    while True:
        dx, dy = sd * rng.standard_normal(), sd * rng.standard_normal()
        if dx * dx + dy * dy <= (SPLIT_CUT * sd) ** 2:
            break
    plus = np.empty((2, 2))
    ax, ay = state.centres[a, 0], state.centres[a, 1]
    plus[0, 0], plus[0, 1] = ax + dx, ay + dy
    plus[1, 0], plus[1, 1] = ax - dx, ay - dy
    if not (is_inside(data.wide, plus[0, 0], plus[0, 1]) and is_inside(data.wide, plus[1, 0], plus[1, 1])):
        return
    count, change = exchange(data, target, state, (a, -1), plus, near, fresh)
    if change == -np.inf:
        return
    share_0 = share_at(table, plus[0, 0], plus[0, 1], scale)
    share_1 = share_at(table, plus[1, 0], plus[1, 1], scale)
    exposure = state.scalars[EXPOSURE] - state.share[a] + share_0 + share_1
    limit = (2.0 * SPLIT_CUT * sd) ** 2
    # partners that a merge from the new state could choose, the twin included
    n_0 = partners(state, plus[0, 0], plus[0, 1], a, -1, limit) + 1
    n_1 = partners(state, plus[1, 0], plus[1, 1], a, -1, limit) + 1
    back = (1.0 / n_0 + 1.0 / n_1) / (number + 1)
    # offset and its opposite give the same pair; four is the Jacobian of (a, d) -> (a + d, a - d)
    forth = 2.0 * split_density(dx, dy, scale) / number / 4.0
    log_a = change + prior_ratio(data, target, state, 1, exposure) + np.log(back / forth)
    if np.log(rng.random()) < log_a:
        take(state, near, fresh, count, exposure)
        state.centres[a, 0], state.centres[a, 1] = plus[0, 0], plus[0, 1]
        state.share[a] = share_0
        add_centre(state, plus[1, 0], plus[1, 1], share_1)
        state.taken[SPLIT] += 1


@njit(nogil=True, cache=True)
def try_merge(data, target, table, state, near, fresh, rng):
    state.tried[MERGE] += 1
    number = state.number[0]
    if number < 2:
        return
    scale = state.scalars[SCALE]
    sd = SPLIT_SD * scale
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
    plus = np.empty((1, 2))
    plus[0, 0], plus[0, 1] = 0.5 * (ax + bx), 0.5 * (ay + by)
    if not is_inside(data.wide, plus[0, 0], plus[0, 1]):
        return
    count, change = exchange(data, target, state, (a, b), plus, near, fresh)
    if change == -np.inf:
        return
    share = share_at(table, plus[0, 0], plus[0, 1], scale)
    exposure = state.scalars[EXPOSURE] - state.share[a] - state.share[b] + share
    n_b = partners(state, bx, by, b, -1, limit)
    forth = (1.0 / n_a + 1.0 / n_b) / number
    back = 2.0 * split_density(0.5 * (ax - bx), 0.5 * (ay - by), scale) / (number - 1) / 4.0
    log_a = change + prior_ratio(data, target, state, -1, exposure) + np.log(back / forth)
    if np.log(rng.random()) < log_a:
        take(state, near, fresh, count, exposure)
        state.centres[a, 0], state.centres[a, 1] = plus[0, 0], plus[0, 1]
        state.share[a] = share
        remove_centre(state, b)
        state.taken[MERGE] += 1
