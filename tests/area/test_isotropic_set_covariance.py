"""Isotropised set covariance against closed forms, published constants and the mean over directions."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from known_areas import NAMED, comb
from random_areas import areas
from scipy.integrate import quad
from shapely.affinity import rotate, translate

from geoclust.area.study_area import StudyArea
from geoclust.errors import UsageError


def mean_over_directions(area: StudyArea, radii: np.ndarray, count: int = 720) -> np.ndarray:
    turn = (np.arange(count) + 0.5) / count * np.pi
    u = np.column_stack([np.cos(turn), np.sin(turn)])
    return np.array([area.set_covariance(r * u).mean() for r in radii])


def disc(corners: int) -> shapely.Polygon:
    """A regular polygon with the area of the unit disc."""
    t = np.linspace(0, 2 * np.pi, corners, endpoint=False)
    radius = np.sqrt(2 * np.pi / (corners * np.sin(2 * np.pi / corners)))
    return shapely.Polygon(radius * np.column_stack([np.cos(t), np.sin(t)]))


TRIANGLE = shapely.Polygon([(0, 0), (1, 0), (0.5, np.sqrt(3) / 2)])


@pytest.mark.parametrize("angle", [0.0, 1.1])
def test_rectangle_closed_form(angle: float):
    # ab - 2r(a + b)/π + r²/π for r up to the shorter side (Stoyan & Stoyan 1994)
    a, b = 170.0, 90.0
    area = StudyArea(rotate(shapely.box(0, 0, a, b), angle, use_radians=True))
    r = np.linspace(0, 90, 46)
    expected = a * b - 2 * r * (a + b) / np.pi + r * r / np.pi
    assert np.abs(area.isotropic_set_covariance(r) - expected).max() < 1e-12 * a * b
    # beyond, by quadrature of (a - |h1|)+ (b - |h2|)+ over directions
    for r in (100.0, 165.0, 180.0):
        kinks = [np.arccos(min(a / r, 1)), np.arcsin(b / r)]
        expected = quad(
            lambda t, r=r: max(a - r * np.cos(t), 0) * max(b - r * np.sin(t), 0),
            0, np.pi / 2, points=kinks, epsabs=1e-8,
        )[0] / (np.pi / 2)  # fmt: skip
        assert area.isotropic_set_covariance([r])[0] == pytest.approx(expected, abs=1e-10 * a * b)


def test_disc_closed_form():
    # 2 arccos(r/2) - (r/2) sqrt(4 - r²) for the unit disc (Stoyan & Stoyan 1994)
    r = np.linspace(0.01, 1.99, 80)
    expected = 2 * np.arccos(r / 2) - r / 2 * np.sqrt(4 - r * r)
    assert np.abs(StudyArea(disc(4000)).isotropic_set_covariance(r) - expected).max() < 1e-8 * np.pi


@pytest.mark.parametrize(
    ("polygon", "longest", "constant"),
    [
        # mean distance of two random points: Santaló (1976), Mathai (1999)
        (shapely.box(0, 0, 1, 1), np.sqrt(2), (2 + np.sqrt(2) + 5 * np.log(1 + np.sqrt(2))) / 15),
        (disc(1200), 2.0, 128 / (45 * np.pi)),
        (TRIANGLE, 1.0, (4 + 3 * np.log(3)) / 20),
    ],
    ids=["unit square", "unit disc", "equilateral triangle"],
)
def test_mean_distance_of_two_random_points(polygon, longest: float, constant: float):
    area = StudyArea(polygon)
    # Gauss-Legendre on panels that end where the curve has kinks (sides and heights)
    knots = np.unique([0, 0.25, 0.5, np.sqrt(3) / 2, 1, longest * 0.85, longest, longest * 1.001])
    knots = knots[knots <= longest * 1.001]
    nodes, weights = np.polynomial.legendre.leggauss(40)
    r = np.concatenate([(a + b) / 2 + (b - a) / 2 * nodes for a, b in pairwise(knots)])
    w = np.concatenate([(b - a) / 2 * weights for a, b in pairwise(knots)])
    found = np.sum(w * 2 * np.pi * r * r * area.isotropic_set_covariance(r)) / area.area**2
    assert found == pytest.approx(constant, abs=1e-6)
    # the density of the distance integrates to one
    one = np.sum(w * 2 * np.pi * r * area.isotropic_set_covariance(r)) / area.area**2
    assert one == pytest.approx(1.0, abs=1e-6)


@pytest.mark.parametrize("name", ["ragged reserve", "sample reserve"])
def test_mean_of_the_exact_set_covariance(name: str):
    area = StudyArea(NAMED[name]())
    r = np.sqrt(area.area) * np.array([1e-3, 0.03, 0.2, 0.6, 1.2])
    found = area.isotropic_set_covariance(r)
    assert np.abs(found - mean_over_directions(area, r)).max() < 1e-6 * area.area
    # tabulated together with many others or alone: the same
    many = area.isotropic_set_covariance(np.concatenate([np.linspace(1, 1500, 60), r]))[-5:]
    assert np.abs(found - many).max() < 1e-9 * area.area


def test_many_parts_and_holes():
    area = StudyArea(NAMED["finland"]())
    r = np.array([2_000.0, 30_000.0])
    assert (
        np.abs(area.isotropic_set_covariance(r) - mean_over_directions(area, r, 90)).max() < 1e-4 * area.area
    )


def test_comb_of_thin_strips():
    area = StudyArea(comb())
    r = np.array([5.0, 25.0, 60.0, 300.0])
    assert np.abs(area.isotropic_set_covariance(r) - mean_over_directions(area, r, 20_000)).max() < (
        1e-5 * area.area
    )


@pytest.mark.parametrize("tilt", [1e-5, 1e-6, 3e-7, 1e-8, 1e-12])
def test_edges_that_are_nearly_parallel(tilt: float):
    # a strip whose long sides are tilted by a hair: as the strip itself, to first order in the tilt
    a, b = 100.0, 7.0
    area = StudyArea(shapely.Polygon([(0, 0), (a, 0), (a, b + tilt * a / 2), (0, b - tilt * a / 2)]))
    r = np.array([1.0, 6.5, 7.0])
    expected = a * b - 2 * r * (a + b) / np.pi + r * r / np.pi
    assert np.abs(area.isotropic_set_covariance(r) - expected).max() < max(20 * tilt, 1e-8) * area.area


def test_zero_and_far():
    area = StudyArea(translate(NAMED["ragged reserve"](), -500_000, -5_400_000))
    found = area.isotropic_set_covariance([area.diameter * 1.001, 0.0, area.diameter * 0.9])
    assert found[0] == 0.0
    assert found[1] == area.area
    assert 0 < found[2] < 1e-2 * area.area


def test_same_bits_for_any_number_of_workers():
    area = StudyArea(NAMED["sample reserve"]())
    r = np.linspace(5, 500, 30)
    one = area.isotropic_set_covariance(r, workers=1)
    assert np.array_equal(one, area.isotropic_set_covariance(r, workers=3))


@settings(max_examples=40, deadline=None, derandomize=True)
@given(areas())
def test_new_vertices_on_edges_change_nothing(drawn):
    polygon, unit = drawn
    polygon = translate(polygon, *-np.round(np.reshape(polygon.bounds, (2, 2)).mean(0)))
    noded = shapely.segmentize(polygon, 0.8 * unit)
    if not (polygon.is_valid and noded.is_valid):
        return
    r = unit * np.array([0.01, 0.3, 1.0, 2.5, 7.0])
    area = StudyArea(polygon)
    found = area.isotropic_set_covariance(r)
    assert np.all((found >= 0) & (found <= area.area))
    # far pairs of edges are integrated by nodes; slivers: a small difference of large parts
    tolerance = 1e-8 * area.area + 1e-13 * area.perimeter**2
    assert np.abs(StudyArea(noded).isotropic_set_covariance(r) - found).max() < tolerance


@settings(max_examples=15, deadline=None, derandomize=True)
@given(areas())
def test_mean_over_directions_of_random_areas(drawn):
    polygon, unit = drawn
    area = StudyArea(polygon)
    r = unit * np.array([0.5, 2.0, 5.0])
    found = area.isotropic_set_covariance(r)
    assert np.abs(found - mean_over_directions(area, r, 4000)).max() < 2e-5 * area.area


def test_bad_radii():
    area = StudyArea(shapely.box(0, 0, 1, 1))
    with pytest.raises(UsageError, match="finite distances in metres, not negative"):
        area.isotropic_set_covariance([-1.0])
    with pytest.raises(UsageError, match="finite distances in metres, not negative"):
        area.isotropic_set_covariance([np.inf])
