"""Checks of what a study area is made of and asked for."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import shapely
from pyproj import CRS
from shapely.geometry.polygon import orient

from geoclust.errors import InputError, UsageError

Floats = npt.NDArray[np.float64]


def checked_points(xy: npt.ArrayLike, name: str = "xy") -> Floats:
    """Return coordinates as an (n, 2) float64 array, or say what is wrong with them."""
    at = np.asarray(xy, dtype=np.float64)
    if at.size == 0:
        return np.empty((0, 2))
    if at.ndim != 2 or at.shape[1] != 2:
        raise UsageError(f"{name} must be an array of shape (n, 2); got shape {at.shape}.")
    if not np.all(np.isfinite(at)):
        bad = int(np.sum(~np.isfinite(at).all(axis=1)))
        raise UsageError(f"{name} must hold finite coordinates; {bad} of {len(at)} rows do not.")
    return at


def checked_polygon(polygon: Any) -> shapely.MultiPolygon:
    """A valid multipolygon with an area, exteriors counter-clockwise, or what is wrong with it."""
    if isinstance(polygon, shapely.Polygon):
        polygon = shapely.MultiPolygon([polygon]) if not polygon.is_empty else shapely.MultiPolygon()
    if not isinstance(polygon, shapely.MultiPolygon):
        raise InputError(f"The study area must be a polygon or multipolygon; got a {type(polygon).__name__}.")
    polygon = shapely.force_2d(polygon)
    if polygon.is_empty or polygon.area <= 0:
        raise InputError("The study area has no area; give the polygon in which individuals were mapped.")
    if not polygon.is_valid:
        raise InputError(
            f"The study area is not a valid polygon ({shapely.is_valid_reason(polygon)}); repair it first."
        )
    return shapely.MultiPolygon([orient(part) for part in polygon.geoms if part.area > 0])


def checked_crs(crs: object) -> CRS | None:
    """A coordinate reference system in metres, or what is wrong with it."""
    if crs is None:
        return None
    found = CRS.from_user_input(crs)
    # a plane that says nothing of where on Earth it lies is as good, if it is in metres
    if not (found.is_projected or found.is_engineering):
        raise InputError(
            f"The study area is in {found.name}, which is not a projected system; "
            "transform it to one in metres before measuring distances."
        )
    units = {axis.unit_conversion_factor for axis in found.axis_info[:2]}
    if units and units != {1.0}:
        name = found.axis_info[0].unit_name
        raise InputError(f"The study area is in {found.name}, measured in {name}; transform it to metres.")
    return found


def spread(values: npt.ArrayLike, count: int, name: str) -> Floats:
    """One value an item, from one for all or one each."""
    given = np.asarray(values, dtype=np.float64)
    if given.ndim == 0:
        return np.full(count, float(given))
    if given.shape != (count,):
        raise UsageError(f"{name} must be one number or one a centre ({count}); got shape {given.shape}.")
    return np.ascontiguousarray(given)


def example(values: npt.ArrayLike) -> float:
    """The first value that is not allowed, for the message."""
    given = np.asarray(values, dtype=np.float64).ravel()
    wrong = given[~np.isfinite(given) | (given <= 0)]
    return float(wrong[0]) if len(wrong) else float(given[0])
