"""Table of the share of an offspring kernel that falls in the study area."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.signal import fftconvolve

from geoclust.area._cauchy import Chains, cauchy_many
from geoclust.area._gaussian import gaussian_many
from geoclust.area.study_area import StudyArea
from geoclust.fitting._kernels import CAUCHY, GAUSSIAN
from geoclust.fitting._table import SHARE_TOLERANCE, ShareTable
from geoclust.intensity.base import Intensity
from geoclust.intensity.cells import Cells
from geoclust.models.base import ClusterModel
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]

# nodes per scale, and step of the log scale: the cubic interpolation is then off by less than 3e-4 at
# worst, and by less than 1e-4 on the whole
NODES_PER_SCALE = 3.0
LOG_STEP = 0.2
# sigmas beyond which a Gaussian counts as nothing in the table: 4e-6 of it, far less than interpolation
GAUSSIAN_CUT = 5.0
# nodes of a level, at most: of shares, and of the mean thinning alone, which is smoother
MOST_NODES, MOST_MEANS = 4e6, 2.5e5
# parts of the study area that the mean of what comes from outside is taken over
PARTS = 1_000


def share_table(
    kind: type[ClusterModel],
    area: StudyArea,
    margin: float,
    scales: tuple[float, float],
    workers: int | None = None,
    intensity: Intensity | None = None,
) -> ShareTable:
    """Tabulate shares over the study area widened by `margin`.

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
    low, step, levels = _levels(scales)
    heavy = heavy_tailed(kind)
    most = 1.0 if intensity is None else intensity.highest / intensity.mean
    far = np.zeros((levels, 1))
    if heavy and intensity is None:
        nothing, none = np.zeros(levels), np.zeros(levels, np.int64)
        return ShareTable(
            np.empty(0), none, nothing, nothing, nothing, none, none, low, step, most, area.chains, far
        )
    minx, miny, maxx, maxy = np.array(area.bounds) - np.tile(area.origin, 2)

    def one(level: int) -> tuple[Floats, float, float, float, int, int]:
        scale = float(np.exp(low + level * step))
        spacing = scale / NODES_PER_SCALE
        # very large areas with small clusters have coarser nodes
        wide = (maxx - minx + 2 * margin) * (maxy - miny + 2 * margin)
        spacing = max(spacing, float(np.sqrt(wide / (MOST_MEANS if heavy else MOST_NODES))))
        left, bottom = minx - margin - 3 * spacing, miny - margin - 3 * spacing
        columns = int(np.ceil((maxx + margin - left) / spacing)) + 5
        rows = int(np.ceil((maxy + margin - bottom) / spacing)) + 5
        xs, ys = left + spacing * np.arange(columns), bottom + spacing * np.arange(rows)
        nodes = np.column_stack([np.tile(xs, rows), np.repeat(ys, columns)])
        if heavy:
            values = np.ones(len(nodes))
        elif kind.kernel_code == GAUSSIAN:
            values = np.empty(len(nodes))
            gaussian_many(area.grid, nodes, np.full(len(nodes), scale), GAUSSIAN_CUT, values)
        else:
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
        low,
        step,
        most,
        area.chains if heavy else Chains(np.empty((0, 14)), np.empty(0, np.int64)),
        far,
    )


def _levels(scales: tuple[float, float]) -> tuple[float, float, int]:
    """Logarithm of the first tabulated scale, step of the logarithm, number of scales."""
    low, high = float(np.log(scales[0])), float(np.log(scales[1]))
    levels = 1 if high <= low else max(int(np.ceil((high - low) / LOG_STEP)) + 1, 4)
    return low, (high - low) / (levels - 1) if levels > 1 else LOG_STEP, levels


def heavy_tailed(kind: type[ClusterModel]) -> bool:
    """Whether centres outside any widened study area still matter."""
    return kind.kernel_code == CAUCHY


def share_beyond(wide: StudyArea, at: Floats, scale: float) -> Floats:
    """Share of the offspring of places (n, 2), local coordinates of `wide`, that fall outside it.

    The kernel is symmetric, so it is also the share of centres, of those that a point at
    the place may have, that lie outside.
    """
    out = np.empty(len(at))
    cauchy_many(wide.chains, np.ascontiguousarray(at), scale, SHARE_TOLERANCE, out)
    return 1.0 - out


def far_densities(
    area: StudyArea,
    wide: StudyArea,
    at: Floats,
    scales: tuple[float, float],
    intensity: Intensity | None = None,
) -> tuple[Floats, Floats]:
    """What clusters with a centre outside the widened study area D add, per centre in D, by tabulated scale.

    Centres further out than D are as dense as those in it, so each of the centres in D stands for
    1/|D| of theirs. Few of them have more than one point in the study area; taken together,
    they are a Poisson process, whose mean is exact.

    Parameters
    ----------
    area, wide
        The study area W and D.
    at
        (n, 2) points, local coordinates of W.
    scales
        Smallest and largest scale.
    intensity
        Thins the offspring, relative to its mean.

    Returns
    -------
    densities : ndarray, (levels, n)
        Points per m², per centre and unit of mean offspring, at each place.
    shares : ndarray, (levels, 1)
        Their integral over W.
    """
    low, step, levels = _levels(scales)
    minx, miny, maxx, maxy = area.bounds
    # scattered parts: the grid spans them all
    side = max(area.area / PARTS, (maxx - minx) * (maxy - miny) / (1_000 * PARTS))
    cells = Cells.square(area, float(np.sqrt(side)))
    places, held = cells.places(2), cells.places_inside(2)
    nodes = places[held] - wide.origin
    weights = np.repeat(cells.areas / held.sum(axis=1), held.sum(axis=1))
    if intensity is not None:
        inside = area.contains(nodes + wide.origin)
        weights[inside] *= intensity.relative(nodes[inside] + wide.origin - area.origin)
    here = at + (area.origin - wide.origin)
    densities, shares = np.empty((levels, len(at))), np.empty((levels, 1))
    for level in range(levels):
        scale = float(np.exp(low + level * step))
        densities[level] = share_beyond(wide, here, scale) / wide.area
        shares[level] = share_beyond(wide, nodes, scale) @ weights / wide.area
    return densities, shares


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
    reach = int(min(np.ceil(kind.reach_in_scales * scale / spacing), max(shape)))
    step = spacing * np.arange(-reach, reach + 1)
    kernel = kind.of(1.0, scale, 1.0).offspring_density(np.hypot(step[:, None], step[None, :]))
    grid = inside.astype(np.float64).reshape(shape)
    mass = fftconvolve(grid, kernel, mode="same").ravel()
    thinned = fftconvolve(relative.reshape(shape), kernel, mode="same").ravel()
    # beyond reach of the study area the share is nothing, whatever it is multiplied by
    near = mass > 1e-9 * kernel.sum()
    return np.where(near, np.maximum(thinned, 0.0) / np.where(near, mass, 1.0), 1.0)
