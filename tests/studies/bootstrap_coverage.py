"""Does a 95 % bootstrap interval of a contrast fit hold the truth in 95 surveys of 100?

Surveys of a known Thomas process (1 centre per hectare, 5 points a cluster, sigma 20 m) in a ragged
reserve of 100 ha are simulated and fitted by minimum contrast on g with the default choices; the
intervals are the middle 95 % of 199 refitted patterns. What comes out is recorded whatever it is.
Resumable: run it again to go on where it stopped. The tables are kept in tests/studies/results/.

    nice -n 19 python tests/studies/bootstrap_coverage.py --surveys 100
"""

from __future__ import annotations

import argparse
import sys

import numpy as np
import pandas as pd
from tables import HERE, machine, run_missing, shares_within

sys.path[:0] = [str(HERE.parent), str(HERE.parent / "validation")]
from designs import reserve_of_100_ha

import geoclust as gc
from geoclust.models.patterns import draw_pattern

TRUTH = gc.Thomas(parent_intensity=1e-4, sigma=20.0, mean_offspring=5.0)
PATTERNS = 199


def one_survey(number: int, area: gc.StudyArea) -> dict[str, float]:
    """Simulate and fit one survey."""
    drawn, fitted = np.random.default_rng([1984, number]).spawn(2)
    survey = gc.Survey(draw_pattern(TRUTH, area, drawn).points + area.origin, area)
    fit = gc.fit_clusters(survey, method="minimum-contrast", bootstrap=PATTERNS, rng=fitted, workers=1)
    row: dict[str, float] = {"points": survey.n, "ok": int(fit.ok)}
    for name, value in fit.parameters.items():
        low, high = fit.intervals[name]
        row |= {name: value, f"{name}_low": low, f"{name}_high": high}
    return row


def summary(table: pd.DataFrame) -> list[str]:
    """Lines of the results page."""
    lines = [
        f"{len(table)} surveys, {int(table['ok'].sum())} of them with status ok; the shares are over all of "
        "them.",
        "",
        "| parameter | truth | median of the estimates | 95 % interval covers | lies wholly below | "
        "lies wholly above | median of high / low |",
        "|---|---|---|---|---|---|---|",
    ]
    for name, truth in TRUTH.parameters.items():
        factor, unit = {"parent_intensity": (1e4, " ha⁻¹"), "sigma": (1.0, " m")}.get(name, (1.0, ""))
        low, high = table[f"{name}_low"], table[f"{name}_high"]
        inside = int(((low <= truth) & (truth <= high)).sum())
        lines.append(
            f"| {name} | {truth * factor:g}{unit} | {table[name].median() * factor:.3f} "
            f"| {shares_within(inside, len(table))} | {int((high < truth).sum())} "
            f"| {int((low > truth).sum())} | {np.median(high / low):.2f} |"
        )
    return [*lines, ""]


def main() -> None:
    """Run what is missing and write the page of results."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--surveys", type=int, default=100)
    given = options.parse_args()
    area = reserve_of_100_ha()
    folder = HERE / "results"
    table = run_missing(
        folder / "bootstrap_coverage.csv", range(given.surveys), lambda k: one_survey(k, area), "coverage"
    )
    page = [
        "# Coverage of the bootstrap interval",
        "",
        machine(),
        "",
        "Thomas process in a ragged reserve of 100 ha, rho = 1 ha⁻¹, mu = 5, sigma = 20 m; minimum contrast",
        f"on g with the default choices, {PATTERNS} bootstrap patterns "
        "(`tests/studies/bootstrap_coverage.py`).",
        "",
        *summary(table),
    ]
    (folder / "bootstrap_coverage.md").write_text("\n".join(page), encoding="utf-8")
    print("\n".join(page))


if __name__ == "__main__":
    main()
