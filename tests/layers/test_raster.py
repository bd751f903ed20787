"""Rasters: grids, reading of covariates, cloud-optimised output."""

from __future__ import annotations

import numpy as np
import pyproj
import pytest
import rasterio
from affine import Affine
from rio_cogeo.cogeo import cog_validate

from geoclust.errors import InputError, OutputError, UsageError
from geoclust.layers.raster import NODATA, Grid, grid_like, grid_over, read_band, write_bands

UTM = pyproj.CRS("EPSG:25832")


def raster_at(path, values, transform, crs="EPSG:25832", **more):
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        height=values.shape[0],
        width=values.shape[1],
        count=1,
        dtype=values.dtype,
        crs=crs,
        transform=transform,
        **more,
    ) as raster:
        raster.write(values, 1)
    return path


def test_grid_covers_bounds_on_multiples_of_cell():
    grid = grid_over((603_004.2, 5_736_001.0, 603_020.0, 5_736_029.9), 10.0, UTM)
    assert grid.bounds == (603_000.0, 5_736_000.0, 603_020.0, 5_736_030.0)
    assert grid.shape == (3, 2)
    assert grid.cell == (10.0, 10.0)
    np.testing.assert_array_equal(grid.x, [603_005.0, 603_015.0])
    np.testing.assert_array_equal(grid.y, [5_736_025.0, 5_736_015.0, 5_736_005.0])


@pytest.mark.parametrize("cell", [0.1, 0.3, 7.0, 1 / 3])
def test_grid_of_awkward_cells_still_covers(cell):
    bounds = (-13.37, 20.2, 33.3, 41.9)
    west, south, east, north = grid_over(bounds, cell, UTM).bounds
    assert west <= bounds[0]
    assert south <= bounds[1]
    assert east >= bounds[2] - 1e-9
    assert north >= bounds[3] - 1e-9
    assert bounds[0] - west < cell
    assert east - bounds[2] < cell


def test_grid_over_a_point_has_one_cell():
    assert grid_over((10.0, 10.0, 10.0, 10.0), 10.0, UTM).shape == (1, 1)


@pytest.mark.parametrize("cell", [0.0, -5.0, float("nan"), float("inf"), 1e-3])
def test_impossible_cells_are_refused(cell):
    with pytest.raises(UsageError, match=r"^cell must be "):
        grid_over((0.0, 0.0, 1e4, 1e4), cell, UTM)


def test_cells_of_positions_agree_with_rasterio():
    grid = grid_over((0.0, 0.0, 500.0, 300.0), 7.0, UTM)
    xy = np.random.default_rng(5).uniform((-50, -50), (550, 350), (500, 2))
    row, column, held = grid.cells_of(xy)
    expected = rasterio.transform.rowcol(grid.transform, *xy[held].T)
    np.testing.assert_array_equal(row[held], expected[0])
    np.testing.assert_array_equal(column[held], expected[1])
    west, south, east, north = grid.bounds
    inside = (xy[:, 0] >= west) & (xy[:, 0] < east) & (xy[:, 1] > south) & (xy[:, 1] <= north)
    np.testing.assert_array_equal(held, inside)


@pytest.mark.parametrize("shape", [(1, 1), (30, 41), (700, 1300)])
def test_written_bands_are_cloud_optimised_and_come_back(tmp_path, shape):
    rng = np.random.default_rng(1)
    grid = Grid(Affine(10.0, 0.0, 603_000.0, 0.0, -10.0, 5_737_000.0), shape, UTM)
    mean = rng.gamma(2.0, 1.0, shape)
    mean[rng.uniform(size=shape) < 0.3] = np.nan
    bands = {"centres_per_ha_mean": mean, "probability_any_centre": np.ones(shape)}
    path = tmp_path / "centre_intensity.tif"
    write_bands(path, grid, bands, tags={"SEED": "7"}, units={"centres_per_ha_mean": "ha⁻¹"})

    # rio-cogeo's validator is the outside check
    valid, errors, warnings = cog_validate(path, strict=True, quiet=True)
    assert valid, (errors, warnings)
    with rasterio.open(path) as raster:
        assert raster.descriptions == ("centres_per_ha_mean", "probability_any_centre")
        assert raster.units[0] == "ha⁻¹"
        assert raster.dtypes == ("float32", "float32")
        assert raster.nodata == NODATA
        assert raster.tags()["SEED"] == "7"
        assert raster.crs == rasterio.crs.CRS.from_epsg(25832)
        assert raster.transform == grid.transform
        assert bool(raster.overviews(1)) == (max(shape) > 512)
        np.testing.assert_array_equal(raster.read(1, masked=True).mask, np.isnan(mean))
    values, again = read_band(path, 1)
    np.testing.assert_allclose(values, mean, rtol=1e-7)
    assert again.shape == shape
    assert again.transform == grid.transform
    assert again.crs == UTM
    assert grid_like(path).transform == grid.transform


def test_written_twice_gives_the_same_bytes(tmp_path):
    grid = grid_over((0.0, 0.0, 900.0, 700.0), 10.0, UTM)
    values = np.random.default_rng(2).normal(size=grid.shape)
    for name in ("a.tif", "b.tif"):
        write_bands(tmp_path / name, grid, {"v": values}, tags={"A": "1"})
    assert (tmp_path / "a.tif").read_bytes() == (tmp_path / "b.tif").read_bytes()


def test_crs_without_authority_code_survives(tmp_path):
    # a metric CRS on the sphere of Mars (radius 3396.19 km, IAU)
    mars = pyproj.CRS("+proj=aeqd +lat_0=-14 +lon_0=175 +R=3396190 +units=m +no_defs")
    grid = grid_over((0.0, 0.0, 90.0, 70.0), 10.0, mars)
    write_bands(tmp_path / "mars.tif", grid, {"v": np.ones(grid.shape)})
    back = grid_like(tmp_path / "mars.tif").crs
    assert back.ellipsoid.semi_major_metre == 3_396_190
    xy = pyproj.Transformer.from_crs(mars, back, always_xy=True).transform(1234.5, -678.9)
    np.testing.assert_allclose(xy, (1234.5, -678.9), atol=1e-6)


@pytest.mark.parametrize("value", [np.inf, NODATA])
def test_values_that_would_be_lost_are_refused(tmp_path, value):
    grid = grid_over((0.0, 0.0, 20.0, 20.0), 10.0, UTM)
    with pytest.raises(UsageError, match="band v must be finite"):
        write_bands(tmp_path / "v.tif", grid, {"v": np.full(grid.shape, value)})
    assert not (tmp_path / "v.tif").exists()


def test_band_of_wrong_shape_is_refused(tmp_path):
    grid = grid_over((0.0, 0.0, 20.0, 20.0), 10.0, UTM)
    with pytest.raises(UsageError, match="shape of its grid"):
        write_bands(tmp_path / "v.tif", grid, {"v": np.ones((3, 2))})


def test_unwritable_path_is_said(tmp_path):
    grid = grid_over((0.0, 0.0, 20.0, 20.0), 10.0, UTM)
    with pytest.raises(OutputError, match="cannot be written"):
        write_bands(tmp_path / "nowhere" / "v.tif", grid, {"v": np.ones(grid.shape)})


def test_covariate_nodata_scale_and_offset(tmp_path):
    path = raster_at(
        tmp_path / "c.tif",
        np.array([[1, 2], [-32768, 4]], dtype="int16"),
        Affine(10.0, 0.0, 0.0, 0.0, -10.0, 20.0),
        nodata=-32768,
    )
    values, grid = read_band(path)
    np.testing.assert_array_equal(values, [[1.0, 2.0], [np.nan, 4.0]])
    assert values.dtype == np.float64
    assert grid.bounds == (0.0, 0.0, 20.0, 20.0)
    with rasterio.open(path, "r+") as raster:
        raster.scales, raster.offsets = (0.5,), (10.0,)
    np.testing.assert_array_equal(read_band(path)[0], [[10.5, 11.0], [np.nan, 12.0]])


@pytest.mark.parametrize(
    ("transform", "words"),
    [
        (Affine(10.0, 1.0, 5.0, 1.0, -10.0, 20.0), "rotated or sheared"),
        (Affine(10.0, 0.0, 5.0, 0.0, 10.0, 20.0), "from south to north"),
        (Affine(-10.0, 0.0, 5.0, 0.0, -10.0, 20.0), "from east to west"),
    ],
)
def test_templates_that_are_not_north_up_are_refused(tmp_path, transform, words):
    path = raster_at(tmp_path / "t.tif", np.ones((3, 4), dtype="float32"), transform)
    for read in (grid_like, read_band):
        with pytest.raises(InputError, match=words):
            read(path)


def test_other_bad_rasters_are_refused_in_a_sentence(tmp_path):
    north_up = Affine(10.0, 0.0, 0.0, 0.0, -10.0, 20.0)
    ones = np.ones((2, 2), dtype="float32")
    with pytest.raises(InputError, match="There is no raster"):
        grid_like(tmp_path / "none.tif")
    (tmp_path / "text.tif").write_text("id,x,y\n")
    with pytest.raises(InputError, match="not a raster"):
        grid_like(tmp_path / "text.tif")
    with pytest.raises(InputError, match="no coordinate reference system"):
        grid_like(raster_at(tmp_path / "nocrs.tif", ones, north_up, crs=None))
    good = raster_at(tmp_path / "good.tif", ones, north_up)
    for band in (0, 2):
        with pytest.raises(InputError, match=f"bands 1 to 1, not {band}"):
            read_band(good, band)
    with pytest.raises(InputError, match="complex"):
        read_band(raster_at(tmp_path / "z.tif", ones.astype("complex64"), north_up))
    whole = good.read_bytes()
    good.write_bytes(whole[:-8])
    with pytest.raises(InputError, match="damaged"):
        read_band(good)


def test_sample_covariates_can_be_read(request):
    folder = request.config.rootpath / "sample_layers"
    wetness, grid = read_band(folder / "wetness.tif")
    elevation, _ = read_band(folder / "elevation.tif")
    assert grid.cell == (10.0, 10.0)
    assert wetness.shape == elevation.shape == grid.shape
    assert np.isfinite(wetness).all()
    assert 500 < elevation.min() < elevation.max() < 1000
