"""How far a projection stretches distances and areas over a study area.

The factors come from the derivatives of the projection itself and the radii of
curvature of the ellipsoid of its datum, and not from a library's list of
factors: for Web Mercator that list is computed on the projection's own sphere
and reports no error at the equator, where north-south distances are in truth
0.67 % too long.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyproj
import shapely
from pyproj.exceptions import ProjError

from geoclust.errors import InputError

BOUNDARY_SAMPLES = 4000
GRID_SAMPLES = 15
# Half step of the central differences, in radians: about 60 m on the Earth, where
# truncation (step²) and rounding (1e-16 · 6e6 m / step) errors are both near 1e-10.
_STEP = 1e-5
# At the poles the east-west factor is 0/0.
_POLE_GAP = np.radians(0.01)


@dataclass(frozen=True)
class ScaleErrors:
    """Largest departure of a projection's scale from 1 over a study area.

    Attributes
    ----------
    distance
        max |s - 1|, s the scale of a distance in any direction.
    area
        max |s - 1|, s the scale of an area.
    smallest, largest
        Smallest and largest scale of a distance.
    """

    distance: float
    area: float
    smallest: float
    largest: float

    @property
    def worst(self) -> float:
        """The larger of the two errors."""
        return max(self.distance, self.area)


UNUSABLE = ScaleErrors(np.inf, np.inf, 0.0, np.inf)


def sample_points(polygon: shapely.Geometry) -> np.ndarray:
    """Points where the scale is measured: along the boundary and on a grid inside.

    Parameters
    ----------
    polygon
        Study area, in any CRS.

    Returns
    -------
    ndarray of shape (m, 2)
        In the CRS of the polygon.
    """
    vertices = shapely.get_coordinates(polygon)
    thinned = vertices[:: max(1, len(vertices) // BOUNDARY_SAMPLES)]
    # the hull keeps the extremes that thinning might lose
    hull = shapely.get_coordinates(shapely.convex_hull(polygon))
    minx, miny, maxx, maxy = shapely.bounds(polygon)
    steps = (np.arange(GRID_SAMPLES) + 0.5) / GRID_SAMPLES
    grid_x, grid_y = np.meshgrid(minx + steps * (maxx - minx), miny + steps * (maxy - miny))
    inside = shapely.contains_xy(polygon, grid_x, grid_y)
    grid = np.column_stack([grid_x[inside], grid_y[inside]])
    return np.vstack([thinned, hull, grid])


def geodetic_of(crs: pyproj.CRS) -> pyproj.CRS:
    """The geographic CRS that a CRS on a body is built on.

    Raises
    ------
    InputError
        If it has none.
    """
    if crs.geodetic_crs is None:
        raise InputError(f"{crs.name} is tied to no ellipsoid: give the layer a projected or geographic CRS")
    return crs.geodetic_crs


def to_lonlat(xy: np.ndarray, crs: pyproj.CRS, geodetic: pyproj.CRS) -> tuple[np.ndarray, np.ndarray]:
    """Longitude and latitude of points, in radians from the prime meridian of `geodetic`.

    Raises
    ------
    InputError
        If the two do not belong together (not the same body, or no place on it).
    """
    radian = geodetic.axis_info[0].unit_conversion_factor
    try:
        step = pyproj.Transformer.from_crs(crs, geodetic, always_xy=True)
    except ProjError as error:
        raise InputError(f"coordinates in {crs.name} cannot be brought to {geodetic.name}") from error
    lon, lat = step.transform(xy[:, 0], xy[:, 1])
    return np.asarray(lon) * radian, np.asarray(lat) * radian


def scale_errors(crs: pyproj.CRS, lon: np.ndarray, lat: np.ndarray) -> ScaleErrors:
    """Measure the scale of a projection at points.

    Parameters
    ----------
    crs
        A projected CRS.
    lon, lat
        Points, radians, in the geodetic CRS that `crs` is built on.

    Returns
    -------
    ScaleErrors
        With infinite errors where the projection does not reach some point.

    Notes
    -----
    Snyder, J. P. (1987), Map Projections: A Working Manual, USGS Professional
    Paper 1395, section 4: scale along the meridian and the parallel, and the
    axes of Tissot's ellipse as singular values of the Jacobian.
    """
    geodetic = geodetic_of(crs)
    ellipsoid = geodetic.ellipsoid
    if ellipsoid is None:
        return UNUSABLE
    radian = geodetic.axis_info[0].unit_conversion_factor
    metre = crs.axis_info[0].unit_conversion_factor
    limit = np.pi / 2 - _POLE_GAP
    lat = np.clip(lat, -limit, limit)
    a, b = ellipsoid.semi_major_metre, ellipsoid.semi_minor_metre
    e2 = 1 - (b / a) ** 2
    normal = a / np.sqrt(1 - e2 * np.sin(lat) ** 2)
    meridional = a * (1 - e2) / (1 - e2 * np.sin(lat) ** 2) ** 1.5

    forward = pyproj.Transformer.from_crs(geodetic, crs, always_xy=True)

    def project(at_lon: np.ndarray, at_lat: np.ndarray) -> np.ndarray:
        x, y = forward.transform(at_lon / radian, at_lat / radian)
        return np.stack([np.asarray(x), np.asarray(y)]) * metre

    ends = [project(lon, lat + _STEP), project(lon, lat - _STEP)]
    sides = [project(lon + _STEP, lat), project(lon - _STEP, lat)]
    if not all(np.isfinite(end).all() for end in (*ends, *sides)):
        return UNUSABLE
    north = (ends[0] - ends[1]) / (2 * _STEP) / meridional
    east = (sides[0] - sides[1]) / (2 * _STEP) / (normal * np.cos(lat))
    along, across = (north**2).sum(axis=0), (east**2).sum(axis=0)
    mixed = (north * east).sum(axis=0)
    spread = np.hypot((along - across) / 2, mixed)
    largest = np.sqrt((along + across) / 2 + spread)
    smallest = np.sqrt(np.maximum((along + across) / 2 - spread, 0.0))
    area = np.abs(east[0] * north[1] - east[1] * north[0])
    return ScaleErrors(
        distance=float(max(abs(largest.max() - 1), abs(smallest.min() - 1))),
        area=float(np.abs(area - 1).max()),
        smallest=float(smallest.min()),
        largest=float(largest.max()),
    )
