"""Is every edge weight unbiased in the worst study areas? A simulation study.

Run from the top of the repository (about ten minutes on two cores):

    python tests/studies/edge_weights.py [--patterns 1000] [--write]

Patterns of complete randomness with a fixed number of points, in the sample
reserve, in a comb of thin strips and in short detached ones. Under every edge weight the mean of the
estimated K must be πr² and that of g must be 1, wherever there are data and,
for g, beyond the bandwidth. The largest departure in standard errors is held
against the limit that a normal distribution exceeds, among that many
comparisons, as rarely as three standard errors in a single one. Unweighted
estimates are the negative control: they must fail.
"""

from __future__ import annotations

import argparse
import sys
import time
from dataclasses import dataclass
from datetime import date
from pathlib import Path

import numpy as np
import shapely
from scipy.stats import norm

HERE = Path(__file__).parent
sys.path.insert(0, str(HERE.parent))

import known_areas

from geoclust.area.study_area import StudyArea
from geoclust.curves.pair_sums import EDGE_WEIGHTS
from geoclust.curves.second_order import SecondOrder, default_radii

POINTS = 200
RADII = 12
# chance of three standard errors or more, either way
CHANCE = 2 * norm.sf(3.0)


@dataclass(frozen=True)
class Outcome:
    """Mean estimates of one function under one edge weight, against what they must be."""

    window: str
    function: str
    edge_weight: str
    radii: np.ndarray  # where there were data
    ratio: np.ndarray  # mean estimate over theory
    errors: np.ndarray  # departures in standard errors
    comparisons: int  # of all outcomes together

    @property
    def limit(self) -> float:
        return float(norm.isf(CHANCE / 2 / self.comparisons))

    @property
    def unbiased(self) -> bool:
        return self.largest < self.limit

    @property
    def largest(self) -> float:
        return float(np.abs(self.errors).max(initial=0.0))


def windows() -> dict[str, shapely.Geometry]:
    return {
        "sample reserve": known_areas.sample_reserve(),
        "comb": known_areas.comb(),
        # parts that a circle can pass by, and shifts without anything in common
        "detached strips": known_areas.strips(length=150.0),
    }


def study(window: str, patterns: int, seed: int = 1977) -> list[Outcome]:
    """Simulate in one window; `comparisons` counts those of this window's weighted estimates."""
    area = StudyArea(windows()[window])
    # with a few small ones, for centres of thin strips to be deeper than
    radii = np.union1d(default_radii(area, RADII), [2.0, 5.0, 8.0])
    # wide enough for every radius to see pairs in every pattern
    bandwidth = 0.3 * np.sqrt(area.area / POINTS)
    rng = np.random.default_rng(seed)
    values = {(f, w): np.empty((patterns, len(radii))) for f in "Kg" for w in EDGE_WEIGHTS}
    for s in range(patterns):
        xy = area.local_uniform_points(POINTS, rng)
        for w in EDGE_WEIGHTS:
            measured = SecondOrder.of_points(xy, area, radii, bandwidth, w)
            values["K", w][s] = measured.k_values()
            values["g", w][s] = measured.g_values()
    found = []
    for (function, weight), v in values.items():
        theory = np.pi * radii**2 if function == "K" else np.ones(len(radii))
        runs = np.isfinite(v).sum(axis=0)
        # a mean of few patterns is not normal
        kept = (runs >= 0.2 * patterns) & ((function == "K") | (radii >= bandwidth))
        v, theory, runs = v[:, kept], theory[kept], runs[kept]
        mean = np.nanmean(v, axis=0)
        error = (mean - theory) / (np.nanstd(v, axis=0, ddof=1) / np.sqrt(runs))
        found.append((function, weight, radii[kept], mean / theory, error))
    count = sum(len(e) for _, w, _, _, e in found if w != "unweighted")
    return [Outcome(window, f, w, r, q, e, count) for f, w, r, q, e in found]


def report(outcomes: list[Outcome], patterns: int, seconds: float) -> str:
    lines = [
        "# Unbiasedness of the edge weights",
        "",
        f"{date.today().isoformat()}: {patterns:,} patterns of {POINTS} points in each window, "
        f"{seconds:.0f} s. "
        "Written by `python tests/studies/edge_weights.py --write`; the method is described there.",
        "",
        "| window | function | edge weight | radii | mean over theory | largest departure (s.e.) | limit | |",
        "|---|---|---|---|---|---|---|---|",
    ]
    for o in outcomes:
        row = [o.window, o.function, o.edge_weight]
        if len(o.radii) == 0:
            lines.append("| " + " | ".join([*row, "none", "", "", "", "no data"]) + " |")
            continue
        verdict = "unbiased" if o.unbiased else "biased"
        if o.edge_weight == "unweighted":
            verdict += ", which it must not be" if o.unbiased else ", as it must be"
        row += [
            f"{len(o.radii)}, {o.radii[0]:.0f}–{o.radii[-1]:.0f} m",
            f"{o.ratio.min():.4f}–{o.ratio.max():.4f}",
            f"{o.largest:.2f}",
            f"{o.limit:.2f}",
            verdict,
        ]
        lines.append("| " + " | ".join(row) + " |")
    return "\n".join(lines) + "\n"


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--patterns", type=int, default=1000)
    parser.add_argument("--write", action="store_true", help="replace the table in EDGE_WEIGHTS.md")
    given = parser.parse_args()
    start = time.perf_counter()
    outcomes = [o for window in windows() for o in study(window, given.patterns)]
    text = report(outcomes, given.patterns, time.perf_counter() - start)
    print(text)
    if given.write:
        (HERE / "EDGE_WEIGHTS.md").write_text(text, encoding="utf-8")
    wrong = [o for o in outcomes if o.unbiased == (o.edge_weight == "unweighted")]
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(main())
