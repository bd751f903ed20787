"""Does the interval of the number of centres hold the true number?

Surveys of a Thomas process in the sample reserve (rho = 1 per hectare, sigma =
15 m, mu = 6) are simulated, and the centres sampled at the true parameters.
The 90 % interval of the number of centres inside the study area must hold the
true number in 83 to 96 of 100 surveys (binomial, 98 %). Run it again to go on
where it stopped:

    python tests/studies/centres.py --surveys 100
"""

from __future__ import annotations

import argparse
import sys

import numpy as np
import pandas as pd
from scipy import stats
from tables import HERE, machine, run_missing, shares_within

sys.path.insert(0, str(HERE.parent))
from known_areas import sample_reserve

import geoclust as gc
from geoclust.fitting.convergence import sample_until_converged
from geoclust.fitting.sampling import ChainSetup
from geoclust.models.patterns import draw_pattern

TRUTH = gc.Thomas(parent_intensity=1e-4, sigma=15.0, mean_offspring=6.0)


def one_survey(number: int, area: gc.StudyArea) -> dict[str, float]:
    """Simulate, sample the centres, and compare with the true ones."""
    drawn, sampled, tie = np.random.default_rng([2002, number]).spawn(3)
    pattern = draw_pattern(TRUTH, area, drawn)
    true = int(area.local_contains(pattern.centres).sum())
    setup = ChainSetup(pattern.points, area, TRUTH)
    # an effective sample size of 150 gives the ends of a 90 % interval to a fifth of a standard deviation
    sample = sample_until_converged(setup, rng=sampled, chains=2, enough=150.0, most_rounds=3)
    inside = sample.draws.number_inside
    r_hat, size = sample.worst
    row: dict[str, float] = {
        "points": len(pattern.points),
        "true_inside": true,
        "mean": float(inside.mean()),
        "low_90": float(np.quantile(inside, 0.05)),
        "high_90": float(np.quantile(inside, 0.95)),
        "low_50": float(np.quantile(inside, 0.25)),
        "high_50": float(np.quantile(inside, 0.75)),
        # uniform if the posterior is right; ties are broken at random
        "rank": float((inside < true).mean() + tie.uniform() * (inside == true).mean()),
        "r_hat": r_hat,
        "effective_sample_size": size,
        "converged": int(sample.converged),
        "moves_per_chain": sample.moves,
    }
    return row


def summary(table: pd.DataFrame) -> list[str]:
    """Lines of the results page."""
    n = len(table)

    def held(level: int) -> int:
        return int(((table[f"low_{level}"] <= table["true_inside"])
                    & (table["true_inside"] <= table[f"high_{level}"])).sum())  # fmt: skip

    uniform = stats.kstest(table["rank"], "uniform")
    bias = table["mean"] - table["true_inside"]
    return [
        f"- {n} surveys, {int(table['converged'].sum())} with agreeing chains (R-hat below 1.01, effective "
        "sample size above 150)",
        f"- 90 % interval holds the true number in {shares_within(held(90), n)}",
        f"- 50 % interval holds the true number in {shares_within(held(50), n)}",
        "- rank of the true number in the posterior, against uniform: Kolmogorov–Smirnov "
        f"p = {uniform.pvalue:.2f}",
        f"- posterior mean minus true number: mean {bias.mean():.2f} (standard error "
        f"{bias.std(ddof=1) / np.sqrt(n):.2f}), standard deviation {bias.std(ddof=1):.1f}",
        f"- mean width of the 90 % interval: {np.mean(table['high_90'] - table['low_90']):.1f} of "
        f"{np.mean(table['true_inside']):.0f} centres",
        "",
    ]


def main() -> None:
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--surveys", type=int, default=100)
    given = options.parse_args()
    area = gc.StudyArea(sample_reserve())
    folder = HERE / "results"
    table = run_missing(
        folder / "centres.csv", range(given.surveys), lambda k: one_survey(k, area), "number of centres"
    )
    page = ["# Number of centres inside, at the true parameters", "", machine(), ""]
    page += ["Thomas process in the sample reserve, rho = 1 ha⁻¹, sigma = 15 m, mu = 6 "
             "(`tests/studies/centres.py`).", "", *summary(table)]  # fmt: skip
    (folder / "centres.md").write_text("\n".join(page), encoding="utf-8")
    print("\n".join(page))


if __name__ == "__main__":
    main()
