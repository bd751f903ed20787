"""Rasters of covariates: every band with a name."""

from __future__ import annotations

from pathlib import Path
from typing import NamedTuple

import numpy as np
import rasterio
from rasterio.errors import RasterioError

from geoclust.errors import InputError
from geoclust.layers.raster import Grid, grid_like, read_band


class CovariateBand(NamedTuple):
    """One band of a raster.

    Attributes
    ----------
    name
        The band's description if it has one, else the name of the file, with the number
        of the band if there are several.
    values
        (rows, columns), not a number where the raster has no value.
    grid
        Where the cells lie.
    """

    name: str
    values: np.ndarray
    grid: Grid


def read_covariate_bands(path: str | Path) -> list[CovariateBand]:
    """Read all bands of a raster.

    Raises
    ------
    InputError
        If the file is no raster, has no coordinate reference system or is not north-up.
    """
    # says what is wrong with the file, if anything
    grid_like(path)
    try:
        with rasterio.open(path) as raster:
            descriptions = raster.descriptions
    except RasterioError as error:
        raise InputError(f"{path} cannot be read whole, it may be damaged: {error}") from error
    out = []
    for number, description in enumerate(descriptions, start=1):
        values, grid = read_band(path, number)
        stem = Path(path).stem
        name = (description or "").strip() or (stem if len(descriptions) == 1 else f"{stem}_band{number}")
        out.append(CovariateBand("_".join(name.split()), values, grid))
    return out
