"""Rasters in and out: grids, covariate bands, cloud-optimised GeoTIFF.

A grid is always north-up: rows run from north to south, columns from west to
east, and cell (0, 0) is the north-western one.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyproj
import rasterio
from affine import Affine
from rasterio.crs import CRS
from rasterio.errors import CRSError, RasterioError
from rasterio.io import MemoryFile

from geoclust.errors import InputError, OutputError, not_allowed

NODATA = -9999.0
"""Value that stands for "no value here" in the rasters that geoclust writes."""

MAX_CELLS = 50_000_000
"""Largest grid that is laid: three bands of it in memory are 1.2 GB."""


@dataclass(frozen=True)
class Grid:
    """A north-up raster grid.

    Parameters
    ----------
    transform
        From (column, row) to coordinates: ``Affine(width, 0, west, 0, -height, north)``.
    shape
        Number of rows and of columns.
    crs
        Coordinate reference system of the grid.
    """

    transform: Affine
    shape: tuple[int, int]
    crs: pyproj.CRS

    @property
    def cell(self) -> tuple[float, float]:
        """Width and height of a cell, in units of the CRS."""
        return float(self.transform.a), float(-self.transform.e)

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """West, south, east and north edge, in units of the CRS."""
        rows, columns = self.shape
        west, north = self.transform.c, self.transform.f
        return west, north + rows * self.transform.e, west + columns * self.transform.a, north

    @property
    def x(self) -> np.ndarray:
        """Eastings of the cell centres, (columns,), west to east."""
        return self.transform.c + self.transform.a * (np.arange(self.shape[1]) + 0.5)

    @property
    def y(self) -> np.ndarray:
        """Northings of the cell centres, (rows,), north to south."""
        return self.transform.f + self.transform.e * (np.arange(self.shape[0]) + 0.5)

    def cells_of(self, xy: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Row and column of the cell that holds each position, and whether the grid holds it.

        Parameters
        ----------
        xy
            (n, 2) positions in the CRS of the grid.

        Returns
        -------
        row, column, held : ndarray
            (n,) each; where `held` is false, row and column are 0.

        Examples
        --------
        >>> grid = grid_over((0.0, 0.0, 20.0, 30.0), 10.0, pyproj.CRS("EPSG:25832"))
        >>> grid.cells_of(np.array([[12.0, 1.0], [-1.0, 5.0]]))
        (array([2, 0]), array([1, 0]), array([ True, False]))
        """
        position = np.asarray(xy, dtype=float).reshape(-1, 2)
        row = np.floor((position[:, 1] - self.transform.f) / self.transform.e)
        column = np.floor((position[:, 0] - self.transform.c) / self.transform.a)
        held = (row >= 0) & (row < self.shape[0]) & (column >= 0) & (column < self.shape[1])
        return np.where(held, row, 0).astype(np.intp), np.where(held, column, 0).astype(np.intp), held


def grid_over(bounds: Sequence[float], cell: float, crs: pyproj.CRS) -> Grid:
    """Lay a grid of square cells over a rectangle.

    Parameters
    ----------
    bounds
        West, south, east, north, in metres.
    cell
        Side of a cell in metres. Cell edges fall on multiples of it, so that
        grids of neighbouring study areas fit together.
    crs
        Metric coordinate reference system of the bounds.

    Raises
    ------
    UsageError
        If the cell is not a positive number, or so small that the grid would have
        more than `MAX_CELLS` cells.

    Examples
    --------
    >>> grid_over((3.0, 5.0, 41.0, 20.0), 10.0, pyproj.CRS("EPSG:25832")).bounds
    (0.0, 0.0, 50.0, 20.0)
    """
    if not (math.isfinite(cell) and cell > 0):
        raise not_allowed("cell", "a positive number of metres", cell)
    west, south, east, north = (float(bound) for bound in bounds)
    if not all(math.isfinite(bound) for bound in (west, south, east, north)) or east < west or north < south:
        raise not_allowed(
            "bounds", "west, south, east, north with west < east and south < north", tuple(bounds)
        )
    # at least one cell, also for a rectangle without width that lies on a cell edge
    columns = max(math.ceil(east / cell) - math.floor(west / cell), 1)
    rows = max(math.ceil(north / cell) - math.floor(south / cell), 1)
    if rows * columns > MAX_CELLS:
        enough = math.sqrt((east - west) * (north - south) / MAX_CELLS)
        allowed = f"at least {enough:.2g} m over {east - west:.0f} m by {north - south:.0f} m"
        raise not_allowed("cell", f"{allowed} (no more than {MAX_CELLS:,} cells)", cell)
    first_column, first_row = math.floor(west / cell), math.floor(south / cell)
    transform = Affine(cell, 0.0, first_column * cell, 0.0, -cell, (first_row + rows) * cell)
    return Grid(transform, (rows, columns), crs)


def grid_like(path: str | Path) -> Grid:
    """Take the grid of an existing raster, the template.

    Raises
    ------
    InputError
        If the file is no raster, has no CRS, or its rows do not run from north to
        south and its columns from west to east.
    """
    with _opened(path) as raster:
        return _grid(raster, path)


def read_band(path: str | Path, band: int = 1) -> tuple[np.ndarray, Grid]:
    """Read one band of a raster, a covariate for instance.

    Parameters
    ----------
    path
        Any raster that GDAL reads.
    band
        Number of the band, from 1.

    Returns
    -------
    values : ndarray
        (rows, columns) float64; nan where the raster has no value. A scale and
        offset stored with the band are applied.
    grid : Grid
        Where the cells lie.

    Raises
    ------
    InputError
        If the file is no raster, the band does not exist or holds complex numbers,
        or the grid is not north-up.
    """
    with _opened(path) as raster:
        grid = _grid(raster, path)
        if not 1 <= band <= raster.count:
            raise InputError(f"{path} has bands 1 to {raster.count}, not {band}; choose one of these.")
        if "complex" in raster.dtypes[band - 1]:
            raise InputError(f"Band {band} of {path} holds complex numbers; a covariate needs real ones.")
        try:
            masked = raster.read(band, masked=True)
        except RasterioError as error:
            raise InputError(f"{path} cannot be read whole, it may be damaged: {error}") from error
        values = masked.astype(float).filled(np.nan)
        return values * raster.scales[band - 1] + raster.offsets[band - 1], grid


def write_bands(
    path: str | Path,
    grid: Grid,
    bands: Mapping[str, np.ndarray],
    *,
    tags: Mapping[str, str] | None = None,
    units: Mapping[str, str] | None = None,
) -> None:
    """Write bands as one cloud-optimised GeoTIFF, 32-bit floating point.

    Parameters
    ----------
    path
        File to write.
    grid
        Where the cells lie.
    bands
        Name of each band, which becomes its description, and its values,
        (rows, columns), nan where there is none.
    tags
        Further texts to keep in the file.
    units
        Unit of bands by name.

    Raises
    ------
    UsageError
        If a band does not fit the grid or holds infinities or `NODATA` as a value.
    OutputError
        If the file cannot be written.
    """
    stack = _stack(grid, bands)
    profile = {
        "driver": "COG",
        "height": grid.shape[0],
        "width": grid.shape[1],
        "count": len(bands),
        "dtype": "float32",
        "crs": CRS.from_wkt(grid.crs.to_wkt()),
        "transform": grid.transform,
        "nodata": NODATA,
        "compress": "DEFLATE",
        "predictor": 3,  # differences of floating-point numbers: about half the size of plain deflate
        "overview_resampling": "average",
        "bigtiff": "IF_SAFER",
    }
    with MemoryFile() as memory:
        with memory.open(**profile) as raster:
            raster.write(stack)
            raster.update_tags(**(tags or {}))
            for number, name in enumerate(bands, start=1):
                raster.set_band_description(number, name)
                if units and name in units:
                    raster.set_band_unit(number, units[name])
        # GDAL only logs some failures of the disk; Python says them all
        try:
            Path(path).write_bytes(memory.getbuffer())
        except OSError as error:
            raise OutputError(f"{path} cannot be written: {error.strerror}.") from error


def _stack(grid: Grid, bands: Mapping[str, np.ndarray]) -> np.ndarray:
    """Check bands against the grid and stack them as (bands, rows, columns) float32 with nodata."""
    if not bands:
        raise not_allowed("bands", "at least one band", dict(bands))
    layers = []
    for name, values in bands.items():
        array = np.asarray(values, dtype=float)
        if array.shape != grid.shape:
            raise not_allowed(f"band {name}", f"of the shape of its grid, {grid.shape}", array.shape)
        if np.isinf(array).any() or (array == NODATA).any():
            raise not_allowed(f"band {name}", f"finite, nan or not {NODATA:g}", "a value that would be lost")
        layers.append(np.where(np.isnan(array), NODATA, array).astype("float32"))
    return np.stack(layers)


def _opened(path: str | Path) -> rasterio.DatasetReader:
    """Open a raster, or say why not."""
    try:
        return rasterio.open(path)
    except RasterioError as error:
        if not Path(path).exists():
            raise InputError(f"There is no raster {path}; check the name and the folder.") from error
        raise InputError(
            f"{path} is not a raster that GDAL can read; give a GeoTIFF, for instance."
        ) from error


def _grid(raster: rasterio.DatasetReader, path: str | Path) -> Grid:
    """Take the grid of an open raster, refusing any that is not north-up."""
    if not raster.crs:
        raise InputError(f"{path} has no coordinate reference system; assign one in a GIS and save it again.")
    transform = raster.transform
    advice = "warp it to a north-up grid in a GIS and give that one."
    if transform.is_identity:
        raise InputError(f"{path} is not georeferenced: its cells have no place on the map; georeference it.")
    if transform.b != 0 or transform.d != 0:
        raise InputError(f"The grid of {path} is rotated or sheared; {advice}")
    if transform.e > 0:
        raise InputError(f"The rows of {path} run from south to north; {advice}")
    if transform.a < 0:
        raise InputError(f"The columns of {path} run from east to west; {advice}")
    try:
        crs = pyproj.CRS.from_wkt(raster.crs.to_wkt(version="WKT2_2019"))
    except (CRSError, pyproj.exceptions.CRSError) as error:
        raise InputError(
            f"The coordinate reference system of {path} cannot be understood; assign a known one."
        ) from error
    return Grid(transform, (raster.height, raster.width), crs)
