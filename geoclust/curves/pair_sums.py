"""Sums over pairs of points by distance class: the engine under K, L and g."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.curves import _pairs
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]
# points per block: the unit of threaded work and of ordered summation
BLOCK = 8_000


@dataclass(frozen=True)
class PairSums:
    """Weighted sums over ordered pairs, by class of distance.

    Attributes
    ----------
    edges
        (c,) upper limits of the classes in metres, increasing.
    moments
        (c, 3) sums of w/d, w and w d over the pairs in each class. Coincident
        pairs count in the second alone.
    """

    edges: Floats
    moments: Floats

    def __add__(self, other: PairSums) -> PairSums:
        """Add the sums of another set of first points over the same classes."""
        if not np.array_equal(self.edges, other.edges):
            raise ValueError("pair sums over different classes cannot be added")
        return PairSums(self.edges, self.moments + other.moments)

    def up_to(self, radii: Floats) -> Floats:
        """Sum of w over pairs not further apart than each radius; radii must be class limits."""
        at = np.searchsorted(self.edges, radii)
        return np.asarray(np.cumsum(self.moments[:, 1])[at])

    def kernel_sums(self, radii: Floats, bandwidth: float) -> Floats:
        """Sum of w k(r - d) / d with the Epanechnikov kernel; r - b and r + b must be class limits."""
        running = np.vstack([np.zeros(3), np.cumsum(self.moments, axis=0)])
        low, high = radii - bandwidth, radii + bandwidth
        a = np.where(low > 0, np.searchsorted(self.edges, low) + 1, 0)
        # moments of pairs in (r - b, r + b]
        m = running[np.searchsorted(self.edges, high) + 1] - running[a]
        # k(r - d) / d = 3/(4b) [(1 - r²/b²)/d + 2r/b² - d/b²]
        b2 = bandwidth * bandwidth
        return np.asarray(
            0.75 / bandwidth * ((1 - radii**2 / b2) * m[:, 0] + 2 * radii / b2 * m[:, 1] - m[:, 2] / b2)
        )


def class_limits(radii: Floats, bandwidth: float | None) -> Floats:
    """Class limits that K at these radii, and g with this bandwidth, can be read from."""
    limits = [radii[radii > 0]]
    if np.any(radii <= 0):
        limits.append(np.array([np.min(radii[radii > 0], initial=1.0) * 1e-9]))
    if bandwidth is not None:
        low = radii - bandwidth
        limits += [low[low > 0], radii + bandwidth]
    return np.unique(np.concatenate(limits))


def pair_sums(
    xy: Floats,
    area: StudyArea,
    limits: Floats,
    *,
    edge_weight: str = "isotropic",
    point_weights: Floats | None = None,
    workers: int | None = None,
) -> PairSums:
    """Sum over all ordered pairs in one pass.

    Parameters
    ----------
    xy
        (n, 2) local coordinates in metres (`StudyArea.local`).
    area
        The study area that holds the points.
    limits
        (c,) upper limits of the distance classes, increasing, positive.
    edge_weight
        ``isotropic`` or ``unweighted``.
    point_weights
        (n,) factor of each point, one over the intensity there for weighted curves.
    workers
        Threads; one a core if not given. The sums have the same bits for any number.
    """
    largest = float(limits[-1])
    x, y = np.ascontiguousarray(xy[:, 0]), np.ascontiguousarray(xy[:, 1])
    size = max(8 * len(limits), 1024)
    squared = limits * limits
    classes = _pairs.Classes(squared, _pairs.guess_table(squared, size), size / largest)
    points = _sorted_points(x, y, largest, point_weights)
    isotropic = edge_weight == "isotropic"
    if isotropic:
        grid = area.grid
        reach = int(np.ceil(largest / grid.cell + 0.5))
        occupied = np.diff(grid.first) > 0
        deep = _pairs.deep_cells(occupied, grid.columns, grid.rows, reach)
        depth = np.empty(len(x))
        points = points._replace(depth=depth)

    blocks = _row_blocks(points)

    def work(rows: tuple[int, int]) -> Floats:
        out = np.zeros((len(limits), 3))
        _pairs.add_pairs(points, classes, rows[0], rows[1], 2.0, out)
        if isotropic:
            a, b = (int(points.first[r * points.columns]) for r in rows)
            _pairs.fill_depths(grid, deep, points.x[a:b], points.y[a:b], largest, depth[a:b])
            _pairs.add_isotropic_excess(points, grid, classes, rows[0], rows[1], out)
        return out

    total = np.zeros((len(limits), 3))
    for part in in_order(work, blocks, workers):
        total += part
    return PairSums(limits, total)


def _sorted_points(
    x: Floats, y: Floats, largest: float, point_weights: Floats | None
) -> _pairs.SortedPoints:
    n = len(x)
    left, bottom = (float(x.min()), float(y.min())) if n else (0.0, 0.0)
    width, height = (float(np.ptp(x)), float(np.ptp(y))) if n else (0.0, 0.0)
    # no finer than about two cells a point: sparse patterns need no large empty grid
    cell = max(largest / _pairs.FINE, np.sqrt(width * height / (2.0 * n + 16.0)), 1e-12)
    cell = max(cell, width / 30_000, height / 30_000)
    columns, rows = int(width / cell) + 1, int(height / cell) + 1
    order, first = _pairs.cell_order(x, y, left, bottom, cell, columns, rows)
    weight = np.empty(0) if point_weights is None else np.ascontiguousarray(point_weights[order])
    return _pairs.SortedPoints(x[order], y[order], weight, np.empty(0), first, columns, rows)


def _row_blocks(points: _pairs.SortedPoints) -> list[tuple[int, int]]:
    """Consecutive rows with about BLOCK points each."""
    starts = points.first[:: points.columns]
    blocks: list[tuple[int, int]] = []
    low = 0
    for row in range(1, points.rows + 1):
        if row == points.rows or starts[row] - starts[low] >= BLOCK:
            blocks.append((low, row))
            low = row
    return blocks
