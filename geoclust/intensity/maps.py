"""Intensity and residuals as bands of a raster."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from geoclust.area.survey import Survey
from geoclust.errors import not_allowed
from geoclust.intensity.base import Intensity, cells_of
from geoclust.intensity.cells import CELLS, Cells
from geoclust.intensity.kernel import cronie_van_lieshout_bandwidth, kernel_sums
from geoclust.layers.raster import Grid

Floats = npt.NDArray[np.float64]

HECTARE = 1e4
UNITS = {"intensity_per_ha": "1/ha", "residual_per_ha": "1/ha"}


def residual_raster(
    survey: Survey,
    intensity: Intensity,
    grid: Grid,
    *,
    bandwidth: float | None = None,
    workers: int | None = None,
) -> Floats:
    """Smoothed residuals: where there are more points than the intensity says, and where fewer.

    Kernel estimate of the points less the fitted intensity smoothed by the same kernel,
    both over the mass of the kernel in the study area (Baddeley, Turner, Møller &
    Hazelton 2005, Journal of the Royal Statistical Society B 67: 617-666).

    Parameters
    ----------
    survey
        Points and study area.
    intensity
        The fitted intensity.
    grid
        North-up grid in the coordinate reference system of the study area.
    bandwidth
        Standard deviation of the kernel in metres; by Cronie & van Lieshout (2018) if not given.
    workers
        Threads; one a core if not given.

    Returns
    -------
    ndarray, (rows, columns)
        Points per square metre; not a number in cells outside the study area.
    """
    if bandwidth is not None and not (np.isfinite(bandwidth) and bandwidth > 0):
        raise not_allowed("bandwidth", "a positive number of metres", bandwidth)
    area = survey.area
    chosen = (
        cronie_van_lieshout_bandwidth(survey.local_xy, area, workers)
        if bandwidth is None
        else float(bandwidth)
    )
    cells = cells_of(area, grid)
    # expected points in cells a third of the bandwidth wide, each at the middle of its cell
    fine = _expected(intensity, chosen / 3.0)
    places = cells.centres - area.origin
    mass = area.gaussian_shares(cells.centres, chosen, workers=workers)
    more = kernel_sums(survey.local_xy, places, chosen, workers=workers)
    less = kernel_sums(fine[0], places, chosen, fine[1], workers=workers)
    # a cell that touches the study area with its corner alone may have its middle far outside
    return cells.to_grid((more - less) / np.where(mass > 1e-6, mass, np.nan))


def _expected(intensity: Intensity, side: float) -> tuple[Floats, Floats]:
    area = intensity.area
    cells = Cells.square(area, max(side, float(np.sqrt(area.area / CELLS))))
    values = intensity.at(cells.places(2).reshape(-1, 2)).reshape(len(cells), -1).mean(axis=1)
    return cells.centres - area.origin, values * cells.areas


def intensity_bands(
    survey: Survey,
    intensity: Intensity,
    grid: Grid,
    *,
    bandwidth: float | None = None,
    workers: int | None = None,
) -> dict[str, Floats]:
    """Bands ``intensity_per_ha`` and ``residual_per_ha`` for `geoclust.layers.raster.write_bands`.

    Parameters as for `residual_raster`; units in `UNITS`.
    """
    residual = residual_raster(survey, intensity, grid, bandwidth=bandwidth, workers=workers)
    return {
        "intensity_per_ha": intensity.raster(grid) * HECTARE,
        "residual_per_ha": residual * HECTARE,
    }
