"""`geoclust fit`: size and number of clusters, with intervals."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from geoclust.cli.options import CROSS_VALIDATION, READING, RUNNING, out_option, survey_arguments, takes
from geoclust.cli.output import as_json, put
from geoclust.cli.seeds import chosen_seed
from geoclust.cli.talk import Talk
from geoclust.errors import CannotTell, UsageError


@click.command(short_help="Fit a cluster model: how large, how many, how sure.")
@survey_arguments
@takes(
    *READING,
    "plot_column",
    "group_column",
    "model",
    "covariate",
    "method",
    "background",
    "chains",
    "function",
    "r_min",
    "r_max",
    "exponent",
)
@takes("bandwidth", "distance_weight", "level_simulations", "bootstrap", "assess", "against", "json")
@out_option("Write the fit as JSON to this file, for --fit of locate and simulate.")
@takes("seed", "overwrite", *RUNNING)
def fit(
    points: Path,
    area: Path,
    plot_column: str | None,
    group_column: str | None,
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
    bandwidth: float | str | None,
    distance_weight: float,
    level_simulations: int,
    bootstrap: int,
    assess: bool,
    against: tuple[str, ...],
    **reading: Any,
) -> int:
    """Fit a cluster model, with 95 % intervals and a verdict whether the data can tell.

    Prints parameters with units as text, or everything as JSON with --json. Exit status 3: the data cannot
    tell.
    """
    from geoclust.cli.bandwidths import chosen_bandwidth
    from geoclust.cli.plots import fit_groups, pooled_or_one
    from geoclust.fitting.assessment import assess_fit
    from geoclust.fitting.choosing import comparable, compare_models
    from geoclust.fitting.fit import fit_clusters, method_for
    from geoclust.models.catalogue import model_by_name
    from geoclust.report.record import add_assessment, add_comparison, add_terrain, fit_record
    from geoclust.report.tables import text_lines
    from geoclust.seeds import stream
    from geoclust.terrain import intensity_of

    method_for(model_by_name(model), method)
    compared = tuple(dict.fromkeys([model, *against])) if against else ()
    if compared:
        comparable(compared)
        if covariate or group_column is not None:
            raise UsageError(
                "--against does not go with --covariate or --group-column; leave these out to compare models."
            )
    with Talk(quiet) as talk:
        used = chosen_seed(seed)
        choices: dict[str, Any] = {
            "method": method, "background": background, "chains": chains, "function": function,
            "r_min": r_min, "r_max": r_max, "exponent": exponent, "bandwidth": bandwidth,
            "distance_weight": distance_weight, "level_simulations": level_simulations,
            "bootstrap": bootstrap, "workers": workers, "progress": talk.progress,
        }  # fmt: skip
        if group_column is not None:
            if bandwidth == CROSS_VALIDATION:
                raise UsageError("--bandwidth must be a number of metres here, the same for all groups.")
            if assess or covariate:
                raise UsageError("--group-column does not go with --assess or --covariate; leave these out.")
            return fit_groups(
                points, area, plot_column, group_column, model, used, talk, out=out, json=json,
                overwrite=overwrite, choices=choices, **reading,
            )  # fmt: skip
        survey = pooled_or_one(points, area, plot_column, talk, **reading)
        widest = r_max if r_max is not None else 0.25 * survey.area.side
        choices["bandwidth"] = chosen_bandwidth(bandwidth, survey, widest, workers, talk)
        intensity = intensity_of(covariate, survey)
        found, status, reason = None, "ok", ""
        try:
            found = fit_clusters(survey, model, intensity=intensity, rng=stream(used, "fit"), **choices)
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
            try:
                assessment = assess_fit(
                    survey, found, rng=stream(used, "assessment"), workers=workers, progress=talk.progress
                )
                add_assessment(record, assessment)
            except CannotTell as verdict:
                talk.say(str(verdict))
        comparison = None
        if compared and found is not None:
            try:
                comparison = compare_models(
                    survey, compared, rng=stream(used, "comparison"), workers=workers, progress=talk.progress
                )
                add_comparison(record, comparison)
            except CannotTell as verdict:
                talk.say(f"no comparison: {verdict}")
        if out is not None:
            put(as_json(record), out, overwrite)
        if json:
            put(as_json(record), None)
        elif found is not None:
            lines = text_lines(found, survey) if status == "ok" else []
            lines += [] if assessment is None else [assessment.sentence()]
            lines += [] if comparison is None else comparison.sentences()
            if lines:
                put("\n".join(lines), None)
        talk.say(f"seed {used}")
        if status != "ok":
            talk.say(f"cannot tell ({status}): {reason}")
        return 0 if status == "ok" else CannotTell.exit_status
