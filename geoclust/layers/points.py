"""Points as recorded, and how they lie to the study area."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
from scipy.spatial import cKDTree

_POINT, _MULTIPOINT, _COLLECTION = 0, 4, 7
# A point counts as on the boundary within this share of the square root of the area,
_BOUNDARY_SHARE = 1e-6
# but never more than a millimetre away.
_BOUNDARY_MOST = 1e-3


@dataclass(frozen=True)
class TakenPoints:
    """Single points, the feature each comes from, and what was left out on the way.

    Attributes
    ----------
    xy, feature
        (n, 2) finite coordinates in the CRS of the layer, (n,) row of the feature of each.
    null, empty, other
        Features without geometry, with an empty one, and with lines or polygons only.
    nonfinite
        Points with a coordinate that is not a finite number.
    multipoints
        Features of several points, which became one point each.
    z_dropped
        Features whose heights were dropped.
    """

    xy: np.ndarray
    feature: np.ndarray
    null: int
    empty: int
    other: int
    nonfinite: int
    multipoints: int
    z_dropped: int


@dataclass(frozen=True)
class Placement:
    """How points lie to the study area.

    Attributes
    ----------
    kept
        (n,) True for points inside or on the boundary.
    on_boundary
        (n,) True for points within `tolerance` of it.
    furthest
        Distance of the furthest point outside, m (0 if there is none).
    tolerance
        m.
    """

    kept: np.ndarray
    on_boundary: np.ndarray
    furthest: float
    tolerance: float


def take_points(geometries: np.ndarray) -> TakenPoints:
    """Single two-dimensional points of an array of any geometries."""
    geometries = np.asarray(geometries, dtype=object)
    null = shapely.is_missing(geometries)
    empty = ~null & shapely.is_empty(geometries)
    feature = np.flatnonzero(~null & ~empty)
    features = len(feature)
    parts = geometries[feature]
    z_dropped = int(shapely.has_z(parts).sum())
    while np.isin(shapely.get_type_id(parts), (_MULTIPOINT, _COLLECTION)).any():
        parts, source = shapely.get_parts(parts, return_index=True)
        feature = feature[source]
    keep = (shapely.get_type_id(parts) == _POINT) & ~shapely.is_empty(parts)
    parts, feature = parts[keep], feature[keep]
    used, counts = np.unique(feature, return_counts=True)
    xy = shapely.get_coordinates(parts)
    finite = np.isfinite(xy).all(axis=1)
    return TakenPoints(
        xy=xy[finite],
        feature=feature[finite],
        null=int(null.sum()),
        empty=int(empty.sum()),
        other=features - len(used),
        nonfinite=int((~finite).sum()),
        multipoints=int((counts > 1).sum()),
        z_dropped=z_dropped,
    )


def boundary_tolerance(polygon: shapely.MultiPolygon) -> float:
    """Distance to the boundary, m, within which a point counts as on it.

    A millionth of the square root of the area, at most 1 mm, and never below the
    rounding of the coordinates themselves.
    """
    largest = np.abs(shapely.bounds(polygon)).max()
    rounding = 8 * np.finfo(float).eps * largest
    return float(max(min(_BOUNDARY_SHARE * np.sqrt(polygon.area), _BOUNDARY_MOST), rounding))


def place_points(xy: np.ndarray, polygon: shapely.MultiPolygon) -> Placement:
    """Find which points are inside, on the boundary and outside.

    Parameters
    ----------
    xy
        (n, 2) points, metric CRS.
    polygon
        Study area, metric CRS.
    """
    tolerance = boundary_tolerance(polygon)
    shapely.prepare(polygon)
    boundary = shapely.boundary(polygon)
    shapely.prepare(boundary)
    on_boundary = shapely.dwithin(boundary, shapely.points(xy), tolerance)
    kept = shapely.contains_xy(polygon, xy[:, 0], xy[:, 1]) | on_boundary
    furthest = 0.0
    if not kept.all():
        furthest = float(_distances(xy[~kept], boundary).max())
    return Placement(kept, on_boundary, furthest, tolerance)


def _distances(xy: np.ndarray, boundary: shapely.Geometry) -> np.ndarray:
    """Distances to a boundary through a tree of its edges, so that many points stay cheap."""
    vertices, line = shapely.get_coordinates(shapely.get_parts(boundary), return_index=True)
    start = np.flatnonzero(line[1:] == line[:-1])
    edges = shapely.linestrings(np.stack([vertices[start], vertices[start + 1]], axis=1))
    tree = shapely.STRtree(edges)
    _, distance = tree.query_nearest(shapely.points(xy), return_distance=True, all_matches=False)
    return distance


def coincident(xy: np.ndarray) -> tuple[int, int]:
    """Points at a place that another one has already taken, and the number of such places."""
    _, counts = np.unique(xy, axis=0, return_counts=True)
    return int(len(xy) - len(counts)), int((counts > 1).sum())


def median_nearest(xy: np.ndarray) -> float:
    """Median distance of the different places to their nearest neighbours; infinite for a single place."""
    places = np.unique(xy, axis=0)
    if len(places) < 2:
        return float("inf")
    distance, _ = cKDTree(places).query(places, k=[2])
    return float(np.median(distance))
