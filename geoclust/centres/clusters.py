"""Which individuals belong together: one partition out of the sampled ones, as points and polygons."""

from __future__ import annotations

import geopandas as gpd
import numpy as np
import numpy.typing as npt
import pandas as pd
import shapely
from scipy import sparse

from geoclust.area.study_area import StudyArea
from geoclust.centres import _partition
from geoclust.fitting.sampling import Draws

Floats = npt.NDArray[np.float64]

# draws that the partition is chosen from and by; more would not change the answer
MOST_DRAWS = 1000
SWEEPS = 50
# a cluster's outline reaches this many scales beyond its outermost points
OUTLINE = 0.5


def delineate(draws: Draws, local_xy: Floats, area: StudyArea) -> tuple[pd.DataFrame, gpd.GeoDataFrame]:
    """Delineate clusters by the partition that minimises the expected Binder loss.

    Every sampled partition is scored by the sum over pairs of points of the
    probability that it is wrong about the pair (Binder 1978, Biometrika 65:
    31-38; Dahl 2006); the best is improved by moving single points while that
    helps. Background points stand alone.

    Parameters
    ----------
    draws
        The posterior sample.
    local_xy
        (n, 2) points in local coordinates of the study area.
    area
        The study area.

    Returns
    -------
    points : DataFrame
        One row a point: `cluster` (1 is the largest; 0 for background),
        `membership_probability` (of sharing a centre with the others of its
        cluster, their mean; of standing alone for a cluster of one),
        `background_probability`.
    clusters : GeoDataFrame
        One row a cluster, in the coordinate reference system of the study area.
    """
    n = len(local_xy)
    picked = _spread_picks(draws)
    owner = np.stack([draws.owner[a, b] for a, b in picked])
    background = (draws.owner < 0).mean(axis=(0, 1))
    together = _together(owner)
    labels = _best_partition(owner, together)
    sizes = np.bincount(labels, minlength=n + 1).astype(np.int64)
    sizes = np.concatenate([sizes, np.zeros(n + 1, np.int64)])
    _partition.refine(together.indptr, together.indices, together.data, labels, sizes, SWEEPS)

    alone = np.bincount(labels, minlength=len(sizes))[labels] == 1
    labels = _relabelled(labels, (background > 0.5) & alone)
    points = pd.DataFrame(
        {
            "cluster": labels,
            "membership_probability": _membership(labels, together, owner),
            "background_probability": background,
        }
    )
    return points, _outlines(points, local_xy, area, draws, picked, owner)


def _spread_picks(draws: Draws) -> list[tuple[int, int]]:
    chains, m = draws.number_inside.shape
    step = max(1, int(np.ceil(chains * m / MOST_DRAWS)))
    return [(a, b) for a in range(chains) for b in range(0, m, step)]


def _indicators(owner: npt.NDArray[np.int32]) -> sparse.csr_array:
    """(n, clusters) membership of one draw; background points have a column each."""
    n = len(owner)
    column = owner.astype(np.int64)
    lonely = column < 0
    column[lonely] = column.max(initial=-1) + 1 + np.arange(lonely.sum())
    return sparse.csr_array((np.ones(n), (np.arange(n), column)), shape=(n, int(column.max(initial=0)) + 1))


def _together(owner: npt.NDArray[np.int32]) -> sparse.csr_array:
    """(n, n) sparse: share of draws in which two points have the same centre."""
    parts = []
    # one product over many draws at a time bounds the memory
    for a in range(0, len(owner), 100):
        stacked = sparse.hstack([_indicators(o) for o in owner[a : a + 100]], format="csr")
        parts.append(stacked @ stacked.T)
    total = parts[0]
    for part in parts[1:]:
        total = total + part
    out = sparse.csr_array(total / len(owner))
    out.sort_indices()
    return out


def _best_partition(owner: npt.NDArray[np.int32], together: sparse.csr_array) -> npt.NDArray[np.int64]:
    best, least = owner[0], np.inf
    for o in owner:
        z = _indicators(o)
        sizes = np.asarray(z.sum(axis=0)).ravel()
        loss = float((sizes**2).sum() - 2.0 * (together @ z).multiply(z).sum())
        if loss < least:
            best, least = o, loss
    labels = best.astype(np.int64)
    lonely = labels < 0
    labels[lonely] = labels.max(initial=-1) + 1 + np.arange(lonely.sum())
    return np.asarray(np.unique(labels, return_inverse=True)[1], dtype=np.int64)


def _relabelled(labels: npt.NDArray[np.int64], none: npt.NDArray[np.bool_]) -> npt.NDArray[np.int64]:
    """Number clusters from 1, the largest first; 0 where there is none."""
    out = np.zeros(len(labels), np.int64)
    kept, index, counts = np.unique(labels[~none], return_inverse=True, return_counts=True)
    rank = np.empty(len(kept), np.int64)
    rank[np.argsort(-counts, kind="stable")] = np.arange(1, len(kept) + 1)
    out[~none] = rank[index]
    return out


def _membership(
    labels: npt.NDArray[np.int64], together: sparse.csr_array, owner: npt.NDArray[np.int32]
) -> Floats:
    n = len(labels)
    z = sparse.csr_array((np.ones(n), (np.arange(n), labels)), shape=(n, int(labels.max(initial=0)) + 1))
    shared = np.asarray((together @ z).multiply(z).sum(axis=1)).ravel() - together.diagonal()
    sizes = np.bincount(labels, minlength=z.shape[1])[labels]
    out = shared / np.maximum(sizes - 1, 1)
    single = (sizes == 1) & (labels > 0)
    if single.any():
        out[single] = np.mean([_stands_alone(o)[single] for o in owner], axis=0)
    out[labels == 0] = np.nan
    return out


def _stands_alone(owner: npt.NDArray[np.int32]) -> npt.NDArray[np.bool_]:
    counts = np.bincount(owner[owner >= 0], minlength=int(owner.max(initial=0)) + 1)
    return (owner >= 0) & (counts[np.maximum(owner, 0)] == 1)


def _outlines(
    points: pd.DataFrame,
    local_xy: Floats,
    area: StudyArea,
    draws: Draws,
    picked: list[tuple[int, int]],
    owner: npt.NDArray[np.int32],
) -> gpd.GeoDataFrame:
    labels = points["cluster"].to_numpy()
    count = int(labels.max(initial=0))
    order = np.argsort(labels, kind="stable")
    order = order[labels[order] > 0]
    start = np.concatenate([[0], np.cumsum(np.bincount(labels[order], minlength=count + 1)[1:])])
    centres = [draws.centres[a][b] for a, b in picked]
    offset = np.concatenate([[0], np.cumsum([len(c) for c in centres])]).astype(np.int64)
    flat = np.concatenate(centres) if centres else np.empty((0, 2))
    where = _partition.leading_centres(
        np.ascontiguousarray(owner), order, start.astype(np.int64),
        np.ascontiguousarray(flat[:, 0]), np.ascontiguousarray(flat[:, 1]), offset,
    )  # fmt: skip
    seen = np.isfinite(where[:, :, 0]).sum(axis=1)
    total = np.nansum(where, axis=1)
    mean = total / np.maximum(seen, 1)[:, None]
    spread = np.sqrt(np.nansum((where - mean[:, None, :]) ** 2, axis=(1, 2)) / np.maximum(2 * seen, 1))
    scale = float(np.median(draws.scale))
    shapes = [
        shapely.MultiPoint(local_xy[order[start[k] : start[k + 1]]] + area.origin).convex_hull.buffer(
            OUTLINE * scale, quad_segs=8
        )
        for k in range(count)
    ]
    sizes = np.diff(start).astype(np.int64)
    member = points["membership_probability"].to_numpy()
    return gpd.GeoDataFrame(
        {
            "cluster": np.arange(1, count + 1),
            "points": sizes,
            "centre_e_m": mean[:, 0] + area.origin[0],
            "centre_n_m": mean[:, 1] + area.origin[1],
            "centre_sd_m": spread,
            "centre_inside": area.local_contains(mean) if count else np.empty(0, bool),
            "membership_probability": [
                float(np.mean(member[order[start[k] : start[k + 1]]])) for k in range(count)
            ],
            "area_m2": [float(s.area) for s in shapes],
        },
        geometry=gpd.GeoSeries(shapes, crs=area.crs),
        crs=area.crs,
    )
