"""Contrast fits end to end: intervals by bootstrap, and every reason why the data cannot tell."""

from __future__ import annotations

import json
from functools import partial
from importlib import resources
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import shapely
from known_areas import sample_reserve

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.envelopes import global_envelope
from geoclust.curves.second_order import SecondOrder, l_function
from geoclust.errors import CannotTell, UsageError
from geoclust.fitting import convergence, posterior, status
from geoclust.fitting.convergence import sample_until_converged
from geoclust.fitting.fit import fit_clusters
from geoclust.fitting.moments import ContrastChoices, fit_points
from geoclust.fitting.sampling import ChainSetup
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

DATA = Path(__file__).parents[1] / "data"
PLOT = StudyArea(shapely.box(0, 0, 500, 500))


def by_contrast(survey: Survey, **choices):
    return fit_clusters(survey, "thomas", method="minimum-contrast", **{"bootstrap": 0, "rng": 3, **choices})


def scattered(centres, each: int, spread: float, seed: int) -> np.ndarray:
    at = np.repeat(np.asarray(centres, float), each, axis=0)
    return at + np.random.default_rng(seed).normal(0, spread, at.shape)


def no_clusters() -> np.ndarray:
    return PLOT.uniform_points(150, 1)


def pinpoint_clusters() -> np.ndarray:
    """Four points within a centimetre at each of 40 places, where the kernel of g is 6 m wide."""
    return scattered(np.random.default_rng(1).uniform(20, 480, (40, 2)), 4, 0.01, 2)


def drift() -> np.ndarray:
    """Density grows as the square of the easting, without any cluster."""
    return 500 * np.random.default_rng(1).uniform(0, 1, (400, 2)) ** [1 / 3, 1]


def five_clusters() -> np.ndarray:
    return scattered(np.random.default_rng(1).uniform(60, 440, (5, 2)), 30, 8.0, 2)


def weak_clusters() -> np.ndarray:
    """Less than one point a cluster: hardly any siblings to learn from."""
    pattern = draw_pattern(Thomas(6e-4, 12.0, 0.6), PLOT, np.random.default_rng(0))
    return pattern.points + PLOT.origin


@pytest.mark.parametrize(
    ("expected", "points", "bootstrap", "said"),
    [
        ("no-clustering", no_clusters, 0, "chance alone"),
        ("on-bound", pinpoint_clusters, 0, "limit of the search"),
        ("sigma-beyond-range", drift, 0, "drifts across it"),
        ("few-clusters", five_clusters, 0, "fewer than 10"),
        ("flat-valley", weak_clusters, 39, "95 % interval reaches"),
    ],
)
def test_every_reason_why_the_data_cannot_tell(expected, points, bootstrap, said):
    fit = by_contrast(Survey(points(), PLOT), bootstrap=bootstrap)
    assert fit.status == expected
    assert expected in status.REASONS
    assert said in fit.reason
    assert fit.reason.endswith(".")
    assert "{" not in fit.reason
    assert not fit.ok


def test_every_reason_is_a_sentence_that_can_be_filled_in():
    """The reasons of the record's schema are those that there are sentences for."""
    schema = json.loads((resources.files("geoclust.report") / "fit.schema.json").read_text("utf-8"))
    assert set(status.REASONS) == set(schema["properties"]["status"]["enum"]) - {"ok"}
    figures = {
        "n": 3, "fewest": 20, "p_value": 0.3, "r_max": 40.0, "names": "sigma", "bounds": "1 to 2 m",
        "scale": 30.0, "clusters": 4.2, "low": 1.0, "high": 99.0, "unit": "m", "r_hat": 1.3, "size": 12.0,
    }  # fmt: skip
    for name in status.REASONS:
        said = status.sentence(name, **figures)
        assert said.endswith(".")
        assert "{" not in said
    assert status.sentence("ok") == ""


def test_chains_that_disagree_are_no_answer(monkeypatch):
    """One short round on a survey that needs many: a named status, not a map."""
    monkeypatch.setattr(posterior, "sample_posterior", partial(posterior.sample_posterior, most_rounds=1))
    monkeypatch.setattr(posterior, "HOPELESS_SIZE", 1e9)
    pattern = draw_pattern(Thomas(2e-4, 8.0, 6.0), PLOT, np.random.default_rng(6))
    fit = fit_clusters(Survey(pattern.points + PLOT.origin, PLOT), rng=1)
    assert fit.status == "not-converged"
    assert "disagree" in fit.reason


def test_patience_is_counted_in_kernels(monkeypatch):
    """Without patience the third round is the last, whatever is still missing: no clock decides."""
    monkeypatch.setattr(convergence, "PATIENCE", 0.0)
    pattern = draw_pattern(Thomas(2e-4, 8.0, 6.0), PLOT, np.random.default_rng(6))
    setup = ChainSetup(pattern.points, PLOT, Thomas(2e-4, 8.0, 6.0))
    sample = sample_until_converged(setup, rng=np.random.default_rng(1), chains=2, enough=1e9)
    assert not sample.converged
    first = convergence.FIRST
    lengths = [first, first + first // 2]
    moves = int(max(4.0 * setup.start.parent_intensity * setup.wide.area, 100.0))
    assert sample.moves == (lengths[1] + lengths[1] // 2) * moves


def test_too_few_points_for_any_fit():
    survey = Survey(PLOT.uniform_points(status.FEWEST_POINTS - 1, 1), PLOT)
    with pytest.raises(CannotTell, match="19 points") as caught:
        by_contrast(survey)
    assert caught.value.status == "too-few-points"


@pytest.mark.parametrize(
    ("file", "side"),
    [("caveolae.csv", 500.0), ("nuclei_px512.csv", 512.0)],
)
@pytest.mark.parametrize("function", ["g", "K"])
def test_regular_patterns_have_no_clusters(file, side, function):
    """Caveolae (Davison & Hinkley 1997, mild inhibition) and cell nuclei, which cannot overlap."""
    xy = pd.read_csv(DATA / file)[["x", "y"]].to_numpy(float)
    fit = by_contrast(Survey(xy, StudyArea(shapely.box(0, 0, side, side))), function=function)
    assert fit.status == "no-clustering"
    assert fit.choices["clustering_p_value"] > 0.2


def test_brambles_of_age_0_are_clustered_at_a_few_centimetres():
    """Bramble canes (Hutchings 1979; Diggle 1983) on the 9 m plot, recorded to 9 mm.

    Each age is aggregated. The shoots stand in ones and twos: the spread lies
    between the recording step and half a metre, inside the search and not on a bound.
    """
    canes = pd.read_csv(DATA / "brambles.csv").query("age == 0")[["x", "y"]].to_numpy() * 9.0
    survey = Survey(canes, StudyArea(shapely.box(0, 0, 9, 9)))
    for function in ("g", "K"):
        fit = by_contrast(survey, function=function)
        assert fit.ok, fit.reason
        assert fit.choices["clustering_p_value"] == pytest.approx(1 / 200)
        assert 0.009 < fit.parameters["sigma"] < 0.5
        # two curves of one pattern agree on the size of its clusters
        assert fit.parameters["sigma"] == pytest.approx(0.043, rel=0.25)


@pytest.fixture(scope="module")
def clear_survey() -> Survey:
    pattern = draw_pattern(Thomas(2e-4, 8.0, 6.0), PLOT, np.random.default_rng(6))
    return Survey(pattern.points + PLOT.origin, PLOT)


def test_bootstrap_interval(clear_survey):
    """The middle 95 % of refitted patterns, whatever the number of workers."""
    fits = [by_contrast(clear_survey, bootstrap=39, workers=w) for w in (1, 3)]
    assert fits[0].intervals == fits[1].intervals
    assert fits[0].parameters == fits[1].parameters
    assert fits[0].choices == fits[1].choices
    fit = fits[0]
    assert fit.ok
    assert fit.seed == 3
    for name, value in fit.parameters.items():
        assert fit.draws[name].shape == (39,)
        low, high = fit.intervals[name]
        assert (low, high) == tuple(np.quantile(fit.draws[name], [0.025, 0.975]))
        assert low < value < high
    # mu follows from rho and the number of points in every draw
    np.testing.assert_allclose(
        fit.draws["parent_intensity"] * fit.draws["mean_offspring"] * PLOT.area,
        np.round(fit.draws["parent_intensity"] * fit.draws["mean_offspring"] * PLOT.area),
        rtol=1e-9,
    )
    assert by_contrast(clear_survey, bootstrap=0).intervals == {}


def test_every_choice_is_reported(clear_survey):
    fit = by_contrast(clear_survey, function="K", r_max=60.0, exponent=0.5)
    assert fit.choices["function"] == "K"
    assert fit.choices["exponent"] == 0.5
    assert fit.choices["r_max_m"] == 60.0
    assert fit.choices["range_chosen_by"] == "user"
    assert fit.curve.function == "K"
    assert fit.curve.radii[-1] == 60.0
    np.testing.assert_allclose(fit.fitted, fit.model.k_function(fit.curve.radii))
    assert by_contrast(clear_survey).choices["range_chosen_by"] == "first fit"


@pytest.mark.parametrize(
    ("choices", "said"),
    [({"method": "guess"}, "minimum-contrast"), ({"bootstrap": 5}, "39"), ({"function": "J"}, "g, K, L")],
)
def test_bad_arguments(clear_survey, choices, said):
    with pytest.raises(UsageError, match=said):
        fit_clusters(clear_survey, **{"method": "minimum-contrast", "rng": 1, **choices})


def test_recovery_in_the_ragged_reserve():
    """Ten surveys in the sample reserve: medians within 15 % of rho and 10 % of sigma, mu.

    A small version of `tests/studies/recovery.py`, where 100 surveys give a root
    mean square of log(estimate/truth) of 0.12 for rho and 0.06 for sigma; the
    median of ten then has standard errors of 0.05 and 0.025.
    """
    area = StudyArea(sample_reserve())
    truth = Thomas(1e-4, 15.0, 6.0)
    for function in ("g", "K"):
        found = [
            list(fit_points(Thomas, draw_pattern(truth, area, s).points, area,
                            ContrastChoices(function)).fit.model.parameters.values())
            for s in np.random.default_rng(21).spawn(10)
        ]  # fmt: skip
        ratio = np.median(found, axis=0) / list(truth.parameters.values())
        np.testing.assert_allclose(ratio, 1.0, atol=0.15)
        assert ratio[1] == pytest.approx(1.0, abs=0.1)


def test_the_test_for_clustering_is_uniform_under_randomness():
    """p-values of 200 random patterns: no more small ones than chance makes (binomial, 99.9 %).

    40 points in a square, 39 simulations each, one-sided; ties make the test
    err on the safe side only.
    """
    area = StudyArea(shapely.box(0, 0, 100, 100))
    radii = np.linspace(1.0, 25.0, 25)
    p_values = []
    for seed in np.random.default_rng(23).spawn(200):
        drawn = [area.local_uniform_points(40, seed) for _ in range(39)]
        curves = [SecondOrder.of_points(p, area, radii, None, workers=1).l().values for p in drawn]
        observed = l_function(Survey(area.uniform_points(40, seed), area), radii, workers=1)
        p_values.append(global_envelope(observed, np.array(curves), alternative="clustered").p_value)
    p_values = np.array(p_values)
    for level in (0.05, 0.1, 0.25, 0.5, 0.75):
        expected, error = 200 * level, np.sqrt(200 * level * (1 - level))
        assert abs(np.sum(p_values <= level + 1e-9) - expected) < 3.3 * error
