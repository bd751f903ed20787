"""What cannot be used is refused in one sentence, and nothing is written or changed."""

import sqlite3
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pyogrio
import pytest
import shapely

from geoclust.errors import GeoclustError, InputError, UsageError
from geoclust.layers.survey_layers import audit_survey, read_polygons

DATA = Path(__file__).parents[1] / "data"
BOX = shapely.box(500000, 5400000, 501000, 5401000)


def write(frame, path, layer=None, **kwargs):
    pyogrio.write_dataframe(frame, path, layer=layer, **kwargs)
    return path


def points_frame(xy=None, crs=25832):
    if xy is None:
        xy = np.random.default_rng(1).uniform([500000, 5400000], [501000, 5401000], (30, 2))
    return gpd.GeoDataFrame({"k": range(len(xy))}, geometry=shapely.points(xy), crs=crs)


def area_frame(polygon=BOX, crs=25832):
    return gpd.GeoDataFrame({"k": [1]}, geometry=[polygon], crs=crs)


@pytest.fixture
def files(tmp_path):
    """Points and area that are in order, so that each test breaks one thing."""
    return write(points_frame(), tmp_path / "points.gpkg"), write(area_frame(), tmp_path / "area.gpkg")


def refused(*args, match, error=InputError, **kwargs):
    before = {path: path.read_bytes() for path in Path(args[0]).parent.glob("*") if path.is_file()}
    with pytest.raises(error, match=match) as caught:
        audit_survey(*args, **kwargs)
    message = str(caught.value)
    assert isinstance(caught.value, GeoclustError)
    assert caught.value.exit_status in (1, 2)
    assert "\n" not in message
    assert not message.endswith(".")
    assert message[0].islower() or message[0] in "/'0123456789" or message.startswith("GeoParquet")
    assert before == {path: path.read_bytes() for path in Path(args[0]).parent.glob("*") if path.is_file()}
    return message


def test_the_files_are_in_order(files):
    assert audit_survey(*files).points_kept == 30


def test_missing_file(files, tmp_path):
    refused(tmp_path / "nowhere.gpkg", files[1], match="there is no file .*nowhere.gpkg")
    refused(files[0], tmp_path / "nowhere.gpkg", match="there is no file")


def test_no_such_layer(files):
    refused(*files, points_layer="mounds", match="no layer 'mounds': its layers are 'points'")
    refused(*files, area_layer="reserve", match="no layer 'reserve'")


def test_several_layers_and_none_named(files):
    write(points_frame(), files[0], "more", append=True)
    refused(*files, match="several layers with points, 'points', 'more': name one as points_layer")


def test_several_layers_and_none_fits(files):
    write(area_frame(), files[1], "second", append=True)
    refused(files[1], files[1], area_layer="area", match="none of the layers of .* holds points")


def test_a_table_inside_a_geopackage(files):
    write(pd.DataFrame({"a": [1]}), files[0], "notes", append=True)
    refused(*files, points_layer="notes", match="a table without geometry")
    assert audit_survey(*files).points_source.layer == "points"


def test_points_given_as_area(files):
    refused(files[0], files[0], match="holds points, not polygons")


def test_polygons_given_as_points(files):
    refused(files[1], files[1], match="holds polygons, not points")


def test_lines_given_as_points(files, tmp_path):
    lines = gpd.GeoDataFrame(geometry=[shapely.LineString([(0, 0), (1, 1)])], crs=25832)
    refused(write(lines, tmp_path / "tracks.gpkg"), files[1], match="holds lines, not points")


def test_a_raster_as_point_layer(files):
    refused(DATA / "lux_elev_epsg4326.tif", files[1], match="is a raster")
    refused(files[0], DATA / "lux_elev_epsg4326.tif", match="is a raster")


def test_a_file_that_is_no_layer(files, tmp_path):
    other = tmp_path / "letter.gpkg"
    other.write_text("Dear all")
    refused(other, files[1], match="cannot be read as a vector layer")
    broken = tmp_path / "broken.geojson"
    broken.write_text('{"type": "FeatureCollection", "features": [')
    refused(broken, files[1], match=r"broken\.geojson")


def test_empty_layers(files, tmp_path):
    empty = points_frame().iloc[:0]
    refused(write(empty, tmp_path / "empty.gpkg", geometry_type="Point"), files[1], match="is empty")
    nothing = gpd.GeoDataFrame({"k": [1, 2]}, geometry=[None, None], crs=25832)
    path = write(nothing, tmp_path / "nothing.gpkg", geometry_type="Point")
    refused(path, files[1], match="2 features, but none of them has a geometry")


def test_no_crs(files, tmp_path):
    with pytest.warns(UserWarning, match="crs"):
        bare = write(points_frame(crs=None), tmp_path / "bare.gpkg")
    refused(bare, files[1], match="no coordinate reference system: state the one")
    assert audit_survey(bare, files[1], crs="EPSG:25832").points_source.crs_stated


@pytest.mark.parametrize("placeholder", [-1, 0])
def test_placeholder_crs_of_geopackages_is_no_crs(files, placeholder):
    # GeoPackage 1.3, requirement 11: -1 and 0 stand for undefined Cartesian and geographic systems
    with sqlite3.connect(files[0]) as db:
        db.execute("UPDATE gpkg_contents SET srs_id = ?", (placeholder,))
        db.execute("UPDATE gpkg_geometry_columns SET srs_id = ?", (placeholder,))
    db.close()
    refused(*files, match="no coordinate reference system")


def test_a_crs_that_is_none(files):
    refused(*files, crs="EPSG:1", error=UsageError, match="crs must be a coordinate reference system")


def test_a_stated_crs_that_contradicts_the_layer(files):
    refused(*files, crs="EPSG:32632", error=UsageError, match="has one of its own")
    assert audit_survey(*files, crs="EPSG:25832").points_kept == 30


def test_tables(files, tmp_path):
    table = pd.DataFrame({"east": [500100.0, 500200.0], "north": [5400100.0, 5400200.0]})
    path = tmp_path / "t.csv"
    table.to_csv(path, index=False)
    columns = {"x_column": "east", "y_column": "north"}
    refused(path, files[1], crs=25832, error=UsageError, match="its columns are east, north")
    refused(path, files[1], match="has no coordinate reference system", **columns)
    refused(path, files[1], crs=25832, x_column="x", y_column="north", error=UsageError, match="got 'x'")
    refused(
        path, files[1], crs=25832, x_column="east", y_column="east", error=UsageError, match="two columns"
    )
    refused(files[0], path, match="is a table, which can only hold points")
    refused(files[0], files[1], x_column="east", y_column="north", error=UsageError, match="is not one")
    table.astype(str).assign(north=["5400100", "5400200 m"]).to_csv(path, index=False)
    refused(path, files[1], crs=25832, match="line 3 .* '5400200 m' in column north", **columns)
    path.write_text("east;north\n500100,5;5400100,5\n")
    refused(path, files[1], crs=25832, match="decimal point", **columns)
    path.write_bytes("east,north,Fläche\n1,2,3\n".encode("latin-1"))
    refused(path, files[1], crs=25832, match="UTF-8", **columns)
    path.write_text("")
    refused(path, files[1], crs=25832, match="cannot be read as a table", **columns)
    path.write_text("east,north\n")
    refused(path, files[1], crs=25832, match="is empty", **columns)


def test_no_point_inside(files, tmp_path):
    far = write(points_frame(points_frame().get_coordinates().to_numpy() + 5000), tmp_path / "far.gpkg")
    refused(far, files[1], match="none of the 30 points .* check the layers and their CRS")


def test_x_and_y_exchanged(files, tmp_path):
    swapped = write(points_frame(points_frame().get_coordinates().to_numpy()[:, ::-1]), tmp_path / "s.gpkg")
    refused(swapped, files[1], match="x and y seem to have been exchanged")


def test_one_point(files, tmp_path):
    one = write(points_frame([(500500, 5400500), (0, 0)]), tmp_path / "one.gpkg")
    refused(one, files[1], match="only one point")


def test_all_points_equal(files, tmp_path):
    same = write(points_frame([(500500, 5400500)] * 7), tmp_path / "same.gpkg")
    refused(same, files[1], match="all 7 points .* at the same place")


def test_zero_area_polygon(files, tmp_path):
    flat = shapely.Polygon([(500000, 5400000), (500500, 5400500), (501000, 5401000)])
    refused(files[0], write(area_frame(flat), tmp_path / "flat.gpkg"), match="has no area")


def test_bow_tie(files, tmp_path):
    bow = shapely.Polygon([(500000, 5400000), (501000, 5401000), (501000, 5400000), (500000, 5401000)])
    refused(files[0], write(area_frame(bow), tmp_path / "bow.gpkg"), match="above the limit of 0.1 %")


def test_infinite_boundary(files, tmp_path):
    area = write(area_frame(shapely.Polygon([(500000, 5400000), (np.inf, 5400000), (501000, 5401000)])),
                 tmp_path / "inf.gpkg")  # fmt: skip
    refused(files[0], area, match="not finite")


def test_degrees_across_the_antimeridian(tmp_path):
    jump = shapely.Polygon([(179.9, -17), (-179.9, -17), (-179.9, -16.8), (179.9, -16.8)])
    area = write(area_frame(jump, 4326), tmp_path / "jump.gpkg")
    points = write(points_frame([(179.95, -16.9), (-179.95, -16.9)], 4326), tmp_path / "p.gpkg")
    refused(points, area, match="antimeridian.*cut the polygon into two parts at 180°")


def test_metres_said_to_be_degrees(files, tmp_path):
    area = write(area_frame(crs=4326), tmp_path / "a.gpkg")
    refused(files[0], area, match="said to be in degrees")
    points = write(points_frame(crs=4326), tmp_path / "p.gpkg")
    refused(points, files[1], match="said to be in degrees")


def test_web_mercator_at_60_north_insisted_on(tmp_path):
    area = write(area_frame(shapely.box(10, 60, 10.1, 60.1), 4326), tmp_path / "a.gpkg")
    points = write(points_frame([(10.02, 60.02), (10.05, 60.07)], 4326), tmp_path / "p.gpkg")
    # 1/cos 60° = 2: distances twice, areas four times as large, and the ellipsoid's 0.3 %
    refused(
        points, area, metric_crs="EPSG:3857", match="wrong by up to 10.* % in distances and 30.* % in areas"
    )
    refused(points, area, metric_crs="EPSG:4326", error=UsageError, match="must be a projected CRS")


def test_two_bodies(files):
    refused(
        DATA / "mars_pickering_craters.csv",
        files[1],
        crs=(DATA / "mars_pickering_crs.txt").read_text(),
        x_column="x",
        y_column="y",
        match="cannot be brought",
    )


def test_a_local_plane_with_a_mapped_area(files, tmp_path):
    table = tmp_path / "t.csv"
    points_frame().get_coordinates().to_csv(table, index=False)
    refused(table, files[1], crs="local", x_column="x", y_column="y", match="no known place on the Earth")


def test_zones(files, tmp_path):
    with pytest.raises(InputError, match="holds points, not polygons"):
        read_polygons(files[0], crs=25832)
    with pytest.raises(InputError, match="there is no file"):
        read_polygons(tmp_path / "nowhere.gpkg", crs=25832)
    with pytest.raises(UsageError, match="has one of its own"):
        read_polygons(files[1], crs=25832, stated_crs=32632)
