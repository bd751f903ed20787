"""Set covariance: how much of the study area a shifted copy of it covers."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import shapely
from shapely.affinity import translate

from geoclust.area import _covariance, _isotropised
from geoclust.workers import in_order

if TYPE_CHECKING:
    from geoclust.area.study_area import StudyArea

Floats = npt.NDArray[np.float64]
# in units of the size of the study area: well above the rounding of coordinates, and
# with any real perimeter far below 1e-9 of the area
HAIR = 1e-13
PORTION = 500


def edge_tree(starts: Floats, ends: Floats, ring_sizes: npt.NDArray[np.int64]) -> _covariance.EdgeTree:
    """Boxes over runs of consecutive edges, halved by their middles until one run is left.

    Parameters
    ----------
    starts, ends
        (m, 2) edges of all rings, ring after ring, in local coordinates.
    ring_sizes
        (rings,) number of edges of each ring.
    """
    first = np.concatenate([[0], np.cumsum(ring_sizes)])
    bounds = list(pairwise(first.tolist()))
    leaf = _covariance.LEAF
    run_low = np.concatenate([np.arange(a, b, leaf) for a, b in bounds])
    run_high = np.concatenate([np.minimum(np.arange(a, b, leaf) + leaf, b) for a, b in bounds])
    lower = np.minimum(starts, ends)
    upper = np.maximum(starts, ends)
    middle = 0.5 * (np.minimum.reduceat(lower, run_low) + np.maximum.reduceat(upper, run_low))

    low, high = [0], [0]
    order: list[npt.NDArray[np.int64]] = []
    filed = 0
    waiting = [(0, np.arange(len(run_low)))]
    while waiting:
        node, mine = waiting.pop()
        if len(mine) == 1:
            edges = np.arange(run_low[mine[0]], run_high[mine[0]])
            order.append(edges)
            low[node], high[node] = filed, filed + len(edges)
            filed += len(edges)
            continue
        axis = int(np.argmax(np.ptp(middle[mine], axis=0)))
        half = len(mine) // 2
        split = mine[np.argpartition(middle[mine, axis], half)]
        low[node], high[node] = len(low), -1
        waiting += [(len(low) + 1, split[half:]), (len(low), split[:half])]
        low += [0, 0]
        high += [0, 0]

    at = np.concatenate(order)
    ring = np.repeat(np.arange(len(ring_sizes)), ring_sizes)
    swept = 0.5 * (starts[:, 0] * ends[:, 1] - starts[:, 1] * ends[:, 0])
    prefix = np.empty(len(starts))
    whole = np.empty(len(ring_sizes))
    for r, (a, b) in enumerate(bounds):
        running = np.cumsum(swept[a:b])
        prefix[a] = 0.0
        prefix[a + 1 : b] = running[:-1]
        whole[r] = running[-1]
    box = np.empty((len(low), 4))
    x0, y0, x1, y1 = (np.ascontiguousarray(v[at]) for v in (*starts.T, *ends.T))
    lows, highs = np.array(low, np.int64), np.array(high, np.int64)
    _covariance.fill_boxes(x0, y0, x1, y1, lows, highs, box)
    corner = starts[first[:-1]]
    return _covariance.EdgeTree(
        x0, y0, x1, y1, ring[at], (np.arange(len(starts)) - first[ring])[at], prefix[at],
        np.ascontiguousarray(corner[:, 0]), np.ascontiguousarray(corner[:, 1]), whole, box, lows, highs,
    )  # fmt: skip


def set_covariance(area: StudyArea, shifts: Floats, workers: int | None = None) -> Floats:
    """Area of W and W + h in common for checked shifts; see `StudyArea.set_covariance`."""
    out = np.empty(len(shifts))
    tree, grid = area.tree, area.grid
    minx, miny, maxx, maxy = area.bounds
    hair = HAIR * max(maxx - minx, maxy - miny)

    def work(part: slice) -> None:
        _covariance.covariance_many(tree, grid, shifts[part], area.area, hair, out[part])

    for _ in in_order(work, [slice(a, a + PORTION) for a in range(0, len(shifts), PORTION)], workers):
        pass
    for k in np.flatnonzero(out < 0):
        # crossings that rounding left undecided: the general overlay decides them
        out[k] = shapely.intersection(area.polygon, translate(area.polygon, *shifts[k])).area
    return out


def isotropised(area: StudyArea, radii: Floats, workers: int | None = None) -> Floats:
    """Mean of the set covariance over directions, for increasing positive radii."""
    tree = area.tree
    leaves = np.flatnonzero(tree.high >= 0)
    # in the order of their edges, so that the later one of a pair is found by its number
    leaves = leaves[np.argsort(tree.low[leaves])]

    def work(part: slice) -> Floats:
        out = np.zeros((3, len(radii)))
        _isotropised.add_run_pairs(tree, leaves, part.start, part.stop, radii, out)
        return out

    total = np.zeros((3, len(radii)))
    parts = [slice(a, min(a + 16, len(leaves))) for a in range(0, len(leaves), 16)]
    for more in in_order(work, parts, workers):
        total += more
    exact, flat, logs = total
    integral = exact + np.log(radii) * np.cumsum(flat) - np.cumsum(logs)
    found = area.area - integral / (2 * np.pi)
    return np.where(radii < area.diameter, np.clip(found, 0.0, area.area), 0.0)
