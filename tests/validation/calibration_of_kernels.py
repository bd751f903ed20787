"""Calibration by simulation for heavy-tailed and hard-edged clusters (Talts et al. 2018, arXiv:1804.06788).

As `calibration.py` does for Gaussian clusters: parameters from the prior, a pattern from the model,
and the rank of each true value among thinned posterior draws must be uniform. Patterns of the Cauchy
process are exact, with centres from the whole plane, while the sampler counts those more than eight
scales outside by their mean: what that costs would show here. Resumable:

    python tests/validation/calibration_of_kernels.py --model cauchy --draws 300
    python tests/validation/calibration_of_kernels.py --model matern-cluster --draws 300
"""

from __future__ import annotations

import argparse

import numpy as np
import pandas as pd
from calibration import HERE, KEPT, small_reserve
from scipy import stats
from tables import machine, run_missing

import geoclust as gc
from geoclust.fitting.sampling import ChainSetup, Priors, collect, run_chains
from geoclust.models.catalogue import model_by_name
from geoclust.models.patterns import draw_pattern

NAMES = ("parent_intensity", "scale", "mean_offspring", "centres_inside")
# parents per ha about 2, offspring about 4; median and bounds of the scale in metres
SCALES = {"cauchy": (4.0, 1.8, 9.0), "matern-cluster": (14.0, 6.0, 32.0)}


def one_draw(number: int, area: gc.StudyArea, name: str) -> dict[str, float]:
    """Draw parameters and pattern, sample, and rank the truth."""
    median, low, high = SCALES[name]
    priors = Priors((8.0, 8.0 / 2e-4), (8.0, 2.0), (float(np.log(median)), 0.25), (low, high))
    kind = model_by_name(name)
    rng = np.random.default_rng([6100, number])
    rho, mu, scale = rng.gamma(8.0, 2e-4 / 8.0), rng.gamma(8.0, 0.5), 0.0
    while not low <= scale <= high:
        scale = float(np.exp(rng.normal(np.log(median), 0.25)))
    pattern = draw_pattern(kind.of(rho, scale, mu), area, rng)
    # the margin must not tell the true scale: it is that of the largest disc, or of the median tail
    margin = high if name == "matern-cluster" else kind.margin_in_scales * median
    start = kind.of(2e-4, median, 4.0)
    setup = ChainSetup(pattern.points, area, start, priors=priors, margin=margin, workers=1)
    expected = 2e-4 * setup.wide.area
    chains = run_chains(
        setup, chains=1, warm_up=100, draws=KEPT, moves_per_draw=int(60 * expected),
        every=int(max(20, expected / 2)), rng=rng, workers=1,
    )  # fmt: skip
    draws = collect(setup, chains, rng)
    truth = (rho, scale, mu, area.local_contains(pattern.centres).sum())
    found = (draws.parent_intensity, draws.scale, draws.mean_offspring, draws.number_inside)
    row: dict[str, float] = {"points": len(pattern.points)}
    for k, quantity in enumerate(NAMES):
        # ties, of which the number of centres has many, are broken at random
        below, same = (found[k] < truth[k]).sum(), (found[k] == truth[k]).sum()
        row[quantity] = int(below + rng.integers(0, same + 1))
    return row


def report(table: pd.DataFrame) -> list[str]:
    """Chi-square test of uniform ranks in ten classes, and the mean rank, by quantity."""
    lines = ["| quantity | draws | chi-square, 9 df | p | mean rank (49.5) |", "|---|---|---|---|---|"]
    for name in NAMES:
        ranks = table[name].astype(int)
        statistic, p = stats.chisquare(np.bincount(ranks * 10 // (KEPT + 1), minlength=10))
        error = np.sqrt(((KEPT + 1) ** 2 - 1) / 12 / len(ranks))
        lines.append(
            f"| {name} | {len(table)} | {statistic:.1f} | {p:.3g} | {ranks.mean():.1f} ± {error:.1f} |"
        )
    return lines


def main() -> None:
    """Run what is missing and write the page of results."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--model", choices=tuple(SCALES), action="append")
    parser.add_argument("--draws", type=int, default=0)
    arguments = parser.parse_args()
    area = small_reserve()
    results = HERE / "results"
    for name in arguments.model or []:
        run_missing(
            results / f"calibration_{name}.csv", range(1, arguments.draws + 1),
            lambda k, m=name: one_draw(k, area, m), f"calibration, {name}",
        )  # fmt: skip
    lines = ["# Simulation-based calibration of other kernels", ""]
    lines += [f"{machine()}. Command: tests/validation/calibration_of_kernels.py.", ""]
    for name in SCALES:
        path = results / f"calibration_{name}.csv"
        if path.exists():
            lines += [f"## {name}", "", *report(pd.read_csv(path)), ""]
    (results / "calibration_of_kernels.md").write_text("\n".join(lines), encoding="utf-8")
    print("\n".join(lines))


if __name__ == "__main__":
    main()
