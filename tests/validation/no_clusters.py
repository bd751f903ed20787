"""Where there are no clusters, none are reported: random and regular patterns, and two real regular ones.

100 patterns of complete randomness and 100 regular ones (no two points closer than 0.7 mean spacings,
by sequential inhibition, Diggle 1983), 300 points each in the ragged reserve of 100 ha, with the default
fit. Resumable:

    python tests/validation/no_clusters.py --surveys 100
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import shapely
from scipy.spatial import cKDTree

HERE = Path(__file__).parent
sys.path[:0] = [str(HERE.parent), str(HERE.parent / "studies")]
from designs import reserve_of_100_ha
from tables import machine, run_missing, shares_within

import geoclust as gc

POINTS = 300
SPACING = 0.7
REAL = {1: ("caveolae.csv", 500.0), 2: ("nuclei_px512.csv", 512.0)}


def regular(area: gc.StudyArea, rng: np.random.Generator) -> np.ndarray:
    """Points put down one by one, each refused that comes too near to another."""
    nearest = SPACING / np.sqrt(POINTS / area.area)
    kept = np.empty((0, 2))
    while len(kept) < POINTS:
        at = area.uniform_points(1, rng)
        if len(kept) == 0 or cKDTree(kept).query(at)[0][0] >= nearest:
            kept = np.vstack([kept, at])
    return kept


def verdict(survey: gc.Survey, seed: int) -> dict[str, float]:
    """Status of the default fit."""
    fit = gc.fit_clusters(survey, rng=seed)
    return {"status": fit.status, "p_value": fit.choices["clustering_p_value"]}  # type: ignore[dict-item]


def one(kind: str, number: int, area: gc.StudyArea) -> dict[str, float]:
    """One pattern."""
    if kind == "real":
        file, side = REAL[number]
        xy = pd.read_csv(HERE.parent / "data" / file)[["x", "y"]].to_numpy(float)
        return verdict(gc.Survey(xy, gc.StudyArea(shapely.box(0, 0, side, side))), 1)
    rng = np.random.default_rng([7000 if kind == "random" else 7001, number])
    xy = area.uniform_points(POINTS, rng) if kind == "random" else regular(area, rng)
    return verdict(gc.Survey(xy, area), number)


def main() -> None:
    """Run what is missing and write the page of results."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--surveys", type=int, default=0)
    arguments = parser.parse_args()
    area = reserve_of_100_ha()
    lines = ["# Where there are no clusters", "", f"{machine()}.", "",
             "| patterns | cannot tell, or no clustering | statuses |", "|---|---|---|"]  # fmt: skip
    for kind in ("real", "regular", "random"):
        tasks = REAL if kind == "real" else range(1, arguments.surveys + 1)
        path = HERE / "results" / f"no_clusters_{kind}.csv"
        table = run_missing(path, tasks, lambda k, kind=kind: one(kind, k, area), kind)  # type: ignore[misc]
        counts = table["status"].value_counts()
        text = ", ".join(f"{name} {count}" for name, count in counts.items())
        none = int((table["status"] != "ok").sum())
        lines.append(f"| {kind} | {shares_within(none, len(table))} | {text} |")
    (HERE / "results" / "no_clusters.md").write_text("\n".join([*lines, ""]), encoding="utf-8")
    print("\n".join(lines))


if __name__ == "__main__":
    main()
