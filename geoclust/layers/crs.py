"""Coordinate reference systems: reading what people state, and choosing the metric one.

Distances are only ever measured in a metric CRS whose scale over the study area
is within `SCALE_LIMIT` of 1, for distances in any direction and for areas. The
order of choice:

1. the CRS that the user insists on (an error if its scale is worse);
2. the CRS of the points, else that of the study area, if it is projected and good
   enough; feet become metres by the same projection in metres;
3. the UTM zone of the study area's centre on the datum of the study area, if good enough;
4. a transverse Mercator, Lambert azimuthal equal-area, Lambert conformal conic,
   stereographic or Mercator projection centred on the study area, on its own datum,
   whichever has the smallest error.

If nothing is good enough (a study area of a thousand kilometres), the best of all
is taken, with a warning.
"""

from __future__ import annotations

import re
import warnings
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
import pyproj
import shapely
from pyproj.aoi import AreaOfInterest
from pyproj.crs import ProjectedCRS
from pyproj.crs.coordinate_operation import (
    LambertAzimuthalEqualAreaConversion,
    LambertConformalConic1SPConversion,
    MercatorAConversion,
    StereographicConversion,
    TransverseMercatorConversion,
)
from pyproj.crs.coordinate_system import Cartesian2DCS
from pyproj.crs.enums import Cartesian2DCSAxis
from pyproj.database import query_crs_info, query_utm_crs_info
from pyproj.enums import PJType
from pyproj.exceptions import CRSError, ProjError

from geoclust.errors import InputError, UsageError
from geoclust.layers.scale import UNUSABLE, ScaleErrors, geodetic_of, sample_points, scale_errors, to_lonlat

SCALE_LIMIT = 0.001
LOCAL_NAME = "local"
# A plot measured with tapes: a plane in metres with no place on the Earth.
LOCAL_PLANE = (
    'ENGCRS["local plane in metres",EDATUM["local datum"],CS[Cartesian,2],'
    'AXIS["easting",east,ORDER[1],LENGTHUNIT["metre",1]],'
    'AXIS["northing",north,ORDER[2],LENGTHUNIT["metre",1]]]'
)
# Axes as maps have them, and those of polar grids, which both point along meridians.
_MAP_AXES = ({"east", "north"}, {"north"}, {"south"})


@dataclass(frozen=True)
class CrsChoice:
    """The metric CRS and how good it is.

    Attributes
    ----------
    crs
        Projected (or local plane) CRS in metres.
    errors
        Scale errors over the study area; None in a local plane, which has no
        curved ground to be measured against.
    reason
        Why this one, as a clause.
    """

    crs: pyproj.CRS
    errors: ScaleErrors | None
    reason: str


def parse_crs(stated: object, parameter: str = "crs") -> pyproj.CRS:
    """Understand a CRS as stated by a person, and keep its horizontal part.

    Parameters
    ----------
    stated
        Anything pyproj understands ("EPSG:25832", WKT, PROJ text, a CRS), or
        "local" for a plane in metres with no place on the Earth.
    parameter
        Name of the option, for the message.

    Raises
    ------
    UsageError
        If it is no CRS.
    """
    if isinstance(stated, str) and stated.strip().lower() == LOCAL_NAME:
        return pyproj.CRS.from_wkt(LOCAL_PLANE)
    try:
        return horizontal(pyproj.CRS.from_user_input(stated))
    except CRSError as error:
        raise UsageError(
            f"{parameter} must be a coordinate reference system such as EPSG:25832, WKT or PROJ text, "
            f"or '{LOCAL_NAME}' for a plane in metres with no place on the Earth; got {stated!r}"
        ) from error


def horizontal(crs: pyproj.CRS) -> pyproj.CRS:
    """The two-dimensional part of a compound or three-dimensional CRS."""
    if crs.is_compound or (crs.is_geographic and len(crs.axis_info) == 3):
        return crs.to_2d()
    return crs


def is_local(crs: pyproj.CRS) -> bool:
    """True for a plane that says nothing of where on the Earth it lies."""
    return bool(crs.is_engineering)


def label(crs: pyproj.CRS) -> str:
    """Name of a CRS for people, with its authority code where there is one."""
    if crs.is_bound and crs.source_crs is not None:
        crs = crs.source_crs
    authority = crs.to_authority(min_confidence=100)
    name = crs.name
    if name in ("unknown", "unnamed", ""):
        method = (
            crs.coordinate_operation.method_name if crs.coordinate_operation is not None else crs.type_name
        )
        name = f"unnamed CRS, {method}"
    return f"{name} ({authority[0]}:{authority[1]})" if authority else name


def in_metres(crs: pyproj.CRS) -> pyproj.CRS:
    """The same projection with axes in metres; the CRS itself if they are already.

    Where the EPSG registry lists the metric twin (as it does for US state plane
    zones), that twin is taken, so that the result keeps an authority code.
    """
    if crs.axis_info[0].unit_conversion_factor == 1.0:
        return crs
    source = crs.source_crs if crs.is_bound and crs.source_crs is not None else crs
    spec = source.to_json_dict()
    for axis in spec["coordinate_system"]["axis"]:
        axis["unit"] = "metre"
    spec.pop("id", None)
    bare = re.sub(r"\s*\((ft|ftUS)\)$", "", source.name)
    spec["name"] = f"{bare} in metres"
    made = pyproj.CRS.from_json_dict(spec)
    return made if is_local(crs) else _registered_twin(made, bare) or made


def _registered_twin(made: pyproj.CRS, name: str) -> pyproj.CRS | None:
    area = made.area_of_use
    if area is None:
        return None
    around = AreaOfInterest(area.west, area.south, area.east, area.north)
    for info in query_crs_info("EPSG", pj_types=PJType.PROJECTED_CRS, area_of_interest=around):
        if info.name != name or info.deprecated:
            continue
        twin = pyproj.CRS.from_authority(info.auth_name, info.code)
        step = pyproj.Transformer.from_crs(geodetic_of(made), made, always_xy=True)
        other = pyproj.Transformer.from_crs(geodetic_of(made), twin, always_xy=True)
        lon, lat = [area.west, area.east], [area.south, area.north]
        if np.allclose(step.transform(lon, lat), other.transform(lon, lat), rtol=0, atol=1e-3):
            return twin
    return None


def require_plausible(xy: np.ndarray, crs: pyproj.CRS, what: str) -> None:
    """Refuse coordinates that cannot be degrees although their CRS says so.

    Parameters
    ----------
    xy
        (k, 2) coordinates as recorded.
    crs
        What they are said to be in; only geographic ones are looked at.
    what
        Names the layer in the message.

    Raises
    ------
    InputError
    """
    if not crs.is_geographic:
        return
    quarter = np.pi / 2 / crs.axis_info[0].unit_conversion_factor
    wrong = (np.abs(xy[:, 1]) > quarter) | (np.abs(xy[:, 0]) > 4 * quarter)
    if wrong.any():
        x, y = xy[np.argmax(wrong)]
        raise InputError(
            f"{what} is said to be in degrees ({label(crs)}), but has coordinates such as x {x:.10g}, y "
            f"{y:.10g}: give the layer the CRS it was measured in, or put longitude before latitude"
        )


def choose_metric_crs(
    polygon: shapely.Geometry,
    area_crs: pyproj.CRS,
    points_crs: pyproj.CRS,
    insisted: object | None = None,
) -> CrsChoice:
    """Choose the CRS in which everything is measured.

    Parameters
    ----------
    polygon
        Study area in `area_crs`.
    area_crs, points_crs
        CRS of the two layers.
    insisted
        The CRS asked for by the user, if any.

    Raises
    ------
    UsageError
        If the CRS asked for is not a CRS, or not one of a plane.
    InputError
        If its scale error over the study area is above `SCALE_LIMIT`, or the layers
        cannot be brought together.
    """
    wanted = None if insisted is None else parse_crs(insisted, "metric_crs")
    if is_local(area_crs) or is_local(points_crs):
        return _local_choice(area_crs, points_crs, wanted)
    samples = sample_points(polygon)
    if wanted is not None:
        return _insisted_choice(wanted, samples, area_crs)

    tried: list[CrsChoice] = []
    for crs, whose in ((points_crs, "the points"), (area_crs, "the study area")):
        if _is_map_plane(crs):
            metric = in_metres(crs)
            turned = "" if metric is crs else ", in metres"
            tried.append(CrsChoice(metric, measure(metric, samples, area_crs), f"the CRS of {whose}{turned}"))
            if _good(tried[-1]):
                return tried[-1]
    lon, lat = to_lonlat(samples, area_crs, geodetic_of(area_crs))
    utm = _utm_zone(geodetic_of(area_crs), lon, lat)
    if utm is not None:
        tried.append(
            CrsChoice(utm, measure(utm, samples, area_crs), "the UTM zone of the study area's centre")
        )
        if _good(tried[-1]):
            return tried[-1]
    tried.extend(_centred(geodetic_of(area_crs), lon, lat))
    # errors below 1e-5 matter to nobody: among those the first, best known projection is taken
    best = min(tried, key=lambda choice: max(_worst(choice), 1e-5))
    if not np.isfinite(_worst(best)):
        raise InputError("no projection reaches the whole study area: it may span half the globe")
    return best


def measure(crs: pyproj.CRS, samples: np.ndarray, samples_crs: pyproj.CRS) -> ScaleErrors:
    """Scale errors of `crs` at points given in another CRS."""
    lon, lat = to_lonlat(samples, samples_crs, geodetic_of(crs))
    if not (np.isfinite(lon).all() and np.isfinite(lat).all()):
        return UNUSABLE
    return scale_errors(crs, lon, lat)


def too_large(errors: ScaleErrors) -> bool:
    """True if distances or areas are off by more than `SCALE_LIMIT`."""
    return errors.worst > SCALE_LIMIT


def outside_area_of_use(crs: pyproj.CRS, lon: float, lat: float) -> bool:
    """True if a place (degrees) lies more than five degrees outside the CRS's area of use."""
    area = crs.area_of_use
    if area is None:
        return False
    margin = 5.0
    if not area.south - margin <= lat <= area.north + margin:
        return True
    width = (area.east - area.west) % 360.0 or 360.0
    return (lon - area.west + margin) % 360.0 > width + 2 * margin and width + 2 * margin < 360.0


def centre_of(polygon: shapely.Geometry, crs: pyproj.CRS) -> tuple[float, float] | None:
    """Longitude and latitude of the middle of a study area, degrees; None in a local plane."""
    if is_local(crs):
        return None
    lon, lat = to_lonlat(sample_points(polygon), crs, geodetic_of(crs))
    if not (np.isfinite(lon).all() and np.isfinite(lat).all()):
        return None
    middle = _mean_direction(lon, lat)
    return float(np.degrees(middle[0])), float(np.degrees(middle[1]))


def _worst(choice: CrsChoice) -> float:
    return choice.errors.worst if choice.errors is not None else 0.0


def _good(choice: CrsChoice) -> bool:
    return _worst(choice) <= SCALE_LIMIT


def _is_map_plane(crs: pyproj.CRS) -> bool:
    return bool(crs.is_projected) and {axis.direction for axis in crs.axis_info} in _MAP_AXES


def _local_choice(area_crs: pyproj.CRS, points_crs: pyproj.CRS, wanted: pyproj.CRS | None) -> CrsChoice:
    for other, what in ((points_crs, "the points"), (wanted, "metric_crs")):
        if other is not None and not area_crs.equals(other, ignore_axis_order=True):
            raise InputError(
                f"a local plane has no known place on the Earth: the study area is in {label(area_crs)} and "
                f"{what} in {label(other)}; give both layers the same CRS"
            )
    metric = in_metres(area_crs)
    return CrsChoice(metric, None, "a local plane, taken as it is")


def _insisted_choice(wanted: pyproj.CRS, samples: np.ndarray, area_crs: pyproj.CRS) -> CrsChoice:
    if not _is_map_plane(wanted):
        raise UsageError(
            "metric_crs must be a projected CRS with eastings and northings, as distances are measured in "
            f"it; got {label(wanted)} ({wanted.type_name})"
        )
    metric = in_metres(wanted)
    errors = measure(metric, samples, area_crs)
    if too_large(errors):
        raise InputError(
            f"metric_crs {label(wanted)} is wrong by up to {100 * errors.distance:.3g} % in distances and "
            f"{100 * errors.area:.3g} % in areas over the study area, above the limit of "
            f"{100 * SCALE_LIMIT:g} %: leave metric_crs out to have a better one chosen, or name "
            "one made for this region"
        )
    return CrsChoice(metric, errors, "asked for" if metric is wanted else "asked for, in metres")


def _mean_direction(lon: np.ndarray, lat: np.ndarray) -> tuple[float, float]:
    """Centre of points on the globe by the mean of their unit vectors: safe at ±180° and the poles."""
    x, y, z = np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)
    mean = np.array([x.mean(), y.mean(), z.mean()])
    return float(np.arctan2(mean[1], mean[0])), float(np.arctan2(mean[2], np.hypot(mean[0], mean[1])))


def _utm_zone(geodetic: pyproj.CRS, lon: np.ndarray, lat: np.ndarray) -> pyproj.CRS | None:
    """The UTM zone of the centre on the datum of the study area, where the registry has it."""
    centre = np.degrees(_mean_direction(lon, lat))
    if not -80 <= centre[1] <= 84:
        return None
    zone = int(((centre[0] + 180) % 360) // 6) + 1
    name = f"{geodetic.name} / UTM zone {zone}{'N' if centre[1] >= 0 else 'S'}"
    here = AreaOfInterest(centre[0], centre[1], centre[0], centre[1])
    for info in query_utm_crs_info(datum_name=geodetic.name, area_of_interest=here):
        if info.name == name and not info.deprecated:
            return pyproj.CRS.from_authority(info.auth_name, info.code)
    return None


_Maker = Callable[[float, float, float], object]
_MAKERS: dict[str, _Maker] = {
    "transverse Mercator": lambda lat, lon, k: TransverseMercatorConversion(lat, lon, 0, 0, k),
    "Lambert azimuthal equal-area": lambda lat, lon, k: LambertAzimuthalEqualAreaConversion(lat, lon),
    "Lambert conformal conic": lambda lat, lon, k: LambertConformalConic1SPConversion(lat, lon, 0, 0, k),
    "stereographic": lambda lat, lon, k: StereographicConversion(lat, lon, 0, 0, k),
    "Mercator": lambda lat, lon, k: MercatorAConversion(0, lon, 0, 0, k),
}


def _applies(projection: str, lat: float) -> bool:
    """Whether a projection exists at a latitude (degrees) at all."""
    if projection == "Lambert conformal conic":
        return 1 < abs(lat) < 88
    return projection != "Mercator" or abs(lat) < 30


def _centred(geodetic: pyproj.CRS, lon: np.ndarray, lat: np.ndarray) -> Iterator[CrsChoice]:
    lon0, lat0 = (float(np.degrees(angle)) for angle in _mean_direction(lon, lat))
    # the middle of the bounding box balances the two sides better than the mean of the vertices
    around = _projected(geodetic, "Lambert azimuthal equal-area", lat0, lon0, 1.0)
    radian = geodetic.axis_info[0].unit_conversion_factor
    step = pyproj.Transformer.from_crs(geodetic, around, always_xy=True)
    x, y = (np.asarray(v) for v in step.transform(lon / radian, lat / radian))
    if np.isfinite(x).all() and np.isfinite(y).all():
        middle = step.transform((x.min() + x.max()) / 2, (y.min() + y.max()) / 2, direction="INVERSE")
        lon0, lat0 = (float(np.degrees(v * radian)) for v in middle)
    lon0, lat0 = round(lon0, 4), round(lat0, 4)
    for projection in _MAKERS:
        if not _applies(projection, lat0):
            continue
        crs = _projected(geodetic, projection, lat0, lon0, 1.0)
        errors = scale_errors(crs, lon, lat)
        if projection != "Lambert azimuthal equal-area" and 1e-5 < errors.distance < 1:
            # a scale between the smallest and the largest halves the error
            k = round(2 / (errors.smallest + errors.largest), 6)
            crs = _projected(geodetic, projection, lat0, lon0, k)
            errors = scale_errors(crs, lon, lat)
        yield CrsChoice(crs, errors, f"a {projection} projection centred on the study area")


def _projected(geodetic: pyproj.CRS, projection: str, lat0: float, lon0: float, k: float) -> pyproj.CRS:
    place = f"{abs(lat0):g}°{'N' if lat0 >= 0 else 'S'} {abs(lon0):g}°{'E' if lon0 >= 0 else 'W'}"
    scale = "" if k == 1 else f", scale {k:g}"
    return ProjectedCRS(
        conversion=_MAKERS[projection](lat0, lon0, k),
        name=f"{geodetic.name} / {projection} at {place}{scale}",
        cartesian_cs=Cartesian2DCS(axis=Cartesian2DCSAxis.EASTING_NORTHING),
        geodetic_crs=geodetic,
    )


@dataclass(frozen=True)
class DatumStep:
    """How coordinates get from one CRS to another."""

    transformer: pyproj.Transformer
    description: str | None  # None if both have the same datum
    accuracy_m: float | None  # None if nobody stated it
    grid_missing: bool = False  # a better operation needs a grid file that is not installed


def datum_step(
    source: pyproj.CRS, target: pyproj.CRS, centre: tuple[float, float] | None
) -> DatumStep | None:
    """The best known way from one CRS to another near a place; None if they are the same.

    Raises
    ------
    InputError
        If there is none (a local plane, or another celestial body).
    """
    if source.equals(target, ignore_axis_order=True):
        return None
    problem = (
        f"coordinates in {label(source)} cannot be brought to {label(target)}: there is no known operation "
        "between the two; give both layers the same CRS"
    )
    if is_local(source) or is_local(target):
        if not (is_local(source) and is_local(target) and in_metres(source).equals(target)):
            raise InputError(problem)
        metre = source.axis_info[0].unit_conversion_factor
        scaling = pyproj.Transformer.from_pipeline(f"+proj=affine +s11={metre!r} +s22={metre!r}")
        return DatumStep(scaling, None, 0.0)
    same_datum = geodetic_of(source).equals(geodetic_of(target), ignore_axis_order=True)
    around = None
    if centre is not None:
        lon, lat = (centre[0] + 180) % 360 - 180, centre[1]
        around = AreaOfInterest(lon, lat, lon, lat)
    try:
        if same_datum:
            return DatumStep(pyproj.Transformer.from_crs(source, target, always_xy=True), None, 0.0)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", UserWarning)  # on missing grids, which the audit reports
            group = pyproj.transformer.TransformerGroup(
                source,
                target,
                always_xy=True,
                area_of_interest=around,  # type: ignore[arg-type]
            )
        step = group.transformers[0]
    except (ProjError, IndexError) as error:
        raise InputError(problem) from error
    accuracy = step.accuracy if step.accuracy is not None and step.accuracy >= 0 else None
    operations = [part for part in (step.description or "").split(" + ") if "axis order change" not in part]
    return DatumStep(step, " + ".join(operations), accuracy, not group.best_available)
