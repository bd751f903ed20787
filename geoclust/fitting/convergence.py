"""Run chains until they agree, by the diagnostics of a well-kept library."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.fitting.sampling import Chain, ChainSetup, Draws, Progress, collect, extend, run_chains

Floats = npt.NDArray[np.float64]

# Vehtari et al. 2021, Bayesian Analysis 16: 667-718: rank-normalised R-hat and effective sample size
R_HAT_LIMIT = 1.01
ENOUGH = 400.0
# draws kept per chain, at most; longer runs are thinned, so memory stays bounded
KEPT = 500
FIRST = 250
# kernels evaluated in all before patience ends: a few minutes on two cores. Counted, not timed, so
# that the same seed gives the same answer on any machine
PATIENCE = 1e10


@dataclass(frozen=True, eq=False)
class Sample:
    """Draws from the posterior and whether the chains agree.

    Attributes
    ----------
    setup
        What was sampled.
    draws
        The record.
    diagnostics
        R-hat and bulk effective sample size by quantity.
    converged
        Every R-hat below 1.01 and every effective sample size above 400.
    moves
        Moves of centres per chain after warming up.
    """

    setup: ChainSetup
    draws: Draws
    diagnostics: dict[str, tuple[float, float]]
    converged: bool
    moves: int

    @property
    def worst(self) -> tuple[float, float]:
        """Largest R-hat and smallest effective sample size."""
        values = list(self.diagnostics.values())
        return max(v[0] for v in values), min(v[1] for v in values)


def diagnose(quantities: dict[str, Floats]) -> dict[str, tuple[float, float]]:
    """R-hat and bulk effective sample size of each quantity, (chains, draws) each; constants are left out."""
    with warnings.catch_warnings():
        # the library announces its next release at import
        warnings.simplefilter("ignore")
        import arviz

        return {
            name: (float(arviz.rhat(v, method="rank")), float(arviz.ess(v, method="bulk")))
            for name, v in quantities.items()
            if np.ptp(v) > 0
        }


def sample_until_converged(
    setup: ChainSetup,
    *,
    rng: np.random.Generator,
    chains: int = 4,
    every: int = 50,
    most_rounds: int = 11,
    enough: float = ENOUGH,
    leave: Callable[[Sample], bool] | None = None,
    workers: int | None = None,
    progress: Progress | None = None,
) -> Sample:
    """Sample, look at the diagnostics, and go on until they are good or the patience is at an end.

    Parameters
    ----------
    setup
        What to sample.
    rng
        Source of the chains' random numbers.
    chains
        Number of chains, at least two.
    every
        Moves of centres between two walks of scale and background.
    most_rounds
        Each round after the first makes the run longer by half; fewer are made where every move meets
        very many points.
    enough
        Effective sample size to reach for every quantity.
    leave
        Asked at each look whether to stop, because the sample will not be used.
    """
    seeds = rng.spawn(2)
    expected = setup.start.parent_intensity * setup.wide.area
    moves_per_draw = int(max(4.0 * expected, 100.0))
    running = run_chains(
        setup, chains=chains, warm_up=FIRST, draws=FIRST, moves_per_draw=moves_per_draw, every=every,
        rng=seeds[0], workers=workers, progress=_labelled(progress, 1),
    )  # fmt: skip
    moves = FIRST * moves_per_draw
    sample = _look(setup, running, seeds[1], moves, enough)
    in_reach = np.pi * (setup.reach * setup.start.scale) ** 2 * setup.n / setup.area.area
    a_move = 1.0 + min(in_reach, setup.n)
    for k in range(1, most_rounds):
        more = len(running[0].records) // 2
        after = chains * (moves + more * moves_per_draw) * a_move
        if sample.converged or (k > 2 and after > PATIENCE) or (leave is not None and leave(sample)):
            break
        extend(
            running, draws=more, moves_per_draw=moves_per_draw, every=every, workers=workers,
            progress=_labelled(progress, k + 1),
        )  # fmt: skip
        moves += more * moves_per_draw
        while len(running[0].records) > KEPT:
            for chain in running:
                chain.records = chain.records[1::2]
            moves_per_draw *= 2
        sample = _look(setup, running, seeds[1], moves, enough)
    return sample


def _labelled(progress: Progress | None, number: int) -> Callable[[str, int, int], None] | None:
    if progress is None:
        return None
    return lambda label, done, total: progress(f"{label}, round {number}", done, total)


def _look(
    setup: ChainSetup, running: list[Chain], rng: np.random.Generator, moves: int, enough: float
) -> Sample:
    draws = collect(setup, running, rng)
    quantities = {"centres inside": draws.number_inside.astype(float)}
    if not setup.target.known:
        quantities["parent_intensity"] = draws.parent_intensity
        quantities["mean_offspring"] = draws.mean_offspring
    if setup.target.free_scale:
        quantities[type(setup.start).scale_name] = draws.scale
    if setup.target.with_background:
        quantities["background"] = draws.background
    found = diagnose(quantities)
    good = all(r < R_HAT_LIMIT and e > enough for r, e in found.values())
    return Sample(setup, draws, found, good, moves)
