"""Do the tests of complete randomness keep their size, and what is their power?

Patterns of complete randomness in the sample reserve are tested at 5 % by every
test there is, two-sided and towards one side. The power is that against the
Thomas process behind the inner clusters of the sample layers (0.9 centres per hectare,
sigma = 13 m, 5 points a cluster), thinned at random to the same number of
points. Run it again to go on where it stopped:

    python tests/studies/size_of_tests.py --patterns 1000 --clustered 200
"""

from __future__ import annotations

import argparse
import sys

import numpy as np
import pandas as pd
from tables import HERE, machine, run_missing, shares_within

sys.path.insert(0, str(HERE.parent))
from known_areas import sample_reserve

import geoclust as gc
from geoclust.curves.randomness import loosmore_ford
from geoclust.curves.second_order import default_radii
from geoclust.curves.simulated import Drawn, Summaries, simulated_curves, uniform_draw
from geoclust.models.patterns import draw_pattern

POINTS = 150
# p-values are multiples of 1/60, so that 5 % is met exactly; twice the smaller tail, as in the
# two-sided test of Clark & Evans, is a multiple of 2/80
SIMULATIONS = 59
SIMULATIONS_OF_TAILS = 79
TRUTH = gc.Thomas(parent_intensity=0.9e-4, sigma=13.0, mean_offspring=5.0)


def uniform(area: gc.StudyArea, rng: np.random.Generator) -> np.ndarray:
    """A completely random pattern."""
    return area.local_uniform_points(POINTS, rng)


def clustered(area: gc.StudyArea, rng: np.random.Generator) -> np.ndarray:
    """A pattern of the Thomas process, thinned to the same number of points."""
    points = draw_pattern(TRUTH, area, rng).points
    return points[rng.choice(len(points), POINTS, replace=False)]


def p_values(number: int, area: gc.StudyArea, kind: str) -> dict[str, float]:
    """All tests of one pattern."""
    drawn, simulated, others = np.random.default_rng([2017, number, len(kind)]).spawn(3)
    local = (uniform if kind == "uniform" else clustered)(area, drawn)
    survey = gc.Survey(local + area.origin, area)
    row: dict[str, float] = {}
    seeds = simulated.spawn(SIMULATIONS)
    spacing = 1 / np.sqrt(survey.intensity)
    for functions, radii in (
        (("L", "g"), default_radii(area, 50)),
        (("G", "F", "J"), np.linspace(0, spacing, 51)[1:]),
    ):
        summaries = Summaries.of_survey(survey, functions, radii)
        observed = summaries.curves(Drawn(local))
        curves = simulated_curves(summaries, uniform_draw(area, POINTS), seeds, workers=1)
        for name in functions:
            for side in ("different", "clustered", "regular"):
                # large G means short distances, as large L does; F and J the other way round
                seen = {"clustered": "regular", "regular": "clustered"}.get(side, side)
                alternative = seen if name in ("F", "J") else side
                test = gc.global_envelope(observed[name], curves[name], alternative=alternative)
                row[f"envelope of {name}, {side}"] = test.p_value
            rows = np.vstack([observed[name].values, curves[name]])
            row[f"Loosmore & Ford on {name}"] = loosmore_ford(rows, summaries.radii)[1]
    for side in ("different", "clustered", "regular"):
        row[f"Clark & Evans, {side}"] = gc.clark_evans_test(
            survey, simulations=SIMULATIONS_OF_TAILS, alternative=side, rng=others, workers=1
        ).p_value
        row[f"quadrat dispersion, {side}"] = gc.quadrat_test(
            survey, simulations=199, alternative=side, rng=others
        ).p_value
    return row


def main() -> None:
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--patterns", type=int, default=1000)
    options.add_argument("--clustered", type=int, default=200)
    given = options.parse_args()
    area = gc.StudyArea(sample_reserve())
    results = HERE / "results"
    tables: dict[str, pd.DataFrame] = {}
    for kind, count in (("uniform", given.patterns), ("clustered", given.clustered)):
        tables[kind] = run_missing(
            results / f"size_of_tests_{kind}.csv", range(count),
            lambda number, kind=kind: p_values(number, area, kind), f"tests, {kind}",
        )  # fmt: skip
    size, power = tables["uniform"], tables["clustered"]
    lines = [
        "# Size and power of the tests of complete randomness",
        "",
        f"`python tests/studies/size_of_tests.py --patterns {given.patterns} --clustered {given.clustered}`; "
        f"{machine()}",
        "",
        f"{POINTS} points in the sample reserve; {SIMULATIONS} simulated patterns a test (Clark & Evans: "
        f"{SIMULATIONS_OF_TAILS}, quadrats: 199 sets of counts); level 5 %. Power against a Thomas "
        f"process of {TRUTH.parent_intensity * 1e4:g} centres per hectare, sigma {TRUTH.sigma:g} m, "
        f"{TRUTH.mean_offspring:g} points a cluster, thinned at random.",
        "",
        "| test | rejects complete randomness | rejects the Thomas process |",
        "|---|---|---|",
    ]
    for name in size.columns.drop("survey"):
        said = [shares_within(int((t[name] <= 0.05 + 1e-9).sum()), len(t)) for t in (size, power)]
        lines.append(f"| {name} | {said[0]} | {said[1]} |")
    (results / "size_of_tests.md").write_text("\n".join([*lines, ""]), encoding="utf-8")


if __name__ == "__main__":
    main()
