"""`geoclust audit`: what the layers hold, before anything is computed."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from geoclust.cli.options import READING, out_option, survey_arguments, takes
from geoclust.cli.output import as_json, put


@click.command(short_help="Look into the layers: counts, repairs, coordinates, warnings.")
@survey_arguments
@takes(*READING, "json")
@out_option("Write the audit as JSON to this file.")
@takes("overwrite")
def audit(points: Path, area: Path, json: bool, out: Path | None, overwrite: bool, **reading: Any) -> None:
    """Look into the layers of a survey: what was read, what was dropped and why, what coordinates are worth.

    Prints text, or JSON with --json.
    """
    from geoclust.layers.survey_layers import audit_survey
    from geoclust.report.record import plain

    found = audit_survey(points, area, **reading)
    record = as_json(plain(found.to_dict()))
    if out is not None:
        put(record, out, overwrite)
    put(record if json else "\n".join(found.lines()), None)
