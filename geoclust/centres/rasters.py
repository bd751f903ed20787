"""Sampled centres as maps: mean, standard deviation and probability per cell."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import shapely
from pyproj import CRS, Transformer

from geoclust.area.study_area import StudyArea
from geoclust.errors import InputError, not_allowed
from geoclust.fitting.sampling import Draws
from geoclust.layers.raster import Grid, grid_over

Floats = npt.NDArray[np.float64]

MOST_CELLS = 25_000_000
# a cell of half a scale shows the shape of the posterior without false detail
CELLS_PER_SCALE = 2.0


def default_cell(scale: float, area: StudyArea) -> float:
    """A round cell size, at most half a scale, that keeps the raster below a million cells."""
    minx, miny, maxx, maxy = area.bounds
    least = float(np.sqrt((maxx - minx) * (maxy - miny) / 1e6))
    wanted = max(scale / CELLS_PER_SCALE, least)
    power = 10.0 ** np.floor(np.log10(wanted))
    steps = [s * power for s in (1.0, 2.0, 2.5, 5.0, 10.0)]
    fitting = [s for s in steps if s <= wanted * (1 + 1e-9)]
    chosen = fitting[-1] if wanted > least else next(s for s in steps if s >= wanted)
    return float(chosen)


def grid_for(area: StudyArea, cell: float) -> Grid:
    """Grid of square cells over the study area, its lines on multiples of the cell size."""
    if not (np.isfinite(cell) and cell > 0):
        raise not_allowed("cell", "a positive number of metres", cell)
    minx, miny, maxx, maxy = area.bounds
    if (maxx - minx) * (maxy - miny) / cell**2 > MOST_CELLS:
        least = np.sqrt((maxx - minx) * (maxy - miny) / MOST_CELLS)
        raise not_allowed("cell", f"at least {least:.3g} m for a study area of this extent", cell)
    return grid_over(area.bounds, cell, area.crs if area.crs is not None else CRS.from_wkt(LOCAL_PLANE))


LOCAL_PLANE = 'LOCAL_CS["plane in metres",UNIT["metre",1],AXIS["Easting",EAST],AXIS["Northing",NORTH]]'


def cell_areas(grid: Grid, area: StudyArea) -> Floats:
    """(rows, columns) area of the study area in every cell, m², also for a grid in another system."""
    if same_system(grid, area):
        return area.cell_areas(grid.transform, grid.shape)
    # in the grid's own plane: share of the cell covered, times the cell's true size
    forward = Transformer.from_crs(area.crs, grid.crs, always_xy=True)
    step = min(abs(grid.transform.a), abs(grid.transform.e))
    bent = shapely.segmentize(area.polygon, 0.25 * step * _metres_per_unit(grid, area))
    moved = shapely.transform(bent, lambda at: np.column_stack(forward.transform(at[:, 0], at[:, 1])))
    if not np.isfinite(shapely.get_coordinates(moved)).all():
        raise InputError("The template raster's coordinate system does not reach the study area.")
    cover = StudyArea(moved.buffer(0)).cell_areas(grid.transform, grid.shape)
    out = np.zeros(grid.shape)
    rows, columns = np.nonzero(cover > 0)
    back = Transformer.from_crs(grid.crs, area.crs, always_xy=True)
    corners = []
    for dc, dr in ((0, 0), (0, 1), (1, 1), (1, 0)):
        x = grid.transform.c + grid.transform.a * (columns + dc)
        y = grid.transform.f + grid.transform.e * (rows + dr)
        corners.append(back.transform(x, y))
    size = np.zeros(len(rows))
    for (xa, ya), (xb, yb) in zip(corners, corners[1:] + corners[:1], strict=True):
        size += 0.5 * (np.asarray(xa) * np.asarray(yb) - np.asarray(xb) * np.asarray(ya))
    plane = abs(grid.transform.a * grid.transform.e)
    out[rows, columns] = cover[rows, columns] / plane * np.abs(size)
    return out


def same_system(grid: Grid, area: StudyArea) -> bool:
    """Whether grid and study area share their coordinate reference system."""
    return area.crs is None or grid.crs is None or grid.crs == area.crs


def _metres_per_unit(grid: Grid, area: StudyArea) -> float:
    """Rough size of one unit of the grid's system at the study area, in metres."""
    middle = np.array(area.polygon.representative_point().coords[0])
    forward = Transformer.from_crs(area.crs, grid.crs, always_xy=True)
    x0, y0 = forward.transform(*middle)
    x1, y1 = forward.transform(middle[0] + 100.0, middle[1])
    return 100.0 / max(float(np.hypot(x1 - x0, y1 - y0)), 1e-12)


def centre_maps(draws: Draws, area: StudyArea, grid: Grid, cover: Floats) -> tuple[Floats, Floats, Floats]:
    """Mean and standard deviation of centres per hectare, and probability of any, per cell.

    Only centres inside the study area count, and densities refer to the part
    of the cell inside it, so mean times area adds up to the mean number of
    centres inside.
    """
    size = grid.shape[0] * grid.shape[1]
    total, squares, hit = np.zeros(size), np.zeros(size), np.zeros(size)
    forward = None if same_system(grid, area) else Transformer.from_crs(area.crs, grid.crs, always_xy=True)
    m = 0
    for chain in draws.centres:
        for centres in chain:
            m += 1
            inside = centres[area.local_contains(centres)] + area.origin
            if forward is not None and len(inside):
                inside = np.column_stack(forward.transform(inside[:, 0], inside[:, 1]))
            row, column, held = grid.cells_of(inside)
            cells, counts = np.unique(row[held] * grid.shape[1] + column[held], return_counts=True)
            total[cells] += counts
            squares[cells] += counts.astype(float) ** 2
            hit[cells] += 1
    mean, second = total / m, squares / m
    sd = np.sqrt(np.maximum(second - mean**2, 0.0))
    # a centre within rounding of the boundary may fall into a cell that has no area inside
    flat = cover.ravel()
    hectares = np.where(flat > 0, flat, np.nan) / 1e4
    shape = grid.shape
    return (
        (mean / hectares).reshape(shape),
        (sd / hectares).reshape(shape),
        np.where(flat > 0, hit / m, np.nan).reshape(shape),
    )
