"""Effective samples a second of the posterior sampler against its slow twin, on four designs.

    python tests/benchmarks/posterior.py [design ...]

Both run in this process, one chain at a time on one core; times are processor times of the process.
Designs are Thomas processes in a square of 100 ha, (rho per ha, mu, sigma m) = (0.5, 10, 12),
(1, 5, 20), (2, 4, 20), (1, 5, 40).
"""

from __future__ import annotations

import sys
import time
import warnings
from pathlib import Path

import numpy as np
import shapely

sys.path.insert(0, str(Path(__file__).parent))
from plain_sampler import run_plain

from geoclust.area.study_area import StudyArea
from geoclust.fitting.convergence import diagnose
from geoclust.fitting.posterior import default_priors
from geoclust.fitting.sampling import Chain, ChainSetup, Priors, collect
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

DESIGNS = ((0.5, 10.0, 12.0), (1.0, 5.0, 20.0), (2.0, 4.0, 20.0), (1.0, 5.0, 40.0))
DRAWS, WARM_UP = 2000, 300


def setup_of(design: int) -> ChainSetup:
    """Pattern and chain setup of a design, the same for both samplers."""
    rho, mu, sigma = DESIGNS[design]
    area = StudyArea(shapely.box(0, 0, 1000, 1000))
    model = Thomas(rho * 1e-4, sigma, mu)
    points = draw_pattern(model, area, np.random.default_rng(7)).points
    p = default_priors(len(points), area)
    cut = Priors(p.parent_intensity, p.mean_offspring, p.log_scale, (sigma / 2.5, sigma * 2.5))
    return ChainSetup(points, area, model, priors=cut)


def fast(setup: ChainSetup, rng: np.random.Generator, *, warm_up: int, draws: int, moves: int) -> dict:
    """Sample with the real sampler; returns (draws,) arrays by quantity."""
    expected = setup.start.parent_intensity * setup.wide.area
    chain = Chain(setup, rng)
    for _ in range(20):
        chain.advance(warm_up * moves // 20, int(max(50, expected)))
        chain.adapt()
    for _ in range(draws):
        chain.advance(moves, int(max(50, expected)))
        chain.record()
    d = collect(setup, [chain], rng)
    return {
        "number": d.number_inside[0].astype(float), "rho": d.parent_intensity[0],
        "mu": d.mean_offspring[0], "sigma": d.scale[0],
    }  # fmt: skip


def measure(sampler, setup: ChainSetup, moves: int) -> tuple[float, str, float]:
    """Worst effective sample size a second, its parameter, and seconds."""
    seconds, series = 0.0, []
    for seed in (1, 2):
        before = time.process_time()
        series.append(sampler(setup, np.random.default_rng(seed), warm_up=WARM_UP, draws=DRAWS, moves=moves))
        seconds += time.process_time() - before
    sizes = {k: diagnose({k: np.array([s[k] for s in series])})[k][1] for k in series[0]}
    worst = min(sizes, key=sizes.__getitem__)
    used = seconds * DRAWS / (DRAWS + WARM_UP)
    return sizes[worst] / used, worst, seconds


def main() -> None:
    """Print a table row a design."""
    warnings.simplefilter("ignore")
    chosen = [int(a) - 1 for a in sys.argv[1:]] or range(4)
    small = setup_of(0)
    for sampler in (run_plain, fast):  # compile
        sampler(small, np.random.default_rng(0), warm_up=25, draws=2, moves=50)
    print("| design | points | plain, 1/s (worst) | geoclust, 1/s (worst) | ratio |\n|---|---|---|---|---|")
    for d in chosen:
        setup = setup_of(d)
        moves = int(4 * setup.start.parent_intensity * setup.wide.area)
        slow, slow_worst, _ = measure(run_plain, setup, moves)
        quick, quick_worst, _ = measure(fast, setup, moves)
        print(f"| {d + 1} | {setup.n} | {slow:.2f} ({slow_worst}) | {quick:.2f} ({quick_worst}) "
              f"| {quick / slow:.1f} |", flush=True)  # fmt: skip


if __name__ == "__main__":
    main()
