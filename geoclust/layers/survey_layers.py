"""From the layers of a survey to points and study area in one metric CRS."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import TypedDict, Unpack

import geopandas as gpd
import numpy as np
import pandas as pd
import pyproj
import shapely

from geoclust.errors import InputError, UsageError
from geoclust.layers import crs as systems
from geoclust.layers import points as recorded
from geoclust.layers import polygons as shapes
from geoclust.layers.audit import Audit
from geoclust.layers.lattice import Lattice, find_lattices
from geoclust.layers.sources import Layer, PathLike, read_layer


@dataclass(frozen=True)
class SurveyLayers:
    """A survey as read: everything in one metric CRS, and how it got there.

    Attributes
    ----------
    xy
        (n, 2) float64 kept points, easting and northing, m.
    polygon
        Study area in the metric CRS, valid, overlaps united.
    crs
        The metric CRS.
    attributes
        The kept points with their original columns, rows 0..n-1 as in `xy`, geometry in
        the CRS of the input points.
    audit
        Counts, repairs and choices.
    """

    xy: np.ndarray
    polygon: shapely.MultiPolygon
    crs: pyproj.CRS
    attributes: gpd.GeoDataFrame
    audit: Audit


@dataclass(frozen=True)
class _Area:
    """The study area in its own CRS."""

    layer: Layer
    parts: shapes.Parts
    polygon: shapely.MultiPolygon
    polygons_read: int
    repair: shapes.Repair
    overlap_share: float
    unwrapped: bool


class Reading(TypedDict, total=False):
    """How layers are read; each as in `read_survey_layers`."""

    points_layer: str | None
    area_layer: str | None
    crs: object | None
    x_column: str | None
    y_column: str | None
    metric_crs: object | None
    repair: bool


def read_survey_layers(
    points: PathLike,
    area: PathLike,
    *,
    points_layer: str | None = None,
    area_layer: str | None = None,
    crs: object | None = None,
    x_column: str | None = None,
    y_column: str | None = None,
    metric_crs: object | None = None,
    repair: bool = False,
    plot: tuple[str, str] | None = None,
) -> SurveyLayers:
    """Read points and study area, bring them together in a metric CRS, and audit them.

    Parameters
    ----------
    points, area
        Files that GDAL opens as vector layers, GeoParquet; for points also a table
        (.csv, .tsv, .txt) with coordinate columns. Both may be the same file.
    points_layer, area_layer
        Names of the layers. Without one, the only layer of the file that holds points
        (polygons) is taken, and the audit says so.
    crs
        CRS of a table, or of a layer that has none; "local" for plot coordinates in metres.
    x_column, y_column
        Coordinate columns of a table.
    metric_crs
        CRS to measure in; one is chosen if it is left out.
    repair
        Repair invalid polygons even if that moves more than 0.1 % of the area.
    plot
        Column and value: only features that have it are taken, from both layers. A plot
        may hold one point or none; what is lost of a whole survey is not asked for.

    Returns
    -------
    SurveyLayers

    Raises
    ------
    InputError
        If the layers cannot be used, in one sentence that says why and what to do.
    UsageError
        If an option is wrong.
    """
    point_layer = read_layer(
        points, "points", layer=points_layer, layer_option="points_layer", crs=crs, x_column=x_column,
        y_column=y_column,
    )  # fmt: skip
    if plot is not None:
        point_layer = of_plot(point_layer, plot)
    area_as_read = _read_area(area, area_layer, crs, repair, plot)
    _require_used(crs, point_layer, area_as_read.layer)
    taken = recorded.take_points(point_layer.frame.geometry.to_numpy())
    if len(taken.xy) == 0 and plot is None:
        raise InputError(f"{point_layer.record.file} holds no point with finite coordinates")
    if len(taken.xy):
        # a stray point is dropped later on; here the usual one has to make sense
        middle = np.median(taken.xy, axis=0, keepdims=True)
        systems.require_plausible(middle, point_layer.crs, f"the points layer {_place(point_layer)}")

    own = area_as_read.layer.crs
    choice = systems.choose_metric_crs(area_as_read.polygon, own, point_layer.crs, metric_crs)
    centre = systems.centre_of(area_as_read.polygon, own)
    area_step = systems.datum_step(own, choice.crs, centre)
    points_step = systems.datum_step(point_layer.crs, choice.crs, centre)
    polygon, vertices_added, repair_there = _carry_area(area_as_read, area_step, repair)

    xy, reached = _carry_points(taken.xy, points_step)
    feature = taken.feature[reached]
    placed = recorded.place_points(xy, polygon)
    kept = placed.kept
    if plot is None:
        _require_points(xy, kept, polygon, taken.xy, points_step, point_layer, area_as_read.layer)

    lattices = find_lattices(taken.xy, geographic=bool(point_layer.crs.is_geographic))
    kept_xy = np.ascontiguousarray(xy[kept], dtype=float)
    ties, tied_places = recorded.coincident(kept_xy)
    operation = next(
        (step for step in (points_step, area_step) if step is not None and step.description), None
    )
    vertices = shapely.get_num_coordinates(polygon) - len(shapely.get_rings(shapely.get_parts(polygon)))
    parts = shapely.get_parts(polygon)
    audit = Audit(
        points_source=point_layer.record,
        area_source=area_as_read.layer.record,
        points_read=len(xy),
        null_geometries=taken.null,
        empty_geometries=taken.empty,
        other_geometries=taken.other,
        nonfinite_points=taken.nonfinite + int((~reached).sum()),
        multipoints_exploded=taken.multipoints,
        heights_dropped=taken.z_dropped,
        points_kept=len(kept_xy),
        points_outside=int((~kept).sum()),
        points_on_boundary=int(placed.on_boundary.sum()),
        furthest_outside_m=placed.furthest,
        boundary_tolerance_m=placed.tolerance,
        coincident_points=ties,
        coincident_places=tied_places,
        lattices=lattices,
        lattice_unit=point_layer.crs.axis_info[0].unit_name,
        lattice_m=_lattice_in_metres(lattices, taken.xy[reached][kept], points_step),
        median_nearest_m=recorded.median_nearest(kept_xy),
        polygons_read=area_as_read.polygons_read,
        area_null_geometries=area_as_read.parts.null + area_as_read.parts.empty,
        area_other_geometries=area_as_read.parts.other,
        flat_polygons=area_as_read.repair.flat,
        repaired_polygons=area_as_read.repair.polygons + repair_there.polygons,
        repair_change=area_as_read.repair.change + repair_there.change,
        overlap_m2=area_as_read.overlap_share * polygon.area,
        crosses_antimeridian=area_as_read.unwrapped,
        vertices_added=vertices_added,
        parts=len(parts),
        holes=int(shapely.get_num_interior_rings(parts).sum()),
        vertices=int(vertices),
        area_m2=float(polygon.area),
        perimeter_m=float(polygon.length),
        metric_crs=systems.label(choice.crs),
        metric_crs_wkt=choice.crs.to_wkt(),
        metric_crs_reason=choice.reason,
        scale_error_distance=None if choice.errors is None else choice.errors.distance,
        scale_error_area=None if choice.errors is None else choice.errors.area,
        points_reprojected=points_step is not None,
        area_reprojected=area_step is not None,
        datum_operation=None if operation is None else operation.description,
        datum_accuracy_m=None if operation is None else operation.accuracy_m,
        datum_grid_missing=operation is not None and operation.grid_missing,
        outside_area_of_use=centre is not None and systems.outside_area_of_use(own, *centre),
        notes=_notes(point_layer, area_as_read),
    )
    attributes = point_layer.frame.iloc[feature[kept]].reset_index(drop=True)
    flat_points = gpd.GeoSeries(shapely.points(taken.xy[reached][kept]), crs=point_layer.crs)
    return SurveyLayers(kept_xy, polygon, choice.crs, attributes.set_geometry(flat_points), audit)


def audit_survey(points: PathLike, area: PathLike, **reading: Unpack[Reading]) -> Audit:
    """The data audit alone; parameters and errors of `read_survey_layers`."""
    return read_survey_layers(points, area, **reading).audit


def read_polygons(
    path: PathLike,
    *,
    crs: object,
    layer: str | None = None,
    stated_crs: object | None = None,
    repair: bool = False,
) -> gpd.GeoDataFrame:
    """Read polygons with their attributes, such as zones or parts that were not walked.

    Parameters
    ----------
    path
        File that GDAL opens as vector layer, or GeoParquet.
    crs
        The metric CRS that they are wanted in.
    layer
        Name of the layer; without one, the only layer of the file that holds polygons.
    stated_crs
        CRS of a layer that has none.
    repair
        Repair invalid polygons even if that moves more than 0.1 % of the area of a feature.

    Returns
    -------
    GeoDataFrame
        One row a feature with its original columns, valid polygons or multipolygons in
        `crs`; `.attrs["source"]` says where it came from, `.attrs["warnings"]` what was
        left out or repaired, as sentences.

    Raises
    ------
    InputError, UsageError
        As for a study area, but every feature is held to the limit by itself.
    """
    target = systems.parse_crs(crs)
    read = read_layer(path, "polygons", layer=layer, crs=stated_crs)
    if stated_crs is not None and not read.record.crs_stated:
        _require_same(stated_crs, read)
    what = f"the polygon layer {_place(read)}"
    parts, repair_made, _ = _fit_parts(read, what, repair, each_feature=True)
    step = systems.datum_step(
        read.crs, target, systems.centre_of(shapely.union_all(parts.polygons), read.crs)
    )
    carried, _ = shapes.carry_over(parts.polygons, step, what)
    there, repair_there = shapes.mend(
        dataclasses.replace(parts, polygons=carried), what, allow=repair, each_feature=True
    )
    rows = np.unique(there.feature)
    geometries = [shapely.union_all(there.polygons[there.feature == row]) for row in rows]
    frame = read.frame.iloc[rows].reset_index(drop=True)
    frame = frame.set_geometry(gpd.GeoSeries(geometries, crs=target))
    flat = len(read.frame) - len(rows) - parts.null - parts.empty - parts.other
    left_out = [
        (parts.null + parts.empty, "features without geometry were left out"),
        (parts.other, "features with points or lines instead of polygons were left out"),
        (flat, "features without area were left out"),
        (repair_made.polygons + repair_there.polygons, "invalid polygons were repaired"),
    ]
    frame.attrs["source"] = dataclasses.asdict(read.record)
    frame.attrs["warnings"] = [f"{read.record.file}: {count:,} {text}" for count, text in left_out if count]
    return frame


def _place(layer: Layer) -> str:
    return (
        layer.record.file if layer.record.layer is None else f"'{layer.record.layer}' of {layer.record.file}"
    )


def _fit_parts(
    layer: Layer, what: str, repair: bool, *, each_feature: bool = False
) -> tuple[shapes.Parts, shapes.Repair, bool]:
    """Valid single polygons of a layer, in its own CRS."""
    parts = shapes.take_apart(layer.frame.geometry.to_numpy())
    if len(parts.polygons) == 0:
        raise InputError(f"{what} holds no polygon that is not empty: check that the layer is the right one")
    finite = shapely.get_coordinates(parts.polygons)
    systems.require_plausible(finite[np.isfinite(finite).all(axis=1)], layer.crs, what)
    parts, unwrapped = shapes.unwrap_longitudes(parts, layer.crs, what)
    parts, repaired = shapes.mend(parts, what, allow=repair, each_feature=each_feature)
    return parts, repaired, unwrapped


def of_plot(layer: Layer, plot: tuple[str, str]) -> Layer:
    """The features of a layer that have this value in this column."""
    column, value = plot
    return dataclasses.replace(layer, frame=layer.frame[plot_names(layer, column) == value])


def plot_names(layer: Layer, column: str) -> pd.Series:
    """Names of the plots of the features of a layer, as text.

    Raises
    ------
    InputError
        If there is no such column, or a feature has no value in it.
    """
    if column not in layer.frame or column == layer.frame.geometry.name:
        columns = ", ".join(str(c) for c in layer.frame.columns if c != layer.frame.geometry.name)
        raise InputError(f"{_place(layer)} has no column {column}; it has {columns or 'none'}")
    values = layer.frame[column]
    if values.isna().any():
        raise InputError(
            f"{int(values.isna().sum())} features of {_place(layer)} have no value in the column {column}, "
            "which says the plot of each: fill it in"
        )
    if pd.api.types.is_float_dtype(values) and (values % 1 == 0).all():
        values = values.astype(int)
    return values.astype(str)


def _read_area(
    path: PathLike, layer: str | None, crs: object | None, repair: bool, plot: tuple[str, str] | None
) -> _Area:
    read = read_layer(path, "polygons", layer=layer, layer_option="area_layer", crs=crs)
    if plot is not None:
        read = of_plot(read, plot)
    polygons_read = len(shapes.take_apart(read.frame.geometry.to_numpy()).polygons)
    parts, repaired, unwrapped = _fit_parts(read, f"the study area {_place(read)}", repair)
    polygon, overlap = shapes.unite(parts)
    return _Area(read, parts, polygon, polygons_read, repaired, overlap / polygon.area, unwrapped)


def _carry_area(
    area: _Area, step: systems.DatumStep | None, repair: bool
) -> tuple[shapely.MultiPolygon, int, shapes.Repair]:
    """The study area in the metric CRS, valid there as well."""
    what = f"the study area {_place(area.layer)}"
    carried, added = shapes.carry_over(shapely.get_parts(area.polygon), step, what)
    as_parts = dataclasses.replace(area.parts, polygons=carried, feature=np.zeros(len(carried), dtype=int))
    whole = shapely.MultiPolygon(list(carried))
    if shapely.is_valid(whole):
        return whole, added, shapes.Repair(0, 0.0, 0)
    mended, made = shapes.mend(as_parts, what, allow=repair)
    return shapes.unite(mended)[0], added, made


def _carry_points(xy: np.ndarray, step: systems.DatumStep | None) -> tuple[np.ndarray, np.ndarray]:
    """Points in the metric CRS, and which of them have a place there."""
    if step is None:
        return xy, np.ones(len(xy), dtype=bool)
    moved = np.column_stack(step.transformer.transform(xy[:, 0], xy[:, 1]))
    reached = np.isfinite(moved).all(axis=1)
    return moved[reached], reached


def _require_used(stated: object | None, points: Layer, area: Layer) -> None:
    """A stated CRS must be needed by a layer, or agree with what the layers say."""
    if stated is None or points.record.crs_stated or area.record.crs_stated:
        return
    _require_same(stated, points)
    _require_same(stated, area)


def _require_same(stated: object, layer: Layer) -> None:
    if not systems.parse_crs(stated).equals(layer.crs, ignore_axis_order=True):
        raise UsageError(
            f"crs is for tables and layers without a CRS, but {_place(layer)} has one of its own, "
            f"{layer.record.crs}: leave crs out, or correct the layer"
        )


def _require_points(
    xy: np.ndarray,
    kept: np.ndarray,
    polygon: shapely.MultiPolygon,
    as_recorded: np.ndarray,
    step: systems.DatumStep | None,
    points: Layer,
    area: Layer,
) -> None:
    """Refuse what no distance can be measured in."""
    count = int(kept.sum())
    if count == 0:
        swapped, _ = _carry_points(as_recorded[:, ::-1], step)
        mixed_up = shapely.contains_xy(polygon, swapped[:, 0], swapped[:, 1]).any()
        hint = (
            "x and y seem to have been exchanged"
            if mixed_up
            else f"check the layers and their CRS (points {points.record.crs}, study area {area.record.crs})"
        )
        raise InputError(
            f"none of the {len(as_recorded):,} points of {_place(points)} lies in the study area "
            f"{_place(area)}: {hint}"
        )
    if count == 1:
        raise InputError(
            f"only one point of {_place(points)} lies in the study area {_place(area)}: clusters need "
            "several; check that the layers belong together"
        )
    if len(np.unique(xy[kept], axis=0)) == 1:
        raise InputError(
            f"all {count:,} points of {_place(points)} in the study area are at the same place: check that "
            "their coordinates were recorded one by one"
        )


def _lattice_in_metres(
    lattices: tuple[Lattice, ...], points: np.ndarray, step: systems.DatumStep | None
) -> float | None:
    """The widest lattice spacing that at least half of the points share, in metres at their middle."""
    lengths: list[float] = []
    if len(points) == 0:
        return None
    middle = np.median(points, axis=0)
    for lattice in lattices:
        if lattice.share < 0.5:
            continue
        shift = np.array([lattice.spacing, 0.0] if lattice.axis == "x" else [0.0, lattice.spacing])
        ends = np.array([middle - shift / 2, middle + shift / 2])
        if step is not None:
            ends = np.column_stack(step.transformer.transform(ends[:, 0], ends[:, 1]))
        lengths.append(float(np.hypot(*(ends[1] - ends[0]))))
    return max(lengths, default=None)


def _notes(points: Layer, area: _Area) -> tuple[str, ...]:
    notes = list(dict.fromkeys([*points.notes, *area.layer.notes]))
    if area.unwrapped:
        notes.append("the study area crosses the antimeridian: its parts were joined there")
    return tuple(notes)
