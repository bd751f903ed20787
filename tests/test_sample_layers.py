"""The sample layers are what their page says, and the script makes them again."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import geopandas as gpd
import numpy as np
import pyogrio
import pytest
import shapely

from geoclust.layers.raster import read_band

FOLDER = Path(__file__).parents[1] / "sample_layers"
METRIC = "EPSG:25832"


def layer(name):
    return gpd.read_file(FOLDER / "reserve.gpkg", layer=name)


def test_package_is_in_degrees_and_has_every_layer():
    names = {name for name, _ in pyogrio.list_layers(FOLDER / "reserve.gpkg")}
    assert names == {"mounds", "reserve", "zones", "unwalked", "true_centres"}
    assert all(layer(name).crs == "EPSG:4326" for name in names)


def test_reserve_is_ragged_with_two_tarns_and_a_parcel_apart():
    reserve = gpd.read_file(FOLDER / "reserve.shp")
    assert reserve.crs == METRIC
    (polygon,) = reserve.geometry
    assert polygon.is_valid
    parts = sorted(polygon.geoms, key=lambda part: -part.area)
    assert [len(part.interiors) for part in parts] == [2, 0]
    assert parts[0].distance(parts[1]) > 50
    assert 150 < polygon.area / 1e4 < 250
    assert len(parts[0].exterior.coords) - 1 >= 800
    # ragged: the outline is far longer than that of a disc of the same area
    assert parts[0].exterior.length > 1.8 * np.sqrt(4 * np.pi * parts[0].area)


def test_mounds_lie_inside_in_both_files():
    in_degrees, in_metres = layer("mounds"), gpd.read_file(FOLDER / "mounds.shp")
    assert 850 < len(in_degrees) == len(in_metres) < 950
    assert in_degrees.within(layer("reserve").geometry[0]).all()
    assert in_metres.within(gpd.read_file(FOLDER / "reserve.shp").geometry[0]).all()
    assert in_degrees.to_crs(METRIC).distance(in_metres.geometry).max() < 1e-6
    assert in_degrees["id"].is_unique


def test_zones_cover_the_reserve_and_the_unwalked_part_touches_it():
    reserve, zones, unwalked = (layer(name).to_crs(METRIC) for name in ("reserve", "zones", "unwalked"))
    assert 3 <= len(zones) <= 5
    assert reserve.geometry[0].difference(zones.union_all()).area < 1e-3
    assert zones.area.sum() - zones.union_all().area < 1e-3
    assert reserve.geometry[0].intersection(unwalked.geometry[0]).area < 1e-3
    assert reserve.geometry[0].distance(unwalked.geometry[0]) < 1e-3


def test_true_centres_explain_the_mounds():
    centres, reserve = layer("true_centres").to_crs(METRIC), layer("reserve").to_crs(METRIC).geometry[0]
    mounds = gpd.read_file(FOLDER / "mounds.shp")
    np.testing.assert_array_equal(centres.within(reserve), centres["inside"] == 1)
    inner = centres[centres["level"] == "inner"]
    assert (inner["inside"] == 0).any()
    # sigma is 13 m per axis: half of the mounds lie within 1.1774 sigma of their centre, a little more of
    # the nearest one (Rayleigh distribution)
    nearest = shapely.STRtree(inner.geometry.array).query_nearest(
        mounds.geometry.array, return_distance=True
    )[1]
    assert (nearest < 1.1774 * 13).mean() > 0.5
    assert (nearest < 4 * 13).mean() > 0.99
    # those of centres more than three sigma outside are the only ones that no centre of the layer owns
    assert 0.98 * len(mounds) < inner["mounds"].sum() <= len(mounds)


@pytest.mark.parametrize("name", ["wetness", "elevation"])
def test_rasters_cover_the_reserve_and_the_unwalked_part(name):
    _, grid = read_band(FOLDER / f"{name}.tif")
    assert grid.crs == METRIC
    for outline in ("reserve", "unwalked"):
        assert shapely.box(*grid.bounds).contains(layer(outline).to_crs(METRIC).geometry[0])


def test_mounds_are_rarer_where_it_is_wet():
    # the expected share of mounds in the wetter half of the reserve, by the retention of the page
    wetness, grid = read_band(FOLDER / "wetness.tif")
    elevation, _ = read_band(FOLDER / "elevation.tif")
    reserve = gpd.read_file(FOLDER / "reserve.shp").geometry[0]
    x, y = np.meshgrid(grid.x, grid.y)
    inside = shapely.contains_xy(reserve, x, y)
    wet = wetness > np.median(wetness[inside])
    weight = np.exp(-0.2 * wetness - 0.25 * elevation / 100) * inside
    expected = weight[wet].sum() / weight.sum()
    mounds = gpd.read_file(FOLDER / "mounds.shp").geometry
    row, column, held = grid.cells_of(np.column_stack([mounds.x, mounds.y]))
    assert held.all()
    share = wet[row, column].mean()
    assert expected < 0.45
    assert share < 0.5
    # mounds come in clusters of five and clusters in groups of three, so the variance of the share is
    # about 1 + 5 + 15 times the binomial one
    assert abs(share - expected) < 2 * np.sqrt(expected * (1 - expected) * 21 / len(mounds))


def test_script_makes_them_again(tmp_path):
    script = FOLDER / "make_sample_layers.py"
    subprocess.run([sys.executable, str(script), str(tmp_path)], check=True, timeout=120)
    made = {path.name for path in tmp_path.iterdir()}
    assert made == {path.name for path in FOLDER.iterdir() if path.suffix not in (".py", ".in", "")}
    for name in ("mounds.shp", "reserve.shp"):
        again, kept = gpd.read_file(tmp_path / name), gpd.read_file(FOLDER / name)
        assert len(again) == len(kept)
        assert again.geometry.geom_equals_exact(kept.geometry, 1e-3).all()
    assert (tmp_path / "README.md").read_text() == (FOLDER / "README.md").read_text()
