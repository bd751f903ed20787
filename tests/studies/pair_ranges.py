"""Up to which distance should the likelihoods of pairs look?

Surveys of known processes are fitted by Palm and by composite likelihood with ranges of 2 to 12
times the true scale; the defaults of `geoclust/fitting/likelihood_fits.py` rest on this. Resumable: run it
again to go on where it stopped. The tables are kept in tests/studies/results/.

    nice -n 19 python tests/studies/pair_ranges.py --surveys 40
"""

from __future__ import annotations

import argparse
import sys

import numpy as np
import pandas as pd
from tables import HERE, machine, run_missing

sys.path[:0] = [str(HERE.parent), str(HERE.parent / "validation")]
from designs import reserve_of_100_ha
from known_areas import sample_reserve

import geoclust as gc
from geoclust.fitting.likelihood_fits import FORMS, fit_pairs
from geoclust.fitting.moments import ContrastChoices, fit_points
from geoclust.models.base import ClusterModel
from geoclust.models.patterns import draw_pattern

RANGES = (2, 3, 4, 6, 8, 12)
DESIGNS = {
    "thomas_15_m": (sample_reserve, gc.Thomas(parent_intensity=1e-4, sigma=15.0, mean_offspring=6.0)),
    "thomas_20_m": (None, gc.Thomas(parent_intensity=1e-4, sigma=20.0, mean_offspring=5.0)),
    "matern_30_m": (None, gc.MaternCluster(parent_intensity=1e-4, radius=30.0, mean_offspring=5.0)),
}


def one_survey(number: int, design: int, area: gc.StudyArea, truth: ClusterModel) -> dict[str, float]:
    """Simulate one survey and fit it with every range."""
    points = draw_pattern(truth, area, np.random.default_rng([2008, design, number])).points
    kind = type(truth)
    model = fit_points(kind, points, area, ContrastChoices()).fit.model
    row: dict[str, float] = {"points": len(points)}
    row |= {"contrast_rho": model.parent_intensity, "contrast_scale": model.scale}
    for form in FORMS:
        for times in RANGES:
            model = fit_pairs(kind, form, points, area, ContrastChoices(r_max=times * truth.scale)).model
            row |= {f"{form}_{times}_rho": model.parent_intensity, f"{form}_{times}_scale": model.scale}
    return row


def summary(name: str, table: pd.DataFrame, truth: ClusterModel) -> list[str]:
    """Errors of one design as lines of text."""
    lines = [
        f"## {name.replace('_', ' ')}, {len(table)} surveys",
        "",
        "| fit | range in scales | rho | scale |",
    ]
    lines.append("|---|---|---|---|")

    def error(column: str, value: float) -> str:
        return f"{np.sqrt(np.mean(np.log(table[column] / value) ** 2)):.3f}"

    for fit, times in [("contrast", ""), *((f, str(t)) for f in FORMS for t in RANGES)]:
        key = f"{fit}_{times}" if times else fit
        rho, scale = error(f"{key}_rho", truth.parent_intensity), error(f"{key}_scale", truth.scale)
        lines.append(f"| {fit} | {times or 'default'} | {rho} | {scale} |")
    return [*lines, ""]


def main() -> None:
    """Run what is missing and write the page of results."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--surveys", type=int, default=40)
    given = options.parse_args()
    folder = HERE / "results"
    page = ["# Range of the likelihoods of pairs", "", machine(), ""]
    page += ["Root mean square of log(estimate / truth) (`tests/studies/pair_ranges.py`).", ""]
    for k, (name, (polygon, truth)) in enumerate(DESIGNS.items()):
        area = reserve_of_100_ha() if polygon is None else gc.StudyArea(polygon())
        table = run_missing(
            folder / f"pair_ranges_{name}.csv", range(given.surveys),
            lambda n, k=k, a=area, t=truth: one_survey(n, k, a, t), name,
        )  # fmt: skip
        page += summary(name, table, truth)
        (folder / "pair_ranges.md").write_text("\n".join(page), encoding="utf-8")
    print("\n".join(page))


if __name__ == "__main__":
    main()
