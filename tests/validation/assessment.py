"""Does the balanced two-stage assessment reject a true model as often as it says, and a wrong kernel?

Surveys are simulated in a ragged reserve of 25 ha and a Thomas model is fitted to each, and assessed
on the nearest-neighbour function G with 39 patterns in every first stage and 39 refits. The first kind of
survey comes from a Thomas process, the second from a strongly clustered Matérn cluster process. One survey
takes a few seconds of one core. Resumable: run it again to go on where it stopped.

    python tests/validation/assessment.py --true 300 --wrong 100

The tables are kept in tests/validation/results/.
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
from geoclust.fitting.assessment import two_stage_test
from geoclust.fitting.moments import ContrastChoices, fit_points
from geoclust.fitting.two_stages import Refit, Summary
from geoclust.models.base import ClusterModel
from geoclust.models.patterns import draw_pattern

TRUTHS: dict[str, ClusterModel] = {
    "thomas": gc.Thomas(parent_intensity=2e-4, sigma=10.0, mean_offspring=4.0),
    "matern": gc.MaternCluster(parent_intensity=1e-4, radius=20.0, mean_offspring=12.0),
}
SEEDS = {"thomas": 6100, "matern": 6200}
PATTERNS = 39
# the page is written anew after so many surveys
PORTION = 20


def reserve_of_25_ha() -> gc.StudyArea:
    """The sample reserve, shrunk to 25 ha: ragged boundary, two holes, a detached parcel."""
    area = gc.StudyArea(sample_reserve())
    factor = float(np.sqrt(25e4 / area.area))
    return gc.StudyArea(shapely.transform(area.polygon, lambda at: (at - area.origin) * factor))


def one_survey(truth: str, number: int, area: gc.StudyArea) -> dict[str, float]:
    """Simulate, fit a Thomas model, assess it."""
    drawn, seed = np.random.default_rng([SEEDS[truth], number]).spawn(2)
    survey = gc.Survey(draw_pattern(TRUTHS[truth], area, drawn).points + area.origin, area)
    before = time.process_time()
    found = fit_points(gc.Thomas, survey.local_xy, area, ContrastChoices())
    r = found.contrast.radii
    refit = Refit(gc.Thomas, area, ContrastChoices("g", float(r[-1]), float(r[0]), None, found.bandwidth))
    result = two_stage_test(
        survey, refit, Summary.of_model(survey, found.fit.model, ("G",)), statistic="extreme-rank-length",
        simulations=PATTERNS, first_stage=PATTERNS, rng=seed, workers=1,
    )  # fmt: skip
    return {
        "points": survey.n,
        "p_value": result.p_value,
        "first_stage_p_value": float(result.first_p_values[0]),
        "on_bound": int(bool(found.fit.on_bound)),
        "seconds": time.process_time() - before,
    }


def summary(truth: str, table: pd.DataFrame) -> list[str]:
    """Rejections of one kind of survey as lines of text."""
    count = len(table)
    model = TRUTHS[truth]
    named = ", ".join(
        f"{p.name} {model.parameters[p.name] * (1e4 if p.per_area else 1):g}{' per ha' if p.per_area else ''}"
        for p in model.described
    )
    lines = [f"## Thomas fitted to {model.name} ({named}): {count} surveys", ""]
    lines += ["| level | two stages reject | one stage alone rejects |", "|---|---|---|"]
    for level in (0.05, 0.1, 0.2):
        both, one = (
            shares_within(int((table[c] <= level + 1e-9).sum()), count)
            for c in ("p_value", "first_stage_p_value")
        )
        lines.append(f"| {level:.0%} | {both} | {one} |")
    lines += ["", f"{table['points'].mean():.0f} points and {table['seconds'].mean():.1f} s of one core a "
              f"survey; {int(table['on_bound'].sum())} fits on a bound of the search.", ""]  # fmt: skip
    return lines


def write_page() -> list[str]:
    """Write the page of results from the tables that there are."""
    lines = [
        "# Size and power of the two-stage assessment",
        "",
        f"{machine()}. Command: tests/validation/assessment.py. Nearest-neighbour function G, extreme rank "
        f"length, {PATTERNS} patterns in every first stage, {PATTERNS} refits; reserve of 25 ha.",
        "",
    ]
    for truth in TRUTHS:
        path = HERE / "results" / f"assessment_{truth}.csv"
        if path.exists():
            lines += summary(truth, pd.read_csv(path))
    (HERE / "results" / "assessment.md").write_text("\n".join(lines), encoding="utf-8")
    return lines


def main() -> None:
    """Run what is missing and write the page of results."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--true", type=int, default=0, help="Thomas surveys in all, those done included")
    parser.add_argument("--wrong", type=int, default=0, help="Matérn cluster surveys in all")
    arguments = parser.parse_args()
    area = reserve_of_25_ha()
    wanted = {"thomas": arguments.true, "matern": arguments.wrong}
    for start in range(0, max(wanted.values(), default=0), PORTION):
        for truth, count in wanted.items():
            portion = range(start + 1, min(start + PORTION, count) + 1)
            if len(portion):
                run_missing(
                    HERE / "results" / f"assessment_{truth}.csv", portion,
                    lambda k, t=truth: one_survey(t, k, area), f"assessment, {truth}",
                )  # fmt: skip
                write_page()
    print("\n".join(write_page()))


if __name__ == "__main__":
    main()
