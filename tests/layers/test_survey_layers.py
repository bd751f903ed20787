"""Surveys read from files of every kind, brought together and audited."""

import hashlib
import importlib.util
import json
import warnings
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pyogrio
import pyproj
import pytest
import shapely

from geoclust.errors import InputError
from geoclust.layers.crs import parse_crs
from geoclust.layers.survey_layers import audit_survey, read_polygons, read_survey_layers

DATA = Path(__file__).parents[1] / "data"
RESERVE = shapely.Polygon([(8.90, 48.70), (8.93, 48.70), (8.935, 48.72), (8.90, 48.72)],
                          [[(8.91, 48.705), (8.913, 48.705), (8.913, 48.708)]])  # fmt: skip


def mounds(count=60, seed=1):
    rng = np.random.default_rng(seed)
    lonlat = rng.uniform([8.90, 48.70], [8.93, 48.72], (4 * count, 2))
    lonlat = lonlat[shapely.contains_xy(RESERVE, *lonlat.T)][:count]
    return gpd.GeoDataFrame(
        {"mound": np.arange(count), "height_m": rng.random(count).round(2)},
        geometry=shapely.points(lonlat),
        crs=4326,
    )


def reserve():
    return gpd.GeoDataFrame({"parcel": ["all"]}, geometry=[RESERVE], crs=4326)


def write(frame, path, layer=None, **kwargs):
    pyogrio.write_dataframe(frame, path, layer=layer, **kwargs)
    return path


@pytest.fixture
def package(tmp_path):
    path = tmp_path / "survey.gpkg"
    write(mounds(), path, "mounds")
    return write(reserve(), path, "reserve", append=True)


def lux(**kwargs):
    return read_survey_layers(
        DATA / "lux_places_epsg4326.csv",
        DATA / "lux_epsg4326.gpkg",
        **{"crs": "EPSG:4326", "x_column": "lon", "y_column": "lat", **kwargs},
    )


def test_luxembourg():
    survey = lux()
    audit = survey.audit
    # tests/data/README.md: 138 places, 133 inside, 12 cantons
    assert (audit.points_read, audit.points_kept, audit.points_outside) == (138, 133, 5)
    assert (audit.polygons_read, audit.parts, audit.holes) == (12, 1, 0)
    # 2,586 km² (CIA World Factbook, from memory); the outline is generalised
    assert audit.area_m2 == pytest.approx(2.586e9, rel=0.01)
    assert survey.crs.to_epsg() == 32632
    assert (audit.points_reprojected, audit.area_reprojected) == (True, True)
    assert audit.scale_error_distance < 0.0004
    assert audit.lattice_m == pytest.approx(30.9, abs=0.1)  # a second of latitude
    assert survey.xy.shape == (133, 2)
    assert survey.xy.dtype == np.float64
    assert survey.attributes.crs.to_epsg() == 4326
    assert list(survey.attributes.columns) == ["lon", "lat", "name", "geometry"]
    x, y = pyproj.Transformer.from_crs(4326, 32632, always_xy=True).transform(
        survey.attributes["lon"], survey.attributes["lat"]
    )
    np.testing.assert_allclose(survey.xy, np.column_stack([x, y]), atol=1e-6)


def test_finland():
    audit = audit_survey(
        DATA / "finland_places_epsg3067.csv", DATA / "finland_lakes_epsg3067.gpkg", crs=3067, x_column="x",
        y_column="y",
    )  # fmt: skip
    # tests/data/README.md: 381 places, 341 inside, 40 outside by up to 2.9 km; 812 parts, 104
    # holes, 8,214 vertices with the closing one of each ring
    assert (audit.points_read, audit.points_kept, audit.points_outside) == (381, 341, 40)
    assert audit.furthest_outside_m == pytest.approx(2900, abs=50)
    assert (audit.parts, audit.holes) == (812, 104)
    assert audit.vertices - audit.vertices_added + audit.parts + audit.holes == 8214
    assert audit.scale_error_distance < 0.001
    assert audit.scale_error_area < 0.001
    # the 341 are those that the table marks as inside
    inside = pd.read_csv(DATA / "finland_places_epsg3067.csv")["inside"]
    assert inside.sum() == 341


def test_new_york_in_feet():
    survey = read_survey_layers(
        DATA / "nyc_zip_centres_epsg2263.csv", DATA / "nybb_epsg2263.gpkg", crs="EPSG:2263", x_column="x",
        y_column="y",
    )  # fmt: skip
    audit = survey.audit
    # tests/data/README.md: 332 points with 100 ties, 106 parts
    assert (audit.points_read, audit.coincident_points, audit.polygons_read) == (332, 100, 106)
    assert survey.crs.to_epsg() == 32118
    # the layer's own column of areas, square feet
    areas = pyogrio.read_dataframe(DATA / "nybb_epsg2263.gpkg")["Shape_Area"]
    assert audit.area_m2 == pytest.approx(areas.sum() * (1200 / 3937) ** 2, rel=1e-6)
    assert audit.lattice_unit == "US survey foot"
    assert audit.lattice_m == pytest.approx(0.1 * 1200 / 3937, rel=1e-6)
    assert any("100 points share a place" in warning for warning in audit.warnings)


def test_mars():
    survey = read_survey_layers(
        DATA / "mars_pickering_craters.csv",
        DATA / "mars_pickering_area.gpkg",
        crs=(DATA / "mars_pickering_crs.txt").read_text(),
        x_column="x",
        y_column="y",
    )
    assert (survey.audit.points_kept, survey.audit.holes) == (1707, 1)
    assert survey.crs.ellipsoid.semi_major_metre == 3396190
    assert (survey.audit.points_reprojected, survey.audit.area_reprojected) == (False, False)
    assert survey.audit.lattices == ()
    assert survey.audit.warnings == []


def test_brambles_in_a_local_plane(tmp_path):
    table = pd.read_csv(DATA / "brambles.csv")
    table[["x", "y"]] *= 9
    table.to_csv(tmp_path / "brambles.csv", index=False)
    plot = gpd.GeoDataFrame(geometry=[shapely.box(0, 0, 9, 9)], crs=parse_crs("local"))
    survey = read_survey_layers(
        tmp_path / "brambles.csv",
        write(plot, tmp_path / "plot.gpkg"),
        crs="local",
        x_column="x",
        y_column="y",
    )
    # tests/data/README.md: 823 canes, 7 ties, recorded to 0.001 of 9 m
    assert (survey.audit.points_kept, survey.audit.coincident_points) == (823, 7)
    assert survey.audit.lattice_m == pytest.approx(0.009)
    assert survey.audit.scale_error_distance is None
    assert survey.audit.area_m2 == 81.0


@pytest.mark.parametrize(
    ("suffix", "driver"),
    [("gpkg", None), ("shp", None), ("geojson", None), ("fgb", None), ("gml", "GML"), ("kml", "KML")],
)
def test_every_format_gives_the_same_survey(tmp_path, package, suffix, driver):
    reference = read_survey_layers(package, package, points_layer="mounds", area_layer="reserve")
    if driver is not None and driver not in pyogrio.list_drivers(write=True):
        pytest.fail(f"this build of GDAL has no {driver}")
    points = write(mounds(), tmp_path / f"points.{suffix}", **({"driver": driver} if driver else {}))
    area = write(reserve(), tmp_path / f"area.{suffix}", **({"driver": driver} if driver else {}))
    survey = read_survey_layers(points, area)
    assert survey.crs.to_epsg() == 32632
    np.testing.assert_allclose(np.sort(survey.xy, axis=0), np.sort(reference.xy, axis=0), atol=0.01)
    assert survey.audit.area_m2 == pytest.approx(reference.audit.area_m2, rel=1e-5)
    assert survey.audit.holes == 1
    assert (survey.audit.points_source.file, survey.audit.area_source.file) == (points.name, area.name)
    assert len(survey.attributes) == len(survey.xy)


def test_gpx_waypoints(tmp_path, package):
    waypoints = mounds()[["geometry"]].assign(name=[f"m{k}" for k in range(60)])
    points = write(waypoints, tmp_path / "walk.gpx", "waypoints", driver="GPX")
    survey = read_survey_layers(points, package)
    assert survey.audit.points_kept == 60
    assert survey.audit.points_source.layer == "waypoints"
    assert any("'waypoints' of walk.gpx was taken" in note for note in survey.audit.notes)
    assert survey.attributes["name"].tolist() == waypoints["name"].tolist()


def test_geoparquet(tmp_path, package):
    mounds().to_parquet(tmp_path / "mounds.parquet")
    audit = audit_survey(tmp_path / "mounds.parquet", package, area_layer="reserve")
    assert (audit.points_kept, audit.points_source.driver) == (60, "GeoParquet")


def test_geoparquet_without_pyarrow(tmp_path, package, monkeypatch):
    (tmp_path / "mounds.parquet").write_bytes(b"PAR1")
    known = importlib.util.find_spec
    monkeypatch.setattr(importlib.util, "find_spec", lambda name: None if name == "pyarrow" else known(name))
    with pytest.raises(InputError, match="needs the package pyarrow"):
        audit_survey(tmp_path / "mounds.parquet", package)


@pytest.mark.parametrize("separator", [",", ";", "\t", "|"])
def test_tables_with_any_separator(tmp_path, package, separator):
    frame = mounds()
    table = pd.DataFrame({"east": frame.geometry.x, "north": frame.geometry.y, "remark": "a,b; c"})
    table.to_csv(tmp_path / "t.csv", sep=separator, index=False, encoding="utf-8-sig")
    survey = read_survey_layers(tmp_path / "t.csv", package, crs=4326, x_column="east", y_column="north")
    assert survey.audit.points_kept == 60
    assert survey.attributes["remark"].eq("a,b; c").all()


def test_table_with_gaps(tmp_path, package):
    table = pd.DataFrame({"x": mounds().geometry.x, "y": mounds().geometry.y})
    table.loc[3, "x"] = np.nan
    table.loc[5, "y"] = np.inf
    table.loc[7, "y"] = 4_871_000.0  # no latitude
    table.to_csv(tmp_path / "t.csv", index=False)
    audit = audit_survey(tmp_path / "t.csv", package, crs=4326, x_column="x", y_column="y")
    assert (audit.null_geometries, audit.nonfinite_points, audit.points_kept) == (1, 2, 57)
    assert len([warning for warning in audit.warnings if "left out" in warning]) == 2


def test_layer_found_by_its_geometry(package):
    audit = audit_survey(package, package)
    assert (audit.points_source.layer, audit.area_source.layer) == ("mounds", "reserve")
    assert len(audit.notes) == 2


def test_multipoints_heights_and_gaps(tmp_path, package):
    lonlat = np.column_stack([mounds().geometry.x, mounds().geometry.y])
    frame = gpd.GeoDataFrame(
        {"note": ["three", "high", "none", "one"]},
        geometry=[
            shapely.MultiPoint(lonlat[:3]),
            shapely.Point(*lonlat[3], 412.0),
            None,
            shapely.Point(lonlat[4]),
        ],
        crs=4326,
    )
    survey = read_survey_layers(
        write(frame, tmp_path / "mixed.gpkg", geometry_type="Unknown"), package, area_layer="reserve"
    )
    audit = survey.audit
    assert (audit.points_kept, audit.null_geometries, audit.multipoints_exploded) == (5, 1, 1)
    assert audit.heights_dropped >= 1
    assert survey.attributes["note"].tolist() == ["three", "three", "three", "high", "one"]
    assert not survey.attributes.has_z.any()
    assert survey.attributes.index.tolist() == [0, 1, 2, 3, 4]


def test_points_on_the_boundary_are_kept_and_coincident_ones_counted(tmp_path):
    area = gpd.GeoDataFrame(geometry=[shapely.box(500000, 5400000, 501000, 5401000)], crs=25832)
    xy = [(500000, 5400500), (500500, 5401000), (500100, 5400100), (500100, 5400100), (500100, 5400100),
          (500700, 5400200), (501000.5, 5400300)]  # fmt: skip
    points = gpd.GeoDataFrame(geometry=shapely.points(xy), crs=25832)
    audit = audit_survey(write(points, tmp_path / "p.gpkg"), write(area, tmp_path / "a.gpkg"))
    assert (audit.points_kept, audit.points_on_boundary, audit.points_outside) == (6, 2, 1)
    assert (audit.coincident_points, audit.coincident_places) == (2, 1)
    assert audit.furthest_outside_m == pytest.approx(0.5)
    assert audit.boundary_tolerance_m == pytest.approx(0.001)


def test_overlapping_parcels_are_united_and_reported(tmp_path, package):
    west, east = shapely.box(8.90, 48.70, 8.92, 48.72), shapely.box(8.91, 48.70, 8.93, 48.72)
    parcels = gpd.GeoDataFrame({"parcel": [1, 2]}, geometry=[west, east], crs=4326)
    audit = audit_survey(package, write(parcels, tmp_path / "parcels.gpkg"), points_layer="mounds")
    assert (audit.polygons_read, audit.parts) == (2, 1)
    geodesic = abs(pyproj.Geod(ellps="WGS84").geometry_area_perimeter(west.intersection(east))[0])
    assert audit.overlap_m2 == pytest.approx(geodesic, rel=0.002)
    assert any("overlap" in warning for warning in audit.warnings)


def test_most_points_outside_is_a_strong_warning(tmp_path, package):
    small = gpd.GeoDataFrame(geometry=[shapely.box(8.90, 48.70, 8.91, 48.71)], crs=4326)
    audit = audit_survey(package, write(small, tmp_path / "small.gpkg"), points_layer="mounds")
    assert audit.points_outside > 30
    assert any("more than half" in warning for warning in audit.warnings)


def test_coarse_rounding_is_a_warning(tmp_path, package):
    frame = mounds()
    frame["geometry"] = shapely.points(np.round(np.column_stack([frame.geometry.x, frame.geometry.y]), 3))
    audit = audit_survey(write(frame, tmp_path / "p.gpkg"), package)
    assert audit.lattice_m == pytest.approx(111.2, abs=0.2)  # 0.001° of latitude at 48.7° N
    assert any("rounded to a lattice of 111 m" in warning for warning in audit.warnings)
    assert "0.001 degree in x and y" in audit.lattice_text()


def test_different_crs_are_brought_together(tmp_path, package):
    points = write(mounds().to_crs(3857), tmp_path / "p.gpkg")
    area = write(reserve().to_crs(2154), tmp_path / "a.gpkg")
    survey = read_survey_layers(points, area)
    assert survey.audit.points_kept == 60
    assert survey.attributes.crs.to_epsg() == 3857
    # Lambert-93 (2154) is not made for 9° E but its scale is within 0.1 % or it is replaced
    assert survey.audit.scale_error_distance <= 0.001
    reference = read_survey_layers(package, package, points_layer="mounds", area_layer="reserve")
    assert survey.audit.area_ha == pytest.approx(reference.audit.area_ha, rel=0.002)


def test_a_rough_change_of_datum_is_a_warning(tmp_path):
    box = shapely.box(-76.1, 40.0, -76.0, 40.1)
    lonlat = np.random.default_rng(1).uniform([-76.09, 40.01], [-76.01, 40.09], (30, 2))
    points = write(gpd.GeoDataFrame(geometry=shapely.points(lonlat), crs=4326), tmp_path / "p.gpkg")
    area = write(gpd.GeoDataFrame(geometry=[box], crs=4267), tmp_path / "a.gpkg")
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        audit = audit_survey(points, area)
    # without grids, EPSG states 5 to 10 m for NAD27 to WGS 84
    assert audit.datum_accuracy_m is None or audit.datum_accuracy_m > 2
    assert any("change of datum" in warning for warning in audit.warnings)
    assert "axis order" not in audit.datum_operation


def test_a_small_defect_is_repaired_and_reported(tmp_path, package):
    # a spike that crosses the boundary and comes back
    ring = [(8.90, 48.70), (8.93, 48.70), (8.935, 48.72), (8.915, 48.72), (8.91505, 48.7201),
            (8.915, 48.7201), (8.91504, 48.72), (8.90, 48.72)]  # fmt: skip
    frame = gpd.GeoDataFrame(geometry=[shapely.Polygon(ring)], crs=4326)
    assert not frame.is_valid.all()
    audit = audit_survey(package, write(frame, tmp_path / "a.gpkg"), points_layer="mounds")
    assert audit.repaired_polygons == 1
    assert 0 < audit.repair_change < 0.001
    assert any("repaired" in warning for warning in audit.warnings)


def test_a_bow_tie_is_repaired_on_request(tmp_path, package):
    bow = shapely.Polygon([(8.90, 48.70), (8.93, 48.72), (8.93, 48.70), (8.90, 48.72)])
    area = write(gpd.GeoDataFrame(geometry=[bow], crs=4326), tmp_path / "bow.gpkg")
    with pytest.raises(InputError, match="Self-intersection"):
        audit_survey(package, area, points_layer="mounds")
    survey = read_survey_layers(package, area, points_layer="mounds", repair=True)
    assert survey.polygon.is_valid
    assert survey.audit.parts == 2
    assert any("look at the result" in warning for warning in survey.audit.warnings)


def test_study_area_cut_at_the_antimeridian(tmp_path):
    sides = [shapely.box(179.9, -17.0, 180.0, -16.9), shapely.box(-180.0, -17.0, -179.9, -16.9)]
    area = write(gpd.GeoDataFrame(geometry=sides, crs=4326), tmp_path / "a.gpkg")
    lon = np.r_[np.linspace(179.91, 179.99, 5), np.linspace(-179.99, -179.91, 5)]
    points = gpd.GeoDataFrame(geometry=shapely.points(lon, np.full(10, -16.95)), crs=4326)
    survey = read_survey_layers(write(points, tmp_path / "p.gpkg"), area)
    assert survey.audit.crosses_antimeridian
    assert (survey.audit.points_kept, survey.audit.parts) == (10, 1)
    geodesic = sum(abs(pyproj.Geod(ellps="WGS84").geometry_area_perimeter(side)[0]) for side in sides)
    assert survey.audit.area_m2 == pytest.approx(geodesic, rel=0.002)
    assert np.ptp(survey.xy[:, 0]) == pytest.approx(0.18 * 106_500, rel=0.01)  # km a degree at 17° S


def test_audit_as_json_and_lines(package):
    audit = audit_survey(package, package, points_layer="mounds", area_layer="reserve")
    fields = json.loads(json.dumps(audit.to_dict(), allow_nan=False))
    assert fields["points_kept"] == 60
    assert fields["area_ha"] == pytest.approx(audit.area_m2 / 1e4)
    assert fields["points_source"]["sha256"] == hashlib.sha256(package.read_bytes()).hexdigest()
    assert fields["metric_crs"] == "WGS 84 / UTM zone 32N (EPSG:32632)"
    assert fields["warnings"] == []
    text = "\n".join(audit.lines())
    for part in ("60 points read", "1 hole", "EPSG:32632", "no lattice found", "No warnings"):
        assert part in text


def test_digest_of_a_shapefile_covers_its_parts(tmp_path, package):
    area = write(reserve(), tmp_path / "area.shp")
    first = audit_survey(package, area, points_layer="mounds").area_source.sha256
    write(reserve().assign(parcel="other"), area)
    assert audit_survey(package, area, points_layer="mounds").area_source.sha256 != first


def test_zones_keep_their_columns(tmp_path):
    zones = gpd.GeoDataFrame(
        {"zone": ["north", "none", "south"], "grazed": [True, False, False]},
        geometry=[shapely.box(8.90, 48.71, 8.93, 48.72), None, shapely.box(8.90, 48.70, 8.93, 48.71)],
        crs=4326,
    )
    read = read_polygons(write(zones, tmp_path / "zones.gpkg"), crs="EPSG:32632")
    assert read["zone"].tolist() == ["north", "south"]
    assert read.index.tolist() == [0, 1]
    assert read.crs.to_epsg() == 32632
    assert read.is_valid.all()
    assert read.attrs["warnings"] == ["zones.gpkg: 1 features without geometry were left out"]
    assert read.attrs["source"]["layer"] == "zones"
    expected = zones.geometry.dropna().to_crs(32632).area
    np.testing.assert_allclose(read.area, expected, rtol=1e-6)


def test_zones_are_repaired_or_refused_one_by_one(tmp_path):
    bow = shapely.Polygon([(0, 0), (10, 10), (10, 0), (0, 10)])
    frame = gpd.GeoDataFrame({"zone": [1, 2]}, geometry=[shapely.box(0, 20, 5000, 5000), bow], crs=32632)
    path = write(frame, tmp_path / "zones.gpkg")
    with pytest.raises(InputError, match="in feature 2"):
        read_polygons(path, crs=32632)
    read = read_polygons(path, crs=32632, repair=True)
    assert read.is_valid.all()
    assert read.area.tolist() == pytest.approx([5000 * 4980, 50])
    assert read.attrs["warnings"] == ["zones.gpkg: 1 invalid polygons were repaired"]
