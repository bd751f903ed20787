"""A fit by Palm or composite likelihood on the page, in the record, and read back."""

from __future__ import annotations

import dataclasses
import json
from importlib import resources

import jsonschema
import numpy as np
import pytest
import shapely

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.errors import UsageError
from geoclust.fitting.fit import fit_clusters
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas
from geoclust.report import canvas, figures, method, tables
from geoclust.report.page import write_page
from geoclust.report.record import fit_record, library_versions, write_record
from geoclust.report.saved_fit import read_fit

PLOT = StudyArea(shapely.box(0, 0, 500, 500), "EPSG:25832")


@pytest.fixture(scope="module", params=["palm", "composite-likelihood"])
def fitted(request):
    points = draw_pattern(Thomas(3e-4, 9.0, 5.0), PLOT, np.random.default_rng(8)).points
    survey = Survey(points + PLOT.origin, PLOT)
    return survey, fit_clusters(survey, method=request.param, bootstrap=39, rng=1)


def test_surface_shows_loss_and_bootstrap(fitted):
    _, fit = fitted
    assert fit.ok, fit.reason
    drawn = figures.surface_figure(fit)
    labels = [text.get_text() for text in drawn.axes[0].get_legend().get_texts()]
    assert labels == ["estimates of the bootstrap", "estimate"]
    canvas.svg_text(drawn)
    # without a bootstrap there is neither its cloud nor the bold line
    bare = dataclasses.replace(fit, draws={}, surface=dataclasses.replace(fit.surface, level=None))
    labels = [text.get_text() for text in figures.surface_figure(bare).axes[0].get_legend().get_texts()]
    assert labels == ["estimate"]
    assert figures.contrast_figure(fit) is None


def test_page_names_the_method_and_its_source(fitted, tmp_path):
    survey, fit = fitted
    path = tmp_path / "report.html"
    write_page(
        path, survey=survey, audit=None, envelopes=None, fit=fit, status=fit.status, reason=fit.reason,
        centres=None, choices={}, versions=library_versions(), command=None, title="Mounds", files=[],
    )  # fmt: skip
    text = path.read_text(encoding="utf-8")
    source = {"palm": "Tanaka U, Ogata Y, Stoyan D (2008)", "composite-likelihood": "Guan Y (2006)"}[
        fit.method
    ]
    assert source in text
    assert "95 % of the bootstrap" in text
    assert "contrast up to 1.25" not in text
    steps = method.steps(fit, False)
    assert any(
        step.name == "Fit" and str(2008 if fit.method == "palm" else 2006) in step.source for step in steps
    )
    rows = dict(tables.choice_rows(fit.choices))
    assert rows["pairs of points within that range"]
    assert rows["log-likelihood of the pairs over that of complete randomness"]


def test_record_is_valid_and_read_back(fitted, tmp_path):
    survey, fit = fitted
    record = fit_record(
        status=fit.status,
        reason=fit.reason,
        fit=fit,
        envelopes=None,
        centres=None,
        audit=None,
        choices={},
        seed=1,
    )
    schema = json.loads((resources.files("geoclust.report") / "fit.schema.json").read_text("utf-8"))
    jsonschema.validate(record, schema)
    path = tmp_path / "fit.json"
    write_record(path, record)
    again = read_fit(path, survey)
    assert again.method == fit.method
    assert again.parameters == fit.parameters
    assert again.curve.function == "g"
    assert again.curve.radii[-1] == fit.curve.radii[-1]


def test_a_method_that_there_is_not_is_told(fitted):
    with pytest.raises(UsageError, match="palm"):
        fit_clusters(fitted[0], method="likelihood", rng=1)
