"""Set covariance: how much of the study area a shifted copy of it covers."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import numpy.typing as npt
import shapely
from scipy.interpolate import CubicSpline, RectBivariateSpline
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
# shifts that leave less of the area than this are not read from a table
LOW = 0.05
# a table is refined until its relative error at held-out shifts is below this
TABLE_ERROR = 1e-4


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
    hair = hair_of(area)

    def work(part: slice) -> None:
        _covariance.covariance_many(tree, grid, shifts[part], area.area, hair, out[part])

    for _ in in_order(work, [slice(a, a + PORTION) for a in range(0, len(shifts), PORTION)], workers):
        pass
    for k in np.flatnonzero(out < 0):
        # crossings that rounding left undecided: the general overlay decides them
        out[k] = shapely.intersection(area.polygon, translate(area.polygon, *shifts[k])).area
    return out


def hair_of(area: StudyArea) -> float:
    """By how much a shift is moved out of the way of coinciding edges, metres."""
    minx, miny, maxx, maxy = area.bounds
    return HAIR * max(maxx - minx, maxy - miny)


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


class ShiftTable(NamedTuple):
    """Set covariance over shifts up to a largest distance, as a share of the area.

    Rows are equal steps of distance, columns equal steps of a substitute of the
    angle that needs no trigonometry (0 east, 1 north, 2 west); compiled loops
    interpolate linearly. One column: the mean over directions.
    """

    values: Floats  # (rows, columns)
    row_scale: float  # rows per metre
    column_scale: float  # columns per unit of the substitute angle
    error: float  # largest error over shifts that were held out, relative to the value


def direction(turn: Floats) -> Floats:
    """Unit vectors of the substitute angle from 0 (east) over 1 (north) to 2 (west)."""
    at = np.column_stack([1.0 - turn, np.where(turn <= 1.0, turn, 2.0 - turn)])
    return np.asarray(at / np.hypot(*at.T)[:, None])


def isotropised_table(area: StudyArea, largest: float, workers: int | None = None) -> ShiftTable:
    """Isotropised set covariance up to a distance: exact at 513, a cubic spline between them."""
    at = np.linspace(0.0, largest, 513)
    exact = area.isotropic_set_covariance(at, workers=workers) / area.area
    spline = CubicSpline(at[::2], exact[::2])
    known = exact[1::2] > LOW
    error = np.abs(spline(at[1::2]) - exact[1::2])[known] / exact[1::2][known]
    fine = np.linspace(0.0, largest, 8193)
    # no more than linear where the curve ends in zero
    values = np.maximum(CubicSpline(at, exact)(fine), 0.0)
    values[fine >= area.diameter] = 0.0
    return ShiftTable(values[:, None].copy(), 8192 / largest, 0.0, float(error.max(initial=0.0)) / 8.0)


def shift_table(area: StudyArea, largest: float, workers: int | None = None) -> ShiftTable:
    """Set covariance over all shifts up to a distance, refined until its measured error is small.

    Exact values on a polar grid, bicubic between them. The error is measured
    at shifts that are no nodes; shifts with less than a twentieth of the area in
    common are left out, as the pair sums take those exactly.
    """
    rng = np.random.default_rng(1981)
    turn, far = rng.uniform(0, np.pi, 200), largest * np.sqrt(rng.uniform(0, 1, 200))
    held_out = np.column_stack([far * np.cos(turn), far * np.sin(turn)])
    truth = set_covariance(area, held_out, workers) / area.area
    known = truth > LOW
    table = None
    for rows, columns in ((16, 48), (32, 96), (64, 192), (96, 384)):
        r = np.linspace(0.0, largest, rows + 1)
        phi = np.arange(columns) * (np.pi / columns)
        nodes = np.stack(np.broadcast_arrays(np.outer(r, np.cos(phi)), np.outer(r, np.sin(phi))), axis=-1)
        values = set_covariance(area, nodes.reshape(-1, 2), workers).reshape(rows + 1, columns) / area.area
        # opposite shifts are the same: some columns more on either side
        pad = 4
        wide = np.hstack([values[:, -pad:], values, values[:, : pad + 1]])
        spline = RectBivariateSpline(r, np.arange(-pad, columns + pad + 1) * (np.pi / columns), wide)
        fine_r = np.linspace(0.0, largest, 4 * rows + 1)
        u = direction(np.linspace(0.0, 2.0, 4 * columns + 1))
        fine = np.clip(spline(fine_r, np.arctan2(u[:, 1], u[:, 0])), 0.0, 1.0)
        table = ShiftTable(np.ascontiguousarray(fine), 4 * rows / largest, 2.0 * columns, 0.0)
        found = _covariance.look_up_many(table.values, table.row_scale, table.column_scale, held_out)
        error = np.abs(found - truth)[known] / truth[known]
        table = table._replace(error=float(error.max(initial=0.0)))
        if table.error < TABLE_ERROR:
            break
    assert table is not None
    return table


def met_directions(area: StudyArea, radii: Floats) -> Floats:
    """Share of directions in which W still meets its copy shifted by each distance.

    Where it is below one, no pair of points can be that far apart in the other
    directions, and translation weights are left without them.
    """
    out = np.ones(len(radii))
    at = area.uniform_points(400, 1981)
    # a disc inside W meets its copy up to its diameter
    safe = 2.0 * float(area.distance_to_boundary(at).max())
    turn = (np.arange(360) + 0.5) * (np.pi / 360)
    u = np.column_stack([np.cos(turn), np.sin(turn)])
    open_cases = []
    for k in np.flatnonzero(radii >= safe):
        shifts = radii[k] * u
        moved = (at[None, :64] + shifts[:, None]).reshape(-1, 2)
        met = area.contains(moved).reshape(360, 64).any(axis=1)
        out[k] = met.mean()
        open_cases.append((k, shifts[~met]))
    for k, shifts in open_cases:
        if len(shifts):
            # what rounding leaves of a mere touch is nothing
            out[k] += np.sum(set_covariance(area, shifts) > 1e-12 * area.area) / 360
    return out
