"""The whole job from layers to a folder, through the command line."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time
from functools import partial
from importlib import resources
from pathlib import Path

import fiona
import geopandas as gpd
import jsonschema
import numpy as np
import pandas as pd
import pyogrio
import pytest
import rasterio
import shapely
from pyproj import CRS

from geoclust.area.study_area import StudyArea
from geoclust.cli.entry import run
from geoclust.fitting import posterior
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

DATA = Path(__file__).parents[1] / "data"
WEST, SOUTH = 604_000.0, 5_737_000.0
# an L, so that the rectangle round it is not the study area
SHAPE = shapely.Polygon([(WEST + x, SOUTH + y) for x, y in
                         [(0, 0), (300, 0), (300, 170), (170, 170), (170, 300), (0, 300)]])  # fmt: skip
LAYERS = ["--points-layer", "mounds", "--area-layer", "reserve"]
QUICK = ["--simulations", "39", "--seed", "7", "--quiet"]


@pytest.fixture(scope="module")
def survey_file(tmp_path_factory) -> Path:
    """Plain clusters in the L, in degrees (EPSG:4326), with two zones and an unwalked part."""
    crs = CRS("EPSG:25832")
    area = StudyArea(SHAPE, crs)
    points = draw_pattern(Thomas(4e-4, 6.0, 6.0), area, np.random.default_rng(8)).points + area.origin
    path = tmp_path_factory.mktemp("survey") / "survey.gpkg"
    west, east, beside = ((0, 0, 150, 301), (150, 0, 301, 301), (300, 0, 340, 170))
    layers = {
        "mounds": {"note": [f"m{k}" for k in range(len(points))], "geometry": shapely.points(points)},
        "reserve": {"geometry": [SHAPE]},
        "zones": {"name": ["west", "east"], "geometry": [placed(west), placed(east)]},
        "unwalked": {"geometry": [placed(beside)]},
    }
    for name, columns in layers.items():
        gpd.GeoDataFrame(columns, crs=crs).to_crs("EPSG:4326").to_file(path, layer=name)
    return path


def placed(box: tuple[float, float, float, float]) -> shapely.Polygon:
    west, south, east, north = box
    return shapely.box(WEST + west, SOUTH + south, WEST + east, SOUTH + north)


def valid_record(folder: Path) -> dict:
    """fit.json, checked against its published schema."""
    record = json.loads((folder / "fit.json").read_text("utf-8"))
    schema = json.loads((resources.files("geoclust.report") / "fit.schema.json").read_text("utf-8"))
    jsonschema.Draft202012Validator.check_schema(schema)
    jsonschema.validate(record, schema, jsonschema.Draft202012Validator)
    return record


@pytest.fixture(scope="module")
def results(survey_file, tmp_path_factory) -> Path:
    out = tmp_path_factory.mktemp("out") / "results"
    given = [str(survey_file), str(survey_file), *LAYERS, "--zones", "zones", "--unsurveyed", "unwalked"]
    assert run(["analyse", *given, "--cell", "10", "--out", str(out), *QUICK]) == 0
    return out


def test_files_of_the_contract(results):
    names = {p.name for p in results.iterdir()}
    assert {"results.gpkg", "centre_intensity.tif", "curves.csv", "fit.json", "report.html"} <= names
    assert any(n.endswith(".sld") for n in names)
    curves = pd.read_csv(results / "curves.csv")
    assert list(curves.columns) == ["function", "r_m", "estimate", "theory", "lower", "upper"]
    judged = curves[curves["function"] == "G, assessment of the fit"].dropna()
    assert (judged["lower"] <= judged["upper"]).all()
    assert len(judged) > 10
    page = (results / "report.html").read_text("utf-8")
    assert "<html" in page
    assert 'src="http' not in page
    assert 'href="http' not in page.replace('href="https://www.w3.org', "")


def test_record_follows_its_schema(results, survey_file):
    record = valid_record(results)
    assert record["status"] == "ok"
    assert record["seed"] == 7
    assert record["assessment"]["simulations"] == 19
    assert 0.05 <= record["assessment"]["p_value"] <= 1
    sigma = record["parameters"]["sigma"]
    assert sigma["lower_95"] < sigma["value"] < sigma["upper_95"]
    assert sigma["value"] == pytest.approx(6.0, rel=0.3)
    assert record["parameters"]["parent_intensity"]["value"] == pytest.approx(4e-4, rel=0.5)


def test_layers_come_back_in_the_system_of_the_points(results, survey_file):
    package = results / "results.gpkg"
    assert {"points", "study_area", "clusters", "zones", "unsurveyed", "simulated_points"} <= set(
        fiona.listlayers(package)
    )
    for name in ("points", "study_area", "clusters", "zones", "unsurveyed", "simulated_points"):
        with fiona.open(package, layer=name) as layer:
            assert CRS.from_wkt(layer.crs_wkt).to_epsg() == 4326, name
            assert len(layer) > 0
    before = pyogrio.read_dataframe(survey_file, layer="mounds")
    after = pyogrio.read_dataframe(package, layer="points")
    assert after["note"].tolist() == before["note"].tolist()
    np.testing.assert_allclose(shapely.get_coordinates(after.geometry),
                               shapely.get_coordinates(before.geometry), atol=1e-9)  # fmt: skip
    assert {"cluster", "membership_probability", "background_probability"} <= set(after.columns)
    clusters = pyogrio.read_dataframe(package, layer="clusters")
    assert after["cluster"].max() == len(clusters)
    zones = pyogrio.read_dataframe(package, layer="zones")
    assert zones["points"].sum() == len(after)
    simulated = pyogrio.read_dataframe(package, layer="simulated_points")
    # 39 patterns of about as many points
    assert len(simulated) / 39 == pytest.approx(len(after), rel=0.3)


def test_raster_adds_up_to_the_number_of_centres(results):
    """Centres per hectare times the hectares of each cell inside the study area: the posterior mean."""
    mean = valid_record(results)["centres"]["number_inside"]["mean"]
    with rasterio.open(results / "centre_intensity.tif") as raster:
        assert raster.descriptions == ("centres_per_ha_mean", "centres_per_ha_sd", "probability_any_centre")
        crs = CRS.from_wkt(raster.crs.to_wkt())
        assert crs.is_projected
        values = raster.read(1, masked=True)
        grid, shape = raster.transform, raster.shape
    polygon = gpd.GeoSeries([SHAPE], crs="EPSG:25832").segmentize(1.0).to_crs(crs).iloc[0]
    area = StudyArea(polygon, crs)
    cover = area.cell_areas(grid, shape)
    total = float((values.filled(0.0) * cover).sum() / 1e4)
    zones = pyogrio.read_dataframe(results / "results.gpkg", layer="zones")
    assert total == pytest.approx(zones["centres_mean"].sum(), rel=1e-4)
    assert total == pytest.approx(mean, rel=1e-4)
    assert values.mask.any(), "outside the L there is no value"


def test_chains_that_disagree_give_way_to_a_contrast_fit(survey_file, tmp_path, monkeypatch):
    """The folder is whole, the fit is by minimum contrast, and page, record and talk say why."""
    monkeypatch.setattr(posterior, "sample_posterior", partial(posterior.sample_posterior, most_rounds=1))
    monkeypatch.setattr(posterior, "HOPELESS_SIZE", 1e9)
    out = tmp_path / "results"
    assert run(["analyse", str(survey_file), str(survey_file), *LAYERS, "--out", str(out), *QUICK]) == 0
    record = valid_record(out)
    assert record["status"] == "ok"
    assert record["method"] == "minimum-contrast"
    assert "sigma" in record["choices"]["posterior_not_converged"]
    assert record["parameters"]["sigma"]["value"] == pytest.approx(6.0, rel=0.3)
    page = (out / "report.html").read_text("utf-8")
    assert "The chains of the sampler still disagree" in page
    assert "Its place is taken by a minimum contrast fit" in page
    assert (out / "centre_intensity.tif").exists()


@pytest.mark.parametrize(
    ("file", "side"), [("caveolae.csv", 500), ("nuclei_px512.csv", 512)], ids=["caveolae", "nuclei"]
)
def test_regular_patterns_end_in_cannot_tell(file, side, tmp_path, capsys):
    """Caveolae and cell nuclei (tests/data/README.md): exit status 3, a page that says so, no map."""
    area = tmp_path / "plot.gpkg"
    frame = gpd.GeoDataFrame(geometry=[shapely.box(0, 0, side, side)])
    with pytest.warns(UserWarning, match="crs"):
        pyogrio.write_dataframe(frame, area, layer="plot")
    out = tmp_path / "results"
    given = [str(DATA / file), str(area), "--crs", "local", "--x-column", "x", "--y-column", "y"]
    assert run(["analyse", *given, "--out", str(out), *QUICK]) == 3
    told = capsys.readouterr()
    assert "no-clustering" in told.out
    assert not (out / "centre_intensity.tif").exists()
    assert "clusters" not in fiona.listlayers(out / "results.gpkg")
    record = valid_record(out)
    assert record["status"] == "no-clustering"
    assert record["centres"] is None
    assert "chance alone" in (out / "report.html").read_text("utf-8")


@pytest.mark.parametrize("seconds", [0.5, 2.0, 5.0])
@pytest.mark.parametrize("sent", [signal.SIGINT, signal.SIGKILL], ids=["interrupt", "kill"])
def test_stopped_at_any_moment(sent, seconds, survey_file, tmp_path):
    """Either no results folder or a whole one; what was there before is as it was.

    A killed program cannot sweep up: a hidden half-written folder may stay
    beside, never one with the name asked for.
    """
    out = tmp_path / "results"
    command = [sys.executable, "-m", "geoclust", "analyse", str(survey_file), str(survey_file), *LAYERS,
               "--out", str(out), "--simulations", "39", "--seed", "7", "--quiet"]  # fmt: skip
    running = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    try:
        time.sleep(seconds)
        running.send_signal(sent)
        _, error = running.communicate(timeout=120)
    finally:
        running.kill()
    assert "Traceback" not in error
    if out.exists():
        assert running.returncode == 0
        assert valid_record(out)["status"] == "ok"
    else:
        assert running.returncode in (-sent, 128 + sent)
    left = [p.name for p in tmp_path.iterdir() if p != out]
    assert sent == signal.SIGKILL or left == []
    assert all(name.startswith(".") for name in left)
