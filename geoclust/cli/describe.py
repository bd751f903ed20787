"""`geoclust describe`: the curves K, L, g, G, F and J with envelopes, and tests of complete randomness."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from geoclust.cli.options import READING, RUNNING, out_option, survey_arguments, takes
from geoclust.cli.output import put
from geoclust.cli.seeds import chosen_seed
from geoclust.cli.talk import Talk

# g and G are the same file name to some systems
FIGURES = {"G": "G_nearest_neighbour", "F": "F_empty_space"}


@click.command(short_help="Curves with envelopes, and tests of complete randomness.")
@survey_arguments
@takes(*READING, "plot_column", "covariate", "simulations", "r_max", "bandwidth")
@out_option("Write the curves as CSV to this file.")
@click.option("--figures", type=click.Path(path_type=Path), metavar="DIR", show_default="none",
              help="Draw L, g, G, F and J into this folder, one SVG file each.")  # fmt: skip
@takes("seed", "overwrite", *RUNNING)
def describe(
    points: Path,
    area: Path,
    plot_column: str | None,
    covariate: tuple[Path, ...],
    simulations: int,
    r_max: float | None,
    bandwidth: float | str | None,
    out: Path | None,
    figures: Path | None,
    seed: int | None,
    overwrite: bool,
    workers: int | None,
    quiet: bool,
    **reading: Any,
) -> None:
    """Describe a survey by its curves, with global envelopes, and test complete randomness.

    K, L and g count pairs; G is the distance to the nearest neighbour, F that from any place to the nearest
    point, J compares both (below 1: clusters), up to one and a half mean spacings. Prints CSV: function,
    r_m, estimate, theory, lower, upper; distances and L in metres, K in square metres, the others without
    unit. The tests are told at the end.
    """
    import pandas as pd

    from geoclust import workflow
    from geoclust.cli.bandwidths import chosen_bandwidth
    from geoclust.cli.plots import pooled_or_one
    from geoclust.curves.envelopes import randomness_envelopes
    from geoclust.curves.nearest import nearest_radii
    from geoclust.curves.quadrats import quadrat_test
    from geoclust.curves.randomness import clark_evans_test, loosmore_ford_test
    from geoclust.curves.second_order import default_radii
    from geoclust.report.canvas import save_figures
    from geoclust.report.figures import curve_figure
    from geoclust.seeds import stream
    from geoclust.terrain import explain, read_covariates

    with Talk(quiet) as talk:
        survey = pooled_or_one(points, area, plot_column, talk, **reading)
        used = chosen_seed(seed)
        radii = default_radii(survey.area)
        if r_max is not None:
            radii = radii * (r_max / radii[-1])
        width = chosen_bandwidth(bandwidth, survey, float(radii[-1]), workers, talk)
        tests = randomness_envelopes(
            survey, radii, simulations=simulations, bandwidth=width,
            rng=stream(used, "curves"), workers=workers, progress=talk.progress,
        )  # fmt: skip
        nearest_seed, spacing_seed, quadrat_seed, deviation_seed, terrain_seed = stream(
            used, "description"
        ).spawn(5)
        running: dict[str, Any] = {"workers": workers, "progress": talk.progress}
        tests |= randomness_envelopes(
            survey, nearest_radii(survey.intensity), simulations=simulations, functions=("G", "F", "J"),
            rng=nearest_seed, **running,
        )  # fmt: skip
        terrain = None
        if covariate:
            terrain = explain(
                survey, read_covariates(covariate, survey.area), radii, simulations=simulations,
                rng=terrain_seed, **running,
            )  # fmt: skip
        singles = [
            loosmore_ford_test(survey, radii, simulations=simulations, rng=deviation_seed, **running),
            clark_evans_test(survey, simulations=simulations, rng=spacing_seed, **running),
        ]
        if survey.n >= 8:
            singles.append(quadrat_test(survey, simulations=simulations, rng=quadrat_seed))
        curves = [workflow.curve_table(tests, None, survey), *(terrain.frames() if terrain else [])]
        table = pd.concat(curves, ignore_index=True).to_csv(index=False)
        if figures is not None:
            drawn = {f"{FIGURES.get(name, name)}.svg": curve_figure(test) for name, test in tests.items()}
            save_figures(drawn, figures, overwrite)
        put(table, out, overwrite)
        for name, test in tests.items():
            talk.say(f"complete randomness by {name}: p = {test.p_value:.3g}")
        for single in singles:
            talk.say(f"{single.method}: {single.statistic:.4g}, p = {single.p_value:.3g}")
        for line in terrain.lines() if terrain is not None else []:
            talk.say(line)
        talk.say(f"seed {used}")
