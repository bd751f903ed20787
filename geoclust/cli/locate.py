"""`geoclust locate`: the map of the centres and the clusters as layers."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from geoclust.cli.options import PLACES, READING, RUNNING, out_option, survey_arguments, takes
from geoclust.cli.places import file_and_layer
from geoclust.cli.seeds import chosen_seed
from geoclust.cli.talk import Talk


@click.command(short_help="Map the cluster centres and outline the clusters.")
@survey_arguments
@out_option("Folder to write, which must not hold other files.", required=True, folder=True)
@takes("fit", "model", "covariate", *PLACES, "like", "cell", *READING, "seed", "overwrite", *RUNNING)
def locate(
    points: Path,
    area: Path,
    out: Path,
    fit: Path | None,
    model: str,
    covariate: tuple[Path, ...],
    zones: str | None,
    zones_layer: str | None,
    unsurveyed: str | None,
    unsurveyed_layer: str | None,
    like: Path | None,
    cell: float | None,
    seed: int | None,
    overwrite: bool,
    workers: int | None,
    quiet: bool,
    **reading: Any,
) -> int:
    """Map the cluster centres per hectare and outline the clusters, given a fit.

    Writes centre_intensity.tif, results.gpkg and styles. Takes the fit from --fit, or fits --model first.
    Exit status 3: the data cannot tell, and nothing is written.
    """
    from geoclust import steps

    zone_file, zone_layer = file_and_layer(zones, zones_layer, area, "--zones")
    beyond_file, beyond_layer = file_and_layer(unsurveyed, unsurveyed_layer, area, "--unsurveyed")
    with Talk(quiet) as talk:
        used = chosen_seed(seed)
        found = steps.locate(
            points, area, out=out, fit_file=fit, model=model, covariates=covariate, zones=zone_file,
            zones_layer=zone_layer, unsurveyed=beyond_file, unsurveyed_layer=beyond_layer, like=like,
            cell=cell, seed=used, overwrite=overwrite, workers=workers, progress=talk.progress, **reading,
        )  # fmt: skip
        talk.say(f"seed {used}")
        click.echo("\n".join(found.lines()))
        return 0
