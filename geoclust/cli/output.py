"""Where data goes: stdout, or a file that appears whole."""

from __future__ import annotations

from pathlib import Path

import click

from geoclust.errors import OutputError


def put(text: str, out: Path | None, overwrite: bool = False) -> None:
    """Print a text on stdout, or write it to a file.

    Raises
    ------
    OutputError
        If the file exists or cannot be written.
    """
    if out is None:
        click.echo(text.rstrip("\n"))
        return
    from geoclust.layers.results_folder import results_file

    with results_file(out, overwrite) as partial:
        try:
            partial.write_text(text, encoding="utf-8")
        except OSError as error:
            raise OutputError(f"{out} cannot be written: {error.strerror}.") from error


def as_json(record: object) -> str:
    """A record as JSON, readable."""
    import json

    return json.dumps(record, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
