"""Does the interval mean what it says, and how much better is the posterior than the contrast?

Surveys of Thomas processes on four designs in a ragged reserve of about 100 ha are simulated and
fitted by the posterior and by minimum contrast on g and on K. Resumable: run it again to go on where
it stopped.

    python tests/validation/designs.py --design 1 --surveys 200

Designs: (rho per ha, mu, sigma m) = (0.5, 10, 12), (1, 5, 20), (2, 4, 20), (1, 5, 40). The tables are kept in
tests/validation/results/.
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

import numpy as np
import pandas as pd
import shapely

HERE = Path(__file__).parent
sys.path[:0] = [str(HERE.parent), str(HERE.parent / "studies")]
from known_areas import sample_reserve
from tables import machine, run_missing, shares_within

import geoclust as gc
from geoclust.models.patterns import draw_pattern

DESIGNS = ((0.5, 10.0, 12.0), (1.0, 5.0, 20.0), (2.0, 4.0, 20.0), (1.0, 5.0, 40.0))
NAMES = ("parent_intensity", "sigma", "mean_offspring")


def reserve_of_100_ha() -> gc.StudyArea:
    """The sample reserve, shrunk to 100 ha: ragged boundary, two holes, a detached parcel."""
    area = gc.StudyArea(sample_reserve())
    factor = float(np.sqrt(1e6 / area.area))
    return gc.StudyArea(shapely.transform(area.polygon, lambda at: (at - area.origin) * factor))


def one_survey(design: int, number: int, area: gc.StudyArea) -> dict[str, float]:
    """Simulate and fit one survey."""
    rho, mu, sigma = DESIGNS[design]
    truth = gc.Thomas(parent_intensity=rho * 1e-4, sigma=sigma, mean_offspring=mu)
    drawn, sampled, boot = np.random.default_rng([5000 + design, number]).spawn(3)
    pattern = draw_pattern(truth, area, drawn)
    survey = gc.Survey(pattern.points + area.origin, area)
    before = time.process_time()
    fit = gc.fit_clusters(survey, rng=sampled)
    row: dict[str, float] = {"points": survey.n, "ok": int(fit.ok), "seconds": time.process_time() - before}
    row["centres"] = int(area.local_contains(pattern.centres).sum())
    for name in NAMES:
        low, high = fit.intervals.get(name, (np.nan, np.nan))
        row |= {name: fit.parameters[name], f"{name}_low": low, f"{name}_high": high}
    for function in ("g", "K"):
        moment = gc.fit_clusters(survey, method="minimum-contrast", function=function, bootstrap=0, rng=boot)
        row |= {f"{function}_{name}": moment.parameters[name] for name in NAMES}
    return row


def summary(design: int, table: pd.DataFrame, area: gc.StudyArea) -> list[str]:
    """Errors, coverage and cost of one design as lines of text."""
    rho, mu, sigma = DESIGNS[design]
    truth = {"parent_intensity": rho * 1e-4, "sigma": sigma, "mean_offspring": mu}
    count = len(table)
    lines = [f"## Design {design + 1}: rho {rho} per ha, mu {mu}, sigma {sigma} m; {count} surveys", ""]
    lines.append(f"Status ok in {int(table['ok'].sum())}; mean processor time of a fit "
                 f"{table['seconds'].mean():.1f} s.")  # fmt: skip
    lines += ["", "| parameter | rms log error, posterior | contrast g | contrast K | ratio to the best | "
              "complete-data bound | 95 % interval covers |", "|---|---|---|---|---|---|---|"]  # fmt: skip
    bound = {
        "parent_intensity": 1 / np.sqrt(rho * 1e-4 * area.area),
        "sigma": float(np.mean(1 / np.sqrt(4 * table["points"]))),
    }
    for name in NAMES:

        def error(column: str, name: str = name) -> float:
            return float(np.sqrt(np.nanmean(np.log(table[column] / truth[name]) ** 2)))

        moments = [error(f"{f}_{name}") for f in ("g", "K")]
        own = error(name)
        covered = int(((table[f"{name}_low"] <= truth[name]) & (truth[name] <= table[f"{name}_high"])).sum())
        with_interval = int(table[f"{name}_low"].notna().sum())
        limit = f"{bound[name]:.3f}" if name in bound else ""
        lines.append(
            f"| {name} | {own:.3f} | {moments[0]:.3f} | {moments[1]:.3f} | {own / min(moments):.2f} "
            f"| {limit} | {shares_within(covered, max(with_interval, 1))} |"
        )
    return [*lines, ""]


def main() -> None:
    """Run what is missing and write the page of results."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--design", type=int, choices=(1, 2, 3, 4), action="append")
    parser.add_argument("--surveys", type=int, default=0, help="surveys in all, those done before included")
    arguments = parser.parse_args()
    area = reserve_of_100_ha()
    results = HERE / "results"
    for number in arguments.design or []:
        run_missing(
            results / f"design_{number}.csv", range(1, arguments.surveys + 1),
            lambda k, d=number - 1: one_survey(d, k, area), f"design {number}",
        )  # fmt: skip
    lines = [
        "# Validation of the Thomas posterior",
        "",
        f"{machine()}. Command: tests/validation/designs.py.",
        "",
    ]
    for d in range(4):
        path = results / f"design_{d + 1}.csv"
        if path.exists():
            lines += summary(d, pd.read_csv(path), area)
    (results / "designs.md").write_text("\n".join(lines), encoding="utf-8")
    print("\n".join(lines))


if __name__ == "__main__":
    main()
