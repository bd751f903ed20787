"""Gaussian mass inside the study area against scipy."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from known_areas import NAMED
from scipy.special import ndtr, owens_t

from geoclust.area.study_area import StudyArea
from geoclust.errors import UsageError


def test_rectangle_against_the_normal_distribution():
    rng = np.random.default_rng(1956)
    a, b = 83.0, 41.0
    centres = rng.uniform((-60, -60), (a + 60, b + 60), (2000, 2))
    sigma = 10 ** rng.uniform(-1, 2.3, 2000)
    x, y = centres.T
    expected = (ndtr((a - x) / sigma) - ndtr(-x / sigma)) * (ndtr((b - y) / sigma) - ndtr(-y / sigma))
    assert np.abs(StudyArea(shapely.box(0, 0, a, b)).gaussian_shares(centres, sigma) - expected).max() < 1e-12


def by_owens_t(polygon: shapely.Geometry, centre: np.ndarray, sigma: float) -> float:
    """Sum over edges of F(t_b) - F(t_a), F(t) = atan(t/h)/2pi - T(h/sigma, t/h) (Owen 1956)."""
    total = 0.0
    for part in shapely.get_parts(shapely.orient_polygons(polygon)):
        for ring in (part.exterior, *part.interiors):
            at = shapely.get_coordinates(ring) - centre
            a, d = at[:-1], np.diff(at, axis=0)
            u = d / np.hypot(*d.T)[:, None]
            h = a[:, 0] * u[:, 1] - a[:, 1] * u[:, 0]
            ta = (a * u).sum(1)
            tb = ta + np.hypot(*d.T)
            value = [np.arctan(t / h) / (2 * np.pi) - owens_t(h / sigma, t / h) for t in (ta, tb)]
            total += float(np.sum(value[1] - value[0]))
    return total


@pytest.mark.parametrize("name", ["ragged reserve", "sample reserve", "finland"])
def test_any_polygon_against_owens_t(name: str):
    polygon = NAMED[name]()
    area = StudyArea(polygon)
    rng = np.random.default_rng(2)
    centres = rng.uniform(area.bounds[:2], area.bounds[2:], (25, 2))
    sigma = np.sqrt(area.area) * 10 ** rng.uniform(-2.5, 0, 25)
    expected = [by_owens_t(polygon, c, s) for c, s in zip(centres, sigma, strict=True)]
    assert np.abs(area.gaussian_shares(centres, sigma) - expected).max() < 1e-10


def test_finland_against_quadrature():
    # midpoint rule, the inside part of every cell exact: its error is of the order of
    # (cell/sigma)²/24 of the mass
    area = StudyArea(NAMED["finland"]())
    from affine import Affine

    minx, miny, maxx, maxy = area.bounds
    cell = 2_000.0
    shape = (int((maxy - miny) / cell) + 1, int((maxx - minx) / cell) + 1)
    inside = area.cell_areas(Affine(cell, 0, minx, 0, -cell, maxy), shape)
    x = minx + (np.arange(shape[1]) + 0.5) * cell
    y = maxy - (np.arange(shape[0]) + 0.5) * cell
    sigma = 60_000.0
    for cx, cy in area.uniform_points(8, 3):
        density = np.outer(
            np.exp(-((y - cy) ** 2) / (2 * sigma**2)), np.exp(-((x - cx) ** 2) / (2 * sigma**2))
        )
        by_cells = (inside * density).sum() / (2 * np.pi * sigma**2)
        assert area.gaussian_shares([[cx, cy]], sigma)[0] == pytest.approx(by_cells, abs=2e-4)


def test_narrow_and_wide_limits():
    area = StudyArea(NAMED["sample reserve"]())
    at = area.uniform_points(200, 4)
    deep = area.distance_to_boundary(at) > 9.0
    assert np.all(area.gaussian_shares(at, 1.0)[deep] == 1.0)
    wide = 1e7
    assert area.gaussian_shares(at[:1], wide)[0] == pytest.approx(area.area / (2 * np.pi * wide**2), rel=1e-6)


def test_bad_sigma():
    with pytest.raises(UsageError, match="sigma must be positive and finite; got 0"):
        StudyArea(shapely.box(0, 0, 1, 1)).gaussian_shares([[0, 0]], 0.0)
