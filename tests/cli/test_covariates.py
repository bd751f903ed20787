"""Commands that take covariates: the intensity goes from the fit to the centres and the patterns."""

from __future__ import annotations

import json
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
from pyproj import CRS
from rasterio.transform import from_origin

from geoclust.cli.entry import run
from geoclust.curves.bandwidth import cross_validated_bandwidth
from geoclust.workflow import read_survey

# corner of the survey of conftest.py
WEST, SOUTH = 604_000.0, 5_737_000.0


@pytest.fixture(scope="module")
def wetness(tmp_path_factory) -> Path:
    """A raster that rises from west to east, in the system of the survey."""
    path = tmp_path_factory.mktemp("terrain") / "wetness.tif"
    values = np.tile(np.linspace(0.0, 1.0, 34, dtype=np.float32), (34, 1))
    with rasterio.open(
        path, "w", driver="GTiff", height=34, width=34, count=1, dtype="float32",
        crs=CRS("EPSG:25832"), transform=from_origin(WEST - 20, SOUTH + 320, 10, 10),
    ) as out:  # fmt: skip
        out.write(values, 1)
    return path


@pytest.fixture(scope="module")
def beyond(survey_file, wetness, tmp_path_factory) -> Path:
    """A contrast fit beyond the raster."""
    out = tmp_path_factory.mktemp("fit") / "fit.json"
    command = ["fit", *layers_of(survey_file), "--covariate", str(wetness), "--method", "minimum-contrast",
               "--bootstrap", "0", "--seed", "3", "--quiet", "--out", str(out)]  # fmt: skip
    assert run(command) == 0
    return out


def layers_of(survey_file: Path) -> list[str]:
    return [str(survey_file), str(survey_file), "--points-layer", "mounds", "--area-layer", "reserve"]


def test_fit_records_the_intensity(beyond):
    record = json.loads(beyond.read_text(encoding="utf-8"))
    assert [c["name"] for c in record["intensity"]["coefficients"]] == ["intercept", "wetness"]
    assert record["status"] == "ok"


def test_a_fit_beyond_covariates_is_taken_over_with_the_same_ones(survey_file, beyond, wetness, tmp_path):
    out = tmp_path / "patterns.csv"
    command = ["simulate", *layers_of(survey_file), "--fit", str(beyond), "--covariate", str(wetness),
               "--count", "40", "--seed", "4", "--quiet", "--out", str(out)]  # fmt: skip
    assert run(command) == 0
    drawn = pd.read_csv(out)
    # on the mean as many points as in the survey; numbers of clustered points vary 1 + mean offspring
    # times as much as those of single points at most (Neyman & Scott 1958); four standard errors
    n = len(gpd.read_file(survey_file, layer="mounds"))
    record = json.loads(beyond.read_text(encoding="utf-8"))
    spread = 1 + record["parameters"]["mean_offspring"]["value"]
    assert len(drawn) / 40 == pytest.approx(n, abs=4 * np.sqrt(n * spread / 40))


def test_locate_beyond_covariates(survey_file, beyond, wetness, tmp_path):
    out = tmp_path / "located"
    command = ["locate", *layers_of(survey_file), "--fit", str(beyond), "--covariate", str(wetness),
               "--seed", "4", "--quiet", "--out", str(out)]  # fmt: skip
    assert run(command) == 0
    with rasterio.open(out / "centre_intensity.tif") as raster:
        assert raster.count == 3


@pytest.mark.parametrize("command", ["locate", "simulate"])
def test_a_fit_beyond_covariates_is_refused_without_them(command, survey_file, beyond, tmp_path, capsys):
    out = tmp_path / ("out" if command == "locate" else "out.csv")
    given = [command, *layers_of(survey_file), "--fit", str(beyond), "--seed", "4", "--out", str(out)]
    assert run(given) == 1
    assert "holds a fit with the covariates wetness; given were none" in capsys.readouterr().err
    assert not out.exists()


def test_covariates_do_not_go_with_randomness(survey_file, wetness, tmp_path, capsys):
    out = tmp_path / "out.csv"
    given = ["simulate", *layers_of(survey_file), "--random", "--covariate", str(wetness), "--out", str(out)]
    assert run(given) == 2
    assert "Covariates belong to a fit" in capsys.readouterr().err
    assert not out.exists()


def test_describe_beyond_covariates(survey_file, wetness, capsys):
    given = [
        "describe",
        *layers_of(survey_file),
        "--covariate",
        str(wetness),
        "--simulations",
        "39",
        "--seed",
        "1",
    ]
    assert run(given) == 0
    said = capsys.readouterr()
    functions = {line.split(",")[0] for line in said.out.splitlines()}
    assert {"L", "g", "L beyond covariates", "g beyond covariates"} <= functions
    assert "Loosmore & Ford (2006) on L" in said.err
    assert "beyond the covariates: p = " in said.err


def test_bandwidth_by_cross_validation(survey_file, capsys):
    """What was chosen is told, and it is what the function chooses; a wrong word is refused."""
    given = ["describe", *layers_of(survey_file), "--simulations", "39", "--seed", "1", "--bandwidth"]
    assert run([*given, "cross-validation"]) == 0
    said = capsys.readouterr()
    survey = read_survey(survey_file, survey_file, points_layer="mounds", area_layer="reserve")
    found = cross_validated_bandwidth(survey, 0.25 * survey.area.side)
    assert f"bandwidth of g: {found.bandwidth:.4g} m by cross-validation, Guan 2007" in said.err
    assert run([*given, "wide"]) == 2
    assert "neither a positive number of metres nor cross-validation" in capsys.readouterr().err
