"""Contrast fits through the commands: the curve L, and models whose centres are not located."""

from __future__ import annotations

import json
from pathlib import Path

import geopandas as gpd
import numpy as np
import pytest
import shapely

from geoclust import workflow
from geoclust.area.study_area import StudyArea
from geoclust.cli.entry import run
from geoclust.fitting.fit import fit_clusters
from geoclust.models.patterns import draw_pattern
from geoclust.models.variance_gamma import VarianceGamma
from geoclust.report.saved_fit import read_fit

QUICK = ["--bootstrap", "0", "--seed", "1", "--quiet"]


@pytest.fixture(scope="module")
def survey_file(tmp_path_factory) -> Path:
    """Clusters with dense cores in a square of nine hectares."""
    area = StudyArea(shapely.box(604_000, 5_737_000, 604_300, 5_737_300), "EPSG:25832")
    model = VarianceGamma(4e-4, 5.0, -0.2, 8.0)
    points = draw_pattern(model, area, np.random.default_rng(9)).points + area.origin
    path = tmp_path_factory.mktemp("survey") / "survey.gpkg"
    for name, shapes in (("mounds", shapely.points(points)), ("reserve", [area.polygon])):
        gpd.GeoDataFrame(geometry=list(shapes), crs="EPSG:25832").to_file(path, layer=name)
    return path


def given(path: Path) -> list[str]:
    return [str(path), str(path), "--points-layer", "mounds", "--area-layer", "reserve"]


def test_a_fit_on_l_is_saved_and_read(survey_file, tmp_path):
    out = tmp_path / "fit.json"
    options = ["--method", "minimum-contrast", "--function", "L", "--distance-weight", "-0.5", *QUICK]
    assert run(["fit", *given(survey_file), *options, "--out", str(out)]) in (0, 3)
    record = json.loads(out.read_text())
    chosen = record["choices"]["fit"]
    assert (chosen["function"], chosen["exponent"], chosen["distance_weight"]) == ("L", 1.0, -0.5)
    record["status"], record["reason"] = "ok", ""
    out.write_text(json.dumps(record))
    survey = workflow.read_survey(survey_file, survey_file, points_layer="mounds", area_layer="reserve")
    fit = read_fit(out, survey)
    assert (fit.curve.function, fit.curve.unit) == ("L", "m")
    np.testing.assert_allclose(fit.fitted, fit.model.l_function(fit.curve.radii))


def test_variance_gamma_from_fit_to_patterns(survey_file, tmp_path, capsys):
    """Fitted by minimum contrast unasked; a shape below zero is read back; centres are refused."""
    out = tmp_path / "fit.json"
    assert run(["fit", *given(survey_file), "--model", "variance-gamma", *QUICK, "--out", str(out)]) in (0, 3)
    record = json.loads(out.read_text())
    assert (record["model"], record["method"]) == ("variance-gamma", "minimum-contrast")
    assert set(record["parameters"]) == {"parent_intensity", "scale", "shape", "mean_offspring"}
    record["status"], record["reason"] = "ok", ""
    record["parameters"]["shape"]["value"] = -0.2
    out.write_text(json.dumps(record))
    patterns = tmp_path / "patterns.csv"
    options = ["--fit", str(out), "--count", "2", "--seed", "1", "--quiet", "--out"]
    assert run(["simulate", *given(survey_file), *options, str(patterns)]) == 0
    assert patterns.exists()
    capsys.readouterr()
    target = tmp_path / "map"
    assert run(["locate", *given(survey_file), "--fit", str(out), "--out", str(target), "--quiet"]) == 2
    assert "Centres can be located for the models thomas" in capsys.readouterr().err
    assert not target.exists()
    record["parameters"]["shape"]["value"] = -0.5
    out.write_text(json.dumps(record))
    assert run(["simulate", *given(survey_file), *options, str(patterns), "--overwrite"]) == 1
    assert "shape must be a finite number above -0.5" in capsys.readouterr().err


def test_analyse_without_a_map_of_centres(survey_file, tmp_path, monkeypatch, capsys):
    """The whole job for a model whose centres are not located: the answer, and why there is no map."""

    def quick(survey, model, **options):
        fit = fit_clusters(survey, model, bootstrap=0, **options)
        # whatever the shape of so few points: what is looked at is what becomes of an answer
        object.__setattr__(fit, "status", "ok")
        return fit

    monkeypatch.setattr(workflow, "fit_clusters", quick)
    monkeypatch.setattr(workflow, "assess_fit", lambda *_, **__: None)
    out = tmp_path / "results"
    options = [
        "--model",
        "variance-gamma",
        "--simulations",
        "39",
        "--seed",
        "1",
        "--quiet",
        "--out",
        str(out),
    ]
    assert run(["analyse", *given(survey_file), *options]) == 0
    said = capsys.readouterr().out
    assert "fitted by minimum-contrast, and there is no map of centres" in said
    assert "shape: " in said
    assert not (out / "centre_intensity.tif").exists()
    page = (out / "report.html").read_text(encoding="utf-8")
    assert "there is no map of centres" in page
    assert "gamma distribution of shape" in page
    assert "Jalilian" in page
    record = json.loads((out / "fit.json").read_text())
    assert record["choices"]["method"] == "minimum-contrast"
    assert record["centres"] is None
