"""Polygons made fit for measuring: taken apart, mended, united and carried to another CRS."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyproj
import shapely

from geoclust.errors import InputError
from geoclust.layers.crs import DatumStep

REPAIR_LIMIT = 0.001
# Straight edges bend when they are carried to another projection. Vertices are added
# until an edge is nowhere further off than this share of the square root of the area.
BEND_TOLERANCE = 1e-6
# A polygon is flat (a line) if its area is below this share of its squared perimeter;
# a strip a thousand kilometres long and one metre wide is still a polygon.
_FLAT = 1e-10
_POLYGON, _MULTIPOLYGON, _COLLECTION = 3, 6, 7


@dataclass(frozen=True)
class Parts:
    """Single polygons, the feature each comes from, and what was left out on the way.

    Attributes
    ----------
    polygons, feature
        (k,) polygons without Z, and the row of the feature of each.
    null, empty, other
        Features without geometry, with an empty one, and with points or lines only.
    z_dropped
        Features whose heights were dropped.
    """

    polygons: np.ndarray
    feature: np.ndarray
    null: int
    empty: int
    other: int
    z_dropped: int


@dataclass(frozen=True)
class Repair:
    """What mending did to a layer.

    Attributes
    ----------
    polygons
        Number of polygons mended.
    change
        Share of the area that mending moved in or out.
    flat
        Polygons without area that were dropped.
    """

    polygons: int
    change: float
    flat: int


def take_apart(geometries: np.ndarray) -> Parts:
    """Single two-dimensional polygons of an array of any geometries."""
    geometries = np.asarray(geometries, dtype=object)
    null = shapely.is_missing(geometries)
    empty = ~null & shapely.is_empty(geometries)
    feature = np.flatnonzero(~null & ~empty)
    parts = geometries[feature]
    z_dropped = int(shapely.has_z(parts).sum())
    parts = shapely.force_2d(parts)
    while np.isin(shapely.get_type_id(parts), (_MULTIPOLYGON, _COLLECTION)).any():
        parts, source = shapely.get_parts(parts, return_index=True)
        feature = feature[source]
    keep = (shapely.get_type_id(parts) == _POLYGON) & ~shapely.is_empty(parts)
    used = np.unique(feature[keep])
    other = int((~null & ~empty).sum()) - len(used)
    return Parts(parts[keep], feature[keep], int(null.sum()), int(empty.sum()), other, z_dropped)


def mend(parts: Parts, what: str, *, allow: bool, each_feature: bool = False) -> tuple[Parts, Repair]:
    """Make every polygon valid, and drop those without area.

    Parameters
    ----------
    parts
        Polygons; unchanged if all are valid.
    what
        Names the layer in messages.
    allow
        Mend even where that moves more than `REPAIR_LIMIT` of the area.
    each_feature
        Hold every feature to the limit by itself, and not the layer as a whole.

    Raises
    ------
    InputError
        If a coordinate is not finite, if mending would move too much, or if nothing with
        an area is left.

    Notes
    -----
    The polygon part of shapely's `make_valid` is kept, which counts a place as inside
    if a ring winds round it an odd number of times. What that moves is measured twice:
    against the signed area of the ring, and against the region with a non-zero winding
    (buffer of width 0); the larger of the two counts.
    """
    if not np.isfinite(shapely.get_coordinates(parts.polygons)).all():
        raise InputError(f"{what} has coordinates that are not finite numbers: mend the layer")
    valid = shapely.is_valid(parts.polygons)
    broken = np.flatnonzero(~valid)
    pieces, feature = [parts.polygons[valid]], [parts.feature[valid]]
    moved = np.zeros(len(broken))
    for position, index in enumerate(broken):
        before = parts.polygons[index]
        mended = _polygon_pieces(shapely.make_valid(before))
        whole = shapely.union_all(mended)
        moved[position] = max(
            abs(whole.area - before.area),
            shapely.symmetric_difference(whole, shapely.buffer(before, 0)).area,
        )
        pieces.append(mended)
        feature.append(np.full(len(mended), parts.feature[index]))
    polygons, source = np.concatenate(pieces), np.concatenate(feature).astype(int)
    flat = shapely.area(polygons) <= _FLAT * shapely.length(polygons) ** 2
    polygons, source = polygons[~flat], source[~flat]
    if len(polygons) == 0:
        raise InputError(f"{what} has no area: its polygons are flat; check that the layer is the right one")
    change = _worst_change(moved, parts.feature[broken], polygons, source, each_feature)
    if change > REPAIR_LIMIT and not allow:
        worst = int(broken[np.argmax(moved)])
        raise InputError(
            f"{what} is invalid ({shapely.is_valid_reason(parts.polygons[worst])} in feature "
            f"{parts.feature[worst] + 1}), and repairing it would move {100 * min(change, 1.0):.3g} % of its "
            f"area, above the limit of {100 * REPAIR_LIMIT:g} %: mend the layer in a GIS, or ask for the "
            "repair with repair"
        )
    # a polygon that collapsed without leaving a piece is flat as well
    collapsed = len(set(parts.feature[broken].tolist()) - set(np.concatenate(feature).astype(int).tolist()))
    order = np.argsort(source, kind="stable")
    kept = Parts(polygons[order], source[order], parts.null, parts.empty, parts.other, parts.z_dropped)
    return kept, Repair(len(broken), float(change), int(flat.sum()) + collapsed)


def _worst_change(
    moved: np.ndarray, of_feature: np.ndarray, polygons: np.ndarray, source: np.ndarray, each_feature: bool
) -> float:
    """Largest share of area moved, over features or for all together."""
    if len(moved) == 0:
        return 0.0
    areas = shapely.area(polygons)
    if not each_feature:
        return float(moved.sum() / areas.sum())
    shares = [0.0]
    for number in np.unique(of_feature):
        area, change = areas[source == number].sum(), moved[of_feature == number].sum()
        shares.append(float(change / area) if area > 0 else float(change > 0))
    return max(shares)


def _polygon_pieces(geometry: shapely.Geometry) -> np.ndarray:
    return take_apart(np.array([geometry], dtype=object)).polygons


def unite(parts: Parts) -> tuple[shapely.MultiPolygon, float]:
    """One multipolygon of all parts, and the area (square units of the CRS) that they overlap."""
    united = shapely.union_all(parts.polygons) if len(parts.polygons) > 1 else parts.polygons[0]
    whole = united if isinstance(united, shapely.MultiPolygon) else shapely.MultiPolygon([united])
    overlap = float(shapely.area(parts.polygons).sum() - whole.area)
    # sums of areas agree to rounding only
    return whole, overlap if overlap > 1e-9 * whole.area else 0.0


def unwrap_longitudes(parts: Parts, crs: pyproj.CRS, what: str) -> tuple[Parts, bool]:
    """Join what the antimeridian cuts apart, by counting longitudes on past 180°.

    Parameters
    ----------
    parts
        Polygons in `crs`; only geographic ones are looked at.

    Returns
    -------
    Parts, bool
        And whether longitudes were shifted.

    Raises
    ------
    InputError
        If an edge spans more than half a turn, as nobody can tell which way round it is
        meant, or if the polygons are wider than half the globe.
    """
    if not crs.is_geographic:
        return parts, False
    half = np.pi / crs.axis_info[0].unit_conversion_factor
    rings = shapely.get_rings(parts.polygons)
    xy, ring = shapely.get_coordinates(rings, return_index=True)
    steps = np.abs(np.diff(xy[:, 0]))[ring[1:] == ring[:-1]]
    if len(steps) and steps.max() > half:
        raise InputError(
            f"{what} has an edge across more than 180° of longitude, as when degrees jump at the "
            "antimeridian, so that nobody can tell which way round it goes: cut the polygon into two parts "
            "at 180° (as GeoJSON asks), or give it in a projected CRS"
        )
    if np.ptp(xy[:, 0]) <= half:
        return parts, False

    bounds = shapely.bounds(parts.polygons)
    western = bounds[:, 0] + bounds[:, 2] < 0
    shifted = parts.polygons.copy()
    shifted[western] = shapely.transform(shifted[western], lambda at: at + np.array([2 * half, 0.0]))
    minx, _, maxx, _ = shapely.total_bounds(shifted)
    if maxx - minx > half:
        raise InputError(
            f"{what} spans more than 180° of longitude: give it in a projected CRS made for the region (a "
            "polar one if it lies round a pole)"
        )
    return Parts(shifted, parts.feature, parts.null, parts.empty, parts.other, parts.z_dropped), True


def carry_over(polygons: np.ndarray, step: DatumStep | None, what: str) -> tuple[np.ndarray, int]:
    """Polygons in another CRS, their edges bending as the projection bends them.

    Parameters
    ----------
    polygons
        (k,) polygons.
    step
        Way to the other CRS; None leaves them as they are.
    what
        Names the layer in messages.

    Returns
    -------
    (k,) ndarray, int
        Polygons, and the number of vertices that were added so that no edge is further
        than `BEND_TOLERANCE` of the square root of the whole area from where it was drawn.

    Raises
    ------
    InputError
        If a vertex has no place in the other CRS.
    """
    if step is None:
        return polygons, 0
    rings, owner = shapely.get_rings(polygons, return_index=True)
    xy, ring = shapely.get_coordinates(rings, return_index=True)

    def forward(at: np.ndarray) -> np.ndarray:
        moved = np.column_stack(step.transformer.transform(at[:, 0], at[:, 1]))
        if not np.isfinite(moved).all():
            raise InputError(
                f"{what} reaches places that its coordinate reference system cannot map: check the CRS "
                "it states"
            )
        return moved

    there = forward(xy)
    start = np.flatnonzero(ring[1:] == ring[:-1])
    middle = forward((xy[start] + xy[start + 1]) / 2)
    bend = np.hypot(*(middle - (there[start] + there[start + 1]) / 2).T)
    plain = shapely.polygons(shapely.linearrings(there, indices=ring)[_first_rings(owner)])
    tolerance = BEND_TOLERANCE * np.sqrt(shapely.area(plain).sum())
    pieces = np.ones(len(xy), dtype=int)
    # the bend of an arc falls with the square of the number of pieces
    pieces[start] = np.maximum(1, np.ceil(np.sqrt(bend / tolerance)).astype(int))
    index = np.repeat(np.arange(len(xy)), pieces)
    share = (np.arange(len(index)) - np.repeat(np.cumsum(pieces) - pieces, pieces)) / pieces[index]
    following = np.minimum(index + 1, len(xy) - 1)
    between = xy[index] + share[:, None] * (xy[following] - xy[index])
    carried = forward(between)
    carried[share == 0] = there  # untouched by rounding
    new_rings = shapely.linearrings(carried, indices=ring[index])
    return _assemble(new_rings, owner), int(len(index) - len(xy))


def _first_rings(owner: np.ndarray) -> np.ndarray:
    """True for the ring of each polygon that comes first, its shell."""
    return np.r_[True, owner[1:] != owner[:-1]]


def _assemble(rings: np.ndarray, owner: np.ndarray) -> np.ndarray:
    """Polygons from rings in the order of `shapely.get_rings`."""
    first = _first_rings(owner)
    shells, holes, number = rings[first], rings[~first], owner[~first]
    return np.array(
        [
            shapely.Polygon(shell, holes[slice(*np.searchsorted(number, [k, k + 1]))])
            for k, shell in enumerate(shells)
        ],
        dtype=object,
    )
