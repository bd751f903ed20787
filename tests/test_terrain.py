"""Covariates through the whole job: rasters read, intensity on record and as a layer, tests beyond it."""

from __future__ import annotations

import json
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pyproj
import pytest
import rasterio
import shapely
from affine import Affine

import geoclust as gc
from geoclust.cli.entry import run
from geoclust.errors import InputError, UsageError
from geoclust.layers.covariates import read_covariate_bands
from geoclust.layers.raster import Grid, write_bands
from geoclust.report.saved_fit import read_fit
from geoclust.terrain import read_covariates

UTM = pyproj.CRS("EPSG:25832")
WEST, SOUTH = 600_000.0, 5_700_000.0


@pytest.fixture(scope="module")
def layers(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A survey that follows a slope from west to east, and a raster with the slope and something else."""
    folder = tmp_path_factory.mktemp("layers")
    area = shapely.box(WEST, SOUTH, WEST + 400, SOUTH + 300)
    rng = np.random.default_rng(12)
    xy = rng.uniform((WEST, SOUTH), (WEST + 400, SOUTH + 300), (1200, 2))
    xy = xy[rng.random(1200) < np.exp(-3 * (xy[:, 0] - WEST) / 400)]
    gpd.GeoDataFrame({"id": range(len(xy))}, geometry=gpd.points_from_xy(*xy.T), crs=UTM).to_file(
        folder / "survey.gpkg", layer="finds"
    )
    gpd.GeoDataFrame({"name": ["plot"]}, geometry=[area], crs=UTM).to_file(
        folder / "survey.gpkg", layer="plot"
    )
    grid = Grid(Affine(5, 0, WEST - 50, 0, -5, SOUTH + 350), (80, 100), UTM)
    slope = np.tile((np.arange(100) * 5 - 47.5) / 400, (80, 1))
    write_bands(folder / "ground.tif", grid, {"slope": slope, "rough": rng.normal(size=(80, 100))})
    write_bands(folder / "half.tif", grid, {"half": np.where(slope < 0.5, slope, np.nan)})
    return folder


def test_every_band_is_a_covariate_with_a_name(layers: Path):
    bands = read_covariate_bands(layers / "ground.tif")
    assert [b.name for b in bands] == ["slope", "rough"]
    area = gc.StudyArea(shapely.box(WEST, SOUTH, WEST + 400, SOUTH + 300), UTM)
    again = read_covariates([layers / "ground.tif", layers / "half.tif"], area)
    assert [c.name for c in again] == ["slope", "rough", "half"]
    twice = read_covariates([layers / "half.tif", layers / "half.tif"], area)
    assert [c.name for c in twice] == ["half", "half_half"]
    with pytest.raises(InputError, match="There is no raster"):
        read_covariates([layers / "none.tif"], area)
    with pytest.raises(UsageError, match="need a coordinate reference system"):
        read_covariates([layers / "half.tif"], gc.StudyArea(area.polygon))


def test_the_whole_job_with_covariates(layers: Path, capsys: pytest.CaptureFixture[str]):
    out = layers / "results"
    status = run(
        ["analyse", str(layers / "survey.gpkg"), str(layers / "survey.gpkg"), "--points-layer", "finds",
         "--area-layer", "plot", "--covariate", str(layers / "ground.tif"), "--simulations", "99",
         "--seed", "4", "--out", str(out), "--quiet"],
    )  # fmt: skip
    # terrain explains all there is: no clusters are made up, and exit 3 says so
    assert status == 3
    said = capsys.readouterr().out
    assert "cannot tell (no-clustering)" in said
    assert "slope: one unit more multiplies the points per hectare by 0.0" in said
    record = json.loads((out / "fit.json").read_text(encoding="utf-8"))
    assert record["tests"]["complete randomness, L"]["p_value"] == 0.01
    assert record["tests"]["fitted intensity, L"]["p_value"] > 0.05
    effects = {c["name"]: c for c in record["intensity"]["coefficients"]}
    assert effects["slope"]["interval_clustered"][0] < -3 < effects["slope"]["interval_clustered"][1]
    assert record["intensity"]["covariates"][0]["cell_value"] == "cells of the raster as they are"
    with rasterio.open(out / "intensity.tif") as raster:
        assert raster.descriptions == ("intensity_per_ha", "residual_per_ha")
        assert raster.units == ("1/ha", "1/ha")
        intensity = raster.read(1, masked=True)
        area_ha = abs(raster.transform.a * raster.transform.e) / 1e4
    points = len(gpd.read_file(layers / "survey.gpkg", layer="finds"))
    assert float(intensity.sum()) * area_ha == pytest.approx(points, rel=1e-3)
    assert (out / "intensity.sld").exists()
    functions = set(pd.read_csv(out / "curves.csv")["function"])
    assert {"L beyond covariates", "g beyond covariates"} <= functions
    page = (out / "report.html").read_text(encoding="utf-8")
    assert "What covariates explain" in page
    assert "intensity.tif" in page
    survey = gc.read_survey(
        layers / "survey.gpkg", layers / "survey.gpkg", points_layer="finds", area_layer="plot"
    )
    with pytest.raises(InputError, match="a fit with the covariates slope, rough; given were none"):
        read_fit(out / "fit.json", survey)


def test_a_raster_that_covers_too_little_leaves_nothing_behind(
    layers: Path, capsys: pytest.CaptureFixture[str]
):
    out = layers / "nothing"
    status = run(
        ["analyse", str(layers / "survey.gpkg"), str(layers / "survey.gpkg"), "--points-layer", "finds",
         "--area-layer", "plot", "--covariate", str(layers / "half.tif"), "--simulations", "39",
         "--seed", "4", "--out", str(out), "--quiet"],
    )  # fmt: skip
    assert status == 1
    assert "of the study area lie where a covariate has no value" in capsys.readouterr().err
    assert not out.exists()
