"""Goodness of fit: the arithmetic of two stages, and fits that are plainly wrong."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import shapely

import geoclust as gc
from geoclust.errors import CannotTell, UsageError
from geoclust.fitting import assessment
from geoclust.fitting.moments import fit_points
from geoclust.fitting.two_stages import Refit, Summary, adjusted_p_value, evidence, hull
from geoclust.models.patterns import draw_pattern, simple_surroundings

PLOT = gc.StudyArea(shapely.box(0, 0, 400, 300).difference(shapely.box(180, 120, 230, 170)))
TRUTH = gc.Thomas(parent_intensity=3e-4, sigma=8.0, mean_offspring=5.0)


def by_contrast(survey: gc.Survey, model: str = "thomas", **choices) -> gc.ClusterFit:
    return gc.fit_clusters(survey, model, method="minimum-contrast", **{"bootstrap": 0, "rng": 3, **choices})


@pytest.fixture(scope="module")
def thomas_survey() -> gc.Survey:
    return gc.Survey(draw_pattern(TRUTH, PLOT, np.random.default_rng(5)).points + PLOT.origin, PLOT)


@pytest.fixture(scope="module")
def thomas_fit(thomas_survey) -> gc.ClusterFit:
    fit = by_contrast(thomas_survey)
    assert fit.ok
    return fit


@pytest.fixture(scope="module")
def assessed(thomas_survey, thomas_fit) -> gc.Assessment:
    return gc.assess_fit(thomas_survey, thomas_fit, simulations=19, first_stage=19, rng=8, workers=1)


def regular_clusters() -> gc.Survey:
    """Thirty rosettes of 3 by 3 points, 5 m apart: no two points of a cluster are nearer than that."""
    rng = np.random.default_rng(2)
    step = 5.0 * np.array([[i, j] for i in (-1, 0, 1) for j in (-1, 0, 1)])
    middles = rng.uniform([10, 10], [390, 290], (60, 2))
    xy = np.concatenate([m + step + rng.uniform(-0.2, 0.2, step.shape) for m in middles[:40]])
    return gc.Survey(xy[PLOT.contains(xy)], PLOT)


def rank_lengths(rows: np.ndarray) -> np.ndarray:
    """Share of rows at least as extreme as each, by comparing sorted ranks pair by pair."""
    usable = rows[:, np.isfinite(rows).all(axis=0)]
    below = (usable[None] < usable[:, None]).sum(axis=1)
    same = (usable[None] == usable[:, None]).sum(axis=1)
    mean_rank = below + 0.5 * (same + 1)
    ranks = np.sort(np.minimum(mean_rank, len(rows) + 1 - mean_rank), axis=1)
    return np.array([np.mean([list(other) <= list(own) for other in ranks]) for own in ranks])


def test_first_stage_of_rank_lengths_by_hand():
    """Five flat curves at 1, 2, 3, 4, 9: the highest and the lowest share the first place."""
    rows = np.outer([9.0, 1.0, 2.0, 3.0, 4.0], np.ones(3))
    p, distance = evidence(rows, np.array([1.0, 2.0, 3.0]), "extreme-rank-length")
    assert p == pytest.approx(2 / 5)
    # (9 - 2.5) over the standard deviation of 1, 2, 3, 4
    assert distance == pytest.approx(6.5 / np.sqrt(1.25))


def test_first_stage_of_squared_deviation_by_hand():
    """Loosmore & Ford 2006: squared distance from the mean of all others."""
    rows = np.outer([4.0, 0.0, 2.0], np.ones(2))
    p, distance = evidence(rows, np.array([1.0, 2.0]), "squared-deviation")
    # 4 - 1 = 3, 0 - 3 = -3, 2 - 2 = 0: two of three deviate as much
    assert p == pytest.approx(2 / 3)
    assert distance == pytest.approx(9 / 4.5)


def test_adjusted_p_value_by_hand():
    """Equal first-stage p-values are ordered by distance; equal in both counts against the survey."""
    found = np.array([[0.1, 3.0], [0.05, 1.0], [0.1, 4.0], [0.1, 3.0], [0.1, 2.0], [0.5, 9.0]])
    assert adjusted_p_value(found) == pytest.approx(4 / 6)
    assert adjusted_p_value(found[[1, 0, 2, 3, 4, 5]]) == pytest.approx(1 / 6)


def test_two_stages_against_a_direct_implementation(thomas_survey, thomas_fit, assessed):
    """The same patterns, with every step written out: refit, simulate, rank, rank again."""
    radii = assessed.curve.radii
    choices = Refit.like(thomas_survey, thomas_fit).choices

    def g_of(points: np.ndarray) -> np.ndarray:
        return gc.nearest_neighbour_function(gc.Survey(points + PLOT.origin, PLOT), radii).values

    def first_stage(points: np.ndarray, seed: np.random.Generator) -> tuple[float, float]:
        model = fit_points(gc.Thomas, points, PLOT, choices).fit.model
        wide = simple_surroundings(model, PLOT)
        rows = np.array([g_of(points)] + [g_of(draw_pattern(model, PLOT, seed, None, wide).points)
                                          for _ in range(19)])  # fmt: skip
        with np.errstate(invalid="ignore", divide="ignore"):
            away = np.abs(rows[0] - rows[1:].mean(axis=0)) / rows[1:].std(axis=0)
        return float(rank_lengths(rows)[0]), float(np.max(away[np.isfinite(away)]))

    own, others = np.random.default_rng(8).spawn(2)
    model = fit_points(gc.Thomas, thomas_survey.local_xy, PLOT, choices).fit.model
    found = [first_stage(thomas_survey.local_xy, own)]
    for seed in others.spawn(19):
        points = draw_pattern(model, PLOT, seed, None, simple_surroundings(model, PLOT)).points
        found.append(first_stage(points, seed))
    as_strong = [f[0] < found[0][0] or (f[0] == found[0][0] and f[1] >= found[0][1] - 1e-12) for f in found]
    assert assessed.first_p_values == pytest.approx([p for p, _ in found])
    assert assessed.p_value == pytest.approx(np.mean(as_strong))
    assert assessed.model.parameters == pytest.approx(thomas_fit.parameters, rel=1e-4)


def test_regular_clusters_are_not_reproduced():
    survey = regular_clusters()
    fit = by_contrast(survey)
    assert fit.ok
    by_deviation = gc.assess_fit(
        survey, fit, simulations=19, first_stage=19, statistic="squared-deviation", rng=1
    )
    assert by_deviation.p_value == pytest.approx(1 / 20)
    result = gc.assess_fit(survey, fit, simulations=19, first_stage=19, rng=1)
    assert result.p_value == pytest.approx(1 / 20)
    assert not result.reproduced
    below = [d for d in result.departures()["G"] if d[2] == "below"]
    # hardly a neighbour is nearer than 4.6 m
    assert below
    assert below[0][0] < 4.6
    assert "does not reproduce the distances from points to the next point (p = 0.05)" in result.sentence()
    assert "fewer points with a neighbour within" in result.sentence()


def test_a_true_model_is_not_rejected(thomas_survey, thomas_fit):
    """Seeded: p is uniform if all is right, so one of these is below 0.05 once in twenty seeds."""
    result = gc.assess_fit(
        thomas_survey, thomas_fit, simulations=19, first_stage=19, functions=("G", "F"), rng=2
    )
    assert result.p_value > 0.05
    assert set(result.curves) == {"G", "F"}
    assert "The fitted model reproduces the distances from points to the next point and" in result.sentence()
    frame = result.curves["F"].to_frame()
    assert (frame["lower"] <= frame["upper"]).all()


def test_one_stage_says_that_it_is_conservative(thomas_survey, thomas_fit):
    result = gc.assess_fit(thomas_survey, thomas_fit, simulations=99, two_stage=False, rng=4)
    assert result.conservative
    assert result.model is thomas_fit.model
    assert "on the safe side" in result.sentence()
    assert "conservative" in (result.curve.interval or "")
    assert (result.p_value * 100) % 1 == pytest.approx(0, abs=1e-9)


def test_the_envelope_is_left_exactly_by_what_is_rejected():
    """Rows with at most the critical p-value leave the hull of the others, the rest stay inside."""
    rng = np.random.default_rng(3)
    rows = rng.normal(size=(40, 6)).cumsum(axis=1)
    share = rank_lengths(rows)
    for most in (1, 2, 5, 13):
        low, high = hull(rows, most)
        outside = ((rows < low) | (rows > high)).any(axis=1)
        np.testing.assert_array_equal(outside, share <= most / 40 + 1e-12)


def test_posterior_fits_are_refitted_by_contrast_with_any_number_of_workers(
    thomas_survey, thomas_fit, assessed
):
    """The test is then about the family: the record says by what it was fitted."""
    by_posterior = replace(thomas_fit, method="posterior")
    again = gc.assess_fit(thomas_survey, by_posterior, simulations=19, first_stage=19, rng=8, workers=3)
    assert str(again.record()["fitted_by"]).startswith("minimum contrast on g, ")
    assert again.p_value == assessed.p_value
    np.testing.assert_array_equal(again.first_p_values, assessed.first_p_values)
    np.testing.assert_array_equal(again.curve.lower, assessed.curve.lower)


def test_with_covariates_the_intensity_is_refitted():
    """A trend that the intensity explains: refits see thinned patterns with a fresh intensity."""
    east = gc.coordinate_covariates(PLOT)[0]
    rng = np.random.default_rng(6)
    xy = draw_pattern(gc.Thomas(6e-4, 8.0, 5.0), PLOT, rng).points + PLOT.origin
    xy = xy[rng.random(len(xy)) < (xy[:, 0] / 400) ** 1.0]
    survey = gc.Survey(xy, PLOT)
    # only the range of distances is taken over from this fit
    fit = replace(by_contrast(survey), intensity=gc.fit_intensity(survey, [east], rng=1))
    result = gc.assess_fit(survey, fit, simulations=19, first_stage=19, rng=1)
    assert result.p_value > 0.05
    assert len(result.first_p_values) == 20


def test_summary_reaches_over_open_ground(thomas_survey):
    """F between clusters: radii beyond the mean spacing of points, three spacings at most."""
    spacing = 1 / np.sqrt(thomas_survey.intensity)
    far = Summary.of_model(thomas_survey, gc.Thomas(1e-6, 8.0, 5.0), ("F",)).radii[-1]
    near = Summary.of_model(thomas_survey, gc.Thomas(1e-6, 8.0, 5.0), ("G",)).radii[-1]
    assert far == pytest.approx(3 * spacing)
    assert near == pytest.approx(1.5 * spacing)


@pytest.mark.parametrize(
    ("wrong", "told"),
    [
        ({"functions": ("g",)}, "functions must be one of G, F, J; got 'g'"),
        ({"functions": ()}, "functions must be a tuple of different names"),
        ({"functions": "G"}, "functions must be a tuple of different names"),
        ({"statistic": "largest"}, "statistic must be one of"),
        ({"simulations": 9}, "simulations must be at least 19"),
        ({"first_stage": 9}, "first_stage must be at least 19"),
        ({"statistic": "squared-deviation", "functions": ("G", "F")}, "of one function"),
    ],
)
def test_what_is_not_allowed(wrong, told, thomas_survey, thomas_fit):
    with pytest.raises(UsageError, match=told):
        gc.assess_fit(thomas_survey, thomas_fit, rng=1, **wrong)


def test_nothing_to_assess():
    survey = gc.Survey(PLOT.uniform_points(150, 1), PLOT)
    fit = by_contrast(survey)
    assert fit.status == "no-clustering"
    with pytest.raises(CannotTell, match="no fitted model to assess") as told:
        gc.assess_fit(survey, fit, rng=1)
    assert told.value.status == "no-clustering"


def test_fits_with_too_many_centres_are_not_simulated(thomas_survey, thomas_fit, monkeypatch):
    """Patterns whose refit is out of bounds are drawn again; a survey whose refit is cannot be assessed."""
    asked = []

    def few(model, area):
        # the survey passes, and every second pattern after it
        asked.append(model)
        return 0.0 if len(asked) == 1 or len(asked) % 2 else 1e9

    monkeypatch.setattr(assessment, "_centres", few)
    result = gc.assess_fit(thomas_survey, thomas_fit, simulations=19, first_stage=19, rng=8, workers=1)
    assert len(asked) == 1 + 2 * 19
    assert len(result.first_p_values) == 20
    monkeypatch.setattr(assessment, "_centres", lambda model, area: 1e9)
    with pytest.raises(CannotTell, match="more centres than can be simulated"):
        gc.assess_fit(thomas_survey, thomas_fit, simulations=19, rng=8)
