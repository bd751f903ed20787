"""Covariates of an intensity: rasters, distances to features, coordinates."""

from __future__ import annotations

from abc import ABC, abstractmethod
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pyproj
import shapely
from affine import Affine

from geoclust.area.study_area import StudyArea
from geoclust.errors import InputError, not_allowed
from geoclust.intensity.cells import Cells
from geoclust.layers.raster import Grid

Floats = npt.NDArray[np.float64]

# places per side of a cell over which a covariate is averaged
PLACES = 4
MOST_PLACES = 16


class Covariate(ABC):
    """Something known everywhere in the study area that may explain the intensity.

    Attributes
    ----------
    name
        By which its coefficient is called.
    """

    name: str

    @abstractmethod
    def at(self, xy: npt.ArrayLike) -> Floats:
        """(n,) values at positions (n, 2) in metres; not a number where there is none."""

    def cell_means(self, cells: Cells) -> tuple[Floats, Floats]:
        """Mean over the part of each cell inside the study area, and the share of it that has a value.

        Over places in a regular grid in each cell; those without a value do not count.
        """
        side = self._places(cells)
        values = self.at(cells.places(side).reshape(-1, 2)).reshape(len(cells), side**2)
        counted = cells.places_inside(side)
        known = counted & np.isfinite(values)
        number = known.sum(axis=1)
        total = np.where(known, values, 0.0).sum(axis=1)
        return total / np.where(number > 0, number, np.nan), number / counted.sum(axis=1)

    def _places(self, cells: Cells) -> int:
        return PLACES

    def record(self, cells: Cells) -> dict[str, object]:
        """What was read and how it was brought to the cells, for the report."""
        side = self._places(cells)
        return {"name": self.name, "cell_value": f"mean of {side} by {side} places in the cell"}


class RasterCovariate(Covariate):
    """A band of a raster, in any coordinate reference system and resolution.

    The value at a position is that of the raster cell that holds it: nothing is smoothed.

    Parameters
    ----------
    name
        Name of the covariate.
    values
        (rows, columns), not a number where the raster has no value.
    grid
        Where its cells lie.
    crs
        Coordinate reference system of the study area; None if it is that of the raster.
    """

    def __init__(self, name: str, values: npt.ArrayLike, grid: Grid, crs: pyproj.CRS | None = None) -> None:
        self.name = name
        self.values = np.asarray(values, dtype=np.float64)
        if self.values.shape != grid.shape:
            raise not_allowed(
                f"covariate {name}", f"of the shape of its grid, {grid.shape}", self.values.shape
            )
        self.values = np.where(np.isfinite(self.values), self.values, np.nan)
        self.grid = grid
        self.crs = crs
        same = crs is None or crs.equals(grid.crs, ignore_axis_order=True)
        self._to_raster = None if same else pyproj.Transformer.from_crs(crs, grid.crs, always_xy=True)

    @property
    def in_the_same_crs(self) -> bool:
        """Whether the raster is in the coordinate reference system of the study area."""
        return self._to_raster is None

    def at(self, xy: npt.ArrayLike) -> Floats:
        at = np.asarray(xy, dtype=np.float64).reshape(-1, 2)
        if self._to_raster is not None:
            at = np.column_stack(self._to_raster.transform(at[:, 0], at[:, 1]))
        row, column, held = self.grid.cells_of(at)
        return np.where(held, self.values[row, column], np.nan)

    def fits(self, cells: Cells) -> bool:
        """Whether each of the cells is a cell of the raster, so that nothing has to be resampled."""
        if not self.in_the_same_crs:
            return False
        ours, theirs = cells.transform, self.grid.transform
        if not np.allclose([ours.a, ours.e], [theirs.a, theirs.e], rtol=1e-9, atol=0):
            return False
        shift = np.array([(ours.c - theirs.c) / theirs.a, (ours.f - theirs.f) / theirs.e])
        return bool(np.all(np.abs(shift - np.round(shift)) < 1e-6))

    def _places(self, cells: Cells) -> int:
        if self.fits(cells):
            return 1
        # two places per raster cell and side, where the raster is the finer one
        ours = cells.transform.a
        middle = cells.centres.mean(axis=0)
        size = self._cell_metres(middle)
        return int(np.clip(np.ceil(2.0 * ours / size), PLACES, MOST_PLACES))

    def _cell_metres(self, near: Floats) -> float:
        """Smaller side of a raster cell in metres of the study area."""
        if self._to_raster is None:
            return float(min(self.grid.cell))
        x, y = self._to_raster.transform(near[0], near[1])
        width, height = self.grid.cell
        corners = np.array([[x, y], [x + width, y], [x, y + height]])
        back = pyproj.Transformer.from_crs(self.grid.crs, self.crs, always_xy=True)
        at = np.column_stack(back.transform(corners[:, 0], corners[:, 1]))
        return float(min(np.hypot(*(at[1] - at[0])), np.hypot(*(at[2] - at[0]))))

    def record(self, cells: Cells) -> dict[str, object]:
        side = self._places(cells)
        known = np.isfinite(self.values)
        return {
            "name": self.name,
            "kind": "raster",
            "crs": self.grid.crs.name,
            "cell_size": list(self.grid.cell),
            "raster_cells_without_a_value": int(np.count_nonzero(~known)),
            "cell_value": "cells of the raster as they are"
            if self.fits(cells)
            else f"mean of {side} by {side} places in the cell, each with the value of the raster cell that "
            "holds it",
        }


class DistanceCovariate(Covariate):
    """Distance to the nearest of some features, in metres.

    Parameters
    ----------
    name
        Name of the covariate, the unit in it: ``distance_to_water_m``.
    features
        Points, lines or polygons in the coordinate reference system of the study area;
        within a polygon the distance is zero.
    """

    def __init__(self, name: str, features: npt.ArrayLike) -> None:
        self.name = name
        given = np.atleast_1d(np.asarray(features, dtype=object))
        parts = shapely.get_parts(given)
        self.features = parts[~shapely.is_empty(parts)]
        if len(self.features) == 0:
            raise InputError(f"Covariate {name}: there are no features to measure the distance to.")

    @cached_property
    def _tree(self) -> shapely.STRtree:
        return shapely.STRtree(self.features)

    def at(self, xy: npt.ArrayLike) -> Floats:
        places = shapely.points(np.asarray(xy, dtype=np.float64).reshape(-1, 2))
        (where, _), far = self._tree.query_nearest(places, return_distance=True, all_matches=False)
        out = np.empty(len(places))
        out[where] = far
        return out

    def record(self, cells: Cells) -> dict[str, object]:
        return super().record(cells) | {"kind": "distance", "features": len(self.features)}


class CoordinateCovariate(Covariate):
    """A product of powers of the coordinates, in kilometres from the middle of the study area.

    Parameters
    ----------
    area
        The study area.
    east, north
        Powers of easting and northing.
    """

    def __init__(self, area: StudyArea, east: int, north: int) -> None:
        if east < 0 or north < 0 or east + north < 1:
            raise not_allowed("powers of the coordinates", "not negative and not both zero", (east, north))
        self.origin = area.origin
        self.powers = (east, north)
        parts = [
            name if power == 1 else f"{name}{power}"
            for name, power in (("easting", east), ("northing", north))
            if power
        ]
        self.name = "_".join(parts) + "_km" + (str(east + north) if east + north > 1 else "")

    def at(self, xy: npt.ArrayLike) -> Floats:
        km = (np.asarray(xy, dtype=np.float64).reshape(-1, 2) - self.origin) / 1000.0
        return np.asarray(km[:, 0] ** self.powers[0] * km[:, 1] ** self.powers[1])

    def record(self, cells: Cells) -> dict[str, object]:
        return super().record(cells) | {"kind": "coordinates", "origin_m": self.origin.tolist()}


def coordinate_covariates(area: StudyArea, degree: int = 1) -> list[Covariate]:
    """Coordinates as covariates: 1 a plane, 2 with squares and the product."""
    if degree not in (1, 2):
        raise not_allowed("degree", "1 or 2", degree)
    powers = [(1, 0), (0, 1)] + ([(2, 0), (1, 1), (0, 2)] if degree == 2 else [])
    return [CoordinateCovariate(area, *p) for p in powers]


def lattice_of(covariates: list[Covariate], area: StudyArea) -> Affine | None:
    """Transform of the finest raster in the system of the study area, if it is not too fine."""
    west, south, east, north = area.bounds
    found: Affine | None = None
    for covariate in covariates:
        if isinstance(covariate, RasterCovariate) and covariate.in_the_same_crs:
            width, height = covariate.grid.cell
            few = (east - west) / width * (north - south) / height < 1_000_000
            if few and (found is None or width * height < found.a * -found.e):
                found = covariate.grid.transform
    return found
