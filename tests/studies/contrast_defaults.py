"""Which curve, range and power give a minimum contrast the smallest error?

Surveys of Thomas processes on four designs in a ragged reserve of 100 ha, (rho per ha, mu, sigma m) =
(0.5, 10, 12), (1, 5, 20), (2, 4, 20), (1, 5, 40), are fitted on g, K and L with several powers and
ranges, and on g with several weights of the distance. A range of k scales is found as the fit does it:
from a first fit over a quarter of the side, unless that is hardly longer. The curve is measured once.
Resumable: run it again to go on where it stopped; the tables are kept in tests/studies/results/.

    nice -n 19 python tests/studies/contrast_defaults.py --surveys 100
"""

from __future__ import annotations

import argparse
import sys

import numpy as np
import pandas as pd
from tables import HERE, machine, run_missing

sys.path[:0] = [str(HERE.parent), str(HERE.parent / "validation")]
from designs import DESIGNS, reserve_of_100_ha

import geoclust as gc
from geoclust.curves.second_order import SecondOrder, default_bandwidth
from geoclust.fitting.contrast import EXPONENTS, Contrast
from geoclust.fitting.moments import RANGE_IN_SCALES
from geoclust.fitting.search import CurvesByScale, Limits, OneLevel, best_single_level
from geoclust.models.patterns import draw_pattern

RANGES = (3.0, 4.0, 6.0, 9.0, 12.0, np.inf)
# function, power, weight of the distance; L to a power is K to half of it
WAYS = (
    ("g", 0.25, 0.0), ("g", 0.5, 0.0), ("g", 1.0, 0.0), ("g", 0.5, -1.0), ("g", 1.0, -1.0), ("g", 0.5, 1.0),
    ("K", 0.25, 0.0), ("L", 1.0, 0.0),
)  # fmt: skip


def fitted(contrast: Contrast, intensity: float, area: float) -> OneLevel:
    """The best Thomas process."""
    limits = Limits.of(contrast, intensity, area)
    return best_single_level(contrast, limits, CurvesByScale(contrast, limits))


def name_of(way: tuple[str, float, float], scales: float) -> str:
    """Column of one way and range."""
    function, power, weight = way
    return f"{function}_q{power:g}_w{weight:g}_r{scales:g}"


def one_survey(design: int, number: int, area: gc.StudyArea) -> dict[str, float]:
    """Simulate one survey and fit it in every way."""
    rho, mu, sigma = DESIGNS[design]
    truth = gc.Thomas(parent_intensity=rho * 1e-4, sigma=sigma, mean_offspring=mu)
    points = draw_pattern(truth, area, np.random.default_rng([1984, design, number])).points
    intensity = len(points) / area.area
    width = default_bandwidth(intensity)
    widest = 0.25 * float(np.sqrt(area.area))
    radii = np.linspace(0.0, widest, 401)[1:]
    measured = SecondOrder.of_points(points, area, radii, width, workers=1)
    k = measured.k_values()
    values = {"g": measured.g_values(), "K": k, "L": np.sqrt(k / np.pi)}
    row: dict[str, float] = {"points": len(points)}
    for way in WAYS:
        function, power, weight = way
        known = radii >= (0.5 * width if function == "g" else 0.0)
        whole = Contrast(
            function, radii[known], values[function][known], power, width if function == "g" else None, weight
        )
        first = fitted(whole, intensity, area.area)
        for scales in RANGES:
            r_max = scales * first.scale
            found = first
            if r_max < 0.8 * widest:
                found = fitted(whole.up_to(max(r_max, 4.0 * width)), intensity, area.area)
            name = name_of(way, scales)
            row[f"{name}_rho"] = found.parent_intensity
            row[f"{name}_sigma"] = found.scale
    return row


def errors(design: int, table: pd.DataFrame, name: str) -> tuple[float, float]:
    """Root mean square of log(estimate / truth) of rho and sigma."""
    rho, _, sigma = DESIGNS[design]
    return tuple(
        float(np.sqrt(np.mean(np.log(table[f"{name}_{what}"] / truth) ** 2)))
        for what, truth in (("rho", rho * 1e-4), ("sigma", sigma))
    )


def summary(tables: dict[int, pd.DataFrame]) -> list[str]:
    """One line for each way and range, the best over all designs first."""
    counts = ", ".join(str(len(t)) for t in tables.values())
    heads = " | ".join(f"{d + 1}: ρ | {d + 1}: σ" for d in tables)
    lines = [
        f"Surveys on the four designs: {counts}. Root mean squares of log(estimate / truth); `all` is that",
        "over both parameters and all designs. Ranges in scales of a first fit; `whole` is a quarter of the",
        "side. The ways that are the defaults are in bold.", "",
        f"| function | power | weight | range | {heads} | all |", "|" + "---|" * (5 + 2 * len(tables)),
    ]  # fmt: skip
    rows = []
    for way in WAYS:
        for scales in RANGES:
            both = [errors(d, t, name_of(way, scales)) for d, t in tables.items()]
            rows.append((float(np.sqrt(np.mean(np.square(both)))), way, scales, both))
    for whole, (function, power, weight), scales, both in sorted(rows, key=lambda r: r[0]):
        default = scales == RANGE_IN_SCALES[function] and power == EXPONENTS[function] and weight == 0
        cells = [function, f"{power:g}", f"{weight:g}", "whole" if np.isinf(scales) else f"{scales:g}"]
        cells += [f"{value:.3f}" for pair in both for value in pair] + [f"{whole:.3f}"]
        lines.append("| " + " | ".join(f"**{c}**" if default else c for c in cells) + " |")
    return [*lines, ""]


def main() -> None:
    """Run what is missing and write the page of results."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--surveys", type=int, default=100)
    given = options.parse_args()
    area = reserve_of_100_ha()
    folder = HERE / "results"
    # all designs a little further at a time, so that the page is of use early
    steps = sorted({*range(20, given.surveys, 20), given.surveys})
    for upto in steps:
        tables = {
            d: run_missing(
                folder / f"contrast_defaults_{d + 1}.csv", range(1, upto + 1),
                lambda k, d=d: one_survey(d, k, area), f"design {d + 1}",
            )
            for d in range(len(DESIGNS))
        }  # fmt: skip
        page = [
            "# Defaults of minimum contrast",
            "",
            f"{machine()}. Command: tests/studies/contrast_defaults.py.",
            "",
        ]
        page += ["Designs (rho per ha, mu, sigma m): " + ", ".join(str(d) for d in DESIGNS) + ".", ""]
        page += summary(tables)
        (folder / "contrast_defaults.md").write_text("\n".join(page), encoding="utf-8")
    print("\n".join(page))


if __name__ == "__main__":
    main()
