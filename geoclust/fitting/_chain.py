"""Compiled loop of a chain: moves of centres, scale and background, and what is recorded."""

from __future__ import annotations

import numpy as np
from numba import njit

from geoclust.fitting._disc_moves import try_radius
from geoclust.fitting._kernels import DISC, kernel_peak, kernel_shape
from geoclust.fitting._moves import (
    BACKGROUND,
    ETA,
    EXPOSURE,
    RESCALE,
    SCALE,
    prior_ratio,
    recompute,
    span,
    try_birth,
    try_death,
    try_merge,
    try_shift,
    try_split,
)


@njit(nogil=True, cache=True)
def log_scale_prior(target, scale):
    z = (np.log(scale) - target.log_scale_mean) / target.log_scale_sd
    return -0.5 * z * z


@njit(nogil=True, cache=True)
def try_rescale(data, target, table, state, work, step, rng):
    """Random walk of the log scale, centres fixed."""
    state.tried[RESCALE] += 1
    old = state.scalars[SCALE]
    new = old * np.exp(step * rng.standard_normal())
    if table.start.size > 1:
        # the table bounds the prior
        t = (np.log(new) - table.log_scale) / table.log_step
        if t < 0.0 or t > table.start.size - 1:
            return
    exposure = recompute(data, target, state, new, work.density, work.share, work.far, table)
    log_a = log_scale_prior(target, new) - log_scale_prior(target, old)
    # densities are relative to the peak of their kernel
    peaks = kernel_peak(target.kernel, new) / kernel_peak(target.kernel, old)
    over, under = 1.0, 1.0
    for k in range(data.x.size):
        if work.density[k] <= 0.0:
            return
        over *= peaks * work.density[k]
        under *= state.density[k]
        if over < 1e-100 or under < 1e-100 or over > 1e100 or under > 1e100:
            log_a += np.log(over / under)
            over, under = 1.0, 1.0
    log_a += np.log(over / under)
    log_a += prior_ratio(data, target, state, 0, exposure)
    if np.log(rng.random()) < log_a:
        state.scalars[SCALE] = new
        state.scalars[EXPOSURE] = exposure
        state.density[:] = work.density
        state.far[:] = work.far
        state.share[: state.number[0]] = work.share[: state.number[0]]
        state.taken[RESCALE] += 1


@njit(nogil=True, cache=True)
def try_background(data, target, state, step, rng):
    """Random walk of the log background, in units of the mean offspring."""
    state.tried[BACKGROUND] += 1
    old = state.scalars[ETA]
    new = old * np.exp(step * rng.standard_normal())
    if new < 1e-300:
        return
    # exponential prior; the walk is in the logarithm
    log_a = (old - new) / target.background_mean + np.log(new / old)
    ratio = 1.0
    # densities are relative to the kernel's peak
    more = (new - old) / kernel_peak(target.kernel, state.scalars[SCALE])
    for k in range(data.x.size):
        after = state.density[k] + more
        if after <= 0.0:
            return
        ratio *= after / state.density[k]
        if ratio > 1e100 or ratio < 1e-100:
            log_a += np.log(ratio)
            ratio = 1.0
    log_a += np.log(ratio)
    if target.known:
        log_a -= target.mu * (new - old) * data.area
    else:
        rest = state.scalars[EXPOSURE] + target.mu_rate
        log_a -= (data.x.size + target.mu_shape) * np.log((rest + new * data.area) / (rest + old * data.area))
    if np.log(rng.random()) < log_a:
        for k in range(data.x.size):
            state.density[k] += more
        state.scalars[ETA] = new
        state.taken[BACKGROUND] += 1


@njit(nogil=True, cache=True)
def draw_members(data, target, state, owner, weight, rng):
    """Draw the centre of every point given centres and scale; -1 is the background, or a centre outside D.

    One pass over pairs of centre and point: each candidate replaces the one
    before with probability its weight over the sum so far.
    """
    scale = state.scalars[SCALE]
    reach = target.reach * scale
    per = 1.0 / (scale * scale)
    most = target.reach * target.reach
    weight[:] = state.scalars[ETA] / kernel_peak(target.kernel, scale)
    if data.far.size > 0:
        weight += state.far * (target.rho * data.wide_area if target.known else state.number[0])
    owner[:] = -1
    for c in range(state.number[0]):
        cx, cy = state.centres[c, 0], state.centres[c, 1]
        i0, i1 = span(cx - reach - data.left, cx + reach - data.left, data.cell, data.columns)
        j0, j1 = span(cy - reach - data.bottom, cy + reach - data.bottom, data.cell, data.rows)
        if i0 > i1:
            continue
        for j in range(j0, j1 + 1):
            for k in range(data.first[j * data.columns + i0], data.first[j * data.columns + i1 + 1]):
                dx, dy = data.x[k] - cx, data.y[k] - cy
                w = kernel_shape(target.kernel, (dx * dx + dy * dy) * per, most)
                if w > 0.0:
                    weight[k] += w
                    if rng.random() * weight[k] < w:
                        owner[k] = c


@njit(nogil=True, cache=True)
def run(data, target, table, state, work, steps, every, walk, mix, rng):
    """Make `steps` moves of centres, and a walk of scale and background after `every` of them.

    `mix` is the share of shifts, and that of splits and merges together.

    Returns the moves made: fewer if the arrays for centres are full.
    """
    room = state.share.size
    for step in range(steps):
        if state.number[0] > room - 2:
            return step
        u = rng.random()
        # half of what is not a shift or a split or merge is births, half deaths: reversible pairs
        if u < mix[0]:
            try_shift(data, target, table, state, work, rng)
        elif u < mix[0] + 0.5 * mix[1]:
            try_split(data, target, table, state, work, rng)
        elif u < mix[0] + mix[1]:
            try_merge(data, target, table, state, work, rng)
        elif u < 0.5 * (1.0 + mix[0] + mix[1]):
            try_birth(data, target, table, state, work, rng)
        else:
            try_death(data, target, state, work, rng)
        if (step + 1) % every == 0:
            if target.free_scale and target.kernel == DISC:
                draw_members(data, target, state, work.owner, work.density, rng)
                try_radius(data, target, table, state, work.owner, walk[0], rng)
            elif target.free_scale:
                try_rescale(data, target, table, state, work, walk[0], rng)
            if target.with_background:
                try_background(data, target, state, walk[1], rng)
    # take off the rounding that many small changes have left
    state.scalars[EXPOSURE] = recompute(
        data, target, state, state.scalars[SCALE], state.density, state.share, state.far, table
    )
    return steps
