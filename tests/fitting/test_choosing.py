"""Choice of a model by held-out tiles: their geometry, the predictive density, and what it prefers."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from known_areas import sample_reserve
from scipy.stats import nbinom

import geoclust as gc
from geoclust.errors import CannotTell, UsageError
from geoclust.fitting import choosing, convergence
from geoclust.fitting.choosing import ModelComparison, TileScorer, average, in_a_row
from geoclust.fitting.sampling import Draws
from geoclust.fitting.tiles import cut_into_tiles
from geoclust.models.patterns import draw_pattern

PLOT = gc.StudyArea(shapely.box(0, 0, 240, 180))


@pytest.fixture(scope="module")
def reserve_tiles():
    return cut_into_tiles(gc.StudyArea(sample_reserve()), 24, 5)


def test_tiles_make_up_the_study_area(reserve_tiles):
    """Shapely's union and intersections as a second opinion; compact tiles of about the same area."""
    area = reserve_tiles.area
    polygons = [t.polygon for t in reserve_tiles.areas]
    assert sum(t.area for t in reserve_tiles.areas) == pytest.approx(area.area, rel=1e-9)
    assert shapely.symmetric_difference(shapely.union_all(polygons), area.polygon).area < 1e-6 * area.area
    overlaps = [
        shapely.intersection(polygons[a], polygons[b]).area for a in range(24) for b in range(a + 1, 24)
    ]
    assert max(overlaps) < 1e-6 * area.area
    shares = np.array([t.area for t in reserve_tiles.areas]) / area.area * 24
    assert shares.min() > 0.3
    assert shares.max() < 1.7


def test_points_belong_to_the_tile_that_holds_them(reserve_tiles):
    area = reserve_tiles.area
    xy = area.uniform_points(400, 1)
    home = reserve_tiles.find(area.local(xy))
    away = [reserve_tiles.areas[k].polygon.distance(shapely.Point(p)) for k, p in zip(home, xy, strict=True)]
    assert max(away) < 1e-6


def test_folds_are_of_equal_size_and_leave_the_rest(reserve_tiles):
    area = reserve_tiles.area
    numbers = np.bincount(reserve_tiles.fold)
    assert len(numbers) == 5
    assert numbers.max() - numbers.min() <= 1
    for fold in range(5):
        held = np.flatnonzero(reserve_tiles.fold == fold)
        rest = reserve_tiles.without(held)
        taken = sum(reserve_tiles.areas[k].area for k in held)
        assert rest.area + taken == pytest.approx(area.area, rel=1e-8)
        # tiles of a fold are further apart than tiles are wide, so none touch
        away = [
            reserve_tiles.areas[a].polygon.distance(reserve_tiles.areas[b].polygon)
            for a in held for b in held if a < b
        ]  # fmt: skip
        assert min(away) > 0


@pytest.mark.parametrize(("kind", "scale"), [(gc.Thomas, 12.0), (gc.MaternCluster, 20.0)])
def test_predictive_density_with_known_parameters(kind, scale):
    """No points in the rest, none up to three in the tile: sums over their partitions, by quadrature.

    Centres without a point in the rest R have the intensity rho exp(-mu s_R(c)). Of a block of points
    the weight is the integral of rho exp(-mu (s_R + s_T)) prod mu k(x - c) (as in the exact
    posterior over set partitions); of a point of the background, its intensity.
    """
    whole = gc.StudyArea(shapely.box(0, 0, 200, 100))
    rest, tile = gc.StudyArea(shapely.box(0, 0, 100, 100)), gc.StudyArea(shapely.box(100, 0, 200, 100))
    rho, mu, background, count = 2e-4, 4.0, 1e-6, 600
    model = kind.of(rho, scale, mu)
    step = 0.5
    x, y = np.meshgrid(np.arange(20.25, 280, step), np.arange(-79.75, 180, step))
    at = np.column_stack([x.ravel(), y.ravel()])
    in_rest, in_tile = (kind.area_shares(a, at - a.origin, scale) for a in (rest, tile))
    unseen = np.sum(rho * np.exp(-mu * in_rest) * -np.expm1(-mu * in_tile)) * step**2
    places = rho * np.exp(-mu * (in_rest + in_tile)) * step**2

    def block(*points: np.ndarray) -> float:
        kernels = [mu * model.offspring_density(np.hypot(*(at - p).T)) for p in points]
        return float(np.sum(places * np.prod(kernels, axis=0)))

    p = np.array([[110.0, 50.0], [118.0, 60.0], [180.0, 20.0]])
    one = [background + block(q) for q in p]
    two = {(a, b): block(p[a], p[b]) for a, b in ((0, 1), (0, 2), (1, 2))}
    pairs = two[0, 1] * one[2] + two[0, 2] * one[1] + two[1, 2] * one[0]
    exact = {
        0: 1.0,
        1: one[0],
        2: one[0] * one[1] + two[0, 1],
        3: one[0] * one[1] * one[2] + pairs + block(*p),
    }
    draws = np.tile([scale, rho, mu, background], (count, 1))
    scorer = TileScorer(kind, whole, rest, np.empty((0, 2)), np.zeros(count + 1, np.int64), draws, 1)
    for n, value in exact.items():
        found, error = average(scorer.log_densities(tile, p[:n] - whole.origin, np.random.default_rng(n)))
        # four Monte Carlo errors, and what tables and lattices leave: below 1 % per point and of the void
        assert found == pytest.approx(-unseen - background * tile.area + np.log(value),
                                      abs=4 * error + 0.01 * (n + 1)), n  # fmt: skip


def test_clusters_of_the_rest_reach_into_the_tile():
    """A centre on the border with points in the rest: its offspring in the tile are Poisson."""
    whole = gc.StudyArea(shapely.box(0, 0, 200, 100))
    rest, tile = gc.StudyArea(shapely.box(0, 0, 100, 100)), gc.StudyArea(shapely.box(100, 0, 200, 100))
    # so few other centres that they do not matter
    draws = np.tile([10.0, 1e-12, 6.0, 0.0], (50, 1))
    centre = np.array([[100.0, 50.0]]) - whole.origin
    scorer = TileScorer(
        gc.Thomas, whole, rest, np.tile(centre, (50, 1)), np.arange(51, dtype=np.int64), draws, 1
    )
    points = np.array([[104.0, 50.0], [101.0, 58.0]]) - whole.origin
    values = scorer.log_densities(tile, points, np.random.default_rng(1))
    density = gc.Thomas(1e-4, 10.0, 6.0).offspring_density(np.hypot(*(points - centre).T))
    # half of the kernel lies in the tile
    assert values == pytest.approx(-3.0 + np.log(6.0 * density).sum(), abs=1e-3)


def test_constant_intensity_in_closed_form():
    """A Gamma posterior makes the number in a tile negative binomial, places uniform (scipy's nbinom)."""
    xy = PLOT.uniform_points(60, 4)
    survey = gc.Survey(xy, PLOT)
    cut = cut_into_tiles(PLOT, 8, 4)
    home = cut.find(survey.local_xy)
    found = choosing._random_scores(survey, cut, home)
    for k, tile in enumerate(cut.areas):
        others = np.flatnonzero(cut.fold == cut.fold[k])
        seen = int((~np.isin(home, others)).sum())
        rest = PLOT.area - sum(cut.areas[j].area for j in others) + PLOT.area / 60
        n = int((home == k).sum())
        number = nbinom.logpmf(n, seen + 1, rest / (rest + tile.area))
        # n! orders of n uniform places
        expected = number + np.log(np.arange(1, n + 1)).sum() - n * np.log(tile.area)
        assert found[k] == pytest.approx(expected, abs=1e-8)


def test_occupied_centres_are_those_with_points():
    draws = Draws(
        *(np.zeros((1, 2), np.int64) for _ in range(2)), *(np.full((1, 2), v) for v in (3.0, 0.1, 0.2, 5.0)),
        [[np.arange(6.0).reshape(3, 2), np.arange(4.0).reshape(2, 2)]],
        np.array([[[2, 0, 2, -1], [1, 1, 1, 1]]], np.int32),
    )  # fmt: skip
    centres, start, parameters = choosing.occupied(draws, np.array([10.0, 0.0]))
    np.testing.assert_array_equal(centres, [[10, 1], [14, 5], [12, 3]])
    np.testing.assert_array_equal(start, [0, 2, 3])
    np.testing.assert_array_equal(parameters, [[3.0, 0.2, 5.0, 0.1]] * 2)


def test_average_of_densities():
    """Draws of a log-normal: the mean of exp is known, and the error is that of the mean."""
    values = np.random.default_rng(2).normal(-700.0, 0.5, 4_000)
    found, error = average(values)
    expected = np.sqrt(np.expm1(0.25) / 4_000)
    assert found == pytest.approx(-700 + 0.125, abs=4 * expected)
    # ten parts give the error to about a quarter; three times that
    assert error == pytest.approx(expected, rel=0.75)


def test_points_in_a_row_keep_clusters_together():
    points = np.array([[0, 0], [100, 0], [1, 0], [101, 1], [2, 1]], float)
    np.testing.assert_array_equal(in_a_row(points)[:, 0], [0, 1, 2, 100, 101])
    assert in_a_row(np.empty((0, 2))).shape == (0, 2)


def made_up(differences) -> ModelComparison:
    each = np.asarray(differences, float)
    cut = cut_into_tiles(PLOT, len(each), 2)
    scores = np.column_stack([np.full(len(each), -5.0), -5.0 + each])
    return ModelComparison(("complete-randomness", "thomas"), scores, np.zeros_like(scores), cut)


def test_differences_come_with_the_error_of_pairs():
    """By hand: differences 1, 3, 1, 3, ... over eight tiles."""
    comparison = made_up([1, 3] * 4)
    difference, error = comparison.difference("thomas", "complete-randomness")
    assert difference == pytest.approx(16)
    assert error == pytest.approx(np.sqrt(8) * np.sqrt(8 / 7))
    assert comparison.best == "thomas"
    assert comparison.sentences() == [
        "Held-out ground is predicted better by thomas than by complete randomness "
        "(log score 16.0 apart, standard error 3.0)."
    ]
    unsure = made_up([-3, 4] * 4)
    assert not unsure.told_apart("thomas", "complete-randomness")
    assert unsure.sentences()[0].startswith("The data do not tell thomas and complete randomness apart")
    assert unsure.record()["tiles"] == 8
    with pytest.raises(UsageError, match="model must be one of"):
        unsure.difference("thomas", "cauchy")


@pytest.fixture
def short_runs(monkeypatch):
    """Fewer draws than in earnest: enough for differences this plain."""
    monkeypatch.setattr(choosing, "DRAWS", 80)
    monkeypatch.setattr(choosing, "ROUNDS", 1)
    monkeypatch.setattr(convergence, "FIRST", 60)


def test_clusters_are_preferred_where_there_are_some(short_runs):
    truth = gc.Thomas(parent_intensity=7e-4, sigma=5.0, mean_offspring=5.0)
    survey = gc.Survey(draw_pattern(truth, PLOT, np.random.default_rng(3)).points + PLOT.origin, PLOT)
    found = gc.compare_models(survey, ("thomas",), tiles=12, folds=2, rng=1, workers=1)
    difference, error = found.difference("thomas", "complete-randomness")
    assert found.best == "thomas"
    assert difference > 2 * error
    again = gc.compare_models(survey, ("thomas",), tiles=12, folds=2, rng=1, workers=3)
    np.testing.assert_array_equal(again.scores, found.scores)


def test_complete_randomness_is_not_beaten_by_clusters(short_runs):
    survey = gc.Survey(PLOT.uniform_points(80, 6), PLOT)
    found = gc.compare_models(survey, ("thomas",), tiles=8, folds=2, rng=1)
    difference, error = found.difference("thomas", "complete-randomness")
    assert difference < 2 * error


@pytest.mark.parametrize(
    ("wrong", "told"),
    [
        ({"models": "thomas"}, "models must be a list of different names"),
        ({"models": ("thomas", "thomas")}, "models must be a list of different names"),
        ({"models": ("complete-randomness",)}, "at least one besides complete randomness"),
        ({"models": ("gauss",)}, "model must be one of"),
        ({"models": ("nested-thomas",)}, "nested-thomas cannot be compared"),
        ({"tiles": 4}, "tiles must be at least 8"),
        ({"folds": 1}, "folds must be at least 2"),
    ],
)
def test_what_is_not_allowed(wrong, told):
    survey = gc.Survey(PLOT.uniform_points(50, 1), PLOT)
    with pytest.raises(UsageError, match=told):
        gc.compare_models(survey, **{"models": ("thomas",), "rng": 1, **wrong})


def test_too_few_points():
    with pytest.raises(CannotTell, match="19 points"):
        gc.compare_models(gc.Survey(PLOT.uniform_points(19, 1), PLOT), ("thomas",), rng=1)
    with pytest.raises(CannotTell, match="held out"):
        gc.compare_models(gc.Survey(PLOT.uniform_points(24, 1), PLOT), ("thomas",), folds=2, rng=1)
