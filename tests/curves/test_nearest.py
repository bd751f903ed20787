"""G, F and J against scipy's tree, complete randomness and the Thomas process, in a ragged window."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
import shapely
from known_areas import ragged_reserve, sample_reserve
from scipy.integrate import quad
from scipy.spatial import cKDTree
from scipy.stats import CensoredData, ecdf, ncx2
from scipy.stats import t as student_t

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.nearest import (
    NearestDistances,
    Places,
    beyond,
    empty_space_function,
    j_function,
    nearest_neighbour_function,
    neighbour_distances,
)
from geoclust.errors import InputError, UsageError
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

WAYS = ("kaplan-meier", "minus-sampling")


@cache
def reserve() -> StudyArea:
    return StudyArea(ragged_reserve())


def clumps(n: int, seed: int) -> np.ndarray:
    """Points of very uneven density, some of them coincident."""
    rng = np.random.default_rng(seed)
    at = np.vstack([rng.uniform(0, 1000, (n, 2)), rng.normal(300, 3, (n, 2)), np.full((2, 2), 700.0)])
    return at


@pytest.mark.parametrize("n", [1, 5, 400])
def test_distances_equal_those_of_a_tree(n: int):
    at = clumps(n, n)
    tree = cKDTree(at)
    expected = np.sort(tree.query(at, 2)[0][:, 1])
    assert np.allclose(np.sort(neighbour_distances(at)), expected, rtol=1e-12, atol=0)
    # places far outside the points, and limits
    area = StudyArea(shapely.box(-500, -2000, 2500, 1500))
    local = at - area.origin
    radii = np.array([10.0, 90.0])
    places = Places.over(area, beyond(radii), 2500)
    found = NearestDistances.of_points(local, area, radii, "unweighted", places)
    expected = np.minimum(cKDTree(local).query(places.xy)[0], beyond(radii))
    assert found.empty is not None
    assert np.allclose(found.empty, expected, rtol=1e-12, atol=0)


def test_points_on_a_line():
    at = np.column_stack([np.geomspace(1, 1e4, 300), np.zeros(300)])
    expected = np.sort(cKDTree(at).query(at, 2)[0][:, 1])
    assert np.allclose(np.sort(neighbour_distances(at)), expected, rtol=1e-12)


def test_estimators_by_their_definitions():
    area = reserve()
    points = area.local_uniform_points(300, np.random.default_rng(5))
    radii = np.linspace(0, 60, 25)[1:]
    km = NearestDistances.of_points(points, area, radii, "kaplan-meier", None)
    d, c = km.between, km.depth
    # the product-limit estimate of scipy, events before censorings at ties
    survival = ecdf(CensoredData(uncensored=d[d <= c], right=c[d > c])).sf
    assert np.allclose(km.g_values(), 1 - survival.evaluate(radii), rtol=1e-12)
    minus = NearestDistances.of_points(points, area, radii, "minus-sampling", None).g_values()
    direct = [np.mean(d[c >= r] <= r) for r in radii]
    assert np.allclose(minus, direct, rtol=1e-12)


def run(draw, radii: np.ndarray, runs: int, way: str) -> dict[str, np.ndarray]:
    """Curves of simulated patterns, one a row."""
    area = reserve()
    places = Places.over(area, beyond(radii), 2_500)
    out: dict[str, list[np.ndarray]] = {"G": [], "F": [], "J": []}
    for seed in np.random.default_rng(97).spawn(runs):
        found = NearestDistances.of_points(draw(seed), area, radii, way, places)
        for name, values in (("G", found.g_values()), ("F", found.f_values()), ("J", found.j_values())):
            out[name].append(values)
    return {name: np.array(rows) for name, rows in out.items()}


def largest_error(rows: np.ndarray, expected: np.ndarray) -> float:
    runs = len(rows)
    return float(np.abs((rows.mean(0) - expected) / (rows.std(0, ddof=1) / np.sqrt(runs))).max())


@pytest.mark.parametrize("way", WAYS)
def test_complete_randomness_in_a_ragged_window(way: str):
    area = reserve()
    intensity = 600 / area.area
    radii = np.linspace(0, 0.75 / np.sqrt(intensity), 9)[1:]
    runs = 200
    found = run(lambda rng: area.local_uniform_points(int(rng.poisson(600)), rng), radii, runs, way)
    # F = G = 1 - exp(-lambda pi r²), J = 1 for the Poisson process (van Lieshout & Baddeley 1996)
    expected = 1 - np.exp(-intensity * np.pi * radii**2)
    # eight correlated comparisons of Student's t: one false alarm in a hundred at most
    limit = student_t.isf(0.005 / 8, runs - 1)
    assert largest_error(found["F"], expected) < limit
    assert largest_error(found["G"], expected) < limit
    # a ratio of estimates is slightly biased; by the delta method below var(1 - F)/(1 - F)²
    empty = 1 - found["F"]
    bias = empty.var(0) / empty.mean(0) ** 2
    assert np.all(np.abs(found["J"].mean(0) - 1) < limit * found["J"].std(0) / np.sqrt(runs) + bias)
    # negative control: without regard to the boundary G is too small
    plain = run(lambda rng: area.local_uniform_points(int(rng.poisson(600)), rng), radii, runs, "unweighted")
    assert largest_error(plain["G"], expected) > 2 * limit


def thomas_forms(model: Thomas, radii: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """F and J of a Thomas process.

    F by the void probability of a Neyman-Scott process, with p(c) the share of
    the offspring of a centre at distance c that falls into the disc (Neyman &
    Scott 1958); J by the siblings of a typical point (van Lieshout & Baddeley
    1996: J of a cluster process).
    """
    s, mu = model.sigma, model.mean_offspring

    def share(c: float, r: float) -> float:
        return float(ncx2.cdf((r / s) ** 2, 2, (c / s) ** 2))

    f, j = [], []
    for r in radii:
        reach = r + 9 * s
        hit = quad(lambda c, r=r: 2 * np.pi * c * -np.expm1(-mu * share(c, r)), 0, reach, limit=200)[0]
        f.append(1 - np.exp(-model.parent_intensity * hit))
        density = lambda c, r=r: c / s**2 * np.exp(-((c / s) ** 2) / 2 - mu * share(c, r))  # noqa: E731
        j.append(quad(density, 0, 9 * s, limit=200)[0])
    return np.array(f), np.array(j)


@pytest.mark.parametrize("way", WAYS)
def test_thomas_process_in_a_ragged_window(way: str):
    area = reserve()
    model = Thomas(parent_intensity=100 / area.area, sigma=20.0, mean_offspring=6.0)
    radii = np.array([4.0, 8.0, 14.0, 20.0, 30.0, 45.0])
    runs = 200
    found = run(lambda rng: draw_pattern(model, area, rng).points, radii, runs, way)
    f, j = thomas_forms(model, radii)
    limit = student_t.isf(0.005 / 6, runs - 1)
    assert largest_error(found["F"], f) < limit
    # G is a ratio with a random number of points below: bias below its coefficient of variation squared
    g = 1 - j * (1 - f)
    spread = (1 + model.mean_offspring) / 600
    error = np.abs(found["G"].mean(0) - g)
    assert np.all(error < limit * found["G"].std(0) / np.sqrt(runs) + spread * g * (1 - g))
    assert np.all(np.abs(found["J"].mean(0) - j) < limit * found["J"].std(0) / np.sqrt(runs) + 2 * spread * j)
    # the clusters are seen: J falls well below one
    assert found["J"].mean(0)[-1] < 0.5


def test_both_ways_agree_without_a_boundary_nearby():
    rng = np.random.default_rng(3)
    area = StudyArea(shapely.box(-1e6, -1e6, 1e6, 1e6))
    survey = Survey(rng.uniform(-100, 100, (200, 2)), area)
    radii = np.linspace(1, 30, 20)
    curves = [nearest_neighbour_function(survey, radii, way).values for way in (*WAYS, "unweighted")]
    assert np.allclose(curves[0], curves[2], atol=1e-12)
    assert np.allclose(curves[1], curves[2], atol=1e-12)


def test_curves_and_what_nothing_is_known_about():
    area = StudyArea(sample_reserve())
    survey = Survey(area.uniform_points(200, 8), area)
    radii = np.array([10.0, 50.0, 5000.0])
    g = nearest_neighbour_function(survey, radii, "minus-sampling")
    assert (g.function, g.unit, g.edge_weight) == ("G", "1", "minus-sampling")
    assert np.isnan(g.values[-1])
    f = empty_space_function(survey, radii)
    assert f.function == "F"
    assert np.all((f.values[:2] > 0) & (f.values[:2] < 1))
    j = j_function(survey, radii)
    assert j.theory.tolist() == [1.0, 1.0, 1.0]
    assert list(j.to_frame().columns) == ["function", "r_m", "estimate", "theory", "lower", "upper"]
    assert "Kaplan-Meier estimate" in repr(j)


def test_bad_arguments():
    area = StudyArea(shapely.box(0, 0, 10, 10))
    with pytest.raises(InputError, match="at least two"):
        nearest_neighbour_function(Survey([[1, 1]], area), [1.0])
    two = Survey([[1, 1], [2, 2]], area)
    with pytest.raises(UsageError, match="edge_weight must be one of kaplan-meier, minus-sampling"):
        empty_space_function(two, [1.0], "none")
    with pytest.raises(UsageError, match="radii must be increasing"):
        j_function(two, [2.0, 1.0])
