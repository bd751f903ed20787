"""The study area: the polygons inside which every individual was mapped."""

from __future__ import annotations

from functools import cached_property

import numpy as np
import numpy.typing as npt
import shapely
from affine import Affine

from geoclust.area import _cauchy, _cells, _circles, _covariance, _edges, _gaussian
from geoclust.area.checks import Floats, checked_crs, checked_points, checked_polygon, example, spread
from geoclust.area.covariance import (
    ShiftTable,
    edge_tree,
    isotropised,
    isotropised_table,
    met_directions,
    set_covariance,
    shift_table,
)
from geoclust.area.eroded import ErodedArea
from geoclust.errors import UsageError, not_allowed
from geoclust.workers import in_order

__all__ = ["Floats", "StudyArea", "checked_points", "portions"]

# circles per portion of threaded work: the largest circles of it take no more than a second
PORTION = 1_000


class StudyArea:
    """Polygons with holes, in a metric coordinate reference system, and their exact geometry.

    Parameters
    ----------
    polygon
        Shapely polygon or multipolygon in metres; valid, with a positive area.
    crs
        Coordinate reference system, anything that pyproj understands; it must be
        projected in metres if it is given.
    plots
        Number of separate plots that the polygon holds, laid side by side (`pool_surveys`); what
        follows from the size of a study area then follows from that of one plot.

    Raises
    ------
    InputError
        If the geometry is no polygon, is invalid or has no area, or if the
        coordinate reference system is not metric.

    Examples
    --------
    >>> import shapely
    >>> area = StudyArea(shapely.box(0, 0, 200, 100))
    >>> area.area
    20000.0
    >>> area.circle_shares([[0, 0], [100, 50]], [10, 10]).round(6).tolist()
    [0.25, 1.0]
    """

    def __init__(
        self, polygon: shapely.Polygon | shapely.MultiPolygon, crs: object = None, *, plots: int = 1
    ) -> None:
        self.plots = plots
        self.polygon = checked_polygon(polygon)
        self.crs = checked_crs(crs)
        rings = [ring for part in self.polygon.geoms for ring in (part.exterior, *part.interiors)]
        minx, miny, maxx, maxy = self.polygon.bounds
        # whole metres, so that coordinates on a lattice stay on it after the shift
        self.origin = np.array([np.round((minx + maxx) / 2), np.round((miny + maxy) / 2)])
        starts, ends = [], []
        for ring in rings:
            at = shapely.get_coordinates(ring) - self.origin
            moved = np.any(at[1:] != at[:-1], axis=1)
            starts.append(at[:-1][moved])
            ends.append(at[1:][moved])
        self._starts = np.ascontiguousarray(np.concatenate(starts))
        self._ends = np.ascontiguousarray(np.concatenate(ends))
        self._ring_sizes = np.array([len(s) for s in starts], dtype=np.int64)
        self.area: float = float(
            0.5 * np.sum(self._starts[:, 0] * self._ends[:, 1] - self._ends[:, 0] * self._starts[:, 1])
        )
        self._by_radii: dict[tuple[str, bytes], Floats] = {}
        self._dilated: dict[float, StudyArea] = {}
        self._eroded: dict[float, ErodedArea] = {}
        self._tables: dict[tuple[float, bool], ShiftTable] = {}
        self.perimeter: float = float(np.hypot(*(self._ends - self._starts).T).sum())

    def __repr__(self) -> str:
        parts = len(self.polygon.geoms)
        holes = len(self._ring_sizes) - parts
        crs = self.crs.name if self.crs is not None else "metres, no CRS stated"
        return (
            f"<StudyArea {self.area / 1e4:,.2f} ha, {parts} part(s), {holes} hole(s), "
            f"{len(self._starts):,} edges; {crs}>"
        )

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """Smallest easting and northing, largest easting and northing, in metres."""
        return tuple(float(v) for v in self.polygon.bounds)  # type: ignore[return-value]

    @property
    def side(self) -> float:
        """Side of the square of equal area in metres; of one plot on average, if there are several."""
        return float(np.sqrt(self.area / self.plots))

    @property
    def edges(self) -> int:
        """Number of edges of the boundary."""
        return len(self._starts)

    @cached_property
    def grid(self) -> _edges.EdgeGrid:
        """The grid over the edges that the compiled loops walk on (local coordinates)."""
        minx, miny, maxx, maxy = np.array(self.polygon.bounds) - np.tile(self.origin, 2)
        width, height = maxx - minx, maxy - miny
        # about two cells an edge: a cell near the boundary then holds a handful of pieces
        target = min(max(2 * self.edges, 4096), 4_000_000)
        cell = max(np.sqrt(width * height / target), max(width, height) / 4096)
        left, bottom = minx - cell, miny - cell
        columns = int(np.ceil(width / cell)) + 2
        rows = int(np.ceil(height / cell)) + 2
        pieces = _edges.cut_pieces(
            self._starts[:, 0], self._starts[:, 1], self._ends[:, 0], self._ends[:, 1], cell
        )
        order, first = _edges.file_pieces(pieces, left, bottom, cell, columns, rows)
        pieces = np.ascontiguousarray(pieces[:, order])
        inside, quiet, gap = _edges.mark_cells(pieces, first, left, bottom, cell, columns, rows)
        return _edges.EdgeGrid(
            pieces[0], pieces[1], pieces[2], pieces[3], first, inside, quiet, gap,
            float(left), float(bottom), float(cell), columns, rows,
        )  # fmt: skip

    @cached_property
    def _live_cells(self) -> npt.NDArray[np.int64]:
        return _edges.live_cells(self.grid)

    def local(self, xy: npt.ArrayLike, name: str = "xy") -> Floats:
        """Check an (n, 2) array of coordinates and shift it to the local origin.

        Raises
        ------
        UsageError
            If the shape is not (n, 2) or a coordinate is not finite.
        """
        return np.ascontiguousarray(checked_points(xy, name) - self.origin)

    def contains(self, xy: npt.ArrayLike) -> npt.NDArray[np.bool_]:
        """Tell which points lie inside the study area.

        Parameters
        ----------
        xy
            (n, 2) easting and northing in metres.

        Returns
        -------
        ndarray of bool, (n,)
            Points on the boundary (to rounding) may go either way.
        """
        return self.local_contains(self.local(xy))

    def local_contains(self, at: Floats) -> npt.NDArray[np.bool_]:
        """Tell which points lie inside, as `contains` does, in local coordinates."""
        out = np.empty(len(at), np.bool_)
        _edges.inside_many(self.grid, np.ascontiguousarray(at), out)
        return out

    def distance_to_boundary(self, xy: npt.ArrayLike, limit: float = np.inf) -> Floats:
        """Distance of each point to the boundary, inside or outside, in metres.

        Parameters
        ----------
        xy
            (n, 2) easting and northing in metres.
        limit
            Distances beyond it are returned as `limit`; a small one is faster.
        """
        at = self.local(xy)
        out = np.empty(len(at))
        _edges.distance_many(self.grid, at, float(limit), out)
        return out

    def circle_shares(
        self, centres: npt.ArrayLike, radii: npt.ArrayLike, *, workers: int | None = None
    ) -> Floats:
        """Share of the circumference of each circle that lies inside the study area.

        Exact for holes and any number of parts; its inverse is the isotropic edge
        weight (Ripley 1977, Journal of the Royal Statistical Society B 39: 172-212).

        Parameters
        ----------
        centres
            (n, 2) metres.
        radii
            (n,) or a single radius, metres, not negative. Radius 0 tells whether the centre is inside.
        workers
            Threads; one a core if not given.

        Returns
        -------
        ndarray, (n,)
            Between 0 and 1.

        Raises
        ------
        UsageError
            If the shapes do not fit, or a radius is negative or not finite.
        """
        at = self.local(centres, "centres")
        r = spread(radii, len(at), "radii")
        if not np.all(np.isfinite(r)) or np.any(r < 0):
            raise not_allowed("radii", "finite and not negative", example(radii))
        out = np.empty(len(at))
        grid = self.grid

        def work(s: slice) -> None:
            _circles.share_many(grid, at[s], r[s], out[s])

        for _ in in_order(work, portions(len(at)), workers):
            pass
        return out

    @cached_property
    def tree(self) -> _covariance.EdgeTree:
        """The hierarchy of boxes over the edges, for pairs of edges (local coordinates)."""
        return edge_tree(self._starts, self._ends, self._ring_sizes)

    @cached_property
    def chains(self) -> _cauchy.Chains:
        """The hierarchy of chains of edges, for sums over the whole boundary (local coordinates)."""
        return _cauchy.chain_tree(self._starts, self._ends, self._ring_sizes)

    def set_covariance(self, shifts: npt.ArrayLike, *, workers: int | None = None) -> Floats:
        """Area that the study area and a shifted copy of it have in common.

        The translation edge weight is its inverse (Ohser & Stoyan 1981, Biometrical
        Journal 23: 523-533).

        Parameters
        ----------
        shifts
            (k, 2) metres east and north.
        workers
            Threads; one a core if not given.

        Returns
        -------
        ndarray, (k,)
            Square metres; the same for a shift and its opposite, the whole area for none.

        Raises
        ------
        UsageError
            If the shape does not fit or a shift is not finite.
        """
        return set_covariance(self, np.ascontiguousarray(checked_points(shifts, "shifts")), workers)

    def isotropic_set_covariance(self, radii: npt.ArrayLike, *, workers: int | None = None) -> Floats:
        """Mean over all directions of the set covariance at each distance.

        The rigid-motion edge weight is its inverse (Ohser 1983, Mathematische
        Operationsforschung und Statistik, Series Statistics 14: 63-71). Exact:
        a double integral over the boundary in closed form for every pair of edges.

        Parameters
        ----------
        radii
            (k,) distances in metres, not negative, in any order.
        workers
            Threads; one a core if not given.

        Returns
        -------
        ndarray, (k,)
            Square metres.

        Raises
        ------
        UsageError
            If a radius is negative or not finite.
        """
        at = np.atleast_1d(np.asarray(radii, dtype=np.float64))
        if at.ndim != 1 or not np.all(np.isfinite(at)) or np.any(at < 0):
            raise not_allowed("radii", "finite distances in metres, not negative", radii)
        known, where = np.unique(at, return_inverse=True)
        out = np.full(len(known), self.area)
        positive = known > 0
        if positive.any():
            out[positive] = isotropised(self, known[positive], workers)
        return out[where]

    def shift_table(
        self, largest: float, *, isotropic: bool = False, workers: int | None = None
    ) -> ShiftTable:
        """Table of the set covariance of shifts up to `largest` metres, or of its mean over directions.

        Built at the first call for a distance and kept: simulations ask for it over and over.
        """
        key = (largest, isotropic)
        known = self._tables.get(key)
        if known is None:
            make = isotropised_table if isotropic else shift_table
            known = make(self, largest, workers)
            self._tables = {key: known}
        return known

    def eroded_area(self, largest: float) -> ErodedArea:
        """Area of the points deeper than any distance up to `largest` metres; kept for the next call."""
        known = self._eroded.get(largest)
        if known is None:
            known = ErodedArea(self, largest)
            self._eroded = {largest: known}
        return known

    @cached_property
    def diameter(self) -> float:
        """Largest distance between two points of the study area, metres."""
        at = shapely.get_coordinates(self.polygon.convex_hull) - self.origin
        return float(max(np.hypot(*(at - c).T).max() for c in at))

    def gaussian_shares(
        self, centres: npt.ArrayLike, sigma: npt.ArrayLike, *, workers: int | None = None
    ) -> Floats:
        """Mass of isotropic Gaussians that falls inside the study area.

        Parameters
        ----------
        centres
            (n, 2) metres, inside or outside.
        sigma
            (n,) or a single standard deviation per axis, metres, positive.
        workers
            Threads; one a core if not given.

        Returns
        -------
        ndarray, (n,)
            Between 0 and 1.

        Raises
        ------
        UsageError
            If the shapes do not fit, or a sigma is not positive and finite.
        """
        at = self.local(centres, "centres")
        s = spread(sigma, len(at), "sigma")
        if not np.all(np.isfinite(s)) or np.any(s <= 0):
            raise not_allowed("sigma", "positive and finite", example(sigma))
        out = np.empty(len(at))
        grid = self.grid

        def work(part: slice) -> None:
            _gaussian.gaussian_many(grid, at[part], s[part], _gaussian.REACH, out[part])

        for _ in in_order(work, portions(len(at), 2_000), workers):
            pass
        return out

    def uniform_points(self, count: int, rng: np.random.Generator | int) -> Floats:
        """Draw points independently and uniformly inside the study area.

        Returns
        -------
        ndarray, (count, 2)
            Easting and northing in metres.
        """
        if count < 0:
            raise not_allowed("count", "a whole number, not negative", count)
        return self.local_uniform_points(count, np.random.default_rng(rng)) + self.origin

    def local_uniform_points(self, count: int, rng: np.random.Generator) -> Floats:
        """Draw uniform points as `uniform_points` does, in local coordinates."""
        out = np.empty((int(count), 2))
        _edges.fill_uniform(self.grid, self._live_cells, rng, out)
        return out

    def cell_areas(self, transform: Affine, shape: tuple[int, int]) -> Floats:
        """Exact area of the study area inside every cell of a north-up raster grid.

        Parameters
        ----------
        transform
            Affine transform of the grid, row 0 in the north.
        shape
            Rows and columns.

        Returns
        -------
        ndarray, (rows, columns)
            Square metres; the sum is the area of the study area if the grid covers it.

        Raises
        ------
        UsageError
            If the grid is rotated or not north-up.
        """
        if transform.b != 0 or transform.d != 0 or transform.a <= 0 or transform.e >= 0:
            raise UsageError("transform must be that of a north-up grid without rotation.")
        rows, columns = shape
        west, north = transform.c - self.origin[0], transform.f - self.origin[1]
        south = north + rows * transform.e
        x0, x1 = ((e[:, 0] - west) / transform.a for e in (self._starts, self._ends))
        y0, y1 = ((e[:, 1] - south) / -transform.e for e in (self._starts, self._ends))
        cover = _cells.cell_cover(x0, y0, x1, y1, columns, rows)
        return np.asarray(cover[::-1] * (transform.a * -transform.e))

    def reached_areas(self, radii: npt.ArrayLike) -> Floats:
        """Area of the points of W whose circle of each radius meets W: |W^(r)|, in square metres.

        The divisor that keeps isotropic weights unbiased where a part of the study
        area is so small that a circle round its points passes it by (Ohser 1983,
        Mathematische Operationsforschung und Statistik, Series Statistics 14: 63-71).

        A circle round a point meets the point's own part unless the whole part lies
        within the radius, so only parts smaller than the circle need a look; there
        the area is summed over stratified points, about 10,000 in all.
        """
        at = np.atleast_1d(np.asarray(radii, dtype=np.float64))
        known = self._kept("reached", at)
        if known is not None:
            return known
        out = np.full(at.shape, self.area)
        for part, smallest in self._small_parts(float(at.max(initial=0.0))):
            centres, weight, reach = part
            for k in np.flatnonzero(at >= smallest):
                closed = np.flatnonzero(reach < at[k])
                if len(closed):
                    met = _circles.count_meeting(self.grid, centres[closed] - self.origin, at[k])
                    out[k] -= weight * (len(closed) - met)
        out = np.maximum(out, 0.0)
        return self._keep("reached", at, out)

    def met_directions(self, radii: npt.ArrayLike) -> Floats:
        """Share of directions in which a copy shifted by each radius still meets the study area.

        The divisor that keeps translation weights unbiased beyond the width of a
        strip, where no pair of points can lie across it. From 360 directions.
        """
        at = np.atleast_1d(np.asarray(radii, dtype=np.float64))
        known = self._kept("met", at)
        return known if known is not None else self._keep("met", at, met_directions(self, at))

    def _kept(self, name: str, radii: Floats) -> Floats | None:
        known = self._by_radii.get((name, radii.tobytes()))
        return None if known is None else known.copy()

    def _keep(self, name: str, radii: Floats, values: Floats) -> Floats:
        # simulations ask for the same radii over and over
        if len(self._by_radii) >= 16:
            self._by_radii = {}
        self._by_radii[name, radii.tobytes()] = values.copy()
        return values

    def _small_parts(self, largest: float) -> list[tuple[tuple[Floats, float, Floats], float]]:
        """Stratified points of every part that fits into a circle of the largest radius.

        For each: points, area that one stands for, distance of each to the furthest
        vertex of its part; and the radius below which nothing can be missed.
        """
        small = [
            p for p in self.polygon.geoms
            if 0.5 * np.hypot(*np.subtract(p.bounds[2:], p.bounds[:2])) < largest
            and shapely.minimum_bounding_radius(p) < largest
        ]  # fmt: skip
        total = sum(p.area for p in small)
        out = []
        for p in small:
            count = int(np.clip(10_000 * p.area / total, 8, 4_000))
            # fixed seed: the points are a quadrature, not a sample
            centres = StudyArea(p).uniform_points(count, 1983)
            vertices = shapely.get_coordinates(shapely.convex_hull(p).exterior)
            reach = np.array([np.hypot(*(vertices - c).T).max() for c in centres])
            out.append(((centres, p.area / count, reach), float(shapely.minimum_bounding_radius(p))))
        return out

    def dilated(self, distance: float) -> StudyArea:
        """The study area widened by `distance` metres on all sides (holes may close)."""
        if distance <= 0:
            raise not_allowed("distance", "a positive number of metres", distance)
        # threads may ask for different distances at the same time
        known = self._dilated.get(distance)
        if known is None:
            known = StudyArea(self.polygon.buffer(distance, quad_segs=16), self.crs)
            self._dilated = {distance: known}
        return known


def portions(count: int, size: int = PORTION) -> list[slice]:
    """Cut `count` items into consecutive slices."""
    return [slice(a, min(a + size, count)) for a in range(0, count, size)]
