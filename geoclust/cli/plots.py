"""Surveys of several plots, for the commands that take them."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from geoclust.area.survey import Survey
from geoclust.cli.output import as_json, put
from geoclust.cli.talk import Talk
from geoclust.errors import CannotTell, UsageError


def pooled_or_one(points: Path, area: Path, plot_column: str | None, talk: Talk, **reading: Any) -> Survey:
    """The survey, or all plots side by side if a column names them."""
    from geoclust import workflow
    from geoclust.replicates import read_plots

    if plot_column is None:
        return workflow.read_survey(points, area, **reading)
    plots = read_plots(points, area, plot_column=plot_column, **reading)
    for line in plots.lines():
        talk.say(line)
    return plots.pooled()


def fit_groups(
    points: Path,
    area: Path,
    plot_column: str | None,
    group_column: str,
    model: str,
    seed: int,
    talk: Talk,
    *,
    out: Path | None,
    json: bool,
    overwrite: bool,
    choices: dict[str, Any],
    **reading: Any,
) -> int:
    """Fit every group of plots by itself, compare, and print or write it."""
    from geoclust.fitting.groups import compare_groups
    from geoclust.replicates import read_plots
    from geoclust.report.groups import group_lines, group_record
    from geoclust.seeds import stream

    if plot_column is None:
        raise UsageError("--group-column needs --plot-column, which says what belongs to which plot.")
    plots = read_plots(points, area, plot_column=plot_column, group_column=group_column, **reading)
    for line in plots.lines():
        talk.say(line)
    groups = plots.groups()
    found = compare_groups(groups, model, rng=stream(seed, "fit"), **choices)
    text = as_json(group_record(found, seed, {"model": model, "group_column": group_column}))
    if out is not None:
        put(text, out, overwrite)
    put(text if json else "\n".join(group_lines(found, groups)), None)
    talk.say(f"seed {seed}")
    return 0 if all(fit.ok for fit in found.fits.values()) else CannotTell.exit_status
