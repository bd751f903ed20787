"""What every intensity can do: values at places, as a raster, and patterns drawn from it."""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import Self

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.errors import UsageError
from geoclust.intensity.cells import Cells
from geoclust.layers.raster import Grid

Floats = npt.NDArray[np.float64]

# places per side of a raster cell over which the intensity is averaged
PLACES = 3


class Intensity(ABC):
    """Points per square metre, place by place.

    Attributes
    ----------
    area
        The study area.
    """

    area: StudyArea

    @property
    @abstractmethod
    def method(self) -> str:
        """How it was estimated, in words."""

    @abstractmethod
    def at(self, xy: npt.ArrayLike) -> Floats:
        """(n,) points per square metre at positions (n, 2), metres."""

    @abstractmethod
    def at_own_points(self) -> Floats:
        """(n,) intensity at the points it was estimated from, as weighted curves need it."""

    @abstractmethod
    def refit(self, local_xy: Floats, rng: np.random.Generator) -> Self:
        """The same estimate from other points, local coordinates."""

    @abstractmethod
    def draw(self, count: int, rng: np.random.Generator) -> Floats:
        """Draw (count, 2) independent points with this intensity, local coordinates."""

    @abstractmethod
    def record(self) -> dict[str, object]:
        """Choices and figures, for the report."""

    @property
    @abstractmethod
    def mean(self) -> float:
        """Mean over the study area, points per square metre."""

    @property
    @abstractmethod
    def highest(self) -> float:
        """Largest value in the study area, points per square metre."""

    def relative(self, local_xy: Floats) -> Floats:
        """(n,) intensity over its mean, at local coordinates: how clusters are thinned, place by place."""
        return np.asarray(self.at(local_xy + self.area.origin) / self.mean)

    def raster(self, grid: Grid) -> Floats:
        """Mean intensity in the cells of a raster.

        Parameters
        ----------
        grid
            North-up grid in the coordinate reference system of the study area.

        Returns
        -------
        ndarray, (rows, columns)
            Points per square metre; not a number in cells outside the study area.
        """
        cells = cells_of(self.area, grid)
        values = self.at(cells.places(PLACES).reshape(-1, 2)).reshape(len(cells), -1)
        return cells.to_grid(values.mean(axis=1))


def cells_of(area: StudyArea, grid: Grid) -> Cells:
    """Cells of a raster that meet the study area, or one sentence on why they cannot be had."""
    if area.crs is not None and not area.crs.equals(grid.crs, ignore_axis_order=True):
        raise UsageError(
            f"The grid is in {grid.crs.name}, the study area in {area.crs.name}; give a grid in the latter."
        )
    return Cells.over(area, grid.transform, grid.shape)
