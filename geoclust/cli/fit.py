"""`geoclust fit`: size and number of clusters, with intervals."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from geoclust.cli.options import READING, RUNNING, out_option, survey_arguments, takes
from geoclust.cli.output import as_json, put
from geoclust.cli.seeds import chosen_seed
from geoclust.cli.talk import Talk
from geoclust.errors import CannotTell


@click.command(short_help="Fit a cluster model: how large, how many, how sure.")
@survey_arguments
@takes(
    *READING, "model", "covariate", "method", "background", "chains", "function", "r_min", "r_max", "exponent"
)
@takes("bandwidth", "distance_weight", "level_simulations", "bootstrap", "assess", "json")
@out_option("Write the fit as JSON to this file, for --fit of locate and simulate.")
@takes("seed", "overwrite", *RUNNING)
def fit(
    points: Path,
    area: Path,
    model: str,
    covariate: tuple[Path, ...],
    method: str | None,
    background: bool,
    chains: int,
    json: bool,
    out: Path | None,
    seed: int | None,
    overwrite: bool,
    workers: int | None,
    quiet: bool,
    function: str,
    r_min: float | None,
    r_max: float | None,
    exponent: float | None,
    bandwidth: float | None,
    distance_weight: float,
    level_simulations: int,
    bootstrap: int,
    assess: bool,
    **reading: Any,
) -> int:
    """Fit a cluster model, with 95 % intervals and a verdict whether the data can tell.

    Prints parameters with units as text, or everything as JSON with --json. Exit status 3: the data cannot
    tell.
    """
    from geoclust import workflow
    from geoclust.fitting.assessment import assess_fit
    from geoclust.fitting.fit import fit_clusters, method_for
    from geoclust.models.catalogue import model_by_name
    from geoclust.report.record import add_assessment, add_terrain, fit_record
    from geoclust.report.tables import text_lines
    from geoclust.seeds import stream
    from geoclust.terrain import intensity_of

    method_for(model_by_name(model), method)
    with Talk(quiet) as talk:
        survey = workflow.read_survey(points, area, **reading)
        intensity = intensity_of(covariate, survey)
        used = chosen_seed(seed)
        found, status, reason = None, "ok", ""
        try:
            found = fit_clusters(
                survey, model, method=method, background=background, chains=chains, function=function,
                r_min=r_min, r_max=r_max, exponent=exponent, bandwidth=bandwidth,
                distance_weight=distance_weight, level_simulations=level_simulations, bootstrap=bootstrap,
                intensity=intensity, rng=stream(used, "fit"), workers=workers, progress=talk.progress,
            )  # fmt: skip
            status, reason = found.status, found.reason
        except CannotTell as verdict:
            status, reason = verdict.status, str(verdict)
        record = fit_record(
            status=status, reason=reason, fit=found, envelopes=None, centres=None, audit=survey.audit,
            choices={"model": model}, seed=used,
        )  # fmt: skip
        if intensity is not None:
            add_terrain(record, intensity, {})
        assessment = None
        if assess and found is not None and status == "ok":
            assessment = assess_fit(
                survey, found, rng=stream(used, "assessment"), workers=workers, progress=talk.progress
            )
            add_assessment(record, assessment)
        if out is not None:
            put(as_json(record), out, overwrite)
        if json:
            put(as_json(record), None)
        elif status == "ok" and found is not None:
            more = [] if assessment is None else [assessment.sentence()]
            put("\n".join([*text_lines(found, survey), *more]), None)
        talk.say(f"seed {used}")
        if status != "ok":
            talk.say(f"cannot tell ({status}): {reason}")
        return 0 if status == "ok" else CannotTell.exit_status
