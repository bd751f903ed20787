"""Table of the share of an offspring kernel that falls in the study area."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.signal import fftconvolve

from geoclust.area.study_area import StudyArea
from geoclust.fitting._table import ShareTable
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]

# nodes per scale: the quintic interpolation is then off by less than 5e-5
NODES_PER_SCALE = 3.0
LOG_STEP = 0.1


def share_table(
    kind: type[ClusterModel],
    area: StudyArea,
    margin: float,
    scales: tuple[float, float],
    workers: int | None = None,
    intensity: Intensity | None = None,
) -> ShareTable:
    """Tabulate shares over the study area widened by `margin`, exactly at every node.

    Parameters
    ----------
    kind
        The model; its scale is the one in metres.
    area
        The study area.
    margin
        How far outside centres may lie, metres.
    scales
        Smallest and largest scale; equal for a single level.
    intensity
        Thins the offspring: each share is then of those left, relative to the mean intensity.
    """
    low, high = np.log(scales[0]), np.log(scales[1])
    levels = 1 if high <= low else max(int(np.ceil((high - low) / LOG_STEP)) + 1, 4)
    step = (high - low) / (levels - 1) if levels > 1 else LOG_STEP
    minx, miny, maxx, maxy = np.array(area.bounds) - np.tile(area.origin, 2)

    def one(level: int) -> tuple[Floats, float, float, float, int, int]:
        scale = float(np.exp(low + level * step))
        spacing = scale / NODES_PER_SCALE
        # very large areas with small clusters: no more than four million nodes a level
        wide = (maxx - minx + 2 * margin) * (maxy - miny + 2 * margin)
        spacing = max(spacing, float(np.sqrt(wide / 4e6)))
        left, bottom = minx - margin - 3 * spacing, miny - margin - 3 * spacing
        columns = int(np.ceil((maxx + margin - left) / spacing)) + 5
        rows = int(np.ceil((maxy + margin - bottom) / spacing)) + 5
        xs, ys = left + spacing * np.arange(columns), bottom + spacing * np.arange(rows)
        nodes = np.column_stack([np.tile(xs, rows), np.repeat(ys, columns)])
        values = kind.area_shares(area, nodes, scale)
        if intensity is not None:
            values = values * _mean_thinning(kind, area, nodes, (rows, columns), spacing, scale, intensity)
        return values, left, bottom, spacing, columns, rows

    parts = list(in_order(one, range(levels), workers))
    sizes = [len(p[0]) for p in parts]
    column = list(zip(*parts, strict=True))
    return ShareTable(
        np.concatenate(column[0]),
        np.concatenate([[0], np.cumsum(sizes)[:-1]]).astype(np.int64),
        np.array(column[1]),
        np.array(column[2]),
        np.array(column[3]),
        np.array(column[4], dtype=np.int64),
        np.array(column[5], dtype=np.int64),
        float(low),
        float(step),
        1.0 if intensity is None else intensity.highest / intensity.mean,
    )


def _mean_thinning(
    kind: type[ClusterModel],
    area: StudyArea,
    nodes: Floats,
    shape: tuple[int, int],
    spacing: float,
    scale: float,
    intensity: Intensity,
) -> Floats:
    """Mean of the relative intensity over the part of each node's kernel inside the study area.

    Sums over the nodes themselves, a third of a scale apart; the share that it is
    multiplied by is exact.
    """
    inside = area.local_contains(nodes)
    relative = np.zeros(len(nodes))
    relative[inside] = intensity.relative(nodes[inside])
    reach = int(np.ceil(kind.reach_in_scales * scale / spacing))
    step = spacing * np.arange(-reach, reach + 1)
    kernel = kind.of(1.0, scale, 1.0).offspring_density(np.hypot(step[:, None], step[None, :]))
    grid = inside.astype(np.float64).reshape(shape)
    mass = fftconvolve(grid, kernel, mode="same").ravel()
    thinned = fftconvolve(relative.reshape(shape), kernel, mode="same").ravel()
    # beyond reach of the study area the share is nothing, whatever it is multiplied by
    near = mass > 1e-9 * kernel.sum()
    return np.where(near, np.maximum(thinned, 0.0) / np.where(near, mass, 1.0), 1.0)
