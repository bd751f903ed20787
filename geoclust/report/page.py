"""The page for people: one self-contained HTML file."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from jinja2 import Environment, PackageLoader, StrictUndefined

from geoclust.errors import OutputError

if TYPE_CHECKING:
    from geoclust.area.survey import Survey
    from geoclust.centres.result import CentreMap
    from geoclust.curves.envelopes import EnvelopeTest
    from geoclust.fitting.result import ClusterFit
    from geoclust.layers.audit import Audit


def write_page(
    path: str | Path,
    *,
    survey: Survey,
    audit: Audit | None,
    envelopes: Mapping[str, EnvelopeTest] | None,
    fit: ClusterFit | None,
    status: str,
    reason: str,
    centres: CentreMap | None,
    choices: Mapping[str, object],
    versions: Mapping[str, str],
    command: str | None,
    title: str,
    files: Sequence[tuple[str, str]],
) -> None:
    """Write the page."""
    environment = Environment(
        loader=PackageLoader("geoclust.report", "templates"), autoescape=True, undefined=StrictUndefined,
        trim_blocks=True, lstrip_blocks=True,
    )  # fmt: skip
    text = environment.get_template("page.html").render(
        title=title, status=status, reason=reason, survey=survey, audit=audit, files=files, command=command
    )
    try:
        Path(path).write_text(text, encoding="utf-8")
    except OSError as error:
        raise OutputError(f"{path} cannot be written: {error.strerror}.") from error
