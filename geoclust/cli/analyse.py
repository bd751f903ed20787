"""`geoclust analyse`: the whole job, from layers to a folder of results."""

from __future__ import annotations

import shlex
from pathlib import Path
from typing import Any

import click

from geoclust.cli.options import PLACES, READING, RUNNING, out_option, survey_arguments, takes
from geoclust.cli.places import file_and_layer
from geoclust.cli.seeds import chosen_seed
from geoclust.cli.talk import Talk
from geoclust.errors import CannotTell


@click.command(short_help="The whole job: layers in, a folder with maps and a report out.")
@survey_arguments
@out_option("Folder for the results; it appears whole at the end, or not at all.", required=True, folder=True)
@takes("model", "covariate", *PLACES, "like", "cell", "simulations", *READING, "seed", "overwrite", *RUNNING)
@click.option("--title", metavar="TEXT", show_default="the name of POINTS", help="Heading of the report.")
@click.pass_obj
def analyse(
    given: list[str],
    points: Path,
    area: Path,
    zones: str | None,
    zones_layer: str | None,
    unsurveyed: str | None,
    unsurveyed_layer: str | None,
    covariate: tuple[Path, ...],
    seed: int | None,
    quiet: bool,
    **options: Any,
) -> int:
    """Do the whole job: test, fit, locate, and write a folder with layers, maps, numbers and a report.

    Prints the answer in a few lines. The folder is written with exit status 0, and with 3 too: then
    report.html says why the data cannot tell, and there is no map of centres.
    """
    from geoclust import workflow

    zone_file, zone_layer = file_and_layer(zones, zones_layer, area, "--zones")
    beyond_file, beyond_layer = file_and_layer(unsurveyed, unsurveyed_layer, area, "--unsurveyed")
    with Talk(quiet) as talk:
        used = chosen_seed(seed)
        found = workflow.analyse(
            points, area, zones=zone_file, zones_layer=zone_layer, unsurveyed=beyond_file,
            unsurveyed_layer=beyond_layer, seed=used, progress=talk.progress,
            covariates=covariate, command=shlex.join(["geoclust", *given]), **options,
        )  # fmt: skip
        talk.say(f"seed {used}")
        click.echo("\n".join(found.lines()))
        return 0 if found.status == "ok" else CannotTell.exit_status
