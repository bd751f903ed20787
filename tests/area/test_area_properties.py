"""What must hold for the geometry of any study area, over random awkward ones."""

from __future__ import annotations

import numpy as np
import shapely
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from random_areas import areas, circles
from shapely.affinity import rotate, translate

from geoclust.area.study_area import StudyArea

awkward = settings(
    max_examples=60, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow]
)
seeds = st.integers(0, 2**32 - 1)
# a circle that touches an edge is cut by sqrt(rounding) of a turn
TOUCH = 1e-6


@awkward
@given(areas(), seeds)
def test_shares_lie_between_nothing_and_all(drawn, seed):
    polygon, unit = drawn
    area = StudyArea(polygon)
    centres, radii = circles(polygon, unit, seed)
    shares = area.circle_shares(centres, radii)
    assert np.all((shares >= 0) & (shares <= 1))
    mass = area.gaussian_shares(centres, radii)
    assert np.all((mass >= 0) & (mass <= 1))


@awkward
@given(areas(), seeds)
def test_a_shift_changes_nothing(drawn, seed):
    polygon, unit = drawn
    centres, radii = circles(polygon, unit, seed)
    step = np.array([96.0, -2048.0]) * max(unit, 1.0)
    # a move by whole metres keeps every digit where coordinates have room for it
    moved = translate(polygon, *step)
    if not moved.is_valid:
        return
    area, other = StudyArea(polygon), StudyArea(moved)
    exact = np.array_equal(shapely.get_coordinates(moved) - step, shapely.get_coordinates(polygon))
    tolerance = 1e-7 if exact else 1e-3
    away = centres + step
    assert np.abs(area.circle_shares(centres, radii) - other.circle_shares(away, radii)).max() < tolerance
    assert np.abs(area.gaussian_shares(centres, radii) - other.gaussian_shares(away, radii)).max() < tolerance


@awkward
@given(areas(), seeds, st.floats(0.1, 3.0))
def test_a_rotation_changes_nothing(drawn, seed, angle):
    polygon, unit = drawn
    # about its own middle and near the origin, so that rounding stays that of the shape
    middle = np.round(np.reshape(polygon.bounds, (2, 2)).mean(0))
    polygon = translate(polygon, *-middle)
    centres, radii = circles(polygon, unit, seed)
    turned = rotate(polygon, angle, origin=(0, 0), use_radians=True)
    if not turned.is_valid:
        return
    turn = np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]])
    area, other = StudyArea(polygon), StudyArea(turned)
    assert (
        np.abs(area.circle_shares(centres, radii) - other.circle_shares(centres @ turn, radii)).max() < TOUCH
    )
    # on the boundary of a sliver the two sides may be told apart wrongly, never the mass
    mass = area.gaussian_shares(centres, radii) - other.gaussian_shares(centres @ turn, radii)
    assert np.abs(mass).max() < 1e-9
    far = area.distance_to_boundary(centres) - other.distance_to_boundary(centres @ turn)
    assert np.abs(far).max() < 1e-9 * max(unit, 1.0)


@awkward
@given(areas(), seeds)
def test_order_of_vertices_and_parts_changes_nothing(drawn, seed):
    polygon, unit = drawn
    rng = np.random.default_rng(seed)

    def reordered(ring: shapely.LinearRing) -> np.ndarray:
        at = np.roll(shapely.get_coordinates(ring)[:-1], rng.integers(len(ring.coords)), axis=0)
        return at[::-1] if rng.random() < 0.5 else at

    parts = [
        shapely.Polygon(reordered(p.exterior), [reordered(h) for h in reversed(p.interiors)])
        for p in polygon.geoms
    ]
    other = StudyArea(shapely.MultiPolygon(parts[::-1]))
    area = StudyArea(polygon)
    centres, radii = circles(polygon, unit, seed)
    assert np.abs(area.circle_shares(centres, radii) - other.circle_shares(centres, radii)).max() < 1e-7
    assert np.abs(area.gaussian_shares(centres, radii) - other.gaussian_shares(centres, radii)).max() < 1e-12


@awkward
@given(areas(), seeds)
def test_new_vertices_on_edges_change_nothing(drawn, seed):
    polygon, unit = drawn
    noded = shapely.segmentize(polygon, 0.37 * unit)
    if not noded.is_valid:
        return
    area, other = StudyArea(polygon), StudyArea(noded)
    centres, radii = circles(polygon, unit, seed)
    # far from the origin a new vertex is off its edge by the rounding of a coordinate
    slack = np.spacing(np.abs(polygon.bounds).max()) / unit
    tolerance = max(TOUCH, 30 * np.sqrt(slack))
    assert np.abs(area.circle_shares(centres, radii) - other.circle_shares(centres, radii)).max() < tolerance
    mass = area.gaussian_shares(centres, radii) - other.gaussian_shares(centres, radii)
    assert np.abs(mass).max() < max(1e-9, 30 * slack)


@awkward
@given(areas(), seeds)
def test_an_area_and_the_rest_of_a_box_make_up_the_box(drawn, seed):
    polygon, unit = drawn
    minx, miny, maxx, maxy = polygon.bounds
    box = shapely.box(minx - unit, miny - unit, maxx + unit, maxy + unit)
    rest = box - polygon
    if rest.geom_type not in ("Polygon", "MultiPolygon"):
        return
    centres, radii = circles(polygon, unit, seed)
    area, other, whole = StudyArea(polygon), StudyArea(rest), StudyArea(box)
    together = area.circle_shares(centres, radii) + other.circle_shares(centres, radii)
    assert np.abs(together - whole.circle_shares(centres, radii)).max() < TOUCH
    mass = area.gaussian_shares(centres, radii) + other.gaussian_shares(centres, radii)
    assert np.abs(mass - whole.gaussian_shares(centres, radii)).max() < 1e-9


def overlay(polygon: shapely.Geometry, shift: np.ndarray) -> float:
    return shapely.intersection(polygon, translate(polygon, *shift)).area


@awkward
@given(areas(), seeds)
def test_set_covariance_as_shapely_says(drawn, seed):
    polygon, unit = drawn
    # near the origin, so that both sides see the same shape
    polygon = translate(polygon, *-np.round(np.reshape(polygon.bounds, (2, 2)).mean(0)))
    if not polygon.is_valid:
        return
    area = StudyArea(polygon)
    rng = np.random.default_rng(seed)
    # round shifts put edges on edges and vertices on vertices
    shifts = np.vstack([rng.integers(-6, 7, (8, 2)) * unit, rng.normal(0, 3 * unit, (8, 2))])
    found = area.set_covariance(shifts)
    expected = np.array([overlay(polygon, h) for h in shifts])
    size = max(polygon.bounds[2] - polygon.bounds[0], polygon.bounds[3] - polygon.bounds[1])
    # slivers: what a hair's shift changes is its part of the perimeter
    assert np.abs(found - expected).max() < 1e-9 * area.area + 1e-12 * size * area.perimeter
    assert np.array_equal(found, area.set_covariance(-shifts))
    assert area.set_covariance([[0.0, 0.0]])[0] == area.area
    assert np.all((found >= 0) & (found <= area.area))


@awkward
@given(areas(), seeds)
def test_inside_and_distance_as_shapely_says(drawn, seed):
    polygon, unit = drawn
    area = StudyArea(polygon)
    centres, _ = circles(polygon, unit, seed)
    far = shapely.distance(polygon.boundary, shapely.points(centres))
    assert np.abs(area.distance_to_boundary(centres) - far).max() < 1e-8 * max(unit, 1.0)
    clear = far > 1e-8 * max(unit, 1.0)
    inside = shapely.contains_xy(polygon, centres[:, 0], centres[:, 1])
    assert np.array_equal(area.contains(centres)[clear], inside[clear])
