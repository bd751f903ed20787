"""Cells of a grid with their exact areas inside the study area: the quadrature under an intensity."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
from affine import Affine
from scipy.spatial import cKDTree

from geoclust.area.study_area import StudyArea
from geoclust.errors import not_allowed

Floats = npt.NDArray[np.float64]
Numbers = npt.NDArray[np.int64]

MAX_CELLS = 4_000_000
# cells over the study area if no raster sets their size
CELLS = 40_000


@dataclass(frozen=True, eq=False)
class Cells:
    """Grid cells that meet the study area.

    Attributes
    ----------
    area
        The study area.
    transform, shape
        The north-up grid, in its coordinate reference system.
    row, column
        (m,) place of each cell in the grid.
    areas
        (m,) exact area inside the study area, square metres, positive.
    """

    area: StudyArea
    transform: Affine
    shape: tuple[int, int]
    row: Numbers
    column: Numbers
    areas: Floats

    @classmethod
    def over(cls, area: StudyArea, transform: Affine, shape: tuple[int, int]) -> Cells:
        """Cells of a grid that covers the study area."""
        inside = area.cell_areas(transform, shape)
        row, column = np.nonzero(inside > 1e-12 * inside.max(initial=0.0))
        return cls(area, transform, shape, row, column, inside[row, column])

    @classmethod
    def square(cls, area: StudyArea, side: float | None = None) -> Cells:
        """Square cells whose edges fall on multiples of their side, in metres."""
        cell = float(np.sqrt(area.area / CELLS)) if side is None else float(side)
        if not (np.isfinite(cell) and cell > 0):
            raise not_allowed("cell", "a positive number of metres", side)
        return cls.on_lattice(area, Affine(cell, 0.0, 0.0, 0.0, -cell, 0.0))

    @classmethod
    def on_lattice(cls, area: StudyArea, transform: Affine) -> Cells:
        """Cells of the endless grid that a north-up transform spans, as far as the study area reaches."""
        west, south, east, north = area.bounds
        first = int(np.floor((west - transform.c) / transform.a))
        last = int(np.ceil((east - transform.c) / transform.a))
        top = int(np.floor((north - transform.f) / transform.e))
        bottom = int(np.ceil((south - transform.f) / transform.e))
        shape = (max(bottom - top, 1), max(last - first, 1))
        if shape[0] * shape[1] > MAX_CELLS:
            raise not_allowed("cell", f"a size that gives at most {MAX_CELLS:,} cells", transform.a)
        return cls.over(area, transform @ Affine.translation(first, top), shape)

    def __len__(self) -> int:
        return len(self.areas)

    @cached_property
    def index(self) -> Numbers:
        """(rows, columns) number of the cell, -1 where the grid cell does not meet the study area."""
        out = np.full(self.shape, -1, dtype=np.int64)
        out[self.row, self.column] = np.arange(len(self.areas))
        return out

    @cached_property
    def centres(self) -> Floats:
        """(m, 2) middles of the grid cells, easting and northing in metres."""
        return self.places(1)[:, 0]

    @cached_property
    def _tree(self) -> cKDTree:
        return cKDTree(self.centres)

    def places(self, per_side: int) -> Floats:
        """(m, per_side², 2) places in a regular grid in each cell."""
        t = self.transform
        step = (np.arange(per_side) + 0.5) / per_side
        down, across = (v.ravel() for v in np.meshgrid(step, step, indexing="ij"))
        x = t.c + t.a * (self.column[:, None] + across)
        y = t.f + t.e * (self.row[:, None] + down)
        return np.stack([x, y], axis=-1)

    def places_inside(self, per_side: int) -> npt.NDArray[np.bool_]:
        """(m, per_side²) which of the places count: those inside the study area, or all if none is."""
        out = np.ones((len(self), per_side**2), dtype=np.bool_)
        t = self.transform
        cut = np.flatnonzero(self.areas < t.a * -t.e * (1 - 1e-9))
        if per_side > 1 and len(cut):
            at = self.places(per_side)[cut].reshape(-1, 2) - self.area.origin
            inside = self.area.local_contains(at).reshape(len(cut), -1)
            out[cut] = inside | ~inside.any(axis=1, keepdims=True)
        return out

    def find(self, xy: Floats, nearest: bool = True) -> Numbers:
        """(n,) number of the cell that holds each position, or else of the nearest one, or -1."""
        t = self.transform
        j = np.floor((xy[:, 0] - t.c) / t.a).astype(np.int64)
        i = np.floor((xy[:, 1] - t.f) / t.e).astype(np.int64)
        rows, columns = self.shape
        held = (i >= 0) & (i < rows) & (j >= 0) & (j < columns)
        out = np.where(held, self.index[np.where(held, i, 0), np.where(held, j, 0)], -1)
        lost = out < 0
        if nearest and lost.any():
            out[lost] = self._tree.query(xy[lost])[1]
        return out

    def counts(self, xy: Floats) -> Floats:
        """(m,) number of points in each cell."""
        return np.bincount(self.find(xy), minlength=len(self)).astype(np.float64)

    def to_grid(self, values: Floats) -> Floats:
        """(rows, columns) values of the cells, not a number elsewhere."""
        out = np.full(self.shape, np.nan)
        out[self.row, self.column] = values
        return out

    def draw(self, values: Floats, count: int, rng: np.random.Generator) -> Floats:
        """Draw points with a density that is constant in each cell.

        Cells are drawn by their value, places in them uniformly, and those outside the
        study area are thinned out.

        Parameters
        ----------
        values
            (m,) density of each cell, up to a factor.
        count
            Number of points.

        Returns
        -------
        ndarray, (count, 2)
            Local coordinates of the study area.
        """
        t = self.transform
        running = np.cumsum(values)
        kept_share = float(values @ self.areas / (running[-1] * t.a * -t.e))
        parts: list[Floats] = []
        missing = count
        while missing > 0:
            tries = int(missing / kept_share * 1.1) + 16
            cell = np.searchsorted(running, rng.random(tries) * running[-1], side="right")
            cell = np.minimum(cell, len(self) - 1)
            at = np.column_stack(
                [t.c + t.a * (self.column[cell] + rng.random(tries)),
                 t.f + t.e * (self.row[cell] + rng.random(tries))]
            ) - self.area.origin  # fmt: skip
            # cells are in the order of the draw, so cutting the surplus favours none
            at = at[self.area.local_contains(at)][:missing]
            parts.append(at)
            missing -= len(at)
        return np.ascontiguousarray(np.concatenate([*parts, np.empty((0, 2))]))
