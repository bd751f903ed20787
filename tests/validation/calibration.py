"""Simulation-based calibration of the sampler (Talts et al. 2018, arXiv:1804.06788).

All parameters are drawn from the prior, a pattern from the model, and the rank of each true value
among thinned posterior draws must be uniform. With --wrong the acceptance ratio is spoilt on purpose
(a wrong prior of rho): the same check must then fail. Resumable:

    python tests/validation/calibration.py --draws 300
    python tests/validation/calibration.py --draws 300 --wrong
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import shapely
from scipy import stats

HERE = Path(__file__).parent
sys.path[:0] = [str(HERE.parent), str(HERE.parent / "studies")]
from known_areas import sample_reserve
from tables import machine, run_missing

import geoclust as gc
from geoclust.fitting import sampling
from geoclust.fitting.sampling import ChainSetup, Priors, collect, run_chains

KEPT = 99
NAMES = ("parent_intensity", "sigma", "mean_offspring", "centres_inside")
# parents per ha about 2, offspring about 4, sigma about 12 m: small enough to do hundreds
PRIORS = Priors((8.0, 8.0 / 2e-4), (8.0, 2.0), (float(np.log(12.0)), 0.25), (5.0, 28.0))
MARGIN = 60.0


def small_reserve() -> gc.StudyArea:
    """The sample reserve, shrunk to 16 ha."""
    area = gc.StudyArea(sample_reserve())
    factor = float(np.sqrt(16e4 / area.area))
    return gc.StudyArea(shapely.transform(area.polygon, lambda at: (at - area.origin) * factor))


def share_the_table(area: gc.StudyArea) -> None:
    """All draws have study area, margin and scale bounds in common, so the table of shares is made once."""
    table = sampling.share_table(gc.Thomas, area, MARGIN, PRIORS.scale_bounds)
    sampling.share_table = lambda *_, **__: table


def one_draw(number: int, area: gc.StudyArea, wrong: bool) -> dict[str, float]:
    """Draw parameters and pattern, sample, and rank the truth."""
    rng = np.random.default_rng([6000, number])
    rho = rng.gamma(PRIORS.parent_intensity[0], 1 / PRIORS.parent_intensity[1])
    mu = rng.gamma(PRIORS.mean_offspring[0], 1 / PRIORS.mean_offspring[1])
    sigma = 0.0
    while not PRIORS.scale_bounds[0] <= sigma <= PRIORS.scale_bounds[1]:
        sigma = float(np.exp(rng.normal(*PRIORS.log_scale)))
    # exactly the sampler's model: centres in the study area widened by its margin
    wide = area.dilated(MARGIN)
    centres = wide.uniform_points(int(rng.poisson(rho * wide.area)), rng) - area.origin
    owner = np.repeat(np.arange(len(centres)), rng.poisson(mu, len(centres)))
    points = centres[owner] + rng.normal(0.0, sigma, (len(owner), 2))
    points = points[area.local_contains(points)]
    setup = ChainSetup(points, area, gc.Thomas(rho, sigma, mu), priors=PRIORS, margin=MARGIN)
    if wrong:
        # the prior of rho is said to be three times what the parameters are drawn from
        setup.target = setup.target._replace(rho_rate=setup.target.rho_rate / 3.0)
    expected = rho * wide.area
    chains = run_chains(
        setup, chains=1, warm_up=100, draws=KEPT, moves_per_draw=int(60 * expected),
        every=int(max(20, expected / 2)), rng=rng, workers=1,
    )  # fmt: skip
    draws = collect(setup, chains, rng)
    truth = dict(zip(NAMES, (rho, sigma, mu, area.local_contains(centres).sum()), strict=True))
    found = dict(zip(NAMES, (draws.parent_intensity, draws.scale, draws.mean_offspring, draws.number_inside),
                     strict=True))  # fmt: skip
    row: dict[str, float] = {"points": len(points)}
    for name in NAMES:
        # ties, of which the number of centres has many, are broken at random
        below, same = (found[name] < truth[name]).sum(), (found[name] == truth[name]).sum()
        row[name] = int(below + rng.integers(0, same + 1))
    return row


def report(table: pd.DataFrame) -> list[str]:
    """Chi-square test of uniform ranks in twenty classes, by quantity."""
    lines = ["| quantity | draws | chi-square, 19 df | p |", "|---|---|---|---|"]
    for name in NAMES:
        counts = np.bincount(table[name].astype(int) * 20 // (KEPT + 1), minlength=20)
        statistic, p = stats.chisquare(counts)
        lines.append(f"| {name} | {len(table)} | {statistic:.1f} | {p:.3g} |")
    return lines


def main() -> None:
    """Run what is missing and write the page of results."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--draws", type=int, default=0)
    parser.add_argument("--wrong", action="store_true")
    arguments = parser.parse_args()
    area = small_reserve()
    share_the_table(area)
    results = HERE / "results"
    name = "calibration_wrong" if arguments.wrong else "calibration"
    run_missing(
        results / f"{name}.csv", range(1, arguments.draws + 1),
        lambda k: one_draw(k, area, arguments.wrong), name,
    )  # fmt: skip
    lines = [
        "# Simulation-based calibration",
        "",
        f"{machine()}. Command: tests/validation/calibration.py.",
        "",
    ]
    for part, title in (("calibration", "The sampler"), ("calibration_wrong", "Spoilt on purpose")):
        path = results / f"{part}.csv"
        if path.exists():
            lines += [f"## {title}", "", *report(pd.read_csv(path)), ""]
    (results / "calibration.md").write_text("\n".join(lines), encoding="utf-8")
    print("\n".join(lines))


if __name__ == "__main__":
    main()
