"""Inside test, distance, cell areas, uniform points and |W^(r)| against shapely and closed forms."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from affine import Affine
from known_areas import NAMED, comb

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.errors import InputError, UsageError


def scattered(polygon: shapely.Geometry, count: int, seed: int) -> np.ndarray:
    """Points in the bounding box and a margin round it."""
    minx, miny, maxx, maxy = polygon.bounds
    pad = 0.1 * (maxx - minx)
    return np.random.default_rng(seed).uniform((minx - pad, miny - pad), (maxx + pad, maxy + pad), (count, 2))


@pytest.mark.parametrize("name", NAMED)
def test_area_perimeter_bounds(name: str):
    polygon = NAMED[name]()
    area = StudyArea(polygon)
    assert area.area == pytest.approx(polygon.area, rel=1e-12)
    assert area.perimeter == pytest.approx(polygon.length, rel=1e-12)
    assert area.bounds == polygon.bounds


@pytest.mark.parametrize("name", NAMED)
def test_inside_as_shapely_says(name: str):
    polygon = NAMED[name]()
    at = scattered(polygon, 20_000, 11)
    shapely.prepare(polygon)
    assert np.array_equal(StudyArea(polygon).contains(at), shapely.contains_xy(polygon, at[:, 0], at[:, 1]))


@pytest.mark.parametrize("name", NAMED)
def test_inside_beside_the_boundary(name: str):
    # a micrometre to the left of an edge is inside, to the right outside, unless another edge is near
    polygon = shapely.orient_polygons(NAMED[name]())
    boundary = [
        shapely.get_coordinates(r) for p in shapely.get_parts(polygon) for r in (p.exterior, *p.interiors)
    ]
    a = np.concatenate([r[:-1] for r in boundary])
    b = np.concatenate([r[1:] for r in boundary])
    length = np.hypot(*(b - a).T)
    pick = np.random.default_rng(4).choice(np.flatnonzero(length > 1e-3), 1500)
    a, b, length = a[pick], b[pick], length[pick]
    left = np.column_stack([a[:, 1] - b[:, 1], b[:, 0] - a[:, 0]]) / length[:, None]
    area = StudyArea(polygon)
    assert area.contains(0.5 * (a + b) + 1e-6 * left).all()
    assert not area.contains(0.5 * (a + b) - 1e-6 * left).any()


@pytest.mark.parametrize("name", NAMED)
def test_distance_as_shapely_says(name: str):
    polygon = NAMED[name]()
    at = scattered(polygon, 1_000, 12)
    boundary = polygon.boundary
    shapely.prepare(boundary)
    expected = shapely.distance(boundary, shapely.points(at))
    area = StudyArea(polygon)
    # coordinates of millions of metres carry 1e-9 m
    assert np.abs(area.distance_to_boundary(at) - expected).max() < 1e-8
    limit = float(np.median(expected))
    assert np.abs(area.distance_to_boundary(at, limit) - np.minimum(expected, limit)).max() < 1e-8


@pytest.mark.parametrize("name", NAMED)
def test_cell_areas_as_shapely_says(name: str):
    polygon = NAMED[name]()
    area = StudyArea(polygon)
    minx, miny, maxx, maxy = polygon.bounds
    cell = (maxx - minx) / 37.3
    west, north = minx - 1.7 * cell, maxy + 0.6 * cell
    shape = (int((north - miny) / cell) + 2, 41)
    found = area.cell_areas(Affine(cell, 0, west, 0, -cell, north), shape)
    assert found.sum() == pytest.approx(polygon.area, rel=1e-11)
    rows, columns = np.divmod(np.random.default_rng(1).choice(found.size, 150), shape[1])
    for row, column in zip(rows, columns, strict=True):
        x, y = west + column * cell, north - row * cell
        clipped = shapely.make_valid(shapely.clip_by_rect(polygon, x, y - cell, x + cell, y))
        assert found[row, column] == pytest.approx(clipped.area, abs=1e-9 * cell * cell)


def test_cell_areas_worked_out_by_hand():
    # a triangle over 2 x 2 unit cells: the diagonal halves two cells
    area = StudyArea(shapely.Polygon([(0, 0), (2, 0), (0, 2)]))
    grid = Affine(1, 0, 0, 0, -1, 2)
    assert area.cell_areas(grid, (2, 2)).tolist() == [[0.5, 0.0], [1.0, 0.5]]
    # a grid that covers only a part, with cells twice as wide as high
    assert area.cell_areas(Affine(2, 0, 0, 0, -1, 1), (1, 1)).tolist() == [[1.5]]
    assert area.cell_areas(Affine(1, 0, 1, 0, -1, 1), (1, 3)).tolist() == [[0.5, 0.0, 0.0]]


def test_cell_areas_refuse_a_rotated_grid():
    area = StudyArea(shapely.box(0, 0, 1, 1))
    with pytest.raises(UsageError, match="north-up"):
        area.cell_areas(Affine(1, 0.1, 0, 0, -1, 1), (1, 1))


def test_uniform_points():
    area = StudyArea(NAMED["ragged reserve"]())
    at = area.uniform_points(40_000, 1)
    shapely.prepare(area.polygon)
    assert shapely.contains_xy(area.polygon, at[:, 0], at[:, 1]).all()
    assert np.array_equal(at, area.uniform_points(40_000, 1))
    # counts per cell follow the cell areas: chi-square about its degrees of freedom, within 4 sd
    minx, miny, maxx, maxy = area.bounds
    cell = (maxx - minx) / 12
    grid = Affine(cell, 0, minx, 0, -cell, maxy)
    shape = (int((maxy - miny) / cell) + 1, 12)
    expected = area.cell_areas(grid, shape).ravel() / area.area * len(at)
    where = ((maxy - at[:, 1]) / cell).astype(int) * 12 + ((at[:, 0] - minx) / cell).astype(int)
    counts = np.bincount(where, minlength=expected.size)
    enough = expected > 5
    chi2 = np.sum((counts[enough] - expected[enough]) ** 2 / expected[enough])
    assert abs(chi2 - enough.sum()) < 4 * np.sqrt(2 * enough.sum())


def test_reached_areas():
    # one compact part: every circle up to half the width is met
    square = StudyArea(shapely.box(0, 0, 100, 100))
    assert square.reached_areas([1.0, 50.0]).tolist() == [square.area] * 2
    # alone, a square is reached from its points whose furthest corner is further than r: the
    # centre's is at 70.7 m; quadrature of 10,000 points, so 1 % of the area at worst
    found = square.reached_areas([80.0, 100.0, 142.0])
    x, y = np.meshgrid((np.arange(1000) + 0.5) / 10, (np.arange(1000) + 0.5) / 10)
    furthest = np.hypot(np.maximum(x, 100 - x), np.maximum(y, 100 - y))
    expected = [10_000 * np.mean(furthest >= r) for r in (80.0, 100.0, 142.0)]
    assert np.abs(found - expected).max() < 100
    assert found[2] == 0
    # a speck beside a large square: at 45 m the speck's circles pass through the square, at 8 m
    # they meet nothing, so that only the square's own points count
    both = StudyArea(shapely.MultiPolygon([shapely.box(0, 0, 100, 100), shapely.box(120, 50, 122, 52)]))
    assert both.reached_areas([45.0]) == pytest.approx(both.area)
    assert both.reached_areas([8.0]) == pytest.approx(square.area)


def test_dilated_as_shapely_says():
    area = StudyArea(NAMED["sample reserve"]())
    assert area.dilated(25.0).area == pytest.approx(area.polygon.buffer(25.0, quad_segs=16).area)
    with pytest.raises(UsageError, match="positive number of metres"):
        area.dilated(0.0)


@pytest.mark.parametrize(
    ("polygon", "said"),
    [
        (shapely.Point(0, 0), "got a Point"),
        (shapely.Polygon(), "no area"),
        (shapely.MultiPolygon(), "no area"),
        (shapely.Polygon([(0, 0), (1, 1), (2, 2)]), "no area"),
        (shapely.Polygon([(0, 0), (2, 2), (2, 0), (0, 1)]), "Self-intersection"),
    ],
)
def test_polygons_that_cannot_be_a_study_area(polygon, said: str):
    with pytest.raises(InputError, match=said):
        StudyArea(polygon)


@pytest.mark.parametrize(
    ("crs", "said"), [("EPSG:4326", "not a projected system"), ("EPSG:2263", "US survey foot")]
)
def test_crs_that_are_not_metric(crs: str, said: str):
    with pytest.raises(InputError, match=said):
        StudyArea(shapely.box(0, 0, 1, 1), crs)


def test_survey_refuses_points_outside():
    with pytest.raises(InputError, match="1 of 2 points lie outside"):
        Survey([[5, 5], [50, 5]], StudyArea(shapely.box(0, 0, 10, 10)))
    # on the boundary counts as inside
    assert Survey([[0, 0], [10, 3], [5, 10]], StudyArea(shapely.box(0, 0, 10, 10))).n == 3


def test_comb_is_what_it_says():
    area = StudyArea(comb(teeth=3, width=2.0, gap=3.0, length=10.0))
    assert area.area == pytest.approx(3 * 2 * 10 + 2 * 3 * 2)
