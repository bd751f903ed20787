"""Terrain or clusters: are the two told apart, and how sure are the effects of terrain?

Surveys in the sample reserve with its wetness and elevation. (1) Terrain alone: a
Poisson process with a log-linear intensity; does the test of complete randomness
reject, and does that of the fitted intensity keep its size of 5 %? (2) Terrain and
clusters: a Thomas process (0.9 centres per hectare, sigma = 13 m) thinned by terrain;
do the 95 % intervals of the effects cover the truth, with and without regard to the
clusters, and are height and range of g found? Run it again to go on where it stopped:

    python tests/studies/terrain.py --terrain 400 --clustered 400
"""

from __future__ import annotations

import argparse
import sys
from functools import cache

import numpy as np
import pandas as pd
import pyproj
from tables import HERE, machine, run_missing, shares_within

sys.path.insert(0, str(HERE.parent))
from known_areas import sample_reserve

import geoclust as gc
from geoclust.curves.second_order import default_radii
from geoclust.intensity.covariates import RasterCovariate
from geoclust.intensity.envelopes import inhomogeneous_envelopes
from geoclust.intensity.loglinear import Quadrature, fit_intensity
from geoclust.layers.covariates import read_covariate_bands
from geoclust.models.patterns import draw_pattern

UTM = pyproj.CRS("EPSG:25832")
POINTS = 250
SIMULATIONS = 59
# per unit of the index, and per metre
TERRAIN_ALONE = {"wetness": -0.4, "elevation": -0.01}
THINNING = {"wetness": -0.2, "elevation": -0.0025}
MODEL = gc.Thomas(parent_intensity=0.9e-4, sigma=13.0, mean_offspring=8.8)


@cache
def area() -> gc.StudyArea:
    return gc.StudyArea(sample_reserve(), UTM)


@cache
def covariates() -> tuple[RasterCovariate, ...]:
    folder = HERE.parents[1] / "sample_layers"
    bands = [b for name in THINNING for b in read_covariate_bands(folder / f"{name}.tif")]
    return tuple(RasterCovariate(b.name, b.values, b.grid, UTM) for b in bands)


@cache
def quadrature() -> Quadrature:
    return Quadrature.over(area(), covariates())


def effect(values: np.ndarray, effects: dict[str, float]) -> np.ndarray:
    """Relative intensity, one at most."""
    linear = values @ np.array(list(effects.values()))
    highest = (quadrature().values @ np.array(list(effects.values()))).max()
    return np.exp(linear - highest)


def terrain_alone(number: int) -> dict[str, float]:
    """p-values of both tests for a survey that follows terrain alone."""
    drawn, plain, weighted = np.random.default_rng([2000, number]).spawn(3)
    local = quadrature().cells.draw(effect(quadrature().values, TERRAIN_ALONE), POINTS, drawn)
    survey = gc.Survey(local + area().origin, area())
    radii = default_radii(area(), 50)
    row: dict[str, float] = {}
    for name, test in gc.randomness_envelopes(
        survey, radii, simulations=SIMULATIONS, rng=plain, workers=1
    ).items():
        row[f"complete randomness by {name}"] = test.p_value
    intensity = fit_intensity(survey, covariates(), clustered=False)
    for name, test in inhomogeneous_envelopes(
        survey, intensity, radii, simulations=SIMULATIONS, rng=weighted, workers=1
    ).items():
        row[f"fitted intensity by {name}"] = test.p_value
    return row


def terrain_and_clusters(number: int) -> dict[str, float]:
    """Intervals of the effects, and the fitted height and scale of g."""
    rng = np.random.default_rng([2007, number])
    points = draw_pattern(MODEL, area(), rng).points
    values = quadrature().measured(points + area().origin)
    kept = points[rng.random(len(points)) < effect(values, THINNING)]
    survey = gc.Survey(kept + area().origin, area())
    found = fit_intensity(survey, covariates())
    row: dict[str, float] = {"points": survey.n}
    for name in THINNING:
        row[name] = found.coefficients[name]
        for kind in ("naive", "clustered"):
            row[f"{name}_{kind}"] = found.standard_errors[kind][name]
    assert found.clustering is not None
    row["height"], row["scale_m"] = found.clustering.height, found.clustering.scale
    return row


def covers(table: pd.DataFrame, name: str, kind: str) -> str:
    inside = (table[name] - THINNING[name]).abs() <= 1.959964 * table[f"{name}_{kind}"]
    return shares_within(int(inside.sum()), len(table))


def main() -> None:
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--terrain", type=int, default=400)
    options.add_argument("--clustered", type=int, default=400)
    given = options.parse_args()
    results = HERE / "results"
    both = run_missing(
        results / "terrain_and_clusters.csv", range(given.clustered), terrain_and_clusters,
        "terrain and clusters",
    )  # fmt: skip
    alone = run_missing(results / "terrain_alone.csv", range(given.terrain), terrain_alone, "terrain alone")
    lines = [
        "# Terrain or clusters",
        "",
        f"`python tests/studies/terrain.py --terrain {given.terrain} --clustered {given.clustered}`; "
        f"{machine()}",
        "",
        f"## Terrain alone: {len(alone)} surveys of {POINTS} points, effects {TERRAIN_ALONE}",
        "",
        f"Global envelopes at 5 %, {SIMULATIONS} simulated patterns, intensity fitted anew to each.",
        "",
        "| test | rejects |",
        "|---|---|",
    ]
    for name in alone.columns.drop("survey"):
        lines.append(f"| {name} | {shares_within(int((alone[name] <= 0.05 + 1e-9).sum()), len(alone))} |")
    lines += [
        "",
        f"## Terrain and clusters: {len(both)} surveys of a thinned Thomas process, "
        f"{both['points'].mean():.0f} points on average, effects {THINNING}",
        "",
        "| effect | mean estimate | its standard deviation | mean naive error | mean clustered error | "
        "naive 95 % interval covers | clustered one covers |",
        "|---|---|---|---|---|---|---|",
    ]
    for name in THINNING:
        lines.append(
            f"| {name} | {both[name].mean():.4g} | {both[name].std():.3g} "
            f"| {both[f'{name}_naive'].mean():.3g} | {both[f'{name}_clustered'].mean():.3g} "
            f"| {covers(both, name, 'naive')} "
            f"| {covers(both, name, 'clustered')} |"
        )
    height = float(MODEL.pair_correlation(0.0)) - 1
    lines += ["", "| of g | truth | median | middle 90 % |", "|---|---|---|---|"]
    for name, truth in (("height", height), ("scale_m", MODEL.sigma)):
        low, median, high = np.quantile(both[name], [0.05, 0.5, 0.95])
        lines.append(f"| {name} | {truth:.3g} | {median:.3g} | {low:.3g} to {high:.3g} |")
    (results / "terrain.md").write_text("\n".join([*lines, ""]), encoding="utf-8")


if __name__ == "__main__":
    main()
