"""Are both levels of nested clusters found, and is a second level refused where there is none?

Surveys of a nested Thomas process in a ragged reserve of 100 ha are fitted by minimum contrast on g,
and so are surveys of a simple Thomas process; each fit is tested for its second level. Run it again to
go on where it stopped; the tables are kept in tests/studies/results/.

    nice -n 19 python tests/studies/nested.py --surveys 100

The levels lie apart by a factor of four in sigma. About a hundred outer centres, six inner centres
round each and three points round each of these: with fewer outer centres than some tens, the outer
intensity cannot be told better than by a factor of two, whatever the method; the range of distances, a
quarter of the side, is six outer sigmas, so that the whole of an outer cluster is seen. The test for
clustering, which every one of these surveys passes, is left out.
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
from geoclust.fitting.moments import ContrastChoices, fit_points, second_level_of
from geoclust.fitting.status import TEST_LEVEL, moment_verdict
from geoclust.models.base import ClusterModel
from geoclust.models.nested_thomas import NestedThomas
from geoclust.models.patterns import draw_pattern

NESTED = NestedThomas(
    outer_intensity=1e-4, outer_sigma=40.0, inner_intensity=6e-4, inner_sigma=10.0, mean_offspring=3.0
)
SIMPLE = gc.Thomas(parent_intensity=2e-4, sigma=20.0, mean_offspring=4.5)


def one_survey(truth: ClusterModel, number: int, area: gc.StudyArea, simulations: int) -> dict[str, float]:
    """Simulate, fit, test the second level, and tell what came out."""
    levels = len(truth.levels)
    drawn, tested = np.random.default_rng([1996, levels, number]).spawn(2)
    points = draw_pattern(truth, area, drawn).points
    choices = ContrastChoices()
    found = fit_points(NestedThomas, points, area, choices)
    second = second_level_of(
        NestedThomas, found.contrast, points, area, choices, simulations, tested, workers=1
    )
    status, _ = moment_verdict(
        found.fit.model, area.area, r_max=found.r_max, on_bound=found.fit.on_bound, bounds=found.fit.bounds,
        p_value=0.0, intervals={},
    )  # fmt: skip
    earned = second.p_value <= TEST_LEVEL
    return {
        "points": len(points), "p_value": second.p_value, "drop_near": second.drops[0],
        "drop_far": second.drops[1],
        "simulations": second.simulations, "earned": int(earned), "ok": int(earned and status == "ok"),
        **found.fit.model.parameters,
    }  # fmt: skip


def summary_of_nested(table: pd.DataFrame) -> list[str]:
    """Medians over the surveys in which both levels were found."""
    count = len(table)
    lines = [
        f"## Nested Thomas process, {count} surveys", "",
        f"Second level earns its place: {shares_within(int(table['earned'].sum()), count)}; answer given "
        f"(no other reason against it): {shares_within(int(table['ok'].sum()), count)}.", "",
        "| parameter | truth | median where found | over truth | over truth, all | middle 90 %, all |",
        "|---|---|---|---|---|---|",
    ]  # fmt: skip
    found = table[table["ok"] == 1]
    for p in NESTED.described:
        factor, unit = (1e4, " ha⁻¹") if p.per_area else (1.0, " m" if p.unit == "m" else "")
        truth = NESTED.parameters[p.name]
        middle, whole = np.median(found[p.name]), np.median(table[p.name])
        low, high = np.quantile(table[p.name], [0.05, 0.95]) * factor
        lines.append(
            f"| {p.name} | {truth * factor:g}{unit} | {middle * factor:.3g}{unit} | {middle / truth:.3f} "
            f"| {whole / truth:.3f} | {low:.3g} to {high:.3g} |"
        )
    return [*lines, ""]


def summary_of_simple(table: pd.DataFrame) -> list[str]:
    """How often a second level was refused."""
    count = len(table)
    refused = int((table["earned"] == 0).sum())
    return [
        f"## Simple Thomas process, {count} surveys", "",
        f"Second level refused by the test: {shares_within(refused, count)}; no nested answer given, on this "
        f"or another account: {shares_within(int((table['ok'] == 0).sum()), count)}.", "",
    ]  # fmt: skip


def main() -> None:
    """Run what is missing and write the page of results."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--surveys", type=int, default=100)
    options.add_argument("--simulations", type=int, default=39, help="patterns of the test, at most")
    given = options.parse_args()
    area = reserve_of_100_ha()
    folder = HERE / "results"
    page = ["# Two levels of clusters", "", f"{machine()}. Command: tests/studies/nested.py.", ""]
    page += [
        "Minimum contrast on g with the default choices, ragged reserve of 100 ha; at most",
        f"{given.simulations} simulations a test, which stops once ten have reached both drops.",
        "Nested: 1 outer centre and 6 inner centres per hectare, sigmas 40 m and 10 m, 3 points round each",
        "inner centre. Simple: 2 centres per hectare, sigma 20 m, 4.5 points each.",
        "",
    ]  # fmt: skip
    cases = (
        ("nested_two_levels", NESTED, summary_of_nested),
        ("nested_one_level", SIMPLE, summary_of_simple),
    )
    # both a little further at a time, so that the page is of use early
    for upto in sorted({*range(20, given.surveys, 20), given.surveys}):
        found: list[str] = []
        for name, truth, summary in cases:
            table = run_missing(
                folder / f"{name}.csv", range(1, upto + 1),
                lambda k, t=truth: one_survey(t, k, area, given.simulations), name,
            )  # fmt: skip
            found += summary(table)
        (folder / "nested.md").write_text("\n".join([*page, *found]), encoding="utf-8")
    print("\n".join([*page, *found]))


if __name__ == "__main__":
    main()
