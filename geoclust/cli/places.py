"""Which file and layer a value such as that of --zones stands for."""

from __future__ import annotations

import os
from pathlib import Path

from geoclust.errors import UsageError


def file_and_layer(
    value: str | None, layer: str | None, area: Path, option: str
) -> tuple[Path | None, str | None]:
    """Take a value as a file if it is one or looks like one, otherwise as a layer in the file of the area.

    Parameters
    ----------
    value
        A file, or the name of a layer in `area`.
    layer
        Layer of that file.
    area
        The file that holds the study area.
    option
        Name of the option, for messages.

    Raises
    ------
    UsageError
        If two layers are named, or a layer of no file.

    Examples
    --------
    >>> file_and_layer("zones", None, Path("survey.gpkg"), "--zones")[1]
    'zones'
    >>> file_and_layer("plots/zones.shp", None, Path("survey.gpkg"), "--zones")[1] is None
    True
    """
    if value is None:
        if layer is not None:
            raise UsageError(f"{option}-layer names a layer of the file given by {option}, which is missing")
        return None, None
    path = Path(value)
    # a name with a suffix or a folder in it is meant as a file, even if that is not there
    if path.exists() or path.suffix or os.sep in value or "/" in value:
        return path, layer
    if layer is not None:
        raise UsageError(
            f"{option} {value} is no file but a layer of {area}, and {option}-layer {layer} names another "
            "one: "
            f"give the file by {option} and its layer by {option}-layer"
        )
    return area, value
