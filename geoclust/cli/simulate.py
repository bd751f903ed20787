"""`geoclust simulate`: patterns of clusters or of complete randomness, as a layer."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from geoclust.cli.options import READING, RUNNING, out_option, survey_arguments, takes
from geoclust.cli.seeds import chosen_seed
from geoclust.cli.talk import Talk
from geoclust.errors import UsageError, not_allowed


@click.command(short_help="Simulate patterns in the study area, as a layer.")
@survey_arguments
@out_option("File to write: .gpkg, .fgb, .geojson or .csv.", required=True)
@takes("count", "model", "parameter", "fit", "covariate", "random", *READING, "seed", "overwrite", *RUNNING)
def simulate(
    points: Path,
    area: Path,
    out: Path,
    count: int,
    model: str,
    parameter: tuple[str, ...],
    fit: Path | None,
    covariate: tuple[Path, ...],
    random: bool,
    seed: int | None,
    overwrite: bool,
    workers: int | None,
    quiet: bool,
    **reading: Any,
) -> int:
    """Simulate patterns in the study area: of --model with --parameter, of a fit, or at random.

    Every point carries the number of its pattern in the column `pattern`. Without --parameter, --fit or
    --random the model is fitted to POINTS first. Exit status 3: the data cannot tell, and nothing is
    written.
    """
    from geoclust import steps

    if sum((bool(parameter), fit is not None, random)) > 1:
        raise UsageError("Give one of --parameter, --fit and --random: each says by itself what to simulate.")
    with Talk(quiet) as talk:
        used = chosen_seed(seed)
        written = steps.simulate(
            points, area, out=out, count=count, model=model, parameters=_values(parameter),
            fit_file=fit, covariates=covariate, random=random, seed=used, overwrite=overwrite,
            workers=workers, progress=talk.progress, **reading,
        )  # fmt: skip
        talk.say(f"{written:,} points in {count:,} patterns in {out}, seed {used}")
        return 0


def _values(given: tuple[str, ...]) -> dict[str, float]:
    """Names and numbers of --parameter."""
    values: dict[str, float] = {}
    for text in given:
        name, equals, number = text.partition("=")
        try:
            values[name.strip().replace("-", "_")] = float(number)
        except ValueError:
            raise not_allowed("--parameter", "NAME=VALUE with a number, such as sigma=15", text) from None
        if not equals:
            raise not_allowed("--parameter", "NAME=VALUE with a number, such as sigma=15", text)
    return values
