"""`geoclust describe`: the curves K, L and g with envelopes of complete randomness."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from geoclust.cli.options import READING, RUNNING, out_option, survey_arguments, takes
from geoclust.cli.output import put
from geoclust.cli.seeds import chosen_seed
from geoclust.cli.talk import Talk


@click.command(short_help="Curves K, L and g with envelopes of complete randomness.")
@survey_arguments
@takes(*READING, "simulations", "r_max", "bandwidth")
@out_option("Write the curves as CSV to this file.")
@click.option("--figures", type=click.Path(path_type=Path), metavar="DIR", show_default="none",
              help="Draw L and g into this folder, as L.svg and g.svg.")  # fmt: skip
@takes("seed", "overwrite", *RUNNING)
def describe(
    points: Path,
    area: Path,
    simulations: int,
    r_max: float | None,
    bandwidth: float | None,
    out: Path | None,
    figures: Path | None,
    seed: int | None,
    overwrite: bool,
    workers: int | None,
    quiet: bool,
    **reading: Any,
) -> None:
    """Describe a survey by the curves K, L and g, with global envelopes of complete randomness for L and g.

    Prints CSV: function, r_m, estimate, theory, lower, upper; distances and L in metres, K in square
    metres, g without unit.
    """
    from geoclust import workflow
    from geoclust.curves.envelopes import randomness_envelopes
    from geoclust.curves.second_order import default_radii
    from geoclust.report.canvas import save_figures
    from geoclust.report.figures import curve_figure
    from geoclust.seeds import stream

    with Talk(quiet) as talk:
        survey = workflow.read_survey(points, area, **reading)
        used = chosen_seed(seed)
        radii = default_radii(survey.area)
        if r_max is not None:
            radii = radii * (r_max / radii[-1])
        tests = randomness_envelopes(
            survey, radii, simulations=simulations, bandwidth=bandwidth,
            rng=stream(used, "curves"), workers=workers, progress=talk.progress,
        )  # fmt: skip
        table = workflow.curve_table(tests, None, survey).to_csv(index=False)
        if figures is not None:
            drawn = {f"{name}.svg": curve_figure(test) for name, test in tests.items()}
            save_figures(drawn, figures, overwrite)
        put(table, out, overwrite)
        for name, test in tests.items():
            talk.say(f"complete randomness by {name}: p = {test.p_value:.3g}")
        talk.say(f"seed {used}")
