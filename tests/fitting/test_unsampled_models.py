"""Models whose centres cannot be sampled: how they are fitted, what they refuse, what the report says."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
import shapely
from example_models import example

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.centres.locate import locate_centres
from geoclust.errors import CannotTell, UsageError
from geoclust.fitting import moments
from geoclust.fitting.bootstrap import percentile_intervals
from geoclust.fitting.contrast import LevelSurface
from geoclust.fitting.fit import METHODS, fit_clusters, method_for
from geoclust.fitting.search import OneLevel
from geoclust.fitting.second_level import SecondLevel
from geoclust.models.catalogue import MODELS, SAMPLED
from geoclust.models.nested_thomas import NestedThomas
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas
from geoclust.report import answer, figures, tables
from geoclust.simulation.patterns import simulate_patterns

PLOT = StudyArea(shapely.box(0, 0, 600, 600))
TRUTH = NestedThomas(5e-4, 28.0, 20e-4, 4.0, 2.0)
UNSAMPLED = sorted(set(MODELS) - set(SAMPLED))


@pytest.fixture(scope="module")
def survey() -> Survey:
    return Survey(draw_pattern(TRUTH, PLOT, np.random.default_rng(41)).points + PLOT.origin, PLOT)


@pytest.fixture(scope="module")
def clustered():
    """The surveys here are clustered, which need not be tested each time."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(moments, "clustering_p_value", lambda *_: 0.005)
        yield


@pytest.fixture(scope="module")
def fit(survey, clustered):
    return fit_clusters(survey, "nested-thomas", bootstrap=39, level_simulations=39, rng=2)


def test_the_method_follows_the_model():
    assert UNSAMPLED == ["nested-thomas", "variance-gamma"]
    for name, kind in MODELS.items():
        assert method_for(kind) == ("posterior" if name in SAMPLED else "minimum-contrast")
        for method in METHODS[1:]:
            assert method_for(kind, method) == method


@pytest.mark.parametrize("model", UNSAMPLED)
def test_the_posterior_is_refused_before_any_work(survey, model):
    with pytest.raises(UsageError, match=f"{model} is fitted by minimum-contrast, palm") as caught:
        fit_clusters(survey, model, method="posterior", rng=1)
    assert "thomas, matern-cluster" in str(caught.value)
    with pytest.raises(UsageError, match="guess"):
        fit_clusters(survey, model, method="guess", rng=1)
    with pytest.raises(UsageError, match="background"):
        fit_clusters(survey, model, background=True, rng=1)
    with pytest.raises(UsageError, match="level_simulations"):
        fit_clusters(survey, model, level_simulations=5, rng=1)


def test_a_nested_survey_is_given_both_levels(survey, fit):
    assert fit.ok, fit.reason
    assert fit.method == "minimum-contrast"
    assert fit.choices["second_level_p_value"] == pytest.approx(2 / 40)
    assert fit.choices["second_level_simulations"] == 39
    assert all(d <= 1 for d in fit.choices["second_level_contrast_drops"])
    near, far = fit.choices["second_level_ranges_m"]
    assert near < far <= fit.choices["r_max_m"]
    assert set(fit.choices["one_level"]) == {"parent_intensity", "sigma"}
    assert isinstance(fit.surface, LevelSurface)
    assert set(fit.intervals) == set(fit.parameters)
    # the model has as many points as were counted
    assert fit.model.intensity == pytest.approx(survey.intensity, rel=1e-9)
    np.testing.assert_allclose(
        fit.draws["inner_intensity"] * fit.draws["mean_offspring"] * PLOT.area,
        np.round(fit.draws["inner_intensity"] * fit.draws["mean_offspring"] * PLOT.area),
        rtol=1e-9,
    )
    drawn = simulate_patterns(fit, PLOT, count=2, rng=1)
    assert set(drawn["pattern"]) == {1, 2}


def test_a_second_level_that_does_not_earn_its_place_is_no_answer(survey, clustered, monkeypatch):
    """Refused by the p-value whatever the fit: no interval is made then, and no pattern is simulated."""
    second = SecondLevel((0.3, 0.2), 0.4, 25, OneLevel(1.0, 1e-4, 20.0), (80.0, 150.0))
    monkeypatch.setattr(moments, "second_level_test", lambda *_, **__: second)
    fit = fit_clusters(survey, "nested-thomas", bootstrap=39, rng=2)
    assert fit.status == "one-level"
    assert "fit the Thomas process (model thomas)" in fit.reason
    assert "p = 0.4" in fit.reason
    assert fit.intervals == {}
    assert fit.choices["second_level_p_value"] == 0.4
    with pytest.raises(CannotTell, match="One level"):
        simulate_patterns(fit, PLOT, count=1, rng=1)
    open_fit = fit_clusters(survey, "nested-thomas", bootstrap=0, level_simulations=0, rng=2)
    assert open_fit.ok
    assert "second_level_p_value" not in open_fit.choices


def test_without_clusters_no_second_level_is_tried(monkeypatch):
    monkeypatch.setattr(moments, "clustering_p_value", lambda *_: 0.5)
    random = Survey(PLOT.uniform_points(150, 7), PLOT)
    fit = fit_clusters(random, "nested-thomas", bootstrap=0, rng=1)
    assert fit.status == "no-clustering"
    assert "second_level_p_value" not in fit.choices


@pytest.mark.parametrize("model", UNSAMPLED)
def test_centres_are_not_located(survey, fit, model):
    given = dataclasses.replace(fit, model=example(MODELS[model]))
    with pytest.raises(
        UsageError, match="Centres can be located for the models thomas, matern-cluster"
    ) as caught:
        locate_centres(survey, given, rng=1)
    assert model in str(caught.value)


def test_variance_gamma_fit_and_what_is_said_of_it(survey, clustered):
    fit = fit_clusters(survey, "variance-gamma", bootstrap=0, rng=2)
    assert fit.method == "minimum-contrast"
    assert answer.radius_holding(fit, 0.5)[1] is None
    rng = np.random.default_rng(3)
    draws = {name: value * rng.uniform(0.8, 1.2, 50) for name, value in fit.parameters.items()}
    fit = dataclasses.replace(fit, draws=draws, intervals=percentile_intervals(draws))
    radius, limits = answer.radius_holding(fit, 0.5)
    assert radius == pytest.approx(fit.model.reach(0.5))
    # the interval comes from the radius of each draw, not from the scale alone
    rows = zip(*(fit.draws[p.name] for p in fit.model.described), strict=True)
    radii = [type(fit.model)(*row).reach(0.5) for row in rows]
    assert limits == pytest.approx(tuple(np.quantile(radii, [0.025, 0.975])))
    # a fit read from a file has intervals, but no draws
    assert answer.radius_holding(dataclasses.replace(fit, draws={}), 0.5) == (radius, None)


def test_the_answer_tells_both_levels(survey, fit):
    found = answer.compose(survey=survey, envelopes=None, fit=fit, status="ok", reason="", centres=None)
    said = " ".join(text for _, text in found.sentences)
    assert "Small clusters lie in groups" in said
    assert "groups of clusters per hectare" in said
    assert "small clusters per hectare" in said
    labels = [tile.label for tile in found.tiles]
    assert labels[:2] == ["Groups of clusters per hectare", "Small clusters per hectare"]
    names = [row[0] for row in tables.parameter_table(fit, survey, None).rows]
    assert names[:4] == ["outer intensity ρ₁", "outer sigma σ₁", "inner intensity ρ₂", "inner sigma σ₂"]
    refused = answer.compose(
        survey=survey, envelopes=None, fit=fit, status="one-level", reason="No.", centres=None
    )
    assert any("--model thomas" in advice for advice in refused.advice)


def test_the_surface_of_both_sigmas_is_drawn(fit):
    figure = figures.surface_figure(fit)
    axes = figure.axes[0]
    assert axes.get_xlabel() == "outer sigma (m)"
    assert axes.get_ylabel() == "inner sigma (m)"
    dot = next(line for line in axes.lines if line.get_label() == "estimate")
    assert (dot.get_xdata()[0], dot.get_ydata()[0]) == (fit.model.outer_sigma, fit.model.inner_sigma)
    low, high = axes.get_xlim()
    assert low <= fit.model.outer_sigma <= high
    # an ordinary fit has none
    plain = dataclasses.replace(fit, model=Thomas(1e-4, 10.0, 5.0), surface=None)
    assert figures.level_figure(plain) is None
