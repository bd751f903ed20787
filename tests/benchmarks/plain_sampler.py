"""The slow twin of the posterior sampler: births, deaths, single moves, memberships, full conditionals.

This is the sampler of the textbooks (Møller & Waagepetersen 2004, section 10.2): centres move given the
parameters, then, given drawn memberships, rho and mu have Gamma full conditionals and sigma takes one
random-walk step. It shares the compiled moves with the real one, so a comparison is one of methods.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from geoclust.fitting import _moves
from geoclust.fitting._chain import draw_members
from geoclust.fitting._moves import EXPOSURE, SCALE, recompute
from geoclust.fitting._table import share_at
from geoclust.fitting.sampling import Chain, ChainSetup


@njit(nogil=True, cache=True)
def single_moves(data, target, table, state, work, steps, rng):
    """Births, deaths and shifts of single centres, parameters fixed."""
    for _ in range(steps):
        if state.number[0] > state.share.size - 2:
            return
        u = rng.random()
        if u < 0.3:
            _moves.try_birth(data, target, table, state, work, rng)
        elif u < 0.6:
            _moves.try_death(data, target, state, work, rng)
        else:
            _moves.try_shift(data, target, table, state, work, rng)


@njit(nogil=True, cache=True)
def scale_step(data, target, table, state, owner, mu, mean, sd, step, rng):
    """One step of log sigma given centres and memberships; returns 1 if it was taken."""
    old = state.scalars[SCALE]
    new = old * np.exp(step * rng.standard_normal())
    t = (np.log(new) - table.log_scale) / table.log_step
    if t < 0.0 or t > table.start.size - 1:
        return 0
    squares = 0.0
    for k in range(data.x.size):
        dx = data.x[k] - state.centres[owner[k], 0]
        dy = data.y[k] - state.centres[owner[k], 1]
        squares += dx * dx + dy * dy
        if dx * dx + dy * dy > (target.reach * new) ** 2:
            return 0
    exposure = 0.0
    for c in range(state.number[0]):
        exposure += share_at(table, state.centres[c, 0], state.centres[c, 1], new)
    log_a = -2.0 * data.x.size * np.log(new / old) - 0.5 * squares * (1.0 / new**2 - 1.0 / old**2)
    log_a -= mu * (exposure - state.scalars[EXPOSURE])
    log_a += 0.5 * ((np.log(old) - mean) ** 2 - (np.log(new) - mean) ** 2) / sd**2
    if np.log(rng.random()) < log_a:
        state.scalars[SCALE] = new
        return 1
    return 0


def run_plain(setup: ChainSetup, rng: np.random.Generator, *, warm_up: int, draws: int, moves: int) -> dict:
    """Sample with the slow twin; returns (draws,) arrays by quantity."""
    prior = setup.target
    chain = Chain(setup, rng)
    rho, mu = setup.start.parent_intensity, setup.start.mean_offspring
    owner = np.zeros(setup.n, np.int32)
    step, taken = 0.05, 0
    out = {name: np.empty(draws) for name in ("number", "rho", "mu", "sigma")}
    for m in range(-warm_up, draws):
        target = prior._replace(known=True, rho=rho, mu=mu)
        single_moves(setup.data, target, setup.table, chain.state, chain.work, moves, rng)
        draw_members(setup.data, target, chain.state, owner, chain.work.density, rng)
        s = chain.state
        taken += scale_step(
            setup.data, target, setup.table, s, owner, mu, prior.log_scale_mean, prior.log_scale_sd, step, rng
        )
        s.scalars[EXPOSURE] = recompute(
            setup.data, target, s, s.scalars[SCALE], s.density, s.share, s.far, setup.table
        )
        rho = rng.gamma(s.number[0] + prior.rho_shape, 1.0 / (setup.wide.area + prior.rho_rate))
        mu = rng.gamma(setup.n + prior.mu_shape, 1.0 / (s.scalars[EXPOSURE] + prior.mu_rate))
        if m < 0 and (m + warm_up) % 25 == 24:
            step *= np.exp(2.0 * (taken / 25 - 0.35))
            taken = 0
        if m >= 0:
            centres = s.centres[: s.number[0]]
            out["number"][m] = setup.area.local_contains(centres).sum()
            out["rho"][m], out["mu"][m], out["sigma"][m] = rho, mu, s.scalars[SCALE]
    return out
