"""Share of a Cauchy kernel inside the study area against numerical integrals and closed forms."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
import shapely
from known_areas import NAMED
from scipy.integrate import dblquad, quad

from geoclust.area._cauchy import cauchy_many
from geoclust.area.study_area import StudyArea
from geoclust.models.cauchy import Cauchy


def shares(area: StudyArea, centres: np.ndarray, omega: float) -> np.ndarray:
    return Cauchy.area_shares(area, np.atleast_2d(centres) - area.origin, omega)


def density(x: float, y: float, centre: tuple[float, float], omega: float) -> float:
    """The kernel of Jalilian, Guan & Waagepetersen 2013, per unit area."""
    return (1 + ((x - centre[0]) ** 2 + (y - centre[1]) ** 2) / omega**2) ** -1.5 / (2 * np.pi * omega**2)


@pytest.mark.parametrize("centre", [(30.0, 20.0), (0.0, 0.0), (-50.0, 30.0), (100.0, 30.0), (50.0, 59.9)])
@pytest.mark.parametrize("omega", [7.0, 60.0])
def test_rectangle_against_a_double_integral(centre, omega):
    expected = dblquad(lambda y, x: density(x, y, centre, omega), 0, 100, 0, 60, epsabs=1e-11, epsrel=1e-11)
    assert shares(StudyArea(shapely.box(0, 0, 100, 60)), np.array(centre), omega)[0] == pytest.approx(
        expected[0], abs=1e-9
    )


@pytest.mark.parametrize("centre", [(30.0, 20.0), (0.0, 0.0), (200.0, -30.0)])
def test_triangle_against_a_double_integral(centre):
    area = StudyArea(shapely.Polygon([(0, 0), (90, 0), (0, 60)]))
    expected = dblquad(lambda y, x: density(x, y, centre, 9.0), 0, 90, 0, lambda x: 60 - x * 2 / 3,
                       epsabs=1e-11, epsrel=1e-11)  # fmt: skip
    assert shares(area, np.array(centre), 9.0)[0] == pytest.approx(expected[0], abs=1e-9)


def test_rectangle_in_closed_form():
    """Solid angle of a rectangle seen from above a corner: atan(a b / (h sqrt(a² + b² + h²)))."""
    rng = np.random.default_rng(1983)
    a, b = 83.0, 41.0
    centres = rng.uniform((-200, -200), (300, 300), (2000, 2))
    area = StudyArea(shapely.box(0, 0, a, b))
    for omega in (0.05, 3.0, 400.0):
        x, y = np.array([-centres[:, 0], a - centres[:, 0]]), np.array([-centres[:, 1], b - centres[:, 1]])
        corner = np.arctan(
            x[:, None] * y[None] / (omega * np.sqrt(x[:, None] ** 2 + y[None] ** 2 + omega**2))
        )
        expected = (corner[1, 1] - corner[0, 1] - corner[1, 0] + corner[0, 0]) / (2 * np.pi)
        assert np.abs(shares(area, centres, omega) - expected).max() < 1e-11


def test_half_plane():
    """From a foot x inside the edge, one half plus atan(x / omega) / pi; on the edge, one half."""
    side = 1e9
    area = StudyArea(shapely.box(-side, -side, side, 0.0))
    at = np.array([[0.0, 0.0], [3.0, 0.0], [0.0, -5.0], [0.0, 20.0]])
    expected = 0.5 + np.arctan(-at[:, 1] / 5.0) / np.pi
    assert np.abs(shares(area, at, 5.0) - expected).max() < 1e-7


def polar_share(polygon: shapely.Geometry, centre: np.ndarray, omegas: np.ndarray) -> np.ndarray:
    """One integral over directions: the tail 1 / sqrt(1 + r²/omega²) at each crossing of the boundary.

    Directions are cut at every vertex, so that each piece is smooth.
    """
    a, b = [], []
    for part in polygon.geoms:
        for ring in (part.exterior, *part.interiors):
            at = shapely.get_coordinates(ring) - centre
            a.append(at[:-1])
            b.append(at[1:])
    start, end = np.concatenate(a), np.concatenate(b)
    angles = np.unique(np.arctan2(start[:, 1], start[:, 0]))
    angles = np.append(angles, angles[0] + 2 * np.pi)
    total = np.zeros(len(omegas))
    for low, high in itertools.pairwise(angles):
        # most pieces are tiny
        nodes, weights = np.polynomial.legendre.leggauss(4 if high - low < 0.01 else 24)
        t = 0.5 * (low + high) + 0.5 * (high - low) * nodes
        u = np.column_stack([np.cos(t), np.sin(t)])
        d = end - start
        # where the ray meets the line of each edge, at a place s along the edge
        across = u[:, None, 0] * d[:, 1] - u[:, None, 1] * d[:, 0]
        with np.errstate(divide="ignore", invalid="ignore"):
            r = (start[:, 0] * d[:, 1] - start[:, 1] * d[:, 0]) / across
            s = (start[:, 0] * u[:, None, 1] - start[:, 1] * u[:, None, 0]) / across
        met = (r > 0) & (s >= 0) & (s < 1) & np.isfinite(r)
        # the interior lies to the left of an edge: leaving it counts the tail off, entering counts it on
        ray, edge = np.nonzero(met)
        sign, crossed = np.sign(across[ray, edge]), r[ray, edge]
        for k, omega in enumerate(omegas):
            tail = 1 / np.sqrt(1 + crossed**2 / omega**2)
            total[k] += 0.5 * (high - low) * np.sum(weights[ray] * sign * (1 - tail))
    return total / (2 * np.pi)


def test_reserve_with_holes_against_polar_quadrature():
    polygon = shapely.orient_polygons(NAMED["sample reserve"]())
    area = StudyArea(polygon)
    omegas = np.array([15.0, 300.0])
    centre = area.uniform_points(1, np.random.default_rng(5))[0]
    expected = polar_share(polygon, centre, omegas)
    got = [shares(area, centre, omega)[0] for omega in omegas]
    assert got == pytest.approx(expected, abs=1e-9)


@pytest.mark.parametrize("name", ["ragged reserve", "sample reserve", "finland"])
def test_chains_taken_together_stay_within_their_tolerance(name):
    """The bound holds for each chain, so for the share it is multiplied by the number of chains met."""
    area = StudyArea(NAMED[name]())
    rng = np.random.default_rng(6)
    low, high = np.array(area.bounds[:2]) - area.origin, np.array(area.bounds[2:]) - area.origin
    at = rng.uniform(1.5 * low, 1.5 * high, (60, 2))
    # some on vertices and in the middle of edges
    at[:10] = area._starts[rng.integers(0, area.edges, 10)]
    exact, close = np.empty(60), np.empty(60)
    for part in (1e-4, 1e-2, 0.3):
        omega = part * float(np.sqrt(area.area))
        cauchy_many(area.chains, at, omega, 0.0, exact)
        for tolerance in (1e-6, 1e-12):
            cauchy_many(area.chains, at, omega, tolerance, close)
            assert np.abs(close - exact).max() < 100 * tolerance
    assert len(area.chains.after) == 2 * area.edges - 1


def test_far_away_a_share_is_area_times_density():
    area = StudyArea(NAMED["sample reserve"]())
    far = np.array([[1e6, 0.0], [0.0, -3e6]])
    middle = np.array(area.polygon.centroid.coords[0])
    for omega in (5.0, 500.0):
        model = Cauchy(1e-4, omega, 1.0)
        expected = area.area * model.offspring_density(np.hypot(*far.T))
        got = Cauchy.area_shares(area, far + middle - area.origin, omega)
        assert np.all(np.abs(got / expected - 1) < 1e-4)


def test_tail_in_one_dimension():
    """Beyond r lie 1 / sqrt(1 + r²/omega²) of the offspring, by quadrature of 2 pi r k(r)."""
    for r in (0.5, 4.0, 50.0):
        beyond = quad(lambda t: 2 * np.pi * t * density(t, 0.0, (0.0, 0.0), 4.0), r, np.inf)[0]
        assert 1 / np.sqrt(1 + r * r / 16.0) == pytest.approx(beyond, rel=1e-8)
        assert Cauchy(1.0, 4.0, 1.0).reach(beyond) == pytest.approx(r, rel=1e-7)
