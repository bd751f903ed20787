"""Sums over pairs of points by distance class: the engine under K, L and g."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.area.covariance import LOW, ShiftTable, hair_of
from geoclust.area.study_area import StudyArea, portions
from geoclust.curves import _pairs, _weighted_pairs
from geoclust.errors import not_allowed
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]
# most points per block, the unit of threaded work and of ordered summation; and about how
# many steps a block may take, so that an interrupt is obeyed at once
BLOCK = 4_000
STEPS = 5e7
# up to so many pairs, or if the table is worse than this, each pair's set covariance is exact
EXACT_PAIRS = 10_000
WORST_TABLE = 1e-3
# steps of distance in the table of eroded areas
ERODED_STEPS = 8192
NO_TABLE = ShiftTable(np.zeros((2, 1)), 0.0, 0.0, 0.0)

EDGE_WEIGHTS = ("isotropic", "translation", "rigid-motion", "minus-sampling", "unweighted")


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
    border
        (c,) for minus-sampling alone: summed up to a limit, the pairs below it
        whose first point is deeper than the limit.
    """

    edges: Floats
    moments: Floats
    border: Floats | None = None

    def __add__(self, other: PairSums) -> PairSums:
        """Add the sums of another set of first points over the same classes."""
        if not np.array_equal(self.edges, other.edges):
            raise ValueError("pair sums over different classes cannot be added")
        border = None
        if self.border is not None and other.border is not None:
            border = self.border + other.border
        return PairSums(self.edges, self.moments + other.moments, border)

    def up_to(self, radii: Floats) -> Floats:
        """Sum of w over pairs not further apart than each radius; radii must be class limits."""
        at = np.searchsorted(self.edges, radii)
        sums = self.moments[:, 1] if self.border is None else self.border
        return np.asarray(np.cumsum(sums)[at])

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
    first: npt.NDArray[np.bool_] | None = None,
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
        One of `EDGE_WEIGHTS`.
    point_weights
        (n,) factor of each point, one over the intensity there for weighted curves.
    first
        (n,) the points that count as first of a pair, all if not given. Sums over
        disjoint sets of first points add up to the whole, so a survey can be
        summed tile by tile, each with the points around it as partners.
    workers
        Threads; one a core if not given. The sums have the same bits for any number.
    """
    largest = float(limits[-1])
    x, y = np.ascontiguousarray(xy[:, 0]), np.ascontiguousarray(xy[:, 1])
    size = max(8 * len(limits), 1024)
    squared = limits * limits
    classes = _pairs.Classes(squared, _pairs.guess_table(squared, size), size / largest)
    points = _sorted_points(x, y, largest, point_weights, first)
    if edge_weight == "unweighted":
        work, columns = _plain(points, classes), 3
    elif edge_weight == "isotropic":
        work, columns = _isotropic(points, classes, area, largest), 3
    elif edge_weight in ("translation", "rigid-motion"):
        work, columns = _shifted(points, classes, area, largest, edge_weight, workers), 3
    elif edge_weight == "minus-sampling":
        work, columns = _deep(points, classes, area, limits, workers), 4
    else:
        raise not_allowed("edge_weight", EDGE_WEIGHTS, edge_weight)

    def block(part: tuple[int, int]) -> Floats:
        out = np.zeros((len(limits), columns))
        work(part[0], part[1], out)
        return out

    total = np.zeros((len(limits), columns))
    for part in in_order(block, _blocks(points, area, largest), workers):
        total += part
    return PairSums(limits, total[:, :3], total[:, 3] if columns == 4 else None)


# adds the pairs whose first point is one of a range
Work = Callable[[int, int, Floats], None]


def _plain(points: _pairs.SortedPoints, classes: _pairs.Classes) -> Work:
    def work(low: int, high: int, out: Floats) -> None:
        _pairs.add_pairs(points, classes, low, high, out)

    return work


def _isotropic(points: _pairs.SortedPoints, classes: _pairs.Classes, area: StudyArea, largest: float) -> Work:
    """All pairs with weight one, and for points near the boundary what is missing."""
    grid = area.grid
    deep = _deep_cells(area, largest)
    depth = np.empty(len(points.x))
    known = points._replace(depth=depth)

    def work(low: int, high: int, out: Floats) -> None:
        _pairs.add_pairs(points, classes, low, high, out)
        part = slice(low, high)
        _pairs.fill_depths(grid, deep, points.x[part], points.y[part], largest, depth[part])
        _pairs.add_isotropic_excess(known, grid, classes, low, high, out)

    return work


def _shifted(
    points: _pairs.SortedPoints,
    classes: _pairs.Classes,
    area: StudyArea,
    largest: float,
    edge_weight: str,
    workers: int | None,
) -> Work:
    """Pairs over the set covariance of their shift, or its mean over directions."""
    if edge_weight == "rigid-motion":
        table, low_share = area.shift_table(largest, isotropic=True, workers=workers), 0.0
    else:
        n = len(points.x)
        # expected under complete randomness: the choice must not hang on anything slower
        if 0.5 * n * n * min(1.0, np.pi * largest**2 / area.area) <= EXACT_PAIRS:
            table, low_share = NO_TABLE, 2.0
        else:
            table = area.shift_table(largest, workers=workers)
            low_share = LOW if table.error <= WORST_TABLE else 2.0
    tree, grid, hair = area.tree, area.grid, hair_of(area)

    def work(low: int, high: int, out: Floats) -> None:
        _weighted_pairs.add_shifted_pairs(
            points, classes, table, low_share, tree, grid, area.area, hair, low, high, out
        )

    return work


def _deep(
    points: _pairs.SortedPoints,
    classes: _pairs.Classes,
    area: StudyArea,
    limits: Floats,
    workers: int | None,
) -> Work:
    """Pairs whose first point is no nearer to the boundary than to the second."""
    largest = float(limits[-1])
    known = points._replace(depth=_depths(points.x, points.y, area, largest, workers))
    at = np.linspace(0.0, largest, ERODED_STEPS + 1)
    eroded = np.ascontiguousarray((area.eroded_area(largest)(at) / area.area)[:, None])

    def work(low: int, high: int, out: Floats) -> None:
        _weighted_pairs.add_deep_pairs(known, classes, limits, eroded, ERODED_STEPS / largest, low, high, out)

    return work


def _depths(x: Floats, y: Floats, area: StudyArea, largest: float, workers: int | None = None) -> Floats:
    """Distance of points (local coordinates) to the boundary, capped at `largest`."""
    grid, deep = area.grid, _deep_cells(area, largest)
    out = np.empty(len(x))

    def work(part: slice) -> None:
        _pairs.fill_depths(grid, deep, x[part], y[part], largest, out[part])

    for _ in in_order(work, portions(len(x)), workers):
        pass
    return out


def _deep_cells(area: StudyArea, largest: float) -> npt.NDArray[np.bool_]:
    grid = area.grid
    reach = int(np.ceil(largest / grid.cell + 0.5))
    occupied = np.diff(grid.first) > 0
    return np.asarray(_pairs.deep_cells(occupied, grid.columns, grid.rows, reach))


def _sorted_points(
    x: Floats,
    y: Floats,
    largest: float,
    point_weights: Floats | None,
    first_points: npt.NDArray[np.bool_] | None,
) -> _pairs.SortedPoints:
    n = len(x)
    left, bottom = (float(x.min()), float(y.min())) if n else (0.0, 0.0)
    width, height = (float(np.ptp(x)), float(np.ptp(y))) if n else (0.0, 0.0)
    # no finer than about two cells a point: sparse patterns need no large empty grid
    cell = max(largest / _pairs.FINE, np.sqrt(width * height / (2.0 * n + 16.0)), 1e-12)
    cell = max(cell, width / 30_000, height / 30_000)
    columns, rows = int(width / cell) + 1, int(height / cell) + 1
    order, first = _pairs.cell_order(x, y, left, bottom, cell, columns, rows)
    nothing = np.empty(0)
    weight = nothing if point_weights is None else np.ascontiguousarray(point_weights[order])
    lead = nothing if first_points is None else 0.5 * first_points[order].astype(np.float64)
    return _pairs.SortedPoints(x[order], y[order], weight, lead, nothing, first, columns, rows)


def _blocks(points: _pairs.SortedPoints, area: StudyArea, largest: float) -> list[tuple[int, int]]:
    """Consecutive points, BLOCK of them or fewer if these have many neighbours or edges to look at."""
    n = len(points.x)
    disc = np.pi * largest**2
    neighbours = n * min(1.0, disc / area.area)
    minx, miny, maxx, maxy = area.bounds
    pieces = len(area.grid.x0) * min(1.0, disc / ((maxx - minx) * (maxy - miny)))
    size = int(np.clip(STEPS / ((1.0 + neighbours) * (1.0 + pieces)), 1, BLOCK))
    return [(a, min(a + size, n)) for a in range(0, n, size)]
